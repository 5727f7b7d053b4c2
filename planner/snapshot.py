"""The numbers asked for in every review meeting, from one solved household."""

from __future__ import annotations

from dataclasses import dataclass, replace
from math import ceil

import numpy as np

from planner import outcomes
from planner.household import Household
from planner.instructions import LIFELONG_KINDS, first_year, lifelong_income, this_year
from planner.optimum.policy import OptimalPolicy
from planner.plan import PlanSettings, Progress, Solved, first_choice, solve_household, yearly_costs
from planner.plan_record import Range, ThisYear
from planner.problem import Problem
from planner.problem_building import Builder
from planner.projection import chances_alive, decide_at
from planner.rules import AsAsked
from planner.simulation import Paths, Scenarios, simulate

ONE_OFF = 40_000.0
"""A sum spent now, in the household's currency."""

NEXT_WITHDRAWAL = 1_000.0
FAMILY_AGES = (85, 90, 95)


@dataclass(frozen=True, slots=True)
class Covered:
    """Share of essential spending that lifelong income pays after tax; `who` is alive."""

    who: str
    share: float


@dataclass(frozen=True, slots=True)
class Survivor:
    """Yearly income of a survivor, had the other died today; before and after the tax on it."""

    name: str
    income: float
    after_tax: float
    essential: float


@dataclass(frozen=True, slots=True)
class WantedSpending:
    """If exactly the wanted amount is spent each year.

    Attributes
    ----------
    wanted : float
        At today's need; it follows the age profile and a survivor's need.
    paid_for_life : float
        Share of futures in which it is paid to the last death.
    age_low, age_middle : int or None
        Age of the first person at which money runs short in a tenth and in half of the markets
        drawn, if everybody lived on; None = not within the plan.
    needed_return : float or None
        Certain nominal return after fees at which it lasts to `lasts_to`; None where none below
        50 % does.
    held_return : float
        Expected nominal return after fees of the portfolio held.
    lasts_to : int
        Age of the first person in the last year in which someone is alive with a chance of at least
        one in four.
    """

    wanted: float
    paid_for_life: float
    age_low: int | None
    age_middle: int | None
    needed_return: float | None
    held_return: float
    lasts_to: int


@dataclass(frozen=True, slots=True, eq=False)
class Snapshot:
    """One screen of numbers; money is today's.

    Attributes
    ----------
    covered : tuple of Covered
        As things are, then each survivor.
    wanted : WantedSpending or None
        None where no wanted spending is given.
    fall_before_cut : float
        Share of savings that can be lost today before the plan spends less than the bills this year;
        1 where income alone carries them.
    one_off_a_year : float
        What spending `ONE_OFF` now takes off the steady income the plan is worth.
    one_off_this_year : float
        What it takes off this year's spending.
    now : ThisYear
    tax_share : float
        Tax over income and what is taken from tax-deferred accounts, this year.
    next_rate : float
        Tax on the next `NEXT_WITHDRAWAL` taken from tax-deferred, a share.
    survivors : tuple of Survivor
    family : tuple of (age, Range)
        Left for the family, if the last death came at that age of the first person.
    costs : tuple of (name, money)
    """

    household: Household
    savings: float
    covered: tuple[Covered, ...]
    wanted: WantedSpending | None
    fall_before_cut: float
    one_off_a_year: float
    one_off_this_year: float
    now: ThisYear
    tax_share: float
    next_rate: float
    survivors: tuple[Survivor, ...]
    family: tuple[tuple[int, Range], ...]
    costs: tuple[tuple[str, float], ...]


def snapshot(household: Household, settings: PlanSettings, progress: Progress | None = None) -> Snapshot:
    """Solve the household once and read every number off it."""
    report = progress or (lambda share, what: None)
    solved = solve_household(household, settings, lambda s: report(0.8 * s, "finding the best plan"))
    problem, policy, paths = solved.problem, solved.policy, solved.paths
    facts, choice = first_year(household), first_choice(solved)
    now = this_year(household, problem, facts, choice)
    report(0.85, "spending the wanted amount")
    taken = now.withdraw_tax_deferred + now.convert
    tax = problem.tax[0][0]
    taxed = now.income + now.withdraw_tax_deferred
    a_year, at_once = one_off_cost(problem, policy, ONE_OFF)
    return Snapshot(
        household=household,
        savings=sum(account.balance for account in household.accounts),
        covered=_covered(household, problem),
        wanted=None if household.spending.wanted is None else wanted_spending(solved),
        fall_before_cut=fall_before_cut(problem, policy),
        one_off_a_year=a_year,
        one_off_this_year=at_once,
        now=now,
        tax_share=now.tax / taxed if taxed > 0 else 0.0,
        next_rate=float(tax(taken + NEXT_WITHDRAWAL) - tax(taken)) / NEXT_WITHDRAWAL,
        survivors=_survivors(household, problem),
        family=tuple(_left_at(problem, paths, age) for age in FAMILY_AGES if age > problem.ages[0, 0]),
        costs=yearly_costs(household, choice.portfolio),
    )


def _covered(household: Household, problem: Problem) -> tuple[Covered, ...]:
    names = [person.name for person in household.people]
    who = {"both": "now, both", "first": f"{names[0]} alone", "second": f"{names[-1]} alone"}
    rows = []
    for t in sorted({0, _all_started(household, problem)}):
        for h, status in enumerate(problem.statuses):
            essential = problem.utility.essential * float(problem.need[t, h])
            label = who[status] if household.is_couple else "now"
            if t:
                since = f"from {household.plan_date.year + t}"
                label = label.replace("now", since) if "now" in label else f"{label}, {since}"
            rows.append(Covered(label, lifelong_income(household, t, status) / essential))
    return tuple(rows)


def _all_started(household: Household, problem: Problem) -> int:
    """First year t in which every income for life has been paid for the whole year."""
    ages = dict(zip((person.name for person in household.people), problem.ages[:, 0], strict=True))
    waits = [
        ceil(income.from_age) - int(ages[income.owner])
        for income in household.incomes
        if income.kind in LIFELONG_KINDS and income.to_age is None
    ]
    return min(max([0, *waits]), problem.n_years - 1)


def _survivors(household: Household, problem: Problem) -> tuple[Survivor, ...]:
    rows = []
    builder = Builder.of(household)
    for h, person in zip((1, 2), household.people, strict=True) if household.is_couple else ():
        paid = builder.incomes(0, problem.statuses[h])
        income = sum(amount for amounts in paid.values() for _, amount in amounts)
        essential = problem.utility.essential * float(problem.need[0, h])
        rows.append(Survivor(person.name, income, income - float(problem.tax[0][h](0.0)), essential))
    return tuple(rows)


# What the wanted amount needs ------------------------------------------------------------------------


def wanted_spending(solved: Solved) -> WantedSpending:
    """Spend exactly the wanted amount on the portfolio that the plan holds this year."""
    household, problem = solved.household, solved.problem
    wanted = household.spending.wanted
    assert wanted is not None
    portfolio = int(solved.paths.portfolio[0, 0])
    asked = AsAsked(portfolio, wanted)
    paths = simulate(problem, asked, solved.scenarios)
    target = outcomes.need_on_paths(problem, paths) * min(wanted, problem.ceiling)
    short = outcomes.amount_short(paths.spending, target, paths.alive) > 0
    everybody = _living_on(problem, solved.scenarios)
    lives = simulate(problem, asked, everybody)
    first = _first_short(problem, lives, wanted)
    late = int(np.flatnonzero(chances_alive(problem).sum(axis=1) >= 0.25)[-1])

    def age(share: float) -> int | None:
        t = int(np.quantile(first, share, method="lower"))
        return int(problem.ages[0, t]) if t < problem.n_years else None

    assert problem.returns is not None
    law = problem.returns
    mean = float(np.exp(law.log_mean[portfolio] + law.log_deviation[portfolio] ** 2 / 2))
    return WantedSpending(
        wanted=wanted,
        paid_for_life=float(1 - short.any(axis=1).mean()),
        age_low=age(0.1),
        age_middle=age(0.5),
        needed_return=needed_return(problem, asked, late),
        held_return=mean * (1 + problem.inflation) - 1,
        lasts_to=int(problem.ages[0, late]),
    )


def _living_on(problem: Problem, scenarios: Scenarios) -> Scenarios:
    """The same markets with everybody alive to the last year."""
    status = np.zeros_like(scenarios.status)
    status[:, -1] = problem.n_statuses
    return replace(scenarios, status=status)


def _first_short(problem: Problem, paths: Paths, wanted: float) -> np.ndarray:
    """First year in which less than the wanted amount is spent, n_years where there is none."""
    target = outcomes.need_on_paths(problem, paths) * min(wanted, problem.ceiling)
    short = outcomes.amount_short(paths.spending, target, paths.alive) > 0
    return np.where(short.any(axis=1), short.argmax(axis=1), problem.n_years)


def needed_return(problem: Problem, asked: AsAsked, last_year: int) -> float | None:
    """Least certain nominal return a year after fees that pays the wanted amount through a year.

    Everybody lives to that year. Bisection between -20 % and 50 % to a hundredth of a point; None
    where even the highest does not pay it (it is needed before savings can earn it).
    """
    low, high = -0.20, 0.50

    def lasts(rates: np.ndarray) -> np.ndarray:
        real = (1 + rates) / (1 + problem.inflation)
        status = np.zeros((rates.size, problem.n_years + 1), dtype=np.int16)
        status[:, last_year + 1 :] = problem.n_statuses
        gross = np.broadcast_to(real[:, None, None], (rates.size, problem.n_years, problem.n_portfolios))
        paths = simulate(problem, asked, Scenarios(status, gross=gross))
        return _first_short(problem, paths, asked.wanted) == problem.n_years

    for _ in range(3):  # each pass narrows the interval fifty times
        rates = np.linspace(low, high, 51)
        enough = np.flatnonzero(lasts(rates))
        if not enough.size:
            return None
        if enough[0] == 0:
            return low
        low, high = float(rates[enough[0] - 1]), float(rates[enough[0]])
    return high


# What the plan bears ---------------------------------------------------------------------------------


def fall_before_cut(problem: Problem, policy: OptimalPolicy) -> float:
    """Largest share of savings that can be lost today with the plan still spending the bills this year.

    Over the shares 0, 1/1000, ... 1; 0 where the plan spends less than the bills as it is.
    """
    falls = np.arange(1001) / 1000
    balances = (1 - falls)[:, None] * problem.opening
    spending, _, _ = decide_at(problem, policy, 0, balances, 0)
    below = spending < problem.utility.essential * problem.need[0, 0] - outcomes.HALF_CENT
    return float(falls[max(int(below.argmax()) - 1, 0)]) if below.any() else 1.0


def one_off_cost(problem: Problem, policy: OptimalPolicy, amount: float) -> tuple[float, float]:
    """What a sum paid this year takes off the steady income the plan is worth, and off this year's spending.

    Later years' choices are the policy's own: only this year's income is lower.
    """
    income = problem.income.copy()
    income[0] -= amount
    poorer = replace(problem, income=income)
    first = tuple(replace(s, income=s.income - amount) for s in policy.situations[0])
    other = replace(policy, situations=(first, *policy.situations[1:]))
    steady = policy.level_spending(problem.opening) - other.level_spending(problem.opening)
    spent = [
        float(decide_at(p, q, 0, p.opening[None, :], 0)[0][0])
        for p, q in ((problem, policy), (poorer, other))
    ]
    return steady, spent[0] - spent[1]


def _left_at(problem: Problem, paths: Paths, age: int) -> tuple[int, Range]:
    """Savings after heirs' tax at an age of the first person, over futures in which someone is alive."""
    t = min(age - int(problem.ages[0, 0]), problem.n_years - 1)
    balances = paths.balances[paths.alive[:, t], t]
    keep = np.array([1.0, 1.0 - problem.heirs_tax_rate, 1.0])
    left = balances @ keep + problem.cash_aside
    if not left.size:
        return age, Range(problem.cash_aside, problem.cash_aside, problem.cash_aside)
    return age, Range(*(float(v) for v in np.percentile(left, (10, 50, 90))))
