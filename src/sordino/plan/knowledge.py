"""What the user states as public about the features: it steers a fit, and costs no privacy."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np

from ..checks import checked_keys, positive_number, real_number, whole_number
from ..errors import InputError
from ..facts import PublicFacts

MOST_POWER = 60             # a prior's weights span 2^-60 to 2^60
MOST_IN_MODEL = 256         # features that are corrected from the start


@dataclass(frozen=True)
class Start:
    """Coefficients to continue from, in the units of the data; features ascend."""

    features: tuple[int, ...]
    coefficients: tuple[float, ...]
    intercept: float

    def to_dict(self) -> dict:
        return {
            "features": list(self.features),
            "coefficients": list(self.coefficients),
            "intercept": self.intercept,
        }


@dataclass(frozen=True)
class PublicKnowledge:
    """Public knowledge about features, stated by the user.

    include  ids of features that are in the model by decision: corrected, never drawn
    exclude  ids of features that are never picked
    prior    (id, power): a pick weighs the feature 2^power times, all others once
    start    coefficients to continue from, or None

    Ids ascend.
    """

    include: tuple[int, ...] = ()
    exclude: tuple[int, ...] = ()
    prior: tuple[tuple[int, int], ...] = ()
    start: Start | None = None

    @property
    def started(self) -> tuple[int, ...]:
        """Features that `start` gives a coefficient."""
        return () if self.start is None else self.start.features

    def powers(self, features: int) -> np.ndarray | None:
        """int8 (features,): the power of every feature; None where all are 0."""
        if not self.prior:
            return None
        powers = np.zeros(features, dtype=np.int8)
        ids, values = zip(*self.prior)
        powers[list(ids)] = values
        return powers

    def to_dict(self) -> dict:
        return {
            "include": list(self.include),
            "exclude": list(self.exclude),
            "prior": [list(pair) for pair in self.prior],
            "start": None if self.start is None else self.start.to_dict(),
        }

    @classmethod
    def from_dict(cls, fields: dict, facts: PublicFacts) -> PublicKnowledge:
        """Knowledge from `to_dict`; raises InputError for what it would not have made."""
        fields = checked_keys("knowledge", fields, ("include", "exclude", "prior", "start"))
        for name in ("include", "exclude", "prior"):
            if not isinstance(fields[name], list):
                raise InputError(f"{name} must be a list")
        prior = {}
        for pair in fields["prior"]:
            if not isinstance(pair, list) or len(pair) != 2:
                raise InputError("prior must hold pairs of a feature id and a power of two")
            power = whole_number("a prior's power", pair[1], -MOST_POWER, MOST_POWER)
            prior[whole_number("a feature of the prior", pair[0], 0, facts.features - 1)] = power
        start = fields["start"]
        if start is not None:
            checked_keys("start", start, ("features", "coefficients", "intercept"))
            if not all(isinstance(start[name], list) for name in ("features", "coefficients")):
                raise InputError("features and coefficients of start must be lists")
            start = _checked_start(start["features"], start["coefficients"], start["intercept"],
                                   facts)
        knowledge = cls(
            _checked_ids("include", fields["include"], facts),
            _checked_ids("exclude", fields["exclude"], facts),
            tuple(sorted(prior.items())),
            start,
        )
        if knowledge.to_dict() != fields:
            raise InputError("include, exclude, prior and start must hold ids that ascend")
        return knowledge.checked(facts)

    def checked(self, facts: PublicFacts) -> PublicKnowledge:
        """Self; raises InputError for statements that contradict each other."""
        for name, ids in (("include", self.include), ("start", self.started)):
            if both := set(ids) & set(self.exclude):
                raise InputError(f"feature {min(both)} is in exclude and in {name}")
        return self

    def refuse_too_many(self, in_model: tuple[int, ...], facts: PublicFacts):
        """Raise InputError unless so many features can be corrected, and one is left to pick."""
        if len(in_model) > MOST_IN_MODEL:
            raise InputError(
                f"{len(in_model):,} features would be in the model from the start; at most "
                f"{MOST_IN_MODEL} can be"
            )
        if len(in_model) + len(self.exclude) >= facts.features:
            raise InputError("no feature is left to pick")


def stated(facts: PublicFacts, include, exclude, prior, start) -> PublicKnowledge:
    """What the user gives to `plan_fit`, checked.

    include, exclude  feature ids, in any order
    prior             {feature: weight}, all others weighing 1, or one weight per feature; weights
                      are above 0 and rounded to powers of two
    start             a Release, or {feature: coefficient}, with the intercept under None
    """
    return PublicKnowledge(
        _checked_ids("include", include, facts),
        _checked_ids("exclude", exclude, facts),
        _powers(prior, facts),
        None if start is None else _start_of(start, facts),
    ).checked(facts)


def _checked_ids(name: str, given, facts: PublicFacts) -> tuple[int, ...]:
    """Distinct feature ids, ascending."""
    try:
        ids = [] if given is None else list(given)
    except TypeError:
        raise InputError(f"{name} must be feature ids, not {given!r}") from None
    what = f"a feature of {name}"
    return tuple(sorted({whole_number(what, j, 0, facts.features - 1) for j in ids}))


def _powers(prior, facts: PublicFacts) -> tuple[tuple[int, int], ...]:
    """(id, power) of the features that do not weigh as most do."""
    if prior is None:
        return ()
    weights = _weights(prior, facts)
    wrong = np.flatnonzero(~((weights > 0) & (weights < np.inf)))
    if len(wrong):
        raise InputError(f"the prior of feature {wrong[0]} must be a finite number above 0, "
                         f"not {weights[wrong[0]]:g}")
    powers = np.rint(np.log2(weights)).astype(np.int64)
    values, counts = np.unique(powers, return_counts=True)
    powers -= values[np.argmax(counts)]
    if abs(powers).max() > MOST_POWER:
        raise InputError(f"prior weights lie up to 2^{abs(powers).max()} from the most common one; "
                         f"at most 2^{MOST_POWER} is possible")
    ids = np.flatnonzero(powers)
    return tuple(zip(ids.tolist(), powers[ids].tolist()))


def _weights(prior, facts: PublicFacts) -> np.ndarray:
    """float64 (features,)"""
    if isinstance(prior, Mapping):
        weights = np.ones(facts.features)
        for j, weight in prior.items():
            j = whole_number("a feature of prior", j, 0, facts.features - 1)
            weights[j] = positive_number(f"the prior of feature {j}", weight)
        return weights
    try:
        weights = np.asarray(prior, dtype=np.float64)
    except (TypeError, ValueError):
        weights = np.empty(0)
    if weights.shape != (facts.features,):
        raise InputError(
            f"prior must be {{feature: weight}} or {facts.features:,} weights, one per feature"
        )
    return weights


def _start_of(start, facts: PublicFacts) -> Start:
    if getattr(start, "rehearsal", False):
        raise InputError("start is a rehearsal: it is not private, so not public either")
    if hasattr(start, "coefficients"):
        return _checked_start(start.features, start.coefficients, start.intercept, facts)
    if not isinstance(start, Mapping):
        raise InputError("start must be a release or {feature: coefficient}, the intercept at None")
    given = dict(start)
    intercept = given.pop(None, 0.0)
    features = sorted(whole_number("a feature of start", j, 0, facts.features - 1) for j in given)
    return _checked_start(features, [given[j] for j in features], intercept, facts)


def _checked_start(features, coefficients, intercept, facts: PublicFacts) -> Start:
    ids = _checked_ids("start", features, facts)
    values = tuple(real_number("a coefficient of start", value) for value in coefficients)
    if len(ids) != len(values):
        raise InputError("start must have one coefficient per feature, all features different")
    return Start(ids, values, real_number("the intercept of start", intercept))
