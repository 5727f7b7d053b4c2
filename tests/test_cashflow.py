"""Money balances to the cent; the funding order; withdrawals that reach a target, jumps included."""

from __future__ import annotations

import numpy as np
import pytest
from builders import bracket_tax, jump_tax, single_problem
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.testing import assert_allclose

from planner.cashflow import (
    advance,
    estate_money,
    grow,
    least_withdrawal,
    withdraw_for_spending,
    withdraw_gross,
)
from planner.piecewise import PiecewiseLinear
from planner.problem import TAX_DEFERRED, TAX_FREE, TAXABLE, Decision, Problem, State

CENT = 0.01
TAXES = {
    "brackets": bracket_tax(),
    "a jump": jump_tax(),
    "two jumps": PiecewiseLinear(
        np.array([0.0, 20_000.0, 20_000.0, 24_000.0, 24_000.0]),
        np.array([0.0, 2_000.0, 5_000.0, 5_400.0, 9_400.0]),
        0.25,
    ),
    # An allowance that is tapered away can make the marginal rate exceed 1 for a while.
    "rate above 1": PiecewiseLinear(
        np.array([0.0, 15_000.0, 20_000.0]), np.array([0.0, 1_500.0, 7_500.0]), 0.2
    ),
}

money = st.floats(0, 150_000)


def one_path(balances: tuple[float, float, float]) -> State:
    zero = np.zeros(1)
    return State(np.array([balances]), np.zeros(1, dtype=np.int64), np.ones(1), zero, zero, np.zeros((1, 0)))


def problem_of(
    tax: PiecewiseLinear, income: float = 0.0, minimum: float = 0.0, **overrides: object
) -> Problem:
    return single_problem(
        1,
        tax=((tax,),),
        income=np.array([[income]]),
        minimum_share=np.array([[minimum]]),
        **overrides,
    )


def kept(tax: PiecewiseLinear, withdrawal: float) -> float:
    return float(withdrawal - tax(withdrawal))


# The ledger -------------------------------------------------------------------------------------


@settings(deadline=None, max_examples=300)
@given(
    balances=st.tuples(money, money, money),
    withdraw=st.floats(-10_000, 200_000),
    convert=st.floats(-10_000, 200_000),
    spending=st.floats(-10_000, 400_000),
    income=st.floats(-80_000, 80_000),
    contributions=st.tuples(st.floats(0, 10_000), st.floats(0, 10_000)),
    shares=st.tuples(st.floats(0, 1), st.floats(0, 1)),
    gross=st.floats(0.4, 2.0),
    conversions=st.booleans(),
    ceiling=st.sampled_from([20_000.0, np.inf]),
    tax=st.sampled_from(sorted(TAXES)),
    portfolio=st.sampled_from([0, 1]),
)
def test_a_year_balances_to_the_cent_whatever_is_decided(
    balances: tuple[float, float, float],
    withdraw: float,
    convert: float,
    spending: float,
    income: float,
    contributions: tuple[float, float],
    shares: tuple[float, float],
    gross: float,
    conversions: bool,
    ceiling: float,
    tax: str,
    portfolio: int,
) -> None:
    least, most = min(shares), max(shares)
    problem = problem_of(
        TAXES[tax],
        income,
        least,
        accessible_share=np.array([[most]]),
        contribution=np.array([[[0.0, *contributions]]]),
        conversions=conversions,
        ceiling=ceiling,
    )
    decision = Decision(
        np.array([withdraw]),
        np.array([convert]),
        np.array([spending]),
        np.array([portfolio]),
        np.zeros((1, 0)),
    )
    state = one_path(balances)
    year = advance(problem, 0, state, decision, np.array([gross]))
    left_over = (
        year.opening.sum()
        + year.income
        + year.contribution.sum()
        + year.growth.sum()
        - (year.spending + year.tax + year.closing.sum())
    )
    assert abs(left_over[0]) < CENT
    assert (year.closing >= 0).all()
    deferred = balances[TAX_DEFERRED]
    w2, k = year.withdrawal[0, TAX_DEFERRED], year.conversion[0]
    # 1e-6: rounding of sums of balances up to 1e6.
    assert least * deferred - 1e-6 <= w2 <= w2 + k <= most * deferred + 1e-6
    assert k == 0 or conversions
    assert year.tax[0] == pytest.approx(float(TAXES[tax](w2 + k)), abs=1e-9)
    assert year.spending[0] <= ceiling
    # Negative spending is what cannot be met: only when every account but tax-deferred is empty.
    if year.spending[0] < 0:
        invested = year.closing[0] - year.growth[0]
        assert_allclose(invested[[TAXABLE, TAX_FREE]], [0, contributions[1]], atol=1e-6)


def test_a_year_by_hand() -> None:
    """Cash 20,000 + 12,000 + 25,000 - 2,000 = 55,000; spends 60,000: tax-free pays 5,000."""
    problem = problem_of(bracket_tax(), 12_000.0, 0.0, conversions=True, drag=np.array([0.0, 0.01]))
    decision = Decision(
        np.array([25_000.0]), np.array([5_000.0]), np.array([60_000.0]), np.array([1]), np.zeros((1, 0))
    )
    year = advance(problem, 0, one_path((20_000.0, 100_000.0, 4_000.0)), decision, np.array([1.10]))
    # Withdrawal and conversion are taxed alike: 10 % of the 20,000 above the allowance.
    assert year.tax[0] == pytest.approx(2_000.0)
    assert_allclose(year.withdrawal[0], [20_000.0, 25_000.0, 5_000.0])
    assert_allclose(year.closing[0], [0.0, 70_000.0 * 1.10, 4_000.0 * 1.10])


def test_drag_is_taken_from_taxable_alone() -> None:
    problem = problem_of(bracket_tax(), drag=np.array([0.0, 0.01]))
    nothing = np.zeros(1)
    decision = Decision(nothing, nothing, nothing, np.array([1]), np.zeros((1, 0)))
    year = advance(problem, 0, one_path((1_000.0, 1_000.0, 1_000.0)), decision, np.array([1.05]))
    assert_allclose(year.closing[0], [1_040.0, 1_050.0, 1_050.0])


# Least withdrawal -------------------------------------------------------------------------------


@settings(deadline=None, max_examples=300)
@given(tax=st.sampled_from(sorted(TAXES)), net=st.floats(-20_000, 120_000), at_least=st.floats(0, 90_000))
def test_least_withdrawal_reaches_and_is_least(tax: str, net: float, at_least: float) -> None:
    function = TAXES[tax]
    w = float(least_withdrawal(function, net, at_least))
    assert w >= at_least
    # 1e-7: rounding of one division at amounts up to 1e5.
    assert kept(function, w) >= net - 1e-7
    if w > at_least:
        below = np.linspace(at_least, w, 400, endpoint=False)
        # The last points come as near as 1/400 of the distance; they keep less than asked for.
        assert (below - function(below) < net + 1e-7).all()


def test_least_withdrawal_stops_just_before_a_jump() -> None:
    function = jump_tax(at=25_000.0)
    just_before = kept(function, 25_000.0)
    assert float(least_withdrawal(function, just_before)) == 25_000.0
    # A cent more costs the whole surcharge: 1,500 more at a marginal rate of 10 %.
    assert float(least_withdrawal(function, just_before + 0.9)) == pytest.approx(25_000 + 1_500.9 / 0.9)


def test_least_withdrawal_is_impossible_where_tax_takes_everything() -> None:
    with pytest.raises(ValueError, match="last marginal rate"):
        least_withdrawal(PiecewiseLinear(np.array([0.0]), np.array([0.0]), 1.0), 10.0)


# Spending targets -------------------------------------------------------------------------------


@settings(deadline=None, max_examples=300)
@given(
    balances=st.tuples(money, money, money),
    target=st.floats(0, 150_000),
    income=st.floats(-40_000, 40_000),
    minimum=st.floats(0, 0.5),
    tax=st.sampled_from(sorted(TAXES)),
)
def test_target_is_reached_or_everything_is_used(
    balances: tuple[float, float, float], target: float, income: float, minimum: float, tax: str
) -> None:
    function = TAXES[tax]
    problem, state = problem_of(function, income, minimum), one_path(balances)
    withdraw, spending = (v[0] for v in withdraw_for_spending(problem, 0, state, np.array([target])))
    assert minimum * balances[1] - 1e-9 <= withdraw <= balances[1] + 1e-9
    available = balances[0] + income + kept(function, withdraw) + balances[2]
    # 1e-6: rounding of sums of amounts up to 1e6.
    assert spending <= available + 1e-6
    if spending < target - 1e-6:
        assert withdraw == balances[1]
        assert spending == pytest.approx(available, abs=1e-6)
    cash_needed = target - balances[0] - income
    if withdraw > minimum * balances[1]:  # more than the least that must be taken: it was needed
        below = np.linspace(minimum * balances[1], withdraw, 200, endpoint=False)
        assert (below - function(below) < cash_needed + 1e-6).all()


def test_a_minimum_just_above_a_jump_does_not_leave_the_target_unmet() -> None:
    """20,000 would be enough, but 20,400 must be taken and pays the surcharge: take more to make up."""
    function = TAXES["two jumps"]
    problem, state = problem_of(function, minimum=0.204), one_path((0.0, 100_000.0, 0.0))
    target = kept(function, 20_000.0)
    withdraw, spending = withdraw_for_spending(problem, 0, state, np.array([target]))
    assert spending[0] == target
    assert withdraw[0] > 20_400
    assert kept(function, withdraw[0]) == pytest.approx(target)


def test_target_is_held_to_the_ceiling() -> None:
    problem = problem_of(bracket_tax(), ceiling=30_000.0, need=np.array([[0.5]]))
    _, spending = withdraw_for_spending(problem, 0, one_path((90_000.0, 0.0, 0.0)), np.array([50_000.0]))
    assert spending[0] == 15_000.0


# Gross withdrawals ------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("amount", "withdraw", "spending"),
    [
        (4_000.0, 5_000.0, 16_000.0),  # the minimum, 5,000, is above the amount
        (20_000.0, 5_000.0, 32_000.0),  # minimum first, then taxable
        (50_000.0, 20_000.0, 61_000.0),  # then tax-deferred: 10 % of 10,000 in tax
        (140_000.0, 100_000.0, 131_000.0),  # then tax-free; tax 3,000 + 30 % of 60,000 = 21,000
        (1e9, 100_000.0, 161_000.0),  # all there is
    ],
)
def test_gross_withdrawal_takes_accounts_in_order(amount: float, withdraw: float, spending: float) -> None:
    problem = problem_of(bracket_tax(), income=12_000.0, minimum=0.05)
    w2, c = withdraw_gross(problem, 0, one_path((30_000.0, 100_000.0, 40_000.0)), np.array([amount]))
    assert (w2[0], c[0]) == (pytest.approx(withdraw), pytest.approx(spending))


def test_minimum_above_the_amount_goes_to_taxable() -> None:
    problem = problem_of(bracket_tax(), income=12_000.0, minimum=0.05, drag=np.zeros(2))
    state = one_path((30_000.0, 100_000.0, 40_000.0))
    w2, c = withdraw_gross(problem, 0, state, np.array([4_000.0]))
    decision = Decision(w2, np.zeros(1), c, np.array([0]), np.zeros((1, 0)))
    year = advance(problem, 0, state, decision, np.ones(1))
    assert_allclose(year.closing[0], [31_000.0, 95_000.0, 40_000.0])


def test_a_large_one_off_cost_raises_the_withdrawal_until_spending_is_nothing() -> None:
    problem = problem_of(bracket_tax(), income=-60_000.0)
    w2, c = withdraw_gross(problem, 0, one_path((30_000.0, 100_000.0, 0.0)), np.array([4_000.0]))
    assert c[0] == 0
    assert kept(bracket_tax(), w2[0]) == pytest.approx(30_000.0)
    w2, c = withdraw_gross(problem, 0, one_path((30_000.0, 10_000.0, 5_000.0)), np.array([4_000.0]))
    assert (w2[0], c[0]) == (10_000.0, pytest.approx(-15_000.0))


@settings(deadline=None, max_examples=200)
@given(
    balances=st.tuples(money, money, money),
    amount=st.floats(0, 300_000),
    minimum=st.floats(0, 0.5),
    accessible=st.floats(0.5, 1),
)
def test_what_leaves_the_accounts_is_the_amount(
    balances: tuple[float, float, float], amount: float, minimum: float, accessible: float
) -> None:
    """With income enough for the tax, B falls by the amount, or by all that is accessible."""
    problem = problem_of(bracket_tax(), 60_000.0, minimum, accessible_share=np.array([[accessible]]))
    state = one_path(balances)
    w2, c = withdraw_gross(problem, 0, state, np.array([amount]))
    decision = Decision(w2, np.zeros(1), c, np.array([0]), np.zeros((1, 0)))
    year = advance(problem, 0, state, decision, np.ones(1))
    left = (year.closing - year.growth).sum()
    most = balances[0] + accessible * balances[1] + balances[2]
    assert sum(balances) - left == pytest.approx(min(amount, most), abs=1e-6)


def test_each_account_counts_in_the_estate_once():
    """Tax-deferred money after heirs' tax of 30 %, the others whole, and the cash kept aside."""
    problem = single_problem(2, heirs_tax_rate=0.3, cash_aside=5.0)
    assert_allclose(estate_money(problem, 1_000.0 * np.eye(3)), [1_005.0, 705.0, 1_005.0], rtol=1e-15)


def test_a_marginal_rate_of_exactly_one_is_passed_over():
    """From 100 to 200 every unit goes in tax: 150 after tax takes 250."""
    tax = PiecewiseLinear(np.array([0.0, 100.0, 200.0]), np.array([0.0, 0.0, 100.0]), 0.0)
    assert least_withdrawal(tax, 150.0) == 250.0


def test_growth_of_balances_in_any_shape():
    """Accounts are the last axis; drag is taxable's alone."""
    gross, drag = np.array([[1.1, 0.9]]), np.array([[0.01], [0.02]])  # (1, 2) and (2, 1): all (2, 2)
    grown = grow(np.full((2, 2, 3), 100.0), gross, drag)
    assert_allclose(grown[..., TAXABLE], [[109.0, 89.0], [108.0, 88.0]], rtol=1e-14)
    assert_allclose(grown[..., TAX_FREE], [[110.0, 90.0], [110.0, 90.0]], rtol=1e-14)


def test_what_left_each_account():
    """Income above spending is added to taxable, so that nothing left it; 3,000 then leaves it."""
    problem = problem_of(bracket_tax(), income=12_000.0)
    for spending, left in ((5_000.0, 0.0), (12_000.5, 0.5), (15_000.0, 3_000.0)):
        decision = Decision(np.zeros(1), np.zeros(1), np.array([spending]), np.array([0]), np.zeros((1, 0)))
        year = advance(problem, 0, one_path((10_000.0, 1_000.0, 1_000.0)), decision, np.ones(1))
        assert_allclose(year.withdrawal[0], [left, 0.0, 0.0], atol=1e-9)  # rounding at 1e4


def test_an_account_withdrawn_from_entirely_is_empty():
    problem = problem_of(bracket_tax())
    decision = Decision(np.array([1e9]), np.zeros(1), np.zeros(1), np.array([0]), np.zeros((1, 0)))
    year = advance(problem, 0, one_path((0.0, 1_000.0, 0.0)), decision, np.ones(1))
    assert year.closing[0, TAX_DEFERRED] == 0.0


def test_the_ceiling_rises_and_falls_with_the_need():
    """A ceiling of 30,000 at half the need: 15,000, whoever decides."""
    problem = problem_of(bracket_tax(), ceiling=30_000.0, need=np.array([[0.5]]))
    state = one_path((90_000.0, 0.0, 0.0))
    decision = Decision(np.zeros(1), np.zeros(1), np.array([50_000.0]), np.array([0]), np.zeros((1, 0)))
    assert advance(problem, 0, state, decision, np.ones(1)).spending[0] == 15_000.0
    assert withdraw_gross(problem, 0, state, np.array([50_000.0]))[1][0] == 15_000.0


def test_a_large_cost_on_one_path_leaves_the_others_alone():
    """In the second status 60,000 fall due; the first spends its half unit of money as it is."""
    problem = single_problem(
        1,
        statuses=("first", "second"),
        transition=np.zeros((1, 2, 2)),
        death=np.ones((1, 2)),
        tax=((bracket_tax(), bracket_tax()),),
        income=np.array([[0.0, -60_000.0]]),
        contribution=np.zeros((1, 2, 3)),
        need=np.ones((1, 2)),
        minimum_share=np.zeros((1, 2)),
        accessible_share=np.ones((1, 2)),
    )
    balances = np.tile([30_000.0, 100_000.0, 0.0], (2, 1))
    nothing = np.zeros(2)
    state = State(balances, np.array([0, 1]), np.ones(2), nothing, nothing, np.zeros((2, 0)))
    w2, c = withdraw_gross(problem, 0, state, np.array([0.5, 0.5]))
    assert_allclose(c, [0.5, 0.0])
    assert w2[0] == 0.0
    assert kept(bracket_tax(), w2[1]) == pytest.approx(30_000.0)


def test_least_withdrawals_of_many_at_once():
    """Nothing where nothing is asked for; less than a unit; across a stretch where all goes in tax."""
    tax = PiecewiseLinear(np.array([0.0, 100.0, 200.0]), np.array([0.0, 0.0, 100.0]), 0.0)
    assert_allclose(least_withdrawal(tax, [0.0, 0.5, 50.0, 150.0]), [0.0, 0.5, 50.0, 250.0], rtol=1e-14)
    # 150 keeps 100, which is enough: where the next unit kept lies does not matter.
    assert least_withdrawal(tax, 100.0, 150.0) == 150.0
