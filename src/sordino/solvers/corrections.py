"""Noisy joint corrections of a chosen set of features and the intercept.

Row i holds the vector x_i' = (1, x_iS) over the intercept and the chosen features S. Two sums over
rows are released, each with exact discrete Gaussian noise on every coordinate:

* the gradient, sum_i q_i w_i x_i';
* for a feature that has just been chosen, its second moments, sum_i x_ij w_i x_i'.

Sensitivity, on the integers themselves. Entries are in quantisation levels, |x_ij| <= M, and 1
stands as M. The weight w_i = min(2^B, floor(2^B L / ceil(|x_i'|))) is a whole number with
w_i |x_i'| <= 2^B L, |.| being the L2 norm: either w_i <= 2^B L / ceil(|x_i'|), or w_i = 2^B is
less than that. As |q_i| <= R and |x_ij| <= M, one row more or less moves the gradient by at most
R 2^B L and the moments by at most M 2^B L in L2. Both w_i and x_i' depend on row i and on what was
chosen alone (row-locality).

What is made of the noisy sums (a Newton-like step, its eigenvalues floored at the noise) is
post-processing.
"""

from __future__ import annotations

import numpy as np

from ..plan.corrections import WEIGHT_BITS


def ceil_sqrt(squares: np.ndarray) -> np.ndarray:
    """int64: the least whole r with r * r >= square, for whole squares from 1 to 2^62."""
    root = np.sqrt(squares.astype(np.float64)).astype(np.int64)     # off by 1 at most
    root -= root * root >= squares
    root += root * root < squares
    return root


class ChosenSet:
    """The chosen features' columns over all rows, and the weight of every row, in integers.

    table   sordino.table.Table
    limit   L: rows longer than this, in quantisation levels, count for less
    """

    def __init__(self, table, limit: int):
        self.columns, self.unit, self.levels, self.limit = (
            table.columns, table.unit, table.levels, limit)
        self.features: list[int] = []
        self.squares = np.full(table.n_rows, table.levels**2, dtype=np.int64)
        self.weights = self._weights_of(self.squares)

    def add(self, feature: int):
        """Take a feature in: the weights of the rows that hold it follow."""
        rows, levels = self._column(feature)
        self.features.append(feature)
        self.squares[rows] += levels * levels
        self.weights[rows] = self._weights_of(self.squares[rows])

    def gradient(self, q: np.ndarray) -> np.ndarray:
        """int64 (1 + chosen,): sum_i q_i w_i x_i'."""
        return self._sums(q.astype(np.int64) * self.weights)

    def moments(self, feature: int) -> np.ndarray:
        """int64 (1 + chosen,): sum_i x_ij w_i x_i' of one feature."""
        rows, levels = self._column(feature)
        weighed = np.zeros(len(self.weights), dtype=np.int64)
        weighed[rows] = levels * self.weights[rows]
        return self._sums(weighed)

    def _sums(self, weighed: np.ndarray) -> np.ndarray:
        """sum_i weighed_i x_i', exact: the caller keeps sums below 2^63."""
        sums = [self.levels * int(weighed.sum())]
        for feature in self.features:
            rows, levels = self._column(feature)
            sums.append(int((weighed[rows] * levels).sum()))
        return np.array(sums, dtype=np.int64)

    def _column(self, feature: int) -> tuple[np.ndarray, np.ndarray | int]:
        """Row ids of a feature and its entries in levels."""
        start, stop = self.columns.offsets[feature], self.columns.offsets[feature + 1]
        if self.columns.values is None:
            return self.columns.rows[start:stop], self.unit
        values = self.columns.values[start:stop].astype(np.int64)
        return self.columns.rows[start:stop], self.unit * values

    def _weights_of(self, squares: np.ndarray) -> np.ndarray:
        weights = (self.limit << WEIGHT_BITS) // ceil_sqrt(squares)
        return np.minimum(weights, 1 << WEIGHT_BITS)


def noisy(sums: np.ndarray, variance: int, bits) -> np.ndarray:
    """float64: every sum with discrete Gaussian noise of this variance of its own."""
    noise = bits.discrete_gaussians(variance, len(sums))
    return np.array([int(total) + drawn for total, drawn in zip(sums, noise)], dtype=float)


def trusted_newton(hessian: np.ndarray, floor: float,
                   noise: float) -> tuple[np.ndarray, np.ndarray]:
    """(A, H): a Newton step is -A g, as far as a noisy gradient g can be trusted.

    H is the symmetric part of `hessian`, its eigenvalues h raised to at least `floor`. Along an
    eigenvector a coefficient of scale 1 gives a gradient of scale h; against noise of standard
    deviation `noise` its best linear guess is -h g/(h^2 + noise^2), which is -g/h without noise.
    """
    values, vectors = np.linalg.eigh((hessian + hessian.T) / 2)
    values = np.maximum(values, floor)
    weights = values / (values**2 + noise**2)
    return vectors * weights @ vectors.T, vectors * values @ vectors.T
