"""Plans for private Frank-Wolfe: schedule, steps, radius, looks at the intercept."""

from __future__ import annotations

import math
from dataclasses import dataclass, replace

import numpy as np

from ..accounting import Cost, calibrate_picks, zcdp_of_epsilon
from ..checks import one_of, positive_number, whole_number, yes_or_no
from ..errors import InputError
from ..facts import Guarantee, PublicFacts
from ..losses import Loss, named_loss
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
    odds_to_beat,
    plan_of,
    quantiles_to_learn,
    zcdp_of_rows,
)
from .corrections import (
    MOST_COEFFICIENT,
    NORM,
    SHARES,
    WEIGHT_BITS,
    fitting_variance,
    with_corrections,
)
from .knowledge import PublicKnowledge

SCHEDULES = ("paced", "shrinking")
MOST_STEPS = 100_000
RADII = (1e-9, 1e12)

# The intercept is measured before the first step, after the last, and evenly between. Its share of
# the budget is the least, or what brings the error of one look at a rate down to INTERCEPT_ERROR.
INTERCEPT_LOOKS = 17
INTERCEPT_SHARES = (0.05, 0.25)
INTERCEPT_ERROR = 0.1

# Tuned on words of software packages (five labels) and planted signals, 1,000 to 50,000 rows,
# 300 to 100,000 features, epsilon 0.25 to 4: the grid's best stayed near these rules throughout.
DEFAULT_STEPS = (5, 1000)
REACH = {"paced": 1.0, "shrinking": 0.5}        # in what is usual for the loss


@plan_of("frank-wolfe")
@dataclass(frozen=True)
class FrankWolfePlan(Plan):
    """A plan for Frank-Wolfe over the L1 ball.

    schedule         "paced" or "shrinking"; see `Course`
    steps            moves, one private pick each
    radius           the L1 norm that the moves may reach, in bounds
    multiplier       of every pick
    intercept        whether there is one
    intercept_looks  the steps before which it is measured and corrected, together with the
                     features that are included, if any
    """

    schedule: str
    steps: int
    radius: float
    multiplier: int
    intercept: bool
    intercept_looks: tuple[int, ...]

    @property
    def picks(self) -> int:
        return self.steps

    @property
    def multipliers(self) -> tuple[int, ...]:
        return (self.multiplier,)

    @property
    def in_model(self) -> tuple[int, ...]:
        """Features that are corrected from the start, and never drawn."""
        return self.knowledge.include

    @property
    def barred(self) -> tuple[int, ...]:
        return self.knowledge.exclude + self.in_model

    @property
    def looks(self) -> int:
        return min(1, len(self.intercept_looks)) if self.in_model else len(self.intercept_looks)

    @property
    def corrections(self) -> int:
        return len(self.intercept_looks) if self.in_model else 0

    @property
    def moments(self) -> int:
        return len(self.in_model)

    @property
    def own_reach(self) -> float:
        return self.radius + MOST_COEFFICIENT * len(self.in_model)

    @property
    def most_rows(self) -> int:
        score = self.multiplier * self.resolution * self.entry_levels
        moment = max(self.resolution, self.entry_levels) * self.entry_levels << WEIGHT_BITS
        return (MOST_SCORE - 1) // max(score, moment if self.in_model else 0)

    @property
    def shrinking(self) -> bool:
        return self.schedule == "shrinking"

    def unit_margins(self) -> np.ndarray:
        return self.radius * Course.of(self).scale

    @staticmethod
    def checked(fields: dict) -> dict:
        """Fields as `from_dict` needs them; InputError for one that cannot be."""
        one_of("schedule", fields["schedule"], SCHEDULES)
        steps = whole_number("steps", fields["steps"], 1, MOST_STEPS)
        whole_number("multiplier", fields["multiplier"], 1, 2**RATE_BITS)
        intercept = yes_or_no("intercept", fields["intercept"])
        included = bool(fields["knowledge"].include)
        loss = named_loss(fields["loss"], fields["facts"].label, fields["residual_bound"])
        _check_knowledge(fields["knowledge"], fields["facts"], loss, intercept)
        needed = {"rows_variance": intercept, "first_variance": intercept, "limit": included,
                  "correction_variance": included, "moment_variance": included}
        for name, wanted in needed.items():
            if wanted != (fields[name] > 0):
                raise InputError(f"{name} must {'be above 0' if wanted else 'be 0'}")
        looks = _looks(steps) if intercept else ()
        if fields["intercept_looks"] != list(looks):
            raise InputError("intercept_looks do not fit the steps")
        return fields | {"radius": _checked_radius(fields["radius"]), "intercept_looks": looks}


def plan_frank_wolfe(facts: PublicFacts, guarantee: Guarantee, loss: Loss,
                     knowledge: PublicKnowledge, *, steps, radius, schedule,
                     intercept) -> FrankWolfePlan:
    """Decide what is left out, then the strongest picks that keep the guarantee."""
    schedule = one_of("schedule", schedule or "paced", SCHEDULES)
    intercept = _checked_intercept(intercept, guarantee)
    _check_knowledge(knowledge, facts, loss, intercept)
    steps = default_steps(facts, guarantee) if steps is None else steps
    steps = whole_number("steps", steps, 1, MOST_STEPS)
    radius = _checked_radius(default_radius(schedule, steps, loss) if radius is None else radius)
    looks = _looks(steps) if intercept else ()
    draft = FrankWolfePlan(
        facts, guarantee, "frank-wolfe", loss.name, 1, ENTRY_LEVELS, 1, "zcdp", knowledge,
        loss.residual_bound, *quantiles_to_learn(facts, guarantee).values(),
        round(NORM * ENTRY_LEVELS) if knowledge.include else 0,
        fitting_variance(changes_of(facts, guarantee), zcdp_of_rows(guarantee)) if intercept else 0,
        0, 0, 0,
        schedule, steps, radius, 1, intercept, looks,
    )
    return _calibrated(draft)


def _check_knowledge(knowledge: PublicKnowledge, facts: PublicFacts, loss: Loss, intercept: bool):
    """Refuse what this method cannot do with it."""
    knowledge.refuse_too_many(knowledge.include, facts)
    if intercept:
        return
    if knowledge.include:
        raise InputError("features that are included are corrected together with an intercept: "
                         "ask for one")
    if knowledge.start is not None and knowledge.start.intercept != loss.centre:
        raise InputError("start has an intercept, which the plan has not")


def default_steps(facts: PublicFacts, guarantee: Guarantee) -> int:
    """As many picks T as leave a share sqrt(2/T) / L of the rows as the smallest effect seen.

    L = ln(2d) + logit(0.9), and the smallest effect is 2 s L / pick_epsilon rows, s one-row changes
    making one neighbour. With pick_epsilon = sqrt(8 rho/T) that is T = 2 (n/s) sqrt(rho) / L^2;
    with pure composition, pick_epsilon = epsilon/T, it is
    T = (epsilon (n/s) / (sqrt(2) L^2))^(2/3).
    """
    rows = facts.rows / changes_of(facts, guarantee)
    odds = odds_to_beat(facts.features)
    zcdp = zcdp_of_epsilon(guarantee.epsilon, guarantee.delta)
    by_zcdp = 2 * rows * math.sqrt(zcdp) / odds**2
    purely = (guarantee.epsilon * rows / (math.sqrt(2) * odds**2)) ** (2 / 3)
    least, most = DEFAULT_STEPS
    return round(min(max(by_zcdp, purely, least), most))


def default_radius(schedule: str, steps: int, loss: Loss) -> float:
    """Proportional to sqrt(steps), so a paced move shrinks as 1/sqrt(steps); two digits."""
    return float(f"{REACH[schedule] * loss.usual_reach * math.sqrt(steps):.2g}")


def _checked_radius(radius: object) -> float:
    if not RADII[0] <= positive_number("radius", radius) <= RADII[1]:
        raise InputError(f"radius must lie between {RADII[0]:g} and {RADII[1]:g}, not {radius:g}")
    return float(radius)


def _checked_intercept(intercept, guarantee: Guarantee) -> bool:
    if intercept is None:
        return guarantee.delta > 0
    if yes_or_no("intercept", intercept) and guarantee.delta == 0:
        raise InputError(
            "an intercept is measured with Gaussian noise, which needs delta above 0: "
            "give a delta, or intercept=False"
        )
    return intercept


def _looks(steps: int) -> tuple[int, ...]:
    """Steps before which the intercept is measured: 0, evenly between, and after the last."""
    return tuple(sorted({round(steps * k / (INTERCEPT_LOOKS - 1)) for k in range(INTERCEPT_LOOKS)}))


def _calibrated(draft: FrankWolfePlan) -> FrankWolfePlan:
    """The plan with the strongest picks that keep the guarantee once all else is paid for."""
    facts, guarantee, loss = draft.facts, draft.guarantee, draft.loss_form
    promise = guarantee.epsilon, guarantee.delta, draft.steps
    shares = _measuring_zcdp(draft)
    planned = sum((cost for _, cost in draft.costs_of_learning), Cost.nothing())
    if draft.intercept:
        planned += Cost(sum(shares) + zcdp_of_rows(guarantee), math.inf)
    pick_epsilon, _ = calibrate_picks(*promise, planned)
    resolution = fitting_resolution(facts, guarantee, loss, pick_epsilon)
    measured = _measuring(replace(draft, resolution=resolution), *shares)
    pick_epsilon, route = calibrate_picks(*promise, sum(measured.costs[1:], Cost.nothing()))
    kappa = kappa_of(pick_epsilon, resolution, draft.changes)
    multiplier, shift = fitting_rate(kappa, facts.rows, resolution)
    return replace(measured, multiplier=multiplier, shift=shift, route=route)


def _measuring_zcdp(draft: FrankWolfePlan) -> tuple[float, float]:
    """zCDP for looks and corrections, and for second moments.

    A look with zCDP r has an error of s/(n sqrt(2 r)) in a mean derivative, s as in
    `default_steps`.
    """
    if not draft.intercept:
        return 0.0, 0.0
    whole = zcdp_of_epsilon(draft.guarantee.epsilon, draft.guarantee.delta)
    whole *= 1 - ROWS_SHARE - LEARNING_SHARE * len(draft.facts.learned)
    if draft.in_model:
        return SHARES["corrections"] * whole, SHARES["second moments"] * whole
    wanted = (draft.changes / (draft.facts.rows * INTERCEPT_ERROR)) ** 2 / 2 * draft.looks
    least, most = (share * whole for share in INTERCEPT_SHARES)
    return min(max(wanted, least), most), 0.0


def _measuring(draft: FrankWolfePlan, gradients: float, moments: float) -> FrankWolfePlan:
    if draft.in_model:
        return with_corrections(draft, gradients, moments)
    if not draft.intercept:
        return draft
    each = gradients / draft.looks
    return replace(draft, first_variance=fitting_variance(draft.intercept_sensitivity, each))


@dataclass(frozen=True)
class Course:
    """The public course of a Frank-Wolfe schedule.

    After t moves the coefficients are radius * scale[t] * v, where move t adds weight[t] to one
    signed coordinate of v.

    shrinking   w <- (1 - g) w + g * vertex with g = 2/(t + 2), so scale[t] = 2/(t (t + 1)) and
                weight[t] = t + 1 (Jaggi 2013; Talwar, Thakurta and Zhang 2015)
    paced       w <- w + vertex/steps: each move takes 1/steps of weight out of the zero vertex
    """

    weight: np.ndarray      # int64 (steps,)
    scale: np.ndarray       # float64 (steps + 1,), scale[0] is never multiplied with a non-zero v

    @classmethod
    def of(cls, plan: FrankWolfePlan) -> Course:
        steps = plan.steps
        if plan.schedule == "paced":
            return cls(np.ones(steps, dtype=np.int64), np.full(steps + 1, 1 / steps))
        t = np.arange(1, steps + 1, dtype=np.float64)
        scale = 2 / (t * (t + 1))
        return cls(np.arange(1, steps + 1, dtype=np.int64), np.r_[scale[0], scale])
