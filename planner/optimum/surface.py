"""Hermite interpolation of a cash table: level and slopes between its nodes."""

from __future__ import annotations

import numpy as np

from planner.optimum.grids import LogGrid, limited_slopes
from planner.optimum.inner import CashTable
from planner.piecewise import FloatArray
from planner.problem import IntArray

# Hermite weights of (value, slope) and their derivatives, at the left and at the right node.
Side = tuple[tuple[FloatArray, FloatArray], tuple[FloatArray, FloatArray]]
Basis = tuple[Side, Side]


BLOCK = 2048  # points at a time, so that their numbers stay in the processor's cache


class Surface:
    """Hermite interpolation of a cash table in money, tax-deferred and (for conversions) tax-free.

    Once continuously differentiable, so the first-order condition has a root to find.
    """

    def __init__(
        self,
        table: CashTable,
        deferred: LogGrid,
        free: LogGrid,
        slopes2: FloatArray,
        slopes3: FloatArray,
        conversions: bool,
    ) -> None:
        self.table = table
        self.deferred = deferred
        self.free = free
        self.slopes3 = slopes3
        self.sloped = conversions
        n2, n_cash, n3 = table.level.shape
        self.shape = (n2, n_cash, n3)

        def along2(values: FloatArray) -> FloatArray:
            return (slopes2 @ values.reshape(n2, -1)).reshape(self.shape)

        def along3(values: FloatArray) -> FloatArray:
            return np.asarray(values @ slopes3.T)

        level, slope = table.level, table.slope
        level2 = limited_slopes(table.slope2, level, deferred.nodes)
        level3 = limited_slopes(along3(level).transpose(2, 0, 1), level.transpose(2, 0, 1), free.nodes)
        level3 = level3.transpose(1, 2, 0)
        plain = [level, slope, level2, along2(slope)]
        sloped = [level3, along3(slope), along3(level2), along3(plain[3])]
        # Eight numbers a node, next to one another: one cache line a corner.
        self.packed = np.stack(plain + sloped, axis=-1).reshape(-1, 8)

    def __call__(
        self, cash: FloatArray, deferred: FloatArray, node3: IntArray, free: FloatArray | None
    ) -> tuple[FloatArray, FloatArray, FloatArray, FloatArray]:
        """Level and its slopes along cash, tax-deferred and tax-free at scattered points (n,).

        `free` None: at tax-free node `node3`. The slope along tax-free (at given money) is found only
        where conversions are allowed; nothing else needs it.
        """
        result = np.empty((4, cash.size))
        for start in range(0, cash.size, BLOCK):
            part = slice(start, start + BLOCK)
            self._block(
                cash[part], deferred[part], node3[part], None if free is None else free[part], result[:, part]
            )
        return result[0], result[1], result[2], result[3]

    def _block(
        self,
        cash: FloatArray,
        deferred: FloatArray,
        node3: IntArray,
        free: FloatArray | None,
        result: FloatArray,
    ) -> None:
        grid = self.table.grid
        n2, n_cash, n3 = self.shape
        m = grid.cell(cash)
        basis_m = hermite_basis(cash, grid.nodes[m], grid.nodes[m + 1])
        j = self.deferred.cell(deferred)
        basis_2: tuple[Side | None, ...] = (None,)
        if n2 > 1:
            basis_2 = hermite_basis(deferred, self.deferred.nodes[j], self.deferred.nodes[j + 1])
        basis_3 = None
        if free is not None and n3 > 1:
            node3 = self.free.cell(free)
            basis_3 = hermite_basis(free, self.free.nodes[node3], self.free.nodes[node3 + 1])
        base = (j * n_cash + m) * n3 + node3
        result[:] = 0.0
        for row, side_2 in enumerate(basis_2):
            for side, ((hm, gm), (dhm, dgm)) in enumerate(basis_m):
                at = base + (row * n_cash + side) * n3
                corner, along = self._tax_free(at, basis_3)
                v, vm, v2, vm2 = corner
                flat, turned = hm * v + gm * vm, dhm * v + dgm * vm
                if side_2 is None:
                    result[0] += flat
                    result[1] += turned
                else:
                    (h2, g2), (dh2, dg2) = side_2
                    cross = hm * v2 + gm * vm2
                    result[0] += h2 * flat + g2 * cross
                    result[1] += h2 * turned + g2 * (dhm * v2 + dgm * vm2)
                    result[2] += dh2 * flat + dg2 * cross
                if along:
                    deep = hm * along[0] + gm * along[1]
                    if side_2 is None:
                        result[3] += deep
                    else:
                        result[3] += h2 * deep + g2 * (hm * along[2] + gm * along[3])

    def _tax_free(self, at: IntArray, basis: Basis | None) -> tuple[list[FloatArray], list[FloatArray]]:
        """Node numbers interpolated along tax-free, four of (n,), and their slopes; none on a node."""
        left = self.packed[at].T
        if basis is None:
            return list(left[:4]), []
        right = self.packed[at + 1].T
        ((h0, g0), (dh0, dg0)), ((h1, g1), (dh1, dg1)) = basis
        value = [h0 * left[q] + g0 * left[q + 4] + h1 * right[q] + g1 * right[q + 4] for q in range(4)]
        if not self.sloped:
            return value, []
        return value, [
            dh0 * left[q] + dg0 * left[q + 4] + dh1 * right[q] + dg1 * right[q + 4] for q in range(4)
        ]

    def spending(self, cash: FloatArray, deferred: FloatArray, free: FloatArray) -> FloatArray:
        """Spending at scattered points (n,), linear between the nodes.

        Linear because spending has kinks where it starts to follow cash one for one, and is itself
        linear beyond them.
        """
        grid = self.table.grid
        _, n_cash, n3 = self.shape
        m, j, i3 = grid.cell(cash), self.deferred.cell(deferred), self.free.cell(free)
        total = np.zeros(cash.size)
        table = self.table.spending.ravel()
        width = grid.nodes[m + 1] - grid.nodes[m]
        share = (cash - grid.nodes[m]) / width
        for at2, weight2 in _linear(self.deferred, deferred, j):
            for at3, weight3 in _linear(self.free, free, i3):
                base = (at2 * n_cash + m) * n3 + at3
                left, right = table[base], table[base + n3]
                total += weight2 * weight3 * (left + share * (right - left))
        return total


def _linear(grid: LogGrid, x: FloatArray, cell: IntArray) -> list[tuple[IntArray, FloatArray]]:
    """Node indices and weights of linear interpolation, straight on beyond the last node."""
    if grid.size == 1:
        return [(cell, np.ones(x.size))]
    share = (x - grid.nodes[cell]) / (grid.nodes[cell + 1] - grid.nodes[cell])
    return [(cell, 1.0 - share), (cell + 1, share)]


def hermite_basis(x: FloatArray, left: FloatArray, right: FloatArray) -> Basis:
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


def hermite_rows(grid: LogGrid, slopes: FloatArray, points: FloatArray) -> FloatArray:
    """Weights of node values in the Hermite interpolant whose node slopes are `slopes` @ values.

    points (...,) -> (..., n).
    """
    k = grid.cell(points)
    ((h0, g0), _), ((h1, g1), _) = hermite_basis(points, grid.nodes[k], grid.nodes[k + 1])
    unit = np.eye(grid.size)
    return (
        h0[..., None] * unit[k]
        + h1[..., None] * unit[k + 1]
        + g0[..., None] * slopes[k]
        + g1[..., None] * slopes[k + 1]
    )
