"""Part 3: this year's instructions."""

from __future__ import annotations

import math
from typing import Final

from planner.plan_record import AccountInstruction, Plan
from planner.reports.blocks import Block, Column, Heading, NewPage, Table, Text
from planner.reports.figures import Money, add_up, day_words, one_year_after, percent, rounded
from planner.reports.wording import CANNOT_BE_UNDONE, CHECK_TAX
from planner.reports.year_money import (
    investment_moves,
    stays_invested,
    tax_year_end,
    unknown_holdings,
    year_money,
)

LEFT: Final = "left"


def instructions(plan: Plan) -> tuple[Block, ...]:
    """Each account, amount and tax, the trades, and a to-do list."""
    return (
        NewPage(),
        Heading("This year's instructions", 1, 3),
        Text("What to do between now and the next review. Amounts are exact, in today's money."),
        Heading("Where this year's money comes from"),
        _sources(plan),
        Heading("Each account"),
        _accounts(plan),
        *_tax(plan),
        *_conversions(plan),
        *_trades(plan),
        Heading("To do"),
        _to_do(plan),
    )


def _sources(plan: Plan) -> Table:
    """The sum of page one, line by line."""
    money = Money(plan.household.currency)
    year = year_money(plan)
    rows = [(line.label, money.exact_cell(line.amount)) for line in year.lines]
    rows.append(("Comes in, before tax", money.exact_cell(year.coming_in)))
    totals = [len(rows) - 1]
    rows.append(("less income tax", money.exact_cell(-year.tax)))
    if year.kept:
        rows.append(("less what is added to your taxable savings", money.exact_cell(-year.kept)))
    rows.append(("Yours to spend, after tax", money.exact_cell(year.spending)))
    totals.append(len(rows) - 1)
    return Table(
        (Column("", LEFT), Column(f"This year ({money.unit})")),
        tuple(rows),
        "The same sum as on page one.",
        strong=tuple(totals),
    )


def _accounts(plan: Plan) -> Block:
    money = Money(plan.household.currency)
    now = plan.this_year
    if not now.accounts:
        return Text("There are no savings accounts.")
    on_paper = {line.account: line.amount for line in year_money(plan).lines if line.account is not None}
    has_minimum = any(a.minimum_distribution >= 0.5 for a in now.accounts)
    columns = [
        Column("Account", LEFT),
        Column("Owner", LEFT),
        Column("Balance"),
        Column("Take out this year"),
    ]
    if has_minimum:
        columns += [
            Column("The least", group="Must be taken"),
            Column("Taken so far", group="Must be taken"),
            Column("Still due", group="Must be taken"),
        ]
    if now.convert >= 0.5:
        columns.append(Column("Move to tax-free"))
    rows = []
    for account in now.accounts:
        owner = "both" if account.owner == "joint" else account.owner
        row = [
            f"{account.account} ({account.type})",
            owner,
            money.exact_cell(account.balance),
            money.exact_cell(on_paper.get(account.account, 0)),
        ]
        if has_minimum:
            row += [
                money.exact_cell(v)
                for v in (account.minimum_distribution, account.taken, math.ceil(account.still_due - 1e-6))
            ]
        if now.convert >= 0.5:
            row.append(money.exact_cell(account.convert))
        rows.append(tuple(row))
    note = f"In {money.unit}, before tax, for the whole year."
    if any(a.type == "taxable" and a.sell >= 0.5 for a in now.accounts):
        note += (
            " What you take from a taxable account is raised by selling; the tax on the gain is in the "
            "income tax."
        )
    if has_minimum:
        note += (
            f" 'Still due' is the part of the least amount that must leave the account by "
            f"{day_words(tax_year_end(plan.household), plan.household.currency)}; what you take out "
            "counts towards it."
        )
    return Table(tuple(columns), tuple(rows), note)


def _tax(plan: Plan) -> tuple[Block, ...]:
    money = Money(plan.household.currency)
    now = plan.this_year
    text = f"Set aside {money.exact(year_money(plan).tax)} for income tax."
    text += (
        f" The next {money.exact(100)} taken from a tax-deferred account would be taxed at about "
        f"{percent(now.tax_rate_on_next)}"
    )
    if math.isfinite(now.room_to_next_threshold) and now.room_to_next_threshold >= 1:
        text += f", up to another {money.about(now.room_to_next_threshold)}; above that the rate changes"
    return (Heading("Tax"), Text(f"{text}. {CHECK_TAX}"))


def _conversions(plan: Plan) -> tuple[Block, ...]:
    now = plan.this_year
    if now.convert < 0.5:
        return ()
    money = Money(plan.household.currency)
    return (
        Heading("Move from tax-deferred to tax-free"),
        Text(
            f"Move {money.exact(now.convert)} this year. The tax on it is in the income tax above.",
        ),
        Text(CANNOT_BE_UNDONE, "caution"),
    )


def _trades(plan: Plan) -> tuple[Block, ...]:
    """By asset class over all accounts whose present portfolio is known."""
    household, now = plan.household, plan.this_year
    money = Money(household.currency)
    portfolios = {p.name: p for p in household.portfolios}
    known = [a for a in now.accounts if a.held_now in portfolios]
    heading = Heading("Investments")
    unknown = unknown_holdings(plan)
    ask: tuple[Block, ...] = ()
    if unknown:
        ask = (
            Text(
                f"The workbook does not say what is held in {'; '.join(unknown)}. Compare it with "
                f"'{now.portfolio}' "
                "before you trade."
            ),
        )
    if not investment_moves(plan) or now.portfolio not in portfolios:
        done = "" if unknown else " No trades are needed."
        return (heading, Text(f"Portfolio for this year: '{now.portfolio}'.{done}"), *ask)
    classes = [c.name for c in household.markets.asset_classes]
    before = [0.0] * len(classes)
    for account in known:
        weights = portfolios[str(account.held_now)].weights
        stays = stays_invested(account)
        before = [b + w * stays for b, w in zip(before, weights, strict=True)]
    total = sum(before)
    target = portfolios[now.portfolio].weights
    whole = rounded(total)
    from_units = add_up(before, whole) if before else ()
    after_values = [w * total for w in target]
    after_units = add_up(after_values, whole)
    rows = [
        (
            name,
            money.exact_cell(held),
            money.exact_cell(wanted),
            _buy_or_sell(wanted - held, money),
        )
        for name, held, wanted in zip(classes, from_units, after_units, strict=True)
    ]
    rows.append(("Together", money.exact_cell(whole), money.exact_cell(whole), ""))
    table = Table(
        (
            Column("Asset class", LEFT),
            Column(f"Now ({money.unit})"),
            Column(f"In '{now.portfolio}'"),
            Column("Trade"),
        ),
        tuple(rows),
        "Money that stays invested after this year's withdrawals, over all accounts whose holdings are "
        "known. Trade "
        "inside tax-deferred and tax-free accounts first: there a sale is not taxed.",
        strong=(len(rows) - 1,),
    )
    lines = tuple(
        Text(f"Move about {money.about(amount)} from '{source}' to '{to}'.")
        for source, to, amount in investment_moves(plan)
    )
    return (heading, *lines, table, *ask)


def _buy_or_sell(change: int, money: Money) -> str:
    if change == 0:
        return "none"
    return f"{'buy' if change > 0 else 'sell'} {money.exact_cell(abs(change))}"


def _to_do(plan: Plan) -> Table:
    household, now = plan.household, plan.this_year
    money = Money(household.currency)
    year_end = day_words(tax_year_end(household), household.currency)
    review = day_words(one_year_after(household.plan_date), household.currency)
    adviser = household.practice.adviser or "Your adviser"
    on_paper = {line.account: line.amount for line in year_money(plan).lines if line.account is not None}
    tasks: list[tuple[str, str, str]] = [("Check part 2, correct it and sign it", "You", "now")]
    if now.convert >= 0.5:
        tasks.append(
            (
                f"Ask about the move of {money.exact(now.convert)} to tax-free before it is made",
                "You, tax preparer",
                f"before {year_end}",
            )
        )
    for account in now.accounts:
        tasks += _account_tasks(account, on_paper.get(account.account, 0), money, year_end, review)
    for source, to, amount in investment_moves(plan):
        tasks.append(
            (
                f"Change about {money.about(amount)} from '{source}' to '{to}'",
                adviser,
                "after the withdrawals",
            )
        )
    if now.convert >= 0.5:
        tasks.append((f"Move {money.exact(now.convert)} from tax-deferred to tax-free", adviser, year_end))
    tax = year_money(plan).tax
    if tax >= 1:
        tasks.append(
            (f"Set aside {money.exact(tax)} for tax and have it checked", "You, tax preparer", year_end)
        )
    if household.spending.cash_aside:
        tasks.append((f"Keep {money.exact(household.spending.cash_aside)} in cash", "You", "all year"))
    tasks.append(("Next review: bring the balances of all accounts", "You, " + adviser, review))
    columns = (Column("What", LEFT), Column("Who", LEFT), Column("By when", LEFT), Column("Done", LEFT))
    return Table(columns, tuple((*task, "") for task in tasks), blank=True)


def _account_tasks(
    account: AccountInstruction, amount: int, money: Money, year_end: str, review: str
) -> list[tuple[str, str, str]]:
    tasks = []
    if account.still_due >= 1:
        due = money.exact(math.ceil(account.still_due - 1e-6))
        tasks.append(
            (f"Take at least {due} from {account.account}: the least that must be taken", "You", year_end)
        )
    if amount >= 1:
        whole = " in all" if account.still_due >= 1 else ""
        tasks.append((f"Take {money.exact(amount)}{whole} from {account.account}", "You", review))
    return tasks
