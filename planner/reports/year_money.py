"""Money of this year in whole units that add up: one source for page one and the instructions."""

from __future__ import annotations

from dataclasses import dataclass
from datetime import date

from planner.household import Household
from planner.plan_record import AccountInstruction, Plan
from planner.reports.figures import add_up, rounded

# Amounts below half a unit print as 0 and are left out.
_NOTHING = 0.5


@dataclass(frozen=True, slots=True)
class MoneyLine:
    """A source of this year's money: `amount` in whole units; `account` None for an income."""

    label: str
    amount: int
    account: str | None = None


@dataclass(frozen=True, slots=True)
class YearMoney:
    """sum(lines) - tax - kept = spending, in whole units, to the unit."""

    lines: tuple[MoneyLine, ...]
    coming_in: int
    tax: int
    kept: int
    spending: int

    @property
    def from_accounts(self) -> int:
        """What is taken out of savings."""
        return sum(line.amount for line in self.lines if line.account is not None)


def year_money(plan: Plan) -> YearMoney:
    """Round this year's sources, tax and spending so that they add up on paper.

    Incomes or withdrawals that the plan does not itemise get a line of their own, so nothing is
    hidden in rounding.
    """
    now = plan.this_year
    named: list[tuple[str, float, str | None]] = [
        (name, amount, None) for name, amount in now.incomes if abs(amount) >= _NOTHING
    ]
    rest = now.income - sum(amount for _, amount in now.incomes)
    if abs(rest) >= _NOTHING:
        label = "One-off sums and other income" if rest > 0 else "Less one-off costs and sums paid in"
        named.append((label, rest, None))
    by_type = {
        "taxable": now.withdraw_taxable,
        "tax-deferred": now.withdraw_tax_deferred,
        "tax-free": now.withdraw_tax_free,
    }
    for account_type, total in by_type.items():
        listed = [a for a in now.accounts if a.type == account_type]
        named.extend((account_label(a), a.withdraw, a.account) for a in listed if a.withdraw >= _NOTHING)
        other = total - sum(a.withdraw for a in listed)
        if abs(other) >= _NOTHING:
            named.append((f"Other {account_type} savings", other, account_type))
    spending = rounded(now.spending)
    gap = spending - (sum(amount for _, amount, _ in named) - now.tax - now.kept)
    # A plan adds up to the cent, so that only rounding is left; anything more is shown.
    if abs(gap) > 1:
        named.append(("Other money", gap, None))
        gap = 0.0
    # What rounding the spending leaves goes to the tax, which is an estimate anyway.
    *amounts, tax, kept = add_up((*(amount for _, amount, _ in named), -now.tax + gap, -now.kept), spending)
    lines = tuple(MoneyLine(n[0], a, n[2]) for n, a in zip(named, amounts, strict=True))
    return YearMoney(lines, sum(amounts), -tax, -kept, spending)


MOST_LINES = 8
"""More sources than this are too many to take in at a glance."""


def grouped_incomes(lines: tuple[MoneyLine, ...]) -> tuple[MoneyLine, ...]:
    """Sources for page one: where there are many, the incomes as one line, the accounts each."""
    incomes = [line for line in lines if line.account is None]
    if len(lines) <= MOST_LINES or len(incomes) < 2:
        return lines
    together = MoneyLine("Pensions, work and other income", sum(line.amount for line in incomes))
    return (together, *(line for line in lines if line.account is not None))


def account_label(account: AccountInstruction) -> str:
    """Name and kind of an account, for people."""
    return f"{account.account} ({account.type})"


def investment_moves(plan: Plan) -> tuple[tuple[str, str, float], ...]:
    """(from, to, amount) for money left invested that is not yet in this year's portfolio.

    Amounts are what stays in each account after this year's withdrawal, sale and move to
    tax-free; accounts whose present portfolio is unknown are not listed.
    """
    moves: dict[str, float] = {}
    for account in plan.this_year.accounts:
        if account.held_now is None or account.held_now == plan.this_year.portfolio:
            continue
        moves[account.held_now] = moves.get(account.held_now, 0.0) + stays_invested(account)
    return tuple(
        (name, plan.this_year.portfolio, amount) for name, amount in moves.items() if amount >= _NOTHING
    )


@dataclass(frozen=True, slots=True)
class AccountTrade:
    """Whole units to buy (+) or sell (-) of each asset class in one account.

    sum(amounts) = -leaves; afterwards what stays is in this year's portfolio.
    """

    account: str
    held_now: str
    amounts: tuple[int, ...]
    leaves: int


def account_trades(plan: Plan) -> tuple[AccountTrade, ...]:
    """Trades of every account whose present portfolio is known and in which something moves."""
    portfolios = {p.name: p.weights for p in plan.household.portfolios}
    target = portfolios.get(plan.this_year.portfolio)
    on_paper = {line.account: line.amount for line in year_money(plan).lines if line.account is not None}
    trades = []
    for account in plan.this_year.accounts:
        held = portfolios.get(account.held_now or "")
        if target is None or held is None:
            continue
        stays = stays_invested(account)
        changes = [w * stays - h * account.balance for w, h in zip(target, held, strict=True)]
        leaves = on_paper.get(account.account, 0) + rounded(account.convert)
        amounts = list(add_up(changes, rounded(sum(changes))))
        # A unit that rounding leaves over goes to the largest trade.
        amounts[max(range(len(amounts)), key=lambda j: abs(changes[j]))] -= leaves + sum(amounts)
        if any(amounts):
            trades.append(AccountTrade(account.account, str(account.held_now), tuple(amounts), leaves))
    return tuple(trades)


def stays_invested(account: AccountInstruction) -> float:
    """Balance less what is sold, withdrawn and moved out this year."""
    return max(0.0, account.balance - max(account.sell, account.withdraw) - account.convert)


def unknown_holdings(plan: Plan) -> tuple[str, ...]:
    """Accounts with money whose present portfolio the workbook does not name."""
    return tuple(
        a.account for a in plan.this_year.accounts if a.held_now is None and stays_invested(a) >= _NOTHING
    )


def tax_year_end(household: Household) -> date:
    """Last day to act in the tax year of the plan date: 5 April for UK clients, else 31 December."""
    day = household.plan_date
    own_in_pounds = household.tax_rules.lower() in ("own", "none") and household.currency == "GBP"
    if household.tax_rules.lower().startswith("uk") or own_in_pounds:
        end = date(day.year, 4, 5)
        return end if day <= end else date(day.year + 1, 4, 5)
    return date(day.year, 12, 31)
