"""Naming a value by the workbook's own words: ``Sheet/Field`` or ``Sheet/Row/Column``."""

from __future__ import annotations

from collections.abc import Iterable
from typing import NoReturn

from planner.checks import nearest
from planner.diagnostics import Diagnostic, InputError
from planner.workbook.data import TableData, WorkbookData
from planner.workbook.fields import Sheet, label_keys, normalised
from planner.workbook.layout import SHEETS


def replaced(data: WorkbookData, address: str, value: str) -> WorkbookData:
    """Return the workbook's data with the value at an address replaced.

    Parameters
    ----------
    address
        ``Spending/Essential spending a year`` or ``Income/State pension/From age``: words as in
        the workbook, case and spacing ignored; a row by its name in the first column.
    value
        As one would type it into the cell; "" clears it.

    Raises
    ------
    InputError
        Code ``address-malformed``, ``address-unknown`` (with the near miss) or
        ``address-ambiguous``.
    """
    parts = [part.strip() for part in address.split("/")]
    if len(parts) < 2 or not all(parts):
        message = "expected Sheet/Field or Sheet/Row/Column, such as Income/State pension/From age"
        _refuse("address-malformed", address, message)
    sheet = _sheet(address, parts[0])
    if len(parts) == 2:
        return _with_field(data, sheet, address, parts[1], value)
    return _with_cell(data, sheet, address, parts[1:], value)


def _refuse(code: str, address: str, message: str) -> NoReturn:
    raise InputError([Diagnostic(code, address, message)])


def _hint(found: str, known: Iterable[str]) -> str:
    by_key = {normalised(name): name for name in known}
    near = nearest(normalised(found), by_key)
    near = near or next((key for key in by_key if key.startswith(normalised(found))), None)
    if near:
        return f"did you mean {by_key[near]!r}?"
    return f"expected one of {', '.join(by_key.values())}" if by_key else "there is none"


def _sheet(address: str, name: str) -> Sheet:
    for sheet in SHEETS:
        if normalised(sheet.name) == normalised(name):
            return sheet
    hint = _hint(name, (sheet.name for sheet in SHEETS))
    _refuse("address-unknown", address, f"there is no sheet {name!r}; {hint}")


def _with_field(data: WorkbookData, sheet: Sheet, address: str, name: str, value: str) -> WorkbookData:
    fields = [field for form in sheet.forms for field in form.fields]
    for field in fields:
        if field.key in label_keys(name):
            return data.with_field(sheet.name, field.key, value or None)
    if not fields:
        message = f"the sheet {sheet.name} has rows; write {sheet.name}/Row/Column"
    else:
        message = f"the sheet {sheet.name} has no field {name!r}; {_hint(name, (f.label for f in fields))}"
    _refuse("address-unknown", address, message)


def _with_cell(data: WorkbookData, sheet: Sheet, address: str, parts: list[str], value: str) -> WorkbookData:
    row_names: list[str] = []
    column_names: list[str] = []
    row_seen = False
    for table in sheet.tables:
        found = data.tables.get((sheet.name, table.name))
        if found is None:
            continue
        columns = {column.key: column.label for column in table.columns} | (
            dict(found.headers) if table.per_class is not None else {}
        )
        # A name may hold a slash itself, so every way of cutting the rest in two is tried.
        for cut in range(1, len(parts)):
            row_name, column_name = "/".join(parts[:cut]), "/".join(parts[cut:])
            rows = _rows_called(found, table.columns[0].key, row_name)
            key = next((key for key in label_keys(column_name) if key in columns), None)
            row_seen = row_seen or bool(rows)
            if rows and key is not None:
                if len(rows) > 1:
                    message = f"{len(rows)} rows of {sheet.name} are called {row_name!r}"
                    _refuse("address-ambiguous", address, message)
                return data.with_cell(sheet.name, table.name, rows[0], key, value or None)
        row_names += [
            row.entries[table.columns[0].key].text
            for row in found.rows
            if table.columns[0].key in row.entries
        ]
        column_names += columns.values()
    if not any(True for _ in sheet.tables):
        _refuse("address-unknown", address, f"the sheet {sheet.name} has no rows; write {sheet.name}/Field")
    if row_seen:
        message = f"the sheet {sheet.name} has no column {parts[-1]!r}; {_hint(parts[-1], column_names)}"
    else:
        name = "/".join(parts[:-1])
        message = f"the sheet {sheet.name} has no row {name!r}; {_hint(name, row_names)}"
    _refuse("address-unknown", address, message)


def _rows_called(table: TableData, key: str, name: str) -> list[int]:
    wanted = "".join(name.casefold().split())
    return [
        index
        for index, row in enumerate(table.rows)
        if key in row.entries and "".join(row.entries[key].text.casefold().split()) == wanted
    ]
