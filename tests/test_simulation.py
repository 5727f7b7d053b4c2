"""Drawn lives and returns follow their laws; the simulator keeps the books of every year."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
import pytest
from builders import couple_problem, jump_tax, plain_problem, single_problem
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.testing import assert_allclose

from planner.problem import Decision, Policy, Problem, State
from planner.rules import AsAsked, ConstantReal
from planner.simulation import Paths, Scenarios, draw_scenarios, draw_statuses, simulate, uniform_draws


@dataclass(frozen=True)
class Erratic:
    """Decides at random, within reason or not."""

    seed: int
    name = "erratic"
    reference = "made up for tests"
    n_memory = 0

    def decide(self, problem: Problem, t: int, state: State) -> Decision:
        generator = np.random.default_rng((self.seed, t))
        n = state.status.size
        return Decision(
            withdraw=generator.normal(20_000, 40_000, n),
            convert=generator.normal(5_000, 20_000, n),
            spending=generator.normal(40_000, 40_000, n),
            portfolio=generator.integers(0, problem.n_portfolios, n),
            memory=state.memory,
        )


@dataclass(frozen=True)
class Numbered:
    """Numbers the paths in year 0 and spends each path's number every year."""

    name = "numbered"
    reference = "made up for tests"
    n_memory = 1

    def decide(self, problem: Problem, t: int, state: State) -> Decision:
        n = state.status.size
        number = np.arange(n, dtype=np.float64) if t == 0 else state.memory[:, 0]
        zero = np.zeros(n)
        return Decision(zero, zero, number, np.zeros(n, dtype=np.int64), number[:, None])


@dataclass(frozen=True)
class Recorder:
    """Spends nothing, holds the portfolio of its path's status; records the states it was shown."""

    seen: list[State]
    name = "recorder"
    reference = "made up for tests"
    n_memory = 0

    def decide(self, problem: Problem, t: int, state: State) -> Decision:
        self.seen.append(state)
        zero = np.zeros(state.status.size)
        return Decision(zero, zero, zero, np.minimum(state.status, 1), state.memory)


# Books -------------------------------------------------------------------------------------------


def left_over(problem: Problem, paths: Paths, scenarios: Scenarios) -> np.ndarray:
    """Opening + income + paid in + growth - spending - tax - closing of every living path and year.

    Growth is worked out anew from what each account held after the year's choices.
    """
    assert scenarios.normal is not None
    assert problem.returns is not None
    rows = []
    for t in range(paths.n_years):
        here = np.flatnonzero(paths.alive[:, t])
        x = paths.balances[here, t]
        w, k = paths.withdrawal[here, t], paths.conversion[here, t]
        status = paths.status[here, t]
        paid_in = problem.contribution[t][status]
        cash = x[:, 0] + paths.income[here, t] + w[:, 1] + w[:, 2] - paths.tax[here, t]
        invested = (
            np.stack([cash - paths.spending[here, t], x[:, 1] - w[:, 1] - k, x[:, 2] + k - w[:, 2]], axis=1)
            + paid_in
        )
        gross = problem.returns.gross(scenarios.normal[here, t], paths.portfolio[here, t])
        drag = problem.drag[paths.portfolio[here, t]]
        closing = invested * np.stack([gross - drag, gross, gross], axis=1)
        passed = np.isin(here, np.flatnonzero(paths.death_year == t))
        keep = np.array([1.0, 1 - problem.heirs_tax_rate, 1.0])
        ended = paths.balances[here, t + 1] @ keep
        ended[passed] = paths.estate[here[passed]] - problem.cash_aside
        rows.append(closing @ keep - ended)
    return np.concatenate(rows)


@settings(deadline=None, max_examples=25)
@given(
    seed=st.integers(0, 10_000),
    one_off=st.floats(-150_000, 150_000),
    conversions=st.booleans(),
    heirs_rate=st.sampled_from([0.0, 0.25]),
)
def test_money_balances_to_the_cent_every_year(
    seed: int, one_off: float, conversions: bool, heirs_rate: float
) -> None:
    problem = couple_problem(
        10,
        conversions=conversions,
        heirs_tax_rate=heirs_rate,
        cash_aside=3_000.0,
        tax=((jump_tax(),) * 3,) * 10,
    )
    income, paid_in = problem.income.copy(), problem.contribution.copy()
    income[2] += one_off
    paid_in[:4, 0, 1:] = [2_000.0, 1_000.0]
    problem = replace(problem, income=income, contribution=paid_in)
    scenarios = draw_scenarios(problem, 60, np.random.default_rng(seed))
    paths = simulate(problem, Erratic(seed), scenarios)
    assert np.abs(left_over(problem, paths, scenarios)).max() < 0.01  # a cent
    assert (paths.balances >= 0).all()
    assert conversions or (paths.conversion == 0).all()
    assert (paths.withdrawal[:, :, 1] >= paths.minimum - 1e-6).all()


def test_years_without_anyone_are_empty() -> None:
    problem = couple_problem()
    scenarios = draw_scenarios(problem, 300, np.random.default_rng(4))
    paths = simulate(problem, ConstantReal(0), scenarios)
    gone = ~paths.alive
    for name in ("spending", "income", "tax", "conversion", "minimum", "withdrawal", "portfolio"):
        assert not getattr(paths, name)[gone].any(), name
    assert not paths.balances[:, :-1][gone].any()
    assert not paths.balances[:, -1].any()
    assert (paths.status[paths.alive] < 3).all()
    assert np.array_equal(paths.death_year + 1, paths.alive.sum(axis=1))


def test_estate_by_hand() -> None:
    """50,000 in each account doubles; heirs pay 40 % on tax-deferred money; 5,000 was kept aside."""
    problem = plain_problem(2, opening=np.full(3, 50_000.0), heirs_tax_rate=0.4, cash_aside=5_000.0)
    scenarios = Scenarios(np.array([[0, 1, 1]], dtype=np.int16), gross=np.full((1, 2, 2), 2.0))
    paths = simulate(problem, Recorder([]), scenarios)
    assert paths.estate[0] == pytest.approx(100_000 + 60_000 + 100_000 + 5_000)
    assert paths.death_year[0] == 0
    assert paths.balances[0, 1:].sum() == 0


def test_state_carries_prices_inflation_and_the_nominal_return_of_the_portfolio_held() -> None:
    problem = plain_problem(3)
    gross = np.array([[[1.10, 0.80], [1.05, 0.90], [1.0, 1.0]]])
    inflation = np.array([[0.02, 0.05, 0.0]])
    scenarios = Scenarios(np.array([[0, 0, 0, 1]], dtype=np.int16), gross=gross, inflation=inflation)
    seen: list[State] = []
    simulate(problem, Recorder(seen), scenarios)
    assert [float(s.price_level[0]) for s in seen] == pytest.approx([1.0, 1.02, 1.02 * 1.05])
    assert [float(s.last_inflation[0]) for s in seen] == pytest.approx([0.0, 0.02, 0.05])
    assert [float(s.last_return[0]) for s in seen] == pytest.approx([0.0, 1.10 * 1.02 - 1, 1.05 * 1.05 - 1])
    seen.clear()
    simulate(problem, Recorder(seen), replace(scenarios, inflation=None))
    assert [float(s.price_level[0]) for s in seen] == pytest.approx([1.0, 1.025, 1.025**2])


def test_only_living_paths_are_shown_to_the_policy() -> None:
    problem = couple_problem()
    scenarios = draw_scenarios(problem, 200, np.random.default_rng(8))
    seen: list[State] = []
    paths = simulate(problem, Recorder(seen), scenarios)
    for t, state in enumerate(seen):
        here = np.flatnonzero(paths.alive[:, t])
        assert np.array_equal(state.status, paths.status[here, t])
        assert np.array_equal(state.balances, paths.balances[here, t])


def test_memory_stays_with_its_path() -> None:
    problem = couple_problem()
    paths = simulate(problem, Numbered(), draw_scenarios(problem, 300, np.random.default_rng(4)))
    number = np.arange(300.0)[:, None] * paths.alive
    assert np.array_equal(paths.spending, number)


# Scenarios ---------------------------------------------------------------------------------------


def test_the_seed_fixes_everything() -> None:
    problem = couple_problem()

    def run(seed: int) -> Paths:
        return simulate(problem, ConstantReal(1), draw_scenarios(problem, 100, np.random.default_rng(seed)))

    first, again, other = run(7), run(7), run(8)
    for name in ("status", "spending", "balances", "estate", "tax"):
        assert np.array_equal(getattr(first, name), getattr(again, name)), name
    assert not np.array_equal(first.balances, other.balances)


@pytest.mark.parametrize("stratified", [True, False])
@pytest.mark.parametrize("build", [single_problem, couple_problem])
def test_statuses_follow_the_transition_chances(build: type, stratified: bool) -> None:
    """Distribution of the status each year against the chain's own, by multiplication."""
    problem: Problem = build(10)
    n_paths = 40_000
    scenarios = draw_scenarios(problem, n_paths, np.random.default_rng(3), stratified=stratified)
    expected = np.zeros(problem.n_statuses + 1)
    expected[0] = 1.0
    for t in range(problem.n_years + 1):
        seen = np.bincount(scenarios.status[:, t], minlength=expected.size) / n_paths
        # 4.5 binomial standard deviations: 1 in 100,000 for each of about 100 comparisons.
        spread = np.sqrt(np.maximum(expected * (1 - expected), 0.0) / n_paths)
        assert (np.abs(seen - expected) <= 4.5 * spread + 1e-12).all()
        if t < problem.n_years:
            living = expected[:-1]
            nobody = expected[-1] + living @ problem.death[t]
            expected = np.append(living @ problem.transition[t], nobody)
    assert (scenarios.status[:, -1] == problem.n_statuses).all()


def test_nobody_returns_and_no_survivor_changes() -> None:
    status = draw_scenarios(couple_problem(12), 5_000, np.random.default_rng(2)).status
    before, after = status[:, :-1], status[:, 1:]
    assert (status[:, 0] == 0).all()
    assert np.isin(after[before == 1], [1, 3]).all()
    assert np.isin(after[before == 2], [2, 3]).all()
    assert (after[before == 3] == 3).all()


def test_a_death_that_is_ruled_out_never_happens() -> None:
    """Chances that sum to a hair below 1 (rounding) do not leave room for an impossible death."""
    problem = couple_problem(2)
    transition, death = problem.transition.copy(), problem.death.copy()
    transition[0], death[0] = np.diag(np.full(3, 1 - 1e-12)), 0.0
    problem = replace(problem, transition=transition, death=death)
    status = draw_statuses(problem, np.full((5, 2), 1 - 1e-16))
    assert (status[:, 1] == 0).all()


@pytest.mark.parametrize("stratified", [True, False])
def test_normal_draws_have_the_law_and_independent_years(stratified: bool) -> None:
    n_paths, n_years = 40_000, 6
    problem = plain_problem(n_years)
    z = draw_scenarios(problem, n_paths, np.random.default_rng(9), stratified=stratified).normal
    assert z is not None
    # Five standard errors of a mean, a variance and a correlation of normals.
    assert (np.abs(z.mean(axis=0)) < 5 / n_paths**0.5).all()
    assert (np.abs(z.var(axis=0) - 1) < 5 * (2 / n_paths) ** 0.5).all()
    correlation = np.corrcoef(z.T) - np.eye(n_years)
    assert (np.abs(correlation) < 5 / n_paths**0.5).all()
    squares = np.corrcoef((z**2).T) - np.eye(n_years)
    assert (np.abs(squares) < 5 / n_paths**0.5).all()


def test_strata_are_each_hit_once_a_year() -> None:
    u = uniform_draws(np.random.default_rng(1), 1_000, 4)
    assert np.array_equal(np.sort(np.floor(u * 1_000), axis=0), np.tile(np.arange(1_000), (4, 1)).T)


def test_stratified_draws_reduce_the_error_of_a_mean() -> None:
    """Mean of a product of two years' returns over many repeats: the spread falls by more than half."""
    problem = plain_problem(2)
    assert problem.returns is not None

    def spread(stratified: bool) -> float:
        means = []
        for seed in range(200):
            z = draw_scenarios(problem, 200, np.random.default_rng(seed), stratified=stratified).normal
            assert z is not None
            assert problem.returns is not None
            means.append(problem.returns.gross(z, 1).prod(axis=1).mean())
        return float(np.std(means))

    # Spreads of 200 means are known to 5 %; the ratio seen is about 0.1.
    assert spread(True) < 0.5 * spread(False)


def test_node_law_uses_the_solvers_own_returns_at_their_weights() -> None:
    problem = single_problem()
    n_paths = 20_000
    scenarios = draw_scenarios(problem, n_paths, np.random.default_rng(6), law="nodes")
    assert scenarios.node is not None
    seen = np.bincount(scenarios.node[:, 2], minlength=7) / n_paths
    # Stratified: a share is off by at most one path at each end of its interval.
    assert_allclose(seen, problem.node_weights, atol=2 / n_paths)
    path, portfolio = np.arange(4), np.array([0, 1, 0, 1])
    gross = scenarios.returns(problem, 3, path, portfolio)
    assert np.array_equal(gross, problem.gross[portfolio, scenarios.node[:4, 3]])


def test_continuous_law_needs_a_continuous_law() -> None:
    problem = replace(single_problem(), returns=None)
    scenarios = draw_scenarios(problem, 10, np.random.default_rng(0))
    with pytest.raises(ValueError, match="law='nodes'"):
        simulate(problem, AsAsked(0, 1.0), scenarios)


def test_scenarios_that_do_not_fit_are_refused() -> None:
    status = np.array([[0, 0, 1]], dtype=np.int16)
    z = np.zeros((1, 2))
    with pytest.raises(ValueError, match="0 are given"):
        Scenarios(status)
    with pytest.raises(ValueError, match="2 are given"):
        Scenarios(status, normal=z, gross=np.ones((1, 2, 2)))
    with pytest.raises(ValueError, match="returns for"):
        Scenarios(status, normal=np.zeros((1, 3)))
    with pytest.raises(ValueError, match="inflation for"):
        Scenarios(status, normal=z, inflation=np.zeros((2, 2)))
    policy: Policy = ConstantReal(0)
    with pytest.raises(ValueError, match="2 years, the problem 3"):
        simulate(plain_problem(3), policy, Scenarios(status, normal=z))
    with pytest.raises(ValueError, match="leave someone alive"):
        simulate(plain_problem(2), policy, Scenarios(np.zeros((1, 3), dtype=np.int16), normal=z))
