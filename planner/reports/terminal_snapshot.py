"""The numbers of a review meeting on one screen."""

from __future__ import annotations

import math
from collections.abc import Callable

from rich.console import Group, RenderableType
from rich.table import Table
from rich.text import Text

from planner.reports.figures import DASH, Money, of_futures, percent
from planner.reports.terminal import wrapped
from planner.reports.terminal_comparison import bar
from planner.snapshot import NEXT_WITHDRAWAL, ONE_OFF, Snapshot, WantedSpending


def snapshot_screen(shot: Snapshot, width: int, plain: bool = False) -> Group:
    """All numbers, grouped, in at most 80 columns."""
    household = shot.household
    cash = Money(household.currency)
    heading = (
        f"{household.client_name}, {household.plan_date.isoformat()}: savings {cash.about(shot.savings)}"
    )
    table = Table(box=None, show_header=False, padding=(0, 1, 0, 0))
    table.add_column(no_wrap=True)
    table.add_column(justify="right", no_wrap=True)
    table.add_column(no_wrap=True)

    def group(title: str) -> None:
        table.add_row(Text(title, style="bold"))

    def row(label: str, value: str, note: str = "") -> None:
        table.add_row(f"  {label}", value, Text(note, style="dim"))

    group("Bills paid by lifelong income, after tax")
    for covered in shot.covered:
        row(covered.who, percent(covered.share, 0), bar(covered.share, 10, plain))
    if shot.wanted is not None:
        group(f"If exactly {cash.about(shot.wanted.wanted)} a year is spent")
        _wanted(shot.wanted, row)
    group("What the plan bears")
    now = shot.now
    row("the plan spends this year", cash.exact_cell(now.spending))
    fall = "any" if shot.fall_before_cut >= 1 else percent(shot.fall_before_cut)
    row("fall of savings before bills must be cut", fall)
    row(f"{cash.about(ONE_OFF)} spent now costs a year, for life", cash.exact_cell(shot.one_off_a_year))
    row("  and off this year's spending", cash.exact_cell(shot.one_off_this_year))
    group("Tax this year")
    row("share of income and withdrawals", percent(shot.tax_share), cash.exact(now.tax))
    row(f"on the next {cash.exact(NEXT_WITHDRAWAL)} withdrawn", percent(shot.next_rate))
    room = now.room_to_next_threshold
    row("room to the next threshold", cash.exact_cell(room) if math.isfinite(room) else "no more")
    due = [account for account in now.accounts if account.minimum_distribution > 0]
    group("Still to be taken this year at the least")
    for account in due:
        row(
            account.account,
            cash.exact_cell(account.still_due),
            f"of {cash.exact(account.minimum_distribution)}",
        )
    if not due:
        row("nothing", DASH)
    if shot.survivors:
        group("Income if death came today, after tax")
        for survivor in shot.survivors:
            note = f"bills {cash.exact_cell(survivor.essential)}"
            row(f"{survivor.name} alone", cash.exact_cell(survivor.after_tax), note)
    if shot.family:
        group("Left for the family: middle, low to high")
        whose = f"{household.people[0].name} at" if household.is_couple else "at"
        for age, left in shot.family:
            row(
                f"{whose} {age}",
                cash.about_cell(left.p50),
                f"{cash.about_cell(left.p10)} to {cash.about_cell(left.p90)}",
            )
    group("Costs this year")
    for name, cost in shot.costs:
        row(name, cash.exact_cell(cost))
    if not shot.costs:
        row("none given", DASH)
    blocks: list[RenderableType] = [Text(heading, style="bold"), table]
    note = (
        f"In today's {household.currency}. The fall is of all savings, today, until the plan would spend "
        f"less than the bills this year. Incomes if death came today: those paid this year, without "
        f"one-offs. Left for the family: savings after heirs' tax, over the futures in which someone is "
        f"alive at that age."
    )
    blocks.append(Text(wrapped(note, width), style="dim"))
    return Group(*blocks)


def _wanted(wanted: WantedSpending, row: Callable[..., None]) -> None:
    row(
        "lasts in the middle of markets, living on",
        "for life" if wanted.age_middle is None else f"to {wanted.age_middle}",
    )
    row("in one of ten markets only", "for life" if wanted.age_low is None else f"to {wanted.age_low}")
    row("paid as long as anyone lives, futures", of_futures(wanted.paid_for_life))
    needed = "none" if wanted.needed_return is None else percent(wanted.needed_return)
    held = f"held: {percent(wanted.held_return)} expected"
    row(f"return a year after fees it needs, to {wanted.lasts_to}", needed, held)
