r"""The Bellman recursion, backwards over years: Problem -> OptimalPolicy.

.. math::
    J_t(y, h) &= \max_p E\Big[\sum_{h'} P(h \to h')\, V_{t+1}(y R_p, h') + P(h \to none)\, v(y R_p)\Big] \\
    V_t(x, h) &= \max_{w_2, k, c} n f(c/n) + \beta J_t(y, h)

Values are carried as certainty equivalents C = g^-1(V/A), nearly linear in wealth; A_t(h) =
n + beta (sum_h' P A_{t+1} + P(none) a [legacy]). g is the utility without its kink at essential
spending, so that the kink of the year's utility does not become a kink of C in wealth.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace
from functools import partial

import numpy as np

from planner.beside import is_copy, shared
from planner.optimum.expectation import GrowthMaps, expected_value, growth_maps
from planner.optimum.grids import CashGrid, LogGrid, derivative_matrix, limited_slopes, plausible_slopes
from planner.optimum.inner import TINY_SLOPE, Continuation, Felicity, cash_table
from planner.optimum.outer import OuterChoice, best_on_nodes, situation_of
from planner.optimum.policy import OptimalPolicy
from planner.optimum.surface import Surface
from planner.piecewise import FloatArray
from planner.preferences import SpendingUtility
from planner.problem import IntArray, Problem

WORTH_SHARING = 40_000  # nodes times years of a status, below which a copy costs more than it saves


@dataclass(frozen=True, slots=True)
class SolverSettings:
    """Grids: nodes for taxable, tax-deferred, tax-free and cash; their top and scale.

    Attributes
    ----------
    top : float
        Largest balance on a grid, in multiples of wealth and the largest yearly receipt.
    scale : float
        Below wealth / `scale` nodes are about evenly spaced, above it in proportion.
    """

    taxable: int = 14
    tax_deferred: int = 26
    tax_free: int = 9
    cash: int = 72
    top: float = 4.0
    scale: float = 50.0

    @classmethod
    def for_problem(cls, problem: Problem) -> SolverSettings:
        """Return default grids: an absent account's nodes go to the others."""
        _, deferred, free = problem.has_account
        if deferred and free:
            # One status costs a third of three: a single person can have the finer grid.
            return cls() if problem.n_statuses > 1 else cls(20, 27, 12, 50, scale=60.0)
        if deferred:
            return cls(taxable=28, tax_deferred=40, cash=90)
        if free:
            return cls(taxable=32, tax_free=24, cash=90)
        return cls(taxable=160, cash=240, scale=50.0)

    def scaled(self, factor: float) -> SolverSettings:
        """The same with every grid `factor` times as fine."""
        return replace(
            self,
            taxable=round(factor * (self.taxable - 1)) + 1,
            tax_deferred=round(factor * (self.tax_deferred - 1)) + 1,
            tax_free=round(factor * (self.tax_free - 1)) + 1,
            cash=round(factor * self.cash),
        )


def value_weights(problem: Problem) -> tuple[FloatArray, FloatArray]:
    """A_t(h) and the weight of J: arrays (n_years, n_statuses).

    A_t = n + beta (sum_h' P A_{t+1} + P(none) a [legacy]); the second array is the bracket.
    """
    n_years, n_statuses = problem.need.shape
    weight = np.zeros((n_years + 1, n_statuses))
    later = np.zeros((n_years, n_statuses))
    strength = problem.estate.strength if problem.estate.wanted else 0.0
    for t in range(n_years - 1, -1, -1):
        later[t] = problem.transition[t] @ weight[t + 1] + problem.death[t] * strength
        weight[t] = problem.need[t] + problem.discount * later[t]
    return weight[:-1], later


def build_grids(problem: Problem, settings: SolverSettings) -> tuple[LogGrid, LogGrid, LogGrid]:
    """Account grids: the top covers receipts and growth."""
    essential = problem.utility.essential
    wealth = max(problem.wealth, essential)
    receipts = float(np.maximum(problem.income, 0.0).max(axis=1).max(initial=0.0))
    top = settings.top * (wealth + receipts)
    sizes = (settings.taxable, settings.tax_deferred, settings.tax_free)
    exists = problem.has_account
    grids = [
        LogGrid.build(n if there else 1, wealth / settings.scale, top)
        for n, there in zip(sizes, exists, strict=True)
    ]
    return grids[0], grids[1], grids[2]


def cash_range(problem: Problem, grids: tuple[LogGrid, LogGrid, LogGrid]) -> tuple[float, float]:
    """Least and largest money (cash and tax-free) that any node and choice can give."""
    low, high = 0.0, 0.0
    for t in range(problem.n_years):
        for h in range(problem.n_statuses):
            tax = problem.tax[t][h]
            # Cash after tax falls below its value at g = 0 only by jumps; the knots show by how much.
            kept = float(np.min(tax.x - tax.y)) if tax.x.size > 1 else -float(tax.y[0])
            low = min(low, float(problem.income[t, h]) + min(kept, 0.0))
            high = max(high, float(problem.income[t, h]))
    return low - grids[0].scale, high + sum(float(grid.nodes[-1]) for grid in grids)


def solve(
    problem: Problem,
    settings: SolverSettings | None = None,
    progress: Callable[[float], None] | None = None,
) -> OptimalPolicy:
    """Solve the household's problem by backward induction.

    A survivor's years need nothing of the couple's: they are solved first, on both cores where there
    are two.

    Parameters
    ----------
    progress
        Called after each year with the share of years done.

    Returns
    -------
    OptimalPolicy
        Values and choices on the nodes, for every year and status.

    Raises
    ------
    ValueError
        A status can be left and come back to.
    """
    settings = settings or SolverSettings.for_problem(problem)
    work = _Induction(problem, settings)
    n_years, n_statuses = problem.need.shape
    done = 0

    def after_year() -> None:
        nonlocal done
        done += 1
        if progress is not None and not is_copy():
            progress(done / (n_years * n_statuses))

    moves = np.asarray(problem.transition.any(axis=0))  # (n_statuses, n_statuses)
    worth_it = n_years * np.prod(work.shape) >= WORTH_SHARING
    solved: dict[int, _StatusSolution] = {}
    while len(solved) < n_statuses:
        ready = [
            h
            for h in range(n_statuses)
            if h not in solved and all(int(k) in solved or k == h for k in np.flatnonzero(moves[h]))
        ]
        if not ready:
            raise ValueError("statuses lead back to one another")
        jobs = [partial(work.solve_status, h, solved, after_year) for h in ready]
        found = _on_both_cores(jobs) if len(jobs) > 1 and worth_it else [job() for job in jobs]
        solved |= dict(zip(ready, found, strict=True))
        done = len(solved) * n_years
    rows = [solved[h] for h in range(n_statuses)]
    return OptimalPolicy(
        grids=work.grids,
        level=np.stack([row.level for row in rows], axis=1),
        gross=np.stack([row.gross for row in rows], axis=1),
        slopes=np.stack([row.slopes for row in rows], axis=1),
        surfaces=tuple(zip(*(row.surfaces for row in rows), strict=True)),
        situations=work.situations,
        portfolio=np.stack([row.portfolio for row in rows], axis=1),
        weights=work.weights,
        smooth=work.smooth,
        utility=problem.utility,
    )


def _on_both_cores(jobs: Sequence[Callable[[], _StatusSolution]]) -> list[_StatusSolution]:
    with shared(jobs) as work:
        return work.results()


# E[g(C)] next year and its slope along tax-deferred, for each portfolio.
Expected = tuple[FloatArray, FloatArray]


@dataclass(frozen=True, slots=True, eq=False)
class _StatusSolution:
    """One status solved for all years; arrays as in OptimalPolicy, without the axis of statuses.

    Attributes
    ----------
    expected : dict
        By year and contributions: what being in this status in that year is worth the year before.
    """

    level: FloatArray
    gross: FloatArray
    slopes: FloatArray
    portfolio: IntArray
    surfaces: tuple[Surface, ...]
    expected: dict[tuple[int, tuple[float, ...]], Expected]


class _Induction:
    """What all years and statuses of a problem share, and the induction over one status's years."""

    def __init__(self, problem: Problem, settings: SolverSettings) -> None:
        self.problem = problem
        self.settings = settings
        self.grids = build_grids(problem, settings)
        self.shape = (self.grids[0].size, self.grids[1].size, self.grids[2].size)
        self.smooth = replace(problem.utility, shortfall_weight=1.0)
        self.weights, self.later_weights = value_weights(problem)
        self.range = cash_range(problem, self.grids)
        self.slopes = [derivative_matrix(grid.nodes) for grid in self.grids]
        years, statuses = (range(n) for n in problem.need.shape)
        self.situations = tuple(tuple(situation_of(problem, t, h) for h in statuses) for t in years)
        self.maps: dict[tuple[float, ...], GrowthMaps] = {}
        self.cash_grids: dict[float, CashGrid] = {}

    def solve_status(
        self, h: int, solved: dict[int, _StatusSolution], after_year: Callable[[], None]
    ) -> _StatusSolution:
        """Solve all years of status h, given the statuses that it may move to."""
        n_years = self.problem.n_years
        level, gross = np.zeros((2, n_years, *self.shape))
        slopes = np.zeros((n_years, 3, *self.shape))
        portfolio = np.zeros(level.shape, dtype=np.int64)
        surfaces: list[Surface] = []
        own = _StatusSolution(level, gross, slopes, portfolio, (), {})
        for t in range(n_years - 1, -1, -1):
            later, later2 = self._expected_later(t, h, {**solved, h: own})
            best = later.argmax(axis=0)
            held = best * best.size + np.arange(best.size).reshape(self.shape)
            surface = self._surface(t, h, later.take(held), later2.take(held))
            choice = best_on_nodes(surface, self.grids[0].nodes, self.situations[t][h])
            level[t], gross[t], portfolio[t] = choice.level, choice.gross, best
            slopes[t] = _slopes(choice, self.slopes[2], self.grids)
            surfaces.append(surface)
            after_year()
        return replace(own, surfaces=tuple(reversed(surfaces)))

    def _expected_later(self, t: int, h: int, solved: dict[int, _StatusSolution]) -> Expected:
        """J and its slope along tax-deferred for each portfolio, (n_portfolios, n1, n2, n3)."""
        problem = self.problem
        contribution = problem.contribution[t, h]
        paid = tuple(contribution.tolist())
        if paid not in self.maps:
            self.maps[paid] = growth_maps(problem, self.grids, contribution)
        growth = self.maps[paid]
        total, total2 = (problem.death[t, h] * estate for estate in (growth.estate, growth.estate2))
        for following, possible in enumerate(problem.transition[t, h].tolist()):
            if possible <= 0 or t + 1 == problem.n_years:
                continue
            status = solved[following]
            key = (t + 1, paid)
            if key not in status.expected:
                level, slope2 = status.level[t + 1], status.slopes[t + 1, 1]
                status.expected[key] = expected_value(problem, growth, level, slope2, self.smooth)
            value, value2 = status.expected[key]
            chance = possible * self.weights[t + 1, following]
            total = total + chance * value
            total2 = total2 + chance * value2
        return total, total2

    def _surface(self, t: int, h: int, later: FloatArray, later2: FloatArray) -> Surface:
        """The year's value once the outer choice is fixed, from J at the best portfolio."""
        problem = self.problem
        felicity = Felicity(problem.utility, self.smooth, float(problem.need[t, h]), problem.ceiling)
        weight = float(self.later_weights[t, h])
        following = _continuation(
            later, later2, weight, problem.discount, self.smooth, self.slopes, self.grids
        )
        kink = felicity.need * problem.utility.essential
        taxable, deferred, free = self.grids
        if kink not in self.cash_grids:
            self.cash_grids[kink] = CashGrid.build(self.settings.cash, taxable.scale, *self.range, kink)
        table = cash_table(
            following,
            felicity,
            self.cash_grids[kink],
            taxable.nodes,
            free.nodes,
            float(self.weights[t, h]),
        )
        return Surface(table, felicity, deferred, free, self.slopes[1], self.slopes[2], problem.conversions)


def _slopes(choice: OuterChoice, along3: FloatArray, grids: tuple[LogGrid, LogGrid, LogGrid]) -> FloatArray:
    """Slopes of the level along the three accounts, (3, n1, n2, n3); tax-free at least cash."""
    level = choice.level.transpose(2, 0, 1)
    free_slope = limited_slopes(_across(along3, level), level, grids[2].nodes)
    cash = plausible_slopes(choice.cash_slope, choice.level, grids[0].nodes)
    cash = np.maximum(cash, TINY_SLOPE)
    turned = (1, 0, 2)
    level2, slope2 = choice.level.transpose(turned), choice.slope2.transpose(turned)
    slope2 = plausible_slopes(slope2, level2, grids[1].nodes).transpose(turned)
    return np.stack([cash, slope2, np.maximum(free_slope.transpose(1, 2, 0), cash)])


def _across(matrix: FloatArray, values: FloatArray) -> FloatArray:
    """Matrix times values along their first axis."""
    return np.asarray((matrix @ values.reshape(values.shape[0], -1)).reshape(values.shape))


def _continuation(
    later: FloatArray,
    later2: FloatArray,
    weight: float,
    discount: float,
    smooth: SpendingUtility,
    slopes: list[FloatArray],
    grids: tuple[LogGrid, LogGrid, LogGrid],
) -> Continuation:
    """Level and slopes of J, in the inner choice's axis order (tax-deferred, taxable, tax-free)."""
    if weight == 0.0:
        worth, unit, level, slope2 = np.zeros((4, *later.shape))
    else:
        level, unit = smooth.inverse_and_marginal(later / weight)
        slope2 = later2 / (weight * unit)
        worth, unit = discount * later, discount * weight * unit
    slope1 = limited_slopes(_across(slopes[0], level), level, grids[0].nodes)
    at_zero = level[0].T  # (n3, n2): along tax-free where taxable is used up
    slope3 = limited_slopes(slopes[2] @ at_zero, at_zero, grids[2].nodes)
    first = (1, 0, 2)
    turned = [np.ascontiguousarray(a.transpose(first)) for a in (worth, unit, level, slope1, slope2)]
    return Continuation(turned[0], turned[1], turned[2], turned[3], turned[4], slope3.T, discount * weight)
