"""The data side: margins, quantised derivatives and the calendar. Rows never see noise.

Row-locality: what a row holds after any move depends on its own record (entries, label, dither)
and on public history (features moved, weights, scale, intercept) alone. Which of the three ways a
row is refreshed (because its margin moved, because the calendar says so, in a sweep of all rows)
depends on other rows too, but not what comes out: all three leave the row at

    q_i = clip(floor(R * derivative(scale[t] * z_i + intercept + offset_i) + u_i)).

The calendar rests on monotony. `scale` falls from step to step, so |scale[t] * z_i| falls, and
rounding a product, truncating it, interpolating a non-decreasing table and taking a floor all keep
order: q_i(t) is monotone in t while z_i, offset_i and the intercept rest, and the first step at
which it changes is found by bisection.

Thread safety: one thread at a time per `Rows`. Kernels run without the GIL in slices.
"""

import numpy as np

from cpython.time cimport perf_counter
from cython cimport wraparound
from libc.stdint cimport int8_t, int16_t, int32_t, int64_t, uint16_t
from libc.string cimport memset

from .crew import Crew
from .table import claimed

from .change cimport ScoreChange, score_change, sum_t
from .loss cimport CELL_BITS, MARGIN_END, far_clipped, fixed_margin, rounded_derivative
from .table cimport ColumnTable, INT8_VALUES, NO_VALUES, entry_value

cdef extern from *:
    """
    #if defined(__GNUC__) || defined(__clang__)
    #define sordino_prefetch(address) __builtin_prefetch(address)
    #else
    #define sordino_prefetch(address) ((void) (address))
    #endif
    """
    void prefetch "sordino_prefetch" (const void* address) noexcept nogil

cdef extern from "Python.h":
    int PyErr_CheckSignals() except -1

cdef enum:
    BLOCK = 256
    AHEAD = 6               # rows whose entries are fetched ahead
    CACHE_LINE = 64
    SLICE = 4000000         # entries of work between two looks at the signals
    ACTIVE_SHARE = 6        # sweep once more than 1/6 of the rows need a refresh
    CALM_SHARE = 16         # a sweep is calm when it changes fewer than 1/16 of the rows
    CALM_SWEEPS = 4
    SCHEDULING = 16         # entries of work that go into putting a row on the calendar

ctypedef fused id_t:        # loud ids: two bytes wherever they fit
    uint16_t
    int32_t


# --- one row ---------------------------------------------------------------------------------

cdef inline int32_t derivative_at(const rows_state* r, int64_t i, int32_t t) noexcept nogil:
    """The quantised derivative of row i after t moves, its z and the intercept as they are."""
    return rounded_derivative(&r.loss, fixed_margin(r.scale[t], r.z[i], r.intercept + r.offset[i]),
                              r.target[i], r.dither[i])


cdef void derivatives_in_order(const rows_state* r, int64_t first, int64_t n,
                               int32_t* fresh) noexcept nogil:
    """fresh[k] = derivative of row first + k, k < n <= BLOCK; the first loop runs in vectors."""
    cdef int32_t margin[BLOCK]
    cdef const double* z = r.z + first
    cdef const int32_t* offset = r.offset + first
    cdef const int32_t* target = r.target + first
    cdef const uint16_t* dither = r.dither + first
    cdef double scale = r.scale[r.at]
    cdef int32_t intercept = r.intercept
    cdef int64_t k
    for k in range(n):
        margin[k] = fixed_margin(scale, z[k], intercept + offset[k])
    for k in range(n):
        fresh[k] = rounded_derivative(&r.loss, margin[k], target[k], dither[k])


cdef void derivatives_of(const rows_state* r, const int32_t* ids, int64_t n,
                         int32_t* fresh) noexcept nogil:
    """fresh[k] = derivative of row ids[k]"""
    cdef int64_t k
    for k in range(n):
        fresh[k] = derivative_at(r, ids[k], r.at)


cdef inline void unlink(rows_state* r, int32_t i) noexcept nogil:
    cdef int32_t before, after, t = r.due[i]
    if t < 0:
        return
    before, after = r.previous[i], r.following[i]
    if before < 0:
        r.head[t] = after
    else:
        r.following[before] = after
    if after >= 0:
        r.previous[after] = before
    r.due[i] = -1
    r.n_due[t] -= 1


cdef inline void link(rows_state* r, int32_t i, int32_t t) noexcept nogil:
    cdef int32_t after = r.head[t]
    r.previous[i] = -1
    r.following[i] = after
    if after >= 0:
        r.previous[after] = i
    r.head[t] = i
    r.due[i] = t
    r.n_due[t] += 1


cdef int32_t next_change(rows_state* r, int32_t i) noexcept nogil:
    """The first t > at for which row i's derivative differs from q[i], or -1.  O(log steps)."""
    cdef int32_t same = r.at, differs = r.n_steps, stride = 1, middle
    cdef int32_t q = r.q[i]
    r.counters.evaluated += 1
    if r.z[i] == 0 or same == differs or derivative_at(r, i, differs) == q:
        return -1
    while same + stride < differs:          # gallop: changes are mostly near
        r.counters.evaluated += 1
        if derivative_at(r, i, same + stride) != q:
            differs = same + stride
            break
        same += stride
        stride *= 2
    while differs - same > 1:
        middle = (same + differs) >> 1
        r.counters.evaluated += 1
        if derivative_at(r, i, middle) == q:
            same = middle
        else:
            differs = middle
    return differs


cdef inline void schedule(rows_state* r, int32_t i) noexcept nogil:
    cdef int32_t t
    unlink(r, i)
    t = next_change(r, i)
    if t >= 0:
        link(r, i, t)


# --- pushes ----------------------------------------------------------------------------------

cdef inline int64_t stored_value(const rows_state* r, int64_t e) noexcept nogil:
    if r.table.kind == NO_VALUES:
        return 1
    if r.table.kind == INT8_VALUES:
        return (<const int8_t*> r.row_values)[e]
    return (<const int16_t*> r.row_values)[e]


cdef inline void push_listed(const rows_state* r, score_change* change, sum_t* sums,
                             const id_t* loud_of, int64_t start, int64_t stop,
                             int32_t d) noexcept nogil:
    """sums[j] += d * x_ij, with every j on the list of touched ids."""
    cdef int64_t e
    cdef int32_t loud
    for e in range(start, stop):
        loud = loud_of[e]
        if sums[loud] == 0:
            if change.n_touched == change.room:
                change.dense = True
            else:
                change.touched[change.n_touched] = loud
                change.n_touched += 1
        sums[loud] += <sum_t> (d * stored_value(r, e))


cdef inline void push_dense(const rows_state* r, sum_t* sums, const id_t* loud_of, int64_t start,
                            int64_t stop, int32_t d) noexcept nogil:
    """sums[j] += d * x_ij"""
    cdef int64_t e
    if r.table.kind == NO_VALUES:
        for e in range(start, stop):
            sums[loud_of[e]] += d
    else:
        for e in range(start, stop):
            sums[loud_of[e]] += <sum_t> (d * stored_value(r, e))


cdef inline void push_row(const rows_state* r, score_change* change, sum_t* sums, int64_t i,
                          int32_t d) noexcept nogil:
    """sums[j] += d * x_ij over the loud features j of row i."""
    cdef int64_t start = r.row_offsets[i], stop = r.row_offsets[i + 1]
    if not change.dense:
        if r.wide_ids:
            push_listed(r, change, sums, <const int32_t*> r.loud_of, start, stop, d)
        else:
            push_listed(r, change, sums, <const uint16_t*> r.loud_of, start, stop, d)
    elif r.wide_ids:
        push_dense(r, sums, <const int32_t*> r.loud_of, start, stop, d)
    else:
        push_dense(r, sums, <const uint16_t*> r.loud_of, start, stop, d)


cdef inline void fetch_row(const rows_state* r, int64_t i) noexcept nogil:
    """Ask for the entries of row i ahead of their use."""
    cdef int64_t width = 4 if r.wide_ids else 2
    cdef const char* at = <const char*> r.loud_of + width * r.row_offsets[i]
    cdef const char* stop = <const char*> r.loud_of + width * r.row_offsets[i + 1]
    while at < stop:
        prefetch(at)
        at += CACHE_LINE


cdef int64_t refresh(rows_state* r, score_change* change, sum_t* sums, const int32_t* ids,
                     int64_t n) noexcept nogil:
    """Bring the derivatives of up to BLOCK rows up to date; returns the entries of work."""
    cdef int32_t fresh[BLOCK]
    cdef int32_t moved[BLOCK]
    cdef int32_t i
    cdef int64_t k, n_moved = 0, work = n
    if r.phase == SWEEP:
        derivatives_in_order(r, ids[0], n, fresh)
    else:
        derivatives_of(r, ids, n, fresh)
    for k in range(n):
        moved[n_moved] = <int32_t> k
        n_moved += fresh[k] != r.q[ids[k]]
    for k in range(n_moved):
        if k + AHEAD < n_moved:
            fetch_row(r, ids[moved[k + AHEAD]])
        i = ids[moved[k]]
        push_row(r, change, sums, i, fresh[moved[k]] - r.q[i])
        r.q[i] = <int16_t> fresh[moved[k]]
        work += r.row_offsets[i + 1] - r.row_offsets[i]
    r.counters.evaluated += n
    r.counters.changed += n_moved
    r.counters.pushed += work - n
    if r.calendar:
        for k in range(n):
            schedule(r, ids[k])
        work += SCHEDULING * n
    return work


# --- one move, slice by slice ----------------------------------------------------------------

cdef void empty_calendar(rows_state* r) noexcept nogil:
    memset(r.due, 0xff, r.table.n_rows * sizeof(int32_t))
    memset(r.head, 0xff, (r.n_steps + 1) * sizeof(int32_t))
    memset(r.n_due, 0, (r.n_steps + 1) * sizeof(int32_t))


cdef void begin_move(rows_state* r, int64_t feature, int64_t weight) noexcept nogil:
    """Start the move z += weight * x_feature, scale[at] -> scale[at + 1]."""
    cdef int64_t active
    r.cursor, r.stop = r.table.offsets[feature], r.table.offsets[feature + 1]
    r.weight = weight
    r.at += 1
    r.phase = SHIFT
    if r.calendar:
        active = r.stop - r.cursor + r.n_due[r.at]
        if active * ACTIVE_SHARE > r.table.n_rows:
            r.calendar = False
            r.calm = 0
            empty_calendar(r)


cdef void begin_sweep(rows_state* r) noexcept nogil:
    r.phase = SWEEP
    r.cursor, r.stop = 0, r.table.n_rows
    r.changed_before = r.counters.changed
    r.counters.sweeps += 1


cdef void end_shift(rows_state* r) noexcept nogil:
    if not r.shrinking:
        r.phase = DONE
    elif r.calendar:
        r.phase = DUE
    else:
        begin_sweep(r)


cdef void end_sweep(rows_state* r) noexcept nogil:
    """After CALM_SWEEPS sweeps that changed little, the calendar takes over again."""
    r.phase = DONE
    if r.calendar or not r.shrinking:
        return
    if (r.counters.changed - r.changed_before) * CALM_SHARE < r.table.n_rows:
        r.calm += 1
    else:
        r.calm = 0
    if r.calm == CALM_SWEEPS:
        r.calendar = True
        r.phase = SCHEDULE
        r.cursor = 0


cdef int64_t next_shifted(rows_state* r, int32_t* ids) noexcept nogil:
    """Move the margins of the next rows that hold the feature; their ids go to `ids`."""
    cdef int64_t n = min(<int64_t> BLOCK, r.stop - r.cursor), k, e
    for k in range(n):
        e = r.cursor + k
        ids[k] = r.table.rows[e]
        r.z[ids[k]] += r.weight * entry_value(&r.table, e)
    r.cursor += n
    return n


cdef int64_t next_due(rows_state* r, int32_t* ids) noexcept nogil:
    cdef int64_t n = 0
    while n < BLOCK and r.head[r.at] >= 0:
        ids[n] = r.head[r.at]
        unlink(r, ids[n])
        n += 1
    r.counters.due += n
    return n


cdef int64_t next_in_order(rows_state* r, int32_t* ids) noexcept nogil:
    cdef int64_t n = min(<int64_t> BLOCK, r.stop - r.cursor), k
    for k in range(n):
        ids[k] = <int32_t> (r.cursor + k)
    r.cursor += n
    return n


cdef bint advance(rows_state* r, score_change* change, sum_t* sums) noexcept nogil:
    """About SLICE entries of the phase at hand; True while some of the move is left."""
    cdef int32_t ids[BLOCK]
    cdef int64_t n, k, work = 0
    cdef move_phase begun = r.phase
    while r.phase != DONE and r.phase == begun and work < SLICE:
        if r.phase == SHIFT:
            n = next_shifted(r, ids)
            if n == 0:
                end_shift(r)
            elif r.calendar or not r.shrinking:
                work += refresh(r, change, sums, ids, n)
            else:
                work += n
        elif r.phase == DUE:
            n = next_due(r, ids)
            if n == 0:
                r.phase = DONE
            work += refresh(r, change, sums, ids, n)
        elif r.phase == SWEEP:
            n = next_in_order(r, ids)
            if n == 0:
                end_sweep(r)
            work += refresh(r, change, sums, ids, n)
        else:
            n = next_in_order(r, ids)
            if n == 0:
                r.phase = DONE
            for k in range(n):
                schedule(r, ids[k])
            work += SCHEDULING * n
    return r.phase != DONE


cdef void advance_span(rows_state* r, score_change* change, sum_t* sums) noexcept nogil:
    """All of a span of a SHIFT or SWEEP, with no calendar; its end is not the end of the phase."""
    cdef int32_t ids[BLOCK]
    cdef int64_t n
    while r.cursor < r.stop:
        n = next_in_order(r, ids) if r.phase == SWEEP else next_shifted(r, ids)
        if r.phase == SWEEP or not r.shrinking:
            refresh(r, change, sums, ids, n)


cdef void count_in(row_counters* total, const row_counters* more) noexcept nogil:
    total.evaluated += more.evaluated
    total.changed += more.changed
    total.pushed += more.pushed


# --- columns ---------------------------------------------------------------------------------

cdef int64_t column_score(void* rows, int64_t feature) noexcept nogil:
    """sum_i q_i * x_ij for one feature.  O(entries of the column)."""
    cdef rows_state* r = <rows_state*> rows
    cdef const int32_t* ids = r.table.rows
    cdef const int16_t* q = r.q
    cdef int64_t e, total = 0, start = r.table.offsets[feature], stop = r.table.offsets[feature + 1]
    if r.table.kind == NO_VALUES:
        for e in range(start, stop):
            total += q[ids[e]]
    else:
        for e in range(start, stop):
            total += q[ids[e]] * entry_value(&r.table, e)
    return total


cdef int64_t sum_columns(rows_state* r, const int32_t* loud, int64_t first, int64_t stop,
                         sum_t* sums) noexcept nogil:
    """sums[l] = score of loud[l], l from `first`, about SLICE entries; returns where it ended."""
    cdef int64_t work = 0, l = first
    while l < stop and work < SLICE:
        sums[l] = <sum_t> column_score(r, loud[l])
        work += 1 + r.table.offsets[loud[l] + 1] - r.table.offsets[loud[l]]
        l += 1
    return l


cdef void count_by_row(const column_table* table, int64_t feature, int64_t* counts) noexcept nogil:
    cdef int64_t e
    for e in range(table.offsets[feature], table.offsets[feature + 1]):
        counts[table.rows[e]] += 1


cdef void fill_by_row(const column_table* table, int64_t feature, id_t loud, int64_t* fill,
                      id_t* loud_of, void* values) noexcept nogil:
    cdef int64_t e, place, i
    for e in range(table.offsets[feature], table.offsets[feature + 1]):
        i = table.rows[e]
        place = fill[i]
        fill[i] = place + 1
        loud_of[place] = loud
        if table.kind == INT8_VALUES:
            (<int8_t*> values)[place] = (<const int8_t*> table.values)[e]
        elif table.kind != NO_VALUES:
            (<int16_t*> values)[place] = (<const int16_t*> table.values)[e]


def _count_rows(ColumnTable table, const int32_t[::1] loud, int64_t l, int64_t stop,
                int64_t[::1] counts):
    """counts[i] += entries of row i in the loud columns l..stop, in slices."""
    cdef int64_t work
    while l < stop:
        with nogil:
            work = 0
            while l < stop and work < SLICE:
                count_by_row(&table.view, loud[l], &counts[0])
                work += 1 + table.view.offsets[loud[l] + 1] - table.view.offsets[loud[l]]
                l += 1
        PyErr_CheckSignals()


def _fill_rows(ColumnTable table, const int32_t[::1] loud, int64_t l, int64_t stop,
               int64_t[::1] fill, id_t[::1] loud_of, char[::1] values):
    """Append the loud columns l..stop to the rows, in slices; `fill` says where each goes on."""
    cdef int64_t work
    while l < stop:
        with nogil:
            work = 0
            while l < stop and work < SLICE:
                fill_by_row(&table.view, loud[l], <id_t> l, &fill[0], &loud_of[0], &values[0])
                work += 1 + table.view.offsets[loud[l] + 1] - table.view.offsets[loud[l]]
                l += 1
        PyErr_CheckSignals()


cdef class Rows:
    """Margins and quantised derivatives of every row of a table.

    table     ColumnTable
    loud      int32 (n_loud,) ascending: the features whose scores are kept
    target    int32 (n_rows,) the label's part of the derivative, in units of 2^-16 / R
    dither    uint16 (n_rows,) the rounding offsets u_i in units of 2^-16
    nodes     int32 the table of the loss (see loss.pxd); limit is R
    scale     float64 (n_steps + 1,) non-increasing if `shrinking`, else constant: fixed-point
              margin per unit of z after t moves
    offset_unit  fixed-point margin per unit of what `shift_offset` adds
    crew      the threads that share large pieces of work; None: one
    """

    def __cinit__(self, ColumnTable table, const int32_t[::1] loud, const int32_t[::1] target,
                  const uint16_t[::1] dither, const int32_t[::1] nodes, int32_t limit,
                  const double[::1] scale, bint shrinking, double offset_unit=0.0, crew=None):
        cdef int64_t n = table.view.n_rows
        cdef rows_state* r = &self.state
        self.table = table
        self.loud, self.target, self.dither = loud.base, target.base, dither.base
        self.nodes, self.scale = nodes.base, scale.base
        r.table = table.view
        r.target = &target[0]
        r.dither = &dither[0]
        r.loss.nodes = &nodes[0]
        r.loss.limit = limit
        r.scale = &scale[0]
        r.n_steps = <int32_t> (scale.shape[0] - 1)
        self.offset_unit = offset_unit
        self.crew = Crew() if crew is None else crew
        r.shrinking = shrinking
        r.calendar = shrinking
        self._orient(loud)
        self._allot(n)
        most = int(np.diff(table.offsets).max()) * table.largest * limit
        self.change = ScoreChange(loud.shape[0], 2 * most >= 2**31)
        self.own_changes = [ScoreChange(loud.shape[0], 2 * most >= 2**31)
                            for _ in range(1, self.crew.threads)]

    def _orient(self, const int32_t[::1] loud):
        """Build the row orientation over the loud features.  O(their entries).

        Every member of the crew has a span of the loud columns, and its own place in every row, so
        that loud ids ascend in a row whatever the crew.
        """
        cdef rows_state* r = &self.state
        ends = self._span_ends()
        counts = np.zeros((self.crew.threads, r.table.n_rows), dtype=np.int64)
        self.crew.each(lambda member: _count_rows(
            self.table, self.loud, ends[member], ends[member + 1], counts[member]))
        self.row_offsets = np.zeros(r.table.n_rows + 1, dtype=np.int64)
        np.cumsum(counts.sum(axis=0), out=self.row_offsets[1:])
        n_entries = max(int(self.row_offsets[-1]), 1)
        r.wide_ids = loud.shape[0] > 2**16
        self.loud_of = claimed(n_entries, np.int32 if r.wide_ids else np.uint16)
        stored = self.table.values
        self.row_values = claimed(1 if stored is None else n_entries,
                                  np.int8 if stored is None else stored.dtype)
        places = self.row_offsets[:-1] + np.cumsum(counts, axis=0) - counts
        self.crew.each(lambda member: _fill_rows(
            self.table, self.loud, ends[member], ends[member + 1], places[member], self.loud_of,
            self.row_values.view(np.int8)))
        cdef const int64_t[::1] offsets = self.row_offsets
        cdef const char[::1] loud_of = self.loud_of.view(np.int8)
        cdef const char[::1] values = self.row_values.view(np.int8)
        r.row_offsets = &offsets[0]
        r.loud_of = &loud_of[0]
        r.row_values = &values[0]

    def _span_ends(self) -> list:
        """Where the members' spans of the loud columns end: about as many entries in each."""
        entries = np.cumsum(np.diff(self.table.offsets)[self.loud])
        whole = entries[-1] if len(entries) else 0
        shares = [whole * member // self.crew.threads for member in range(1, self.crew.threads)]
        return [0, *np.searchsorted(entries, shares).tolist(), len(self.loud)]

    def _allot(self, int64_t n):
        cdef rows_state* r = &self.state
        self.z = np.zeros(n)
        self.offset = np.zeros(n, dtype=np.int32)
        self.q = np.zeros(n, dtype=np.int16)
        cdef double[::1] z = self.z
        cdef int32_t[::1] offset = self.offset
        cdef int16_t[::1] q = self.q
        r.z, r.offset, r.q = &z[0], &offset[0], &q[0]
        if not r.shrinking:
            return
        self.due, self.previous, self.following = (np.empty(n, dtype=np.int32) for _ in range(3))
        self.head, self.n_due = (np.empty(r.n_steps + 1, dtype=np.int32) for _ in range(2))
        cdef int32_t[::1] due = self.due, previous = self.previous, following = self.following
        cdef int32_t[::1] head = self.head, n_due = self.n_due
        r.due, r.previous, r.following = &due[0], &previous[0], &following[0]
        r.head, r.n_due = &head[0], &n_due[0]
        empty_calendar(r)

    @property
    def n_bytes(self) -> int:
        """Bytes of the row orientation."""
        return self.row_offsets.nbytes + self.loud_of.nbytes + self.row_values.nbytes

    @property
    def counters(self) -> dict:
        return self.state.counters

    @property
    def n_rows(self) -> int:
        return self.state.table.n_rows

    @property
    def moves_made(self) -> int:
        return self.state.at

    def place(self, int64_t intercept):
        """Before the first scores: the derivative of every row at this intercept (fixed-point)."""
        cdef double started = perf_counter()
        self.state.intercept = <int32_t> intercept
        self._evaluate(self.q)
        self.seconds_first_scores += perf_counter() - started

    def first_scores(self):
        """The scores of the loud features from their columns, as a change from 0."""
        cdef double started = perf_counter()
        ends = self._span_ends()
        self.change.view.dense = True
        self.crew.each(lambda member: self._sum_columns(ends[member], ends[member + 1]))
        self.seconds_first_scores += perf_counter() - started
        return self.change

    def _sum_columns(self, int64_t l, int64_t stop):
        cdef rows_state* r = &self.state
        cdef score_change* change = &self.change.view
        cdef const int32_t[::1] loud = self.loud
        while l < stop and not self.crew.stopped:
            with nogil:
                if change.wide:
                    l = sum_columns(r, &loud[0], l, stop, <int64_t*> change.sums)
                else:
                    l = sum_columns(r, &loud[0], l, stop, <int32_t*> change.sums)
            PyErr_CheckSignals()

    def move(self, int64_t feature, int64_t weight):
        """z += weight * x_feature, and on to the next scale; returns the change of the scores."""
        if self.state.at == self.state.n_steps:
            raise IndexError("every planned move is made")
        if not 0 <= feature < self.state.table.n_cols:
            raise IndexError(f"no feature {feature}")
        with nogil:
            begin_move(&self.state, feature, weight)
        return self._finish()

    def shift(self, const int32_t[::1] features, const int64_t[::1] weights, int64_t intercept):
        """z += sum_j weights[j] * x_features[j], and a new intercept (fixed-point).

        Derivatives and scores wait for `catch_up`; the course does not move on. O(entries of the
        columns). Raises IndexError for an unknown feature.
        """
        self.state.intercept = <int32_t> intercept
        self._add_columns(features, weights, self.z, 0.0)

    def shift_offset(self, const int32_t[::1] features, const int64_t[::1] weights,
                     int64_t intercept):
        """Like `shift`, for a part of the margin that moves do not shrink.

        offset = offset_unit * base in fixed point, where base += sum_j weights[j] * x_features[j]
        is a whole number below 2^53.
        """
        self.state.intercept = <int32_t> intercept
        if self.base is None:
            self.base = np.zeros(self.state.table.n_rows)
        self._add_columns(features, weights, self.base, self.offset_unit)

    def _add_columns(self, const int32_t[::1] features, const int64_t[::1] weights,
                     double[::1] sums, double unit):
        """sums += sum_j weights[j] * x_features[j]; offsets follow unless `unit` is 0."""
        cdef rows_state* r = &self.state
        cdef int64_t k, e, stop, slice_stop, i
        cdef double weight, started = perf_counter()
        for k in range(features.shape[0]):
            if not 0 <= features[k] < r.table.n_cols:
                raise IndexError(f"no feature {features[k]}")
        for k in range(features.shape[0]):
            weight = <double> weights[k]
            e, stop = r.table.offsets[features[k]], r.table.offsets[features[k] + 1]
            while e < stop:
                slice_stop = min(e + SLICE, stop)
                with nogil:
                    while e < slice_stop:
                        i = r.table.rows[e]
                        sums[i] += weight * <double> entry_value(&r.table, e)
                        if unit != 0:
                            r.offset[i] = far_clipped(unit * sums[i])
                        e += 1
                PyErr_CheckSignals()
        self.seconds_updates += perf_counter() - started

    def derivatives(self):
        """int16 (n_rows,): every derivative at the margins as they are, those of `shift` included.

        Nothing is pushed: `q` stays what the scores were made from.
        """
        cdef double started = perf_counter()
        values = np.empty(self.n_rows, dtype=np.int16)
        self._evaluate(values)
        self.seconds_updates += perf_counter() - started
        return values

    def _evaluate(self, out):
        """out[i] = derivative of row i at the margins as they are."""
        self.crew.share(self.n_rows, lambda member, first, stop:
                        self._evaluate_span(first, stop, out))
        self.state.counters.evaluated += self.n_rows

    def _evaluate_span(self, int64_t first, int64_t stop, int16_t[::1] out):
        cdef int32_t fresh[BLOCK]
        cdef int64_t n, k
        with nogil:
            while first < stop:
                n = min(<int64_t> BLOCK, stop - first)
                derivatives_in_order(&self.state, first, n, fresh)
                for k in range(n):
                    out[first + k] = <int16_t> fresh[k]
                first += n
        PyErr_CheckSignals()

    def catch_up(self):
        """Bring every derivative up to date after `shift`; returns the change of the scores."""
        begin_sweep(&self.state)
        return self._finish()

    def _finish(self):
        cdef rows_state* r = &self.state
        cdef score_change* change = &self.change.view
        cdef bint more = True
        cdef double started = perf_counter()
        while more:
            if self._is_shared():
                self._share_phase()
            with nogil:
                if change.wide:
                    more = advance(r, change, <int64_t*> change.sums)
                else:
                    more = advance(r, change, <int32_t*> change.sums)
            PyErr_CheckSignals()
        self.seconds_updates += perf_counter() - started
        return self.change

    def _is_shared(self) -> bool:
        """Whether the phase at hand is one that members can take spans of, and long enough."""
        cdef rows_state* r = &self.state
        return (self.crew.threads > 1 and (r.phase == SHIFT or r.phase == SWEEP)
                and not r.calendar and r.stop - r.cursor >= <int64_t> self.crew.least)

    def _share_phase(self):
        """All of the phase at hand but its end."""
        cdef rows_state* r = &self.state
        cdef int64_t first = r.cursor
        self.change.view.dense = True
        self.crew.share(r.stop - first, lambda member, start, stop:
                        self._advance_span(member, first + start, first + stop))
        r.cursor = r.stop
        for own in self.own_changes:
            self.change.sums += own.sums
            own.sums[:] = 0

    def _advance_span(self, int64_t member, int64_t first, int64_t stop):
        cdef rows_state span = self.state
        cdef ScoreChange own = self.own_changes[member - 1] if member else self.change
        cdef score_change* change = &own.view
        memset(&span.counters, 0, sizeof(row_counters))
        span.cursor, span.stop = first, stop
        change.dense = True
        with nogil:
            if change.wide:
                advance_span(&span, change, <int64_t*> change.sums)
            else:
                advance_span(&span, change, <int32_t*> change.sums)
        count_in(&self.state.counters, &span.counters)
        PyErr_CheckSignals()

    def total(self) -> int:
        """sum_i q_i: the intercept's score."""
        return int(self.q.sum(dtype=np.int64))

    def score(self, int64_t feature) -> int:
        """sum_i q_i * x_ij, from the column."""
        return column_score(&self.state, feature)

    @wraparound(True)
    def _check(self):
        """Assert every invariant.  O(nnz + rows * steps)."""
        cdef rows_state* r = &self.state
        cdef int32_t i, t
        assert len(self.nodes) == (2 * MARGIN_END >> CELL_BITS) + 1
        assert (np.diff(self.nodes) >= 0).all(), "the calendar needs a derivative that never falls"
        counts = np.zeros(self.table.n_rows, dtype=np.int64)
        offsets, rows = np.asarray(self.table.offsets), np.asarray(self.table.rows)
        for j in self.loud:
            counts[rows[offsets[j]:offsets[j + 1]]] += 1
        assert (np.diff(self.row_offsets) == counts).all()
        for i in range(r.table.n_rows):
            assert r.q[i] == derivative_at(r, i, r.at), "derivatives are up to date"
        if not r.calendar:
            return
        listed = {}
        for t in range(r.n_steps + 1):
            i = r.head[t]
            while i >= 0:
                assert i not in listed and r.due[i] == t
                listed[i] = t
                i = r.following[i]
            assert r.n_due[t] == sum(1 for due in listed.values() if due == t)
        for i in range(r.table.n_rows):
            changes = [t for t in range(r.at + 1, r.n_steps + 1)
                       if derivative_at(r, i, t) != r.q[i]]
            assert listed.get(i, -1) == (changes[0] if changes else -1), "the calendar is right"
            assert r.due[i] == listed.get(i, -1)
