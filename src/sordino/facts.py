"""What may be said without reading the data, and the promise that is made about it."""

from __future__ import annotations

import math
from dataclasses import dataclass
from numbers import Real

import numpy as np

from .checks import checked_delta, checked_keys, one_of, positive_number, whole_number
from .errors import InputError

NEIGHBOURS = ("add-remove", "replace-one")
MOST_FEATURES = 2**31 - 1
MOST_ROWS = 2**31 - 1
MOST_ROWS_PER_PERSON = 2**20
EPSILONS = (1e-9, 1e9)
LEARN = "learn"
BOUNDS = (1e-100, 1e100)        # of an entry bound: far enough from where floats end


@dataclass(frozen=True, eq=False)
class PublicFacts:
    """What is public about a data set: nothing here may be read off the confidential rows.

    features         number of columns (feature ids run from 0)
    rows             number of rows: exact and public under "replace-one", a planning figure
                     under "add-remove"
    entry_bound      |x_ij| <= bound, in the units of the data; one number, or one per feature.
                     Enforced by clipping. "learn": one number, learned privately by a fit
    label            "binary" (0/1 or -1/+1), or (low, high): numeric, enforced by clipping.
                     "learn": a range, learned privately by a fit
    rows_per_person  how many rows one person may own; enforced where a fit is given persons=

    Raises InputError for anything out of range.
    """

    features: int
    rows: int
    entry_bound: float | np.ndarray = 1.0
    label: str | tuple[float, float] = "binary"
    rows_per_person: int = 1

    def __post_init__(self):
        put = lambda name, value: object.__setattr__(self, name, value)  # noqa: E731
        put("features", whole_number("features", self.features, 1, MOST_FEATURES))
        put("rows", whole_number("rows", self.rows, 1, MOST_ROWS))
        put("entry_bound", _checked_bound(self.entry_bound, self.features))
        put("label", _checked_label(self.label))
        put("rows_per_person", whole_number("rows_per_person", self.rows_per_person, 1,
                                            MOST_ROWS_PER_PERSON))

    @property
    def learned(self) -> tuple[str, ...]:
        """The names of the facts that a fit has to learn."""
        return tuple(name for name in ("entry_bound", "label")
                     if isinstance(getattr(self, name), str) and getattr(self, name) == LEARN)

    @property
    def bound_per_feature(self) -> bool:
        return isinstance(self.entry_bound, np.ndarray)

    def bounds_of(self, features: np.ndarray) -> np.ndarray:
        """The entry bounds of these feature ids, float64, same shape."""
        if self.bound_per_feature:
            return self.entry_bound[features]
        return np.full(np.shape(features), self.entry_bound)

    def to_dict(self) -> dict:
        bound = _run_lengths(self.entry_bound) if self.bound_per_feature else self.entry_bound
        label = self.label if isinstance(self.label, str) else list(self.label)
        return {
            "features": self.features,
            "rows": self.rows,
            "entry_bound": bound,
            "label": label,
            "rows_per_person": self.rows_per_person,
        }

    @classmethod
    def from_dict(cls, fields: dict) -> PublicFacts:
        """Facts from `to_dict`; raises InputError for anything that it would not have made."""
        keys = ("features", "rows", "entry_bound", "label", "rows_per_person")
        fields = dict(checked_keys("facts", fields, keys))
        if isinstance(fields["entry_bound"], list):
            features = whole_number("features", fields["features"], 1, MOST_FEATURES)
            fields["entry_bound"] = _from_run_lengths(fields["entry_bound"], features)
        if isinstance(fields["label"], list):
            fields["label"] = tuple(fields["label"])
        return cls(**fields)

    def __eq__(self, other):
        return isinstance(other, PublicFacts) and self.to_dict() == other.to_dict()

    def __hash__(self):
        return hash((self.features, self.rows, self.label))


@dataclass(frozen=True)
class Guarantee:
    """(epsilon, delta) differential privacy under a neighbouring relation.

    neighbours is "add-remove" (one unit more or less) or "replace-one" (one unit's record
    changed, the number of rows public). Raises InputError for anything out of range.
    """

    epsilon: float
    delta: float = 0.0
    neighbours: str = "add-remove"

    def __post_init__(self):
        epsilon, (least, most) = positive_number("epsilon", self.epsilon), EPSILONS
        if not least <= epsilon <= most:
            raise InputError(f"epsilon must lie between {least:g} and {most:g}, not {epsilon:g}")
        object.__setattr__(self, "epsilon", epsilon)
        object.__setattr__(self, "delta", checked_delta(self.delta))
        one_of("neighbours", self.neighbours, NEIGHBOURS)

    @property
    def swap_factor(self) -> int:
        """How many one-row changes make one neighbour: 1 (add-remove) or 2 (replace-one)."""
        return 1 if self.neighbours == "add-remove" else 2

    def to_dict(self) -> dict:
        return {"epsilon": self.epsilon, "delta": self.delta, "neighbours": self.neighbours}

    @classmethod
    def from_dict(cls, fields: dict) -> Guarantee:
        """A guarantee from `to_dict`; raises InputError for what it would not have made."""
        return cls(**checked_keys("guarantee", fields, ("epsilon", "delta", "neighbours")))


def _checked_bound(bound, features: int):
    if isinstance(bound, str) and bound == LEARN:
        return bound
    if isinstance(bound, Real):
        least, most = BOUNDS
        if not least <= positive_number("entry_bound", bound) <= most:
            raise InputError(f"entry_bound must lie between {least:g} and {most:g}, not {bound!r}")
        return float(bound)
    try:
        bounds = np.array(bound, dtype=np.float64)
    except (TypeError, ValueError, OverflowError):
        raise InputError(
            'entry_bound must be a number, one number per feature or "learn"') from None
    if bounds.shape != (features,):
        raise InputError(
            f"entry_bound has shape {bounds.shape}; with {features:,} features it must be "
            f"one number or have shape ({features},)"
        )
    least, most = BOUNDS
    wrong = np.flatnonzero(~((bounds >= least) & (bounds <= most)))
    if len(wrong):
        raise InputError(
            f"entry_bound of feature {wrong[0]} must lie between {least:g} and {most:g}, "
            f"not {bounds[wrong[0]]}"
        )
    bounds.flags.writeable = False
    return bounds


def _checked_label(label):
    if isinstance(label, str):
        if label not in ("binary", LEARN):
            raise InputError(f'label must be "binary", (low, high) or "learn", not {label!r}')
        return label
    try:
        low, high = (float(end) for end in label)
    except (TypeError, ValueError, OverflowError):
        raise InputError(f'label must be "binary", (low, high) or "learn", not {label!r}') from None
    if not (math.isfinite(low) and math.isfinite(high) and low < high):
        raise InputError(f"label range must be finite with low below high, not ({low}, {high})")
    return low, high


def _run_lengths(values: np.ndarray) -> list[list[float]]:
    """[[value, how many times in a row], ...]: short where neighbours share a bound."""
    starts = np.flatnonzero(np.r_[True, values[1:] != values[:-1]])
    lengths = np.diff(np.r_[starts, len(values)])
    return [[float(value), int(length)] for value, length in zip(values[starts], lengths)]


def _from_run_lengths(runs: list, count: int) -> np.ndarray:
    """The `count` values that the runs stand for."""
    if not all(isinstance(run, list) and len(run) == 2 for run in runs):
        raise InputError("entry_bound must be a number or a list of [bound, how many features]")
    values = [positive_number("entry_bound", value) for value, _ in runs]
    lengths = [whole_number("a run of bounds", length, 1, count) for _, length in runs]
    if sum(lengths) != count:
        raise InputError(f"entry_bound covers {sum(lengths):,} features, not {count:,}")
    return np.repeat(np.array(values), lengths)
