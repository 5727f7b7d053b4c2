"""What a worker does for one client: bytes of a workbook in, bytes of a plan out.

This module loads nothing heavy by itself, so that a new process can settle how many threads numpy
takes before numpy is there.
"""

from __future__ import annotations

import os
import threading
from dataclasses import dataclass, field, replace
from pathlib import Path, PurePosixPath
from typing import TYPE_CHECKING

from planner import __version__
from planner.diagnostics import InputError, PlannerError
from planner.memory import keep_freed_memory

if TYPE_CHECKING:
    from planner.clients.rows import ChangedFigures, ClientRow
    from planner.household import Household
    from planner.plan import PlanSettings
    from planner.plan_record import Plan
    from planner.workbook.reading import ReadWorkbook

THREAD_VARIABLES = ("OPENBLAS_NUM_THREADS", "OMP_NUM_THREADS", "MKL_NUM_THREADS")

# The PDF library keeps one parser for all paragraphs, so threads of one process take turns.
_DRAWING = threading.Lock()


@dataclass(frozen=True, slots=True)
class Work:
    """What is asked for every client of a list.

    Attributes
    ----------
    settings
        How each plan is computed.
    changes
        What-ifs for all: the name of each and its (address, value) pairs.
    stresses
        Names of stresses for all.
    """

    settings: PlanSettings
    changes: tuple[tuple[str, tuple[tuple[str, str], ...]], ...] = ()
    stresses: tuple[str, ...] = ()


@dataclass(frozen=True, slots=True)
class Task:
    """One client.

    Attributes
    ----------
    name
        Of its files, without the ending.
    workbook
        Path as shown.
    folder
        Where the workbook lies: its logo is looked for there.
    content
        The workbook's bytes.
    """

    name: str
    workbook: str
    folder: str
    content: bytes = field(repr=False)
    work: Work
    version: str = __version__


@dataclass(frozen=True, slots=True)
class Finished:
    """One client's row and, where there is a plan, its PDF and results file."""

    row: ClientRow
    pdf: bytes = field(default=b"", repr=False)
    results: bytes = field(default=b"", repr=False)


def start_worker() -> None:
    """Set up a new process of this machine, before it loads numpy.

    One thread a process: the processes themselves fill the cores. Ctrl-C is the business of the
    process that hands out the work; where that one is gone, a worker has nothing to live for.
    """
    import signal

    for variable in THREAD_VARIABLES:
        os.environ.setdefault(variable, "1")
    keep_freed_memory()
    signal.signal(signal.SIGINT, signal.SIG_IGN)
    threading.Thread(target=_end_with_parent, daemon=True).start()


def _end_with_parent() -> None:
    """Wait until the process that started this one is gone, then end, whatever is being done."""
    import multiprocessing

    parent = multiprocessing.parent_process()
    if parent is not None:
        parent.join()
        os._exit(1)


def plan_client(task: Task) -> Finished:
    """Make one client's plan, PDF and results file.

    Never raises for the client's sake: problems of the workbook and failures of the program are
    in the row, so that one client cannot end the run, and none of its data gets into a log.
    """
    from planner.clients.rows import failed_row

    try:
        if task.version != __version__:
            message = f"the worker has version {__version__} of the program, expected {task.version}"
            return Finished(failed_row(task.name, task.workbook, failure=message))
        return _planned(task)
    except InputError as error:
        return Finished(failed_row(task.name, task.workbook, problems=error.diagnostics))
    except PlannerError as error:
        return Finished(failed_row(task.name, task.workbook, failure=str(error)))
    except Exception as error:
        if os.environ.get("PLANNER_TRACEBACK"):
            raise
        failure = f"the program failed ({type(error).__name__}: {error}); please report it"
        return Finished(failed_row(task.name, task.workbook, failure=failure))


def _planned(task: Task) -> Finished:
    from planner.clients.rows import planned_row
    from planner.reports.export import json_text, results_json
    from planner.reports.pdf import render_pdf
    from planner.workbook.logo import with_logo
    from planner.workbook.reading import read_content

    name = PurePosixPath(task.workbook).name
    read = read_content(task.content, name)
    household, warnings = with_logo(read.household, read.data, Path(task.folder))
    read = replace(read, household=household, warnings=(*read.warnings, *warnings))
    plan, changed = _plan_with_changes(read, task.work, name)
    with _DRAWING:
        pdf = render_pdf(plan)
    results = json_text(results_json(plan)).encode("utf-8")
    return Finished(planned_row(task.name, task.workbook, plan, changed), pdf, results)


def _plan_with_changes(read: ReadWorkbook, work: Work, name: str) -> tuple[Plan, list[ChangedFigures]]:
    """Return the plan with the changes asked for all as further what-ifs, and their figures.

    A change that this client cannot have (no such pension, a household that breaks a rule) is
    noted, no reason to have no plan.
    """
    from planner.clients.rows import ChangedFigures
    from planner.plan import make_plan
    from planner.reports.export import money, share
    from planner.stresses import stresses

    asked, notes = _changed_households(read, work)
    standard = {name for name, _ in stresses(read.household)} if work.settings.what_ifs else set()
    also = [(change, household) for change, household in asked.items() if change not in standard]
    try:
        plan = make_plan(read, work.settings, None, name, also=also)
    except InputError as error:
        if not also:
            raise
        plan = make_plan(read, work.settings, None, name)
        notes |= {change: _note(error) for change, _ in also}  # the message says which it was
        also = []
    # Standard stresses stand first among the plan's what-ifs, those asked for last.
    results = {result.name: result for result in reversed(plan.what_ifs)}
    results |= {r.name: r for r in plan.what_ifs[len(plan.what_ifs) - len(also) :]}
    figures = []
    for change in (*(name for name, _ in work.changes), *work.stresses):
        if change in notes:
            figures.append(ChangedFigures(change, None, None, notes[change]))
        else:
            result = results[change]
            chance = share(result.chance_below_essential)
            figures.append(ChangedFigures(change, money(result.spending_this_year), chance))
    return plan, figures


def _changed_households(read: ReadWorkbook, work: Work) -> tuple[dict[str, Household], dict[str, str]]:
    """Household of every change asked for that this client can have; what is wrong with the others."""
    from planner.clients.asking import stress_called
    from planner.scenarios import changed

    asked: dict[str, Household] = {}
    notes: dict[str, str] = {}
    for name, pairs in work.changes:
        try:
            asked[name] = changed(read, pairs).household
        except InputError as error:
            notes[name] = _note(error)
    for name in work.stresses:
        try:
            household = stress_called(name)[1](read.household)
        except InputError as error:
            notes[name] = _note(error)
            continue
        if household is None or household == read.household:
            notes[name] = "does not apply to this client"
        else:
            asked[name] = household
    return asked, notes


def _note(error: InputError) -> str:
    return "; ".join(p.message for p in error.diagnostics if p.severity == "error")
