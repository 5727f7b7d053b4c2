"""Handing clients to an executor and taking their plans back, whatever dies on the way."""

from __future__ import annotations

import multiprocessing
import os
from collections import deque
from collections.abc import Callable, Iterable, Iterator
from concurrent.futures import (
    FIRST_COMPLETED,
    BrokenExecutor,
    CancelledError,
    Executor,
    Future,
    ProcessPoolExecutor,
    wait,
)
from contextlib import contextmanager
from dataclasses import dataclass
from importlib import import_module
from importlib.util import find_spec
from typing import Any

from planner.clients.rows import failed_row
from planner.clients.worker import Finished, Task, plan_client, start_worker
from planner.diagnostics import PlannerError

_MOST_STARTS = 3
"""Executors in a row that may break before any client is finished."""

PATIENCE = "10s"
"""How long a scheduler may take to answer."""


@dataclass(frozen=True, slots=True)
class Engine:
    """Where work is done.

    Attributes
    ----------
    start
        Makes an executor; again where the last one broke.
    room
        How many clients may be handed over at a time: enough to keep every worker busy, few enough
        that their workbooks and plans take little memory here.
    """

    start: Callable[[], Executor]
    room: Callable[[], int]


def run(
    tasks: Iterable[Task], engine: Engine, work: Callable[[Task], Finished] = plan_client
) -> Iterator[Finished]:
    """Do all tasks on an executor; each comes back once, in the order they finish.

    Where a worker process dies and takes the executor with it, a new one is started. Clients that
    were being worked on are then tried one by one: one during whose trial the executor breaks
    again is given up as failed, the others lose nothing.

    Raises
    ------
    PlannerError
        The executor breaks before it does anything, or has cancelled the work.
    """
    fresh = iter(tasks)
    suspects: deque[Task] = deque()
    running: dict[Future[Finished], Task] = {}
    starts_without_result = 1
    executor = engine.start()
    try:
        while True:
            on_trial = bool(suspects)
            broken = False
            while not broken and len(running) < (1 if on_trial else engine.room()):
                task = suspects[0] if suspects else next(fresh, None)
                if task is None:
                    break
                try:
                    running[executor.submit(work, task)] = task
                except BrokenExecutor:
                    broken = True
                    if not on_trial:
                        suspects.append(task)
                else:
                    if on_trial:
                        suspects.popleft()
            if not running and not broken:
                return
            done, _ = wait(running, return_when=FIRST_COMPLETED)
            broken = broken or any(isinstance(_exception(future), BrokenExecutor) for future in done)
            if broken:  # then all that are left end with the executor
                done, _ = wait(running)
            lost: list[Task] = []
            for future in done:
                task = running.pop(future)
                error = _exception(future)
                if isinstance(error, BrokenExecutor):
                    lost.append(task)
                    continue
                if isinstance(error, CancelledError):
                    raise PlannerError(
                        "the workers were taken away; run the same command again to go on"
                    ) from None
                starts_without_result = 0
                yield future.result() if error is None else _given_up(task, error)
            if not broken:
                continue
            if on_trial and lost:
                starts_without_result = 0
                yield _given_up(lost[0], lost=True)
            else:
                suspects.extend(lost)
            starts_without_result += 1
            if starts_without_result > _MOST_STARTS:
                raise PlannerError("the worker processes end as soon as they start")
            executor.shutdown(wait=False)
            executor = engine.start()
    finally:
        for future in running:
            future.cancel()
        executor.shutdown(wait=not running)


def _exception(future: Future[Any]) -> BaseException | None:
    try:
        return future.exception()
    except CancelledError as error:
        return error


def _given_up(task: Task, error: BaseException | None = None, *, lost: bool = False) -> Finished:
    reason = (
        "the process that worked on it died, twice (out of memory?)"
        if lost
        else f"the worker failed ({type(error).__name__}: {error})"
    )
    return Finished(failed_row(task.name, task.workbook, failure=reason))


def usable_cores() -> int:
    """Cores that this process may use."""
    if hasattr(os, "sched_getaffinity"):
        return len(os.sched_getaffinity(0))
    return os.cpu_count() or 1


@contextmanager
def local_processes(workers: int) -> Iterator[Engine]:
    """Processes on this machine, each started afresh with one thread for numpy.

    At the end, or on Ctrl-C, no worker of it is left.
    """
    before = set(multiprocessing.active_children())
    context = multiprocessing.get_context("spawn")

    def start() -> Executor:
        return ProcessPoolExecutor(workers, mp_context=context, initializer=start_worker)

    try:
        yield Engine(start, lambda: workers + workers // 4 + 1)
    except BaseException:
        for process in set(multiprocessing.active_children()) - before:
            process.terminate()
        raise


@contextmanager
def dask_cluster(address: str) -> Iterator[Engine]:
    """Workers of a running Dask cluster, through the executor of its own client.

    Dask hands the clients of a worker that dies to another by itself.

    Raises
    ------
    PlannerError
        The optional packages are missing, or no scheduler answers at the address.
    """
    if find_spec("distributed") is None:
        raise PlannerError(
            "a scheduler needs the package distributed, not installed here; install with: "
            "pip install '.[cluster]'"
        )
    distributed: Any = import_module("distributed")  # has no types that a check could use
    try:
        client = distributed.Client(address, timeout=PATIENCE, set_as_default=False)
    except (OSError, ValueError) as error:
        raise PlannerError(f"no scheduler answers at {address}: {error}") from None
    with client:

        def room() -> int:
            return max(2, 2 * sum(client.nthreads().values()))

        yield Engine(lambda: client.get_executor(pure=False), room)
