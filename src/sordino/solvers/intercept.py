"""What the methods share about an intercept: how many rows there are, noisy looks at their mean
derivative, a first fit."""

from __future__ import annotations

import math

from ..plan import Plan

FIGURE_DOUBT = 0.5          # of the planned number of rows: a standard deviation, before counting
MOST_INTERCEPT = 15.0       # in units of margin: the derivative's table ends at 16


class Looks:
    """Noisy looks at the mean derivative; the first thing measured is how many rows there are."""

    def __init__(self, plan: Plan, rows, bits):
        self.plan, self.rows, self.bits = plan, rows, bits
        self.n_rows = self._counted()

    def _counted(self) -> float:
        """The number of rows, as far as its noise lets it be told from the plan's figure."""
        figure, variance = self.plan.facts.rows, self.plan.rows_variance
        noisy = self.rows.n_rows + self.bits.discrete_gaussian(variance)
        doubt = (FIGURE_DOUBT * figure) ** 2
        return max((doubt * noisy + variance * figure) / (doubt + variance), 1.0)

    @property
    def error(self) -> float:
        """Standard deviation of a look."""
        return math.sqrt(self.plan.first_variance) / (self.plan.resolution * self.n_rows)

    def mean(self) -> float:
        """The mean derivative, from their sum with discrete Gaussian noise."""
        total = self.rows.total() + self.bits.discrete_gaussian(self.plan.first_variance)
        return total / (self.plan.resolution * self.n_rows)

    def first_fit(self, mean: float) -> tuple[float, float]:
        """(intercept, curvature of the loss there) from a look at margin 0.

        A rate is kept as far from 0 and 1 as the look's standard error, and at least half a row.
        """
        loss = self.plan.loss_form
        intercept = loss.first_intercept(mean, min(max(self.error, 0.5 / self.n_rows), 0.5))
        return intercept, loss.curvature(intercept)
