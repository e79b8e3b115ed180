"""The budget book: what has been spent on one data set, and what is left, in one SQLite file.

The book is a list of events that is only ever added to. A fit adds a charge before it touches the
data, and its end afterwards: settled, or abandoned. Whatever its end, a charge counts: a crash
after it leaves it spent. Events are chained by hash, and the book's head holds their number and the
last link, so nothing can be altered, deleted or put in unnoticed. (Who can rewrite the whole file
can rewrite all of that too: keep copies.)
"""

from __future__ import annotations

import math
import os
import sqlite3
import urllib.parse
from collections.abc import Iterable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass

import numpy as np

from .accounting import Cost
from .checks import checked_delta, whole_number
from .errors import InputError
from .facts import MOST_ROWS_PER_PERSON, Guarantee
from .ledger import WHOLE, Entry, Ledger
from .parts import Split

KIND = "sordino budget book"
VERSION = 1
PATIENCE = 60.0             # seconds to wait for another process's turn

SCHEMA = (
    "CREATE TABLE head (id INTEGER PRIMARY KEY CHECK (id = 1), kind TEXT NOT NULL, version INTEGER"
    " NOT NULL, events INTEGER NOT NULL, chain TEXT NOT NULL)",
    "CREATE TABLE events (number INTEGER PRIMARY KEY, content TEXT NOT NULL, chain TEXT NOT NULL)",
)

TROUBLE = {                 # what SQLite reports, in words
    sqlite3.SQLITE_NOTADB: "it is not a budget book",
    sqlite3.SQLITE_BUSY: f"other processes kept it busy for {PATIENCE:g} seconds",
    sqlite3.SQLITE_READONLY: "it and its folder must be yours to read and write",
    sqlite3.SQLITE_CANTOPEN: "it and its folder must be yours to read and write",
}


class BudgetBook:
    """The budget book of one data set; `BudgetBook.open` starts one.

    path  of a book that is there

    Several processes and threads may use one book at once: each operation waits for its turn, reads
    what others added, and leaves no connection open. Raises InputError for a file that is not a
    whole book, was altered, or is of a newer version.
    """

    def __init__(self, path):
        self.path = os.fsdecode(path)
        self._file = os.path.abspath(self.path)
        self._ledger = Ledger()
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
        ledger = Ledger()
        ledger.add("opened", cap=cap.to_dict(), rows_per_person=most)
        with _naming(os.fsdecode(path)):
            _create(os.path.abspath(os.fsdecode(path)), ledger)
        return cls(path)

    # --- what is in it

    @property
    def cap(self) -> Guarantee:
        """What all releases together may cost."""
        return self._ledger.cap

    @property
    def rows_per_person(self) -> int:
        """The most rows a person owns in the data."""
        return self._ledger.rows_per_person

    @property
    def entries(self) -> list[Entry]:
        """Every charge, in order, as the book stands now."""
        with self._turn() as ledger:
            return list(ledger.entries.values())

    @property
    def splits(self) -> dict[str, Split]:
        """The splits that parts may be of, by key."""
        with self._turn() as ledger:
            return dict(ledger.splits)

    @property
    def epsilon_spent(self) -> float:
        """What all charges come to at the cap's delta, for the person who pays most."""
        with self._turn() as ledger:
            return ledger.epsilon_spent()

    def largest_epsilon(self, delta: float, part: tuple[str, ...] = WHOLE) -> float:
        """The largest epsilon of a plan at this delta that still fits, to six digits; 0 if none.

        part  (split, part) to which it would be charged

        It fits whatever the plan, but for one at a delta above 0 whose own cost does not add up in
        zCDP alone (a few steps of Frank-Wolfe): that may come to more beside other charges.
        """
        delta = checked_delta(delta)
        with self._turn() as ledger:
            return ledger.largest_epsilon(delta, tuple(part))

    def spending(self, number: int) -> dict:
        """What a release says of its data: the cap, the charges up to this one, and their sum."""
        with self._turn() as ledger:
            return {
                "cap": ledger.cap.to_dict(),
                "epsilon_spent": ledger.epsilon_spent(number),
                "charges": [e.to_dict() for e in ledger.entries.values() if e.number <= number],
            }

    def to_dict(self) -> dict:
        """Cap, charges and what is left, for a program to read."""
        with self._turn() as ledger:
            return {
                "cap": ledger.cap.to_dict(),
                "rows_per_person": ledger.rows_per_person,
                "splits": [split.to_dict() for split in ledger.splits.values()],
                "entries": [entry.to_dict() for entry in ledger.entries.values()],
                "epsilon_spent": ledger.epsilon_spent(),
                "largest_epsilon": ledger.largest_epsilon(ledger.cap.delta),
            }

    def __str__(self) -> str:
        with self._turn() as ledger:
            return f"{self.path}: {ledger}"

    # --- what is done with it

    def add_split(self, split: Split):
        """Note a split, so that its parts can be charged; the same one may be added again."""
        if not isinstance(split, Split):
            raise InputError("add_split takes a Split")
        with self._turn(writing=True) as ledger:
            if ledger.splits.get(split.key) != split:
                ledger.add("split", split=split.to_dict())

    def part(self, split: str, name: str) -> BookPart:
        """The part of a noted split, to charge in place of the book.

        A fit then takes the rows of this part out of those it is given, by their persons' ids.
        """
        with self._turn() as ledger:
            ledger.check_part((split, name))
            return BookPart(self, ledger.splits[split], name)

    def charge(self, what: str, costs: Iterable[Cost], guarantee: Guarantee, *, plan: str = "",
               part: tuple[str, ...] = WHOLE) -> int:
        """Reserve what something costs, before any of the data is touched; returns its number.

        what       in words
        costs      the Cost of every part of it
        guarantee  whose delta and neighbouring relation it has
        plan       SHA-256 of the plan, if any
        part       (split, part) it is confined to

        It is on the disk once this returns. Raises BudgetError, with nothing charged, where it
        would pass the cap, and InputError for another neighbouring relation.
        """
        if not isinstance(guarantee, Guarantee):
            raise InputError("a charge needs the Guarantee of what is charged")
        said = {"what": what, "plan": plan, "part": list(part), "costs": _as_written(costs)}
        with self._turn(writing=True) as ledger:
            ledger.check_neighbours(guarantee)
            number = ledger.add("charge", delta=guarantee.delta, **said)
            ledger.check_cap(number, guarantee.delta)
            return number

    def settle(self, number: int):
        """Note that what was charged was released."""
        self._end(number, "settled")

    def abandon(self, number: int):
        """Note that what was charged came to nothing. It still counts as spent."""
        self._end(number, "abandoned")

    def _end(self, number: int, how: str):
        number = whole_number("the number of a charge", number, 1)
        with self._turn(writing=True) as ledger:
            ledger.add(how, number=number)

    @contextmanager
    def _turn(self, writing: bool = False) -> Iterator[Ledger]:
        """This process's turn: what others wrote is read and checked; what is added to the ledger
        is durable once it is over, or not written at all.

        The ledger belongs to this turn. It is kept if all went well, by one assignment, so threads
        need no lock, and a child process starts with a whole one.
        """
        with _naming(self.path), _connected(self._file) as connection:
            connection.execute("BEGIN IMMEDIATE" if writing else "BEGIN")
            ledger = _caught_up(connection, self._ledger)
            yield ledger
            _write(connection, ledger)
            connection.execute("COMMIT")
            self._ledger = ledger


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

    def largest_epsilon(self, delta: float) -> float:
        """See `BudgetBook.largest_epsilon`."""
        return self.book.largest_epsilon(delta, (self.split.key, self.name))

    def charge(self, what: str, costs: Iterable[Cost], guarantee: Guarantee, *,
               plan: str = "") -> int:
        """See `BudgetBook.charge`."""
        return self.book.charge(what, costs, guarantee, plan=plan,
                                part=(self.split.key, self.name))

    def settle(self, number: int):
        self.book.settle(number)

    def abandon(self, number: int):
        self.book.abandon(number)


def _as_written(costs: Iterable[Cost]) -> list[list]:
    costs = list(costs)
    if not all(isinstance(cost, Cost) for cost in costs):
        raise InputError("costs must be a list of Cost")
    return [[cost.zcdp, None if cost.pure == math.inf else cost.pure] for cost in costs]


# --- the file

@contextmanager
def _naming(path: str) -> Iterator[None]:
    """Faults are told as input errors that name the book."""
    try:
        yield
    except InputError as error:
        raise type(error)(f"{path}: {error}") from None
    except sqlite3.Error as error:
        kind = getattr(error, "sqlite_errorcode", 0) & 0xFF
        raise InputError(f"{path}: {TROUBLE.get(kind, f'it cannot be used: {error}')}") from None


@contextmanager
def _connected(file: str) -> Iterator[sqlite3.Connection]:
    """A connection to a file that is there; what was not committed is undone at its end."""
    if not os.path.isfile(file):
        raise InputError("it is not a budget book" if os.path.exists(file) else
                         "there is no such book")
    place = urllib.parse.quote(os.fsencode(file))
    connection = sqlite3.connect(f"file://{place}?mode=rw", uri=True, timeout=PATIENCE,
                                 isolation_level=None)
    try:
        connection.text_factory = lambda text: text.decode("utf-8", "surrogateescape")
        connection.execute("PRAGMA synchronous = EXTRA")
        yield connection
    finally:
        connection.close()


def _create(file: str, ledger: Ledger):
    """A new book, whole or not at all, and never over what is there."""
    try:
        handle = os.open(file, os.O_CREAT | os.O_EXCL | os.O_RDWR, 0o600)
    except FileExistsError:
        raise InputError("there is something already; a book is never written over") from None
    except (OSError, ValueError) as error:
        raise InputError(f"it cannot be written: {getattr(error, 'strerror', error)}") from None
    try:
        os.close(handle)
        os.chmod(file, 0o600)           # whatever the umask
        with _connected(file) as connection:
            connection.execute("BEGIN IMMEDIATE")
            for statement in SCHEMA:
                connection.execute(statement)
            connection.execute("INSERT INTO head VALUES (1, ?, ?, 0, '')", (KIND, VERSION))
            _write(connection, ledger)
            connection.execute("COMMIT")
    except BaseException:
        os.unlink(file)
        raise


def _caught_up(connection: sqlite3.Connection, known: Ledger) -> Ledger:
    """A ledger of its own with all that is in the file, what is known and what is new."""
    count, last = _head(connection)
    if known.count:
        _check_known(connection, known)
    ledger = known.copy()
    for number, content, chain in connection.execute(
            "SELECT number, content, chain FROM events WHERE number >= ? OR number < 0"
            " ORDER BY number", (known.count,)):
        ledger.read(number, content, chain)
    if (ledger.count, ledger.chain) != (count, last) or ledger.count == 0:
        raise InputError("its last events were altered, deleted or added: its head tells of "
                         f"{count!r}, and there are {ledger.count}")
    return ledger


def _head(connection: sqlite3.Connection) -> tuple[int, str]:
    """(number of events, last link) of a book of this version."""
    try:
        heads = connection.execute("SELECT kind, version, events, chain FROM head").fetchall()
    except sqlite3.OperationalError as error:
        if "no such" not in str(error):
            raise
        heads = []
    if len(heads) != 1 or heads[0][0] != KIND:
        raise InputError("it is not a budget book")
    _, version, count, last = heads[0]
    if version != VERSION:
        raise InputError(f"it is a book of version {version!r}; this sordino keeps version "
                         f"{VERSION}")
    return count, last


def _check_known(connection: sqlite3.Connection, known: Ledger):
    """What was read in an earlier turn must still be there."""
    number = known.count - 1
    row = connection.execute("SELECT chain FROM events WHERE number = ?", (number,)).fetchone()
    if row != (known.chain,):
        raise InputError(f"event {number} was altered or deleted since it was read")


def _write(connection: sqlite3.Connection, ledger: Ledger):
    if ledger.news:
        connection.executemany("INSERT INTO events VALUES (?, ?, ?)", ledger.news)
        connection.execute("UPDATE head SET events = ?, chain = ?", (ledger.count, ledger.chain))
