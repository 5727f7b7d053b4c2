"""What stands on every page: footers, draft mark, contents, bookmarks; drawn when all pages are known."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

from reportlab.pdfgen.canvas import Canvas

from planner.reports.charts import INK, RULE, SOFT_INK
from planner.reports.fonts import BOLD, REGULAR, draw_runs, fitted, runs_width
from planner.reports.fonts import width as text_width

_FOOTER = 7.5
_BETWEEN = "  ·  "


@dataclass(frozen=True, slots=True)
class Furniture:
    """What stands on every page. `parts` are the numbered titles for the contents."""

    margin: float
    first_line: tuple[str, ...]
    second_line: tuple[str, ...]
    draft: str
    parts: tuple[tuple[int, str], ...]


def _shortened(texts: Sequence[str], available: float) -> str:
    """Texts side by side that together fit on a footer line: the longest are cut, the others stay whole."""
    room = available - text_width(_BETWEEN, REGULAR, _FOOTER) * (len(texts) - 1)
    widths = [runs_width(t, REGULAR, _FOOTER) for t in texts]
    limit = max(widths)
    while sum(min(w, limit) for w in widths) > room:
        limit -= 1
    return _BETWEEN.join(fitted(t, REGULAR, _FOOTER, limit) for t in texts)


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
        draw_runs(self, left, 33, _shortened(furniture.first_line, right - left - 70), REGULAR, _FOOTER)
        draw_runs(self, left, 23, _shortened(furniture.second_line, right - left), REGULAR, _FOOTER)
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
