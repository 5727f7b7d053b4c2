"""Jobs on a second core: the same results, whatever becomes of the copy that does some of them."""

import os
import signal
import threading
import time
from contextlib import suppress
from functools import partial

import numpy as np
import pytest

from planner import beside
from planner.beside import may_copy, shared

needs_copy = pytest.mark.skipif(not may_copy(), reason="one core, or not Linux: all is done in one process")


def whose(number: int) -> tuple[int, int]:
    """The job's number and the process that did it; slow enough for both to get some."""
    time.sleep(0.05)
    return number, os.getpid()


def fails_once_copied(parent: int, number: int) -> int:
    """Fail everywhere but in the process that asked."""
    if os.getpid() != parent:
        raise ValueError(number)
    return number


def dies_once_copied(parent: int, number: int) -> int:
    """Kill the process, unless it is the one that asked."""
    if os.getpid() != parent:
        os.kill(os.getpid(), signal.SIGKILL)
    time.sleep(0.05)
    return number


def broken() -> int:
    """A job that fails anywhere."""
    raise KeyError("broken")


@needs_copy
def test_results_come_in_order_from_both_processes() -> None:
    with shared([partial(whose, number) for number in range(10)]) as work:
        results = work.results()
    assert [number for number, _ in results] == list(range(10))
    assert len({process for _, process in results}) == 2


def test_work_starts_before_results_are_asked_for() -> None:
    with shared([partial(whose, number) for number in range(4)]) as work:
        time.sleep(0.6 if may_copy() else 0.0)
        done_here: list[int] = []
        results = work.results(done_here.append)
    assert [number for number, _ in results] == list(range(4))
    assert done_here == ([] if may_copy() else [0, 1, 2, 3])


@pytest.mark.parametrize("job", [fails_once_copied, dies_once_copied])
def test_what_the_copy_fails_to_do_is_done_by_the_caller(job) -> None:
    with shared([partial(job, os.getpid(), number) for number in range(6)]) as work:
        assert work.results() == list(range(6))


def test_a_job_that_fails_raises() -> None:
    with shared([broken, broken]) as work, pytest.raises(KeyError, match="broken"):
        work.results()


def numbered(number: int) -> dict[str, object]:
    """A large array, a transposed one, and something else."""
    time.sleep(0.05)
    return {"large": np.arange(100_000) + number, "turned": np.full((3, 500), number).T, "name": str(number)}


@pytest.mark.parametrize("memory", [0, 1_000_000, beside.SHARED_BYTES])
def test_arrays_come_back_whole(monkeypatch: pytest.MonkeyPatch, memory: int) -> None:
    """In shared memory as far as it reaches, in the pipe beyond it or where there is none."""
    monkeypatch.setattr(beside, "SHARED_BYTES", memory)
    with shared([partial(numbered, number) for number in range(6)]) as work:
        results = work.results()
    for number, result in enumerate(results):
        assert result["name"] == str(number)
        np.testing.assert_array_equal(result["large"], np.arange(100_000) + number)
        np.testing.assert_array_equal(result["turned"], np.full((500, 3), number))
        result["large"][0] = -1  # nobody else's memory any more
    assert [int(result["large"][1]) for result in results] == [number + 1 for number in range(6)]


@needs_copy
def test_leaving_early_ends_the_copy() -> None:
    start = time.monotonic()
    with suppress(RuntimeError), shared([partial(time.sleep, 60)] * 3) as work:
        copy = work._copy
        raise RuntimeError
    assert time.monotonic() - start < 30
    with pytest.raises(ProcessLookupError):
        os.kill(copy, 0)


def test_no_copy_beside_another_thread(monkeypatch: pytest.MonkeyPatch) -> None:
    """A fork would leave the other thread's locks locked."""
    release = threading.Event()
    other = threading.Thread(target=release.wait)
    other.start()
    try:
        assert not may_copy()
        with shared([os.getpid] * 3) as work:
            assert work.results() == [os.getpid()] * 3
    finally:
        release.set()
        other.join()
    monkeypatch.setattr(beside.sys, "platform", "elsewhere")
    assert not may_copy()
