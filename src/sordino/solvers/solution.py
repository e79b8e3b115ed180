"""What a run leaves behind."""

from __future__ import annotations

from dataclasses import dataclass

MOST_INTERCEPT = 15.0       # in units of margin: the derivative's table ends at 16


@dataclass(frozen=True)
class Solution:
    """Everything here came out of private picks and noisy sums.

    coefficients  {feature: in bounds}, features ascending
    intercept     in units of margin
    """

    coefficients: dict[int, float]
    intercept: float
