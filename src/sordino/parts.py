"""Disjoint parts of a data set, split by a public rule: who is in which part hangs on no one else.

Whatever is spent on one part touches nobody in another, so costs of parts compose in parallel: a
person pays for their own part alone. That needs each row's part to depend on its own person alone,
which a keyed hash of the person's id gives: adding or removing a person moves no one else.
"""

from __future__ import annotations

import hashlib
import math
from collections.abc import Mapping
from dataclasses import dataclass
from numbers import Integral, Real

import numpy as np

from .checks import checked_keys
from .errors import InputError

HASH_BITS = 64
MOST_PARTS = 1000
MOST_LETTERS = 100


@dataclass(frozen=True)
class Split:
    """A rule that puts every person in one of some named parts.

    key    a public text; another key gives another, independent split
    parts  {name: share}, shares above 0 that add up to 1

    A person of hash h, 64 bits of BLAKE2b of the id under the key, is in the first part at which
    the shares so far add up to more than h/2^64. Raises InputError for what cannot be a split.
    """

    key: str
    parts: Mapping[str, float]

    def __post_init__(self):
        _checked_text("the key of a split", self.key)
        if not isinstance(self.parts, Mapping) or not 2 <= len(self.parts) <= MOST_PARTS:
            raise InputError("a split needs parts, {name: share}, at least two of them")
        for name, share in self.parts.items():
            _checked_text("the name of a part", name)
            if not isinstance(share, Real) or isinstance(share, bool) or not 0 < share < 1:
                raise InputError(f"the share of part {name!r} must lie between 0 and 1, not "
                                 f"{share!r}")
        if abs(math.fsum(self.parts.values()) - 1) > 1e-9:
            raise InputError(f"shares add up to {math.fsum(self.parts.values()):.6g}, not to 1")
        object.__setattr__(self, "parts", {name: float(s) for name, s in self.parts.items()})

    @property
    def edges(self) -> list[int]:
        """The hashes at which parts end, ascending; the last is 2^64."""
        sums = np.cumsum(list(self.parts.values()))
        return [*(round(float(total) * 2.0**HASH_BITS) for total in sums[:-1]), 2**HASH_BITS]

    def parts_of(self, persons) -> np.ndarray:
        """Names of the parts of these persons, an array of text (n,).

        persons  whole numbers, texts or bytes. Ids that are equal are in the same part.
        """
        names, edges = list(self.parts), self.edges
        hashes = [self._hash(person) for person in _plain(persons)]
        return np.array([names[_first_above(edges, value)] for value in hashes], dtype=object)

    def rows_of(self, part: str, persons) -> np.ndarray:
        """bool (n,): the rows of the persons that are in this part."""
        if part not in self.parts:
            raise InputError(f"there is no part {part!r}; there are {', '.join(self.parts)}")
        return self.parts_of(persons) == part

    def _hash(self, person) -> int:
        words = hashlib.blake2b(_canonical(person), digest_size=HASH_BITS // 8,
                                key=hashlib.sha256(self.key.encode()).digest())
        return int.from_bytes(words.digest(), "big")

    def to_dict(self) -> dict:
        return {"key": self.key, "parts": dict(self.parts)}

    @classmethod
    def from_dict(cls, fields: dict) -> Split:
        """A split from `to_dict`; raises InputError for what it would not have made."""
        return cls(**checked_keys("a split", fields, ("key", "parts")))


def _first_above(edges: list[int], value: int) -> int:
    return next(k for k, edge in enumerate(edges) if value < edge)


def _plain(persons) -> list:
    """Ids as Python has them."""
    return persons.tolist() if isinstance(persons, np.ndarray) else list(persons)


def _canonical(person) -> bytes:
    """Bytes that are the same for equal ids: 7, np.int64(7), 7.0 and True as 1."""
    if isinstance(person, str):
        return b"text " + person.encode("utf-8", "surrogatepass")
    if isinstance(person, bytes):
        return b"bytes " + person
    if isinstance(person, (Integral, np.bool_)):
        return b"number %d" % int(person)
    if isinstance(person, Real) and float(person).is_integer():
        return b"number %d" % int(person)
    raise InputError(f"{person!r} cannot be an id here: ids must be whole numbers, texts or bytes")


def _checked_text(what: str, text: object):
    if not isinstance(text, str) or not 0 < len(text) <= MOST_LETTERS or not text.isprintable():
        raise InputError(f"{what} must be a text of 1 to {MOST_LETTERS} letters, not {text!r}")
