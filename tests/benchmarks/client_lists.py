"""How fast a client list goes: one worker, two workers, single commands, memory.

    python tests/benchmarks/client_lists.py [CLIENTS] [FUTURES]

Prints the table that stands in DEVELOPERS.md. Processor time is what a client costs whatever else
the machine does; clients a minute are by the clock and mean something on a machine with nothing
else to do.
"""

from __future__ import annotations

import os
import resource
import subprocess
import sys
import tempfile
import time
from pathlib import Path

sys.path.insert(0, str(Path(__file__).parents[1]))

import client_generator

IMPORTS = (
    "import planner.cli, planner.files, planner.plan, planner.reports.export, planner.reports.pdf, "
    "planner.reports.terminal, planner.workbook.reading; planner.reports.pdf.register()"
)


def measured(command: list[str]) -> tuple[float, float]:
    """Seconds by the clock and of processor time that a command and its children take."""
    before, start = resource.getrusage(resource.RUSAGE_CHILDREN), time.monotonic()
    result = subprocess.run(command, capture_output=True, text=True)
    after, end = resource.getrusage(resource.RUSAGE_CHILDREN), time.monotonic()
    # 2: some generated workbooks have problems; 1: the program failed on one, which a list says by name.
    assert result.returncode in (0, 1, 2), result.stderr
    return end - start, after.ru_utime + after.ru_stime - before.ru_utime - before.ru_stime


def main(n_clients: int, futures: int) -> None:
    """Measure and print."""
    os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")
    options = ["--futures", str(futures), "--no-what-ifs"]
    python = [sys.executable, "-m", "planner.cli"]
    with tempfile.TemporaryDirectory() as name:
        place = Path(name)
        workbooks = client_generator.write_list(place / "in", n_clients)
        rows: list[tuple[str, float, float]] = []
        start_processor = min(measured([sys.executable, "-c", IMPORTS])[1] for _ in range(3))
        for workers in (1, 2):
            out = str(place / f"out{workers}")
            command = [*python, "clients", str(place / "in"), "-o", out, "--workers", str(workers)]
            rows.append((f"list, {workers} worker{'s' * (workers > 1)}", *measured([*command, *options])))
            rows[-1] = (*rows[-1][:2], rows[-1][2] - (1 + workers) * start_processor)
        clock = processor = 0.0
        for workbook in workbooks:
            files = ["-o", str(place / "one.pdf"), "--json", str(place / "one.json")]
            took = measured([*python, "plan", str(workbook), *files, *options])
            clock, processor = clock + took[0], processor + took[1] - start_processor
        rows.append(("single plans", clock, processor))
    memory = resource.getrusage(resource.RUSAGE_CHILDREN).ru_maxrss / 1024**2  # KiB on Linux
    print(f"{n_clients} generated households, {futures} futures, no what-ifs; load {os.getloadavg()[0]:.1f}")
    print("| | clients a minute | processor seconds a client, less start-up |\n|---|---:|---:|")
    for what, clock, processor in rows:
        print(f"| {what} | {60 * n_clients / clock:.1f} | {processor / n_clients:.2f} |")
    print(f"start-up {start_processor:.2f} processor seconds; most memory of a process {memory:.2f} GiB")


if __name__ == "__main__":
    asked = [int(text) for text in sys.argv[1:3]]
    main(*(asked + [20, 500][len(asked) :]))
