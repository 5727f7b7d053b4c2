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
        self.slopes3 = slopes3
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
        parts = [level, slope, level2, along2(slope)]
        self.packed = np.stack(parts, axis=-1).reshape(-1, 4)
        parts3 = [level3, along3(slope), along3(level2), along3(parts[3])]
        self.packed3 = np.stack(parts3, axis=-1).reshape(-1, 4)

    def __call__(
        self, cash: FloatArray, deferred: FloatArray, node3: IntArray, free: FloatArray | None
    ) -> tuple[FloatArray, FloatArray, FloatArray, FloatArray]:
        """Level and its slopes along cash, tax-deferred and tax-free at scattered points (n,).

        `free` None: at tax-free node `node3` (the slope along tax-free is then 0, unused).
        """
        grid = self.table.grid
        n2, n_cash, n3 = self.shape
        m = grid.cell(cash)
        basis_m = hermite_basis(cash, grid.nodes[m], grid.nodes[m + 1])
        if n2 > 1:
            j = self.deferred.cell(deferred)
            basis_2 = hermite_basis(deferred, self.deferred.nodes[j], self.deferred.nodes[j + 1])
            rows: tuple[int, ...] = (0, 1)
        else:
            j = np.zeros(cash.size, dtype=np.int64)
            one, zero = np.ones(cash.size), np.zeros(cash.size)
            basis_2 = ((one, zero), (zero, zero)), ((zero, zero), (zero, zero))
            rows = (0,)
        if free is None or n3 == 1:
            sums = self._sum(self.packed, (j * n_cash + m) * n3 + node3, rows, basis_m, basis_2)
            return *sums, np.zeros(cash.size)
        i3 = self.free.cell(free)
        basis_3 = hermite_basis(free, self.free.nodes[i3], self.free.nodes[i3 + 1])
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

    def _sum(
        self, packed: FloatArray, base: IntArray, rows: tuple[int, ...], basis_m: Basis, basis_2: Basis
    ) -> tuple[FloatArray, FloatArray, FloatArray]:
        _, n_cash, n3 = self.shape
        value, along_m, along_2 = (np.zeros(base.size) for _ in range(3))
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
        return value, along_m, along_2


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
