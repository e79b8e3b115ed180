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
import urllib.parse
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import asdict, dataclass, replace
from dataclasses import fields as dataclass_fields
from datetime import datetime, timezone

import numpy as np

from .accounting import Cost, composed_epsilon, epsilon_of_zcdp, zcdp_of_epsilon
from .checks import checked_delta, checked_keys, nonnegative_number, one_of, whole_number
from .errors import BudgetError, InputError
from .facts import MOST_ROWS_PER_PERSON, Guarantee
from .parts import Split

KIND = "sordino budget book"
VERSION = 1
PATIENCE = 60.0             # seconds to wait for another process's turn
START = "0" * 64            # what the first event's chain begins with
WHOLE = ()                  # the part of a charge on the whole data set
MOST_LETTERS = 1000

ENDS = ("settled", "abandoned")
STATES = ("reserved", *ENDS)
EVENTS = {                  # kind: keys
    "charge": ("kind", "at", "what", "plan", "part", "costs"),
    "split": ("kind", "at", "split"),
    "settled": ("kind", "at", "number"),
    "abandoned": ("kind", "at", "number"),
}

SCHEMA = (
    "CREATE TABLE head (id INTEGER PRIMARY KEY CHECK (id = 1), kind TEXT NOT NULL, version INTEGER"
    " NOT NULL, terms TEXT NOT NULL, events INTEGER NOT NULL, chain TEXT NOT NULL)",
    "CREATE TABLE events (number INTEGER PRIMARY KEY, content TEXT NOT NULL, chain TEXT NOT NULL)",
)


@dataclass(frozen=True)
class Entry:
    """A charge and what became of it.

    number  of the event that charged it
    what    in words
    plan    SHA-256 of the plan as JSON, or "" where there is none
    zcdp    what it costs
    pure    likewise in pure epsilon; None where there is no such guarantee
    part    (split, part) it is confined to; () for the whole data
    at      when, in UTC
    state   "reserved" (charged, and not heard of since), "settled", or "abandoned"; all count
    """

    number: int
    what: str
    plan: str
    zcdp: float
    pure: float | None
    part: tuple[str, ...]
    at: str
    state: str

    def to_dict(self) -> dict:
        return asdict(self) | {"part": list(self.part)}

    @classmethod
    def from_dict(cls, fields: dict) -> Entry:
        """An entry from `to_dict`; raises InputError for what it would not have made."""
        checked_keys("an entry", fields, tuple(field.name for field in dataclass_fields(cls)))
        whole_number("the number of an entry", fields["number"], 1)
        for name in ("what", "plan", "at"):
            if not isinstance(fields[name], str):
                raise InputError(f"{name} of an entry must be a text")
        nonnegative_number("the zCDP of an entry", fields["zcdp"])
        if fields["pure"] is not None:
            nonnegative_number("the pure epsilon of an entry", fields["pure"])
        part = fields["part"]
        if not isinstance(part, list) or not all(isinstance(name, str) for name in part):
            raise InputError("the part of an entry must be a list of texts")
        one_of("the state of an entry", fields["state"], STATES)
        return cls(**fields | {"part": tuple(part)})


class BudgetBook:
    """The budget book of one data set; `BudgetBook.open` starts one.

    path  of a book that is there

    Several processes may use one book at once: each operation waits for its turn. Raises InputError
    for a file that is not a whole book, was altered, or is of a newer version.
    """

    def __init__(self, path):
        self.path = os.fsdecode(path)
        self._events: list[dict] = []
        self._chain = START
        if not os.path.isfile(self.path):
            raise InputError(f"{self.path}: there is no such book")
        with self._turn():
            pass

    @classmethod
    def open(cls, path, cap: Guarantee, *, rows_per_person: int = 1) -> BudgetBook:
        """Start a book at a path where there is nothing yet, readable by its owner only.

        cap              what all releases together may cost, under its neighbouring relation
        rows_per_person  the most rows a person owns in the data: what a person is protected with
        """
        if not isinstance(cap, Guarantee):
            raise InputError("a book needs a cap, a Guarantee")
        most = whole_number("rows_per_person", rows_per_person, 1, MOST_ROWS_PER_PERSON)
        terms = {"cap": cap.to_dict(), "rows_per_person": most, "opened": _now()}
        _create(os.fsdecode(path), _canonical(terms))
        return cls(path)

    # --- what is in it

    @property
    def entries(self) -> list[Entry]:
        """Every charge, in order, as the book stands now."""
        with self._turn():
            return self._entries()

    @property
    def splits(self) -> dict[str, Split]:
        """The splits that parts may be of, by key."""
        with self._turn():
            return self._splits()

    @property
    def epsilon_spent(self) -> float:
        """What all charges come to at the cap's delta, for the person who pays most."""
        with self._turn():
            return self._composed([])

    def largest_epsilon(self, delta: float, part: tuple[str, str] = WHOLE) -> float:
        """The largest epsilon of a plan at this delta that still fits, 0 if none does.

        part  (split, part) to which it would be charged
        """
        checked_delta(delta)
        with self._turn():
            return self._largest(delta, part)

    def to_dict(self) -> dict:
        """Cap, charges and what is left, for a program to read."""
        return {
            "cap": self.cap.to_dict(),
            "rows_per_person": self.rows_per_person,
            "splits": [split.to_dict() for split in self.splits.values()],
            "entries": [entry.to_dict() for entry in self.entries],
            "epsilon_spent": self.epsilon_spent,
            "largest_epsilon": self.largest_epsilon(self.cap.delta),
        }

    def __str__(self) -> str:
        cap, entries = self.cap, self.entries
        unit = ("one row per person" if self.rows_per_person == 1 else
                f"up to {self.rows_per_person:,} rows per person")
        return "\n".join([
            f"{self.path}: epsilon {self.epsilon_spent:.6g} of {cap.epsilon:g} spent at delta "
            f"{cap.delta:g}",
            f"{cap.neighbours}, {unit}; left: one plan of at most epsilon "
            f"{self.largest_epsilon(cap.delta):g} at delta {cap.delta:g}",
            *(f"split {split.key!r}: " + ", ".join(
                f"{name} {share:.3g}" for name, share in split.parts.items())
              for split in self.splits.values()),
            "",
            *_listed(entries),
        ])

    # --- what is done with it

    def add_split(self, split: Split):
        """Note a split, so that its parts can be charged; the same one may be added again."""
        if not isinstance(split, Split):
            raise InputError("add_split takes a Split")
        with self._turn(writing=True) as connection:
            known = self._splits().get(split.key)
            if known is None:
                self._add(connection, {"kind": "split", "at": _now(), "split": split.to_dict()})
            elif known != split:
                raise InputError(f"{self.path}: there is another split of the key {split.key!r}, "
                                 "and their parts may overlap: choose another key")

    def part(self, split: str, name: str) -> BookPart:
        """The part of a noted split, to charge in place of the book.

        A fit then takes the rows of this part out of those it is given, by their persons' ids.
        """
        if self.cap.neighbours != "add-remove":
            raise InputError(f"{self.path}: parts compose in parallel under \"add-remove\" alone; a "
                             "changed record may move from part to part")
        known = self.splits.get(split)
        if known is None:
            raise InputError(f"{self.path}: no split of the key {split!r} was added")
        if name not in known.parts:
            raise InputError(f"{self.path}: split {split!r} has no part {name!r}; it has "
                             f"{', '.join(known.parts)}")
        return BookPart(self, known, name)

    def charge(self, what: str, costs, guarantee: Guarantee, *, plan: str = "",
               part: tuple[str, str] = WHOLE) -> int:
        """Reserve what something costs, before any of the data is touched; returns its number.

        what       in words
        costs      the Cost of every part of it
        guarantee  whose delta and neighbouring relation it has
        plan       SHA-256 of the plan, if any
        part       (split, part) it is confined to

        It is on the disk once this returns. Raises BudgetError, with nothing charged, where it
        would pass the cap, and InputError for another neighbouring relation.
        """
        _checked_words(what)
        if guarantee.neighbours != self.cap.neighbours:
            raise InputError(
                f"{self.path} is kept under {self.cap.neighbours!r}, the plan under "
                f"{guarantee.neighbours!r}"
            )
        charged = {
            "kind": "charge", "at": _now(), "what": what, "plan": plan, "part": list(part),
            "costs": [[cost.zcdp, None if cost.pure == math.inf else cost.pure] for cost in costs],
        }
        with self._turn(writing=True) as connection:
            self._refuse_too_much(charged, guarantee.delta)
            return self._add(connection, charged)

    def settle(self, number: int):
        """Note that what was charged was released."""
        self._end(number, "settled")

    def abandon(self, number: int):
        """Note that what was charged came to nothing. It still counts as spent."""
        self._end(number, "abandoned")

    def _end(self, number: int, state: str):
        with self._turn(writing=True) as connection:
            entry = next((e for e in self._entries() if e.number == number), None)
            if entry is None or entry.state != "reserved":
                raise InputError(f"{self.path}: there is no open charge number {number}")
            self._add(connection, {"kind": state, "at": _now(), "number": number})

    # --- sums

    def _entries(self) -> list[Entry]:
        entries = {}
        for number, event in enumerate(self._events, 1):
            if event["kind"] == "charge":
                entries[number] = _reserved(number, event)
            elif event["kind"] in ENDS:
                ended = entries[event["number"]]
                entries[event["number"]] = replace(ended, state=event["kind"])
        return list(entries.values())

    def _splits(self) -> dict[str, Split]:
        splits = [Split.from_dict(e["split"]) for e in self._events if e["kind"] == "split"]
        return {split.key: split for split in splits}

    def _composed(self, more: list[dict]) -> float:
        """epsilon at the cap's delta of all charges and these."""
        charges = [event for event in self._events if event["kind"] == "charge"] + more
        return composed_epsilon(_dearest(charges), self.cap.delta)

    def _refuse_too_much(self, charged: dict, delta: float):
        total = self._composed([charged])
        if total <= self.cap.epsilon:
            return
        largest = self._largest(delta, tuple(charged["part"]))
        left = (f"a plan of at most epsilon {largest:.6g} at delta {delta:g} would fit" if largest
                else "nothing is left")
        raise BudgetError(
            f"{self.path}: with {charged['what']}, epsilon would come to {total:.6g}, above the "
            f"cap of {self.cap.epsilon:g} at delta {self.cap.delta:g}; {left}"
        )

    def _largest(self, delta: float, part) -> float:
        """By bisection over zCDP, or over pure epsilon where the cap or the plan has no delta."""
        purely = delta == 0 or self.cap.delta == 0
        worth = (lambda amount: amount) if purely else (lambda rho: epsilon_of_zcdp(rho, delta))

        def fits(amount: float) -> bool:
            cost = [amount**2 / 2, amount] if purely else [amount, None]
            charged = {"kind": "charge", "part": list(part), "costs": [cost]}
            return self._composed([charged]) <= self.cap.epsilon

        low, high = 0.0, self.cap.epsilon if purely else zcdp_of_epsilon(
            self.cap.epsilon, self.cap.delta)
        if fits(high):
            return worth(high)
        for _ in range(60):
            middle = (low + high) / 2
            low, high = (middle, high) if fits(middle) else (low, middle)
        return float(f"{worth(low) * (1 - 1e-9):.6g}") if low > 0 else 0.0

    # --- the file

    @contextmanager
    def _turn(self, writing: bool = False) -> Iterator[sqlite3.Connection]:
        """This process's turn: what others wrote is read and checked; what is written is durable
        once it is over, or not written at all."""
        with _connected(self.path) as connection:
            connection.execute("BEGIN IMMEDIATE" if writing else "BEGIN")
            try:
                self._catch_up(connection)
                yield connection
            except BaseException:
                connection.execute("ROLLBACK")
                self._events, self._chain = [], START       # what was added may not be there
                raise
            connection.execute("COMMIT")

    def _catch_up(self, connection: sqlite3.Connection):
        """Read what was added since the last turn; all of it the first time."""
        terms, count, last = _head(connection, self.path)
        if not self._events:
            self._chain = _linked(START, terms)
            self.cap, self.rows_per_person = _checked_terms(self.path, terms)
        known = len(self._events)
        self._check_known(connection, known)
        rows = connection.execute(
            "SELECT number, content, chain FROM events WHERE number > ? ORDER BY number", (known,))
        for number, content, chain in rows:
            if number != len(self._events) + 1:
                raise InputError(f"{self.path}: event {len(self._events) + 1} is missing")
            if chain != _linked(self._chain, content):
                raise InputError(f"{self.path}: event {number} was altered")
            self._events.append(_parsed_event(self.path, number, content))
            self._chain = chain
        if len(self._events) != count or self._chain != last:
            raise InputError(f"{self.path}: events at its end were deleted or added, {count:,} "
                             f"being noted and {len(self._events):,} there")

    def _check_known(self, connection: sqlite3.Connection, known: int):
        """What was read in an earlier turn must still be there."""
        if not known:
            return
        row = connection.execute("SELECT chain FROM events WHERE number = ?", (known,)).fetchone()
        if row is None or row[0] != self._chain:
            raise InputError(f"{self.path}: event {known} was altered or deleted")

    def _add(self, connection: sqlite3.Connection, event: dict) -> int:
        number, content = len(self._events) + 1, _canonical(event)
        chain = _linked(self._chain, content)
        connection.execute("INSERT INTO events VALUES (?, ?, ?)", (number, content, chain))
        connection.execute("UPDATE head SET events = ?, chain = ?", (number, chain))
        self._events.append(event)
        self._chain = chain
        return number


@dataclass(frozen=True)
class BookPart:
    """One part of a split of the data of a book; fits take it in place of the book."""

    book: BudgetBook
    split: Split
    name: str

    def rows(self, persons) -> np.ndarray:
        """bool (n,): the rows of persons in this part."""
        if persons is None:
            raise InputError("a part of the data is charged: give persons=, the ids it is split by")
        return self.split.rows_of(self.name, persons)

    def charge(self, what: str, costs, guarantee: Guarantee, *, plan: str = "") -> int:
        """See `BudgetBook.charge`."""
        return self.book.charge(what, costs, guarantee, plan=plan,
                                part=(self.split.key, self.name))

    def settle(self, number: int):
        self.book.settle(number)

    def abandon(self, number: int):
        self.book.abandon(number)


def _listed(entries: list[Entry]) -> list[str]:
    """A line of a table for each charge."""
    if not entries:
        return ["No charge yet."]
    lines = [f"{'no.':>4}  {'when (UTC)':19}  {'state':9}  {'zCDP':>10}  what"]
    for entry in entries:
        part = f" [{' / '.join(entry.part)}]" if entry.part else ""
        lines.append(f"{entry.number:>4}  {entry.at[:19]:19}  {entry.state:9}  {entry.zcdp:>10.4g}  "
                     f"{entry.what}{part}")
    return lines


def _reserved(number: int, event: dict) -> Entry:
    costs = _costs_of(event)
    pure = math.fsum(cost.pure for cost in costs)
    return Entry(number, event["what"], event["plan"], math.fsum(cost.zcdp for cost in costs),
                 None if pure == math.inf else pure, tuple(event["part"]), event["at"], "reserved")


# --- composition

def _costs_of(event: dict) -> tuple[Cost, ...]:
    return tuple(Cost(zcdp, math.inf if pure is None else pure) for zcdp, pure in event["costs"])


def _dearest(charges: list[dict]) -> list[Cost]:
    """Two costs, of what has a pure guarantee and of the rest, that no person's charges pass.

    A person pays for charges on the whole data and, of every split, for those on their own part;
    here for the most of each currency that any part of the split comes to.
    """
    by_part: dict[tuple, list[Cost]] = {}
    for event in charges:
        by_part.setdefault(tuple(event["part"]), []).extend(_costs_of(event))
    by_split: dict[tuple, list[tuple]] = {}
    for part, costs in by_part.items():
        by_split.setdefault(part[:1], []).append(_sums(costs))
    most = [[max(column) for column in zip(*sums)] for sums in by_split.values()]
    pure_zcdp, pure, rest = (math.fsum(column) for column in zip(*most)) if most else (0, 0, 0)
    return [Cost(pure_zcdp, pure), *([Cost(rest, math.inf)] if rest else [])]


def _sums(costs: list[Cost]) -> tuple[float, float, float]:
    """(zCDP and pure epsilon of what has a pure guarantee, zCDP of the rest)"""
    pure = [cost for cost in costs if cost.pure < math.inf]
    rest = [cost.zcdp for cost in costs if cost.pure == math.inf]
    return (math.fsum(c.zcdp for c in pure), math.fsum(c.pure for c in pure), math.fsum(rest))


# --- the file

def _create(path: str, terms: str):
    """A new book, whole or not at all, and never over what is there."""
    try:
        handle = os.open(path, os.O_CREAT | os.O_EXCL | os.O_RDWR, 0o600)
    except FileExistsError:
        raise InputError(f"{path}: there is something already; a book is never written over") \
            from None
    except OSError as error:
        raise InputError(f"{path} cannot be written: {error.strerror}") from None
    os.close(handle)
    try:
        with _connected(path) as connection:
            connection.execute("BEGIN IMMEDIATE")
            for statement in SCHEMA:
                connection.execute(statement)
            connection.execute("INSERT INTO head VALUES (1, ?, ?, ?, 0, ?)",
                               (KIND, VERSION, terms, _linked(START, terms)))
            connection.execute("COMMIT")
    except BaseException:
        os.unlink(path)
        raise


@contextmanager
def _connected(path: str) -> Iterator[sqlite3.Connection]:
    """A connection whose faults are told as input errors."""
    try:
        connection = sqlite3.connect(f"{_as_uri(path)}?mode=rw", uri=True, timeout=PATIENCE,
                                     isolation_level=None)
        try:
            connection.execute("PRAGMA synchronous = EXTRA")
            yield connection
        finally:
            connection.close()
    except sqlite3.Error as error:
        raise InputError(f"{path}: the book cannot be used: {error}") from None


def _as_uri(path: str) -> str:
    return "file:" + urllib.parse.quote(os.path.abspath(path))


def _head(connection: sqlite3.Connection, path: str) -> tuple[str, int, str]:
    """(terms, number of events, last link) of a book of this version."""
    try:
        rows = connection.execute("SELECT kind, version, terms, events, chain FROM head").fetchall()
    except sqlite3.OperationalError as error:
        if "no such table" not in str(error):
            raise
        rows = []
    if len(rows) != 1 or rows[0][0] != KIND:
        raise InputError(f"{path}: it is not a budget book")
    kind, version, *rest = rows[0]
    if version != VERSION:
        raise InputError(f"{path}: it is a book of version {version!r}; this sordino keeps version "
                         f"{VERSION}")
    return tuple(rest)


def _checked_terms(path: str, text: str) -> tuple[Guarantee, int]:
    try:
        terms = checked_keys("terms", json.loads(text), ("cap", "rows_per_person", "opened"))
        return Guarantee.from_dict(terms["cap"]), whole_number(
            "rows_per_person", terms["rows_per_person"], 1, MOST_ROWS_PER_PERSON)
    except ValueError as error:
        raise InputError(f"{path}: its terms were altered: {error}") from None


def _parsed_event(path: str, number: int, content: str) -> dict:
    try:
        event = json.loads(content)
        checked_keys("an event", event, EVENTS[event["kind"]])
    except (ValueError, KeyError, TypeError):
        raise InputError(f"{path}: event {number} is not one that this version writes") from None
    return event


def _canonical(content: dict) -> str:
    return json.dumps(content, sort_keys=True, separators=(",", ":"), ensure_ascii=False)


def _linked(before: str, content: str) -> str:
    return hashlib.sha256(f"{before}\n{content}".encode()).hexdigest()


def _now() -> str:
    return datetime.now(timezone.utc).isoformat(timespec="seconds")


def _checked_words(what: object):
    if not isinstance(what, str) or not 0 < len(what) <= MOST_LETTERS or not what.isprintable():
        raise InputError(f"what is charged must be told in 1 to {MOST_LETTERS} letters")
