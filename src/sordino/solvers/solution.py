"""A model in the units of the solvers: what a run may start from, and what it leaves behind."""

from __future__ import annotations

import math
from collections import Counter
from dataclasses import dataclass, field


@dataclass(frozen=True)
class Solution:
    """A model; what a run leaves came out of private picks and noisy sums.

    coefficients         {feature: in bounds}
    intercept            in units of margin
    deviations           {feature: the standard deviation that the noise of corrections makes, in
                         bounds}: see `sordino.solvers.uncertainty`; only those that theory gives
    intercept_deviation  likewise, in units of margin; NaN where it gives none
    """

    coefficients: dict[int, float] = field(default_factory=dict)
    intercept: float = 0.0
    deviations: dict[int, float] = field(default_factory=dict)
    intercept_deviation: float = math.nan


def total(*models: dict[int, float]) -> dict[int, float]:
    """The sum of coefficients, features ascending, without those that are 0."""
    sums = Counter()
    for model in models:
        sums.update(model)
    return {j: float(value) for j, value in sorted(sums.items()) if value}
