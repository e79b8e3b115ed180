"""Losses, as the kernels need them: a table of the derivative over fixed-point margins.

A row's derivative is `curve(margin) - target(label)`. The curve is tabulated once per fit, in whole
units of 2^-16 / R, and is linear between nodes 2^-7 apart: for the logistic curve within 8e-7 of
the real one, far under one rounding step at every resolution a plan can choose. It is this
table, not the textbook curve, that the fit follows, on every machine alike.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from scipy.special import expit

from .errors import InputError, NotYetError

MARGIN_UNIT = 2.0**-17
MARGIN_END = 16.0
NODE_GAP = 2.0**-7
GRAIN = 2**16
MOST_RESOLUTION = 2**14


def fixed_point(margin: float) -> int:
    """A margin in whole units of MARGIN_UNIT, to the nearest."""
    return round(margin / MARGIN_UNIT)


@dataclass(frozen=True)
class Logistic:
    """log(1 + exp(-m)) for label 1, log(1 + exp(m)) for label 0; derivative expit(m) - label."""

    name = "logistic"
    label = "binary"

    def nodes(self, resolution: int) -> np.ndarray:
        """int32 (4097,): resolution * 2^16 * expit at margins -16, -16 + 1/128, ..., 16."""
        margins = np.arange(-MARGIN_END, MARGIN_END + NODE_GAP / 2, NODE_GAP)
        return np.rint(resolution * GRAIN * expit(margins)).astype(np.int32)

    def targets(self, labels: np.ndarray, resolution: int) -> np.ndarray:
        """int32 (n,): the label's part of the derivative, in the units of `nodes`."""
        return np.rint(resolution * GRAIN * labels).astype(np.int32)

    def first_intercept(self, mean_derivative: float, least_rate: float) -> float:
        """The intercept that fits the label rate alone, from the mean derivative at margin 0.

        The rate is kept at least `least_rate` away from 0 and 1.
        """
        rate = min(max(0.5 - mean_derivative, least_rate), 1 - least_rate)
        return math.log(rate / (1 - rate))

    def curvature(self, first_intercept: float) -> float:
        """Rate * (1 - rate) at the first intercept.

        p(1 - p) is concave, so at this mean of p no spread of margins has a larger mean
        curvature: a Newton step with it does not overshoot.
        """
        rate = expit(first_intercept)
        return max(float(rate * (1 - rate)), 1e-3)


def named_loss(loss: str, label) -> Logistic:
    """The loss of that name, checked against the kind of label the facts state."""
    if loss in ("squared", "huber") or callable(loss):
        raise NotYetError(f"loss {loss!r} is not yet supported; use loss=\"logistic\"")
    if loss != "logistic":
        raise InputError(f'loss must be "logistic", not {loss!r}')
    if label != "binary":
        raise InputError('loss "logistic" needs label="binary" in the facts')
    return Logistic()
