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
from planner.problem import Problem


@dataclass(frozen=True, slots=True, eq=False)
class GrowthMaps:
    """Interpolation matrices at the grown nodes, for one set of contributions.

    Attributes
    ----------
    maps : tuple of 3 ndarrays of shape (n_portfolios * n_nodes, n_i, n_i)
        Row: node of account i (plus its contribution) after growth.
    estate : ndarray of shape (n_portfolios, n1, n2, n3)
        E[v(estate)] of the grown nodes; zeros where no legacy is wished.
    """

    maps: tuple[FloatArray, FloatArray, FloatArray]
    estate: FloatArray


def growth_maps(problem: Problem, grids: Sequence[LogGrid], contribution: FloatArray) -> GrowthMaps:
    """Matrices for nodes + contribution (3,), and the expected utility of the estate there."""
    n_portfolios, n_nodes = problem.gross.shape
    growth = [problem.gross - problem.drag[:, None], problem.gross, problem.gross]
    grown = []
    maps = []
    for grid, factor, paid in zip(grids, growth, contribution, strict=True):
        points = (grid.nodes + paid) * factor.reshape(-1, 1)
        grown.append(points)
        flat = lagrange_matrix(grid.nodes, points.ravel())
        maps.append(flat.reshape(n_portfolios * n_nodes, grid.size, grid.size))
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
    else:
        estate = np.zeros((n_portfolios, *shape))
    return GrowthMaps((maps[0], maps[1], maps[2]), estate)


def expected_value(
    problem: Problem, growth: GrowthMaps, level: FloatArray, smooth: SpendingUtility
) -> FloatArray:
    """E[g(C(y R_p))] for each portfolio: (n1, n2, n3) levels -> (n_portfolios, n1, n2, n3)."""
    n1, n2, n3 = level.shape
    map1, map2, map3 = growth.maps
    n_maps = map1.shape[0]
    moved = (map1.reshape(n_maps * n1, n1) @ level.reshape(n1, n2 * n3)).reshape(n_maps, n1, n2, n3)
    if n2 > 1:
        moved = map2[:, None] @ moved
    if n3 > 1:
        moved = (moved.reshape(n_maps, n1 * n2, n3) @ map3.transpose(0, 2, 1)).reshape(n_maps, n1, n2, n3)
    value = smooth.value(moved).reshape(problem.n_portfolios, -1, n1 * n2 * n3)
    return (problem.node_weights @ value).reshape(problem.n_portfolios, n1, n2, n3)
