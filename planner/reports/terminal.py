"""What the terminal shows: comparison of strategies, a changed client, shipped tables, a summary.

Functions return rich renderables; the command line prints them. Tables fit 80 columns, and show
more where the terminal is wider.
"""

from __future__ import annotations

import textwrap
from collections.abc import Callable, Sequence
from dataclasses import dataclass

from rich.console import Group, RenderableType
from rich.markup import escape
from rich.table import Table
from rich.text import Text

from planner.banded import KeepWithinBand
from planner.mortality import TableDescription
from planner.plan_record import Plan, StrategyResult
from planner.reports.figures import Money, percent
from planner.taxes import RulesDescription

BEST = "*"
"""Marks the best figure of a column, beside its colour: readable without colour too."""

WIDE = 112
"""From this width on a comparison shows every column."""


@dataclass(frozen=True, slots=True)
class _Column:
    """One measure: two header lines, its value, how it reads, and whether small or large is best."""

    header: str
    value: Callable[[StrategyResult], float | None]
    text: Callable[[Money, float], str]
    best: Callable[[Sequence[float]], float] | None
    wide_only: bool = False


def _about(money: Money, value: float) -> str:
    return money.about_cell(value)


def _chance(_: Money, value: float) -> str:
    if 0 < value < 0.0005:
        return "<0.1%"
    return f"{value:.1%}"


_COLUMNS = (
    _Column("this\nyear", lambda s: s.spending_this_year, _about, None),
    _Column("worth a\nsteady", lambda s: s.level_spending, _about, max),
    _Column("what it\ncosts you", lambda s: s.wealth_cost, lambda m, v: "0" if v == 0 else _about(m, v), min),
    _Column("bills\ncut", lambda s: s.chance_below_essential, _chance, min),
    _Column("years\ncut", lambda s: s.years_below_essential, lambda _, v: f"{v:.1f}", None, True),
    _Column("short by\na year", lambda s: s.shortfall, _about, None, True),
    _Column("largest\ncut", lambda s: s.largest_yearly_cut, lambda _, v: percent(v, 0), min, True),
    _Column("left\nlow", lambda s: s.estate.p10, _about, None, True),
    _Column("left\nmiddle", lambda s: s.estate.p50, _about, None),
    _Column("left\nhigh", lambda s: s.estate.p90, _about, None, True),
    _Column("tax over\nlife", lambda s: s.tax_paid, _about, None, True),
)


def comparison(strategies: Sequence[StrategyResult], currency: str, wealth: float, width: int) -> Group:
    """Strategies side by side, the optimum first, with a reading underneath.

    Parameters
    ----------
    strategies
        Results on the same drawn futures, the optimum first.
    currency
        ISO 4217.
    wealth
        Savings today, which costs are put in proportion to.
    width
        Of the terminal, in characters.

    Returns
    -------
    Group
        Renderable; at most `width` wide where that is 80 or more.
    """
    money = Money(currency)
    columns = [
        column
        for column in _COLUMNS
        if (width >= WIDE or not column.wide_only)
        and any(column.value(result) is not None for result in strategies)
    ]
    table = Table(box=None, padding=(0, 1), header_style="bold", collapse_padding=True)
    table.add_column("strategy", vertical="top", ratio=None, max_width=24 if width < WIDE else 34)
    for column in columns:
        table.add_column(column.header, justify="right", no_wrap=True)
    best = {id(column): _best_text(column, strategies, money) for column in columns}
    for number, result in enumerate(strategies):
        cells: list[RenderableType] = [Text(result.name, style="bold" if number == 0 else "")]
        for column in columns:
            value = column.value(result)
            shown = "" if value is None else column.text(money, value)
            is_best = value is not None and len(strategies) > 1 and shown == best[id(column)]
            cells.append(Text(f"{shown}{BEST if is_best else ' '}", style="bold green" if is_best else ""))
        table.add_row(*cells)
    notes = (
        f"In today's {currency}; spending is after tax. {BEST} best in its column, where more or less is "
        "plainly better. 'bills cut': in how many futures spending falls below your bills (essential "
        "spending) in some year. 'left': at the last death, in the middle future."
    )
    return Group(
        table,
        Text(),
        Text(_wrapped(reading(strategies, money, wealth), width)),
        Text(_wrapped(notes, width), style="dim"),
    )


def _best_text(column: _Column, strategies: Sequence[StrategyResult], money: Money) -> str | None:
    values = [value for result in strategies if (value := column.value(result)) is not None]
    return column.text(money, column.best(values)) if column.best and values else None


def reading(strategies: Sequence[StrategyResult], money: Money, wealth: float) -> str:
    """One sentence on the table: what the plan spends, what the cheapest and dearest rules cost."""
    plan = strategies[0]
    rules = [result for result in strategies[1:] if result.key != KeepWithinBand.key]
    start = f"The plan spends {money.about(plan.spending_this_year)} this year"
    if not rules:
        return f"{start}."
    cheap = min(rules, key=lambda result: result.wealth_cost)
    dear = max(rules, key=lambda result: result.wealth_cost)

    def cost(result: StrategyResult) -> str:
        if result.wealth_cost >= 0.999 * wealth > 0:
            return "all of your savings"
        share = f" ({percent(result.wealth_cost / wealth)} of savings)" if wealth > 0 else ""
        return f"{money.about(result.wealth_cost)}{share}"

    middle = f'the rule that comes nearest, "{cheap.name}", costs you {cost(cheap)}'
    if dear is cheap:
        return f"{start}; {middle}."
    return f'{start}; {middle}; the dearest, "{dear.name}", {cost(dear)}.'


def side_by_side(
    original: Sequence[StrategyResult],
    changed: Sequence[StrategyResult],
    currency: str,
    changes: Sequence[str],
) -> Group:
    """The plan for the client as given beside the plan for the changed client."""
    money = Money(currency)
    before, after = original[0], changed[0]
    table = Table(box=None, padding=(0, 1), header_style="bold")
    table.add_column("the plan")
    for header in ("as given", "changed", "difference"):
        table.add_column(header, justify="right", no_wrap=True)

    def row(
        label: str, value: Callable[[StrategyResult], float | None], text: Callable[[float], str]
    ) -> None:
        old, new = value(before), value(after)
        if old is not None and new is not None:
            table.add_row(label, text(old), text(new), _signed(text, new - old))
        elif old is not None or new is not None:
            table.add_row(label, *("" if v is None else text(v) for v in (old, new)), "")

    row("spending this year", lambda s: s.spending_this_year, money.about_cell)
    row("worth a steady income of", lambda s: s.level_spending, money.about_cell)
    row("bills cut in some year", lambda s: s.chance_below_essential, lambda v: _chance(money, v))
    row("short by a year, where bills are cut", lambda s: s.shortfall, money.about_cell)
    row("left at the last death, low", lambda s: s.estate.p10, money.about_cell)
    row("left at the last death, middle", lambda s: s.estate.p50, money.about_cell)
    row("tax over life", lambda s: s.tax_paid, money.about_cell)
    heading = Text(f"What if: {'; '.join(changes)}", style="bold")
    return Group(heading, table)


def _signed(text: Callable[[float], str], difference: float) -> str:
    shown = text(abs(difference))
    if shown in (text(0.0), ""):
        return shown
    return f"{'+' if difference > 0 else '-'}{shown}"


def shipped_tables(
    life_tables: Sequence[TableDescription], tax_rules: Sequence[RulesDescription], width: int
) -> Group:
    """Life tables and tax rules that come with the program, each with its source and year."""
    blocks: list[RenderableType] = [Text("Life tables", style="bold")]
    for table in life_tables:
        improvement = "with yearly improvement" if table.improvement else "no improvement of death rates"
        blocks.append(
            _entry(
                table.name,
                table.year,
                table.title,
                [
                    f"{table.publisher}. {table.source}",
                    f"Ages {table.ages[0]} to {table.ages[1]}; {improvement}.",
                ],
                width,
            )
        )
    blocks += [Text(), Text("Tax rules", style="bold")]
    for rules in tax_rules:
        couple = "couples taxed together" if rules.taxed == "together" else "each person taxed"
        lines = [f"{rules.publisher}. {rules.source}", f"{couple.capitalize()}. {rules.checked}".strip()]
        blocks.append(_entry(rules.name, rules.year, rules.title, [*lines, *rules.notes], width))
    return Group(*blocks)


def _entry(name: str, year: int, title: str, lines: Sequence[str], width: int) -> Text:
    text = Text(f"  {name}", style="cyan")
    dated = f"  ({year})" if year and str(year) not in title else ""
    text.append(_wrapped(f"{title}{dated}", width, "    ", newline=True), style="default")
    for line in lines:
        if line.strip(" ."):
            text.append(_wrapped(line.strip(), width, "    ", newline=True), style="dim")
    return text


def plan_summary(plan: Plan) -> Group:
    """Instructions for this year in a few lines, for the adviser who has just made the plan."""
    now, money = plan.this_year, Money(plan.household.currency)
    table = Table(box=None, show_header=False, padding=(0, 1))
    table.add_column()
    table.add_column(justify="right", no_wrap=True)
    table.add_row(Text("Spend this year, after tax", style="bold"), money.exact(now.spending))
    table.add_row("  income before tax", money.exact(now.income))
    for account in now.accounts:
        if account.withdraw > 0:
            table.add_row(escape(f"  from {account.account}"), money.exact(account.withdraw))
    if now.convert > 0:
        table.add_row("  moved from tax-deferred to tax-free", money.exact(now.convert))
    table.add_row("  less tax (check with a tax preparer)", money.exact(-now.tax))
    if now.kept > 0:
        table.add_row("  less cash kept in taxable", money.exact(-now.kept))
    table.add_row("Portfolio to hold", escape(now.portfolio))
    if plan.level_spending is not None:
        table.add_row("Worth a steady income of", money.about(plan.level_spending))
    if plan.proof is not None:
        table.add_row("From the best possible, at most", percent(plan.proof.gap_share, 2) + " of savings")
    bills = 1 - plan.strategies[0].chance_below_essential
    table.add_row("Futures tested in which bills are always paid", percent(bills))
    return Group(table)


def _wrapped(text: str, width: int, indent: str = "", newline: bool = False) -> str:
    filled = textwrap.fill(
        text, max(20, width), initial_indent=indent, subsequent_indent=indent, break_on_hyphens=False
    )
    return f"\n{filled}" if newline else filled
