"""What a report is made of: headings, text, tables and charts, as data. No layout, no markup.

Sections return blocks; `pdf` draws them on paper. Texts are plain (never escaped or marked up),
so any other medium can print the same blocks.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal, TypeAlias

Tone = Literal["body", "lead", "strong", "note", "caution", "required"]


@dataclass(frozen=True, slots=True)
class Heading:
    """`level` 1 opens a numbered part and a bookmark, 2 a topic, 3 a small label over a text."""

    text: str
    level: Literal[1, 2, 3] = 2
    part: int | None = None


@dataclass(frozen=True, slots=True)
class Text:
    """One paragraph. ``required`` is the firm's own wording, printed exactly as typed."""

    text: str
    tone: Tone = "body"


@dataclass(frozen=True, slots=True)
class Bullets:
    """A list of short sentences."""

    items: tuple[str, ...]


@dataclass(frozen=True, slots=True)
class KeyFigure:
    """A figure printed large: what it is, the figure, and what it includes."""

    label: str
    value: str
    note: str


@dataclass(frozen=True, slots=True)
class KeyFigures:
    """One to three large figures side by side; the first is the largest."""

    figures: tuple[KeyFigure, ...]


@dataclass(frozen=True, slots=True)
class Facts:
    """Label and text, a fact a row."""

    rows: tuple[tuple[str, str], ...]


@dataclass(frozen=True, slots=True)
class BarRow:
    """A labelled amount; `share` of the longest bar in 0 ... 1, None for a line without a bar."""

    label: str
    amount: str
    share: float | None
    total: bool = False


@dataclass(frozen=True, slots=True)
class MoneyBars:
    """Amounts with a small bar each, and lines that add them up."""

    rows: tuple[BarRow, ...]


@dataclass(frozen=True, slots=True)
class Column:
    """A table column; neighbours with the same `group` share a header over theirs."""

    title: str
    align: Literal["left", "right"] = "right"
    group: str = ""


@dataclass(frozen=True, slots=True)
class Table:
    """Rows of text under column headers that repeat on every page.

    `strong` rows are printed bold; `wide` tables are laid on pages turned sideways; `blank`
    leaves tall rows with ruled cells, to be filled in by hand.
    """

    columns: tuple[Column, ...]
    rows: tuple[tuple[str, ...], ...]
    note: str = ""
    strong: tuple[int, ...] = ()
    wide: bool = False
    blank: bool = False


@dataclass(frozen=True, slots=True)
class TimeAxis:
    """Years of a chart with what is written under them: the people's ages."""

    years: tuple[int, ...]
    ages: tuple[str, ...]
    age_title: str


@dataclass(frozen=True, slots=True)
class FanChart:
    """Low, middle and high value over the years, and a line to compare with."""

    title: str
    unit: str
    axis: TimeAxis
    low: tuple[float, ...]
    middle: tuple[float, ...]
    high: tuple[float, ...]
    line: tuple[float, ...] | None = None
    line_label: str = ""


@dataclass(frozen=True, slots=True)
class LinesChart:
    """Up to three named series over the years (shorter than the axis where they end)."""

    title: str
    unit: str
    axis: TimeAxis
    series: tuple[tuple[str, tuple[float, ...]], ...]
    line: tuple[float, ...] | None = None
    line_label: str = ""


@dataclass(frozen=True, slots=True)
class StackChart:
    """Layers of money stacked year by year, from the bottom up."""

    title: str
    unit: str
    axis: TimeAxis
    layers: tuple[tuple[str, tuple[float, ...]], ...]


@dataclass(frozen=True, slots=True)
class CostChart:
    """Horizontal bars by name: value and the figure printed at the bar's end."""

    title: str
    unit: str
    bars: tuple[tuple[str, float, str], ...]


Chart: TypeAlias = FanChart | LinesChart | StackChart | CostChart


@dataclass(frozen=True, slots=True)
class Signatures:
    """A statement and a line for each name and the date."""

    statement: str
    names: tuple[str, ...]


@dataclass(frozen=True, slots=True)
class Contents:
    """Where the parts of the report are; filled in by the medium that knows its pages."""


@dataclass(frozen=True, slots=True)
class NewPage:
    """What follows starts a page."""


@dataclass(frozen=True, slots=True)
class OnePage:
    """Blocks that must be read together: they fill one page and never flow onto a second."""

    blocks: tuple[Block, ...]


Block: TypeAlias = (
    Heading
    | Text
    | Bullets
    | KeyFigures
    | Facts
    | MoneyBars
    | Table
    | Chart
    | Signatures
    | Contents
    | NewPage
    | OnePage
)
