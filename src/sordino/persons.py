"""Persons: which rows are one person's, and which of them are kept.

To merge two persons is safe, for the guarantee then covers both at once; to take one for two is
not. So ids that Python calls equal are one person, and an id that is missing, or that may equal
another without being found equal, is refused.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from .errors import InputError

NUMBERS = "biufcmM"     # kinds of numpy value that sort; all else is compared by Python


def codes_of(persons, n_rows: int) -> np.ndarray:
    """int64 (n_rows,): whole numbers from 0, equal exactly where the persons' ids are equal.

    persons  (n_rows,) ids of any type: an array, a Series, or a sequence of numbers, texts, tuples
             or whatever else can be a key of a dict. Equal is what Python calls equal: 1, 1.0 and
             True are one person, as are 0.0 and -0.0; "1" and "1 " are others.

    Raises InputError, naming the row, for ids that are missing (None, NaN, NaT, masked) or cannot
    be keys, and for a wrong number of them. O(n log n) for arrays of numbers, else O(n).
    """
    ids = _checked_ids(persons, n_rows)
    return _codes_of_numbers(ids) if isinstance(ids, np.ndarray) else _codes_of_keys(ids)


def kept_rows(codes: np.ndarray, most: int, keys: np.ndarray) -> np.ndarray:
    """bool (n,): True for the `most` rows of every person with the smallest keys.

    codes  int64 (n,) from `codes_of`
    keys   uint64 (n,) random bits, one key per row; of equal keys the earlier row comes first

    Whether a row is kept depends on its own person's rows and their keys alone: it is kept exactly
    if fewer than `most` rows of its person come before it in the order of (key, place), and no
    other person's rows enter that count. So with the same keys, adding, removing or changing a
    person changes nothing about which rows of the others are kept, and any person's data moves at
    most `most` rows of what is kept.

    Keys of independent uniform bits put a person's m rows in an order that is uniform but for ties
    (of probability below m^2 / 2^65), so every `most` of them are kept with the same probability.
    Ties touch the uniformity, never the statement above. O(n log n).
    """
    order = np.lexsort((keys, codes))
    grouped = codes[order]
    first = np.flatnonzero(np.r_[True, grouped[1:] != grouped[:-1]])
    sizes = np.diff(np.r_[first, len(codes)])
    rank = np.arange(len(codes)) - np.repeat(first, sizes)
    kept = np.zeros(len(codes), dtype=bool)
    kept[order[rank < most]] = True
    return kept


def _checked_ids(persons, n_rows: int) -> np.ndarray | list:
    """Ids of the right shape: an array of numbers, or a list."""
    if isinstance(persons, Sequence) and not isinstance(persons, (str, bytes)):
        _check_shape((len(persons),), n_rows)
        return list(persons)
    ids = persons if isinstance(persons, np.ndarray) else _as_array(persons)
    _check_shape(ids.shape, n_rows)
    if np.ma.isMaskedArray(ids) or ids.dtype.kind not in NUMBERS:
        return ids.tolist()         # what is masked becomes None
    return ids


def _check_shape(shape: tuple, n_rows: int):
    if shape != (n_rows,):
        raise InputError(
            f"persons has shape {shape}; with {n_rows:,} rows it must be ({n_rows},), one id per "
            "row (an id of several parts is a tuple in a list)"
        )


def _as_array(persons) -> np.ndarray:
    try:
        return np.asarray(persons)
    except (TypeError, ValueError) as error:
        raise InputError(f"persons cannot be read as an array: {error}") from None


def _codes_of_numbers(ids: np.ndarray) -> np.ndarray:
    _refuse_missing(np.flatnonzero(ids != ids))
    return np.unique(ids, return_inverse=True)[1].astype(np.int64, copy=False)


def _codes_of_keys(ids: list) -> np.ndarray:
    known = {}
    codes = np.empty(len(ids), dtype=np.int64)
    for i, key in enumerate(ids):
        try:
            codes[i] = known.setdefault(key, len(known))
        except TypeError:
            raise InputError(
                f"id of row {i} is of type {type(key).__name__}, which cannot be compared: ids "
                "must be numbers, texts or tuples of them"
            ) from None
    missing = [code for code, key in enumerate(known) if _is_missing(key)]
    _refuse_missing(np.flatnonzero(np.isin(codes, missing)))
    _refuse_mixed_numbers(known)
    return codes


def _is_missing(key) -> bool:
    """Whether an id, or a part of it, is None or not equal to itself."""
    if isinstance(key, (tuple, frozenset)):
        return any(map(_is_missing, key))
    try:
        return key is None or bool(key != key)
    except TypeError:           # equal to itself or not: it will not say
        return True


def _refuse_missing(rows: np.ndarray):
    if len(rows):
        raise InputError(f"id of row {rows[0]} is missing: every row needs the id of its person")


def _refuse_mixed_numbers(known: dict):
    """Numpy's dates and its floats of other lengths than Python's equal keys of another hash.

    np.float32(0.1) == 0.1, and np.datetime64("2020-01-01") == date(2020, 1, 1), but a dict finds
    neither by the other: they must come with ids of their own type alone.
    """
    delicate = [
        kind for kind in set(map(type, known))
        if issubclass(kind, (np.inexact, np.datetime64, np.timedelta64))
        and not issubclass(kind, (float, complex))
    ]
    if delicate and len({getattr(key, "dtype", None) for key in known}) > 1:
        raise InputError(
            f"persons mixes {delicate[0].__name__} with ids of another type: give all ids one type"
        )
