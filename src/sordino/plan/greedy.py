"""Plans for greedy selection with corrections: picks and shares of the budget.

The rules come from trials on the words of software packages (50,000 x 64,000, epsilon 0.5 to 4):
DEVELOPERS.md tells what was tried.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from ..accounting import zcdp_of_epsilon
from ..checks import whole_number
from ..errors import InputError
from ..facts import Guarantee, PublicFacts
from ..losses import Loss
from .base import (
    ENTRY_LEVELS,
    LEARNING_SHARE,
    MOST_SCORE,
    RATE_BITS,
    ROWS_SHARE,
    Plan,
    changes_of,
    fitting_rate,
    fitting_resolution,
    kappa_of,
    plan_of,
    quantiles_to_learn,
    zcdp_of_rows,
)
from .corrections import (
    COEFFICIENT_UNIT,
    MOST_COEFFICIENT,
    NORM,
    SHARES,
    WEIGHT_BITS,
    fitting_variance,
    with_corrections,
)
from .knowledge import PublicKnowledge

MOST_PICKS = 256
LAST_TO_FIRST = 16          # budget of the last pick over that of the first
FINAL_CORRECTIONS = 4       # after the last pick
AVERAGED = 3                # of those, the last ones


@plan_of("greedy")
@dataclass(frozen=True)
class GreedyPlan(Plan):
    """A plan for greedy selection: fresh features one by one, each followed by a correction.

    picks                features, all different
    multipliers          of the picks, in order: later ones are stronger
    final_corrections    after the last pick; the last `averaged` of them make the release
    """

    picks: int
    multipliers: tuple[int, ...]
    final_corrections: int
    averaged: int

    intercept = True
    shrinking = False
    looks = 1

    @property
    def in_model(self) -> tuple[int, ...]:
        """Features that are corrected from the start, and never drawn."""
        return tuple(sorted({*self.knowledge.include, *self.knowledge.started}))

    @property
    def barred(self) -> tuple[int, ...]:
        return self.knowledge.exclude + self.in_model

    @property
    def corrections(self) -> int:
        return (1 if self.in_model else 0) + self.picks + self.final_corrections

    @property
    def moments(self) -> int:
        return len(self.in_model) + self.picks

    @property
    def own_reach(self) -> float:
        return MOST_COEFFICIENT * self.moments

    @property
    def most_rows(self) -> int:
        score = max(self.multipliers) * self.resolution * self.entry_levels
        moment = max(self.resolution, self.entry_levels) * self.entry_levels << WEIGHT_BITS
        return (MOST_SCORE - 1) // max(score, moment)

    def unit_margins(self) -> np.ndarray:
        return np.array([COEFFICIENT_UNIT])

    @staticmethod
    def checked(fields: dict) -> dict:
        """Fields as `from_dict` needs them; InputError for one that cannot be."""
        picks = whole_number("picks", fields["picks"], 1,
                             _most_picks(fields["facts"], fields["knowledge"]))
        rates = fields["multipliers"]
        if not isinstance(rates, list) or len(rates) != picks:
            raise InputError("multipliers must be a list with one whole number per pick")
        for rate in rates:
            whole_number("a multiplier", rate, 1, 2**RATE_BITS)
        for name in ("limit", "rows_variance", "first_variance", "correction_variance",
                     "moment_variance"):
            whole_number(name, fields[name], 1)
        final = whole_number("final_corrections", fields["final_corrections"], 1, 1000)
        whole_number("averaged", fields["averaged"], 1, final)
        return fields | {"multipliers": tuple(rates)}


def plan_greedy(facts: PublicFacts, guarantee: Guarantee, loss: Loss, knowledge: PublicKnowledge,
                *, picks, intercept) -> GreedyPlan:
    """Decide what is left out, then share out the whole budget."""
    if guarantee.delta == 0:
        raise InputError(
            "greedy selection measures corrections with Gaussian noise, which needs delta above 0"
        )
    if intercept not in (None, True):
        raise InputError("greedy selection always has an intercept")
    most = _most_picks(facts, knowledge)
    picks = min(default_picks(facts, guarantee, loss), most) if picks is None else picks
    picks = whole_number("picks", picks, 1, most)
    quantiles = quantiles_to_learn(facts, guarantee)
    whole = zcdp_of_epsilon(guarantee.epsilon, guarantee.delta) * (1 - 1e-12)
    zcdp = whole * (1 - ROWS_SHARE - LEARNING_SHARE * len(facts.learned))
    epsilons = _pick_epsilons(SHARES["picks"] * zcdp, picks)
    resolution = fitting_resolution(facts, guarantee, loss, epsilons[-1])
    multipliers, shift = _multipliers(facts, guarantee, epsilons, resolution)
    draft = GreedyPlan(
        facts, guarantee, "greedy", loss.name, resolution, ENTRY_LEVELS, shift, "zcdp", knowledge,
        loss.residual_bound, *quantiles.values(), round(NORM * ENTRY_LEVELS),
        fitting_variance(changes_of(facts, guarantee), zcdp_of_rows(guarantee)), 0, 0, 0, picks,
        multipliers, FINAL_CORRECTIONS, AVERAGED,
    )
    plan = with_corrections(draft, SHARES["corrections"] * zcdp, SHARES["second moments"] * zcdp)
    if plan.most_rows < facts.rows:
        raise InputError("sums over this many rows do not fit in 64 bits: state fewer rows")
    return plan


def default_picks(facts: PublicFacts, guarantee: Guarantee, loss: Loss) -> int:
    """c sqrt(n sqrt(rho) / s), s one-row changes making one neighbour, c by loss: at least 2."""
    zcdp = zcdp_of_epsilon(guarantee.epsilon, guarantee.delta)
    rows = facts.rows / changes_of(facts, guarantee)
    picks = loss.usual_picks * math.sqrt(rows * math.sqrt(zcdp))
    return round(min(max(picks, 2), MOST_PICKS, facts.features))


def _most_picks(facts: PublicFacts, knowledge: PublicKnowledge) -> int:
    in_model = {*knowledge.include, *knowledge.started}
    knowledge.refuse_too_many(tuple(in_model), facts)
    return min(facts.features - len(knowledge.exclude) - len(in_model), MOST_PICKS)


def _pick_epsilons(zcdp: float, picks: int) -> list[float]:
    """One per pick: zCDP growing from pick to pick by the same factor, LAST_TO_FIRST in all."""
    growth = LAST_TO_FIRST ** (np.arange(picks) / max(picks - 1, 1))
    return np.sqrt(8 * zcdp * growth / growth.sum()).tolist()


def _multipliers(facts, guarantee, epsilons, resolution: int) -> tuple[tuple[int, ...], int]:
    """Every rate rounded down, all with the shift of the largest."""
    kappas = [kappa_of(epsilon, resolution, changes_of(facts, guarantee)) for epsilon in epsilons]
    _, shift = fitting_rate(kappas[-1], facts.rows, resolution)
    rates = tuple(math.floor(math.ldexp(kappa, shift)) for kappa in kappas)
    if min(rates) < 1:
        raise InputError("rates for these picks do not fit in 64 bits: state fewer rows or picks")
    return rates, shift
