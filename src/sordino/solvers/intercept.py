"""What the methods share about an intercept: a noisy look at the mean derivative, a first fit."""

from __future__ import annotations

from ..plan import Plan

MOST_INTERCEPT = 15.0       # in units of margin: the derivative's table ends at 16


def noisy_mean(plan: Plan, rows, variance: int, bits) -> float:
    """The mean derivative, from their sum with discrete Gaussian noise of this variance."""
    total = rows.total() + bits.discrete_gaussian(variance)
    return total / (plan.resolution * plan.facts.rows)


def first_fit(plan: Plan, mean: float, error: float) -> tuple[float, float]:
    """(intercept, curvature of the loss there) from the mean derivative at margin 0.

    The rate is kept as far from 0 and 1 as the look's standard error, and at least half a row.
    """
    loss = plan.loss_form
    intercept = loss.first_intercept(mean, min(max(error, 0.5 / plan.facts.rows), 0.5))
    return intercept, loss.curvature(intercept)
