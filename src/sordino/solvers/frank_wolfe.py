"""Private Frank-Wolfe over the L1 ball.

Sources: Frank and Wolfe 1956; Jaggi 2013 (L1 ball, 2/(t+2)); Talwar, Thakurta and Zhang 2015
(private vertices). Here a vertex is drawn by the base-2 exponential mechanism on integer scores,
scores are kept up to date by the rows that changed, and an intercept is measured at a few public
steps.
"""

from __future__ import annotations

import math

from ..losses import MARGIN_UNIT, fixed_point
from ..plan import Course, FrankWolfePlan
from .intercept import MOST_INTERCEPT, first_fit, noisy_mean
from .solution import Solution

FIRST_UNKNOWN = 1 / 12      # variance of a rate that may be anything
DRIFT = 0.05**2             # variance of the mean derivative gained from one look to the next


def frank_wolfe(plan: FrankWolfePlan, rows, scores, bits, watch=lambda step: None) -> Solution:
    """Run a plan over rows and scores.

    watch is called with the number of steps done, after every step.
    """
    intercept = _Intercept(plan, rows, bits)
    rows.place(0)
    if plan.intercept:
        rows.place(intercept.look())
    scores.absorb(rows.first_scores())
    weights: dict[int, int] = {}
    for step, weight in enumerate(Course.of(plan).weight.tolist()):
        if step > 0 and step in plan.intercept_looks:
            scores.absorb(rows.set_intercept(intercept.look()))
        feature, sign = scores.pick(bits)
        scores.absorb(rows.move(feature, sign * weight))
        weights[feature] = weights.get(feature, 0) + sign * weight
        watch(step + 1)
    if plan.intercept:
        intercept.look()
    unit = float(plan.unit_margins()[-1])
    return Solution({j: unit * w for j, w in sorted(weights.items()) if w}, intercept.value)


class _Intercept:
    """The intercept: Newton steps from noisy looks at the mean derivative.

    A look is trusted as far as its public noise allows (a scalar Kalman filter, Kalman 1960): with
    variance R of its noise and P of what is not yet known, the step is P/(P + R) of Newton's.
    """

    def __init__(self, plan: FrankWolfePlan, rows, bits):
        self.plan, self.rows, self.bits = plan, rows, bits
        self.noise = plan.intercept_variance / (plan.resolution * plan.facts.rows) ** 2
        self.unknown = FIRST_UNKNOWN
        self.value = 0.0
        self.curvature: float | None = None

    def look(self) -> int:
        """Measure, correct, and return the new intercept in fixed point."""
        mean = noisy_mean(self.plan, self.rows, self.plan.intercept_variance, self.bits)
        gain = self.unknown / (self.unknown + self.noise)
        self.unknown = (1 - gain) * self.unknown + DRIFT
        self._correct(gain * mean)
        fixed = fixed_point(min(max(self.value, -MOST_INTERCEPT), MOST_INTERCEPT))
        self.value = fixed * MARGIN_UNIT
        return fixed

    def _correct(self, mean: float):
        if self.curvature is None:
            self.value, self.curvature = first_fit(self.plan, mean, math.sqrt(self.noise))
        else:
            self.value -= mean / self.curvature
