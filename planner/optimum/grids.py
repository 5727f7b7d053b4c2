"""Wealth grids and the linear maps that interpolate and differentiate on them."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from planner.piecewise import FloatArray
from planner.problem import IntArray

STENCIL = 4  # nodes of the Lagrange form: exact for cubics, local enough to keep a kink local


@dataclass(frozen=True, slots=True, eq=False)
class LogGrid:
    """Nodes evenly spaced in log(1 + x/scale), from 0 to a top; one node (0) for an absent account.

    Attributes
    ----------
    nodes : ndarray of shape (n,)
        Increasing, ``nodes[0] == 0``.
    scale : float
        Money; below it nodes are about evenly spaced.
    step : float
        Spacing in log(1 + x/scale).
    """

    nodes: FloatArray
    scale: float
    step: float

    @classmethod
    def build(cls, n: int, scale: float, top: float) -> LogGrid:
        """`n` nodes from 0 to `top`; n = 1 gives the single node 0."""
        if n == 1:
            return cls(np.zeros(1), scale, 1.0)
        step = float(np.log1p(top / scale)) / (n - 1)
        return cls(scale * np.expm1(step * np.arange(n)), scale, step)

    @property
    def size(self) -> int:
        """Number of nodes."""
        return self.nodes.size

    def cell(self, x: FloatArray) -> IntArray:
        """Index k of the cell [node k, node k+1] that holds x, clipped to the grid (any shape)."""
        if self.size == 1:
            return np.zeros(np.shape(x), dtype=np.int64)
        k = (np.log1p(np.maximum(x, 0.0) / self.scale) / self.step).astype(np.int64)
        return np.minimum(k, self.size - 2)


def lagrange_matrix(nodes: FloatArray, points: FloatArray) -> FloatArray:
    """Rows that interpolate at `points` (m,) values given on `nodes` (n,): (m, n).

    4-point Lagrange form in x itself, so exact for cubics; linear beyond the last node; with one
    node the function is constant.
    """
    n = nodes.size
    matrix = np.zeros((points.size, n))
    if n == 1:
        matrix[:, 0] = 1.0
        return matrix
    width = min(STENCIL, n)
    cell = np.clip(np.searchsorted(nodes, points, side="right") - 1, 0, n - 2)
    start = np.clip(cell - (width // 2 - 1), 0, n - width)
    columns = start[:, None] + np.arange(width)
    local = nodes[columns]
    rows = np.arange(points.size)[:, None]
    for k in range(width):
        others = np.delete(np.arange(width), k)
        top = np.prod(points[:, None] - local[:, others], axis=1)
        matrix[rows[:, 0], columns[:, k]] = top / np.prod(local[:, [k]] - local[:, others], axis=1)
    beyond = points > nodes[-1]
    if beyond.any():
        share = (points[beyond] - nodes[-2]) / (nodes[-1] - nodes[-2])
        matrix[beyond] = 0.0
        matrix[beyond, n - 1] = share
        matrix[beyond, n - 2] = 1.0 - share
    return matrix


def derivative_matrix(nodes: FloatArray) -> FloatArray:
    """Slopes at the nodes of values on them, (n, n): mean of the two cells' Lagrange cubics."""
    n = nodes.size
    matrix = np.zeros((n, n))
    if n == 1:
        return matrix
    width = min(STENCIL, n)
    for i in range(n):
        cells = {min(max(i - 1, 0), n - 2), min(i, n - 2)}
        for cell in cells:
            start = int(np.clip(cell - (width // 2 - 1), 0, n - width))
            columns = np.arange(start, start + width)
            matrix[i, columns] += _node_slopes(nodes[columns], i - start) / len(cells)
    return matrix


def _node_slopes(local: FloatArray, at: int) -> FloatArray:
    """Weights of the derivative of the Lagrange polynomial at its own node `at`."""
    width = local.size
    weights = np.zeros(width)
    for k in range(width):
        if k == at:
            weights[k] = sum(1.0 / (local[at] - local[j]) for j in range(width) if j != at)
            continue
        rest = [j for j in range(width) if j not in (k, at)]
        top = np.prod([local[at] - local[j] for j in rest])
        weights[k] = top / np.prod([local[k] - local[j] for j in range(width) if j != k])
    return weights


@dataclass(frozen=True, slots=True, eq=False)
class CashGrid:
    """Nodes for cash on hand, evenly spaced in asinh(M/scale), with one node doubled at a kink.

    Cash may be negative. The doubled node lets a function have two slopes there.

    Attributes
    ----------
    nodes : ndarray of shape (n,)
        Non-decreasing; nodes ``kink`` and ``kink + 1`` are the same place.
    first : float
        asinh(nodes[0]/scale).
    """

    nodes: FloatArray
    scale: float
    step: float
    first: float
    kink: int

    @classmethod
    def build(cls, n: int, scale: float, low: float, high: float, kink: float) -> CashGrid:
        """About n nodes that cover [low, high] and contain `kink` twice."""
        at = np.arcsinh(kink / scale)
        step = float((np.arcsinh(high / scale) - np.arcsinh(low / scale)) / (n - 2))
        below = max(1, int(np.ceil((at - np.arcsinh(low / scale)) / step)))
        above = max(1, int(np.ceil((np.arcsinh(high / scale) - at) / step)))
        places = scale * np.sinh(at + step * np.arange(-below, above + 1))
        places[below] = kink
        nodes = np.insert(places, below, kink)
        return cls(nodes, scale, step, float(at - step * below), below)

    def cell(self, cash: FloatArray) -> IntArray:
        """Index k of the cell [node k, node k+1] that holds `cash`, clipped (any shape)."""
        k = np.floor((np.arcsinh(cash / self.scale) - self.first) / self.step).astype(np.int64)
        # The kink's own place is decided by value: rounding must not put it in the wrong cell.
        k = np.where(cash >= self.nodes[self.kink], np.maximum(k, self.kink), np.minimum(k, self.kink - 1))
        k = np.clip(k, 0, self.nodes.size - 3)
        return k + (k >= self.kink)
