"""Sample clients for the benchmarks, and where they run; one BLAS thread, as the planner runs."""

from __future__ import annotations

import os

os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")  # before numpy is imported

import platform
from collections.abc import Iterator
from datetime import date
from pathlib import Path

import numpy as np

from planner.memory import keep_freed_memory
from planner.problem import Problem
from planner.problem_building import build_problem
from planner.workbook.reading import read_workbook

FOLDER = Path(__file__).parents[2] / "sample_clients"


def sample_problems(wanted: list[str] | None = None) -> Iterator[tuple[str, Problem]]:
    """Name and problem of every sample client that can be planned for, or of those wanted."""
    for path in sorted(FOLDER.glob("*.xlsx")):
        if path.stem != "broken" and (not wanted or path.stem in wanted):
            yield path.stem, build_problem(read_workbook(path).household)


def on_one_core() -> None:
    """Leave the second core out, so that processor time is all there is; keep memory as the planner does."""
    if hasattr(os, "sched_setaffinity"):
        os.sched_setaffinity(0, {min(os.sched_getaffinity(0))})
    keep_freed_memory()


def machine() -> str:
    """Return where and when: printed above each table, for the reader of figures."""
    load = os.getloadavg()[0] if hasattr(os, "getloadavg") else float("nan")
    versions = f"Python {platform.python_version()}, numpy {np.__version__}"
    return f"{date.today()}; {os.cpu_count()} cores, {versions}; load {load:.1f}"
