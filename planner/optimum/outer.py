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

import numpy as np

from planner.optimum.grids import LogGrid
from planner.optimum.inner import CashTable
from planner.piecewise import FloatArray, PiecewiseLinear
from planner.problem import IntArray

ROOT_STEPS = 4  # false-position steps on the first-order condition between two candidates


@dataclass(frozen=True, slots=True, eq=False)
class OuterChoice:
    """Best choice at each node of (taxable, tax-deferred, tax-free), all (n1, n2, n3).

    Attributes
    ----------
    level : certainty equivalent of the value.
    gross : g = w2 + k.
    cash_slope : slope of the level along cash.
    """

    level: FloatArray
    gross: FloatArray
    cash_slope: FloatArray


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


class Surface:
    """Hermite interpolation of a cash table in money, tax-deferred and (for conversions) tax-free.

    Once continuously differentiable, so the first-order condition has a root to find.
    """

    def __init__(
        self, table: CashTable, deferred: LogGrid, free: LogGrid, slopes2: FloatArray, slopes3: FloatArray
    ) -> None:
        self.table = table
        self.deferred = deferred
        self.free = free
        n2, n_cash, n3 = table.level.shape
        self.shape = (n2, n_cash, n3)

        def along2(values: FloatArray) -> FloatArray:
            return (slopes2 @ values.reshape(n2, -1)).reshape(self.shape)

        def along3(values: FloatArray) -> FloatArray:
            return values @ slopes3.T

        level, slope = table.level, table.slope
        parts = [level, slope, along2(level), along2(slope)]
        self.packed = np.stack(parts, axis=-1).reshape(-1, 4)
        self.packed3 = np.stack([along3(p) for p in parts], axis=-1).reshape(-1, 4) if n3 > 1 else None

    def __call__(
        self, cash: FloatArray, deferred: FloatArray, node3: IntArray, free: FloatArray | None
    ) -> tuple[FloatArray, FloatArray, FloatArray, FloatArray]:
        """Level and its slopes along cash, tax-deferred and tax-free at scattered points (n,).

        `free` None: at tax-free node `node3` (the slope along tax-free is then 0, unused).
        """
        grid = self.table.grid
        n2, n_cash, n3 = self.shape
        m = grid.cell(cash)
        basis_m = _basis(cash, grid.nodes[m], grid.nodes[m + 1])
        if n2 > 1:
            j = self.deferred.cell(deferred)
            basis_2 = _basis(deferred, self.deferred.nodes[j], self.deferred.nodes[j + 1])
            rows = (0, 1)
        else:
            j = np.zeros(cash.size, dtype=np.int64)
            one, zero = np.ones(cash.size), np.zeros(cash.size)
            basis_2 = ((one, zero), (zero, zero)), ((zero, zero), (zero, zero))
            rows = (0,)
        if free is None or n3 == 1:
            return self._sum(self.packed, (j * n_cash + m) * n3 + node3, rows, basis_m, basis_2)
        i3 = self.free.cell(free)
        basis_3 = _basis(free, self.free.nodes[i3], self.free.nodes[i3 + 1])
        base = (j * n_cash + m) * n3 + i3
        total = [np.zeros(cash.size) for _ in range(4)]
        for side in (0, 1):
            plain = self._sum(self.packed, base + side, rows, basis_m, basis_2)
            sloped = self._sum(self.packed3, base + side, rows, basis_m, basis_2)
            (h, g), (dh, dg) = basis_3[side]
            for q in range(3):
                total[q] += h * plain[q] + g * sloped[q]
            total[3] += dh * plain[0] + dg * sloped[0]
        return total[0], total[1], total[2], total[3]

    def _sum(self, packed, base, rows, basis_m, basis_2):  # noqa: ANN001, ANN202
        _, n_cash, n3 = self.shape
        value = along_m = along_2 = 0.0
        for row in rows:
            (h2, g2), (dh2, dg2) = basis_2[row]
            for side in (0, 1):
                corner = packed[base + (row * n_cash + side) * n3]
                (hm, gm), (dhm, dgm) = basis_m[side]
                v, vm, v2, vm2 = corner[:, 0], corner[:, 1], corner[:, 2], corner[:, 3]
                flat = hm * v + gm * vm
                cross = hm * v2 + gm * vm2
                value = value + h2 * flat + g2 * cross
                along_2 = along_2 + dh2 * flat + dg2 * cross
                along_m = along_m + h2 * (dhm * v + dgm * vm) + g2 * (dhm * v2 + dgm * vm2)
        return value, along_m, along_2, np.zeros_like(value)


def _basis(x: FloatArray, left: FloatArray, right: FloatArray):  # noqa: ANN202
    """Hermite weights: per side ((value, slope), (their derivatives)); straight beyond `right`."""
    width = right - left
    t = np.minimum((x - left) / width, 1.0)
    beyond = np.maximum(x - right, 0.0)
    u = 1.0 - t
    h0 = u * u * (1.0 + 2.0 * t)
    g0 = width * t * u * u
    g1 = -width * t * t * u + beyond
    dh0 = -6.0 * t * u / width
    dg0 = u * (1.0 - 3.0 * t)
    dg1 = -t * (2.0 - 3.0 * t)
    return ((h0, g0), (dh0, dg0)), ((1.0 - h0, g1), (-dh0, dg1))


class Outer:
    """Objective of the outer choice for one year and status, on all nodes at once."""

    def __init__(self, surface: Surface, taxable: LogGrid, situation: Situation) -> None:
        self.surface = surface
        self.situation = situation
        self.nodes1, self.nodes2, self.nodes3 = taxable.nodes, surface.deferred.nodes, surface.free.nodes
        self.shape = (self.nodes1.size, self.nodes2.size, self.nodes3.size)
        # Slope of T just below and just above a point: at a jump both neighbours count, not the jump.
        self.tax_slopes = situation.tax.slopes

    def place(self, point: IntArray, g: FloatArray, slope_of_tax: FloatArray | float = 0.0):  # noqa: ANN201
        """Cash, tax-deferred left and tax-free after taking out g, with their slopes in g."""
        i, a, l3 = np.unravel_index(point, self.shape)
        s = self.situation
        x2 = self.nodes2[a]
        tax = s.tax(g)
        if not s.conversions:
            cash = self.nodes1[i] + s.income + g - tax
            return cash, np.maximum(x2 - g, 0.0), l3, None, 1.0 - slope_of_tax, 0.0
        pool = self.nodes1[i] + self.nodes3[l3] + s.income + g - tax
        free = self.nodes3[l3] + g - s.minimum_share * x2
        return pool, np.maximum(x2 - g, 0.0), l3, free, 1.0 - slope_of_tax, 1.0

    def evaluate(self, point: IntArray, g: FloatArray, slope_of_tax: FloatArray):  # noqa: ANN201
        """Level, its total slope in g, and its slope along cash."""
        cash, deferred, l3, free, cash_slope, free_slope = self.place(point, g, slope_of_tax)
        level, along_m, along_2, along_3 = self.surface(cash, deferred, l3, free)
        return level, cash_slope * along_m + free_slope * along_3 - along_2, along_m

    def side_slopes(self, g: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Slope of T just below and just above g."""
        x = self.situation.tax.x
        below = np.clip(np.searchsorted(x, g, side="left") - 1, 0, x.size - 1)
        above = np.clip(np.searchsorted(x, g, side="right") - 1, 0, x.size - 1)
        return self.tax_slopes[below], self.tax_slopes[above]

    def best_nodes(self) -> tuple[FloatArray, FloatArray]:
        """Best level over the tax-deferred nodes that are feasible, and its g; -inf where none is."""
        n1, n2, n3 = self.shape
        s = self.situation
        x2, y2 = self.nodes2[:, None], self.nodes2[None, :]
        slack = 1e-9 * x2
        feasible = (y2 <= (1 - s.minimum_share) * x2 + slack) & (y2 >= (1 - s.accessible_share) * x2 - slack)
        a, j = np.nonzero(feasible)
        g = self.nodes2[a] - self.nodes2[j]
        if s.conversions:
            level = self._node_levels_converting(a, j, g)
        else:
            cash = self.nodes1[:, None] + (s.income + g - s.tax(g))[None, :]
            level = self._rows(cash, np.broadcast_to(j, cash.shape))
        full = np.full((n1, n2, n2, n3), -np.inf)
        full[:, a, j, :] = level
        best = full.argmax(axis=2)
        top = np.take_along_axis(full, best[:, :, None, :], axis=2)[:, :, 0, :]
        return top, self.nodes2[None, :, None] - self.nodes2[best]

    def _rows(self, cash: FloatArray, j: IntArray) -> FloatArray:
        """Levels at (cash, node j) for every tax-free node at once: (...) -> (..., n3)."""
        table = self.surface.table
        n_cash, n3 = table.level.shape[1:]
        m = table.grid.cell(cash)
        row = j * n_cash + m
        level, slope = table.level.reshape(-1, n3), table.slope.reshape(-1, n3)
        ((h0, g0), _), ((h1, g1), _) = _basis(cash, table.grid.nodes[m], table.grid.nodes[m + 1])
        return (
            h0[..., None] * level[row]
            + g0[..., None] * slope[row]
            + h1[..., None] * level[row + 1]
            + g1[..., None] * slope[row + 1]
        )

    def _node_levels_converting(self, a: IntArray, j: IntArray, g: FloatArray) -> FloatArray:
        n1, _, n3 = self.shape
        shape = (n1, a.size, n3)
        point = np.ravel_multi_index(
            np.broadcast_arrays(np.arange(n1)[:, None, None], a[None, :, None], np.arange(n3)[None, None, :]),
            self.shape,
        ).ravel()
        amount = np.broadcast_to(g[None, :, None], shape).ravel()
        return self.evaluate(point, amount, np.zeros(amount.size))[0].reshape(shape)

    def solve(self) -> OuterChoice:
        """Best g at every node."""
        s = self.situation
        if self.nodes2.size == 1:
            point = np.arange(int(np.prod(self.shape)))
            level, _, along = self.evaluate(point, np.zeros(point.size), np.zeros(point.size))
            return OuterChoice(level.reshape(self.shape), np.zeros(self.shape), along.reshape(self.shape))
        level, gross = self.best_nodes()
        level, gross = level.ravel(), gross.ravel()
        point = np.arange(level.size)
        x2 = self.nodes2[np.unravel_index(point, self.shape)[1]]
        low, high = s.minimum_share * x2, s.accessible_share * x2
        gross = np.clip(gross, low, high)
        bounds = [low] if s.minimum_share > 0 else []
        if s.accessible_share < 1:
            bounds.append(high)
        for bound in bounds:
            self._improve(level, gross, point, bound)
        self._try_kinks(level, gross, low, high, x2)
        along = np.empty(level.size)
        self._first_order(level, gross, along, low, high, x2)
        return OuterChoice(level.reshape(self.shape), gross.reshape(self.shape), along.reshape(self.shape))

    def _improve(self, level: FloatArray, gross: FloatArray, point: IntArray, g: FloatArray) -> None:
        value = self.evaluate(point, g, np.zeros(g.size))[0]
        np.copyto(gross, g, where=value > level)
        np.maximum(level, value, out=level)

    def _neighbours(
        self, g: FloatArray, low: FloatArray, high: FloatArray, x2: FloatArray
    ) -> tuple[FloatArray, FloatArray]:
        """g of the tax-deferred nodes on either side, within [low, high]."""
        y2 = x2 - g
        tolerance = 1e-9 * (x2 + 1.0)
        above = np.searchsorted(self.nodes2, y2 + tolerance, side="right")
        below = np.searchsorted(self.nodes2, y2 - tolerance, side="left") - 1
        lower = np.where(
            above < self.nodes2.size, x2 - self.nodes2[np.minimum(above, self.nodes2.size - 1)], low
        )
        upper = np.where(below >= 0, x2 - self.nodes2[np.maximum(below, 0)], high)
        return np.maximum(lower, low), np.minimum(upper, high)

    def _try_kinks(
        self, level: FloatArray, gross: FloatArray, low: FloatArray, high: FloatArray, x2: FloatArray
    ) -> None:
        kinks = np.unique(self.situation.tax.x)
        lower, upper = self._neighbours(gross, low, high, x2)
        start = np.searchsorted(kinks, lower, side="right")
        stop = np.searchsorted(kinks, upper, side="left")
        count = np.maximum(stop - start, 0)
        point = np.repeat(np.arange(level.size), count)
        if not point.size:
            return
        offset = np.arange(point.size) - np.repeat(np.cumsum(count) - count, count)
        g = kinks[start[point] + offset]
        value = self.evaluate(point, g, np.zeros(g.size))[0]
        best = level.copy()
        np.maximum.at(best, point, value)
        wins = (value > level[point]) & (value == best[point])
        gross[point[wins]] = g[wins]
        level[:] = best

    def _first_order(
        self,
        level: FloatArray,
        gross: FloatArray,
        along: FloatArray,
        low: FloatArray,
        high: FloatArray,
        x2: FloatArray,
    ) -> None:
        """Move to the root of the first-order condition next to the best candidate, where there is one."""
        point = np.arange(level.size)
        rate_below, rate_above = self.side_slopes(gross)
        cash, deferred, l3, free, cash_below, free_below = self.place(point, gross, rate_below)
        cash_above, free_above = self.place(point, gross, rate_above)[4:]
        _, along_m, along_2, along_3 = self.surface(cash, deferred, l3, free)
        along[:] = along_m
        slope_up = cash_above * along_m + free_above * along_3 - along_2
        slope_down = cash_below * along_m + free_below * along_3 - along_2
        up = (slope_up > 0) & (gross < high)
        down = ~up & (slope_down < 0) & (gross > low)
        move = np.nonzero(up | down)[0]
        if not move.size:
            return
        upward = up[move]
        near = gross[move]
        near_slope = np.where(upward, slope_up[move], slope_down[move])
        lower, upper = self._neighbours(near, low[move], high[move], x2[move])
        kinks = np.append(self.situation.tax.x, np.inf)
        next_kink = kinks[np.searchsorted(kinks[:-1], near, side="right")]
        last_kink = kinks[np.maximum(np.searchsorted(kinks[:-1], near, side="left") - 1, 0)]
        last_kink = np.where(last_kink < near, last_kink, -np.inf)
        far = np.where(upward, np.minimum(upper, next_kink), np.maximum(lower, last_kink))
        rate = np.where(upward, rate_above[move], rate_below[move])
        best_level, best_gross, best_along = level[move], near.copy(), along[move]
        _, far_slope, _ = self.evaluate(move, far, rate)
        moved_last = np.zeros(near.size, dtype=bool)
        for step in range(ROOT_STEPS):
            crossing = near_slope * far_slope < 0
            share = np.divide(near_slope, near_slope - far_slope, out=np.full(near.size, 0.5), where=crossing)
            trial = near + np.clip(share, 0.02, 0.98) * (far - near)
            value, slope, trial_along = self.evaluate(move, trial, rate)
            better = value > best_level
            best_level = np.where(better, value, best_level)
            best_gross = np.where(better, trial, best_gross)
            best_along = np.where(better, trial_along, best_along)
            same = slope * near_slope > 0
            # Illinois: an end that stays twice in a row has its slope halved, so that both close in.
            stays = 1.0 - 0.5 * ((same == moved_last) & (step > 0))
            near, far = np.where(same, trial, near), np.where(same, far, trial)
            near_slope, far_slope = (
                np.where(same, slope, near_slope * stays),
                np.where(same, far_slope * stays, slope),
            )
            moved_last = same
        level[move], gross[move], along[move] = best_level, best_gross, best_along
