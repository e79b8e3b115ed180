"""Checks of single values: each returns the value in its plain type or raises an InputError."""

from __future__ import annotations

import math
import sys
from numbers import Integral, Real
from reprlib import repr as shortened

from .errors import InputError


LARGEST = sys.float_info.max


def whole_number(name: str, value: object, least: int, most: int | None = None) -> int:
    """`value` as an int within [least, most]."""
    if isinstance(value, bool) or not isinstance(value, Integral):
        raise InputError(f"{name} must be a whole number, not {shortened(value)}")
    if value < least or (most is not None and value > most):
        span = f"at least {least:,}" if most is None else f"between {least:,} and {most:,}"
        raise InputError(f"{name} must be {span}, not {_readable(value)}")
    return int(value)


def positive_number(name: str, value: object) -> float:
    """`value` as a finite float above 0."""
    if not _is_number(value) or not 0 < value <= LARGEST:
        raise InputError(f"{name} must be a finite number above 0, not {shortened(value)}")
    return float(value)


def nonnegative_number(name: str, value: object) -> float:
    """`value` as a float in [0, inf]."""
    if not _is_number(value) or not (0 <= value <= LARGEST or value == math.inf):
        raise InputError(f"{name} must be a number of at least 0, not {shortened(value)}")
    return float(value)


def real_number(name: str, value: object) -> float:
    """`value` as a finite float."""
    if not _is_number(value) or not -LARGEST <= value <= LARGEST:
        raise InputError(f"{name} must be a finite number, not {shortened(value)}")
    return float(value)


def checked_delta(delta: object) -> float:
    """`delta` as a float in [0, 1)."""
    if not _is_number(delta) or not 0 <= delta < 1:
        raise InputError(f"delta must be at least 0 and below 1, not {delta!r}")
    return float(delta)


def checked_keys(what: str, fields: object, keys: tuple[str, ...]) -> dict:
    """`fields` as a dict that has these keys and no others."""
    if not isinstance(fields, dict):
        raise InputError(f"{what} must be an object with the keys {', '.join(keys)}")
    for name in keys:
        if name not in fields:
            raise InputError(f"{what} lacks the key {name!r}")
    for name in fields:
        if name not in keys:
            raise InputError(f"{what} has an unknown key {name!r}")
    return fields


def one_of(name: str, value: object, choices: tuple[str, ...]) -> str:
    """`value`, if it is one of these texts."""
    if not isinstance(value, str) or value not in choices:
        known = " or ".join(map(repr, choices))
        raise InputError(f"{name} must be {known}, not {shortened(value)}")
    return value


def yes_or_no(name: str, value: object) -> bool:
    if not isinstance(value, bool):
        raise InputError(f"{name} must be true or false, not {shortened(value)}")
    return value


def _readable(value: int) -> str:
    return f"{value:,}" if abs(value) < 2**64 else "a number that large"


def _is_number(value: object) -> bool:
    return isinstance(value, Real) and not isinstance(value, bool)
