"""The command `planner plan`: files whole or not at all, exit codes, password, nothing on the clock."""

import json
import os
import signal
import subprocess
import sys
import time
from pathlib import Path

import openpyxl
import pytest
from pypdf import PdfReader
from typer.testing import CliRunner

from planner import files
from planner.cli import PASSWORD_VARIABLE, app
from planner.files import write_whole

SAMPLES = Path(__file__).parents[1] / "sample_clients"
CLIENT = SAMPLES / "single_with_pension.xlsx"
FEW = "--futures=200"
QUICK = "--no-what-ifs"


def run(*arguments: object):
    return CliRunner().invoke(app, ["plan", *map(str, arguments)])


@pytest.fixture(autouse=True)
def in_an_empty_folder(tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    monkeypatch.delenv(PASSWORD_VARIABLE, raising=False)


def test_all_three_files(tmp_path):
    before = CLIENT.read_bytes()
    result = run(CLIENT, FEW, "-o", "out.pdf", "--json", "out.json", "--workbook", "out.xlsx")
    assert result.exit_code == 0, result.output
    assert sorted(path.name for path in tmp_path.iterdir()) == ["out.json", "out.pdf", "out.xlsx"]
    assert len(PdfReader("out.pdf").pages) >= 8
    data = json.loads(Path("out.json").read_text("utf-8"))
    assert data["sources"]["workbook"] == CLIENT.name
    assert len(data["sources"]["workbook_sha256"]) == 64
    assert data["sources"]["n_paths"] == 200
    assert data["what_ifs"]
    assert len(data["schedule"]) == data["horizon_years"]
    assert "Schedule" in openpyxl.load_workbook("out.xlsx").sheetnames
    assert "out.pdf written" in result.stdout
    assert CLIENT.read_bytes() == before


def test_default_name_is_the_client_s_in_the_current_folder_and_same_input_same_bytes(tmp_path):
    assert run(CLIENT, FEW, QUICK, "--json", "1.json").exit_code == 0
    first = Path("single_with_pension.pdf").read_bytes()
    assert run(CLIENT, FEW, QUICK, "--json", "2.json").exit_code == 0
    assert Path("single_with_pension.pdf").read_bytes() == first
    assert Path("1.json").read_bytes() == Path("2.json").read_bytes()


def test_no_such_client():
    result = run("nobody.xlsx")
    assert result.exit_code == 1
    assert "nobody.xlsx" in result.stderr
    assert "Traceback" not in result.output


def test_no_such_folder(tmp_path):
    result = run(CLIENT, FEW, QUICK, "-o", "nowhere/plan.pdf")
    assert result.exit_code == 1
    assert "nowhere" in result.stderr
    assert list(tmp_path.iterdir()) == []


@pytest.mark.parametrize(
    "arguments",
    [("-o", CLIENT), ("-o", "x.pdf", "--json", "x.pdf"), ("--workbook", CLIENT), ("-o", ".")],
    ids=["over the client", "twice to one file", "workbook over the client", "a folder"],
)
def test_files_that_clash_are_refused_before_anything_is_done(arguments, tmp_path):
    before = CLIENT.read_bytes()
    result = run(CLIENT, *arguments)
    assert result.exit_code == 2
    assert "output-" in result.stderr
    assert CLIENT.read_bytes() == before
    assert list(tmp_path.iterdir()) == []


def test_password_comes_from_the_environment_and_opens_the_pdf(monkeypatch):
    monkeypatch.setenv(PASSWORD_VARIABLE, "correct horse")
    assert run(CLIENT, FEW, QUICK, "-o", "x.pdf", "--password").exit_code == 0
    reader = PdfReader("x.pdf")
    assert reader.is_encrypted
    assert reader.decrypt("wrong") == 0
    assert reader.decrypt("correct horse") != 0
    assert b"/CFM /AESV3" in Path("x.pdf").read_bytes()  # AES-256


def test_password_that_nobody_can_be_asked_for_is_refused():
    result = run(CLIENT, "--password")
    assert result.exit_code == 2
    assert "password-missing" in result.stderr


def test_password_without_its_packages_says_which(monkeypatch):
    monkeypatch.setattr("planner.reports.protection.find_spec", lambda name: None)
    result = run(CLIENT, "--password")
    assert result.exit_code == 1
    assert "cryptography" in result.stderr


def test_password_value_is_not_an_argument():
    """A value on the command line would show in the list of processes."""
    assert run(CLIENT, "--password=secret").exit_code == 2


def test_piped_output_has_no_colour_and_no_bar():
    command = [sys.executable, "-m", "planner.cli", "plan", str(CLIENT), FEW, QUICK]
    result = subprocess.run(command, capture_output=True, text=True, check=True)
    assert "\x1b" not in result.stdout + result.stderr
    assert "%" not in result.stderr


def test_verbose_says_what_is_done_on_stderr():
    result = run(CLIENT, FEW, QUICK, "--verbose")
    assert "finding the best plan" in result.stderr
    assert "finding the best plan" not in result.stdout
    assert "seed" in result.stderr


def test_ctrl_c_ends_with_130_and_leaves_nothing(tmp_path):
    command = [sys.executable, "-m", "planner.cli", "plan", str(CLIENT), "--verbose"]
    process = subprocess.Popen(command, stderr=subprocess.PIPE, stdout=subprocess.PIPE, text=True)
    assert process.stderr is not None
    process.stderr.readline()  # it has begun to solve
    time.sleep(0.05)
    process.send_signal(signal.SIGINT)
    _, errors = process.communicate(timeout=60)
    assert process.returncode == 130, errors
    assert "Traceback" not in errors
    assert list(tmp_path.iterdir()) == []


def test_a_failed_write_leaves_what_was_there(tmp_path, monkeypatch):
    target = tmp_path / "plan.pdf"
    target.write_bytes(b"old")

    def full_disk(descriptor: int) -> None:
        raise OSError(28, "No space left on device")

    monkeypatch.setattr(files.os, "fsync", full_disk)
    with pytest.raises(OSError, match="No space left"):
        write_whole(target, b"new")
    assert target.read_bytes() == b"old"
    assert list(tmp_path.iterdir()) == [target]


def test_written_files_have_the_usual_permissions(tmp_path):
    write_whole(tmp_path / "a", b"x")
    (tmp_path / "b").write_bytes(b"x")
    assert os.stat(tmp_path / "a").st_mode == os.stat(tmp_path / "b").st_mode
