"""The one door for X and y: exact quantisation, one table for every form of input, named errors."""

from __future__ import annotations

import tracemalloc
from dataclasses import dataclass

import numpy as np
import pytest
import scipy.sparse as sp
from hypothesis import given, settings
from hypothesis import strategies as st
from reference import column_arrays, quantised

from sordino import PublicFacts
from sordino import table as door
from sordino.errors import InputError
from sordino.table import Table, build_table, checked_labels

LEVELS = 2**14

repeatable = settings(max_examples=150, deadline=None, derandomize=True, database=None)

POOLS = {                                   # what entries are drawn from, in units of their bound
    "0/1": [1.0],
    "signs": [-1.0, 1.0],
    "halves": [0.5, 1.0, -0.5, 2.0],
    "general": [0.3, -0.71, 1.0, -1.5, 1e-9, 0.999, 1e300, 0.0],
    "one odd value": [0.3],
    "nothing": [0.0, 1e-7],
}


@dataclass(frozen=True)
class Case:
    seed: int
    n_rows: int
    n_cols: int
    density: float
    pool: str
    bound: float
    bound_per_feature: bool

    def facts(self, rng) -> PublicFacts:
        bound = self.bound
        if self.bound_per_feature:
            bound = self.bound * rng.choice([0.25, 1.0, 3.0], size=self.n_cols)
        return facts_of(self.n_cols, self.n_rows, bound)

    def draw(self) -> tuple[sp.csr_array, PublicFacts]:
        """A CSR matrix with explicit zeros among its entries, and facts for it."""
        rng = np.random.default_rng(self.seed)
        facts = self.facts(rng)
        held = rng.random((self.n_rows, self.n_cols)) < self.density
        rows, columns = np.nonzero(held)
        values = rng.choice(POOLS[self.pool], size=len(rows))
        with np.errstate(over="ignore"):
            values = np.clip(values * facts.bounds_of(columns), -1e308, 1e308)
        offsets = np.r_[0, np.cumsum(held.sum(axis=1))]
        return sp.csr_array((values, columns, offsets), shape=held.shape), facts


cases = st.builds(
    Case,
    seed=st.integers(0, 2**32),
    n_rows=st.integers(1, 40),
    n_cols=st.integers(1, 30),
    density=st.sampled_from([0.0, 0.1, 0.5, 1.0]),
    pool=st.sampled_from(sorted(POOLS)),
    bound=st.sampled_from([1.0, 3.0, 0.1, 1e-80, 1e80]),
    bound_per_feature=st.booleans(),
)


def facts_of(n_cols: int, n_rows: int, bound=1.0, label="binary") -> PublicFacts:
    return PublicFacts(features=n_cols, rows=n_rows, entry_bound=bound, label=label)


def labels_of(n_rows: int) -> np.ndarray:
    return np.arange(n_rows) % 2


def stored(table: Table) -> np.ndarray:
    """Dense int64 (n, d): the stored entries."""
    columns = table.columns
    dense = np.zeros((columns.n_rows, columns.n_cols), dtype=np.int64)
    ids = np.repeat(np.arange(columns.n_cols), np.diff(columns.offsets))
    dense[columns.rows, ids] = 1 if columns.values is None else columns.values
    return dense


def arrays_of(table: Table) -> tuple:
    """Everything a table holds, as plain values that compare."""
    columns = table.columns
    values = None if columns.values is None else (columns.values.dtype, columns.values.tolist())
    return (
        table.unit, table.levels, table.labels.tolist(), columns.n_rows, columns.n_cols,
        columns.offsets.tolist(), columns.rows.tolist(), values,
    )


def snapshot(X) -> list[bytes]:
    """The bytes of every array behind X."""
    if not sp.issparse(X):
        return [np.asarray(X).tobytes()]
    if X.format == "coo":
        return [part.tobytes() for part in (X.data, *X.coords)]
    return [part.tobytes() for part in (X.data, X.indices, X.indptr)]


def freeze(X):
    """X with every array read-only."""
    if not sp.issparse(X):
        X.flags.writeable = False
        return X
    for part in (X.data, *(X.coords if X.format == "coo" else (X.indices, X.indptr))):
        part.flags.writeable = False
    return X


# --- what is stored

@repeatable
@given(cases)
def test_entries_are_rounded_and_clipped_to_their_bound(case):
    X, facts = case.draw()
    table = build_table(X, labels_of(case.n_rows), facts, LEVELS)
    expected = quantised(X.toarray(), facts.entry_bound, LEVELS)
    table.columns._check()
    assert (stored(table) * table.unit == expected).all()
    offsets, rows, values = column_arrays(expected // table.unit)
    assert (table.columns.offsets == offsets).all() and (table.columns.rows == rows).all()
    if values is None:
        assert table.columns.values is None and table.largest == 1
    else:
        assert table.columns.values.dtype == values.dtype
        assert (table.columns.values == values).all() and table.largest == abs(values).max()
    assert np.diff(table.columns.offsets).max() == np.diff(offsets).max()
    assert table.columns.nnz == len(rows) and table.n_rows == case.n_rows


@repeatable
@given(cases)
def test_the_unit_is_the_largest_power_of_two_that_divides_every_entry(case):
    """A power of two: margins of a row then do not depend on it, hence on no other row."""
    X, facts = case.draw()
    unit = build_table(X, labels_of(case.n_rows), facts, LEVELS).unit
    expected = quantised(X.toarray(), facts.entry_bound, LEVELS)
    assert unit.bit_count() == 1
    assert not (expected % unit).any()
    assert (expected % (2 * unit)).any() or not expected.any()


@pytest.mark.parametrize(
    "values, bound, unit, dtype",
    [
        ([1, 1, 1], 1.0, LEVELS, None),
        ([3, 3, 3], 3.0, LEVELS, None),
        ([5, 7, 1], 0.5, LEVELS, None),             # clipped to the bound
        ([1, 1, 1], [1.0, 2.0, 1.0], LEVELS // 2, np.int8),
        ([2, 4, 8], [2.0, 4.0, 8.0], LEVELS, None),
        ([1, -1, 1], 1.0, LEVELS, np.int8),
        ([-1, -1, -1], 1.0, LEVELS, np.int8),
        ([0.5, 1, -1], 1.0, LEVELS // 2, np.int8),
        ([1, 2, 127], 128.0, LEVELS // 128, np.int8),
        ([1, 2, 128], 128.0, LEVELS // 128, np.int16),
        ([-128, 2, 1], 128.0, LEVELS // 128, np.int16),
        ([0.3, 1, 1], 1.0, 1, np.int16),
        ([1, 1, 1], 10.0, 2, np.int16),             # rint(1638.4) = 2 * 819
        ([0, 0, 0], 1.0, 1, None),
    ],
)
def test_storage(values, bound, unit, dtype):
    X = sp.csr_array((np.array(values, dtype=float), np.arange(3), [0, 2, 3]), shape=(2, 3))
    table = build_table(X, [0, 1], facts_of(3, 2, bound), LEVELS)
    assert table.unit == unit
    kept = table.columns.values
    assert kept is None if dtype is None else kept.dtype == dtype


def test_entries_that_come_to_0_vanish():
    """Explicit zeros and entries under half a step store nothing, nor do they count."""
    below, above = 0.499 / LEVELS, 0.501 / LEVELS
    X = sp.csr_array(([1.0, below, 0.0, -below, above], [0, 2, 0, 1, 2], [0, 2, 5]), shape=(2, 3))
    columns = build_table(X, [0, 1], facts_of(3, 2), LEVELS).columns
    columns._check()
    assert columns.offsets.tolist() == [0, 1, 1, 2]
    assert columns.rows.tolist() == [0, 1] and columns.values.tolist() == [LEVELS, 1]


@pytest.mark.parametrize("shape", [(1, 1), (3, 5), (1000, 1)])
@pytest.mark.parametrize("form", [sp.csr_array, sp.csc_array, sp.coo_array, np.asarray])
def test_a_table_without_entries(shape, form):
    X = form(np.zeros(shape))
    table = build_table(X, labels_of(shape[0]), facts_of(shape[1], shape[0]), LEVELS)
    table.columns._check()
    assert table.columns.nnz == 0 and table.columns.values is None
    assert (table.unit, table.largest, np.diff(table.columns.offsets).max()) == (1, 1, 0)


# --- one table for every form of input

FORMS = {
    "csr_array": lambda X: X,
    "csr_matrix": sp.csr_matrix,
    "csc_array": sp.csc_array,
    "csc_matrix": sp.csc_matrix,
    "coo_array": sp.coo_array,
    "coo_matrix": sp.coo_matrix,
    "bsr_array": sp.bsr_array,
    "lil_array": sp.lil_array,
    "dok_array": sp.dok_array,
    "dense": lambda X: X.toarray(),
    "dense, by columns": lambda X: np.asfortranarray(X.toarray()),
    "np.matrix": lambda X: np.asmatrix(X.toarray()),
    "lists": lambda X: X.toarray().tolist(),
}


@pytest.mark.filterwarnings("ignore:the matrix subclass")
@pytest.mark.parametrize("form", FORMS)
@pytest.mark.parametrize("pool", ["0/1", "halves", "general"])
def test_every_form_gives_the_same_table(form, pool):
    X, facts = Case(5, 30, 20, 0.3, pool, 1.0, False).draw()
    X.eliminate_zeros()
    y = labels_of(30)
    given_form = FORMS[form](X.copy())
    assert arrays_of(build_table(given_form, y, facts, LEVELS)) == arrays_of(
        build_table(X, y, facts, LEVELS)
    )


@pytest.mark.parametrize("ids", [np.int32, np.int64])
@pytest.mark.parametrize("offsets", [np.int32, np.int64])
@pytest.mark.parametrize(
    "dtype", [np.float32, np.float64, bool, np.int8, np.uint8, np.int32, np.int64, np.longdouble]
)
def test_every_index_and_value_type_gives_the_same_table(ids, offsets, dtype):
    X, facts = Case(6, 30, 20, 0.3, "0/1", 1.0, False).draw()
    typed = sp.csr_array(X.shape)
    typed.data, typed.indices, typed.indptr = (
        X.data.astype(dtype), X.indices.astype(ids), X.indptr.astype(offsets)
    )
    y = labels_of(30)
    table = build_table(freeze(typed), y, facts, LEVELS)
    assert typed.indices.dtype == ids and typed.indptr.dtype == offsets
    assert arrays_of(table) == arrays_of(build_table(X, y, facts, LEVELS))


@pytest.mark.parametrize("dtype", [np.int16, np.int64, np.float32])
def test_whole_numbers_round_as_their_float64_values(dtype):
    values = np.array([[5, -3, 0], [100, 7, -100]], dtype=dtype)
    facts = facts_of(3, 2, 50.0)
    table = build_table(sp.csr_array(values), [0, 1], facts, LEVELS)
    assert (stored(table) * table.unit == quantised(values.astype(float), 50.0, LEVELS)).all()


@pytest.mark.parametrize("stride", [2, 3])
def test_arrays_with_gaps_between_their_items(stride):
    X, facts = Case(7, 30, 20, 0.3, "general", 1.0, False).draw()
    y = labels_of(30)
    expected = arrays_of(build_table(X, y, facts, LEVELS))
    for name in ("data", "indices", "indptr"):
        spread = np.repeat(getattr(X, name), stride)[::stride]
        assert not spread.flags.c_contiguous
        setattr(X, name, spread)
    assert arrays_of(build_table(X, np.repeat(y, stride)[::stride], facts, LEVELS)) == expected


@repeatable
@given(cases, st.sampled_from([1, 2, 7, 64]), st.booleans())
def test_slices_of_any_size_give_the_same_table(case, size, whole):
    """Whole numbers are cast slice by slice, real ones are read in place."""
    X, facts = case.draw()
    if whole:
        X.data = np.sign(X.data).astype(np.int64)
    y = labels_of(case.n_rows)
    expected = arrays_of(build_table(X, y, facts, LEVELS))
    fractions = []
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(door, "SLICE", size)
        table = build_table(X, y, facts, LEVELS, fractions.append)
    table.columns._check()
    assert arrays_of(table) == expected
    assert fractions == sorted(fractions) and fractions[-1] == 1
    assert len(fractions) >= 2 * X.nnz / max(size, np.diff(X.indptr).max())


@pytest.mark.parametrize("form", ["csr_array", "csc_array", "coo_array", "dense"])
@pytest.mark.parametrize("pool", ["0/1", "general"])
def test_the_callers_arrays_are_read_and_never_written(form, pool):
    X, facts = Case(8, 50, 20, 0.3, pool, 1.0, True).draw()
    given_form, y = freeze(FORMS[form](X)), labels_of(50)
    y.flags.writeable = False
    before = snapshot(given_form), y.tobytes()
    parts = [id(part) for part in vars(given_form).values()] if sp.issparse(given_form) else []
    table = build_table(given_form, y, facts, LEVELS)
    assert (snapshot(given_form), y.tobytes()) == before
    assert parts == ([id(part) for part in vars(given_form).values()] if parts else [])
    assert not np.shares_memory(table.labels, y)


# --- memory

def dense_sample(n_rows: int, n_cols: int, per_row: int) -> sp.csr_array:
    """0/1 entries, `per_row` in every row."""
    rng = np.random.default_rng(9)
    step = n_cols // per_row
    columns = np.arange(per_row) * step + rng.integers(0, step, (n_rows, per_row))
    offsets = np.arange(n_rows + 1) * per_row
    return sp.csr_array((np.ones(columns.size), columns.ravel(), offsets), (n_rows, n_cols))


def test_a_0_1_table_takes_4_bytes_an_entry():
    X = dense_sample(2_000, 3_000, 30)
    columns = build_table(X, labels_of(2_000), facts_of(3_000, 2_000), LEVELS).columns
    assert columns.nnz == X.nnz
    assert columns.n_bytes <= 4 * X.nnz + 8 * X.shape[1] + 64


@pytest.mark.parametrize("scale, per_entry", [([0.5, 1.0], 5), ([0.3, 1.0], 6)])
def test_other_tables_take_5_or_6_bytes_an_entry(scale, per_entry):
    X = dense_sample(2_000, 3_000, 30)
    X.data *= np.resize(scale, X.nnz)
    columns = build_table(X, labels_of(2_000), facts_of(3_000, 2_000), LEVELS).columns
    assert columns.n_bytes <= per_entry * X.nnz + 8 * X.shape[1] + 64


@pytest.mark.parametrize("dtype", [np.float64, np.float32, np.int8, bool])
def test_building_copies_no_more_than_a_slice(dtype, monkeypatch):
    monkeypatch.setattr(door, "SLICE", 2**12)
    n_rows, n_cols = 20_000, 4_000
    X, y = dense_sample(n_rows, n_cols, 40).astype(dtype), labels_of(n_rows)
    facts = facts_of(n_cols, n_rows)
    tracemalloc.start()
    try:
        table = build_table(X, y, facts, LEVELS)
        peak = tracemalloc.get_traced_memory()[1]
    finally:
        tracemalloc.stop()
    slices, edges = 4 * 8 * 2**12, 40 * (n_rows + n_cols)
    assert peak <= table.columns.n_bytes + slices + edges + 2**16
    assert X.data.nbytes > 5 * slices or X.data.itemsize == 1


# --- labels

@pytest.mark.parametrize(
    "y", [[0, 1, 1], [-1, 1, 1], [False, True, True], np.float32([0, 1, 1]), np.int8([-1, 1, 1])]
)
def test_binary_labels(y):
    assert checked_labels(y, 3, "binary").tolist() == [0.0, 1.0, 1.0]


@pytest.mark.parametrize("y, expected", [([1, 1], [1, 1]), ([0, 0], [0, 0]), ([-1, -1], [0, 0])])
def test_labels_of_one_kind(y, expected):
    assert checked_labels(y, 2, "binary").tolist() == expected


def test_numeric_labels_are_clipped():
    assert checked_labels([-5.0, 0.5, 9.0], 3, (-1.0, 2.0)).tolist() == [-1.0, 0.5, 2.0]


# --- malformed input

def sample() -> tuple[sp.csr_array, np.ndarray]:
    """Six rows, five features: row 2 holds columns 0, 1, 3, 4 as entries 4 to 7; row 4 nothing."""
    held = np.array([[1, 0, 1, 0, 0], [0, 1, 0, 1, 0], [1, 1, 0, 1, 1],
                     [0, 0, 1, 0, 1], [0, 0, 0, 0, 0], [1, 0, 0, 0, 1]], dtype=float)
    return sp.csr_array(held), np.array([0, 1, 1, 0, 1, 0])


def with_part(name: str, place, value):
    """A change of one place of one of the CSR arrays, behind scipy's back."""
    def change(X, y):
        part = getattr(X, name).copy()
        part[place] = value
        setattr(X, name, part)
        return X, y

    return change


def with_array(name: str, value):
    def change(X, y):
        setattr(X, name, np.asarray(value))
        return X, y

    return change


def with_labels(change):
    return lambda X, y: (X, change(y))


def with_label(value):
    return with_labels(lambda y: [value if i == 3 else label for i, label in enumerate(y.tolist())])


def with_matrix(change):
    return lambda X, y: (change(X), y)


def reordered(X):
    X.indices[[5, 6]] = X.indices[[6, 5]]
    return X


def foreign(form: str, name: str, place: int, value: int):
    """A change of the ids of another format."""
    def change(X):
        X = X.asformat(form)
        if form == "coo":
            parts = [part.copy() for part in X.coords]
            parts[int(name)][place] = value
            X.coords = tuple(parts)
            return X
        part = getattr(X, name).copy()
        part[place] = value
        setattr(X, name, part)
        return X

    return with_matrix(change)


WRAPPED = np.array([0, 2, 2**31 - 5, -(2**31) + 7, 40, 50, 60], dtype=np.int32)

# {what: (change of a sound (X, y), what the message says)}
MALFORMED = {
    "NaN entry": (with_part("data", 5, np.nan), "row 2, column 1 holds nan"),
    "infinite entry": (with_part("data", 6, np.inf), "row 2, column 3 holds inf"),
    "minus infinite entry": (with_part("data", 0, -np.inf), "row 0, column 0 holds -inf"),
    "NaN in a dense X": (
        with_matrix(lambda X: np.where(X.toarray() == 0, np.nan, 1)), "row 0, column 1 holds nan"
    ),
    "NaN in a csc X": (
        lambda X, y: (with_part("data", 5, np.nan)(X, y)[0].tocsc(), y), "row 2, column 1 holds nan"
    ),
    "column id too large": (with_part("indices", 5, 5), "column id 5 in row 2 is outside 0..4"),
    "column id far too large": (
        with_part("indices", 5, 2**31 - 1), "column id 2147483647 in row 2 is outside 0..4"
    ),
    "negative column id": (with_part("indices", 4, -1), "column id -1 in row 2 is outside 0..4"),
    "64-bit column id": (
        with_matrix(lambda X: with_part("indices", 9, 2**40)(
            with_array("indices", X.indices.astype(np.int64))(X, None)[0], None)[0]),
        "column id 1099511627776 in row 3 is outside 0..4",
    ),
    "duplicate column id": (with_part("indices", 5, 0), "row 2 stores column 0 twice"),
    "unsorted column ids": (with_matrix(reordered), "row 2 stores column 1 after a higher one"),
    "uint32 column ids": (
        with_matrix(lambda X: with_array("indices", X.indices.astype(np.uint32))(X, None)[0]),
        "column ids must be int32 or int64, not uint32",
    ),
    "offsets start at 1": (with_part("indptr", 0, 1), "row offsets must be 7 numbers that start"),
    "offsets decrease": (
        with_part("indptr", 2, 1), r"the offset of row 2 \(1\) lies before that of row 1 \(2\)"
    ),
    "offsets end early": (
        with_part("indptr", -1, 10), "row offsets end at 10, but there are 12 column ids"
    ),
    "offsets end late": (
        with_part("indptr", -1, 13), "row offsets end at 13, but there are 12 column ids"
    ),
    "too few offsets": (with_array("indptr", [0, 6, 12]), "row offsets must be 7 numbers"),
    "no offsets": (with_array("indptr", np.zeros(0, dtype=int)), "row offsets must be 7 numbers"),
    "real offsets": (
        with_array("indptr", np.array([0, 2, 4, 8, 10, 10, 12.5])), "must be whole numbers"
    ),
    "int32 offsets past 2^31 entries": (
        with_array("indptr", WRAPPED),
        r"row 3 \(-2,147,483,641\) lies before .* \(2,147,483,643\): with more than 2\^31 entries",
    ),
    "fewer entries than ids": (with_array("data", np.ones(11)), "12 column ids and 11 entries"),
    "fewer ids than entries": (
        with_array("indices", np.zeros(7, dtype=np.int32)), "7 column ids and 12 entries"
    ),
    "a table of entries": (with_array("data", np.ones((12, 1))), "row offsets end at 12"),
    "complex X": (with_matrix(lambda X: X * 1j), "real numbers, not complex128"),
    "complex coo X": (with_matrix(lambda X: (X * 1j).tocoo()), "real numbers, not complex128"),
    "complex dense X": (with_matrix(lambda X: X.toarray() * 1j), "real numbers, not complex128"),
    "object X": (
        with_array("data", np.array([1.0] * 12, dtype=object)), "real numbers, not object"
    ),
    "object dense X": (
        with_matrix(lambda X: X.toarray().astype(object)), "real numbers, not object"
    ),
    "text X": (with_matrix(lambda X: X.toarray().astype(str)), "X must hold real numbers"),
    "half-precision X": (
        with_matrix(lambda X: X.toarray().astype(np.float16)), "X cannot be put in CSR form"
    ),
    "no X": (with_matrix(lambda X: None), "X must hold real numbers, not object"),
    "ragged X": (with_matrix(lambda X: [[1, 2], [3]]), "X cannot be read as an array"),
    "1-D X": (with_matrix(lambda X: X.toarray()[0]), r"X has shape \(5,\); .* 5 features"),
    "3-D X": (with_matrix(lambda X: X.toarray()[None]), r"X has shape \(1, 6, 5\)"),
    "3-D coo X": (with_matrix(lambda X: sp.coo_array(np.ones((6, 5, 2)))), r"shape \(6, 5, 2\)"),
    "too many columns": (
        with_matrix(lambda X: sp.hstack([X, X])), r"X has shape \(6, 10\); .* 5 features"
    ),
    "too few columns": (with_matrix(lambda X: X[:, :4]), r"X has shape \(6, 4\)"),
    "turned X": (with_matrix(lambda X: X.T), r"X has shape \(5, 6\)"),
    "no rows": (lambda X, y: (X[:0], y[:0]), "X has 0 rows; between 1 and"),
    "no rows, dense": (lambda X, y: (np.zeros((0, 5)), y[:0]), "X has 0 rows"),
    "no columns": (with_matrix(lambda X: sp.csr_array((6, 0))), r"X has shape \(6, 0\)"),
    "nothing": (lambda X, y: (np.zeros((0, 0)), []), r"X has shape \(0, 0\)"),
    "csc row id too large": (foreign("csc", "indices", 3, 10**7), "indices must be < 6"),
    "csc negative row id": (foreign("csc", "indices", 3, -10**7), "indices must be >= 0"),
    "csc offsets decrease": (foreign("csc", "indptr", 2, 9), "non-decreasing"),
    "csc offsets end late": (foreign("csc", "indptr", -1, 10**7), "index pointer"),
    "bsr column id too large": (
        foreign("bsr", "indices", 0, 10**7), "column index values must be <"
    ),
    "coo row id too large": (foreign("coo", "0", 3, 10**7), "axis 0 index 10000000 exceeds"),
    "coo negative column id": (foreign("coo", "1", 3, -10**7), "negative axis 1 index"),
    "csc duplicate": (foreign("csc", "indices", 1, 0), "row 0 stores column 0 twice"),
    "label 2": (with_label(2), "label of row 3 is 2: binary labels must be all 0/1 or all -1"),
    "label one half": (with_label(0.5), "label of row 3 is 0.5"),
    "label -1 among 0/1": (with_label(-1), "label of row 0 is 0: .* all 0/1 or all -1"),
    "label -2": (with_label(-2), "label of row 0 is 0"),
    "NaN label": (with_label(np.nan), "label of row 3 is nan: labels must be finite"),
    "infinite label": (with_label(np.inf), "label of row 3 is inf"),
    "text labels": (with_labels(lambda y: y.astype(str)), "y must hold numbers, not <U"),
    "object labels": (with_labels(lambda y: y.astype(object)), "y must hold numbers, not object"),
    "complex labels": (with_labels(lambda y: y * 1j), "y must hold numbers, not complex128"),
    "date labels": (with_labels(lambda y: y.astype("M8[D]")), "y must hold numbers, not datetime"),
    "2-D labels": (with_labels(lambda y: y[:, None]), r"y has shape \(6, 1\); .* \(6,\)"),
    "too few labels": (with_labels(lambda y: y[:5]), r"y has shape \(5,\); with 6 rows"),
    "too many labels": (with_labels(lambda y: np.r_[y, 1]), r"y has shape \(7,\)"),
    "no labels": (with_labels(lambda y: None), r"y has shape \(\)"),
    "sparse labels": (with_labels(lambda y: sp.csr_array(y[None])), r"y has shape \(\)"),
    "ragged labels": (with_labels(lambda y: [[1], [1, 2], 0, 0, 0, 0]), "y cannot be read"),
}


def malformed(what: str):
    """(X, y, pattern): a sound sample with one thing wrong, and what the error says."""
    change, pattern = MALFORMED[what]
    return *change(*sample()), pattern


def test_the_sample_is_sound():
    X, y = sample()
    table = build_table(X, y, facts_of(5, 6), LEVELS)
    assert (stored(table) == X.toarray()).all()


@pytest.mark.filterwarnings("ignore:indptr array has non-integer dtype")
@pytest.mark.parametrize("what", MALFORMED)
def test_malformed_input_is_named(what):
    X, y, pattern = malformed(what)
    with pytest.raises(InputError, match=pattern) as caught:
        build_table(X, y, facts_of(5, 6), LEVELS)
    assert "\n" not in str(caught.value)


@pytest.mark.parametrize("size", [1, 3, 100])
@pytest.mark.parametrize("dtype", [np.float64, np.int32])
def test_the_place_is_right_in_any_slice(size, dtype, monkeypatch):
    monkeypatch.setattr(door, "SLICE", size)
    X, y = sample()
    X.data = X.data.astype(dtype)
    X, y = with_part("indices", 11, 99)(X, y)
    with pytest.raises(InputError, match="column id 99 in row 5 is outside 0..4"):
        build_table(X, y, facts_of(5, 6), LEVELS)


def test_labels_are_checked_against_a_numeric_range_too():
    X, y = sample()
    with pytest.raises(InputError, match="label of row 2 is nan"):
        build_table(X, [0, 1, np.nan, 0, 0, 0], facts_of(5, 6, label=(0.0, 2.0)), LEVELS)
