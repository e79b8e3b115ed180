"""Plans for greedy selection with corrections: picks, shares of the budget, clipping.

The rules come from trials on the words of software packages (50,000 x 64,000, epsilon 0.5 to 4):
DEVELOPERS.md tells what was tried.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from ..accounting import Cost, gaussian_cost, pick_cost, zcdp_of_epsilon
from ..checks import whole_number
from ..errors import InputError
from ..facts import Guarantee, PublicFacts
from ..losses import Logistic
from .base import (
    ENTRY_LEVELS,
    MOST_SCORE,
    MOST_VARIANCE,
    RATE_BITS,
    Plan,
    fitting_rate,
    fitting_resolution,
    fitting_variance,
    kappa_of,
    plan_of,
)

MOST_PICKS = 256
SHARES = {"picks": 0.7, "corrections": 0.25, "second moments": 0.05}
LAST_TO_FIRST = 16          # budget of the last pick over that of the first
NORM = 2.0                  # of a row over intercept and chosen features, in bounds
FINAL_CORRECTIONS = 4       # after the last pick
AVERAGED = 3                # of those, the last ones
DAMPING = 0.85              # of a Newton step
COEFFICIENT_SCALE = 2.0     # of coefficients in bounds, when a noisy gradient is to be trusted

WEIGHT_BITS = 8             # B: rows weigh whole multiples of 2^-B
COEFFICIENT_BITS = 25       # coefficients are whole multiples of 2^-25 over bounds while fitting
MOST_COEFFICIENT = 32.0     # in bounds


@plan_of("greedy")
@dataclass(frozen=True)
class GreedyPlan(Plan):
    """A plan for greedy selection: fresh features one by one, each followed by a correction.

    picks                features, all different
    multipliers          of the picks, in order: later ones are stronger
    limit                L: rows longer than this, in quantisation levels, count for less
    first_variance       of the discrete Gaussian noise on sum_i q_i, where the intercept starts
    correction_variance  of the noise on each coordinate of a correction's gradient
    moment_variance      of the noise on each second moment of a pick with the features before it
    final_corrections    after the last pick; the last `averaged` of them make the release
    """

    picks: int
    multipliers: tuple[int, ...]
    limit: int
    first_variance: int
    correction_variance: int
    moment_variance: int
    final_corrections: int
    averaged: int

    intercept = True
    shrinking = False

    @property
    def norm(self) -> float:
        """The clipping length L in bounds."""
        return self.limit / self.entry_levels

    @property
    def corrections(self) -> int:
        return self.picks + self.final_corrections

    @property
    def gradient_sensitivity(self) -> int:
        """Of a correction's gradient, in L2: R 2^B L, twice that under "replace-one"."""
        return (self.resolution * self.limit << WEIGHT_BITS) * self.guarantee.swap_factor

    @property
    def moment_sensitivity(self) -> int:
        """Of a pick's second moments, in L2: M 2^B L, twice that under "replace-one"."""
        return (self.entry_levels * self.limit << WEIGHT_BITS) * self.guarantee.swap_factor

    @property
    def parts(self) -> tuple[tuple[str, Cost], ...]:
        picks = sum(map(pick_cost, map(self.epsilon_of_rate, self.multipliers)), Cost.nothing())
        first = gaussian_cost(self.intercept_sensitivity, self.first_variance)
        correction = gaussian_cost(self.gradient_sensitivity, self.correction_variance)
        moments = gaussian_cost(self.moment_sensitivity, self.moment_variance)
        return (
            ("picks", picks),
            ("corrections", first + correction.times(self.corrections)),
            ("second moments", moments.times(self.picks)),
        )

    @property
    def most_reach(self) -> float:
        return MOST_COEFFICIENT * self.picks

    @property
    def most_rows(self) -> int:
        score = max(self.multipliers) * self.resolution * self.entry_levels
        moment = max(self.resolution, self.entry_levels) * self.entry_levels << WEIGHT_BITS
        return (MOST_SCORE - 1) // max(score, moment)

    def unit_margins(self) -> np.ndarray:
        return np.array([2.0**-COEFFICIENT_BITS])

    @staticmethod
    def checked(fields: dict) -> dict:
        """Fields as `from_dict` needs them; InputError for one that cannot be."""
        most = _most_picks(fields["facts"], len(fields["exclude"]))
        picks = whole_number("picks", fields["picks"], 1, most)
        rates = fields["multipliers"]
        if not isinstance(rates, list) or len(rates) != picks:
            raise InputError("multipliers must be a list with one whole number per pick")
        for rate in rates:
            whole_number("a multiplier", rate, 1, 2**RATE_BITS)
        whole_number("limit", fields["limit"], 1, 2**10 * ENTRY_LEVELS)
        for name in ("first_variance", "correction_variance", "moment_variance"):
            whole_number(name, fields[name], 1, MOST_VARIANCE)
        final = whole_number("final_corrections", fields["final_corrections"], 1, 1000)
        whole_number("averaged", fields["averaged"], 1, final)
        return fields | {"multipliers": tuple(rates)}


def plan_greedy(facts: PublicFacts, guarantee: Guarantee, loss: Logistic,
                exclude: tuple[int, ...], *, picks, intercept) -> GreedyPlan:
    """Decide what is left out, then share out the whole budget."""
    if guarantee.delta == 0:
        raise InputError(
            "greedy selection measures corrections with Gaussian noise, which needs delta above 0"
        )
    if intercept not in (None, True):
        raise InputError("greedy selection always has an intercept")
    most = _most_picks(facts, len(exclude))
    picks = min(default_picks(facts, guarantee), most) if picks is None else picks
    picks = whole_number("picks", picks, 1, most)
    zcdp = zcdp_of_epsilon(guarantee.epsilon, guarantee.delta) * (1 - 1e-12)
    epsilons = _pick_epsilons(SHARES["picks"] * zcdp, picks)
    resolution = fitting_resolution(facts, guarantee, epsilons[-1])
    multipliers, shift = _multipliers(facts, guarantee, epsilons, resolution)
    limit = round(NORM * ENTRY_LEVELS)
    correction = SHARES["corrections"] * zcdp / (picks + FINAL_CORRECTIONS + 1)
    moment = SHARES["second moments"] * zcdp / picks
    reach = limit << WEIGHT_BITS
    swaps = guarantee.swap_factor
    variances = (
        fitting_variance(swaps * resolution, correction),
        fitting_variance(swaps * resolution * reach, correction),
        fitting_variance(swaps * ENTRY_LEVELS * reach, moment),
    )
    plan = GreedyPlan(
        facts, guarantee, "greedy", loss.name, resolution, ENTRY_LEVELS, shift, "zcdp",
        exclude, picks, multipliers, limit, *variances, FINAL_CORRECTIONS, AVERAGED,
    )
    if plan.most_rows < facts.rows:
        raise InputError("sums over this many rows do not fit in 64 bits: state fewer rows")
    return plan


def default_picks(facts: PublicFacts, guarantee: Guarantee) -> int:
    """sqrt(n sqrt(rho) / s) / 3, with s = 2 under "replace-one": at least 2."""
    zcdp = zcdp_of_epsilon(guarantee.epsilon, guarantee.delta)
    picks = math.sqrt(facts.rows / guarantee.swap_factor * math.sqrt(zcdp)) / 3
    return round(min(max(picks, 2), _most_picks(facts)))


def _most_picks(facts: PublicFacts, excluded: int = 0) -> int:
    return min(facts.features - excluded, MOST_PICKS)


def _pick_epsilons(zcdp: float, picks: int) -> list[float]:
    """One per pick: zCDP growing from pick to pick by the same factor, LAST_TO_FIRST in all."""
    growth = LAST_TO_FIRST ** (np.arange(picks) / max(picks - 1, 1))
    return np.sqrt(8 * zcdp * growth / growth.sum()).tolist()


def _multipliers(facts, guarantee, epsilons, resolution: int) -> tuple[tuple[int, ...], int]:
    """Every rate rounded down, all with the shift of the largest."""
    kappas = [kappa_of(epsilon, resolution, guarantee) for epsilon in epsilons]
    _, shift = fitting_rate(kappas[-1], facts.rows, resolution)
    rates = tuple(math.floor(math.ldexp(kappa, shift)) for kappa in kappas)
    if min(rates) < 1:
        raise InputError("rates for these picks do not fit in 64 bits: state fewer rows or picks")
    return rates, shift
