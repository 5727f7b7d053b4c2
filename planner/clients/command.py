"""The command `planner clients`: from its options to a run; see `listing`."""

from __future__ import annotations

from contextlib import ExitStack
from dataclasses import dataclass
from pathlib import Path

from rich.console import Console

from planner.clients.asking import asked_changes, asked_stresses
from planner.clients.display import watching
from planner.clients.listing import ListResult, plan_clients
from planner.clients.running import dask_cluster, local_processes, usable_cores
from planner.clients.worker import Work
from planner.diagnostics import Diagnostic, InputError
from planner.plan import PlanSettings


@dataclass(frozen=True, slots=True)
class Options:
    """The command line's options, as typed."""

    folder: Path
    output: Path
    workers: int | None = None
    scheduler: str | None = None
    what_if: tuple[str, ...] = ()
    stress: tuple[str, ...] = ()
    together: bool = False
    last: Path | None = None


def run_command(options: Options, settings: PlanSettings, errors: Console) -> ListResult:
    """Plan for everybody; progress goes to `errors`.

    Raises
    ------
    InputError, PlannerError, OSError
        See `plan_clients`; options that cannot be meant.
    """
    found: list[Diagnostic] = []
    if options.workers is not None and options.scheduler is not None:
        message = "expected --workers for this machine or --scheduler for a cluster, not both"
        found.append(Diagnostic("workers-and-scheduler", "--workers", message))
    try:
        changes = asked_changes(options.what_if, together=options.together)
    except InputError as error:
        found.extend(error.diagnostics)
    try:
        stresses = asked_stresses(options.stress)
    except InputError as error:
        found.extend(error.diagnostics)
    if found:
        raise InputError(found)
    work = Work(settings, changes, stresses)
    with ExitStack() as stack:
        if options.scheduler is not None:
            engine = stack.enter_context(dask_cluster(options.scheduler))
        else:
            engine = stack.enter_context(local_processes(options.workers or usable_cores()))
        watch = stack.enter_context(watching(errors))
        return plan_clients(options.folder, options.output, work, engine, last=options.last, watch=watch)
