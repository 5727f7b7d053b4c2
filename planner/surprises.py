"""Stress tests: what becomes of the plan when an assumption is wrong or something unforeseen comes.

Assumptions (returns, prices) are known from the start, and the plan is made anew. Events (a fall,
an early death, care) are surprises: the plan made today is followed until the event, and a plan
that knows of it from then on.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import dataclass, fields, replace
from functools import partial
from typing import ClassVar, Literal

import numpy as np

from planner import outcomes
from planner.beside import shared
from planner.diagnostics import InputError
from planner.household import Household
from planner.optimum.policy import OptimalPolicy
from planner.optimum.recursion import solve
from planner.plan import PlanSettings, Progress, Solved, solve_household
from planner.plan_record import StrategyResult
from planner.problem import BOTH, FIRST, SECOND, Decision, IntArray, Policy, Problem, State
from planner.problem_building import build_problem
from planner.projection import strategy_result
from planner.simulation import Paths, Scenarios, draw_scenarios, simulate
from planner.stresses import faster_prices, lower_returns, state_pensions_cut

LONG_LIFE_AGE = 100
FIRST_DEATH_YEARS = 5
BAD_DECADE_SHARE = 0.10
FALL_IN_YEAR_ONE = 0.30
PENSION_CUT_AFTER = 10
"""Years until state pensions are cut, where no year is given."""

How = Literal["as given", "planned for", "surprise"]


@dataclass(frozen=True, slots=True, eq=False)
class Unforeseen(Policy):
    """One plan until a year, then another that knows what has come.

    Attributes
    ----------
    before, after : OptimalPolicy
    year : int
        First year t in which `after` decides.
    """

    before: OptimalPolicy
    after: OptimalPolicy
    year: int

    n_memory: ClassVar[int] = 0

    @property
    def name(self) -> str:
        """Name for people."""
        return "the plan, made anew when the surprise comes"

    @property
    def reference(self) -> str:
        """Where it was published."""
        return self.before.reference

    def decide(self, problem: Problem, t: int, state: State) -> Decision:
        """Decide as the plan of the day does."""
        return (self.before if t < self.year else self.after).decide(problem, t, state)


@dataclass(frozen=True, slots=True, eq=False)
class StressResult:
    """What a stress does to the plan.

    Attributes
    ----------
    name : str
    how : str
        ``planned for``: known from the start; ``surprise``: only when it comes.
    result : StrategyResult
        Of the plan under the stress. Its `wealth_cost` is the sum that would have to be lost today
        to be as bad, where `comparable`.
    comparable : bool
        False where other lives or chosen futures are looked at: those have no common measure.
    """

    name: str
    how: How
    result: StrategyResult
    comparable: bool


def stress_tests(
    household: Household,
    settings: PlanSettings,
    progress: Progress | None = None,
    pension_cut_year: int | None = None,
) -> tuple[Solved, tuple[StressResult, ...]]:
    """Run every stress that applies; the plan as given comes first.

    Parameters
    ----------
    pension_cut_year
        Calendar year from which state pensions are a fifth lower; None = `PENSION_CUT_AFTER`
        years after the plan date.

    Returns
    -------
    solved
        The household as given.
    results
        ``as given`` first, then one a stress, all on the same draws where lives are the same.
    """
    report = progress or (lambda share, what: None)
    report(0.0, "the plan as given")
    solved = solve_household(household, settings)
    as_planned = StressResult("as planned", "as given", _measured(solved, solved.policy, solved.paths), True)
    cut_year = household.plan_date.year + PENSION_CUT_AFTER if pension_cut_year is None else pension_cut_year
    stresses = [*_assumptions(household), *_events(solved, settings), *_later_changes(solved, cut_year)]

    def result(run: Run) -> StressResult | None:
        try:
            return run(solved, settings)
        except InputError:
            return None  # the stress makes a household that cannot be (a rate below its limits, say)

    with shared([partial(result, run) for _, run in stresses]) as work:
        found = work.results(lambda number: report((1 + number) / (1 + len(stresses)), stresses[number][0]))
    return solved, (as_planned, *(one for one in found if one is not None))


Run = Callable[[Solved, PlanSettings], StressResult]


def _assumptions(household: Household) -> Iterator[tuple[str, Run]]:
    def planned(name: str, change: Callable[[Household], Household]) -> tuple[str, Run]:
        def run(solved: Solved, settings: PlanSettings) -> StressResult:
            other = solve_household(change(household), settings)
            return StressResult(
                name, "planned for", _measured(solved, other.policy, other.paths, other), True
            )

        return name, run

    for points in (1, 2):
        name = f"returns {points} point{'s' * (points > 1)} lower"
        yield planned(name, partial(lower_returns, by=points / 100))
    for points in (1, 2):
        name = f"prices rise {points} point{'s' * (points > 1)} more"
        yield planned(name, partial(faster_prices, by=points / 100))


def _events(solved: Solved, settings: PlanSettings) -> Iterator[tuple[str, Run]]:
    household, problem = solved.household, solved.problem
    ages = problem.ages[:, 0]
    who = "both alive" if household.is_couple else "alive"

    def other_lives(name: str, years: int, then: int) -> tuple[str, Run]:
        def run(solved: Solved, settings: PlanSettings) -> StressResult:
            certain = _certainly(problem, years, then)
            drawn = draw_scenarios(certain, settings.n_paths, np.random.default_rng(settings.seed))
            paths = simulate(problem, solved.policy, drawn)
            return StressResult(name, "surprise", _measured(solved, solved.policy, paths), False)

        return name, run

    if int(ages.max()) < LONG_LIFE_AGE <= int(problem.ages[:, -1].min()):
        yield other_lives(f"{who} to {LONG_LIFE_AGE}", LONG_LIFE_AGE - int(ages.min()), 0)
    if household.is_couple and problem.n_years > FIRST_DEATH_YEARS + 1:
        for person, survivor in ((0, SECOND), (1, FIRST)):
            name = f"{household.people[person].name} dies in {FIRST_DEATH_YEARS} years"
            yield other_lives(name, FIRST_DEATH_YEARS, problem.statuses.index(survivor))

    def bad_decade(solved: Solved, settings: PlanSettings) -> StressResult:
        worst = worst_decade(solved)
        result = _measured(solved, solved.policy, subset(solved.paths, worst))
        return StressResult("a bad first decade (worst tenth)", "surprise", result, False)

    def fall(solved: Solved, settings: PlanSettings) -> StressResult:
        paths = simulate(problem, solved.policy, with_fall(problem, solved.scenarios, FALL_IN_YEAR_ONE))
        name = f"a fall of {FALL_IN_YEAR_ONE:.0%} in year one"
        return StressResult(name, "surprise", _measured(solved, solved.policy, paths), True)

    yield "a bad first decade", bad_decade
    yield "a fall in year one", fall


def _later_changes(solved: Solved, cut_year: int) -> Iterator[tuple[str, Run]]:
    household, problem = solved.household, solved.problem

    def surprise(name: str, changed: Problem, year: int) -> tuple[str, Run]:
        def run(solved: Solved, settings: PlanSettings) -> StressResult:
            policy = Unforeseen(solved.policy, solve(changed, settings.solver), year)
            paths = simulate(changed, policy, solved.scenarios)
            return StressResult(name, "surprise", _measured(solved, policy, paths, problem=changed), True)

        return name, run

    cut = state_pensions_cut(household, cut_year)
    if cut is not None:
        year = max(0, cut_year - household.plan_date.year)
        yield surprise(f"state pensions a fifth lower from {cut_year}", build_problem(cut), year)
    care = with_care(household, problem)
    if care is not None:
        yield surprise(f"care needed ({household.spending.care_for})", *care)


def _measured(
    solved: Solved,
    policy: Policy,
    paths: Paths,
    other: Solved | None = None,
    problem: Problem | None = None,
) -> StrategyResult:
    yardstick = solved.yardstick
    if paths.n_paths != yardstick.utilities.size:  # a part of the futures: costs are not compared
        yardstick = replace(yardstick, utilities=outcomes.path_utilities(problem or solved.problem, paths))
    measured_problem = problem or (solved if other is None else other).problem
    return strategy_result(measured_problem, policy, "plan", paths, None, yardstick)


def subset(paths: Paths, which: IntArray) -> Paths:
    """Some of the paths, by index."""
    return Paths(**{field.name: getattr(paths, field.name)[which] for field in fields(Paths)})


def worst_decade(solved: Solved, share: float = BAD_DECADE_SHARE) -> IntArray:
    """Indices of the worst `share` of futures by the compound return of the first ten years.

    On the portfolios that the plan holds; futures in which everybody dies sooner are left out.
    """
    problem, paths = solved.problem, solved.paths
    first = min(10, problem.n_years)
    lived = np.flatnonzero(paths.alive[:, first - 1])
    growth = np.ones(lived.size)
    for t in range(first):
        growth *= solved.scenarios.returns(problem, t, lived, paths.portfolio[lived, t].astype(np.int64))
    return lived[np.argsort(growth, kind="stable")[: max(1, round(share * lived.size))]]


def with_fall(problem: Problem, scenarios: Scenarios, fall: float) -> Scenarios:
    """The same futures, but every portfolio loses `fall` of its real value in the first year."""
    n_paths, n_years = scenarios.n_paths, scenarios.n_years
    gross = np.empty((n_paths, n_years, problem.n_portfolios))
    everyone = np.arange(n_paths)
    for t in range(n_years):
        for p in range(problem.n_portfolios):
            gross[:, t, p] = scenarios.returns(problem, t, everyone, np.full(n_paths, p))
    gross[:, 0] = 1.0 - fall
    return Scenarios(scenarios.status, gross=gross, inflation=scenarios.inflation)


def _certainly(problem: Problem, years: int, then: int) -> Problem:
    """Lives as today for `years` years for certain; at their end for certain in status `then`."""
    transition = problem.transition.copy()
    transition[:years, 0] = 0.0
    transition[: years - 1, 0, 0] = 1.0
    transition[years - 1, 0, then] = 1.0
    return replace(problem, transition=transition, death=1 - transition.sum(axis=2))


def with_care(household: Household, problem: Problem) -> tuple[Problem, int] | None:
    """The problem with the care cost of the sheet Spending, and its first year; None if blank.

    Paid while the person lives, in the years from `care_from_age` on; for ``last survivor`` by
    whoever is left alone at that age.
    """
    spending = household.spending
    if not (spending.care_cost > 0 and spending.care_from_age and spending.care_years and spending.care_for):
        return None
    income = problem.income.copy()
    first_year = problem.n_years
    for h, status in enumerate(problem.statuses):
        person = _who_needs_care(status, spending.care_for, household.is_couple)
        if person is None:
            continue
        since = problem.ages[person] - spending.care_from_age
        cared = np.flatnonzero((since >= 0) & (since < spending.care_years))
        income[cared, h] -= spending.care_cost
        first_year = min(first_year, int(cared[0]) if cared.size else first_year)
    if first_year == problem.n_years:
        return None
    return replace(problem, income=income), first_year


def _who_needs_care(status: str, care_for: str, couple: bool) -> int | None:
    """Index of the person who would need care in a status; None where nobody would."""
    alone = {FIRST: 0, SECOND: 1}.get(status)
    if care_for == "last survivor":
        return alone
    wanted = 1 if care_for == "second" and couple else 0
    return wanted if status == BOTH or alone == wanted else None
