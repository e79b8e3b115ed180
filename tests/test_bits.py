"""Random bits: every draw is decided as exact arithmetic would decide it.

Four kinds of evidence. A scripted source shows single outcomes against mpmath. A branching source
walks every path of a draw and adds up exact probabilities. A slow sampler writes down the words it
used, many of them as near to a chance as can be, and the fast one must make the same of them.
Chi-square tests and moments run the whole chain; their seeds are fixed, and a right sampler would
fail one with probability P_FAIL for a seed drawn afresh.
"""

from __future__ import annotations

import os
from collections import Counter, defaultdict
from fractions import Fraction
from hashlib import shake_256
from math import isqrt

import mpmath
import numpy as np
import pytest
from hypothesis import example, given, settings
from hypothesis import strategies as st
from scipy.stats import chi2, norm

from sordino._core import bits as module
from sordino._core.bits import Bits, below_exp, below_pow2, exp_bounds, pow2_bounds

P_FAIL = 1e-8       # of each statistical test; about 50 of them: below 1e-6 together
DIGITS = 50         # mpmath's, wherever probabilities are added up
BUFFERED = 2048     # words a source reads ahead
WORD = 1 << 64

words_of = st.integers(0, WORD - 1)


def repeatable(max_examples: int = 100):
    return settings(max_examples=max_examples, deadline=None, derandomize=True, database=None)


class Failed(Exception):
    pass


def scripted(words) -> Bits:
    """A source that hands out these words, then zeros."""
    stock = iter(words)

    def refill(n_bytes):
        return b"".join(next(stock, 0).to_bytes(8, "little") for _ in range(n_bytes // 8))

    return Bits(refill=refill)


def ending_in(*words) -> Bits:
    """A source whose next words are these, and which fails after them."""
    n_spare = -len(words) % BUFFERED
    stock = iter(np.array([0] * n_spare + list(words), dtype="<u8").reshape(-1, BUFFERED))
    bits = Bits(refill=lambda n_bytes: next(stock).tobytes())
    for _ in range(n_spare):
        bits.word()
    return bits


def is_used_up(bits) -> bool:
    """Whether no word of `ending_in` is left: had it asked for more, it would have failed."""
    return bits.words_drawn % BUFFERED == 0


def scaled_pow2(part: int, b: int, n_bits: int) -> int:
    """floor(2^n_bits * 2^(-part/2^b)), by mpmath; irrational for part > 0, so never a tie."""
    with mpmath.workprec(n_bits + 200):
        return int(mpmath.floor(mpmath.mpf(2) ** (n_bits - mpmath.mpf(part) / 2**b)))


def scaled_exp(numerator: int, denominator: int, n_bits: int) -> int:
    """floor(2^n_bits * exp(-numerator/denominator)), by mpmath; irrational for numerator > 0."""
    if numerator > n_bits * denominator:
        return 0
    with mpmath.workprec(n_bits + denominator.bit_length() + 200):
        chance = mpmath.exp(-mpmath.mpf(numerator) / denominator)
        return int(mpmath.floor(mpmath.ldexp(chance, n_bits)))


def joined(words) -> int:
    number = 0
    for word in words:
        number = number << 64 | word
    return number


def lies_below(words, part: int, b: int) -> bool:
    """Whether the real number 0.words000... is below 2^(-part/2^b)."""
    return joined([*words, 0]) < scaled_pow2(part, b, 64 * len(words) + 64)


def lies_below_exp(words, ratio) -> bool:
    """Whether the real number 0.words000... is below exp(-ratio)."""
    return joined([*words, 0]) < scaled_exp(*ratio, 64 * len(words) + 64)


def first_words(number: int, n_words: int) -> list[int]:
    return [number >> 64 * (n_words - 1 - k) & WORD - 1 for k in range(n_words)]


def settles(word: int, part: int, b: int) -> bool:
    """Whether 64 bits are sure to decide: 2^(-part/2^b) is bracketed to within 4b + 4."""
    return abs(word - scaled_pow2(part, b, 64)) > 4 * b + 5


def assert_fits(counts: np.ndarray, chances: np.ndarray):
    """Chi-square of counts against exact chances; cells that expect under 10 are merged."""
    expected = np.asarray(chances, dtype=float) * counts.sum()
    large = expected >= 10
    seen = np.append(counts[large], counts[~large].sum())
    wanted = np.append(expected[large], counts.sum() - expected[large].sum())
    if wanted[-1] < 10:
        seen, wanted = seen[:-1], wanted[:-1]
    statistic = ((seen - wanted) ** 2 / wanted).sum()
    assert statistic < chi2.isf(P_FAIL, len(seen) - 1)


def tally(draws, outcomes) -> np.ndarray:
    seen = Counter(draws)
    return np.array([seen[value] for value in outcomes])


# --- Bernoulli(2^-x)

@st.composite
def exponents(draw):
    """(part, b) with 0 < part < 2^b, small fractions and those near 1 as likely as the others."""
    b = draw(st.integers(1, 62))
    part = draw(st.integers(1, 2**b - 1))
    part = max(1, part >> draw(st.integers(0, b)))
    return (part, b) if draw(st.booleans()) else (2**b - part, b)


@repeatable()
@given(exponents(), words_of, words_of)
def test_bernoulli_pow2_compares_the_drawn_expansion(exponent, first, second):
    part, b = exponent
    bits = scripted([first, second])
    assert bits.bernoulli_pow2(0, part, b) == lies_below([first, second], part, b)
    assert bits.words_drawn == 1 or not settles(first, part, b)


@repeatable()
@given(exponents(), st.integers(-(2**34), 2**34))
@example((1, 1), 2**32)
@example((1, 1), -(2**32))
def test_bernoulli_pow2_near_the_edge_of_what_a_double_settles(exponent, offset):
    part, b = exponent
    first = min(max(scaled_pow2(part, b, 64) + offset, 0), WORD - 1)
    bits = scripted([first])
    assert bits.bernoulli_pow2(0, part, b) == lies_below([first], part, b)
    assert bits.words_drawn == 1 or not settles(first, part, b)


@repeatable()
@given(exponents(), st.integers(1, 4), st.one_of(words_of, st.integers(-3, 3)))
def test_a_tie_is_settled_by_later_words(exponent, n_tied, later):
    """The expansion agrees with 2^-x for n_tied words; the next one is anything, or very near."""
    part, b = exponent
    exact = scaled_pow2(part, b, 64 * (n_tied + 1))
    tied = first_words(exact >> 64, n_tied)
    if later <= 3:
        later = (exact + later) % WORD
    bits = scripted([*tied, later])
    assert bits.bernoulli_pow2(0, part, b) == lies_below([*tied, later], part, b)
    assert n_tied < bits.words_drawn <= n_tied + 2


@pytest.mark.parametrize("part, b", [(1, 1), (1, 20), (3, 5), (2**40 - 1, 40), (12345, 62)])
@pytest.mark.parametrize("n_tied", [1, 2, 5])
def test_a_tie_goes_both_ways(part, b, n_tied):
    tied = first_words(scaled_pow2(part, b, 64 * n_tied), n_tied)
    assert scripted([*tied, 0]).bernoulli_pow2(0, part, b)
    assert not scripted([*tied, WORD - 1, WORD - 1]).bernoulli_pow2(0, part, b)


@repeatable()
@given(st.integers(0, 200), exponents(), st.lists(words_of, min_size=8, max_size=8))
def test_the_whole_part_asks_for_as_many_zero_bits(whole, exponent, words):
    """Words with just `whole` leading zeros pass, and one bit set among those fails."""
    part, b = exponent
    n_words = -(-whole // 64)
    zeros = [0] * n_words
    if whole % 64:
        zeros[-1] = words[0] >> whole % 64
    passed = scripted([*zeros, *words[1:]])
    assert passed.bernoulli_pow2(whole, part, b) == lies_below(words[1:], part, b)
    for k in range(n_words):
        spoilt = list(zeros)
        spoilt[k] |= 1 << (64 - (whole % 64 or 64) if k == n_words - 1 else 0)
        bits = scripted([*spoilt, *words[1:]])
        assert not bits.bernoulli_pow2(whole, part, b)
        assert bits.words_drawn == k + 1


def test_a_whole_exponent_draws_nothing_more():
    for b in (0, 1, 62):
        assert scripted([]).bernoulli_pow2(0, 0, b)
        bits = scripted([1, WORD - 1])
        assert bits.bernoulli_pow2(63, 0, b) and bits.words_drawn == 1
        bits = scripted([0, 1])
        assert not bits.bernoulli_pow2(128, 0, b) and bits.words_drawn == 2


@pytest.mark.parametrize("whole, part, b", [(0, 1, 1), (0, 1, 62), (1, 3, 3), (3, 0, 0), (0, 7, 3)])
def test_bernoulli_pow2_frequency(whole, part, b):
    bits, n = Bits(whole + part), 50_000
    hits = sum(bits.bernoulli_pow2(whole, part, b) for _ in range(n))
    chance = 2.0 ** -(whole + part / 2**b)
    if chance > 1 - 1e-9:
        assert hits == n            # fails with probability n * ln 2 / 2^62
    else:
        assert_fits(np.array([hits, n - hits]), np.array([chance, 1 - chance]))


@repeatable(400)
@given(st.integers(0, 62).flatmap(lambda b: st.tuples(st.integers(0, 2**b - 1), st.just(b))),
       st.integers(8, 600))
def test_pow2_bounds_bracket(exponent, precision):
    part, b = exponent
    low, high = pow2_bounds(part, b, precision)
    floor = scaled_pow2(part, b, precision)
    assert low <= floor and (high > floor or part == 0)
    assert high <= 1 << precision and high - low <= 4 * b + 4


def test_pow2_bounds_stay_narrow_where_every_bit_is_set():
    for b in range(63):
        for precision in range(64, 705, 64):
            low, high = pow2_bounds(2**b - 1, b, precision)
            assert 0 <= high - low <= 4 * b + 4


@repeatable()
@given(exponents(), words_of, st.lists(words_of, min_size=3, max_size=3))
@example((1, 1), scaled_pow2(1, 1, 64), [1, 2, 3])
def test_below_pow2_asks_for_words_only_while_undecided(exponent, prefix, later):
    part, b = exponent
    stock, used = iter(later), []

    def more():
        used.append(next(stock))
        return used[-1]

    outcome = below_pow2(prefix, part, b, more)
    assert outcome == lies_below([prefix, *used], part, b)
    assert not used or not settles(prefix, part, b)


# --- Bernoulli(exp(-x))

@st.composite
def ratios(draw):
    """(numerator, denominator), most ratios below 1 and the rest up to 60; any number of bits."""
    n_bits = draw(st.sampled_from([3, 20, 58, 64, 90, 300]))
    denominator = draw(st.integers(1, 2**n_bits - 1))
    most = draw(st.sampled_from([1, 1, 1, 60])) * denominator
    return draw(st.integers(1, most)) >> draw(st.integers(0, n_bits)) or 1, denominator


@repeatable()
@given(ratios(), words_of, words_of)
def test_bernoulli_exp_compares_the_drawn_expansion(ratio, first, second):
    bits = scripted([first, second])
    assert bits.bernoulli_exp(*ratio) == lies_below_exp([first, second], ratio)
    assert bits.words_drawn == 1 or first == scaled_exp(*ratio, 64)


@repeatable(300)
@given(ratios(), st.one_of(st.integers(-(2**34), 2**34), st.integers(-3, 3)))
@example((1, 1), 2**32)
@example((1, 1), -(2**32))
def test_bernoulli_exp_near_the_edge_of_what_a_double_settles(ratio, offset):
    floor = scaled_exp(*ratio, 64)
    first = min(max(floor + offset, 0), WORD - 1)
    bits = scripted([first])
    assert bits.bernoulli_exp(*ratio) == lies_below_exp([first], ratio)
    assert bits.words_drawn == 1 or first == floor


@repeatable()
@given(ratios(), st.integers(1, 4), st.one_of(words_of, st.integers(-3, 3)))
def test_a_tie_with_exp_is_settled_by_later_words(ratio, n_tied, later):
    exact = scaled_exp(*ratio, 64 * (n_tied + 1))
    tied = first_words(exact >> 64, n_tied)
    if later <= 3:
        later = (exact + later) % WORD
    bits = scripted([*tied, later])
    assert bits.bernoulli_exp(*ratio) == lies_below_exp([*tied, later], ratio)
    assert n_tied < bits.words_drawn <= n_tied + 2


@pytest.mark.parametrize("ratio", [(1, 1), (1, 2**63), (40, 1), (2**64 - 1, 2**63), (3, 2**90)])
@pytest.mark.parametrize("n_tied", [1, 2, 5])
def test_a_tie_with_exp_goes_both_ways(ratio, n_tied):
    tied = first_words(scaled_exp(*ratio, 64 * n_tied), n_tied)
    assert scripted([*tied, 0]).bernoulli_exp(*ratio)
    assert not scripted([*tied, WORD - 1, WORD - 1]).bernoulli_exp(*ratio)


@pytest.mark.parametrize("denominator", [1, 7, 2**64 - 1, 2**80])
def test_a_ratio_of_0_is_certain(denominator):
    for first in (0, 2**63, WORD - 1):
        bits = scripted([first])
        assert bits.bernoulli_exp(0, denominator) and bits.words_drawn == 1


@pytest.mark.parametrize("ratio", [(10**40, 1), (2**64 - 1, 3), (1000, 1)])
def test_an_enormous_ratio_fails_at_the_first_bit_set(ratio):
    """exp(-1000) < 2^-1442: 22 words of zeros do not decide, and any bit in them does."""
    for n_zeros in (0, 1, 21):
        bits = scripted([*[0] * n_zeros, 1])
        assert not bits.bernoulli_exp(*ratio) and bits.words_drawn == n_zeros + 1
    assert scripted([0] * 23).bernoulli_exp(1000, 1)


@repeatable(400)
@given(ratios(), st.integers(1, 600))
@example((1, 1), 64)
@example((63, 1), 64)
@example((64, 1), 64)
@example((1, 2**300), 64)
@example((2**300, 2**300 - 1), 1)
def test_exp_bounds_bracket(ratio, precision):
    low, high = exp_bounds(*ratio, precision)
    floor = scaled_exp(*ratio, precision)
    assert 0 <= low <= floor < high <= 1 << precision
    assert high - low <= 2


@repeatable()
@given(ratios(), words_of, st.lists(words_of, min_size=3, max_size=3))
@example((1, 1), scaled_exp(1, 1, 64), [1, 2, 3])
def test_below_exp_asks_for_words_only_while_undecided(ratio, prefix, later):
    stock, used = iter(later), []

    def more():
        used.append(next(stock))
        return used[-1]

    assert below_exp(prefix, *ratio, more) == lies_below_exp([prefix, *used], ratio)
    assert not used or prefix == scaled_exp(*ratio, 64)


# --- whole numbers below n, and rational coins

@pytest.mark.parametrize("n", [1, 2, 3, 5, 8, 11, 16])
def test_below_takes_each_low_pattern_once(n):
    """Exactly uniform: every pattern of the lowest bits is one outcome or a redraw, whatever the
    other bits are."""
    n_bits = (n - 1).bit_length()
    noise = Bits(n)
    seen = []
    for pattern in range(2**n_bits):
        word = noise.word() >> n_bits << n_bits | pattern
        bits = scripted([word, 0])
        seen.append((bits.below(n), bits.words_drawn))
    kept = [draw for draw in seen if draw[1] < 2]
    assert [value for value, _ in kept] == list(range(n))
    assert all(draw == (0, 2) for draw in seen[len(kept):])


@repeatable()
@given(st.integers(2**64 + 1, 2**300), st.lists(words_of, min_size=40, max_size=40))
def test_below_of_many_words(n, words):
    n_bits = (n - 1).bit_length()
    n_words = -(-n_bits // 64)
    expected, at = n, 0
    while expected >= n and at + n_words <= len(words):
        taken = words[at:at + n_words]
        expected = sum(word << 64 * k for k, word in enumerate(reversed(taken))) % 2**n_bits
        at += n_words
    if expected < n:
        bits = scripted(words)
        assert bits.below(n) == expected and bits.words_drawn == at


@pytest.mark.parametrize("n", [2, 3, 7, 100, 1000])
def test_below_is_uniform(n):
    bits = Bits(n)
    assert_fits(tally((bits.below(n) for _ in range(60_000)), range(n)), np.full(n, 1 / n))


def test_below_is_uniform_on_the_operating_systems_bits():
    bits, n = Bits(), 37
    assert_fits(tally((bits.below(n) for _ in range(40_000)), range(n)), np.full(n, 1 / n))


@pytest.mark.parametrize("numerator, denominator", [(0, 1), (1, 1), (1, 3), (5, 7), (3, 2**70)])
def test_bernoulli_is_below_of_the_denominator(numerator, denominator):
    for seed in range(200):
        expected = Bits(seed).below(denominator) < numerator
        assert Bits(seed).bernoulli(numerator, denominator) == expected


# --- exact probabilities, by walking every path

class Pruned(Exception):
    """A path of negligible probability."""


class Restarted(Exception):
    """A path that begins its rejection loop again: it changes no conditional probability."""


class Branching(Bits):
    """A source whose every choice is scripted, and which keeps the probability of its path.

    Choices are made at the level of `below` and of the coins, and of `discrete_laplace` where its
    exact chances are given.
    """

    def begin(self, script, floor, attempt, laplace):
        self.script, self.floor, self.laplace, self.attempt = script, floor, laplace, attempt
        self.at, self.chance, self.siblings, self.n_attempts = 0, mpmath.mpf(1), [], 0

    def choose(self, chances: dict):
        options = [(value, p) for value, p in chances.items() if p > 0]
        if self.at == len(self.script):
            self.siblings += [(*self.script, k) for k in range(1, len(options))]
            self.script = (*self.script, 0)
        value, p = options[self.script[self.at]]
        self.at += 1
        self.chance *= p
        if self.chance < self.floor:
            raise Pruned
        return value

    def _begins(self, name):
        if name == self.attempt:
            self.n_attempts += 1
            if self.n_attempts > 1:
                raise Restarted

    def below(self, n):
        self._begins("below")
        return self.choose({k: mpmath.mpf(1) / n for k in range(n)})

    def bernoulli_exp(self, numerator, denominator):
        return self.choose(exp_coin(numerator, denominator))

    def discrete_laplace(self, scale):
        self._begins("discrete_laplace")
        if self.laplace:
            return self.choose(self.laplace(scale))
        return Bits.discrete_laplace(self, scale)


def exact_chances(draw, floor, attempt, laplace=None) -> dict:
    """{outcome: probability} of one attempt.

    Every path of `draw(source)` that is at least `floor` likely is walked once. A path that calls
    `attempt` a second time is left out: the outcomes that remain are those of one attempt.
    """
    source, paths = Branching(0), [()]
    chances = defaultdict(mpmath.mpf)
    while paths:
        source.begin(paths.pop(), floor, attempt, laplace)
        try:
            outcome = draw(source)
            chances[outcome] += source.chance
        except (Pruned, Restarted):
            pass
        paths += source.siblings
    return chances


def exp_coin(numerator, denominator) -> dict:
    chance = mpmath.exp(-mpmath.mpf(numerator) / denominator)
    return {True: chance, False: 1 - chance}


def laplace_chances(scale, reach=80) -> dict:
    weights = {y: mpmath.exp(-mpmath.mpf(abs(y)) / scale) for y in range(-reach, reach + 1)}
    total = mpmath.fsum(weights.values())
    return {y: weight / total for y, weight in weights.items()}


def gaussian_chances(variance, reach=80) -> dict:
    weights = {
        y: mpmath.exp(-mpmath.mpf(y) ** 2 / (2 * variance)) for y in range(-reach, reach + 1)
    }
    total = mpmath.fsum(weights.values())
    return {y: weight / total for y, weight in weights.items()}


@pytest.mark.parametrize("scale", [1, 2, 3, 7])
def test_discrete_laplace_is_exact(scale):
    with mpmath.workdps(DIGITS):
        chances = exact_chances(lambda bits: bits.discrete_laplace(scale), 1e-14, "below")
        accepted = mpmath.fsum(chances.values())
        expected = laplace_chances(scale, reach=400)
        for y in range(-2 * scale, 2 * scale + 1):
            assert abs(chances[y] / accepted - expected[y]) < 1e-11


@pytest.mark.parametrize("variance", [1, 2, 4, 9, 10, 30])
def test_plain_gaussian_is_exact(variance):
    with mpmath.workdps(DIGITS):
        chances = exact_chances(
            lambda bits: bits.plain_gaussian(variance), 1e-60, "discrete_laplace", laplace_chances
        )
        accepted = mpmath.fsum(chances.values())
        for y, chance in gaussian_chances(variance).items():
            assert abs(chances[y] / accepted - chance) < 1e-15
        if variance == 1:
            # check values worked out apart from this code, by brute sum over the integers (those
            # for a variance of 1/4 ask for more than whole variances)
            spread = mpmath.fsum(y * y * chance for y, chance in chances.items()) / accepted
            assert abs(spread - mpmath.mpf("0.999999788768")) < 1e-11
            assert abs(chances[0] / accepted - mpmath.mpf("0.398942278267")) < 1e-11


# --- the whole chain

@pytest.mark.parametrize("numerator, denominator", [(0, 5), (1, 3), (1, 1), (5, 2)])
def test_bernoulli_exp_frequency(numerator, denominator):
    bits, n = Bits(numerator), 20_000
    hits = sum(bits.bernoulli_exp(numerator, denominator) for _ in range(n))
    chance = np.exp(-numerator / denominator)
    if chance == 1:
        assert hits == n
    else:
        assert_fits(np.array([hits, n - hits]), np.array([chance, 1 - chance]))


def test_bernoulli_exp_of_an_enormous_ratio_ends():
    assert not Bits(3).bernoulli_exp(10**40, 1)     # true with probability exp(-1e40)


@pytest.mark.parametrize("scale", [1, 4])
def test_discrete_laplace_frequency(scale):
    bits, n = Bits(scale), 20_000
    expected = laplace_chances(scale, reach=400)
    draws = tally((bits.discrete_laplace(scale) for _ in range(n)), expected)
    assert draws.sum() == n         # beyond 400: probability below n * exp(-100)
    assert_fits(draws, [float(p) for p in expected.values()])


@pytest.mark.parametrize("variance", [1, 3, 7, 40, 1000])
def test_discrete_gaussian_frequency(variance):
    n = 200_000
    expected = gaussian_chances(variance, reach=12 * isqrt(variance) + 12)
    draws = tally(Bits(variance).discrete_gaussians(variance, n), expected)
    assert draws.sum() == n         # none beyond 12 standard deviations
    assert_fits(draws, [float(p) for p in expected.values()])


@pytest.mark.parametrize("variance, n", [(2**70, 200_000), (2**119, 200_000), (2**130, 2_000)])
def test_moments_of_large_variances(variance, n):
    """Mean, variance and share of positive draws, each within `z` standard deviations of its own.

    Whole numbers hardly matter at these variances. The mean and the share are as good as normal;
    so is the sum of squares, a chi-square with n degrees of freedom, which is compared as such.
    """
    draws = Bits(variance).discrete_gaussians(variance, n)
    scaled = np.array([float(y) for y in draws]) / float(variance) ** 0.5
    z = norm.isf(P_FAIL / 6)
    assert abs(scaled.mean()) < z / n**0.5
    assert abs((scaled > 0).mean() - 0.5) < z / (2 * n**0.5)
    assert chi2.isf(1 - P_FAIL / 6, n) < (scaled**2).sum() < chi2.isf(P_FAIL / 6, n)


@pytest.mark.parametrize("variance", [2**64 + 3, 2**80, 2**119])
def test_discrete_gaussian_of_a_large_variance(variance):
    """Normal deciles, where whole numbers hardly matter; and the last digits are uniform."""
    draws = Bits(5).discrete_gaussians(variance, 50_000)
    scaled = np.array([float(y) for y in draws]) / float(variance) ** 0.5
    edges = [-1.2815515655, -0.8416212336, -0.5244005127, -0.2533471031, 0.0]
    edges += [-edge for edge in reversed(edges[:-1])]
    counts = np.bincount(np.searchsorted(edges, scaled), minlength=10)
    assert_fits(counts, np.full(10, 0.1))
    assert_fits(tally((y % 100 for y in draws), range(100)), np.full(100, 0.01))


# --- the fast sampler on the words of a slow one

class Tape:
    """The slow exact sampler: mpmath decides, and every word that was used is written down.

    Half of the coins get a word within 2^31 units of their chance, which a double cannot settle;
    a quarter, one near 2^33 units from it; some tie with it for a word or two.
    """

    def __init__(self, seed):
        self.noise, self.words = Bits(seed), []
        self.n_clear = self.n_unclear = self.n_tied = 0

    def _write(self, word: int) -> int:
        self.words.append(word)
        return word

    def below(self, n: int) -> int:
        n_bits = (n - 1).bit_length()
        drawn = n
        while drawn >= n:
            words = [self._write(self.noise.word()) for _ in range(-(-n_bits // 64))]
            drawn = joined(words) % 2**n_bits
        return drawn

    def _near(self, chance: int) -> int:
        """A word at a distance from the chance, both in units of 2^-64, that is never near 2^32."""
        kind = self.noise.below(8)
        if kind < 2:
            return self.noise.word()
        distance = (1 << 33) + self.noise.below(1 << 20)
        if kind > 3:
            distance = self.noise.below(1 << self.noise.below(32))
        word = chance + (distance if self.noise.below(2) else -distance)
        return word if 0 <= word < WORD else chance if chance < WORD else WORD - 1

    def coin(self, numerator: int, denominator: int) -> bool:
        exact = scaled_exp(numerator, denominator, 64)
        number = self._write(self._near(exact))
        clear = abs(number - exact) > 1 << 32
        self.n_clear += clear
        self.n_unclear += not clear
        n_bits = 64
        while number == exact:
            self.n_tied += 1
            n_bits += 64
            exact = scaled_exp(numerator, denominator, n_bits)
            number = number << 64 | self._write(self._near(exact % WORD))
        return number < exact

    def laplace(self, scale: int) -> int:
        while True:
            draw = self.below(2 * scale)
            if not self.coin(draw // 2, scale):
                continue
            size = draw // 2
            while self.coin(1, 1):
                size += scale
            if draw % 2 == 0:
                return size
            if size > 0:
                return -size

    def gaussian(self, variance: int) -> int:
        scale = isqrt(variance) + 1
        while True:
            draw = self.laplace(scale)
            exponent = (abs(draw) - Fraction(variance, scale)) ** 2 / (2 * variance)
            if self.coin(exponent.numerator, exponent.denominator):
                return draw


VARIANCES = [
    1, 2, 3, 7, 10, 1000, 10**6, 2**30, 2**63, 2**64 + 13, 2**70, 2**101 - 1, 2**119, 2**120,
    2**126 - 1,     # the last one that is drawn in C
    2**126, 3**100,
]


@pytest.mark.parametrize("variance", VARIANCES)
def test_gaussians_are_those_of_the_slow_sampler_word_by_word(variance, monkeypatch):
    """One by one, in bulk and plain; and the doubles settle what is clear, and nothing else."""
    tape, n = Tape(variance), 60
    expected = [tape.gaussian(variance) for _ in range(n)]
    assert tape.n_clear > 100 and tape.n_unclear > 100 and tape.n_tied > 0

    settled = []

    def counted(*arguments):
        settled.append(arguments)
        return below_exp(*arguments)

    with monkeypatch.context() as patch:
        patch.setattr(module, "below_exp", counted)
        bits = ending_in(*tape.words)
        assert bits.discrete_gaussians(variance, n) == expected and is_used_up(bits)
    if variance < 2**126:
        assert len(settled) == tape.n_unclear
    for draw in (Bits.discrete_gaussian, Bits.plain_gaussian):
        bits = ending_in(*tape.words)
        assert [draw(bits, variance) for _ in range(n)] == expected and is_used_up(bits)


@pytest.mark.parametrize("scale", [1, 2, 5, 2**40 + 1, 2**63, 2**63 + 1, 2**64, 10**30])
def test_laplace_draws_are_those_of_the_slow_sampler_word_by_word(scale):
    tape = Tape(scale)
    expected = [tape.laplace(scale) for _ in range(60)]
    bits = ending_in(*tape.words)
    assert [bits.discrete_laplace(scale) for _ in range(60)] == expected and is_used_up(bits)


@pytest.mark.parametrize("variance", [1, 2**60, 2**120, 2**126 - 1])
@pytest.mark.parametrize("sign", [1, -1])
def test_a_draw_of_40_turns(variance, sign):
    """|y| = 1 + 40 t needs up to 69 bits; it is kept with a probability of exp(-760) to exp(-3300),
    which up to 75 words of zeros are sure to be below."""
    scale = isqrt(variance) + 1
    rest = 2 if sign > 0 else 3
    words = [rest, *[0] * 41, WORD - 1, *[0] * 80]
    for draw in (Bits.discrete_gaussian, Bits.plain_gaussian):
        assert draw(ending_in(*words), variance) == sign * (1 + 40 * scale)


@pytest.mark.parametrize("variance", [1, 9, 2**69, 2**126])
def test_bulk_is_one_by_one(variance):
    n = 2_100 if variance < 2**126 else 30
    one_by_one, bulk = Bits(3), Bits(3)
    assert bulk.discrete_gaussians(variance, 0) == [] and bulk.words_drawn == 0
    expected = [one_by_one.discrete_gaussian(variance) for _ in range(n)]
    assert bulk.discrete_gaussians(variance, n) == expected
    assert bulk.word() == one_by_one.word()


# --- streams

def test_a_seed_is_a_stream_for_good():
    """Block k is SHAKE-256 of the seed and k, here by the standard library."""
    stream = b"".join(
        shake_256(f"sordino rehearsal 7 block {k}".encode()).digest(8 * BUFFERED) for k in (1, 2)
    )
    bits = Bits(7)
    drawn = [bits.word() for _ in range(2 * BUFFERED)]
    assert drawn == np.frombuffer(stream, dtype="<u8").tolist()


@pytest.mark.parametrize("seed", [0, 1, 2**31, 2**64, 2**200 + 1, 10**5000], ids=lambda s: "")
def test_streams_of_seeds_of_any_size(seed):
    draws = [[bits.word() for _ in range(4)] for bits in (Bits(seed), Bits(seed), Bits(seed + 1))]
    assert draws[0] == draws[1] != draws[2]
    assert Bits(seed).rehearsal
    same, other = Bits(seed).array(50, np.uint16), Bits(seed + 1).array(50, np.uint16)
    assert (Bits(seed).array(50, np.uint16) == same).all() and (same != other).any()


def test_every_draw_repeats_with_the_seed():
    def draws(bits):
        return (
            bits.word(), bits.below(10**30), bits.bernoulli(1, 3), bits.bernoulli_pow2(1, 5, 7),
            bits.bernoulli_exp(1, 3), bits.discrete_laplace(50), bits.discrete_gaussian(10**6),
            bits.discrete_gaussians(10, 9), bits.array(9, np.uint8).tolist(), bits.word(),
        )

    assert draws(Bits(11)) == draws(Bits(11)) != draws(Bits(12))


def test_the_operating_systems_source_never_repeats():
    """Two words of 64 bits agree with probability 2^-64; 200 of them, 2e4 pairs."""
    first, second = Bits(), Bits()
    assert not first.rehearsal
    words = [bits.word() for bits in (first, second) for _ in range(100)]
    assert len(set(words)) == 200
    assert (first.array(64, np.uint64) != second.array(64, np.uint64)).any()


def test_arrays_run_on_past_one_request():
    n = (1 << 20) + 5
    values = Bits(1).array(n, np.uint16)
    assert values.shape == (n,) and values.dtype == np.uint16
    assert_fits(np.bincount(values >> 6, minlength=1024), np.full(1024, 1 / 1024))
    assert (values[:5] != values[-5:]).any()
    for dtype in (np.uint8, np.uint32, np.uint64):
        assert Bits(1).array(3, dtype).dtype == dtype
    assert Bits(1).array(0, np.uint16).shape == (0,)


def test_words_drawn_counts():
    bits = Bits(1)
    assert bits.words_drawn == 0
    for n in range(1, BUFFERED + 10):
        bits.word()
        assert bits.words_drawn == n
    before = bits.words_drawn
    bits.below(2**129)
    assert (bits.words_drawn - before) % 3 == 0 < bits.words_drawn - before
    before = bits.words_drawn
    bits.bernoulli_pow2(0, 0, 5)
    bits.below(1)
    assert bits.words_drawn == before


# --- forks

def in_child(work) -> bytes:
    """What `work()` returns in a forked child."""
    read, write = os.pipe()
    child = os.fork()
    if child == 0:
        try:
            os.write(write, work())
        finally:
            os._exit(0)
    os.close(write)
    with os.fdopen(read, "rb") as pipe:
        answer = pipe.read()
    os.waitpid(child, 0)
    return answer


def test_a_forked_child_discards_what_was_buffered():
    bits = Bits()
    bits.word()
    n = 200

    def words() -> list[int]:
        return [bits.word() for _ in range(n)]

    child = np.frombuffer(in_child(lambda: np.array(words(), dtype=np.uint64).tobytes()), np.uint64)
    assert len(child) == n
    assert not set(child.tolist()) & set(words())


def test_a_forked_child_of_a_child_discards_too():
    bits = Bits()
    bits.word()

    def grandchild() -> bytes:
        own = in_child(lambda: bits.word().to_bytes(8, "little"))
        return own + bits.word().to_bytes(8, "little")

    drawn = in_child(grandchild)
    assert len({drawn[:8], drawn[8:], bits.word().to_bytes(8, "little")}) == 3


# --- a failing source

DRAWS = {
    "word": lambda bits: bits.word(),
    "below": lambda bits: bits.below(10),
    "below, many words": lambda bits: bits.below(2**200),
    "bernoulli": lambda bits: bits.bernoulli(1, 2),
    "bernoulli_pow2": lambda bits: bits.bernoulli_pow2(0, 1, 1),
    "bernoulli_pow2, whole": lambda bits: bits.bernoulli_pow2(5, 0, 1),
    "bernoulli_exp": lambda bits: bits.bernoulli_exp(1, 2),
    "discrete_laplace": lambda bits: bits.discrete_laplace(3),
    "bernoulli_exp, wide": lambda bits: bits.bernoulli_exp(1, 2**70),
    "discrete_gaussian": lambda bits: bits.discrete_gaussian(9),
    "discrete_gaussians": lambda bits: bits.discrete_gaussians(2**69, 3_000),
    "discrete_gaussians, wide": lambda bits: bits.discrete_gaussians(2**130, 3),
    "plain_gaussian": lambda bits: bits.plain_gaussian(9),
    "array": lambda bits: bits.array(10, np.uint16),
}


def broken(n_bytes):
    raise Failed("no entropy")


REFILLS = {
    "raises": broken,
    "nothing": lambda n_bytes: b"",
    "too few": lambda n_bytes: b"\0" * (n_bytes // 2),
    "none": lambda n_bytes: None,
}


@pytest.mark.parametrize("draw", DRAWS)
def test_invariants_hold_between_draws(draw):
    bits = Bits(11)
    bits._check()
    for _ in range(50):
        DRAWS[draw](bits)
        bits._check()


@pytest.mark.parametrize("refill", REFILLS)
@pytest.mark.parametrize("draw", DRAWS)
def test_a_failing_source_is_an_error(draw, refill):
    bits = Bits(refill=REFILLS[refill])
    for _ in range(2):
        with pytest.raises(OSError, match="the source of random bits failed"):
            DRAWS[draw](bits)


@pytest.mark.parametrize("draw", ["word", "bernoulli_pow2", "array"])
def test_one_word_is_not_taken_for_many(draw):
    """Numpy would spread it over the whole buffer."""
    bits = Bits(refill=lambda n_bytes: b"\x55" * min(8, n_bytes // 2))
    with pytest.raises(OSError, match="the source of random bits failed"):
        DRAWS[draw](bits)


def failing_after(n_refills):
    left = n_refills

    def refill(n_bytes):
        nonlocal left
        left -= 1
        if left < 0:
            raise Failed("no entropy")
        return os.urandom(n_bytes)

    return refill


def test_a_source_that_fails_later_is_an_error_from_then_on():
    bits = Bits(refill=failing_after(1))
    for _ in range(BUFFERED):
        bits.word()
    for _ in range(3):
        with pytest.raises(OSError):
            bits.word()
    with pytest.raises(OSError):
        bits.bernoulli_pow2(0, 1, 1)


def test_an_array_that_fails_half_way_is_an_error():
    with pytest.raises(OSError):
        Bits(refill=failing_after(1)).array((1 << 20) + 1, np.uint16)


def test_a_tie_on_a_failing_source_is_an_error():
    """The first word ties, and the word that would settle it never comes."""
    with pytest.raises(OSError):
        ending_in(scaled_pow2(1, 1, 64)).bernoulli_pow2(0, 1, 1)
    with pytest.raises(OSError):
        ending_in(scaled_exp(1, 1, 64)).bernoulli_exp(1, 1)


# Variance 1, hence scale 2: a draw below 4, the coin of its rest, turns, and the last coin.
TIED = scaled_exp(1, 8, 64)         # |y| = 1 is kept with probability exp(-(1 - 1/2)^2 / 2)
STAGES = {
    "at once": [],
    "the rest's coin": [2],
    "the rest's coin, tied": [2, scaled_exp(1, 2, 64)],
    "a turn": [2, 0],
    "a turn after others": [2, *[0] * 8],
    "a turn, tied": [2, 0, scaled_exp(1, 1, 64)],
    "after a minus zero": [1, 0, WORD - 1],
    "the last coin": [2, 0, WORD - 1],
    "the last coin, tied": [2, 0, WORD - 1, TIED],
    "after one refused": [2, 0, WORD - 1, WORD - 1],
    "in the second draw": [2, 0, WORD - 1, TIED - 1],
}


@pytest.mark.parametrize("stage", STAGES)
def test_gaussians_end_wherever_the_source_fails(stage):
    """Every word is 0 from then on, and zeros alone would make turns without end."""
    for n in (2, 3_000):
        bits = ending_in(*STAGES[stage])
        for _ in range(2):
            with pytest.raises(OSError):
                bits.discrete_gaussians(1, n)
    plain = ending_in(*STAGES[stage])
    with pytest.raises(OSError):
        [plain.plain_gaussian(1) for _ in range(2)]


def test_gaussians_that_fail_half_way_are_an_error():
    with pytest.raises(OSError):
        Bits(refill=failing_after(3)).discrete_gaussians(2**69, 100_000)


def test_an_interrupt_in_the_source_stays_an_interrupt():
    """Ctrl-C may arrive while the operating system is asked for bits."""
    def interrupted(n_bytes):
        raise KeyboardInterrupt

    with pytest.raises(KeyboardInterrupt):
        Bits(refill=interrupted).word()
