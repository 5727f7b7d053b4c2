"""Part 6: how it could go."""

from __future__ import annotations

from planner.plan_record import ExampleFuture, Plan
from planner.reports.blocks import Block, Bullets, Column, FanChart, Heading, LinesChart, NewPage, Table, Text
from planner.reports.figures import DASH, Money, number, percent
from planner.reports.section_schedule import ages_cell, ages_words, chart_length, time_axis
from planner.reports.section_year import bills_sentence, required_wording
from planner.reports.wording import AFTER_TAX, BEFORE_TAX, LOW_MIDDLE_HIGH, futures_tested, someone


def how_it_could_go(plan: Plan) -> tuple[Block, ...]:
    """Fans of spending and savings, example futures, and what a death now would change."""
    household = plan.household
    note = LOW_MIDDLE_HIGH.format(someone=someone(household.is_couple))
    return (
        NewPage(),
        Heading("How it could go", 1, 6),
        Text(bills_sentence(plan, plan.strategies[0])),
        Text(f"{futures_tested(plan.sources.n_paths, household.is_couple)} {_count_error(plan)}"),
        *required_wording(plan),
        Heading("Spending and savings by age"),
        _spending(plan),
        _balances(plan),
        Text(
            f"{note} The charts stop where it is less likely than 1 in 50 that "
            f"{someone(household.is_couple)} alive. The "
            f"assumptions are in part 10.{ages_words(plan)}",
            "note",
        ),
        *_futures(plan),
        *_survivors(plan),
        *_long_lives(plan),
    )


def _count_error(plan: Plan) -> str:
    """Twice the standard error of the count of futures, in futures of 100."""
    error = 200 * plan.strategies[0].chance_standard_error
    size = f"about {number(error, 0)}" if error >= 1 else "less than 1"
    return f"With other draws it could differ by {size} of 100."


def _spending(plan: Plan) -> FanChart:
    money = Money(plan.household.currency)
    rows = plan.schedule[: chart_length(plan)]
    return FanChart(
        "Spending",
        f"{money.unit} a year, {AFTER_TAX}",
        time_axis(plan),
        tuple(r.spending.p10 for r in rows),
        tuple(r.spending.p50 for r in rows),
        tuple(r.spending.p90 for r in rows),
        tuple(r.essential for r in rows),
        "your bills",
    )


def _balances(plan: Plan) -> FanChart:
    money = Money(plan.household.currency)
    rows = plan.schedule[: chart_length(plan)]
    return FanChart(
        "Savings",
        f"{money.unit}, {BEFORE_TAX}",
        time_axis(plan),
        tuple(r.balance.p10 for r in rows),
        tuple(r.balance.p50 for r in rows),
        tuple(r.balance.p90 for r in rows),
    )


def _futures(plan: Plan) -> tuple[Block, ...]:
    """Example futures: a chart of their spending and a table every fifth year."""
    if not plan.futures:
        return ()
    money = Money(plan.household.currency)
    shown = plan.futures[:3]
    length = chart_length(plan)
    rows = plan.schedule[:length]
    chart = LinesChart(
        "Spending in three example futures" if len(shown) == 3 else "Spending in example futures",
        f"{money.unit} a year, {AFTER_TAX}",
        time_axis(plan),
        tuple((f.name, tuple(f.spending[:length])) for f in shown),
        tuple(r.essential for r in rows),
        "your bills",
    )
    words = Bullets(tuple(f"{f.name[:1].upper()}{f.name[1:]}: {_sentence(f.description)}" for f in shown))
    return (Heading("Example futures"), words, chart, _futures_table(plan, shown, money))


def _sentence(text: str) -> str:
    return text if text.endswith((".", "!", "?")) else f"{text}."


def _futures_table(plan: Plan, futures: tuple[ExampleFuture, ...], money: Money) -> Table:
    columns = [Column("Year", "left"), Column("Ages" if plan.household.is_couple else "Age", "left")]
    for future in futures:
        columns += [Column("Spending", group=future.name), Column("Savings", group=future.name)]
    longest = max(len(f.years) for f in futures)
    rows = []
    for t in range(0, longest, 5):
        first = next(f for f in futures if t < len(f.years))
        cells = [str(first.years[t]), ages_cell(first.ages[t])]
        for future in futures:
            if t < len(future.years):
                cells += [money.about_cell(future.spending[t]), money.about_cell(future.balance[t])]
            else:
                cells += ["", ""]
        rows.append(tuple(cells))
    worst = [f"{f.name}: {percent(min(f.returns))}" for f in futures if f.returns]
    note = (
        f"In {money.unit}, today's money, every fifth year: spending after tax; savings as in part 4. "
        f"Blank: nobody is alive. {DASH}: nothing."
    )
    if worst:
        note += f" Worst year's return after costs and price rises: {'; '.join(worst)}."
    return Table(tuple(columns), tuple(rows), note)


def _survivors(plan: Plan) -> tuple[Block, ...]:
    if not plan.survivors:
        return ()
    money = Money(plan.household.currency)
    columns = (
        Column("If this person were left alone", "left"),
        Column("Income before", group="Lifelong and other income"),
        Column("Income after", group="Lifelong and other income"),
        Column("Tax"),
        Column("Spending"),
        Column("Bills"),
        Column("Bills paid by lifelong income"),
    )
    now = plan.this_year
    both = (
        "Both of you, this year",
        money.about_cell(now.income),
        money.about_cell(now.income),
        money.about_cell(now.tax),
        money.about_cell(now.spending),
        money.about_cell(plan.household.spending.essential),
        percent(plan.bills_covered_now, 0),
    )
    rows = tuple(
        (
            s.survivor,
            money.about_cell(s.income_before),
            money.about_cell(s.income),
            money.about_cell(s.tax),
            money.about_cell(s.spending),
            money.about_cell(s.essential),
            percent(s.bills_covered, 0),
        )
        for s in plan.survivors
    )
    note = (
        f"In {money.unit} a year, today's money, from next year on, with the same savings. Income is "
        "before tax; spending "
        "and bills are after tax. A survivor is taxed as a single person. The assumptions are in part 10."
    )
    return (Heading("If one of you died now"), Table(columns, (both, *rows), note, strong=(0,)))


def _long_lives(plan: Plan) -> tuple[Block, ...]:
    """Chances of being alive, every fifth year, as far as the charts go."""
    household = plan.household
    rows = plan.schedule[: chart_length(plan)]
    if not rows or not all(row.chance_alive for row in rows):
        return ()
    columns = [Column("Year", "left")]
    for person in household.people:
        columns += [Column("Age", group=person.name), Column("Alive", group=person.name)]
    if household.is_couple:
        columns.append(Column("At least one"))
    cells = []
    for row in rows[::5]:
        line = [str(row.year)]
        for age, chance in zip(row.ages, row.chance_alive, strict=False):
            line += [str(age), _of_hundred(chance)]
        if household.is_couple:
            line.append(_of_hundred(row.chance_alive[-1]))
        cells.append(tuple(line))
    note = (
        "Of 100 people like you by the life tables in part 10, how many are expected to be alive at the "
        "start of the "
        "year. You may live longer than any table says."
    )
    names = [p.name for p in household.people] if household.is_couple else ["you"]
    series = [(name, tuple(100 * row.chance_alive[i] for row in rows)) for i, name in enumerate(names)]
    if household.is_couple:
        series.append(("at least one", tuple(100 * row.chance_alive[-1] for row in rows)))
    chart = LinesChart(
        "Still alive", "of 100 like you, at the start of the year", time_axis(plan), tuple(series)
    )
    return (
        Heading("How long you might live"),
        chart,
        Table(tuple(columns), tuple(cells), note),
        *required_wording(plan),
    )


def _of_hundred(chance: float) -> str:
    if 0 < chance < 0.005:
        return "under 1"
    if 0.995 <= chance < 1:
        return "over 99"
    return f"{round(100 * chance)}"
