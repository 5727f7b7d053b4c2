"""The folder that results go to: what is finished already, and how a run killed at any moment goes on.

Beside ``<name>.pdf`` and ``<name>.json`` a client has a record, ``.clients/<name>.json``. The
record is written first and holds the fingerprints of the two files: a client is finished where
its record has the run's key and both files have their fingerprints, whatever happened in between.
"""

from __future__ import annotations

import hashlib
import json
import sys
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import asdict, dataclass, replace
from pathlib import Path
from typing import Any

from planner import __version__
from planner.clients.rows import ClientRow, LastPlan, row_from_json, row_json
from planner.clients.worker import Finished, Work
from planner.diagnostics import PlannerError
from planner.files import write_whole

RECORDS = ".clients"
_FORM = 1  # of records; another form is as if there were none


def run_key(content: bytes, work: Work) -> str:
    """Fingerprint of all that a plan comes from: workbook, program version, settings, changes asked."""
    asked = {"form": _FORM, "version": __version__, "work": asdict(work)}
    text = json.dumps(asked, sort_keys=True, default=str)
    return hashlib.sha256(content + b"\0" + text.encode()).hexdigest()


@dataclass(frozen=True, slots=True)
class Record:
    """What is known of a client from earlier runs; `last` is of an earlier year than `row`."""

    workbook: str
    key: str
    pdf_sha256: str
    results_sha256: str
    row: ClientRow


class Store:
    """Results of a run in a folder.

    Parameters
    ----------
    folder
        Made where it is missing.
    last
        Folder with last year's results; None: what is in `folder` itself from before.
    """

    def __init__(self, folder: Path, last: Path | None = None) -> None:
        self.folder = folder
        self.last_folder = last
        (folder / RECORDS).mkdir(parents=True, exist_ok=True)
        self.records: dict[str, Record] = {}
        for path in sorted((folder / RECORDS).glob("*.json")):
            record = _read_record(path)
            if record is not None:
                self.records[path.stem] = record

    @contextmanager
    def alone(self) -> Iterator[None]:
        """Keep other runs out of the folder meanwhile, and clear what killed ones left half-written.

        Raises
        ------
        PlannerError
            Another run is at work in it.
        """
        with (self.folder / RECORDS / "lock").open("a") as file:
            _lock(file.fileno(), self.folder)
            for place in (self.folder, self.folder / RECORDS):
                for part in place.glob(".*.part"):
                    part.unlink()
            yield

    def names(self) -> dict[str, str]:
        """Workbook -> name of its files, from earlier runs."""
        return {record.workbook: name for name, record in self.records.items()}

    def finished(self, name: str, workbook: str, key: str) -> ClientRow | None:
        """Row of a client who needs no more work; None where there is any left to do."""
        record = self.records.get(name)
        if record is None or record.key != key or record.workbook != workbook:
            return None
        for ending, fingerprint in (("pdf", record.pdf_sha256), ("json", record.results_sha256)):
            path = self.folder / f"{name}.{ending}"
            if not path.is_file() or _sha256(path.read_bytes()) != fingerprint:
                return None
        return self.with_last(record.row)

    def save(self, done: Finished, key: str) -> ClientRow:
        """Write a client's files; without a plan nothing is written, and earlier files stay.

        Returns
        -------
        ClientRow
            With the last plan.

        Raises
        ------
        OSError
            A file cannot be written.
        """
        if done.row.state != "planned":
            return done.row
        row = _with(done.row, self._earlier(done.row))
        record = Record(row.workbook, key, _sha256(done.pdf), _sha256(done.results), row)
        text = json.dumps(
            {"form": _FORM} | asdict(record) | {"row": row_json(row)}, indent=1, ensure_ascii=False
        )
        write_whole(self.folder / RECORDS / f"{row.name}.json", text.encode("utf-8"), clear=False)
        self.records[row.name] = record
        write_whole(self.folder / f"{row.name}.pdf", done.pdf, clear=False)
        write_whole(self.folder / f"{row.name}.json", done.results, clear=False)
        return self.with_last(row)

    def with_last(self, row: ClientRow) -> ClientRow:
        """Return a row with the plan of the folder of last year, where one was given."""
        if self.last_folder is None:
            return row
        return _with(row, _plan_in(self.last_folder / f"{row.name}.json", row))

    def _earlier(self, row: ClientRow) -> LastPlan | None:
        """Return the latest plan of an earlier date that this folder knows for a client."""
        record = self.records.get(row.name)
        if record is None or record.row.client != row.client:
            return _plan_in(self.folder / f"{row.name}.json", row)
        before = record.row
        if before.plan_date < row.plan_date and before.spending_this_year is not None:
            return LastPlan(before.plan_date, before.spending_this_year)
        if before.last is not None and before.last.plan_date < row.plan_date:
            return before.last
        return None


def _with(row: ClientRow, last: LastPlan | None) -> ClientRow:
    return replace(row, last=last)


def _plan_in(path: Path, row: ClientRow) -> LastPlan | None:
    """Return the plan in a results file, if it is an earlier one of the same client in that currency."""
    try:
        data = json.loads(path.read_text("utf-8"))
        same = data["client"] == row.client and data["currency"] == row.currency
        date, spending = str(data["plan_date"]), float(data["this_year"]["spending"])
    except (OSError, ValueError, KeyError, TypeError, RecursionError):
        return None
    return LastPlan(date, spending) if same and date < row.plan_date else None


def _read_record(path: Path) -> Record | None:
    """Return a record; None where it cannot be read, which only means doing the client again."""
    try:
        data: dict[str, Any] = json.loads(path.read_text("utf-8"))
        if data.pop("form") != _FORM:
            return None
        return Record(**data | {"row": row_from_json(data["row"])})
    except (OSError, ValueError, KeyError, TypeError, RecursionError):
        return None


def _sha256(content: bytes) -> str:
    return hashlib.sha256(content).hexdigest()


def _lock(descriptor: int, folder: Path) -> None:
    """Take the lock of a folder; the system gives it back when the process ends, however it does."""
    try:
        if sys.platform == "win32":
            import msvcrt

            msvcrt.locking(descriptor, msvcrt.LK_NBLCK, 1)
        else:
            import fcntl

            fcntl.flock(descriptor, fcntl.LOCK_EX | fcntl.LOCK_NB)
    except (BlockingIOError, PermissionError):
        raise PlannerError(f"another run is at work in {folder}; wait for it, or choose another") from None
