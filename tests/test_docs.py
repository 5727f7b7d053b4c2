"""What the documentation says is what the program has."""

import re
from pathlib import Path

import pytest
import typer

from planner import taxes
from planner.cli import app
from planner.rules import RULES

ROOT = Path(__file__).parents[1]
README = (ROOT / "README.md").read_text("utf-8")
DEVELOPERS = (ROOT / "DEVELOPERS.md").read_text("utf-8")
COMMANDS = typer.main.get_command(app).commands  # type: ignore[attr-defined]


@pytest.mark.parametrize("name", COMMANDS)
def test_command_is_in_the_readme(name):
    assert f"`planner {name} " in README or f"`planner {name}`" in README


@pytest.mark.parametrize("name", COMMANDS)
def test_command_and_every_option_have_help(name):
    command = COMMANDS[name]
    assert command.help
    for parameter in command.params:
        assert parameter.help, f"{name} {parameter.name}"


@pytest.mark.parametrize("rule", RULES, ids=lambda rule: rule.key)
def test_rule_has_reference_and_is_in_the_readme(rule):
    assert rule.reference
    assert f"| `{rule.key}` | {rule.name} |" in README


def test_ci_runs_exactly_the_readme_s_test_command():
    """So that what a newcomer runs is what is checked."""
    lines = (ROOT / ".ci" / "run").read_text("utf-8").splitlines()
    commands = [line for line in lines if "pytest" in line and not line.startswith("#")]
    assert len(commands) == 1
    assert f"```bash\n{commands[0]}\n```" in README
    assert f"```bash\n{commands[0]}\n```" in DEVELOPERS


def test_files_that_the_documents_name_exist():
    for text in (README, DEVELOPERS):
        for target in re.findall(r"\]\(([^)#:]+)\)", text):
            assert (ROOT / target).exists(), target
    assert "sample_clients/couple_three_accounts.xlsx" in README
    assert (ROOT / "sample_clients" / "couple_three_accounts.xlsx").exists()


def test_every_module_of_the_layout_exists():
    table = DEVELOPERS.split("## Layout")[1].split("## How to add")[0]
    for name in re.findall(r"`([a-z_/]+(?:\.py|/))`", table):
        found = [*(ROOT / "planner").glob(name), *(ROOT / "planner" / "reports").glob(name), *ROOT.glob(name)]
        assert found, name


def test_nothing_mentions_the_machine_it_was_written_on():
    shipped = [*ROOT.glob("*.md"), *(ROOT / "planner").rglob("*.py"), *(ROOT / "sample_clients").glob("*.py")]
    for path in shipped:
        assert not re.search(r"/(?:work|root|tmp|home)/", path.read_text("utf-8")), path


def test_the_rules_shown_as_an_example_are_rules():
    """They are read as a file would be, misspelt keys and all, and their worked case is right to the cent."""
    (text,) = re.findall(r"```toml\n(.*?)```", DEVELOPERS, re.DOTALL)
    rules = taxes.parse("freedonia-2026", text)
    (case,) = rules.worked_cases
    tax = rules.first_year_tax(case.people, withdrawal=0.0, law_year=case.law_year, together=case.together)
    assert tax == pytest.approx(case.tax, abs=0.005)
