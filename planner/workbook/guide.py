"""The guide page inside the workbook, made from the layout."""

from __future__ import annotations

from typing import Final

from openpyxl.styles import Alignment
from openpyxl.worksheet.worksheet import Worksheet

from planner.workbook.fields import Field, Form, Sheet
from planner.workbook.layout import SHEETS, shown_choices
from planner.workbook.styles import DARK, GREY, REQUIRED_HEAD, UNDERLINE, WHITE_BOLD, font, set_up_page

_STEPS: Final = (
    "Fill in the sheets with a gold tab: Household, People, Accounts, Spending, Markets and Portfolios. "
    "Then Income, and whatever else applies; every other sheet may stay blank.",
    "Cells with a solid frame and a yellow ground are required; cells with a dotted frame may stay blank, "
    "and the note beside or above them says what a blank means.",
    "Money is a plain number or text such as $1,250,000. A share or rate is 3.5% or 0.035, never 3.5. "
    "Dates are dates, or 2026-01-31. Ages are 66, or 66y8m.",
    "Today's money means: what it would cost at today's prices. Amounts in the plan are in today's money.",
    "Rows may be added, columns put in another order, and a column 'Notes' added anywhere. "
    "Keep the words of labels and headers.",
    "Save, then run: planner check CLIENT.xlsx. It lists every problem with its cell. The workbook is "
    "never written to.",
)


def write_guide(worksheet: Worksheet, remark: str) -> None:
    """Write how to fill in the workbook, and every field with its meaning."""
    for letter, width in zip("ABCDE", (30, 40, 12, 70, 44), strict=True):
        worksheet.column_dimensions[letter].width = width
    worksheet.cell(1, 1, "Client workbook: how to fill it in").font = font(bold=True, size=16, color=DARK)
    row = 2
    if remark:
        cell = worksheet.cell(row, 1, remark)
        cell.font = font(bold=True, color="8A1C1C")
        row += 1
    row += 1
    for number, step in enumerate(_STEPS, start=1):
        worksheet.merge_cells(start_row=row, start_column=1, end_row=row, end_column=5)
        cell = worksheet.cell(row, 1, f"{number}.  {step}")
        cell.alignment = Alignment(wrap_text=True, vertical="top")
        worksheet.row_dimensions[row].height = 16 if len(step) < 150 else 31
        row += 1
    row += 1
    _line(worksheet, row, ("Sheet", "Field or column", "Required", "What it is", "If left blank"), head=True)
    worksheet.print_title_rows = f"{row}:{row}"
    for sheet in SHEETS:
        row = _sheet(worksheet, sheet, row + 1)
    set_up_page(worksheet)


def _sheet(worksheet: Worksheet, sheet: Sheet, row: int) -> int:
    worksheet.cell(row, 1, sheet.name).font = font(bold=True, size=12, color=DARK)
    worksheet.row_dimensions[row].height = 20
    worksheet.cell(row, 2, sheet.purpose).font = font(italic=True, color=GREY)
    for part in sheet.parts:
        for field in part.fields if isinstance(part, Form) else part.columns:
            row += 1
            kind = "form" if isinstance(part, Form) else "table"
            _line(worksheet, row, (f"{sheet.name} ({kind})", *_described(field)))
        if not isinstance(part, Form) and part.per_class is not None:
            row += 1
            words = (f"{sheet.name} (table)", "one column per asset class", "yes", part.per_class.note, "")
            _line(worksheet, row, words)
    return row + 1


def _described(field: Field) -> tuple[str, str, str, str]:
    choices = shown_choices(field)
    note = f"{field.note} One of: {' | '.join(choices)}." if choices else field.note
    blank = "" if field.required else field.default or field.blank_means
    return field.label, "yes" if field.required else "no", note, blank


def _line(worksheet: Worksheet, row: int, words: tuple[str, ...], *, head: bool = False) -> None:
    for column, text in enumerate(words, start=1):
        cell = worksheet.cell(row, column, text)
        cell.alignment = Alignment(wrap_text=True, vertical="top")
        cell.border = UNDERLINE
        if head:
            cell.font = WHITE_BOLD
            cell.fill = REQUIRED_HEAD
        elif column == 2:
            cell.font = font(bold=words[2] == "yes")
    longest = max(len(words[1]) / 40, len(words[3]) / 72, len(words[4]) / 44)
    worksheet.row_dimensions[row].height = 15 * (1 + int(longest))
