"""Searches over what-ifs: closed forms where there are any, and laws where there are none."""

from dataclasses import replace

import numpy as np
import pytest
from households import couple, single

from planner.decisions import (
    break_even,
    decisions,
    start_quotes,
    started_at,
    with_annuity,
    worked_until,
    workers,
)
from planner.household import (
    Account,
    AccountType,
    AnnuityQuote,
    AssetClass,
    Income,
    IncomeKind,
    MarketAssumptions,
    Portfolio,
    Preferences,
    Rise,
    Spending,
    StartChoice,
)
from planner.optimum.recursion import SolverSettings
from planner.plan import PlanSettings
from planner.problem_building import build_problem

COARSE = PlanSettings(n_paths=300, solver=SolverSettings(12, 12, 8, 40), late_years=False)
CERTAIN = MarketAssumptions(0.02, (AssetClass("Cash", 0.03, 0.0),), ((1.0,),))
# Nobody's bills are cut and nothing is floored: plain risk aversion, as in Yaari's problem.
PLAIN = Preferences(risk_aversion=3.0, shortfall_weight=1.0, fallback_income=200.0)


def annuitant(rate: float, wish: float = 0.0):
    """Lin, 80, with 250,000 at a certain return, no pension, and a quote that rises with prices."""
    return single(
        markets=CERTAIN,
        portfolios=(Portfolio("Cash", (1.0,)),),
        incomes=(),
        spending=Spending(2_000.0),
        preferences=replace(PLAIN, wish_to_leave=wish),
        annuity_quote=AnnuityQuote("Lin", "Deposit", rate, Rise("prices")),
    )


def fair_rate() -> float:
    """1 / sum_t v^t tp_80 at the certain real return: payments at the start of each year."""
    death = build_problem(annuitant(0.05)).death[:, 0]
    alive = np.cumprod(np.append(1.0, 1 - death[:-1]))
    discount = (1.02 / 1.03) ** np.arange(death.size)
    return float(1 / (alive * discount).sum())


def found(household, key):
    curves, _ = decisions(household, COARSE)
    return [curve for curve in curves if curve.key == key]


def test_yaari_all_of_it_at_a_fair_rate_without_a_wish_to_leave():
    """Yaari (1965): no bequest motive and a fair annuity, so everything is annuitised."""
    (curve,) = found(annuitant(fair_rate()), "annuity")
    assert curve.best == len(curve.points) - 1
    worths = [point.worth for point in curve.points]
    assert np.all(np.diff(worths) > 0)
    # All in the annuity: consumption is level at rate x price, whatever the preferences (beta = 1, r > 0
    # would tilt it; at 1 % and gamma 3 the tilt is third-order beside the rounding here).
    assert curve.points[-1].steady == pytest.approx(fair_rate() * 250_000, rel=1e-3)


def test_an_annuity_that_pays_less_than_savings_earn_is_not_bought():
    (curve,) = found(annuitant(0.02), "annuity")
    assert curve.best == 0
    assert curve.points[0].worth == 0
    assert curve.points[0].as_given


def test_a_wish_to_leave_keeps_some():
    (curve,) = found(annuitant(fair_rate(), wish=100_000.0), "annuity")
    assert 0 < curve.best < len(curve.points) - 1


def test_annuity_is_paid_for():
    household = annuitant(0.08)
    bought = with_annuity(household, 0.4)
    assert bought is not None
    assert bought.accounts[0].balance == pytest.approx(150_000)
    assert build_problem(bought).income[0, 0] == pytest.approx(0.08 * 100_000)
    aside = replace(household, spending=replace(household.spending, cash_aside=50_000.0))
    everything = with_annuity(aside, 1.0)
    assert everything is not None
    assert everything.accounts[0].balance == pytest.approx(50_000)  # what is kept aside is not for sale


def test_break_even_age_is_where_the_totals_meet():
    """9,000 from 62 against 12,600 from 67: (67 x 12,600 - 62 x 9,000) / 3,600 = 79.5."""
    quotes = [(62.0, 9_000.0), (67.0, 12_600.0), (70.0, 9_000.0)]
    assert break_even(quotes, 67.0) == pytest.approx(79.5)
    assert (79.5 - 62) * 9_000 == pytest.approx((79.5 - 67) * 12_600)
    assert break_even(quotes, 62.0) is None
    assert break_even(quotes, 70.0) is None  # later and not more: never


def test_quotes_hold_the_income_s_own_row_and_no_past_age():
    household = couple(
        incomes=(Income("State pension Ola", "Ola", IncomeKind.STATE_PENSION, 22_000.0, 76.0),),
        start_choices=tuple(StartChoice("State pension Ola", age, 1_000 * age) for age in (70.0, 75.0, 78.0)),
    )
    assert start_quotes(household, "State pension Ola") == [
        (75.0, 75_000.0),
        (76.0, 22_000.0),
        (78.0, 78_000.0),
    ]
    changed = started_at(household, "State pension Ola", 78.0, 78_000.0)
    assert changed.incomes[0].from_age == 78.0


def test_a_pension_that_pays_more_for_waiting_less_is_started_sooner():
    household = single(
        people=(
            replace(single().people[0], date_of_birth=single().people[0].date_of_birth.replace(year=1960)),
        ),
        incomes=(Income("Pension", "Lin", IncomeKind.STATE_PENSION, 14_000.0, 67.0),),
        start_choices=(StartChoice("Pension", 66.0, 14_500.0), StartChoice("Pension", 70.0, 30_000.0)),
    )
    (curve,) = found(household, "start-age")
    assert [point.as_given for point in curve.points] == [False, True, False]
    assert curve.best == 2  # more than double for three years
    assert curve.points[0].worth > curve.points[1].worth == 0  # sooner and more


def test_work():
    household = single(
        people=(
            replace(single().people[0], date_of_birth=single().people[0].date_of_birth.replace(year=1964)),
        ),
        incomes=(
            Income("Work", "Lin", IncomeKind.WAGES, 30_000.0, 50.0, 63.0),
            Income("Pension", "Lin", IncomeKind.PENSION, 14_000.0, 65.0),
        ),
        accounts=(
            Account("Deposit", "Lin", AccountType.TAXABLE, 250_000.0),
            Account("Free", "Lin", AccountType.TAX_FREE, 10_000.0, paid_in=5_000.0, paid_in_until_age=63.0),
        ),
        spending=Spending(20_000.0, 25_000.0),
    )
    assert workers(household) == [("Lin", 61, 63.0)]
    longer = worked_until(household, "Lin", 65.0)
    assert longer.incomes[0].to_age == 65.0
    assert longer.accounts[1].paid_in_until_age == 65.0
    assert [income.name for income in worked_until(household, "Lin", 50.0).incomes] == ["Pension"]
    curves, _ = decisions(household, replace(COARSE, n_paths=100, solver=SolverSettings(8, 8, 5, 30)))
    (curve,) = (c for c in curves if c.key == "work-longer")
    assert np.all(np.diff([point.worth for point in curve.points]) > 0)
    assert curve.best == len(curve.points) - 1
    (stop,) = (c for c in curves if c.key == "stop-work")
    answer = stop.points[stop.best]
    assert answer.steady >= 25_000 or stop.best == len(stop.points) - 1
    assert all(point.steady < 25_000 for point in stop.points[: stop.best])


def test_conversions_and_portfolios():
    household = single(
        tax_rules="us-federal-2026",
        accounts=(
            Account("Deposit", "Lin", AccountType.TAXABLE, 150_000.0),
            Account("Pot", "Lin", AccountType.TAX_DEFERRED, 350_000.0),
        ),
        preferences=Preferences(conversions_allowed=True),
    )
    curves, left_out = decisions(household, COARSE)
    by_key = {curve.key: curve for curve in curves}
    conversion = by_key["conversion"]
    assert [point.as_given for point in conversion.points] == [False] * (len(conversion.points) - 1) + [True]
    assert conversion.points[-1].worth == 0
    # Free choice is at least as good as none; coarse grids may blur it by a fraction of a per cent.
    assert conversion.points[0].worth < 0.005 * 500_000
    portfolio = by_key["portfolio"]
    assert portfolio.best == 0
    assert all(point.worth <= 1e-6 for point in portfolio.points)
    assert len(left_out) == 3  # start choices, annuity, work
