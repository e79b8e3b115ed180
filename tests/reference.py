"""The slow oracle: rows, scores and picks in numpy and Python integers, nothing kept up to date.

Written from the specification, not from the kernels, and importing nothing of theirs. Every figure
is computed from the table, the weights and the intercept anew whenever it is asked for.
"""

from __future__ import annotations

from fractions import Fraction

import numpy as np

MARGIN_UNIT = 2.0**-17
MARGIN_END = 2**21          # the derivative is tabulated over margins in [-16, 16)
FAR = 2**29
CELL = 2**10                # fixed-point margins between two nodes
GRAIN = 2**16               # nodes, targets and dithers come in units of 2^-16 of a derivative step
# A curve of slope 1 in units of its own: a fixed-point margin of 128 z has the derivative z.
STRAIGHT = (np.arange(-2048, 2049) * 2**19).astype(np.int32)
STRAIGHT_SCALE = 128.0


def quantised(X: np.ndarray, bound, levels: int) -> np.ndarray:
    """int64 (n, d): rint(x_ij * levels / bound_j), clipped to [-levels, levels]."""
    factor = levels / np.asarray(bound, dtype=np.float64)
    return np.clip(np.rint(factor * np.asarray(X)), -levels, levels).astype(np.int64)


def far_clipped(margins: np.ndarray) -> np.ndarray:
    """int64 (n,): truncated fixed-point margins, held within FAR."""
    return np.trunc(np.clip(margins, -FAR, FAR)).astype(np.int64)


def fixed_margins(scale: float, z: np.ndarray, rest) -> np.ndarray:
    """int64 (n,): trunc(scale * z) + rest, held within FAR and then within the table."""
    moved = far_clipped(scale * z.astype(np.float64))
    return np.clip(moved + rest, -MARGIN_END, MARGIN_END - 1)


def fine_derivatives(nodes: np.ndarray, margins: np.ndarray) -> np.ndarray:
    """int64 (n,): the curve between its nodes, a straight line rounded down."""
    cell, part = np.divmod(margins + MARGIN_END, CELL)
    nodes = nodes.astype(np.int64)
    return nodes[cell] + (nodes[cell + 1] - nodes[cell]) * part // CELL


def rounded_derivatives(nodes, margins, target, dither, limit: int) -> np.ndarray:
    """int64 (n,): floor(R * derivative + u), clipped to [-limit, limit]."""
    fine = fine_derivatives(nodes, margins) - target.astype(np.int64) + dither.astype(np.int64)
    return np.clip(fine // GRAIN, -limit, limit)


def course(schedule: str, steps: int):
    """(weights, scale): move t adds weights[t] to v, and after t moves w = radius * scale[t] * v.

    "shrinking": w <- (1 - g) w + g * vertex, g = 2 / (t + 2). "paced": w <- w + vertex / steps.
    """
    if schedule == "paced":
        return np.ones(steps, dtype=np.int64), np.full(steps + 1, 1 / steps)
    t = np.arange(1, steps + 1)
    scale = 2 / (t * (t + 1))
    return t, np.r_[scale[0], scale]


def column_arrays(X: np.ndarray):
    """(offsets, rows, values) of an integer matrix by columns; values None where all are 1."""
    columns, rows = np.nonzero(X.T)
    values = X.T[columns, rows]
    offsets = np.searchsorted(columns, np.arange(X.shape[1] + 1))
    kind = np.int8 if abs(values).max(initial=0) <= 127 else np.int16
    stored = None if (values == 1).all() else values.astype(kind)
    return offsets.astype(np.int64), rows.astype(np.int32), stored


class Eager:
    """One run over a dense table, from nothing at every step.

    X       int64 (n, d)
    target  (n,) the label's part of the derivative; dither (n,) the rounding offsets, both in GRAIN
    nodes   (4097,) the curve in GRAIN; limit clips the derivatives
    scale   float64 (steps + 1,) fixed-point margin per unit of X @ v after t moves
    offset_unit  fixed-point margin per unit of X @ base, which no move shrinks
    """

    def __init__(self, X, target, dither, nodes, limit: int, scale, offset_unit: float = 0.0):
        self.X = np.asarray(X, dtype=np.int64)
        self.target, self.dither, self.nodes = target, dither, nodes
        self.limit, self.scale = limit, scale
        self.v, self.base = (np.zeros(self.X.shape[1], dtype=np.int64) for _ in range(2))
        self.offset_unit = offset_unit
        self.moves_made = 0
        self.intercept = 0

    def move(self, feature: int, weight: int):
        self.v[feature] += weight
        self.moves_made += 1

    def set_intercept(self, intercept: int):
        self.intercept = intercept

    def shift_offset(self, features, weights, intercept: int):
        np.add.at(self.base, features, weights)
        self.intercept = intercept

    @property
    def z(self) -> np.ndarray:
        return self.X @ self.v

    @property
    def margins(self) -> np.ndarray:
        offset = far_clipped(self.offset_unit * (self.X @ self.base).astype(np.float64))
        return fixed_margins(self.scale[self.moves_made], self.z, self.intercept + offset)

    @property
    def q(self) -> np.ndarray:
        return rounded_derivatives(self.nodes, self.margins, self.target, self.dither, self.limit)

    @property
    def total(self) -> int:
        return int(self.q.sum())

    @property
    def scores(self) -> np.ndarray:
        """int64 (d,): G_j = sum_i q_i x_ij."""
        return self.q @ self.X


def pick_probabilities(scores, kappa: Fraction, powers=0) -> np.ndarray:
    """float64 (d, 2): p(j, s) proportional to 2^(powers[j] + kappa * -s * G_j), s = -1 in column 0,
    +1 in 1.

    Exponents are whole numbers over kappa's denominator until they are taken from the largest.
    """
    scaled = kappa.numerator * np.asarray(scores, dtype=np.int64)
    raised = kappa.denominator * np.asarray(powers, dtype=np.int64)
    exponents = np.stack([raised + scaled, raised - scaled], axis=1)
    weights = np.exp2((exponents - exponents.max()) / kappa.denominator)
    return weights / weights.sum()
