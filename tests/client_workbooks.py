"""Small client workbooks for tests: a minimal household, with sheets or cells replaced."""

from __future__ import annotations

import copy
import importlib
import sys
from collections.abc import Callable
from datetime import date
from pathlib import Path
from typing import Any

from openpyxl.workbook import Workbook

from planner.diagnostics import InputError
from planner.workbook.reading import read_workbook
from planner.workbook.writing import make_workbook

ROOT = Path(__file__).parents[1]
SAMPLES = ROOT / "sample_clients"

MINIMAL: dict[str, Any] = {
    "Household": {
        "Client name": "Sample",
        "Plan date": date(2026, 1, 1),
        "Currency": "USD",
        "Tax rules": "none",
    },
    "People": {
        "people": [
            {
                "Person": "Ana",
                "Date of birth": date(1960, 5, 14),
                "Sex": "female",
                "Life table": "us-ssa-2022",
                "Death rates compared with the table": 0.9,
            },
            {
                "Person": "Tom",
                "Date of birth": date(1958, 2, 1),
                "Sex": "male",
                "Life table": "us-ssa-2022",
                "Death rates compared with the table": 0.9,
            },
        ]
    },
    "Accounts": {
        "accounts": [
            {"Account": "Bank", "Owner": "joint", "Type": "taxable", "Balance": 300_000},
            {"Account": "Pot", "Owner": "Ana", "Type": "tax-deferred", "Balance": 400_000},
        ]
    },
    "Income": {
        "incomes": [
            {
                "Income": "State pension",
                "Owner": "Ana",
                "Kind": "state pension",
                "Amount a year": 20_000,
                "From age": 67,
            }
        ]
    },
    "Spending": {"Essential spending a year": 30_000},
    "Markets": {
        "Inflation": 0.025,
        "asset classes": [
            {
                "Asset class": "Shares",
                "Expected return": 0.065,
                "Standard deviation": 0.16,
                "Shares": 1,
                "Bonds": 0.1,
            },
            {"Asset class": "Bonds", "Expected return": 0.04, "Standard deviation": 0.05, "Bonds": 1},
        ],
    },
    "Portfolios": {
        "portfolios": [
            {"Portfolio": "Calm", "Shares": 0.2, "Bonds": 0.8},
            {"Portfolio": "Bold", "Shares": 0.8, "Bonds": 0.2},
        ]
    },
}


def minimal() -> dict[str, Any]:
    """Values of a couple that reads without a warning; change them at will."""
    return copy.deepcopy(MINIMAL)


def save(workbook: Workbook, folder: Path) -> Path:
    """Save a workbook under a fresh name."""
    path = folder / f"client_{len(list(folder.iterdir()))}.xlsx"
    workbook.save(path)
    return path


def saved(
    folder: Path, values: dict[str, Any] | None = None, edit: Callable[[Workbook], object] | None = None
) -> Path:
    """Write values (default: the minimal household), let `edit` change cells, save."""
    workbook = make_workbook(minimal() if values is None else values)
    if edit is not None:
        edit(workbook)
    return save(workbook, folder)


def found(path: Path) -> list[tuple[str, str]]:
    """Code and place of every problem of a workbook, or of its warnings where it can be read."""
    try:
        read = read_workbook(path)
    except InputError as error:
        return [(problem.code, problem.where) for problem in error.diagnostics]
    return [(problem.code, problem.where) for problem in read.warnings]


def sample_maker() -> Any:
    """The script that writes the sample clients, as a module."""
    if str(SAMPLES) not in sys.path:
        sys.path.insert(0, str(SAMPLES))
    return importlib.import_module("make")
