"""Hermite interpolation of a cash table: level and slopes between its nodes."""

from __future__ import annotations

import numpy as np

from planner.optimum.grids import LogGrid, limited_slopes
from planner.optimum.inner import CashTable, Felicity
from planner.piecewise import FloatArray
from planner.problem import IntArray

# Hermite weights of values and of slopes, each (2, ...): at the left and at the right node.
Side = tuple[FloatArray, FloatArray]
Basis = tuple[Side, Side]  # and their derivatives
# Money, tax-deferred, tax-free node, tax-free (None: at the node).
Points = tuple[FloatArray, FloatArray, IntArray, FloatArray | None]


BLOCK = 2048  # points at a time, so that their numbers stay in the processor's cache


class Surface:
    """Hermite interpolation of a cash table in money, tax-deferred and (for conversions) tax-free.

    Once continuously differentiable, so the first-order condition has a root to find.
    """

    def __init__(
        self,
        table: CashTable,
        felicity: Felicity,
        deferred: LogGrid,
        free: LogGrid,
        slopes2: FloatArray,
        slopes3: FloatArray,
        conversions: bool,
    ) -> None:
        self.grid = table.grid
        self.deferred = deferred
        self.free = free
        self.slopes3 = slopes3
        self.sloped = conversions
        self.felicity = felicity
        n2, n_cash, n3 = table.level.shape
        self.shape = (n2, n_cash, n3)
        money = table.grid.nodes[:, None]
        self.keeps = (table.spending < money - 1e-9 * np.abs(money)).ravel()

        level = table.level.reshape(n2, -1)
        level2 = limited_slopes(table.slope2, table.level, deferred.nodes).reshape(n2, -1)
        plain = [level, table.slope.reshape(n2, -1), level2, slopes2 @ table.slope.reshape(n2, -1)]
        # Four numbers a node, or eight, each in a row of its own: what is taken from a row is contiguous.
        numbers = np.concatenate(plain).reshape(4, -1, n3)
        if n3 > 1:
            along3 = numbers @ slopes3.T
            steep, level = along3[0].T, numbers[0].T
            along3[0] = limited_slopes(steep, level, free.nodes).T
            numbers = np.concatenate([numbers, along3])
        self.numbers = numbers.reshape(numbers.shape[0], -1)

    def __call__(
        self, cash: FloatArray, deferred: FloatArray, node3: IntArray, free: FloatArray | None
    ) -> tuple[FloatArray, FloatArray, FloatArray, FloatArray]:
        """Level and its slopes along cash, tax-deferred and tax-free at scattered points (n,).

        `free` None: at tax-free node `node3`. The slope along tax-free (at given money) is found only
        where conversions are allowed; nothing else needs it.
        """
        level, along_cash, along_deferred, along_free = self._filled(4, (cash, deferred, node3, free))
        return level, along_cash, along_deferred, along_free

    def level(
        self, cash: FloatArray, deferred: FloatArray, node3: IntArray, free: FloatArray | None
    ) -> FloatArray:
        """The level alone, as `__call__` gives it, for about two thirds of the work."""
        return self._filled(1, (cash, deferred, node3, free))[0]

    def _filled(self, n_rows: int, points: Points) -> FloatArray:
        cash, deferred, node3, free = points
        result = np.zeros((n_rows, cash.size))
        for start in range(0, cash.size, BLOCK):
            part = slice(start, start + BLOCK)
            free_part = None if free is None else free[part]
            self._block((cash[part], deferred[part], node3[part], free_part), result[:, part])
        return result

    def _block(self, points: Points, result: FloatArray) -> None:
        """Fill the level alone (1, n), or with its slopes (4, n).

        One axis after another on arrays (number, tax-deferred side, money side, n): few calls on
        larger arrays, because a call of numpy costs as much as the arithmetic on a thousand points.
        """
        cash, deferred, node3, free = points
        grid = self.grid
        n2, n_cash, n3 = self.shape
        with_slopes = result.shape[0] > 1
        m, j = grid.cell(cash), self.deferred.cell(deferred)
        basis_3 = None
        if free is not None and n3 > 1:
            node3 = self.free.cell(free)
            with_third = with_slopes and self.sloped
            basis_3 = hermite_basis(free, self.free.nodes[node3], self.free.nodes[node3 + 1], with_third)
        sides_2 = 2 if n2 > 1 else 1
        corners = n3 * (n_cash * np.arange(sides_2)[:, None, None] + np.arange(2)[:, None])
        at = corners + ((j * n_cash + m) * n3 + node3)
        value, along = self._tax_free(at, basis_3, 2 * sides_2)

        value_m, slope_m = hermite_basis(cash, grid.nodes[m], grid.nodes[m + 1], with_slopes)
        flat = _contract(value_m, value)
        turned = _contract(slope_m, value) if with_slopes else flat
        deep = _contract(value_m, along) if along is not None else None
        if sides_2 == 1:
            result[0] = flat[0, 0]
            if with_slopes:
                result[1], result[2] = turned[0, 0], 0.0
                result[3] = 0.0 if deep is None else deep[0, 0]
            return
        nodes = self.deferred.nodes
        value_2, slope_2 = hermite_basis(deferred, nodes[j], nodes[j + 1], with_slopes)
        result[0] = _last_contract(value_2, flat)
        if with_slopes:
            result[1] = _last_contract(value_2, turned)
            result[2] = _last_contract(slope_2, flat)
            result[3] = 0.0 if deep is None else _last_contract(value_2, deep)
        # Value rises along every axis: products of slopes may not lift it above the cell's upper corner.
        inside = (cash <= grid.nodes[m + 1]) & (deferred <= nodes[j + 1])
        if free is not None and n3 > 1:
            inside &= free <= self.free.nodes[node3 + 1]
        upper = self.numbers[0].take(at[-1, -1] + (basis_3 is not None), mode="clip")
        np.minimum(result[0], upper, out=result[0], where=inside)

    def _tax_free(
        self, at: IntArray, basis: Basis | None, n_numbers: int
    ) -> tuple[FloatArray, FloatArray | None]:
        """Numbers at the corners `at` (sides, 2, n), interpolated along tax-free, and their slopes.

        Arrays (n_numbers, sides, 2, n): value, slope in money, and both differentiated in tax-deferred.
        """
        # Indices are within range by construction; mode "clip" saves numpy a copy.
        if basis is None:
            return self.numbers[:n_numbers].take(at, axis=1, mode="clip"), None
        left = self.numbers.take(at, axis=1, mode="clip")
        right = self.numbers.take(at + 1, axis=1, mode="clip")
        levels = left[:n_numbers], left[4 : 4 + n_numbers], right[:n_numbers], right[4 : 4 + n_numbers]
        (heights, tilts), (height_slopes, tilt_slopes) = basis

        def across(height: FloatArray, tilt: FloatArray) -> FloatArray:
            total = height[0] * levels[0]
            total += tilt[0] * levels[1]
            total += height[1] * levels[2]
            total += tilt[1] * levels[3]
            return total

        value = across(heights, tilts)
        return value, across(height_slopes, tilt_slopes) if height_slopes.size else None

    def spending(
        self, cash: FloatArray, deferred: FloatArray, free: FloatArray, price: FloatArray
    ) -> FloatArray:
        """Spending at scattered points (n,), from its first-order condition f'(c/n) = price of money.

        The price is smooth over a cell where spending itself turns. Where all money is spent at the
        nodes around, so it is here.
        """
        grid = self.grid
        _, n_cash, n3 = self.shape
        m, j, i3 = grid.cell(cash), self.deferred.cell(deferred), self.free.cell(free)
        kept = np.zeros(cash.size, dtype=bool)
        for at2 in (j, np.minimum(j + 1, self.deferred.size - 1)):
            for at3 in (i3, np.minimum(i3 + 1, self.free.size - 1)):
                base = (at2 * n_cash + m) * n3 + at3
                kept |= self.keeps[base] | self.keeps[base + n3]
        return np.where(kept, np.minimum(self.felicity.spend(price), cash), self.felicity.at_most(cash))


def _contract(basis: Side, numbers: FloatArray) -> FloatArray:
    """Weigh values and slopes on both sides of money: (2 k, sides, 2, n) -> (k, sides, n)."""
    height, tilt = basis
    both = height * numbers[0::2]
    both += tilt * numbers[1::2]
    return np.asarray(both[:, :, 0] + both[:, :, 1])


def _last_contract(basis: Side, numbers: FloatArray) -> FloatArray:
    """The same along tax-deferred: (value and slope, 2 sides, n) -> (n,)."""
    height, tilt = basis
    both = height * numbers[0]
    both += tilt * numbers[1]
    return np.asarray(both[0] + both[1])


def hermite_basis(x: FloatArray, left: FloatArray, right: FloatArray, with_slopes: bool = True) -> Basis:
    """Hermite weights of values and slopes at both ends, and their derivatives; straight beyond `right`.

    Returns
    -------
    (heights, tilts), (their derivatives)
        Each (2, ...), left and right; the derivatives are empty where `with_slopes` is False.
    """
    width = right - left
    t = (x - left) / width
    beyond = None
    if t.size and t.max() > 1.0:
        beyond = np.maximum(x - right, 0.0)
        t = np.minimum(t, 1.0)
    u = 1.0 - t
    heights, tilts = np.empty((2, *t.shape)), np.empty((2, *t.shape))
    tu = t * u
    heights[0] = u * u * (1.0 + 2.0 * t)
    heights[1] = 1.0 - heights[0]
    steep = width * tu
    tilts[0] = steep * u
    tilts[1] = -steep * t
    if beyond is not None:
        tilts[1] += beyond
    if not with_slopes:
        return (heights, tilts), (np.empty(0), np.empty(0))
    height_slopes, tilt_slopes = np.empty_like(heights), np.empty_like(tilts)
    height_slopes[1] = 6.0 * tu / width
    height_slopes[0] = -height_slopes[1]
    tilt_slopes[0] = u * (1.0 - 3.0 * t)
    tilt_slopes[1] = t * (3.0 * t - 2.0)
    return (heights, tilts), (height_slopes, tilt_slopes)


def hermite_rows(grid: LogGrid, slopes: FloatArray, points: FloatArray) -> FloatArray:
    """Weights of node values in the Hermite interpolant whose node slopes are `slopes` @ values.

    points (...,) -> (..., n).
    """
    k = grid.cell(points)
    ((h0, h1), (g0, g1)), _ = hermite_basis(points, grid.nodes[k], grid.nodes[k + 1], False)
    unit = np.eye(grid.size)
    return (
        h0[..., None] * unit[k]
        + h1[..., None] * unit[k + 1]
        + g0[..., None] * slopes[k]
        + g1[..., None] * slopes[k + 1]
    )
