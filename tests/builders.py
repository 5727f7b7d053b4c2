"""Small problems for tests: complete, in arrays, without a workbook."""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from planner.markets import LognormalReturns
from planner.piecewise import PiecewiseLinear
from planner.preferences import EstateUtility, SpendingUtility
from planner.problem import Problem

NO_TAX = PiecewiseLinear(np.array([0.0]), np.array([0.0]), 0.0)


def bracket_tax(
    allowance: float = 10_000.0, rates: tuple[float, ...] = (0.1, 0.3), width: float = 30_000.0
) -> PiecewiseLinear:
    """Convex tax on withdrawals: nothing up to the allowance, then brackets of equal width."""
    x = np.array([0.0] + [allowance + i * width for i in range(len(rates))])
    y = np.concatenate([[0.0, 0.0], np.cumsum(np.array(rates[:-1]) * width)])
    return PiecewiseLinear(x, y, rates[-1])


def jump_tax(at: float = 25_000.0, height: float = 1_500.0) -> PiecewiseLinear:
    """A bracket tax with a surcharge of fixed height above a place."""
    x = np.array([0.0, 10_000.0, at, at, 60_000.0])
    before = 0.1 * (at - 10_000.0)
    after = before + height
    return PiecewiseLinear(x, np.array([0.0, 0.0, before, after, after + 0.1 * (60_000.0 - at)]), 0.3)


def utility_of(gamma: float = 4.0, kappa: float = 3.0, essential: float = 30_000.0) -> SpendingUtility:
    """The spending utility with a floor of a tenth of essential spending."""
    return SpendingUtility(gamma, kappa, essential, essential / 10)


def single_problem(n_years: int = 8, **overrides: object) -> Problem:
    """One person, three accounts, brackets, a pension; rising death rates, certain at the end.

    Any field of `Problem` can be overridden. `need`, `death` and the like must fit `n_years`.
    """
    death = np.linspace(0.02, 0.30, n_years)[:, None]
    death[-1] = 1.0
    utility = utility_of()
    returns = LognormalReturns(np.array([0.01, 0.035]), np.array([0.02, 0.16]))
    gross, weights = returns.nodes(7)
    fields: dict[str, object] = {
        "statuses": ("first",),
        "transition": (1 - death)[:, :, None],
        "death": death,
        "income": np.full((n_years, 1), 12_000.0),
        "contribution": np.zeros((n_years, 1, 3)),
        "tax": tuple((bracket_tax(),) for _ in range(n_years)),
        "need": np.ones((n_years, 1)),
        "minimum_share": np.where(np.arange(n_years) >= 3, 0.05, 0.0)[:, None],
        "accessible_share": np.ones((n_years, 1)),
        "gross": gross,
        "node_weights": weights,
        "drag": np.array([0.002, 0.005]),
        "utility": utility,
        "estate": EstateUtility(utility),
        "discount": 0.98,
        "opening": np.array([60_000.0, 120_000.0, 40_000.0]),
        "has_account": (True, True, True),
        "conversions": False,
        "ceiling": np.inf,
        "heirs_tax_rate": 0.0,
        "cash_aside": 0.0,
        "portfolio_names": ("Calm", "Growth"),
        "returns": returns,
        "inflation": 0.025,
        "ages": 70 + np.arange(n_years)[None, :],
    }
    return Problem(**{**fields, **overrides})  # type: ignore[arg-type]


def couple_problem(n_years: int = 8, **overrides: object) -> Problem:
    """Two people with independent lives; the survivor needs 70 % and keeps part of the income."""
    q = np.array([np.linspace(0.03, 0.35, n_years), np.linspace(0.02, 0.30, n_years)])
    q[:, -1] = 1.0
    first, second = q
    zero = np.zeros(n_years)
    transition = np.stack(
        [
            np.stack([(1 - first) * (1 - second), (1 - first) * second, first * (1 - second)], axis=1),
            np.stack([zero, 1 - first, zero], axis=1),
            np.stack([zero, zero, 1 - second], axis=1),
        ],
        axis=1,
    )
    couple, survivor = bracket_tax(20_000.0, width=60_000.0), bracket_tax()
    fields: dict[str, object] = {
        "statuses": ("both", "first", "second"),
        "transition": transition,
        "death": 1 - transition.sum(axis=2),
        "income": np.tile([22_000.0, 15_000.0, 11_000.0], (n_years, 1)),
        "contribution": np.zeros((n_years, 3, 3)),
        "tax": tuple((couple, survivor, survivor) for _ in range(n_years)),
        "need": np.tile([1.0, 0.7, 0.7], (n_years, 1)),
        "minimum_share": np.where(np.arange(n_years) >= 3, 0.05, 0.0)[:, None] * np.ones(3),
        "accessible_share": np.ones((n_years, 3)),
        "ages": np.array([[68], [65]]) + np.arange(n_years),
    }
    return single_problem(n_years, **{**fields, **overrides})


def plain_problem(n_years: int, **overrides: object) -> Problem:
    """One person certain to live to the end, 1,000,000 in taxable, no income, tax, drag or minimum."""
    death = np.zeros((n_years, 1))
    death[-1] = 1.0
    fields: dict[str, object] = {
        "death": death,
        "transition": (1 - death)[:, :, None],
        "income": np.zeros((n_years, 1)),
        "tax": tuple((NO_TAX,) for _ in range(n_years)),
        "minimum_share": np.zeros((n_years, 1)),
        "drag": np.zeros(2),
        "opening": np.array([1_000_000.0, 0.0, 0.0]),
    }
    return single_problem(n_years, **{**fields, **overrides})


def with_fields(problem: Problem, **changes: object) -> Problem:
    """The same problem with some fields changed."""
    return replace(problem, **changes)  # type: ignore[arg-type]
