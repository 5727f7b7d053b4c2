"""Part 4: the schedule, year by year."""

from __future__ import annotations

from planner.plan_record import Plan, ScheduleRow
from planner.reports.blocks import Block, Bullets, Column, Heading, NewPage, StackChart, Table, Text, TimeAxis
from planner.reports.figures import Money, listed
from planner.reports.wording import ASSUMPTIONS, LOW_MIDDLE_HIGH, SAVINGS_MEAN, WHY_SPENDING_FALLS, someone

# Charts stop where it is this unlikely that anyone is alive: what follows is about almost nobody.
_CHART_UNTIL = 0.02
_TABLE_UNTIL = 0.001


def chart_length(plan: Plan) -> int:
    """Number of years a chart shows."""
    alive = [row.chance_alive[-1] if row.chance_alive else 1.0 for row in plan.schedule]
    shown = sum(1 for chance in alive if chance >= _CHART_UNTIL)
    return max(1, min(len(plan.schedule), shown))


def time_axis(plan: Plan) -> TimeAxis:
    """Years and ages of the charts."""
    rows = plan.schedule[: chart_length(plan)]
    return TimeAxis(
        tuple(row.year for row in rows),
        tuple(ages_cell(row.ages) for row in rows),
        f"age{'s' if plan.household.is_couple else ''}",
    )


def ages_cell(ages: tuple[int, ...]) -> str:
    """Ages of all people in one cell."""
    return "/".join(str(age) for age in ages)


def ages_words(plan: Plan) -> str:
    """Whose ages are meant where two stand beside each other."""
    if not plan.household.is_couple:
        return ""
    names = listed([p.name for p in plan.household.people])
    return f" Ages are those of {names}, in this order, had both lived."


def schedule(plan: Plan) -> tuple[Block, ...]:
    """All years of the plan: spending, its sources, tax and balances."""
    money = Money(plan.household.currency)
    low_middle_high = LOW_MIDDLE_HIGH.format(someone=someone(plan.household.is_couple))
    reading = [
        f"All amounts are in today's money, rounded to the nearest {money.step:,}. {ASSUMPTIONS}",
        low_middle_high,
        "Income, withdrawals, tax and moves are before tax, and the middle figure of each one by itself: "
        "a line need "
        "not add up.",
        f"{SAVINGS_MEAN} They are shown as they stand when the year begins.",
    ]
    if _has(plan, "minimum_distribution"):
        reading.append(
            "'The least to take' must leave the tax-deferred accounts; it is part of the withdrawals."
        )
    if plan.household.is_couple:
        reading.append(ages_words(plan).strip())
    blocks: list[Block] = [
        NewPage(),
        Heading("Year by year", 1, 4),
        Text(
            "What the plan expects in each year. Exact instructions for this year are in part 3, with "
            "this year's "
            "actual tax; the table uses a planning tax throughout. Each later year is read off anew from "
            "what "
            "your savings then are (part 5)."
        ),
        _sources_chart(plan),
        Heading("How to read the table"),
        Bullets(tuple(reading)),
    ]
    if _falls_late(plan):
        blocks += [Heading("Why spending falls late"), Text(WHY_SPENDING_FALLS)]
    return (*blocks, _table(plan, money))


def _falls_late(plan: Plan) -> bool:
    rows = plan.schedule[: chart_length(plan)]
    return rows[-1].spending.p50 < 0.97 * rows[0].spending.p50


def _has(plan: Plan, name: str) -> bool:
    return any(getattr(row, name) >= 0.5 for row in plan.schedule)


def _layers(plan: Plan) -> list[tuple[str, str]]:
    """Kinds of money that occur in the plan: (field of the row, name)."""
    kinds = [
        ("income", "Pensions, work and other income"),
        ("withdraw_taxable", "From taxable"),
        ("withdraw_tax_deferred", "From tax-deferred"),
        ("withdraw_tax_free", "From tax-free"),
    ]
    return [(field, name) for field, name in kinds if field == "income" or _has(plan, field)]


def _sources_chart(plan: Plan) -> StackChart:
    money = Money(plan.household.currency)
    rows = plan.schedule[: chart_length(plan)]
    return StackChart(
        "Where each year's money comes from (middle figures)",
        f"{money.unit} a year, today's money, before tax",
        time_axis(plan),
        tuple((name, tuple(max(0.0, getattr(row, field)) for row in rows)) for field, name in _layers(plan)),
    )


def _table(plan: Plan, money: Money) -> Table:
    household = plan.household
    columns = [
        Column("Year", "left"),
        Column("Ages" if household.is_couple else "Age", "left"),
        *(Column(t, group="Spending, after tax") for t in ("Low", "Middle", "High")),
        Column("Bills"),
        *(Column(t, group="Where the money comes from, before tax") for t in _short_layers(plan)),
        Column("Tax"),
    ]
    if _has(plan, "convert"):
        columns.append(Column("Moved to tax-free"))
    if _has(plan, "minimum_distribution"):
        columns.append(Column("The least to take"))
    columns += [Column(t, group="Savings at the start of the year") for t in ("Low", "Middle", "High")]
    note = f"In {money.unit} a year, today's money. How to read it stands before the table."
    shown = [row for row in plan.schedule if not row.chance_alive or row.chance_alive[-1] >= _TABLE_UNTIL]
    if len(shown) < len(plan.schedule):
        note += (
            f" Left out: the years after {shown[-1].year}, which fewer than 1 in 1,000 live to see; the "
            "results files have them."
        )
    return Table(tuple(columns), tuple(_row(plan, row, money) for row in shown), note, wide=True)


def _short_layers(plan: Plan) -> list[str]:
    return [
        name.removeprefix("From ").capitalize() if f != "income" else "Income" for f, name in _layers(plan)
    ]


def _row(plan: Plan, row: ScheduleRow, money: Money) -> tuple[str, ...]:
    about = money.about_cell
    cells = [
        str(row.year),
        ages_cell(row.ages),
        about(row.spending.p10),
        about(row.spending.p50),
        about(row.spending.p90),
        about(row.essential),
        *(about(getattr(row, field)) for field, _ in _layers(plan)),
        about(row.tax),
    ]
    if _has(plan, "convert"):
        cells.append(about(row.convert))
    if _has(plan, "minimum_distribution"):
        cells.append(about(row.minimum_distribution))
    cells += [about(row.balance.p10), about(row.balance.p50), about(row.balance.p90)]
    return tuple(cells)
