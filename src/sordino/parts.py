"""Disjoint parts of a data set, split by a public rule: who is in which part hangs on no one else.

Whatever is spent on one part touches nobody in another, so costs of parts compose in parallel: a
person pays for their own part alone. That needs each row's part to depend on its own person alone,
which a keyed hash of the person's id gives: adding or removing a person moves no one else.
"""

from __future__ import annotations

import hashlib
import math
from bisect import bisect_right
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from itertools import accumulate
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
    parts  {name: share}, shares above 0 that add up to 1; kept in the order of the names, so that
           how they are listed does not matter

    A person of hash h, 64 bits of BLAKE2b of the id under the key, is in the first part at which
    the shares so far add up to more than h/2^64. Raises InputError for what cannot be a split.
    """

    key: str
    parts: Mapping[str, float]

    def __post_init__(self):
        _checked_text("the key of a split", self.key)
        if not isinstance(self.parts, Mapping) or not 2 <= len(self.parts) <= MOST_PARTS:
            raise InputError("a split needs parts, {name: share}, between 2 and "
                             f"{MOST_PARTS:,} of them")
        for name, share in self.parts.items():
            _checked_text("the name of a part", name)
            if not isinstance(share, Real) or isinstance(share, bool) or not 0 < share < 1:
                raise InputError(f"the share of part {name!r} must lie between 0 and 1, not "
                                 f"{share!r}")
        parts = {name: float(self.parts[name]) for name in sorted(self.parts)}
        if abs(math.fsum(parts.values()) - 1) > 1e-9:
            raise InputError(f"shares add up to {math.fsum(parts.values()):.6g}, not to 1")
        object.__setattr__(self, "parts", parts)

    @property
    def edges(self) -> list[int]:
        """The hashes at which parts end, ascending; the last is 2^64."""
        *inner, _ = accumulate(self.parts.values())
        return [*(min(round(total * 2.0**HASH_BITS), 2**HASH_BITS) for total in inner),
                2**HASH_BITS]

    def parts_of(self, persons) -> np.ndarray:
        """Names of the parts of these persons, an array of text (n,).

        persons  whole numbers, texts or bytes. Ids that are equal are in the same part.
        """
        return np.array(list(self.parts), dtype=object)[self._places(persons)]

    def rows_of(self, part: str, persons) -> np.ndarray:
        """bool (n,): the rows of the persons that are in this part."""
        if part not in self.parts:
            raise InputError(f"there is no part {part!r}; there are {', '.join(self.parts)}")
        return self._places(persons) == list(self.parts).index(part)

    def _places(self, persons) -> np.ndarray:
        """int64 (n,): which part each person is in, counted in order."""
        ids = persons.tolist() if isinstance(persons, np.ndarray) else persons
        hash_of, edges = _hash_under(self.key), self.edges
        return np.fromiter((bisect_right(edges, hash_of(person)) for person in ids), np.int64)

    def to_dict(self) -> dict:
        return {"key": self.key, "parts": dict(self.parts)}

    @classmethod
    def from_dict(cls, fields: dict) -> Split:
        """A split from `to_dict`; raises InputError for what it would not have made."""
        return cls(**checked_keys("a split", fields, ("key", "parts")))


def _hash_under(key: str) -> Callable[[object], int]:
    """The hash of persons under a key: whole numbers in [0, 2^64)."""
    keyed = hashlib.blake2b(digest_size=HASH_BITS // 8, key=hashlib.sha256(key.encode()).digest())

    def hash_of(person) -> int:
        words = keyed.copy()
        words.update(_canonical(person))
        return int.from_bytes(words.digest(), "big")

    return hash_of


def _canonical(person) -> bytes:
    """Bytes that are the same for equal ids: 7, np.int64(7) and 7.0; True and 1."""
    if isinstance(person, str):
        return b"text " + person.encode("utf-8", "surrogatepass")
    if isinstance(person, bytes):
        return b"bytes " + person
    if isinstance(person, (Integral, np.bool_)):
        return b"number %d" % int(person)
    if isinstance(person, Real) and math.isfinite(person) and person == int(person):
        return b"number %d" % int(person)
    raise InputError(f"{person!r} cannot be an id here: ids must be whole numbers, texts or bytes")


def _checked_text(what: str, text: object):
    if not isinstance(text, str) or not 0 < len(text) <= MOST_LETTERS or not text.isprintable():
        raise InputError(f"{what} must be a text of 1 to {MOST_LETTERS} letters, not {text!r}")
