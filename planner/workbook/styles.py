"""Colours and page set-up shared by the guide page and the sheets.

Required and optional cells differ in frame and weight too, so that a black-and-white print shows it.
"""

from __future__ import annotations

from typing import Final

from openpyxl.styles import Border, Font, PatternFill, Side
from openpyxl.worksheet.properties import PageSetupProperties
from openpyxl.worksheet.worksheet import Worksheet

FONT_NAME: Final = "Calibri"  # also the default of new workbooks, which cells without a font have


def font(*, bold: bool = False, italic: bool = False, size: float = 11, color: str | None = None) -> Font:
    """Return a font of the workbook's one family."""
    return Font(name=FONT_NAME, bold=bold, italic=italic, size=size, color=color)


DARK: Final = "1F3A4D"
GREY: Final = "5B6770"
REQUIRED_FILL: Final = PatternFill("solid", fgColor="FFF3C4")
OPTIONAL_FILL: Final = PatternFill("solid", fgColor="F6F8FA")
REQUIRED_HEAD: Final = PatternFill("solid", fgColor=DARK)
OPTIONAL_HEAD: Final = PatternFill("solid", fgColor="DDE5EA")
NOTE_FONT: Final = font(italic=True, color=GREY, size=9)
WHITE_BOLD: Final = font(bold=True, color="FFFFFF")

_STRONG: Final = Side(style="thin", color="7A6A2A")
_FAINT: Final = Side(style="hair", color="8795A1")
REQUIRED_BORDER: Final = Border(left=_STRONG, right=_STRONG, top=_STRONG, bottom=_STRONG)
OPTIONAL_BORDER: Final = Border(left=_FAINT, right=_FAINT, top=_FAINT, bottom=_FAINT)
UNDERLINE: Final = Border(bottom=_FAINT)


def set_up_page(worksheet: Worksheet) -> None:
    """Landscape, one page wide, sheet name and page number at the foot; no grid lines on screen."""
    worksheet.sheet_view.showGridLines = False
    worksheet.page_setup.orientation = "landscape"
    worksheet.page_setup.fitToWidth, worksheet.page_setup.fitToHeight = 1, 0
    worksheet.sheet_properties.pageSetUpPr = PageSetupProperties(fitToPage=True)
    footer = worksheet.oddFooter
    if footer is not None:  # it is always there; its type allows for none
        footer.left.text, footer.right.text = "&A", "&P of &N"
