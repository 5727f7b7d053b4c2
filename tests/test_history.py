"""Historical sequences and the stationary bootstrap, against published figures and laws."""

import csv
from pathlib import Path

import numpy as np
import pytest
from households import MARKETS, PORTFOLIOS, single

from planner.diagnostics import InputError
from planner.history import (
    block_bootstrap,
    historical_sequences,
    in_bootstrapped_years,
    lasting_rate,
    real_history,
    sequence_scenarios,
    window_of,
)
from planner.household import History
from planner.optimum.recursion import SolverSettings
from planner.plan import PlanSettings, solve_household, strategies_in
from planner.problem_building import build_problem
from planner.rules import ConstantReal
from planner.simulation import simulate

REFERENCE = Path(__file__).parents[2] / "shared" / "reference" / "us_annual_real_returns.csv"
SETTINGS = PlanSettings(n_paths=400, solver=SolverSettings(12, 12, 8, 48), late_years=False)


def invented(n_years: int = 40) -> History:
    """Bonds 3 % and shares 6 % a year, save for three bad years from 1960 on; prices 2 %."""
    years = tuple(range(1950, 1950 + n_years))
    rows = [(0.03, -0.25) if 1960 <= year < 1963 else (0.03, 0.06) for year in years]
    return History(years, (0.02,) * n_years, tuple(rows))


def us_real_returns() -> tuple[np.ndarray, np.ndarray]:
    if not REFERENCE.exists():
        pytest.skip("the reference series is not beside the project")
    rows = list(csv.DictReader(REFERENCE.read_text("utf-8").splitlines()))
    years = np.array([int(row["year"]) for row in rows])
    return years, np.array([[float(row["stock_real_tr"]), float(row["bond10y_real_tr"])] for row in rows])


@pytest.mark.parametrize(
    ("stocks", "start", "rate"), [(0.5, 1966, 0.03686), (0.5, 1929, 0.05043), (0.75, 1966, 0.03782)]
)
def test_us_rates_that_lasted_thirty_years(stocks, start, rate):
    """Computed from R. Shiller's public series; the figures are rounded to a thousandth of a point."""
    years, returns = us_real_returns()
    at = int(np.flatnonzero(years == start)[0])
    gross = 1 + returns[at : at + 30] @ np.array([stocks, 1 - stocks])
    assert lasting_rate(gross) == pytest.approx(rate, abs=0.000_006)


def test_the_worst_us_start_of_half_and_half_is_1966():
    years, returns = us_real_returns()
    gross = 1 + returns @ np.array([0.5, 0.5])
    rates = [lasting_rate(gross[k : k + 30]) for k in range(len(years) - 29)]
    assert years[int(np.argmin(rates))] == 1966


def test_the_lasting_rate_just_lasts_in_the_simulator():
    household = single(history=invented())
    problem = build_problem(household)
    history = real_history(household)
    years = 25
    scenarios = sequence_scenarios(problem, history, years)
    for start in (0, 8):
        rate = lasting_rate(history.gross[start : start + years, 1])
        paths = simulate(problem, ConstantReal(1, rate), scenarios)
        last = paths.balances[start, years - 1].sum()
        assert last == pytest.approx(rate * problem.wealth, rel=1e-9)  # all of it is taken, and no more
        assert paths.estate[start] == pytest.approx(0.0, abs=1e-6)


def test_real_returns_are_after_fees_and_prices():
    household = single(history=invented(), adviser_fee=0.005)
    history = real_history(household)
    expected = (1 + 0.2 * 0.06 + 0.8 * 0.03 - 0.003 - 0.005) / 1.02  # Calm: 20 % shares, 0.3 % cost
    assert history.gross[0, 0] == pytest.approx(expected)
    assert len(PORTFOLIOS) == history.gross.shape[1]
    assert MARKETS.inflation != 0.02  # history's own prices are used


def test_worst_and_middle_starts():
    sequences = historical_sequences(single(history=invented()), SETTINGS)
    plan = sequences.results[0]
    assert plan.key == "plan"
    assert plan.starts == tuple(range(1950, 1950 + 40 - sequences.years + 1))
    worst = plan.starts[int(plan.order[0])]
    assert 1958 <= worst <= 1961  # the bad years come first
    assert plan.starts[int(plan.order[-1])] != worst
    assert (plan.lowest <= plan.first + 1e-6).all()
    assert {result.key for result in sequences.results} >= {"constant-real", "plan-with-band", "smoothing"}


def test_windows_leave_some_starts():
    problem = build_problem(single())  # 80: fifteen years to 95
    assert window_of(problem, 150) == 15
    assert window_of(problem, 18) == 13
    assert window_of(problem, 10) == 5


@pytest.mark.parametrize(("history", "code"), [(None, "history-missing"), (invented(9), "history-too-short")])
def test_no_history(history, code):
    with pytest.raises(InputError) as error:
        real_history(single(history=history))
    assert [problem.code for problem in error.value.diagnostics] == [code]


def test_bootstrap_is_stationary_with_geometric_blocks():
    """200,000 draws: a share near 1/20 has a standard error of 0.0005 (blocks: about twice that)."""
    index = block_bootstrap(20, 5_000, 40, np.random.default_rng(1), mean_block=4.0)
    shares = np.bincount(index.ravel(), minlength=20) / index.size
    assert np.abs(shares - 0.05).max() < 0.005
    follows = index[:, 1:] == (index[:, :-1] + 1) % 20
    # A year follows with chance 3/4, or is drawn anew and happens to be the next: 3/4 + 1/4 x 1/20.
    assert follows.mean() == pytest.approx(0.7625, abs=0.004)
    for t in (0, 20, 39):  # every year of a path has the same law
        assert np.abs(np.bincount(index[:, t], minlength=20) / 5_000 - 0.05).max() < 0.015


def test_bootstrap_of_one_certain_year_is_that_year():
    flat = History(tuple(range(2000, 2012)), (0.02,) * 12, ((0.03, 0.03),) * 12)
    solved = solve_household(single(history=flat), SETTINGS)
    drawn = in_bootstrapped_years(solved, SETTINGS)
    assert drawn.scenarios.gross is not None
    assert np.ptp(drawn.scenarios.gross[:, :, 0]) == pytest.approx(0.0, abs=1e-15)
    strategies = strategies_in(drawn, SETTINGS)
    assert strategies[0].wealth_cost == 0.0
    assert np.array_equal(drawn.scenarios.status, solved.scenarios.status)
