"""Stress tests: what each changes, and that surprises stay surprises."""

from dataclasses import replace

import numpy as np
import pytest
from households import couple, single

from planner.household import Income, IncomeKind, Rise, Spending
from planner.optimum.recursion import SolverSettings
from planner.plan import PlanSettings
from planner.problem_building import build_problem
from planner.stresses import state_pensions_cut
from planner.surprises import stress_tests, subset, with_care, with_fall, worst_decade

COARSE = PlanSettings(n_paths=600, solver=SolverSettings(8, 8, 6, 30), late_years=False)
CARE = Spending(20_000.0, care_cost=30_000.0, care_from_age=85.0, care_years=2.0, care_for="first")


@pytest.fixture(scope="module")
def stressed():
    household = single(
        spending=CARE, incomes=(Income("Pension", "Lin", IncomeKind.STATE_PENSION, 14_000.0, 65.0),)
    )
    solved, results = stress_tests(household, COARSE)
    return solved, {result.name: result for result in results}


def test_every_stress_is_there_once(stressed):
    _, results = stressed
    assert list(results) == [
        "as planned",
        "returns 1 point lower",
        "returns 2 points lower",
        "prices rise 1 point more",
        "prices rise 2 points more",
        "alive to 100",
        "a bad first decade (worst tenth)",
        "a fall of 30% in year one",
        "state pensions a fifth lower from 2036",
        "care needed (first)",
    ]


def test_surprises_leave_this_year_as_planned(stressed):
    _, results = stressed
    given = results["as planned"].result
    for result in results.values():
        if result.how == "surprise":
            assert result.result.spending_this_year == pytest.approx(given.spending_this_year, abs=1e-6)
    assert results["returns 1 point lower"].result.spending_this_year < given.spending_this_year


def test_stresses_hurt_and_more_of_them_hurts_more(stressed):
    """On the same draws, so the order is not a matter of luck."""
    _, results = stressed
    cost = {name: r.result.wealth_cost for name, r in results.items() if r.comparable}
    assert cost["as planned"] == 0
    assert 0 < cost["returns 1 point lower"] < cost["returns 2 points lower"]
    # Level pensions aside, faster prices take the same off real returns as lower returns do.
    assert 0 < cost["prices rise 1 point more"] < cost["prices rise 2 points more"]
    assert cost["a fall of 30% in year one"] > 0
    assert cost["state pensions a fifth lower from 2036"] > 0
    assert cost["care needed (first)"] > 0


def test_a_fall_is_a_fall_of_every_portfolio_in_year_one(stressed):
    solved, _ = stressed
    fallen = with_fall(solved.problem, solved.scenarios, 0.3)
    everyone = np.arange(fallen.n_paths)
    for portfolio in range(solved.problem.n_portfolios):
        held = np.full(fallen.n_paths, portfolio)
        assert np.allclose(fallen.returns(solved.problem, 0, everyone, held), 0.7)
        for t in (1, 7):
            before = solved.scenarios.returns(solved.problem, t, everyone, held)
            assert np.array_equal(fallen.returns(solved.problem, t, everyone, held), before)


def test_worst_decade_is_a_tenth_of_long_lives(stressed):
    solved, _ = stressed
    worst = worst_decade(solved)
    lived = solved.paths.alive[:, 9].sum()
    assert worst.size == round(0.1 * lived)
    part = subset(solved.paths, worst)
    assert part.n_paths == worst.size
    assert part.alive[:, 9].all()
    assert np.median(part.balances[:, 10].sum(axis=1)) < np.median(
        solved.paths.balances[solved.paths.alive[:, 10], 10].sum(axis=1)
    )


def test_care_is_paid_while_the_person_lives_only():
    household = couple(spending=replace(CARE, essential=52_000.0, care_for="second", survivor_share=0.7))
    problem = build_problem(household)
    changed, first = with_care(household, problem) or (None, None)
    assert changed is not None
    assert first == 85 - 71
    extra = problem.income - changed.income
    assert np.flatnonzero(extra.any(axis=1)).tolist() == [14, 15]
    assert extra[14].tolist() == [30_000.0, 0.0, 30_000.0]  # both alive, Ola alone, Per alone
    last = replace(household, spending=replace(household.spending, care_for="last survivor"))
    changed, _ = with_care(last, problem) or (None, None)
    assert changed is not None
    assert (problem.income - changed.income)[11].tolist() == [0.0, 30_000.0, 0.0]  # Ola alone at 85
    assert with_care(couple(), problem) is None


def test_state_pensions_are_cut_from_the_year_on_and_no_sooner():
    rows = (
        Income("Prices", "Lin", IncomeKind.STATE_PENSION, 10_000.0, 65.0),
        Income("Level", "Lin", IncomeKind.STATE_PENSION, 5_000.0, 65.0, rise=Rise("fixed", 0.0)),
        Income("Rising", "Lin", IncomeKind.STATE_PENSION, 2_000.0, 83.0, rise=Rise("fixed", 0.03)),
        Income("Later", "Lin", IncomeKind.STATE_PENSION, 1_000.0, 90.0),
        Income("Works", "Lin", IncomeKind.PENSION, 3_000.0, 65.0),
    )
    household = single(incomes=rows)  # 80 on the plan date
    cut = state_pensions_cut(household, 2031)
    assert cut is not None
    before, after = build_problem(household).income[:, 0], build_problem(cut).income[:, 0]
    works = 3_000.0
    assert np.allclose(after[:5], before[:5])
    assert np.allclose(after[5:] - works, 0.8 * (before[5:] - works))
    assert state_pensions_cut(single(), 2031) is None


def test_a_couple_dies_in_turn():
    household = couple(tax_rules="none", accounts=couple().accounts[:2])
    _, results = stress_tests(household, replace(COARSE, n_paths=200))
    names = [result.name for result in results]
    assert "Ola dies in 5 years" in names
    assert "Per dies in 5 years" in names
    assert "both alive to 100" in names
    assert not any("care" in name for name in names)
    # What is not comparable says so: other lives have no common measure with the plan's.
    assert {r.name for r in results if not r.comparable} == {
        "both alive to 100",
        "Ola dies in 5 years",
        "Per dies in 5 years",
        "a bad first decade (worst tenth)",
    }
