"""Part 3: this year's instructions."""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import Final, TypeAlias

from planner.plan_record import AccountInstruction, Plan
from planner.reports.blocks import Block, Column, Heading, NewPage, Table, Text
from planner.reports.figures import Money, add_up, at_least, day_words, one_year_after, percent
from planner.reports.month_money import year_by_month
from planner.reports.wording import CANNOT_BE_UNDONE, CHECK_TAX
from planner.reports.year_money import (
    account_trades,
    investment_moves,
    tax_year_end,
    unknown_holdings,
    year_money,
)

LEFT: Final = "left"
Row: TypeAlias = tuple[str, ...]


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
        *_months(plan),
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
    withheld = tax_withheld(plan)
    if withheld:
        columns.append(Column("Tax to withhold"))
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
                for v in (
                    at_least(account.minimum_distribution),
                    account.taken,
                    at_least(account.still_due),
                )
            ]
        if now.convert >= 0.5:
            row.append(money.exact_cell(account.convert))
        if withheld:
            row.append(money.exact_cell(withheld.get(account.account, 0)))
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
    if withheld:
        note += (
            " 'Tax to withhold': the year's income tax shared over what leaves the tax-deferred accounts. "
            "If a provider withholds another amount, set aside or expect back the difference."
        )
    return Table(tuple(columns), tuple(rows), note)


def tax_withheld(plan: Plan) -> dict[str, int]:
    """The year's income tax shared over what leaves tax-deferred accounts, in whole units.

    In proportion to withdrawal and move; no more than is paid out. Empty where nothing leaves one
    or no tax is due; what it does not cover is set aside by the client.
    """
    deferred = [a for a in plan.this_year.accounts if a.type == "tax-deferred" and a.withdraw >= 1]
    paid = [a.withdraw for a in deferred]
    tax = min(year_money(plan).tax, math.floor(sum(paid)))
    if tax < 1 or not deferred:
        return {}
    shares = add_up([tax * amount / sum(paid) for amount in paid], tax)
    return {a.account: share for a, share in zip(deferred, shares, strict=True)}


def _tax(plan: Plan) -> tuple[Block, ...]:
    money = Money(plan.household.currency)
    now = plan.this_year
    tax, withheld = year_money(plan).tax, sum(tax_withheld(plan).values())
    if withheld == 0:
        text = f"Set aside {money.exact(tax)} for income tax."
    else:
        rest = "all of it can be withheld"
        if tax > withheld:
            yours = money.exact(tax - withheld)
            rest = f"{money.exact(withheld)} can be withheld, {yours} is for you to set aside"
        text = f"Income tax this year is about {money.exact(tax)}; {rest}."
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


def _months(plan: Plan) -> tuple[Block, ...]:
    """The year's money in twelve payments."""
    money = Money(plan.household.currency)
    year = year_by_month(plan)
    has_income = any(m.income for m in year.months)
    has_kept = any(m.kept for m in year.months)
    if not year.accounts and not has_income:
        return ()
    columns = [Column("From", LEFT)]
    columns += [Column("Pensions and other income")] if has_income else []
    columns += [Column(name, group="From the accounts, before tax") for name in year.accounts]
    columns += [Column("Tax")] if any(m.tax for m in year.months) else []
    columns += [Column("Added to savings")] if has_kept else []
    columns.append(Column("To spend, after tax"))

    def cells(label: str, income: int, withdrawals: Sequence[int], tax: int, kept: int, spending: int) -> Row:
        row = [label]
        row += [money.exact_cell(income)] if has_income else []
        row += [money.exact_cell(amount) for amount in withdrawals]
        row += [money.exact_cell(-tax)] if any(m.tax for m in year.months) else []
        row += [money.exact_cell(-kept)] if has_kept else []
        return (*row, money.exact_cell(spending))

    rows = [
        cells(day_words(m.day, plan.household.currency), m.income, m.withdrawals, m.tax, m.kept, m.spending)
        for m in year.months
    ]
    each = zip(*(m.withdrawals for m in year.months), strict=True)
    rows.append(
        cells(
            "The whole year",
            sum(m.income for m in year.months),
            [sum(column) for column in each],
            sum(m.tax for m in year.months),
            sum(m.kept for m in year.months),
            sum(m.spending for m in year.months),
        )
    )
    note = (
        f"In {money.unit}. Income is shown as a twelfth a month, whenever it is paid. You may also take the "
        "money in fewer, larger sums."
    )
    if year.brought_forward:
        note += (
            " Early payments are larger so that the least amount leaves its account in time; keep what you "
            "do not need for the later months."
        )
    table = Table(tuple(columns), tuple(rows), note, strong=(len(rows) - 1,))
    return (Heading("Month by month, if you want it so"), table)


def _trades(plan: Plan) -> tuple[Block, ...]:
    """Buy and sell by account and asset class, from the portfolio held now to this year's."""
    household, now = plan.household, plan.this_year
    money = Money(household.currency)
    heading = Heading("Investments")
    unknown = unknown_holdings(plan)
    ask: tuple[Block, ...] = ()
    if unknown:
        ask = (
            Text(
                f"The workbook does not say what is held in {'; '.join(unknown)}. Compare it with "
                f"'{now.portfolio}' before you trade."
            ),
        )
    trades = account_trades(plan)
    if not trades:
        done = "" if unknown else " No trades are needed."
        return (heading, Text(f"Portfolio for this year: '{now.portfolio}'.{done}"), *ask)
    moves = [
        f"Move about {money.about(amount)} from '{source}' to '{to}'."
        for source, to, amount in investment_moves(plan)
    ] or [f"Stay in '{now.portfolio}'; sell only what is paid out."]
    moved = ", or moved to tax-free and invested there" if now.convert >= 0.5 else ""
    classes = household.markets.asset_classes
    columns = (
        Column("Account", LEFT),
        Column("Held now", LEFT),
        *(Column(c.name, group="Buy, or sell (–)") for c in classes),
        Column("Leaves the account"),
    )
    rows = [
        (
            trade.account,
            trade.held_now,
            *(money.exact_cell(amount) for amount in trade.amounts),
            money.exact_cell(trade.leaves),
        )
        for trade in trades
    ]
    if len(trades) > 1:
        sums = [sum(column) for column in zip(*(trade.amounts for trade in trades), strict=True)]
        leaves = sum(trade.leaves for trade in trades)
        rows.append(("Together", "", *(money.exact_cell(v) for v in sums), money.exact_cell(leaves)))
    table = Table(
        columns,
        tuple(rows),
        f"In {money.unit}. After these trades what stays in each account is in '{now.portfolio}'. A line's "
        f"sales less its purchases are what leaves the account this year: paid out{moved}. In a taxable "
        "account a sale may be taxed; its gain is in this year's tax only as "
        "far as the money is paid out, so ask your tax preparer before larger changes there.",
        strong=(len(rows) - 1,) if len(trades) > 1 else (),
    )
    return (heading, Text(" ".join(moves)), table, *ask)


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
        withheld = sum(tax_withheld(plan).values())
        if withheld:
            text = f"Ask the providers to withhold {money.exact(withheld)} of income tax"
            tasks.append((text, adviser, "with the first payment"))
        if tax > withheld:
            tasks.append((f"Set aside {money.exact(tax - withheld)} for tax", "You", year_end))
        tasks.append((f"Have the tax of {money.exact(tax)} checked", "You, tax preparer", year_end))
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
        due = money.exact(at_least(account.still_due))
        tasks.append(
            (f"Take at least {due} from {account.account}: the least that must be taken", "You", year_end)
        )
    if amount >= 1:
        whole = " in all" if account.still_due >= 1 else ""
        tasks.append((f"Take {money.exact(amount)}{whole} from {account.account}", "You", review))
    return tasks
