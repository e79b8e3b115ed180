"""The table: a validated, quantised, column-oriented copy of the caller's CSR matrix.

A stored entry is an integer of at most 16 bits, or nothing at all where every entry is 1. Kernels
work on a range of rows at a time, never raise, and report a status with the place it concerns.

Thread safety: building writes only to arrays it was handed; a finished table is read-only.
"""

import numpy as np

from cython cimport wraparound
from libc.math cimport isfinite, rint
from libc.stdint cimport int8_t, int16_t, int32_t, int64_t, uint64_t

cdef extern from "Python.h":
    int PyErr_CheckSignals() except -1

cdef enum:
    SLICE = 4000000         # entries of work between two looks at the signals

ctypedef fused index_t:
    int32_t
    int64_t

ctypedef fused real_t:
    float
    double

ctypedef fused stored_t:
    int8_t
    int16_t

PAGE = 4096
PAGES = 2**14

OK = 0
OFFSETS_DECREASE = 1
OUT_OF_RANGE = 2
DUPLICATE = 3
UNSORTED = 4
NOT_FINITE = 5


def claimed(n: int, dtype):
    """An array (n,) of any values, its pages claimed bit by bit.

    Otherwise the first kernel that scatters over a large one claims them all in one slice, and
    Ctrl-C waits.
    """
    values = np.empty(n, dtype=dtype)
    page = max(PAGE // values.itemsize, 1)
    for start in range(0, n, PAGES * page):
        values[start:start + PAGES * page:page] = 0
    return values


cdef inline int64_t quantised(double x, double factor, int64_t levels) noexcept nogil:
    """rint(factor * x) clipped to [-levels, levels], where factor = levels / bound."""
    cdef double scaled = rint(factor * x)
    if scaled > levels:
        return levels
    if scaled < -levels:
        return -levels
    return <int64_t> scaled


ctypedef struct entry_survey:
    int status
    int64_t row             # where the status arose
    int64_t entry
    uint64_t any_bits       # OR of |v| over the non-zero quantised entries
    int64_t least           # smallest and largest non-zero v
    int64_t most
    int64_t nnz             # how many entries are not 0 once quantised


def survey_rows(const int64_t[::1] offsets, const index_t[::1] columns, const real_t[::1] data,
                int64_t first_row, int64_t end_row, int64_t data_start,
                const double[::1] factors, int64_t levels, int32_t[::1] counts):
    """Check rows [first_row, end_row) and count their non-zero quantised entries by column.

    offsets int64 (n_rows + 1,), columns (nnz,), data holds the entries from `data_start` on,
    factors float64 (1,) or (n_cols,) are levels over entry bounds, counts int32 (n_cols,) is added
    to. O(entries).
    Returns the survey as a dict; a status other than OK names `row` and `entry`.
    """
    cdef entry_survey survey
    with nogil:
        survey = _survey(offsets, columns, data, first_row, end_row, data_start, factors, levels,
                         counts)
    return survey


cdef entry_survey _survey(const int64_t[::1] offsets, const index_t[::1] columns,
                          const real_t[::1] data, int64_t first_row, int64_t end_row,
                          int64_t data_start, const double[::1] factors, int64_t levels,
                          int32_t[::1] counts) noexcept nogil:
    cdef entry_survey found
    cdef int64_t n_cols = counts.shape[0], i, e, column, previous, v
    cdef bint one_factor = factors.shape[0] == 1
    cdef double factor = factors[0]
    found.status = 0
    found.any_bits = 0
    found.least = 1 << 62
    found.most = -found.least
    found.nnz = 0
    found.row = found.entry = -1
    for i in range(first_row, end_row):
        previous = -1
        for e in range(offsets[i], offsets[i + 1]):
            column = columns[e]
            if column <= previous or column >= n_cols or not isfinite(data[e - data_start]):
                found.row = i
                found.entry = e
                if column < 0 or column >= n_cols:
                    found.status = 2
                elif column == previous:
                    found.status = 3
                elif column < previous:
                    found.status = 4
                else:
                    found.status = 5
                return found
            previous = column
            if not one_factor:
                factor = factors[column]
            v = quantised(data[e - data_start], factor, levels)
            if v != 0:
                counts[column] += 1
                found.nnz += 1
                found.any_bits |= <uint64_t> (v if v > 0 else -v)
                found.least = min(found.least, v)
                found.most = max(found.most, v)
    return found


def fill_rows(const int64_t[::1] offsets, const index_t[::1] columns, const real_t[::1] data,
              int64_t first_row, int64_t end_row, int64_t data_start,
              const double[::1] factors, int64_t levels, int64_t unit,
              int64_t[::1] fill, int32_t[::1] rows, stored_t[::1] values):
    """Append rows [first_row, end_row) to the columns; `fill` (n_cols,) says where each goes on.

    Entries are stored in multiples of `unit`; `values` of length 0 stores none. O(entries).
    """
    with nogil:
        _fill(offsets, columns, data, first_row, end_row, data_start, factors, levels, unit,
              fill, rows, values)


cdef void _fill(const int64_t[::1] offsets, const index_t[::1] columns, const real_t[::1] data,
                int64_t first_row, int64_t end_row, int64_t data_start,
                const double[::1] factors, int64_t levels, int64_t unit,
                int64_t[::1] fill, int32_t[::1] rows, stored_t[::1] values) noexcept nogil:
    cdef int64_t i, e, column, v, place
    cdef bint one_factor = factors.shape[0] == 1, stores = values.shape[0] > 0
    cdef double factor = factors[0]
    for i in range(first_row, end_row):
        for e in range(offsets[i], offsets[i + 1]):
            column = columns[e]
            if not one_factor:
                factor = factors[column]
            v = quantised(data[e - data_start], factor, levels)
            if v != 0:
                place = fill[column]
                fill[column] = place + 1
                rows[place] = <int32_t> i
                if stores:
                    values[place] = <stored_t> (v // unit)


def keep_rows(int64_t[::1] offsets, int32_t[::1] rows, stored_t[::1] values,
              const int32_t[::1] renamed) -> int:
    """Drop the entries of row i where renamed[i] < 0, and call the row renamed[i] elsewhere.

    offsets (n_cols + 1,), rows (nnz,) and values (nnz,), or (0,) where none are stored, are
    compacted in place, entries before entries; `renamed` (n_rows,) ascends over the rows it keeps.
    Returns how many entries are left: the arrays mean nothing beyond them. After Ctrl-C half of
    the columns may be compacted and the others not.  O(nnz + n_cols).
    """
    cdef int64_t j = 0, n_cols = offsets.shape[0] - 1, e = 0, end, place = 0, work
    cdef int32_t row
    cdef bint stores = values.shape[0] > 0
    while j < n_cols:
        with nogil:
            work = 0
            while j < n_cols and work < SLICE:
                end = offsets[j + 1]
                work += 1 + end - e
                while e < end:
                    row = renamed[rows[e]]
                    if row >= 0:
                        rows[place] = row
                        if stores:
                            values[place] = values[e]
                        place += 1
                    e += 1
                j += 1
                offsets[j] = place
        PyErr_CheckSignals()
    return place


def first_bad_offset(const int64_t[::1] offsets) -> int:
    """The first row whose end lies before its start, or -1."""
    cdef int64_t i, bad = -1
    with nogil:
        for i in range(offsets.shape[0] - 1):
            if offsets[i + 1] < offsets[i]:
                bad = i
                break
    return bad


cdef class ColumnTable:
    """A finished table. offsets int64 (n_cols + 1,), rows int32 (nnz,) ascending within a column,
    values int8 or int16 (nnz,), or None where every entry is 1.
    """

    def __cinit__(self, int64_t n_rows, const int64_t[::1] offsets, const int32_t[::1] rows,
                  values):
        self.offsets, self.rows, self.values = offsets.base, rows.base, values
        self.view.n_rows = n_rows
        self.view.n_cols = offsets.shape[0] - 1
        self.view.nnz = rows.shape[0]
        self.view.offsets = &offsets[0]
        self.view.rows = &rows[0] if rows.shape[0] else NULL
        self.view.values = NULL
        self.view.kind = NO_VALUES
        self.largest = 1
        cdef const int8_t[::1] narrow
        cdef const int16_t[::1] wide
        if values is None or len(values) == 0:
            return
        self.largest = max(int(values.max()), -int(values.min()))
        if values.dtype == np.int8:
            narrow = values
            self.view.kind = INT8_VALUES
            self.view.values = &narrow[0]
        else:
            wide = values
            self.view.kind = INT16_VALUES
            self.view.values = &wide[0]

    @property
    def n_rows(self) -> int:
        return self.view.n_rows

    @property
    def n_cols(self) -> int:
        return self.view.n_cols

    @property
    def nnz(self) -> int:
        return self.view.nnz

    @property
    def n_bytes(self) -> int:
        """Bytes of this orientation."""
        stored = 0 if self.values is None else self.values.nbytes
        return self.offsets.nbytes + self.rows.nbytes + stored

    @wraparound(True)
    def _check(self):
        """Assert every invariant.  O(nnz)."""
        offsets, rows = np.asarray(self.offsets), np.asarray(self.rows)
        assert offsets[0] == 0 and offsets[-1] == len(rows)
        assert (np.diff(offsets) >= 0).all()
        if len(rows):
            assert rows.min() >= 0 and rows.max() < self.n_rows
            within = np.ones(len(rows), dtype=bool)
            within[offsets[:-1][np.diff(offsets) > 0]] = False
            assert (np.diff(rows)[within[1:]] > 0).all(), "rows ascend within a column"
        if self.values is not None:
            assert len(self.values) == len(rows) and (np.asarray(self.values) != 0).all()
