"""From a folder of client workbooks to a folder of plans and the list of all clients."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from contextlib import closing
from dataclasses import dataclass
from pathlib import Path
from typing import Protocol

from planner.clients.lists import list_json, list_workbook
from planner.clients.naming import LIST_NAME, assign_names, find_workbooks, shown_path
from planner.clients.rows import ClientRow, by_urgency, failed_row
from planner.clients.running import Engine, run
from planner.clients.store import Store, run_key
from planner.clients.worker import Finished, Task, Work, plan_client
from planner.diagnostics import Diagnostic, InputError
from planner.files import read_limited, write_whole
from planner.reports.export import json_text
from planner.workbook.archive import LARGEST_FILE


class Watch(Protocol):
    """Told of every client as it is done."""

    def begin(self, total: int) -> None:
        """There are so many clients."""

    def client(self, row: ClientRow, *, already: bool) -> None:
        """One is done, or was done by an earlier run."""


@dataclass(frozen=True, slots=True)
class ListResult:
    """Rows by who needs a call first; how many were finished by an earlier run; the files written."""

    rows: tuple[ClientRow, ...]
    already: int
    files: tuple[Path, ...]


def plan_clients(
    folder: Path,
    output: Path,
    work: Work,
    engine: Engine,
    *,
    last: Path | None = None,
    watch: Watch | None = None,
    plan: Callable[[Task], Finished] = plan_client,
) -> ListResult:
    """Plan for every client workbook in a folder.

    Clients whose files are there already, made from the same workbook by the same program with
    the same settings, are skipped: a run killed at any moment goes on where it was.

    Parameters
    ----------
    folder
        Client workbooks, in folders within too.
    output
        Takes ``<client>.pdf`` and ``<client>.json`` for each, ``clients.xlsx`` and
        ``clients.json``; made where it is missing. Nothing is written anywhere else.
    work
        What is asked for each.
    engine
        Where it is done.
    last
        A folder with last year's results. Default: earlier plans in `output`.
    watch
        Told of every client.
    plan
        What a worker does, for tests.

    Raises
    ------
    InputError
        Code ``no-clients``: no workbook in the folder. Code ``output-clash``: the results would go
        among the workbooks.
    PlannerError
        Another run is at work in `output`, or the workers cannot be used.
    OSError
        No such folder, or a file cannot be written.
    """
    if output.resolve() == folder.resolve():
        message = f"{output} is the folder of the client workbooks; expected another for the results"
        raise InputError([Diagnostic("output-clash", "-o", message)])
    workbooks = find_workbooks(folder, output)
    if not workbooks:
        raise InputError([Diagnostic("no-clients", str(folder), "no .xlsx file in this folder")])
    if last is not None and not last.is_dir():
        raise FileNotFoundError(2, "no such folder", str(last))
    store = Store(output, last)
    with store.alone():
        rows, already = _rows(folder, workbooks, store, work, engine, watch, plan)
        ordered = by_urgency(rows)
        files = (output / f"{LIST_NAME}.xlsx", output / f"{LIST_NAME}.json")
        write_whole(files[0], list_workbook(ordered, work))
        write_whole(files[1], json_text(list_json(ordered, work)).encode("utf-8"))
    return ListResult(tuple(ordered), already, files)


def _rows(
    folder: Path,
    workbooks: list[Path],
    store: Store,
    work: Work,
    engine: Engine,
    watch: Watch | None,
    plan: Callable[[Task], Finished],
) -> tuple[list[ClientRow], int]:
    """Row of every client, in no order; how many were finished before."""
    shown = {path: shown_path(path, folder) for path in workbooks}
    names = assign_names(shown.values(), store.names())
    rows: list[ClientRow] = []
    keys: dict[str, str] = {}
    already = 0

    def note(row: ClientRow, *, before: bool = False) -> None:
        rows.append(row)
        if watch is not None:
            watch.client(row, already=before)

    def tasks() -> Iterator[Task]:
        nonlocal already
        for path in workbooks:
            workbook = shown[path]
            name = names[workbook]
            try:
                content = read_limited(path, LARGEST_FILE)
            except OSError as error:
                reason = f"cannot be read ({(error.strerror or type(error).__name__).lower()})"
                note(failed_row(name, workbook, failure=reason))
                continue
            keys[name] = run_key(content, work)
            row = store.finished(name, workbook, keys[name])
            if row is None:
                yield Task(name, workbook, str(path.parent.resolve()), content, work)
            else:
                already += 1
                note(row, before=True)

    if watch is not None:
        watch.begin(len(workbooks))
    with closing(run(tasks(), engine, plan)) as finished:  # type: ignore[type-var]
        for done in finished:
            note(store.save(done, keys[done.row.name]))
    return rows, already
