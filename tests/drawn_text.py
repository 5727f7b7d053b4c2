"""Where reportlab puts every piece of text: recorded while a PDF is drawn, not read back from it.

Reading back needs half a second a document and guesses widths; here each piece comes with its
font, size and place on the page as they were given to the canvas.
"""

from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass

import numpy as np
from reportlab.pdfbase import pdfmetrics
from reportlab.pdfgen.textobject import PDFTextObject

from planner.reports.pdf import MARGIN
from planner.reports.wording import DRAFT

ROUNDING = 0.6  # points: column widths are rounded to a tenth, and type may reach over its own width
FOOTER_LINES = (33.0, 23.0)
FRAME_FOOT, FRAME_HEAD = 54.0, 30.0


@dataclass(frozen=True, slots=True)
class Piece:
    """A run of text: its box on the page in points, from the foot of its baseline."""

    page: int
    page_size: tuple[float, float]
    text: str
    size: float
    left: float
    right: float
    baseline: float


class _Cursor:
    """Where a text object really is: its own cursor forgets what `_textOut` printed.

    `ahead` is the width printed since the start of the line, `drop` the height of the lines ended.
    """

    def __init__(self) -> None:
        self.place: tuple[float, float] | None = None
        self.ahead = self.drop = 0.0


@contextmanager
def recorded() -> Iterator[list[Piece]]:
    """Pieces of text that are drawn within the context."""
    pieces: list[Piece] = []
    cursors: dict[int, _Cursor] = {}
    kept_alive: list[PDFTextObject] = []  # an identity must not be used twice
    names = ("_formatText", "_textOut", "setTextOrigin", "textLine")
    original = [getattr(PDFTextObject, name) for name in names]

    def cursor_of(self: PDFTextObject) -> _Cursor:
        if id(self) not in cursors:
            cursors[id(self)] = _Cursor()
            kept_alive.append(self)
        return cursors[id(self)]

    def note(self: PDFTextObject, text: str | bytes) -> str:
        shown = text.decode("utf-8") if isinstance(text, bytes) else text
        cursor = cursor_of(self)
        if cursor.place != (self._x, self._y):
            cursor.place, cursor.ahead = (self._x, self._y), 0.0

        def wide(part: str) -> float:
            return float(pdfmetrics.stringWidth(part, self._fontname, self._fontsize))

        a, b, c, d, e, f = self._canvas._currentMatrix
        along, up = self._x + cursor.ahead, self._y - cursor.drop
        x, y = a * along + c * up + e, b * along + d * up + f
        if shown.strip():
            piece = Piece(
                page=self._canvas._pageNumber,
                page_size=self._canvas._pagesize,
                text=shown.strip(),
                size=a * self._fontsize,
                left=x + a * wide(shown[: len(shown) - len(shown.lstrip())]),
                right=x + a * wide(shown.rstrip()),
                baseline=y,
            )
            pieces.append(piece)
        cursor.ahead += wide(shown)
        return str(original[0](self, text))

    def text_out(self: PDFTextObject, text: str | bytes, TStar: int = 0) -> None:
        original[1](self, text, TStar)
        if TStar:
            cursor = cursor_of(self)
            cursor.ahead, cursor.drop = 0.0, cursor.drop + self._leading

    def set_text_origin(self: PDFTextObject, x: float, y: float) -> None:
        cursor_of(self).drop = 0.0
        original[2](self, x, y)

    def text_line(self: PDFTextObject, text: str = "") -> None:
        # It moves its cursor to the next line before it prints this one.
        cursor_of(self).drop -= self._leading
        original[3](self, text)
        cursor_of(self).drop += self._leading

    for name, patched in zip(names, (note, text_out, set_text_origin, text_line), strict=True):
        setattr(PDFTextObject, name, patched)
    try:
        yield pieces
    finally:
        for name, old in zip(names, original, strict=True):
            setattr(PDFTextObject, name, old)


def by_page(pieces: list[Piece]) -> dict[int, list[Piece]]:
    """Pieces of each page, in the order they were drawn."""
    pages: dict[int, list[Piece]] = {}
    for piece in pieces:
        pages.setdefault(piece.page, []).append(piece)
    return pages


def overprinted(pieces: list[Piece], slack: float = 1.0) -> list[tuple[str, str]]:
    """Pairs of pieces of one page whose boxes meet by more than `slack` points each way.

    A box goes from the baseline to 0.7 of the type size, about the height of capitals.
    """
    left, right = np.array([p.left for p in pieces]), np.array([p.right for p in pieces])
    foot = np.array([p.baseline for p in pieces])
    head = foot + 0.7 * np.array([p.size for p in pieces])
    wide = np.minimum(right[:, None], right) - np.maximum(left[:, None], left)
    tall = np.minimum(head[:, None], head) - np.maximum(foot[:, None], foot)
    meets = np.triu((wide > slack) & (tall > slack), k=1)
    return [(pieces[i].text, pieces[j].text) for i, j in np.argwhere(meets)]


def outside(pieces: list[Piece]) -> list[tuple[int, str]]:
    """Pieces that leave the margins at any side, footers and draft mark aside."""
    found = []
    for piece in pieces:
        wide, tall = piece.page_size
        sideways = piece.left < MARGIN - ROUNDING or piece.right > wide - MARGIN + ROUNDING
        furniture = piece.baseline in FOOTER_LINES or piece.text == DRAFT
        upright = furniture or FRAME_FOOT <= piece.baseline <= tall - FRAME_HEAD
        if sideways or not upright:
            found.append((piece.page, piece.text))
    return found
