"""Which workbooks a folder holds, and what the files made from each are called."""

from __future__ import annotations

import hashlib
import os
import unicodedata
from collections.abc import Iterable, Mapping
from pathlib import Path

LIST_NAME = "clients"
"""The list itself is ``clients.xlsx`` and ``clients.json``; no client's files may be called so."""

_LONGEST = 120  # bytes: leaves room for endings and temporary names within the usual limit of 255
_KEPT = " -_.,()&'+"
# Names that some systems keep for devices, whatever the ending.
_DEVICES = frozenset(
    ("con", "prn", "aux", "nul", *(f"com{n}" for n in range(1, 10)), *(f"lpt{n}" for n in range(1, 10)))
)


def find_workbooks(folder: Path, leave_out: Path) -> list[Path]:
    """Every .xlsx file in a folder and the folders in it, in order of path.

    Left out: hidden files and folders, the lock files of an open spreadsheet (``~$…``), and
    whatever is in the folder `leave_out`, which may lie within.

    Raises
    ------
    FileNotFoundError, NotADirectoryError
        There is no such folder.
    OSError
        A folder cannot be read.
    """
    apart = leave_out.resolve()
    found: list[Path] = []

    def refuse(error: OSError) -> None:
        raise error

    for place, folders, files in os.walk(folder, onerror=refuse):
        here = Path(place)
        folders[:] = [
            name for name in folders if not name.startswith(".") and (here / name).resolve() != apart
        ]
        found += [
            here / name
            for name in files
            if name.casefold().endswith(".xlsx") and not name.startswith((".", "~$"))
        ]
    return sorted(found, key=lambda path: path.relative_to(folder).parts)


def shown_path(path: Path, folder: Path) -> str:
    """Path below the folder, with forward slashes; bytes that are no text become question marks."""
    return os.fsencode(path.relative_to(folder).as_posix()).decode("utf-8", "replace")


def safe_name(stem: str) -> str:
    """A file name without its ending that every usual system takes, as like the given one as may be."""
    kept = "".join(c if c.isalnum() or c in _KEPT else "_" for c in unicodedata.normalize("NFC", stem))
    kept = kept.strip(" ").lstrip(".")
    short = _cut(kept, _LONGEST).rstrip(" .")
    if short.partition(".")[0].casefold() in _DEVICES:
        short = f"_{short}"
    return short or "_"


def _cut(text: str, length: int) -> str:
    """The start of a text that takes at most so many bytes."""
    return text.encode()[:length].decode("utf-8", "ignore")


def assign_names(workbooks: Iterable[str], recorded: Mapping[str, str]) -> dict[str, str]:
    """Give every workbook a name for its files, no two alike even where case does not count.

    Parameters
    ----------
    workbooks
        Paths as shown.
    recorded
        Workbook -> name of earlier runs, which stay: a client's files do not change their name
        because another client of the same name has come.

    Returns
    -------
    dict
        Workbook -> name. The first workbook of a name, in order of path, has it plain; others
        have a number made of their path behind it.
    """
    names: dict[str, str] = {}
    taken = {LIST_NAME}
    wanted = sorted(workbooks)
    for workbook in wanted:
        name = recorded.get(workbook)
        if name is not None and name == safe_name(name) and name.casefold() not in taken:
            names[workbook] = name
            taken.add(name.casefold())
    for workbook in wanted:
        if workbook in names:
            continue
        plain = name = safe_name(Path(workbook).stem)
        salt = 0
        while name.casefold() in taken:
            digest = hashlib.sha256(f"{workbook}\0{salt}".encode()).hexdigest()
            name, salt = f"{_cut(plain, _LONGEST - 9)}-{digest[:8]}", salt + 1
        names[workbook] = name
        taken.add(name.casefold())
    return names
