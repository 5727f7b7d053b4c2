"""Refuse what is no sound, modest .xlsx file before a spreadsheet library opens it.

A spreadsheet library builds an object for every element, and for every cell of a merged range. A
file of a few kilobytes can so ask for more memory than there is; here each part is walked through
once, holding nothing, and what goes beyond a client workbook many times over is refused in words.
"""

from __future__ import annotations

import io
import re
import zipfile
import zlib
from dataclasses import dataclass
from typing import Final
from xml.parsers import expat

from planner.diagnostics import Diagnostic, InputError

LARGEST_UNPACKED: Final = 30_000_000  # bytes; a client workbook has well under one million
LARGEST_FILE: Final = LARGEST_UNPACKED
MOST_PARTS: Final = 1_000  # files in the archive; a client workbook has about 30
MOST_ELEMENTS: Final = 400_000  # a client workbook has about 5,000
DEEPEST: Final = 100  # elements within elements; a spreadsheet has about 10
WIDEST_RANGE: Final = 20_000  # cells joined into one, or under one link, over the whole workbook

_OLE_HEADER: Final = b"\xd0\xcf\x11\xe0\xa1\xb1\x1a\xe1"
_STRICT: Final = b"http://purl.oclc.org/ooxml/"
_RANGE: Final = re.compile(r"^\$?([A-Za-z]{1,3})\$?(\d{1,9}):\$?([A-Za-z]{1,3})\$?(\d{1,9})$")
_FILLS_RANGES: Final = frozenset(("mergeCell", "hyperlink", "comment"))
_UNREADABLE: Final = (
    zipfile.BadZipFile,
    OSError,
    ValueError,
    EOFError,
    NotImplementedError,  # a compression that Python does not know
    RuntimeError,  # a part with a password of its own
    zlib.error,
)


def check_file(content: bytes, file_name: str) -> None:
    """Refuse, with the reason, what is not a sound .xlsx file of a client workbook's size.

    Raises
    ------
    InputError
        Codes ``file-empty``, ``file-encrypted``, ``file-old-format``, ``file-open-document``,
        ``file-binary``, ``file-macros``, ``file-strict``, ``file-not-xlsx``, ``file-damaged``,
        ``file-too-large`` or ``file-entities``.
    """

    def refuse(code: str, message: str) -> InputError:
        return InputError([Diagnostic(code, file_name, message)])

    if not content:
        raise refuse("file-empty", "the file is empty")
    if len(content) > LARGEST_FILE:
        raise refuse("file-too-large", f"the file is larger than {LARGEST_FILE / 1e6:,.0f} MB")
    if content.startswith(_OLE_HEADER):
        if "EncryptedPackage".encode("utf-16-le") in content:
            raise refuse("file-encrypted", "the workbook has a password; save a copy without one")
        raise refuse("file-old-format", "this is an old .xls workbook; save it as .xlsx")
    if not content.startswith(b"PK"):
        raise refuse("file-not-xlsx", "this is not an .xlsx workbook")
    try:
        with zipfile.ZipFile(io.BytesIO(content)) as archive:
            parts = archive.infolist()
            names = {part.filename for part in parts}
            unpacked = sum(part.file_size for part in parts)
            if len(parts) > MOST_PARTS:
                raise refuse("file-too-large", f"the workbook is made of {len(parts):,} files")
            if unpacked > LARGEST_UNPACKED:
                raise refuse("file-too-large", f"the workbook unpacks to {unpacked / 1e6:,.0f} MB")
            kind = archive.read("mimetype")[:100] if "mimetype" in names else b""
            types = archive.read("[Content_Types].xml") if "[Content_Types].xml" in names else b""
            if b"opendocument" in kind:
                raise refuse("file-open-document", "this is an OpenDocument file; save it as .xlsx")
            if "xl/workbook.bin" in names:  # its content type says "macroEnabled", macros or none
                raise refuse("file-binary", "this is a binary workbook (.xlsb); save it as .xlsx")
            if b"macroEnabled" in types or any(name.endswith("vbaProject.bin") for name in names):
                raise refuse("file-macros", "this workbook has macros (.xlsm); save it as .xlsx without them")
            if "xl/workbook.xml" not in names and b"spreadsheetml" not in types:
                raise refuse("file-not-xlsx", "this is not an .xlsx workbook")
            if "xl/workbook.xml" in names and _STRICT in archive.read("xl/workbook.xml"):
                message = "this is a Strict Open XML workbook; save it as an ordinary Excel workbook (.xlsx)"
                raise refuse("file-strict", message)
            walk = _Walk()
            for part in parts:
                try:
                    walk.part(archive.read(part))
                except expat.ExpatError:
                    if _is_xml(part.filename):
                        raise  # other parts, such as pictures, need not be XML
    except _TooMuch as error:
        raise refuse(error.code, error.message) from None
    except expat.ExpatError as error:
        raise refuse("file-damaged", f"the workbook is cut short or damaged ({error})") from None
    except _UNREADABLE as error:
        raise refuse("file-damaged", f"the workbook is cut short or damaged ({error})") from None


def _is_xml(name: str) -> bool:
    return name.casefold().endswith((".xml", ".rels"))


class _TooMuch(Exception):
    def __init__(self, code: str, message: str) -> None:
        self.code, self.message = code, message
        super().__init__(message)


@dataclass(slots=True)
class _Walk:
    """Totals over the parts of a workbook."""

    elements: int = 0
    depth: int = 0
    joined: int = 0

    def part(self, content: bytes) -> None:
        """Walk through one XML part.

        Raises
        ------
        _TooMuch
            A limit is passed, or the part declares entities.
        expat.ExpatError
            The part is not XML.
        """
        self.depth = 0
        parser = expat.ParserCreate()
        parser.StartDoctypeDeclHandler = _refuse_entities
        parser.StartElementHandler = self._start
        parser.EndElementHandler = self._end
        parser.Parse(content, True)

    def _start(self, name: str, attributes: dict[str, str]) -> None:
        self.elements += 1
        self.depth += 1
        if self.elements > MOST_ELEMENTS:
            message = (
                f"the workbook stores more than {MOST_ELEMENTS // 2:,} cells or rows; copy what is filled in "
                "to a new workbook"
            )
            raise _TooMuch("file-too-large", message)
        if self.depth > DEEPEST:
            raise _TooMuch("file-damaged", f"the workbook nests more than {DEEPEST} elements")
        if name.rpartition(":")[2] in _FILLS_RANGES and "ref" in attributes:
            self.joined += _cells_in(attributes["ref"])
            if self.joined > WIDEST_RANGE:
                message = (
                    f"merged cells, links or comments cover more than {WIDEST_RANGE:,} cells "
                    f"({attributes['ref'][:40]}); undo the merge"
                )
                raise _TooMuch("file-too-large", message)

    def _end(self, name: str) -> None:
        self.depth -= 1


def _refuse_entities(*declaration: object) -> None:
    # No spreadsheet program writes a document type; it is how entities that grow without end start.
    raise _TooMuch("file-entities", "the workbook declares XML entities, which no spreadsheet program writes")


def _cells_in(reference: str) -> int:
    match = _RANGE.match(reference.strip())
    if match is None:
        # One cell, or a form such as A:C: counted as too much where it is no single cell.
        return 1 if ":" not in reference else WIDEST_RANGE + 1
    first, last = _column(match[1]), _column(match[3])
    return (abs(last - first) + 1) * (abs(int(match[4]) - int(match[2])) + 1)


def _column(letters: str) -> int:
    number = 0
    for letter in letters.upper():
        number = 26 * number + ord(letter) - 64
    return number
