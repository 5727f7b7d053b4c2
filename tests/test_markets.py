"""Portfolio moments, the lognormal law and its nodes, the drag of tax on the taxable account."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.testing import assert_allclose
from scipy.integrate import quad
from scipy.stats import norm

from planner.household import AssetClass, MarketAssumptions, Portfolio
from planner.markets import (
    LognormalReturns,
    lognormal_returns,
    node_count,
    nominal_moments,
    normal_nodes,
    taxable_drag,
)

MARKETS = MarketAssumptions(
    0.025,
    (
        AssetClass("Shares", 0.07, 0.18, 0.02),
        AssetClass("Bonds", 0.04, 0.06, 0.035),
        AssetClass("Cash", 0.03, 0.0),
    ),
    ((1.0, 0.2, 0.0), (0.2, 1.0, 0.0), (0.0, 0.0, 1.0)),
)
PORTFOLIOS = (Portfolio("Mixed", (0.6, 0.3, 0.1), 0.002), Portfolio("Cash", (0.0, 0.0, 1.0)))

one = st.floats(-0.05, 0.15), st.floats(0.0, 0.4), st.floats(-0.01, 0.10)


# Moments -----------------------------------------------------------------------------------------


def test_nominal_moments_by_hand() -> None:
    mean, deviation, income = nominal_moments(MARKETS, PORTFOLIOS, 0.005)
    assert_allclose(mean, [0.042 + 0.012 + 0.003 - 0.002 - 0.005, 0.03 - 0.005], rtol=1e-12)
    variance = 0.6**2 * 0.18**2 + 0.3**2 * 0.06**2 + 2 * 0.6 * 0.3 * 0.2 * 0.18 * 0.06
    assert_allclose(deviation, [variance**0.5, 0.0], rtol=1e-12)
    assert_allclose(income, [0.012 + 0.0105, 0.0], rtol=1e-12)


def test_nominal_moments_of_a_simulated_mix() -> None:
    """The same mix of drawn asset returns, rebalanced yearly."""
    generator = np.random.default_rng(5)
    deviation = np.array([c.standard_deviation for c in MARKETS.asset_classes])
    covariance = np.outer(deviation, deviation) * np.array(MARKETS.correlations)
    mean = np.array([c.expected_return for c in MARKETS.asset_classes])
    n = 200_000
    mixed = generator.multivariate_normal(mean, covariance, n) @ np.array(PORTFOLIOS[0].weights)
    expected_mean, expected_deviation, _ = nominal_moments(MARKETS, PORTFOLIOS, 0.0)
    spread = float(expected_deviation[0])
    # Five standard errors of a mean and of a standard deviation.
    assert mixed.mean() - 0.002 == pytest.approx(expected_mean[0], abs=5 * spread / n**0.5)
    assert mixed.std() == pytest.approx(spread, abs=5 * spread / (2 * n) ** 0.5)


# The lognormal law -------------------------------------------------------------------------------


@settings(deadline=None, max_examples=200)
@given(*one)
def test_lognormal_has_exactly_the_real_mean_and_deviation(
    mean: float, deviation: float, inflation: float
) -> None:
    """E exp(g + vZ) = exp(g + v^2/2) = 1 + mu; its variance is (1 + mu)^2 (exp(v^2) - 1) = sigma^2."""
    law = lognormal_returns(np.array([mean]), np.array([deviation]), inflation)
    g, v = float(law.log_mean[0]), float(law.log_deviation[0])
    assert np.exp(g + v**2 / 2) == pytest.approx((1 + mean) / (1 + inflation), rel=1e-12)
    variance = np.exp(2 * g + v**2) * np.expm1(v**2)
    assert variance == pytest.approx((deviation / (1 + inflation)) ** 2, rel=1e-9, abs=1e-15)


@pytest.mark.parametrize("n_nodes", [9, 15])
def test_nodes_reproduce_the_mean_and_deviation(n_nodes: int) -> None:
    """Mean and second moment: the error of 9 nodes at v = 0.3 is (2v)^18 / 18! of it, below 1e-12."""
    law = lognormal_returns(np.array([0.03, 0.06, 0.09]), np.array([0.0, 0.12, 0.3]), 0.02)
    gross, weights = law.nodes(n_nodes)
    assert gross.shape == (3, n_nodes)
    assert weights.sum() == pytest.approx(1.0, rel=1e-14)
    mean = gross @ weights
    assert_allclose(mean, (1 + np.array([0.03, 0.06, 0.09])) / 1.02, rtol=1e-12)
    assert_allclose(
        gross**2 @ weights - mean**2, (np.array([0.0, 0.12, 0.3]) / 1.02) ** 2, rtol=1e-9, atol=1e-14
    )


@pytest.mark.parametrize(
    ("n_nodes", "risk", "error"), [(9, 1.5, 1e-5), (15, 1.5, 1e-11), (9, 3.0, 3e-3), (15, 3.0, 3e-7)]
)
def test_nodes_reproduce_what_risk_aversion_weighs(n_nodes: int, risk: float, error: float) -> None:
    """E[R^(1-gamma)] = exp(-(gamma-1) g + risk^2/2), risk = (gamma - 1) v: what a value function needs.

    Seen: 9 nodes 0.2 % and 15 nodes 1e-7 at risk 3; the rule goes over to 15 nodes above risk 1.5.
    """
    v = 0.2
    gross, weights = LognormalReturns(np.array([0.04]), np.array([v])).nodes(n_nodes)
    power = -risk / v
    exact = np.exp(0.04 * power + risk**2 / 2)
    assert float(gross[0] ** power @ weights) == pytest.approx(exact, rel=error)


def test_nodes_integrate_a_function_with_a_kink_roughly() -> None:
    """E max(R - 1, 0) by 15 nodes against adaptive quadrature: kinks are what nodes do worst, 5 %."""
    law = LognormalReturns(np.array([0.04]), np.array([0.15]))
    gross, weights = law.nodes(15)
    exact, _ = quad(
        lambda z: max(np.exp(0.04 + 0.15 * z) - 1, 0.0) * norm.pdf(z), -8, 8, points=[-0.04 / 0.15]
    )
    assert float(np.maximum(gross[0] - 1, 0) @ weights) == pytest.approx(exact, rel=0.05)


def test_normal_nodes_are_symmetric_and_exact_for_polynomials() -> None:
    """N nodes integrate polynomials up to degree 2N - 1: moments 1, 3, 15, 105 of the normal law."""
    points, weights = normal_nodes(9)
    assert_allclose(points, -points[::-1], atol=1e-12)
    moments = [float(weights @ points**k) for k in range(9)]
    assert_allclose(moments, [1, 0, 1, 0, 3, 0, 15, 0, 105], rtol=1e-10, atol=1e-10)


def test_number_of_nodes() -> None:
    """15 where (gamma - 1) max v > 1.5."""
    assert node_count(4.0, np.array([0.1, 0.5])) == 9  # exactly 1.5
    assert node_count(4.0, np.array([0.1, 0.51])) == 15
    assert node_count(1.0, np.array([0.9])) == 9
    assert node_count(0.5, np.array([0.9])) == 9
    assert node_count(11.0, np.array([0.16, 0.02])) == 15


def test_gross_returns_of_draws_agree_with_the_nodes() -> None:
    law = LognormalReturns(np.array([0.01, 0.05]), np.array([0.0, 0.2]))
    points, _ = normal_nodes(9)
    assert_allclose(law.gross(points, 1), law.nodes(9)[0][1])
    held = np.array([0, 1, 1])
    assert_allclose(law.gross(np.array([2.0, 0.0, -1.0]), held), np.exp([0.01, 0.05, -0.15]))


# Drag --------------------------------------------------------------------------------------------


def test_drag_by_hand() -> None:
    """[yield rate · yield + gains rate · max(0, mean - yield)] / (1 + i); no relief for a loss of price."""
    drag = taxable_drag(np.array([0.06, 0.02]), np.array([0.02, 0.03]), 0.025, 0.22, 0.15)
    assert_allclose(drag, [(0.22 * 0.02 + 0.15 * 0.04) / 1.025, 0.22 * 0.03 / 1.025], rtol=1e-12)


@settings(deadline=None)
@given(st.floats(-0.05, 0.15), st.floats(0, 0.1), st.floats(0, 0.6), st.floats(0, 0.6))
def test_drag_is_no_more_than_the_higher_rate_on_all_of_the_return(
    mean: float, income: float, yield_rate: float, gains_rate: float
) -> None:
    drag = float(taxable_drag(np.array([mean]), np.array([income]), 0.0, yield_rate, gains_rate)[0])
    assert 0 <= drag <= max(yield_rate, gains_rate) * max(mean, income) + 1e-15
