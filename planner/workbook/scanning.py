"""From the bytes of an .xlsx file to `WorkbookData`: sheets, labels, header rows, cells.

The file is read once into memory and never opened for writing.
"""

from __future__ import annotations

import io
import re
import warnings
from collections.abc import Iterable, Iterator
from typing import Final, TypeAlias

import openpyxl
from openpyxl.cell.cell import Cell, MergedCell
from openpyxl.utils import get_column_letter
from openpyxl.workbook import Workbook
from openpyxl.worksheet.worksheet import Worksheet

from planner.checks import nearest, shortened
from planner.diagnostics import Diagnostic, InputError
from planner.workbook.archive import check_file
from planner.workbook.data import Entry, Row, TableData, WorkbookData
from planner.workbook.fields import Sheet, Table, label_keys, normalised
from planner.workbook.layout import IGNORED_COLUMNS, IGNORED_SHEETS, SHEETS

Grid: TypeAlias = dict[tuple[int, int], Entry]

_ERROR_TEXTS: Final = frozenset(
    ("#REF!", "#VALUE!", "#NAME?", "#DIV/0!", "#N/A", "#NUM!", "#NULL!", "#SPILL!", "#CALC!")
)
LARGEST_NUMBER: Final = 1e300
MOST_CELLS: Final = 20_000  # filled cells on a sheet; a client workbook has a few hundred

# Characters that show nothing but steer a terminal or turn the direction of writing.
_CONTROLS: Final = re.compile("[\x00-\x08\x0b-\x1f\x7f-\x9f\u202a-\u202e\u2066-\u2069]")
_IGNORED_COLUMN_KEYS: Final = frozenset(normalised(name) for name in IGNORED_COLUMNS)


def scan(content: bytes, file_name: str) -> WorkbookData:
    """Find everything the layout knows of in a workbook.

    Parameters
    ----------
    content
        The file's bytes.
    file_name
        Named in messages about the file as a whole.

    Raises
    ------
    InputError
        The bytes are no readable .xlsx workbook; the code says why (see `planner.codes`).
    """
    check_file(content, file_name)
    formulas, values = _load(content, file_name)
    problems: list[Diagnostic] = []
    found_sheets = _match_sheets(formulas, problems)
    forms: dict[tuple[str, str], Entry] = {}
    tables: dict[tuple[str, str], TableData] = {}
    for sheet in SHEETS:
        if sheet.name not in found_sheets:
            continue
        title = found_sheets[sheet.name]
        grid = _grid(formulas[title], values[title] if values is not None else None)
        if len(grid) > MOST_CELLS:
            message = f"{len(grid):,} cells are filled in; expected at most {MOST_CELLS:,}"
            problems.append(Diagnostic("sheet-too-large", title, message))
            continue
        scanner = _SheetScanner(sheet, title, grid, _merged_ends(formulas[title]))
        problems.extend(scanner.run())
        forms |= {(sheet.name, key): entry for key, entry in scanner.fields.items()}
        tables |= {(sheet.name, name): table for name, table in scanner.tables.items()}
    return WorkbookData(forms, tables, frozenset(found_sheets), tuple(problems))


def _load(content: bytes, file_name: str) -> tuple[Workbook, Workbook | None]:
    """Return the workbook with formulas and, only if it has any, with their stored values."""
    try:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")  # openpyxl remarks on features that it does not keep
            formulas = openpyxl.load_workbook(io.BytesIO(content))
            has_formulas = any(
                cell.data_type == "f" for sheet in formulas.worksheets for cell in _cells(sheet)
            )
            values = openpyxl.load_workbook(io.BytesIO(content), data_only=True) if has_formulas else None
    except Exception as error:  # openpyxl raises whatever the damaged part trips over
        reason = " ".join(str(error).split())[:100] or type(error).__name__
        message = f"the workbook is cut short or damaged ({reason})"
        raise InputError([Diagnostic("file-damaged", file_name, message)]) from None
    return formulas, values


def _cells(sheet: Worksheet) -> Iterable[Cell | MergedCell]:
    # Only cells that are stored: iterating over rows would visit every cell of the used rectangle,
    # billions where someone formatted the last one.
    return sheet._cells.values()


def _merged_ends(sheet: Worksheet) -> dict[tuple[int, int], int]:
    """Return the last column of each merged range by its top left cell."""
    ranges = sheet.merged_cells.ranges
    return {(merged.min_row, merged.min_col): merged.max_col for merged in ranges}


def _grid(formulas: Worksheet, values: Worksheet | None) -> Grid:
    stored = {} if values is None else {(c.row, c.column): c for c in _cells(values)}
    grid: Grid = {}
    for cell in _cells(formulas):
        if cell.value is None:
            continue
        place = f"{formulas.title}!{get_column_letter(cell.column)}{cell.row}"
        shown: Cell | MergedCell = cell
        computed, fault = True, None
        if cell.data_type == "f" and (cell.row, cell.column) in stored:
            shown = stored[cell.row, cell.column]
            # A formula whose result is empty text is stored with type "str"; one that was never
            # computed has no type at all.
            computed = shown.value is not None or shown.data_type != "n"
        value = shown.value
        if not computed:
            fault = ("formula-not-computed", "a formula with no stored value; open and save the file once")
        elif shown.data_type == "e" or (isinstance(value, str) and value.strip() in _ERROR_TEXTS):
            fault = ("cell-error", f"the spreadsheet error {value}; repair the formula")
        elif isinstance(value, str):
            value = _CONTROLS.sub("", value)
        elif isinstance(value, int | float) and not isinstance(value, bool):
            if not abs(value) < LARGEST_NUMBER:  # a NaN is not below it either
                fault = ("number-not-finite", "a number beyond what a spreadsheet can hold")
                value = "number"
        elif value is not None and not isinstance(value, bool) and not hasattr(value, "year"):
            value = str(value)  # times of day and the like: shown in the message, never valid
        is_percentage = "%" in _number_format(cell) and isinstance(value, int | float)
        grid[cell.row, cell.column] = Entry(place, value, is_percentage, fault)  # type: ignore[arg-type]
    return grid


def _number_format(cell: Cell | MergedCell) -> str:
    try:
        return str(cell.number_format)
    except (IndexError, KeyError):  # a style that the file names but does not hold
        return ""


def _match_sheets(workbook: Workbook, problems: list[Diagnostic]) -> dict[str, str]:
    """Return the layout's name -> the workbook's title, and note what is missing or unknown."""
    known = {normalised(sheet.name): sheet.name for sheet in SHEETS}
    ignored = {normalised(name) for name in IGNORED_SHEETS}
    found: dict[str, str] = {}
    unknown: list[str] = []
    for worksheet in workbook.worksheets:
        key = normalised(worksheet.title)
        if key in known and known[key] in found:
            message = f"the sheets {found[known[key]]!r} and {worksheet.title!r} have the same name"
            problems.append(Diagnostic("sheet-twice", worksheet.title, message))
        elif key in known:
            found[known[key]] = worksheet.title
        elif key not in ignored:
            unknown.append(worksheet.title)
    missing = [sheet.name for sheet in SHEETS if sheet.name not in found]
    for title in unknown:
        near = nearest(title.casefold(), (name.casefold() for name in missing))
        hint = next((f"; did you mean {name!r}?" for name in missing if name.casefold() == near), "")
        message = f"the sheet {shortened(title)!r} is not read{hint}"
        problems.append(Diagnostic("sheet-unknown", title, message, "warning"))
    for sheet in SHEETS:
        if sheet.required and sheet.name in missing:
            near = nearest(sheet.name.casefold(), (title.casefold() for title in unknown))
            hint = next((f"; {title!r} looks like it" for title in unknown if title.casefold() == near), "")
            message = f"the sheet {sheet.name!r} is missing{hint}"
            problems.append(Diagnostic("sheet-missing", sheet.name, message))
    return found


class _SheetScanner:
    """Find the forms and tables of one sheet in its grid of cells."""

    def __init__(self, sheet: Sheet, title: str, grid: Grid, merged_ends: dict[tuple[int, int], int]) -> None:
        self.sheet, self.title, self.grid, self.merged_ends = sheet, title, grid, merged_ends
        self.fields: dict[str, Entry] = {}
        self.tables: dict[str, TableData] = {}
        self.field_keys = {field.key: field for form in sheet.forms for field in form.fields}
        self.by_row: dict[int, dict[int, Entry]] = {}
        for (row, column), entry in sorted(grid.items()):
            if not entry.is_blank:
                self.by_row.setdefault(row, {})[column] = entry

    def run(self) -> Iterator[Diagnostic]:
        """Fill `fields` and `tables`; yield what is wrong with labels and headers."""
        headers = {table.name: self._header_row(table) for table in self.sheet.tables}
        header_rows = {row for row in headers.values() if row is not None}
        labels = self._labels(header_rows)
        taken: set[tuple[int, int]] = set()
        for table in self.sheet.tables:
            row = headers[table.name]
            if row is None:
                if table.required:
                    names = ", ".join(column.label for column in table.columns if column.required)
                    message = f"no header row with {names} was found"
                    yield Diagnostic("table-missing", self.title, message)
                continue
            yield from self._table(table, row, header_rows, labels, taken)
        yield from self._form(labels, header_rows, taken)

    def _columns(self, table: Table, row: int) -> dict[str, int]:
        keys = {column.key for column in table.columns}
        found: dict[str, int] = {}
        for number, entry in self.by_row[row].items():
            for key in label_keys(entry.text):
                if key in keys:
                    found.setdefault(key, number)
                    break
        return found

    def _header_row(self, table: Table) -> int | None:
        """Return the row with the most of the table's columns: two, or one beside a near miss.

        The first column beside any other text will do where columns are named after asset classes.
        """
        best, best_count = None, 1.0
        known = [column.key for column in table.columns]
        for row, entries in self.by_row.items():
            exact = self._columns(table, row)
            if not exact:
                continue
            others = [normalised(e.text) for n, e in entries.items() if n not in exact.values()]
            rest = [key for key in known if key not in exact]
            near = sum(nearest(text, rest, cutoff=0.8) is not None for text in others)
            has_classes = table.per_class is not None and known[0] in exact and bool(others)
            count = len(exact) + 0.5 * (near + has_classes)
            if count > best_count:
                best, best_count = row, count
        return best

    def _labels(self, header_rows: set[int]) -> dict[tuple[int, int], str]:
        """Return place -> field key of every form label, outside header rows."""
        found: dict[tuple[int, int], str] = {}
        for row, entries in self.by_row.items():
            if row in header_rows:
                continue
            left: int | None = None
            for column, entry in entries.items():  # in the order of the columns
                before, left = left, column
                if before is not None and (row, before) in found:
                    if column == self._value_column(row, before):
                        continue  # the value of the label to its left, even if it reads like a label
                for key in label_keys(entry.text):
                    if key in self.field_keys:
                        found[row, column] = key
                        break
        return found

    def _value_column(self, row: int, column: int) -> int:
        return self.merged_ends.get((row, column), column) + 1

    def _form(
        self, labels: dict[tuple[int, int], str], header_rows: set[int], taken: set[tuple[int, int]]
    ) -> Iterator[Diagnostic]:
        if not self.field_keys:
            return
        for (row, column), key in labels.items():
            if (row, column) in taken:
                continue
            value_column = self._value_column(row, column)
            place = f"{self.title}!{get_column_letter(value_column)}{row}"
            entry = self.grid.get((row, value_column), Entry(place, None))
            before = self.fields.get(key)
            if before is not None and not before.is_blank:
                if not entry.is_blank and entry.text != before.text:
                    message = (
                        f"{self.field_keys[key].label!r} is also filled in at {before.cell}, differently"
                    )
                    yield Diagnostic("label-twice", entry.cell, message)
                continue
            self.fields[key] = entry
        unknown = self._unknown_labels(labels, header_rows, taken)
        missing = [field for key, field in self.field_keys.items() if key not in self.fields]
        for entry in unknown:
            near = nearest(normalised(entry.text), (field.key for field in missing))
            hint = next((f"; did you mean {f.label!r}?" for f in missing if f.key == near), "")
            message = f"the label {shortened(entry.text)!r} is not read{hint}"
            yield Diagnostic("label-unknown", entry.cell, message, "warning")
        for field in missing:
            if field.required:
                texts = {normalised(entry.text): entry for entry in unknown}
                near = nearest(field.key, texts)
                hint = f"; {texts[near].text!r} in {texts[near].cell} looks like it" if near else ""
                place = texts[near].cell if near else self.title
                yield Diagnostic("label-missing", place, f"there is no label {field.label!r}{hint}")

    def _unknown_labels(
        self, labels: dict[tuple[int, int], str], header_rows: set[int], taken: set[tuple[int, int]]
    ) -> list[Entry]:
        """Texts in a column of labels, with something to their right, that are no label.

        The row above a header row is left out: it may explain the columns.
        """
        columns = {column for (row, column) in labels if (row, column) not in taken}
        known = [key for key in self.field_keys if key not in labels.values()]
        unknown = []
        for row, entries in self.by_row.items():
            for column, entry in entries.items():
                place = (row, column)
                if {row, row + 1} & header_rows or place in labels or place in taken or column not in columns:
                    continue
                if any(header < row for header in header_rows) and not known:
                    continue
                value = entries.get(self._value_column(row, column))
                is_near = nearest(normalised(entry.text), known, cutoff=0.8) is not None
                if isinstance(entry.value, str) and (value is not None or is_near):
                    if normalised(entry.text) not in ("field", "label", "value"):
                        unknown.append(entry)
        return unknown

    def _table(
        self,
        table: Table,
        header_row: int,
        header_rows: set[int],
        labels: dict[tuple[int, int], str],
        taken: set[tuple[int, int]],
    ) -> Iterator[Diagnostic]:
        mine = self._columns(table, header_row)
        others: set[int] = set()
        for other in self.sheet.tables:
            if other is not table:
                others |= set(self._columns(other, header_row).values())
        others -= set(mine.values())
        headers: dict[str, str] = {column.key: column.label for column in table.columns if column.key in mine}
        columns = dict(mine)
        header_cells = {key: self.by_row[header_row][number].cell for key, number in mine.items()}
        is_only_one = not others
        first, last = min(mine.values()), max(mine.values())
        for number, entry in self.by_row[header_row].items():
            if number in mine.values() or number in others:
                continue
            if not is_only_one and not first <= number <= last + 1:
                continue
            key = normalised(entry.text)
            if key in columns:
                message = f"two columns are headed {shortened(entry.text)!r}"
                yield Diagnostic("column-twice", entry.cell, message)
                continue
            columns[key], headers[key], header_cells[key] = number, entry.text, entry.cell
        span = set(columns.values())
        end = min(
            [row for row in header_rows if row > header_row and span & set(self.by_row[row])]
            + [row for (row, column) in labels if row > header_row and column in span]
            + [max(self.by_row) + 1]
        )
        key_column = columns.get(table.columns[0].key, first)
        rows: list[Row] = []
        for row, entries in self.by_row.items():
            if not header_row < row < end:
                continue
            picked = {
                key: entries.get(number, Entry(f"{self.title}!{get_column_letter(number)}{row}", None))
                for key, number in columns.items()
            }
            taken |= {(row, number) for number in columns.values()}
            declared = [
                entry
                for key, entry in picked.items()
                if key in mine or (table.per_class is not None and key not in _IGNORED_COLUMN_KEYS)
            ]
            if all(entry.is_blank for entry in declared):
                continue
            if len(rows) == table.most_rows:
                message = f"the table goes on after {len(rows)} rows, more than can be planned with"
                yield Diagnostic("table-too-long", f"{self.title}!{get_column_letter(first)}{row}", message)
                break
            rows.append(Row(row, f"{self.title}!{get_column_letter(key_column)}{row}", picked))
        start = f"{self.title}!{get_column_letter(first)}{header_row}"
        self.tables[table.name] = TableData(start, headers, header_cells, tuple(rows))
