"""The fonts that reports embed, and text made safe to draw with them.

Noto Sans (SIL Open Font License 1.1) covers Latin, Greek and Cyrillic; DejaVu Sans (Bitstream
Vera licence) stands in for characters that it lacks. Both are shipped unmodified in
``planner/data/fonts`` with their licences.
"""

from __future__ import annotations

import io
import re
import unicodedata
from functools import cache
from importlib import resources
from itertools import groupby
from xml.sax.saxutils import escape

from reportlab.pdfbase import pdfmetrics
from reportlab.pdfbase.ttfonts import TTFont
from reportlab.pdfgen.canvas import Canvas

REGULAR = "NotoSans-Regular"
BOLD = "NotoSans-Bold"
FALLBACK = "DejaVuSans"
MISSING = "\N{WHITE SQUARE}"

_RIGHT_TO_LEFT = "\u0590-\u08ff\ufb1d-\ufdff\ufe70-\ufefe"
_RIGHT_TO_LEFT_RUN = re.compile(f"[{_RIGHT_TO_LEFT}](?:[{_RIGHT_TO_LEFT} '\"-]*[{_RIGHT_TO_LEFT}])?")


@cache
def register() -> None:
    """Register the fonts with reportlab, once."""
    folder = resources.files("planner") / "data" / "fonts"
    for name in (REGULAR, BOLD, FALLBACK):
        pdfmetrics.registerFont(TTFont(name, io.BytesIO((folder / f"{name}.ttf").read_bytes())))
    pdfmetrics.registerFontFamily(REGULAR, normal=REGULAR, bold=BOLD, italic=REGULAR, boldItalic=BOLD)


@cache
def _glyphs(font: str) -> frozenset[int]:
    register()
    return frozenset(pdfmetrics.getFont(font).face.charToGlyph)


def clean(text: str) -> str:
    """Text without invisible control characters, composed, right-to-left runs in drawing order.

    reportlab draws characters from left to right; a right-to-left name would appear backwards.
    Letters are not joined (Arabic is legible only roughly).
    """
    composed = unicodedata.normalize("NFC", text)
    visible = "".join(
        c for c in composed if c in "\n\t" or unicodedata.category(c) not in ("Cc", "Cf", "Cs", "Co")
    )
    return _RIGHT_TO_LEFT_RUN.sub(lambda found: found[0][::-1], visible)


def _font_for(character: str) -> str:
    code = ord(character)
    if code in _glyphs(REGULAR) or character in "\n\t":
        return REGULAR
    return FALLBACK if code in _glyphs(FALLBACK) else MISSING


def markup(text: str) -> str:
    """Plain text as reportlab paragraph markup: escaped, line ends kept, missing glyphs replaced."""
    pieces = []
    for font, characters in groupby(clean(text), _font_for):
        run = "".join(characters)
        if font == REGULAR:
            pieces.append(escape(run))
        else:
            drawn = run if font == FALLBACK else MISSING * len(run)
            pieces.append(f'<font name="{FALLBACK}">{escape(drawn)}</font>')
    joined = "".join(pieces).replace("\t", " ").replace("\r\n", "\n")
    joined = re.sub(r"(?<=\d) (?=%)", "\N{NO-BREAK SPACE}", joined)
    # A paragraph collapses runs of spaces; wording that must be as typed keeps them.
    return re.sub("  +", lambda found: "\N{NO-BREAK SPACE}" * (len(found[0]) - 1) + " ", joined).replace(
        "\n", "<br/>"
    )


def runs(text: str, font: str) -> tuple[tuple[str, str], ...]:
    """A single line as (font, characters): what `font` lacks is drawn in the fallback."""
    line = clean(text).replace("\n", " ").replace("\t", " ")
    found = []
    for source, characters in groupby(line, _font_for):
        run = "".join(characters)
        if source == REGULAR:
            found.append((font, run))
        else:
            found.append((FALLBACK, run if source == FALLBACK else MISSING * len(run)))
    return tuple(found)


def runs_width(text: str, font: str, size: float) -> float:
    """Width in points of a line as `draw_runs` draws it."""
    return sum(width(run, source, size) for source, run in runs(text, font))


def draw_runs(canvas: Canvas, x: float, y: float, text: str, font: str, size: float) -> None:
    """Draw a single line from `x`, each character in a font that has it."""
    for source, run in runs(text, font):
        canvas.setFont(source, size)
        canvas.drawString(x, y, run)
        x += width(run, source, size)


def plain(text: str) -> str:
    """Text for a single line in the regular or bold font; missing glyphs are marked."""
    return "".join(c if _font_for(c) == REGULAR else "?" for c in clean(text).replace("\n", " "))


def width(text: str, font: str, size: float) -> float:
    """Width of a line in points."""
    register()
    return float(pdfmetrics.stringWidth(text, font, size))


def fitted(text: str, font: str, size: float, available: float) -> str:
    """A line of text, cut with an ellipsis where it is wider than `available` points."""
    line = text
    if runs_width(line, font, size) <= available:
        return line
    while line and runs_width(line + "…", font, size) > available:
        line = line[:-1]
    return line.rstrip() + "…"
