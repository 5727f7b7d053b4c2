"""Published spending rules and "as asked", with the same interface as the optimal policy.

A rule's amount is a gross withdrawal from B = x1 + x2 + x3; after tax it is spent together with
the year's income. A minimum distribution above the amount goes to taxable. The published
formulas are nominal and the model is real: a rule multiplies by the price level where that
matters and divides its amount by it. Rules hold one portfolio throughout, and a death changes
no amount. Defaults are the parameters under which the published formulas are tested.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace
from typing import ClassVar, Protocol

import numpy as np

from planner.cashflow import withdraw_for_spending, withdraw_gross
from planner.piecewise import FloatArray
from planner.problem import FIRST, SECOND, Decision, IntArray, Policy, Problem, State

LAST_AGE = 100
"""Conservative last age of the youngest person alive (our choice), where a rule needs one."""

# fmt: off
UNIFORM_LIFETIME_DIVISORS: tuple[tuple[int, float], ...] = tuple(
    enumerate(
        (
            27.4, 26.5, 25.5, 24.6, 23.7, 22.9, 22.0, 21.1,
            20.2, 19.4, 18.5, 17.7, 16.8, 16.0, 15.2, 14.4, 13.7, 12.9,
            12.2, 11.5, 10.8, 10.1, 9.5, 8.9, 8.4, 7.8, 7.3, 6.8,
            6.4, 6.0, 5.6, 5.2, 4.9, 4.6, 4.3, 4.1, 3.9, 3.7,
            3.5, 3.4, 3.3, 3.1, 3.0, 2.9, 2.8, 2.7, 2.5, 2.3, 2.0,
        ),
        start=72,
    )
)
# fmt: on
"""(age, divisor) of the Uniform Lifetime Table, 72 to 120.

Internal Revenue Service, Treas. Reg. 1.401(a)(9)-9(c), T.D. 9930, 85 Federal Register 72472,
12 November 2020.
"""


class Rule(Policy, Protocol):
    """A policy with a key for the command line and the results file."""

    @property
    def key(self) -> str:
        """Kebab-case of the field's name."""
        ...

    @property
    def portfolio(self) -> int:
        """Index of the portfolio held throughout."""
        ...


@dataclass(frozen=True, slots=True)
class ConstantReal:
    """w_0 = x B_0, then with prices: the same real amount every year."""

    portfolio: int
    rate: float = 0.04

    key: ClassVar[str] = "constant-real"
    name: ClassVar[str] = "same amount plus prices"
    reference: ClassVar[str] = (
        "Bengen, W. P. (1994), Determining Withdrawal Rates Using Historical Data, "
        "Journal of Financial Planning 7(4) 171-180"
    )
    n_memory: ClassVar[int] = 1

    def decide(self, problem: Problem, t: int, state: State) -> Decision:
        """Memory: the real amount fixed in year 0."""
        amount = self.rate * state.wealth if t == 0 else state.memory[:, 0]
        return _withdrawing(problem, t, state, amount, self.portfolio, amount[:, None])


@dataclass(frozen=True, slots=True)
class ConstantPercentage:
    """w_t = x B_t."""

    portfolio: int
    rate: float = 0.04

    key: ClassVar[str] = "constant-percentage"
    name: ClassVar[str] = "same share each year"
    reference: ClassVar[str] = (
        "Fixed-percentage rule, as compared in Bengen, W. P. (2001), Conserving Client Portfolios "
        "During Retirement, Part IV, Journal of Financial Planning"
    )
    n_memory: ClassVar[int] = 0

    def decide(self, problem: Problem, t: int, state: State) -> Decision:
        """Needs no memory."""
        return _withdrawing(problem, t, state, self.rate * state.wealth, self.portfolio, state.memory)


@dataclass(frozen=True, slots=True)
class FloorAndCeiling:
    """w_t = clip(x B_t, (1 - d) x B_0 CPI_t, (1 + u) x B_0 CPI_t); u, d as remembered."""

    portfolio: int
    rate: float = 0.05
    down: float = 0.15
    up: float = 0.20

    key: ClassVar[str] = "floor-and-ceiling"
    name: ClassVar[str] = "share with limits"
    reference: ClassVar[str] = (
        "Bengen, W. P. (2001), Conserving Client Portfolios During Retirement, Part IV, "
        "Journal of Financial Planning"
    )
    n_memory: ClassVar[int] = 1

    def decide(self, problem: Problem, t: int, state: State) -> Decision:
        """Memory: x B_0, real; in real terms both limits are constant."""
        first = self.rate * state.wealth if t == 0 else state.memory[:, 0]
        amount = np.clip(self.rate * state.wealth, (1 - self.down) * first, (1 + self.up) * first)
        return _withdrawing(problem, t, state, amount, self.portfolio, first[:, None])


@dataclass(frozen=True, slots=True)
class DecisionRules:
    """Cuts and raises on last year's nominal amount, in the published order (partly as remembered).

    w_0 = x B_0. Each later year: (1) a raise with prices, at most `largest_raise`, unless last
    year's nominal return was below 0 and last amount / B_t > x (a missed raise is not made up);
    (2) amount / B_t > (1 + band) x and more than `no_cut_years` remain of `years`: times 1 - step;
    (3) amount / B_t < (1 - band) x: times 1 + step.
    """

    portfolio: int
    rate: float = 0.055
    years: int = 40
    band: float = 0.20
    step: float = 0.10
    largest_raise: float = 0.06
    no_cut_years: int = 15

    key: ClassVar[str] = "decision-rules"
    name: ClassVar[str] = "cut-and-raise steps"
    reference: ClassVar[str] = (
        "Guyton, J. T. & Klinger, W. J. (2006), Decision Rules and Maximum Initial Withdrawal Rates, "
        "Journal of Financial Planning 19(3) 48-58"
    )
    n_memory: ClassVar[int] = 1

    def decide(self, problem: Problem, t: int, state: State) -> Decision:
        """Memory: the nominal amount of last year, whether or not the money was there."""
        balance = state.wealth * state.price_level
        if t == 0:
            amount = self.rate * balance
        else:
            # Shares of the balance are compared as amounts, so an empty account divides nothing.
            last = state.memory[:, 0]
            no_raise = (state.last_return < 0) & (last > self.rate * balance)
            amount = last * np.where(no_raise, 1.0, 1 + np.minimum(state.last_inflation, self.largest_raise))
            too_much = amount > (1 + self.band) * self.rate * balance
            too_little = amount < (1 - self.band) * self.rate * balance
            if self.years - t > self.no_cut_years:
                amount = np.where(too_much, (1 - self.step) * amount, amount)
            amount = np.where(too_little, (1 + self.step) * amount, amount)
        return _withdrawing(problem, t, state, amount / state.price_level, self.portfolio, amount[:, None])


@dataclass(frozen=True, slots=True)
class VirtualAnnuity:
    """w_t = B_t / sum_{j < n_t} (1 + r)^-j, recalculated every year; r is a real rate.

    n_t is the years to `last_age` of the youngest person alive. The published rule says nothing
    of those who outlive that age; here n_t is at least `least_years`, so some money always stays.
    """

    portfolio: int
    real_rate: float = 0.015
    last_age: int = LAST_AGE
    least_years: int = 5

    key: ClassVar[str] = "virtual-annuity"
    name: ClassVar[str] = "spread over the remaining years"
    reference: ClassVar[str] = (
        "Waring, M. B. & Siegel, L. B. (2015), The Only Spending Rule Article You Will Ever Need, "
        "Financial Analysts Journal 71(1) 91-107"
    )
    n_memory: ClassVar[int] = 0

    def decide(self, problem: Problem, t: int, state: State) -> Decision:
        """Needs no memory."""
        years = np.maximum(self.last_age - youngest_age(problem, t, state.status), self.least_years)
        discounts = (1 + self.real_rate) ** -np.arange(int(years.max()))
        amount = state.wealth / np.cumsum(discounts)[years - 1]
        return _withdrawing(problem, t, state, amount, self.portfolio, state.memory)


@dataclass(frozen=True, slots=True)
class Divisor:
    """w_t = B_t / divisor(age) of the first person in the household's order who is alive.

    Our extension of the table: before its first age a year is added to the divisor for every
    year to go; beyond its last age the last divisor stays.
    """

    portfolio: int
    divisors: tuple[tuple[int, float], ...] = UNIFORM_LIFETIME_DIVISORS

    key: ClassVar[str] = "divisor"
    name: ClassVar[str] = "divide by the table"
    reference: ClassVar[str] = (
        "Internal Revenue Service, Uniform Lifetime Table, Treas. Reg. 1.401(a)(9)-9(c), T.D. 9930 (2020)"
    )
    n_memory: ClassVar[int] = 0

    def decide(self, problem: Problem, t: int, state: State) -> Decision:
        """Needs no memory."""
        ages, divisors = np.array(self.divisors).T
        age = first_living_age(problem, t, state.status)
        divisor = np.interp(age, ages, divisors) + np.maximum(ages[0] - age, 0)
        return _withdrawing(problem, t, state, state.wealth / divisor, self.portfolio, state.memory)


@dataclass(frozen=True, slots=True)
class Smoothing:
    """S_t = lam S_{t-1} (1 + i) + (1 - lam) x B_t, as endowments do; S_0 = x B_0.

    Defaults are those remembered of a university endowment (lam 0.8; x 5 %), from memory.
    """

    portfolio: int
    rate: float = 0.05
    weight: float = 0.8

    key: ClassVar[str] = "smoothing"
    name: ClassVar[str] = "smoothing as endowments do"
    reference: ClassVar[str] = (
        "Swensen, D. F. (2009), Pioneering Portfolio Management, Free Press, on spending policy; after "
        "Tobin, J. (1974), What Is Permanent Endowment Income?, American Economic Review 64(2) 427-432 "
        "(both from memory)"
    )
    n_memory: ClassVar[int] = 1

    def decide(self, problem: Problem, t: int, state: State) -> Decision:
        """Memory: last year's amount, real (prices carry it on)."""
        target = self.rate * state.wealth
        amount = target if t == 0 else self.weight * state.memory[:, 0] + (1 - self.weight) * target
        return _withdrawing(problem, t, state, amount, self.portfolio, amount[:, None])


@dataclass(frozen=True, slots=True)
class Falling:
    """w_0 = x B_0, then with prices less a real fall d every year: w_t = x B_0 (1 - d)^t CPI_t.

    The published finding is that real spending falls by about d = 1 % a year with age; carrying it
    into a withdrawal rule, and the first rate, are ours.
    """

    portfolio: int
    rate: float = 0.045
    fall: float = 0.01

    key: ClassVar[str] = "falling"
    name: ClassVar[str] = "spending falls with age"
    reference: ClassVar[str] = (
        "Blanchett, D. (2014), Exploring the Retirement Consumption Puzzle, Journal of Financial Planning "
        "27(5) 34-42"
    )
    n_memory: ClassVar[int] = 1

    def decide(self, problem: Problem, t: int, state: State) -> Decision:
        """Memory: last year's real amount."""
        amount = self.rate * state.wealth if t == 0 else (1 - self.fall) * state.memory[:, 0]
        return _withdrawing(problem, t, state, amount, self.portfolio, amount[:, None])


@dataclass(frozen=True, slots=True)
class SecureFirst:
    """Lifelong income and a reserve carry the bills; a percentage of what is above is spent too.

    With the gap g_t = max(0, n_t E - income_t) between essential spending and income, the reserve
    is R_t = sum_j g_{t+j} (1 + r)^-j to the last age of the youngest person alive, and the amount
    w_t = min(B_t, g_t + x max(0, B_t - R_t)). Tax is left out of the reserve. The split into a
    protected and a free part is as published; reserve and percentage in this form are ours.
    """

    portfolio: int
    rate: float = 0.04
    real_rate: float = 0.01
    last_age: int = LAST_AGE

    key: ClassVar[str] = "secure-first"
    name: ClassVar[str] = "bills first, then a share"
    reference: ClassVar[str] = (
        "Dybvig, P. H. (1999), Using Asset Allocation to Protect Spending, Financial Analysts Journal "
        "55(1) 49-62 (from memory)"
    )
    n_memory: ClassVar[int] = 0

    def decide(self, problem: Problem, t: int, state: State) -> Decision:
        """Needs no memory."""
        gap = np.maximum(0.0, problem.need[t:] * problem.utility.essential - problem.income[t:])
        ages = np.array([problem.ages[list(people), t:].min(axis=0) for people in living_people(problem)]).T
        discount = (1 + self.real_rate) ** -np.arange(gap.shape[0])
        reserve = (discount[:, None] * gap * (ages < self.last_age)).sum(axis=0)[state.status]
        balance = state.wealth
        amount = gap[0][state.status] + self.rate * np.maximum(0.0, balance - reserve)
        return _withdrawing(problem, t, state, np.minimum(balance, amount), self.portfolio, state.memory)


@dataclass(frozen=True, slots=True)
class AsAsked:
    """Spend the wanted amount, times the need scale, after tax, until money is gone."""

    portfolio: int
    wanted: float

    key: ClassVar[str] = "as-asked"
    name: ClassVar[str] = "as asked"
    reference: ClassVar[str] = "The client's own request: wanted spending a year (client workbook)"
    n_memory: ClassVar[int] = 0

    def decide(self, problem: Problem, t: int, state: State) -> Decision:
        """Needs no memory."""
        target = self.wanted * problem.need[t][state.status]
        withdraw, spending = withdraw_for_spending(problem, t, state, target)
        return _decision(withdraw, spending, self.portfolio, state.memory)


PublishedRule = (
    ConstantReal
    | ConstantPercentage
    | FloorAndCeiling
    | DecisionRules
    | VirtualAnnuity
    | Divisor
    | Smoothing
    | Falling
    | SecureFirst
    | AsAsked
)

RULES: tuple[type[PublishedRule], ...] = (
    ConstantReal,
    ConstantPercentage,
    FloorAndCeiling,
    DecisionRules,
    VirtualAnnuity,
    Divisor,
    Smoothing,
    Falling,
    SecureFirst,
    AsAsked,
)
"""Every rule, in the order of comparison tables; each has `key`, `name` and `reference`."""


def rules_for(
    problem: Problem,
    portfolio: int,
    wanted: float | None = None,
    last_age: int = LAST_AGE,
    settings: Mapping[str, Mapping[str, float]] | None = None,
) -> tuple[Rule, ...]:
    """Return the rules in the order of `RULES`; "as asked" only where `wanted` is given.

    Parameters
    ----------
    portfolio
        Index of the portfolio they hold.
    wanted
        Spending a year at need scale 1, after tax.
    last_age
        Of the youngest person; sets the horizon of the rules that have one.
    settings
        Parameters by rule key and attribute (see `rule_terms.RULE_TERMS`); others as published.
    """
    years = max(1, last_age - int(problem.ages[:, 0].min()))
    rules: list[Rule] = [
        ConstantReal(portfolio),
        ConstantPercentage(portfolio),
        FloorAndCeiling(portfolio),
        DecisionRules(portfolio, years=years),
        VirtualAnnuity(portfolio, last_age=last_age),
        Divisor(portfolio),
        Smoothing(portfolio),
        Falling(portfolio),
        SecureFirst(portfolio, last_age=last_age),
    ]
    if wanted is not None:
        rules.append(AsAsked(portfolio, wanted))
    return tuple(_with_parameters(rule, (settings or {}).get(rule.key, {})) for rule in rules)


def _with_parameters(rule: Rule, values: Mapping[str, float]) -> Rule:
    """The rule with some parameters replaced; whole numbers stay whole."""
    if not values:
        return rule
    typed = {name: int(v) if isinstance(getattr(rule, name), int) else v for name, v in values.items()}
    return replace(rule, **typed)  # type: ignore[type-var]


def living_people(problem: Problem) -> tuple[tuple[int, ...], ...]:
    """For each status, the indices of the people alive, in the household's order."""
    alone = {FIRST: (0,), SECOND: (1,)}
    return tuple(alone.get(status, (0, 1)) for status in problem.statuses)


def youngest_age(problem: Problem, t: int, status: IntArray) -> IntArray:
    """Whole age of the youngest person alive in year t; (n_paths,)."""
    by_status = [problem.ages[list(people), t].min() for people in living_people(problem)]
    return np.array(by_status, dtype=np.int64)[status]


def first_living_age(problem: Problem, t: int, status: IntArray) -> IntArray:
    """Whole age in year t of the first person in the household's order who is alive; (n_paths,)."""
    by_status = [problem.ages[people[0], t] for people in living_people(problem)]
    return np.array(by_status, dtype=np.int64)[status]


def _withdrawing(
    problem: Problem, t: int, state: State, amount: FloatArray, portfolio: int, memory: FloatArray
) -> Decision:
    """Carry out a gross withdrawal of real amounts (n_paths,)."""
    withdraw, spending = withdraw_gross(problem, t, state, amount)
    return _decision(withdraw, spending, portfolio, memory)


def _decision(withdraw: FloatArray, spending: FloatArray, portfolio: int, memory: FloatArray) -> Decision:
    return Decision(
        withdraw=withdraw,
        convert=np.zeros_like(withdraw),
        spending=spending,
        portfolio=np.full(withdraw.shape, portfolio, dtype=np.int64),
        memory=memory,
    )
