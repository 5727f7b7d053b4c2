"""Measures against values worked out by hand, closed forms, and resampling."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from builders import couple_problem, plain_problem, single_problem, utility_of
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.testing import assert_allclose

from planner.outcomes import (
    amount_short,
    chance,
    exhausted_year,
    largest_cut,
    level_spending,
    mean_estimate,
    measure,
    need_normaliser,
    need_on_paths,
    path_utilities,
    percentiles,
    shortfall,
    utility_difference,
    wealth_cost,
    yearly_percentiles,
)
from planner.preferences import EstateUtility
from planner.rules import AsAsked, ConstantReal
from planner.simulation import Scenarios, draw_scenarios, simulate

# Value --------------------------------------------------------------------------------------------


@pytest.mark.parametrize("gamma", [1.0, 4.0])
def test_level_spending_of_a_level_stream_is_its_level(gamma: float) -> None:
    """Spending 25,000 n whoever lives is worth 25,000, by definition; only deaths are sampled."""
    problem = replace(
        couple_problem(10, opening=np.array([2e6, 0.0, 0.0])), utility=utility_of(gamma), discount=0.97
    )
    scenarios = draw_scenarios(problem, 40_000, np.random.default_rng(1))
    paths = simulate(problem, AsAsked(0, 25_000.0), scenarios)
    assert_allclose(
        paths.spending[paths.alive], 25_000 * need_on_paths(problem, paths)[paths.alive], rtol=1e-12
    )
    utility = mean_estimate(path_utilities(problem, paths))
    level = level_spending(problem.utility, utility.value, need_normaliser(problem))
    shifted = level_spending(
        problem.utility, utility.value + utility.standard_error, need_normaliser(problem)
    )
    # Four standard errors of L, in money.
    assert abs(level - 25_000) < 4 * abs(shifted - level)


def test_utility_by_hand_estate_at_the_end_of_the_year_of_death() -> None:
    """Two years alive; the estate of year 1's end is discounted twice."""
    utility = utility_of(gamma=1.0, kappa=1.0, essential=20_000.0)
    problem = plain_problem(
        3, utility=utility, estate=EstateUtility(utility, strength=2.0, threshold=10_000.0), discount=0.9
    )
    problem = replace(problem, need=np.array([[1.0], [0.8], [1.0]]))
    scenarios = Scenarios(np.array([[0, 0, 1, 1]], dtype=np.int16), gross=np.ones((1, 3, 2)))
    paths = simulate(problem, AsAsked(0, 40_000.0), scenarios)
    # Logarithms of money in units of 20,000. The estate: 1,000,000 - 40,000 - 32,000 = 928,000.
    expected = np.log(2.0) + 0.9 * 0.8 * np.log(2.0) + 0.9**2 * 2.0 * np.log((20_000 + 928_000) / 20_000)
    assert path_utilities(problem, paths)[0] == pytest.approx(expected, rel=1e-12)


def test_need_normaliser_by_hand() -> None:
    """1 + beta (P(both) + .7 P(one)), two years, q = .03 and .02."""
    problem = couple_problem(2)
    q = problem.transition[0, 0]
    assert q.sum() + problem.death[0, 0] == pytest.approx(1.0)
    expected = 1 + 0.98 * (0.97 * 0.98 + 0.7 * (0.98 * 0.03 + 0.97 * 0.02))
    assert need_normaliser(problem) == pytest.approx(expected, rel=1e-12)


def test_paired_difference_is_far_more_exact_than_the_difference_of_means() -> None:
    problem = single_problem(opening=np.array([600_000.0, 0.0, 0.0]))
    scenarios = draw_scenarios(problem, 2_000, np.random.default_rng(2))
    low, high = (
        path_utilities(problem, simulate(problem, ConstantReal(0, rate), scenarios)) for rate in (0.04, 0.041)
    )
    difference = utility_difference(low, high)
    assert difference.value == pytest.approx(low.mean() - high.mean(), rel=1e-9)
    assert difference.standard_error < 0.2 * mean_estimate(low).standard_error


# Wealth cost --------------------------------------------------------------------------------------


def test_wealth_cost_is_exact_where_value_is_logarithmic() -> None:
    """V_0(s) = ln s: a loss of ln(4/5) costs a fifth of wealth; a gain of ln(1.1) a negative tenth."""

    def value(scale: np.ndarray) -> np.ndarray:
        return np.log(np.maximum(scale, 1e-300))

    assert wealth_cost(value, 0.0, 500_000.0) == 0.0
    assert wealth_cost(value, float(np.log(0.8)), 500_000.0) == pytest.approx(100_000.0, abs=0.01)
    assert wealth_cost(value, float(np.log(1.1)), 500_000.0) == pytest.approx(-50_000.0, abs=0.01)


@settings(deadline=None)
@given(cost=st.floats(-0.5, 0.999), gamma=st.sampled_from([2.0, 4.0, 10.0]), pension=st.floats(0.01, 1))
def test_wealth_cost_recovers_a_known_cost(cost: float, gamma: float, pension: float) -> None:
    """V_0(s) = U(pension + s), as steep near s = 0 as values get."""

    def value(scale: np.ndarray) -> np.ndarray:
        return np.asarray((pension + scale) ** (1 - gamma) / (1 - gamma))

    difference = float(value(np.float64(1 - cost)) - value(np.float64(1.0)))
    # A cent of 100,000; beyond it, the rounding of values of size U(pension) (relative 1e-16).
    slope = (pension + 1 - cost) ** -gamma
    tolerance = 0.01 + 1e5 * 1e-15 * abs(value(1 - cost)) / slope
    assert wealth_cost(value, difference, 1e5) == pytest.approx(cost * 1e5, abs=tolerance)


def test_wealth_cost_is_all_of_it_where_no_savings_would_be_better() -> None:
    assert wealth_cost(lambda s: s, -1.0, 300_000.0) == 300_000.0
    assert wealth_cost(lambda s: s, -5.0, 300_000.0) == 300_000.0


def test_wealth_cost_of_a_gain_that_no_wealth_gives_is_bounded() -> None:
    """Under a ceiling value is flat at the top: sampling error must not break the report."""
    assert wealth_cost(lambda s: np.minimum(s, 1.0), 0.01, 300_000.0) == -300_000.0


def test_wealth_cost_bears_values_that_differ_by_rounding_between_calls() -> None:
    """The ends of a section are valued again among other scales, and may then miss the target."""
    signs = iter((1.0, -1.0, 1.0))

    def value(scale: np.ndarray) -> np.ndarray:
        return np.asarray(scale * (1.0 + 1e-13 * next(signs)))

    # 1e-13 of value is 1e-13 of wealth here.
    assert wealth_cost(value, -0.25, 300_000.0) == pytest.approx(75_000.0, abs=1e-6)


def test_wealth_cost_without_wealth_is_nothing() -> None:
    assert wealth_cost(lambda s: s, -1.0, 0.0) == 0.0


# Essential spending -------------------------------------------------------------------------------

ALIVE = np.array([[1, 1, 1, 0], [1, 1, 1, 1], [1, 0, 0, 0]], dtype=bool)
ESSENTIAL = np.where(ALIVE, 30_000.0, 0.0)


def test_shortfall_by_hand() -> None:
    spending = np.array(
        [[30_000, 29_999.996, 20_000, 0], [30_000, 28_000, 25_000, 26_000], [40_000, 0, 0, 0]]
    )
    short = amount_short(spending, ESSENTIAL, ALIVE)
    assert_allclose(short, [[0, 0, 10_000, 0], [0, 2_000, 5_000, 4_000], [0, 0, 0, 0]])
    result = shortfall(short)
    assert result.chance.value == pytest.approx(2 / 3)
    assert result.years.value == pytest.approx(4 / 3)
    assert result.years_when_short == 2.0
    assert result.amount_a_year == pytest.approx(21_000 / 4)
    assert result.total_when_short == pytest.approx(21_000 / 2)
    assert result.mostly_from_year == 1  # from year 2 on there are only 3 of 4 short years


def test_no_shortfall() -> None:
    result = shortfall(np.zeros((50, 4)))
    assert (result.chance.value, result.years_when_short, result.mostly_from_year) == (0.0, 0.0, None)
    assert result.chance.standard_error > 0  # never seen in 50 paths is not proof


def test_half_a_cent_is_not_a_shortfall() -> None:
    one = np.ones((1, 1), dtype=bool)
    essential = np.array([[30_000.0]])
    assert amount_short(essential - 0.004, essential, one).sum() == 0
    assert amount_short(essential - 0.006, essential, one).sum() > 0


def test_survivor_needs_less() -> None:
    problem = couple_problem(3)
    status = np.array([[0, 2, 3, 3]], dtype=np.int16)
    paths = simulate(problem, AsAsked(0, 30_000.0), Scenarios(status, normal=np.zeros((1, 3))))
    assert_allclose(need_on_paths(problem, paths), [[1.0, 0.7, 0.0]])
    assert measure(problem, paths).shortfall.chance.value == 0.0


@given(k=st.integers(0, 400))
def test_chance_error_is_close_to_binomial(k: int) -> None:
    happened = np.arange(400) < k
    estimate = chance(happened)
    assert estimate.value == k / 400
    plain = np.sqrt(estimate.value * (1 - estimate.value) / 400)
    # One observation of each kind added to 400: p moves by at most 1/400, the error by at most that.
    assert plain <= estimate.standard_error + 1 / 400
    assert estimate.standard_error == pytest.approx(plain, abs=1 / 400)


# Percentiles --------------------------------------------------------------------------------------


def test_percentile_errors_match_the_spread_over_repeats() -> None:
    """Standard errors of p10, p50, p90 of 2,000 lognormals against the spread over 400 samples."""
    samples = np.exp(np.random.default_rng(11).normal(size=(400, 2_000)))
    results = [percentiles(sample) for sample in samples]
    spread = np.std([r.values for r in results], axis=0)
    claimed = np.mean([r.standard_errors for r in results], axis=0)
    # The spread of 400 repeats is known to 3.5 %; 15 % is four of those.
    assert_allclose(claimed, spread, rtol=0.15)
    exact = np.exp(np.array([-1.2815516, 0.0, 1.2815516]))
    assert_allclose(np.mean([r.values for r in results], axis=0), exact, rtol=0.01)


def test_yearly_percentiles_are_over_the_living() -> None:
    values = np.arange(12.0).reshape(3, 4)
    result = yearly_percentiles(values, ALIVE & (np.arange(4) < 3), levels=(0.5,))
    assert_allclose(result.values[0, :3], [4.0, 3.0, 4.0])
    assert np.isnan(result.values[0, 3])
    assert result.count.tolist() == [3, 2, 2, 0]


# Cuts and exhaustion --------------------------------------------------------------------------------


def test_largest_cut_ignores_a_survivors_smaller_need_and_empty_years() -> None:
    need = np.array([[1.0, 0.7, 0.7, 0.0], [1.0, 1.0, 1.0, 1.0], [1.0, 0.0, 0.0, 0.0]])
    spending = np.array(
        [[40_000, 28_000, 25_200, 0], [40_000, 30_000, 0, 20_000], [40_000, 0, 0, 0]], dtype=float
    )
    assert_allclose(largest_cut(spending, need, ALIVE), [0.1, 1.0, 0.0])


def test_exhausted_year() -> None:
    balances = np.array([[9.0, 5.0, 0.0, 0.0], [9.0, 5.0, 3.0, 1.0], [9.0, 0.0, 0.0, 0.0]])
    assert exhausted_year(balances, ALIVE).tolist() == [2, 4, 4]


# All together ---------------------------------------------------------------------------------------


def test_measure_agrees_with_its_parts() -> None:
    problem = couple_problem(12)
    paths = simulate(problem, AsAsked(1, 45_000.0), draw_scenarios(problem, 2_000, np.random.default_rng(3)))
    result = measure(problem, paths)
    assert result.spending_this_year == pytest.approx(45_000.0)
    assert result.utility.value == pytest.approx(path_utilities(problem, paths).mean())
    assert result.level_spending is not None
    assert 0 < result.level_spending < 45_000
    assert result.tax_total_mean.value == pytest.approx(paths.tax.sum(axis=1).mean())
    assert 0 < result.shortfall.chance.value < 1
    # Savings that run out are what makes this household fall short.
    assert result.exhausted.value <= result.shortfall.chance.value
    assert (np.diff(result.estate.values) >= 0).all()
    assert result.spending.values.shape == result.balance.values.shape == (3, 12)


def test_level_spending_has_no_meaning_with_a_legacy() -> None:
    problem = single_problem()
    problem = replace(problem, estate=EstateUtility(problem.utility, 1.0, 30_000.0))
    paths = simulate(problem, ConstantReal(0), draw_scenarios(problem, 50, np.random.default_rng(3)))
    assert measure(problem, paths).level_spending is None
