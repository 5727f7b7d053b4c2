"""`planner compare` with its views, `snapshot` and `review`: exit codes, JSON, streams, an interrupt."""

import json
import os
import signal
import subprocess
import sys
import time
from pathlib import Path

import openpyxl
import pytest
from client_workbooks import minimal, saved
from golden_text import rendered
from test_history import invented
from typer.testing import CliRunner

from planner.cli import app
from planner.commands.comparing import Views, answer
from planner.optimum.recursion import SolverSettings
from planner.plan import PlanSettings
from planner.reports.terminal_snapshot import snapshot_screen
from planner.snapshot import snapshot
from planner.workbook.reading import read_workbook

SAMPLES = Path(__file__).parents[1] / "sample_clients"
SINGLE = str(SAMPLES / "single_with_pension.xlsx")
FEW = "--futures=100"


def run(*arguments: str, width: int = 80):
    return CliRunner(env={"COLUMNS": str(width)}).invoke(app, list(arguments))


def small(folder: Path, **sheets: object) -> str:
    """One person, one account, two portfolios: solved in a moment."""
    values = minimal()
    values["People"]["people"] = values["People"]["people"][:1]
    values["Accounts"]["accounts"] = [
        {"Account": "Bank", "Owner": "Ana", "Type": "taxable", "Balance": 500_000}
    ]
    values["Spending"] |= {"Wanted spending a year": 45_000, "Care cost a year": 30_000}
    values["Spending"] |= {"Care from age": 85, "Care years": 2, "Care for": "first"}
    return str(saved(folder, values | sheets))


@pytest.fixture(scope="module")
def client(tmp_path_factory) -> str:
    history = invented(40)
    rows = [
        {"Year": year, "Inflation": prices, "Bonds": bonds, "Shares": shares}
        for year, prices, (bonds, shares) in zip(
            history.years, history.inflation, history.returns, strict=True
        )
    ]
    quote = {"Paid a year, share of the price": 0.055, "Bought from": "Bank"}
    choices = [{"Income": "State pension", "Start age": 70, "Amount a year": 26_000}]
    return small(
        tmp_path_factory.mktemp("views"),
        History={"history": rows},
        Rules={"Same amount plus prices: first withdrawal": 0.05},
        **{"Annuity quote": quote, "Start choices": {"start choices": choices}},
    )


VIEWS = {
    "stresses": ("--stresses", "--pension-cut-year", "2040"),
    "decisions": ("--decisions",),
    "history": ("--history",),
    "risk": ("--risk",),
    "legacy": ("--legacy",),
}


@pytest.mark.parametrize("view", VIEWS)
def test_views_fit_the_terminal_and_say_the_same_as_json(client, view):
    text = run("compare", client, FEW, *VIEWS[view])
    assert text.exit_code == 0, text.output
    assert max(len(line) for line in text.stdout.splitlines()) <= 80
    assert "…" not in text.stdout
    assert "\x1b" not in text.stdout  # plain text where it is no terminal
    data = json.loads(run("compare", client, FEW, *VIEWS[view], "--json").stdout)
    assert data[view]
    if view == "stresses":
        assert "state pensions a fifth lower from 2040" in [row["name"] for row in data["stresses"]]
    if view == "decisions":
        keys = {row["key"] for row in data["decisions"]}
        assert keys == {"start-age", "annuity", "portfolio"}
        for row in data["decisions"]:
            assert row["points"][row["best"]]["worth"] == max(point["worth"] for point in row["points"])
    if view == "history":
        assert data["history"]["strategies"][0]["worst_start"] in range(1955, 1962)


@pytest.mark.parametrize("width", [80, 120])
def test_comparison_at_both_widths_with_the_rules_sheet(client, width):
    result = run("compare", client, FEW, "--bootstrap", width=width)
    assert result.exit_code == 0, result.output
    assert max(len(line) for line in result.stdout.splitlines()) <= width
    words = " ".join(result.stdout.split())
    assert "stationary bootstrap" in words
    assert "this client" in words


def test_a_rule_s_parameters_from_the_sheet_and_the_command_line(client):
    """5 % of 500,000 and the pension of 20,000 from 67 on; Ana is 65."""
    data = json.loads(run("compare", client, FEW, "--rule", "constant-real", "--json").stdout)
    assert data["strategies"][1]["spending_this_year"] == pytest.approx(25_000)
    data = json.loads(run("compare", client, FEW, "--rule", "constant-real:rate=3%", "--json").stdout)
    assert data["strategies"][1]["spending_this_year"] == pytest.approx(15_000)
    refused = run("compare", client, "--rule", "constant-real:rte=3%", "--rule", "divisr")
    assert refused.exit_code == 2
    assert "did you mean 'rate'" in refused.stderr
    assert "did you mean 'divisor'" in refused.stderr


def test_what_ifs_apart_and_together(client):
    changes = ("--what-if", "Income/State pension/From age=70", "--what-if", "Accounts/Bank/Balance=600000")
    apart = json.loads(run("compare", client, FEW, *changes, "--json").stdout)
    assert [len(item["changes"]) for item in apart["what_ifs"]] == [1, 1]
    assert "what_if" not in apart
    together = json.loads(run("compare", client, FEW, *changes, "--together", "--json").stdout)
    assert [len(item["changes"]) for item in together["what_ifs"]] == [2]
    assert together["what_if"] == together["what_ifs"][0]
    given = apart["strategies"][0]["spending_this_year"]
    later, richer = (item["strategies"][0]["spending_this_year"] for item in apart["what_ifs"])
    both = together["what_if"]["strategies"][0]["spending_this_year"]
    assert later < given < richer
    assert later < both < richer


def test_the_workbook_s_own_what_ifs(client):
    result = run("compare", SINGLE, FEW, "--what-ifs")
    assert result.exit_code == 0, result.output
    assert result.stdout.count("What if: ") == 2
    none = run("compare", client, FEW, "--what-ifs")
    assert none.exit_code == 2
    assert "what-ifs-missing" in none.stderr


def test_no_history_and_no_rule_are_said(tmp_path):
    client = small(tmp_path)
    for option in ("--history", "--bootstrap"):
        result = run("compare", client, FEW, option)
        assert result.exit_code == 2
        assert "history-missing" in result.stderr


def test_snapshot_in_words_and_json(client):
    text = run("snapshot", client, FEW)
    assert text.exit_code == 0, text.output
    assert max(len(line) for line in text.stdout.splitlines()) <= 80
    data = json.loads(run("snapshot", client, FEW, "--json").stdout)
    assert data["wanted_spending"]["wanted"] == 45_000
    assert data["savings"] == 500_000


def test_review_a_year_on(client, tmp_path):
    made = run(
        "plan",
        client,
        FEW,
        "--no-what-ifs",
        "-o",
        str(tmp_path / "p.pdf"),
        "--json",
        str(tmp_path / "r.json"),
    )
    assert made.exit_code == 0, made.output
    book = openpyxl.load_workbook(client)
    for row in book["Household"].iter_rows():
        for cell in row:
            if getattr(cell.value, "year", None) == 2026:
                cell.value = cell.value.replace(year=2027)
    later = tmp_path / "later.xlsx"
    book.save(later)
    result = run("review", str(later), "--last", str(tmp_path / "r.json"))
    assert result.exit_code == 0, result.output
    assert "Savings stand at $500,000" in result.stdout
    data = json.loads(run("review", str(later), "--last", str(tmp_path / "r.json"), "--json").stdout)
    assert sum(move["amount"] for move in data["moves"]) == pytest.approx(
        data["spending"]["now"] - data["spending"]["before"], abs=0.05
    )
    assert run("review", str(later), "--last", str(tmp_path / "none.json")).exit_code == 1
    assert run("review", client, "--last", str(tmp_path / "r.json")).exit_code == 2


def test_tables_as_json():
    data = json.loads(run("tables", "--json").stdout)
    assert {"us-ssa-2022"} <= {table["name"] for table in data["life_tables"]}
    assert {"us-federal-2026"} <= {rules["name"] for rules in data["tax_rules"]}


def test_a_blank_workbook_as_json(tmp_path):
    path = tmp_path / "blank.xlsx"
    assert json.loads(run("new", str(path), "--json").stdout) == {"written": str(path)}
    assert path.exists()


@pytest.mark.parametrize("name", sorted(p.stem for p in SAMPLES.glob("*.xlsx") if p.stem != "broken"))
def test_every_sample_on_tiny_grids(name):
    """Whatever a client has, every screen can be drawn; accuracy is not the matter here."""
    read = read_workbook(SAMPLES / f"{name}.xlsx")
    tiny = SolverSettings(5, 5, 4, 20)
    settings = PlanSettings(n_paths=100, solver=tiny, what_if_solver=tiny, late_years=False)
    screens = [snapshot_screen(snapshot(read.household, settings), 80)]
    views = Views(rules=("constant-real", "secure-first"))
    screens += [block(80, False) for block in answer(read, views, settings, lambda s, w: None, list).blocks]
    for screen in screens:
        text = rendered(screen)
        assert max(len(line) for line in text.splitlines()) <= 80
        assert "…" not in text
        assert "nan" not in text


def test_an_interrupt_exits_130_and_leaves_nothing(tmp_path):
    """Ctrl-C while the plan is being solved: no file, no traceback, nothing on standard output."""
    command = [
        sys.executable,
        "-m",
        "planner.cli",
        "plan",
        str(SAMPLES / "couple_three_accounts.xlsx"),
        "--verbose",
    ]
    with subprocess.Popen(
        [*command, "-o", "out.pdf", "--json", "out.json"],
        cwd=tmp_path,
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        text=True,
        env=os.environ | {"PYTHONPATH": str(SAMPLES.parent)},
    ) as process:
        assert process.stderr is not None
        for line in process.stderr:
            if "finding the best plan" in line:
                break
        time.sleep(0.2)
        process.send_signal(signal.SIGINT)
        out, rest = process.communicate(timeout=60)
    assert process.returncode == 130
    assert out == ""
    assert "Traceback" not in rest
    assert list(tmp_path.iterdir()) == []
