"""How strong a pick may be under a guarantee."""

from __future__ import annotations

import math

from ..checks import checked_delta, positive_number, whole_number
from ..errors import InputError
from .convert import (
    composed_epsilon,
    epsilon_of_zcdp,
    settled,
    zcdp_of_epsilon,
)
from .curves import Cost, pick_cost

NOTHING = Cost.nothing()


def calibrate_picks(
    epsilon: float, delta: float, picks: int, other: Cost = NOTHING
) -> tuple[float, str]:
    """The largest pick_epsilon at which `picks` picks and `other` together keep (epsilon, delta).

    Returns (pick_epsilon, route); the routes are those of epsilon_and_route. The result is rounded
    so that composed_epsilon of the picks and `other` is at most epsilon. Raises InputError where
    `other` leaves nothing for the picks, or has no pure guarantee at delta = 0.
    """
    epsilon, delta = positive_number("epsilon", epsilon), checked_delta(delta)
    picks = whole_number("picks", picks, 1)
    if delta == 0 and other.pure == math.inf:
        raise InputError(
            "delta must be above 0 for a plan with Gaussian noise, which has no pure guarantee"
        )

    def keeps_the_promise(pick_epsilon):
        return composed_epsilon([pick_cost(pick_epsilon).times(picks), other], delta) <= epsilon

    if keeps_the_promise(0.0):
        largest, route = max(_largest_by_route(epsilon, delta, picks, other))
        pick_epsilon = settled(largest, -1, keeps_the_promise)
        if pick_epsilon > 0:
            return pick_epsilon, route
    raise InputError(
        f"the other parts of the plan alone cost epsilon {composed_epsilon([other], delta):.6g} "
        f"and leave nothing of {epsilon:.6g} for the picks; raise epsilon or make them cheaper"
    )


def _largest_by_route(epsilon, delta, picks, other):
    """[(pick_epsilon, route)], exact up to rounding, 0 where a route leaves nothing."""
    if other.pure < math.inf:
        spent_purely, route = other.pure, "pure"
    else:
        spent_purely, route = epsilon_of_zcdp(other.zcdp, delta), "pure + zcdp"
    zcdp_left = zcdp_of_epsilon(epsilon, delta) - other.zcdp
    return [
        (max(0.0, epsilon - spent_purely) / picks, route),
        (math.sqrt(8 * max(0.0, zcdp_left) / picks), "zcdp"),
    ]


def textbook_pick_epsilon(epsilon: float, delta: float, steps: int) -> float:
    """The epsilon of one step by the textbook calibration, epsilon/sqrt(8 T ln(1/delta)).

    Source: Talwar, Thakurta and Zhang 2015, Algorithm 2 (advanced composition). Raises InputError
    at delta = 0.
    """
    epsilon, steps = positive_number("epsilon", epsilon), whole_number("steps", steps, 1)
    delta = checked_delta(delta)
    if delta == 0:
        raise InputError("delta must be above 0 for the textbook calibration")
    return epsilon / math.sqrt(-8 * steps * math.log(delta))
