"""The budget book: what it adds up to, what it refuses, and what it withstands."""

from __future__ import annotations

import itertools
import json
import math
import os
import random
import resource
import shutil
import sqlite3
import subprocess
import sys
import tempfile
import threading
from pathlib import Path

import numpy as np
import pytest
import scipy.sparse as sp

import sordino.book as book_file
import sordino.fit as fitting
from bench.book import charge_timings, crowd_charges, survive_kills
from sordino import (
    BudgetBook,
    BudgetError,
    Guarantee,
    InputError,
    PublicFacts,
    Split,
    load_release,
    plan_fit,
)
from sordino.accounting import Cost, epsilon_of_zcdp, zcdp_of_epsilon
from sordino.charging import plan_hash
from sordino.ledger import Entry, linked

CAP = Guarantee(3.0, 1e-6)
ONE = Guarantee(1.0, 1e-6)
PURE = Guarantee(1.0)
HALVES = Split("halves", {"left": 0.5, "right": 0.5})
THIRDS = Split("thirds", {"a": 1 / 3, "b": 1 / 3, "c": 1 / 3})
FACTS = PublicFacts(features=8, rows=60)


def zcdp(rho: float) -> list[Cost]:
    return [Cost(rho, math.inf)]


def pure(epsilon: float) -> list[Cost]:
    return [Cost(epsilon**2 / 2, epsilon)]


@pytest.fixture
def path(tmp_path):
    return tmp_path / "a.book"


@pytest.fixture
def book(path):
    book = BudgetBook.open(path, CAP)
    book.add_split(HALVES)
    book.add_split(THIRDS)
    return book


def in_child(work) -> str:
    """What work() returns, or the error it raises, in a forked process."""
    reader, writer = os.pipe()
    child = os.fork()
    if child == 0:
        try:
            try:
                said = str(work())
            except BaseException as error:
                said = f"{type(error).__name__}: {error}"
            os.write(writer, said.encode())
        finally:
            os._exit(0)
    os.close(writer)
    with os.fdopen(reader) as stream:
        said = stream.read()
    os.waitpid(child, 0)
    return said


# --- what it adds up to

@pytest.mark.parametrize(
    ("rho", "delta", "epsilon"),
    [(0.001, 1e-6, 0.18289537719), (0.01, 1e-5, 0.54572554827), (0.01, 1e-6, 0.62169265456),
     (0.05, 1e-6, 1.4715947505), (0.1, 1e-5, 1.914238832), (1, 1e-9, 9.5214636718),
     (10, 1e-6, 32.221660949)],
)
def test_zcdp_adds_up(path, rho, delta, epsilon):
    """Values of theory.md, section 1a: Bun and Steinke 2016, and the conversion of Canonne, Kamath
    and Steinke 2020, checked there by mpmath."""
    book = BudgetBook.open(path, Guarantee(50.0, delta))
    for share in (0.1, 0.15, 0.2, 0.25, 0.3):
        book.charge("a share", zcdp(share * rho), ONE)
    assert book.epsilon_spent == pytest.approx(epsilon, rel=2e-10)
    assert [entry.zcdp for entry in book.entries] == [s * rho for s in (0.1, 0.15, 0.2, 0.25, 0.3)]


def test_pure_epsilons_add_up_exactly(path):
    book = BudgetBook.open(path, PURE)
    for _ in range(10):
        book.charge("a tenth", pure(0.1), PURE)
    assert book.epsilon_spent == 1.0
    assert book.largest_epsilon(0) == 0
    with pytest.raises(BudgetError, match="nothing is left"):
        book.charge("more", pure(1e-9), PURE)


@pytest.mark.parametrize(("delta", "route", "options"), [
    (1e-6, "zcdp", dict(method="greedy")),
    (1e-6, "zcdp", dict(method="frank-wolfe")),
    (1e-6, "pure", dict(method="frank-wolfe", steps=1, intercept=False)),
    (0.0, "pure", dict(method="frank-wolfe", intercept=False)),
])
def test_a_plan_alone_comes_to_what_it_says(path, delta, route, options):
    guarantee = Guarantee(1.0, delta)
    plan = plan_fit(FACTS, guarantee, **options)
    assert plan.route == route
    book = BudgetBook.open(path, guarantee)
    book.charge("all of it", plan.costs, guarantee)
    spent = min(sum(cost.pure for cost in plan.costs), epsilon_of_zcdp(plan.zcdp, delta))
    assert book.epsilon_spent == pytest.approx(spent, rel=1e-12)
    assert plan.epsilon_spent <= book.epsilon_spent <= 1.0


def test_charges_add_up_in_zcdp_or_purely_and_the_better_counts(path):
    """Never some in the one and some in the other, which may not hold for plans chosen in turn."""
    book = BudgetBook.open(path, CAP)
    book.charge("a pure plan", pure(0.2), Guarantee(0.2))
    assert book.epsilon_spent == 0.2
    plan = plan_fit(PublicFacts(features=90, rows=900), Guarantee(0.99, 1e-6), picks=30)
    assert any(cost.pure < math.inf for cost in plan.costs)
    book.charge("a greedy plan", plan.costs, ONE)
    assert book.epsilon_spent == pytest.approx(
        epsilon_of_zcdp(0.2**2 / 2 + plan.zcdp, CAP.delta), rel=1e-12)
    many = BudgetBook.open(f"{path}2", CAP)
    costs = [cost for _ in range(60) for cost in pure(0.05)]
    many.charge("many small pure ones", costs, Guarantee(3.0))
    assert many.epsilon_spent == epsilon_of_zcdp(60 * 0.05**2 / 2, CAP.delta) < 3.0


def test_a_charge_without_costs_costs_nothing(book):
    book.charge("nothing", [], ONE)
    assert book.epsilon_spent == 0 and book.entries[0].zcdp == 0 == book.entries[0].pure


def test_of_two_parts_the_dearer_alone_counts(book):
    left, right = book.part("halves", "left"), book.part("halves", "right")
    left.charge("left", zcdp(0.02), ONE)
    right.charge("right", zcdp(0.05), ONE)
    assert book.epsilon_spent == epsilon_of_zcdp(0.05, 1e-6)
    left.charge("left again", zcdp(0.04), ONE)
    assert book.epsilon_spent == epsilon_of_zcdp(math.fsum([0.02, 0.04]), 1e-6)
    book.charge("everybody", zcdp(0.01), ONE)
    assert book.epsilon_spent == pytest.approx(epsilon_of_zcdp(0.07, 1e-6), rel=1e-12)


def test_parts_of_two_splits_add_up(book):
    book.part("halves", "left").charge("half", zcdp(0.02), ONE)
    book.part("thirds", "b").charge("third", zcdp(0.05), ONE)
    assert book.epsilon_spent == epsilon_of_zcdp(0.07, 1e-6)
    book.part("thirds", "c").charge("third", zcdp(0.05), ONE)
    assert book.epsilon_spent == epsilon_of_zcdp(0.07, 1e-6)


def test_greedy_plans_in_two_parts_cost_the_dearer_alone(book):
    for part, picks in (("left", 3), ("right", 30)):
        plan = plan_fit(FACTS if picks == 3 else PublicFacts(features=90, rows=900), ONE,
                        picks=picks)
        book.part("halves", part).charge("a greedy plan", plan.costs, ONE)
    assert book.epsilon_spent <= 1.0


@pytest.mark.parametrize("seed", range(8))
def test_nobody_pays_more_than_the_book_says(tmp_path, seed):
    """Against every combination of parts, each person's own charges composed by themselves."""
    rng = random.Random(seed)
    book = BudgetBook.open(tmp_path / "a.book", Guarantee(1e6, 1e-6))
    book.add_split(HALVES)
    book.add_split(THIRDS)
    places = [(), *(("halves", part) for part in HALVES.parts),
              *(("thirds", part) for part in THIRDS.parts)]
    charges = []
    for _ in range(12):
        costs = [rng.choice([zcdp, pure])(rng.uniform(0, 0.3))[0] for _ in range(3)]
        charges.append((rng.choice(places), costs))
        book.charge("one", costs, ONE, part=charges[-1][0])
    for left, third in itertools.product(HALVES.parts, THIRDS.parts):
        own = [cost for part, costs in charges for cost in costs
               if part in ((), ("halves", left), ("thirds", third))]
        pure_sum, zcdp_sum = (math.fsum(getattr(cost, name) for cost in own)
                              for name in ("pure", "zcdp"))
        least = min(pure_sum, epsilon_of_zcdp(zcdp_sum, 1e-6))
        assert least <= book.epsilon_spent * (1 + 1e-12)


# --- what still fits

HISTORIES = {
    "new": [],
    "some": [(zcdp(0.03), ONE, ())],
    "nearly all": [(zcdp(zcdp_of_epsilon(2.999, 1e-6)), ONE, ())],
    "pure": [(pure(0.3), Guarantee(0.3), ())],
    "mixed": [(pure(0.2), PURE, ()), (zcdp(0.03), ONE, ())],
    "own part": [(zcdp(0.1), ONE, ("halves", "left")), (zcdp(0.02), ONE, ())],
    "other part": [(zcdp(0.1), ONE, ("halves", "right")), (zcdp(0.02), ONE, ())],
    "other split": [(zcdp(0.1), ONE, ("thirds", "a")), (zcdp(0.02), ONE, ("thirds", "b"))],
}


@pytest.mark.parametrize("history", HISTORIES)
@pytest.mark.parametrize("delta", [0.0, 1e-6, 1e-5, 1e-9])
@pytest.mark.parametrize("part", [(), ("halves", "left")])
def test_the_largest_epsilon_fits_and_a_thousandth_more_does_not(book, history, delta, part):
    for costs, guarantee, where in HISTORIES[history]:
        book.charge("before", costs, guarantee, part=where)
    largest = book.largest_epsilon(delta, part)
    assert largest > 0 and largest == float(f"{largest:.6g}")

    def charge(epsilon: float):
        costs = zcdp(zcdp_of_epsilon(epsilon, delta)) if delta else pure(epsilon)
        book.charge("the last", costs, Guarantee(epsilon, delta), part=part)

    before = book.epsilon_spent
    with pytest.raises(BudgetError, match=rf"a plan of at most epsilon {largest:g} at delta"):
        charge(1.001 * largest)
    assert book.epsilon_spent == before
    charge(largest)
    assert before < book.epsilon_spent <= CAP.epsilon


@pytest.mark.parametrize("history", HISTORIES)
@pytest.mark.parametrize("delta", [1e-6, 1e-5])
@pytest.mark.parametrize("method", ["greedy", "frank-wolfe"])
def test_plans_made_for_what_fits_are_accepted(book, history, delta, method):
    for costs, guarantee, where in HISTORIES[history]:
        book.charge("before", costs, guarantee, part=where)
    guarantee = Guarantee(book.largest_epsilon(delta), delta)
    plan = plan_fit(PublicFacts(features=90, rows=900), guarantee, method=method)
    assert plan.route == "zcdp"
    book.charge("the last", plan.costs, guarantee)
    assert book.epsilon_spent <= CAP.epsilon


def test_a_new_book_has_all_of_its_cap_left(path):
    assert BudgetBook.open(path, CAP).largest_epsilon(CAP.delta) == CAP.epsilon
    assert BudgetBook.open(f"{path}2", PURE).largest_epsilon(0) == 1.0
    assert BudgetBook.open(f"{path}3", Guarantee(0.123456789, 1e-6)).largest_epsilon(
        1e-6) == 0.123456


def test_a_cap_at_delta_0_takes_pure_plans_alone(path):
    book = BudgetBook.open(path, PURE)
    assert book.largest_epsilon(1e-6) == 0
    with pytest.raises(BudgetError, match="come to inf, above the cap of 1 at delta 0; a plan of "
                                          "at most epsilon 1 at delta 0 would fit"):
        book.charge("not pure", zcdp(1e-9), ONE)
    book.charge("pure", pure(0.7), PURE)
    assert book.largest_epsilon(0) == 0.3


def test_costs_beyond_any_cap_are_refused(book):
    for rho in (1e10, 1e308, math.inf):
        with pytest.raises(BudgetError, match="come to inf"):
            book.charge("far too much", 2 * zcdp(rho), ONE)
    book.charge("a useless pure guarantee", 2 * [Cost(1e-6, 1e308)], ONE)
    assert book.entries[0].pure is None and BudgetBook(book.path).entries == book.entries


# --- what is refused

def test_what_cannot_be_charged_is_refused(book):
    for said, arguments in {
        "kept under 'add-remove', the plan under 'replace-one'":
            ("x", zcdp(0.1), Guarantee(1, 1e-6, "replace-one")),
        "told in 1 to 1,000 letters": ("", zcdp(0.1), ONE),
        "told in 1 to 1,000": ("x\n", zcdp(0.1), ONE),
        "told in 1 to 1,00": (3, zcdp(0.1), ONE),
        "cannot be written down": (b"x", zcdp(0.1), ONE),
        "costs must be a list of Cost": ("x", [0.1], ONE),
        "needs the Guarantee": ("x", zcdp(0.1), 1.0),
    }.items():
        with pytest.raises(InputError, match=said):
            book.charge(*arguments)
    for said, options in {
        "by its SHA-256": dict(plan="abc"),
        "by its SHA-25": dict(plan=3),
        "no split of the key 'x' was added": dict(part=("x", "left")),
        "split 'halves' has no part 'a'; it has left, right": dict(part=("halves", "a")),
        "a part must be": dict(part=("halves",)),
    }.items():
        with pytest.raises(InputError, match=said):
            book.charge("x", zcdp(0.1), ONE, **options)
    assert book.entries == [] and book.epsilon_spent == 0


def test_another_split_of_the_same_key_is_refused(book):
    book.add_split(Split("halves", {"right": 0.5, "left": 0.5}))         # the same one
    assert list(book.splits) == ["halves", "thirds"]
    with pytest.raises(InputError, match="another split of the key 'halves', and their parts may"):
        book.add_split(Split("halves", {"left": 0.4, "right": 0.6}))
    with pytest.raises(InputError, match="add_split takes a Split"):
        book.add_split("halves")
    assert book.splits == {"halves": HALVES, "thirds": THIRDS}


def test_parts_that_are_not_there_are_named(book):
    with pytest.raises(InputError, match="no split of the key 'x' was added"):
        book.part("x", "left")
    with pytest.raises(InputError, match="has no part 'x'; it has a, b, c"):
        book.part("thirds", "x")
    with pytest.raises(InputError, match="has no part 'x'"):
        book.largest_epsilon(1e-6, ("thirds", "x"))
    with pytest.raises(InputError, match="a part must be"):
        book.part(["thirds"], "x")


def test_under_replace_one_there_are_no_parts(path):
    book = BudgetBook.open(path, Guarantee(1.0, 1e-6, "replace-one"))
    for use in (lambda: book.add_split(HALVES), lambda: book.part("halves", "left"),
                lambda: book.largest_epsilon(1e-6, ("halves", "left"))):
        with pytest.raises(InputError, match='under "add-remove" alone'):
            use()
    book.charge("all", zcdp(0.001), Guarantee(1.0, 1e-6, "replace-one"))
    assert len(book.entries) == 1 and book.splits == {}


def test_a_charge_ends_once(book):
    number = book.charge("x", zcdp(0.1), ONE)
    book.settle(number)
    for end in (book.settle, book.abandon):
        with pytest.raises(InputError, match=f"no open charge number {number}"):
            end(number)
        with pytest.raises(InputError, match="no open charge number 99"):
            end(99)
        with pytest.raises(InputError, match="the number of a charge must be a whole number"):
            end("1")
    assert [entry.state for entry in book.entries] == ["settled"]


def test_every_state_counts(book):
    numbers = [book.charge(what, zcdp(0.01), ONE) for what in "abc"]
    before = book.epsilon_spent
    book.settle(numbers[0])
    book.abandon(numbers[1])
    assert [entry.state for entry in book.entries] == ["settled", "abandoned", "reserved"]
    assert book.epsilon_spent == before == epsilon_of_zcdp(0.03, 1e-6)


def test_opening(path, tmp_path):
    for cap in (1.0, None, (1.0, 1e-6)):
        with pytest.raises(InputError, match="a book needs a cap"):
            BudgetBook.open(path, cap)
    with pytest.raises(InputError, match="rows_per_person must be between"):
        BudgetBook.open(path, CAP, rows_per_person=0)
    assert not path.exists()
    book = BudgetBook.open(path, CAP, rows_per_person=4)
    assert (book.cap, book.rows_per_person, book.entries) == (CAP, 4, [])
    before = path.read_bytes()
    for taken in (path, tmp_path):
        with pytest.raises(InputError, match="there is something already"):
            BudgetBook.open(taken, CAP)
    assert path.read_bytes() == before
    for wrong in (tmp_path / "no" / "folder", f"{path}/under"):
        with pytest.raises(InputError, match="it cannot be written: No"):
            BudgetBook.open(wrong, CAP)
    with pytest.raises(InputError, match="it cannot be written: embedded null"):
        BudgetBook.open("a\0b", CAP)


@pytest.mark.parametrize("name", ["a?b#c%41 é.book", os.fsdecode(b"not utf-8 \xff"), "-journal"])
def test_any_name_will_do(tmp_path, name):
    book = BudgetBook.open(tmp_path / name, CAP)
    book.charge("x", zcdp(0.1), ONE)
    assert os.listdir(tmp_path) == [name] and len(BudgetBook(tmp_path / name).entries) == 1


def test_a_book_stays_where_it_is_when_the_process_moves(tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    book = BudgetBook.open("a.book", CAP)
    (tmp_path / "elsewhere").mkdir()
    monkeypatch.chdir(tmp_path / "elsewhere")
    book.charge("x", zcdp(0.1), ONE)
    assert len(BudgetBook("../a.book").entries) == 1 and book.path == "a.book"


def test_it_is_told_as_text_and_as_a_dict(book):
    number = book.charge("a fit", zcdp(0.02), ONE, plan="ab" * 32)
    book.part("halves", "left").charge("half a fit", pure(0.1), Guarantee(0.1))
    book.settle(number)
    told = book.to_dict()
    assert json.loads(json.dumps(told)) == told
    assert told["cap"] == CAP.to_dict() and told["rows_per_person"] == 1
    assert told["splits"] == [HALVES.to_dict(), THIRDS.to_dict()]
    assert [Entry.from_dict(entry) for entry in told["entries"]] == book.entries
    assert told["epsilon_spent"] == book.epsilon_spent
    assert told["largest_epsilon"] == book.largest_epsilon(1e-6)
    text = str(book)
    assert text.startswith(
        f"{book.path}: epsilon {book.epsilon_spent:.6g} of 3 spent at delta 1e-06\n")
    assert f"at most epsilon {told['largest_epsilon']:g} at delta 1e-06" in text
    assert "split 'halves': left 0.5, right 0.5" in text
    assert text.splitlines()[-1].endswith("reserved        0.005  half a fit [halves / left]")
    assert book.spending(number)["charges"] == told["entries"][:1]
    assert book.spending(number)["epsilon_spent"] == epsilon_of_zcdp(0.02, 1e-6)


# --- tampering

@pytest.fixture
def whole(book):
    """A book with an event of every kind."""
    for part in ((), ("halves", "left"), ()):
        book.charge("a fit", [*pure(0.01), *zcdp(0.001)], ONE, plan="ab" * 32, part=part)
    book.settle(3)
    book.abandon(4)
    return Path(book.path)


def tampered(whole: Path, *statements) -> Path:
    copy = whole.with_suffix(".copy")
    shutil.copy(whole, copy)
    with sqlite3.connect(copy) as connection:
        for statement in statements:
            assert connection.execute(*statement).rowcount > 0
    connection.close()
    return copy


def refusal(whole: Path, *statements) -> str:
    copy = tampered(whole, *statements)
    with pytest.raises(InputError) as refused:
        BudgetBook(copy)
    assert str(refused.value).startswith(f"{copy}: ") and "\n" not in str(refused.value)
    return str(refused.value)


def events_of(path: Path) -> list[tuple[int, str, str]]:
    with sqlite3.connect(path) as connection:
        rows = connection.execute("SELECT * FROM events ORDER BY number").fetchall()
    connection.close()
    return rows


def altered(value):
    """Another value of the same kind."""
    if isinstance(value, dict):
        return {key: altered(inner) for key, inner in value.items()}
    if isinstance(value, list):
        return [altered(inner) for inner in value] if value else ["x"]
    if isinstance(value, str):
        return value + "x"
    return 1.0 if value is None else value * 0.5


def test_every_field_of_every_event_is_guarded(whole):
    kinds = []
    for number, content, _ in events_of(whole):
        event = json.loads(content)
        kinds.append(event["kind"])
        for key in event:
            without = {name: value for name, value in event.items() if name != key}
            for new in (event | {key: altered(event[key])}, event | {key: None}, without):
                assert f"event {number} was altered" in refusal(
                    whole, ("UPDATE events SET content = ? WHERE number = ?",
                            (json.dumps(new, sort_keys=True, separators=(",", ":")), number)))
    assert set(kinds) == {"opened", "split", "charge", "settled", "abandoned"} and len(kinds) == 8


@pytest.mark.parametrize("number", range(8))
def test_every_column_of_every_event_is_guarded(whole, number):
    def change(what: str):
        return f"UPDATE events SET {what} WHERE number = ?", (number,)

    for what in ("content = ''", "chain = ''", "content = CAST(content AS BLOB)",
                 "content = x'ff'", "content = content || ' '", "content = CAST(x'ff' AS TEXT)"):
        assert f"event {number} was altered" in refusal(whole, change(what))
    assert "event -5 was put in" in refusal(whole, change("number = -5"))
    assert f"event {number} is missing" in refusal(whole, change("number = 99"))
    last = number == 7
    said = "its last events were" if last else f"event {number} is missing"
    assert said in refusal(whole, ("DELETE FROM events WHERE number = ?", (number,)))
    if not last:
        swap = ("UPDATE events SET {0} = (SELECT {0} FROM events AS other WHERE other.number = "
                "? - events.number) WHERE number IN (?, ?)")
        for columns in (["content"], ["chain"], ["content", "chain"]):
            assert f"event {number} was altered" in refusal(
                whole, *((swap.format(column), (2 * number + 1, number, number + 1))
                         for column in columns))


def test_the_end_is_guarded(whole):
    said = "its last events were altered, deleted or added: its head tells of 8, and there are "
    *_, (number, content, chain) = events_of(whole)
    for more in (content, content.replace("4}", "5}").replace('"number":4', '"number":5')):
        rows = [(number + 1, more, linked(chain, more))]
        if more == content:         # a charge does not end twice
            assert "event 8 is not one that this version writes" in refusal(
                whole, ("INSERT INTO events VALUES (?, ?, ?)", rows[0]))
        else:
            assert f"{said}9" in refusal(whole, ("INSERT INTO events VALUES (?, ?, ?)", rows[0]))
    assert f"{said}7" in refusal(whole, ("DELETE FROM events WHERE number = 7",))
    assert "event 0 is missing" not in refusal(whole, ("DELETE FROM events",))


@pytest.mark.parametrize(
    ("change", "said"),
    [
        ("events = 7", "its head tells of 7, and there are 8"),
        ("events = 'x'", "its head tells of 'x', and there are 8"),
        ("chain = ''", "its last events were altered"),
        ("chain = (SELECT chain FROM events WHERE number = 6)", "its last events were altered"),
        ("version = 2", "it is a book of version 2; this sordino keeps version 1"),
        ("version = 0", "it is a book of version 0"),
        ("version = 'x'", "it is a book of version 'x'"),
        ("kind = 'ledger'", "it is not a budget book"),
    ],
)
def test_the_head_is_guarded(whole, change, said):
    assert said in refusal(whole, (f"UPDATE head SET {change}",))


def test_a_book_without_events_or_head_is_none(whole):
    assert "last events were" in refusal(
        whole, ("DELETE FROM events",), ("UPDATE head SET events = 0, chain = ?", ("0" * 64,)))
    assert "it is not a budget book" in refusal(whole, ("DELETE FROM head",))
    for table, said in {"head": "it is not a budget book", "events": "no such table"}.items():
        copy = tampered(whole)
        with sqlite3.connect(copy) as connection:
            connection.execute(f"DROP TABLE {table}")
        connection.close()
        with pytest.raises(InputError, match=said):
            BudgetBook(copy)


@pytest.mark.parametrize("forged", [
    '{"kind":"charge","at":"now"}', "[]", "3", "not json", '{"kind":["charge"]}', '{"at":"now"}',
    '{"kind":"opened","at":"now","cap":{},"rows_per_person":1}',
    '{"kind":"settled","at":"now","number":[3]}', '{"kind":"settled","at":3,"number":5}',
    '{"kind":"split","at":"now","split":{"key":"halves","parts":{"a":0.5,"b":0.5}}}',
    '{"kind":"charge","at":"now","what":"x","plan":"","delta":0.0,"part":[],"costs":[[-1.0,0.0]]}',
    '{"kind":"charge","at":"now","what":"x","plan":"","delta":0.0,"part":[],"costs":[["1",null]]}',
    '{"kind":"charge","at":"now","what":"x","plan":"","delta":2.0,"part":[],"costs":[]}',
    '{"kind":"charge","at":"now","what":"x","plan":"","delta":0.0,"part":["k","a"],"costs":[]}',
    '{"kind":"charge","at":"now","what":"x","plan":"","delta":0.0,"part":4,"costs":[]}',
])
def test_an_event_that_no_book_holds_is_named_though_its_chain_is_whole(whole, forged):
    chain = linked(events_of(whole)[-1][2], forged)
    assert "event 8 is not one that this version writes" in refusal(
        whole, ("INSERT INTO events VALUES (8, ?, ?)", (forged, chain)),
        ("UPDATE head SET events = 9, chain = ?", (chain,)))


def test_files_that_are_no_book(tmp_path):
    contents = {"empty": b"", "text": b"hello\n" * 500, "short": b"SQLite format 3\0"}
    for name, content in contents.items():
        (tmp_path / name).write_bytes(content)
        with pytest.raises(InputError, match="it is not a budget book"):
            BudgetBook(tmp_path / name)
        assert (tmp_path / name).read_bytes() == content
    sqlite3.connect(tmp_path / "other").execute("CREATE TABLE t (x)").connection.close()
    for name in ("other", "."):
        with pytest.raises(InputError, match="it is not a budget book"):
            BudgetBook(tmp_path / name)
    for name in ("none", "no/folder", "nul\0l"):
        with pytest.raises(InputError, match="there is no such book"):
            BudgetBook(tmp_path / name)


def test_a_truncated_book_is_refused(path):
    book = BudgetBook.open(path, CAP)
    for _ in range(40):
        book.charge("x" * 900, zcdp(1e-4), ONE)
    content = path.read_bytes()
    assert len(content) > 40_000
    for left in range(1, len(content), 2_531):
        path.write_bytes(content[:left])
        for use in (lambda: BudgetBook(path), lambda: book.charge("x", zcdp(1e-4), ONE)):
            with pytest.raises(InputError, match="not a budget book|cannot be used|event"):
                use()
    path.write_bytes(content)
    assert book.entries == BudgetBook(path).entries and len(book.entries) == 40


def test_flipped_bytes_are_noticed_or_do_not_matter(whole):
    """One byte changed at a time: whatever is then read is what was written."""
    def read():
        book = BudgetBook(whole)
        return book.cap, book.rows_per_person, book.splits, book.entries

    truth, content = read(), whole.read_bytes()
    rng = random.Random(1)
    noticed = 0
    for _ in range(300):
        place = rng.randrange(len(content))
        whole.write_bytes(content[:place] + bytes([content[place] ^ 1 << rng.randrange(8)])
                          + content[place + 1:])
        try:
            assert read() == truth
        except InputError:
            noticed += 1
    assert noticed > 20         # most of the file is empty room


def test_a_book_that_changes_while_it_is_in_use(whole, tmp_path):
    book = BudgetBook(whole)
    number = len(events_of(whole)) - 1
    copy = tampered(whole)
    book.charge("one more", zcdp(0.001), ONE)
    ahead = BudgetBook(whole)
    for path, said in ((copy, f"event {number + 1} was altered or deleted since it was read"),
                       (BudgetBook.open(tmp_path / "new", CAP).path, "deleted since it was read")):
        shutil.copy(path, whole)        # an older copy; another book
        for use in (lambda: ahead.entries, lambda: ahead.charge("x", zcdp(0.001), ONE)):
            with pytest.raises(InputError, match=said):
                use()
    whole.unlink()
    for use in (lambda: ahead.entries, lambda: ahead.settle(5), lambda: str(ahead)):
        with pytest.raises(InputError, match="there is no such book"):
            use()
    assert not whole.exists()


# --- many at once, killed, full

def test_processes_at_once_lose_and_double_nothing(path):
    """The full trial, 2,000 charges, is the case "book" of the benchmarks."""
    found = crowd_charges(path, processes=8, charges=200)
    assert found["charges"] == 200 and len(found["by_process"]) == 8


def test_killed_processes_leave_a_whole_book(tmp_path):
    """The full trial, 200 kills, is the case "book" of the benchmarks."""
    found = survive_kills(tmp_path, kills=12, longest_life=0.15, seed=2)
    assert found["kills"] == 12 and found["charges"] >= found["releases"]


def test_timings_are_taken_behind_as_many_charges_as_asked(path):
    found = charge_timings(path, timed=3, charges=8)
    assert found["full"]["median_ms"] > 0 and len(BudgetBook(path).entries) == 11


def test_threads_may_share_a_book(book):
    numbers, errors = [], []

    def work():
        try:
            for _ in range(25):
                numbers.append(book.charge("one", zcdp(1e-4), ONE))
                book.settle(numbers[-1])
        except BaseException as error:
            errors.append(error)

    threads = [threading.Thread(target=work) for _ in range(4)]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join()
    assert errors == [] and sorted(numbers) == [entry.number for entry in book.entries]
    assert {entry.state for entry in BudgetBook(book.path).entries} == {"settled"}
    assert len(book.entries) == 100


def test_a_forked_child_may_use_the_book_too(book):
    book.charge("before", zcdp(0.01), ONE)
    said = in_child(lambda: book.charge("in the child", zcdp(0.01), ONE))
    assert book.charge("after", zcdp(0.01), ONE) == int(said) + 1
    assert [entry.what for entry in book.entries] == ["before", "in the child", "after"]


def test_no_connection_stays_open(book):
    book.charge("x", zcdp(0.01), ONE)
    with pytest.raises(InputError):
        book.charge("x", zcdp(100), ONE)
    if not os.path.isdir("/proc/self/fd"):
        pytest.skip("the system does not list open files")
    names = [os.path.realpath(f"/proc/self/fd/{fd}") for fd in os.listdir("/proc/self/fd")]
    assert not any(name.startswith(os.path.realpath(book.path)) for name in names)


def test_a_busy_book_is_waited_for_and_then_named(book, monkeypatch):
    monkeypatch.setattr(book_file, "PATIENCE", 0.05)
    other = sqlite3.connect(book.path, isolation_level=None)
    other.execute("BEGIN IMMEDIATE")
    assert book.entries == []           # others may read on
    with pytest.raises(InputError, match="other processes kept it busy for"):
        book.charge("x", zcdp(0.01), ONE)
    other.execute("COMMIT")
    other.close()
    book.charge("x", zcdp(0.01), ONE)


@pytest.mark.parametrize("umask", [0o000, 0o022, 0o077, 0o777])
def test_the_owner_alone_reads_it_whatever_the_umask(path, monkeypatch, umask):
    modes = []
    write = book_file._write

    def watched(connection, ledger):
        write(connection, ledger)
        if ledger.news:
            modes.append(os.stat(f"{path}-journal").st_mode & 0o777)

    monkeypatch.setattr(book_file, "_write", watched)
    before = os.umask(umask)
    try:
        BudgetBook.open(path, CAP).charge("x", zcdp(0.01), ONE)
    finally:
        os.umask(before)
    assert os.stat(path).st_mode & 0o777 == 0o600 and modes == [0o600, 0o600]


def test_it_is_one_file(book, tmp_path):
    for _ in range(3):
        book.settle(book.charge("x", zcdp(0.01), ONE))
    assert os.listdir(tmp_path) == ["a.book"]


# --- no room, no rights

def full_after(size: int):
    """No file of this process may grow beyond `size` bytes. (Python ignores the signal.)"""
    resource.setrlimit(resource.RLIMIT_FSIZE, (size, size))


def fill(book) -> str:
    while True:
        try:
            book.charge("x" * 900, zcdp(1e-4), ONE)
        except InputError as error:
            return str(error)


def test_files_that_cannot_grow_leave_a_whole_book(book):
    book.charge("before", zcdp(0.01), ONE)
    size = os.path.getsize(book.path) + 5_000

    def work():
        full_after(size)
        said, again = fill(book), BudgetBook(book.path)
        assert (again.entries, again.epsilon_spent) == (book.entries, book.epsilon_spent)
        return said

    said = in_child(work)
    assert said.startswith(f"{book.path}: it cannot be used: ") and "\n" not in said
    assert os.listdir(os.path.dirname(book.path)) == ["a.book"]
    assert BudgetBook(book.path).entries == book.entries and len(book.entries) > 1
    book.charge("after", zcdp(0.01), ONE)


def test_a_book_that_cannot_be_begun_leaves_nothing(path):
    for size in (0, 600, 5_000):
        def work(size=size):
            full_after(size)
            return BudgetBook.open(path, CAP)

        said = in_child(work)
        assert said.startswith(f"InputError: {path}: it cannot be used: ")
        assert os.listdir(path.parent) == []


FULL_DISK = """
import os, sys
import sordino
from sordino.accounting import Cost
place, cap = sys.argv[1], sordino.Guarantee(3.0, 1e-6)
book = sordino.BudgetBook.open(f"{place}/a.book", cap)
cost = [Cost(1e-4, float("inf"))]
def fill(what):
    try:
        while True:
            book.charge(what, cost, cap)
    except sordino.InputError as error:
        return str(error)
rest = os.open(f"{place}/rest", os.O_CREAT | os.O_WRONLY)
try:
    while os.write(rest, bytes(512)):
        pass
except OSError:
    os.close(rest)
assert fill("x" * 900) == f"{place}/a.book: it cannot be used: database or disk is full"
try:
    sordino.BudgetBook.open(f"{place}/b.book", cap)
except sordino.InputError as error:
    assert "disk is full" in str(error), error
assert sorted(os.listdir(place)) == ["a.book", "rest"]
held = len(book.entries)
again = sordino.BudgetBook(f"{place}/a.book")
assert (again.entries, again.epsilon_spent) == (book.entries, book.epsilon_spent)
os.unlink(f"{place}/rest")
assert "disk is full" in fill("y" * 900) and len(book.entries) > held
assert sordino.BudgetBook(f"{place}/a.book").entries == book.entries
print("done")
"""


def test_a_full_disk_leaves_a_whole_book(tmp_path):
    """On a small disk in memory that only a namespace of this test's own sees."""
    mounted = ["unshare", "--mount", "sh", "-c",
               f"mount -t tmpfs -o size=128k none '{tmp_path}' && exec \"$@\"", "sh"]
    if not shutil.which("unshare") or subprocess.run([*mounted, "true"],
                                                     capture_output=True).returncode:
        pytest.skip("a disk in memory cannot be mounted here")
    done = subprocess.run([*mounted, sys.executable, "-c", FULL_DISK, str(tmp_path)],
                          capture_output=True, text=True)
    assert (done.stdout, done.stderr) == ("done\n", "")


def as_nobody(work) -> str:
    """What work() says in a process that may not do everything."""
    def restrained():
        if os.getuid() == 0:
            os.setgid(65534)
            os.setuid(65534)
        return work()

    return in_child(restrained)


@pytest.fixture
def foreign():
    """A book of this process's owner in a folder that others may enter."""
    with tempfile.TemporaryDirectory() as folder:
        os.chmod(folder, 0o755)
        book = BudgetBook.open(f"{folder}/a.book", CAP)
        book.charge("before", zcdp(0.01), ONE)
        yield book
        os.chmod(folder, 0o755)


def nothing_drawn():
    fitting.Bits = None


def test_a_read_only_folder_takes_no_charge(foreign):
    folder = os.path.dirname(foreign.path)
    os.chmod(foreign.path, 0o666)
    os.chmod(folder, 0o555)
    X, y = small_data()
    fitting_plan = plan_fit(FACTS, ONE)

    def fit():
        nothing_drawn()
        return fitting_plan.fit(X, y, book=foreign)

    mine = f"{foreign.path}: it and its folder must be yours to read and write"
    assert as_nobody(lambda: foreign.charge("x", zcdp(0.1), ONE)) == f"InputError: {mine}"
    assert as_nobody(fit) == f"InputError: {mine}"
    assert as_nobody(lambda: len(BudgetBook(foreign.path).entries)) == "1"
    assert as_nobody(lambda: BudgetBook.open(f"{folder}/b", CAP)) == (
        f"InputError: {folder}/b: it cannot be written: Permission denied")
    assert len(foreign.entries) == 1 and os.listdir(folder) == ["a.book"]


def test_a_read_only_file_can_be_shown_but_takes_no_charge(foreign):
    os.chmod(os.path.dirname(foreign.path), 0o777)
    os.chmod(foreign.path, 0o444)
    assert as_nobody(lambda: foreign.charge("x", zcdp(0.1), ONE)) == (
        f"InputError: {foreign.path}: it and its folder must be yours to read and write")
    assert as_nobody(lambda: str(foreign)) == str(foreign)
    assert len(foreign.entries) == 1


def test_a_file_of_another_owner_cannot_be_read(foreign):
    if os.getuid():
        os.chmod(foreign.path, 0)
    assert as_nobody(lambda: BudgetBook(foreign.path)) == (
        f"InputError: {foreign.path}: it and its folder must be yours to read and write")


# --- fits

def small_data():
    rng = np.random.default_rng(2)
    X = sp.csr_array((rng.random((60, 8)) < 0.4).astype(float))
    return X, (rng.random(60) < 0.5).astype(float)


@pytest.fixture
def undrawn(monkeypatch):
    """No bit may be drawn, nor a generator made."""
    monkeypatch.setattr(fitting, "Bits", lambda *_: pytest.fail("bits were asked for"))


def test_a_fit_is_charged_settled_and_told(book, path):
    plan = plan_fit(FACTS, ONE)
    for given in (book, path, str(path)):
        release = plan.fit(*small_data(), book=given)
    entry = book.entries[-1]
    assert entry.plan == plan_hash(release.plan) and entry.state == "settled"
    assert entry.what == "fit of a logistic model by greedy at epsilon 1"
    assert (entry.zcdp, entry.part) == (math.fsum(cost.zcdp for cost in plan.costs), ())
    told = release.spending
    assert told["cap"] == CAP.to_dict() and told["epsilon_spent"] == book.epsilon_spent
    assert [Entry.from_dict(charge) for charge in told["charges"]][:-1] == book.entries[:-1]
    assert told["charges"][-1] == entry.to_dict() | {"state": "reserved"}       # while it ran
    release.save(path.with_suffix(".json"))
    assert load_release(path.with_suffix(".json")).spending == told


def test_the_charge_is_on_the_disk_before_anything_is_drawn(book, path, monkeypatch):
    class Stop(Exception):
        pass

    def drawn(seed):
        assert [entry.state for entry in BudgetBook(path).entries] == ["reserved"]
        raise Stop

    monkeypatch.setattr(fitting, "Bits", drawn)
    with pytest.raises(Stop):
        plan_fit(FACTS, ONE).fit(*small_data(), book=book)
    assert [entry.state for entry in book.entries] == ["abandoned"]
    assert book.epsilon_spent == epsilon_of_zcdp(plan_fit(FACTS, ONE).zcdp, CAP.delta)


@pytest.mark.parametrize("what", ["laying out the table", "fitting"])
def test_an_interrupted_fit_is_abandoned_and_counts(book, what):
    def interrupt(fraction, doing):
        if doing == what:
            raise KeyboardInterrupt

    with pytest.raises(KeyboardInterrupt):
        plan_fit(FACTS, ONE).fit(*small_data(), book=book, progress=interrupt)
    assert [entry.state for entry in book.entries] == ["abandoned"]
    assert book.epsilon_spent == epsilon_of_zcdp(plan_fit(FACTS, ONE).zcdp, CAP.delta)


def test_an_interrupt_before_the_charge_costs_nothing(book, undrawn):
    def interrupt(fraction, doing):
        assert doing == "checking the table"
        raise KeyboardInterrupt

    with pytest.raises(KeyboardInterrupt):
        plan_fit(FACTS, ONE).fit(*small_data(), book=book, progress=interrupt)
    assert book.entries == []


def test_a_process_that_dies_leaves_its_charge_reserved(book):
    def die(fraction, doing):
        if doing == "fitting":
            os._exit(9)

    plan = plan_fit(FACTS, ONE)
    assert in_child(lambda: plan.fit(*small_data(), book=book, progress=die)) == ""
    assert [entry.state for entry in book.entries] == ["reserved"]
    assert book.epsilon_spent == epsilon_of_zcdp(plan.zcdp, book.cap.delta)


@pytest.mark.parametrize("trouble", [InputError("the disk is full"), OSError("no such disk")])
def test_the_error_of_a_run_wins_over_that_of_noting_its_end(book, monkeypatch, trouble):
    def fail(*_):
        raise trouble

    def interrupt(fraction, doing):
        if doing == "fitting":
            raise KeyboardInterrupt

    monkeypatch.setattr(BudgetBook, "abandon", fail)
    with pytest.raises(KeyboardInterrupt):
        plan_fit(FACTS, ONE).fit(*small_data(), book=book, progress=interrupt)
    assert [entry.state for entry in book.entries] == ["reserved"]


def test_a_release_is_not_lost_when_its_end_cannot_be_noted(book, monkeypatch):
    def fail(*_):
        raise InputError("a.book: the disk is full")

    monkeypatch.setattr(BudgetBook, "settle", fail)
    with pytest.warns(UserWarning, match="charge 3 stays reserved in the book, and counts all the "
                                         "same: a.book: the disk is full"):
        release = plan_fit(FACTS, ONE).fit(*small_data(), book=book)
    assert len(release.features) and [entry.state for entry in book.entries] == ["reserved"]


def test_a_refused_charge_draws_nothing(book, undrawn):
    book.charge("before", zcdp(zcdp_of_epsilon(2.9, 1e-6)), Guarantee(2.9, 1e-6))
    left = book.largest_epsilon(1e-6)
    with pytest.raises(BudgetError) as refused:
        plan_fit(FACTS, ONE).fit(*small_data(), book=book)
    assert str(refused.value).startswith(
        f"{book.path}: with fit of a logistic model by greedy at epsilon 1, epsilon would come to ")
    assert str(refused.value).endswith(
        f", above the cap of 3 at delta 1e-06; a plan of at most epsilon {left:g} at delta 1e-06 "
        "would fit")
    assert len(book.entries) == 1


def test_wrong_data_are_never_charged(book, undrawn):
    X, y = small_data()
    plan = plan_fit(FACTS, ONE)
    for wrong in ((X[:, :7], y), (X, y[1:]), (X, y + 1), (X * np.nan, y)):
        with pytest.raises(InputError):
            plan.fit(*wrong, book=book)
    with pytest.raises(InputError, match="persons has shape"):
        plan.fit(X, y, persons=[1, 2], book=book)
    assert book.entries == []


def test_another_neighbouring_relation_is_refused(book, undrawn):
    plan = plan_fit(FACTS, Guarantee(1.0, 1e-6, "replace-one"))
    with pytest.raises(InputError, match="kept under 'add-remove', the plan under 'replace-one'"):
        plan.fit(*small_data(), book=book)
    assert book.entries == []


def test_a_rehearsal_never_charges(book, path):
    X, y = small_data()
    plan = plan_fit(FACTS, Guarantee(1e3, 1e-6))        # far more than the cap
    before = path.read_bytes()
    for account in (book, path, book.part("halves", "left")):
        release = plan.fit(X, y, book=account, persons=range(60), rehearsal_seed=1)
        assert release.rehearsal and release.spending is None
    assert path.read_bytes() == before and book.epsilon_spent == 0


def test_persons_must_be_protected_with_as_many_rows_as_they_own(tmp_path, monkeypatch):
    X, y = small_data()
    book = BudgetBook.open(tmp_path / "two.book", CAP, rows_per_person=2)
    plan, wide = (plan_fit(PublicFacts(features=8, rows=60, rows_per_person=r), ONE)
                  for r in (1, 2))
    with monkeypatch.context() as patched:
        patched.setattr(fitting, "Bits", None)
        with pytest.raises(InputError, match="two.book: a person may own 2 rows here, more than "
                                             "the 1 that are protected"):
            plan.fit(X, y, book=book)
    assert book.entries == []
    wide.fit(X, y, book=book)
    plan.fit(X, y, book=book, persons=[i // 2 for i in range(60)])
    assert len(book.entries) == 2


def test_a_book_that_is_gone_by_the_time_of_the_charge(book, path, undrawn):
    path.unlink()
    with pytest.raises(InputError, match="a.book: there is no such book"):
        plan_fit(FACTS, ONE).fit(*small_data(), book=book)
