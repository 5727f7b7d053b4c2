"""A workbook as read: typed entries with their cells, before anything is made of them."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field, replace
from datetime import date, datetime
from typing import TypeAlias

from planner.diagnostics import Diagnostic

CellValue: TypeAlias = str | float | int | bool | date | datetime | None


@dataclass(frozen=True, slots=True)
class Entry:
    """One cell.

    Attributes
    ----------
    cell
        Its place, such as ``Accounts!D7``.
    value
        As stored; None where blank or cleared.
    is_percentage
        The cell is formatted as a percentage, so that 0.035 shows as 3.5%.
    fault
        Code and message where the cell cannot be used whatever is expected of it.
    """

    cell: str
    value: CellValue
    is_percentage: bool = False
    fault: tuple[str, str] | None = None

    @property
    def is_blank(self) -> bool:
        """Nothing, or only spaces."""
        value = self.value
        return self.fault is None and (value is None or (isinstance(value, str) and not value.strip()))

    @property
    def text(self) -> str:
        """Return the value as one would type it."""
        value = self.value
        if value is None:
            return ""
        if isinstance(value, bool):
            return "yes" if value else "no"
        if isinstance(value, datetime):
            return value.date().isoformat()
        if isinstance(value, date):
            return value.isoformat()
        if isinstance(value, str):
            return value.strip()
        if self.is_percentage:
            return f"{value * 100:.12g}%"
        return str(int(value)) if value == int(value) and abs(value) < 1e15 else repr(float(value))


@dataclass(frozen=True, slots=True)
class Row:
    """One row of a table: its entries by column key (see `fields.normalised`)."""

    number: int
    cell: str
    entries: Mapping[str, Entry]


@dataclass(frozen=True, slots=True)
class TableData:
    """A table found on a sheet.

    `headers` maps the key of every column under the header row, known or not, to its text;
    `cell` is where the header row starts.
    """

    cell: str
    headers: Mapping[str, str]
    header_cells: Mapping[str, str]
    rows: tuple[Row, ...]


@dataclass(frozen=True, slots=True)
class WorkbookData:
    """Everything the layout knows of, as found.

    Attributes
    ----------
    forms
        (sheet name, field key) -> entry.
    tables
        (sheet name, table name) -> table.
    sheets
        Names of the layout's sheets that are there.
    problems
        What was wrong with the sheets, labels and headers.
    """

    forms: Mapping[tuple[str, str], Entry]
    tables: Mapping[tuple[str, str], TableData]
    sheets: frozenset[str]
    problems: tuple[Diagnostic, ...] = field(default=())

    def with_field(self, sheet: str, key: str, value: CellValue) -> WorkbookData:
        """Return a copy with one form field replaced."""
        old = self.forms.get((sheet, key), Entry(sheet, None))
        forms = dict(self.forms) | {(sheet, key): Entry(old.cell, value)}
        return replace(self, forms=forms)

    def with_cell(self, sheet: str, table: str, row: int, key: str, value: CellValue) -> WorkbookData:
        """Return a copy with one table cell replaced; `row` counts the table's rows from 0."""
        found = self.tables[sheet, table]
        old_row = found.rows[row]
        old = old_row.entries.get(key, Entry(old_row.cell, None))
        new_row = replace(old_row, entries=dict(old_row.entries) | {key: Entry(old.cell, value)})
        rows = (*found.rows[:row], new_row, *found.rows[row + 1 :])
        return replace(self, tables=dict(self.tables) | {(sheet, table): replace(found, rows=rows)})
