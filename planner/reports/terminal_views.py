"""Stresses, decisions, history and ladders of preferences as terminal tables of at most 80 columns."""

from __future__ import annotations

from collections.abc import Callable, Sequence

import numpy as np
from rich.console import Group, RenderableType
from rich.table import Table
from rich.text import Text

from planner.decisions import DecisionCurve
from planner.history import SequenceResult, Sequences
from planner.household import Household
from planner.ladders import Rung
from planner.reports.figures import DASH, Money, percent
from planner.reports.terminal import wrapped
from planner.reports.terminal_comparison import BEST, WIDE, bar, chance_text, signed
from planner.surprises import StressResult
from planner.workbook.summary import gamble_words

QUICK_NOTE = (
    "What-ifs and tests use coarser grids and fewer futures than the plan: compare within a table; figures "
    "may differ from the plan's by a per cent or so."
)


def paragraph(text: str, width: int) -> Text:
    """A dim paragraph under a table."""
    return Text(wrapped(text, width), style="dim")


def _table(first: str, *columns: str, max_width: int = 30) -> Table:
    table = Table(box=None, padding=(0, 1, 0, 0), header_style="bold")
    table.add_column(first, max_width=max_width)
    for column in columns:
        table.add_column(column, justify="right", no_wrap=True)
    return table


# Stresses ------------------------------------------------------------------------------------------


def stress_table(
    results: Sequence[StressResult],
    currency: str,
    later: Sequence[tuple[int, int]],
    wealth: float,
    width: int,
    plain: bool = False,
) -> Group:
    """What each stress does to the plan, the plan as given first."""
    money = Money(currency)
    wide = width >= WIDE
    ages = later if wide else later[1:2] or later[:1]
    headers = ["this\nyear"]
    for age, _ in ages:
        headers += [f"at {age}\nlow", f"at {age}\nmiddle"]
    headers += ["bills\ncut", "for\nyears", "left\nmiddle", "as bad as\nlosing"]
    table = _table("what happens", *headers, max_width=28 if not wide else 40)
    if wide:
        table.add_column("", no_wrap=True)
    most = max((r.result.wealth_cost for r in results if r.comparable), default=0.0)
    for stress in results:
        result = stress.result
        style = "bold" if stress.how == "as given" else ""
        name = f"{stress.name} (known)" if stress.how == "planned for" else stress.name
        cells = [money.about_cell(result.spending_this_year)]
        for _, t in ages:
            cells += [money.about_cell(float(result.spending[i, t])) for i in (0, 1)]
        cost = "" if not stress.comparable else _loss(result.wealth_cost, wealth, money)
        cells += [
            chance_text(result.chance_below_essential),
            f"{result.years_below_essential:.1f}" if result.years_below_essential else DASH,
            money.about_cell(result.estate.p50),
            "" if stress.how == "as given" else cost,
        ]
        if wide:
            share = result.wealth_cost / most if stress.comparable and most > 0 else 0.0
            cells.append(bar(share, plain=plain))
        table.add_row(Text(name, style=style), *cells)
    notes = (
        f"In today's {currency}, after tax. Assumptions (known) change from today and the plan is made anew; "
        f"the rest are surprises: this year's spending is the plan's, and it is made anew when they come. "
        f"'as bad as losing': the sum lost today that would hurt as much; not given where other lives or "
        f"chosen futures are looked at. Ages are the first person's."
    )
    return Group(Text("If it goes otherwise", style="bold"), table, Text(), paragraph(notes, width))


def _loss(cost: float, wealth: float, money: Money) -> str:
    return "all" if cost >= 0.999 * wealth > 0 else money.about_cell(cost)


# Decisions -----------------------------------------------------------------------------------------


def decision_tables(
    curves: Sequence[DecisionCurve], left_out: Sequence[str], currency: str, width: int, plain: bool = False
) -> Group:
    """Each decision with its curve, the best marked, and what was not searched."""
    blocks: list[RenderableType] = []
    for curve in curves:
        blocks += [_decision(curve, Money(currency), width, plain), Text()]
    notes = (
        f"In today's {currency}. 'worth': money today, compared with the client as given, that the choice is "
        f"worth to this client (0 = as given); 'steady': the income for life the plan is worth. {BEST} best, "
        f"or the answer."
    )
    blocks.append(paragraph(notes, width))
    if left_out:
        blocks.append(paragraph("Not searched: " + "; ".join(left_out) + ".", width))
    return Group(*blocks)


def _decision(curve: DecisionCurve, money: Money, width: int, plain: bool) -> Group:
    breaks = any(point.break_even_age is not None for point in curve.points)
    headers = ["this\nyear", "steady", "worth"] + (["ahead\nfrom age"] if breaks else [])
    table = _table("choice", *headers, max_width=40 if width < WIDE else 60)
    table.add_column("", no_wrap=True)
    worths = [point.worth for point in curve.points]
    low, high = min(worths), max(worths)
    for number, point in enumerate(curve.points):
        best = number == curve.best
        name = f"{point.label}{' (as given)' if point.as_given and 'given' not in point.label else ''}"
        # Within the rounding of what is printed, better and worse are the same.
        worth = signed(money.about_cell, point.worth)
        cells = [money.about_cell(point.spending_this_year), money.about_cell(point.steady)]
        cells.append(f"{worth}{BEST if best else ' '}")
        if breaks:
            cells.append("" if point.break_even_age is None else f"{point.break_even_age:.1f}")
        share = (point.worth - low) / (high - low) if high > low else 0.0
        table.add_row(
            Text(name, style="bold green" if best else ""),
            *(Text(cell, style="bold green" if best else "") for cell in cells),
            Text(bar(share, plain=plain), style="dim"),
        )
    text = wrapped(" ".join(curve.notes), width) if curve.notes else ""
    return Group(Text(curve.question, style="bold"), table, *([Text(text, style="dim")] if text else []))


# History -------------------------------------------------------------------------------------------


def sequence_table(sequences: Sequences, currency: str, width: int) -> Group:
    """Each strategy through every start year: worst and middle start named."""
    money = Money(currency)
    starts = sequences.results[0].starts
    table = _table(
        "strategy",
        "worst\nstart",
        "lowest\nyear",
        "years\ncut",
        "left",
        "middle\nstart",
        "lowest\nyear",
        "left",
        "starts\ncut",
        max_width=24,
    )
    for number, result in enumerate(sequences.results):
        worst, middle = int(result.order[0]), int(result.order[len(starts) // 2])
        table.add_row(
            Text(result.name, style="bold" if number == 0 else ""),
            str(starts[worst]),
            money.about_cell(float(result.lowest[worst])),
            f"{result.years_below[worst]:.0f}",
            money.about_cell(float(result.left[worst])),
            str(starts[middle]),
            money.about_cell(float(result.lowest[middle])),
            money.about_cell(float(result.left[middle])),
            percent(float((result.years_below > 0).mean()), 0),
        )
    plan = sequences.results[0]
    text = (
        f"Every start year from {starts[0]} to {starts[-1]}, {sequences.years} years each, everybody alive "
        f"throughout. The plan's worst start is {starts[int(plan.order[0])]}: "
        f"{_sequence_words(plan, 0, money)}; the middle one {starts[int(plan.order[len(starts) // 2])]}: "
        f"{_sequence_words(plan, len(starts) // 2, money)}. 'lowest year': least spending of a year, at an "
        "unchanged need; 'starts cut': share of start years in which bills are cut in some year. The plan "
        "was made on the workbook's expectations and does not know the history."
    )
    return Group(Text("Markets as they were", style="bold"), table, Text(), Text(wrapped(text, width)))


def _sequence_words(result: SequenceResult, rank: int, money: Money) -> str:
    start = int(result.order[rank])
    years = int(np.rint(result.years_below[start]))
    cut = f"bills cut in {years} year{'s' * (years != 1)}" if years else "bills never cut"
    return f"at the least {money.about(float(result.lowest[start]))} a year, {cut}"


# Ladders -------------------------------------------------------------------------------------------


def risk_table(rungs: Sequence[Rung], household: Household, width: int) -> Group:
    """The plan for a ladder of risk aversion."""
    words = {0.8: "would take both gambles", 1.4: "the first only", 2.7: "the second only", 5.0: "neither"}
    table = _rungs(
        rungs,
        household,
        "how careful",
        lambda r: f"{r.value:g}: {words.get(r.value, '')}".rstrip(": "),
    )
    text = (
        "The gambles: a new job that doubles your income for life or cuts it by a third, at even odds; then "
        "the same with a cut by half (after yes) or by a fifth (after no) - Barsky, Juster, Kimball & "
        "Shapiro (1997), Quarterly Journal of Economics 112(2) 537-579. The numbers stand for the groups and "
        "are ours. " + gamble_words(household.preferences)
    )
    return Group(Text("How careful? Choose by looking", style="bold"), table, Text(), paragraph(text, width))


def legacy_table(rungs: Sequence[Rung], household: Household, width: int) -> Group:
    """The plan for a ladder of wishes to leave money."""
    money = Money(household.currency)
    table = _rungs(
        rungs, household, "wish to leave", lambda r: money.exact(r.value) if r.value else "nothing"
    )
    text = "What is left includes cash kept aside and is after heirs' tax; the home is not counted."
    return Group(
        Text("How much to leave? Choose by looking", style="bold"), table, Text(), paragraph(text, width)
    )


def _rungs(
    rungs: Sequence[Rung],
    household: Household,
    first: str,
    label: Callable[[Rung], str],
) -> Table:
    money = Money(household.currency)
    age = rungs[0].age
    table = _table(
        first,
        "this\nyear",
        f"at {age}\nbad case",
        f"at {age}\nmiddle",
        "bills\ncut",
        "left\nlow",
        "left\nmiddle",
    )
    table.add_column("hold", max_width=14)
    for rung in rungs:
        name = f"{label(rung)}{' (yours)' if rung.as_given else ''}"
        table.add_row(
            Text(name, style="bold" if rung.as_given else ""),
            money.about_cell(rung.spending_this_year),
            money.about_cell(rung.bad_case),
            money.about_cell(rung.middle_case),
            chance_text(rung.chance_below_essential),
            money.about_cell(rung.estate.p10),
            money.about_cell(rung.estate.p50),
            Text(rung.portfolio),
        )
    return table
