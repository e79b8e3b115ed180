"""What the events of a budget book say, in memory: charges, what became of them, what they come to.

Each event carries the SHA-256 of itself and of the event before it, so one that was altered,
deleted or put in between is noticed.

What is spent is computed by composition. Charges on the whole data add up; of the parts of a split
(`sordino.parts`) a person pays for their own alone, so the dearest part counts.
"""

from __future__ import annotations

import copy
import hashlib
import json
import math
import re
from collections import defaultdict
from collections.abc import Callable, Iterable
from dataclasses import dataclass, replace
from dataclasses import fields as dataclass_fields
from datetime import datetime, timezone
from decimal import ROUND_DOWN, Context
from operator import itemgetter

from .accounting import epsilon_of_zcdp, zcdp_of_epsilon
from .checks import checked_delta, checked_keys, nonnegative_number, one_of, whole_number
from .errors import BudgetError, InputError
from .facts import EPSILONS, MOST_ROWS_PER_PERSON, Guarantee
from .parts import Split

START = "0" * 64            # what the chain begins with
WHOLE = ()                  # the part of a charge on the whole data set
MOST_LETTERS = 1000
DIGITS = 6                  # of an epsilon that still fits
BISECTIONS = 50
HASH = re.compile(r"([0-9a-f]{64})?")

ENDS = ("settled", "abandoned")
STATES = ("reserved", *ENDS)
EVENTS = {                  # kind: keys
    "opened": ("kind", "at", "cap", "rows_per_person"),
    "charge": ("kind", "at", "what", "plan", "delta", "part", "costs"),
    "split": ("kind", "at", "split"),
    "settled": ("kind", "at", "number"),
    "abandoned": ("kind", "at", "number"),
}

Amounts = tuple[float, ...]                     # what a charge comes to, see `_amounts`
Charge = tuple[tuple[str, ...], Amounts]        # (part, amounts)


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
        return vars(self) | {"part": list(self.part)}

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


class Ledger:
    """The events of a book so far.

    count, chain     how many there are, and the link of the last
    news             (number, content, chain) of those that are still to be written
    cap              what all charges together may come to
    rows_per_person  the most rows a person owns in the data
    entries          {number: Entry}
    splits           {key: Split}
    """

    def __init__(self):
        self.count, self.chain, self.news = 0, START, []
        self.cap: Guarantee | None = None
        self.rows_per_person = 0
        self.entries: dict[int, Entry] = {}
        self.splits: dict[str, Split] = {}
        self._charges: dict[int, Charge] = {}

    def copy(self) -> Ledger:
        """Another one that says the same, with nothing to write."""
        other = copy.copy(self)
        other.news = []
        for name in ("entries", "splits", "_charges"):
            setattr(other, name, dict(getattr(self, name)))
        return other

    # --- events

    def add(self, kind: str, **said) -> int:
        """A new event, to be written; returns its number. Raises InputError for an unsound one."""
        number, at = self.count, datetime.now(timezone.utc).isoformat(timespec="seconds")
        try:
            content = json.dumps({"kind": kind, "at": at} | said, sort_keys=True,
                                 separators=(",", ":"), ensure_ascii=False)
        except TypeError as error:
            raise InputError(f"it cannot be written down: {error}") from None
        self._take(content, linked(self.chain, content))
        self.news.append((number, content, self.chain))
        return number

    def read(self, number: int, content: str, chain: str):
        """The next event from the file; raises InputError if it is not as it was written."""
        if number != self.count:
            raise InputError(f"event {self.count} is missing" if number > self.count else
                             f"event {number} was put in")
        if chain != linked(self.chain, content):
            raise InputError(f"event {number} was altered")
        try:
            self._take(content, chain)
        except (ValueError, KeyError, TypeError, AttributeError):
            raise InputError(f"event {number} is not one that this version writes") from None

    def _take(self, content: str, chain: str):
        event = json.loads(content)
        kind = event["kind"]
        checked_keys("an event", event, EVENTS[kind])
        if (kind == "opened") != (self.count == 0) or not isinstance(event["at"], str):
            raise InputError("a book is opened by its first event, and each tells its time")
        getattr(self, f"_take_{kind}")(event)
        self.count, self.chain = self.count + 1, chain

    def _take_opened(self, event: dict):
        self.cap = Guarantee.from_dict(event["cap"])
        self.rows_per_person = whole_number("rows_per_person", event["rows_per_person"], 1,
                                            MOST_ROWS_PER_PERSON)

    def _take_split(self, event: dict):
        self._check_parallel()
        split = Split.from_dict(event["split"])
        if split.key in self.splits:
            raise InputError(f"there is another split of the key {split.key!r}, and their parts "
                             "may overlap: choose another key")
        self.splits[split.key] = split

    def _take_charge(self, event: dict):
        _check_words(event["what"], event["plan"])
        costs, part = _read_costs(event["costs"]), tuple(event["part"])
        if part != WHOLE:
            self.check_part(part)
        zcdp, pure = _total(costs)
        self.entries[self.count] = Entry(
            self.count, event["what"], event["plan"], zcdp, None if pure == math.inf else pure,
            part, event["at"], "reserved")
        checked_delta(event["delta"])
        self._charges[self.count] = part, _amounts(costs)

    def _take_settled(self, event: dict):
        entry = self.entries.get(event["number"])
        if entry is None or entry.state != "reserved":
            raise InputError(f"there is no open charge number {event['number']}")
        self.entries[entry.number] = replace(entry, state=event["kind"])

    _take_abandoned = _take_settled

    # --- what is refused

    def check_part(self, part: tuple[str, ...]):
        """Refuse what is no part of a split of this book."""
        self._check_parallel()
        if len(part) != 2 or not all(isinstance(name, str) for name in part):
            raise InputError("a part must be (split, part), two texts")
        split, name = part
        if split not in self.splits:
            raise InputError(f"no split of the key {split!r} was added")
        if name not in self.splits[split].parts:
            raise InputError(f"split {split!r} has no part {name!r}; it has "
                             f"{', '.join(self.splits[split].parts)}")

    def _check_parallel(self):
        if self.cap.neighbours != "add-remove":
            raise InputError('parts compose in parallel under "add-remove" alone: a changed record '
                             "may move from part to part")

    def check_neighbours(self, guarantee: Guarantee):
        if guarantee.neighbours != self.cap.neighbours:
            raise InputError(f"it is kept under {self.cap.neighbours!r}, the plan under "
                             f"{guarantee.neighbours!r}")

    def check_cap(self, number: int, delta: float):
        """Refuse the charge of this number, of a plan at this delta, if it passes the cap."""
        total = self.epsilon_spent()
        if total <= self.cap.epsilon:
            return
        refused = self.entries[number]
        del self.entries[number], self._charges[number]
        delta = delta if self.cap.delta > 0 else 0.0
        largest = self.largest_epsilon(delta, refused.part)
        left = (f"a plan of at most epsilon {largest:g} at delta {delta:g} would fit" if largest
                else "nothing is left")
        raise BudgetError(
            f"with {refused.what}, epsilon would come to {total:.6g}, above the cap of "
            f"{self.cap.epsilon:g} at delta {self.cap.delta:g}; {left}"
        )

    # --- what it comes to

    def epsilon_spent(self, until: int | None = None) -> float:
        """What all charges, or those up to a number, come to at the cap's delta."""
        charges = (charge for number, charge in self._charges.items()
                   if until is None or number <= until)
        return _composed(charges, self.cap.delta)

    def largest_epsilon(self, delta: float, part: tuple[str, ...] = WHOLE) -> float:
        """See `BudgetBook.largest_epsilon`."""
        if part != WHOLE:
            self.check_part(part)
        if delta > 0 and self.cap.delta == 0:
            return 0.0
        charges = list(self._charges.values())
        in_short = list(_by_part(charges).items())

        def fits(epsilon: float, charges: list[Charge] = in_short) -> bool:
            more = part, _amounts_of_any(epsilon, delta)
            return _composed([*charges, more], self.cap.delta) <= self.cap.epsilon

        largest = _largest(fits, self.cap.epsilon)
        nearest = float(f"{largest:.{DIGITS}g}")
        largest = nearest if fits(nearest, charges) else _rounded_down(largest * (1 - 1e-12))
        return largest if largest >= EPSILONS[0] else 0.0

    # --- as it is shown

    def __str__(self) -> str:
        cap, most = self.cap, self.rows_per_person
        return "\n".join([
            f"epsilon {self.epsilon_spent():.6g} of {cap.epsilon:g} spent at delta {cap.delta:g}",
            f"{cap.neighbours}, {'one row' if most == 1 else f'up to {most:,} rows'} per person; "
            f"left: one plan of at most epsilon {self.largest_epsilon(cap.delta):g} at delta "
            f"{cap.delta:g}",
            *(f"split {split.key!r}: " + ", ".join(
                f"{name} {share:.3g}" for name, share in split.parts.items())
              for split in self.splits.values()),
            "",
            *_listed(self.entries.values()),
        ])


def linked(before: str, content: str) -> str:
    """The link of an event in the chain, from that of the event before it."""
    return hashlib.sha256(f"{before}\n{content}".encode("utf-8", "surrogateescape")).hexdigest()


def _read_costs(costs: list) -> list[tuple[float, float]]:
    """[(zCDP, pure epsilon)]; inf for what is beyond every cap, and so no guarantee at all."""
    most = EPSILONS[1]
    read = [(zcdp if zcdp <= most else math.inf,
             math.inf if pure is None or pure > most else pure) for zcdp, pure in costs]
    if not all(type(amount) is float and amount >= 0 for cost in read for amount in cost):
        raise InputError("costs must be numbers of at least 0")
    return read


def _check_words(what: object, plan: object):
    if not isinstance(what, str) or not 0 < len(what) <= MOST_LETTERS or not what.isprintable():
        raise InputError(f"what is charged must be told in 1 to {MOST_LETTERS:,} letters")
    if not isinstance(plan, str) or not HASH.fullmatch(plan):
        raise InputError("the plan of a charge must be told by its SHA-256, 64 digits")


def _listed(entries: Iterable[Entry]) -> list[str]:
    """A line of a table for each charge."""
    lines = []
    for entry in entries:
        part = f" [{' / '.join(entry.part)}]" if entry.part else ""
        lines.append(f"{entry.number:>4}  {entry.at[:19]:19}  {entry.state:9}  "
                     f"{entry.zcdp:>10.4g}  {entry.what}{part}")
    heading = f"{'no.':>4}  {'when (UTC)':19}  {'state':9}  {'zCDP':>10}  what"
    return [heading, *lines] if lines else ["No charge yet."]


# --- composition

def _amounts(costs: list[tuple[float, float]]) -> Amounts:
    """(zCDP, pure epsilon) of a charge. Both add up; the sums hold at once, and the better counts.

    Either sum is one that a cap may be kept by where each charge is chosen after the results of
    earlier ones were seen (pure epsilon: Rogers, Roth, Ullman and Vadhan 2016; zCDP: Feldman and
    Zrnic 2021; both from memory). Sums that mix the two, some charges in the one and some in the
    other, are not known to be, and are left out.
    """
    return _total(costs)


def _amounts_of_any(epsilon: float, delta: float) -> Amounts:
    """The most that a plan of this guarantee comes to."""
    if delta == 0:
        return epsilon**2 / 2, epsilon
    return zcdp_of_epsilon(epsilon, delta), math.inf


def _total(costs: list[tuple[float, float]]) -> tuple[float, float]:
    return math.fsum(zcdp for zcdp, _ in costs), math.fsum(pure for _, pure in costs)


def _composed(charges: Iterable[Charge], delta: float) -> float:
    """The epsilon at `delta` of these charges, for the person who pays most.

    A person pays for charges on the whole data and, of every split, for those on their own part: in
    either currency, at most what the dearest part comes to.
    """
    by_split = defaultdict(list)
    for part, amounts in _by_part(charges).items():
        by_split[part[:1]].append(amounts)
    dearest = _columns(math.fsum, [_columns(max, parts) for parts in by_split.values()])
    zcdp, pure = dearest or (0.0, 0.0)
    return min(pure, epsilon_of_zcdp(zcdp, delta))


def _by_part(charges: Iterable[Charge]) -> dict[tuple[str, ...], Amounts]:
    rows = defaultdict(list)
    for part, amounts in charges:
        rows[part].append(amounts)
    return {part: _columns(math.fsum, amounts) for part, amounts in rows.items()}


def _columns(how: Callable, rows: list[Amounts]) -> Amounts:
    """Without an object for each row, which would wake the garbage collector at every charge."""
    width = len(rows[0]) if rows else 0
    return tuple(how(map(itemgetter(k), rows)) for k in range(width))


def _largest(fits: Callable[[float], bool], start: float) -> float:
    """The largest number that fits, by bisection: all below one that fits do."""
    low, high = 0.0, start
    while fits(high):
        low, high = high, 2 * high
    for _ in range(BISECTIONS):
        middle = (low + high) / 2
        low, high = (middle, high) if fits(middle) else (low, middle)
    return low


def _rounded_down(value: float) -> float:
    return float(Context(prec=DIGITS, rounding=ROUND_DOWN).create_decimal(value))
