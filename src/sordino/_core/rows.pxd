from libc.stdint cimport int16_t, int32_t, int64_t, uint16_t

from .change cimport ScoreChange, score_change
from .loss cimport loss_table
from .table cimport ColumnTable, column_table

cdef enum move_phase:
    SHIFT       # move the margins of the rows that hold the feature
    DUE         # refresh the rows the calendar names for this step
    SWEEP       # refresh every row
    SCHEDULE    # put every row on the calendar
    DONE

ctypedef struct row_counters:
    int64_t evaluated       # derivatives computed
    int64_t changed         # quantised derivatives that changed
    int64_t pushed          # entries pushed to scores
    int64_t due             # rows taken from the calendar
    int64_t sweeps

ctypedef struct rows_state:
    column_table table
    # the row orientation, restricted to loud features
    const int64_t* row_offsets
    const void* loud_of     # uint16, or int32 if wide_ids
    bint wide_ids
    const void* row_values
    # one row each
    # margin of row i = scale[at] * z[i] + intercept + offset[i]; z is whole, below 2^53
    double* z
    int32_t* offset         # fixed-point: what no scale shrinks
    int16_t* q
    const uint16_t* dither
    const int32_t* target
    loss_table loss
    # the public course: scale[t] after t moves, in fixed-point units of margin
    const double* scale
    int32_t n_steps
    int32_t at              # moves made so far
    bint shrinking
    int32_t intercept       # fixed-point
    # the calendar: a doubly linked list of rows for each future step
    bint calendar
    int32_t* due            # step at which row i changes next, or -1
    int32_t* previous
    int32_t* following
    int32_t* head
    int32_t* n_due
    int calm                # sweeps in a row that changed few rows
    # the move at hand
    move_phase phase
    int64_t cursor
    int64_t stop
    int64_t weight
    int64_t changed_before
    row_counters counters

cdef int64_t column_score(void* rows, int64_t feature) noexcept nogil

cdef class Rows:
    cdef rows_state state
    cdef readonly ColumnTable table
    cdef readonly ScoreChange change
    cdef readonly object loud, row_offsets, loud_of, row_values
    cdef readonly object z, offset, q, dither, target, nodes, scale
    cdef readonly double offset_unit
    cdef readonly object crew
    cdef object own_changes     # a ScoreChange for every member of the crew but the first
    cdef object base        # float64 (n_rows,), whole: what `offset` is made from
    cdef readonly double seconds_first_scores, seconds_updates
    cdef object due, previous, following, head, n_due
