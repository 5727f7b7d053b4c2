"""Markets as they were: every start year of the sheet History in turn, and a bootstrap of its years."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from planner import outcomes
from planner.banded import KeepWithinBand
from planner.diagnostics import Diagnostic, InputError
from planner.household import Household
from planner.piecewise import FloatArray
from planner.plan import PLAN_KEY, PlanSettings, Solved, chosen_rules, solve_household
from planner.problem import IntArray, Policy, Problem
from planner.problem_building import Builder
from planner.projection import NO_CHANGE_TOLERANCE, Yardstick
from planner.simulation import Scenarios, simulate

LAST_AGE = 95
"""Sequences run until the youngest person would be this old."""

FEWEST_YEARS = 10
MEAN_BLOCK = 5.0
"""Mean length in years of a block of the bootstrap."""


@dataclass(frozen=True, slots=True, eq=False)
class RealHistory:
    """A household's history in real terms.

    Attributes
    ----------
    years : tuple of int
    gross : ndarray of shape (n_years, n_portfolios)
        Gross real return of each portfolio after its fees: (1 + a·r - fees) / (1 + i).
    inflation : ndarray of shape (n_years,)
    """

    years: tuple[int, ...]
    gross: FloatArray
    inflation: FloatArray


def real_history(household: Household) -> RealHistory:
    """Portfolio returns of the sheet History, in the order of the problem's portfolios.

    Raises
    ------
    InputError
        Code ``history-missing``: the sheet is blank; ``history-too-short``.
    """
    history = household.history
    if history is None:
        message = (
            "the sheet History is blank; fill in inflation and nominal returns by asset class, year by year"
        )
        raise InputError([Diagnostic("history-missing", "History", message)])
    if len(history.years) < FEWEST_YEARS:
        message = f"found {len(history.years)} years; expected {FEWEST_YEARS} or more"
        raise InputError([Diagnostic("history-too-short", "History", message)])
    portfolios = Builder.of(household).portfolios()
    weights = np.array([portfolio.weights for portfolio in portfolios])
    fees = np.array([portfolio.yearly_cost for portfolio in portfolios]) + household.adviser_fee
    inflation = np.array(history.inflation)
    nominal = np.array(history.returns) @ weights.T - fees
    return RealHistory(history.years, (1 + nominal) / (1 + inflation)[:, None], inflation)


def lasting_rate(gross: FloatArray) -> float:
    r"""Largest constant real withdrawal, a share of savings, that lasts through given years.

    Withdrawn at the start of each year: :math:`1 / \sum_{k<n} \prod_{j<k} 1/R_j`; gross real returns (n,).
    """
    discounts = np.cumprod(np.append(1.0, 1.0 / gross[:-1]))
    return float(1.0 / discounts.sum())


# Every start year ----------------------------------------------------------------------------------


@dataclass(frozen=True, slots=True, eq=False)
class SequenceResult:
    """One strategy through every start year, everybody alive throughout.

    Attributes
    ----------
    key, name : str
    starts : tuple of int
        Start years.
    first, lowest, average : ndarray of shape (n_starts,)
        Real spending: in the first year, the least at an unchanged need, and the mean.
    years_below : ndarray of shape (n_starts,)
        Years in which spending is below essential.
    left : ndarray of shape (n_starts,)
        Savings at the end, after heirs' tax.
    order : ndarray of int, shape (n_starts,)
        Starts from worst to best by discounted utility.
    """

    key: str
    name: str
    starts: tuple[int, ...]
    first: FloatArray
    lowest: FloatArray
    average: FloatArray
    years_below: FloatArray
    left: FloatArray
    order: IntArray


@dataclass(frozen=True, slots=True, eq=False)
class Sequences:
    """Strategies through the same start years, the plan first; each start lasts `years`."""

    years: int
    results: tuple[SequenceResult, ...]


def window_of(problem: Problem, n_history: int) -> int:
    """Years of a sequence: until the youngest is `LAST_AGE`, at most all but five of the history."""
    wanted = LAST_AGE - int(problem.ages[:, 0].min())
    return max(FEWEST_YEARS // 2, min(wanted, problem.n_years - 1, n_history - 5))


def sequence_scenarios(problem: Problem, history: RealHistory, years: int) -> Scenarios:
    """One path a start year: everybody alive for `years`, then nobody."""
    starts = len(history.years) - years + 1
    status = np.full((starts, problem.n_years + 1), problem.n_statuses, dtype=np.int16)
    status[:, :years] = 0
    gross = np.ones((starts, problem.n_years, problem.n_portfolios))
    inflation = np.full((starts, problem.n_years), problem.inflation)
    for start in range(starts):
        gross[start, :years] = history.gross[start : start + years]
        inflation[start, :years] = history.inflation[start : start + years]
    return Scenarios(status, gross=gross, inflation=inflation)


def historical_sequences(household: Household, settings: PlanSettings) -> Sequences:
    """Carry the plan and the rules through every start year of the sheet History.

    The plan is made on the workbook's own expectations; it does not know the history.
    """
    history = real_history(household)
    solved = solve_household(household, settings)
    problem = solved.problem
    years = window_of(problem, len(history.years))
    scenarios = sequence_scenarios(problem, history, years)
    policies: list[tuple[str, Policy]] = [(PLAN_KEY, solved.policy)]
    policies += [(rule.key, rule) for rule in chosen_rules(solved, settings)]
    if settings.rules is None:
        policies.insert(1, (KeepWithinBand.key, KeepWithinBand(solved.policy, NO_CHANGE_TOLERANCE)))
    starts = history.years[: scenarios.n_paths]
    return Sequences(years, tuple(_sequence(problem, k, p, scenarios, starts, years) for k, p in policies))


def _sequence(
    problem: Problem, key: str, policy: Policy, scenarios: Scenarios, starts: tuple[int, ...], years: int
) -> SequenceResult:
    paths = simulate(problem, policy, scenarios)
    spending = paths.spending[:, :years]
    need = problem.need[:years, 0]
    below = spending < need * problem.utility.essential - outcomes.HALF_CENT
    return SequenceResult(
        key=key,
        name=policy.name,
        starts=starts,
        first=spending[:, 0],
        lowest=(spending / need).min(axis=1),
        average=spending.mean(axis=1),
        years_below=below.sum(axis=1).astype(np.float64),
        left=paths.estate,
        order=np.argsort(outcomes.path_utilities(problem, paths), kind="stable"),
    )


# Bootstrap -------------------------------------------------------------------------------------------


def block_bootstrap(
    n_history: int, n_paths: int, n_years: int, generator: np.random.Generator, mean_block: float = MEAN_BLOCK
) -> IntArray:
    """Years drawn in blocks of geometric length that wrap around: indices (n_paths, n_years).

    Each year follows the one drawn before it, or with chance 1/`mean_block` any year is drawn anew;
    every year of a path is then any year of the history with the same chance.

    References
    ----------
    Politis & Romano (1994), The Stationary Bootstrap, Journal of the American Statistical
    Association 89(428) 1303-1313.
    """
    drawn = generator.integers(0, n_history, (n_paths, n_years))
    anew = generator.random((n_paths, n_years)) < 1.0 / mean_block
    index = np.empty((n_paths, n_years), dtype=np.int64)
    index[:, 0] = drawn[:, 0]
    for t in range(1, n_years):
        index[:, t] = np.where(anew[:, t], drawn[:, t], (index[:, t - 1] + 1) % n_history)
    return index


def in_bootstrapped_years(solved: Solved, settings: PlanSettings, mean_block: float = MEAN_BLOCK) -> Solved:
    """The same plan and lives, met by bootstrapped years of the sheet History.

    The plan was made for the workbook's expectations; costs of rules are still measured by its value.
    """
    history = real_history(solved.household)
    problem = solved.problem
    index = block_bootstrap(
        len(history.years),
        solved.scenarios.n_paths,
        problem.n_years,
        np.random.default_rng([settings.seed, 2]),
        mean_block,
    )
    scenarios = Scenarios(
        solved.scenarios.status, gross=history.gross[index], inflation=history.inflation[index]
    )
    paths = simulate(problem, solved.policy, scenarios)
    yardstick = Yardstick(outcomes.path_utilities(problem, paths), solved.yardstick.value_at_scale)
    return replace(solved, scenarios=scenarios, paths=paths, late=None, late_paths=None, yardstick=yardstick)
