"""The budget book: what has been spent on one data set, and what is left, in one SQLite file.

The book is a list of events that is only ever added to. A fit adds a charge before it touches the
data, and its end afterwards: settled, or abandoned. Whatever its end, a charge counts: a crash
after it leaves it spent. Each event carries the SHA-256 of itself and of the event before it, and
the book's head holds the last one and their number, so an event that was altered, deleted or put
in between is noticed. (Who can rewrite the whole file can rewrite all of that too: keep copies.)

What is spent is computed by composition. Charges on the whole data add up; of the parts of a split
(`sordino.parts`) a person pays for their own alone, so the dearest part counts.
"""

from __future__ import annotations

import hashlib
import json
import math
import os
import sqlite3
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass, replace
from datetime import datetime, timezone

from .accounting import Cost, composed_epsilon, epsilon_of_zcdp
from .checks import checked_keys, whole_number
from .errors import BudgetError, InputError
from .facts import Guarantee
from .parts import Split

KIND = "sordino budget book"
VERSION = 1
PATIENCE = 60.0             # seconds to wait for another process's turn
START = "0" * 64            # what the first event's chain begins with
WHOLE = ""                  # the part of a charge on the whole data set
MOST_LETTERS = 1000

SCHEMA = """
CREATE TABLE head (id INTEGER PRIMARY KEY CHECK (id = 1), kind TEXT NOT NULL, version INTEGER
    NOT NULL, terms TEXT NOT NULL, events INTEGER NOT NULL, chain TEXT NOT NULL);
CREATE TABLE events (number INTEGER PRIMARY KEY, content TEXT NOT NULL, chain TEXT NOT NULL);
"""


@dataclass(frozen=True)
class Entry:
    """A charge and what became of it.

    number  from 1
    what    in words
    plan    SHA-256 of the plan as JSON, or "" where there is none
    cost    in both currencies
    split, part  whose part of the data; "" and "" for all of it
    at      when, in UTC
    state   "reserved" (charged, and not heard of since), "settled", or "abandoned"; all count
    """

    number: int
    what: str
    plan: str
    cost: Cost
    split: str
    part: str
    at: str
    state: str

    def to_dict(self) -> dict:
        pure = None if self.cost.pure == math.inf else self.cost.pure
        return {
            "number": self.number, "what": self.what, "plan": self.plan, "zcdp": self.cost.zcdp,
            "pure": pure, "split": self.split, "part": self.part, "at": self.at,
            "state": self.state,
        }


class BudgetBook:
    """The budget book of one data set.

    path  of the file
    cap   a Guarantee: opens a new book under this cap, which must not exist yet; None: an old one

    A cap holds for all releases together, under its own neighbouring relation and unit; plans for
    another relation are refused. Several processes may use one book at once. Raises InputError for
    a file that is not a whole book, was altered, or is of a newer version.
    """

    def __init__(self, path, cap: Guarantee | None = None, *, rows_per_person: int | None = None):
        self.path = os.fsdecode(path)
        if cap is not None:
            _create(self.path, cap, whole_number("rows_per_person", rows_per_person or 1, 1))
        elif not os.path.exists(self.path):
            raise InputError(f"{self.path}: no such book; open one under a cap first")
        with self._turn(writing=False) as book:
            terms = _checked(self.path, book)
        self.cap = Guarantee.from_dict(terms["cap"])
        self.rows_per_person = terms["rows_per_person"]
