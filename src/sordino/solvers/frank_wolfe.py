"""Private Frank-Wolfe over the L1 ball.

Sources: Frank and Wolfe 1956; Jaggi 2013 (L1 ball, 2/(t+2)); Talwar, Thakurta and Zhang 2015 (private
vertices). Here a vertex is drawn by the base-2 exponential mechanism on integer scores, scores are
kept up to date by the rows that changed, and an intercept is measured at a few public steps.
"""

from __future__ import annotations

from dataclasses import dataclass, field

from ..losses import MARGIN_UNIT, fixed_point, named_loss
from ..plan import Course, Plan

MOST_INTERCEPT = 15.0


@dataclass
class Solution:
    """What a run leaves: everything here came out of private picks and noisy sums.

    weights    {feature: whole number}: coefficients are radius * last scale * weight / bound
    intercept  in units of margin
    """

    weights: dict[int, int] = field(default_factory=dict)
    intercept: float = 0.0


def frank_wolfe(plan: Plan, rows, scores, bits, watch=lambda step: None) -> Solution:
    """Run a plan over rows and scores.

    watch is called with the number of steps done, after every step.
    """
    intercept = _Intercept(plan, rows, bits)
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
    return Solution({j: w for j, w in sorted(weights.items()) if w}, intercept.value)


class _Intercept:
    """The intercept: a Newton step from a noisy mean derivative at every look."""

    def __init__(self, plan: Plan, rows, bits):
        self.plan, self.rows, self.bits = plan, rows, bits
        self.loss = named_loss(plan.loss, plan.facts.label)
        self.value = 0.0
        self.curvature: float | None = None

    def look(self) -> int:
        """Measure, correct, and return the new intercept in fixed point."""
        noise = self.bits.discrete_gaussian(self.plan.intercept_variance)
        n = self.plan.facts.rows
        mean = (self.rows.total() + noise) / (self.plan.resolution * n)
        if self.curvature is None:
            value = self.loss.first_intercept(mean, n)
            self.curvature = self.loss.curvature(value)
        else:
            value = self.value - mean / self.curvature
        fixed = fixed_point(min(max(value, -MOST_INTERCEPT), MOST_INTERCEPT))
        self.value = fixed * MARGIN_UNIT
        return fixed
