"""What one mechanism costs, in the two currencies that add up: zCDP and pure epsilon."""

from __future__ import annotations

import math
from dataclasses import dataclass

from ..checks import nonnegative_number, positive_number, whole_number


@dataclass(frozen=True)
class Cost:
    """The privacy cost of a mechanism, or of several run one after the other.

    zcdp  rho of zero-concentrated differential privacy
    pure  epsilon at delta = 0; math.inf where there is no such guarantee

    Both hold at once and both add up under adaptive composition (Bun and Steinke 2016). Raises
    InputError for a negative cost.
    """

    zcdp: float
    pure: float

    def __post_init__(self):
        object.__setattr__(self, "zcdp", nonnegative_number("zcdp", self.zcdp))
        object.__setattr__(self, "pure", nonnegative_number("pure", self.pure))

    @classmethod
    def nothing(cls) -> Cost:
        return cls(0.0, 0.0)

    def __add__(self, other: Cost) -> Cost:
        if not isinstance(other, Cost):
            return NotImplemented
        return Cost(self.zcdp + other.zcdp, self.pure + other.pure)

    def times(self, k: int) -> Cost:
        """The cost of running this k times, k at least 0."""
        k = whole_number("k", k, 0)
        return Cost(k * self.zcdp, k * self.pure) if k else Cost.nothing()


def pick_cost(pick_epsilon: float) -> Cost:
    """One pick by the exponential mechanism, whose log-probabilities have a range of pick_epsilon.

    Source: an eta-bounded-range mechanism is eta^2/8-zCDP (Cesar and Rogers 2021) and eta-DP
    (Durfee and Rogers 2019).
    """
    pick_epsilon = nonnegative_number("pick_epsilon", pick_epsilon)
    return Cost(pick_epsilon**2 / 8, pick_epsilon)


def gaussian_cost(sensitivity: float, sigma_squared: float) -> Cost:
    """A sum with Gaussian noise of variance parameter sigma_squared, continuous or discrete.

    sensitivity is in L2, in the units of the sum; Delta^2/(2 sigma^2)-zCDP (Bun and Steinke 2016,
    Proposition 1.6; Canonne, Kamath and Steinke 2020, Theorem 4), and no pure guarantee.
    """
    sensitivity = positive_number("sensitivity", sensitivity)
    return Cost(sensitivity**2 / (2 * positive_number("sigma_squared", sigma_squared)), math.inf)


def laplace_cost(sensitivity: float, scale: float) -> Cost:
    """A sum with Laplace noise of this scale, continuous or discrete.

    sensitivity is in L1, in the units of the sum. Delta/scale-DP (Dwork, McSherry, Nissim and
    Smith 2006), and epsilon-DP implies epsilon^2/2-zCDP (Bun and Steinke 2016, Proposition 1.4).
    """
    pure = positive_number("sensitivity", sensitivity) / positive_number("scale", scale)
    return Cost(pure**2 / 2, pure)
