"""Data tables on paper: column widths from their contents, headers that repeat, figures to the right."""

from __future__ import annotations

import math
from collections.abc import Sequence
from functools import cache
from typing import Any

from reportlab.lib.colors import Color
from reportlab.lib.enums import TA_CENTER, TA_RIGHT
from reportlab.lib.styles import ParagraphStyle
from reportlab.platypus import Flowable, Paragraph
from reportlab.platypus import Table as Grid

from planner.reports.blocks import Column, Table
from planner.reports.charts import ACCENT, INK, RULE, SOFT_INK
from planner.reports.fonts import BOLD, REGULAR, markup, plain, width

LARGEST = 9.5
SMALLEST = 5.0
_PADDING = 4.0
# Room that no column needs goes to text rather than between figures.
_TEXT_WEIGHT = 2.5


@cache
def _style(size: float, bold: bool, align: int, color: Color = INK) -> ParagraphStyle:
    return ParagraphStyle(
        f"cell{size}{bold}{align}",
        fontName=BOLD if bold else REGULAR,
        fontSize=size,
        leading=1.25 * size,
        textColor=color,
        alignment=align,
        splitLongWords=1,
        spaceShrinkage=0,
    )


class _Box(Flowable):  # type: ignore[misc]
    """An empty square to tick."""

    def __init__(self) -> None:
        super().__init__()
        self.width = self.height = 11.0

    def draw(self) -> None:
        """The square."""
        self.canv.setStrokeColor(INK)
        self.canv.setLineWidth(0.7)
        self.canv.rect(0, -1, 10, 10, stroke=1, fill=0)


def grid(table: Table, available: float) -> Grid:
    """The table as a reportlab Table exactly `available` points wide, in the largest type that fits."""
    size = _type_size(table, available)
    return _part(table, column_widths(table, available, size), size, range(len(table.rows)))


def pages(table: Table, available: float, height: float) -> list[Grid]:
    """A table of one-line rows as one `grid` a page, of about the same number of rows each.

    All parts have the same columns and type; `height` is what a page holds, in points.
    """
    size = _type_size(table, available)
    widths = column_widths(table, available, size)
    n_rows = len(table.rows)
    whole = _part(table, widths, size, range(n_rows))
    if n_rows == 0 or whole.wrap(available, height)[1] <= height:
        return [whole]
    header = _part(table, widths, size, range(0)).wrap(available, height)[1]
    row = (whole.wrap(available, height)[1] - header) / n_rows
    n_pages = math.ceil(n_rows / max(1, math.floor((height - header) / row)))
    each = math.ceil(n_rows / n_pages)
    return [
        _part(table, widths, size, range(start, min(start + each, n_rows)))
        for start in range(0, n_rows, each)
    ]


def _type_size(table: Table, available: float) -> float:
    size = LARGEST
    while size > SMALLEST and sum(_least_widths(table, size)) > available:
        size -= 0.25
    return size


def _part(table: Table, widths: Sequence[float], size: float, rows: range) -> Grid:
    """Header and some of the rows."""
    header = _header(table.columns, size)
    strong = tuple(i - rows.start for i in table.strong if i in rows)
    return Grid(
        [*header, *(_row(table, i, size) for i in rows)],
        colWidths=list(widths),
        hAlign="LEFT",
        repeatRows=len(header),
        splitInRow=1,
        style=_commands(table, len(header), size, strong),
    )


def _least_widths(table: Table, size: float) -> list[float]:
    """Least width of each column: its figures unbroken, its longest word (very long ones may break)."""
    widths = []
    for j, column in enumerate(table.columns):
        words = plain(column.title).split()
        least = max((min(width(w, BOLD, size), 12 * size) for w in words), default=0.0)
        for i, row in enumerate(table.rows):
            font = BOLD if i in table.strong else REGULAR
            if column.align == "right":
                least = max(least, width(plain(row[j]), font, size))
            else:
                least = max(
                    least, *(min(width(w, font, size), 12 * size) for w in plain(row[j]).split() or [""])
                )
        # A hair more, or rounding breaks a word that just fits.
        widths.append(least + 2 * _PADDING + 0.2)
    return widths


def column_widths(table: Table, available: float, size: float) -> list[float]:
    """Least widths, then room for text columns as their contents ask, then the rest shared out."""
    least = _least_widths(table, size)
    extra = available - sum(least)
    if extra <= 0:
        return [w * available / sum(least) for w in least]
    wished = []
    for j, column in enumerate(table.columns):
        texts = [plain(row[j]) for row in table.rows] if column.align == "left" else []
        natural = max((width(t, REGULAR, size) for t in (*texts, *_half(column.title))), default=0.0)
        wished.append(max(0.0, natural + 2 * _PADDING - least[j]))
    total = sum(wished)
    if total > extra:
        return [a + w * extra / total for a, w in zip(least, wished, strict=True)]
    weights = [_TEXT_WEIGHT if c.align == "left" else 1.0 for c in table.columns]
    unit = (extra - total) / sum(weights)
    return [a + w + unit * share for a, w, share in zip(least, wished, weights, strict=True)]


def _half(title: str) -> tuple[str, ...]:
    """A title broken into two lines, which is how wide a header wants to be."""
    words = plain(title).split()
    middle = (len(words) + 1) // 2
    return (" ".join(words[:middle]), " ".join(words[middle:]))


def _header(columns: Sequence[Column], size: float) -> list[list[Any]]:
    titles = [
        Paragraph(markup(c.title), _style(size, True, TA_RIGHT if c.align == "right" else 0, SOFT_INK))
        for c in columns
    ]
    if not any(c.group for c in columns):
        return [titles]
    groups: list[Any] = []
    for j, column in enumerate(columns):
        first = column.group and (j == 0 or columns[j - 1].group != column.group)
        groups.append(
            Paragraph(markup(column.group), _style(size, True, TA_CENTER, SOFT_INK)) if first else ""
        )
    return [groups, titles]


def _row(table: Table, i: int, size: float) -> list[Any]:
    bold = i in table.strong
    cells: list[Any] = []
    for j, (text, column) in enumerate(zip(table.rows[i], table.columns, strict=True)):
        if table.blank and j == len(table.columns) - 1 and not text:
            cells.append(_Box())
        elif column.align == "right":
            cells.append(plain(text))
        else:
            cells.append(Paragraph(markup(text), _style(size, bold, 0)))
    return cells


def _spans(columns: Sequence[Column]) -> list[tuple[int, int]]:
    """First and last column of each header group."""
    spans = []
    start = 0
    for j in range(1, len(columns) + 1):
        if j == len(columns) or columns[j].group != columns[start].group:
            if columns[start].group:
                spans.append((start, j - 1))
            start = j
    return spans


def _commands(table: Table, n_header: int, size: float, strong: Sequence[int]) -> list[tuple[Any, ...]]:
    tall = 4.5 if table.blank else 0.2 * size
    commands: list[tuple[Any, ...]] = [
        ("FONT", (0, n_header), (-1, -1), REGULAR, size, 1.25 * size),
        ("TEXTCOLOR", (0, 0), (-1, -1), INK),
        ("LEFTPADDING", (0, 0), (-1, -1), _PADDING),
        ("RIGHTPADDING", (0, 0), (-1, -1), _PADDING),
        ("TOPPADDING", (0, 0), (-1, -1), tall),
        ("BOTTOMPADDING", (0, 0), (-1, -1), tall + 1.0),
        ("LEFTPADDING", (0, 0), (0, -1), 0),
        ("RIGHTPADDING", (-1, 0), (-1, -1), 0),
        ("VALIGN", (0, n_header), (-1, -1), "TOP"),
        ("VALIGN", (0, 0), (-1, n_header - 1), "BOTTOM"),
        ("LINEBELOW", (0, n_header - 1), (-1, n_header - 1), 0.9, ACCENT),
        ("LINEBELOW", (0, n_header), (-1, -1), 0.35, RULE),
    ]
    for j, column in enumerate(table.columns):
        if column.align == "right":
            commands.append(("ALIGN", (j, n_header), (j, -1), "RIGHT"))
    if n_header == 2:
        for first, last in _spans(table.columns):
            commands += [("SPAN", (first, 0), (last, 0)), ("LINEBELOW", (first, 0), (last, 0), 0.4, SOFT_INK)]
    for i in strong:
        row = n_header + i
        commands += [
            ("FONT", (0, row), (-1, row), BOLD, size, 1.25 * size),
            ("LINEABOVE", (0, row), (-1, row), 0.6, SOFT_INK),
        ]
    return commands
