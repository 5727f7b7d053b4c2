"""Client lists in real processes: the command, SIGKILL in the middle, a Dask cluster that loses a worker."""

import io
import json
import multiprocessing
import os
import random
import signal
import subprocess
import sys
import threading
import time
from collections.abc import Iterator
from pathlib import Path

import client_generator
import openpyxl
import psutil
import pytest
from test_privacy import WATCHED

from planner.clients import running
from planner.clients.listing import plan_clients
from planner.clients.running import dask_cluster, local_processes
from planner.clients.worker import Work
from planner.diagnostics import PlannerError
from planner.optimum.recursion import SolverSettings
from planner.plan import PlanSettings

N_CLIENTS = 6
WAIT = 60  # seconds for what takes about one on a free machine

# Settings that no option of the command goes down to.
TINY = PlanSettings(
    n_paths=100,
    n_proof_paths=20,
    solver=SolverSettings(taxable=12, cash=16),
    rules=(),
    what_ifs=False,
)
RUN = """
import sys
from pathlib import Path
from planner.clients.listing import plan_clients
from planner.clients.running import local_processes
from planner.clients.worker import Work
from planner.optimum.recursion import SolverSettings
from planner.plan import PlanSettings

if __name__ == "__main__":
    with local_processes(2) as engine:
        result = plan_clients(Path(sys.argv[1]), Path(sys.argv[2]), Work(TINY), engine)
    print(result.already)
"""


@pytest.fixture(scope="module")
def folder(tmp_path_factory) -> Path:
    """A few clients and a workbook that is none."""
    place = tmp_path_factory.mktemp("lists") / "in"
    client_generator.write_list(place, N_CLIENTS, simple=True)
    (place / "broken.xlsx").write_bytes(b"no workbook")
    return place


@pytest.fixture(scope="module")
def script(tmp_path_factory) -> Path:
    path = tmp_path_factory.mktemp("script") / "run.py"
    path.write_text(RUN.replace("TINY", repr(TINY)))
    return path


@pytest.fixture(scope="module")
def undisturbed(folder, script, tmp_path_factory) -> dict[str, object]:
    out = tmp_path_factory.mktemp("lists") / "undisturbed"
    subprocess.run([sys.executable, script, folder, out], check=True, timeout=4 * WAIT)
    return everything(out)


def everything(out: Path) -> dict[str, object]:
    """Content of every file but the lock; of workbooks their cells."""
    found: dict[str, object] = {}
    for path in sorted(out.rglob("*")):
        if path.suffix == ".xlsx":
            book = openpyxl.load_workbook(io.BytesIO(path.read_bytes()))
            found[path.name] = {sheet.title: list(sheet.iter_rows(values_only=True)) for sheet in book}
        elif path.is_file():
            found[path.relative_to(out).as_posix()] = path.read_bytes()
    return found


def test_killed_at_random_points_it_ends_as_if_undisturbed(folder, script, undisturbed, tmp_path):
    """SIGKILL of the run: its workers end by themselves, and the next run goes on."""
    out, draw = tmp_path / "out", random.Random(20260301)
    finished_before = 0
    for _ in range(2):
        process = subprocess.Popen([sys.executable, script, folder, out], stdout=subprocess.DEVNULL)
        # From the moment one more client is there, some part of the time that another takes.
        deadline = time.monotonic() + WAIT
        while len(list(out.glob("client_*.pdf"))) <= finished_before and time.monotonic() < deadline:
            time.sleep(0.005)
            assert process.poll() is None, "it ended before it could be killed"
        time.sleep(draw.uniform(0.0, 0.4))
        workers = psutil.Process(process.pid).children(recursive=True)
        process.send_signal(signal.SIGKILL)
        process.wait()
        assert workers
        _, left = psutil.wait_procs(workers, timeout=WAIT)
        assert not left, "workers live on"
        finished_before = len(list(out.glob("client_*.pdf")))
    last = subprocess.run(
        [sys.executable, script, folder, out], check=True, timeout=4 * WAIT, stdout=subprocess.PIPE
    )
    assert int(last.stdout) > 0  # what was finished was not done again
    assert everything(out) == undisturbed


def test_a_worker_process_that_is_killed_loses_nothing(folder, undisturbed, tmp_path):
    out = tmp_path / "out"
    before = set(multiprocessing.active_children())

    def one_worker() -> int:
        return (set(multiprocessing.active_children()) - before).pop().pid

    killer = threading.Thread(target=kill_when_begun, args=(out, one_worker))
    killer.start()
    with local_processes(2) as engine:
        plan_clients(folder, out, Work(TINY), engine)
    killer.join()
    assert everything(out) == undisturbed


def kill_when_begun(out: Path, victim) -> None:
    """Kill a process as soon as the first client's plan is there."""
    deadline = time.monotonic() + WAIT
    while not list(out.glob("client_*.pdf")):
        assert time.monotonic() < deadline, "no client was finished"
        time.sleep(0.01)
    os.kill(victim(), signal.SIGKILL)


def test_the_command(folder, tmp_path):
    """A broken workbook is a row, not the end; progress is lines on stderr, the result on stdout."""
    small = tmp_path / "small"
    small.mkdir()
    for name in ("client_0000", "broken"):
        (small / f"{name}.xlsx").write_bytes((folder / f"{name}.xlsx").read_bytes())
    command = [sys.executable, "-m", "planner.cli", "clients", str(small), "-o", str(tmp_path / "out")]
    options = ["--workers", "1", "--futures", "100", "--no-what-ifs", "--stress", "fall 30%"]
    result = subprocess.run([*command, *options], capture_output=True, text=True, timeout=4 * WAIT)
    assert result.returncode == 0, result.stderr
    assert "2 clients: 1 planned, 1 with problems in the workbook" in result.stdout
    assert "client_0000.xlsx: planned" in result.stderr
    assert "broken.xlsx: 1 problem" in result.stderr
    assert "\x1b" not in result.stdout + result.stderr
    assert "Traceback" not in result.stderr
    data = json.loads((tmp_path / "out" / "clients.json").read_text("utf-8"))
    states = {row["workbook"]: row["state"] for row in data["clients"]}
    assert states == {"client_0000.xlsx": "planned", "broken.xlsx": "problems"}
    planned = next(row for row in data["clients"] if row["state"] == "planned")
    assert planned["what_ifs"][0]["name"] == "savings fall by 30 % at the start"
    assert planned["what_ifs"][0]["spending_this_year"] < planned["spending_this_year"]


def test_ctrl_c_ends_the_run_and_its_workers(folder, tmp_path):
    command = [sys.executable, "-m", "planner.cli", "clients", str(folder), "-o", str(tmp_path / "out")]
    process = subprocess.Popen(command, stderr=subprocess.PIPE, stdout=subprocess.PIPE, text=True)
    assert process.stderr is not None
    process.stderr.readline()  # the broken workbook is done
    workers = psutil.Process(process.pid).children(recursive=True)
    process.send_signal(signal.SIGINT)
    _, errors = process.communicate(timeout=WAIT)
    assert process.returncode == 130, errors
    assert "Traceback" not in errors
    assert not psutil.wait_procs(workers, timeout=WAIT)[1]
    assert not list((tmp_path / "out").glob("*.part"))


WATCHED_RUN = """
from concurrent.futures import ThreadPoolExecutor
from planner.clients.running import Engine
engine = Engine(lambda: ThreadPoolExecutor(1), lambda: 1)
plan_clients(Path(sys.argv[2]), Path(sys.argv[3]), Work(TINY), engine)
"""


def test_nothing_is_written_elsewhere_and_nobody_is_called(folder, tmp_path):
    """What a worker does and what the run does, here in one process under the hook of the other commands."""
    small, log = tmp_path / "small", tmp_path / "log"
    small.mkdir()
    (small / "a.xlsx").write_bytes((folder / "client_0000.xlsx").read_bytes())
    code = RUN.split("if __name__")[0] + WATCHED + WATCHED_RUN.replace("TINY", repr(TINY))
    command = [sys.executable, "-c", code, "watched", str(small), str(tmp_path / "out")]
    environment = os.environ | {"WATCH_LOG": str(log)}
    done = subprocess.run(
        command, cwd=tmp_path, env=environment, capture_output=True, text=True, timeout=4 * WAIT
    )
    assert done.returncode == 0, done.stderr
    written = {Path(tmp_path, line) for line in log.read_text().splitlines() if line != "/dev/null"}
    kept = {path for path in written if "__pycache__" not in path.parts}
    assert len(kept) >= 6  # the lock, the record, the plan's two files, the list's two; and folders
    assert not {path for path in kept if tmp_path / "out" not in (path, *path.parents)}


@pytest.mark.parametrize(
    ("options", "code", "words"),
    [
        (("--workers", "2", "--scheduler", "tcp://127.0.0.1:1"), 2, "workers-and-scheduler"),
        (("--stress", "no such"), 2, "stress-unknown"),
        (("--what-if", "no equals"), 2, "address-malformed"),
        (("--workers", "0"), 2, "workers"),
        (("--last", "nowhere"), 1, "nowhere"),
    ],
)
def test_options_that_cannot_be_meant(folder, tmp_path, options, code, words):
    from typer.testing import CliRunner

    from planner.cli import app

    result = CliRunner().invoke(app, ["clients", str(folder), "-o", str(tmp_path / "out"), *options])
    assert result.exit_code == code, result.output
    assert words in result.stderr
    assert not list(tmp_path.glob("out/*.pdf"))


# A Dask cluster ------------------------------------------------------------------------------------


class Cluster:
    """A scheduler and two workers, each a process of its own on this machine."""

    def __init__(self, place: Path) -> None:
        self.place = place
        file = place / "scheduler.json"
        self.processes = [
            self._start("scheduler", "--host", "127.0.0.1", "--port", "0", "--scheduler-file", str(file))
        ]
        deadline = time.monotonic() + WAIT
        while not file.exists() or not file.read_text():
            assert time.monotonic() < deadline, "the scheduler did not start"
            time.sleep(0.05)
        self.address = json.loads(file.read_text())["address"]
        options = ("--nthreads", "1", "--no-nanny", "--no-dashboard", "--local-directory", str(place))
        self.processes += [self._start("worker", self.address, *options) for _ in range(2)]

    def _start(self, *arguments: str) -> subprocess.Popen[bytes]:
        environment = os.environ | {"OPENBLAS_NUM_THREADS": "1"}
        command = [sys.executable, "-m", "dask", *arguments]
        with (self.place / "log.txt").open("ab") as log:
            return subprocess.Popen(command, stdout=log, stderr=log, env=environment, cwd=self.place)

    def close(self) -> None:
        for process in reversed(self.processes):
            process.kill()
            process.wait()


@pytest.fixture
def cluster(tmp_path) -> Iterator[Cluster]:
    place = tmp_path / "cluster"
    place.mkdir()
    cluster = Cluster(place)
    yield cluster
    cluster.close()


def test_a_dask_cluster_that_loses_one_of_two_workers_loses_no_client(cluster, folder, undisturbed, tmp_path):
    out = tmp_path / "out"
    victim = cluster.processes[2]
    killer = threading.Thread(target=kill_when_begun, args=(out, lambda: victim.pid))
    with dask_cluster(cluster.address) as engine:
        wait_for_workers(engine, 2)
        killer.start()
        result = plan_clients(folder, out, Work(TINY), engine)
    killer.join()
    assert victim.wait(WAIT) == -signal.SIGKILL
    assert [row.state for row in result.rows].count("planned") == N_CLIENTS
    assert everything(out) == undisturbed
    # Nothing about a client in the log of the cluster.
    names = {row.client for row in result.rows if row.client}
    log = (cluster.place / "log.txt").read_text()
    assert not [name for name in names if name in log]


def wait_for_workers(engine, count: int) -> None:
    deadline = time.monotonic() + WAIT
    while engine.room() < 2 * count or engine.room() == 2:
        assert time.monotonic() < deadline, "the workers did not come"
        time.sleep(0.05)


def test_no_scheduler_at_the_address(monkeypatch):
    monkeypatch.setattr(running, "PATIENCE", "0.2s")
    with pytest.raises(PlannerError, match="no scheduler answers"), dask_cluster("tcp://127.0.0.1:1"):
        pass


def test_without_the_packages_it_says_what_to_install(monkeypatch):
    monkeypatch.setattr("planner.clients.running.find_spec", lambda name: None)
    with pytest.raises(PlannerError, match="cluster"), dask_cluster("tcp://127.0.0.1:1"):
        pass
