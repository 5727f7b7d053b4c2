"""Blocks as reportlab flowables: paragraphs, tables, headings with bookmarks, page furniture."""

from __future__ import annotations

from collections.abc import Sequence
from functools import cache, singledispatch
from pathlib import Path
from typing import Any, TypeAlias

from reportlab.lib.colors import Color
from reportlab.lib.enums import TA_RIGHT
from reportlab.lib.styles import ParagraphStyle
from reportlab.lib.utils import ImageReader
from reportlab.platypus import (
    CondPageBreak,
    Flowable,
    Image,
    KeepInFrame,
    Paragraph,
    Spacer,
)
from reportlab.platypus import Table as Grid

from planner.diagnostics import PlannerError
from planner.reports.blocks import (
    Block,
    Bullets,
    Contents,
    CostChart,
    Facts,
    FanChart,
    Heading,
    KeyFigures,
    LinesChart,
    MoneyBars,
    Signatures,
    StackChart,
    Table,
    Text,
)
from planner.reports.charts import ACCENT, INK, RULE, SOFT_INK, draw
from planner.reports.fonts import BOLD, REGULAR, clean, markup, plain
from planner.reports.fonts import width as text_width
from planner.reports.tables import grid

BODY = 11.0
_KEPT: TypeAlias = Table | Facts | Bullets | FanChart | LinesChart | StackChart | CostChart | Signatures


@cache
def style(
    size: float,
    bold: bool = False,
    color: Color = INK,
    leading: float = 1.32,
    align: int = 0,
    before: float = 0.0,
    after: float = 0.0,
    indent: float = 0.0,
) -> ParagraphStyle:
    """Paragraph style; cached, because reportlab compares them by identity."""
    return ParagraphStyle(
        f"s{size}{bold}{align}{before}{after}{indent}",
        fontName=BOLD if bold else REGULAR,
        fontSize=size,
        leading=leading * size,
        textColor=color,
        alignment=align,
        spaceBefore=before,
        spaceAfter=after,
        leftIndent=indent,
        allowWidows=0,
        allowOrphans=0,
        splitLongWords=1,
        spaceShrinkage=0,  # a line never runs past its column
    )


def build_flowables(blocks: Sequence[Block], width: float) -> list[Any]:
    """Flowables of blocks that follow one another.

    No heading is left alone at the foot of a page; short tables and lists of facts stay whole, and
    a longer table has a few rows under its header before it breaks.
    """
    built = [_flowables(block, width) for block in blocks]
    flowables: list[Any] = []
    for i, block in enumerate(blocks):
        if isinstance(block, Heading | _KEPT):
            flowables.append(CondPageBreak(_needs(blocks[i:], built[i:], width)))
        flowables += built[i]
    return flowables


def _needs(blocks: Sequence[Block], built: Sequence[Sequence[Any]], width: float) -> float:
    """Points that the first of the blocks needs on its page, with what must not leave it."""
    total = 0.0
    for i, (block, flowables) in enumerate(zip(blocks, built, strict=True)):
        after = blocks[i + 1] if i + 1 < len(blocks) else None
        height = _height(flowables, width)
        if isinstance(block, Heading):
            total += height
        elif isinstance(block, Text) and height < _READ_ALONE and isinstance(after, _KEPT):
            # A short text between a heading and its table or chart stays with both.
            total += height
        elif isinstance(block, Facts) and isinstance(after, Signatures):
            total += height
        elif isinstance(block, FanChart | LinesChart | StackChart | CostChart):
            note = built[i + 1] if isinstance(after, Text) and after.tone == "note" else []
            return total + height + _height(note, width)
        elif isinstance(block, Table | Facts | Bullets):
            # A list to tick off is kept on one page if it can be.
            whole = 4 * _SHORT if not (isinstance(block, Table) and block.blank) else 6 * _SHORT
            return total + (height if height <= whole else _SHORT)
        else:
            return total + (height if isinstance(block, Signatures) else min(height, _START))
    return total


# Points: what counts as short; text that may be parted from the table or chart it introduces; the
# least that follows a heading (two lines of text).
_SHORT = 100.0
_READ_ALONE = 150.0
_START = 40.0


def _height(flowables: Sequence[Any], width: float) -> float:
    """Height of flowables one under another; the space between two is the larger wish."""
    total = below = 0.0
    for flowable in flowables:
        total += max(below, flowable.getSpaceBefore()) + flowable.wrap(width, 1e6)[1]
        below = flowable.getSpaceAfter()
    return total + below


def one_page(blocks: Sequence[Block], width: float, height: float, logo: str) -> KeepInFrame:
    """Blocks shrunk onto one page if they are too tall for it."""
    content = build_flowables(blocks, width)
    content = [f for f in content if not isinstance(f, CondPageBreak)]
    picture = _logo(logo)
    if picture is not None:
        content.insert(0, picture)
    return KeepInFrame(width, height, content, mode="shrink")


def _logo(path: str) -> Image | None:
    """The firm's logo, at most 36 points high; None where reading the workbook found none to use."""
    if not path or not Path(path).is_absolute() or not Path(path).is_file():
        return None
    try:
        wide, tall = ImageReader(path).getSize()
        scale = min(36.0 / tall, 160.0 / wide)
        return Image(path, wide * scale, tall * scale, hAlign="RIGHT")
    except Exception as error:  # changed since the workbook was read; reportlab raises many kinds
        raise PlannerError(f"the logo file {path!r} is no picture that can be drawn: {error}") from error


@singledispatch
def _flowables(block: Block, width: float) -> list[Any]:
    raise TypeError(f"no layout for {type(block).__name__}")


class HeadingFlowable(Paragraph):  # type: ignore[misc]
    """A heading that bookmarks its place; level 1 and 2 stand in the outline."""

    def __init__(self, heading: Heading, look: ParagraphStyle) -> None:
        title = clean(heading.text)
        number = (
            ""
            if heading.part is None
            else f'<font color="{_hex(SOFT_INK)}">{heading.part}</font>&nbsp;&nbsp;'
        )
        super().__init__(number + markup(heading.text), look)
        self._level = heading.level
        self._part = heading.part
        self._outline = title if heading.part is None else f"{heading.part} {title}"

    def draw(self) -> None:
        """Draw, and mark the place."""
        if self._level < 3:
            _, top = self.canv.absolutePosition(0, self.height + 4)
            self.canv.note_heading(self._outline, self._level - 1, self._part, top)
        super().draw()


def _hex(color: Color) -> str:
    return f"#{color.hexval()[2:]}"


@_flowables.register
def _(block: Heading, width: float) -> list[Any]:
    look = {
        1: style(18, True, ACCENT, 1.25, before=22, after=6),
        2: style(12.5, True, INK, 1.3, before=10, after=4),
        3: style(BODY, True, SOFT_INK, 1.3, before=5, after=1),
    }[block.level]
    return [HeadingFlowable(block, look)]


class Caution(Flowable):  # type: ignore[misc]
    """A paragraph with a heavy line at its left edge."""

    def __init__(self, paragraph: Paragraph, color: Color) -> None:
        super().__init__()
        self.paragraph = paragraph
        self.color = color
        self.spaceBefore, self.spaceAfter = 4.0, 7.0

    def wrap(self, available_width: float, available_height: float) -> tuple[float, float]:
        """Size of the paragraph and its line."""
        wide, tall = self.paragraph.wrap(available_width - 10, available_height)
        self.width, self.height = wide + 10, tall
        return self.width, self.height

    def split(self, available_width: float, available_height: float) -> list[Any]:
        """Parts that each keep the line."""
        return [Caution(p, self.color) for p in self.paragraph.split(available_width - 10, available_height)]

    def draw(self) -> None:
        """Line and text."""
        self.canv.setFillColor(self.color)
        self.canv.rect(0, -1, 2.4, self.height + 1, stroke=0, fill=1)
        self.paragraph.drawOn(self.canv, 10, 0)


@_flowables.register
def _(block: Text, width: float) -> list[Any]:
    if block.tone == "caution":
        return [Caution(Paragraph(markup(block.text), style(BODY, True)), ACCENT)]
    if block.tone == "required":
        return [Caution(Paragraph(markup(block.text), style(BODY)), SOFT_INK)]
    looks = {
        "body": style(BODY, after=6),
        "lead": style(12, color=SOFT_INK, after=6),
        "strong": style(BODY, True, after=6),
        "note": style(9, color=SOFT_INK, leading=1.35, before=2, after=6),
    }
    return [Paragraph(markup(block.text), looks[block.tone])]


@_flowables.register
def _(block: Bullets, width: float) -> list[Any]:
    look = ParagraphStyle("bullet", parent=style(BODY, after=3), leftIndent=14, bulletIndent=2)
    return [Paragraph(markup(item), look, bulletText="•") for item in block.items]


@_flowables.register
def _(block: KeyFigures, width: float) -> list[Any]:
    """One row of boxes, the first wider and larger than the others."""
    n = len(block.figures)
    shares = {1: (1.0,), 2: (0.56, 0.44), 3: (0.42, 0.28, 0.3)}[n]
    cells = []
    for i, figure in enumerate(block.figures):
        large = 34.0 if i == 0 else 23.0
        room = shares[i] * width - 16
        size = large
        while size > 11 and text_width(plain(figure.value), BOLD, size) > room:
            size -= 1
        # The baselines of the figures line up whatever their sizes.
        look = ParagraphStyle(
            f"figure{size}",
            fontName=BOLD,
            fontSize=size,
            leading=size + 8,
            spaceBefore=34 - size,
            textColor=ACCENT if i == 0 else INK,
        )
        cells.append(
            [
                Paragraph(markup(figure.label), style(BODY, True, SOFT_INK)),
                Paragraph(markup(figure.value), look),
                Paragraph(markup(figure.note), style(9.5, color=SOFT_INK, leading=1.28)),
            ]
        )
    table = Grid(
        [cells],
        colWidths=[s * width for s in shares],
        hAlign="LEFT",
        style=[
            ("VALIGN", (0, 0), (-1, -1), "TOP"),
            ("LEFTPADDING", (0, 0), (0, -1), 0),
            ("LEFTPADDING", (1, 0), (-1, -1), 10),
            ("RIGHTPADDING", (0, 0), (-1, -1), 6),
            ("TOPPADDING", (0, 0), (-1, -1), 5),
            ("BOTTOMPADDING", (0, 0), (-1, -1), 6),
            ("LINEBEFORE", (1, 0), (-1, -1), 0.6, RULE),
            ("LINEABOVE", (0, 0), (-1, 0), 1.2, ACCENT),
            ("LINEBELOW", (0, -1), (-1, -1), 0.6, RULE),
        ],
    )
    return [table, Spacer(1, 5)]


@_flowables.register
def _(block: Facts, width: float) -> list[Any]:
    label = style(BODY, True, SOFT_INK, 1.27)
    text = style(BODY, leading=1.27)
    rows = [[Paragraph(markup(a), label), Paragraph(markup(b), text)] for a, b in block.rows]
    if not rows:
        return []
    widest = max(text_width(plain(a), BOLD, BODY) for a, _ in block.rows) + 14
    labels = min(max(widest, 0.2 * width), 0.42 * width)
    table = Grid(
        rows,
        colWidths=[labels, width - labels],
        splitInRow=1,
        hAlign="LEFT",
        style=[
            ("VALIGN", (0, 0), (-1, -1), "TOP"),
            ("LEFTPADDING", (0, 0), (-1, -1), 0),
            ("RIGHTPADDING", (0, 0), (0, -1), 8),
            ("RIGHTPADDING", (1, 0), (1, -1), 0),
            ("TOPPADDING", (0, 0), (-1, -1), 2),
            ("BOTTOMPADDING", (0, 0), (-1, -1), 3),
            ("LINEBELOW", (0, 0), (-1, -2), 0.4, RULE),
        ],
    )
    return [table, Spacer(1, 5)]


class _Bar(Flowable):  # type: ignore[misc]
    """A small horizontal bar in a table cell."""

    def __init__(self, share: float, room: float) -> None:
        super().__init__()
        self.width, self.height = room, 9.0
        self._share = share

    def draw(self) -> None:
        """A bar of at least a hairline."""
        self.canv.setFillColor(ACCENT)
        self.canv.rect(0, 0.5, max(0.8, self._share * self.width), 8, stroke=0, fill=1)


@_flowables.register
def _(block: MoneyBars, width: float) -> list[Any]:
    widths = [0.44 * width, 0.36 * width, 0.2 * width]
    rows, commands = [], []
    for i, row in enumerate(block.rows):
        look = style(BODY, row.total, leading=1.25)
        amount = ParagraphStyle("amount", parent=look, alignment=TA_RIGHT)
        bar = "" if row.share is None else _Bar(row.share, widths[1] - 12)
        rows.append([Paragraph(markup(row.label), look), bar, Paragraph(markup(row.amount), amount)])
        if row.total:
            commands.append(("LINEABOVE", (0, i), (-1, i), 0.7, SOFT_INK))
    table = Grid(
        rows,
        colWidths=widths,
        hAlign="LEFT",
        style=[
            ("VALIGN", (0, 0), (-1, -1), "MIDDLE"),
            ("LEFTPADDING", (0, 0), (0, -1), 0),
            ("RIGHTPADDING", (-1, 0), (-1, -1), 0),
            ("TOPPADDING", (0, 0), (-1, -1), 0.5),
            ("BOTTOMPADDING", (0, 0), (-1, -1), 1.5),
            *commands,
        ],
    )
    return [table, Spacer(1, 6)]


@_flowables.register
def _(block: Table, width: float) -> list[Any]:
    flowables = [grid(block, width)]
    if block.note:
        flowables.append(
            Paragraph(markup(block.note), style(9, color=SOFT_INK, leading=1.35, before=4, after=8))
        )
    else:
        flowables.append(Spacer(1, 8))
    return flowables


@_flowables.register
def _(block: FanChart | LinesChart | StackChart | CostChart, width: float) -> list[Any]:
    return [Spacer(1, 4), draw(block, width), Spacer(1, 8)]


@_flowables.register
def _(block: Signatures, width: float) -> list[Any]:
    """A ruled line for a signature and one for the date, names below."""
    small = style(9, color=SOFT_INK)
    rows: list[list[Any]] = []
    for name in block.names:
        rows.append([Paragraph(markup(name), small), "", Paragraph("date", small)])
    table = Grid(
        rows,
        colWidths=[0.6 * width, 0.06 * width, 0.34 * width],
        hAlign="LEFT",
        style=[
            ("VALIGN", (0, 0), (-1, -1), "TOP"),
            ("LEFTPADDING", (0, 0), (-1, -1), 0),
            ("TOPPADDING", (0, 0), (-1, -1), 2),
            # The room to sign in: the line is the upper edge of its row.
            ("BOTTOMPADDING", (0, 0), (-1, -1), 20),
            ("LINEABOVE", (0, 0), (0, -1), 0.6, INK),
            ("LINEABOVE", (2, 0), (2, -1), 0.6, INK),
        ],
    )
    return [Spacer(1, 8), Paragraph(markup(block.statement), style(BODY)), Spacer(1, 30), table]


class _ContentsFlowable(Flowable):  # type: ignore[misc]
    """Room for the contents; the canvas fills it in when all pages are known."""

    def __init__(self, width: float) -> None:
        super().__init__()
        self.width, self.height = width, 76.0

    def wrap(self, available_width: float, available_height: float) -> tuple[float, float]:
        """Fixed size."""
        return self.width, self.height

    def draw(self) -> None:
        """Remember the place on the page."""
        self.canv.note_contents(*self.canv.absolutePosition(0, 0), self.width, self.height)


@_flowables.register
def _(block: Contents, width: float) -> list[Any]:
    return [_ContentsFlowable(width)]


__all__ = ["BODY", "build_flowables", "one_page", "style"]
