"""Utility of spending and of an estate: shape, inverses, derivatives, limits."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.testing import assert_allclose

from planner.household import risk_aversion_from_gambles
from planner.preferences import EstateUtility, SpendingUtility, estate_strength

ESSENTIAL = 30_000.0
gammas = st.one_of(st.sampled_from([0.5, 1.0, 2.0, 5.0]), st.floats(0.3, 12.0))
utilities = st.builds(
    lambda gamma, kappa, share: SpendingUtility(gamma, kappa, ESSENTIAL, share * ESSENTIAL),
    gammas,
    st.floats(1.0, 10.0),
    st.floats(0.02, 1.0),
)
amounts = st.floats(-20_000.0, 300_000.0)


def rounding(utility: SpendingUtility, x: float) -> float:
    """Money that double precision cannot tell apart at x: an ulp of utility over its slope, and of x."""
    ulp = 1e-15 * max(abs(float(utility.value(x))), abs(float(utility.power(ESSENTIAL))), 1e-300)
    return 100 * ulp / float(utility.marginal(x)) + 1e-10 * max(abs(x), 1.0)


@settings(deadline=None, max_examples=300)
@given(utilities, amounts)
def test_inverse_is_the_inverse(utility: SpendingUtility, x: float) -> None:
    assert abs(float(utility.inverse(utility.value(x))) - x) <= rounding(utility, x)


@settings(deadline=None, max_examples=200)
@given(utilities, amounts)
def test_value_and_slope_at_once(utility: SpendingUtility, x: float) -> None:
    """One power in place of two: a few roundings of the larger of utility and its line."""
    both = utility.value_and_marginal(x)
    allowed = 1e-13 * (abs(float(utility.value(utility.floor))) + abs(float(utility.value(x))) + 1e-300)
    assert_allclose(both[0], utility.value(x), rtol=1e-13, atol=allowed)
    assert_allclose(both[1], utility.marginal(x), rtol=1e-13)


@settings(deadline=None, max_examples=200)
@given(utilities, amounts)
def test_slope_at_a_value(utility: SpendingUtility, x: float) -> None:
    """At most gamma + 1 times the rounding of the place where the value is reached."""
    if utility.shortfall_weight != 1:
        with pytest.raises(ValueError, match="no kink"):
            utility.inverse_and_marginal(utility.value(x))
    smooth = SpendingUtility(utility.risk_aversion, 1.0, ESSENTIAL, utility.floor)
    place, slope = smooth.inverse_and_marginal(smooth.value(x))
    assert_allclose(place, smooth.inverse(smooth.value(x)), rtol=1e-14)
    allowed = (smooth.risk_aversion + 1) * rounding(smooth, x) / max(x, smooth.floor) + 1e-13
    assert_allclose(slope, smooth.marginal(x), rtol=allowed)


@settings(deadline=None, max_examples=200)
@given(utilities, amounts, amounts, st.floats(0, 1))
def test_utility_is_increasing_and_concave(
    utility: SpendingUtility, a: float, b: float, share: float
) -> None:
    low, high = sorted((a, b))
    slack = 1e-12 * (1 + abs(float(utility.value(low))))
    assert utility.value(low) <= utility.value(high) + slack
    between = share * a + (1 - share) * b
    chord = share * utility.value(a) + (1 - share) * utility.value(b)
    assert utility.value(between) >= chord - slack
    assert utility.marginal(low) >= utility.marginal(high) * (1 - 1e-12)


@settings(deadline=None, max_examples=200)
@given(utilities, amounts)
def test_marginal_is_the_slope(utility: SpendingUtility, x: float) -> None:
    """Central difference over 2 units of money; away from the floor and the kink by more than that."""
    if min(abs(x - utility.floor), abs(x - ESSENTIAL)) < 2:
        x += 5.0
    slope = (float(utility.value(x + 1)) - float(utility.value(x - 1))) / 2
    # The third derivative gives (gamma/x)^2/6 of it at the least x with curvature, 600; rounding the rest.
    allowed = ((utility.risk_aversion + 2) / max(x, utility.floor)) ** 2 / 5 + 1e-6
    assert slope == pytest.approx(float(utility.marginal(x)), rel=allowed, abs=rounding(utility, x) * slope)


@settings(deadline=None, max_examples=200)
@given(utilities, st.floats(0.01, 5.0), st.floats(0, 200_000.0))
def test_inverse_marginal_maximises_utility_less_price(
    utility: SpendingUtility, relative_price: float, other: float
) -> None:
    """At a price m below the slope of the floor's line nothing beats the chosen spending."""
    m = relative_price * float(utility.power_marginal(ESSENTIAL))
    line = float(utility.marginal(0.5 * utility.floor))
    if m >= line:
        # To rounding: the floor may be one step below E.
        assert float(utility.inverse_marginal(m)) == pytest.approx(utility.floor, rel=1e-15)
        return
    best = float(utility.inverse_marginal(m))
    gain = float(utility.value(other) - utility.value(best)) - m * (other - best)
    assert gain <= 1e-9 * (abs(float(utility.value(other))) + m * max(other, best))


def test_kink_at_essential_spending() -> None:
    """Marginal utility falls from kappa U'(E) to U'(E), so a range of prices is answered with exactly E."""
    utility = SpendingUtility(4.0, 3.0, ESSENTIAL, 3_000.0)
    u = float(utility.power_marginal(ESSENTIAL))
    below = float(utility.value(ESSENTIAL) - utility.value(ESSENTIAL - 1e-3)) / 1e-3
    above = float(utility.value(ESSENTIAL + 1e-3) - utility.value(ESSENTIAL)) / 1e-3
    assert below == pytest.approx(3 * u, rel=1e-6)  # second derivative over 1e-3 of 30,000: 1e-7
    assert above == pytest.approx(u, rel=1e-6)
    assert utility.marginal(ESSENTIAL) == pytest.approx(u)
    assert utility.marginal(ESSENTIAL - 1e-6) == pytest.approx(3 * u)
    assert_allclose(utility.inverse_marginal(u * np.array([1.0, 1.5, 2.999])), ESSENTIAL)
    assert utility.inverse_marginal(u * 0.999) > ESSENTIAL
    assert utility.inverse_marginal(u * 3.001) < ESSENTIAL


def test_straight_line_below_the_floor() -> None:
    """Tangent at the floor, for negative spending too: equal steps lose equal utility."""
    utility = SpendingUtility(5.0, 2.0, ESSENTIAL, 3_000.0)
    values = utility.value(np.array([-6_000.0, -3_000.0, 0.0, 3_000.0]))
    assert_allclose(np.diff(values), 3_000.0 * utility.marginal(0.0), rtol=1e-12)
    assert utility.marginal(-1e6) == utility.marginal(2_999.0) == pytest.approx(utility.marginal(3_000.0))


def test_the_floor_may_be_essential_spending() -> None:
    utility = SpendingUtility(3.0, 2.0, ESSENTIAL, ESSENTIAL)
    assert_allclose(
        np.diff(utility.value(np.array([0.0, 15_000.0, 30_000.0]))), np.full(2, 15_000 * 2 / ESSENTIAL)
    )


def test_logarithm_is_the_limit() -> None:
    """As gamma -> 1, differences of utility tend to those of the logarithm (U itself shifts)."""
    near, log = (SpendingUtility(g, 2.0, ESSENTIAL, 3_000.0) for g in (1 + 1e-6, 1.0))
    x = np.array([-5_000.0, 1_000.0, 10_000.0, 30_000.0, 90_000.0])
    # First-order term (1 - gamma) ln(x)^2 / 2 with |ln| at most 2.3, below the floor times its line.
    assert_allclose(near.value(x) - near.value(ESSENTIAL), log.value(x) - log.value(ESSENTIAL), atol=3e-5)
    assert_allclose(near.inverse(near.value(x)), x, rtol=1e-6)
    assert log.value(ESSENTIAL * np.e) == pytest.approx(1.0)


@pytest.mark.parametrize("scale", [1e-3, 1e6])
def test_currency_does_not_matter(scale: float) -> None:
    """Money in other units, utility the same."""
    here = SpendingUtility(4.0, 3.0, ESSENTIAL, 3_000.0)
    there = SpendingUtility(4.0, 3.0, ESSENTIAL * scale, 3_000.0 * scale)
    x = np.linspace(-10_000, 100_000, 23)
    assert_allclose(there.value(x * scale), here.value(x), rtol=1e-12)
    assert_allclose(there.marginal(x * scale) * scale, here.marginal(x), rtol=1e-12)


@pytest.mark.parametrize(
    "wrong", [{"risk_aversion": 0.0}, {"shortfall_weight": 0.9}, {"floor": 0.0}, {"floor": 31_000.0}]
)
def test_impossible_parameters_are_refused(wrong: dict[str, float]) -> None:
    fields = {"risk_aversion": 4.0, "shortfall_weight": 3.0, "essential": ESSENTIAL, "floor": 3_000.0}
    with pytest.raises(ValueError, match="floor"):
        SpendingUtility(**{**fields, **wrong})


# Estate ------------------------------------------------------------------------------------------


@settings(deadline=None, max_examples=100)
@given(gammas, st.floats(0.1, 30.0), st.floats(1_000.0, 60_000.0), st.floats(100.0, 1e6))
def test_estate_marginal_is_the_slope(gamma: float, strength: float, threshold: float, b: float) -> None:
    estate = EstateUtility(SpendingUtility(gamma, 3.0, ESSENTIAL, 3_000.0), strength, threshold)
    step = 1e-4 * (b + strength * threshold)
    slope = (float(estate.value(b + step)) - float(estate.value(b - step))) / (2 * step)
    # Third derivative: (gamma + 1)^2 1e-8 / 6; the difference of two utilities loses 4 more digits.
    assert slope == pytest.approx(float(estate.marginal(b)), rel=1e-5)


def test_estate_where_the_threshold_is_zero() -> None:
    """The estate v(max(b, floor)): flat below the floor, a^gamma U(b) above it."""
    utility = SpendingUtility(4.0, 3.0, ESSENTIAL, 3_000.0)
    estate = EstateUtility(utility, 2.0, 0.0)
    assert estate.value(0.0) == estate.value(3_000.0) == pytest.approx(16 * float(utility.power(3_000.0)))
    assert estate.value(50_000.0) == pytest.approx(16 * float(utility.power(50_000.0)))
    assert estate.marginal(1_000.0) == 0.0
    assert estate.marginal(50_000.0) == pytest.approx(16 * float(utility.power_marginal(50_000.0)))


def test_no_wish_to_leave_anything() -> None:
    estate = EstateUtility(SpendingUtility(4.0, 3.0, ESSENTIAL, 3_000.0))
    assert not estate.wanted
    assert_allclose(estate.value(np.array([0.0, 1e6])), 0.0)
    assert_allclose(estate.marginal(np.array([0.0, 1e6])), 0.0)


def test_strength_of_a_wish_in_money() -> None:
    """Strength a = wish / (c_ref - b0): at certain death and spending c_ref the household leaves the wish.

    The first-order condition U'(c) = v'(b) gives b = a (c - b0); Lockwood (2018), American Economic Review
    108(9) 2513-2550.
    """
    assert estate_strength(100_000.0, 30_000.0, 50_000.0) == pytest.approx(5.0)
    assert estate_strength(100_000.0, 30_000.0, None) == pytest.approx(100_000 / 6_000)
    assert estate_strength(100_000.0, 30_000.0, 30_000.0) == pytest.approx(100_000 / 6_000)
    assert estate_strength(0.0, 30_000.0, 50_000.0) == 0.0
    utility = SpendingUtility(3.0, 2.0, 30_000.0, 3_000.0)
    estate = EstateUtility(utility, estate_strength(100_000.0, 30_000.0, 50_000.0), 30_000.0)
    assert estate.marginal(100_000.0) == pytest.approx(float(utility.marginal(50_000.0)))


# Income gambles ----------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("third", "second", "low", "high"),
    [
        (False, False, 3.7635, np.inf),
        (False, True, 2.0, 3.7635),
        (True, False, 1.0, 2.0),
        (True, True, 0.0, 1.0),
    ],
)
def test_gamble_answers_agree_with_the_value_that_stands_for_them(
    third: bool, second: bool, low: float, high: float
) -> None:
    """Each group's stand-in lies in the group, and a person with that value gives those answers.

    Barsky, Juster, Kimball & Shapiro (1997), Quarterly Journal of Economics 112(2) 537-579: a 50-50 chance
    to double income for life or cut it by l, taken if .5 2^(1-g) + .5 (1-l)^(1-g) is worth more than 1;
    l = 1/3, then 1/2 after yes and 1/5 after no. Bounds 3.7635, 2, 1 recomputed from that condition.
    """
    gamma = risk_aversion_from_gambles(third, second)
    assert low < gamma < high
    utility = SpendingUtility(gamma, 1.0, ESSENTIAL, 1.0)

    def takes(cut: float) -> bool:
        gamble = 0.5 * utility.value(2 * ESSENTIAL) + 0.5 * utility.value((1 - cut) * ESSENTIAL)
        return bool(gamble > utility.value(ESSENTIAL))

    assert takes(1 / 3) is third
    assert takes(1 / 2 if third else 1 / 5) is second
