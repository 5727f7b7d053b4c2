r"""The Bellman recursion, backwards over years: Problem -> OptimalPolicy.

.. math::
    J_t(y, h) &= \max_p E\Big[\sum_{h'} P(h \to h')\, V_{t+1}(y R_p, h') + P(h \to none)\, v(y R_p)\Big] \\
    V_t(x, h) &= \max_{w_2, k, c} n f(c/n) + \beta J_t(y, h)

Values are carried as certainty equivalents C = g^-1(V/A), nearly linear in wealth; A_t(h) =
n + beta (sum_h' P A_{t+1} + P(none) a [legacy]). g is the utility without its kink at essential
spending, so that the kink of the year's utility does not become a kink of C in wealth.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace

import numpy as np

from planner.optimum.expectation import GrowthMaps, expected_value, growth_maps
from planner.optimum.grids import CashGrid, LogGrid, derivative_matrix, limited_slopes, plausible_slopes
from planner.optimum.inner import TINY_SLOPE, Continuation, Felicity, cash_table
from planner.optimum.outer import OuterChoice, best_on_nodes, situation_of
from planner.optimum.policy import OptimalPolicy
from planner.optimum.surface import Surface
from planner.piecewise import FloatArray
from planner.preferences import SpendingUtility
from planner.problem import Problem


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

    Parameters
    ----------
    progress
        Called after each year with the share of years done.

    Returns
    -------
    OptimalPolicy
        Values and choices on the nodes, for every year and status.
    """
    settings = settings or SolverSettings.for_problem(problem)
    grids = build_grids(problem, settings)
    shape = (grids[0].size, grids[1].size, grids[2].size)
    n_years, n_statuses = problem.need.shape
    smooth = replace(problem.utility, shortfall_weight=1.0)
    weights, later_weights = value_weights(problem)
    low, high = cash_range(problem, grids)
    slopes = [derivative_matrix(grid.nodes) for grid in grids]
    level = np.zeros((n_years, n_statuses, *shape))
    gross = np.zeros_like(level)
    found = np.zeros((n_years, n_statuses, 3, *shape))
    surfaces: list[list[Surface]] = [[] for _ in range(n_years)]
    situations = [[situation_of(problem, t, h) for h in range(n_statuses)] for t in range(n_years)]
    portfolio = np.zeros(level.shape, dtype=np.int64)
    maps: dict[tuple[float, ...], GrowthMaps] = {}
    cash_grids: dict[float, CashGrid] = {}
    places = np.arange(portfolio[0, 0].size).reshape(shape)

    for t in range(n_years - 1, -1, -1):
        expected: dict[tuple[int, tuple[float, ...]], tuple[FloatArray, FloatArray]] = {}
        for h in range(n_statuses):
            paid = tuple(problem.contribution[t, h].tolist())
            if paid not in maps:
                maps[paid] = growth_maps(problem, grids, problem.contribution[t, h])
            total = problem.death[t, h] * maps[paid].estate
            total2 = problem.death[t, h] * maps[paid].estate2
            for following in np.flatnonzero(problem.transition[t, h] > 0) if t + 1 < n_years else ():
                key = (int(following), paid)
                if key not in expected:
                    expected[key] = expected_value(
                        problem, maps[paid], level[t + 1, following], found[t + 1, following, 1], smooth
                    )
                chance = problem.transition[t, h, following] * weights[t + 1, following]
                total = total + chance * expected[key][0]
                total2 = total2 + chance * expected[key][1]
            best = total.argmax(axis=0)
            portfolio[t, h] = best
            held = best * best.size + places
            later, later2 = total.take(held), total2.take(held)

            felicity = Felicity(problem.utility, smooth, float(problem.need[t, h]), problem.ceiling)
            following_level = _continuation(
                later, later2, float(later_weights[t, h]), problem.discount, smooth, slopes, grids
            )
            kink = felicity.need * problem.utility.essential
            if kink not in cash_grids:
                cash_grids[kink] = CashGrid.build(settings.cash, grids[0].scale, low, high, kink)
            table = cash_table(
                following_level,
                felicity,
                cash_grids[kink],
                grids[0].nodes,
                grids[2].nodes,
                float(weights[t, h]),
            )
            surface = Surface(table, felicity, grids[1], grids[2], slopes[1], slopes[2], problem.conversions)
            choice = best_on_nodes(surface, grids[0].nodes, situations[t][h])
            level[t, h] = choice.level
            gross[t, h] = choice.gross
            found[t, h] = _slopes(choice, slopes[2], grids)
            surfaces[t].append(surface)
        if progress is not None:
            progress((n_years - t) / n_years)
    return OptimalPolicy(
        grids=grids,
        level=level,
        gross=gross,
        slopes=found,
        surfaces=tuple(tuple(row) for row in surfaces),
        situations=tuple(tuple(row) for row in situations),
        portfolio=portfolio,
        weights=weights,
        smooth=smooth,
        utility=problem.utility,
    )


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
        level, slope2 = np.zeros(later.shape), np.zeros(later.shape)
    else:
        level = smooth.inverse(later / weight)
        slope2 = later2 / (weight * smooth.marginal(level))
    slope1 = limited_slopes(_across(slopes[0], level), level, grids[0].nodes)
    at_zero = level[0].T  # (n3, n2): along tax-free where taxable is used up
    slope3 = limited_slopes(slopes[2] @ at_zero, at_zero, grids[2].nodes)
    first = (1, 0, 2)
    return Continuation(
        np.ascontiguousarray(level.transpose(first)),
        np.ascontiguousarray(slope1.transpose(first)),
        np.ascontiguousarray(slope2.transpose(first)),
        slope3.T,
        discount * weight,
    )
