"""Instructions for this year: the policy's first choice, carried to accounts and actual tax.

The problem knows three account types and a planning tax; the client has accounts, each with its
own year-end balance and cost basis. Everything here is in money of the plan date, to the cent,
and adds up to the cent.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace

import numpy as np

from planner.household import Account, AccountType, Household, IncomeKind
from planner.markets import nominal_moments
from planner.piecewise import FloatArray, rate_and_room
from planner.plan_record import AccountInstruction, ThisYear
from planner.problem import Problem
from planner.problem_building import Builder

LIFELONG_KINDS = frozenset({IncomeKind.STATE_PENSION, IncomeKind.PENSION, IncomeKind.ANNUITY})
"""Kinds of income that are paid for life where no last age is given."""


@dataclass(frozen=True, slots=True, eq=False)
class FirstYear:
    """Facts of the first year by account and income, in the order of the household.

    Attributes
    ----------
    incomes : tuple of (name, amount)
        Cash that arrives this year before tax, one-offs included; money paid into accounts and
        one-off costs are negative. Sums to the year's income of the problem.
    divisors : tuple of float or None
        By account: what last year-end's balance is divided by for the least that must be taken;
        None where nothing is due.
    accessible : tuple of bool
        By account: may money leave it this year?
    tax : callable
        Actual tax of the year from (tax-deferred withdrawal + conversion, gains realised, yields).
    yields : tuple of float
        By portfolio: income paid out a year, as a share.
    """

    incomes: tuple[tuple[str, float], ...]
    divisors: tuple[float | None, ...]
    accessible: tuple[bool, ...]
    tax: Callable[[float, float, float], float]
    yields: tuple[float, ...]


def first_year(household: Household) -> FirstYear:
    """Look up the facts of the first year from the household, its tables and its tax rules."""
    builder = Builder.of(household)
    rules, status = builder.rules, builder.statuses[0]
    names = [person.name for person in household.people]
    year = household.plan_date.year
    people = builder.taxed_people(0, status)

    incomes = [
        (income.name, amount) for paid in builder.incomes(0, status).values() for income, amount in paid
    ]
    for item in household.one_offs:
        if item.in_the_plan and item.year <= year <= (item.last_year or item.year):
            incomes.append((item.item, item.amount))
    divisors: list[float | None] = []
    accessible = []
    for account in household.accounts:
        if account.type is AccountType.TAXABLE:
            divisors.append(None)
            accessible.append(True)
            continue
        owner = names.index(account.owner)
        deferred = account.type is AccountType.TAX_DEFERRED
        law_age = rules.access_age(year) if deferred else None
        limit = law_age if account.not_before_age is None else account.not_before_age
        accessible.append(not deferred or limit is None or bool(builder.ages[owner, 0] >= limit))
        born = household.people[owner].date_of_birth.year
        due = rules.minimum_distribution_divisor(builder.tax_age(owner, 0), born) if deferred else None
        divisors.append(None if due is None else max(due, 1.0))
        until = account.paid_in_until_age
        if account.paid_in > 0 and (until is None or builder.ages[owner, 0] < until):
            incomes.append((f"Paid into {account.name}", -account.paid_in))

    def tax(withdrawal: float, realised_gains: float, yields: float) -> float:
        return rules.first_year_tax(
            people,
            withdrawal=withdrawal,
            realised_gains=realised_gains,
            yields=yields,
            law_year=year,
            together=builder.together,
            extra_rate=household.extra_income_tax_rate or 0.0,
            extra_on_state_pensions=household.extra_rate_on_state_pensions,
        )

    income_yield = nominal_moments(household.markets, builder.portfolios(), household.adviser_fee)[2]
    return FirstYear(
        tuple(incomes), tuple(divisors), tuple(accessible), tax, tuple(float(y) for y in income_yield)
    )


def lifelong_income(household: Household, t: int, status: str) -> float:
    """Income for life (pensions and annuities without a last age) in year t, after the tax on it.

    Real money; what continues to a survivor is included.
    """
    builder = Builder.of(household)
    lifelong = replace(
        household,
        incomes=tuple(i for i in household.incomes if i.kind in LIFELONG_KINDS and i.to_age is None),
        one_offs=(),
        accounts=tuple(replace(account, paid_in=0.0) for account in household.accounts),
    )
    reduced = replace(builder, household=lifelong)
    amounts = [a for paid in reduced.incomes(t, status).values() for _, a in paid]
    return float(sum(amounts) - reduced.tax(t, status)(0.0))


@dataclass(frozen=True, slots=True)
class Choice:
    """What the policy chose for this year: w2, k, c and the portfolio's index."""

    withdraw: float
    convert: float
    spending: float
    portfolio: int


def this_year(household: Household, problem: Problem, facts: FirstYear, choice: Choice) -> ThisYear:
    r"""Instructions that carry out the policy's choice with the actual tax of the year.

    Money taken from tax-deferred accounts is the choice's, raised where the least that each
    account must pay out by its own year-end balance is more. Then the taxable amount s solves

    .. math:: c = \text{income} + s + w_2 + w_3 - T(w_2 + k, \text{gains}(s), \text{yields}(s))

    for the spending c of the choice. What taxable cannot give comes from tax-free, then from more
    tax-deferred; only if all of that is used is spending less than chosen. Cash that is left
    stays in (or is added to) taxable.

    Parameters
    ----------
    household, problem
        As given and as built from it.
    facts
        See `FirstYear`.
    choice
        The policy's choice for year 0.

    Returns
    -------
    ThisYear
        Every amount to the cent;
        ``spending = income + withdrawals - tax - kept`` holds to the cent.
    """
    accounts = household.accounts
    deferred = _of_type(accounts, AccountType.TAX_DEFERRED)
    minimum = np.array(
        [
            0.0 if divisor is None else _year_end_balance(account) / divisor
            for account, divisor in zip(accounts, facts.divisors, strict=True)
        ]
    )
    taken = np.array([account.taken_this_year for account in accounts])
    balance = np.array([account.balance for account in accounts])
    due = np.clip(minimum - taken, 0.0, balance) * deferred
    may_leave = np.maximum(balance * np.array(facts.accessible) * deferred, due)
    income = _cents(problem.income[0, 0])
    ledger = _Ledger(household, facts, choice, income, due, may_leave)

    withdraw = ledger.split_deferred(max(choice.withdraw, due.sum()))
    result = ledger.balance_the_year(withdraw)
    if result.short > 0 and ledger.most_withdrawn > withdraw.sum():
        withdraw = ledger.split_deferred(ledger.enough_deferred(withdraw.sum()))
        result = ledger.balance_the_year(withdraw)

    converted = _cents_each(_spread(ledger.convert, may_leave - withdraw))
    from_taxable = _cents_each(_spread(result.sale, balance * _of_type(accounts, AccountType.TAXABLE)))
    tax_free = balance * _of_type(accounts, AccountType.TAX_FREE)
    # Money converted this year may be spent this year; it leaves by the tax-free accounts.
    from_tax_free = _cents_each(_spread(result.tax_free, tax_free, cap=False))
    each = withdraw + from_taxable + from_tax_free
    unplaced = result.tax_free - from_tax_free.sum()  # converted and spent, no tax-free account yet
    by_type = [
        _cents(from_taxable.sum()),
        _cents(withdraw.sum()),
        _cents(from_tax_free.sum() + unplaced),
    ]
    rate, room = rate_and_room(problem.tax[0][0], float(withdraw.sum() + converted.sum()))
    return ThisYear(
        spending=_cents(income + sum(by_type) - result.tax - result.kept),
        income=income,
        tax=result.tax,
        withdraw_taxable=by_type[0],
        withdraw_tax_deferred=by_type[1],
        withdraw_tax_free=by_type[2],
        convert=_cents(converted.sum()),
        kept=result.kept,
        minimum_distribution=_cents(minimum.sum()),
        portfolio=problem.portfolio_names[choice.portfolio],
        accounts=tuple(
            AccountInstruction(
                account=account.name,
                owner=account.owner,
                type=account.type.value,
                balance=account.balance,
                withdraw=_cents(each[i]),
                minimum_distribution=_cents(minimum[i]),
                taken=account.taken_this_year,
                still_due=_cents(due[i]),
                convert=_cents(converted[i]),
                held_now=account.held_now,
                sell=_cents(each[i]),
            )
            for i, account in enumerate(accounts)
        ),
        incomes=tuple((name, _cents(amount)) for name, amount in facts.incomes),
        tax_rate_on_next=rate,
        room_to_next_threshold=room,
    )


@dataclass(frozen=True, slots=True)
class _Result:
    """How the year is paid: sold from taxable, taken from tax-free, tax, cash kept, cash missing."""

    sale: float
    tax_free: float
    tax: float
    kept: float
    short: float


class _Ledger:
    """The year's money as a function of what tax-deferred accounts pay out."""

    def __init__(
        self,
        household: Household,
        facts: FirstYear,
        choice: Choice,
        income: float,
        due: FloatArray,
        may_leave: FloatArray,
    ) -> None:
        accounts = household.accounts
        taxable = [account for account in accounts if account.type is AccountType.TAXABLE]
        self.market_value = sum(account.balance for account in taxable)
        basis = sum(a.balance if a.cost_basis is None else a.cost_basis for a in taxable)
        gain = max(0.0, self.market_value - basis)
        self.gain_share = gain / self.market_value if self.market_value > 0 else 0.0
        self.most_sold = max(0.0, self.market_value - household.spending.cash_aside)
        self.tax_free_balance = sum(a.balance for a in accounts if a.type is AccountType.TAX_FREE)
        self.income, self.due, self.may_leave = income, due, may_leave
        self.facts, self.choice = facts, choice
        self.spending = _cents(choice.spending)
        least = max(choice.withdraw, float(due.sum()))
        self.convert = _cents(max(0.0, min(choice.convert, float(may_leave.sum()) - least)))
        self.most_withdrawn = float(may_leave.sum()) - self.convert

    def split_deferred(self, total: float) -> FloatArray:
        """Split a withdrawal over accounts: what is due first, the rest by what may still leave."""
        rest = max(0.0, min(total, self.most_withdrawn) - self.due.sum())
        return _cents_each(self.due + _spread(rest, self.may_leave - self.due))

    def tax(self, deferred: float, sale: float) -> float:
        """Actual tax to the cent where `deferred` (with conversion) and `sale` leave the accounts."""
        yields = self.facts.yields[self.choice.portfolio] * (self.market_value - sale)
        return _cents(self.facts.tax(deferred + self.convert, self.gain_share * sale, yields))

    def balance_the_year(self, withdraw: FloatArray) -> _Result:
        """Pay spending and tax from income, `withdraw`, taxable, then tax-free."""
        deferred = float(withdraw.sum())
        before_sale = self.income + deferred
        sale = tax = 0.0
        # Tax rises with the sale by less than the sale: from 0 this climbs to the least solution.
        for _ in range(200):
            tax = self.tax(deferred, sale)
            needed = _cents(min(max(0.0, self.spending + tax - before_sale), self.most_sold))
            if needed == sale:
                break
            sale = needed
        else:
            tax = self.tax(deferred, sale)
        left = _cents(before_sale + sale - tax - self.spending)
        if left >= 0:
            return _Result(sale, 0.0, tax, left, 0.0)
        from_tax_free = _cents(min(-left, self.tax_free_balance + self.convert))
        return _Result(sale, from_tax_free, tax, 0.0, _cents(-left - from_tax_free))

    def enough_deferred(self, least: float) -> float:
        """Least tax-deferred withdrawal above `least` that leaves nothing short, else all there is."""
        low, high = least, self.most_withdrawn
        if self.balance_the_year(self.split_deferred(high)).short > 0:
            return high
        while high - low > 0.005:
            middle = (low + high) / 2
            if self.balance_the_year(self.split_deferred(middle)).short > 0:
                low = middle
            else:
                high = middle
        return high


def _year_end_balance(account: Account) -> float:
    return account.balance if account.balance_last_year_end is None else account.balance_last_year_end


def _of_type(accounts: Sequence[Account], kind: AccountType) -> FloatArray:
    return np.array([float(account.type is kind) for account in accounts])


def _spread(total: float, room: FloatArray, cap: bool = True) -> FloatArray:
    """Split a total in proportion to `room`, no more than the room where `cap`."""
    all_room = float(room.sum())
    if all_room <= 0:
        return np.zeros_like(room)
    return room * ((min(total, all_room) if cap else total) / all_room)


def _cents(value: float) -> float:
    return round(float(value), 2) + 0.0


def _cents_each(amounts: FloatArray) -> FloatArray:
    """Round to cents so that the parts sum to the rounded total (the largest takes the remainder)."""
    rounded = np.round(amounts, 2)
    if rounded.size:
        largest = int(np.argmax(amounts))
        rounded[largest] = round(float(rounded[largest] + round(amounts.sum(), 2) - rounded.sum()), 2)
    return rounded
