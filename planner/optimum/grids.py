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

    4-point Lagrange form in x itself, so exact for straight lines everywhere and for cubics off the
    first cell; linear in the first cell and beyond the last node; with one node constant. The
    first cell is apart because a household that runs out of an account may fall off a cliff
    there, and a cubic across the cliff would overshoot beside it.
    """
    n = nodes.size
    matrix = np.zeros((points.size, n))
    if n == 1:
        matrix[:, 0] = 1.0
        return matrix
    width, first = _stencil(n)
    cell = np.clip(np.searchsorted(nodes, points, side="right") - 1, 0, n - 2)
    start = np.clip(cell - (width // 2 - 1), first, n - width)
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
    inside = cell == 0
    if inside.any():
        share = points[inside] / nodes[1]
        matrix[inside] = 0.0
        matrix[inside, 1] = share
        matrix[inside, 0] = 1.0 - share
    return matrix


def _stencil(n: int) -> tuple[int, int]:
    """Width of the Lagrange form on n nodes, and the first node it may use."""
    return (min(STENCIL, n - 1), 1) if n > 2 else (2, 0)


def derivative_matrix(nodes: FloatArray) -> FloatArray:
    """Slopes at the nodes of values on them, (n, n): mean of the two cells' Lagrange cubics.

    The first cell is linear, as in `lagrange_matrix`: it sets the slope at the first node alone.
    """
    n = nodes.size
    matrix = np.zeros((n, n))
    if n == 1:
        return matrix
    matrix[0, :2] = np.array([-1.0, 1.0]) / nodes[1]
    width, first = _stencil(n)
    at = np.arange(1, n)
    # The cells on either side of each node; at an end, and beside the first cell, twice the same.
    for cell in (np.maximum(at - 1, min(first, n - 2)), np.minimum(at, n - 2)):
        start = np.minimum(np.maximum(cell - (width // 2 - 1), first), n - width)
        columns = start[:, None] + np.arange(width)
        matrix[at[:, None], columns] += 0.5 * _node_slopes(nodes[columns], at - start)
    return matrix


def _node_slopes(local: FloatArray, at: IntArray) -> FloatArray:
    """Weights of the derivative of the Lagrange polynomial on nodes (m, width) at its node `at` (m,).

    With barycentric weights b: (b_k / b_i) / (x_i - x_k) off the node, minus their sum on it
    (Berrut & Trefethen 2004, SIAM Review 46(3) 501-517; from memory).
    """
    rows = np.arange(at.size)
    gaps = local[:, :, None] - local[:, None, :]
    diagonal = np.arange(local.shape[1])
    gaps[:, diagonal, diagonal] = 1.0
    barycentric = 1.0 / gaps.prod(axis=2)
    weights = barycentric / barycentric[rows, at][:, None] / gaps[rows, at]
    weights[rows, at] = 0.0
    weights[rows, at] = -weights.sum(axis=1)
    return weights


def limited_slopes(slopes: FloatArray, values: FloatArray, nodes: FloatArray) -> FloatArray:
    """Keep slopes along axis 0 where Hermite interpolation of increasing values stays monotone.

    Between the chords on either side (where a concave function has its slope), and at most three
    times the flatter one (Fritsch & Carlson 1980, SIAM J. Numer. Anal. 17(2) 238-246: a sufficient
    condition). slopes, values (n, ...); nodes (n,).
    """
    if nodes.size == 1:
        return slopes
    flatter, steeper = _chords(values, nodes)
    steepest = np.maximum(flatter, np.minimum(steeper, 3.0 * flatter))
    return np.asarray(np.minimum(np.maximum(slopes, flatter), steepest))


def plausible_slopes(slopes: FloatArray, values: FloatArray, nodes: FloatArray) -> FloatArray:
    """Keep slopes along axis 0 between half the flatter and twice the steeper chord beside a node.

    For slopes that are known better than chords know them, but for a rare failure. The first node is
    free above: an account that starts to be used up may be worth much more there.
    """
    if nodes.size == 1:
        return slopes
    flatter, steeper = _chords(values, nodes)
    steeper[0] = np.inf
    least, most = np.maximum(0.5 * flatter, 0.0), np.maximum(2.0 * steeper, 0.0)
    return np.asarray(np.minimum(np.maximum(slopes, least), most))


def _chords(values: FloatArray, nodes: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Flatter and steeper of the chords on either side of each node of axis 0."""
    gaps = (nodes[1:] - nodes[:-1]).reshape((-1,) + (1,) * (values.ndim - 1))
    chords = (values[1:] - values[:-1]) / gaps
    flatter, steeper = np.empty((2, *values.shape))
    for either in (flatter, steeper):
        either[0], either[-1] = chords[0], chords[-1]
    np.minimum(chords[1:], chords[:-1], out=flatter[1:-1])
    np.maximum(chords[1:], chords[:-1], out=steeper[1:-1])
    # The last node has one chord; a concave function is flatter there.
    flatter[-1] *= 0.5
    return flatter, steeper


@dataclass(frozen=True, slots=True, eq=False)
class CashGrid:
    """Nodes for cash on hand, evenly spaced in asinh(M/scale), with one node doubled at a kink.

    Cash may be negative. The doubled node lets a function have two slopes there; 0 is a node too,
    since a household without any cash is at a corner.

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
        """About n nodes that cover [low, high] and contain 0, and `kink` > 0 twice.

        At a scale above the kink, 0 and the kink would set a step far below the one that n allows.
        """
        scale = min(scale, kink)
        at = float(np.arcsinh(kink / scale))
        least, most = float(np.arcsinh(low / scale)), float(np.arcsinh(high / scale))
        to_kink = max(1, round(at / ((most - least) / (n - 2))))
        step = at / to_kink
        below = max(to_kink, int(np.ceil((at - least) / step - 1e-9)))
        above = max(1, int(np.ceil((most - at) / step - 1e-9)))
        places = scale * np.sinh(at + step * np.arange(-below, above + 1))
        places[below - to_kink] = 0.0
        places[below] = kink
        nodes = np.insert(places, below, kink)
        return cls(nodes, scale, step, at - step * below, below)

    def cell(self, cash: FloatArray) -> IntArray:
        """Index k of the cell [node k, node k+1] that holds `cash`, clipped (any shape)."""
        k = np.floor((np.arcsinh(cash / self.scale) - self.first) / self.step).astype(np.int64)
        # The kink's own place is decided by value: rounding must not put it in the wrong cell.
        k = np.where(cash >= self.nodes[self.kink], np.maximum(k, self.kink), np.minimum(k, self.kink - 1))
        k = np.minimum(np.maximum(k, 0), self.nodes.size - 3)
        return k + (k >= self.kink)
