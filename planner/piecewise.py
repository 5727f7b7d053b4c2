"""Continuous or jumping piecewise-linear functions of one variable on [0, inf)."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TypeAlias

import numpy as np
from numpy.typing import ArrayLike, NDArray

FloatArray: TypeAlias = NDArray[np.float64]


@dataclass(frozen=True, slots=True, eq=False)
class PiecewiseLinear:
    """Function given by its knots; a jump is a pair of knots at the same place.

    At a jump the function takes the first (left) value: a step that applies "above X" does not
    yet apply at X.

    Attributes
    ----------
    x : ndarray of shape (n_knots,)
        Places of the knots, non-decreasing, ``x[0] == 0``; at most two knots share a place.
    y : ndarray of shape (n_knots,)
        Values at the knots.
    last_slope : float
        Slope beyond the last knot.
    """

    x: FloatArray
    y: FloatArray
    last_slope: float

    def __call__(self, at: ArrayLike) -> FloatArray:
        """Values at points ``at >= 0`` (any shape)."""
        points = np.asarray(at, dtype=np.float64)
        left = np.clip(np.searchsorted(self.x, points, side="left") - 1, 0, self.x.size - 1)
        return self.y[left] + self.slopes[left] * (points - self.x[left])

    @property
    def slopes(self) -> FloatArray:
        """Slope of the segment that starts at each knot (0 on the empty segment of a jump)."""
        dx, dy = np.diff(self.x), np.diff(self.y)
        inner = np.divide(dy, dx, out=np.zeros_like(dy), where=dx > 0)
        return np.append(inner, self.last_slope)
