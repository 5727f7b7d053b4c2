"""Independent jobs on a second core: a copy of this process takes some, the caller the others.

The copy (`os.fork`) starts with everything that is in memory, at no cost, and sends back results
alone, the arrays among them through memory that both share. Jobs are handed out one at a time,
through a pipe that both read, so that neither waits while there is work. Where no copy can be
had, or it fails, the caller does everything itself: the results are the same.
"""

from __future__ import annotations

import mmap
import os
import pickle
import signal
import sys
import threading
from collections.abc import Callable, Iterator, Sequence
from contextlib import contextmanager, suppress
from typing import Generic, TypeVar

T = TypeVar("T")

_is_copy = False  # in this process: it makes no copies of its own
_has_help = False  # in this process: it shares the work that it is doing with a copy already

MOST_JOBS = 255
"""A job's number is one byte in the pipe, which is read whole or not at all."""

SHARED_BYTES = 512 << 20
"""Memory set aside for the arrays among a copy's results; pages that are not used cost nothing."""

Done = tuple[bytes, list[tuple[int, int]]]
"""Results of a copy: pickled, and where in the shared memory their arrays lie."""


class Shared(Generic[T]):
    """Jobs shared with a copy of this process; see `shared`."""

    def __init__(self, jobs: Sequence[Callable[[], T]]) -> None:
        self._jobs = jobs
        self._numbers = -1  # the pipe of numbers of jobs not yet taken
        self._answers = -1  # the pipe of the copy's results
        self._copy = 0
        self._memory: mmap.mmap | None = None
        self._done: dict[int, T] = {}
        if may_copy() and 1 <= len(jobs) <= MOST_JOBS:
            self._start()

    def results(self, on_job: Callable[[int], None] = lambda number: None) -> list[T]:
        """Do what is not taken yet, wait for the copy, and return the results in the jobs' order.

        Parameters
        ----------
        on_job
            Called with its number before each job that is done here.

        Raises
        ------
        Exception
            What a job raises. A job that fails in the copy is tried again here.
        """
        if self._copy:
            while (number := self._next()) is not None:
                on_job(number)
                self._done[number] = self._with_help(number)
            self._done |= self._answer()
        for number, job in enumerate(self._jobs):
            if number not in self._done:
                on_job(number)
                self._done[number] = job()
        return [self._done[number] for number in range(len(self._jobs))]

    def _with_help(self, number: int) -> T:
        """Do a job while the copy does others: there is no core left for what could be shared within it."""
        global _has_help
        before, _has_help = _has_help, True
        try:
            return self._jobs[number]()
        finally:
            _has_help = before

    def close(self) -> None:
        """End the copy, whatever it is doing."""
        if self._copy:
            with suppress(ProcessLookupError):
                os.kill(self._copy, signal.SIGKILL)
            with suppress(ChildProcessError):
                os.waitpid(self._copy, 0)
            os.close(self._numbers)
            os.close(self._answers)
            self._copy = 0

    def _start(self) -> None:
        self._numbers, put = os.pipe()
        os.write(put, bytes(range(len(self._jobs))))
        os.close(put)
        self._answers, answer = os.pipe()
        with suppress(OSError, ValueError):
            self._memory = mmap.mmap(-1, SHARED_BYTES)
        parent = os.getpid()
        self._copy = os.fork()
        if self._copy == 0:
            self._work(answer, parent)
        os.close(answer)

    def _work(self, answer: int, parent: int) -> None:
        """In the copy: take jobs, send the results of all, and end without cleaning up."""
        global _is_copy
        _is_copy = True
        try:
            signal.signal(signal.SIGINT, signal.SIG_IGN)  # Ctrl-C is the caller's business
            done: dict[int, T] = {}
            while (number := self._next()) is not None and os.getppid() == parent:
                with suppress(Exception):
                    done[number] = self._jobs[number]()
            with os.fdopen(answer, "wb") as stream:
                pickle.dump(self._packed(done), stream)
        finally:
            os._exit(0)

    def _next(self) -> int | None:
        """Take a job: its number, or None where none is left."""
        taken = os.read(self._numbers, 1)
        return taken[0] if taken else None

    def _packed(self, done: dict[int, T]) -> Done:
        """Pickle results; arrays go to the shared memory as far as it reaches."""
        places: list[tuple[int, int]] = []
        end = 0

        def put(buffer: pickle.PickleBuffer) -> bool:
            nonlocal end
            raw = buffer.raw()
            if self._memory is None or end + raw.nbytes > SHARED_BYTES:
                return True  # into the pickle itself
            self._memory[end : end + raw.nbytes] = raw
            places.append((end, end + raw.nbytes))
            end += -(-raw.nbytes // 64) * 64
            return False

        return pickle.dumps(done, protocol=5, buffer_callback=put), places

    def _answer(self) -> dict[int, T]:
        with os.fdopen(os.dup(self._answers), "rb") as stream:
            content = stream.read()
        try:
            packed, places = pickle.loads(content)
            buffers = [memoryview(self._memory)[a:b] for a, b in places] if self._memory else []
            answer: dict[int, T] = pickle.loads(packed, buffers=buffers)
        except Exception:  # a copy that was killed has sent nothing, or half
            return {}
        return answer


@contextmanager
def shared(jobs: Sequence[Callable[[], T]]) -> Iterator[Shared[T]]:
    """Start jobs beside what the caller does next; `Shared.results` does the rest of them.

    Jobs must not depend on one another, and their results must be picklable.
    """
    work = Shared(jobs)
    try:
        yield work
    finally:
        work.close()


def is_copy() -> bool:
    """Whether this process is such a copy: it has nobody to report to."""
    return _is_copy


def may_copy() -> bool:
    """Whether a copy is safe and of use: Linux, an idle second core, no other thread in this process.

    A fork copies only the thread that calls it: locks held by others would stay locked. Workers of a
    client list have a thread of their own, and so stay alone on their core.
    """
    if _is_copy or _has_help:
        return False
    return sys.platform == "linux" and threading.active_count() == 1 and len(os.sched_getaffinity(0)) > 1
