"""Persons: one code per person whatever the ids are, and a bounded share of rows of each."""

from __future__ import annotations

import _thread
import array
import collections
import datetime
import decimal
import fractions
import functools
import operator
import tracemalloc
import uuid

import numpy as np
import pytest
import scipy.sparse as sp
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.stats import chi2
from test_table import LEVELS, Case, cases, facts_of, labels_of

from sordino._core import table as kernel
from sordino._core.bits import Bits
from sordino.errors import InputError
from sordino.persons import codes_of, kept_rows
from sordino.table import build_table

P_FAIL = 1e-8       # of each chi-square test; its seed is fixed

repeatable = settings(max_examples=200, deadline=None, derandomize=True, database=None)

NUMBERING = [2, 0, 1, 0, 2, 2, 3]       # who owns the rows of the samples below
DAY = datetime.date(2020, 1, 1)


def same_partition(codes: np.ndarray, owners) -> bool:
    """Whether codes are equal exactly where owners are."""
    pairs = set(zip(codes.tolist(), owners))
    return len(pairs) == len({a for a, _ in pairs}) == len({b for _, b in pairs})


def owned(names) -> list:
    return [names[owner] for owner in NUMBERING]


class Series:
    """What a column of a table library looks like from here."""

    def __init__(self, values):
        self.values = values

    def __array__(self, dtype=None, copy=None):
        return np.asarray(self.values, dtype=dtype)


DATES = np.array(["2020-01-01", "1999-12-31", "2020-01-02", "2261-01-01"], dtype="M8[D]")
BYTES = np.array([b"a", b"ab", b"b", b""])

# What four persons may be called.
NAMES = {
    "int8": np.int8([5, -3, 0, 127]),
    "int64": np.int64([2**62, 2**62 + 1, -(2**63), 7]),
    "uint64": np.uint64([2**64 - 1, 2**64 - 2, 0, 7]),
    "float32": np.float32([0.1, 0.2, np.inf, -np.inf]),
    "float64": np.array([0.1, np.nextafter(0.1, 1), 1e300, -0.0]),
    "longdouble": np.longdouble([1, 2, 3, 4]) / 3,
    "complex": np.array([1j, -1j, 1, 0]),
    "bool, twice": np.array([True, False, True, False]),
    "text": np.array(["a", "a ", " a", "A"]),
    "long text": np.array(["x" * 99, "x" * 98, "", "y"]),
    "bytes": BYTES,
    "big-endian": np.array([5, 1280, 7, 8], dtype=">i4"),
    "days": DATES,
    "nanoseconds": DATES.astype("M8[ns]") + np.timedelta64(1, "ns"),
    "durations": DATES - DATES[0],
    "objects": np.array(["a", 1, 2.5, (1, "b")], dtype=object),
    "records": np.array([(1, "a"), (1, "b"), (2, "a"), (0, "")], dtype="i4,U3"),
    "variable text": np.array(["a", "b", "ab", ""], dtype=np.dtypes.StringDType()),
}
LISTS = {
    "ints": [1, 2, 3, 10**40],
    "texts": ["a", "a ", "b", ""],
    "tuples": [(1, "x"), (1, "y"), (2, "x"), ()],
    "mixed": [1, "1", (1,), b"1"],
    "dates": [DAY, DAY + datetime.timedelta(1), datetime.datetime(2020, 1, 1), "2020-01-01"],
    "numpy dates": list(DATES),
    "numpy floats": list(NAMES["float32"]),
    "other types": [uuid.UUID(int=5), frozenset([1, 2]), decimal.Decimal("0.1"), range(3)],
}


@pytest.mark.parametrize("kind", NAMES)
@pytest.mark.parametrize("form", ["array", "series", "list", "gaps", "read-only"])
def test_ids_of_any_type(kind, form):
    ids = NAMES[kind][NUMBERING]
    ids.flags.writeable = form != "read-only"
    listed = ids.tolist() if kind == "records" else list(ids)       # of tuples, or numpy's scalars
    forms = {"series": Series(ids), "list": listed, "gaps": np.repeat(ids, 2)[::2]}
    codes = codes_of(forms.get(form, ids), len(NUMBERING))
    assert codes.dtype == np.int64 and codes.shape == (len(NUMBERING),)
    owners = [owner % 2 for owner in NUMBERING] if kind == "bool, twice" else NUMBERING
    assert same_partition(codes, owners)
    assert sorted(set(codes.tolist())) == list(range(len(set(owners))))


@pytest.mark.parametrize("kind", LISTS)
@pytest.mark.parametrize("form", [list, tuple, collections.deque])
def test_lists_of_ids(kind, form):
    assert same_partition(codes_of(form(owned(LISTS[kind])), len(NUMBERING)), NUMBERING)


@pytest.mark.parametrize("persons", [range(7), array.array("i", range(7)), np.arange(7)[::-1]])
def test_other_sequences(persons):
    assert same_partition(codes_of(persons, 7), range(7))


@pytest.mark.parametrize(
    "persons",
    [
        [1, 1.0, True, np.int8(1), np.bool_(True), decimal.Decimal(1), fractions.Fraction(1)],
        np.array([0.0, -0.0]),
        [0.0, -0.0, 0, False],
        np.array([0.0, -0.0, 0, False], dtype=object),
        np.array([0j, -0.0 - 0.0j]),
        ["a", np.str_("a")],
        [b"a", np.bytes_(b"a")],
        [(1, 2), (1.0, True + 1)],
        np.array(["a", "a\0\0"]),                   # numpy pads texts with zeros
        np.array([b"a", b"a\0"], dtype="S5"),
        [2**53, float(2**53), np.float64(2**53)],
        [DAY, datetime.date(2020, 1, 1)],
    ],
    ids=repr,
)
def test_what_python_calls_equal_is_one_person(persons):
    assert codes_of(persons, len(persons)).tolist() == [0] * len(persons)


@pytest.mark.parametrize(
    "persons",
    [
        ["1", "1 ", 1, (1,), b"1", "１"],
        [2**53, 2**53 + 1],                         # one float64, but whole numbers here
        [2**53 + 1, float(2**53)],
        ["é", "e\u0301"],                           # the same on paper; texts are not normalised
        np.array([2**63, 2**63 + 1], dtype=np.uint64),
    ],
    ids=repr,
)
def test_what_python_calls_different_is_several(persons):
    assert same_partition(codes_of(persons, len(persons)), range(len(persons)))


class Unsaid:
    """A missing value that answers neither yes nor no."""

    def __eq__(self, other):
        return self

    __ne__ = __eq__
    __hash__ = object.__hash__

    def __bool__(self):
        raise TypeError("neither")


NAN = float("nan")

MISSING = {
    "NaN": np.array([0, 1, NAN, NAN]),
    "complex NaN": np.array([0, 1, complex(0, NAN), 0]),
    "NaT": np.array(["2020", "2021", "NaT", "NaT"], dtype="M8[D]"),
    "NaT of a duration": np.array([1, 2, "NaT", 3], dtype="m8[s]"),
    "None": ["a", "b", None, None],
    "None among objects": np.array([1, 2, None, 3], dtype=object),
    "NaN in a list": [1, 2, NAN, NAN],
    "several NaN": [1, 2, float("nan"), np.nan],
    "NaN among texts": np.array(["a", "b", NAN, "c"], dtype=object),
    "NaT in a list": [1, 2, np.datetime64("NaT"), 3],
    "decimal NaN": [1, 2, decimal.Decimal("NaN"), 3],
    "NaN in a tuple": [(1, 1), (1, 2), (1, NAN), (1, NAN)],
    "None far down a tuple": [(1, 1), (1, 2), (1, (2, (None,))), 3],
    "masked": np.ma.array([1, 2, 2, 4], mask=[0, 0, 1, 1]),
    "masked text": np.ma.array(["a", "b", "c", "d"], mask=[0, 0, 1, 0]),
    "a masked part": np.ma.array([(1, 1), (1, 2), (3, 4), (5, 6)], dtype="i4,i4",
                                 mask=[(0, 0), (0, 0), (0, 1), (0, 0)]),
    "neither yes nor no": [1, 2, Unsaid(), 3],
    "missing text": np.array(["a", "b", NAN, NAN], dtype=np.dtypes.StringDType(na_object=NAN)),
    "in a series": Series(np.array([1, 2, NAN, 3])),
}


@pytest.mark.parametrize("what", MISSING)
def test_missing_ids_are_refused(what):
    with pytest.raises(InputError, match="^id of row 2 is missing: every row needs the id of its"):
        codes_of(MISSING[what], 4)


def test_a_mask_that_hides_nothing():
    ids = np.ma.array([3, 3, 5], mask=[0, 0, 0])
    assert same_partition(codes_of(ids, 3), [0, 0, 1])


REFUSED = {
    "too few": (np.arange(3), r"persons has shape \(3,\); with 4 rows it must be \(4,\)"),
    "too many": (list(range(5)), r"persons has shape \(5,\); with 4 rows"),
    "none": ([], r"persons has shape \(0,\)"),
    "2-D": (np.zeros((4, 2)), r"shape \(4, 2\).*one id per row \(an id of several parts is a tup"),
    "a column": (np.zeros((4, 1)), r"shape \(4, 1\)"),
    "2-D, masked": (np.ma.zeros((4, 2)), r"shape \(4, 2\)"),
    "2-D series": (Series(np.zeros((4, 2))), r"shape \(4, 2\)"),
    "a text": ("abcd", r"shape \(\)"),
    "bytes": (b"abcd", r"shape \(\)"),
    "a number": (7, r"shape \(\)"),
    "a set": ({1, 2, 3, 4}, r"shape \(\)"),
    "an iterator": (iter([1, 2, 3, 4]), r"shape \(\)"),
    "lists": ([[1], [2], [3], [4]], "id of row 0 is of type list, which cannot be compared"),
    "an array among texts": (["a", "b", np.arange(2), "c"], "id of row 2 is of type ndarray"),
    "a list in a tuple": ([(1,), (2, [3]), (4,), (5,)], "id of row 1 is of type tuple"),
    "a set among objects": (np.array([1, {2}, 3, 4], dtype=object), "id of row 1 is of type set"),
    "the mask itself": ([1, 2, 3, np.ma.masked], "id of row 3 is of type MaskedConstant"),
    "short and long floats": ([np.float32(0.1), 0.1, 2, 3], "persons mixes float32 with ids of an"),
    "numpy dates and dates": ([DATES[0], DAY, DAY, DAY], "persons mixes datetime64 with ids of"),
    "dates of two units": (
        [DATES[0], DATES[1].astype("M8[ns]"), DATES[0], DATES[0]], "mixes datetime64 with"
    ),
}


@pytest.mark.parametrize("what", REFUSED)
def test_what_is_refused(what):
    persons, pattern = REFUSED[what]
    with pytest.raises(InputError, match=pattern) as caught:
        codes_of(persons, 4)
    assert "\n" not in str(caught.value)


def test_a_series_that_cannot_be_read():
    class Broken:
        def __array__(self, dtype=None, copy=None):
            raise ValueError("no such column")

    with pytest.raises(InputError, match="persons cannot be read as an array: no such column"):
        codes_of(Broken(), 4)


def test_the_callers_ids_are_not_changed():
    for ids in (np.array([3.0, -0.0, 1]), ["b", "a", "b"], np.array(["b", None], dtype=object)[:1]):
        before = list(ids)
        codes_of(ids, len(ids))
        assert list(ids) == before and (not isinstance(ids, np.ndarray) or ids.ndim == 1)


ids_of_any_type = st.one_of(
    st.integers(-3, 3), st.booleans(), st.sampled_from([-1.0, 0.0, -0.0, 1.0, 0.5]),
    st.sampled_from(["a", "b", "1", ""]), st.tuples(st.integers(0, 1), st.sampled_from("ab")),
    st.sampled_from([decimal.Decimal(1), fractions.Fraction(1, 2), b"a", 2 + 0j]),
)


@repeatable
@given(st.lists(ids_of_any_type, max_size=12), st.booleans())
def test_codes_are_equal_exactly_where_ids_are(ids, as_objects):
    persons = ids
    if as_objects:
        persons = np.empty(len(ids), dtype=object)
        persons[:] = ids
    codes = codes_of(persons, len(ids))
    for i, one in enumerate(ids):
        for j, other in enumerate(ids):
            assert (codes[i] == codes[j]) == (one == other)


# --- which rows are kept

def kept_by_definition(codes, most: int, keys) -> list[bool]:
    """Row by row: kept if fewer than `most` rows of the same person come before it."""
    places = list(zip(keys.tolist(), range(len(keys))))
    return [
        sum(codes[j] == codes[i] and places[j] < places[i] for j in range(len(codes))) < most
        for i in range(len(codes))
    ]


assignments = st.lists(
    st.tuples(st.integers(-2, 5), st.one_of(st.integers(0, 2), st.integers(0, 2**64 - 1))),
    min_size=1, max_size=25,
)
mosts = st.sampled_from([1, 2, 3, 10, 10**12])


def columns_of(rows) -> tuple[np.ndarray, np.ndarray]:
    codes, keys = zip(*rows)
    return np.array(codes, dtype=np.int64), np.array(keys, dtype=np.uint64)


@repeatable
@given(assignments, mosts)
def test_kept_rows_are_those_of_the_definition(rows, most):
    codes, keys = columns_of(rows)
    kept = kept_rows(codes, most, keys)
    assert kept.dtype == bool and kept.tolist() == kept_by_definition(codes, most, keys)
    for person in set(codes.tolist()):
        owns = int((codes == person).sum())
        assert (kept & (codes == person)).sum() == min(owns, most)


@repeatable
@given(assignments, mosts, assignments, st.integers(0, 2**32))
def test_a_person_more_changes_nothing_for_the_others(rows, most, own, seed):
    """The new person's rows, any number of them with any keys, lie anywhere in the table."""
    rng = np.random.default_rng(seed)
    own = [(99, key) for _, key in own]
    place = rng.permutation(len(rows) + len(own)) < len(rows)
    olds, news = iter(rows), iter(own)
    together = [next(olds) if old else next(news) for old in place]
    kept = kept_rows(*_with_most(columns_of(together), most))
    alone = kept_rows(*_with_most(columns_of(rows), most))
    assert (kept[place] == alone).all()
    assert kept[~place].sum() == min(len(own), most)


def _with_most(columns, most: int) -> tuple:
    return columns[0], most, columns[1]


@pytest.mark.parametrize("most", [1, 3, 50, 5_000])
@pytest.mark.parametrize("owners", ["one owns all", "one row each", "scattered", "in blocks"])
def test_nobody_keeps_more_than_promised(owners, most):
    n = 5_000
    persons = {
        "one owns all": ["everything"] * n,
        "one row each": list(range(n)),
        "scattered": [i * i % 97 for i in range(n)],
        "in blocks": [i // 123 for i in range(n)],
    }[owners]
    codes = codes_of(persons, n)
    for keys in (Bits(1).array(n, np.uint64), np.zeros(n, dtype=np.uint64)):
        kept = kept_rows(codes, most, keys)
        assert (np.bincount(codes[kept]) == np.minimum(np.bincount(codes), most)).all()


def test_equal_keys_keep_the_first_rows():
    keys = np.zeros(6, dtype=np.uint64)
    kept = kept_rows(np.array([1, 0, 1, 1, 0, 2]), 2, keys)
    assert kept.tolist() == [True, True, True, False, True, True]


def test_keys_are_compared_as_whole_numbers_to_the_last_bit():
    """As floats these would tie, and the first row would be kept."""
    keys = np.array([2**64 - 1, 2**64 - 2], dtype=np.uint64)
    assert kept_rows(np.zeros(2, dtype=np.int64), 1, keys).tolist() == [False, True]


def test_every_choice_of_rows_is_as_likely():
    """Chi-square over the 10 pairs of 5 rows, 20,000 persons with two others' rows in between."""
    n = 20_000
    codes = np.repeat(np.arange(n), 5)
    codes = codes[np.random.default_rng(3).permutation(len(codes))]
    kept = kept_rows(codes, 2, Bits(4).array(len(codes), np.uint64))
    by_person = kept[np.argsort(codes, kind="stable")].reshape(n, 5)
    assert (by_person.sum(axis=1) == 2).all()
    counts = np.bincount(by_person @ (1 << np.arange(5)), minlength=32)
    counts = counts[[k for k in range(32) if k.bit_count() == 2]]
    assert counts.sum() == n
    assert ((counts - n / 10) ** 2 / (n / 10)).sum() < chi2.isf(P_FAIL, 9)


# --- a table kept to some of its rows

def opened(table) -> tuple:
    """What a table means: entries in quantisation steps, whatever the unit they are stored in."""
    columns = table.columns
    values = np.int64(1) if columns.values is None else columns.values.astype(np.int64)
    steps = np.broadcast_to(values * table.unit, len(columns.rows))
    return (
        columns.n_rows, columns.offsets.tolist(), columns.rows.tolist(), steps.tolist(),
        table.labels.tolist(), table.levels,
    )


def kept_to(table, kept):
    """table.keeping(kept), checked to be whole and to lie in the table's own memory."""
    arrays = [table.columns.offsets, table.columns.rows, table.columns.values]
    smaller = table.keeping(kept)
    smaller.columns._check()
    for mine, theirs in zip(arrays, (smaller.columns.offsets, smaller.columns.rows,
                                     smaller.columns.values)):
        assert (mine is None) == (theirs is None)
        assert mine is None or len(theirs) == 0 or np.shares_memory(mine, theirs)
    return smaller


@repeatable
@given(cases, st.floats(0, 1), st.integers(0, 2**32))
def test_keeping_rows_is_building_the_table_of_those_rows(case, share, seed):
    X, facts = case.draw()
    y = labels_of(case.n_rows)
    rng = np.random.default_rng(seed)
    kept = rng.random(case.n_rows) < share
    kept[rng.integers(case.n_rows)] = True
    whole = build_table(X, y, facts, LEVELS)
    smaller = kept_to(whole, kept)
    expected = build_table(X[kept], y[kept], facts, LEVELS)
    assert opened(smaller) == opened(expected)
    assert smaller.unit == whole.unit
    assert expected.unit % smaller.unit == 0 or expected.columns.nnz == 0
    values = smaller.columns.values
    assert smaller.largest == (1 if values is None else abs(values).max(initial=1))


@pytest.mark.parametrize("pool, stored", [("0/1", None), ("signs", np.int8), ("general", np.int16)])
@pytest.mark.parametrize("per_slice", ["one", "many"])
def test_every_stored_type_over_one_slice_and_many(pool, stored, per_slice):
    """Beyond 4,000,000 entries and columns of work there is a second slice."""
    n_cols = 5_000_000 if per_slice == "many" else 300
    X, _ = Case(11, 400, 300, 0.3, pool, 1.0, False).draw()
    X = sp.csr_array((X.data, X.indices * (n_cols // 300), X.indptr), shape=(400, n_cols))
    kept = np.random.default_rng(12).random(400) < 0.5
    facts, y = facts_of(n_cols, 400), labels_of(400)
    smaller = kept_to(build_table(X, y, facts, LEVELS), kept)
    expected = build_table(X[kept], y[kept], facts, LEVELS)
    for name in ("offsets", "rows"):
        assert (getattr(smaller.columns, name) == getattr(expected.columns, name)).all()
    assert smaller.columns.nnz == expected.columns.nnz > 0
    assert (smaller.columns.values is None) == (stored is None)
    if stored:
        assert smaller.columns.values.dtype == stored
        mine, theirs = (t.unit * t.columns.values.astype(int) for t in (smaller, expected))
        assert (mine == theirs).all()


def test_a_table_that_keeps_every_row_is_itself():
    X, facts = Case(13, 30, 20, 0.3, "halves", 1.0, False).draw()
    table = build_table(X, labels_of(30), facts, LEVELS)
    assert table.keeping(np.ones(30, dtype=bool)) is table


def test_keeping_rows_holds_no_entry_twice():
    n_rows, n_cols, per_row = 4_000, 500, 50
    columns = np.arange(per_row) * 10 + np.random.default_rng(14).integers(
        0, 10, (n_rows, per_row))
    X = sp.csr_array(
        (np.resize([0.3, 1.0], columns.size), columns.ravel(), np.arange(n_rows + 1) * per_row),
        shape=(n_rows, n_cols),
    )
    table = build_table(X, labels_of(n_rows), facts_of(n_cols, n_rows), LEVELS)
    kept = np.arange(n_rows) % 3 > 0
    tracemalloc.start()
    try:
        table.keeping(kept)
        peak = tracemalloc.get_traced_memory()[1]
    finally:
        tracemalloc.stop()
    assert peak < 20 * n_rows + 2**16 < table.columns.n_bytes / 4


def test_ctrl_c_ends_a_compaction_after_the_slice_it_is_in():
    """`map` goes from the one call to the other with no bytecode between, where Python would look
    at the signals; a slice ends after 4,000,000 columns."""
    n_cols = 4_500_000
    offsets = np.zeros(n_cols + 1, dtype=np.int64)
    offsets[1:], offsets[-1] = 1, 2
    rows = np.zeros(2, dtype=np.int32)
    work = functools.partial(
        kernel.keep_rows, offsets, rows, np.zeros(0, dtype=np.int8), np.array([-1], dtype=np.int32)
    )
    with pytest.raises(KeyboardInterrupt):
        list(map(operator.call, [_thread.interrupt_main, work]))
    assert offsets[1] == 0 and offsets[-2:].tolist() == [1, 2]
