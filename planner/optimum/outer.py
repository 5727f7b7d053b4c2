"""The outer choice: how much leaves the tax-deferred account this year.

g = w2 + k is searched first on the tax-deferred account's own nodes, then at the minimum
distribution, the accessible limit and the kinks of the tax function near the best node (just
below a jump), and last between neighbouring candidates by its first-order condition.

Where conversions are allowed, all that leaves beyond the minimum distribution may go to tax-free:
tax-free money pays for spending in the same year and grows untaxed, so it is never worth less
than cash. `settle` then calls "withdrawal" the part that spending takes back.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache

import numpy as np

from planner.optimum.surface import Surface, hermite_basis, hermite_rows
from planner.piecewise import FloatArray, PiecewiseLinear
from planner.problem import IntArray, Problem

ROOT_STEPS = 3  # false-position steps on the first-order condition between two candidates
SMALLEST_GAIN = 1e-7  # share of the level below which a step along its slope is not worth taking


@dataclass(frozen=True, slots=True, eq=False)
class OuterChoice:
    """Best choice at each node of (taxable, tax-deferred, tax-free), all (n1, n2, n3).

    Attributes
    ----------
    level : certainty equivalent of the value.
    gross : g = w2 + k.
    cash_slope : slope of the level along cash.
    exchange : r, what money left in tax-deferred is worth in cash after tax; 1 - T'(g) where g is
        between kinks, between the two sides' values where it sits at one, beyond them at a bound.
    slope2 : slope of the level along the opening tax-deferred balance.
    """

    level: FloatArray
    gross: FloatArray
    cash_slope: FloatArray
    exchange: FloatArray
    slope2: FloatArray


@dataclass(frozen=True, slots=True, eq=False)
class Situation:
    """One year and status: what the outer choice needs besides the cash table.

    Attributes
    ----------
    income : float
    tax : PiecewiseLinear
    minimum_share, accessible_share : float
    conversions : bool
    """

    income: float
    tax: PiecewiseLinear
    minimum_share: float
    accessible_share: float
    conversions: bool


def situation_of(problem: Problem, t: int, h: int) -> Situation:
    """Return the situation of a problem's year and status."""
    return Situation(
        float(problem.income[t, h]),
        problem.tax[t][h],
        float(problem.minimum_share[t, h]),
        float(problem.accessible_share[t, h]),
        problem.conversions,
    )


# Money, tax-deferred left, tax-free node, tax-free (None on its node), slopes of money and tax-free in g.
Place = tuple[FloatArray, FloatArray, IntArray, FloatArray | None, FloatArray, float]


# Points and the g tried there.
Tries = tuple[IntArray, FloatArray]


class Outer:
    """Objective of the outer choice for one year and status, at given opening balances.

    Attributes
    ----------
    x1, x2, x3 : ndarray of shape (n,)
        Opening balances.
    node3 : ndarray of int, shape (n,), or None
        Tax-free node that holds x3; None where balances lie anywhere.
    """

    def __init__(
        self,
        surface: Surface,
        situation: Situation,
        balances: tuple[FloatArray, FloatArray, FloatArray],
        node3: IntArray | None = None,
    ) -> None:
        self.surface = surface
        self.situation = situation
        self.x1, self.x2, self.x3 = balances
        self.node3 = np.zeros(self.x1.size, dtype=np.int64) if node3 is None else node3
        self.on_nodes = node3 is not None
        self.nodes2 = surface.deferred.nodes
        self.low = situation.minimum_share * self.x2
        self.high = situation.accessible_share * self.x2
        # Slope of T just below and just above a point: at a jump both neighbours count, not the jump.
        self.tax_slopes = situation.tax.slopes

    def place(self, point: IntArray, g: FloatArray, slope_of_tax: FloatArray) -> Place:
        """Money, tax-deferred left and tax-free after taking out g, with their slopes in g."""
        s = self.situation
        x2, x3 = self.x2[point], self.x3[point]
        tax = s.tax(g)
        left = np.maximum(x2 - g, 0.0)
        pool = self.x1[point] + x3 + s.income + g - tax
        if not s.conversions:
            return pool, left, self.node3[point], None if self.on_nodes else x3, 1.0 - slope_of_tax, 0.0
        free = x3 + g - s.minimum_share * x2
        return pool, left, self.node3[point], free, 1.0 - slope_of_tax, 1.0

    def evaluate(
        self, point: IntArray, g: FloatArray, slope_of_tax: FloatArray
    ) -> tuple[FloatArray, FloatArray, FloatArray, FloatArray]:
        """Level, its total slope in g, its slope along cash, and the exchange rate r."""
        cash, deferred, l3, free, cash_slope, free_slope = self.place(point, g, slope_of_tax)
        level, along_m, along_2, along_3 = self.surface(cash, deferred, l3, free)
        kept = along_2 - free_slope * along_3
        return level, cash_slope * along_m - kept, along_m, kept / np.maximum(along_m, 1e-300)

    def side_slopes(self, g: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Slope of T just below and just above g."""
        x = self.situation.tax.x
        below = np.maximum(np.searchsorted(x, g, side="left") - 1, 0)
        above = np.maximum(np.searchsorted(x, g, side="right") - 1, 0)
        return self.tax_slopes[below], self.tax_slopes[above]

    def search(
        self,
        gross: FloatArray,
        level: FloatArray | None = None,
        around: tuple[FloatArray, FloatArray] | None = None,
        at_bounds: tuple[IntArray, IntArray] | None = None,
    ) -> OuterChoice:
        """Best g from a start: bounds, then kinks and nodes near it, then the first-order condition.

        Parameters
        ----------
        gross : ndarray of shape (n,)
            Start.
        level : ndarray of shape (n,) or None
            The start's level where it is known.
        around : two ndarrays of shape (n,)
            Range of g in which kinks of tax (and, off the nodes, tax-deferred nodes) are tried;
            None = up to the tax-deferred nodes on either side.
        at_bounds : two ndarrays of int
            Points at which the least and the largest g are tried; None = all.
        """
        everywhere = np.arange(gross.size)
        if self.nodes2.size == 1:
            level, _, along, exchange = self.evaluate(everywhere, gross, np.zeros(gross.size))
            return OuterChoice(level, gross, along, np.ones(gross.size), np.zeros(gross.size))
        lower, upper = self.neighbours(everywhere, gross) if around is None else around
        tries = [self._between(np.unique(self.situation.tax.x), lower, upper)]
        if not self.on_nodes:
            nodes = -self.nodes2[::-1]
            tries.append(self._between(nodes, lower - self.x2, upper - self.x2, self.x2))
        at_low, at_high = (everywhere, everywhere) if at_bounds is None else at_bounds
        if self.situation.minimum_share > 0 or not self.on_nodes:
            tries.append((at_low, self.low[at_low]))
        if self.situation.accessible_share < 1 or not self.on_nodes:
            tries.append((at_high, self.high[at_high]))
        if level is None:
            level = np.full(gross.size, -np.inf)
            tries.append((everywhere, gross))
        gross = self._best(level, gross, tries)
        level, gross, along, exchange = self._first_order(gross)
        below, above = self.side_slopes(gross)
        least = np.where(gross >= self.high, -np.inf, 1.0 - np.maximum(above, below))
        most = np.where(gross <= self.low, np.inf, 1.0 - np.minimum(above, below))
        exchange = np.minimum(np.maximum(exchange, least), most)
        slope2 = self._deferred_slope(gross, along, exchange, below, above)
        return OuterChoice(level, gross, along, exchange, slope2)

    def _deferred_slope(
        self, gross: FloatArray, along: FloatArray, exchange: FloatArray, below: FloatArray, above: FloatArray
    ) -> FloatArray:
        """Slope of the level along the opening tax-deferred balance (envelope theorem).

        Money left is worth r in cash (and, with conversions, what tax-free is worth above cash, of
        which the minimum distribution has no part). At the least g a share d of one more unit must be
        taken, at the largest g a share s may be.
        """
        situation = self.situation
        d, s = situation.minimum_share, situation.accessible_share
        spread = np.zeros(gross.size)
        if situation.conversions:
            cash, left, l3, free, _, _ = self.place(np.arange(gross.size), gross, np.zeros(gross.size))
            spread = self.surface(cash, left, l3, free)[3]
        kept = exchange * along + spread
        slope = kept - d * spread
        if d > 0:
            slope = np.where(gross <= self.low, (1 - d) * kept + d * along * (1 - above), slope)
        taken = along * (1 - below) + spread
        slope = np.where(gross >= self.high, (1 - s) * kept + s * taken - d * spread, slope)
        return np.asarray(slope)

    def _between(
        self, places: FloatArray, lower: FloatArray, upper: FloatArray, shift: FloatArray | None = None
    ) -> Tries:
        """Every g = place (+ shift of the point) strictly between lower and upper, with its point."""
        start = np.searchsorted(places, lower, side="right")
        stop = np.searchsorted(places, upper, side="left")
        count = np.maximum(stop - start, 0)
        point = np.repeat(np.arange(lower.size), count)
        offset = np.arange(point.size) - np.repeat(np.cumsum(count) - count, count)
        g = places[start[point] + offset]
        if shift is not None:
            g = g + shift[point]
        return point, np.minimum(np.maximum(g, self.low[point]), self.high[point])

    def _best(self, level: FloatArray, gross: FloatArray, tries: list[Tries]) -> FloatArray:
        """The g of the highest level among the start's (`level`) and what is tried, the last of equals."""
        point = np.concatenate([points for points, _ in tries])
        if not point.size:
            return gross
        g = np.concatenate([places for _, places in tries])
        cash, deferred, l3, free, _, _ = self.place(point, g, np.zeros(g.size))
        value = self.surface.level(cash, deferred, l3, free)
        best = level.copy()
        np.maximum.at(best, point, value)
        wins = (value > level[point]) & (value == best[point])
        gross = gross.copy()
        gross[point[wins]] = g[wins]
        return gross

    def neighbours(self, point: IntArray, g: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Withdrawals g that leave the tax-deferred nodes on either side, within the bounds."""
        x2, low, high = self.x2[point], self.low[point], self.high[point]
        y2 = x2 - g
        tolerance = 1e-9 * (x2 + 1.0)
        above = np.searchsorted(self.nodes2, y2 + tolerance, side="right")
        below = np.searchsorted(self.nodes2, y2 - tolerance, side="left") - 1
        lower = np.where(
            above < self.nodes2.size, x2 - self.nodes2[np.minimum(above, self.nodes2.size - 1)], low
        )
        upper = np.where(below >= 0, x2 - self.nodes2[np.maximum(below, 0)], high)
        return np.maximum(lower, low), np.minimum(upper, high)

    def _first_order(self, gross: FloatArray) -> tuple[FloatArray, FloatArray, FloatArray, FloatArray]:
        """Move to the root of the first-order condition next to g, where there is one.

        Returns
        -------
        level, gross, slope of the level along cash, exchange rate, each (n,)
        """
        point = np.arange(gross.size)
        rate_below, rate_above = self.side_slopes(gross)
        level, slope_down, along, exchange = self.evaluate(point, gross, rate_below)
        slope_up = slope_down + (rate_below - rate_above) * along
        up = (slope_up > 0) & (gross < self.high)
        down = ~up & (slope_down < 0) & (gross > self.low)
        move = np.nonzero(up | down)[0]
        upward = up[move]
        near = gross[move]
        near_slope = np.where(upward, slope_up[move], slope_down[move])
        lower, upper = self.neighbours(move, near)
        kinks = np.append(self.situation.tax.x, np.inf)
        next_kink = kinks[np.searchsorted(kinks[:-1], near, side="right")]
        last_kink = kinks[np.maximum(np.searchsorted(kinks[:-1], near, side="left") - 1, 0)]
        last_kink = np.where(last_kink < near, last_kink, -np.inf)
        far = np.where(upward, np.minimum(upper, next_kink), np.maximum(lower, last_kink))
        # On the nodes every step is taken: the exchange rate found there becomes a price of the proof.
        smallest = 0.0 if self.on_nodes else SMALLEST_GAIN
        worth = np.flatnonzero(np.abs(near_slope * (far - near)) > smallest * np.abs(level[move]))
        if not worth.size:
            return level, gross, along, exchange
        move, upward = move[worth], upward[worth]
        near, far, near_slope = near[worth], far[worth], near_slope[worth]
        rate = np.where(upward, rate_above[move], rate_below[move])
        best = [level[move], near.copy(), along[move], exchange[move]]
        far_slope = self.evaluate(move, far, rate)[1]
        moved_last = np.zeros(near.size, dtype=bool)
        for step in range(ROOT_STEPS):
            crossing = near_slope * far_slope < 0
            share = np.divide(near_slope, near_slope - far_slope, out=np.full(near.size, 0.5), where=crossing)
            trial = near + np.minimum(np.maximum(share, 0.02), 0.98) * (far - near)
            value, slope, trial_along, trial_exchange = self.evaluate(move, trial, rate)
            better = value > best[0]
            for kept, new in zip(best, (value, trial, trial_along, trial_exchange), strict=True):
                np.copyto(kept, new, where=better)
            same = slope * near_slope > 0
            # Illinois: an end that stays twice in a row has its slope halved, so that both close in.
            stays = 1.0 - 0.5 * ((same == moved_last) & (step > 0))
            near, far = np.where(same, trial, near), np.where(same, far, trial)
            near_slope, far_slope = (
                np.where(same, slope, near_slope * stays),
                np.where(same, far_slope * stays, slope),
            )
            moved_last = same
        gross = gross.copy()
        level[move], gross[move], along[move], exchange[move] = best
        return level, gross, along, exchange


def best_on_nodes(surface: Surface, taxable: FloatArray, situation: Situation) -> OuterChoice:
    """Best outer choice at every node of (taxable, tax-deferred, tax-free), arrays (n1, n2, n3)."""
    nodes2, nodes3 = surface.deferred.nodes, surface.free.nodes
    shape = (taxable.size, nodes2.size, nodes3.size)
    i, a, l3 = _indices(shape)
    outer = Outer(surface, situation, (taxable[i], nodes2[a], nodes3[l3]), l3)
    if nodes2.size == 1:
        level, gross = np.zeros(i.size), np.zeros(i.size)
    else:
        on_nodes, gross_on_nodes = _node_levels(surface, taxable, situation)
        level, gross = on_nodes.ravel(), np.clip(gross_on_nodes.ravel(), outer.low, outer.high)
    choice = outer.search(gross, level)
    return OuterChoice(
        choice.level.reshape(shape),
        choice.gross.reshape(shape),
        choice.cash_slope.reshape(shape),
        choice.exchange.reshape(shape),
        choice.slope2.reshape(shape),
    )


@lru_cache(maxsize=8)
def _indices(shape: tuple[int, int, int]) -> tuple[IntArray, ...]:
    """Index along each axis of every node, flat; the same for all years."""
    return tuple(index.ravel() for index in np.indices(shape))


def _node_levels(
    surface: Surface, taxable: FloatArray, situation: Situation
) -> tuple[FloatArray, FloatArray]:
    """Best level over the tax-deferred nodes left that are feasible, and its g; -inf where none is.

    Tax-deferred left lies on its nodes, so levels need interpolation in money alone; with
    conversions tax-free is off its nodes by an amount that depends on (a, j) only, a small matrix.
    """
    s = situation
    nodes2, nodes3 = surface.deferred.nodes, surface.free.nodes
    n1, n2, n3 = taxable.size, nodes2.size, nodes3.size
    x2, y2 = nodes2[:, None], nodes2[None, :]
    slack = 1e-9 * x2
    feasible = (y2 <= (1 - s.minimum_share) * x2 + slack) & (y2 >= (1 - s.accessible_share) * x2 - slack)
    a, j = np.nonzero(feasible)
    g = nodes2[a] - nodes2[j]
    grid = surface.grid
    n_cash = grid.nodes.size
    levels, slopes = surface.numbers[:2]
    money = taxable[:, None, None] + (s.income + g - s.tax(g))[None, :, None] + nodes3
    if s.conversions:
        free = nodes3[None, :] + (g - s.minimum_share * nodes2[a])[:, None]
        rows = hermite_rows(surface.free, surface.slopes3, free)  # (pairs, n3, n3)
        levels, slopes = (
            (numbers.reshape(n2, n_cash, n3)[j] @ rows.transpose(0, 2, 1)).ravel()
            for numbers in (levels, slopes)
        )
        first = np.arange(a.size)[None, :, None] * n_cash
    else:
        first = j[None, :, None] * n_cash
    cell = grid.cell(money)
    ((h0, h1), (g0, g1)), _ = hermite_basis(
        money, grid.nodes.take(cell), grid.nodes.take(cell + 1), with_slopes=False
    )
    cell += first
    cell *= n3
    cell += np.arange(n3)
    # Indices are within range by construction; mode "clip" saves numpy a copy.
    value = h0 * levels.take(cell, mode="clip")
    value += g0 * slopes.take(cell, mode="clip")
    cell += n3
    value += h1 * levels.take(cell, mode="clip")
    value += g1 * slopes.take(cell, mode="clip")

    # Pairs are in the order of a: the best of each segment, and the least node left that reaches it.
    count = feasible.sum(axis=1)
    some = np.flatnonzero(count)
    starts = np.cumsum(count[some]) - count[some]
    top, left = np.full((n1, n2, n3), -np.inf), np.zeros((n1, n2, n3), dtype=np.int64)
    top[:, some] = np.maximum.reduceat(value, starts, axis=1)
    reached = value == np.repeat(top[:, some], count[some], axis=1)
    left[:, some] = np.minimum.reduceat(np.where(reached, j[:, None], n2), starts, axis=1)
    return top, nodes2[:, None] - nodes2[left]
