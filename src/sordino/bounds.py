"""Bounds learned from the data: private quantiles over a public grid, each charged as one pick.

A quantile is picked by the exponential mechanism in base 2 (Smith 2011 has it over intervals, in
base e, from memory; Ilvento 2020 for base 2): candidate b of a public grid with probability
proportional to 2^(-kappa * loss(b)), kappa = multiplier / 2^shift.

The loss. Every contribution is first rounded up to the grid, b counts as the a/c quantile of N
contributions if #(< b) <= (a/c) N <= #(<= b), and its loss is by how far it misses that, times c:

    loss(b) = max(0, c #(< b) - a N, a N - c #(<= b)),

a whole number. A candidate between two contributions, at which nothing lies after rounding, has the
usual loss |c #(<= b) - a N|. Counting what lies at b itself as on either side is what makes whole
numbers work: where a fifth of them are 2 and the others 1, the 90 % quantile is 2, and not, as the
usual loss has it, 2 or whatever lies above.

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
from .checks import checked_keys, whole_number
from .errors import InputError

# 2^(k/8) for k = -320 ... 320: constants, public, and the same on every machine, since square roots
# are rounded correctly. `SIGNED_GRID` is the same with 0 and both signs.
_POWERS = np.arange(-320, 321)
GRID = np.ldexp(np.sqrt(np.sqrt(np.sqrt(2.0 ** (_POWERS % 8)))), _POWERS // 8)
SIGNED_GRID = np.concatenate([-GRID[::-1], [0.0], GRID])

RATE_BITS = 20          # at most so many bits in a rate's multiplier
MOST_SHIFT = 62
MOST_PARTS = 2**10

# Quantiles a/c of magnitudes, one per row, to bound the entries with. On simulated log-normal,
# heavy-tailed and whole entries (20,000 x 3,000, greedy) log loss at epsilon 4 was flat from 9/10
# to 49/50 and worse on either side; at epsilon 1 it was best from 4/5 to 9/10. Outliers in 1 % of
# the rows leave 9/10 be.
ENTRY_QUANTILES = ((9, 10), (4, 5), (1, 2))
# Of labels, from either end. To clip normal labels at 1/40 and 39/40 shrinks what is predicted of
# them by 5 %, which costs a quarter of a percent of R^2; 1/100 would widen the range, and with it
# the noise, by a fifth, and leave 2.5 times fewer rows to find its ends by.
LABEL_QUANTILES = ((39, 40), (19, 20), (9, 10))
FAILURE = 1e-4          # probability with which a planned quantile may lie beyond all rows


@dataclass(frozen=True)
class QuantilePick:
    """One private pick of the a/c quantile of one contribution per row.

    a, c               a of c parts of the contributions lie at or below it
    multiplier, shift  whole numbers: the rate kappa is multiplier / 2^shift

    `planned_quantile` makes one that keeps to a budget. Raises InputError for what cannot be one.
    """

    a: int
    c: int
    multiplier: int
    shift: int

    def __post_init__(self):
        whole_number("the parts of a quantile", self.c, 2, MOST_PARTS)
        whole_number("a quantile", self.a, 1, self.c - 1)
        whole_number("the multiplier of a quantile", self.multiplier, 1, 2**RATE_BITS)
        whole_number("the shift of a quantile", self.shift, 1, MOST_SHIFT)

    def to_dict(self) -> dict:
        return {"a": self.a, "c": self.c, "multiplier": self.multiplier, "shift": self.shift}

    @classmethod
    def from_dict(cls, fields: dict) -> QuantilePick:
        """A pick from `to_dict`; raises InputError for what it would not have made."""
        return cls(**checked_keys("a quantile", fields, ("a", "c", "multiplier", "shift")))

    # --- cost

    def epsilon(self, rows_per_person: int, neighbours: str) -> float:
        """The bounded-range parameter of the pick, kappa ln 2 * 2 r s."""
        units = self.multiplier * loss_range(self.a, self.c, rows_per_person, neighbours)
        return math.ldexp(units, -self.shift) * math.log(2)

    def cost(self, rows_per_person: int, neighbours: str) -> Cost:
        return pick_cost(self.epsilon(rows_per_person, neighbours))

    # --- what it can see

    def rank_error(self, candidates: int, failure: float) -> float:
        """Rows by which the pick misses its rank, at most, but with probability `failure`.

        For contributions inside the grid. Some candidate then has loss 0, and each of loss t or
        more is picked with probability at most 2^(-kappa t).
        """
        loss = math.ldexp(math.log2(candidates / failure) / self.multiplier, self.shift)
        return loss / self.c

    # --- running

    def losses(self, contributions: np.ndarray, grid: np.ndarray) -> np.ndarray:
        """int64 (len(grid),): the loss of every candidate, as defined above.

        contributions  float64 (N,), finite; those above the grid lie above every candidate
        grid           float64, ascending
        """
        places = np.searchsorted(grid, contributions)
        counts = np.bincount(places, minlength=len(grid) + 1)[:-1]
        up_to = np.cumsum(counts)
        wanted = self.a * len(contributions)
        too_high, too_low = self.c * (up_to - counts) - wanted, wanted - self.c * up_to
        return np.maximum(0, np.maximum(too_high, too_low))

    def of(self, contributions: np.ndarray, grid: np.ndarray, bits: Bits) -> float:
        """A private quantile of the contributions: one of the grid."""
        losses = self.losses(contributions, grid)
        return float(grid[private_quantile(losses, self.multiplier, self.shift, bits)])


def loss_range(a: int, c: int, rows_per_person: int, neighbours: str) -> int:
    """2 r s: by how much the losses of two candidates can part between neighbours."""
    per_row = max(a, c - a) if neighbours == "add-remove" else c
    return 2 * rows_per_person * per_row


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


# --- planning

def planned_quantile(quantiles, candidates: int, budget: Cost, rows: int, rows_per_person: int,
                     neighbours: str) -> QuantilePick:
    """The first of the quantiles that so many rows can settle within the budget of one pick.

    quantiles   ENTRY_QUANTILES or LABEL_QUANTILES
    candidates  the size of the grid: len(GRID) or len(SIGNED_GRID)
    budget      in either currency or both: Cost(zcdp, math.inf), Cost(math.inf, pure)
    rows        public, or a planning figure

    Its rank error stays below the rows that lie above it, but with probability FAILURE: otherwise
    all that lies beyond the data would be as likely as what lies within. Raises InputError where
    there are too few rows for any of them.
    """
    for a, c in quantiles:
        rate = quantile_rate(budget, loss_range(a, c, rows_per_person, neighbours))
        pick = QuantilePick(a, c, *rate)
        if pick.rank_error(candidates, FAILURE) * c <= (c - a) * rows:
            return pick
    raise InputError(
        f"{rows:,} rows are too few to learn a bound from at pick epsilon "
        f"{_largest_epsilon(budget):.3g}: state the bound"
    )


def quantile_rate(budget: Cost, units: int) -> tuple[int, int]:
    """(multiplier, shift): the largest rate of a pick that costs no more than the budget.

    budget  of that one pick
    units   its `loss_range`

    Rounded down, so that the cost at this rate keeps to the budget as floating point has it. Raises
    InputError where nothing is left of so small a budget.
    """
    pick_epsilon = _largest_epsilon(budget)
    kappa = pick_epsilon / (math.log(2) * units)
    shift = min(max(RATE_BITS - math.frexp(kappa)[1], 1), MOST_SHIFT)
    multiplier = math.floor(min(math.ldexp(kappa, shift), 2**RATE_BITS))
    if multiplier < 1:
        raise InputError(f"pick epsilon {pick_epsilon:g} is too small to learn a bound with")
    return multiplier, shift


def _largest_epsilon(budget: Cost) -> float:
    """The largest pick epsilon within the budget."""
    pick_epsilon = min(budget.pure, math.sqrt(8 * budget.zcdp))
    return pick_epsilon * (1 - 1e-15)


# --- what is learned

def learned_entry_bound(magnitudes: np.ndarray, pick: QuantilePick, bits: Bits) -> float:
    """A bound on |x_ij|, out of GRID, from `table.sampled_magnitudes`.

    Costs one pick.
    """
    return pick.of(magnitudes, GRID, bits)


def learned_label_range(labels: np.ndarray, pick: QuantilePick, bits: Bits) -> tuple[float, float]:
    """(low, high), low < high, out of SIGNED_GRID, from labels, float64 (n,), one per row.

    Costs two picks: `high` is a quantile of the labels, and `low` the negative of the same quantile
    of their negatives, so that each is rounded outwards. Ends that come out equal or crossed are
    put right afterwards, from what was picked alone. The grid is fine near 0: labels that vary
    little around a large value are better shifted by a public one first.
    """
    high = pick.of(labels, SIGNED_GRID, bits)
    low = 0.0 - pick.of(-labels, SIGNED_GRID, bits)      # never -0.0
    return _widened(min(low, high), max(low, high))


def _widened(low: float, high: float) -> tuple[float, float]:
    """The same where low < high, else the neighbours on the grid."""
    if low < high:
        return low, high
    at = int(np.searchsorted(SIGNED_GRID, low))
    last = len(SIGNED_GRID) - 1
    return float(SIGNED_GRID[max(at - 1, 0)]), float(SIGNED_GRID[min(at + 1, last)])
