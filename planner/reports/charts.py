"""Vector drawings of the chart blocks: legible in grey, labelled directly, units on the axes."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from functools import singledispatch

from reportlab.graphics.shapes import Circle, Drawing, Line, Polygon, PolyLine, Rect, String
from reportlab.lib.colors import Color, HexColor

from planner.reports.blocks import Chart, CostChart, FanChart, LinesChart, StackChart, TimeAxis
from planner.reports.figures import MINUS
from planner.reports.fonts import BOLD, REGULAR, fitted, register, runs, runs_width, width

ACCENT = HexColor("#0B4F6C")
INK = HexColor("#1A1A1A")
SOFT_INK = HexColor("#5A5A5A")
RULE = HexColor("#D5D5D5")
BAND = HexColor("#E3E6E8")
# Light to dark in even steps, so that layers stay apart on a black-and-white printer.
LAYERS = (ACCENT, HexColor("#6F8FA0"), HexColor("#B4B9BC"), HexColor("#E4E6E8"))

_LABEL = 8.0
_TITLE = 10.0
_HEIGHT = 205.0
_RIGHT = 104.0
_TOP = 34.0
_BOTTOM = 36.0


def draw(chart: Chart, available: float) -> Drawing:
    """Draw a chart `available` points wide; a reportlab Drawing."""
    register()
    return _draw(chart, available)


@singledispatch
def _draw(chart: Chart, available: float) -> Drawing:
    raise TypeError(f"no drawing for {type(chart).__name__}")


@dataclass(frozen=True, slots=True)
class _Scale:
    """Plot area in points and the money at its top."""

    left: float
    right: float
    bottom: float
    top: float
    highest: float
    lowest: float
    n_years: int
    inset: float = 0.0

    def x(self, year: float) -> float:
        """Place of a year counted from the first."""
        room = self.right - self.left - 2 * self.inset
        return self.left + self.inset + room * (year / max(1, self.n_years - 1))

    def y(self, money: float) -> float:
        """Height of an amount."""
        share = (money - self.lowest) / (self.highest - self.lowest)
        return self.bottom + (self.top - self.bottom) * share


def ticks(lowest: float, highest: float, about: int = 5) -> tuple[float, ...]:
    """Round values (1, 2 or 5 times a power of ten) from at or below `lowest` to at or above `highest`."""
    span = max(highest - lowest, 1e-9)
    raw = span / about
    power = 10.0 ** math.floor(math.log10(raw))
    step = next(m * power for m in (1.0, 2.0, 2.5, 5.0, 10.0) if m * power >= raw * (1 - 1e-9))
    first, last = math.floor(lowest / step), math.ceil(highest / step - 1e-9)
    return tuple(step * k for k in range(first, max(last, first + 1) + 1))


def _money_label(value: float) -> str:
    text = f"{abs(value):,.0f}" if abs(value) >= 10 or value == int(value) else f"{abs(value):,.2f}"
    return f"{MINUS}{text}" if value < 0 and text != "0" else text


def _frame(
    title: str, unit: str, axis: TimeAxis, values: Sequence[float], available: float, bars: bool = False
) -> tuple[Drawing, _Scale]:
    """Title, money axis with light rules, ages and years below."""
    drawing = Drawing(available, _HEIGHT)
    marks = ticks(min(0.0, *values), max(1.0, *values))
    left = max(width(_money_label(m), REGULAR, _LABEL) for m in marks) + 8
    left = max(left, 34.0)
    right = available - _RIGHT
    inset = (right - left) / (2 * len(axis.years)) if bars else 0.0
    scale = _Scale(left, right, _BOTTOM, _HEIGHT - _TOP, marks[-1], marks[0], len(axis.years), inset)
    _title(drawing, title, unit, _HEIGHT)
    for mark in marks:
        y = scale.y(mark)
        drawing.add(
            Line(scale.left, y, scale.right, y, strokeColor=RULE if mark else SOFT_INK, strokeWidth=0.5)
        )
        _text(drawing, scale.left - 5, y - 2.8, _money_label(mark), anchor="end", color=SOFT_INK)
    _years(drawing, axis, scale)
    return drawing, scale


def _title(drawing: Drawing, title: str, unit: str, height: float) -> None:
    _text(drawing, 0, height - 10, title, size=_TITLE, font=BOLD, color=INK)
    _text(drawing, 0, height - 21.5, unit, color=SOFT_INK)


def _years(drawing: Drawing, axis: TimeAxis, scale: _Scale) -> None:
    label_width = max(width(a, REGULAR, _LABEL) for a in (*axis.ages, "2026")) + 8
    step = next(
        (s for s in (1, 2, 5, 10, 20) if scale.x(s) - scale.x(0) >= label_width or s >= len(axis.years)), 20
    )
    if len(axis.years) > 12:
        step = max(step, 5)
    for t in range(0, len(axis.years), step):
        x = scale.x(t)
        drawing.add(Line(x, scale.bottom, x, scale.bottom - 3, strokeColor=SOFT_INK, strokeWidth=0.5))
        _text(drawing, x, scale.bottom - 13, axis.ages[t], anchor="middle", color=INK)
        _text(drawing, x, scale.bottom - 24, str(axis.years[t]), anchor="middle", color=SOFT_INK)
    # The last label may stand half outside the plot, so the axis titles start beyond it.
    after = max(scale.right, scale.x((len(axis.years) - 1) // step * step) + label_width / 2) + 6
    _text(drawing, after, scale.bottom - 13, axis.age_title, color=INK)
    _text(drawing, after, scale.bottom - 24, "year", color=SOFT_INK)


def _text(
    drawing: Drawing,
    x: float,
    y: float,
    text: str,
    anchor: str = "start",
    size: float = _LABEL,
    font: str = REGULAR,
    color: Color = INK,
) -> None:
    wide = runs_width(text, font, size)
    x -= {"start": 0.0, "middle": wide / 2, "end": wide}[anchor]
    for source, run in runs(text, font):
        drawing.add(String(x, y, run, fontName=source, fontSize=size, fillColor=color))
        x += width(run, source, size)


def _line(
    drawing: Drawing,
    scale: _Scale,
    values: Sequence[float],
    color: Color,
    stroke: float,
    dash: list[float] | None = None,
) -> None:
    points = [c for t, v in enumerate(values) for c in (scale.x(t), scale.y(v))]
    if len(values) == 1:
        points += [points[0] + 1, points[1]]
    drawing.add(
        PolyLine(points, strokeColor=color, strokeWidth=stroke, strokeDashArray=dash, strokeLineJoin=1)
    )


def spread(places: Sequence[float], apart: float, lowest: float, highest: float) -> tuple[float, ...]:
    """Places moved as little as keeps their order and a distance; within the limits if they fit."""
    order = sorted(range(len(places)), key=lambda i: places[i])
    moved = [0.0] * len(places)
    previous = lowest - apart
    for i in order:
        previous = moved[i] = max(places[i], previous + apart)
    upper = highest + apart
    for i in reversed(order):
        upper = moved[i] = min(moved[i], upper - apart)
    return tuple(moved)


def _end_labels(drawing: Drawing, scale: _Scale, labels: Sequence[tuple[str, float, Color, str]]) -> None:
    """Names right of the plot at the height where each series ends: (text, value, colour, font)."""
    ends = [scale.y(value) for _, value, _, _ in labels]
    places = spread(ends, 10.5, scale.bottom + 3, scale.top)
    for (text, _, color, font), end, y in zip(labels, ends, places, strict=True):
        _leader(drawing, scale.right, end, y)
        _text(
            drawing,
            scale.right + 11,
            y - 2.8,
            fitted(text, font, _LABEL, _RIGHT - 12),
            font=font,
            color=color,
        )


def _leader(drawing: Drawing, x: float, end: float, label: float) -> None:
    """A hairline from where something ends at the right of the plot to its label."""
    drawing.add(Line(x + 1.5, end, x + 9, label, strokeColor=SOFT_INK, strokeWidth=0.4))


@_draw.register
def _(chart: FanChart, available: float) -> Drawing:
    values = [*chart.low, *chart.high, *chart.middle, *(chart.line or ())]
    drawing, scale = _frame(chart.title, chart.unit, chart.axis, values, available)
    outline = [c for t, v in enumerate(chart.high) for c in (scale.x(t), scale.y(v))]
    for t in reversed(range(len(chart.low))):
        outline += [scale.x(t), scale.y(chart.low[t])]
    drawing.add(Polygon(outline, fillColor=BAND, strokeColor=None))
    _line(drawing, scale, chart.high, SOFT_INK, 0.6)
    _line(drawing, scale, chart.low, SOFT_INK, 0.6)
    _line(drawing, scale, chart.middle, ACCENT, 2.0)
    labels = [
        ("high: 1 in 10 above", chart.high[-1], SOFT_INK, REGULAR),
        ("middle", chart.middle[-1], ACCENT, BOLD),
        ("low: 1 in 10 below", chart.low[-1], SOFT_INK, REGULAR),
    ]
    if chart.line is not None:
        _line(drawing, scale, chart.line, INK, 1.1, [4, 2.5])
        labels.append((chart.line_label, chart.line[-1], INK, BOLD))
    _end_labels(drawing, scale, labels)
    return drawing


@_draw.register
def _(chart: LinesChart, available: float) -> Drawing:
    values = [v for _, series in chart.series for v in series] + list(chart.line or ())
    drawing, scale = _frame(chart.title, chart.unit, chart.axis, values or [0.0], available)
    styles: tuple[tuple[Color, float, list[float] | None], ...] = (
        (INK, 1.3, [6, 2.5]),
        (ACCENT, 2.0, None),
        (HexColor("#8A8A8A"), 1.6, None),
    )
    if len(chart.series) == 1:
        styles = styles[1:]
    labels = []
    if chart.line is not None:
        _line(drawing, scale, chart.line, INK, 1.0, [1, 2])
        labels.append((chart.line_label, chart.line[-1], INK, REGULAR))
    for (name, series), (color, stroke, dash) in zip(chart.series, styles, strict=False):
        if not series:
            continue
        _line(drawing, scale, series, color, stroke, dash)
        end = len(series) - 1
        if end < len(chart.axis.years) - 1:
            drawing.add(
                Rect(scale.x(end) - 2, scale.y(series[-1]) - 2, 4, 4, fillColor=color, strokeColor=None)
            )
        labels.append((name, series[-1], SOFT_INK if color is styles[-1][0] else color, BOLD))
    _end_labels(drawing, scale, labels)
    return drawing


@_draw.register
def _(chart: StackChart, available: float) -> Drawing:
    totals = [sum(values[t] for _, values in chart.layers) for t in range(len(chart.axis.years))]
    # Head room for names above the bars.
    drawing, scale = _frame(
        chart.title, chart.unit, chart.axis, [*totals, 1.12 * max(totals)], available, bars=True
    )
    n_years = len(chart.axis.years)
    bar = min(0.78 * 2 * scale.inset, 18.0)
    base = [0.0] * n_years
    for (_, values), color in zip(chart.layers, LAYERS, strict=False):
        for t, value in enumerate(values):
            if value <= 0:
                continue
            low, high = scale.y(base[t]), scale.y(base[t] + value)
            drawing.add(
                Rect(
                    scale.x(t) - bar / 2,
                    low,
                    bar,
                    high - low,
                    fillColor=color,
                    strokeColor=SOFT_INK,
                    strokeWidth=0.25,
                )
            )
            base[t] += value
    _layer_labels(drawing, scale, chart.layers, totals)
    return drawing


def _layer_labels(
    drawing: Drawing,
    scale: _Scale,
    layers: Sequence[tuple[str, tuple[float, ...]]],
    totals: Sequence[float],
) -> None:
    """Each layer's name at the right, on a line to its last bar; above the bars if it ends long before."""
    last = scale.n_years - 1
    base = [0.0] * scale.n_years
    at_right: list[tuple[str, float]] = []
    above: list[tuple[str, int, float]] = []
    for name, values in layers:
        if values[last] > 0.02 * totals[last]:
            at_right.append((name, scale.y(base[last] + values[last] / 2)))
        elif any(value > 0 for value in values):
            # The last year in which the layer is a good part of its largest.
            year = max(t for t, value in enumerate(values) if value >= 0.5 * max(values))
            above.append((name, year, scale.y(base[year] + values[year] / 2)))
        base = [b + v for b, v in zip(base, values, strict=True)]
    places = spread([y for _, y in at_right], 20.0, scale.bottom + 6, scale.top)
    for (name, end), y in zip(at_right, places, strict=True):
        _leader(drawing, scale.right, end, y)
        lines = _two_lines(name, _RIGHT - 12)
        for k, line in enumerate(lines):
            _text(drawing, scale.right + 11, y - 2.8 + 4.5 * (len(lines) - 1) - 9 * k, line)
    # Names above the bars start at their year, one line higher each, the earliest year lowest.
    for k, (name, year, middle) in enumerate(sorted(above, key=lambda label: label[1])):
        text = _above(scale, name, year)
        y = max(scale.y(total) for total in totals[text.first : text.last + 1]) + 6 + 10.0 * k
        drawing.add(Line(scale.x(year), middle, scale.x(year), y - 1.5, strokeColor=INK, strokeWidth=0.6))
        drawing.add(Circle(scale.x(year), middle, 1.3, fillColor=INK, strokeColor=None))
        _text(drawing, text.x, y, name)


@dataclass(frozen=True, slots=True)
class _Above:
    """Where a name above the bars starts, and the years that it covers."""

    x: float
    first: int
    last: int


def _above(scale: _Scale, name: str, year: int) -> _Above:
    """A name to the right of its year, or to the left where it would run out of the plot."""
    room = width(name, REGULAR, _LABEL)
    x = scale.x(year) - 2
    if x + room > scale.right:
        x = scale.x(year) + 2 - room
    step = max(scale.x(1) - scale.x(0), 1e-9)
    first = max(0, int((x - scale.x(0)) / step))
    return _Above(x, first, min(scale.n_years - 1, int((x + room - scale.x(0)) / step) + 1))


def _two_lines(text: str, available: float) -> tuple[str, ...]:
    """A label on one line, or broken at the space that fits best, the rest cut."""
    if width(text, REGULAR, _LABEL) <= available:
        return (text,)
    words = text.split(" ")
    for n in range(len(words) - 1, 0, -1):
        head = " ".join(words[:n])
        if width(head, REGULAR, _LABEL) <= available:
            return head, fitted(" ".join(words[n:]), REGULAR, _LABEL, available)
    return (fitted(text, REGULAR, _LABEL, available),)


@_draw.register
def _(chart: CostChart, available: float) -> Drawing:
    row = 19.0
    height = _TOP + row * len(chart.bars) + 4
    drawing = Drawing(available, height)
    _title(drawing, chart.title, chart.unit, height)
    label_room = min(0.4 * available, max(width(name, REGULAR, 9) for name, _, _ in chart.bars) + 8)
    value_room = max(width(text, BOLD, 9) for _, _, text in chart.bars) + 8
    longest = max(max(value for _, value, _ in chart.bars), 1e-9)
    room = available - label_room - value_room
    for i, (name, value, text) in enumerate(chart.bars):
        y = height - _TOP - row * (i + 1) + 5
        _text(drawing, 0, y + 2, fitted(name, REGULAR, 9, label_room - 6), size=9)
        drawing.add(
            Rect(
                label_room, y - 1, max(0.75, room * value / longest), 11.5, fillColor=ACCENT, strokeColor=None
            )
        )
        _text(drawing, label_room + max(0.75, room * value / longest) + 5, y + 2, text, size=9, font=BOLD)
    drawing.add(Line(label_room, 2, label_room, height - _TOP, strokeColor=SOFT_INK, strokeWidth=0.5))
    return drawing
