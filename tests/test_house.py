"""The house rules that a machine can check, so that one test command holds everything."""

import re
import subprocess
import sys
from pathlib import Path

import pytest

ROOT = Path(__file__).parents[1]


@pytest.mark.parametrize(
    "command",
    [["ruff", "check", "."], ["ruff", "format", "--check", "."], ["mypy"]],
    ids=["ruff check", "ruff format", "mypy"],
)
def test_clean(command):
    result = subprocess.run([sys.executable, "-m", *command], cwd=ROOT, capture_output=True, text=True)
    assert result.returncode == 0, result.stdout + result.stderr


@pytest.mark.parametrize("path", sorted((ROOT / "planner").rglob("*.py")), ids=lambda path: path.stem)
def test_no_unfinished_code(path):
    text = path.read_text("utf-8")
    assert not re.search(r"\bTODO\b|\bFIXME\b|\bXXX\b|raise NotImplementedError|(?<![.\w])print\(", text)


@pytest.mark.parametrize("path", sorted((ROOT / "planner").rglob("*.py")), ids=lambda path: path.stem)
def test_output_never_depends_on_the_clock(path):
    """Dates come from the workbook; randomness is passed in."""
    text = path.read_text("utf-8")
    assert not re.search(r"\.today\(|\.now\(|time\.time\(|np\.random\.(?!default_rng|Generator)", text)
