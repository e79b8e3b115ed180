"""What every plan has: facts, guarantee, the rate of picks, what it costs and what it can see.

A plan is a function of public facts and the guarantee alone. It holds whole numbers where privacy
depends on them (rates, the resolution, variances), and every figure it prints is derived from
those.
"""

from __future__ import annotations

import dataclasses
import math
from dataclasses import dataclass
from functools import cached_property

import numpy as np

from ..accounting import Cost, composed_epsilon, gaussian_cost, pick_cost, zcdp_of_epsilon
from ..checks import checked_keys, one_of, whole_number
from ..bounds import (
    ENTRY_QUANTILES,
    GRID,
    LABEL_QUANTILES,
    SIGNED_GRID,
    QuantilePick,
    planned_quantile,
)
from ..errors import InputError
from ..facts import Guarantee, PublicFacts
from ..losses import Loss, named_loss
from .corrections import WEIGHT_BITS
from .knowledge import PublicKnowledge

ROUTES = ("zcdp", "pure", "pure + zcdp")

ENTRY_LEVELS = 2**14            # quantisation steps per entry bound
RATE_BITS = 20                  # at most so many bits in a rate's multiplier
LEAST_RATE_BITS = 6             # a rate is rounded down by less than 1 part in 2^(bits - 1)
MOST_SHIFT = 60
MOST_VARIANCE = 2**120
QUANTILES = {"entry_quantile": "entry_bound", "label_quantile": "label"}     # field: what it learns
LEARNING_SHARE = 0.05           # of the budget, for every fact that is learned
ROWS_SHARE = 0.01               # and for the number of rows, where there is an intercept
MOST_SCORE = 2**61              # of multiplier * score
ROUNDING_SHARE = 1 / 20         # of the selection noise
SEEN_WITH = 0.9                 # probability with which "detectable" means picked


@dataclass(frozen=True)
class Plan:
    """A plan for one private fit; make it with `plan_fit`.

    resolution     R: derivatives are whole numbers in [-R, R]
    entry_levels   M: entries are whole numbers in [-M, M]
    shift          a pick weighs a score G by 2^(multiplier * G / 2^shift)
    route          how the cost was composed: "zcdp", "pure" or "pure + zcdp"
    knowledge      public knowledge about features, stated by the user
    residual_bound of squared and Huber's loss, in half ranges of the label; else None
    rows_variance  of the discrete Gaussian noise on the number of rows; 0: no intercept
    first_variance likewise on sum_i q_i

    entry_quantile  how a learned entry bound is picked, or None
    label_quantile  how either end of a learned label range is picked, or None

    And where the intercept is corrected together with a set of features (else 0):

    limit                L: rows longer than this, in quantisation levels, count for less
    correction_variance  of the noise on each coordinate of a correction's gradient
    moment_variance      of the noise on each second moment of a feature with those before it

    A method adds its own fields, and says what else depends on it:

    picks          how many features are picked privately
    multipliers    of the picks, in order; one stands for all where they are alike
    looks          how often sum_i q_i alone is measured
    corrections    how often a gradient is
    moments        how many features have their second moments measured
    barred         features that no pick can take
    own_reach      the most that sum_j |w_j| * bound_j can be, `start` aside, in units of margin
    in_model       features that are in the model from the start
    most_rows      the most rows whose sums are sure to fit 64 bits
    unit_margins() float64: the margin of a unit of weight on an entry at its bound, after t moves
    shrinking      whether those fall from move to move
    """

    facts: PublicFacts
    guarantee: Guarantee
    method: str
    loss: str
    resolution: int
    entry_levels: int
    shift: int
    route: str
    knowledge: PublicKnowledge
    residual_bound: float | None
    entry_quantile: QuantilePick | None
    label_quantile: QuantilePick | None
    limit: int
    rows_variance: int
    first_variance: int
    correction_variance: int
    moment_variance: int

    @cached_property
    def loss_form(self) -> Loss:
        """The loss as the solvers take it."""
        return named_loss(self.loss, self.facts.label, self.residual_bound)

    # --- cost

    @property
    def changes(self) -> int:
        """How many one-row changes make one neighbour of another."""
        return changes_of(self.facts, self.guarantee)

    @property
    def swap_range(self) -> int:
        """The most by which two scores can part between neighbours: 2RM for each one-row change."""
        return 2 * self.resolution * self.entry_levels * self.changes

    def epsilon_of_rate(self, multiplier: int) -> float:
        """The bounded-range parameter of a pick at this rate."""
        return math.ldexp(multiplier * self.swap_range, -self.shift) * math.log(2)

    @property
    def pick_epsilon(self) -> float:
        """The bounded-range parameter of one pick, the largest where picks differ."""
        return self.epsilon_of_rate(max(self.multipliers))

    @property
    def intercept_sensitivity(self) -> int:
        """The most by which sum_i q_i moves between neighbours."""
        return self.resolution * self.changes

    @property
    def norm(self) -> float:
        """The clipping length L in bounds."""
        return self.limit / self.entry_levels

    @property
    def gradient_sensitivity(self) -> int:
        """Of a correction's gradient, in L2: R 2^B L for each one-row change."""
        return (self.resolution * self.limit << WEIGHT_BITS) * self.changes

    @property
    def moment_sensitivity(self) -> int:
        """Of a feature's second moments, in L2: M 2^B L for each one-row change."""
        return (self.entry_levels * self.limit << WEIGHT_BITS) * self.changes

    @property
    def parts(self) -> tuple[tuple[str, Cost], ...]:
        """((what, Cost), ...): what each part costs."""
        measured = (
            ("rows", self.changes, self.rows_variance, min(1, self.looks)),
            ("intercept", self.intercept_sensitivity, self.first_variance, self.looks),
            ("corrections", self.gradient_sensitivity, self.correction_variance, self.corrections),
            ("second moments", self.moment_sensitivity, self.moment_variance, self.moments),
        )
        return (("picks", self._cost_of_picks()), *self.costs_of_learning, *(
            (what, gaussian_cost(sensitivity, variance).times(count))
            for what, sensitivity, variance, count in measured if count
        ))

    @property
    def costs_of_learning(self) -> list[tuple[str, Cost]]:
        """What each fact costs that a fit has to learn."""
        unit = self.facts.rows_per_person, self.guarantee.neighbours
        quantiles = (("entry bound", self.entry_quantile, 1),
                     ("label range", self.label_quantile, 2))
        return [(what, quantile.cost(*unit).times(count)) for what, quantile, count in quantiles
                if quantile is not None]

    def _cost_of_picks(self) -> Cost:
        costs = [pick_cost(self.epsilon_of_rate(rate)) for rate in self.multipliers]
        return costs[0].times(self.picks) if len(costs) == 1 else sum(costs, Cost.nothing())

    @cached_property
    def costs(self) -> tuple[Cost, ...]:
        """What each part costs, in the order of `parts`."""
        return tuple(cost for _, cost in self.parts)

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
        return self.noise_rows_at(max(self.multipliers))

    def noise_rows_at(self, multiplier: int) -> float:
        """`noise_rows` of a pick at this rate."""
        return 2 * self.changes / self.epsilon_of_rate(multiplier)

    @property
    def rounding_rows(self) -> float:
        """The most that rounding adds to a score's standard deviation, in rows."""
        return math.sqrt(self.facts.rows) / (2 * self.resolution)

    @property
    def smallest_effect_rows(self) -> float:
        """The score, in rows, at which a feature is picked with probability 0.9 in noise alone.

        (1/c) (ln(2d) + logit(0.9)) for picks that weigh a score of u rows by exp(c u): the other
        2d - 1 signed features, all at score 0, weigh 2d together. With a prior, d is what all
        features weigh, and the feature is one that weighs 1.
        """
        barred = set(self.barred)
        extra = math.fsum(2.0**power - 1 for j, power in self.knowledge.prior if j not in barred)
        return self.noise_rows * odds_to_beat(self.facts.features - len(barred) + extra)

    @property
    def favoured_effect_rows(self) -> float:
        """The same for the features that the prior favours most."""
        most = max((power for _, power in self.knowledge.prior), default=0)
        return self.smallest_effect_rows - self.noise_rows * max(most, 0) * math.log(2)

    def smallest_difference(self, prevalence: float) -> float:
        """That effect as a difference in mean label between rows with a 0/1 feature and the others.

        With mean labels a (with) and b (without) and an intercept at the overall mean, the score
        of a feature held by a share f of n rows is n f (1 - f) (a - b)/unit, unit being 1 for a
        label rate, else the bound of a residual. Above `most_difference`: cannot be seen.
        """
        rows = self.smallest_effect_rows / (self.facts.rows * prevalence * (1 - prevalence))
        return rows * self.loss_form.unit

    @property
    def most_difference(self) -> float:
        """The largest difference that counts in full: two residuals part by two bounds at most."""
        return 1.0 if self.facts.label == "binary" else 2 * self.loss_form.unit

    @property
    def sees_anything(self) -> bool:
        """Whether the strongest conceivable feature (half the rows, all labels) is detectable."""
        return self.smallest_difference(0.5) <= self.most_difference

    def start_reach(self) -> float:
        """sum_j |w_j| * bound_j of the public coefficients to start from, in units of margin.

        Of a plan whose facts are all known: see `with_facts`.
        """
        start = self.knowledge.start
        if start is None:
            return 0.0
        return math.fsum(abs(self.in_bounds(start.features, start.coefficients)))

    def in_bounds(self, features, coefficients) -> np.ndarray:
        """Coefficients in the units of the data as margins of an entry at its bound."""
        bounds = self.facts.bounds_of(np.array(features, dtype=np.int64))
        return np.asarray(coefficients, dtype=np.float64) * bounds / self.loss_form.unit

    def with_facts(self, **learned) -> Plan:
        """The same plan over facts that were learned: what a fit runs, a release was made by."""
        return dataclasses.replace(self, facts=dataclasses.replace(self.facts, **learned))

    # --- running and showing

    def fit(self, X, y, *, persons=None, book=None, rehearsal_seed=None, progress=False,
            threads=1, names=None):
        """Run this plan on data, once; see `sordino.fit.fit`.  Returns a Release."""
        from ..fit import fit

        return fit(self, X, y, persons=persons, book=book, rehearsal_seed=rehearsal_seed,
                   progress=progress, threads=threads, names=names)

    def __str__(self) -> str:
        from ..plan_text import summary

        return summary(self)

    def explain(self) -> str:
        """Every number in the plan, and the public fact it comes from."""
        from ..plan_text import explanation

        return explanation(self)

    def to_dict(self) -> dict:
        fields = {field.name: getattr(self, field.name) for field in dataclasses.fields(self)}
        fields |= {name: list(value) for name, value in fields.items() if isinstance(value, tuple)}
        nested = ("facts", "guarantee", "knowledge", *QUANTILES)
        return fields | {name: getattr(self, name) and getattr(self, name).to_dict()
                         for name in nested}

    @staticmethod
    def from_dict(fields: dict) -> Plan:
        """A plan from `to_dict`.

        Raises InputError for fields that do not fit, and if it does not keep its own guarantee.
        """
        if not isinstance(fields, dict) or "method" not in fields:
            checked_keys("plan", fields, _names_of(Plan))       # says what is missing
        kind = KINDS[one_of("method", fields["method"], tuple(KINDS))]
        fields = dict(checked_keys("plan", fields, _names_of(kind)))
        fields["facts"] = PublicFacts.from_dict(fields["facts"])
        fields["guarantee"] = Guarantee.from_dict(fields["guarantee"])
        fields["knowledge"] = PublicKnowledge.from_dict(fields["knowledge"], fields["facts"])
        for name in QUANTILES:
            if fields[name] is not None:
                fields[name] = QuantilePick.from_dict(fields[name])
        _check_common(fields)
        plan = kind(**kind.checked(fields))
        if not plan.epsilon_spent <= plan.guarantee.epsilon:
            raise InputError(
                f"the plan costs epsilon {plan.epsilon_spent:.6g}, more than its guarantee of "
                f"{plan.guarantee.epsilon:.6g}"
            )
        return plan


KINDS: dict[str, type[Plan]] = {}      # by method


def plan_of(method: str):
    """Class decorator: this kind of Plan is the one of that method."""
    def note(kind: type[Plan]) -> type[Plan]:
        KINDS[method] = kind
        return kind

    return note


def _names_of(kind: type[Plan]) -> tuple[str, ...]:
    return tuple(field.name for field in dataclasses.fields(kind))


def _check_common(fields: dict):
    """Refuse what cannot be in any plan."""
    one_of("route", fields["route"], ROUTES)
    for name, fact in QUANTILES.items():
        if (fields[name] is None) == (fact in fields["facts"].learned):
            raise InputError(f"{name} does not fit the facts")
    loss = named_loss(fields["loss"], fields["facts"].label, fields["residual_bound"])
    if fields["residual_bound"] != loss.residual_bound:
        raise InputError("residual_bound is missing")
    _power_of_two("resolution", fields["resolution"], loss.most_resolution)
    _power_of_two("entry_levels", fields["entry_levels"], ENTRY_LEVELS)
    whole_number("shift", fields["shift"], 1, MOST_SHIFT)
    whole_number("limit", fields["limit"], 0, 2**10 * ENTRY_LEVELS)
    for name in ("rows_variance", "first_variance", "correction_variance", "moment_variance"):
        whole_number(name, fields[name], 0, MOST_VARIANCE)


def _power_of_two(name: str, value: object, most: int):
    if whole_number(name, value, 1, most).bit_count() != 1:
        raise InputError(f"{name} must be a power of two, not {value}")


# --- what methods share when they plan

def quantiles_to_learn(facts: PublicFacts, guarantee: Guarantee) -> dict[str, QuantilePick | None]:
    """Both fields of a plan about what a fit has to learn, each within its share of the budget."""
    share = LEARNING_SHARE
    budget = (Cost(math.inf, share * guarantee.epsilon) if guarantee.delta == 0 else
              Cost(share * zcdp_of_epsilon(guarantee.epsilon, guarantee.delta), math.inf))
    ends = Cost(budget.zcdp / 2, budget.pure / 2)
    unit = facts.rows, facts.rows_per_person, guarantee.neighbours
    return {
        "entry_quantile": planned_quantile(ENTRY_QUANTILES, len(GRID), budget, *unit)
        if "entry_bound" in facts.learned else None,
        "label_quantile": planned_quantile(LABEL_QUANTILES, len(SIGNED_GRID), ends, *unit)
        if "label" in facts.learned else None,
    }


def zcdp_of_rows(guarantee: Guarantee) -> float:
    """What is spent on the number of rows."""
    return ROWS_SHARE * zcdp_of_epsilon(guarantee.epsilon, guarantee.delta)


def changes_of(facts: PublicFacts, guarantee: Guarantee) -> int:
    """How many one-row changes make one neighbour: a person's rows, twice under "replace-one"."""
    return facts.rows_per_person * guarantee.swap_factor


def odds_to_beat(features: float) -> float:
    """ln(2d) + logit(0.9)"""
    return math.log(2 * features) + math.log(SEEN_WITH / (1 - SEEN_WITH))


def fitting_resolution(facts: PublicFacts, guarantee: Guarantee, loss: Loss,
                       pick_epsilon: float) -> int:
    """The smallest power of two that keeps sqrt(n)/(2R) rows under its share of the noise."""
    noise_rows = 2 * changes_of(facts, guarantee) / pick_epsilon
    needed = math.sqrt(facts.rows) / (2 * ROUNDING_SHARE * noise_rows)
    return min(2 ** max(0, math.ceil(math.log2(needed))), loss.most_resolution)


def kappa_of(pick_epsilon: float, resolution: int, changes: int) -> float:
    """The rate of a pick of this bounded range; the inverse of `Plan.epsilon_of_rate`."""
    units = 2 * resolution * ENTRY_LEVELS * changes
    return pick_epsilon / (math.log(2) * units)


def fitting_rate(kappa: float, rows: int, resolution: int) -> tuple[int, int]:
    """(multiplier, shift), multiplier / 2^shift <= kappa, as close as 61 bits of score allow."""
    most_score = 2 * rows * resolution * ENTRY_LEVELS
    bits = min(RATE_BITS, 60 - most_score.bit_length())
    if bits < LEAST_RATE_BITS:
        raise InputError("scores of this many rows do not fit in 64 bits: state fewer rows")
    shift = bits - math.frexp(kappa)[1]
    if not 1 <= shift <= MOST_SHIFT:
        raise InputError("a rate for this epsilon does not fit in 64 bits: state one nearer to 1")
    return math.floor(math.ldexp(kappa, shift)), shift
