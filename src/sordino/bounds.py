"""Bounds learned from the data: private quantiles over a public grid, each charged as one pick.

A quantile is picked by the exponential mechanism in base 2 (Smith 2011 has it over intervals, in
base e, from memory; Ilvento 2020 for base 2): candidate b of a public grid with probability
proportional to 2^(-kappa * loss(b)), kappa = multiplier / 2^shift.

The loss. Every contribution is first rounded up to the grid, b counts as the a/c quantile of N
contributions if #(< b) <= (a/c) N <= #(<= b), and its loss is by how far it misses that, times c:

    loss(b) = max(0, c #(< b) - a N, a N - c #(<= b)),

a whole number. A candidate between two contributions, at which nothing lies after rounding, has the
usual loss |c #(<= b) - a N|. Counting what lies at b itself as on either side is what makes whole
numbers work: of ones and twos alone, the 95 % quantile is 2, while by the usual loss everything
above 2 would be as good.

Sensitivity. One contribution more, at v, moves c #(< b) - a N by c - a where v < b and by -a
elsewhere, and likewise c #(<= b) - a N; one less, the other way. One contribution in another's
place moves N by nothing and either count by at most 1, so either term by at most c. And
max(0, ., .) moves by no more than its terms do. So the loss of every candidate moves by at most

    s = max(a, c - a)   for a row added or removed,
    s = c               for a row in the place of another, with or without a contribution,

as every row contributes at most once, and by at most r s for a person of at most r rows. The
log-probabilities log p(b) = -kappa ln 2 loss(b) + constant of two neighbours then differ by a
function of b whose range is at most kappa ln 2 * 2 r s: that is the bounded-range parameter of the
pick, whatever the constants are.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from ._core.bits import Bits
from .accounting import Cost, pick_cost
from .errors import InputError

# 2^(k/8) for k = -320 ... 320: constants, public, and the same on every machine, since square roots
# are rounded correctly. `SIGNED_GRID` is the same with 0 and both signs.
_POWERS = np.arange(-320, 321)
GRID = np.ldexp(np.sqrt(np.sqrt(np.sqrt(2.0 ** (_POWERS % 8)))), _POWERS // 8)
SIGNED_GRID = np.concatenate([-GRID[::-1], [0.0], GRID])

RATE_BITS = 20          # at most so many bits in a rate's multiplier
MOST_SHIFT = 62


@dataclass(frozen=True)
class Quantile:
    """The a/c quantile: a of c parts of the contributions lie at or below it."""

    a: int
    c: int

    def losses(self, contributions: np.ndarray, grid: np.ndarray) -> np.ndarray:
        """int64 (len(grid),): the loss of every candidate, as defined above.

        contributions  float64 (N,), finite; those above the grid lie above every candidate
        grid           float64, ascending
        """
        places = np.searchsorted(grid, contributions)
        counts = np.bincount(places, minlength=len(grid) + 1)[:-1]
        up_to = np.cumsum(counts)
        wanted = self.a * len(contributions)
        return np.maximum(0, np.maximum(self.c * (up_to - counts) - wanted,
                                        wanted - self.c * up_to))

    def loss_range(self, rows_per_person: int, neighbours: str) -> int:
        """2 r s: by how much the losses of two candidates can part between neighbours."""
        per_row = max(self.a, self.c - self.a) if neighbours == "add-remove" else self.c
        return 2 * rows_per_person * per_row


# Of magnitudes, one per row, to bound the entries. Outliers in 1 % of the rows must not reach it.
ENTRY_QUANTILE = Quantile(19, 20)
# Of labels from either end. Labels are clipped at both, which shrinks what can be predicted of
# normal labels by 5 % and their R^2 by a quarter of a percent, and the noise grows with the range:
# 1/100 would widen it by a fifth, and leave 2.5 times fewer rows to find its ends by.
LABEL_QUANTILE = Quantile(39, 40)


# --- the rate of a pick, and what it costs

def quantile_rate(pick_epsilon: float, loss_range: int) -> tuple[int, int]:
    """(multiplier, shift): the largest rate with that bounded range, rounded down.

    quantile_epsilon(multiplier, shift, loss_range) <= pick_epsilon holds in floating point too.
    For a zCDP budget rho, pick_epsilon is sqrt(8 rho). Raises InputError where it is too small.
    """
    kappa = pick_epsilon / (math.log(2) * loss_range)
    shift = min(max(RATE_BITS - math.frexp(kappa)[1], 1), MOST_SHIFT)
    multiplier = math.floor(min(math.ldexp(kappa, shift), 2**RATE_BITS))
    while quantile_epsilon(multiplier, shift, loss_range) > pick_epsilon:
        multiplier -= 1
    if multiplier < 1:
        raise InputError(f"pick epsilon {pick_epsilon:g} is too small to learn a bound with")
    return multiplier, shift


def quantile_epsilon(multiplier: int, shift: int, loss_range: int) -> float:
    """The bounded-range parameter of one pick, kappa ln 2 * loss_range."""
    return math.ldexp(multiplier * loss_range, -shift) * math.log(2)


def quantile_cost(multiplier: int, shift: int, loss_range: int) -> Cost:
    """What one pick costs."""
    return pick_cost(quantile_epsilon(multiplier, shift, loss_range))


def rank_error(quantile: Quantile, multiplier: int, shift: int, candidates: int,
               failure: float) -> float:
    """Rows by which a pick misses its rank, at most, but with probability `failure`.

    For contributions inside the grid, where some candidate has loss 0: every other candidate of
    loss t is picked with probability at most 2^(-kappa t).
    """
    loss = math.ldexp(math.log2(candidates / failure) / multiplier, shift)
    return loss / quantile.c


# --- picking

def private_quantile(losses: np.ndarray, multiplier: int, shift: int, bits: Bits) -> int:
    """An index with probability exactly proportional to 2^(-multiplier * loss / 2^shift).

    losses  int64 (candidates,), multiplier * losses below 2^64

    By rejection: a candidate proposed uniformly is taken with probability
    2^(-kappa (loss - least loss)). At most as many proposals as candidates, on average.
    """
    excess = (losses - losses.min()).tolist()
    while True:
        index = bits.below(len(excess))
        whole, part = divmod(multiplier * excess[index], 1 << shift)
        if bits.bernoulli_pow2(whole, part, shift):
            return index


def learned_entry_bound(magnitudes: np.ndarray, multiplier: int, shift: int, bits: Bits) -> float:
    """A bound on |x_ij| from `table.sampled_magnitudes`: a private 95 % quantile, out of GRID.

    The rate is for ENTRY_QUANTILE, and the cost that of one pick.
    """
    losses = ENTRY_QUANTILE.losses(magnitudes, GRID)
    return float(GRID[private_quantile(losses, multiplier, shift, bits)])


def learned_label_range(labels: np.ndarray, multiplier: int, shift: int,
                        bits: Bits) -> tuple[float, float]:
    """(low, high), low < high out of SIGNED_GRID: private 2.5 % and 97.5 % quantiles of the labels.

    labels  float64 (n,), one per row

    The rate is for LABEL_QUANTILE, and the cost that of two picks: `high` is a quantile of the
    labels, `low` the negative of the same quantile of their negatives, so each is rounded outwards.
    Ends that come out equal or crossed are put right afterwards, from what was picked alone.
    The grid is fine near 0: labels that vary little around a large value are better shifted by a
    public one first.
    """
    ends = []
    for sign in (1, -1):
        losses = LABEL_QUANTILE.losses(sign * labels, SIGNED_GRID)
        ends.append(sign * SIGNED_GRID[private_quantile(losses, multiplier, shift, bits)])
    return _widened(*sorted(map(float, ends)))


def _widened(low: float, high: float) -> tuple[float, float]:
    """The same where low < high, else the neighbours on the grid."""
    if low < high:
        return low, high
    at = int(np.searchsorted(SIGNED_GRID, low))
    last = len(SIGNED_GRID) - 1
    return float(SIGNED_GRID[max(at - 1, 0)]), float(SIGNED_GRID[min(at + 1, last)])
