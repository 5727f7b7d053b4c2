"""Invented client lists: household number n of a seed is always the same, as a workbook's values."""

from __future__ import annotations

import random
from datetime import date
from pathlib import Path
from typing import Any

from planner.workbook.writing import write_workbook

_NAMES = {
    "female": ("Ada", "Bea", "Cleo", "Dora", "Edda", "Fay", "Greta", "Hale", "Ines", "Jo", "Kaya", "Lena"),
    "male": ("Arlo", "Bert", "Cyril", "Dan", "Enzo", "Finn", "Gus", "Hugo", "Ivo", "Jon", "Kurt", "Leo"),
}
_SURNAMES = ("Alder", "Birch", "Cedar", "Dogwood", "Elm", "Fir", "Hazel", "Juniper", "Larch", "Maple", "Oak")
_MIXES = (0.2, 0.4, 0.6, 0.8)


def household(seed: int, number: int, *, simple: bool = False) -> dict[str, Any]:
    """Values of one workbook (see `planner.workbook.writing`).

    Parameters
    ----------
    seed, number
        The same pair gives the same household.
    simple
        One person past 80 with one untaxed account and two portfolios: planned in a fraction of a
        second. Else four in ten are couples, from 58 to 84, with up to three kinds of account.
    """
    draw = random.Random(1_000_003 * seed + number)
    couple = not simple and draw.random() < 0.4
    american = simple or draw.random() < 0.5
    surname = draw.choice(_SURNAMES)
    oldest = draw.randint(86, 92) if simple else draw.randint(58, 84)
    people = []
    for index in range(2 if couple else 1):
        sex = draw.choice(("female", "male"))
        age = oldest - index * draw.randint(0, 6)
        people.append(
            {
                "Person": f"{draw.choice(_NAMES[sex])} {'AB'[index]}.",
                "Date of birth": date(2026 - age, draw.randint(1, 12), draw.randint(1, 28)),
                "Sex": sex,
                "Life table": "us-ssa-2022" if american else "uk-gompertz-2022-24",
                "Death rates compared with the table": round(draw.uniform(0.75, 1.1), 2),
            }
        )
    first = people[0]["Person"]
    savings = 100 * round(draw.lognormvariate(13.2, 0.7) / 100)
    pension = 100 * round(draw.uniform(8_000, 26_000) / 100)
    # About what pensions and savings carry, some more, some less.
    carried = len(people) * pension + savings * draw.uniform(0.025, 0.06)
    values: dict[str, Any] = {
        "Household": {
            "Client name": f"{first} {surname}" if not couple else f"{surname} household",
            "Plan date": date(2026, draw.randint(1, 6), draw.randint(1, 28)),
            "Currency": "USD" if american else "GBP",
            "Tax rules": "none" if simple else "us-federal-2026" if american else "uk-2025-26",
        },
        "People": {"people": people},
        "Accounts": {"accounts": _accounts(draw, savings, people, simple=simple)},
        "Income": {
            "incomes": [
                {
                    "Income": f"State pension {person['Person']}",
                    "Owner": person["Person"],
                    "Kind": "state pension",
                    "Amount a year": pension,
                    "From age": 67,
                }
                for person in people
            ]
        },
        "Spending": {"Essential spending a year": 100 * round(carried * draw.uniform(0.6, 1.0) / 100)},
        "Markets": {
            "Inflation": 0.025,
            "asset classes": [
                {"Asset class": "Shares", "Expected return": 0.065, "Standard deviation": 0.16, "Shares": 1,
                 "Bonds": 0.1, "Income paid out a year": 0.02},
                {"Asset class": "Bonds", "Expected return": 0.04, "Standard deviation": 0.05, "Bonds": 1,
                 "Income paid out a year": 0.03},
            ],
        },
        "Portfolios": {
            "Adviser fee": 0.005,
            "portfolios": [
                {"Portfolio": f"{mix:.0%} shares", "Yearly cost": 0.002, "Shares": mix, "Bonds": 1 - mix}
                for mix in (_MIXES[:2] if simple else _MIXES)
            ],
        },
    }  # fmt: skip
    if not simple:
        values["Spending"]["Wanted spending a year"] = 100 * round(carried * draw.uniform(0.95, 1.3) / 100)
        if draw.random() < 0.15:
            values["Preferences"] = {"Wish to leave": 1_000 * round(savings * draw.uniform(0.1, 0.4) / 1_000)}
    return values


def _accounts(
    draw: random.Random, savings: int, people: list[dict[str, Any]], *, simple: bool
) -> list[dict[str, Any]]:
    """One to three kinds of account; each person may have a tax-deferred one."""
    first = people[0]["Person"]
    if simple:
        return [{"Account": "Deposit", "Owner": first, "Type": "taxable", "Balance": savings}]
    kinds = draw.choice((("taxable",), ("taxable", "tax-deferred"), ("taxable", "tax-deferred", "tax-free")))
    weights = [draw.uniform(0.2, 1.0) for _ in kinds]
    accounts: list[dict[str, Any]] = []
    for kind, weight in zip(kinds, weights, strict=True):
        balance = round(savings * weight / sum(weights))
        owner = draw.choice(people)["Person"]
        row = {"Account": f"The {kind} one", "Owner": owner, "Type": kind, "Balance": balance}
        if kind == "taxable":
            row["Cost basis"] = round(balance * draw.uniform(0.5, 1.0))
        if kind == "tax-deferred":
            row["Balance last year-end"] = round(balance * draw.uniform(0.9, 1.05))
        accounts.append(row)
    return accounts


def write_list(folder: Path, count: int, *, seed: int = 7, simple: bool = False) -> list[Path]:
    """Write that many workbooks into a folder, which is made where it is missing."""
    folder.mkdir(parents=True, exist_ok=True)
    paths = [folder / f"client_{number:04}.xlsx" for number in range(count)]
    for number, path in enumerate(paths):
        write_workbook(household(seed, number, simple=simple), path)
    return paths
