"""Killed, out of space, not allowed: what was there stays, nothing is left half written."""

import ast
import io
import os
import random
import resource
import shutil
import signal
import subprocess
import sys
import time
import zipfile
from pathlib import Path

import pytest
import typer
from client_workbooks import SAMPLES
from typer.testing import CliRunner

from planner import files
from planner.cli import app, reporting_errors
from planner.files import write_all, write_whole
from planner.workbook.saving import workbook_bytes
from planner.workbook.writing import make_workbook

PACKAGE = Path(__file__).parents[1] / "planner"
SAMPLE = SAMPLES / "single_with_pension.xlsx"

WRITER = """
import sys
from pathlib import Path
from planner.files import write_whole
target, contents = Path(sys.argv[1]), [bytes([letter]) * 300_000 for letter in (65, 66)]
print("begun", flush=True)
while True:
    for content in contents:
        write_whole(target, content)
"""


def test_killed_at_random_moments_while_writing(tmp_path):
    """Twenty kills; after each the name holds one whole content or the other."""
    target = tmp_path / "plan.pdf"
    write_whole(target, b"A" * 300_000)
    chance = random.Random(5)
    for _ in range(20):
        command = [sys.executable, "-c", WRITER, str(target)]
        process = subprocess.Popen(command, stdout=subprocess.PIPE, text=True)
        process.stdout.readline()
        time.sleep(chance.uniform(0, 0.03))
        process.kill()
        process.communicate()
        content = target.read_bytes()
        assert len(content) == 300_000
        assert set(content) in ({65}, {66})
    write_whole(target, b"C")  # what killed processes have left is cleared away
    assert list(tmp_path.iterdir()) == [target]


@pytest.mark.parametrize("number", [signal.SIGKILL, signal.SIGTERM])
def test_a_plan_ended_at_any_moment_writes_nothing_or_all(tmp_path, number):
    """Ended before it can be done: nothing; where it may tidy up, nothing temporary either."""
    chance = random.Random(int(number))
    options = ["--futures", "100", "--no-what-ifs", "-o", "plan.pdf", "--json", "results.json"]
    for _ in range(3):
        command = [sys.executable, "-m", "planner.cli", "plan", str(SAMPLE.resolve()), *options]
        process = subprocess.Popen(command, cwd=tmp_path, stderr=subprocess.PIPE, stdout=subprocess.PIPE)
        time.sleep(chance.uniform(0.05, 1.5))
        process.send_signal(number)
        _, errors = process.communicate(timeout=60)
        assert b"Traceback" not in errors
        assert process.returncode in (-number, 130)
        assert list(tmp_path.iterdir()) == []


def test_an_interrupt_that_python_drops_comes_again(capsys):
    """Python drops what is raised in a finaliser; so it did, now and then, with a signal while importing."""

    class Dropping:
        def __del__(self):
            signal.raise_signal(signal.SIGTERM)

    def work():
        with reporting_errors():
            Dropping()
            for _ in range(1_000):
                time.sleep(0.01)

    with pytest.raises(typer.Exit) as ended:
        work()
    assert ended.value.exit_code == 130
    assert capsys.readouterr().err == "interrupted; nothing half-written is left behind\n"


def _run_limited(folder, *arguments):
    """Run a command that may write files of 1,000 bytes at most, as on a full disk."""

    def limit():
        signal.signal(signal.SIGXFSZ, signal.SIG_IGN)
        resource.setrlimit(resource.RLIMIT_FSIZE, (1_000, 1_000))

    command = [sys.executable, "-m", "planner.cli", *map(str, arguments)]
    return subprocess.run(command, cwd=folder, capture_output=True, text=True, preexec_fn=limit, check=False)


def test_no_room_for_a_new_workbook(tmp_path):
    done = _run_limited(tmp_path, "new", "client.xlsx")
    assert done.returncode == 1
    assert done.stderr == "error client.xlsx: file too large\n"
    assert list(tmp_path.iterdir()) == []


def test_no_room_for_a_plan_leaves_the_old_one(tmp_path):
    (tmp_path / "plan.pdf").write_bytes(b"last year's")
    shutil.copy(SAMPLE, tmp_path / "client.xlsx")
    before = {path.name: path.read_bytes() for path in tmp_path.iterdir()}
    options = ("--futures", 100, "--no-what-ifs", "-o", "plan.pdf", "--json", "results.json")
    done = _run_limited(tmp_path, "plan", "client.xlsx", *options)
    assert done.returncode == 1
    assert done.stderr.splitlines()[-1] == "error plan.pdf: file too large"
    assert {path.name: path.read_bytes() for path in tmp_path.iterdir()} == before


def test_several_files_are_written_together_or_not_at_all(tmp_path, monkeypatch):
    calls = []

    def full_disk(descriptor):
        calls.append(descriptor)
        if len(calls) == 2:
            raise OSError(28, "No space left on device")

    (tmp_path / "a").write_bytes(b"old")
    monkeypatch.setattr(files.os, "fsync", full_disk)
    with pytest.raises(OSError, match="No space left") as failed:
        write_all({tmp_path / "a": b"new", tmp_path / "b": b"new"})
    assert failed.value.filename == str(tmp_path / "b")
    assert {path.name: path.read_bytes() for path in tmp_path.iterdir()} == {"a": b"old"}


def test_a_folder_that_is_not_there(tmp_path):
    result = CliRunner().invoke(app, ["new", str(tmp_path / "none" / "client.xlsx")])
    assert result.exit_code == 1
    assert "no such file" in result.stderr


@pytest.mark.parametrize("step", ["open", "replace"])
def test_a_folder_or_file_that_may_not_be_written(tmp_path, monkeypatch, step):
    """The system's refusal is simulated, since an administrator is refused nothing.

    On some systems a file that another program has open refuses the last step, its replacement.
    """

    def refused(path, *arguments, **options):
        raise PermissionError(13, "Permission denied", str(path))

    monkeypatch.setattr(files.Path, step, refused)
    result = CliRunner().invoke(app, ["new", str(tmp_path / "client.xlsx")])
    monkeypatch.undo()
    assert result.exit_code == 1
    assert "client.xlsx: permission denied; is it open in another program" in " ".join(result.stderr.split())
    assert list(tmp_path.iterdir()) == []


def test_a_workbook_that_may_not_be_read(tmp_path, monkeypatch):
    def refused(path, mode):
        raise PermissionError(13, "Permission denied", str(path))

    monkeypatch.setattr(Path, "open", refused)
    result = CliRunner().invoke(app, ["check", str(SAMPLE)])
    assert result.exit_code == 1
    assert "permission denied" in result.stderr


@pytest.mark.parametrize(
    "arguments",
    [
        ("check", "locked"),
        ("review", str(SAMPLE), "--last", "locked"),
        ("plan", "locked", "-o", "locked.pdf"),
        ("clients", "locked"),
    ],
    ids=lambda arguments: arguments[0],
)
def test_what_may_not_be_read_is_no_mistake_in_the_command_line(tmp_path, monkeypatch, arguments):
    """Exit 1 and our words. A folder stands for the locked file: an administrator is refused nothing."""
    monkeypatch.chdir(tmp_path)
    (tmp_path / "locked").mkdir()
    monkeypatch.setattr(os, "access", lambda *arguments, **options: False)
    result = CliRunner().invoke(app, list(arguments))
    assert "Usage" not in result.stderr
    assert result.exit_code in (1, 2)
    assert result.stderr.startswith("error locked: ")


def test_a_read_only_file_system_is_named_with_the_file_that_was_asked_for(tmp_path, monkeypatch):
    """There even tidying up is refused, which must not hide what went wrong first."""

    def refused(path, *arguments, **options):
        raise OSError(30, "Read-only file system", str(path))

    for step in ("open", "unlink"):
        monkeypatch.setattr(files.Path, step, refused)
    result = CliRunner().invoke(app, ["new", str(tmp_path / "client.xlsx")])
    assert result.exit_code == 1
    assert " ".join(result.stderr.split()).endswith("/client.xlsx: read-only file system")
    assert "part" not in result.stderr


def test_a_file_that_may_not_be_written_stays(tmp_path, monkeypatch):
    target = tmp_path / "plan.pdf"
    target.write_bytes(b"old")
    monkeypatch.setattr(files.os, "access", lambda path, mode: False)
    with pytest.raises(PermissionError):
        write_whole(target, b"new")
    assert target.read_bytes() == b"old"


def test_links_permissions_and_devices_are_kept(tmp_path):
    target, link = tmp_path / "kept" / "plan.pdf", tmp_path / "plan.pdf"
    target.parent.mkdir()
    target.write_bytes(b"old")
    target.chmod(0o600)
    link.symlink_to(target)
    write_whole(link, b"new")
    assert link.is_symlink()
    assert target.read_bytes() == b"new"
    assert target.stat().st_mode & 0o777 == 0o600
    write_whole(Path(os.devnull), b"x")  # in its place there must not stand a file afterwards
    assert not Path(os.devnull).is_file()


def test_a_very_long_name(tmp_path):
    target = tmp_path / ("ä" * 120 + ".pdf")
    write_whole(target, b"x")
    assert target.read_bytes() == b"x"


def test_no_part_of_the_program_reads_the_clock():
    """A plan date in the future or the past is like any other: nothing asks what day it is."""
    forbidden = {"today", "now", "utcnow", "time", "time_ns", "localtime", "gmtime", "strftime"}
    for path in PACKAGE.rglob("*.py"):
        for node in ast.walk(ast.parse(path.read_text("utf-8"))):
            if isinstance(node, ast.Call) and isinstance(node.func, ast.Attribute):
                assert node.func.attr not in forbidden, f"{path.name}:{node.lineno}"
            if isinstance(node, ast.ImportFrom):
                assert node.module != "time", f"{path.name}:{node.lineno}"


def test_spreadsheets_are_made_in_memory_and_carry_no_time(monkeypatch):
    """Its library's own way leaves the sheets of a killed process in the temporary folder."""
    monkeypatch.setattr("openpyxl.worksheet._writer.create_temporary_file", None)
    content = workbook_bytes(make_workbook({}))
    assert content == workbook_bytes(make_workbook({}))
    with zipfile.ZipFile(io.BytesIO(content)) as archive:
        assert {part.date_time for part in archive.infolist()} == {(1980, 1, 1, 0, 0, 0)}
        assert archive.read("docProps/core.xml").count(b"2000-01-01T00:00:00Z") == 2
