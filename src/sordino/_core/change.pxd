from libc.stdint cimport int32_t, int64_t

ctypedef struct score_change:
    void* sums              # (n_loud,) int32, or int64 if wide; 0 where nothing changed
    bint wide
    int32_t* touched        # loud ids with a change, while the change is sparse
    int64_t n_touched
    int64_t room            # more than this many touched ids make the change dense
    bint dense

ctypedef fused sum_t:
    int32_t
    int64_t

cdef class ScoreChange:
    cdef score_change view
    cdef readonly object sums, touched
