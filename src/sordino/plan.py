"""The plan: everything that is decided before the data is read.

A plan is a function of public facts and the guarantee alone. It holds whole numbers where privacy
depends on them (the mechanism's rate, the resolution, the variances), and every figure it prints is
derived from those.
"""

from __future__ import annotations

import dataclasses
import math
from dataclasses import dataclass
from functools import cached_property

import numpy as np

from .accounting import (
    Cost,
    calibrate_picks,
    composed_epsilon,
    gaussian_cost,
    pick_cost,
    zcdp_of_epsilon,
)
from .checks import checked_keys, one_of, positive_number, whole_number, yes_or_no
from .errors import InputError, NotYetError
from .facts import Guarantee, PublicFacts
from .losses import MOST_RESOLUTION, Logistic, named_loss

METHODS = ("frank-wolfe",)
SCHEDULES = ("paced", "shrinking")
ROUTES = ("zcdp", "pure", "pure + zcdp")

ENTRY_LEVELS = 2**14            # quantisation steps per entry bound
MOST_STEPS = 100_000
RADII = (1e-9, 1e12)
RATE_BITS = 20                  # at most so many bits in the rate's multiplier
LEAST_RATE_BITS = 6             # a rate is rounded down by less than 1 part in 2^(bits - 1)
MOST_SHIFT = 60
MOST_VARIANCE = 2**120
ROUNDING_SHARE = 1 / 20         # of the selection noise
SEEN_WITH = 0.9                 # probability with which "detectable" means picked

# The intercept is measured before the first step, after the last, and evenly between. Its share of
# the budget is the least, or what brings the error of one look at a rate down to INTERCEPT_ERROR.
INTERCEPT_LOOKS = 17
INTERCEPT_SHARES = (0.05, 0.25)
INTERCEPT_ERROR = 0.1

# Tuned on words of software packages (five labels) and planted signals, 1,000 to 50,000 rows,
# 300 to 100,000 features, epsilon 0.25 to 4: the grid's best stayed near these rules throughout.
DEFAULT_STEPS = (5, 1000)
DEFAULT_RADIUS = {"paced": 3.6, "shrinking": 1.8}       # times sqrt(steps)


@dataclass(frozen=True)
class Plan:
    """A plan for one private fit; make it with `plan_fit`.

    steps             moves, one private pick each
    radius            the L1 norm the coefficients may reach, in bounds: sum_j |w_j| * bound_j
    resolution        R: derivatives are whole numbers in [-R, R]
    entry_levels      M: entries are whole numbers in [-M, M]
    multiplier, shift a pick weighs a score G by 2^(multiplier * G / 2^shift)
    intercept_looks   the steps before which the intercept is measured and corrected
    intercept_variance  of the discrete Gaussian noise on sum_i q_i at each look; 0: no intercept
    route             how the cost was composed: "zcdp", "pure" or "pure + zcdp"
    """

    facts: PublicFacts
    guarantee: Guarantee
    method: str
    loss: str
    schedule: str
    steps: int
    radius: float
    intercept: bool
    resolution: int
    entry_levels: int
    multiplier: int
    shift: int
    intercept_looks: tuple[int, ...]
    intercept_variance: int
    route: str

    # --- cost

    @property
    def picks(self) -> int:
        return self.steps

    @property
    def swap_range(self) -> int:
        """The most by which two scores can part when one neighbour replaces another: 2RM or 4RM."""
        return 2 * self.resolution * self.entry_levels * self.guarantee.swap_factor

    @property
    def pick_epsilon(self) -> float:
        """The bounded-range parameter of one pick."""
        return math.ldexp(self.multiplier * self.swap_range, -self.shift) * math.log(2)

    @property
    def intercept_sensitivity(self) -> int:
        """The most by which sum_i q_i moves between neighbours."""
        return self.resolution * self.guarantee.swap_factor

    @cached_property
    def costs(self) -> tuple[Cost, ...]:
        """What each part costs: the picks, then the looks at the intercept."""
        picks = pick_cost(self.pick_epsilon).times(self.picks)
        if not self.intercept:
            return (picks,)
        look = gaussian_cost(self.intercept_sensitivity, self.intercept_variance)
        return picks, look.times(len(self.intercept_looks))

    @property
    def zcdp(self) -> float:
        """What the whole plan costs, in zCDP."""
        return sum(cost.zcdp for cost in self.costs)

    @property
    def epsilon_spent(self) -> float:
        """The epsilon that the parts add up to at the guarantee's delta, at most its epsilon."""
        return composed_epsilon(self.costs, self.guarantee.delta)

    # --- what it can see

    @property
    def noise_rows(self) -> float:
        """The scale of the selection noise: picks weigh an effect of u rows by exp(u/scale)."""
        return 2 * self.guarantee.swap_factor / self.pick_epsilon

    @property
    def rounding_rows(self) -> float:
        """The most that rounding adds to a score's standard deviation, in rows."""
        return math.sqrt(self.facts.rows) / (2 * self.resolution)

    @property
    def smallest_effect_rows(self) -> float:
        """The score, in rows, at which a feature is picked with probability 0.9 in noise alone.

        (1/c) (ln(2d) + logit(0.9)) for picks that weigh a score of u rows by exp(c u): the other
        2d - 1 signed features, all at score 0, weigh 2d together.
        """
        return self.noise_rows * _odds_to_beat(self.facts.features)

    def smallest_risk_difference(self, prevalence: float) -> float:
        """That effect as a difference in label rate between rows with a 0/1 feature and the others.

        With label rates a (with) and b (without) and an intercept at the overall rate, the score of
        a feature held by a share f of n rows is n f (1 - f) (a - b). Above 1: cannot be seen.
        """
        return self.smallest_effect_rows / (self.facts.rows * prevalence * (1 - prevalence))

    @property
    def sees_anything(self) -> bool:
        """Whether the strongest conceivable feature (half the rows, all labels) is detectable."""
        return self.smallest_risk_difference(0.5) <= 1

    # --- running and showing

    def fit(self, X, y, *, persons=None, book=None, rehearsal_seed=None, progress=False,
            threads=1, names=None):
        """Run this plan on data, once; see `sordino.fit.fit`.  Returns a Release."""
        from .fit import fit

        return fit(self, X, y, persons=persons, book=book, rehearsal_seed=rehearsal_seed,
                   progress=progress, threads=threads, names=names)

    def __str__(self) -> str:
        from .plan_text import summary

        return summary(self)

    def explain(self) -> str:
        """Every number in the plan, and the public fact it comes from."""
        from .plan_text import explanation

        return explanation(self)

    def to_dict(self) -> dict:
        fields = {field.name: getattr(self, field.name) for field in dataclasses.fields(self)}
        fields["facts"] = self.facts.to_dict()
        fields["guarantee"] = self.guarantee.to_dict()
        fields["intercept_looks"] = list(self.intercept_looks)
        return fields

    @classmethod
    def from_dict(cls, fields: dict) -> Plan:
        """A plan from `to_dict`.

        Raises InputError for fields that do not fit, and if it does not keep its own guarantee.
        """
        fields = dict(checked_keys("plan", fields, tuple(f.name for f in dataclasses.fields(cls))))
        fields["facts"] = PublicFacts.from_dict(fields["facts"])
        fields["guarantee"] = Guarantee.from_dict(fields["guarantee"])
        _check_stated(fields)
        fields["intercept_looks"] = tuple(fields["intercept_looks"])
        plan = cls(**fields)
        if not plan.epsilon_spent <= plan.guarantee.epsilon:
            raise InputError(
                f"the plan costs epsilon {plan.epsilon_spent:.6g}, more than its guarantee of "
                f"{plan.guarantee.epsilon:.6g}"
            )
        return plan


def _check_stated(fields: dict):
    """Refuse a field of the wrong kind or out of its range."""
    one_of("method", fields["method"], METHODS)
    one_of("schedule", fields["schedule"], SCHEDULES)
    one_of("route", fields["route"], ROUTES)
    named_loss(fields["loss"], fields["facts"].label)
    steps = whole_number("steps", fields["steps"], 1, MOST_STEPS)
    fields["radius"] = _checked_radius(fields["radius"])
    _power_of_two("resolution", fields["resolution"], MOST_RESOLUTION)
    _power_of_two("entry_levels", fields["entry_levels"], ENTRY_LEVELS)
    whole_number("multiplier", fields["multiplier"], 1, 2**RATE_BITS)
    whole_number("shift", fields["shift"], 1, MOST_SHIFT)
    intercept = yes_or_no("intercept", fields["intercept"])
    least = 1 if intercept else 0
    whole_number("intercept_variance", fields["intercept_variance"], least, MOST_VARIANCE * least)
    if fields["intercept_looks"] != (list(_looks(steps)) if intercept else []):
        raise InputError("intercept_looks do not fit the steps")


def _checked_radius(radius: object) -> float:
    if not RADII[0] <= positive_number("radius", radius) <= RADII[1]:
        raise InputError(f"radius must lie between {RADII[0]:g} and {RADII[1]:g}, not {radius:g}")
    return float(radius)


def _power_of_two(name: str, value: object, most: int):
    if whole_number(name, value, 1, most).bit_count() != 1:
        raise InputError(f"{name} must be a power of two, not {value}")


def plan_fit(facts: PublicFacts, guarantee: Guarantee, *, method="frank-wolfe", loss="logistic",
             steps=None, radius=None, schedule=None, picks=None, intercept=None,
             include=None, exclude=None, prior=None, start=None) -> Plan:
    """Decide everything about a fit from public facts.

    facts, guarantee  what is public, and what is promised
    method            "frank-wolfe"
    loss              "logistic"
    steps             private picks, one a step; left out: see `default_steps`
    radius            the L1 radius, in bounds; left out: see `default_radius`
    schedule          "paced" (each step moves radius/steps; the default) or "shrinking" (2/(t+2))
    intercept         left out: yes where delta > 0 pays for it

    Raises InputError for what does not fit together, before any data is read.
    Accounting: see `sordino.accounting`; the rate is the largest that keeps the guarantee.
    """
    _check_kinds(facts, guarantee, method, picks, include, exclude, prior, start)
    chosen_loss = named_loss(loss, facts.label)
    schedule = one_of("schedule", schedule or "paced", SCHEDULES)
    intercept = _checked_intercept(intercept, guarantee)
    steps = default_steps(facts, guarantee) if steps is None else steps
    steps = whole_number("steps", steps, 1, MOST_STEPS)
    radius = default_radius(schedule, steps) if radius is None else radius
    radius = _checked_radius(radius)
    looks = _looks(steps) if intercept else ()
    return _calibrated(facts, guarantee, method, chosen_loss, schedule, steps, radius, looks)


def default_steps(facts: PublicFacts, guarantee: Guarantee) -> int:
    """As many picks T as leave a share sqrt(2/T) / L of the rows as the smallest effect seen.

    L = ln(2d) + logit(0.9), and the smallest effect is 2 s L / pick_epsilon rows, s = 2 under
    "replace-one". With pick_epsilon = sqrt(8 rho/T) that is T = 2 (n/s) sqrt(rho) / L^2; with pure
    composition, pick_epsilon = epsilon/T, it is T = (epsilon (n/s) / (sqrt(2) L^2))^(2/3).
    """
    rows = facts.rows / guarantee.swap_factor
    odds = _odds_to_beat(facts.features)
    zcdp = zcdp_of_epsilon(guarantee.epsilon, guarantee.delta)
    by_zcdp = 2 * rows * math.sqrt(zcdp) / odds**2
    purely = (guarantee.epsilon * rows / (math.sqrt(2) * odds**2)) ** (2 / 3)
    least, most = DEFAULT_STEPS
    return round(min(max(by_zcdp, purely, least), most))


def default_radius(schedule: str, steps: int) -> float:
    """Proportional to sqrt(steps), so a paced move shrinks as 1/sqrt(steps); two digits."""
    return float(f"{DEFAULT_RADIUS[schedule] * math.sqrt(steps):.2g}")


def _odds_to_beat(features: int) -> float:
    """ln(2d) + logit(0.9)"""
    return math.log(2 * features) + math.log(SEEN_WITH / (1 - SEEN_WITH))


def _check_kinds(facts, guarantee, method, picks, include, exclude, prior, start):
    if not isinstance(facts, PublicFacts) or not isinstance(guarantee, Guarantee):
        raise InputError("plan_fit takes PublicFacts and a Guarantee first")
    if method == "greedy":
        raise NotYetError('method "greedy" is not yet supported; use method="frank-wolfe"')
    one_of("method", method, METHODS)
    if picks is not None:
        raise InputError("picks= belongs to greedy selection; frank-wolfe takes steps=")
    given = {"include": include, "exclude": exclude, "prior": prior, "start": start}
    for name, value in given.items():
        if value is not None:
            raise NotYetError(f"{name}= is not yet supported")


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


def _calibrated(facts, guarantee, method, loss: Logistic, schedule, steps, radius, looks) -> Plan:
    """The plan with the strongest picks that keep the guarantee once the intercept is paid for."""
    promise = guarantee.epsilon, guarantee.delta, steps
    zcdp_of_look = _zcdp_of_look(facts, guarantee, looks)
    planned = Cost(zcdp_of_look, math.inf).times(len(looks))
    resolution = _resolution(facts, guarantee, calibrate_picks(*promise, planned)[0])
    variance, paid = 0, Cost.nothing()
    if looks:
        sensitivity = resolution * guarantee.swap_factor
        variance = math.ceil(sensitivity**2 / (2 * zcdp_of_look))
        paid = gaussian_cost(sensitivity, variance).times(len(looks))
    pick_epsilon, route = calibrate_picks(*promise, paid)
    units = 2 * resolution * ENTRY_LEVELS * guarantee.swap_factor
    multiplier, shift = _rate(pick_epsilon / (math.log(2) * units),
                              2 * facts.rows * resolution * ENTRY_LEVELS)
    return Plan(facts, guarantee, method, loss.name, schedule, steps, radius, bool(looks),
                resolution, ENTRY_LEVELS, multiplier, shift, looks, variance, route)


def _zcdp_of_look(facts: PublicFacts, guarantee: Guarantee, looks: tuple[int, ...]) -> float:
    """A look with zCDP r has an error of s/(n sqrt(2 r)) in a rate, s = 2 under "replace-one"."""
    if not looks:
        return 0.0
    whole = zcdp_of_epsilon(guarantee.epsilon, guarantee.delta)
    wanted = (guarantee.swap_factor / (facts.rows * INTERCEPT_ERROR)) ** 2 / 2
    least, most = (share * whole / len(looks) for share in INTERCEPT_SHARES)
    return min(max(wanted, least), most)


def _resolution(facts: PublicFacts, guarantee: Guarantee, pick_epsilon: float) -> int:
    """The smallest power of two that keeps sqrt(n)/(2R) rows under its share of the noise."""
    noise_rows = 2 * guarantee.swap_factor / pick_epsilon
    needed = math.sqrt(facts.rows) / (2 * ROUNDING_SHARE * noise_rows)
    return min(2 ** max(0, math.ceil(math.log2(needed))), MOST_RESOLUTION)


def _rate(kappa: float, most_score: int) -> tuple[int, int]:
    """(multiplier, shift), multiplier / 2^shift <= kappa, as close as 61 bits of score allow."""
    bits = min(RATE_BITS, 60 - most_score.bit_length())
    if bits < LEAST_RATE_BITS:
        raise InputError("scores of this many rows do not fit in 64 bits: state fewer rows")
    shift = bits - math.frexp(kappa)[1]
    if not 1 <= shift <= MOST_SHIFT:
        raise InputError("a rate for this epsilon does not fit in 64 bits: state one nearer to 1")
    return math.floor(math.ldexp(kappa, shift)), shift


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
    def of(cls, plan: Plan) -> Course:
        steps = plan.steps
        if plan.schedule == "paced":
            return cls(np.ones(steps, dtype=np.int64), np.full(steps + 1, 1 / steps))
        t = np.arange(1, steps + 1, dtype=np.float64)
        scale = 2 / (t * (t + 1))
        return cls(np.arange(1, steps + 1, dtype=np.int64), np.r_[scale[0], scale])
