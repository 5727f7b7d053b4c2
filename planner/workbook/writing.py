"""Writing a workbook from the layout: blank, with its guide page, or filled in."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from datetime import date, datetime
from pathlib import Path
from typing import Final, TypeAlias

import openpyxl
from openpyxl.styles import Alignment
from openpyxl.utils import get_column_letter, quote_sheetname
from openpyxl.workbook import Workbook
from openpyxl.worksheet.datavalidation import DataValidation
from openpyxl.worksheet.worksheet import Worksheet

from planner.diagnostics import PlannerError
from planner.files import write_whole
from planner.workbook.data import CellValue
from planner.workbook.fields import Field, Form, Kind, Sheet, Table
from planner.workbook.guide import write_guide
from planner.workbook.layout import GUIDE_SHEET, LISTS_SHEET, SHEETS, shown_choices
from planner.workbook.saving import workbook_bytes
from planner.workbook.styles import (
    DARK,
    NOTE_FONT,
    OPTIONAL_BORDER,
    OPTIONAL_FILL,
    OPTIONAL_HEAD,
    REQUIRED_BORDER,
    REQUIRED_FILL,
    REQUIRED_HEAD,
    WHITE_BOLD,
    font,
    set_up_page,
)

RowValues: TypeAlias = Mapping[str, CellValue]
SheetValues: TypeAlias = Mapping[str, "CellValue | Sequence[RowValues]"]
Values: TypeAlias = Mapping[str, SheetValues]

_CREATED: Final = datetime(2026, 1, 1)  # output never depends on the clock

_FORMATS: Final[dict[Kind, str]] = {
    Kind.DATE: "yyyy-mm-dd",
    Kind.MONEY: "#,##0.##;-#,##0.##",
    Kind.SHARE: "0.0##%",
    Kind.RATE: "0.0##%",
    Kind.YEAR: "0",
}
_WIDTHS: Final[dict[Kind, float]] = {
    Kind.TEXT: 24,
    Kind.NAME: 18,
    Kind.MONEY: 15,
    Kind.DATE: 13,
    Kind.RISE: 18,
    Kind.CONTINUATION: 18,
    Kind.CHOICE: 22,
    Kind.AS_TYPED: 18,
}
_LABEL_WIDTH: Final = 38
_VALUE_WIDTH: Final = 30
_NOTE_WIDTH: Final = 78
_SPARE_CLASSES: Final = 5
_LONG_TEXT: Final = 60  # characters above which a form value is wrapped over several lines


def write_blank(path: str | Path) -> None:
    """Write the blank workbook.

    Raises
    ------
    PlannerError
        The file is there already; it is left as it is.
    OSError
        The file cannot be written.
    """
    write_workbook({}, path)


def write_workbook(values: Values, path: str | Path, *, remark: str = "") -> None:
    """Write the layout with values filled in; whole or not at all.

    Parameters
    ----------
    values
        By sheet name. For a form: label -> value. For a table: its name (see the layout; the
        sheet's name does for a sheet with one table) -> rows, each column label -> value; columns
        for asset classes go by the class's name.
    path
        Where to write; must not exist.
    remark
        A sentence put at the top of the guide, such as that the household is invented.

    Raises
    ------
    PlannerError
        The file is there already; it is left as it is.
    KeyError
        A sheet, label or column that the layout does not have.
    OSError
        The file cannot be written.
    """
    target = Path(path)
    if target.exists():
        raise PlannerError(f"{target} is there already and was left as it is; choose another name")
    write_whole(target, workbook_bytes(make_workbook(values, remark=remark)))


def make_workbook(values: Values, *, remark: str = "") -> Workbook:
    """Return the filled-in workbook in memory; see `write_workbook`."""
    _check_names(values)
    workbook = openpyxl.Workbook()
    workbook.properties.created = _CREATED
    workbook.properties.title = "Client workbook"
    workbook.properties.creator = "Retirement drawdown planner"
    guide = workbook.active
    assert isinstance(guide, Worksheet)
    guide.title = GUIDE_SHEET
    write_guide(guide, remark)
    lists = _Lists(workbook)
    classes = [
        str(row["Asset class"])
        for row in _table_values(values, "Markets", "asset classes")
        if "Asset class" in row
    ]
    for sheet in SHEETS:
        _SheetWriter(
            workbook.create_sheet(sheet.name), sheet, values.get(sheet.name, {}), classes, lists
        ).write()
    lists.write()
    return workbook


def _table_values(values: Values, sheet: str, table: str) -> Sequence[RowValues]:
    rows = values.get(sheet, {}).get(table, values.get(sheet, {}).get(sheet, ()))
    assert isinstance(rows, Sequence)
    assert not isinstance(rows, str)
    return rows


def _check_names(values: Values) -> None:
    for sheet_name, content in values.items():
        sheet = next((sheet for sheet in SHEETS if sheet.name == sheet_name), None)
        if sheet is None:
            raise KeyError(f"no sheet is called {sheet_name!r}")
        labels = {field.label for form in sheet.forms for field in form.fields}
        tables = {table.name for table in sheet.tables} | ({sheet.name} if any(sheet.tables) else set())
        if unknown := set(content) - labels - tables:
            raise KeyError(f"{sheet_name} has no {', '.join(sorted(unknown))}")
        for table in sheet.tables:
            columns = {column.label for column in table.columns}
            for row in _table_values(values, sheet_name, table.name):
                if table.per_class is None and (extra := set(row) - columns):
                    raise KeyError(f"{sheet_name}, {table.name}: no column {', '.join(sorted(extra))}")


class _Lists:
    """The hidden sheet of fixed choices: a drop-down's own list cannot hold commas."""

    def __init__(self, workbook: Workbook) -> None:
        self.workbook = workbook
        self.columns: dict[tuple[str, ...], int] = {}

    def reference(self, choices: tuple[str, ...]) -> str:
        column = get_column_letter(self.columns.setdefault(choices, len(self.columns) + 1))
        return f"{LISTS_SHEET}!${column}$1:${column}${len(choices)}"

    def write(self) -> None:
        sheet = self.workbook.create_sheet(LISTS_SHEET)
        for choices, column in self.columns.items():
            for row, choice in enumerate(choices, start=1):
                sheet.cell(row, column, choice)
        sheet.sheet_state = "hidden"


class _SheetWriter:
    """Writes one sheet: title, purpose, forms and tables."""

    def __init__(
        self,
        worksheet: Worksheet,
        sheet: Sheet,
        values: SheetValues,
        classes: Sequence[str],
        lists: _Lists,
    ) -> None:
        self.worksheet, self.sheet, self.values = worksheet, sheet, values
        self.classes, self.lists = classes, lists
        self.widths: dict[int, float] = {}
        self.has_tables = any(True for _ in sheet.tables)

    def write(self) -> None:
        title = self.worksheet.cell(1, 1, f"{self.sheet.name}{'' if self.sheet.required else ' (optional)'}")
        title.font = font(bold=True, size=15, color=DARK)
        purpose = self.worksheet.cell(2, 1, self.sheet.purpose)
        purpose.font = NOTE_FONT
        row, column, top = 4, 1, 4
        for part in self.sheet.parts:
            if isinstance(part, Form):
                row = self._form(part, row) + 1
            else:
                if part.beside:
                    column = max(self.widths) + 2
                    self.widths[column - 1] = 3
                else:
                    column, top = 1, row
                row = max(row, self._table(part, top, column) + 1)
        for number, width in self.widths.items():
            self.worksheet.column_dimensions[get_column_letter(number)].width = width
        set_up_page(self.worksheet)
        self.worksheet.sheet_properties.tabColor = "C9A227" if self.sheet.required else "B8C4CC"

    def _widen(self, column: int, width: float) -> None:
        self.widths[column] = max(width, self.widths.get(column, 0))

    def _form(self, form: Form, row: int) -> int:
        sheet = self.worksheet
        self._widen(1, _LABEL_WIDTH)
        self._widen(2, 18 if self.has_tables else _VALUE_WIDTH)
        if not self.has_tables:
            self._widen(3, _NOTE_WIDTH)
            sheet.freeze_panes = f"B{row}"
        for field in form.fields:
            label = sheet.cell(row, 1, field.label)
            label.font = font(bold=field.required)
            label.alignment = Alignment(vertical="top", wrap_text=True)
            value = self.values.get(field.label)
            assert not isinstance(value, Sequence) or isinstance(value, str)
            cell = sheet.cell(row, 2)
            self._input(cell.coordinate, field, value)
            long = isinstance(value, str) and len(value) > _LONG_TEXT
            if field.target.startswith("practice."):
                self._widen(2, 60)
                if not self.has_tables:
                    self.widths[3] = 48
                cell.alignment = Alignment(vertical="top", wrap_text=True)
                if long:
                    sheet.row_dimensions[row].height = 15 * (1 + len(str(value)) // _LONG_TEXT)
            note = sheet.cell(row, 3, _full_note(field))
            note.font = NOTE_FONT
            note.alignment = Alignment(
                vertical="top", wrap_text=not self.has_tables, horizontal="left", indent=1
            )
            row += 1
        return row

    def _table(self, table: Table, row: int, column: int) -> int:
        sheet = self.worksheet
        rows = self.values.get(table.name, self.values.get(self.sheet.name, ()))
        assert isinstance(rows, Sequence)
        assert not isinstance(rows, str)
        fields = list(table.columns)
        headers: list[str | None] = [field.label for field in fields]
        if table.per_class is not None:
            spare = 0 if self.classes else _SPARE_CLASSES
            fields += [table.per_class] * (len(self.classes) + spare)
            headers += [*self.classes, *[None] * spare]
        if table.note:
            sheet.cell(row, column, table.note).font = NOTE_FONT
        row += 1
        self._notes(table, fields, row, column)
        head = row + 1
        for offset, (field, header) in enumerate(zip(fields, headers, strict=True)):
            cell = sheet.cell(head, column + offset, header)
            cell.font = font(bold=True, color="FFFFFF" if field.required else DARK, italic=not field.required)
            cell.fill = REQUIRED_HEAD if field.required else OPTIONAL_HEAD
            cell.border = OPTIONAL_BORDER
            cell.alignment = Alignment(wrap_text=True, vertical="center")
            if field is table.per_class:
                cell.fill, cell.font = REQUIRED_HEAD, WHITE_BOLD
                if header is None:  # to be filled in with an asset class's name
                    cell.fill, cell.border, cell.font = REQUIRED_FILL, REQUIRED_BORDER, font(bold=True)
            self._widen(column + offset, _WIDTHS.get(field.kind, 14))
        words = max(len(field.label) / _WIDTHS.get(field.kind, 14) for field in fields)
        sheet.row_dimensions[head].height = 16 * max(2, math.ceil(1.2 * words))
        count = max(table.blank_rows, len(rows) + 2 if table.name != "people" else 2)
        for number in range(count):
            values = rows[number] if number < len(rows) else {}
            for offset, (field, header) in enumerate(zip(fields, headers, strict=True)):
                place = f"{get_column_letter(column + offset)}{head + 1 + number}"
                self._input(place, field, values.get(header) if header else None)
        if len(self.sheet.parts) == 1:
            sheet.freeze_panes = f"{get_column_letter(column + 1)}{head + 1}"
            sheet.print_title_rows = f"{head}:{head}"
        self._drop_downs(table, fields, head + 1, head + count, column)
        return head + count + 1

    def _notes(self, table: Table, fields: Sequence[Field], row: int, column: int) -> None:
        """Write what each column means above its header."""
        height, said = 1, False
        for offset, field in enumerate(fields):
            if field is table.per_class and said:
                continue
            said = said or field is table.per_class
            note = self.worksheet.cell(row, column + offset, _full_note(field))
            note.font = NOTE_FONT
            note.alignment = Alignment(wrap_text=True, vertical="bottom")
            width = max(_WIDTHS.get(field.kind, 14), self.widths.get(column + offset, 0))
            if field is table.per_class:
                last = column + len(fields) - 1
                self.worksheet.merge_cells(
                    start_row=row, start_column=column + offset, end_row=row, end_column=last
                )
                width *= last - column - offset + 1
            height = max(height, math.ceil(1.25 * len(_full_note(field)) / width))
        before = self.worksheet.row_dimensions[row].height or 0
        self.worksheet.row_dimensions[row].height = max(before, 12.5 * height + 2)

    def _input(self, place: str, field: Field, value: CellValue) -> None:
        cell = self.worksheet[place]
        cell.value = value
        cell.fill = REQUIRED_FILL if field.required else OPTIONAL_FILL
        cell.border = REQUIRED_BORDER if field.required else OPTIONAL_BORDER
        cell.number_format = _FORMATS.get(field.kind, "General")
        if isinstance(value, str) and value.startswith("="):
            cell.data_type = "s"
        if field.kind in (Kind.TEXT, Kind.NAME, Kind.CHOICE, Kind.YES_NO):
            cell.alignment = Alignment(horizontal="left", vertical="top")
        elif isinstance(value, str | date):
            cell.alignment = Alignment(horizontal="right", vertical="top")
        else:
            cell.alignment = Alignment(vertical="top")
        if field in {f for form in self.sheet.forms for f in form.fields}:
            self._drop_down(field, place)

    def _drop_downs(self, table: Table, fields: Sequence[Field], first: int, last: int, column: int) -> None:
        for offset, field in enumerate(fields):
            letter = get_column_letter(column + offset)
            self._drop_down(field, f"{letter}{first}:{letter}{last}")

    def _drop_down(self, field: Field, places: str) -> None:
        choices = shown_choices(field)
        if choices:
            formula, strict = self.lists.reference(choices), True
        elif field.names_of and self.sheet.name + "/" + field.label != field.names_of:
            formula, strict = _names_reference(field.names_of), False
        else:
            return
        rule = DataValidation(type="list", formula1=formula, allow_blank=not field.required)
        rule.showErrorMessage = strict
        rule.errorTitle, rule.error = field.label, "Please choose from the list."
        rule.showInputMessage = True
        rule.add(places)
        self.worksheet.add_data_validation(rule)


def _full_note(field: Field) -> str:
    if field.required:
        return field.note
    blank = field.default or field.blank_means
    return f"{field.note} Blank: {blank}." if blank else field.note


def _names_reference(names_of: str) -> str:
    """Return the range in which the first rows of a table hold names."""
    sheet_name, _, label = names_of.partition("/")
    sheet = next(sheet for sheet in SHEETS if sheet.name == sheet_name)
    row = 4
    for part in sheet.parts:
        if isinstance(part, Form):
            row += len(part.fields) + 1
            continue
        if part.columns[0].label == label:
            first = row + 3
            last = first + (1 if part.name == "people" else 11)
            return f"{quote_sheetname(sheet_name)}!$A${first}:$A${last}"
    raise KeyError(names_of)
