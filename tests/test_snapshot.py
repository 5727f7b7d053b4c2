"""The review meeting's numbers, each against a figure found another way."""

import json
from dataclasses import replace

import numpy as np
import pytest
from golden_text import assert_golden, rendered
from households import couple, single

from planner.household import Account, AccountType, Spending
from planner.optimum.recursion import SolverSettings, solve
from planner.plan import PlanSettings
from planner.plan_record import Range
from planner.problem_building import build_problem
from planner.projection import decide_at
from planner.reports.export_views import snapshot_json
from planner.reports.terminal_snapshot import snapshot_screen
from planner.rules import AsAsked
from planner.snapshot import fall_before_cut, needed_return, one_off_cost, snapshot

COARSE = SolverSettings(12, 12, 8, 48)
SETTINGS = PlanSettings(n_paths=500, solver=COARSE, late_years=False)
LIN = single(spending=Spending(20_000.0, 30_000.0))


@pytest.fixture(scope="module")
def problem():
    return build_problem(LIN)


@pytest.fixture(scope="module")
def policy(problem):
    return solve(problem, COARSE)


def test_needed_return_pays_an_annuity_certain(problem):
    """30,000 less a pension of 14,000 from 250,000 over n years: the internal rate of return."""
    years = 20
    rate = needed_return(problem, AsAsked(0, 30_000.0), years - 1)
    assert rate is not None
    discount = (1 + problem.inflation) / (1 + rate)
    # The taxable drag is 0 (no tax); 16,000 at the start of each year. A hundredth of a point of return
    # is about 250 of present value.
    present = 16_000 * sum(discount**k for k in range(years))
    assert present == pytest.approx(250_000, abs=300)
    assert present <= 250_000 + 1


def test_no_return_pays_what_is_needed_at_once(problem):
    assert needed_return(problem, AsAsked(0, 400_000.0), 5) is None


def test_a_one_off_costs_what_the_household_with_it_loses(problem, policy):
    """The policy with this year's income lower is the solution of the problem with that one-off."""
    income = problem.income.copy()
    income[0] -= 40_000
    poorer = replace(problem, income=income)
    other = solve(poorer, COARSE)
    steady, spent = one_off_cost(problem, policy, 40_000.0)
    # Grids differ a little between the two solves (cash may be negative): a per cent of 40,000 a year.
    assert steady == pytest.approx(
        policy.level_spending(problem.opening) - other.level_spending(problem.opening), abs=100
    )
    now = decide_at(problem, policy, 0, problem.opening[None], 0)[0][0]
    then = decide_at(poorer, other, 0, problem.opening[None], 0)[0][0]
    assert spent == pytest.approx(now - then, abs=100)


def test_fall_before_cut_is_where_spending_meets_the_bills(problem, policy):
    fall = fall_before_cut(problem, policy)
    assert 0 < fall < 1
    spent = [
        float(decide_at(problem, policy, 0, (1 - f) * problem.opening[None], 0)[0][0])
        for f in (fall, fall + 0.002)
    ]
    assert spent[0] >= 20_000 - 0.01 > spent[1]


def test_income_that_carries_the_bills_bears_any_fall():
    rich = build_problem(single(spending=Spending(12_000.0)))
    assert fall_before_cut(rich, solve(rich, COARSE)) == 1.0


def test_couple_by_who_is_alive():
    from planner.instructions import lifelong_income

    household = couple()
    shot = snapshot(household, SETTINGS)
    now = {row.who: row.share for row in shot.covered}
    assert now["now, both"] == pytest.approx(lifelong_income(household, 0, "both") / 52_000)
    assert now["Per alone"] == pytest.approx(lifelong_income(household, 0, "second") / (0.7 * 52_000))
    names = [row.name for row in shot.survivors]
    assert names == ["Ola", "Per"]
    assert shot.survivors[1].income == pytest.approx(16_000 + 8_000)  # state pension and work, no roof
    assert shot.now.minimum_distribution > 0
    assert shot.tax_share == pytest.approx(shot.now.tax / (shot.now.income + shot.now.withdraw_tax_deferred))
    json.dumps(snapshot_json(shot), allow_nan=False)
    text = rendered(snapshot_screen(shot, 80))
    assert max(len(line) for line in text.splitlines()) <= 80
    assert "…" not in text


def test_golden():
    shot = snapshot(LIN, SETTINGS)
    assert shot.wanted is not None
    assert 0 < shot.wanted.paid_for_life < 1
    assert shot.wanted.age_low is not None
    assert shot.wanted.age_middle is None or shot.wanted.age_low < shot.wanted.age_middle
    assert all(left.p10 <= left.p50 <= left.p90 for _, left in shot.family)
    # Figures fixed, so that the text does not move with the solver's last digits.
    fixed = replace(
        shot,
        fall_before_cut=0.321,
        one_off_a_year=2_345.0,
        one_off_this_year=2_456.0,
        now=replace(shot.now, spending=30_123.0, room_to_next_threshold=float("inf")),
        wanted=replace(shot.wanted, paid_for_life=0.7, age_low=91, age_middle=96, needed_return=0.0321),
        family=((85, Range(100_000.0, 150_000.0, 200_000.0)),),
    )
    assert_golden("snapshot.txt", rendered(snapshot_screen(fixed, 80)))


def test_without_wanted_spending_or_accounts_of_worth():
    poor = single(accounts=(Account("Deposit", "Lin", AccountType.TAXABLE, 1_000.0),))
    shot = snapshot(poor, SETTINGS)
    assert shot.wanted is None
    assert np.isfinite(shot.one_off_a_year)
    rendered(snapshot_screen(shot, 80))
