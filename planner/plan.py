"""From a client workbook to a Plan: the only place where solver, rules and simulator meet.

Every strategy meets the same drawn futures. A fixed seed gives the same plan every time; nothing
depends on the clock.
"""

from __future__ import annotations

import difflib
from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace
from functools import partial

import numpy as np

from planner import __version__, outcomes
from planner.banded import KeepWithinBand
from planner.beside import shared
from planner.diagnostics import Diagnostic, InputError
from planner.household import Household
from planner.instructions import Choice, FirstYear, first_year, lifelong_income, this_year
from planner.mortality import life_expectancy
from planner.optimum.policy import OptimalPolicy
from planner.optimum.recursion import SolverSettings, solve
from planner.plan_record import Plan, Sources, StrategyResult, SurvivorView, WhatIfResult
from planner.problem import Policy, Problem, over_accounts
from planner.problem_building import Builder, build_problem, life_table_of, tax_rules_of
from planner.projection import (
    NO_CHANGE_TOLERANCE,
    Yardstick,
    chances_alive,
    decide_at,
    example_futures,
    late_scenarios,
    lookup,
    next_opening,
    no_change_band,
    schedule,
    simulate_with_late,
    strategy_result,
)
from planner.proof import proof
from planner.rule_terms import RuleSettings
from planner.rules import RULES, Rule, rules_for
from planner.scenarios import plan_what_ifs
from planner.simulation import Paths, Scenarios, draw_scenarios
from planner.stresses import stresses
from planner.taxes import TaxRules
from planner.workbook.reading import ReadWorkbook

Progress = Callable[[float, str], None]
"""Called with the share of the work done, between 0 and 1, and what is being done."""

PLAN_KEY = "plan"
"""Key of the optimum among strategies."""


COARSE_GRID = 0.65
"""Of the default grids: half the time; on the samples value within 0.1 % and this year's spending
within 0.2 % of the default's."""


@dataclass(frozen=True, slots=True)
class PlanSettings:
    """How a plan is computed.

    Attributes
    ----------
    n_paths : int
        Drawn futures that every strategy meets.
    n_what_if_paths : int
        Drawn futures for each what-if.
    n_proof_paths : int
        Paths on which the upper bound is estimated.
    seed : int
    grid, what_if_grid : float
        Nodes along each axis, as a multiple of the default grids' for the problem. What-ifs differ from
        the plan by what coarser grids say of both (see `_what_if_jobs`).
    solver, what_if_solver : SolverSettings or None
        Grids to use instead.
    rules : tuple of str or None
        Keys of the rules to compare with; None = all.
    late_years : bool
        Also simulate the years that few lives reach (see `projection.late_scenarios`); without, their
        percentiles may be missing (NaN).
    rule_parameters : tuple of (key, ((parameter, value), ...))
        Set for this run, over those of the workbook.
    what_ifs : bool
        Also solve the what-ifs, each a changed household.
    """

    n_paths: int = 20_000
    n_what_if_paths: int = 2_000
    n_proof_paths: int = 600
    seed: int = 20260101
    solver: SolverSettings | None = None
    what_if_solver: SolverSettings | None = None
    grid: float = 1.0
    what_if_grid: float = COARSE_GRID
    rules: tuple[str, ...] | None = None
    what_ifs: bool = True
    late_years: bool = True
    rule_parameters: RuleSettings = ()


@dataclass(frozen=True, slots=True, eq=False)
class Solved:
    """A household's problem, its optimum, the drawn futures and what the optimum did in them.

    `late` are further futures for the years that few lives reach, None where none are needed.
    """

    household: Household
    problem: Problem
    policy: OptimalPolicy
    scenarios: Scenarios
    paths: Paths
    late: Scenarios | None
    late_paths: Paths | None
    yardstick: Yardstick


def solve_household(
    household: Household, settings: PlanSettings, progress: Callable[[float], None] | None = None
) -> Solved:
    """Solve a household's problem and simulate the optimum."""
    problem, policy = _solve(household, settings, progress)
    return _with_paths(household, problem, policy, settings)


def _solve(
    household: Household, settings: PlanSettings, progress: Callable[[float], None] | None
) -> tuple[Problem, OptimalPolicy]:
    problem = build_problem(household)
    solver = settings.solver or SolverSettings.for_problem(problem).scaled(settings.grid)
    return problem, solve(problem, solver, progress)


def _with_paths(
    household: Household, problem: Problem, policy: OptimalPolicy, settings: PlanSettings
) -> Solved:
    scenarios = draw_scenarios(problem, settings.n_paths, np.random.default_rng(settings.seed))
    late = late_scenarios(problem, scenarios, settings.seed) if settings.late_years else None
    paths, late_paths = simulate_with_late(problem, policy, scenarios, late)

    yardstick = Yardstick(outcomes.path_utilities(problem, paths), policy.value_at_scale(problem.opening))
    return Solved(household, problem, policy, scenarios, paths, late, late_paths, yardstick)


def compare_strategies(
    solved: Solved, settings: PlanSettings, progress: Callable[[float], None] | None = None
) -> tuple[StrategyResult, ...]:
    """Results of the optimum, first, and of the rules asked for, on the same drawn futures.

    Raises
    ------
    InputError
        Code ``rule-unknown``: a key in the settings names no rule.
    """
    return _in_turn(_strategy_jobs(solved, settings), progress)


Job = Callable[[], StrategyResult]


def _strategy_jobs(solved: Solved, settings: PlanSettings) -> list[Job]:
    measured = (solved.problem, solved.policy, PLAN_KEY, solved.paths, solved.late_paths, solved.yardstick)
    rules = chosen_rules(solved, settings)
    return [
        partial(strategy_result, *measured),
        *(partial(_simulated, solved, rule, rule.key) for rule in rules),
    ]


def _banded_job(solved: Solved) -> Job:
    banded = KeepWithinBand(solved.policy, NO_CHANGE_TOLERANCE)
    return partial(_simulated, solved, banded, banded.key)


def _in_turn(jobs: Sequence[Job], progress: Callable[[float], None] | None) -> tuple[StrategyResult, ...]:
    if len(jobs) == 1:
        return (jobs[0](),)
    report = progress or (lambda share: None)
    with shared(jobs) as work:
        return tuple(work.results(lambda number: report(number / len(jobs))))


@dataclass(frozen=True, slots=True, eq=False)
class Comparison:
    """A solved household and its strategies, the optimum first."""

    solved: Solved
    strategies: tuple[StrategyResult, ...]


def compare(household: Household, settings: PlanSettings, progress: Progress | None = None) -> Comparison:
    """Compare the optimum with the rules that the settings ask for; see `compare_strategies`."""
    report = progress or (lambda share, what: None)
    solved = solve_household(household, settings, progress=lambda s: report(0.6 * s, "finding the best plan"))
    strategies = strategies_in(solved, settings, lambda s: report(0.6 + 0.4 * s, "testing rules of thumb"))
    return Comparison(solved, strategies)


def strategies_in(
    solved: Solved, settings: PlanSettings, progress: Callable[[float], None] | None = None
) -> tuple[StrategyResult, ...]:
    """`compare_strategies`, with the band of no change after the optimum where all rules are asked for."""
    jobs = _strategy_jobs(solved, settings)
    if settings.rules is None:
        jobs.insert(1, _banded_job(solved))
    return _in_turn(jobs, progress)


def _simulated(solved: Solved, policy: Policy, key: str) -> StrategyResult:
    paths, late = simulate_with_late(solved.problem, policy, solved.scenarios, solved.late)
    result = strategy_result(solved.problem, policy, key, paths, late, solved.yardstick)
    return replace(result, reason=outcomes.main_loss(solved.problem, solved.paths, paths))


def chosen_rules(solved: Solved, settings: PlanSettings) -> tuple[Rule, ...]:
    """Rules that the settings ask for; they hold the portfolio the optimum holds in the first year."""
    portfolio = int(solved.paths.portfolio[0, 0])
    parameters: dict[str, dict[str, float]] = {}
    for setting in solved.household.rule_settings:
        parameters.setdefault(setting.rule, {})[setting.parameter] = setting.value
    for rule, values in settings.rule_parameters:
        parameters.setdefault(rule, {}).update(values)
    rules = rules_for(solved.problem, portfolio, solved.household.spending.wanted, settings=parameters)
    if settings.rules is None:
        return rules
    wanted = [rule_key(name) for name in settings.rules]
    missing = set(wanted) - {rule.key for rule in rules}
    if missing:
        message = f"the rule {sorted(missing)[0]!r} needs 'Wanted spending a year', which is blank"
        raise InputError([Diagnostic("rule-needs-wanted", "--rule", message)])
    return tuple(rule for rule in rules if rule.key in wanted)


def rule_key(name: str) -> str:
    """Key of a rule given by its key or by its name to people.

    Raises
    ------
    InputError
        Code ``rule-unknown``.
    """
    plain = name.strip().casefold()
    for rule in RULES:
        if plain in (rule.key, rule.name.casefold()):
            return rule.key
    keys = [rule.key for rule in RULES]
    near = difflib.get_close_matches(plain, keys, n=1)
    hint = f"did you mean {near[0]!r}?" if near else f"rules are {', '.join(keys)}"
    raise InputError([Diagnostic("rule-unknown", "--rule", f"no rule is called {name!r}; {hint}")])


def make_plan(
    read: ReadWorkbook,
    settings: PlanSettings | None = None,
    progress: Progress | None = None,
    workbook_name: str = "",
    also: Sequence[tuple[str, Household]] = (),
) -> Plan:
    """Make the whole plan for a client.

    Parameters
    ----------
    read
        The client workbook as read.
    settings
        See `PlanSettings`.
    progress
        See `Progress`.
    workbook_name
        File name, for the record.
    also
        Name and household of further what-ifs, planned for whatever the settings say.

    Returns
    -------
    Plan
        Every figure that a report prints.

    Raises
    ------
    InputError
        The household cannot be planned for, or the settings name an unknown rule.
    """
    settings = settings or PlanSettings()
    report = progress or (lambda share, what: None)
    household = read.household
    what_ifs = (*(_what_if_households(read) if settings.what_ifs else ()), *also)
    end_base = 10 / (11 + len(what_ifs)) if what_ifs else 1.0  # measured: a what-if is about a tenth

    # What-ifs need nothing of the plan and start on a second core at once; what follows the solution is
    # shared with it too.
    with shared(_what_if_jobs(household, what_ifs, settings)) as changed:
        report(0.0, "finding the best plan")
        problem, policy = _solve(
            household, settings, lambda s: report(0.5 * end_base * s, "finding the best plan")
        )
        bound = partial(proof, problem, policy, settings.n_proof_paths, settings.seed)
        with shared([bound]) as proving:
            solved = _with_paths(household, problem, policy, settings)
            (proved,) = proving.results()
        paths = solved.paths
        jobs = [_banded_job(solved), *_strategy_jobs(solved, settings)]
        with shared(jobs) as rest:
            facts = first_year(household)
            now = first_choice(solved)
            instructions = this_year(household, problem, facts, now)
            middle = next_opening(problem, paths)
            plan_year = household.plan_date.year
            rows = schedule(problem, paths, solved.late_paths, plan_year)
            banded, *others = rest.results(
                lambda number: report(end_base * (0.5 + 0.5 * number / len(jobs)), "testing rules of thumb")
            )
        strategies = (*others, banded)
        late_year = _late_year(problem)
        names = ("as given", *(name for name, _ in what_ifs))
        given, *changes = changed.results(
            lambda number: report(
                end_base + (1 - end_base) * number / len(names), f"what if: {names[number]}"
            )
        ) or [strategies[0]]
    results = tuple(
        _what_if_result(name, strategies[0], given, other, late_year)
        for (name, _), other in zip(what_ifs, changes, strict=True)
    )
    rules = tax_rules_of(household)
    fees = _fees(household)
    report(1.0, "done")
    return Plan(
        household=household,
        problem=problem,
        life_expectancy=_life_expectancies(household),
        bills_covered_now=_bills_covered(household, problem, 0, 0),
        this_year=instructions,
        level_spending=strategies[0].level_spending,
        value_share_simulated=_simulated_share(solved),
        proof=proved,
        schedule=rows,
        lookup=lookup(problem, policy, middle),
        band=no_change_band(problem, policy, middle),
        strategies=strategies,
        futures=example_futures(problem, paths, solved.scenarios, plan_year),
        survivors=_survivors(household, problem, policy, middle),
        what_ifs=results,
        yearly_costs=yearly_costs(household, now.portfolio),
        plan_costs=_plan_costs(problem, paths, fees),
        warnings=read.warnings,
        sources=Sources(
            version=__version__,
            workbook_name=workbook_name,
            workbook_sha256=read.sha256,
            seed=settings.seed,
            n_paths=settings.n_paths,
            life_tables=tuple(dict.fromkeys(person.life_table for person in household.people)),
            tax_rules=rules.name,
            notes=_notes(household, problem, rules, facts, now, instructions.tax),
        ),
    )


SMALLEST_MOVE = 0.001
"""A conversion below this share of savings is within the solver's accuracy, and not instructed."""


def first_choice(solved: Solved) -> Choice:
    """What the optimum does in year 0, the same on every path."""
    paths = solved.paths
    convert = float(paths.conversion[0, 0])
    return Choice(
        withdraw=float(paths.withdrawal[0, 0, 1]),
        convert=convert if convert >= SMALLEST_MOVE * solved.problem.wealth else 0.0,
        spending=float(paths.spending[0, 0]),
        portfolio=int(paths.portfolio[0, 0]),
    )


def _simulated_share(solved: Solved) -> float:
    """Simulated over solved certainty equivalent: a check on the recursion, about 1."""
    problem, policy = solved.problem, solved.policy
    weight = float(policy.weights[0, 0])
    simulated = float(problem.utility.inverse(solved.yardstick.utilities.mean() / weight))
    recursion = float(problem.utility.inverse(solved.yardstick.value / weight))
    return simulated / recursion


def _life_expectancies(household: Household) -> tuple[float, ...]:
    """Expected remaining years of each person, from the table with its multiplier."""
    day = household.plan_date
    return tuple(
        life_expectancy(
            life_table_of(household, person),
            person.sex,
            person.age_on(day),
            person.mortality_multiplier,
            day.year,
        )
        for person in household.people
    )


def _bills_covered(household: Household, problem: Problem, t: int, status: int) -> float:
    """Lifelong income after the tax on it, over essential spending, in year t."""
    essential = problem.utility.essential * float(problem.need[t, status])
    return lifelong_income(household, t, problem.statuses[status]) / essential


def _survivors(
    household: Household, problem: Problem, policy: OptimalPolicy, middle: np.ndarray
) -> tuple[SurvivorView, ...]:
    """For a couple: next year at the middle savings, had one of the two died in between."""
    if problem.n_statuses == 1 or problem.n_years < 2:
        return ()
    views = []
    for h, person in zip((1, 2), household.people, strict=True):
        spending, _, gross = decide_at(problem, policy, 1, middle[None, :], h)
        views.append(
            SurvivorView(
                survivor=person.name,
                income=float(problem.income[1, h]),
                income_before=float(problem.income[1, 0]),
                spending=float(spending[0]),
                tax=float(problem.tax[1][h](gross)[0]),
                essential=problem.utility.essential * float(problem.need[1, h]),
                bills_covered=_bills_covered(household, problem, 1, h),
            )
        )
    return tuple(views)


def _late_year(problem: Problem) -> int:
    """Last year that someone opens alive with a chance of at least one in four."""
    return int(np.flatnonzero(chances_alive(problem).sum(axis=1) >= 0.25)[-1])


def _what_if_households(read: ReadWorkbook) -> Sequence[tuple[str, Household]]:
    own = [(name, changed.household) for name, changed in plan_what_ifs(read)]
    return (*stresses(read.household), *own)


def _what_if_jobs(
    household: Household, what_ifs: Sequence[tuple[str, Household]], settings: PlanSettings
) -> list[Job]:
    """Jobs for the household as given and for each what-if; none without what-ifs.

    Household and changed household are both solved on the coarser grids and meet the same draws;
    the difference between the two is added to the plan's own figures. The errors of grids and
    draws are nearly the same on both sides and drop out.
    """
    if not what_ifs:
        return []
    coarse = replace(
        settings,
        solver=settings.what_if_solver,
        grid=settings.what_if_grid,
        n_paths=settings.n_what_if_paths,
        late_years=False,
    )

    def changed(name: str, other: Household) -> StrategyResult:
        try:
            return _optimum_alone(other, coarse)
        except InputError as error:
            raise InputError(
                replace(problem, message=f"with the what-if {name!r}: {problem.message}")
                for problem in error.diagnostics
            ) from None

    return [
        partial(_optimum_alone, household, coarse),
        *(partial(changed, name, other) for name, other in what_ifs),
    ]


def _optimum_alone(household: Household, settings: PlanSettings) -> StrategyResult:
    solved = solve_household(household, settings)
    return strategy_result(
        solved.problem, solved.policy, PLAN_KEY, solved.paths, solved.late_paths, solved.yardstick
    )


def _what_if_result(
    name: str, optimum: StrategyResult, given: StrategyResult, other: StrategyResult, late_year: int
) -> WhatIfResult:
    """The plan's own figures plus the difference that the change makes on coarser grids."""

    def late(result: StrategyResult) -> float:
        return float(result.spending[0, min(late_year, result.spending.shape[1] - 1)])

    if optimum.level_spending is None or given.level_spending is None or other.level_spending is None:
        level = other.level_spending  # a legacy is wished before or after: nothing to compare with
    else:
        level = optimum.level_spending + other.level_spending - given.level_spending
    chance = optimum.chance_below_essential + other.chance_below_essential - given.chance_below_essential
    estate = optimum.estate.p50 + other.estate.p50 - given.estate.p50
    return WhatIfResult(
        name=name,
        spending_this_year=optimum.spending_this_year + other.spending_this_year - given.spending_this_year,
        spending_p10_late=late(optimum) + late(other) - late(given),
        chance_below_essential=min(max(chance, 0.0), 1.0),
        level_spending=level,
        estate_p50=max(estate, 0.0),
    )


def _fees(household: Household) -> np.ndarray:
    """Yearly cost of each portfolio of the problem with the adviser's fee, a share, (n_portfolios,)."""
    portfolios = Builder.of(household).portfolios()
    return np.array([portfolio.yearly_cost for portfolio in portfolios]) + household.adviser_fee


def yearly_costs(household: Household, portfolio: int) -> tuple[tuple[str, float], ...]:
    """Fees this year on today's savings, in money."""
    total = sum(account.balance for account in household.accounts)
    own = float(_fees(household)[portfolio]) - household.adviser_fee
    costs = (("Adviser fee", household.adviser_fee * total), ("Cost of the portfolio", own * total))
    return tuple((name, round(cost, 2)) for name, cost in costs if cost > 0)


def _plan_costs(problem: Problem, paths: Paths, fees: np.ndarray) -> float:
    """Mean over futures of all fees: on what stays invested after each year's withdrawals."""
    invested = np.maximum(over_accounts(paths.balances[:, :-1]) - over_accounts(paths.withdrawal), 0.0)
    return float((fees[paths.portfolio] * invested * paths.alive).sum(axis=1).mean())


def _named(rules: TaxRules) -> tuple[str, ...]:
    """Title, publisher, source and law year of tax rules; what the adviser's own rules lack is left out."""
    year = f"law year {rules.year}" if rules.year else ""
    return tuple(part for part in (rules.title, rules.publisher, rules.source, year) if part)


def _notes(
    household: Household, problem: Problem, rules: TaxRules, facts: FirstYear, choice: Choice, tax: float
) -> tuple[str, ...]:
    """Return notes on sources and conventions that a reader of the figures needs."""
    planning = float(problem.tax[0][0](choice.withdraw + choice.convert))
    notes = [
        f"Tax rules {rules.name}: {'; '.join(_named(rules))}.",
        *(f"Tax rules {rules.name}: {note}" for note in rules.notes),
    ]
    for table in {
        person.life_table: life_table_of(household, person) for person in household.people
    }.values():
        notes.append(f"Life table {table.name}: {table.title}; {table.publisher}; {table.source}.")
    if (problem.minimum_share > 0).any() and rules.minimum_distribution_due:
        notes.append(f"The least that must be taken is due {rules.minimum_distribution_due}.")
    notes += [
        f"Tax this year ({tax:,.2f}) is by the actual bands, with the gains realised by what is sold and the "
        f"income paid out in taxable accounts. Later years use a planning tax ({planning:,.2f} for this "
        "year): there tax on yields and gains is spread over the years as a lower return.",
        "Savings in projections: taxable money after tax on its gain so far, without cash kept aside.",
        "Rules of thumb hold the portfolio that the plan holds this year, throughout.",
        "What-ifs: the difference that a change makes, computed on coarser grids and fewer futures for both "
        "sides, is added to the plan's own figures.",
        f"'Late' in the what-ifs is {household.plan_date.year + _late_year(problem)}, the last year in which "
        "someone is alive with a chance of at least one in four.",
    ]
    return tuple(notes)
