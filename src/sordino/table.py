"""The one door for X and y: validate, clip, quantise, and lay out by columns.

The caller's arrays are read, never written. Everything runs over slices of rows, so that Ctrl-C
and progress work at any size, and no copy of X is made beyond one slice.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator
from concurrent.futures import Future
from dataclasses import dataclass
from threading import Thread

import numpy as np
import scipy.sparse as sp

from ._core import table as kernel
from ._core.bits import Bits
from ._core.crew import Crew
from ._core.table import ColumnTable
from .errors import InputError
from .facts import MOST_ROWS, PublicFacts

SLICE = 2**21

_STRUCTURE = {
    kernel.OUT_OF_RANGE: "column id {column} in row {row} is outside 0..{last}",
    kernel.DUPLICATE: "row {row} stores column {column} twice (X.sum_duplicates() mends that)",
    kernel.UNSORTED: "row {row} stores column {column} after a higher one "
    "(X.sort_indices() mends that)",
    kernel.NOT_FINITE: "row {row}, column {column} holds {value}: entries must be finite numbers",
}


@dataclass(frozen=True, eq=False)
class Table:
    """A validated table. Entry (i, j) is `unit * stored` quantisation steps of bound_j / levels."""

    columns: ColumnTable
    labels: np.ndarray
    unit: int
    levels: int

    @property
    def n_rows(self) -> int:
        return self.columns.n_rows

    @property
    def largest(self) -> int:
        """The largest stored |entry|, 1 where entries are implied."""
        return self.columns.largest

    def keeping(self, kept: np.ndarray) -> Table:
        """The table of the rows where `kept`, bool (n_rows,), is True, in the same order.

        This table is used up: its arrays become those of the result, so that entries are never
        held twice. The result is what `build_table` makes of X[kept], except that unit and stored
        type stay those that fit all rows, so a larger power of two might divide what is left.
        Nothing comes of that: no outcome depends on the unit (see `_storage`).  O(nnz + features).
        """
        if kept.all():
            return self
        columns = self.columns
        renamed = np.where(kept, np.cumsum(kept, dtype=np.int32) - 1, np.int32(-1))
        values = np.zeros(0, dtype=np.int8) if columns.values is None else columns.values
        nnz = kernel.keep_rows(columns.offsets, columns.rows, values, renamed)
        left = None if columns.values is None else values[:nnz]
        smaller = ColumnTable(int(kept.sum()), columns.offsets, columns.rows[:nnz], left)
        return Table(smaller, self.labels[kept], self.unit, self.levels)


def build_table(X, y, facts: PublicFacts, levels: int, progress: Callable | None = None,
                crew: Crew | None = None) -> Table:
    """A Table from a matrix and labels.

    X         (n, facts.features) sparse in any scipy format, or a dense 2-D array, or what
              `sound_matrix` made of it
    y         (n,) labels as the facts describe them
    levels    quantisation steps per entry bound
    progress  called with the fraction done
    crew      the threads that share the work; None: one

    Raises InputError, naming row, column and value, for anything malformed.
    Time O(nnz + features); extra memory one slice and 12 bytes a feature for every thread.
    """
    matrix = X if isinstance(X, Csr) else Csr(X, facts.features)
    labels = checked_labels(y, matrix.n_rows, facts.label)
    factors = _factors(facts, levels)
    report = progress or (lambda fraction: None)
    crew = Crew() if crew is None else crew
    found, counts = matrix.surveyed(factors, levels, lambda part: report(part / 3), crew)
    unit, kind = _storage(found)
    offsets = np.zeros(facts.features + 1, dtype=np.int64)
    np.cumsum(counts.sum(axis=0), out=offsets[1:])
    rows = kernel.claimed(int(offsets[-1]), np.int32)
    values = kernel.claimed(0 if kind is None else len(rows), kind or np.int8)
    places = offsets[:-1] + np.cumsum(counts, axis=0, dtype=np.int64) - counts

    def fill(member: int):
        for part in matrix.slices(member, crew.threads):
            if crew.stopped:
                return
            kernel.fill_rows(*part.parts, factors, levels, unit, places[member], rows, values)
            if member == 0:
                report((1 + 2 * part.fraction) / 3)

    crew.each(fill)
    columns = ColumnTable(matrix.n_rows, offsets, rows, None if kind is None else values)
    return Table(columns, labels, unit, levels)


def _factors(facts: PublicFacts, levels: int) -> np.ndarray:
    """float64 (1,) or (features,): quantisation steps per unit of an entry."""
    return levels / np.atleast_1d(np.asarray(facts.entry_bound, dtype=np.float64))


def sound_matrix(X, features: int, progress: Callable | None = None, crew: Crew | None = None,
                 facts: PublicFacts | None = None, levels: int = 1) -> Csr:
    """X, checked to its last entry before any bound is known; `build_table` takes it for X.

    X         (n, features) as for `build_table`
    facts, levels  where the entry bound is known: `build_table` then need not look twice
    progress  called with the fraction done

    Raises InputError, naming row, column and value, for anything malformed.  O(nnz).
    """
    matrix = Csr(X, features)
    known = facts is not None and "entry_bound" not in facts.learned
    factors = _factors(facts, levels) if known else np.zeros(1)     # 0: every entry counts as 0
    matrix.survey(factors, levels, progress or (lambda fraction: None), crew or Crew())
    return matrix


def sampled_magnitudes(matrix: Csr, bits: Bits, kept: np.ndarray | None = None) -> np.ndarray:
    """float64 (at most n,): |x| of one stored entry x != 0 of every row that has one.

    matrix  from `sound_matrix`: nothing may be drawn before X is known to be sound
    kept    bool (n,): only these rows contribute (`persons.kept_rows`); None for all

    Row i contributes entry floor(key_i * m_i / 2^32) of its m_i entries other than 0, in stored
    order, where key_i are 32 random bits of its own. So what it contributes, one number or none,
    depends on row i and its own bits alone: adding, removing or changing another row leaves it as
    it is. The choice is uniform to within m_i / 2^32. Memory: one slice, and 12 bytes per row.
    """
    keys = bits.array(matrix.n_rows, np.uint32)
    return np.concatenate([_sampled(part, keys, kept) for part in matrix.slices()])


def _sampled(part: _Slice, keys: np.ndarray, kept: np.ndarray | None) -> np.ndarray:
    """The contributions of the rows of one slice."""
    offsets, _, data, row, end, start = part.parts
    stops = offsets[row:end + 1] - offsets[row]
    entries = data[offsets[row] - start:offsets[end] - start]
    held = np.flatnonzero(entries)
    firsts = np.searchsorted(held, stops)
    counts = np.diff(firsts)
    chosen = firsts[:-1] + (keys[row:end] * counts.astype(np.uint64) >> 32).astype(np.int64)
    contributes = counts > 0 if kept is None else (counts > 0) & kept[row:end]
    return np.abs(entries[held[chosen[contributes]]], dtype=np.float64)


def checked_labels(y, n_rows: int, label) -> np.ndarray:
    """float64 (n,): 0/1 for binary labels, else clipped to the stated range."""
    given = _as_array("y", y)
    if given.shape != (n_rows,):
        raise InputError(f"y has shape {given.shape}; with {n_rows:,} rows it must be ({n_rows},)")
    if given.dtype.kind not in "buif":
        raise InputError(f"y must hold numbers, not {given.dtype}")
    labels = given.astype(np.float64)
    _refuse(~np.isfinite(labels), labels, "labels must be finite numbers")
    if label != "binary":
        return np.clip(labels, *label)
    if labels.min() < 0:
        _refuse(abs(labels) != 1, labels, "binary labels must be all 0/1 or all -1/+1")
        return (labels > 0).astype(np.float64)
    _refuse((labels != 0) & (labels != 1), labels, "binary labels must be all 0/1 or all -1/+1")
    return labels


def _refuse(wrong: np.ndarray, labels: np.ndarray, rule: str):
    at = np.flatnonzero(wrong)
    if len(at):
        raise InputError(f"label of row {at[0]} is {labels[at[0]]:g}: {rule}")


@dataclass(frozen=True)
class _Slice:
    parts: tuple        # the kernels' leading arguments
    fraction: float     # of all entries, at the end of this slice


class Csr:
    """Access to the CSR arrays of X, slice by slice: offsets are checked, ids and entries not."""

    def __init__(self, X, features: int):
        X = _checked_matrix(X, features)
        self.n_rows, self.n_cols = X.shape
        if not 0 < self.n_rows <= MOST_ROWS:
            raise InputError(f"X has {self.n_rows:,} rows; between 1 and {MOST_ROWS:,} are needed")
        X = _as_csr(X)
        if X.indptr.dtype.kind not in "iu":
            raise InputError(f"row offsets must be whole numbers, not {X.indptr.dtype}")
        self.offsets = np.ascontiguousarray(X.indptr).astype(np.int64)
        self.indices = np.ascontiguousarray(X.indices)
        self.data = np.ascontiguousarray(X.data)
        self._check_arrays()
        self._known = None          # levels and factors of the last survey, and what it found

    def survey(self, factors, levels: int, report, crew: Crew):
        """Check every entry, and keep what is found for `surveyed`; raises for a malformed one."""
        self._known = levels, factors, _survey(self, factors, levels, report, crew)

    def surveyed(self, factors, levels: int, report, crew: Crew) -> tuple[dict, np.ndarray]:
        """What `_survey` finds at these factors, once: without another pass where it is known."""
        known = self._known
        if known is None or known[0] != levels or not np.array_equal(known[1], factors):
            self.survey(factors, levels, report, crew)
        (*_, found), self._known = self._known, None
        return found

    def _check_arrays(self):
        offsets, n = self.offsets, self.n_rows
        if self.indices.dtype not in (np.int32, np.int64):
            raise InputError(f"column ids must be int32 or int64, not {self.indices.dtype}")
        if offsets.shape != (n + 1,) or offsets[0] != 0:
            raise InputError(f"row offsets must be {n + 1:,} numbers that start at 0")
        bad = kernel.first_bad_offset(offsets)
        if bad >= 0:
            raise InputError(
                f"the offset of row {bad + 1} ({offsets[bad + 1]:,}) lies before that of row {bad} "
                f"({offsets[bad]:,}): with more than 2^31 entries, offsets must be int64"
            )
        if not (offsets[-1],) == self.indices.shape == self.data.shape:
            raise InputError(
                f"row offsets end at {offsets[-1]:,}, but there are {self.indices.size:,} column "
                f"ids and {self.data.size:,} entries"
            )

    def slices(self, member: int = 0, members: int = 1) -> Iterator[_Slice]:
        """Ranges of rows of about SLICE entries each: those of one span of several, in order."""
        offsets = self.offsets
        row, stop = (int(np.searchsorted(offsets, offsets[-1] * edge // members))
                     if edge < members else self.n_rows for edge in (member, member + 1))
        begun, whole = offsets[row] + row, offsets[stop] + stop
        while row < stop:
            end = int(np.searchsorted(offsets, offsets[row] + SLICE, side="right")) - 1
            end = min(max(end, row + 1), row + SLICE, stop)
            data, start = self._real(offsets[row], offsets[end])
            yield _Slice(
                (offsets, self.indices, data, row, end, start),
                float((offsets[end] + end - begun) / (whole - begun)),
            )
            row = end

    def _real(self, start: int, stop: int) -> tuple[np.ndarray, int]:
        """Entries as float32/float64 and the index of the first: a view where that will do."""
        if self.data.dtype in (np.float32, np.float64) and len(self.data):
            return self.data, 0
        return self.data[start:stop].astype(np.float64), start


def _checked_matrix(X, features: int):
    """X, sparse or as a dense array, of the right shape and kind of number."""
    X = X if sp.issparse(X) else _as_array("X", X)
    if X.dtype.kind not in "buif":
        raise InputError(f"X must hold real numbers, not {X.dtype}")
    if X.ndim != 2 or X.shape[1] != features:
        raise InputError(f"X has shape {X.shape}; the facts say {features:,} features")
    return X


def _as_array(name: str, values) -> np.ndarray:
    try:
        return np.asarray(values)
    except (TypeError, ValueError) as error:
        raise InputError(f"{name} cannot be read as an array: {error}") from None


def _as_csr(X):
    """X in CSR form: the caller's own object wherever it has that form."""
    if sp.issparse(X) and X.format == "csr":
        return X
    return _interruptible(lambda: _converted(X))


def _converted(X):
    try:
        return with_sound_ids(X).tocsr() if sp.issparse(X) else sp.csr_array(X)
    except (TypeError, ValueError) as error:
        raise InputError(f"X cannot be put in CSR form: {error}") from None


def with_sound_ids(X):
    """Sparse X over the same arrays, its ids checked: scipy's kernels go wherever ids point.

    Raises InputError for ids or offsets out of range.
    """
    try:
        if X.format == "coo":
            return sp.coo_array((X.data, X.coords), shape=X.shape)
        if X.format in ("csr", "csc", "bsr"):
            kind = getattr(sp, f"{X.format}_array")
            X = kind((X.data, X.indices, X.indptr), shape=X.shape)
            X.check_format()
    except ValueError as error:
        raise InputError(f"X is malformed: {error}") from None
    return X


def _interruptible(convert: Callable):
    """convert(), on a thread of its own so that Ctrl-C need not wait for it."""
    outcome = Future()

    def run():
        try:
            outcome.set_result(convert())
        except BaseException as error:
            outcome.set_exception(error)

    worker = Thread(target=run, daemon=True)
    worker.start()
    while worker.is_alive():        # a wait without an end can sleep through a signal
        worker.join(0.05)
    return outcome.result()


def _survey(matrix: Csr, factors, levels: int, report, crew: Crew) -> tuple[dict, np.ndarray]:
    """(what the entries are once quantised, int32 (members, features) how many there are of each).

    The first malformed entry raises.
    """
    counts = np.zeros((crew.threads, matrix.n_cols), dtype=np.int32)
    totals = [{"any_bits": 0, "least": 2**62, "most": -(2**62)} for _ in range(crew.threads)]
    faults: dict[int, str] = {}

    def survey(member: int):
        total = totals[member]
        for part in matrix.slices(member, crew.threads):
            if crew.stopped:
                return
            found = kernel.survey_rows(*part.parts, factors, levels, counts[member])
            if found["status"] != kernel.OK:
                faults[member] = _fault(matrix, found)
                return
            total["any_bits"] |= found["any_bits"]
            total["least"] = min(total["least"], found["least"])
            total["most"] = max(total["most"], found["most"])
            if member == 0:
                report(part.fraction)

    crew.each(survey)
    if faults:
        raise InputError(faults[min(faults)])
    bits, least, most = zip(*(total.values() for total in totals))
    return {"any_bits": int(np.bitwise_or.reduce(bits)), "least": min(least),
            "most": max(most)}, counts


def _fault(matrix: Csr, found: dict) -> str:
    """What is wrong with the entry that a survey stopped at."""
    entry = found["entry"]
    return _STRUCTURE[found["status"]].format(
        row=found["row"], column=matrix.indices[entry], value=matrix.data[entry],
        last=matrix.n_cols - 1,
    )


def _storage(found: dict) -> tuple[int, type | None]:
    """(unit, dtype): the largest power of two that divides every entry, the narrowest type then.

    It makes 0/1 data cost no values and small whole numbers one byte. What happens to a row must
    not depend on the unit, which other rows have a say in: scores are divided by it and kappa is
    multiplied by it, and margins come out the same to the last bit because it is a power of two.
    """
    if found["any_bits"] == 0:
        return 1, None
    unit = found["any_bits"] & -found["any_bits"]
    if found["least"] == found["most"] == unit:
        return unit, None
    largest = max(found["most"], -found["least"]) // unit
    return unit, np.int8 if largest <= 127 else np.int16
