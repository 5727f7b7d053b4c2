"""E[V next year], as a contraction: small interpolation matrices along each account's axis.

All accounts hold the same portfolio, so next year's value at the grown balances y R is next
year's certainty equivalent interpolated along one axis after another; the matrices depend on
the portfolio and the return node, not on the year.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from planner.optimum.grids import LogGrid, lagrange_matrix
from planner.piecewise import FloatArray
from planner.preferences import SpendingUtility
from planner.problem import IntArray, Problem


@dataclass(frozen=True, slots=True, eq=False)
class CellEnds:
    """Rows between which interpolated values are kept, so that a cubic cannot overshoot beside a cliff.

    Attributes
    ----------
    lower, upper : ndarray of int, flat
        For each row of the result, the rows of what is interpolated at the ends of its cell.
    beyond : two ndarrays of int
        Return node and row of the grown nodes beyond the last node, where no value is kept back.
    """

    lower: IntArray
    upper: IntArray
    beyond: tuple[IntArray, IntArray]

    @classmethod
    def of(cls, grid: LogGrid, points: FloatArray, once_for_all: bool) -> CellEnds:
        """Cells of `points` (n_nodes, n); rows are the same for all return nodes, or each has its own."""
        n_nodes, n = points.shape
        first = np.zeros((n_nodes, 1), np.int64) if once_for_all else n * np.arange(n_nodes)[:, None]
        cell = grid.cell(points)
        upper = first + np.minimum(cell + 1, n - 1)
        beyond = np.nonzero(points > grid.nodes[-1])
        return cls((first + cell).ravel(), upper.ravel(), (beyond[0], beyond[1]))

    def keep_between(self, values: FloatArray, ends: FloatArray) -> None:
        """Keep `values` (n_nodes, n, m) between rows of `ends` (..., m), in place."""
        m = values.shape[2]
        rows, flat = ends.reshape(-1, m), values.reshape(-1, m)
        free = values[self.beyond]
        np.maximum(flat, rows.take(self.lower, axis=0), out=flat)
        np.minimum(flat, rows.take(self.upper, axis=0), out=flat)
        values[self.beyond] = free


@dataclass(frozen=True, slots=True, eq=False)
class GrowthMaps:
    """Interpolation matrices at the grown nodes, for one set of contributions.

    Attributes
    ----------
    maps : n_portfolios tuples of 3 ndarrays of shape (n_nodes, n_i, n_i)
        Row: node of account i (plus its contribution) after growth at a return node.
    ends : n_portfolios tuples of 3 CellEnds
        Where the grown nodes lie.
    estate : ndarray of shape (n_portfolios, n1, n2, n3)
        E[v(estate)] of the grown nodes; zeros where no legacy is wished.
    estate2 : ndarray of the same shape
        Its slope along tax-deferred.
    """

    maps: tuple[tuple[FloatArray, ...], ...]
    ends: tuple[tuple[CellEnds, ...], ...]
    estate: FloatArray
    estate2: FloatArray


def growth_maps(problem: Problem, grids: Sequence[LogGrid], contribution: FloatArray) -> GrowthMaps:
    """Matrices for nodes + contribution (3,), and the expected utility of the estate there."""
    n_portfolios, n_nodes = problem.gross.shape
    growth = [problem.gross - problem.drag[:, None], problem.gross, problem.gross]
    grown = [
        (grid.nodes + paid) * factor[:, :, None]
        for grid, factor, paid in zip(grids, growth, contribution, strict=True)
    ]
    maps, ends = [], []
    for p in range(n_portfolios):
        points = [account[p] for account in grown]
        maps.append(
            tuple(
                lagrange_matrix(grid.nodes, at.ravel()).reshape(n_nodes, grid.size, grid.size)
                for grid, at in zip(grids, points, strict=True)
            )
        )
        ends.append(
            tuple(
                CellEnds.of(grid, at, i == 0) for i, (grid, at) in enumerate(zip(grids, points, strict=True))
            )
        )
    shape = tuple(grid.size for grid in grids)
    if problem.estate.wanted:
        passed = (
            grown[0][..., :, None, None]
            + (1 - problem.heirs_tax_rate) * grown[1][..., None, :, None]
            + grown[2][..., None, None, :]
            + problem.cash_aside
        )
        estate = np.einsum("q,pqijk->pijk", problem.node_weights, problem.estate.value(passed))
        weighted = (1 - problem.heirs_tax_rate) * problem.node_weights * problem.gross
        estate2 = np.einsum("pq,pqijk->pijk", weighted, problem.estate.marginal(passed))
    else:
        estate = estate2 = np.zeros((n_portfolios, *shape))
    return GrowthMaps(tuple(maps), tuple(ends), estate, estate2)


def expected_value(
    problem: Problem, growth: GrowthMaps, level: FloatArray, slope2: FloatArray, smooth: SpendingUtility
) -> tuple[FloatArray, FloatArray]:
    """E[g(C(y R_p))] and its slope along tax-deferred, E[g'(C) C_2 R_p], for each portfolio.

    (n1, n2, n3) levels and slopes -> two arrays (n_portfolios, n1, n2, n3). One portfolio at a time:
    its arrays then stay in the processor's cache.
    """
    value, slope = np.zeros((2, problem.n_portfolios, level.size))
    for p, (maps, ends) in enumerate(zip(growth.maps, growth.ends, strict=True)):
        worth, unit = smooth.value_and_marginal(_moved(maps, ends, level))
        value[p] = problem.node_weights @ worth
        if level.shape[1] > 1:
            unit *= _moved(maps, None, slope2)
            slope[p] = (problem.node_weights * problem.gross[p]) @ unit
    shape = (problem.n_portfolios, *level.shape)
    return value.reshape(shape), slope.reshape(shape)


def _moved(maps: tuple[FloatArray, ...], ends: tuple[CellEnds, ...] | None, level: FloatArray) -> FloatArray:
    """Interpolate at the grown nodes: (n1, n2, n3) -> (n_nodes, n1 n2 n3); between cell ends if given.

    Each axis is the leading one in turn: (n1, n2 n3), (nodes, n2, n3 n1), (nodes, n3, n1 n2).
    """
    n1, n2, n3 = level.shape
    n_nodes = maps[0].shape[0]
    first = level.reshape(1, n1, n2 * n3)
    moved = maps[0] @ first
    if ends is not None:
        ends[0].keep_between(moved, first)
    if n2 == n3 == 1:
        return moved.reshape(n_nodes, n1)
    for axis, n, rest in ((1, n2, n3 * n1), (2, n3, n1 * n2)):
        before = moved.reshape(n_nodes, -1, n * rest // (n1 if axis == 1 else n2))
        # Turn the leading axis to the end: (nodes, a, b c) -> (nodes, b, c a).
        before = np.ascontiguousarray(before.transpose(0, 2, 1)).reshape(n_nodes, n, rest)
        if n == 1:
            moved = before
            continue
        moved = maps[axis] @ before
        if ends is not None:
            ends[axis].keep_between(moved, before)
    last = moved.reshape(n_nodes, n3, n1 * n2)
    return np.ascontiguousarray(last.transpose(0, 2, 1)).reshape(n_nodes, n1 * n2 * n3)
