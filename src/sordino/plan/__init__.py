"""The plan: everything that is decided before the data is read."""

from __future__ import annotations

from ..checks import one_of
from ..errors import InputError
from ..facts import Guarantee, PublicFacts
from ..losses import named_loss
from .base import KINDS, ROUNDING_SHARE, SEEN_WITH, Plan
from .frank_wolfe import (
    DEFAULT_STEPS,
    INTERCEPT_ERROR,
    INTERCEPT_SHARES,
    MOST_STEPS,
    REACH,
    Course,
    FrankWolfePlan,
    default_radius,
    default_steps,
    plan_frank_wolfe,
)
from .greedy import GreedyPlan, default_picks, plan_greedy
from .knowledge import PublicKnowledge, Start, stated


def plan_fit(facts: PublicFacts, guarantee: Guarantee, *, method=None, loss="logistic",
             steps=None, radius=None, schedule=None, picks=None, intercept=None,
             residual_bound=None, include=None, exclude=None, prior=None, start=None) -> Plan:
    """Decide everything about a fit from public facts.

    facts, guarantee  what is public, and what is promised
    method            "greedy": fresh features with noisy joint corrections; or "frank-wolfe": small
                      moves over the L1 ball. Left out: the one whose options are given, else
                      greedy where delta > 0 pays for corrections
    loss              "logistic"; or with a label range "squared" (least squares) or "huber", both
                      with residuals clipped at a public bound
    steps             frank-wolfe: private picks, one a step; left out: see `default_steps`
    radius            frank-wolfe: the L1 radius, in bounds; left out: see `default_radius`
    schedule          frank-wolfe: "paced" (each step moves radius/steps; the default) or
                      "shrinking" (2/(t+2))
    picks             greedy: how many features; left out: see `default_picks`
    intercept         left out: yes where delta > 0 pays for it
    residual_bound    of squared and Huber's loss, in half ranges of the label; left out: 1/4 and
                      1/8
    include           public knowledge, free of cost: ids of features that are in the model by
                      decision (corrected, never drawn)
    exclude           likewise: ids of features that are never picked
    prior             likewise: {feature: weight}, all others weighing 1, or one weight per feature;
                      rounded to powers of two, by which picks weigh features
    start             likewise: coefficients to continue from, a Release or {feature: coefficient}
                      with the intercept under None

    Raises InputError for what does not fit together, before any data is read.
    Accounting: see `sordino.accounting`; the rate is the largest that keeps the guarantee.
    """
    if not isinstance(facts, PublicFacts) or not isinstance(guarantee, Guarantee):
        raise InputError("plan_fit takes PublicFacts and a Guarantee first")
    if method is None:
        moves = any(option is not None for option in (steps, radius, schedule))
        pure = guarantee.delta == 0 and picks is None
        method = "frank-wolfe" if moves or pure else "greedy"
    one_of("method", method, tuple(KINDS))
    chosen_loss = named_loss(loss, facts.label, residual_bound)
    knowledge = stated(facts, include, exclude, prior, start)
    if method == "greedy":
        _refuse_foreign("greedy takes picks=", steps=steps, radius=radius, schedule=schedule)
        return plan_greedy(facts, guarantee, chosen_loss, knowledge, picks=picks,
                           intercept=intercept)
    _refuse_foreign("frank-wolfe takes steps=", picks=picks)
    return plan_frank_wolfe(facts, guarantee, chosen_loss, knowledge, steps=steps, radius=radius,
                            schedule=schedule, intercept=intercept)


def _refuse_foreign(hint: str, **options):
    for name, value in options.items():
        if value is not None:
            raise InputError(f"{name}= belongs to the other method; {hint}")
