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

    (n1, n2, n3) levels and slopes -> two arrays (n_portfolios, n1, n2, n3).
    """
    n1, n2, n3 = level.shape
    moved = _moved(growth, level)
    shape = (problem.n_portfolios, -1, n1 * n2 * n3)
    value = (problem.node_weights @ smooth.value(moved).reshape(shape)).reshape(-1, n1, n2, n3)
    if n2 == 1:
        return value, np.zeros_like(value)
    slope = (smooth.marginal(moved) * _moved(growth, slope2)).reshape(shape)
    weighted = (problem.node_weights * problem.gross)[:, None, :]
    return value, (weighted @ slope).reshape(-1, n1, n2, n3)


def _moved(growth: GrowthMaps, level: FloatArray) -> FloatArray:
    """Interpolate at the grown nodes: (n1, n2, n3) -> (n_maps, n1, n2, n3)."""
    n1, n2, n3 = level.shape
    map1, map2, map3 = growth.maps
    cell1, cell2, cell3 = growth.cells
    n_maps = map1.shape[0]
    flat = level.reshape(n1, n2 * n3)
    moved = _between(map1.reshape(n_maps * n1, n1) @ flat, flat, cell1.ravel())
    moved = moved.reshape(n_maps, n1, n2, n3)
    if n2 > 1:
        # Axes move to the front in turn: (maps, n2, n1 n3), then (maps, n3, n2 n1).
        before = np.ascontiguousarray(moved.transpose(0, 2, 1, 3)).reshape(n_maps, n2, n1 * n3)
        moved = _between(
            (map2 @ before).reshape(n_maps * n2, n1 * n3), before.reshape(n_maps * n2, n1 * n3), _rows(cell2)
        )
        moved = moved.reshape(n_maps, n2, n1, n3).transpose(0, 2, 1, 3)
    if n3 > 1:
        before = np.ascontiguousarray(moved.transpose(0, 3, 1, 2)).reshape(n_maps, n3, n1 * n2)
        moved = _between(
            (map3 @ before).reshape(n_maps * n3, n1 * n2), before.reshape(n_maps * n3, n1 * n2), _rows(cell3)
        )
        moved = moved.reshape(n_maps, n3, n1, n2).transpose(0, 2, 3, 1)
    return np.ascontiguousarray(moved)


def _rows(cells: IntArray) -> IntArray:
    """Row numbers of cells (n_maps, n) in arrays whose rows run over maps, then nodes; -1 stays -1."""
    start = cells.shape[1] * np.arange(cells.shape[0])[:, None]
    return np.where(cells < 0, -1, cells + start).ravel()


def _between(values: FloatArray, ends: FloatArray, cell: IntArray) -> FloatArray:
    """Keep each row of values between rows cell and cell + 1 of ends, where cell >= 0."""
    if ends.shape[0] == 1:
        return values
    at = np.maximum(cell, 0)
    left, right = ends[at], ends[at + 1]
    kept = np.clip(values, np.minimum(left, right), np.maximum(left, right))
    kept[cell < 0] = values[cell < 0]
    return kept
