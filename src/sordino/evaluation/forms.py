"""What an evaluation measures: whole numbers over rows, and how far rows can move them."""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import cache, cached_property

import numpy as np
from scipy.special import logit

from ..losses import MARGIN_END
from ..release import Release

BINS = 256
RUNS = (1, 8, 64)           # bins per cell
BEND = 0.5                  # margin from which bins widen
LEAST_REACH = 2.0**-10
FURTHEST_CENTRE = 2.0**20
GROUPS = (0.01, 0.03, 0.1, 0.2, 0.3, 0.4, 0.5, 0.6, 0.7, 0.8, 0.9, 0.97, 0.99)
SUM_UNITS = 2**19


@dataclass(frozen=True)
class MarginHistogram:
    """Margins counted by label over BINS public bins, in cells of 1, 8 and 64 bins.

    centre  the intercept of the release
    reach   how far margins lie from it at most where entries keep to their bounds

    Bins have equal widths in asinh(margin / BEND) between centre - reach and centre + reach, the
    first and last taking in all that lies beyond; edges next to the bounds of calibration groups
    are moved onto them. All of it follows from the release. On normal margins of AUC 0.6 to 0.98,
    from 0.3 to 4 times as large as calibrated ones, bins cost an AUC less than 0.001.
    """

    centre: float
    reach: float

    @classmethod
    def of(cls, release: Release) -> MarginHistogram:
        known = release.known
        reach = math.fsum(abs(known.in_bounds(release.features, release.coefficients)))
        centre = min(max(release.intercept, -FURTHEST_CENTRE), FURTHEST_CENTRE)
        return cls(centre, min(max(reach, LEAST_REACH), MARGIN_END))

    @property
    def size(self) -> int:
        """How many counts are measured."""
        return 2 * sum(BINS // run for run in RUNS)

    @cached_property
    def bounds(self) -> np.ndarray:
        """float64 (BINS + 1,): where bins end, ascending."""
        ends = np.array([self.centre - self.reach, self.centre + self.reach])
        bounds = BEND * np.sinh(np.linspace(*np.arcsinh(ends / BEND), BINS + 1))
        for margin in logit(GROUPS):
            if ends[0] < margin < ends[1]:
                bounds[1 + np.argmin(abs(bounds[1:-1] - margin))] = margin
        return bounds

    @property
    def middles(self) -> np.ndarray:
        """float64 (BINS,): the margins that stand for the rows of a bin."""
        return (self.bounds[:-1] + self.bounds[1:]) / 2

    def measured(self, margins: np.ndarray, labels: np.ndarray) -> np.ndarray:
        """int64 (2 * cells,): the cells of label 0, then those of label 1.

        Bin k holds bounds[k] < margin <= bounds[k + 1], so that a label is predicted as
        `Release.predict` does. Where a row lands depends on that row alone.
        """
        bins = np.searchsorted(self.bounds[1:-1], margins)
        places = BINS * (labels > 0) + bins
        counts = np.bincount(places, minlength=2 * BINS).reshape(2, BINS)
        cells = [counts.reshape(2, -1, run).sum(axis=2) for run in RUNS]
        return np.concatenate(cells, axis=1).ravel()

    def squared_sensitivity(self, rows_per_person: int, neighbours: str) -> int:
        """The square of the sensitivity in L2 of what is measured, between neighbours.

        A row lands in exactly one cell of each of the three runs, so it adds one vector of squared
        length 3, of zeros and ones. A person's b <= r rows add up to u with |u| <= b sqrt(3)
        (triangle inequality), hence |u|^2 <= 3 r^2: that is "add-remove". Under "replace-one" rows
        that add up to u make way for such that add up to v, and
        |v - u|^2 = |v|^2 + |u|^2 - 2 u.v <= 6 r^2, as u and v have no negative entry.
        """
        return len(RUNS) * rows_per_person**2 * (1 if neighbours == "add-remove" else 2)


@dataclass(frozen=True)
class LabelSums:
    """Four sums over rows, of labels and predictions clipped to a public label range.

    low, high  the label range

    With z the label and p the prediction in half ranges from the middle, both in [-1, 1], the sums
    are of 1, z, 2 z^2 and (p - z)^2, each term in units of 1/SUM_UNITS, to the nearest.
    """

    low: float
    high: float

    size = 4                    # sums

    @property
    def half(self) -> float:
        return self.high / 2 - self.low / 2

    @property
    def middle(self) -> float:
        return self.high / 2 + self.low / 2

    def measured(self, margins: np.ndarray, labels: np.ndarray) -> np.ndarray:
        """int64 (4,): the sums."""
        z, p = (np.clip((values - self.middle) / self.half, -1, 1) for values in (labels, margins))
        terms = np.stack([np.ones_like(z), z, 2 * z**2, (p - z)**2])
        return np.rint(SUM_UNITS * terms).astype(np.int64).sum(axis=1)

    def squared_sensitivity(self, rows_per_person: int, neighbours: str) -> int:
        """The square of the sensitivity in L2 of the four sums together, between neighbours.

        In SUM_UNITS a row's terms lie in {1}, [-1, 1], [0, 2] and [0, 4], rounding included, as
        these ends are whole in those units. So r rows more or less move the sums by at most r, r,
        2r and 4r: in square by 22 r^2. Where a <= r rows make way for b <= r others, sums of terms
        of one sign move by at most r times the largest, the sum of z by at most (a + b): in square
        by r^2 + 4 r^2 + 4 r^2 + 16 r^2.
        """
        return (22 if neighbours == "add-remove" else 25) * (rows_per_person * SUM_UNITS)**2


@cache
def cells() -> np.ndarray:
    """float64 (cells, BINS): 1 where a cell covers a bin."""
    return np.concatenate([np.kron(np.eye(BINS // run), np.ones(run)) for run in RUNS])


@cache
def covariance() -> np.ndarray:
    """float64 (BINS, BINS): inv(A^T A), of the least-squares estimate per unit of variance."""
    covers = cells()
    return np.linalg.inv(covers.T @ covers)
