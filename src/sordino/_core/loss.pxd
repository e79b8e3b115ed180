from libc.stdint cimport int16_t, int32_t, int64_t

cdef enum:
    MARGIN_BITS = 17        # margins are fixed-point, in units of 2^-17
    CELL_BITS = 10          # a cell of the derivative table spans 2^-7 of margin
    MARGIN_END = 1 << 21    # the table covers margins in [-16, 16)
    GRAIN_BITS = 16         # derivatives come in units of 2^-16 / R before they are rounded

ctypedef struct loss_table:
    const int32_t* nodes    # (MARGIN_END * 2 >> CELL_BITS) + 1 values of R * 2^16 * derivative
    int32_t limit           # derivatives are clipped to |q| <= limit

cdef inline int32_t fine_derivative(const loss_table* loss, int64_t margin) noexcept nogil:
    """R * 2^16 * derivative at a fixed-point margin: linear between nodes, constant outside."""
    if margin < -MARGIN_END:
        margin = -MARGIN_END
    elif margin >= MARGIN_END:
        margin = MARGIN_END - 1
    cdef int64_t at = margin + MARGIN_END
    cdef int64_t cell = at >> CELL_BITS, part = at & ((1 << CELL_BITS) - 1)
    cdef int64_t low = loss.nodes[cell]
    return <int32_t> (low + (((loss.nodes[cell + 1] - low) * part) >> CELL_BITS))

cdef inline int32_t rounded_derivative(const loss_table* loss, int64_t margin, int32_t target,
                                       int32_t dither) noexcept nogil:
    """floor(R * derivative + u), clipped to [-limit, limit].

    target is the label's part of the derivative and dither is u, both in units of 2^-16.
    """
    cdef int64_t fine = <int64_t> fine_derivative(loss, margin) - target + dither
    cdef int64_t q = fine >> GRAIN_BITS
    if q > loss.limit:
        return loss.limit
    if q < -loss.limit:
        return -loss.limit
    return <int32_t> q
