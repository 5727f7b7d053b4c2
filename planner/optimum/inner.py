"""Spending once withdrawal and conversion are fixed: endogenous grid points, then a cash table.

With tax sunk, the choice is one-dimensional: G(M, y2, x3) = max over c of n f(c/n) + beta J(y, h),
where cash M pays first and tax-free second. Carroll (2006), Economics Letters 91(3) 312-320; nested
in an outer choice as in Druedahl (2021), Computational Economics 58 747-775.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from planner.optimum.grids import CashGrid
from planner.piecewise import FloatArray
from planner.preferences import SpendingUtility
from planner.problem import IntArray

NEWTON_STEPS = 1  # the cell's secant is close: 1 step leaves about 1e-6 of spending
TINY_SLOPE = 1e-12


@dataclass(frozen=True, slots=True, eq=False)
class Continuation:
    """What a household is worth after its choices, in certainty-equivalent units.

    Attributes
    ----------
    worth, unit : ndarray of shape (n2, n1, n3)
        beta J on the nodes of (tax-deferred, taxable, tax-free), and what one unit of the level adds.
    level : ndarray of shape (n2, n1, n3)
        g^-1(J / A_J).
    slope1 : ndarray of shape (n2, n1, n3)
        Its slope along taxable.
    slope2 : ndarray of shape (n2, n1, n3)
        Its slope along tax-deferred.
    slope3 : ndarray of shape (n2, n3)
        Its slope along tax-free where taxable is used up.
    weight : float
        beta A_J: weight of J, discounting included; 0 where nothing follows.
    """

    worth: FloatArray
    unit: FloatArray
    level: FloatArray
    slope1: FloatArray
    slope2: FloatArray
    slope3: FloatArray
    weight: float


@dataclass(frozen=True, slots=True, eq=False)
class Felicity:
    """One year's spending: need scale, ceiling and utility, with its first-order condition.

    Attributes
    ----------
    smooth : SpendingUtility
        The utility without the kink at essential spending: the unit of certainty equivalents.
    """

    utility: SpendingUtility
    smooth: SpendingUtility
    need: float
    ceiling: float

    def value(self, c: FloatArray) -> FloatArray:
        """Utility n f(c/n) of spending c."""
        return self.need * self.utility.value(c / self.need)

    def marginal(self, c: FloatArray) -> FloatArray:
        """f'(c/n)."""
        return self.utility.marginal(c / self.need)

    def spend(self, price: FloatArray) -> FloatArray:
        """Spending c >= 0 that maximises n f(c/n) - price c, held to the ceiling."""
        price = np.maximum(price, 0.0)
        c = self.need * self.utility.inverse_marginal(price)
        # On the straight line below the floor nothing is spent at a price above its slope.
        return self.at_most(np.where(price > self.utility.steepest, 0.0, c))

    def at_most(self, c: FloatArray) -> FloatArray:
        """Spending c held to the ceiling."""
        return np.minimum(c, self.ceiling * self.need)


@dataclass(frozen=True, slots=True, eq=False)
class CashTable:
    """G in certainty-equivalent units on nodes of (tax-deferred, money, tax-free).

    Money is cash + tax-free, M + x3. At given money the value hardly depends on tax-free (not at all
    once spending draws on it), so that coarse nodes along tax-free do; and where everything is spent
    its kink at essential spending lies at the same money, a node, for all of them.

    Attributes
    ----------
    grid : CashGrid
    level, slope : ndarray of shape (n2, n_cash, n3)
        g^-1(G / weight) and its slope along money (envelope theorem: marginal utility).
    slope2 : ndarray of the same shape
        Slope of the level along tax-deferred (envelope theorem).
    spending : ndarray of the same shape
        c, money a year.
    """

    grid: CashGrid
    level: FloatArray
    slope: FloatArray
    slope2: FloatArray
    spending: FloatArray


def hermite(
    x: FloatArray, left: FloatArray, right: FloatArray, values: tuple[FloatArray, ...]
) -> tuple[FloatArray, FloatArray]:
    """Cubic Hermite value and slope at x in [left, right]; a straight line beyond `right`.

    ``values`` = (value left, value right, slope left, slope right), all of x's shape.
    """
    v0, v1, s0, s1 = values
    width = right - left
    t = np.minimum((x - left) / width, 1.0)
    beyond = np.maximum(x - right, 0.0)
    chord = (v1 - v0) / width
    a, b = s0 - chord, s1 - chord
    u = 1.0 - t
    value = v0 + t * (width * chord + width * u * (a * u - b * t)) + s1 * beyond
    slope = chord + a * u * (1.0 - 3.0 * t) - b * t * (2.0 - 3.0 * t)
    return value, slope


def cash_table(
    following: Continuation,
    felicity: Felicity,
    grid: CashGrid,
    taxable: FloatArray,
    tax_free: FloatArray,
    weight: float,
) -> CashTable:
    """Solve the inner choice on every node of (tax-deferred, cash, tax-free).

    Parameters
    ----------
    taxable, tax_free : ndarray of shape (n1,), (n3,)
        Account nodes.
    weight : float
        A_V(t, h), the weight of this year's value.
    """
    smooth, w = felicity.smooth, following.weight
    n2, n1, n3 = following.level.shape
    m = grid.nodes
    shape = (n2, m.size, n3)
    worth, unit = following.worth, following.unit
    price2 = unit * following.slope2

    in_taxable = _Kept.of(following.level, following.slope1, following.slope2, unit, taxable, felicity)
    cash = m[:, None] - tax_free
    index = _bracket(m, in_taxable.knots + tax_free)
    if n3 > 1:
        in_free = _Kept.of(
            following.level[:, 0, :, None],
            following.slope3[:, :, None],
            following.slope2[:, 0, :, None],
            unit[:, 0, :, None],
            tax_free,
            felicity,
        )
        # Below it tax-free pays too.
        first_need = np.minimum(in_free.spend[:, :, 0], in_taxable.spend[:, 0])[:, None, :]

    # Cash pays everything and nothing is left of it: the household spends exactly the cash.
    choice = np.empty((4, *shape))
    spending, marginal, later, deferred = choice
    spending[:] = cash
    marginal[:] = felicity.marginal(_left_of_kink(cash, grid))
    later[:] = worth[:, :1]
    deferred[:] = price2[:, :1]

    # Some cash is left in taxable.
    some = (index.reshape(-1) >= 0).nonzero()[0]
    if some.size:
        row = some // (m.size * n3) * (n1 * n3) + some % n3
        found = _keep_some(spending.take(some), index.take(some), row, in_taxable, felicity, w)
        for numbers, new in zip(choice, found, strict=True):
            numbers.reshape(-1)[some] = new

    # Cash is used up and tax-free pays the rest.
    if n3 > 1:
        draw = np.flatnonzero((index < 0) & (cash < first_need))
        j, at = draw // (m.size * n3), draw // n3 % m.size
        total = m.take(at)
        inside = (total[:, None] >= in_free.knots[j, :, 0]).sum(axis=1) - 1
        # Everything is spent where even tax-free runs out.
        price = felicity.marginal(_left_of_kink(m, grid)).take(at)
        drawn = (total.copy(), price, worth[j, 0, 0], price2[j, 0, 0])
        held = np.flatnonzero(inside >= 0)
        if held.size:
            found = _keep_some(total[held], inside[held], j[held] * n3, in_free, felicity, w)
            for numbers, new in zip(drawn, found, strict=True):
                numbers[held] = new
        for numbers, new in zip(choice, drawn, strict=True):
            numbers.reshape(-1)[draw] = new

    later += felicity.value(spending)
    later /= weight
    table, unit = smooth.inverse_and_marginal(later)
    unit = weight * unit
    slope = np.minimum(marginal / unit, _steepest(table, grid))
    return CashTable(grid, table, slope, deferred / unit, spending)


@dataclass(frozen=True, slots=True, eq=False)
class _Kept:
    """What keeping money in one account is worth, at the account's nodes along axis 1.

    Attributes
    ----------
    nodes : ndarray of shape (n,)
    spend, knots : ndarray of shape (n2, n, n3)
        Spending that leaves exactly the node, and the money that this takes (non-decreasing).
    numbers : ndarray of shape (5, n2 n n3)
        Level, its slopes along the account and along tax-deferred, spending and knots, flat.
    """

    nodes: FloatArray
    spend: FloatArray
    knots: FloatArray
    numbers: FloatArray

    @classmethod
    def of(
        cls,
        level: FloatArray,
        slope: FloatArray,
        slope2: FloatArray,
        unit: FloatArray,
        nodes: FloatArray,
        felicity: Felicity,
    ) -> _Kept:
        """From a continuation's level and slopes; `unit` is the utility of one unit of the level."""
        spend = felicity.spend(unit * np.maximum(slope, TINY_SLOPE))
        knots = np.maximum.accumulate(spend + nodes[:, None], axis=1)
        numbers = np.concatenate([level, slope, slope2, spend, knots], axis=None).reshape(5, -1)
        return cls(nodes, spend, knots, numbers)


def _left_of_kink(money: FloatArray, grid: CashGrid) -> FloatArray:
    """Money (n_cash, ...), at the first copy of the doubled node a little less: the slope on its left."""
    money = money.copy()
    money[grid.kink] = money[grid.kink] * (1 - 1e-12) - 1e-300
    return money


def _steepest(level: FloatArray, grid: CashGrid) -> FloatArray:
    """Largest slope along axis 1 with which Hermite interpolation stays monotone: three chords.

    The doubled node has one chord on each side. See `grids.limited_slopes`.
    """
    gaps = grid.nodes[1:] - grid.nodes[:-1]
    gaps[grid.kink] = 1.0
    chords = (level[:, 1:] - level[:, :-1]) / gaps[:, None]
    chords[:, grid.kink] = np.inf
    flattest = np.empty_like(level)
    flattest[:, 0], flattest[:, -1] = chords[:, 0], chords[:, -1]
    np.minimum(chords[:, 1:], chords[:, :-1], out=flattest[:, 1:-1])
    np.maximum(flattest, 0.0, out=flattest)
    flattest *= 3.0
    return flattest


def _bracket(points: FloatArray, knots: FloatArray) -> IntArray:
    """Last knot at or below each point: (m,), (n2, n, n3) -> (n2, m, n3); -1 where none.

    Both increase along their axis: a knot is counted from the first point that reaches it.
    """
    n2, _, n3 = knots.shape
    if n2 == n3 == 1:
        return (np.searchsorted(knots[0, :, 0], points, side="right") - 1)[None, :, None]
    first = np.searchsorted(points, knots, side="left")
    first *= n3
    first += (np.arange(n2) * (points.size + 1) * n3)[:, None, None] + np.arange(n3)
    count = np.bincount(first.ravel(), minlength=n2 * (points.size + 1) * n3)
    return count.reshape(n2, points.size + 1, n3)[:, :-1].cumsum(axis=1) - 1


def _keep_some(
    money: FloatArray,
    index: IntArray,
    row: IntArray,
    kept: _Kept,
    felicity: Felicity,
    weight: float,
) -> tuple[FloatArray, FloatArray, FloatArray, FloatArray]:
    """Split money into spending and what is kept in one account: c + y = money.

    Newton on y + c(y) = money, started from the endogenous knot `index` of the row whose first
    number lies at `row`. Each (n,): spending, price of money, worth of what follows, and its slope
    along tax-deferred.
    """
    nodes, stride = kept.nodes, kept.spend.shape[2]
    k = np.minimum(index, nodes.size - 2)
    at = row + k * stride
    level0, slope0, other0, spend0, knot0 = kept.numbers.take(at, axis=1)
    level1, slope1, other1, spend1, knot1 = kept.numbers.take(at + stride, axis=1)
    left, right = nodes.take(k), nodes.take(k + 1)
    width = right - left
    y = left + width * np.maximum(money - knot0, 0.0) / np.maximum(knot1 - knot0, 1e-9 * width)
    slope_of_spending = np.maximum((spend1 - spend0) / width, 0.0)
    corners = (level0, level1, slope0, slope1)
    highest = np.where(index >= nodes.size - 1, np.inf, right)
    for _ in range(NEWTON_STEPS):
        level, rate = hermite(y, left, right, corners)
        price = weight * felicity.smooth.marginal(level) * np.maximum(rate, TINY_SLOPE)
        excess = y + np.minimum(felicity.spend(price), money) - money
        y = np.minimum(np.maximum(y - excess / (1.0 + slope_of_spending), left), highest)
    level, rate = hermite(y, left, right, corners)
    worth, unit = felicity.smooth.value_and_marginal(level)
    unit *= weight
    price = unit * np.maximum(rate, TINY_SLOPE)
    y = np.minimum(y, np.maximum(money, 0.0))
    share = np.minimum(np.maximum((y - left) / width, 0.0), 1.0)
    return money - y, price, weight * worth, unit * (other0 + share * (other1 - other0))
