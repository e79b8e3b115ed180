"""Plans for private Frank-Wolfe: schedule, steps, radius, looks at the intercept."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from ..accounting import Cost, calibrate_picks, gaussian_cost, pick_cost, zcdp_of_epsilon
from ..checks import one_of, positive_number, whole_number, yes_or_no
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
    odds_to_beat,
    plan_of,
)

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
DEFAULT_RADIUS = {"paced": 3.6, "shrinking": 1.8}       # times sqrt(steps)


@plan_of("frank-wolfe")
@dataclass(frozen=True)
class FrankWolfePlan(Plan):
    """A plan for Frank-Wolfe over the L1 ball.

    schedule            "paced" or "shrinking"; see `Course`
    steps               moves, one private pick each
    radius              the L1 norm the coefficients may reach, in bounds
    multiplier          of every pick
    intercept_looks     the steps before which the intercept is measured and corrected
    intercept_variance  of the discrete Gaussian noise on sum_i q_i at each look; 0: no intercept
    """

    schedule: str
    steps: int
    radius: float
    multiplier: int
    intercept: bool
    intercept_looks: tuple[int, ...]
    intercept_variance: int

    @property
    def picks(self) -> int:
        return self.steps

    @property
    def multipliers(self) -> tuple[int, ...]:
        return (self.multiplier,)

    @property
    def parts(self) -> tuple[tuple[str, Cost], ...]:
        picks = ("picks", pick_cost(self.pick_epsilon).times(self.picks))
        if not self.intercept:
            return (picks,)
        look = gaussian_cost(self.intercept_sensitivity, self.intercept_variance)
        return picks, ("intercept", look.times(len(self.intercept_looks)))

    @property
    def most_reach(self) -> float:
        return self.radius

    @property
    def most_rows(self) -> int:
        return (MOST_SCORE - 1) // (self.multiplier * self.resolution * self.entry_levels)

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
        least = 1 if intercept else 0
        whole_number("intercept_variance", fields["intercept_variance"], least,
                     MOST_VARIANCE * least)
        looks = _looks(steps) if intercept else ()
        if fields["intercept_looks"] != list(looks):
            raise InputError("intercept_looks do not fit the steps")
        return fields | {"radius": _checked_radius(fields["radius"]), "intercept_looks": looks}


def plan_frank_wolfe(facts: PublicFacts, guarantee: Guarantee, loss: Logistic,
                     exclude: tuple[int, ...], *, steps, radius, schedule,
                     intercept) -> FrankWolfePlan:
    """Decide what is left out, then the strongest picks that keep the guarantee."""
    schedule = one_of("schedule", schedule or "paced", SCHEDULES)
    intercept = _checked_intercept(intercept, guarantee)
    steps = default_steps(facts, guarantee) if steps is None else steps
    steps = whole_number("steps", steps, 1, MOST_STEPS)
    radius = _checked_radius(default_radius(schedule, steps) if radius is None else radius)
    looks = _looks(steps) if intercept else ()
    return _calibrated(facts, guarantee, loss, exclude, schedule, steps, radius, looks)


def default_steps(facts: PublicFacts, guarantee: Guarantee) -> int:
    """As many picks T as leave a share sqrt(2/T) / L of the rows as the smallest effect seen.

    L = ln(2d) + logit(0.9), and the smallest effect is 2 s L / pick_epsilon rows, s = 2 under
    "replace-one". With pick_epsilon = sqrt(8 rho/T) that is T = 2 (n/s) sqrt(rho) / L^2; with pure
    composition, pick_epsilon = epsilon/T, it is T = (epsilon (n/s) / (sqrt(2) L^2))^(2/3).
    """
    rows = facts.rows / guarantee.swap_factor
    odds = odds_to_beat(facts.features)
    zcdp = zcdp_of_epsilon(guarantee.epsilon, guarantee.delta)
    by_zcdp = 2 * rows * math.sqrt(zcdp) / odds**2
    purely = (guarantee.epsilon * rows / (math.sqrt(2) * odds**2)) ** (2 / 3)
    least, most = DEFAULT_STEPS
    return round(min(max(by_zcdp, purely, least), most))


def default_radius(schedule: str, steps: int) -> float:
    """Proportional to sqrt(steps), so a paced move shrinks as 1/sqrt(steps); two digits."""
    return float(f"{DEFAULT_RADIUS[schedule] * math.sqrt(steps):.2g}")


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


def _calibrated(facts, guarantee, loss: Logistic, exclude, schedule, steps, radius,
                looks) -> FrankWolfePlan:
    """The plan with the strongest picks that keep the guarantee once the intercept is paid for."""
    promise = guarantee.epsilon, guarantee.delta, steps
    zcdp_of_look = _zcdp_of_look(facts, guarantee, looks)
    planned = Cost(zcdp_of_look, math.inf).times(len(looks))
    resolution = fitting_resolution(facts, guarantee, calibrate_picks(*promise, planned)[0])
    variance, paid = 0, Cost.nothing()
    if looks:
        sensitivity = resolution * guarantee.swap_factor
        variance = fitting_variance(sensitivity, zcdp_of_look)
        paid = gaussian_cost(sensitivity, variance).times(len(looks))
    pick_epsilon, route = calibrate_picks(*promise, paid)
    kappa = kappa_of(pick_epsilon, resolution, guarantee)
    multiplier, shift = fitting_rate(kappa, facts.rows, resolution)
    return FrankWolfePlan(
        facts, guarantee, "frank-wolfe", loss.name, resolution, ENTRY_LEVELS, shift, route,
        exclude, schedule, steps, radius, multiplier, bool(looks), looks, variance,
    )


def _zcdp_of_look(facts: PublicFacts, guarantee: Guarantee, looks: tuple[int, ...]) -> float:
    """A look with zCDP r has an error of s/(n sqrt(2 r)) in a rate, s = 2 under "replace-one"."""
    if not looks:
        return 0.0
    whole = zcdp_of_epsilon(guarantee.epsilon, guarantee.delta)
    wanted = (guarantee.swap_factor / (facts.rows * INTERCEPT_ERROR)) ** 2 / 2
    least, most = (share * whole / len(looks) for share in INTERCEPT_SHARES)
    return min(max(wanted, least), most)


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
