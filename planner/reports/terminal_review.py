"""A review as a table and three sentences."""

from __future__ import annotations

from rich.console import Group
from rich.table import Table
from rich.text import Text

from planner.reports.figures import DASH, Money, percent
from planner.reports.terminal import wrapped
from planner.reports.terminal_comparison import signed
from planner.review import Review


def review_screen(found: Review, width: int) -> Group:
    """Last year's plan beside what happened, what moved the answer, and three sentences."""
    cash = Money(found.household.currency)
    table = Table(box=None, padding=(0, 1, 0, 0), header_style="bold")
    table.add_column("", no_wrap=True)
    for header in ("by last year's plan", "now"):
        table.add_column(header, justify="right", no_wrap=True)
    fan = found.fan
    table.add_row("savings, middle case", cash.about_cell(fan.p50), cash.about_cell(found.savings))
    table.add_row("  low and high case", f"{cash.about_cell(fan.p10)} to {cash.about_cell(fan.p90)}", "")
    table.add_row("  of 100 futures, worse than yours", "", f"{100 * found.percentile:.0f}")
    if found.band is not None:
        band = f"{cash.about_cell(found.band[0])} to {cash.about_cell(found.band[1])}"
        table.add_row("  no change between", band, "inside" if found.inside_band else "outside")
    spent = DASH if found.spent is None else cash.exact_cell(found.spent)
    table.add_row("spent last year, that year's money", cash.exact_cell(found.planned_spending), spent)
    table.add_row(
        "spending for the year, today's money",
        cash.exact_cell(found.spending_before),
        cash.exact_cell(found.spending_now),
    )
    table.add_row("portfolio", found.portfolio_before, found.portfolio_now)
    moves = Table(box=None, padding=(0, 1, 0, 0), header_style="bold")
    moves.add_column("what moved spending", no_wrap=True)
    moves.add_column("", justify="right", no_wrap=True)
    moves.add_row("last year's plan, with prices", cash.exact_cell(found.spending_before))
    for move in found.moves:
        moves.add_row(f"  {move.name}", signed(cash.exact_cell, move.amount))
    moves.add_row(
        Text("this year's plan", style="bold"), Text(cash.exact_cell(found.spending_now), style="bold")
    )
    note = (
        f"In {found.household.currency}; last year's figures carried to today's money at "
        f"{percent(found.price_factor - 1)} inflation, as the workbook expects. One-offs and money paid in "
        f"are taken as not in last year's plan."
    )
    return Group(
        Text(f"{found.household.client_name}: a year after {found.last.plan_date.isoformat()}", style="bold"),
        table,
        Text(),
        moves,
        Text(),
        Text(wrapped(sentences(found), width)),
        Text(wrapped(note, width), style="dim"),
    )


def sentences(found: Review) -> str:
    """Where we are, what to do, and why: three sentences."""
    cash = Money(found.household.currency)
    worse = f"{100 * found.percentile:.0f} of 100 futures tested last year were worse by now"
    first = f"Savings stand at {cash.about(found.savings)}: {worse}."
    change = found.spending_now - found.spending_before
    direction = "more" if change > 0 else "less"
    size = abs(change) / found.spending_before if found.spending_before else 0.0
    if found.inside_band and found.band is not None and size <= found.band[2]:
        second = (
            f"That is inside the band of no change: keep spending {cash.about(found.spending_before)} (last "
            f"year's amount with prices); the plan itself would say {cash.about(found.spending_now)}."
        )
    else:
        where = "inside" if found.inside_band else "outside"
        second = (
            f"That is {where} the band of no change, and the plan now says {cash.about(found.spending_now)} "
            f"for the year, {cash.about(abs(change))} ({percent(size)}) {direction} than last year's amount "
            f"with prices."
        )
    most = max(found.moves, key=lambda move: abs(move.amount))
    sign = "up" if most.amount > 0 else "down"
    third = (
        f"Most of what moved it: {most.name}, {sign} {cash.about(abs(most.amount))} a year."
        if abs(most.amount) >= 50
        else "Nothing moved it much."
    )
    return f"{first} {second} {third}"
