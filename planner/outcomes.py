"""Measures of simulated paths: pure functions of arrays.

Utilities, level spending and the wealth cost of a strategy; chance, size and time of falling
below essential spending; percentiles over paths with someone alive. Standard errors treat paths
as independent; with stratified draws they are on the safe side (see `simulation.uniform_draws`).
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from planner.piecewise import FloatArray
from planner.preferences import SpendingUtility
from planner.problem import IntArray, Problem, over_accounts
from planner.simulation import Paths

BoolArray = NDArray[np.bool_]
ValueAtScale = Callable[[FloatArray], FloatArray]

SECTIONS, SECTIONINGS = 128, 3
"""The wealth cost's bracket is cut into 128 parts three times: many values at once cost little more
than one."""

HALF_CENT = 0.005
"""Spending is short where it is less than this below what is needed."""

LEVELS = (0.1, 0.5, 0.9)
"""Percentile levels printed in plans."""


@dataclass(frozen=True, slots=True)
class Estimate:
    """A value estimated from paths, and its standard error."""

    value: float
    standard_error: float


@dataclass(frozen=True, slots=True, eq=False)
class Percentiles:
    """Percentiles with standard errors.

    Attributes
    ----------
    levels : tuple of float
        0.1 = in one of ten cases less than.
    values, standard_errors : ndarray of shape (n_levels,) or (n_levels, n_years)
        NaN in a year without any path.
    count : ndarray of int, shape () or (n_years,)
        Number of paths behind each.
    """

    levels: tuple[float, ...]
    values: FloatArray
    standard_errors: FloatArray
    count: IntArray


@dataclass(frozen=True, slots=True)
class Shortfall:
    """Spending below essential, over paths.

    Attributes
    ----------
    chance : Estimate
        That in some year with someone alive spending is below essential.
    years : Estimate
        Mean number of such years, over all paths.
    years_when_short : float
        Mean number over the paths that have any; 0 where none has.
    amount_a_year : float
        Mean amount short, over the short years.
    total_when_short : float
        Mean total short, over the paths that have any.
    mostly_from_year : int or None
        Latest year t such that at least 80 % of short years are year t or later.
    """

    chance: Estimate
    years: Estimate
    years_when_short: float
    amount_a_year: float
    total_when_short: float
    mostly_from_year: int | None


@dataclass(frozen=True, slots=True, eq=False)
class Outcomes:
    """What a strategy does for a household, from one set of paths.

    Attributes
    ----------
    utility : Estimate
        L, expected discounted utility, estate included.
    level_spending : float or None
        Worth a steady income of; None where a legacy is wished.
    spending_this_year : float
    shortfall : Shortfall
    spending, balance : Percentiles
        By year, over paths with someone alive; balance = all accounts at the opening.
    estate, tax_total, largest_cut : Percentiles
        Over all paths; estate after heirs' tax.
    tax_total_mean : Estimate
    exhausted : Estimate
        Chance that savings are used up while someone lives on.
    """

    utility: Estimate
    level_spending: float | None
    spending_this_year: float
    shortfall: Shortfall
    spending: Percentiles
    balance: Percentiles
    estate: Percentiles
    tax_total: Percentiles
    largest_cut: Percentiles
    tax_total_mean: Estimate
    exhausted: Estimate


# Value ------------------------------------------------------------------------------------------


def path_utilities(problem: Problem, paths: Paths, need: FloatArray | None = None) -> FloatArray:
    r"""Discounted utility of each path, (n_paths,).

    :math:`\sum_{t \text{ alive}} \beta^t n_t f(c_t / n_t) + \beta^{\tau + 1} v(b)`, with tau the
    last year that opens with someone alive and b the estate left at its end; `need` is as
    `need_on_paths` gives it, where it is known.
    """
    if need is None:
        need = need_on_paths(problem, paths)
    total = np.zeros(paths.n_paths)
    for t in range(paths.n_years):
        here = np.flatnonzero(paths.alive[:, t])
        n = need[here, t]
        total[here] += problem.discount**t * n * problem.utility.value(paths.spending[here, t] / n)
    if problem.estate.wanted:
        total += problem.discount ** (paths.death_year + 1.0) * problem.estate.value(paths.estate)
    return total


def mean_estimate(values: FloatArray) -> Estimate:
    """Mean of independent values (n_paths,), with standard error sd / sqrt(n)."""
    n = values.size
    error = float(values.std(ddof=1)) / n**0.5 if n > 1 else float("nan")
    return Estimate(float(values.mean()), error)


def utility_difference(utilities: FloatArray, reference: FloatArray) -> Estimate:
    """L - L_reference on the same scenarios: the standard error is of the paired differences."""
    return mean_estimate(utilities - reference)


def level_spending(utility: SpendingUtility, value: float, normaliser: float) -> float:
    """Level spending equivalent f^-1(L / A_0); it has a meaning only where no legacy is wished.

    Parameters
    ----------
    value : float
        L.
    normaliser : float
        A_0: the expected sum of discounted need scales, see `need_normaliser`.
    """
    return float(utility.inverse(value / normaliser))


def need_normaliser(problem: Problem) -> float:
    """A_0 without legacy: A_t(h) = n + beta sum_h' P(h -> h') A_{t+1}(h'), at t = 0, status 0."""
    following = np.zeros(problem.n_statuses)
    for t in reversed(range(problem.n_years)):
        following = problem.need[t] + problem.discount * problem.transition[t] @ following
    return float(following[0])


def wealth_cost(value_at_scale: ValueAtScale, difference: float, wealth: float) -> float:
    """D that solves V_0((1 - D / W0) x) = V_0(x) + difference, in money.

    Parameters
    ----------
    value_at_scale : callable
        s -> V_0(s x), the optimum's value with all accounts multiplied by each s (n,); increasing.
    difference : float
        L_rule - L_optimum on the same scenarios, or minus a gap.
    wealth : float
        W0 = x1 + x2 + x3.

    Returns
    -------
    float
        W0 where the strategy is worth less than no savings at all. Below 0 where the difference
        is above 0 (sampling error): then D is at least -W0.
    """
    if difference == 0 or wealth <= 0:
        return 0.0
    low, high = (0.0, 1.0) if difference < 0 else (1.0, 2.0)
    scales = np.linspace(low, high, SECTIONS + 1)
    values = value_at_scale(scales)
    target = float(values[-1] if difference < 0 else values[0]) + difference
    if values[0] >= target:
        return (1 - low) * wealth
    if values[-1] <= target:
        return (1 - high) * wealth
    low, high, _ = _section(scales, values, target)
    for _ in range(SECTIONINGS - 1):
        scales = np.linspace(low, high, SECTIONS + 1)
        low, high, share = _section(scales, value_at_scale(scales), target)
    # V_0 is steep near 0, but a straight line over a two-millionth of it.
    return (1 - (low + share * (high - low))) * wealth


def _section(scales: FloatArray, values: FloatArray, target: float) -> tuple[float, float, float]:
    """First section in which values reach the target, and where on it, as a share of a straight line.

    Values at the ends may differ by rounding from what they were among other scales, so the target may
    seem to lie at or beyond an end.
    """
    reached = np.flatnonzero(values >= target)
    after = max(1, int(reached[0])) if reached.size else values.size - 1
    below, above = float(values[after - 1]), float(values[after])
    share = (target - below) / (above - below) if above > below else 0.0
    return float(scales[after - 1]), float(scales[after]), min(max(share, 0.0), 1.0)


BILLS, TOO_LITTLE_EARLY, TOO_LITTLE_LATE, LEAVES_LESS = (
    "bills",
    "too little early",
    "too little late",
    "estate",
)
"""Reasons of `main_loss`."""


def main_loss(problem: Problem, best: Paths, other: Paths, early_years: int = 10) -> str:
    """Where a strategy loses most of what it is worth less than another on the same drawn years.

    Losses of discounted utility are summed over paths and years in which the other strategy
    spends less: where it is below essential spending (`BILLS`), else in the first `early_years`
    (`TOO_LITTLE_EARLY`) or after them (`TOO_LITTLE_LATE`); and over estates that are smaller
    (`LEAVES_LESS`). What it gains elsewhere is not netted.

    Returns
    -------
    str
        The reason with the largest sum; "" where nothing is lost.
    """
    losses = dict.fromkeys((BILLS, TOO_LITTLE_EARLY, TOO_LITTLE_LATE, LEAVES_LESS), 0.0)
    for t in range(best.n_years):
        here = np.flatnonzero(best.alive[:, t] & (other.spending[:, t] < best.spending[:, t]))
        n = problem.need[t].take(best.status[here, t])
        value = problem.utility.value
        lost = value(best.spending[here, t] / n) - value(other.spending[here, t] / n)
        lost = problem.discount**t * n * lost
        short = other.spending[here, t] < n * problem.utility.essential - HALF_CENT
        losses[BILLS] += float(lost[short].sum())
        losses[TOO_LITTLE_EARLY if t < early_years else TOO_LITTLE_LATE] += float(lost[~short].sum())
    if problem.estate.wanted:
        lost = problem.estate.value(best.estate) - problem.estate.value(other.estate)
        losses[LEAVES_LESS] = float(
            (problem.discount ** (best.death_year + 1.0) * np.maximum(lost, 0.0)).sum()
        )
    reason = max(losses, key=lambda key: losses[key])
    return reason if losses[reason] > 0 else ""


# Essential spending -----------------------------------------------------------------------------


def need_on_paths(problem: Problem, paths: Paths) -> FloatArray:
    """Need scale n of each path and year, (n_paths, n_years); 0 where nobody is alive."""
    with_nobody = np.column_stack([problem.need, np.zeros(problem.n_years)])
    years = zip(with_nobody, paths.status.T, strict=True)  # years are rows in memory
    return np.stack([need.take(status) for need, status in years]).T


def amount_short(spending: FloatArray, essential: FloatArray, alive: BoolArray) -> FloatArray:
    """How far spending is below essential (n E), 0 within half a cent; all (n_paths, n_years)."""
    short = np.where(alive, essential - spending, 0.0)
    return np.where(short > HALF_CENT, short, 0.0)


def shortfall(short: FloatArray) -> Shortfall:
    """Measures of the amounts short (n_paths, n_years), as `amount_short` gives them."""
    below = short > 0
    years = below.sum(axis=1).astype(np.float64)
    n_short = int((years > 0).sum())
    n_years_short = int(below.sum())
    if n_short == 0:
        return Shortfall(chance(years > 0), mean_estimate(years), 0.0, 0.0, 0.0, None)
    total = float(short.sum())
    at_or_after = below.sum(axis=0)[::-1].cumsum()[::-1]
    return Shortfall(
        chance=chance(years > 0),
        years=mean_estimate(years),
        years_when_short=n_years_short / n_short,
        amount_a_year=total / n_years_short,
        total_when_short=total / n_short,
        mostly_from_year=int(np.flatnonzero(at_or_after >= 0.8 * n_years_short)[-1]),
    )


def chance(happened: BoolArray) -> Estimate:
    """Share of paths (n_paths,) on which something happened.

    Standard error sqrt(p' (1 - p') / n) with p' = (k + 1) / (n + 2), so that a thing that was
    never seen in n paths is not reported as certain.
    """
    n, k = happened.size, int(happened.sum())
    smoothed = (k + 1) / (n + 2)
    return Estimate(k / n, (smoothed * (1 - smoothed) / n) ** 0.5)


# Percentiles ------------------------------------------------------------------------------------


def percentiles(values: FloatArray, levels: Sequence[float] = LEVELS) -> Percentiles:
    """Percentiles of values (n,).

    Linear between order statistics. The standard error is half the distance between the order
    statistics at levels p - e and p + e, e = sqrt(p (1 - p) / n): the number of values below the
    true percentile is binomial, so these ranks are one standard deviation away. Free of any
    assumption on the law of the values.
    """
    wanted = np.asarray(levels, dtype=np.float64)
    nothing = np.full(wanted.shape, np.nan)
    n = values.size
    if n == 0:
        return Percentiles(tuple(levels), nothing, nothing.copy(), np.array(0))
    spread = np.sqrt(wanted * (1 - wanted) / n)
    around = np.stack([wanted, np.maximum(wanted - spread, 0.0), np.minimum(wanted + spread, 1.0)])
    place, in_order = around * (n - 1), np.sort(values)
    below = np.minimum(place.astype(np.int64), max(n - 2, 0))
    left, right = in_order[below], in_order[np.minimum(below + 1, n - 1)]
    middle, low, high = left + (place - below) * (right - left)
    return Percentiles(tuple(levels), middle, (high - low) / 2, np.array(n))


def yearly_percentiles(values: FloatArray, alive: BoolArray, levels: Sequence[float] = LEVELS) -> Percentiles:
    """Percentiles by year over paths with someone alive; values, alive (n_paths, n_years)."""
    years = [percentiles(values[alive[:, t], t], levels) for t in range(values.shape[1])]
    return Percentiles(
        levels=tuple(levels),
        values=np.stack([year.values for year in years], axis=1),
        standard_errors=np.stack([year.standard_errors for year in years], axis=1),
        count=np.array([int(year.count) for year in years]),
    )


# Cuts and how long it lasts ---------------------------------------------------------------------


def largest_cut(spending: FloatArray, need: FloatArray, alive: BoolArray) -> FloatArray:
    """Largest fall of spending from one year to the next on each path, a share; (n_paths,).

    1 - (c_{t+1} / n_{t+1}) / (c_t / n_t), at least 0: spending at an unchanged need scale, so a
    survivor's smaller need is no cut. Years that follow spending of nothing are left out.
    """
    largest = np.zeros(spending.shape[0])
    # Year by year, so that what is worked on stays in the processor's cache.
    with np.errstate(divide="ignore", invalid="ignore"):
        before = spending[:, 0] / need[:, 0]
        for t in range(1, spending.shape[1]):
            level = spending[:, t] / need[:, t]
            counts = alive[:, t] & alive[:, t - 1] & (spending[:, t - 1] > HALF_CENT)
            np.maximum(largest, 1 - level / before, out=largest, where=counts)
            before = level
    return largest


def exhausted_year(balances: FloatArray, alive: BoolArray) -> IntArray:
    """First year that opens with someone alive and savings used up; n_years where there is none.

    Parameters
    ----------
    balances : ndarray of shape (n_paths, n_years)
        All accounts together at the opening of each year.
    """
    empty = alive & (balances < HALF_CENT)
    return np.where(empty.any(axis=1), empty.argmax(axis=1), balances.shape[1])


@dataclass(frozen=True, slots=True, eq=False)
class PathMeasures:
    """What measures are made of: need scale and amount short (n_paths, n_years), utility (n_paths,)."""

    need: FloatArray
    short: FloatArray
    utilities: FloatArray

    @classmethod
    def of(cls, problem: Problem, paths: Paths) -> PathMeasures:
        """Measure every path."""
        need = need_on_paths(problem, paths)
        short = amount_short(paths.spending, need * problem.utility.essential, paths.alive)
        return cls(need, short, path_utilities(problem, paths, need))


def measure(
    problem: Problem, paths: Paths, levels: Sequence[float] = LEVELS, by_path: PathMeasures | None = None
) -> Outcomes:
    """All measures of one strategy's paths."""
    by_path = by_path or PathMeasures.of(problem, paths)
    need, short = by_path.need, by_path.short
    utility = mean_estimate(by_path.utilities)
    balance = over_accounts(paths.balances[:, :-1])
    tax_total = paths.tax.sum(axis=1)
    return Outcomes(
        utility=utility,
        level_spending=(
            None
            if problem.estate.wanted
            else level_spending(problem.utility, utility.value, need_normaliser(problem))
        ),
        spending_this_year=float(paths.spending[:, 0].mean()),
        shortfall=shortfall(short),
        spending=yearly_percentiles(paths.spending, paths.alive, levels),
        balance=yearly_percentiles(balance, paths.alive, levels),
        estate=percentiles(paths.estate, levels),
        tax_total=percentiles(tax_total, levels),
        largest_cut=percentiles(largest_cut(paths.spending, need, paths.alive), levels),
        tax_total_mean=mean_estimate(tax_total),
        exhausted=chance(exhausted_year(balance, paths.alive) < paths.n_years),
    )
