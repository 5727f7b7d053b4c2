"""Blocks as reportlab flowables: paragraphs, tables, headings with bookmarks, page furniture."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from functools import cache, singledispatch
from pathlib import Path
from typing import Any

from reportlab.lib.colors import Color
from reportlab.lib.enums import TA_RIGHT
from reportlab.lib.styles import ParagraphStyle
from reportlab.lib.utils import ImageReader
from reportlab.pdfgen.canvas import Canvas
from reportlab.platypus import (
    CondPageBreak,
    Flowable,
    Image,
    KeepInFrame,
    KeepTogether,
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
from planner.reports.fonts import BOLD, REGULAR, clean, fitted, markup, plain
from planner.reports.fonts import width as text_width
from planner.reports.tables import grid

BODY = 11.0
_FOOTER = 7.5


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
    """Flowables of blocks that follow one another, no heading left alone at the foot of a page."""
    flowables: list[Any] = []
    for i, block in enumerate(blocks):
        if isinstance(block, Heading):
            flowables.append(CondPageBreak(_needs(blocks[i:])))
        flowables += _flowables(block, width)
    return flowables


def _needs(blocks: Sequence[Block]) -> float:
    """Points that a heading needs below it: itself, following headings and the start of what follows."""
    total = 0.0
    for block in blocks:
        if isinstance(block, Heading):
            total += {1: 34.0, 2: 28.0, 3: 20.0}[block.level]
        elif isinstance(block, FanChart | LinesChart | StackChart):
            return total + 215
        elif isinstance(block, CostChart):
            return total + 45 + 19 * len(block.bars)
        elif isinstance(block, Table):
            # A list to tick off stays on one page; other tables may break after three rows.
            return total + 45 + min(20 if block.blank else 3, len(block.rows)) * 27
        elif isinstance(block, Facts):
            # Short lists of facts stay whole.
            return total + 24 * min(9, len(block.rows))
        elif isinstance(block, Signatures):
            return total + 110
        elif isinstance(block, Text):
            # A text between a heading and its table or chart stays with both.
            total += 8 + 16 * (1 + len(block.text) // 90)
            if total > 200:
                return total
        else:
            return total + 48
    return total


def one_page(blocks: Sequence[Block], width: float, height: float, logo: str) -> KeepInFrame:
    """Blocks shrunk onto one page if they are too tall for it."""
    content = build_flowables(blocks, width)
    content = [f for f in content if not isinstance(f, CondPageBreak)]
    picture = _logo(logo)
    if picture is not None:
        content.insert(0, picture)
    return KeepInFrame(width, height, content, mode="shrink")


def _logo(path: str) -> Image | None:
    """The firm's logo, at most 36 points high; None where there is no such file."""
    if not path or not Path(path).is_file():
        return None
    try:
        wide, tall = ImageReader(path).getSize()
        scale = min(36.0 / tall, 160.0 / wide)
        return Image(path, wide * scale, tall * scale, hAlign="RIGHT")
    except Exception as error:  # reportlab raises many kinds for a file that is no picture
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
    shares = {1: (1.0,), 2: (0.56, 0.44), 3: (0.44, 0.26, 0.3)}[n]
    cells = []
    for i, figure in enumerate(block.figures):
        large = 30.0 if i == 0 else 19.0
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
            spaceBefore=30 - size,
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
    return [
        KeepTogether([Spacer(1, 8), Paragraph(markup(block.statement), style(BODY)), Spacer(1, 30), table])
    ]


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


@dataclass(frozen=True, slots=True)
class Furniture:
    """What stands on every page. `parts` are the numbered titles for the contents."""

    margin: float
    first_line: tuple[str, ...]
    second_line: str
    draft: str
    parts: tuple[tuple[int, str], ...]


def _shortened(texts: Sequence[str], available: float) -> list[str]:
    """Texts that together fit on a footer line: the longest are cut, the others stay whole."""
    widths = [text_width(plain(t), REGULAR, _FOOTER) for t in texts]
    limit = max(widths)
    while sum(min(w, limit) for w in widths) > available:
        limit -= 1
    return [fitted(t, REGULAR, _FOOTER, limit) for t in texts]


class PageCanvas(Canvas):  # type: ignore[misc]
    """A canvas that draws footers and contents last, when the number of pages is known."""

    def __init__(self, furniture: Furniture, *args: object, **kwargs: object) -> None:
        super().__init__(*args, **kwargs)
        self._furniture = furniture
        self._pages: list[dict[str, Any]] = []
        self._part_pages: dict[int, int] = {}
        self._contents: tuple[int, float, float, float, float] | None = None
        self._headings: list[tuple[int, str, str, int, float]] = []

    def note_heading(self, title: str, level: int, part: int | None, top: float) -> None:
        """Remember a heading: a bookmark can only be set when its page is written."""
        key = f"place{len(self._headings)}" if part is None else f"part{part}"
        self._headings.append((self._pageNumber, key, title, level, top))
        if part is not None:
            self._part_pages[part] = self._pageNumber

    def note_contents(self, x: float, y: float, width: float, height: float) -> None:
        """Remember where the contents belong."""
        self._contents = (self._pageNumber, x, y, width, height)

    def showPage(self) -> None:
        """Keep the page back until `save`."""
        self._pages.append(dict(self.__dict__))
        self._startPage()

    def save(self) -> None:
        """Add footers and contents to every page, then write."""
        pages, parts, contents, headings = self._pages, self._part_pages, self._contents, self._headings
        for state in pages:
            self.__dict__.update(state)
            self._footer(len(pages))
            for page, key, title, level, top in headings:
                if page == self._pageNumber:
                    self.bookmarkHorizontal(key, 0, top)
                    self.addOutlineEntry(title, key, level, closed=level == 0)
            if contents is not None and contents[0] == self._pageNumber:
                self._draw_contents(contents[1:], parts)
            super().showPage()
        super().save()

    def _footer(self, n_pages: int) -> None:
        furniture = self._furniture
        left, right = furniture.margin, self._pagesize[0] - furniture.margin
        self.setStrokeColor(RULE)
        self.setLineWidth(0.5)
        self.line(left, 44, right, 44)
        self.setFillColor(SOFT_INK)
        self.setFont(REGULAR, _FOOTER)
        page = f"page {self._pageNumber} of {n_pages}"
        self.drawRightString(right, 33, page)
        line = "  ·  ".join(_shortened(furniture.first_line, right - left - 110))
        self.drawString(left, 33, line)
        self.drawString(left, 23, fitted(furniture.second_line, REGULAR, _FOOTER, right - left))
        if furniture.draft:
            top = self._pagesize[1]
            self.setFillColor(INK)
            self.rect(left, top - 36, right - left, 17, stroke=0, fill=1)
            self.setFillGray(1)
            self.setFont(BOLD, 10)
            self.drawCentredString((left + right) / 2, top - 31, furniture.draft)

    def _draw_contents(self, place: tuple[float, float, float, float], parts: dict[int, int]) -> None:
        """Two columns of part, title and page, each a link."""
        x, y, width, height = place
        self.setFont(BOLD, 9)
        self.setFillColor(SOFT_INK)
        self.drawString(x, y + height - 12, "In this plan, and its page")
        column = width / 2
        per_column = (len(self._furniture.parts) + 1) // 2
        for i, (part, title) in enumerate(self._furniture.parts):
            left = x + column * (i // per_column)
            line = y + height - 25 - 12 * (i % per_column)
            self.setFont(REGULAR, 9)
            self.setFillColor(INK)
            self.drawString(left, line, f"{part}")
            self.drawString(left + 16, line, fitted(title, REGULAR, 9, column - 56))
            self.drawRightString(left + column - 24, line, f"{parts.get(part, 0)}")
            self.linkRect(
                "", f"part{part}", (left, line - 3, left + column - 20, line + 9), relative=0, thickness=0
            )


__all__ = ["BODY", "Furniture", "PageCanvas", "build_flowables", "one_page", "style"]
