"""Private greedy selection with noisy corrections.

Every round picks a fresh feature by the base-2 exponential mechanism (Ilvento 2020) on the scores
at the current margins, then corrects all coefficients and the intercept together: a damped Newton
step from a clipped, noisy gradient, preconditioned by noisy second moments of the chosen features.
Scores wait for the next pick; margins do not.
"""

from __future__ import annotations

import math

import numpy as np

from ..losses import fixed_point
from ..plan.greedy import (
    COEFFICIENT_BITS,
    COEFFICIENT_SCALE,
    DAMPING,
    MOST_COEFFICIENT,
    WEIGHT_BITS,
    GreedyPlan,
)
from .corrections import ChosenSet, newton_step, noisy
from .intercept import MOST_INTERCEPT, first_fit, noisy_mean
from .solution import Solution


def greedy(plan: GreedyPlan, rows, scores, bits, chosen: ChosenSet, rates,
           watch=lambda step: None) -> Solution:
    """Run a plan over rows and scores.

    chosen  an empty set over the same table
    rates   the multipliers of the picks, in the units of `scores`
    watch   called with the number of picks done, after every pick
    """
    rows.place(0)
    model = _Model(plan, rows, bits, chosen)
    rows.place(fixed_point(model.intercept))
    scores.absorb(rows.first_scores())
    for pick, rate in enumerate(rates, 1):
        scores.set_rate(rate)
        feature, _ = scores.pick(bits)
        model.include(feature)
        model.correct()
        if pick < plan.picks:
            scores.bar(feature)
            scores.absorb(rows.catch_up())
        watch(pick)
    for _ in range(plan.final_corrections):
        model.correct()
    return model.solution()


class _Model:
    """The coefficients, and what corrects them: all of it public, made from noisy sums."""

    def __init__(self, plan: GreedyPlan, rows, bits, chosen: ChosenSet):
        self.plan, self.rows, self.bits, self.chosen = plan, rows, bits, chosen
        self.gradient_unit = (plan.resolution * plan.entry_levels) << WEIGHT_BITS     # of one row
        self.moment_unit = plan.entry_levels**2 << WEIGHT_BITS
        self.weights = np.zeros(0, dtype=np.int64)
        self.moments = np.array([[float(plan.facts.rows)]])
        first, self.curvature = self._first_look()
        self.values = np.array([first])             # the intercept, then coefficients in bounds
        self.history: list[np.ndarray] = []

    @property
    def intercept(self) -> float:
        return float(self.values[0])

    def _first_look(self) -> tuple[float, float]:
        """The intercept that fits the label rate, and the curvature of the loss there."""
        plan = self.plan
        mean = noisy_mean(plan, self.rows, plan.first_variance, self.bits)
        error = math.sqrt(plan.first_variance) / (plan.resolution * plan.facts.rows)
        return first_fit(plan, mean, error)

    def include(self, feature: int):
        """Take a feature in, with its noisy second moments."""
        self.chosen.add(feature)
        sums = self.chosen.moments(feature)
        row = noisy(sums, self.plan.moment_variance, self.bits) / self.moment_unit
        k = len(self.moments)
        grown = np.zeros((k + 1, k + 1))
        grown[:k, :k] = self.moments
        grown[k, :] = grown[:, k] = row
        self.moments = grown
        self.values = np.append(self.values, 0.0)
        self.weights = np.append(self.weights, 0)

    def correct(self):
        """A damped Newton step, quantised, given to the margins."""
        plan = self.plan
        sums = self.chosen.gradient(self.rows.derivatives())
        gradient = noisy(sums, plan.correction_variance, self.bits) / self.gradient_unit
        noise = math.sqrt(plan.correction_variance) / self.gradient_unit
        error = math.sqrt(plan.moment_variance) / self.moment_unit
        floor = error * math.sqrt(len(self.moments))
        step = newton_step(gradient, self.curvature * self.moments, self.curvature * floor,
                           noise / COEFFICIENT_SCALE)
        self.values += DAMPING * step
        limits = np.r_[MOST_INTERCEPT, np.full(len(self.weights), MOST_COEFFICIENT)]
        self.values = np.clip(self.values, -limits, limits)
        self._move()
        self.history.append(self.values.copy())

    def _move(self):
        weights = np.rint(np.ldexp(self.values[1:], COEFFICIENT_BITS)).astype(np.int64)
        features = np.array(self.chosen.features, dtype=np.int32)
        self.rows.shift(features, weights - self.weights, fixed_point(self.intercept))
        self.weights = weights

    def solution(self) -> Solution:
        """The mean of the last corrections."""
        mean = np.mean(self.history[-self.plan.averaged:], axis=0)
        coefficients = dict(zip(self.chosen.features, mean[1:].tolist()))
        return Solution(dict(sorted(coefficients.items())), float(mean[0]))
