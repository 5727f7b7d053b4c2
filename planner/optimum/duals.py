"""One year of the dual: next year's prices in expectation, and what a relaxed household gains."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from planner.cashflow import Year
from planner.piecewise import FloatArray, PiecewiseLinear
from planner.problem import TAX_DEFERRED, TAX_FREE, TAXABLE, Problem

BoolArray = NDArray[np.bool_]

LARGEST_FACTOR = 4.0  # on the reading of a price; only empty accounts come near it


@dataclass(frozen=True, slots=True, eq=False)
class Factors:
    """Factors on next year's raw prices: accounts (..., n, 3), the estate's (n,)."""

    accounts: FloatArray
    estate: FloatArray


@dataclass(frozen=True, slots=True, eq=False)
class Expectation:
    """E_t[beta m_{t+1} R_p], linear in the factors on next year's raw prices.

    Attributes
    ----------
    living : ndarray of shape (n, n_portfolios, 3)
        beta times the expectation of raw prices while someone lives, at factors 1.
    estate : ndarray of shape (n, n_portfolios, 3)
        The part of an estate.
    """

    living: FloatArray
    estate: FloatArray

    def of(self, factors: Factors) -> FloatArray:
        """Expectations (..., n, n_portfolios, 3) at these factors."""
        living = factors.accounts[..., None, :] * self.living
        return np.asarray(living + factors.estate[:, None, None] * self.estate)

    def factor(self, account: int, limit: FloatArray, estate: FloatArray) -> FloatArray:
        """Largest factor of an account whose expectation is within the limit (..., n) in every portfolio.

        At least 0; `estate` (n,) is the factor on the estate's price.
        """
        room = limit[..., None] - estate[:, None] * self.estate[:, :, account]
        largest = room / np.maximum(self.living[:, :, account], 1e-300)
        return np.asarray(np.maximum(largest.min(axis=-1), 0.0))


@dataclass(frozen=True, slots=True, eq=False)
class YearPrices:
    """A year's prices in utility per unit of money, on n paths, or several sets of them to choose from.

    Attributes
    ----------
    cash : ndarray of shape (..., n)
        l.
    cash_limit : ndarray of shape (n,)
        What last year's expectation allowed for l.
    deferred, free : ndarray of shape (n,)
        m2, m3.
    best, held : ndarray of shape (..., n, 3)
        nu in the best portfolio for each account, and in the one that the plan holds.
    """

    cash: FloatArray
    cash_limit: FloatArray
    deferred: FloatArray
    free: FloatArray
    best: FloatArray
    held: FloatArray


@dataclass(frozen=True, slots=True, eq=False)
class YearChoice:
    """What the plan did in a year, and what a household that obeys the prices alone would do.

    Attributes
    ----------
    left : ndarray of shape (n, 3)
        y: what remains in each account before contributions and growth.
    most_deferred : ndarray of shape (n,)
        The most that any strategy can hold in tax-deferred.
    """

    problem: Problem
    t: int
    h: int
    year: Year
    left: FloatArray
    most_deferred: FloatArray

    @classmethod
    def of(cls, problem: Problem, t: int, h: int, year: Year, most_deferred: FloatArray) -> YearChoice:
        """Read what remains off the year's ledger."""
        x, w, k = year.opening, year.withdrawal, year.conversion
        cash = x[:, TAXABLE] + year.income + w[:, TAX_DEFERRED] - year.tax - year.spending
        left = [cash, x[:, TAX_DEFERRED] - w[:, TAX_DEFERRED] - k, x[:, TAX_FREE] + k - w[:, TAX_FREE]]
        return cls(problem, t, h, year, np.maximum(np.stack(left, axis=1), 0.0), most_deferred)

    @property
    def paid_in(self) -> FloatArray:
        """Contributions to the accounts, (3,)."""
        return self.problem.contribution[self.t, self.h]

    @property
    def tax(self) -> PiecewiseLinear:
        """T(g) of the year."""
        return self.problem.tax[self.t][self.h]

    @property
    def gross(self) -> FloatArray:
        """G = w2 + k."""
        return np.asarray(self.year.withdrawal[:, TAX_DEFERRED] + self.year.conversion)

    @property
    def at_minimum(self) -> BoolArray:
        """Whether g is the minimum distribution; nowhere in years without one."""
        d = float(self.problem.minimum_share[self.t, self.h])
        return np.asarray((self.gross <= d * self.year.opening[:, TAX_DEFERRED] * (1 + 1e-9)) & (d > 0))

    def rates(self) -> tuple[FloatArray, FloatArray]:
        """Marginal tax rate just below and just above the plan's g."""
        x, slopes = self.tax.x, self.tax.slopes
        near = 1e-9 * (1.0 + self.gross)
        below = np.clip(np.searchsorted(x, self.gross - near, side="left") - 1, 0, x.size - 1)
        above = np.clip(np.searchsorted(x, self.gross + near, side="right") - 1, 0, x.size - 1)
        return slopes[below], slopes[above]

    def hull_rates(self) -> tuple[FloatArray, FloatArray]:
        """The same of the largest convex function below T: where T is not convex, g may be skipped over."""
        x, y = self.tax.x, self.tax.y
        hull: list[int] = []
        for k in range(x.size):
            while len(hull) > 1 and _turns_down(x, y, hull[-2], hull[-1], k):
                hull.pop()
            hull.append(k)
        # The last bracket's slope ends the hull: knots that it passes below are dropped.
        while len(hull) > 1 and y[hull[-1]] - y[hull[-2]] >= self.tax.last_slope * (
            x[hull[-1]] - x[hull[-2]]
        ):
            hull.pop()
        places = x[hull]
        chords = np.append(np.diff(y[hull]) / np.maximum(np.diff(places), 1e-300), self.tax.last_slope)
        near = 1e-9 * (1.0 + self.gross)
        below = np.clip(np.searchsorted(places, self.gross - near, side="left") - 1, 0, places.size - 1)
        above = np.clip(np.searchsorted(places, self.gross + near, side="right") - 1, 0, places.size - 1)
        return chords[below], chords[above]

    def deferred_target(
        self, cash: FloatArray, m2: FloatArray, m3: FloatArray, follow_minimum: BoolArray
    ) -> FloatArray:
        """Limit for nu2: with it B has little slack.

        Where the minimum distribution binds, `follow_minimum` (n,) takes the value without slack even above
        m2: exact this year, but errors of the reading then grow by 1 / (1 - d) a year.
        """
        d = float(self.problem.minimum_share[self.t, self.h])
        spread = m3 - cash if self.problem.conversions else np.zeros(m2.size)
        # m2 = nu2 - d (m3 - l) where g lies freely; m2 = (1 - d) nu2 + d l (1 - T') where it is the least.
        free = m2 + d * spread
        if d <= 0.0 or d >= 1.0:
            return free
        kept = (1.0 - self.rates()[1]) * cash
        bound = (m2 - d * kept) / (1.0 - d)
        binding = self.at_minimum & (bound > kept + spread)
        return np.where(binding, np.where(follow_minimum, bound, np.minimum(bound, free)), free)

    def cash_prices(self, raw: FloatArray, prices: YearPrices) -> FloatArray:
        """Prices of cash worth trying, (k, n): as read, marginal utility, and those that fit g.

        The withdrawal is what the prices ask for where nu2 / l lies on its step of the tax schedule.
        """
        need = self.problem.need[self.t, self.h]
        found = [np.minimum(raw, prices.cash_limit), prices.cash_limit, prices.free]
        found.append(self.problem.utility.marginal(self.year.spending / need))
        for rate in (*self.rates(), *self.hull_rates()):
            if self.problem.conversions:
                found.append((prices.free - prices.best[..., TAX_DEFERRED]) / np.maximum(rate, 1e-9))
            else:
                found.append(prices.best[..., TAX_DEFERRED] / np.maximum(1.0 - rate, 1e-9))
        return np.stack(found)

    def terms(self, prices: YearPrices) -> tuple[FloatArray, FloatArray]:
        """Gap by term (..., n, 5), and max_c [n f(c/n) - l c] + B (..., n)."""
        year, y = self.year, self.left
        cash, m2, m3 = prices.cash, prices.deferred, prices.free
        w2, w3, k = year.withdrawal[:, TAX_DEFERRED], year.withdrawal[:, TAX_FREE], year.conversion
        spend, got = self._best_spending(cash), self._felicity(year.spending) - cash * year.spending
        relaxed = self._relaxed_withdrawal(prices)
        plan = cash * (w2 - year.tax) + m3 * k + prices.held[..., TAX_DEFERRED] * y[:, TAX_DEFERRED]
        cash_held = (cash - prices.held[..., TAXABLE]) * y[:, TAXABLE]
        # Contributions are priced at the best portfolio and invested in the one that is held.
        paid_in = (prices.best - prices.held) * self.paid_in
        terms = [
            spend - got,
            cash_held + (prices.cash_limit - cash) * year.opening[:, TAXABLE],
            (m3 - prices.held[..., TAX_FREE]) * y[:, TAX_FREE] + paid_in[..., TAX_FREE],
            (m3 - cash) * w3,
            relaxed - (plan - m2 * year.opening[:, TAX_DEFERRED]) + paid_in[..., TAX_DEFERRED],
        ]
        return np.stack(np.broadcast_arrays(*terms), axis=-1), spend + relaxed

    def _felicity(self, c: FloatArray) -> FloatArray:
        need = self.problem.need[self.t, self.h]
        return np.asarray(need * self.problem.utility.value(c / need))

    def _best_spending(self, price: FloatArray) -> FloatArray:
        """Max over c in [-(one-off cost that cannot be met), ceiling n] of n f(c/n) - l c."""
        problem, utility = self.problem, self.problem.utility
        price = np.maximum(price, 1e-300)  # at no price at all spending would be infinite
        need = problem.need[self.t, self.h]
        kept = float(np.min(self.tax.x - self.tax.y))
        least = min(0.0, float(problem.income[self.t, self.h]) + min(kept, 0.0))
        c = np.where(price > utility.steepest, least, need * utility.inverse_marginal(price))
        c = np.minimum(c, problem.ceiling * need)
        return self._felicity(c) - price * c

    def _relaxed_withdrawal(self, prices: YearPrices) -> FloatArray:
        """B: the most that choosing g, w2 and X at these prices can be worth, over its vertices."""
        problem = self.problem
        cash, m2, m3 = (a[..., None] for a in (prices.cash, prices.deferred, prices.free))
        nu2 = prices.best[..., TAX_DEFERRED, None]
        d = float(problem.minimum_share[self.t, self.h])
        s = float(problem.accessible_share[self.t, self.h])
        most = self.most_deferred[:, None]
        ends = np.concatenate([d * most, s * most], axis=1)
        g = np.concatenate([np.broadcast_to(self.tax.x, (ends.shape[0], self.tax.x.size)), ends], axis=1)
        g = np.minimum(g, s * most)
        fixed = (m3 if problem.conversions else cash) * g - cash * self.tax(g) - nu2 * g
        per_balance = nu2 - m2 - (d * (m3 - cash) if problem.conversions else 0.0)
        smallest = g / s if s > 0 else np.zeros_like(g)
        largest = np.minimum(g / d, most) if d > 0 else np.broadcast_to(most, g.shape)
        # Within rounding of one another the smallest may exceed the largest.
        largest = np.maximum(largest, smallest)
        return np.asarray((fixed + np.maximum(per_balance * smallest, per_balance * largest)).max(axis=-1))


def _turns_down(x: FloatArray, y: FloatArray, a: int, b: int, c: int) -> bool:
    """Whether knot b lies on or above the chord from a to c."""
    return bool((y[b] - y[a]) * (x[c] - x[a]) >= (y[c] - y[a]) * (x[b] - x[a]))
