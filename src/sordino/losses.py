"""Losses, as the kernels need them: a table of the derivative over fixed-point margins.

A row's derivative is `curve(margin) - target(label)`, clipped to [-1, 1]. The curve is tabulated
once per fit, in whole units of 2^-16 / R, and is linear between nodes 2^-7 apart: for the logistic
curve within 8e-7 of the real one, far under one rounding step at every resolution a plan can
choose; for residuals it is exact. It is this table, not the textbook curve, that the fit follows,
on every machine alike.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from scipy.special import expit

from .checks import positive_number
from .errors import InputError, NotYetError
from .facts import LEARN

MARGIN_UNIT = 2.0**-17
MARGIN_END = 16.0
NODE_GAP = 2.0**-7
GRAIN = 2**16
MOST_RESOLUTION = 2**14

RESIDUAL_BOUNDS = {"squared": 0.25, "huber": 0.125}       # by default, in half ranges of the label
LEAST_BOUND, MOST_BOUND = 0.0625, 2.0
UNKNOWN_RANGE = (-1.0, 1.0)         # of a label that is yet to be learned: half ranges are 1


def fixed_point(margin: float) -> int:
    """A margin in whole units of MARGIN_UNIT, to the nearest."""
    return round(margin / MARGIN_UNIT)


def node_margins() -> np.ndarray:
    """float64 (4097,): -16, -16 + 1/128, ..., 16."""
    return np.arange(-MARGIN_END, MARGIN_END + NODE_GAP / 2, NODE_GAP)


@dataclass(frozen=True)
class Logistic:
    """log(1 + exp(-m)) for label 1, log(1 + exp(m)) for label 0; derivative expit(m) - label."""

    name = kind = "logistic"
    residual_bound = None
    most_resolution = MOST_RESOLUTION
    centre = 0.0                    # predictions are centre + unit * margin
    unit = 1.0
    coefficient_scale = 2.0         # of coefficients in bounds, to weigh a noisy gradient by
    usual_reach = 3.6               # of the paced moves of Frank-Wolfe, over sqrt(steps)
    usual_picks = 1 / 3             # of greedy, over sqrt(rows sqrt(zCDP))

    def nodes(self, resolution: int) -> np.ndarray:
        """int32 (4097,): resolution * 2^16 * expit at `node_margins`."""
        return np.rint(resolution * GRAIN * expit(node_margins())).astype(np.int32)

    def targets(self, labels: np.ndarray, resolution: int) -> np.ndarray:
        """int32 (n,): the label's part of the derivative, in the units of `nodes`."""
        return np.rint(resolution * GRAIN * labels).astype(np.int32)

    def first_intercept(self, mean_derivative: float, error: float) -> float:
        """The intercept that fits the label rate alone, from the mean derivative at margin 0.

        The rate is kept at least `error` away from 0 and 1.
        """
        rate = min(max(0.5 - mean_derivative, error), 1 - error)
        return math.log(rate / (1 - rate))

    def curvature(self, first_intercept: float) -> float:
        """Rate * (1 - rate) at the first intercept.

        p(1 - p) is concave, so at this mean of p no spread of margins has a larger mean
        curvature: a Newton step with it does not overshoot.
        """
        rate = expit(first_intercept)
        return max(float(rate * (1 - rate)), 1e-3)


@dataclass(frozen=True)
class ClippedResidual:
    """Squared loss whose residual is clipped at a public bound, which is Huber's loss.

    With residual r = prediction - label the loss is r^2/2 up to |r| = b, and b |r| - b^2/2 beyond
    (Huber 1964). In units of b the derivative lies in [-1, 1].

    name   "squared" or "huber": they differ in what b is by default
    low, high  the label range; labels are clipped to it
    residual_bound  b in half ranges of the label
    """

    name: str
    low: float
    high: float
    residual_bound: float

    kind = "linear"
    coefficient_scale = 0.5
    usual_picks = 1 / 2

    @property
    def centre(self) -> float:
        return self.low / 2 + self.high / 2

    @property
    def unit(self) -> float:
        """b in units of the label: a margin of 1."""
        return self.residual_bound * (self.high / 2 - self.low / 2)

    @property
    def usual_reach(self) -> float:
        """In bounds of a residual: the same in half ranges for any."""
        return 0.225 / self.residual_bound

    @property
    def furthest(self) -> float:
        """The largest |label|, in units of margin."""
        return 1 / self.residual_bound

    @property
    def most_resolution(self) -> int:
        """The largest power of two at which `nodes` and `targets` fit 32 bits."""
        return 2 ** math.floor(math.log2(2**15 / (self.furthest + 1.5)))

    def nodes(self, resolution: int) -> np.ndarray:
        """int32 (4097,): resolution * 2^16 * margin, as far out as a derivative can depend on."""
        end = math.ceil((self.furthest + 1) / NODE_GAP) * NODE_GAP
        return np.rint(resolution * GRAIN * np.clip(node_margins(), -end, end)).astype(np.int32)

    def targets(self, labels: np.ndarray, resolution: int) -> np.ndarray:
        """int32 (n,): the labels in units of margin, in the units of `nodes`."""
        margins = np.clip((labels - self.centre) / self.unit, -self.furthest, self.furthest)
        return np.rint(resolution * GRAIN * margins).astype(np.int32)

    def first_intercept(self, mean_derivative: float, error: float) -> float:
        """A Newton step from margin 0, where the mean derivative was measured."""
        return -min(max(mean_derivative, -1.0), 1.0)

    def curvature(self, first_intercept: float) -> float:
        """The share of rows whose residuals are not clipped, 1 for wide bounds.

        A guess from the bound, on the safe side where the label range spans six standard deviations
        of residuals or more: a share taken for too small would make Newton steps overshoot.
        """
        return min(1.0, 0.4 + 2.4 * self.residual_bound)


Loss = Logistic | ClippedResidual


def named_loss(loss: str, label, residual_bound: float | None = None) -> Loss:
    """The loss of that name, checked against the kind of label the facts state.

    residual_bound  of squared and Huber's loss, in half ranges of the label; None: the default
    """
    if callable(loss):
        raise NotYetError("a loss of your own is not yet supported")
    if isinstance(loss, str) and loss in RESIDUAL_BOUNDS:
        if label == "binary":
            raise InputError(f'loss "{loss}" needs a label range, label=(low, high), in the facts')
        low, high = UNKNOWN_RANGE if label == LEARN else label
        bound = RESIDUAL_BOUNDS[loss] if residual_bound is None else residual_bound
        return ClippedResidual(loss, low, high, checked_residual_bound(bound))
    if loss != "logistic":
        raise InputError(f'loss must be "logistic", "squared" or "huber", not {loss!r}')
    if label != "binary":
        raise InputError('loss "logistic" needs label="binary" in the facts')
    if residual_bound is not None:
        raise InputError("residual_bound= belongs to the squared and Huber's loss")
    return Logistic()


def checked_residual_bound(bound: object) -> float:
    least, most = LEAST_BOUND, MOST_BOUND
    if not least <= positive_number("residual_bound", bound) <= most:
        raise InputError(f"residual_bound must lie between {least:g} and {most:g}, not {bound:g}")
    return float(bound)
