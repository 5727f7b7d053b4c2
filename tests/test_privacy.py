"""Nothing leaves the machine, nothing stays behind but what was asked for, no text becomes code.

Every command runs in a process of its own under an audit hook, which Python cannot be talked out
of: it records every file opened for writing and ends the process at the first sign of a network
or of another program. The processes that a command starts are under the same watch.
"""

import io
import json
import os
import re
import shutil
import subprocess
import sys
import zipfile
from pathlib import Path

import openpyxl
import pytest
from client_workbooks import SAMPLES, found, minimal, saved
from pypdf import PdfReader

from planner.household import Household
from planner.workbook.reading import read_workbook

WATCHED = """
import os, sys
written = open(os.environ["WATCH_LOG"], "a", buffering=1)
FORBIDDEN = ("socket.", "urllib.", "http.", "ftplib.", "smtplib.", "subprocess.", "os.system", "os.exec",
             "os.posix_spawn", "os.startfile", "webbrowser.")
def watch(event, arguments):
    if event.startswith(FORBIDDEN) and event != "socket.gethostname":
        print(f"forbidden: {event} {arguments!r}", file=sys.__stderr__, flush=True)
        os._exit(99)
    if event == "open" and isinstance(arguments[0], (str, bytes)):
        path, mode, flags = arguments
        if (mode and set(mode) & set("wax+")) or flags & (os.O_WRONLY | os.O_RDWR | os.O_CREAT):
            written.write(f"{os.fsdecode(path)}\\n")
    elif event in ("os.mkdir", "tempfile.mkstemp", "tempfile.mkdtemp"):
        written.write(f"{arguments[0]}\\n")
sys.addaudithook(watch)
"""

NASTY = (
    "=HYPERLINK(1)", "+1+1", "-2+3", "@SUM(A1)", "<b>bold</b>", "A & B <i>", "../../etc/passwd", "two\nlines",
    "&#65;", "</para>", "${HOME}", "%(name)s", "{0}", "[red]x[/]", "x\u202ey", "tab\there", "O'Neil \"Q\"",
)  # fmt: skip


def run_watched(folder, *arguments):
    """Run a command; return what it printed, its exit code and the files it opened for writing."""
    log, hook = folder.parent / f"{folder.name}.log", folder.parent / f"{folder.name}.watch"
    log.write_text("")
    hook.mkdir(exist_ok=True)
    (hook / "sitecustomize.py").write_text(WATCHED)  # run by every Python process when it starts
    environment = os.environ | {"PYTHONPATH": str(hook), "WATCH_LOG": str(log)}
    command = [sys.executable, "-m", "planner.cli", *map(str, arguments)]
    done = subprocess.run(command, cwd=folder, env=environment, capture_output=True, text=True, check=False)
    opened = {Path(folder, line) for line in log.read_text().splitlines() if line != "/dev/null"}
    return done, {path for path in opened if "__pycache__" not in path.parts}


@pytest.mark.parametrize(
    "arguments",
    [
        ("check", SAMPLES / "couple_taxed_each.xlsx"),
        ("check", SAMPLES / "broken.xlsx"),
        ("tables",),
        ("new", "blank.xlsx"),
        ("compare", SAMPLES / "single_with_pension.xlsx", "--futures", 100, "--rule", "divisor"),
        ("snapshot", SAMPLES / "single_with_pension.xlsx", "--futures", 100),
    ],
    ids=lambda arguments: arguments[0],
)
def test_commands_write_only_what_is_asked_for_and_call_nobody(tmp_path, arguments):
    done, opened = run_watched(tmp_path, *arguments)
    assert done.returncode in (0, 2), done.stderr
    assert {path.parent for path in opened} <= {tmp_path}
    assert [path.name for path in tmp_path.iterdir()] == (["blank.xlsx"] if arguments[0] == "new" else [])


def test_a_client_list_writes_into_its_folder_alone_and_calls_nobody(tmp_path):
    clients, folder = tmp_path / "clients", tmp_path / "here"
    for path in (clients, folder):
        path.mkdir()
    shutil.copy(SAMPLES / "single_with_pension.xlsx", clients)
    options = ("-o", "out", "--workers", 1, "--futures", 100, "--no-what-ifs")
    done, opened = run_watched(folder, "clients", clients, *options)
    assert done.returncode == 0, done.stderr
    assert opened
    assert all((folder / "out") in (path, *path.parents) for path in opened)
    assert [path.name for path in folder.iterdir()] == ["out"]
    assert [path.name for path in clients.iterdir()] == ["single_with_pension.xlsx"]


def nasty_values():
    """A household whose every text tries to be something else."""
    values = minimal()
    values["Household"]["Client name"] = "Ana & Tom <b>../..\n=1+1"
    values["People"]["people"] = values["People"]["people"][:1]
    values["Accounts"]["accounts"] = [
        {"Account": text, "Owner": "Ana", "Type": "taxable", "Balance": 40_000} for text in NASTY
    ]
    values["Income"]["incomes"][0]["Income"] = "=cmd|'/c calc'!A1 <script>"
    for row in values["Portfolios"]["portfolios"]:
        row["Portfolio"] = f"=<{row['Portfolio']}>&"
    values["Practice"] = {
        "Firm": "Firm <b>& Sons</b>",
        "Adviser": "@Eve",
        "Required wording": "<font size=99>& as typed\nsecond line {x} %s",
        "Logo file": "http://192.0.2.1/logo.png",
        "Aims": "=1+1",
    }
    return values


def _make_text(workbook):
    """Texts as they would be typed, not as formulas."""
    for sheet in workbook.worksheets:
        for cell in sheet._cells.values():
            if cell.data_type == "f":
                cell.data_type = "s"


def _texts(folder, name):
    book = openpyxl.load_workbook(folder / name)
    return [cell for sheet in book.worksheets for row in sheet.iter_rows() for cell in row]


def test_a_plan_with_hostile_texts(tmp_path):
    """One run: no network (the logo is a web address), no stray file, no text that runs or formats."""
    folder = tmp_path / "out"
    folder.mkdir()
    client = saved(tmp_path, nasty_values(), _make_text)
    assert {code for code, _ in found(client) if not code.startswith("no-")} <= {
        "logo-missing",
        "logo-unusable",
    }
    options = ("--futures", 100, "--no-what-ifs", "--workbook", "r.xlsx", "--json", "r.json", "-o", "p.pdf")
    done, opened = run_watched(folder, "plan", client, *options)
    assert done.returncode == 0, done.stderr
    assert {path.parent for path in opened} == {folder}
    assert sorted(path.name for path in folder.iterdir()) == ["p.pdf", "r.json", "r.xlsx"]

    household = read_workbook(client).household
    cells = _texts(folder, "r.xlsx")
    assert {cell.data_type for cell in cells} <= {"s", "n"}
    dangerous = [c for c in cells if isinstance(c.value, str) and c.value.startswith(("=", "+", "-", "@"))]
    assert dangerous
    assert all(cell.quotePrefix for cell in dangerous)
    with zipfile.ZipFile(io.BytesIO((folder / "r.xlsx").read_bytes())) as archive:
        assert not any(b"<f>" in archive.read(name) for name in archive.namelist())

    results = json.loads((folder / "r.json").read_text("utf-8"))
    assert results["client"] == household.client_name
    # A year on: last year's results hold the same texts.
    results["plan_date"] = str(household.plan_date.replace(year=household.plan_date.year - 1))
    (tmp_path / "last.json").write_text(json.dumps(results), "utf-8")
    reviewed, opened = run_watched(folder, "review", client, "--last", tmp_path / "last.json")
    assert reviewed.returncode == 0, reviewed.stderr
    assert opened == set()

    text = " ".join(page.extract_text() for page in PdfReader(folder / "p.pdf").pages)
    plain = re.sub(r"\s+", "", text)
    for name in account_names(household):
        assert re.sub(r"\s+", "", name) in plain  # as it stands, brackets and all
    reader = PdfReader(folder / "p.pdf")
    assert "/OpenAction" not in reader.trailer["/Root"]
    assert not any("/A" in (note.get_object()) for page in reader.pages for note in page.get("/Annots", []))


def account_names(household: Household) -> list[str]:
    return [account.name for account in household.accounts]


def test_the_watch_sees_what_it_is_for(tmp_path):
    """In a process that a watched one starts: a file is recorded, a socket ends it."""
    folder = tmp_path / "here"
    folder.mkdir()
    done, _ = run_watched(folder, "tables")
    assert done.returncode == 0
    code = f"open({str(folder / 'x')!r}, 'w'); import socket; socket.socket(); print('never reached')"
    log = tmp_path / "here.log"
    environment = os.environ | {"PYTHONPATH": str(tmp_path / "here.watch"), "WATCH_LOG": str(log)}
    caught = subprocess.run([sys.executable, "-c", code], env=environment, capture_output=True, check=False)
    assert caught.returncode == 99
    assert b"never reached" not in caught.stdout
    assert str(folder / "x") in log.read_text().splitlines()
