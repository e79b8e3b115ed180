from libc.stdint cimport int8_t, int32_t, int64_t, uint8_t, uint16_t

from .rows cimport Rows

# The exact score of a feature that is not kept.
ctypedef int64_t (*column_score_fn)(void* context, int64_t feature) noexcept nogil

ctypedef struct score_counters:
    int64_t picks
    int64_t tries           # proposals, accepted or not
    int64_t quiet           # quiet features evaluated
    int64_t level_moves     # scores that changed level one at a time
    int64_t rebuilds        # times the heap was built anew

ctypedef struct score_heap:
    int64_t n_features
    int64_t n_loud
    const int32_t* loud     # (n_loud,) feature ids, ascending
    void* score             # (n_loud,) int32, or int64 if wide
    bint wide
    const uint8_t* barred   # (n_features,) 1: out of the draw; NULL while none is
    const int8_t* powers    # (n_features,), NULL: all 0
    int64_t* n_quiet        # (121,) quiet features in the draw, by power from -60
    int64_t least_power
    int64_t lowest          # highest power of a quiet feature in the draw; none: least_power
    int64_t multiplier      # kappa = multiplier / 2^shift
    int shift
    # loud features by level: bucket k holds order[first[k]] .. order[first[k + 1] - 1]
    int64_t base            # bucket k >= 1 holds level base + k - 1; bucket 0 all below base
    int32_t top             # the highest bucket in use, at least 1
    int32_t* first          # (N_BUCKETS + 1,)
    int32_t* order          # (n_loud,)
    int32_t* place          # (n_loud,) where in `order`
    uint16_t* bucket        # (n_loud,)
    column_score_fn column_score
    void* context
    score_counters counters

cdef class Scores:
    cdef score_heap heap
    cdef readonly Rows source
    cdef readonly object loud, score, barred, powers
    cdef readonly double seconds_picks, seconds_heap
    cdef object first, order, place, bucket, n_quiet
    cdef int64_t n_barred
