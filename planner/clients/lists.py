"""The list of all clients: ``clients.json`` for programs, ``clients.xlsx`` for people."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from typing import Any, TypeAlias

from openpyxl import Workbook
from openpyxl.cell.cell import ILLEGAL_CHARACTERS_RE
from openpyxl.styles import Alignment, Font, PatternFill
from openpyxl.utils import get_column_letter
from openpyxl.worksheet.properties import PageSetupProperties
from openpyxl.worksheet.worksheet import Worksheet

from planner import __version__
from planner.clients.rows import LARGE_CHANGE, LIKELY_CUT, ClientRow, reasons
from planner.clients.worker import Work
from planner.diagnostics import Diagnostic
from planner.workbook.saving import workbook_bytes

Cell: TypeAlias = str | float | int | None

_MONEY, _SHARE, _PLAIN = "#,##0", "0.0%", "General"
_HEADER = PatternFill("solid", start_color="E7EAEE")
_FORMULA_STARTS = ("=", "+", "-", "@", "\t", "\r")


def list_json(rows: Sequence[ClientRow], work: Work) -> dict[str, Any]:
    """Return the list as plain data, in the order of the rows."""
    settings = work.settings
    return {
        "counts": {
            "clients": len(rows),
            "planned": sum(row.state == "planned" for row in rows),
            "problems": sum(row.state == "problems" for row in rows),
            "failed": sum(row.state == "failed" for row in rows),
        },
        "clients": [_row(row) for row in rows],
        "sources": {
            "program_version": __version__,
            "seed": settings.seed,
            "n_paths": settings.n_paths,
            "what_ifs": settings.what_ifs,
            "changes": [name for name, _ in work.changes],
            "stresses": list(work.stresses),
        },
    }


def _row(row: ClientRow) -> dict[str, Any]:
    planned = row.state == "planned"
    change = row.change_since_last
    return {
        "client": row.client,
        "workbook": row.workbook,
        "state": row.state,
        "reasons": [words for _, _, words in reasons(row)],
        "pdf": f"{row.name}.pdf" if planned else None,
        "json": f"{row.name}.json" if planned else None,
        "plan_date": row.plan_date or None,
        "currency": row.currency or None,
        "spending_this_year": row.spending_this_year,
        "spending_last_year": row.last.spending if row.last else None,
        "last_plan_date": row.last.plan_date if row.last else None,
        "change_since_last_year": None if change is None else round(change, 6),
        "essential": row.essential,
        "chance_below_essential": row.chance_below_essential,
        "minimum_distribution": row.least_to_take,
        "minimum_distribution_still_due": row.still_due,
        "gap_money": row.gap_money,
        "gap_share": row.gap_share,
        "what_ifs": [
            {
                "name": figures.name,
                "spending_this_year": figures.spending_this_year,
                "chance_below_essential": figures.chance_below_essential,
                "note": figures.note or None,
            }
            for figures in row.changed
        ],
        "warnings": [_problem(problem) for problem in row.warnings],
        "problems": [_problem(problem) for problem in row.problems],
        "failure": row.failure or None,
    }


def _problem(problem: Diagnostic) -> dict[str, str]:
    return {
        "severity": problem.severity,
        "code": problem.code,
        "where": problem.where,
        "message": problem.message,
    }


def list_workbook(rows: Sequence[ClientRow], work: Work) -> bytes:
    """Return the list as an .xlsx file: one row a household, and every problem and warning.

    Text that a spreadsheet could take for a formula is stored as text; the same rows give the same
    bytes.
    """
    book = Workbook()
    book.remove(book.active)  # type: ignore[arg-type]
    book.properties.creator = "retirement-drawdown-planner"
    book.properties.title = "Clients, by who needs a call first"
    changes = (*(name for name, _ in work.changes), *work.stresses)
    columns = [
        ("Order", _PLAIN, 7),
        ("Client", _PLAIN, 28),
        ("Why call", _PLAIN, 60),
        ("Currency", _PLAIN, 9),
        ("Spending this year", _MONEY, 13),
        ("Change since last year", _SHARE, 13),
        ("Bills (essential spending)", _MONEY, 13),
        ("Chance bills are cut in some year", _SHARE, 13),
        ("Least that must be taken", _MONEY, 13),
        ("Of that still due", _MONEY, 13),
        ("Proved within, of the best possible", "0.00%", 13),
        *((f"With '{name}': spending this year", _MONEY, 18) for name in changes),
        *((f"With '{name}': chance bills are cut", _SHARE, 18) for name in changes),
        ("Warnings", _PLAIN, 10),
        ("Plan date", _PLAIN, 12),
        ("Plan", _PLAIN, 28),
        ("Workbook", _PLAIN, 28),
    ]
    note = (
        "By who needs a call first. Today's money of each client's plan date, after tax; the change since "
        "last year is between amounts each in the money of its own plan date. 'Bills are cut' counts the "
        f"futures tested in which spending falls below essential spending in some year; {LIKELY_CUT:.0%} or "
        f"more of them is a reason to call, as is a change of {LARGE_CHANGE:.0%} or more. These are "
        f"estimates, not promises."
    )
    _fill(book, "Clients", note, columns, (_cells(n, row, changes) for n, row in enumerate(rows, 1)))
    problems: list[tuple[str | None, ...]] = [
        (row.workbook, row.client or None, problem.severity, problem.where, problem.message, problem.code)
        for row in rows
        for problem in (*row.problems, *row.warnings)
    ]
    problems += [(row.workbook, None, "error", "", row.failure, "failed") for row in rows if row.failure]
    problems += [
        (row.workbook, row.client, "note", figures.name, figures.note, "what-if-not-possible")
        for row in rows
        for figures in row.changed
        if figures.note
    ]
    _fill(
        book,
        "Problems",
        "Every problem and warning, at its cell. A workbook with an error has no plan until it is mended.",
        [
            ("Workbook", _PLAIN, 28),
            ("Client", _PLAIN, 28),
            ("Kind", _PLAIN, 10),
            ("Where", _PLAIN, 18),
            ("What", _PLAIN, 100),
            ("Code", _PLAIN, 24),
        ],
        problems,
    )
    return workbook_bytes(book)


def _cells(number: int, row: ClientRow, changes: Sequence[str]) -> list[Cell]:
    figures = {entry.name: entry for entry in row.changed}
    after = [figures.get(name) for name in changes]
    why = "\n".join(words for _, _, words in reasons(row))
    change = row.change_since_last
    return [
        number,
        row.client or None,
        why or None,
        row.currency or None,
        row.spending_this_year,
        None if change is None else round(change, 6),
        row.essential,
        row.chance_below_essential,
        row.least_to_take,
        row.still_due,
        row.gap_share,
        *(entry.spending_this_year if entry else None for entry in after),
        *(entry.chance_below_essential if entry else None for entry in after),
        len(row.warnings) if row.state == "planned" else None,
        row.plan_date or None,
        f"{row.name}.pdf" if row.state == "planned" else None,
        row.workbook,
    ]


def _fill(
    book: Workbook,
    title: str,
    note: str,
    columns: Sequence[tuple[str, str, int]],
    rows: Iterable[Sequence[Cell]],
) -> None:
    """Write a sheet: a note, the header, the rows; the header stays in view and filters."""
    sheet: Worksheet = book.create_sheet(title)
    sheet.cell(1, 1, note).font = Font(italic=True)
    for number, (header, _, width) in enumerate(columns, 1):
        head = sheet.cell(2, number, header)
        head.font, head.fill = Font(bold=True), _HEADER
        head.alignment = Alignment(wrap_text=True, vertical="top")
        sheet.column_dimensions[get_column_letter(number)].width = width
    for row_number, row in enumerate(rows, 3):
        for number, (value, (_, number_format, _)) in enumerate(zip(row, columns, strict=True), 1):
            cell: Any = sheet.cell(row_number, number)  # never one of a merged range
            cell.alignment = Alignment(wrap_text=isinstance(value, str), vertical="top")
            if isinstance(value, str):
                # A control character cannot be in a workbook, and is nothing to read either.
                cell.value = ILLEGAL_CHARACTERS_RE.sub("\N{REPLACEMENT CHARACTER}", value)
                cell.data_type = "s"  # never a formula, whatever it starts with
                cell.quotePrefix = value.startswith(_FORMULA_STARTS)
            elif value is not None:
                cell.value, cell.number_format = value, number_format
    sheet.freeze_panes = "C3"
    sheet.auto_filter.ref = f"A2:{get_column_letter(len(columns))}{max(sheet.max_row, 2)}"
    sheet.page_setup.orientation = "landscape"
    sheet.page_setup.fitToWidth, sheet.page_setup.fitToHeight = 1, 0
    sheet.sheet_properties.pageSetUpPr = PageSetupProperties(fitToPage=True)
    sheet.print_title_rows = "1:2"
