"""Private greedy selection with noisy corrections.

Every round picks a fresh feature by the base-2 exponential mechanism (Ilvento 2020) on the scores
at the current margins, then corrects all coefficients and the intercept together: a damped Newton
step from a clipped, noisy gradient, preconditioned by noisy second moments of the chosen features.
Scores wait for the next pick; margins do not.
"""

from __future__ import annotations

from ..losses import fixed_point
from ..plan.greedy import GreedyPlan
from .corrections import ChosenSet
from .model import Model
from .solution import Solution


def greedy(plan: GreedyPlan, rows, scores, bits, chosen: ChosenSet, rates,
           start: Solution | None = None, watch=lambda step: None) -> Solution:
    """Run a plan over rows and scores.

    chosen  an empty set over the same table
    rates   the multipliers of the picks, in the units of `scores`
    start   the plan's model to continue from
    watch   called with the number of picks done, after every pick
    """
    rows.place(0)
    model = Model(plan, rows, bits, chosen, rows.shift, start, plan.averaged)
    rows.place(fixed_point(model.intercept))
    scores.absorb(rows.first_scores())
    for pick, rate in enumerate(rates, 1):
        scores.set_rate(rate)
        feature, _ = scores.pick(bits)
        model.include(feature)
        model.correct()
        if pick < plan.picks:
            scores.bar(feature)
            scores.absorb(rows.catch_up())
        watch(pick)
    for _ in range(plan.final_corrections):
        model.correct()
    return model.solution()
