from libc.stdint cimport int32_t, int64_t

cdef enum:
    MARGIN_BITS = 17        # margins are fixed-point, in units of 2^-17
    CELL_BITS = 10          # a cell of the derivative table spans 2^-7 of margin
    MARGIN_END = 1 << 21    # the table covers margins in [-16, 16)
    FAR = 1 << 29           # further out than any intercept can bring back
    GRAIN_BITS = 16         # derivatives come in units of 2^-16 / R before they are rounded

ctypedef struct loss_table:
    const int32_t* nodes    # (MARGIN_END * 2 >> CELL_BITS) + 1 values of R * 2^16 * derivative
    int32_t limit           # derivatives are clipped to |q| <= limit

cdef inline int32_t far_clipped(double margin) noexcept nogil:
    """A fixed-point margin, truncated; two of them and an intercept add up within 32 bits."""
    return <int32_t> min(max(margin, -FAR), FAR)

cdef inline int32_t fixed_margin(double scale, double z, int32_t rest) noexcept nogil:
    """scale * z + rest in fixed point, clipped to the range of the table."""
    cdef int32_t margin = far_clipped(scale * z) + rest
    return min(max(margin, <int32_t> -MARGIN_END), <int32_t> MARGIN_END - 1)

cdef inline int32_t rounded_derivative(const loss_table* loss, int32_t margin, int32_t target,
                                       int32_t dither) noexcept nogil:
    """floor(R * derivative + u), clipped to [-limit, limit]; linear between the table's nodes.

    margin comes from `fixed_margin`; target is the label's part of the derivative and dither is u,
    both in units of 2^-16.
    """
    cdef int32_t at = margin + MARGIN_END
    cdef int32_t cell = at >> CELL_BITS, part = at & ((1 << CELL_BITS) - 1)
    cdef int64_t low = loss.nodes[cell], rise = loss.nodes[cell + 1] - low
    cdef int64_t fine = low + ((rise * part) >> CELL_BITS) - target + dither
    return <int32_t> min(max(fine >> GRAIN_BITS, <int64_t> -loss.limit), <int64_t> loss.limit)
