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

from ..accounting import Cost, composed_epsilon
from ..checks import checked_keys, one_of, whole_number
from ..errors import InputError
from ..facts import Guarantee, PublicFacts
from ..losses import MOST_RESOLUTION, named_loss

ROUTES = ("zcdp", "pure", "pure + zcdp")

ENTRY_LEVELS = 2**14            # quantisation steps per entry bound
RATE_BITS = 20                  # at most so many bits in a rate's multiplier
LEAST_RATE_BITS = 6             # a rate is rounded down by less than 1 part in 2^(bits - 1)
MOST_SHIFT = 60
MOST_VARIANCE = 2**120
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
    exclude        feature ids, ascending, that are never picked: public knowledge

    A method adds its own fields, and says what else depends on it:

    picks          how many features are picked privately
    multipliers    of the picks, in order; one stands for all where they are alike
    parts          ((what, Cost), ...): what each part costs
    intercept      whether there is one
    most_reach     the most that sum_j |w_j| * bound_j can be
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
    exclude: tuple[int, ...]

    # --- cost

    @property
    def swap_range(self) -> int:
        """The most by which two scores can part when one neighbour replaces another: 2RM or 4RM."""
        return 2 * self.resolution * self.entry_levels * self.guarantee.swap_factor

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
        return self.resolution * self.guarantee.swap_factor

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
        return 2 * self.guarantee.swap_factor / self.epsilon_of_rate(multiplier)

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
        return self.noise_rows * odds_to_beat(self.facts.features - len(self.exclude))

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
        return fields | {"facts": self.facts.to_dict(), "guarantee": self.guarantee.to_dict()}

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
    """Refuse what cannot be in any plan; `exclude` becomes a tuple."""
    one_of("route", fields["route"], ROUTES)
    if not isinstance(fields["exclude"], list):
        raise InputError("exclude must be a list of feature ids")
    exclude = checked_exclude(fields["exclude"], fields["facts"])
    if list(exclude) != fields["exclude"]:
        raise InputError("exclude must ascend")
    fields["exclude"] = exclude
    named_loss(fields["loss"], fields["facts"].label)
    _power_of_two("resolution", fields["resolution"], MOST_RESOLUTION)
    _power_of_two("entry_levels", fields["entry_levels"], ENTRY_LEVELS)
    whole_number("shift", fields["shift"], 1, MOST_SHIFT)


def checked_exclude(exclude, facts: PublicFacts) -> tuple[int, ...]:
    """Distinct feature ids, ascending, that leave at least one feature to pick."""
    try:
        given = [] if exclude is None else list(exclude)
    except TypeError:
        raise InputError(f"exclude must be feature ids, not {exclude!r}") from None
    ids = {whole_number("an excluded feature", j, 0, facts.features - 1) for j in given}
    if len(ids) == facts.features:
        raise InputError("every feature is excluded")
    return tuple(sorted(ids))


def _power_of_two(name: str, value: object, most: int):
    if whole_number(name, value, 1, most).bit_count() != 1:
        raise InputError(f"{name} must be a power of two, not {value}")


# --- what methods share when they plan

def odds_to_beat(features: int) -> float:
    """ln(2d) + logit(0.9)"""
    return math.log(2 * features) + math.log(SEEN_WITH / (1 - SEEN_WITH))


def fitting_resolution(facts: PublicFacts, guarantee: Guarantee, pick_epsilon: float) -> int:
    """The smallest power of two that keeps sqrt(n)/(2R) rows under its share of the noise."""
    noise_rows = 2 * guarantee.swap_factor / pick_epsilon
    needed = math.sqrt(facts.rows) / (2 * ROUNDING_SHARE * noise_rows)
    return min(2 ** max(0, math.ceil(math.log2(needed))), MOST_RESOLUTION)


def fitting_variance(sensitivity: int, zcdp: float) -> int:
    """The least whole variance at which noise on a sum of this L2 sensitivity costs no more."""
    return math.ceil(sensitivity**2 / (2 * zcdp))


def kappa_of(pick_epsilon: float, resolution: int, guarantee: Guarantee) -> float:
    """The rate of a pick of this bounded range; the inverse of `Plan.epsilon_of_rate`."""
    units = 2 * resolution * ENTRY_LEVELS * guarantee.swap_factor
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
