"""From simulated paths and a policy to what a plan says of the years to come.

Schedule, look-up for the next review, band of no change, results by strategy, example futures.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace

import numpy as np

from planner import outcomes
from planner.cashflow import advance
from planner.piecewise import FloatArray
from planner.plan_record import ExampleFuture, LookupRow, NoChangeBand, Range, ScheduleRow, StrategyResult
from planner.problem import TAX_DEFERRED, IntArray, Policy, Problem, State, over_accounts
from planner.simulation import Paths, Scenarios, draw_scenarios, simulate

ENOUGH_PATHS = 200
"""Fewer living paths than this make a poor percentile; see `late_scenarios`."""

LATE_PATHS = 500
"""Paths drawn for the years that few lives reach; all of them live to the end."""

LOOKUP_MULTIPLES = (0.5, 0.6, 0.7, 0.8, 0.9, 1.0, 1.1, 1.2, 1.3, 1.4, 1.5)
"""Next year's savings in the look-up, as multiples of the middle case."""

NO_CHANGE_TOLERANCE = 0.10
"""Spending within this share of what was planned is left as it is."""


def chances_alive(problem: Problem) -> FloatArray:
    """Chance of each status at the opening of each year, (n_years, n_statuses), exact."""
    chance = np.zeros((problem.n_years, problem.n_statuses))
    chance[0, 0] = 1.0
    for t in range(problem.n_years - 1):
        chance[t + 1] = chance[t] @ problem.transition[t]
    return chance


def people_alive(problem: Problem) -> FloatArray:
    """Chance that each person, and anyone, is alive at the opening of each year.

    Returns
    -------
    ndarray of shape (n_years, n_people + 1)
        The last column is anyone.
    """
    chance = chances_alive(problem)
    anyone = chance.sum(axis=1)
    if problem.n_statuses == 1:
        return np.column_stack([chance[:, 0], anyone])
    return np.column_stack([chance[:, 0] + chance[:, 1], chance[:, 0] + chance[:, 2], anyone])


def later_ages(problem: Problem) -> tuple[tuple[int, int], ...]:
    """Up to three ages of the first person to show figures at: pairs of age and year t.

    Multiples of five, from five years on to the last year in which someone is alive with a chance
    of at least one in four; where there are more than three, the first, a middle and the last.
    """
    ages = problem.ages[0]
    last = int(np.flatnonzero(chances_alive(problem).sum(axis=1) >= 0.25)[-1])
    fives = [(int(ages[t]), t) for t in range(min(5, last), last + 1) if ages[t] % 5 == 0]
    if not fives:
        return ((int(ages[last]), last),)
    places = np.unique(np.round(np.linspace(0, len(fives) - 1, 3)).astype(int))
    return tuple(fives[i] for i in places)


def given_a_long_life(problem: Problem) -> Problem:
    r"""Return the same problem with lives drawn on the condition that someone opens the last year.

    With :math:`u_t(h)` the chance of that from status h, the conditional transition is
    :math:`P(h \to h') u_{t+1}(h') / u_t(h)` (Doob's h-transform).
    """
    n = problem.n_years
    reach = np.ones((n, problem.n_statuses))
    for t in range(n - 2, -1, -1):
        reach[t] = problem.transition[t] @ reach[t + 1]
    transition = problem.transition.copy()
    for t in range(n - 1):
        possible = reach[t] > 0
        divisor = np.where(possible, reach[t], 1.0)
        transition[t] = problem.transition[t] * reach[t + 1] / divisor[:, None]
        transition[t, ~possible] = problem.transition[t, ~possible]
    return replace(problem, transition=transition, death=1 - transition.sum(axis=2))


def late_scenarios(problem: Problem, scenarios: Scenarios, seed: int) -> Scenarios | None:
    """Paths for ages that few drawn lives reach: lives drawn given that someone reaches the end.

    None where every year has `ENOUGH_PATHS` living paths. At such ages almost every household is a
    lone survivor, so that the condition hardly changes who is alive.
    """
    if ((scenarios.status[:, :-1] < problem.n_statuses).sum(axis=0) >= ENOUGH_PATHS).all():
        return None
    long_lived = given_a_long_life(problem)
    return draw_scenarios(long_lived, LATE_PATHS, np.random.default_rng([seed, 1]))


def simulate_with_late(
    problem: Problem, policy: Policy, scenarios: Scenarios, late: Scenarios | None
) -> tuple[Paths, Paths | None]:
    """Paths of the scenarios and, if any, of late years, carried along together.

    A year costs some hundred calls however few paths there are. Long lives come first, so that the
    whole stays sorted.
    """
    if late is None:
        return simulate(problem, policy, scenarios), None
    paths = simulate(problem, policy, late.followed_by(scenarios))
    return paths.part(slice(late.n_paths, None)), paths.part(slice(late.n_paths))


@dataclass(frozen=True, slots=True, eq=False)
class YearlyRanges:
    """Spending and opening balance by year, each (3, n_years): p10, p50, p90, always finite."""

    spending: FloatArray
    balance: FloatArray


def yearly_ranges(
    paths: Paths, late: Paths | None, measured: outcomes.Outcomes | None = None
) -> YearlyRanges:
    """Percentiles over paths with someone alive; years with few of them are taken from `late`.

    `measured` are the paths' outcomes where they are known.
    """
    few = paths.alive.sum(axis=0) < ENOUGH_PATHS

    def of(values: Callable[[Paths], FloatArray], known: outcomes.Percentiles | None) -> FloatArray:
        result = (known or outcomes.yearly_percentiles(values(paths), paths.alive)).values
        if late is not None:
            result = result.copy()
            late_values, late_alive = values(late)[:, few], late.alive[:, few]
            result[:, few] = outcomes.yearly_percentiles(late_values, late_alive).values
        return np.asarray(result)

    return YearlyRanges(
        of(lambda p: p.spending, measured.spending if measured else None),
        of(lambda p: over_accounts(p.balances[:, :-1]), measured.balance if measured else None),
    )


def schedule(problem: Problem, paths: Paths, late: Paths | None, first_year: int) -> tuple[ScheduleRow, ...]:
    """One row a year: percentiles of spending and savings, medians of the money behind them."""
    ranges = yearly_ranges(paths, late)
    alive = people_alive(problem)
    rows = []
    for t in range(problem.n_years):
        few = late is not None and paths.alive[:, t].sum() < ENOUGH_PATHS
        source = late if few and late is not None else paths
        here = source.alive[:, t]

        def middle(values: FloatArray, here: np.ndarray = here) -> float:
            return float(np.median(values[here]))

        need = outcomes.need_on_paths(problem, source)[:, t]
        withdrawal = source.withdrawal[:, t]
        rows.append(
            ScheduleRow(
                year=first_year + t,
                ages=tuple(int(age) for age in problem.ages[:, t]),
                spending=_range(ranges.spending[:, t]),
                balance=_range(ranges.balance[:, t]),
                income=middle(source.income[:, t]),
                withdraw_taxable=middle(withdrawal[:, 0]),
                withdraw_tax_deferred=middle(withdrawal[:, 1]),
                withdraw_tax_free=middle(withdrawal[:, 2]),
                convert=middle(source.conversion[:, t]),
                tax=middle(source.tax[:, t]),
                minimum_distribution=middle(source.minimum[:, t]),
                essential=middle(need) * problem.utility.essential,
                chance_alive=tuple(float(chance) for chance in alive[t]),
            )
        )
    return tuple(rows)


def next_opening(problem: Problem, paths: Paths) -> FloatArray:
    """Middle balances by account at the opening of year 1, over paths with someone alive; (3,).

    The median of each account, scaled so that they add up to the median of their sum.
    """
    balances = paths.balances[paths.alive[:, 1], 1] if problem.n_years > 1 else np.empty((0, 3))
    if not balances.size:
        return np.zeros(3)
    each = np.median(balances, axis=0)
    total = float(np.median(balances.sum(axis=1)))
    return np.asarray(each * (total / each.sum()) if each.sum() > 0 else each)


def decide_at(
    problem: Problem, policy: Policy, t: int, balances: FloatArray, status: int
) -> tuple[FloatArray, IntArray, FloatArray]:
    """Spending, portfolio and gross withdrawal with conversion, at balances (n, 3) in one status.

    `cashflow.advance` holds it within what is possible.
    """
    n = balances.shape[0]
    zeros = np.zeros(n)
    state = State(
        balances=balances,
        status=np.full(n, status, dtype=np.int64),
        price_level=np.full(n, (1 + problem.inflation) ** t),
        last_inflation=np.full(n, problem.inflation if t else 0.0),
        last_return=zeros,
        memory=np.zeros((n, policy.n_memory)),
    )
    decision = policy.decide(problem, t, state)
    year = advance(problem, t, state, decision, np.ones(n))
    return year.spending, year.portfolio, year.withdrawal[:, TAX_DEFERRED] + year.conversion


def lookup(problem: Problem, policy: Policy, middle: FloatArray) -> tuple[LookupRow, ...]:
    """For each status, what the policy does next year at multiples of the middle balances (3,)."""
    if problem.n_years < 2:
        return ()
    balances = np.array(LOOKUP_MULTIPLES)[:, None] * middle
    rows = []
    for h, status in enumerate(problem.statuses):
        spending, portfolio, _ = decide_at(problem, policy, 1, balances, h)
        rows += [
            LookupRow(status, float(total), float(c), problem.portfolio_names[p])
            for total, c, p in zip(balances.sum(axis=1), spending, portfolio, strict=True)
        ]
    return tuple(rows)


def no_change_band(problem: Problem, policy: Policy, middle: FloatArray) -> NoChangeBand:
    """Savings next year between which the policy's spending stays within the tolerance.

    Searched from the middle balances outwards, in steps of half a per cent of them up to three
    times; all zero where there are no savings or no next year.
    """
    total = float(middle.sum())
    if problem.n_years < 2 or total <= 0:
        return NoChangeBand(0.0, 0.0, 0.0, 0.0, NO_CHANGE_TOLERANCE)
    multiples = np.arange(0, 601) / 200
    spending, _, _ = decide_at(problem, policy, 1, multiples[:, None] * middle, 0)
    planned = spending[200]
    inside = np.abs(spending - planned) <= NO_CHANGE_TOLERANCE * abs(planned)
    outside_below = np.flatnonzero(~inside[:200])
    outside_above = np.flatnonzero(~inside[200:])
    low = multiples[outside_below[-1] + 1] if outside_below.size else 0.0
    high = multiples[199 + outside_above[0]] if outside_above.size else multiples[-1]
    beyond, _, _ = decide_at(problem, policy, 1, np.array([[0.9 * low], [1.1 * high]]) * middle, 0)
    return NoChangeBand(
        float(low * total), float(high * total), float(beyond[0]), float(beyond[1]), NO_CHANGE_TOLERANCE
    )


@dataclass(frozen=True, slots=True, eq=False)
class Yardstick:
    """What strategies are measured against: the optimum's utility by path, and its value.

    Attributes
    ----------
    utilities : ndarray of shape (n_paths,)
        Of the optimum, on the scenarios that every strategy meets.
    value_at_scale : callable
        Scales s (n,) -> V_0 with all accounts multiplied by each.
    """

    utilities: FloatArray
    value_at_scale: outcomes.ValueAtScale

    @property
    def value(self) -> float:
        """V_0 at the opening balances."""
        return float(self.value_at_scale(np.ones(1))[0])


def strategy_result(
    problem: Problem, policy: Policy, key: str, paths: Paths, late: Paths | None, yardstick: Yardstick
) -> StrategyResult:
    """Measure one strategy's paths; the optimum's own cost is 0 by definition.

    The standard error of the cost comes from the paired differences of utility, through the slope
    of the cost: ``D(L +- e)`` are compared.
    """
    by_path = outcomes.PathMeasures.of(problem, paths)
    measured = outcomes.measure(problem, paths, by_path=by_path)
    ranges = yearly_ranges(paths, late, measured)
    difference = outcomes.utility_difference(by_path.utilities, yardstick.utilities)

    def cost(shift: float) -> float:
        return outcomes.wealth_cost(yardstick.value_at_scale, difference.value + shift, problem.wealth)

    error = difference.standard_error
    is_short = by_path.short > 0
    below = is_short.any(axis=1)
    first_age = problem.ages[0, is_short.argmax(axis=1)[below]]
    return StrategyResult(
        key=key,
        name=policy.name,
        reference=policy.reference,
        spending_this_year=measured.spending_this_year,
        level_spending=measured.level_spending,
        wealth_cost=0.0 if error == 0 else cost(0.0),
        wealth_cost_standard_error=0.0 if error == 0 else abs(cost(-error) - cost(error)) / 2,
        chance_below_essential=measured.shortfall.chance.value,
        chance_standard_error=measured.shortfall.chance.standard_error,
        years_below_essential=measured.shortfall.years_when_short,
        shortfall=measured.shortfall.amount_a_year,
        typical_age_below=float(np.median(first_age)) if below.any() else None,
        largest_yearly_cut=float(measured.largest_cut.values[1]),
        estate=_range(measured.estate.values),
        tax_paid=measured.tax_total_mean.value,
        spending=ranges.spending,
        balance=ranges.balance,
    )


EXAMPLES = (
    (0.10, "a bad first decade"),
    (0.50, "a middle one"),
    (0.90, "a good one"),
)


def example_futures(
    problem: Problem, paths: Paths, scenarios: Scenarios, first_year: int
) -> tuple[ExampleFuture, ...]:
    """Three drawn futures, chosen by rule: long lives, then rank by the first decade's return.

    Among the futures in which someone lives at least as long as in the middle one, those at the
    10th, 50th and 90th percentile of the compound return of the first ten years (or all, if fewer)
    on the portfolios held.
    """
    lived = paths.alive.sum(axis=1)
    long_enough = np.flatnonzero(lived >= np.median(lived))
    first = min(10, int(lived[long_enough].min()))
    growth = np.ones(long_enough.size)
    for t in range(first):
        growth *= _gross(problem, paths, scenarios, t, long_enough)
    order = long_enough[np.argsort(growth, kind="stable")]
    futures = []
    for share, name in EXAMPLES:
        path = order[round(share * (order.size - 1))]
        one = np.array([path])
        n = int(lived[path])
        returns = [float(_gross(problem, paths, scenarios, t, one)[0]) - 1 for t in range(n)]
        decade = float(np.prod([1 + r for r in returns[:first]])) ** (1 / first) - 1
        futures.append(
            ExampleFuture(
                name=name,
                description=(
                    f"{_growth_words(decade)} over the first {first} years"
                    f"; {round(100 * share)} of 100 futures with long lives did worse"
                ),
                years=tuple(first_year + t for t in range(n)),
                ages=tuple(tuple(int(age) for age in problem.ages[:, t]) for t in range(n)),
                returns=tuple(returns),
                spending=tuple(float(c) for c in paths.spending[path, :n]),
                balance=tuple(float(b) for b in paths.balances[path, :n].sum(axis=1)),
                status=tuple(problem.statuses[h] for h in paths.status[path, :n]),
            )
        )
    return tuple(futures)


def _growth_words(rate: float) -> str:
    if rate < 0:
        return f"investments lost {-rate:.1%} a year against prices"
    return f"investments grew {rate:.1%} a year above prices"


def _gross(problem: Problem, paths: Paths, scenarios: Scenarios, t: int, path: IntArray) -> FloatArray:
    return scenarios.returns(problem, t, path, paths.portfolio[path, t].astype(np.int64))


def _range(values: FloatArray) -> Range:
    return Range(*(float(value) for value in values))
