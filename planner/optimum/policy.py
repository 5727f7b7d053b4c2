"""The solved policy: values and choices on the nodes, read off between them."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from planner.cashflow import by_account, by_status
from planner.optimum.grids import LogGrid
from planner.optimum.inner import TINY_SLOPE
from planner.optimum.outer import Outer, OuterChoice, Situation
from planner.optimum.surface import Surface
from planner.piecewise import FloatArray
from planner.preferences import SpendingUtility
from planner.problem import TAX_DEFERRED, TAX_FREE, Decision, IntArray, Problem, State

BoolArray = NDArray[np.bool_]


@dataclass(frozen=True, slots=True, eq=False)
class OptimalPolicy:
    """What the recursion found; a `Policy`.

    Attributes
    ----------
    grids : three LogGrid
        Nodes of taxable, tax-deferred, tax-free.
    level : ndarray of shape (n_years, n_statuses, n1, n2, n3)
        C = g^-1(V / A) at opening balances, money a year.
    gross : same shape
        g = w2 + k, money taken out of tax-deferred.
    slopes : ndarray of shape (n_years, n_statuses, 3, n1, n2, n3)
        Slopes of the level along taxable, tax-deferred and tax-free.
    surfaces : n_years tuples of n_statuses Surface
        The year's value once g is fixed, for choices at balances between the nodes.
    situations : n_years tuples of n_statuses Situation
        The year's income, tax and limits.
    portfolio : ndarray of int, same shape
        Best portfolio at *closing* balances y (after the year's choices) on the same nodes.
    weights : ndarray of shape (n_years, n_statuses)
        A_t(h).
    smooth, utility : SpendingUtility
        g (no kink at essential spending) and f.
    """

    grids: tuple[LogGrid, LogGrid, LogGrid]
    level: FloatArray
    gross: FloatArray
    slopes: FloatArray
    surfaces: tuple[tuple[Surface, ...], ...]
    situations: tuple[tuple[Situation, ...], ...]
    portfolio: IntArray
    weights: FloatArray
    smooth: SpendingUtility
    utility: SpendingUtility

    @property
    def name(self) -> str:
        """Name for people."""
        return "the best plan"

    @property
    def reference(self) -> str:
        """Where it was published."""
        return "Bellman (1957), Dynamic Programming: principle of optimality"

    @property
    def n_memory(self) -> int:
        """No memory: the state is enough."""
        return 0

    def certainty_equivalent(self, balances: FloatArray, t: int = 0, status: int = 0) -> FloatArray:
        """C_t(x, h) at balances (n, 3), the year's choice solved there; (n,)."""
        return self._choose(t, status, balances)[1].level

    def value(self, balances: FloatArray, t: int = 0, status: int = 0) -> FloatArray:
        """V_t(x, h), expected utility from year t on, at balances (n, 3); (n,)."""
        level = self.certainty_equivalent(balances, t, status)
        return np.asarray(self.weights[t, status] * self.smooth.value(level))

    def value_at_scale(self, opening: FloatArray) -> Callable[[FloatArray], FloatArray]:
        """Function of scales s (n,): V_0 at `opening` (3,) with all accounts multiplied by each s."""
        return lambda scales: self.value(scales[:, None] * opening)

    def level_spending(self, balances: FloatArray) -> float:
        """f^-1(V_0 / A_0): steady spending worth as much (meaningful without a legacy)."""
        return float(self.utility.inverse(self.value(balances[None, :])[0] / self.weights[0, 0]))

    def prices(self, t: int, h: int, balances: FloatArray) -> FloatArray:
        """Slopes of V along the three accounts, utility per unit of money, linear between nodes; (n, 3)."""
        if t >= self.level.shape[0]:
            return np.zeros(balances.shape)
        corner, weight = self._corners(balances)
        level = (self.level[t, h].ravel()[corner] * weight).sum(axis=0)
        unit = self.weights[t, h] * self.smooth.marginal(level)
        slopes = self.slopes[t, h].reshape(3, -1)[:, corner]
        return np.asarray(unit[:, None] * (slopes * weight).sum(axis=1).T)

    def decide(self, problem: Problem, t: int, state: State) -> Decision:
        """Choices at any balances: the smooth quantities are linear between nodes."""
        n = state.status.size
        spending, withdraw, convert = np.empty(n), np.empty(n), np.zeros(n)
        portfolio = np.empty(n, dtype=np.int64)
        for h, here in by_status(state.status, problem.n_statuses):
            x = state.balances[here]
            read = self.read(t, h, x)
            spending[here] = read.spending
            withdraw[here], convert[here], y = settle(problem, t, h, x, read.gross, read.spending)
            corner, weight = self._corners(y)
            around = self.portfolio[t, h].ravel()[corner]
            choice = np.rint((around * weight).sum(axis=0)).astype(np.int64)
            # Beyond the last node weights are below 0 and above 1.
            portfolio[here] = np.clip(choice, around.min(axis=0), around.max(axis=0))
        return Decision(withdraw, convert, spending, portfolio, np.zeros((n, 0)))

    def read(self, t: int, h: int, balances: FloatArray) -> Reading:
        """Choices at balances (n, 3) in year t and status h: the year's choice solved anew there.

        The continuation is the recursion's; only this year's g and c are chosen for the balances
        given, starting from what the surrounding nodes chose.
        """
        outer, choice = self._choose(t, h, balances)
        everywhere = np.arange(choice.gross.size)
        cash, left, _, free = outer.place(everywhere, choice.gross, np.zeros(everywhere.size))[:4]
        assert free is not None
        slope = np.maximum(choice.cash_slope, TINY_SLOPE)
        price = self.weights[t, h] * self.smooth.marginal(choice.level) * slope
        spending = outer.surface.spending(cash, left, free, price)
        return Reading(spending, choice.gross, np.asarray(price), choice.exchange)

    def _choose(self, t: int, h: int, balances: FloatArray) -> tuple[Outer, OuterChoice]:
        corner, weight = self._corners(balances)
        nodes = self.gross[t, h].ravel()[corner]
        outer = Outer(
            self.surfaces[t][h], self.situations[t][h], (balances[:, 0], balances[:, 1], balances[:, 2])
        )
        gross = np.clip((nodes * weight).sum(axis=0), outer.low, outer.high)
        # The bounds are tried where they are best on a corner of the cell.
        least, most = self._at_bounds(t, h)
        at_bounds = np.flatnonzero(least[corner].any(axis=0)), np.flatnonzero(most[corner].any(axis=0))
        return outer, outer.search(gross, None, (nodes.min(axis=0), nodes.max(axis=0)), at_bounds)

    def _at_bounds(self, t: int, h: int) -> tuple[BoolArray, BoolArray]:
        """On each node, flat: whether the best g is the least possible one; the largest."""
        situation = self.situations[t][h]
        x2 = self.grids[1].nodes[:, None]
        gross = self.gross[t, h]
        tolerance = 1e-9 * x2
        least = gross <= situation.minimum_share * x2 + tolerance
        most = gross >= situation.accessible_share * x2 - tolerance
        return least.ravel(), most.ravel()

    def _corners(self, balances: FloatArray) -> tuple[IntArray, FloatArray]:
        """Flat node indices and weights of the enclosing cell: (8, n) or fewer for absent accounts."""
        index = np.zeros((1, balances.shape[0]), dtype=np.int64)
        weight = np.ones((1, balances.shape[0]))
        for i, grid in enumerate(self.grids):
            index = index * grid.size
            if grid.size == 1:
                continue
            k = grid.cell(balances[:, i])
            share = (balances[:, i] - grid.nodes[k]) / (grid.nodes[k + 1] - grid.nodes[k])
            share = np.clip(share, 0.0, None)
            index = np.concatenate([index + k, index + k + 1])
            weight = np.concatenate([weight * (1 - share), weight * share])
        return index, weight


@dataclass(frozen=True, slots=True, eq=False)
class Reading:
    """Choices at given balances, each (n,): spending, g, price of cash (utility), exchange rate r."""

    spending: FloatArray
    gross: FloatArray
    price: FloatArray
    exchange: FloatArray


def settle(
    problem: Problem, t: int, h: int, balances: FloatArray, gross: FloatArray, spending: FloatArray
) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Split g into withdrawal and conversion: (w2, k, balances after the choices (n, 3)).

    Without conversions w2 = g. With them w2 is what spending needs from tax-deferred, at least
    the minimum distribution, and the rest is converted.
    """
    x2 = balances[:, TAX_DEFERRED]
    least = problem.minimum_share[t, h] * x2
    gross = np.clip(gross, least, problem.accessible_share[t, h] * x2)
    tax = problem.tax[t][h](gross)
    cash = balances[:, 0] + problem.income[t, h] - tax
    if problem.conversions:
        withdraw = np.clip(spending - cash, least, gross)
    else:
        withdraw = gross
    convert = gross - withdraw
    left = cash + withdraw - spending
    y1 = np.maximum(left, 0.0)
    y3 = np.maximum(balances[:, TAX_FREE] + convert + np.minimum(left, 0.0), 0.0)
    return withdraw, convert, by_account(y1, np.maximum(x2 - gross, 0.0), y3)
