"""Strategies side by side in the terminal, and a changed client beside the original.

Functions return rich renderables. At 80 columns a strategy takes two lines, at 120 one.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass

from rich.console import Group, RenderableType
from rich.table import Table
from rich.text import Text

from planner import outcomes
from planner.banded import KeepWithinBand
from planner.plan_record import StrategyResult
from planner.reports.figures import MINUS, Money, percent
from planner.reports.terminal import wrapped

BEST = "*"
"""Marks the best figure of a column, beside its colour: readable without colour too."""

WIDE = 112
"""From this width on a strategy takes one line, with every column."""

BAR_WIDTH = 6
FOUR_PERCENT = "constant-real"
"""The rule that clients have read about: the reading under the table starts with it."""

LaterAges = Sequence[tuple[int, int]]
"""Ages of the first person to show spending at, each with its year t."""

_BECAUSE = {
    outcomes.BILLS: "because bills have to be cut in {futures} of 100 futures (the plan: {plan})",
    outcomes.TOO_LITTLE_EARLY: "because it spends less in the first ten years than the plan does",
    outcomes.TOO_LITTLE_LATE: "because it leaves less to spend later than the plan does",
    outcomes.LEAVES_LESS: "because it leaves less to the family",
}


@dataclass(frozen=True, slots=True)
class _Column:
    """One measure: two header lines, its value, how it reads, and whether small or large is best."""

    header: str
    value: Callable[[StrategyResult], float | None]
    text: Callable[[Money, float], str]
    best: Callable[[Sequence[float]], float] | None


def _about(money: Money, value: float) -> str:
    return money.about_cell(value)


def chance_text(value: float) -> str:
    """A chance to a tenth of a per cent; never 0 where it happened."""
    if 0 < value < 0.0005:
        return "<0.1%"
    return f"{value:.1%}"


_COLUMNS = (
    _Column("this\nyear", lambda s: s.spending_this_year, _about, None),
    _Column("worth a\nsteady", lambda s: s.level_spending, _about, max),
    _Column("costs\nyou", lambda s: s.wealth_cost, lambda m, v: "0" if v == 0 else _about(m, v), min),
    _Column("bills\ncut", lambda s: s.chance_below_essential, lambda _, v: chance_text(v), min),
    _Column("for\nyears", lambda s: s.years_below_essential, lambda _, v: f"{v:.1f}" if v else MINUS, min),
    _Column("worst\ncut", lambda s: s.largest_yearly_cut, lambda _, v: percent(v, 0), min),
    _Column("left\nmiddle", lambda s: s.estate.p50, _about, None),
)


def bar(share: float, width: int = BAR_WIDTH, plain: bool = False) -> str:
    """A bar of `share` (0 to 1) of `width` characters, in eighths; whole signs # where `plain`."""
    share = min(max(share, 0.0), 1.0)
    if plain:
        return "#" * round(share * width)
    eighths = round(share * width * 8)
    full, rest = divmod(eighths, 8)
    return "█" * full + ("▏▎▍▌▋▊▉"[rest - 1] if rest else "")


def comparison(
    strategies: Sequence[StrategyResult],
    currency: str,
    wealth: float,
    width: int,
    later: LaterAges = (),
    whose: str = "",
    plain: bool = False,
) -> Group:
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
    later, whose
        Ages at which low, middle and high spending is shown, and the person they are of.
    plain
        Bars of plain signs, for an output that cannot show block characters.

    Returns
    -------
    Group
        Renderable; at most `width` wide where that is 80 or more.
    """
    money = Money(currency)
    wide = width >= WIDE
    columns = [
        column for column in _COLUMNS if any(column.value(result) is not None for result in strategies)
    ]
    table = Table(box=None, padding=(0, 1, 0, 0), header_style="bold", collapse_padding=True)
    table.add_column("strategy", vertical="top", min_width=20 if wide else 16, max_width=22 if wide else 24)
    bar_width = 4 if wide else BAR_WIDTH
    for number, column in enumerate(columns):
        table.add_column(column.header, justify="right", no_wrap=True)
        if number == 0 and wide:
            for age, _ in later:
                words = "thousands at" if age == later[0][0] else "at"
                table.add_column(f"{words} {age}\nlow mid high", justify="right", no_wrap=True)
        if column.header.startswith("costs"):
            table.add_column("", no_wrap=True, min_width=bar_width)
    best = {id(column): _best_text(column, strategies, money) for column in columns}
    dearest = max((result.wealth_cost for result in strategies), default=0.0)
    for number, result in enumerate(strategies):
        cells: list[RenderableType] = [Text(result.name, style="bold" if number == 0 else "")]
        for place, column in enumerate(columns):
            value = column.value(result)
            shown = "" if value is None else column.text(money, value)
            is_best = value is not None and len(strategies) > 1 and shown == best[id(column)]
            cells.append(Text(f"{shown}{BEST if is_best else ' '}", style="bold green" if is_best else ""))
            if place == 0 and wide:
                cells += [Text(_thousands(result, t)) for _, t in later]
            if column.header.startswith("costs"):
                share = result.wealth_cost / dearest if dearest > 0 else 0.0
                cells.append(Text(bar(share, bar_width, plain), style="dim"))
        table.add_row(*cells)
    blocks: list[RenderableType] = [table]
    if later and not wide:
        blocks += [Text(), _spending_later(strategies, later, whose, plain)]
    years = f" at {whose}'s age then" if whose and later else ""
    notes = (
        f"In today's {currency}; spending is after tax, low, middle and high over the futures in which "
        f"someone is alive{years}. {BEST} best in its column, where more or less is plainly better. 'bills "
        "cut': in how many futures spending falls below your bills (essential spending) in some year, and "
        "for how many years where it does; 'worst cut': the largest yearly fall of spending, middle future; "
        "'left': at the last death."
    )
    blocks += [
        Text(),
        Text(wrapped(reading(strategies, money, wealth), width)),
        Text(wrapped(notes, width), style="dim"),
    ]
    return Group(*blocks)


def _thousands(result: StrategyResult, t: int) -> str:
    low, middle, high = (f"{value / 1000:,.0f}" for value in result.spending[:, t])
    return f"{low:>3} {middle:>3} {high:>4}"


def _spending_later(strategies: Sequence[StrategyResult], later: LaterAges, whose: str, plain: bool) -> Table:
    """Low, middle and high spending at later ages, in thousands, with a bar for the middle one."""
    table = Table(box=None, padding=(0, 1, 0, 0), header_style="bold")
    owner = f"{whose} at " if whose else "at "
    table.add_column("spending later, thousands", max_width=26)
    for number, (age, _) in enumerate(later):
        table.add_column(
            f"{owner if number == 0 else 'at '}{age}\nlow  mid  high", justify="right", no_wrap=True
        )
    table.add_column(f"middle at {later[-1][0]}", no_wrap=True, min_width=BAR_WIDTH)
    last = later[-1][1]
    most = max(float(result.spending[1, last]) for result in strategies)
    best = {t: [max(float(r.spending[i, t]) for r in strategies) for i in range(3)] for _, t in later}
    for number, result in enumerate(strategies):
        cells: list[RenderableType] = [Text(result.name, style="bold" if number == 0 else "")]
        for _, t in later:
            text = Text()
            for i in range(3):
                shown = f"{result.spending[i, t] / 1000:,.0f}"
                is_best = len(strategies) > 1 and shown == f"{best[t][i] / 1000:,.0f}"
                text.append(f"{shown:>4}{BEST if is_best else ' '}", style="bold green" if is_best else "")
            cells.append(text)
        share = float(result.spending[1, last]) / most if most > 0 else 0.0
        cells.append(Text(bar(share, plain=plain), style="dim"))
        table.add_row(*cells)
    return table


def _best_text(column: _Column, strategies: Sequence[StrategyResult], money: Money) -> str | None:
    values = [value for result in strategies if (value := column.value(result)) is not None]
    return column.text(money, column.best(values)) if column.best and values else None


def reading(strategies: Sequence[StrategyResult], money: Money, wealth: float) -> str:
    """Sentences on the table: what the plan spends, what the best-known and nearest rules cost."""
    plan = strategies[0]
    rules = [result for result in strategies[1:] if result.key != KeepWithinBand.key]
    start = f"The plan spends {money.about(plan.spending_this_year)} this year"
    if not rules:
        return f"{start}."
    cheap = min(rules, key=lambda result: result.wealth_cost)
    known = next((r for r in rules if r.key == FOUR_PERCENT), max(rules, key=lambda r: r.wealth_cost))
    text = f"{start}. {_cost_sentence(known, plan, money, wealth)}"
    if cheap is not known:
        text += f' The rule that comes nearest, "{cheap.name}", costs {_amount(cheap, money, wealth)}.'
    return text


def _cost_sentence(rule: StrategyResult, plan: StrategyResult, money: Money, wealth: float) -> str:
    name = rule.name[:1].upper() + rule.name[1:]
    if rule.wealth_cost < money.step / 2:
        return f'"{name}" would cost this client next to nothing.'
    because = _BECAUSE.get(rule.reason, "")
    if because:
        because = ", mostly " + because.format(
            futures=f"{100 * rule.chance_below_essential:.0f}",
            plan=f"{100 * plan.chance_below_essential:.0f}",
        )
    return (
        f'"{name}" would cost this client about as much as giving away {_amount(rule, money, wealth)} '
        f"today{because}."
    )


def _amount(result: StrategyResult, money: Money, wealth: float) -> str:
    if result.wealth_cost >= 0.999 * wealth > 0:
        return "all of the savings"
    share = f" ({percent(result.wealth_cost / wealth)} of savings)" if wealth > 0 else ""
    return f"{money.about(result.wealth_cost)}{share}"


def side_by_side(
    original: StrategyResult,
    changed: StrategyResult,
    currency: str,
    name: str,
    later: LaterAges = (),
    later_changed: LaterAges = (),
) -> Group:
    """The plan for the client as given beside the plan for the changed client.

    Parameters
    ----------
    original, changed
        The optimum for each.
    name
        What was changed, in words.
    later, later_changed
        Ages with their years in each plan (they differ where the plan date or a birth date does).
    """
    money = Money(currency)
    table = Table(box=None, padding=(0, 1), header_style="bold")
    table.add_column("the plan")
    for header in ("as given", "changed", "difference"):
        table.add_column(header, justify="right", no_wrap=True)

    def compare(label: str, old: float | None, new: float | None, text: Callable[[float], str]) -> None:
        if old is not None and new is not None:
            table.add_row(label, text(old), text(new), signed(text, new - old))
        elif old is not None or new is not None:
            table.add_row(label, *("" if v is None else text(v) for v in (old, new)), "")

    def row(
        label: str, value: Callable[[StrategyResult], float | None], text: Callable[[float], str]
    ) -> None:
        compare(label, value(original), value(changed), text)

    row("spending this year", lambda s: s.spending_this_year, money.about_cell)
    there = dict(later_changed)
    for age, t in later:
        if age in there:
            for i, which in ((1, "middle"), (0, "low")):
                old, new = float(original.spending[i, t]), float(changed.spending[i, there[age]])
                compare(f"spending at {age}, {which}", old, new, money.about_cell)
    row("worth a steady income of", lambda s: s.level_spending, money.about_cell)
    row("bills cut in some year", lambda s: s.chance_below_essential, chance_text)
    row("  for years, where bills are cut", lambda s: s.years_below_essential, lambda v: f"{v:.1f}")
    row("  short by a year, where bills are cut", lambda s: s.shortfall, money.about_cell)
    row("left at the last death, low", lambda s: s.estate.p10, money.about_cell)
    row("left at the last death, middle", lambda s: s.estate.p50, money.about_cell)
    row("tax over life", lambda s: s.tax_paid, money.about_cell)
    return Group(Text(f"What if: {name}", style="bold"), table)


def signed(text: Callable[[float], str], difference: float) -> str:
    """A difference with its sign, in the given way of writing amounts."""
    shown = text(abs(difference))
    if shown in (text(0.0), ""):
        return shown
    return f"{'+' if difference > 0 else '-'}{shown}"
