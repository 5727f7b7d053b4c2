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
class GrowthMaps:
    """Interpolation matrices at the grown nodes, for one set of contributions.

    Attributes
    ----------
    maps : tuple of 3 ndarrays of shape (n_portfolios * n_nodes, n_i, n_i)
        Row: node of account i (plus its contribution) after growth.
    cells : tuple of 3 ndarrays of int, shape (n_portfolios * n_nodes, n_i)
        Cell of the grown node: the interpolated value is kept between the values at its ends, so
        that a cubic cannot overshoot beside a cliff. -1 beyond the last node, where none is kept.
    estate : ndarray of shape (n_portfolios, n1, n2, n3)
        E[v(estate)] of the grown nodes; zeros where no legacy is wished.
    estate2 : ndarray of the same shape
        Its slope along tax-deferred.
    """

    maps: tuple[FloatArray, FloatArray, FloatArray]
    cells: tuple[IntArray, IntArray, IntArray]
    estate: FloatArray
    estate2: FloatArray


def growth_maps(problem: Problem, grids: Sequence[LogGrid], contribution: FloatArray) -> GrowthMaps:
    """Matrices for nodes + contribution (3,), and the expected utility of the estate there."""
    n_portfolios, n_nodes = problem.gross.shape
    growth = [problem.gross - problem.drag[:, None], problem.gross, problem.gross]
    grown = []
    maps, cells = [], []
    for grid, factor, paid in zip(grids, growth, contribution, strict=True):
        points = (grid.nodes + paid) * factor.reshape(-1, 1)
        grown.append(points)
        flat = lagrange_matrix(grid.nodes, points.ravel())
        maps.append(flat.reshape(n_portfolios * n_nodes, grid.size, grid.size))
        cells.append(np.where(points > grid.nodes[-1], -1, grid.cell(points)))
    shape = tuple(grid.size for grid in grids)
    if problem.estate.wanted:
        passed = (
            grown[0][:, :, None, None]
            + (1 - problem.heirs_tax_rate) * grown[1][:, None, :, None]
            + grown[2][:, None, None, :]
            + problem.cash_aside
        )
        value = problem.estate.value(passed).reshape(n_portfolios, n_nodes, *shape)
        estate = np.tensordot(problem.node_weights, value, axes=(0, 1))
        marginal = problem.estate.marginal(passed).reshape(n_portfolios, n_nodes, *shape)
        weighted = (1 - problem.heirs_tax_rate) * problem.node_weights * problem.gross
        estate2 = np.einsum("pq,pqijk->pijk", weighted, marginal)
    else:
        estate = estate2 = np.zeros((n_portfolios, *shape))
    return GrowthMaps((maps[0], maps[1], maps[2]), (cells[0], cells[1], cells[2]), estate, estate2)


def expected_value(
    problem: Problem, growth: GrowthMaps, level: FloatArray, slope2: FloatArray, smooth: SpendingUtility
) -> tuple[FloatArray, FloatArray]:
    """E[g(C(y R_p))] and its slope along tax-deferred, E[g'(C) C_2 R_p], for each portfolio.

    (n1, n2, n3) levels and slopes -> two arrays (n_portfolios, n1, n2, n3). One portfolio at a time:
    its arrays then stay in the processor's cache.
    """
    n_portfolios, n_nodes = problem.gross.shape
    value, slope = np.zeros((2, n_portfolios, level.size))
    for p in range(n_portfolios):
        part = slice(p * n_nodes, (p + 1) * n_nodes)
        maps = tuple(m[part] for m in growth.maps)
        rows = tuple(r[part] for r in growth.cells)
        worth, unit = smooth.value_and_marginal(_moved(maps, rows, level))
        value[p] = problem.node_weights @ worth
        if level.shape[1] > 1:
            unit *= _moved(maps, None, slope2)
            slope[p] = (problem.node_weights * problem.gross[p]) @ unit
    shape = (n_portfolios, *level.shape)
    return value.reshape(shape), slope.reshape(shape)


def _moved(maps: tuple[FloatArray, ...], cells: tuple[IntArray, ...] | None, level: FloatArray) -> FloatArray:
    """Interpolate at the grown nodes: (n1, n2, n3) -> (n_maps, n1 n2 n3); between cell ends if given.

    Each axis is the leading one in turn: (n1, n2 n3), (maps, n2, n3 n1), (maps, n3, n1 n2).
    """
    n1, n2, n3 = level.shape
    n_maps = maps[0].shape[0]
    first = level.reshape(1, n1, n2 * n3)
    moved = maps[0] @ first
    if cells is not None:
        _keep_between(moved, first, cells[0])
    for axis, n, rest in ((1, n2, n3 * n1), (2, n3, n1 * n2)):
        before = moved.reshape(n_maps, -1, n * rest // (n1 if axis == 1 else n2))
        # Turn the leading axis to the end: (maps, a, b c) -> (maps, b, c a).
        before = np.ascontiguousarray(before.transpose(0, 2, 1)).reshape(n_maps, n, rest)
        if n == 1:
            moved = before
            continue
        moved = maps[axis] @ before
        if cells is not None:
            _keep_between(moved, before, cells[axis])
    last = moved.reshape(n_maps, n3, n1 * n2)
    return np.ascontiguousarray(last.transpose(0, 2, 1)).reshape(n_maps, n1 * n2 * n3)


def _keep_between(values: FloatArray, ends: FloatArray, cells: IntArray) -> None:
    """Keep rows of values (maps, n, m) between rows cell and cell + 1 of ends, in place; -1 is free."""
    n_maps, n, m = values.shape
    rows = ends.reshape(-1, m)
    first = np.arange(n_maps)[:, None] * n if rows.shape[0] > n else 0
    free = np.nonzero(cells < 0)
    beyond = values[free]
    at = (first + np.maximum(cells, 0)).ravel()
    after = (first + np.minimum(np.maximum(cells, 0) + 1, n - 1)).ravel()
    flat = values.reshape(-1, m)
    np.maximum(flat, rows.take(at, axis=0), out=flat)
    np.minimum(flat, rows.take(after, axis=0), out=flat)
    values[free] = beyond
