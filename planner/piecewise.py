"""Continuous or jumping piecewise-linear functions of one variable on [0, inf).

The algebra here is exact: sums, minima, maxima and compositions of piecewise-linear functions
are piecewise linear, and their knots are found in closed form. A year's income tax is composed
this way, as a function of the gross withdrawal.
"""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from typing import TypeAlias

import numpy as np
from numpy.typing import ArrayLike, NDArray

FloatArray: TypeAlias = NDArray[np.float64]

# Knots closer than this, relative to the largest knot, are one knot; values closer than this,
# relative to the largest value, are one value. About 10^4 roundings: far above the error of a
# composition, far below a cent on any fortune.
_TOLERANCE = 1e-12


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
        left = np.maximum(np.searchsorted(self.x, points, side="left") - 1, 0)
        return self.y[left] + self.slopes[left] * (points - self.x[left])

    def limit_from_right(self, at: ArrayLike) -> FloatArray:
        """Limits from the right at points ``at >= 0`` (any shape); differ from values at jumps."""
        points = np.asarray(at, dtype=np.float64)
        right = np.maximum(np.searchsorted(self.x, points, side="right") - 1, 0)
        return self.y[right] + self.slopes[right] * (points - self.x[right])

    @property
    def slopes(self) -> FloatArray:
        """Slope of the segment that starts at each knot (0 on the empty segment of a jump)."""
        result = np.empty(self.x.size)
        dx, dy = self.x[1:] - self.x[:-1], self.y[1:] - self.y[:-1]
        empty = dx <= 0.0
        if empty.any():
            dx = np.where(empty, 1.0, dx)
            dy = np.where(empty, 0.0, dy)
        np.divide(dy, dx, out=result[:-1])
        result[-1] = self.last_slope
        return result

    def __add__(self, other: PiecewiseLinear | float) -> PiecewiseLinear:
        """Pointwise sum with a function or a constant."""
        if isinstance(other, PiecewiseLinear):
            return total((self, other))
        return PiecewiseLinear(self.x, self.y + other, self.last_slope)

    __radd__ = __add__

    def __neg__(self) -> PiecewiseLinear:
        return PiecewiseLinear(self.x, -self.y, -self.last_slope)

    def __sub__(self, other: PiecewiseLinear | float) -> PiecewiseLinear:
        """Pointwise difference with a function or a constant."""
        return self + (-other)

    def __rsub__(self, other: float) -> PiecewiseLinear:
        """A constant less this function."""
        return (-self) + other

    def __mul__(self, factor: float) -> PiecewiseLinear:
        """Pointwise multiple by a number."""
        return PiecewiseLinear(self.x, self.y * factor, self.last_slope * factor)

    __rmul__ = __mul__

    def minimum(self, other: PiecewiseLinear | float) -> PiecewiseLinear:
        """Pointwise minimum with a function or a constant."""
        return -((-self).maximum(-other))

    def maximum(self, other: PiecewiseLinear | float) -> PiecewiseLinear:
        """Pointwise maximum with a function or a constant.

        Knots are those of both functions and the points where they cross.
        """
        if not isinstance(other, PiecewiseLinear):
            other = constant(other)
        places = np.unique(np.concatenate((self.x, other.x)))
        difference = self - other
        start = difference.limit_from_right(places)
        slope = difference._slopes_after(places)
        with np.errstate(divide="ignore", invalid="ignore"):
            run = np.where(slope == 0.0, -1.0, -start / slope)  # distance to the zero of the segment
        inside = (run > 0.0) & (run < np.append(np.diff(places), np.inf))
        places = np.unique(np.concatenate((places, places[inside] + run[inside])))
        lead = difference.limit_from_right(places[-1])
        self_leads = lead > 0.0 or (lead == 0.0 and difference.last_slope > 0.0)
        if inside[-1]:  # the last knot is the crossing itself, where the sign is rounding
            self_leads = difference.last_slope > 0.0
        return _from_limits(
            places,
            np.maximum(self(places), other(places)),
            np.maximum(self.limit_from_right(places), other.limit_from_right(places)),
            self.last_slope if self_leads else other.last_slope,
        )

    def positive_part(self) -> PiecewiseLinear:
        """``max(0, f)``."""
        return self.maximum(0.0)

    def after(self, inner: PiecewiseLinear) -> PiecewiseLinear:
        """Composition ``g -> self(max(0, inner(g)))``.

        The outer function lives on [0, inf): a negative inner value counts as 0. Knots are those
        of `inner` and the preimages of the knots of `self` on each segment of `inner`, which may
        rise, fall or be flat. Where `inner` falls through a jump of `self`, the value at that one
        point is the limit from the left, as everywhere in this class.

        Parameters
        ----------
        inner
            The function applied first.

        Returns
        -------
        PiecewiseLinear
            Exact up to rounding, with collinear knots dropped.
        """
        own_x, own_y, own_slopes = self.x, self.y, self.slopes
        n_own = own_x.size
        x, slopes = inner.x, inner.slopes
        start = inner.y  # inner value at the start of the segment after each knot
        width = np.append(x[1:] - x[:-1], np.inf)  # 0 at a jump of inner: an empty segment
        knots = own_x if n_own == 1 else own_x[np.append(True, own_x[1:] > own_x[:-1])]
        with np.errstate(divide="ignore", invalid="ignore"):
            run = (knots[None, :] - start[:, None]) / slopes[:, None]
        segment, knot = np.nonzero((run > 0.0) & (run < width[:, None]))

        # Sub-segments, in order: each starts at a knot of inner or at a preimage, with the inner
        # value there known exactly, so that a jump is never missed by a rounding.
        places = np.concatenate((x, x[segment] + run[segment, knot]))
        from_segment = np.concatenate((np.arange(x.size), segment))
        order = np.lexsort((places, from_segment))
        value = np.concatenate((start, knots[knot]))[order]
        places, from_segment = places[order], from_segment[order]
        slope = slopes[from_segment]
        # direction in which self is entered; below 0 self is flat
        direction = np.where((value < 0.0) | ((value == 0.0) & (slope < 0.0)), 0.0, np.sign(slope))
        value = np.maximum(value, 0.0)

        after = np.searchsorted(own_x, value, side="right") - 1
        before = np.maximum(np.searchsorted(own_x, value, side="left") - 1, 0)
        at = own_y[before] + own_slopes[before] * (value - own_x[before])
        beyond = own_y[after] + own_slopes[after] * (value - own_x[after])

        begins = np.where(direction > 0.0, beyond, at)
        ends = np.empty(places.size)  # limit from the left at each place
        ends[0] = at[0]
        ends[1:] = np.where(direction[:-1] < 0.0, beyond[1:], at[1:])
        last_slope = self.last_slope * inner.last_slope if inner.last_slope > 0.0 else 0.0
        return _from_limits(places, ends, begins, last_slope)

    def of_line(self, intercept: float, slope: float) -> PiecewiseLinear:
        """Composition ``g -> self(max(0, intercept + slope g))`` with a rising or flat line.

        Raises
        ------
        ValueError
            The slope is negative (use `after`).
        """
        if slope < 0.0:
            raise ValueError(f"slope {slope} of the inner line is negative")
        if slope == 0.0:
            return constant(float(self(max(0.0, intercept))))
        x = (self.x - intercept) / slope
        kept = x > 0.0
        first = float(self(max(0.0, intercept)))
        begin = float(self.limit_from_right(intercept)) if intercept >= 0.0 else first
        return PiecewiseLinear(
            np.concatenate(((0.0, 0.0), x[kept])),
            np.concatenate(((first, begin), self.y[kept])),
            self.last_slope * slope,
        ).simplified()

    def simplified(self) -> PiecewiseLinear:
        """Return the same function without collinear knots, empty jumps and coinciding knots."""
        x, y = self.x, self.y
        if x.size == 1:
            return self
        x_tolerance = _TOLERANCE * x[-1]
        y_tolerance = _TOLERANCE * max(float(np.abs(y).max()), abs(self.last_slope) * x[-1])

        close = x[1:] - x[:-1] <= x_tolerance
        if close.any():
            place = x[np.maximum.accumulate(np.where(np.append(False, close), 0, np.arange(x.size)))]
            first = np.append(True, place[1:] > place[:-1])
            last = np.append(first[1:], True)
            lower, upper = y[first], y[last]
            jump = np.abs(upper - lower) > y_tolerance
            knots = place[first]
            x = np.repeat(knots, 1 + jump)
            ends = np.cumsum(1 + jump) - 1
            y = np.empty(x.size)
            y[ends - jump] = lower
            y[ends] = np.where(jump, upper, lower)

        if x.size > 1:
            width = x[1:] - x[:-1]
            flat = width == 0.0
            slope = (y[1:] - y[:-1]) / np.where(flat, 1.0, width)
            turn = np.abs(np.append(slope[1:], self.last_slope) - slope)  # at knots 1 ...
            room = np.minimum(width, np.append(width[1:], np.inf))
            at_jump = flat | np.append(flat[1:], False)
            kept = at_jump | (turn * np.where(at_jump, 1.0, room) > y_tolerance)
            # Of two kinks so close that either could go alone, the first stays and turns for both.
            next_goes = np.append(~kept[1:], False)
            kept |= next_goes & (room < width) & (turn * width > y_tolerance)
            keep = np.append(True, kept)
            if not keep.all():
                x, y = x[keep], y[keep]
        return PiecewiseLinear(x, y, self.last_slope)

    def _slopes_after(self, places: FloatArray) -> FloatArray:
        return self.slopes[np.searchsorted(self.x, places, side="right") - 1]


def _from_limits(
    places: FloatArray, values: FloatArray, begins: FloatArray, last_slope: float
) -> PiecewiseLinear:
    """Function from its values (limits from the left) and limits from the right at places."""
    x = np.repeat(places, 2)
    y = np.empty(x.size)
    y[0::2] = values
    y[1::2] = begins
    return PiecewiseLinear(x, y, last_slope).simplified()


def constant(value: float) -> PiecewiseLinear:
    """Return the function ``g -> value``."""
    return PiecewiseLinear(np.zeros(1), np.array([float(value)]), 0.0)


def line(intercept: float, slope: float) -> PiecewiseLinear:
    """Return the function ``g -> intercept + slope g``."""
    return PiecewiseLinear(np.zeros(1), np.array([float(intercept)]), float(slope))


def identity() -> PiecewiseLinear:
    """Return the function ``g -> g``."""
    return line(0.0, 1.0)


def step(above: float, height: float) -> PiecewiseLinear:
    """Return 0 up to and including `above` (``>= 0``), `height` beyond."""
    return steps([above], [height])


def steps(above: Sequence[float], heights: Sequence[float]) -> PiecewiseLinear:
    """Return 0 up to ``above[0]``, then ``heights[k]`` beyond each ``above[k]``.

    Parameters
    ----------
    above
        Places of the jumps, increasing, ``>= 0``.
    heights
        The level (not the increment) beyond each place.
    """
    places = np.asarray(above, dtype=np.float64)
    levels = np.append(0.0, np.asarray(heights, dtype=np.float64))
    return _from_limits(np.append(0.0, places), np.append(0.0, levels[:-1]), levels, 0.0)


def progressive(starts: Sequence[float], rates: Sequence[float]) -> PiecewiseLinear:
    """Return the schedule that charges ``rates[k]`` on what lies above ``starts[k]``.

    ``f(u) = sum_k rates[k] (min(u, starts[k+1]) - starts[k])+``; nothing below ``starts[0]``.

    Parameters
    ----------
    starts
        Increasing, ``starts[0] >= 0``.
    rates
        Rate from each start to the next.
    """
    if not len(starts):
        return constant(0.0)
    x = np.asarray(starts, dtype=np.float64)
    slopes = np.asarray(rates, dtype=np.float64)
    if x[0] > 0.0:
        x, slopes = np.append(0.0, x), np.append(0.0, slopes)
    y = np.append(0.0, np.cumsum(slopes[:-1] * (x[1:] - x[:-1])))
    return PiecewiseLinear(x, y, float(slopes[-1]))


def total(functions: Iterable[PiecewiseLinear]) -> PiecewiseLinear:
    """Pointwise sum of any number of functions."""
    parts = tuple(functions)
    if not parts:
        return constant(0.0)
    if len(parts) == 1:
        return parts[0]
    last_slope = sum(part.last_slope for part in parts)
    bent = [part for part in parts if part.x.size > 1]
    if len(bent) <= 1:  # lines and at most one other function: its knots serve
        x = bent[0].x if bent else np.zeros(1)
        y = sum((p.y if p.x.size > 1 else p.y[0] + p.last_slope * x for p in parts), np.zeros(x.size))
        return PiecewiseLinear(x, y, last_slope)
    places = np.unique(np.concatenate([part.x for part in bent]))
    values = sum((part(places) for part in parts), np.zeros(places.size))
    begins = sum((part.limit_from_right(places) for part in parts), np.zeros(places.size))
    return _from_limits(places, values, begins, last_slope)


def rate_and_room(function: PiecewiseLinear, at: float) -> tuple[float, float]:
    """Slope on the next unit after a point, and the distance to the next kink or jump.

    Parameters
    ----------
    function
        For instance a tax as a function of the withdrawal.
    at
        A point ``>= 0``; a knot within rounding of it counts as reached.

    Returns
    -------
    rate : float
        Slope just right of `at`.
    room : float
        Distance to the next place where the slope changes or the function jumps; ``inf`` if there
        is none; 0 where a jump lies at the point itself, so that the next unit already pays it.
    """
    pruned = function.simplified()
    reach = at + 1e-9 * max(1.0, abs(at))
    segment = int(np.searchsorted(pruned.x, reach, side="right")) - 1
    rate = float(pruned.slopes[segment])
    place = pruned.x[segment]
    if segment > 0 and pruned.x[segment - 1] == place and place >= at - (reach - at):
        return rate, 0.0
    if segment + 1 == pruned.x.size:
        return rate, float("inf")
    return rate, float(pruned.x[segment + 1]) - at
