"""The firm's logo: a small picture beside the workbook, checked before a plan is made."""

from __future__ import annotations

import struct
from dataclasses import replace
from pathlib import Path

from planner.diagnostics import Diagnostic
from planner.household import Household
from planner.workbook.data import WorkbookData
from planner.workbook.fields import normalised

MOST_BYTES = 2_000_000
MOST_PIXELS = 4_000
"""Limits of a logo's file and of each of its sides; what is drawn is 13 mm high."""

_PNG = b"\x89PNG\r\n\x1a\n"
_JPEG = b"\xff\xd8\xff"
# JPEG markers that carry the size (start of frame), without those that only look like one.
_START_OF_FRAME = frozenset(range(0xC0, 0xD0)) - {0xC4, 0xC8, 0xCC}
_WITHOUT_LENGTH = frozenset({0x01, *range(0xD0, 0xD8)})


def with_logo(
    household: Household, data: WorkbookData, folder: Path
) -> tuple[Household, tuple[Diagnostic, ...]]:
    """Resolve the sheet Practice's logo to the file in the workbook's folder.

    A logo that cannot be used does not stop a plan: it is dropped with the warning
    ``logo-unusable``, which stands in the plan.

    Parameters
    ----------
    household, data
        As read.
    folder
        Where the workbook lies.

    Returns
    -------
    household, warnings
    """
    name = household.practice.logo_file.strip()
    if not name:
        return household, ()
    path = folder.resolve() / name
    problem = logo_problem(path, folder)
    logo_file = "" if problem else str(path)
    household = replace(household, practice=replace(household.practice, logo_file=logo_file))
    if problem is None:
        return household, ()
    entry = data.forms.get(("Practice", normalised("Logo file")))
    where = entry.cell if entry is not None else "Practice"
    message = f"{problem}; the plan is printed without a logo"
    return household, (Diagnostic("logo-unusable", where, message, "warning"),)


def logo_problem(path: Path, folder: Path) -> str | None:
    """Return why a logo cannot be used, or None.

    It must be a PNG or JPEG file beside the workbook, within the limits.
    """
    try:
        if path.resolve().parent != folder.resolve():
            return f"the logo {path.name!r} must lie in the workbook's folder"
        if not path.is_file():
            return f"there is no file {path.name!r} beside the workbook"
        if path.stat().st_size > MOST_BYTES:
            return f"the logo {path.name!r} is larger than {MOST_BYTES / 1e6:g} MB"
        content = path.read_bytes()
    except (OSError, ValueError) as error:
        return f"the logo {path.name!r} cannot be read ({error})"
    size = picture_size(content)
    if size is None:
        return f"the logo {path.name!r} is no PNG or JPEG picture"
    if max(size) > MOST_PIXELS:
        return f"the logo {path.name!r} has {size[0]} x {size[1]} points; at most {MOST_PIXELS} each way"
    return None if _can_be_drawn(content) else f"the logo {path.name!r} is damaged"


def picture_size(content: bytes) -> tuple[int, int] | None:
    """Width and height that the head of a PNG or JPEG file gives; None where it is neither."""
    if content.startswith(_PNG) and content[12:16] == b"IHDR" and len(content) >= 24:
        width, height = struct.unpack(">II", content[16:24])
        return (width, height) if width and height else None
    if not content.startswith(_JPEG):
        return None
    place = 2
    while place + 9 <= len(content) and content[place] == 0xFF:
        marker = content[place + 1]
        if marker == 0xFF or marker in _WITHOUT_LENGTH:
            place += 1 if marker == 0xFF else 2
            continue
        if marker in _START_OF_FRAME:
            height, width = struct.unpack(">HH", content[place + 5 : place + 9])
            return (width, height) if width and height else None
        place += 2 + struct.unpack(">H", content[place + 2 : place + 4])[0]
    return None


def _can_be_drawn(content: bytes) -> bool:
    """Decode the whole picture once, so that nothing fails after the plan has been computed."""
    from io import BytesIO

    from reportlab.lib.utils import ImageReader

    try:
        ImageReader(BytesIO(content)).getRGBData()
    except Exception:  # a decoder fails in many ways on a damaged file
        return False
    return True
