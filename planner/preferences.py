r"""Utility of spending and of an estate.

With need scale n, essential spending E, floor :math:`0 < \underline{x} \le E`, relative risk
aversion :math:`\gamma` and shortfall weight :math:`\kappa \ge 1`, spending c is worth
:math:`n f(c/n)`:

.. math::
    U(x) &= x^{1-\gamma}/(1-\gamma), \quad \ln x \text{ where } \gamma = 1 \\
    g(x) &= U(x) \text{ for } x \ge \underline{x}, \text{ below it the tangent of U at } \underline{x} \\
    f(x) &= g(x) + (\kappa - 1)\,(g(\min(x, E)) - g(E))

Concave, increasing and finite for every x. Utilities are measured with money in units of E, an
affine change that leaves every choice and every certainty equivalent as it is and keeps powers
within the range of floating point in any currency.

An estate b is worth :math:`v(b) = a^\gamma U(a b_0 + b)` (Lockwood 2018, American Economic Review
108(9) 2513-2550; form of De Nardi 2004, Review of Economic Studies 71(3) 743-768).
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike

from planner.piecewise import FloatArray


@dataclass(frozen=True, slots=True)
class SpendingUtility:
    """The function f of the module docstring, with its inverses.

    Attributes
    ----------
    risk_aversion : float
        gamma > 0.
    shortfall_weight : float
        kappa >= 1.
    essential : float
        E > 0, money a year at need scale 1.
    floor : float
        0 < floor <= E, money a year at need scale 1.
    """

    risk_aversion: float
    shortfall_weight: float
    essential: float
    floor: float

    def __post_init__(self) -> None:
        if not (self.risk_aversion > 0 and self.shortfall_weight >= 1 and 0 < self.floor <= self.essential):
            raise ValueError(f"need gamma > 0, kappa >= 1 and 0 < floor <= essential; got {self}")

    # U and its relatives, of money in units of E -------------------------------------------------
    def power(self, x: ArrayLike) -> FloatArray:
        """U of money x > 0 (without line or kink)."""
        z = np.asarray(x, dtype=np.float64) / self.essential
        if self.risk_aversion == 1:
            return np.log(z)
        return np.asarray(z ** (1 - self.risk_aversion) / (1 - self.risk_aversion))

    def power_inverse(self, v: ArrayLike) -> FloatArray:
        """Money x > 0 with U(x) = v."""
        u = np.asarray(v, dtype=np.float64)
        if self.risk_aversion == 1:
            return np.asarray(np.exp(u) * self.essential)
        return np.asarray(((1 - self.risk_aversion) * u) ** (1 / (1 - self.risk_aversion)) * self.essential)

    def power_marginal(self, x: ArrayLike) -> FloatArray:
        """U'(x), per unit of money."""
        z = np.asarray(x, dtype=np.float64) / self.essential
        return np.asarray(z ** (-self.risk_aversion) / self.essential)

    def power_marginal_inverse(self, m: ArrayLike) -> FloatArray:
        """Money x > 0 with U'(x) = m, for m > 0 per unit of money (without line or kink)."""
        z = (np.asarray(m, dtype=np.float64) * self.essential) ** (-1 / self.risk_aversion)
        return np.asarray(self.essential * z)

    @property
    def steepest(self) -> float:
        """Slope of the straight line below the floor: the largest that f has anywhere."""
        return self.shortfall_weight * self._floor_slope

    @property
    def _floor_slope(self) -> float:
        return float((self.floor / self.essential) ** (-self.risk_aversion) / self.essential)

    def _scalar(self, x: float) -> float:
        """U(x) of one amount; an array of one costs ten times as much."""
        z, power = x / self.essential, 1 - self.risk_aversion
        return math.log(z) if power == 0 else z**power / power

    # f -------------------------------------------------------------------------------------------
    def value(self, x: ArrayLike) -> FloatArray:
        """f(x), any real x; any shape."""
        x = np.asarray(x, dtype=np.float64)
        u = self.power(np.maximum(x, self.floor))
        below = np.minimum(x - self.floor, 0.0)
        g = u + self._floor_slope * below
        if self.shortfall_weight == 1:
            return np.asarray(g)
        return np.asarray(g + (self.shortfall_weight - 1) * np.minimum(g - self._scalar(self.essential), 0.0))

    def marginal(self, x: ArrayLike) -> FloatArray:
        """f'(x), the right derivative at E and the left one at the floor; any shape."""
        x = np.asarray(x, dtype=np.float64)
        return self._steeper_below(x, self.power_marginal(np.maximum(x, self.floor)))

    def value_and_marginal(self, x: ArrayLike) -> tuple[FloatArray, FloatArray]:
        """f(x) and f'(x) as `value` and `marginal` give them, with one power for both; any shape."""
        x = np.asarray(x, dtype=np.float64)
        held = np.maximum(x, self.floor)
        slope = self.power_marginal(held)
        # U = x U' / (1 - gamma).
        level = self.power(held) if self.risk_aversion == 1 else slope * held / (1 - self.risk_aversion)
        level += self._floor_slope * np.minimum(x - self.floor, 0.0)
        if self.shortfall_weight != 1:
            level += (self.shortfall_weight - 1) * np.minimum(level - self._scalar(self.essential), 0.0)
        return np.asarray(level), self._steeper_below(x, slope)

    def _steeper_below(self, x: FloatArray, slope: FloatArray) -> FloatArray:
        if self.shortfall_weight == 1:
            return slope
        return np.where(x < self.essential, self.shortfall_weight * slope, slope)

    def inverse(self, v: ArrayLike) -> FloatArray:
        """f^-1(v): the level of spending worth v, closed form in three pieces; any shape.

        For gamma > 1 every v of an average of utilities is below 0, where the inverse exists.
        """
        u = np.asarray(v, dtype=np.float64)
        kappa, bottom = self.shortfall_weight, self._scalar(self.floor)
        if kappa != 1:
            top = self._scalar(self.essential)
            u = np.where(u >= top, u, (u + (kappa - 1) * top) / kappa)
        below = np.minimum(u - bottom, 0.0) / self._floor_slope  # on the straight line
        return np.asarray(self.power_inverse(np.maximum(u, bottom)) + below)

    def inverse_and_marginal(self, v: ArrayLike) -> tuple[FloatArray, FloatArray]:
        """Return f^-1(v) and f' there, with one power for both; any shape.

        Raises
        ------
        ValueError
            There is a kink (the shortfall weight is not 1).
        """
        if self.shortfall_weight != 1:
            raise ValueError("the slope at a given value is found only where there is no kink")
        x = self.inverse(v)
        if self.risk_aversion == 1:
            return x, np.asarray(1.0 / np.maximum(x, self.floor))
        # U' = (1 - gamma) U / x.
        slope = (1 - self.risk_aversion) * np.maximum(v, self._scalar(self.floor))
        slope /= np.maximum(x, self.floor)
        return x, np.asarray(slope)

    def inverse_marginal(self, m: ArrayLike) -> FloatArray:
        """Spending x that maximises f(x) - m x for m > 0: E where E's kink holds it; any shape.

        Below the floor f is a straight line: at a price above its slope the maximiser is
        unbounded below, and the floor is returned; callers cap spending by what is available.
        """
        m = np.asarray(m, dtype=np.float64)
        with np.errstate(divide="ignore"):
            z = (m * self.essential) ** (-1 / self.risk_aversion)
        if self.shortfall_weight != 1:
            # Below E spending is larger by a factor, but not above E.
            z = np.maximum(z, np.minimum(z * self.shortfall_weight ** (1 / self.risk_aversion), 1.0))
        return np.asarray(np.maximum(self.essential * z, self.floor))


@dataclass(frozen=True, slots=True)
class EstateUtility:
    """v(b) = a^gamma U(a b0 + b) for an estate b >= 0; v(max(b, floor)) where b0 = 0.

    Attributes
    ----------
    strength : float
        a >= 0; 0 = no wish to leave anything (v is 0).
    threshold : float
        b0 >= 0: in the last period a household that can spend c > b0 leaves a (c - b0).
    """

    utility: SpendingUtility
    strength: float = 0.0
    threshold: float = 0.0

    @property
    def wanted(self) -> bool:
        """True where there is a wish to leave something."""
        return self.strength > 0

    def _shifted(self, b: ArrayLike) -> FloatArray:
        b = np.asarray(b, dtype=np.float64)
        if self.threshold == 0:
            return np.maximum(b, self.utility.floor)
        return np.asarray(self.strength * self.threshold + b)

    def value(self, b: ArrayLike) -> FloatArray:
        """v(b); any shape."""
        if not self.wanted:
            return np.zeros(np.shape(b))
        return np.asarray(self.strength**self.utility.risk_aversion * self.utility.power(self._shifted(b)))

    def marginal(self, b: ArrayLike) -> FloatArray:
        """v'(b); any shape."""
        if not self.wanted:
            return np.zeros(np.shape(b))
        slope = self.strength**self.utility.risk_aversion * self.utility.power_marginal(self._shifted(b))
        if self.threshold == 0:
            slope = np.where(np.asarray(b) < self.utility.floor, 0.0, slope)
        return np.asarray(slope)


def estate_strength(wish: float, essential: float, wanted: float | None) -> float:
    """Strength a of the wish to leave `wish` (money): a = wish / (c_ref - b0), with b0 = essential.

    ``c_ref`` is wanted spending, or 1.2 times essential where that is blank or not above it.
    """
    reference = wanted if wanted is not None and wanted > essential else 1.2 * essential
    return wish / (reference - essential)
