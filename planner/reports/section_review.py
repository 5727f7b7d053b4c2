"""Part 5: what the next review will say."""

from __future__ import annotations

from planner.plan_record import LookupRow, Plan, StrategyResult
from planner.reports.blocks import Block, Column, Heading, NewPage, Table, Text
from planner.reports.figures import Money, day_words, of_futures, one_year_after, percent
from planner.reports.section_year import band_sentence, planned_next_year, required_wording
from planner.reports.wording import SAVINGS_MEAN, SURVIVOR_ACCOUNTS, WHAT_A_REVIEW_DOES, futures_tested


def next_review(plan: Plan) -> tuple[Block, ...]:
    """Look-up tables: savings at the next review -> spending and portfolio."""
    when = day_words(one_year_after(plan.household.plan_date), plan.household.currency)
    return (
        NewPage(),
        Heading("At the next review", 1, 5),
        Text(WHAT_A_REVIEW_DOES),
        Heading(f"If your savings stand at … on {when}"),
        *_tables(plan),
        Heading("When nothing changes"),
        *_band(plan),
        Heading("The largest cut to expect"),
        *_largest_cut(plan),
    )


def status_words(plan: Plan, status: str) -> str:
    """Who is alive, in words."""
    people = plan.household.people
    if not plan.household.is_couple:
        return "You"
    return {
        "both": "Both of you",
        "first": f"{people[0].name} alone",
        "second": f"{people[1].name} alone",
    }.get(status, status)


def _tables(plan: Plan) -> tuple[Block, ...]:
    """One table with a pair of columns a status where balances match, else a table a status."""
    money = Money(plan.household.currency)
    by_status: dict[str, list[LookupRow]] = {}
    for row in plan.lookup:
        by_status.setdefault(row.status, []).append(row)
    note = (
        f"In {money.unit}, today's money. {SAVINGS_MEAN} Spending is a year's, after tax. "
        f"{SURVIVOR_ACCOUNTS} Between two lines, go in proportion. The "
        "assumptions are in part 10."
    )
    if not by_status:
        return (Text("No look-up table was made."),)
    grids = {tuple(r.balance for r in rows) for rows in by_status.values()}
    if len(grids) == 1:
        columns = [Column("Savings then")]
        for status in by_status:
            group = status_words(plan, status) if plan.household.is_couple else ""
            columns += [Column("Spend", group=group), Column("Hold", "left", group=group)]
        rows = []
        for i, balance in enumerate(next(iter(grids))):
            cells = [money.about_cell(balance)]
            for status_rows in by_status.values():
                cells += [money.about_cell(status_rows[i].spending), status_rows[i].portfolio]
            rows.append(tuple(cells))
        expected = planned_next_year(plan)
        strong = () if expected is None else (_place(expected, by_status),)
        if strong:
            note += " In bold: the line nearest to what we expect."
        return (Table(tuple(columns), tuple(rows), note, strong),)
    blocks: list[Block] = []
    for status, status_rows in by_status.items():
        blocks.append(Heading(status_words(plan, status), 3))
        blocks.append(
            Table(
                (Column("Savings then"), Column("Spend"), Column("Hold", "left")),
                tuple(
                    (money.about_cell(r.balance), money.about_cell(r.spending), r.portfolio)
                    for r in status_rows
                ),
            )
        )
    return (*blocks, Text(note, "note"))


def _place(row: LookupRow, by_status: dict[str, list[LookupRow]]) -> int:
    return next(i for i, other in enumerate(by_status[row.status]) if other is row)


def band_strategy(plan: Plan) -> StrategyResult | None:
    """The plan with the no-change band kept, where it was simulated."""
    return next((s for s in plan.strategies if "band" in s.key), None)


def _band(plan: Plan) -> tuple[Block, ...]:
    money = Money(plan.household.currency)
    band = plan.band
    text = (
        "Small ups and downs need no change: keep spending what was planned while the table says an "
        "amount within "
        f"{percent(band.tolerance)} of it. {band_sentence(plan)} All after tax, in today's money. "
        "Outside the band, spend what the table says from then on, and measure the next band from there."
    )
    result = band_strategy(plan)
    if result is None:
        cost = "What it costs to keep to this band instead of changing every year was not tested."
    else:
        cost = (
            f"We tested keeping to such a band every year. It costs you {money.about(result.wealth_cost)} "
            "of savings "
            "compared with changing your spending a little each year."
        )
    return (Text(text), Text(cost))


def _largest_cut(plan: Plan) -> tuple[Block, ...]:
    optimum = plan.strategies[0]
    at_risk = of_futures(optimum.chance_below_essential)
    return (
        Text(
            "In half of the futures tested, the largest fall of spending from one year to the next over "
            "the whole plan "
            f"was {percent(optimum.largest_yearly_cut, 0)} or less; in the other half it was more. Bills "
            "(essential "
            f"spending) were cut into in {at_risk} futures."
        ),
        Text(futures_tested(plan.sources.n_paths, plan.household.is_couple), "note"),
        *required_wording(plan),
    )
