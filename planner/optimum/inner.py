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
    level : ndarray of shape (n2, n1, n3)
        g^-1(J / weight) on the nodes of (tax-deferred, taxable, tax-free).
    slope1 : ndarray of shape (n2, n1, n3)
        Its slope along taxable.
    slope2 : ndarray of shape (n2, n1, n3)
        Its slope along tax-deferred.
    slope3 : ndarray of shape (n2, n3)
        Its slope along tax-free where taxable is used up.
    weight : float
        beta A_J: weight of J, discounting included; 0 where nothing follows.
    """

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
    smooth = felicity.smooth
    level, w = following.level, following.weight
    n2, _, n3 = level.shape
    m = grid.nodes
    shape = (n2, m.size, n3)

    price1 = w * smooth.marginal(level) * np.maximum(following.slope1, TINY_SLOPE)
    if w == 0.0:
        price1 = np.zeros_like(level)
    spend1 = felicity.spend(price1)
    knots1 = np.maximum.accumulate(spend1 + taxable[:, None], axis=1)
    cash_nodes = m[:, None] - tax_free
    index = _bracket(cash_nodes, knots1)
    if n3 > 1:
        price3 = (
            w * smooth.marginal(level[:, 0]) * np.maximum(following.slope3, TINY_SLOPE)
            if w
            else 0 * level[:, 0]
        )
        spend3 = felicity.spend(price3)
        first_need = np.minimum(spend3, spend1[:, 0])[:, None, :]  # below it tax-free pays too
    else:
        price3 = spend3 = np.zeros((n2, n3))
        first_need = np.full((n2, 1, n3), -np.inf)

    cash = np.broadcast_to(cash_nodes, shape)
    left_copy = np.zeros(m.size, dtype=bool)
    left_copy[grid.kink] = True

    # Cash pays everything and nothing is left of it: the household spends exactly the cash.
    spending = np.array(cash)
    later = np.broadcast_to(w * smooth.value(level[:, 0]) if w else 0 * level[:, 0], (n2, n3))[:, None, :]
    later = np.array(np.broadcast_to(later, shape))
    marginal = felicity.marginal(np.where(left_copy[None, :, None], cash * (1 - 1e-12) - 1e-300, cash))
    price2 = w * smooth.marginal(level) * following.slope2 if w else np.zeros_like(level)
    deferred = np.array(np.broadcast_to(price2[:, :1, :], shape))

    # Some cash is left in taxable.
    some = np.nonzero(index >= 0)
    if some[0].size:
        j, k, i3 = some
        c, lvl, price, at, share = _solve_along(
            cash_nodes[k, i3],
            index[some],
            taxable,
            (j, i3),
            knots1,
            spend1,
            level,
            following.slope1,
            felicity,
            w,
        )
        spending[some], marginal[some] = c, price
        deferred[some] = _along(following.slope2, j, at, i3, share) * w * smooth.marginal(lvl)
        later[some] = w * smooth.value(lvl) if w else 0.0

    # Cash is used up and tax-free pays the rest.
    draw = np.nonzero((index < 0) & (cash < first_need))
    if n3 > 1 and draw[0].size:
        j, k, i3 = draw
        total = cash_nodes[k, i3] + tax_free[i3]
        knots3 = np.maximum.accumulate(spend3 + tax_free, axis=1)[:, :, None]
        inside = (total[:, None] >= knots3[j, :, 0]).sum(axis=1) - 1
        c = np.array(total)  # everything is spent where even tax-free runs out
        price = felicity.marginal(np.where(left_copy[k], c * (1 - 1e-12) - 1e-300, c))
        value = (w * smooth.value(level[:, 0, 0]) if w else 0 * level[:, 0, 0])[j]
        other = price2[j, 0, 0]
        held = np.nonzero(inside >= 0)[0]
        if held.size:
            c[held], lvl, price[held], at, share = _solve_along(
                total[held],
                inside[held],
                tax_free,
                (j[held], np.zeros(held.size, dtype=np.int64)),
                knots3,
                spend3[:, :, None],
                level[:, 0][:, :, None],
                following.slope3[:, :, None],
                felicity,
                w,
            )
            value[held] = w * smooth.value(lvl) if w else 0.0
            at_zero = following.slope2[:, 0, :, None]
            zero = np.zeros(held.size, dtype=np.int64)
            other[held] = _along(at_zero, j[held], at, zero, share) * w * smooth.marginal(lvl)
        spending[draw], marginal[draw], later[draw], deferred[draw] = c, price, value, other

    table = smooth.inverse((felicity.value(spending) + later) / weight)
    unit = weight * smooth.marginal(table)
    slope = np.minimum(marginal / unit, _steepest(table, m))
    return CashTable(grid, table, slope, deferred / unit, spending)


def _along(values: FloatArray, j: IntArray, k: IntArray, other: IntArray, share: FloatArray) -> FloatArray:
    """Linear between nodes k and k + 1 of axis 1, held at the last node beyond it."""
    left = values[j, k, other]
    return np.asarray(left + np.clip(share, 0.0, 1.0) * (values[j, k + 1, other] - left))


def _steepest(level: FloatArray, nodes: FloatArray) -> FloatArray:
    """Largest slope along axis 1 with which Hermite interpolation stays monotone: three chords.

    The doubled node has one chord on each side. See `grids.limited_slopes`.
    """
    gaps = np.diff(nodes)
    chords = np.diff(level, axis=1) / np.where(gaps > 0, gaps, 1.0)[:, None]
    chords[:, gaps == 0] = np.inf
    end = np.full_like(chords[:, :1], np.inf)
    flattest = np.minimum(np.concatenate([end, chords], axis=1), np.concatenate([chords, end], axis=1))
    return np.asarray(3.0 * np.maximum(flattest, 0.0))


def _bracket(points: FloatArray, knots: FloatArray) -> IntArray:
    """Last knot at or below each point: (m, n3), (n2, n, n3) -> (n2, m, n3); -1 where none."""
    if knots.shape[0] == knots.shape[2] == 1:
        return (np.searchsorted(knots[0, :, 0], points[:, 0], side="right") - 1)[None, :, None]
    count = np.zeros((knots.shape[0], *points.shape), dtype=np.int64)
    for i in range(knots.shape[1]):
        count += points >= knots[:, i : i + 1]
    return count - 1


def _solve_along(
    money: FloatArray,
    index: IntArray,
    nodes: FloatArray,
    place: tuple[IntArray, IntArray],
    knots: FloatArray,
    spend: FloatArray,
    level: FloatArray,
    slope: FloatArray,
    felicity: Felicity,
    weight: float,
) -> tuple[FloatArray, FloatArray, FloatArray, IntArray, FloatArray]:
    """Split money into spending and what is kept in one account: c + y = money.

    Newton on y + c(y) = money, started from the endogenous knots of
    the row `place` = (j, l), knots[j, i, l]. Returns spending, level of the continuation and its price.
    """
    j, other = place
    k = np.minimum(index, nodes.size - 2)
    left, right = nodes[k], nodes[k + 1]
    at0, at1 = knots[j, k, other], knots[j, k + 1, other]
    rise = np.maximum(at1 - at0, 1e-9 * (right - left))
    y = left + (right - left) * np.maximum(money - at0, 0.0) / rise
    slope_of_spending = np.maximum((spend[j, k + 1, other] - spend[j, k, other]) / (right - left), 0.0)
    corners = (level[j, k, other], level[j, k + 1, other], slope[j, k, other], slope[j, k + 1, other])
    last = index >= nodes.size - 1
    highest = np.where(last, np.inf, right)
    for step in range(NEWTON_STEPS + 1):
        lvl, rate = hermite(y, left, right, corners)
        price = weight * felicity.smooth.marginal(lvl) * np.maximum(rate, TINY_SLOPE)
        if step < NEWTON_STEPS:
            excess = y + np.minimum(felicity.spend(price), money) - money
            y = np.clip(y - excess / (1.0 + slope_of_spending), left, highest)
    y = np.minimum(y, np.maximum(money, 0.0))
    return money - y, lvl, price, k, (y - left) / (right - left)
