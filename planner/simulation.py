"""Paths of any policy through drawn years: one scenario set, shared by every strategy.

Drawn years are an argument, so differences between strategies are not noise between draws.
"""

from __future__ import annotations

from dataclasses import dataclass, fields
from typing import Literal

import numpy as np
from numpy.typing import NDArray
from scipy.special import ndtri

from planner.cashflow import advance, estate_money
from planner.piecewise import FloatArray
from planner.problem import IntArray, Policy, Problem, State

SmallIntArray = NDArray[np.int16]
BoolArray = NDArray[np.bool_]


@dataclass(frozen=True, slots=True, eq=False)
class Scenarios:
    """Who lives and what markets do, on many paths; exactly one source of returns is given.

    Attributes
    ----------
    status : ndarray of small int, shape (n_paths, n_years + 1)
        Index into the problem's statuses at the opening of each year; ``n_statuses`` = nobody.
        Column 0 is 0; the last column is nobody everywhere.
    normal : ndarray of shape (n_paths, n_years) or None
        Standard normal draws Z for the problem's continuous law.
    node : ndarray of small int, shape (n_paths, n_years), or None
        Return node indices: the solver's own law, ``problem.gross``.
    gross : ndarray of shape (n_paths, n_years, n_portfolios) or None
        Gross real returns as given, for instance historical sequences.
    inflation : ndarray of shape (n_paths, n_years) or None
        Inflation during each year; None = as the problem expects. Real returns do not depend on
        it; rules published in nominal terms do.

    Raises
    ------
    ValueError
        Not exactly one source of returns, or shapes that do not fit one another.
    """

    status: SmallIntArray
    normal: FloatArray | None = None
    node: SmallIntArray | None = None
    gross: FloatArray | None = None
    inflation: FloatArray | None = None

    def __post_init__(self) -> None:
        sources = [s for s in (self.normal, self.node, self.gross) if s is not None]
        if len(sources) != 1:
            raise ValueError(f"exactly one source of returns is needed; {len(sources)} are given")
        shape = (self.n_paths, self.n_years)
        if sources[0].shape[:2] != shape:
            raise ValueError(f"status is for {shape} paths and years, returns for {sources[0].shape[:2]}")
        if self.inflation is not None and self.inflation.shape != shape:
            raise ValueError(f"status is for {shape} paths and years, inflation for {self.inflation.shape}")

    @property
    def n_paths(self) -> int:
        """Number of paths."""
        return self.status.shape[0]

    @property
    def n_years(self) -> int:
        """Number of years."""
        return self.status.shape[1] - 1

    def followed_by(self, other: Scenarios) -> Scenarios:
        """These paths, then those of `other`: same years, same source of returns, inflation as expected."""
        if self.normal is None or other.normal is None or self.inflation is not None:
            raise ValueError("only drawn paths of the continuous law can be put together")
        return Scenarios(
            np.concatenate([self.status, other.status]), normal=np.concatenate([self.normal, other.normal])
        )

    def returns(self, problem: Problem, t: int, path: IntArray | slice, portfolio: IntArray) -> FloatArray:
        """Gross real return of year t on the given paths for the portfolio each holds; (len(path),)."""
        if self.node is not None:
            return problem.gross[portfolio, self.node[path, t]]
        if self.gross is not None:
            year = self.gross[path, t]
            return year[np.arange(year.shape[0]), portfolio]
        assert self.normal is not None
        if problem.returns is None:
            raise ValueError("this problem has no continuous law of returns; draw with law='nodes'")
        return problem.returns.gross(self.normal[path, t], portfolio)


def uniform_draws(
    generator: np.random.Generator, n_paths: int, n_years: int, stratified: bool = True
) -> FloatArray:
    """Uniform draws on (0, 1), (n_paths, n_years), independent over the years of a path.

    Stratified (Latin hypercube; McKay, Beckman & Conover 1979, Technometrics 21(2) 239-245): in
    each year every one of n_paths equal intervals is hit once, in an order shuffled
    independently of other years. A path is distributed exactly as without it; only paths depend
    on one another, so the usual standard error, which ignores that, is on the safe side
    (variance at most n/(n-1) of independent draws; Owen 1997, SIAM J. Numer. Anal. 34(5)
    1884-1910; both references from memory).
    """
    # Years are rows while drawing: shuffling and writing then run along memory.
    draws = generator.random((n_years, n_paths))
    if stratified:
        strata = np.tile(np.arange(n_paths, dtype=np.float64), (n_years, 1))
        draws = (generator.permuted(strata, axis=1, out=strata) + draws) / n_paths
    # Never 0 or 1, where the normal quantile is infinite.
    return np.clip(draws, 1e-16, 1 - 1e-16).T


def draw_statuses(problem: Problem, uniform: FloatArray) -> SmallIntArray:
    """Statuses (n_paths, n_years + 1) from uniform draws (n_paths, n_years) by the inverse distribution.

    Within a year the living statuses come first, in the problem's order, then nobody.
    """
    n_paths, n_years = uniform.shape
    status = np.full((n_years + 1, n_paths), problem.n_statuses, dtype=np.int16)
    status[0] = 0
    for t in range(n_years):
        cumulative = np.cumsum(problem.transition[t], axis=1)
        for h in range(problem.n_statuses):
            here = np.flatnonzero(status[t] == h)
            if problem.death[t, h] >= 1:
                continue
            next_status = np.searchsorted(cumulative[h], uniform[here, t], side="right")
            # Where nobody can be left (death 0) the last sum may round to just below 1.
            if problem.death[t, h] <= 0:
                possible = int(np.flatnonzero(problem.transition[t, h] > 0)[-1])
                next_status = np.minimum(next_status, possible)
            status[t + 1, here] = next_status
    return status.T


def draw_scenarios(
    problem: Problem,
    n_paths: int,
    generator: np.random.Generator,
    law: Literal["continuous", "nodes"] = "continuous",
    stratified: bool = True,
) -> Scenarios:
    """Draw lives and returns; paths are sorted by length of life, the longest first.

    Sorting lives alone leaves the law of the paths as it is: returns are independent of lives, and
    exchangeable between paths. Who lives is then always the first so many paths.

    Parameters
    ----------
    law
        ``"continuous"``: Z for the lognormal law; ``"nodes"``: the solver's own node law.
    stratified
        See `uniform_draws`.
    """
    status = draw_statuses(problem, uniform_draws(generator, n_paths, problem.n_years, stratified))
    lengths = (status < problem.n_statuses).sum(axis=1)
    status = status.T[:, np.argsort(-lengths, kind="stable")].T
    uniform = uniform_draws(generator, n_paths, problem.n_years, stratified)
    if law == "continuous":
        return Scenarios(status, normal=np.asarray(ndtri(uniform)))
    cumulative = np.cumsum(problem.node_weights)
    node = np.searchsorted(cumulative / cumulative[-1], uniform, side="right").astype(np.int16)
    return Scenarios(status, node=np.minimum(node, cumulative.size - 1))


@dataclass(frozen=True, slots=True, eq=False)
class Paths:
    """What happened on every path: real money; zero in years that open with nobody alive.

    Attributes
    ----------
    alive : ndarray of bool, shape (n_paths, n_years)
        Someone is alive at the opening of the year, and so decides and spends in it.
    status : ndarray of small int, shape (n_paths, n_years)
    spending, income, tax, conversion, minimum : ndarray of shape (n_paths, n_years)
        `minimum` is the minimum distribution that was due.
    withdrawal : ndarray of shape (n_paths, n_years, 3)
        Gross, from each account.
    portfolio : ndarray of small int, shape (n_paths, n_years)
    balances : ndarray of shape (n_paths, n_years + 1, 3)
        At the opening of each year; after a death of the last person they are 0 (see `estate`).
    estate : ndarray of shape (n_paths,)
        Estate after heirs' tax, at the end of year `death_year`.
    death_year : ndarray of int, shape (n_paths,)
        The last year that opened with someone alive.
    """

    alive: NDArray[np.bool_]
    status: SmallIntArray
    spending: FloatArray
    income: FloatArray
    tax: FloatArray
    conversion: FloatArray
    minimum: FloatArray
    withdrawal: FloatArray
    portfolio: SmallIntArray
    balances: FloatArray
    estate: FloatArray
    death_year: IntArray

    @property
    def n_paths(self) -> int:
        """Number of paths."""
        return self.status.shape[0]

    @property
    def n_years(self) -> int:
        """Number of years."""
        return self.status.shape[1]

    def part(self, paths: slice) -> Paths:
        """Some of the paths, without copying."""
        return Paths(**{field.name: getattr(self, field.name)[paths] for field in fields(self)})


def simulate(problem: Problem, policy: Policy, scenarios: Scenarios) -> Paths:
    """Carry a policy through drawn years.

    Raises
    ------
    ValueError
        The scenarios cover another number of years, or leave someone alive after the last one.
    """
    n_paths, n_years = scenarios.n_paths, scenarios.n_years
    if n_years != problem.n_years:
        raise ValueError(f"scenarios cover {n_years} years, the problem {problem.n_years}")
    if (scenarios.status[:, -1] != problem.n_statuses).any():
        raise ValueError("scenarios leave someone alive after the last year")

    # Accounts, then years, are the outer axes in memory, because a year of an account is written at once.
    spending, income, tax, conversion, minimum = np.zeros((5, n_years, n_paths))
    withdrawal = np.zeros((3, n_years, n_paths))
    balances = np.zeros((3, n_years + 1, n_paths))
    portfolio = np.zeros((n_years, n_paths), dtype=np.int16)
    estate = np.zeros(n_paths)
    death_year = np.zeros(n_paths, dtype=np.int64)
    status = np.ascontiguousarray(scenarios.status.T)

    # Those with someone alive: the first so many where lives are sorted, which spares copies.
    lengths = (status < problem.n_statuses).sum(axis=0)
    is_sorted = bool((lengths[1:] <= lengths[:-1]).all())
    path: IntArray | slice = slice(0, n_paths) if is_sorted else np.arange(n_paths)
    balances[:, 0] = problem.opening[:, None]
    state = State(
        balances=np.tile(problem.opening, (n_paths, 1)),
        status=status[0].astype(np.int64),
        price_level=np.ones(n_paths),
        last_inflation=np.zeros(n_paths),
        last_return=np.zeros(n_paths),
        memory=np.zeros((n_paths, policy.n_memory)),
    )
    for t in range(n_years):
        if state.status.size == 0:
            break
        decision = policy.decide(problem, t, state)
        gross = scenarios.returns(problem, t, path, decision.portfolio)
        year = advance(problem, t, state, decision, gross)
        spending[t, path], portfolio[t, path] = year.spending, year.portfolio
        for kept, new in (
            (income, year.income),
            (tax, year.tax),
            (conversion, year.conversion),
            (minimum, year.minimum),
        ):
            _keep(kept, t, path, new)
        for account in range(3):
            _keep(withdrawal[account], t, path, year.withdrawal[:, account])

        next_status = status[t + 1, path]
        living = next_status < problem.n_statuses
        lives: BoolArray | slice = living
        dies: BoolArray | slice = ~living
        last: IntArray | slice
        if isinstance(path, slice):
            n_living = int(living.sum())
            path = lives = slice(0, n_living)
            last = dies = slice(n_living, living.size)
        else:
            path, last = path[living], path[~living]
        estate[last], death_year[last] = estate_money(problem, year.closing[dies]), t
        closing = year.closing[lives]
        for account in range(3):
            _keep(balances[account], t + 1, path, closing[:, account])
        next_status = next_status[lives]
        inflation = (
            np.full(next_status.size, problem.inflation)
            if scenarios.inflation is None
            else scenarios.inflation[path, t]
        )
        state = State(
            balances=closing,
            status=next_status.astype(np.int64),
            price_level=state.price_level[lives] * (1 + inflation),
            last_inflation=inflation,
            last_return=gross[lives] * (1 + inflation) - 1,
            memory=decision.memory[lives],
        )
    return Paths(
        alive=(status[:-1] < problem.n_statuses).T,
        status=status[:-1].T,
        spending=spending.T,
        income=income.T,
        tax=tax.T,
        conversion=conversion.T,
        minimum=minimum.T,
        withdrawal=withdrawal.transpose(2, 1, 0),
        portfolio=portfolio.T,
        balances=balances.transpose(2, 1, 0),
        estate=estate,
        death_year=death_year,
    )


def _keep(kept: FloatArray, t: int, path: IntArray | slice, new: FloatArray) -> None:
    """Write a year's numbers where there are any: what stays 0 is never touched, and takes no memory."""
    if new.any():
        kept[t, path] = new
