"""A spreadsheet as bytes: made in memory alone, the same from the same content.

openpyxl's own way writes every sheet to a temporary file first, where a killed process leaves a
client's figures behind, and dates the file by the clock.
"""

from __future__ import annotations

import io
import zipfile
from datetime import date, datetime, time
from typing import Any

from openpyxl.drawing.spreadsheet_drawing import SpreadsheetDrawing
from openpyxl.workbook import Workbook
from openpyxl.worksheet._writer import WorksheetWriter
from openpyxl.writer.excel import ExcelWriter

_UNDATED = date(2000, 1, 1)


def workbook_bytes(book: Workbook, dated: date = _UNDATED) -> bytes:
    """Return a workbook as an .xlsx file.

    Parameters
    ----------
    book
        Made anew (not one that was loaded with macros or charts).
    dated
        When it says that it was made and changed.
    """
    moment = datetime.combine(dated, time())
    book.properties.created = book.properties.modified = moment
    content = io.BytesIO()
    with _Archive(content, "w", zipfile.ZIP_DEFLATED) as archive:
        _Writer(book, archive).write_data()
    return content.getvalue()


class _Archive(zipfile.ZipFile):
    """Parts carry no time."""

    def writestr(  # type: ignore[override]
        self,
        name: Any,  # noqa: ANN401 - as in zipfile
        data: Any,  # noqa: ANN401
        *options: Any,  # noqa: ANN401
        **named: Any,  # noqa: ANN401
    ) -> None:
        part = name if isinstance(name, zipfile.ZipInfo) else zipfile.ZipInfo(name)
        part.compress_type = zipfile.ZIP_DEFLATED
        part.external_attr = 0o600 << 16
        super().writestr(part, data, *options, **named)


class _Writer(ExcelWriter):
    """As openpyxl writes a sheet, without its temporary file."""

    def write_worksheet(self, sheet: Any) -> None:  # noqa: ANN401 - as in openpyxl
        sheet._drawing = SpreadsheetDrawing()
        sheet._drawing.charts, sheet._drawing.images = sheet._charts, sheet._images
        content = io.BytesIO()
        writer = WorksheetWriter(sheet, content)
        writer.write()
        sheet._rels = writer._rels  # type: ignore[attr-defined]
        self._archive.writestr(  # type: ignore[attr-defined]
            sheet.path[1:], content.getvalue()
        )
        self.manifest.append(sheet)
