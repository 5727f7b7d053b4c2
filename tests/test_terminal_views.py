"""Tables of stresses, decisions, history and ladders: golden text at two widths, from invented figures."""

from dataclasses import replace

import numpy as np
import pytest
from golden_text import assert_golden, rendered
from households import single
from plan_builder import build

from planner.decisions import DecisionCurve, Point
from planner.history import SequenceResult, Sequences
from planner.household import Preferences
from planner.ladders import Rung
from planner.plan_record import Range
from planner.reports.terminal_views import (
    decision_tables,
    legacy_table,
    risk_table,
    sequence_table,
    stress_table,
)
from planner.surprises import StressResult

LATER = ((75, 10), (85, 20), (95, 30))
PLAN = build().strategies[0]
STRESSES = (
    StressResult("as planned", "as given", PLAN, True),
    StressResult("returns 1 point lower", "planned for", replace(PLAN, wealth_cost=109_600.0), True),
    StressResult("both alive to 100", "surprise", replace(PLAN, chance_below_essential=0.1), False),
    StressResult("care needed (last survivor)", "surprise", replace(PLAN, wealth_cost=2e6), True),
)
CURVES = (
    DecisionCurve(
        "start-age",
        "When to start Ana's state pension?",
        (
            Point("65: 23,900 a year", 94_900.0, 91_400.0, -75_300.0),
            Point("67: 27,600 a year", 97_300.0, 94_000.0, 0.0, True, 79.9),
            Point("70: 34,200 a year", 100_500.0, 97_700.0, 106_600.0, False, 81.6),
        ),
        2,
    ),
    DecisionCurve(
        "portfolio",
        "One fixed portfolio?",
        (Point("the best each year", 9e4, 8e4, 0.0, True),),
        0,
        ("A note.",),
    ),
)
SEQUENCES = Sequences(
    30,
    tuple(
        SequenceResult(
            key,
            name,
            (1950, 1951, 1952),
            np.full(3, 50_000.0),
            np.array([40_000.0, 42_000.0, 20_000.0]) * factor,
            np.full(3, 45_000.0),
            np.array([0.0, 1.0, 4.0]),
            np.array([1e5, 2e5, 0.0]),
            np.array([2, 0, 1]),
        )
        for key, name, factor in (
            ("plan", "the best plan", 1.0),
            ("constant-real", "same amount plus prices", 0.7),
        )
    ),
)
RUNGS = tuple(
    Rung(
        value,
        value == 2.7,
        98_400.0 - 1e3 * value,
        56_600.0,
        80_100.0,
        80,
        "80 % shares",
        Range(2e4, 1e5, 3e5),
        0.03,
    )
    for value in (0.8, 1.4, 2.7, 5.0)
)
LIN = single(preferences=Preferences(2.7, False, True))


def views(width):
    yield stress_table(STRESSES, "USD", LATER, 1_095_000.0, width)
    yield decision_tables(CURVES, ("when to sell the home: not planned",), "USD", width)
    yield sequence_table(SEQUENCES, "USD", width)
    yield risk_table(RUNGS, LIN, width)
    yield legacy_table(tuple(replace(r, value=50_000 * r.value) for r in RUNGS), LIN, width)


@pytest.mark.parametrize("width", [80, 120])
def test_golden(width):
    text = "\n".join(rendered(view, width) for view in views(width))
    assert max(len(line) for line in text.splitlines()) <= width
    assert "…" not in text
    assert_golden(f"views_{width}.txt", text)


def test_the_gambles_are_echoed_in_words():
    words = " ".join(rendered(risk_table(RUNGS, LIN, 80)).split())
    assert "would not take a job that doubles income for life or cuts it by a third" in words
    assert "would with a cut by a fifth: risk aversion 2.7" in words


def test_all_of_the_savings_is_said_in_words():
    text = rendered(stress_table(STRESSES, "USD", LATER, 1_095_000.0, 80))
    assert next(line for line in text.splitlines() if line.startswith("care")).rstrip().endswith("all")
