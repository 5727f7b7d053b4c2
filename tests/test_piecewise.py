import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from numpy.testing import assert_allclose, assert_array_equal

from planner.piecewise import (
    PiecewiseLinear,
    constant,
    identity,
    line,
    progressive,
    rate_and_room,
    step,
    steps,
    total,
)

# Off every integer knot, so that no point of comparison sits within a rounding of a jump.
POINTS = np.append(np.arange(500) * 0.1731 + 0.0071, [211.7, 1003.3])
# Values reach about 10^5 and slopes 10^2: a few roundings of the largest.
ROUNDING = 1e-8


@st.composite
def functions(draw, jumps=True):
    """Small whole numbers, so that knots, jumps and flat pieces of two functions often coincide."""
    x, y = [0.0], [float(draw(st.integers(-30, 60)))]
    for width in draw(st.lists(st.integers(0 if jumps else 1, 12), max_size=6)):
        if width == 0 and len(x) > 1 and x[-1] == x[-2]:
            continue  # at most two knots share a place
        x.append(x[-1] + width)
        y.append(float(draw(st.integers(-30, 60))))
    return PiecewiseLinear(np.array(x), np.array(y), float(draw(st.integers(-3, 3))))


def well_formed(f):
    assert f.x[0] == 0.0
    assert (np.diff(f.x) >= 0.0).all()
    assert not ((np.diff(f.x)[1:] == 0.0) & (np.diff(f.x)[:-1] == 0.0)).any()
    return f


def test_a_jump_takes_the_left_value():
    f = step(10.0, 5.0)
    assert_array_equal(f([0.0, 10.0, 10.0000001, 20.0]), [0.0, 0.0, 5.0, 5.0])
    assert_array_equal(f.limit_from_right([9.0, 10.0]), [0.0, 5.0])


def test_a_step_above_zero_does_not_apply_at_zero():
    assert_array_equal(step(0.0, 3.0)([0.0, 1e-9]), [0.0, 3.0])


def test_steps_give_levels_not_increments():
    assert_array_equal(steps([10.0, 20.0], [1.0, 4.0])([10.0, 15.0, 20.0, 25.0]), [0.0, 1.0, 1.0, 4.0])


def test_progressive_rates():
    f = progressive([10.0, 30.0], [0.1, 0.5])
    assert_allclose(f([5.0, 10.0, 20.0, 30.0, 50.0]), [0.0, 0.0, 1.0, 2.0, 12.0], rtol=1e-15)
    assert float(progressive([], [])(7.0)) == 0.0


@given(functions(), functions())
def test_sum_and_difference(f, g):
    assert_allclose(well_formed(f + g)(POINTS), f(POINTS) + g(POINTS), atol=ROUNDING)
    assert_allclose(well_formed(f - g)(POINTS), f(POINTS) - g(POINTS), atol=ROUNDING)
    knots = np.unique(np.concatenate((f.x, g.x)))
    assert_allclose((f + g)(knots), f(knots) + g(knots), atol=ROUNDING)


@given(functions(), functions(), functions())
def test_total(f, g, h):
    assert_allclose(
        total((f, g, h, line(2.0, 3.0)))(POINTS), f(POINTS) + g(POINTS) + h(POINTS) + 2 + 3 * POINTS
    )


@given(functions(), st.integers(-4, 4))
def test_constants_and_multiples(f, number):
    assert_allclose((f * number)(POINTS), f(POINTS) * number, atol=ROUNDING)
    assert_allclose((number - f)(POINTS), number - f(POINTS), atol=ROUNDING)
    assert_allclose((f + number)(POINTS), f(POINTS) + number, atol=ROUNDING)


@given(functions(), functions())
def test_minimum_and_maximum(f, g):
    assert_allclose(well_formed(f.maximum(g))(POINTS), np.maximum(f(POINTS), g(POINTS)), atol=ROUNDING)
    assert_allclose(well_formed(f.minimum(g))(POINTS), np.minimum(f(POINTS), g(POINTS)), atol=ROUNDING)


@given(functions(), st.integers(-30, 60))
def test_minimum_with_a_number_and_positive_part(f, number):
    assert_allclose(f.minimum(number)(POINTS), np.minimum(f(POINTS), number), atol=ROUNDING)
    assert_allclose(f.positive_part()(POINTS), np.maximum(f(POINTS), 0.0), atol=ROUNDING)


@given(functions(), functions())
def test_composition_with_any_inner_function(outer, inner):
    composed = well_formed(outer.after(inner))
    assert_allclose(composed(POINTS), outer(np.maximum(inner(POINTS), 0.0)), atol=ROUNDING)


@given(functions(), st.integers(-20, 20), st.integers(0, 3))
def test_composition_with_a_line(outer, intercept, slope):
    expected = outer(np.maximum(intercept + slope * POINTS, 0.0))
    assert_allclose(well_formed(outer.of_line(intercept, slope))(POINTS), expected, atol=ROUNDING)
    assert_allclose(outer.after(line(intercept, slope))(POINTS), expected, atol=ROUNDING)
    assert float(outer.of_line(intercept, slope)(0.0)) == float(outer(max(0.0, intercept)))


def test_composition_with_a_falling_line_is_refused_where_it_is_not_supported():
    with pytest.raises(ValueError, match="negative"):
        identity().of_line(1.0, -1.0)


def test_a_rising_inner_function_does_not_yet_jump_at_the_threshold():
    composed = step(109_000.0, 900.0).after(line(20_000.0, 0.85))
    threshold = composed.x[1]
    assert threshold == pytest.approx(89_000.0 / 0.85, rel=1e-15)
    assert float(composed(threshold)) == 0.0
    assert float(composed(threshold + 1e-6)) == 900.0


def test_an_inner_function_that_starts_on_the_threshold():
    composed = step(10.0, 5.0).after(line(10.0, 1.0))
    assert_array_equal(composed([0.0, 1e-9]), [0.0, 5.0])
    assert_array_equal(step(10.0, 5.0).after(constant(10.0))([0.0, 99.0]), [0.0, 0.0])


def test_a_falling_inner_function_takes_the_limit_from_the_left():
    composed = step(10.0, 5.0).after(PiecewiseLinear(np.array([0.0, 20.0]), np.array([20.0, 0.0]), 0.0))
    assert_array_equal(composed([0.0, 10.0, 10.5, 30.0]), [5.0, 5.0, 0.0, 0.0])


@given(functions())
def test_simplifying_changes_nothing_but_the_number_of_knots(f):
    places = np.union1d(f.x, [0.5, 3.5, 70.5])
    x = np.repeat(places, 2)  # every knot as a pair, jump or not
    y = np.stack((f(places), f.limit_from_right(places)), axis=1).ravel()
    simple = well_formed(PiecewiseLinear(x, y, f.last_slope).simplified())
    assert_allclose(simple(POINTS), f(POINTS), atol=ROUNDING)
    assert simple.x.size <= f.x.size
    assert_array_equal(simple.simplified().x, simple.x)


def test_knots_within_a_rounding_become_one_knot_and_the_kink_stays():
    f = PiecewiseLinear(np.array([0.0, 50.0, 50.0 + 1e-12, 100.0]), np.array([0.0, 5.0, 5.0, 20.0]), 1.0)
    simple = f.simplified()
    assert_allclose(simple.x, [0.0, 50.0, 100.0])
    assert_allclose(simple(POINTS), f(POINTS), atol=ROUNDING)


def test_rate_and_room():
    tax = progressive([0.0, 10_000.0], [0.1, 0.2]) + step(15_000.0, 500.0)
    assert rate_and_room(tax, 0.0) == (pytest.approx(0.1), pytest.approx(10_000.0))
    assert rate_and_room(tax, 10_000.0 - 1e-9) == (pytest.approx(0.2), pytest.approx(5_000.0))
    assert rate_and_room(tax, 12_000.0) == (pytest.approx(0.2), pytest.approx(3_000.0))
    assert rate_and_room(tax, 15_000.0) == (pytest.approx(0.2), 0.0)
    assert rate_and_room(tax, 15_001.0) == (pytest.approx(0.2), float("inf"))


def test_two_kinks_a_millionth_apart_are_not_both_lost() -> None:
    """Two people whose allowances end 6e-6 apart: each kink alone may go, the turn of both may not.

    Seen as a couple's tax that charged the top rate from the first unit on.
    """
    starts, rates = [0.0, 15_750.0, 27_675.0, 642_100.0], [0.0, 0.1, 0.12, 0.41]
    first = progressive(starts, rates)
    second = progressive([max(0.0, start - 5.668648820995088e-06) for start in starts], rates)
    both = total((first * 0.5, second * 0.5))
    for place in (1e-3, 15_000.0, 20_000.0, 300_000.0, 1e6):
        # The kinks that are merged lie 6e-6 apart, and no rate is above one.
        assert float(both(place)) == pytest.approx(float(first(place)), abs=1e-5)
