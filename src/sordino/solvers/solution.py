"""What a run leaves behind."""

from __future__ import annotations

from dataclasses import dataclass


@dataclass(frozen=True)
class Solution:
    """Everything here came out of private picks and noisy sums.

    coefficients  {feature: in bounds}, features ascending
    intercept     in units of margin
    """

    coefficients: dict[int, float]
    intercept: float
