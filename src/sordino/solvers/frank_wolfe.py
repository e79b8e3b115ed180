"""Private Frank-Wolfe over the L1 ball.

Sources: Frank and Wolfe 1956; Jaggi 2013 (L1 ball, 2/(t+2)); Talwar, Thakurta and Zhang 2015
(private vertices). Here a vertex is drawn by the base-2 exponential mechanism on integer scores,
scores are kept up to date by the rows that changed, and what the moves do not make (an intercept,
features included by decision) is measured at a few public steps.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from ..losses import MARGIN_UNIT, fixed_point
from ..plan import Course, FrankWolfePlan
from ..plan.corrections import COEFFICIENT_BITS
from .corrections import ChosenSet
from .intercept import MOST_INTERCEPT, Looks
from .model import Model
from .solution import Solution, total

FIRST_UNKNOWN = 1 / 12      # variance of a rate that may be anything
DRIFT = 0.05**2             # variance of the mean derivative gained from one look to the next


def frank_wolfe(plan: FrankWolfePlan, rows, scores, bits, chosen: ChosenSet,
                start: Solution | None = None, watch=lambda step: None) -> Solution:
    """Run a plan over rows and scores.

    chosen  an empty set over the same table
    start   the plan's model to continue from
    watch   called with the number of steps done, after every step
    """
    rows.place(0)
    rest = (_Included if plan.in_model else _Intercept)(plan, rows, bits, chosen, start)
    rows.place(fixed_point(rest.intercept))
    scores.absorb(rows.first_scores())
    weights: dict[int, int] = {}
    for step, weight in enumerate(Course.of(plan).weight.tolist()):
        if step > 0 and step in plan.intercept_looks:
            rest.look()
            scores.absorb(rows.catch_up())
        feature, sign = scores.pick(bits)
        scores.absorb(rows.move(feature, sign * weight))
        weights[feature] = weights.get(feature, 0) + sign * weight
        watch(step + 1)
    if plan.intercept:
        rest.look()
    unit = float(plan.unit_margins()[-1])
    moved = {j: unit * w for j, w in weights.items()}
    return rest.solution(moved)


def _shift_by(rows, coefficients: dict[int, float], intercept: float):
    """Give margins these coefficients, in bounds, beside what the moves make."""
    values = np.array(list(coefficients.values()), dtype=np.float64)
    weights = np.rint(np.ldexp(values, COEFFICIENT_BITS)).astype(np.int64)
    rows.shift_offset(np.array(list(coefficients), dtype=np.int32), weights, fixed_point(intercept))


class _Included:
    """The intercept and the features included by decision, corrected together at every look."""

    def __init__(self, plan: FrankWolfePlan, rows, bits, chosen: ChosenSet,
                 start: Solution | None):
        begun = {} if start is None else start.coefficients
        self.rest = {j: value for j, value in begun.items() if j not in plan.in_model}
        _shift_by(rows, self.rest, 0.0)
        self.model = Model(plan, rows, bits, chosen, rows.shift_offset, start)

    @property
    def intercept(self) -> float:
        return self.model.intercept

    def look(self):
        self.model.correct()

    def solution(self, moved: dict[int, float]) -> Solution:
        """Together with what the moves made."""
        corrected = self.model.solution()
        return replace(corrected, coefficients=total(moved, corrected.coefficients, self.rest))


class _Intercept:
    """The intercept: Newton steps from noisy looks at the mean derivative.

    A look is trusted as far as its public noise allows (a scalar Kalman filter, Kalman 1960): with
    variance R of its noise and P of what is not yet known, the step is P/(P + R) of Newton's.
    """

    def __init__(self, plan: FrankWolfePlan, rows, bits, chosen: ChosenSet,
                 start: Solution | None):
        self.rows, self.unknown = rows, FIRST_UNKNOWN
        self.coefficients = {} if start is None else start.coefficients
        self.intercept = 0.0
        if plan.intercept:
            self.looks = Looks(plan, rows, bits)
            first, self.curvature = self.looks.first_fit(self._measured())
            self._set(first if start is None else start.intercept)
        _shift_by(rows, self.coefficients, self.intercept)

    def look(self):
        """Measure and correct."""
        self._set(self.intercept - self._measured() / self.curvature)
        _shift_by(self.rows, {}, self.intercept)

    def solution(self, moved: dict[int, float]) -> Solution:
        """Together with what the moves made."""
        return Solution(total(moved, self.coefficients), self.intercept)

    def _measured(self) -> float:
        """The mean derivative, as far as it is to be trusted."""
        gain = self.unknown / (self.unknown + self.looks.error**2)
        self.unknown = (1 - gain) * self.unknown + DRIFT
        return gain * self.looks.mean()

    def _set(self, value: float):
        """Clip and round as the rows do."""
        self.intercept = fixed_point(min(max(value, -MOST_INTERCEPT), MOST_INTERCEPT)) * MARGIN_UNIT
