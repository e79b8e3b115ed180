"""How noisy joint corrections of an intercept and a chosen set of features are measured."""

from __future__ import annotations

import dataclasses
import math

NORM = 2.0                  # of a row over intercept and chosen features, in bounds
SHARES = {"picks": 0.7, "corrections": 0.25, "second moments": 0.05}      # of the budget
DAMPING = 0.85              # of a Newton step

WEIGHT_BITS = 8             # B: rows weigh whole multiples of 2^-B
COEFFICIENT_BITS = 25       # coefficients are whole multiples of 2^-25 over bounds while fitting
COEFFICIENT_UNIT = 2.0**-COEFFICIENT_BITS
MOST_COEFFICIENT = 32.0     # in bounds


def fitting_variance(sensitivity: int, zcdp: float) -> int:
    """The least whole variance at which noise on a sum of this L2 sensitivity costs no more."""
    return math.ceil(sensitivity**2 / (2 * zcdp))


def with_corrections(plan, gradients: float, moments: float):
    """A copy of a plan that has its clipping limit, with the noise that these shares of zCDP pay.

    gradients  for the looks at the intercept alone and all corrections, alike
    moments    for the second moments of all features that are corrected
    """
    each = gradients / (plan.looks + plan.corrections)
    return dataclasses.replace(
        plan,
        first_variance=fitting_variance(plan.intercept_sensitivity, each),
        correction_variance=fitting_variance(plan.gradient_sensitivity, each),
        moment_variance=fitting_variance(plan.moment_sensitivity, moments / plan.moments),
    )
