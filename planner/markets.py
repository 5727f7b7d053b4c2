"""Returns: portfolio moments, the lognormal law, and its Gauss-Hermite nodes."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from planner.household import MarketAssumptions, Portfolio
from planner.piecewise import FloatArray


@dataclass(frozen=True, slots=True, eq=False)
class LognormalReturns:
    r"""Gross real returns :math:`R_p = \exp(g_p + v_p Z)`, one standard normal Z a year.

    Attributes
    ----------
    log_mean, log_deviation : ndarray of shape (n_portfolios,)
        g and v.
    """

    log_mean: FloatArray
    log_deviation: FloatArray

    def gross(self, normal: FloatArray, portfolio: int | np.ndarray) -> FloatArray:
        """Gross returns for standard normal draws (any shape) and portfolio indices that broadcast."""
        return np.exp(self.log_mean[portfolio] + self.log_deviation[portfolio] * normal)

    def nodes(self, n_nodes: int) -> tuple[FloatArray, FloatArray]:
        """Gauss-Hermite law: gross returns (n_portfolios, n_nodes) and weights (n_nodes,)."""
        points, weights = normal_nodes(n_nodes)
        return np.exp(self.log_mean[:, None] + self.log_deviation[:, None] * points), weights


def normal_nodes(n_nodes: int) -> tuple[FloatArray, FloatArray]:
    """Gauss-Hermite points and weights for a standard normal: E[h(Z)] = sum weights h(points)."""
    points, weights = np.polynomial.hermite_e.hermegauss(n_nodes)
    return points, weights / weights.sum()


def node_count(risk_aversion: float, log_deviation: FloatArray) -> int:
    """9 nodes; 15 where (gamma - 1) max v > 1.5, for the tails that risk aversion weighs."""
    return 15 if (risk_aversion - 1) * float(np.max(log_deviation)) > 1.5 else 9


def nominal_moments(
    markets: MarketAssumptions, portfolios: tuple[Portfolio, ...], adviser_fee: float
) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Nominal arithmetic mean after fees, standard deviation and yield of each portfolio.

    Mean a·m - fees, variance a' (s Q s) a, yield a·(income paid out). Each (n_portfolios,).
    """
    weights = np.array([p.weights for p in portfolios])
    mean = np.array([c.expected_return for c in markets.asset_classes])
    deviation = np.array([c.standard_deviation for c in markets.asset_classes])
    income = np.array([c.income_yield for c in markets.asset_classes])
    covariance = np.outer(deviation, deviation) * np.array(markets.correlations)
    fees = np.array([p.yearly_cost for p in portfolios]) + adviser_fee
    variance = np.einsum("pi,ij,pj->p", weights, covariance, weights)
    return weights @ mean - fees, np.sqrt(np.maximum(variance, 0.0)), weights @ income


def lognormal_returns(
    nominal_mean: FloatArray, nominal_deviation: FloatArray, inflation: float
) -> LognormalReturns:
    """Lognormal real returns with exactly these means and standard deviations.

    mu = (1 + nominal mean)/(1 + i) - 1, sigma = nominal sd/(1 + i),
    v^2 = ln(1 + sigma^2/(1+mu)^2), g = ln(1+mu) - v^2/2. Arrays (n_portfolios,).
    """
    growth = (1 + nominal_mean) / (1 + inflation)
    variance = np.log1p((nominal_deviation / (1 + inflation) / growth) ** 2)
    return LognormalReturns(np.log(growth) - variance / 2, np.sqrt(variance))


def taxable_drag(
    nominal_mean: FloatArray, income_yield: FloatArray, inflation: float, yield_rate: float, gains_rate: float
) -> FloatArray:
    """Yearly cost of tax on the taxable account, as a share of its opening value, in real terms.

    [yield tax rate · yield + gains tax rate · max(0, nominal mean - yield)] / (1 + i).
    """
    gains = np.maximum(0.0, nominal_mean - income_yield)
    return np.asarray((yield_rate * income_yield + gains_rate * gains) / (1 + inflation))
