"""Random bits, and the exact draws made from them.

Every outcome is decided by comparing integers with fresh random bits. Where a floating-point
number helps, it only settles comparisons that are clear by a margin of 2^-32; what lies closer is
settled with integers of growing size, so the outcome is the one exact arithmetic would give.

Thread safety: a `Bits` belongs to one fit and one thread. A forked child discards what its
parent had buffered.
"""

from functools import partial
from hashlib import shake_256
from math import isqrt
from os import register_at_fork, urandom
from weakref import WeakSet

import numpy as np

from libc.math cimport exp, exp2, ldexp, sqrt
from libc.stdint cimport int64_t, uint64_t

cdef enum:
    N_WORDS = 2048
    N_AT_ONCE = 1 << 20
    N_DRAWS = 1024
    UNCLEAR = -1

FAILED = "the source of random bits failed"
WORD_BITS = 64
MOST_SCALE = 2**63      # in C: a number below twice the scale is one word

cdef double CLEAR = ldexp(1.0, -32)
cdef double LAST_BIT = ldexp(1.0, -64)

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


cdef int clearly_below(uint64_t word, double chance) noexcept nogil:
    """1 if 0.word... is clearly below `chance`, 0 if it is clearly above, else UNCLEAR.

    Right as long as `chance` errs by less than 2^-33; `word` as a double errs by 2^-53 at most.
    """
    cdef double drawn = <double> word * LAST_BIT
    if drawn < chance - CLEAR:
        return 1
    if drawn > chance + CLEAR:
        return 0
    return UNCLEAR


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
    cdef int below = clearly_below(word, exp2(-ldexp(<double> part, -b)))
    if below == UNCLEAR:
        below = _settle_pow2(source, word, part, b)
    return below


cdef int bernoulli_exp(bit_source* source, uint64_t numerator, uint64_t denominator) noexcept nogil:
    """1 with probability exactly exp(-numerator/denominator).

    The double g for the ratio errs by 2^-51 g at most (three roundings), so exp(-g) does by less
    than 2^-51, as g exp(-g) <= 1/e, and by what the library's `exp` adds: a few units of 2^-53.
    """
    cdef uint64_t word = next_word(source)
    cdef int below = clearly_below(word, exp(-(<double> numerator / <double> denominator)))
    if below == UNCLEAR:
        below = _settle_exp(source, word, numerator, denominator)
    return below


cdef int128_t next_laplace(bit_source* source, uint64_t scale) noexcept nogil:
    """Bits.discrete_laplace, word for word, for scale <= 2^63; 0 if the source failed.

    Every turn takes a word and words are counted in 63 bits: |y| < scale * 2^63 <= 2^126.
    """
    cdef uint64_t draw, rest
    cdef int128_t size
    while not source.failed:
        draw = <uint64_t> next_below(source, <uint128_t> scale << 1)
        rest = draw >> 1
        if not bernoulli_exp(source, rest, scale):
            continue
        size = rest
        while bernoulli_exp(source, 1, 1) and not source.failed:
            size += scale
        if draw & 1 == 0:
            return size
        if size != 0:
            return -size
    return 0


cdef int128_t next_gaussian(bit_source* source, uint128_t variance, uint64_t scale) noexcept nogil:
    """Bits.plain_gaussian, word for word, for scale = floor(sigma) + 1 <= 2^63.

    0 if the source failed.
    """
    cdef int128_t draw
    while not source.failed:
        draw = next_laplace(source, scale)
        if keep_laplace(source, draw if draw > 0 else -draw, variance, scale):
            return draw
    return 0


cdef int keep_laplace(
    bit_source* source, uint128_t size, uint128_t variance, uint64_t scale
) noexcept nogil:
    """1 with probability exactly exp(-(size - variance/scale)^2 / (2 variance)).

    That is exp(-x^2/2) for x = size/sigma - sigma/scale. Either quotient errs by less than 2^-50
    of itself (five roundings at most), and sigma/scale < 1; so x errs by less than
    2^-50 (|x| + 2) + 2^-53 |x|, and exp(-x^2/2), whose slope is |x| exp(-x^2/2), by less than
    2^-48. The roundings of x^2/2 and the library's `exp` add less than 2^-50.
    """
    cdef double sigma = sqrt(<double> variance)
    cdef double x = <double> size / sigma - sigma / <double> scale
    cdef uint64_t word = next_word(source)
    cdef int below = clearly_below(word, exp(-x * x / 2))
    if below == UNCLEAR:
        below = _settle_gaussian(source, word, size, variance, scale)
    return below


cdef int _settle_pow2(bit_source* source, uint64_t word, uint64_t part, int b) noexcept with gil:
    cdef Bits bits = <Bits> source.owner
    try:
        return below_pow2(int(word), int(part), b, bits.word)
    except BaseException as failure:
        bits._keep(failure)
        return 0


cdef int _settle_exp(
    bit_source* source, uint64_t word, uint64_t numerator, uint64_t denominator
) noexcept with gil:
    cdef Bits bits = <Bits> source.owner
    try:
        return below_exp(int(word), int(numerator), int(denominator), bits.word)
    except BaseException as failure:
        bits._keep(failure)
        return 0


cdef int _settle_gaussian(
    bit_source* source, uint64_t word, uint128_t size, uint128_t variance, uint64_t scale
) noexcept with gil:
    cdef Bits bits = <Bits> source.owner
    try:
        ratio = _surplus(as_int(size), as_int(variance), int(scale))
        return below_exp(int(word), *ratio, bits.word)
    except BaseException as failure:
        bits._keep(failure)
        return 0


cdef object as_int(int128_t value):
    """The Python int; Cython itself takes 128-bit numbers for shorter ones."""
    cdef int64_t high = <int64_t> (value >> 64)
    cdef uint64_t low = <uint64_t> value
    if value == <int64_t> low:
        return <int64_t> low
    return int(high) << 64 | int(low)


def _surplus(size: int, variance: int, scale: int) -> tuple[int, int]:
    """(size - variance/scale)^2 / (2 variance) as (numerator, denominator)."""
    return (size * scale - variance) ** 2, 2 * variance * scale**2


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


def exp_bounds(numerator: int, denominator: int, precision: int) -> tuple[int, int]:
    """Integers (low, high) with low <= 2^precision exp(-numerator/denominator) <= high.

    high - low <= 2, for a ratio g >= 0 and a precision >= 1. exp(-g) is exp(-x) squared h times,
    x = g/2^h < 1, in whole multiples of 2^-w.

    Series: the terms 2^w x^k/k! are rounded down one from the other, so term k is short by less
    than 1/k of what the one before it is short by, plus 1: by less than 2. At the first that
    comes out 0, all that follow (of alternating signs, and falling) amount to less than 2. So
    n terms, the last one counted, add up to within 2n of the truth, and n <= w + 2.

    Squares, rounded down for `low` and up for `high`: as high <= 2^w, high - low + 2 at most
    doubles. In the end it is at most 2^h (4n + 2) < 2^(w - precision), so that dropping the last
    w - precision bits leaves bounds at most 2 apart. (More bits are spared than that takes: then
    bounds 1 apart, where the first 64 bits decide all they can, are the rule.)
    """
    if numerator == 0:
        return 1 << precision, 1 << precision
    if numerator >= precision * denominator:
        return 0, 1                             # e > 2
    halvings = (numerator // denominator).bit_length()
    spare = halvings + precision.bit_length() + 32
    one = term = total = 1 << precision + spare
    n_terms = 1
    while term:
        term = term * numerator // (denominator * n_terms << halvings)
        total += -term if n_terms % 2 else term
        n_terms += 1
    low, high = total - 2 * n_terms, min(total + 2 * n_terms, one)
    for _ in range(halvings):
        low = low * low >> precision + spare
        high = (high * high >> precision + spare) + 1
    return low >> spare, min((high >> spare) + 1, 1 << precision)


def _below(prefix: int, bounds, more) -> int:
    """1 if the real number 0.prefix... lies below the chance that `bounds` brackets, else 0.

    bounds(n) is a pair of integers around 2^n times the chance. `prefix` is the number's first 64
    bits; `more()` gives the next 64 whenever those seen so far do not decide. The number lies in
    [prefix, prefix + 1) * 2^-n_bits.
    """
    n_bits = WORD_BITS
    while True:
        low, high = bounds(n_bits)
        if prefix + 1 <= low:
            return 1
        if prefix >= high:
            return 0
        prefix = prefix << WORD_BITS | more()
        n_bits += WORD_BITS


def below_pow2(prefix: int, part: int, b: int, more) -> int:
    """1 if the real number 0.prefix..., continued by more(), lies below 2^(-part/2^b), else 0."""
    return _below(prefix, partial(pow2_bounds, part, b), more)


def below_exp(prefix: int, numerator: int, denominator: int, more) -> int:
    """1 if 0.prefix..., continued by more(), lies below exp(-numerator/denominator), else 0."""
    return _below(prefix, partial(exp_bounds, numerator, denominator), more)


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
        """True with probability exp(-numerator/denominator), exactly, for a ratio >= 0."""
        if max(numerator, denominator).bit_length() > WORD_BITS:
            return bool(below_exp(self.word(), numerator, denominator, self.word))
        cdef int outcome = bernoulli_exp(&self.source, numerator, denominator)
        self.raise_failure()
        return bool(outcome)

    def discrete_laplace(self, scale: int) -> int:
        """An integer y with probability proportional to exp(-|y|/scale), exactly; scale >= 1.

        Method: Canonne, Kamath, Steinke 2020, Algorithm 2 (from memory). The sign is drawn along
        with the rest modulo `scale`, and -0 is drawn again.
        """
        while True:
            rest, negative = divmod(self.below(2 * scale), 2)
            if not self.bernoulli_exp(rest, scale):
                continue
            turns = 0
            while self.bernoulli_exp(1, 1):
                turns += 1
            size = rest + scale * turns
            if size or not negative:
                return -size if negative else size

    def discrete_gaussian(self, variance: int) -> int:
        """An integer y with probability proportional to exp(-y^2 / (2 variance)), exactly.

        variance is a whole number >= 1.
        """
        return self.discrete_gaussians(variance, 1)[0]

    def discrete_gaussians(self, variance: int, n: int) -> list[int]:
        """`n` independent draws of `discrete_gaussian`: the very ones that n calls would give.

        Takes O(n) time whatever the variance, without the GIL below a variance of 2^126.
        """
        scale = isqrt(variance) + 1
        if scale > MOST_SCALE:
            return [self.plain_gaussian(variance) for _ in range(n)]
        cdef uint64_t c_scale = scale
        cdef uint128_t c_variance = <uint64_t> (variance >> WORD_BITS)
        c_variance = c_variance << 64 | <uint64_t> (variance & (1 << WORD_BITS) - 1)
        cdef int128_t[N_DRAWS] drawn
        cdef int64_t k, n_now
        draws = []
        for start in range(0, n, N_DRAWS):
            n_now = min(n - start, N_DRAWS)
            with nogil:
                for k in range(n_now):
                    drawn[k] = next_gaussian(&self.source, c_variance, c_scale)
            self.raise_failure()
            draws += [as_int(drawn[k]) for k in range(n_now)]
        return draws

    def plain_gaussian(self, variance: int) -> int:
        """`discrete_gaussian` in Python's integers, on the same words: slow, for any variance.

        Method: Canonne, Kamath, Steinke 2020, Algorithm 3 (from memory): a discrete Laplace draw of
        scale t = floor(sigma) + 1 is kept with probability
        exp(-(|y| - variance/t)^2 / (2 variance)).
        """
        scale = isqrt(variance) + 1
        while True:
            draw = self.discrete_laplace(scale)
            if self.bernoulli_exp(*_surplus(abs(draw), variance, scale)):
                return draw

    def _check(self):
        """Assert every invariant."""
        source = self.source
        assert 0 <= source.at <= source.n_words == len(self.buffer)
        assert 0 <= source.n_coins < 64 and source.coins >> source.n_coins == 0
        assert source.n_drawn >= 0 and (source.failed == 0) == (self.failure is None)
