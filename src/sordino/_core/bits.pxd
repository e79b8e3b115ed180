from libc.stdint cimport int64_t, uint64_t

cdef extern from *:
    """
    typedef __int128 int128_t;
    typedef unsigned __int128 uint128_t;
    """
    ctypedef long long int128_t             # 128 bits wide in C
    ctypedef unsigned long long uint128_t   # 128 bits wide in C

ctypedef struct bit_source:
    uint64_t* words     # fresh random words, each used once
    int64_t n_words
    int64_t at          # index of the next unused word
    uint64_t coins      # a word being spent one bit at a time
    int n_coins
    int failed          # set when a refill failed; every answer after that is void
    int64_t n_drawn     # words used so far
    void* owner         # the Python object that refills

cdef uint64_t next_word(bit_source* source) noexcept nogil
cdef int next_coin(bit_source* source) noexcept nogil
cdef uint128_t next_below(bit_source* source, uint128_t n) noexcept nogil
cdef int bernoulli_pow2(bit_source* source, uint64_t whole, uint64_t part, int b) noexcept nogil

cdef class Bits:
    cdef bit_source source
    cdef object refill          # callable(n_bytes) -> bytes
    cdef object buffer          # owns the memory behind source.words
    cdef object failure         # what the source failed with
    cdef readonly bint rehearsal
    cdef object __weakref__
