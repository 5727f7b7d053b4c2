"""The border between clients and arrays: a Problem by year and status; State, Decision, Policy.

Money is real (today's), a year's amount; arrays run over year t = 0 ... N-1 and status h. Axes
come in the order path, year, status, account. Accounts are in the order taxable, tax-deferred,
tax-free everywhere.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Protocol, TypeAlias

import numpy as np
from numpy.typing import NDArray

from planner.markets import LognormalReturns
from planner.piecewise import FloatArray, PiecewiseLinear
from planner.preferences import EstateUtility, SpendingUtility

IntArray: TypeAlias = NDArray[np.int64]

BOTH, FIRST, SECOND = "both", "first", "second"
TAXABLE, TAX_DEFERRED, TAX_FREE = 0, 1, 2


@dataclass(frozen=True, slots=True, eq=False)
class Problem:
    """A household's decision problem, complete and in arrays.

    Attributes
    ----------
    statuses : tuple of str
        Who is alive: ``("both", "first", "second")`` or ``("first",)``. Index ``len(statuses)``
        stands for nobody. Year 0 opens in status 0.
    transition : ndarray of shape (n_years, n_statuses, n_statuses)
        Chance of each living status at the end of year t; rows sum to 1 - death.
    death : ndarray of shape (n_years, n_statuses)
        Chance that nobody is left at the end of year t; 1 in the last year.
    income : ndarray of shape (n_years, n_statuses)
        Cash that arrives before tax, one-offs included (may be negative), less what is paid into
        tax-deferred and tax-free accounts.
    contribution : ndarray of shape (n_years, n_statuses, 3)
        Paid into each account; it arrives after the year's choices, before growth. The taxable
        column is 0: cash that is not spent stays there anyway.
    tax : tuple of tuples of PiecewiseLinear
        ``tax[t][h]`` as a function of g = withdrawal from tax-deferred + conversion.
    need : ndarray of shape (n_years, n_statuses)
        n, the need scale.
    minimum_share : ndarray of shape (n_years, n_statuses)
        d: the least share of the opening tax-deferred balance that must be withdrawn.
    accessible_share : ndarray of shape (n_years, n_statuses)
        Largest share of it that may leave (withdrawal + conversion); at least d.
    gross : ndarray of shape (n_portfolios, n_nodes)
        Gross real return of each portfolio at each return node.
    node_weights : ndarray of shape (n_nodes,)
        Their probabilities.
    drag : ndarray of shape (n_portfolios,)
        Taken off the gross return in the taxable account (tax on yield and gains).
    utility, estate : SpendingUtility, EstateUtility
    discount : float
        beta.
    opening : ndarray of shape (3,)
        Balances today; taxable is net of the tax on its embedded gain and of cash kept aside.
    has_account : tuple of 3 bool
        An absent account is always empty. Taxable always exists.
    conversions : bool
        May tax-deferred money be converted to tax-free?
    ceiling : float
        Most that is spent a year at need scale 1 (inf = no ceiling).
    heirs_tax_rate : float
        Share of a tax-deferred estate that heirs pay in tax.
    cash_aside : float
        Kept out of spending; joins the estate.
    portfolio_names : tuple of str
    returns : LognormalReturns or None
        The continuous law behind the nodes, for simulation; None where only nodes exist.
    inflation : float
        Expected inflation a year, for rules that are published in nominal terms.
    ages : ndarray of shape (n_people, n_years)
        Whole age of each person in year t, had they lived.
    """

    statuses: tuple[str, ...]
    transition: FloatArray
    death: FloatArray
    income: FloatArray
    contribution: FloatArray
    tax: tuple[tuple[PiecewiseLinear, ...], ...]
    need: FloatArray
    minimum_share: FloatArray
    accessible_share: FloatArray
    gross: FloatArray
    node_weights: FloatArray
    drag: FloatArray
    utility: SpendingUtility
    estate: EstateUtility
    discount: float
    opening: FloatArray
    has_account: tuple[bool, bool, bool]
    conversions: bool
    ceiling: float
    heirs_tax_rate: float
    cash_aside: float
    portfolio_names: tuple[str, ...]
    returns: LognormalReturns | None
    inflation: float
    ages: IntArray

    @property
    def n_years(self) -> int:
        """Number of years N."""
        return self.need.shape[0]

    @property
    def n_statuses(self) -> int:
        """Number of living statuses; also the index that stands for nobody."""
        return len(self.statuses)

    @property
    def n_portfolios(self) -> int:
        """Number of portfolios to choose from."""
        return self.gross.shape[0]

    @property
    def wealth(self) -> float:
        """W0 = x1 + x2 + x3."""
        return float(self.opening.sum())


def over_accounts(money: FloatArray) -> FloatArray:
    """Sum over the accounts, the last axis: (..., 3) -> (...); three times as fast as `sum`."""
    return np.asarray(money[..., TAXABLE] + money[..., TAX_DEFERRED] + money[..., TAX_FREE])


@dataclass(frozen=True, slots=True, eq=False)
class State:
    """The opening of a year on many paths.

    Attributes
    ----------
    balances : ndarray of shape (n_paths, 3)
    status : ndarray of int, shape (n_paths,)
        Index into the problem's statuses (living only).
    price_level : ndarray of shape (n_paths,)
        Prices now relative to today.
    last_inflation, last_return : ndarray of shape (n_paths,)
        Last year's inflation and nominal return on the portfolio held; 0 in year 0.
    memory : ndarray of shape (n_paths, n_memory)
        What the policy wrote last year; zeros in year 0.
    """

    balances: FloatArray
    status: IntArray
    price_level: FloatArray
    last_inflation: FloatArray
    last_return: FloatArray
    memory: FloatArray

    @property
    def wealth(self) -> FloatArray:
        """Sum of the balances, (n_paths,)."""
        return over_accounts(self.balances)


@dataclass(frozen=True, slots=True, eq=False)
class Decision:
    """What a policy chooses on many paths; `cashflow.advance` keeps it within what is possible.

    Attributes
    ----------
    withdraw : ndarray of shape (n_paths,)
        w2, gross withdrawal from tax-deferred.
    convert : ndarray of shape (n_paths,)
        k, moved from tax-deferred to tax-free.
    spending : ndarray of shape (n_paths,)
        c, after tax.
    portfolio : ndarray of int, shape (n_paths,)
        Held from this choice to the end of the year.
    memory : ndarray of shape (n_paths, n_memory)
    """

    withdraw: FloatArray
    convert: FloatArray
    spending: FloatArray
    portfolio: IntArray
    memory: FloatArray


class Policy(Protocol):
    """A way to decide; the optimum and every published rule have this interface."""

    @property
    def name(self) -> str:
        """Name for people."""
        ...

    @property
    def reference(self) -> str:
        """Where it was published."""
        ...

    @property
    def n_memory(self) -> int:
        """Number of memory columns it needs."""
        ...

    def decide(self, problem: Problem, t: int, state: State) -> Decision:
        """Choose for year t on every path, from this state alone (no look ahead)."""
        ...
