"""The commands `planner compare` and `planner tables`."""

import json
from pathlib import Path

import pytest
from typer.testing import CliRunner

from planner.cli import app
from planner.rules import RULES

CLIENT = str(Path(__file__).parents[1] / "sample_clients" / "single_with_pension.xlsx")
FEW = "--futures=200"


def run(*arguments: str):
    return CliRunner(env={"COLUMNS": "80"}).invoke(app, list(arguments))


def test_comparison_fits_80_columns_and_names_every_rule():
    result = run("compare", CLIENT, FEW)
    assert result.exit_code == 0, result.output
    assert max(len(line) for line in result.stdout.splitlines()) <= 80
    words = " ".join(result.stdout.split())
    for rule in RULES:
        if rule.key != "as-asked":
            assert rule.name.split()[0] in words
    assert "The plan spends" in words


def test_rules_can_be_chosen_by_key_or_name():
    result = run("compare", CLIENT, FEW, "--rule", "constant-real", "--rule", "Share with limits", "--json")
    keys = [strategy["key"] for strategy in json.loads(result.stdout)["strategies"]]
    assert keys == ["plan", "constant-real", "floor-and-ceiling"]


def test_every_unknown_rule_is_named_with_the_near_miss():
    result = run("compare", CLIENT, "--rule", "divisr", "--rule", "nonsense")
    assert result.exit_code == 2
    assert "'divisor'" in result.stderr
    assert "nonsense" in result.stderr
    assert result.stderr.count("(rule-unknown)") == 2


def test_what_if_shows_both_sides():
    change = "Spending/Essential spending a year=25000"
    result = run("compare", CLIENT, FEW, "--what-if", change, "--rule", "constant-real")
    assert result.exit_code == 0, result.output
    assert change in result.stdout.replace("\n", "")
    for word in ("as given", "changed", "difference"):
        assert word in result.stdout


def test_what_if_as_json():
    change = "Spending/Essential spending a year=25000"
    result = run("compare", CLIENT, FEW, "--what-if", change, "--rule", "constant-real", "--json")
    data = json.loads(result.stdout)
    assert data["what_if"]["changes"] == [{"address": "Spending/Essential spending a year", "value": "25000"}]
    before, after = data["strategies"][0], data["what_if"]["strategies"][0]
    assert after["chance_below_essential"] <= before["chance_below_essential"]


@pytest.mark.parametrize(
    ("change", "code"),
    [
        ("Spending/Essential spending a year", "address-malformed"),
        ("Spending/Esential spending a year=1", "address-unknown"),
        ("Spending/Essential spending a year=lots", ""),
    ],
)
def test_what_if_that_cannot_be_is_refused(change, code):
    result = run("compare", CLIENT, FEW, "--what-if", change)
    assert result.exit_code == 2
    assert code in result.stderr
    assert "Traceback" not in result.output


def test_no_such_client():
    assert run("compare", "nobody.xlsx").exit_code == 1


def test_tables_lists_sources():
    result = run("tables")
    assert result.exit_code == 0
    assert "us-ssa-2022" in result.stdout
    assert "us-federal-2026" in result.stdout
    assert max(len(line) for line in result.stdout.splitlines()) <= 80
