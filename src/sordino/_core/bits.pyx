"""Random bits, and the exact draws made from them.

Every outcome is decided by comparing integers with fresh random bits. Where a floating-point
number helps, it only settles comparisons that are clear by a margin of 2^-32; what lies closer is
settled with integers of growing size, so the outcome is the one exact arithmetic would give.

Thread safety: a `Bits` belongs to one fit and one thread. A forked child discards what its
parent had buffered.
"""

from hashlib import shake_256
from math import isqrt
from os import register_at_fork, urandom
from weakref import WeakSet

import numpy as np

from libc.math cimport exp2, ldexp
from libc.stdint cimport int64_t, uint64_t

cdef enum:
    N_WORDS = 2048
    N_AT_ONCE = 1 << 20

FAILED = "the source of random bits failed"

cdef double CLEAR = ldexp(1.0, -32)

_live = WeakSet()


def _discard_all():
    for bits in _live:
        (<Bits> bits)._discard()


register_at_fork(after_in_child=_discard_all)


cdef uint64_t next_word(bit_source* source) noexcept nogil:
    """64 fresh random bits."""
    if source.at == source.n_words:
        with gil:
            _refill(source)
    source.n_drawn += 1
    source.at += 1
    return source.words[source.at - 1]


cdef void _refill(bit_source* source) noexcept:
    cdef Bits bits = <Bits> source.owner
    source.at = 0
    try:
        bits.buffer[:] = bits._fresh(N_WORDS, np.dtype("<u8"))
    except BaseException as failure:
        bits._keep(failure)
        bits.buffer[:] = 0


cdef int next_coin(bit_source* source) noexcept nogil:
    """One fair bit."""
    if source.n_coins == 0:
        source.coins = next_word(source)
        source.n_coins = 64
    source.n_coins -= 1
    cdef int coin = source.coins & 1
    source.coins >>= 1
    return coin


cdef uint128_t next_below(bit_source* source, uint128_t n) noexcept nogil:
    """Uniform on 0..n-1, for n >= 1: the lowest bits that can hold n-1, redrawn until below n."""
    cdef uint128_t mask = n - 1, draw
    mask |= mask >> 1
    mask |= mask >> 2
    mask |= mask >> 4
    mask |= mask >> 8
    mask |= mask >> 16
    mask |= mask >> 32
    mask |= mask >> 64
    while True:
        draw = next_word(source)
        if mask >> 64:
            draw = (draw << 64) | next_word(source)
        draw &= mask
        if draw < n:
            return draw


cdef int bernoulli_pow2(bit_source* source, uint64_t whole, uint64_t part, int b) noexcept nogil:
    """1 with probability exactly 2^-(whole + part/2^b), for 0 <= part < 2^b, b <= 62."""
    while whole >= 64:
        if next_word(source) != 0:
            return 0
        whole -= 64
    if whole and (next_word(source) >> (64 - whole)) != 0:
        return 0
    if part == 0:
        return 1
    cdef uint64_t word = next_word(source)
    cdef double drawn = ldexp(<double> word, -64)
    cdef double chance = exp2(-ldexp(<double> part, -b))
    if drawn < chance - CLEAR:
        return 1
    if drawn > chance + CLEAR:
        return 0
    with gil:
        return _settle(source, word, part, b)


cdef int _settle(bit_source* source, uint64_t word, uint64_t part, int b) noexcept:
    cdef Bits bits = <Bits> source.owner
    try:
        return below_pow2(int(word), int(part), b, bits.word)
    except BaseException as failure:
        bits._keep(failure)
        return 0


def pow2_bounds(part: int, b: int, precision: int) -> tuple[int, int]:
    """Integers (low, high) with low <= 2^(precision - part/2^b) <= high, high - low <= 4b + 4.

    2^(-part/2^b) is the product, over the bits of `part`, of repeated square roots of 1/2; each
    root and each product is rounded down for `low` and up for `high`.
    """
    one = 1 << precision
    low, high = one, one
    root_low = root_high = one >> 1
    for place in range(b - 1, -1, -1):
        root_low = isqrt(root_low << precision)
        root_high = isqrt(root_high << precision) + 1
        if part >> place & 1:
            low = low * root_low >> precision
            high = (high * root_high >> precision) + 1
    return low, min(high, one)


def below_pow2(prefix: int, part: int, b: int, more) -> int:
    """1 if the real number 0.prefix... lies below 2^(-part/2^b), else 0.

    `prefix` is its first 64 bits; `more()` gives the next 64 whenever those seen so far do not
    decide. The number lies in [prefix, prefix + 1) * 2^-n_bits.
    """
    n_bits = 64
    while True:
        low, high = pow2_bounds(part, b, n_bits)
        if prefix + 1 <= low:
            return 1
        if prefix >= high:
            return 0
        prefix = prefix << 64 | more()
        n_bits += 64


def _shake_stream(seed: int):
    """callable(n_bytes) -> bytes: block k is SHAKE-256 of the seed and k, for good."""
    block = 0

    def refill(n_bytes):
        nonlocal block
        block += 1
        return shake_256(f"sordino rehearsal {seed:x} block {block}".encode()).digest(n_bytes)

    return refill


cdef class Bits:
    """A buffered source of random bits.

    Bits()              the operating system's cryptographic generator
    Bits(seed)          a reproducible stream for rehearsals: not private
    Bits(refill=call)   any callable(n_bytes) -> bytes
    """

    def __cinit__(self, seed=None, refill=None):
        self.rehearsal = seed is not None
        self.refill = refill or (urandom if seed is None else _shake_stream(seed))
        self.buffer = np.zeros(N_WORDS, dtype=np.uint64)
        cdef uint64_t[::1] words = self.buffer
        self.source.words = &words[0]
        self.source.n_words = N_WORDS
        self.source.owner = <void*> self
        self._discard()
        _live.add(self)

    def _discard(self):
        """Forget every buffered bit."""
        self.source.at = N_WORDS
        self.source.n_coins = 0
        self.source.coins = 0

    @property
    def words_drawn(self) -> int:
        return self.source.n_drawn

    def array(self, n: int, dtype):
        """`n` uniform values of an unsigned integer dtype, shape (n,)."""
        values = np.empty(n, dtype=dtype)
        stored = values.dtype.newbyteorder("<")
        for start in range(0, n, N_AT_ONCE):
            part = values[start:start + N_AT_ONCE]
            part[:] = self._fresh(len(part), stored)
        return values

    def _fresh(self, n: int, dtype):
        """`n` values straight from the source; OSError unless it gives just the bytes asked for."""
        try:
            drawn = np.frombuffer(self.refill(n * dtype.itemsize), dtype=dtype)
        except Exception as failure:
            raise OSError(FAILED) from failure
        if len(drawn) != n:
            raise OSError(FAILED)
        return drawn

    def _keep(self, failure):
        """Remember the first failure: every answer after it is void."""
        if not self.source.failed:
            self.source.failed = 1
            self.failure = failure

    def raise_failure(self):
        """Raise what the source failed with, if it did."""
        if self.source.failed:
            raise self.failure

    def word(self) -> int:
        word = int(next_word(&self.source))
        self.raise_failure()
        return word

    def below(self, n: int) -> int:
        """Uniform on 0..n-1, of any size."""
        n_bits = (n - 1).bit_length()
        while True:
            draw = 0
            for _ in range(0, n_bits, 64):
                draw = draw << 64 | self.word()
            draw &= (1 << n_bits) - 1
            if draw < n:
                return draw

    def bernoulli(self, numerator: int, denominator: int) -> bool:
        """True with probability numerator/denominator, exactly."""
        return self.below(denominator) < numerator

    def bernoulli_pow2(self, whole: int, part: int, b: int) -> bool:
        """True with probability 2^-(whole + part/2^b), exactly; 0 <= part < 2^b, b <= 62."""
        cdef int outcome = bernoulli_pow2(&self.source, whole, part, b)
        self.raise_failure()
        return bool(outcome)

    def bernoulli_exp(self, numerator: int, denominator: int) -> bool:
        """True with probability exp(-numerator/denominator), exactly, for a ratio >= 0.

        Method: Canonne, Kamath, Steinke 2020, Algorithm 1 (from memory). For a ratio g <= 1, the
        first k at which Bernoulli(g/k) fails is odd with probability exp(-g).
        """
        while numerator > denominator:
            if not self.bernoulli_exp(1, 1):
                return False
            numerator -= denominator
        k = 1
        while self.bernoulli(numerator, denominator * k):
            k += 1
        return k % 2 == 1

    def discrete_laplace(self, scale: int) -> int:
        """An integer y with probability proportional to exp(-|y|/scale), exactly; scale >= 1.

        Method: Canonne, Kamath, Steinke 2020, Algorithm 2 (from memory).
        """
        while True:
            rest = self.below(scale)
            if not self.bernoulli_exp(rest, scale):
                continue
            turns = 0
            while self.bernoulli_exp(1, 1):
                turns += 1
            size = rest + scale * turns
            negative = self.bernoulli(1, 2)
            if size or not negative:
                return -size if negative else size

    def discrete_gaussian(self, variance: int) -> int:
        """An integer y with probability proportional to exp(-y^2 / (2 variance)), exactly.

        variance is a whole number >= 1.
        Method: Canonne, Kamath, Steinke 2020, Algorithm 3 (from memory): a discrete Laplace draw of
        scale t = floor(sigma) + 1 is kept with probability
        exp(-(|y| - variance/t)^2 / (2 variance)).
        """
        scale = isqrt(variance) + 1
        while True:
            draw = self.discrete_laplace(scale)
            excess = abs(draw) * scale - variance
            if self.bernoulli_exp(excess * excess, 2 * variance * scale * scale):
                return draw

    def _check(self):
        """Assert every invariant."""
        source = self.source
        assert 0 <= source.at <= source.n_words == len(self.buffer)
        assert 0 <= source.n_coins < 64 and source.coins >> source.n_coins == 0
        assert source.n_drawn >= 0 and (source.failed == 0) == (self.failure is None)
