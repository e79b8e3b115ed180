"""Splits by a keyed hash, and fits that keep to the rows of one part."""

from __future__ import annotations

import fractions
import hashlib
import itertools

import numpy as np
import pytest
import scipy.sparse as sp
from scipy.stats import chi2

from sordino import BudgetBook, Guarantee, InputError, PublicFacts, Split, plan_fit
from sordino._core.bits import Bits
from sordino.accounting import epsilon_of_zcdp
from sordino.intake import laid_out, taken_in
from sordino.parts import MOST_PARTS, _hash_under

KEY = "harvest 2031"
SHARES = {"train": 0.7, "test": 0.2, "spare": 0.1}
IDS = [f"p{i}" for i in range(40_000)]

# Frozen: were they ever to change, persons would move between parts that were charged apart.
HASHES = {
    7: 7293258407534010336,
    -1: 4944131513706213931,
    0: 2832541416548854091,
    2**70: 13652513585472757409,
    "7": 3485764228045537127,
    "Ünï": 2135658896051809569,
    b"7": 8887974080620361480,
    "": 3902918594435661566,
}


@pytest.fixture
def split():
    return Split(KEY, SHARES)


# --- the rule

@pytest.mark.parametrize("person", HASHES, ids=repr)
def test_the_hash_never_changes(person):
    kind, text = {int: (b"number ", str(person).encode()), bytes: (b"bytes ", person)}.get(
        type(person), (b"text ", str(person).encode()))
    words = hashlib.blake2b(kind + text, key=hashlib.sha256(KEY.encode()).digest(), digest_size=8)
    assert int.from_bytes(words.digest(), "big") == HASHES[person] == _hash_under(KEY)(person)


def test_edges_and_parts_never_change(split):
    assert split.edges == [1844674407370955264, 5534023222112866304, 2**64]
    assert list(split.parts) == ["spare", "test", "train"]      # in the order of the names
    assert list(split.parts_of([7, 8, 9, "7", "p1", "p2", b"7"])) == [
        "train", "train", "train", "test", "spare", "test", "train"]


def test_a_person_is_in_the_first_part_that_ends_above_their_hash(split):
    hash_of = _hash_under(KEY)
    for person in IDS[:500]:
        (part,) = split.parts_of([person])
        ends = dict(zip(split.parts, split.edges))
        assert part == next(name for name, end in ends.items() if hash_of(person) < end)


def test_a_part_ends_below_its_edge(split, monkeypatch):
    monkeypatch.setattr("sordino.parts._hash_under", lambda key: int)
    first, second, last = split.edges
    assert list(split.parts_of([0, first - 1, first, second - 1, second, last - 1])) == [
        "spare", "spare", "test", "test", "train", "train"]


@pytest.mark.parametrize(
    "persons",
    [
        [7, np.int64(7), np.uint8(7), 7.0, np.float32(7), fractions.Fraction(14, 2)],
        [1, True, np.bool_(True), 1.0],
        [0, False, 0.0, -0.0],
        [2**53, float(2**53)],
        ["a", np.str_("a")],
        [b"a", np.bytes_(b"a")],
    ],
    ids=repr,
)
def test_equal_ids_are_in_the_same_part(persons):
    assert len(set(map(_hash_under(KEY), persons))) == 1
    for key in map(str, range(20)):
        assert len(set(Split(key, SHARES).parts_of(persons))) == 1


@pytest.mark.parametrize(
    "persons", [[7, "7", b"7"], [2**53, 2**53 + 1, 2**53 + 2], ["é", "e\u0301"]])
def test_different_ids_have_different_hashes(persons):
    assert len(set(map(_hash_under(KEY), persons))) == len(persons)


def test_arrays_lists_and_other_sequences_are_alike(split):
    ids = list(range(300))
    expected = list(split.parts_of(ids))
    for form in (np.array(ids), np.array(ids, np.uint16), np.array(ids, object), range(300),
                 tuple(ids), np.array(ids, float)):
        assert list(split.parts_of(form)) == expected
    names = [str(i) for i in ids]
    assert list(split.parts_of(np.array(names))) == list(split.parts_of(names)) != expected


def test_adding_a_person_moves_no_other(split):
    before = split.parts_of(IDS[:1000])
    assert (split.parts_of(["someone", *IDS[:1000]])[1:] == before).all()
    assert (split.parts_of(IDS[:1000][::-1])[::-1] == before).all()
    assert (np.delete(before, 17) == split.parts_of(np.delete(np.array(IDS[:1000]), 17))).all()


def test_rows_of_the_parts_are_all_rows_once(split):
    rows = [split.rows_of(part, IDS) for part in SHARES]
    assert all(r.dtype == bool and r.shape == (len(IDS),) for r in rows)
    assert (np.sum(rows, axis=0) == 1).all()
    assert (split.rows_of("test", IDS) == (split.parts_of(IDS) == "test")).all()
    assert split.rows_of("test", []).shape == (0,)


@pytest.mark.parametrize("shares", [SHARES, {"a": 0.5, "b": 0.5}, {"a": 0.01, "b": 0.99},
                                    {str(k): 1 / 16 for k in range(16)}], ids=len)
def test_shares_hold_on_average(shares):
    """Chi-square. The ids and keys are fixed, so this passes or fails for ever; of random keys
    less than one in 1e8 would fail."""
    for key in ("a", "b", "c"):
        split = Split(key, shares)
        found = split.parts_of(IDS)
        seen = np.array([(found == name).sum() for name in shares])
        expected = len(IDS) * np.array(list(shares.values()))
        assert ((seen - expected) ** 2 / expected).sum() < chi2.isf(1e-9, len(shares) - 1)


def test_splits_of_two_keys_are_independent(split):
    """Chi-square on their nine combinations; of random keys one in 1e9 would fail."""
    first, second = split.parts_of(IDS), Split("another", SHARES).parts_of(IDS)
    statistic = 0.0
    for a, b in itertools.product(SHARES, repeat=2):
        expected = len(IDS) * SHARES[a] * SHARES[b]
        statistic += (((first == a) & (second == b)).sum() - expected) ** 2 / expected
    assert statistic < chi2.isf(1e-9, 8)


# --- what a split is

def test_how_the_parts_are_listed_does_not_matter(split):
    turned = Split(KEY, dict(reversed(SHARES.items())))
    assert turned == split and turned.to_dict() == split.to_dict()
    assert (turned.parts_of(IDS[:500]) == split.parts_of(IDS[:500])).all()
    assert Split.from_dict(split.to_dict()) == split


@pytest.mark.parametrize(
    ("key", "parts", "said"),
    [
        ("", SHARES, "the key of a split must be a text"),
        (3, SHARES, "the key of a split must be a text"),
        ("a\nb", SHARES, "the key of a split must be a text"),
        ("k" * 101, SHARES, "the key of a split must be a text"),
        (KEY, {"a": 1.0}, "between 2 and 1,000"),
        (KEY, [("a", 0.5), ("b", 0.5)], "a split needs parts"),
        (KEY, {str(k): 1 / 1001 for k in range(MOST_PARTS + 1)}, "between 2 and 1,000"),
        (KEY, {"a": 0.5, "": 0.5}, "the name of a part must be a text"),
        (KEY, {"a": 0.5, 3: 0.5}, "the name of a part must be a text"),
        (KEY, {"a": 0.5, "b": 0.4}, "shares add up to 0.9, not to 1"),
        (KEY, {"a": 0.0, "b": 1.0}, "the share of part 'a' must lie between 0 and 1, not 0.0"),
        (KEY, {"a": -0.5, "b": 1.5}, "must lie between 0 and 1, not -0.5"),
        (KEY, {"a": float("nan"), "b": 0.5}, "must lie between 0 and 1, not nan"),
        (KEY, {"a": "0.5", "b": 0.5}, "must lie between 0 and 1, not '0.5'"),
    ],
)
def test_what_is_no_split_is_refused(key, parts, said):
    with pytest.raises(InputError, match=said):
        Split(key, parts)


@pytest.mark.parametrize("person", [1.5, float("nan"), float("inf"), None, (1, 2), 1j])
def test_what_cannot_be_an_id_here_is_refused(split, person):
    with pytest.raises(InputError, match="cannot be an id here"):
        split.parts_of([1, person])


def test_a_part_that_is_not_there_is_named(split):
    with pytest.raises(InputError, match="no part 'tset'; there are spare, test, train"):
        split.rows_of("tset", IDS)


# --- fits of a part

N, D = 240, 12
FACTS = dict(features=D, rows=100)


@pytest.fixture
def data():
    """Three rows for each of 80 persons."""
    rng = np.random.default_rng(5)
    X = sp.csr_array((rng.random((N, D)) < 0.3) * rng.random((N, D)))
    y = (rng.random(N) < 0.2 + 0.6 * (X[:, [3]].toarray().ravel() > 0)).astype(float)
    return X, y, [f"person {i // 3}" for i in range(N)]


@pytest.fixture
def book(tmp_path, split):
    book = BudgetBook.open(tmp_path / "a.book", Guarantee(1e6, 1e-6), rows_per_person=3)
    book.add_split(split)
    return book


def table_of(plan, X, y, persons, account):
    _, table = laid_out(plan, taken_in(plan, X, y, persons, lambda part: None, account),
                        Bits(1), lambda part: None)
    return table


@pytest.mark.parametrize("part", SHARES)
def test_the_table_of_a_part_is_that_of_its_rows_picked_by_hand(data, book, split, part):
    X, y, persons = data
    plan = plan_fit(PublicFacts(**FACTS, rows_per_person=3), Guarantee(2.0, 1e-6))
    rows = split.rows_of(part, persons)
    found = table_of(plan, X, y, persons, book.part(KEY, part))
    expected = table_of(plan, X[rows], y[rows], None, None)
    assert found.n_rows == rows.sum() > 0
    np.testing.assert_array_equal(found.labels, expected.labels)
    for name in ("offsets", "rows", "values"):
        np.testing.assert_array_equal(getattr(found.columns, name),
                                      getattr(expected.columns, name))


def test_a_fit_of_a_part_is_that_of_its_rows_picked_by_hand(data, book, split, monkeypatch):
    """The same rehearsal, bit for bit, once both draw as many keys for surplus rows: none."""
    monkeypatch.setattr("sordino.intake.kept_rows", lambda codes, most, keys: np.full(N, True))
    array = Bits.array
    X, y, persons = data
    rows = split.rows_of("train", persons)
    plan = plan_fit(PublicFacts(**FACTS, rows_per_person=3), Guarantee(20.0, 1e-6), picks=3)

    class KeylessBits(Bits):
        def array(self, n, dtype):
            return np.zeros(n, dtype) if dtype == np.uint64 else array(self, n, dtype)

    monkeypatch.setattr("sordino.fit.Bits", KeylessBits)
    of_part = plan.fit(X, y, persons=persons, book=book.part(KEY, "train"), rehearsal_seed=4)
    by_hand = plan.fit(X[rows], y[rows], rehearsal_seed=4)
    of_all = plan.fit(X, y, rehearsal_seed=4)
    assert of_part.features.tolist() == by_hand.features.tolist()
    assert of_part.coefficients.tolist() == by_hand.coefficients.tolist()
    assert of_part.intercept == by_hand.intercept != of_all.intercept
    assert book.entries == []


def test_surplus_rows_are_dropped_within_a_part(data, book, split):
    X, y, persons = data
    plan = plan_fit(PublicFacts(**FACTS, rows_per_person=2), Guarantee(2.0, 1e-6))
    table = table_of(plan, X, y, persons, book.part(KEY, "train"))
    assert table.n_rows == split.rows_of("train", persons).sum() * 2 // 3


def test_a_part_needs_persons_that_it_can_split(data, book):
    X, y, _ = data
    plan = plan_fit(PublicFacts(**FACTS, rows_per_person=3), Guarantee(2.0, 1e-6))
    account = book.part(KEY, "test")
    with pytest.raises(InputError, match="a part of the data is charged: give persons="):
        plan.fit(X, y, book=account)
    with pytest.raises(InputError, match="1.5 cannot be an id here"):
        plan.fit(X, y, persons=[1.5] * N, book=account)
    assert book.entries == []


def test_a_fit_charges_its_part_alone(data, book):
    X, y, persons = data
    plan = plan_fit(PublicFacts(**FACTS, rows_per_person=3), Guarantee(2.0, 1e-6))
    release = plan.fit(X, y, persons=persons, book=book.part(KEY, "train"))
    plan.fit(X, y, persons=persons, book=book.part(KEY, "test"))
    assert [entry.part for entry in book.entries] == [(KEY, "train"), (KEY, "test")]
    assert book.epsilon_spent == epsilon_of_zcdp(plan.zcdp, book.cap.delta)
    assert release.spending["charges"][0]["part"] == [KEY, "train"]
