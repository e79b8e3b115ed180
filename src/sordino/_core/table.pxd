from libc.stdint cimport int8_t, int16_t, int32_t, int64_t

cdef enum value_kind:
    NO_VALUES = 0       # every stored entry is 1
    INT8_VALUES = 1
    INT16_VALUES = 2

ctypedef struct column_table:
    int64_t n_rows
    int64_t n_cols
    int64_t nnz
    const int64_t* offsets      # (n_cols + 1,)
    const int32_t* rows         # (nnz,) ascending within a column
    const void* values          # (nnz,) of `kind`, NULL for NO_VALUES
    value_kind kind

cdef inline int64_t entry_value(const column_table* table, int64_t e) noexcept nogil:
    if table.kind == NO_VALUES:
        return 1
    if table.kind == INT8_VALUES:
        return (<const int8_t*> table.values)[e]
    return (<const int16_t*> table.values)[e]

cdef class ColumnTable:
    cdef column_table view
    cdef readonly object offsets, rows, values
    cdef readonly int64_t largest
