"""An intercept and a chosen set of features, corrected together by noisy Newton steps."""

from __future__ import annotations

import math
from collections import deque
from collections.abc import Callable

import numpy as np

from ..losses import fixed_point
from ..plan import Plan
from ..plan.corrections import COEFFICIENT_BITS, DAMPING, MOST_COEFFICIENT, WEIGHT_BITS
from .corrections import ChosenSet, noisy, trusted_newton
from .intercept import MOST_INTERCEPT, Looks
from .solution import Solution
from .uncertainty import Deviations


class Model:
    """The coefficients, and what corrects them: all of it public, made from noisy sums.

    shift     gives margins a change: called with feature ids (int32), changes of their coefficients
              in units of 2^-COEFFICIENT_BITS bounds (int64), and the new intercept in fixed point
    start     a public model to continue from
    averaged  how many of the last corrections the solution is the mean of
    """

    def __init__(self, plan: Plan, rows, bits, chosen: ChosenSet, shift: Callable,
                 start: Solution | None, averaged: int = 1):
        self.plan, self.rows, self.bits, self.chosen, self.shift = plan, rows, bits, chosen, shift
        self.loss = plan.loss_form
        self.gradient_unit = (plan.resolution * plan.entry_levels) << WEIGHT_BITS     # of one row
        self.moment_unit = plan.entry_levels**2 << WEIGHT_BITS
        self.weights = np.zeros(0, dtype=np.int64)
        self.looks = Looks(plan, rows, bits)
        self.moments = np.array([[self.looks.n_rows]])
        self.values = np.zeros(1)                   # the intercept, then coefficients in bounds
        self.last: deque[np.ndarray] = deque(maxlen=averaged)
        self._begin(start, averaged)

    @property
    def intercept(self) -> float:
        return float(self.values[0])

    def _begin(self, start: Solution | None, averaged: int):
        """A first look at the intercept, rows being at margin 0; then what is in from the start."""
        plan, looks = self.plan, self.looks
        first, self.curvature = looks.first_fit(looks.mean())
        begun = Solution({}, first) if start is None else start
        drawn = looks.error / self.curvature if start is None else 0.0
        self.deviations = Deviations(drawn**2, averaged)
        self.values[0] = begun.intercept
        for feature in plan.in_model:
            self.include(feature, begun.coefficients.get(feature, 0.0))
        self._move()
        if plan.in_model:
            self.correct()

    def include(self, feature: int, value: float = 0.0):
        """Take a feature in, with its noisy second moments."""
        self.chosen.add(feature)
        sums = self.chosen.moments(feature)
        row = noisy(sums, self.plan.moment_variance, self.bits) / self.moment_unit
        k = len(self.moments)
        grown = np.zeros((k + 1, k + 1))
        grown[:k, :k] = self.moments
        grown[k, :] = grown[:, k] = row
        self.moments = grown
        self.values = np.append(self.values, value)
        self.weights = np.append(self.weights, 0)
        self.deviations.include()

    def correct(self):
        """A damped Newton step, quantised, given to the margins."""
        plan = self.plan
        sums = self.chosen.gradient(self.rows.derivatives())
        gradient = noisy(sums, plan.correction_variance, self.bits) / self.gradient_unit
        noise = math.sqrt(plan.correction_variance) / self.gradient_unit
        error = math.sqrt(plan.moment_variance) / self.moment_unit
        floor = error * math.sqrt(len(self.moments))
        gain, slope = trusted_newton(self.curvature * self.moments, self.curvature * floor,
                                     noise / self.loss.coefficient_scale)
        gain *= DAMPING
        limits = np.r_[MOST_INTERCEPT, np.full(len(self.weights), MOST_COEFFICIENT)]
        self.values = np.clip(self.values - gain @ gradient, -limits, limits)
        self._move()
        self.last.append(self.values)
        self.deviations.correct(gain, slope, gradient, noise**2)

    def _move(self):
        weights = np.rint(np.ldexp(self.values[1:], COEFFICIENT_BITS)).astype(np.int64)
        features = np.array(self.chosen.features, dtype=np.int32)
        self.shift(features, weights - self.weights, fixed_point(self.intercept))
        self.weights = weights

    def solution(self) -> Solution:
        """The mean of the last corrections."""
        mean, deviations = np.mean(self.last, axis=0), self.deviations.of_mean()
        return Solution(self._by_feature(mean), float(mean[0]),
                        self._by_feature(deviations), float(deviations[0]))

    def _by_feature(self, values: np.ndarray) -> dict[int, float]:
        """Without the intercept's, features ascending."""
        return dict(sorted(zip(self.chosen.features, values[1:].tolist())))
