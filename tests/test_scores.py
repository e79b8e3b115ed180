"""The choice side: the score heap under stress, and picks against the closed form.

Closed form: signed feature (j, s) has probability proportional to 2^(p_j + kappa * -s * G_j), the
base-2 exponential mechanism (Ilvento 2020, from memory) with public powers p_j, 0 unless given.
"""

from __future__ import annotations

import math
from collections import Counter
from fractions import Fraction
from io import BytesIO
from typing import NamedTuple

import numpy as np
import pytest
import scipy.sparse as sp
from hypothesis import given, settings
from hypothesis import strategies as st
from reference import STRAIGHT, STRAIGHT_SCALE, Eager, column_arrays, pick_probabilities
from scipy.stats import chi2

from sordino import Guarantee, PublicFacts, plan_fit
from sordino._core.bits import Bits
from sordino._core.rows import Rows
from sordino._core.scores import MOST_POWER, Scores
from sordino._core.table import ColumnTable
from sordino.fit import loud_features, open_rooms
from sordino.table import Table, build_table

WINDOW = 80             # levels below the top that are weighed exactly, as in scores.pyx
MOST_DERIVATIVE = 2**14
FLAT = np.zeros(4097, dtype=np.int32)


class Shelf(NamedTuple):
    """A choice side that holds given scores."""

    room: Scores
    scores: np.ndarray      # int64 (n_features,)
    loud: np.ndarray
    kappa: Fraction
    prior: np.ndarray | None = None     # the powers, if any were given

    @property
    def powers(self) -> np.ndarray:
        return np.zeros_like(self.scores) if self.prior is None else self.prior.astype(np.int64)

    @property
    def quiet(self) -> np.ndarray:
        return np.setdiff1d(np.arange(len(self.scores)), self.loud)

    @property
    def lowest(self) -> int:
        """The level that no bound lies below: the highest power of a quiet feature, if any."""
        return self.powers[self.quiet].max(initial=self.powers.min())

    @property
    def levels(self) -> np.ndarray:
        """floor(kappa * |G_j|) + p_j"""
        return self.kappa.numerator * abs(self.scores) // self.kappa.denominator + self.powers


def shelf(derivatives, loud, multiplier: int, shift: int, entries=1, value=1) -> Shelf:
    """G_j = entries * value * derivatives[j]: feature j has `entries` rows, all its own."""
    scores = np.asarray(derivatives, dtype=np.int64) * entries * value
    n = len(scores)
    loud = np.asarray(loud, dtype=np.int32)
    offsets = np.arange(n + 1, dtype=np.int64) * entries
    rows_of = np.arange(n * entries, dtype=np.int32)
    values = None if value == 1 else np.full(n * entries, value, dtype=np.int16)
    target = np.repeat(-np.asarray(derivatives, dtype=np.int32) * 2**16, entries)
    rows = Rows(ColumnTable(n * entries, offsets, rows_of, values), loud, target,
                np.zeros(n * entries, dtype=np.uint16), FLAT, MOST_DERIVATIVE, np.ones(2), False)
    room = Scores(n, rows, multiplier, shift)
    rows.place(0)
    room.absorb(rows.first_scores())
    room._check()
    assert [rows.score(j) for j in range(n)] == scores.tolist()
    return Shelf(room, scores, loud, Fraction(multiplier, 2**shift))


def weighted(held: Shelf, powers) -> Shelf:
    """The same scores, under powers."""
    powers = np.asarray(powers, dtype=np.int16)
    rows, kappa = held.room.source, held.kappa
    shift = kappa.denominator.bit_length() - 1
    room = Scores(len(held.scores), rows, kappa.numerator, shift, powers)
    room.absorb(rows.first_scores())
    room._check()
    return held._replace(room=room, prior=powers)


# --- the whole law of a pick, word by word -------------------------------------------------------


class Attempt(NamedTuple):
    feature: int
    sign: int
    accepted: bool          # at the first proposal
    n_words: int


def attempt(room: Scores, words: list[int]) -> Attempt:
    """A pick on chosen random words, with zeros after them."""
    chosen = BytesIO(np.array(words, dtype="<u8").tobytes())
    bits = Bits(refill=lambda n_bytes: chosen.read(n_bytes).ljust(n_bytes, b"\0"))
    tries = room.counters["tries"]
    feature, sign = room.pick(bits)
    return Attempt(feature, sign, room.counters["tries"] == tries + 1, bits.words_drawn)


def words_of(draw: int, total: int) -> list[int]:
    """The random words that draw this number below `total`."""
    return [draw] if (total - 1).bit_length() <= 64 else [draw >> 64, draw % 2**64]


def last_true(low: int, high: int, holds) -> int:
    """The last number of [low, high) that `holds`: low does, none past the first that fails."""
    while high - low > 1:
        middle = (low + high) // 2
        low, high = (middle, high) if holds(middle) else (low, middle)
    return low


def proposals(room: Scores, expected: Counter) -> dict:
    """{feature: the first draw that proposes it}, once every draw is seen to go where expected.

    A feature's draws lie side by side: the first, the last and the middle one are tried.
    """
    total = expected.total()

    def proposed(draw):
        outcome = attempt(room, words_of(draw, total))
        return outcome.feature if outcome.accepted else None

    first, found, draw = {}, Counter(), 0
    while draw < total:
        feature = proposed(draw)
        assert feature is None or feature not in first
        length = 1 if feature is None else expected[feature]
        assert proposed(draw + length // 2) == proposed(draw + length - 1) == feature
        first[feature] = draw
        found[feature] += length
        draw += length
    assert found == expected
    return first


def log2_acceptance(room: Scores, words: list[int], sign: int, before: int) -> float:
    """log2 of the chance that a proposal is kept: each word keeps it with a share of its own.

    words propose; then `before` words, the sign, and more words have their say.
    """
    start = [*words, *[0] * before, int(sign > 0)]
    kept = attempt(room, start)
    assert kept.accepted and kept.sign == sign
    start += [0] * (kept.n_words - len(start))
    log2_chance = 0.0
    for place in {*range(len(words), kept.n_words)} - {len(words) + before}:
        keeps = lambda word: attempt(  # noqa: E731
            room, [*start[:place], word, *start[place + 1:]]).accepted
        share = 1 + last_true(0, 2**64, keeps) if keeps(1) else 1
        log2_chance += math.log2(share) - 64
    return log2_chance


def expected_proposals(held: Shelf) -> Counter:
    """Draws by the rule of the heap: 2^(level - floor) in the window, one each below it.

    If there are quiet features, every feature id has one more draw, which starts again when loud.
    """
    levels = dict(zip(held.loud.tolist(), held.levels[held.loud].tolist()))
    floor = max(int(held.lowest), max(levels.values(), default=-MOST_POWER) - WINDOW)
    mass = Counter({j: 2 ** max(0, level - floor) for j, level in levels.items()})
    if len(levels) < len(held.scores):
        mass.update(held.quiet.tolist())
        mass[None] = len(levels)
    return +mass


def assert_law_is_exact(held: Shelf, features=None):
    """Proposals for every feature; acceptance, both signs, for `features` (all if left out).

    A pick has probability in proportion to (draws that propose j) * 1/2 * (chance to keep (j, s)).
    A quiet feature of low power must get past a word for every 64 powers, or part of them, first.
    """
    expected = expected_proposals(held)
    first = proposals(held.room, expected)
    powers, loud = held.powers.tolist(), set(held.loud.tolist())
    constants = []
    for j in range(len(held.scores)) if features is None else features:
        before = 0 if j in loud else math.ceil((held.lowest - powers[j]) / 64)
        for sign in (-1, 1):
            words = words_of(first[j], expected.total())
            kept = log2_acceptance(held.room, words, sign, before)
            exponent = float(powers[j] + held.kappa * -sign * int(held.scores[j]))
            constants.append(math.log2(expected[j]) + kept - exponent)
    assert np.ptp(constants) < 1e-9, constants


def quiet_edge(kappa: Fraction) -> int:
    """The largest |score| that a quiet feature can have: kappa * |G| <= 1."""
    return int(1 / kappa)


laws = st.fixed_dictionaries({
    "seed": st.integers(0, 2**32),
    "n_features": st.integers(1, 12),
    "levels": st.sampled_from([0.5, 1, 3, 30, 100, 1000, 3000, 3000]),
    "multiplier": st.sampled_from([1, 3, 5, 37, 1023]),
    "shift": st.sampled_from([1, 1, 2, 5, 10, 40]),
    "loud_share": st.sampled_from([0.0, 0.5, 1.0]),
    "powers": st.sampled_from([None, (-6, 6), (-6, 6), (0, 60), (-60, -50), (-60, 60)]),
})


def random_shelf(seed, n_features, levels, multiplier, shift, loud_share, powers) -> Shelf:
    """Scores within +-levels, as far as derivatives reach; any feature that may be quiet can be."""
    rng = np.random.default_rng(seed)
    kappa = Fraction(multiplier, 2**shift)
    reach = min(int(levels / kappa), MOST_DERIVATIVE)
    derivatives = rng.integers(-reach, reach + 1, n_features)
    is_loud = (rng.random(n_features) < loud_share) | (abs(derivatives) > quiet_edge(kappa))
    held = shelf(derivatives, np.flatnonzero(is_loud), multiplier, shift)
    if powers is None:
        return held
    return weighted(held, rng.integers(powers[0], powers[1] + 1, n_features))


def test_the_law_of_a_pick_word_by_word():
    """No statistics: the share of random words behind every outcome, against the closed form."""
    seen = Counter()

    @settings(max_examples=300, deadline=None, derandomize=True, database=None)
    @given(laws)
    def every_law(law):
        held = random_shelf(**law)
        assert_law_is_exact(held)
        expected = expected_proposals(held)
        levels, powers = held.kappa * abs(held.scores), held.powers
        seen["quiet and loud"] += 0 < len(held.loud) < len(held.scores)
        seen["none loud"] += len(held.loud) == 0
        seen["none quiet"] += len(held.loud) == len(held.scores)
        seen["below the window"] += levels.min() < levels.max() - WINDOW
        seen["draws of two words"] += expected.total() > 2**64
        seen["levels above the headroom"] += levels.max() > 1024
        seen["fractional"] += any(level.denominator > 1 for level in levels)
        seen["powers"] += powers.any()
        seen["powers alone"] += powers.any() and max(levels) < 1
        seen["low powers among the quiet"] += len(set(powers[held.quiet].tolist())) > 1
        seen["loud below every bound"] += held.levels.min() < held.lowest
        seen["all below 0"] += held.levels.max() < 0

    every_law()
    for what in ("quiet and loud", "none loud", "none quiet", "below the window",
                 "draws of two words", "levels above the headroom", "fractional",
                 "powers", "powers alone", "low powers among the quiet", "loud below every bound",
                 "all below 0"):
        assert seen[what] >= 10, f"{what}: {seen}"


# --- many picks ----------------------------------------------------------------------------------

N_PICKS = 200_000
FEWEST = 20             # expected picks in a cell; rarer ones are put together


def assert_picks_follow(held: Shelf, bits: Bits, n_picks: int = N_PICKS, barred=()):
    """Chi-square over all signed features at error rate 1e-8; barred ones are never picked."""
    signed = np.array([held.room.pick(bits) for _ in range(n_picks)])
    counts = np.bincount(2 * signed[:, 0] + (signed[:, 1] > 0), minlength=2 * len(held.scores))
    open_to_picks = np.setdiff1d(np.arange(len(held.scores)), barred)
    expected = np.zeros((len(held.scores), 2))
    expected[open_to_picks] = pick_probabilities(held.scores[open_to_picks], held.kappa,
                                                 held.powers[open_to_picks])
    expected = n_picks * expected.ravel()
    assert not counts[expected == 0].any()
    order = np.argsort(-expected)
    assert_counts(counts[order], expected[order])


def assert_counts(counts, expected):
    """counts against expected, descending; all cells with fewer than FEWEST in one, which takes
    in the last kept cell if it is still too small."""
    kept = np.count_nonzero(expected >= FEWEST)
    kept -= 0 < expected[kept:].sum() < FEWEST
    cells = np.r_[np.arange(kept), kept]
    observed, wanted = (np.add.reduceat(np.r_[x, 0.0], cells) for x in (counts, expected))
    observed, wanted = observed[wanted > 0], wanted[wanted > 0]
    assert counts.sum() == observed.sum() and len(wanted) > 1
    distance = ((observed - wanted) ** 2 / wanted).sum()
    assert distance < chi2.isf(1e-8, len(wanted) - 1), (distance, len(wanted) - 1)


def spread(rng, n: int, reach: float) -> np.ndarray:
    return np.rint(rng.uniform(-reach, reach, n)).astype(np.int64)


def loud_and_quiet() -> Shelf:
    """kappa = 37/1024: scores of up to 27, 0.98 levels, are quiet; the others reach 5.4 levels."""
    rng = np.random.default_rng(1)
    derivatives = np.r_[spread(rng, 30, 150), spread(rng, 40, 27)]
    return shelf(derivatives, np.flatnonzero(abs(derivatives) > 27), 37, 10)


def quiet_at_the_edge() -> Shelf:
    """kappa = 1/8: quiet features at exactly one level."""
    derivatives = [8, -8, 8, -8, 0, 3, -9, 9, 12, -20, 16, -16]
    return shelf(derivatives, np.flatnonzero(np.abs(derivatives) > 8), 1, 3)


def all_quiet() -> Shelf:
    """kappa = 2^-14, scores up to one level: all quiet."""
    return shelf(spread(np.random.default_rng(2), 60, 2**14), [], 1, 14)


def none_quiet() -> Shelf:
    """kappa = 5/32, every feature loud, those at score 0 too."""
    derivatives = np.r_[spread(np.random.default_rng(3), 50, 40), np.zeros(5, dtype=int)]
    return shelf(derivatives, np.arange(55), 5, 5)


def ties() -> Shelf:
    """kappa = 1/2: scores tied at four levels, both signs, with quiet ties below."""
    derivatives = np.repeat([12, -12, 9, -9, 2, -2, 0], 6)
    return shelf(derivatives, np.flatnonzero(abs(derivatives) > 2), 1, 1)


def far_above_the_rest() -> Shelf:
    """kappa = 3/4: levels near 750, with hundreds of loud and quiet features far below."""
    rng = np.random.default_rng(4)
    top = 1000 - np.arange(12)
    derivatives = np.r_[top, -top[::2], spread(rng, 300, 800), np.ones(100, dtype=int)]
    return shelf(derivatives, np.flatnonzero(abs(derivatives) > 1), 3, 2)


def levels_in_the_thousands() -> Shelf:
    """kappa = 7/8: levels near 14,000, all but the top in the lowest bucket."""
    derivatives = np.r_[16_000 - np.arange(10), np.arange(10) - 16_000, np.arange(200)]
    return shelf(derivatives, np.flatnonzero(abs(derivatives) > 1), 7, 3)


def sums_of_64_bits() -> Shelf:
    """16 entries of 2^14 a feature: scores past 2^31; kappa = 3 * 2^-30."""
    derivatives = spread(np.random.default_rng(5), 60, 2**14)
    held = shelf(derivatives, np.flatnonzero(abs(derivatives) > 1300), 3, 30, 16, 2**14)
    assert held.room.score.dtype == np.int64 and abs(held.scores).max() > 2**31
    return held


SHELVES = (loud_and_quiet, quiet_at_the_edge, all_quiet, none_quiet, ties, far_above_the_rest,
           levels_in_the_thousands, sums_of_64_bits)


def rare_high_powers() -> Shelf:
    """Loud and quiet, a few of each 2^5 times as likely."""
    held = loud_and_quiet()
    return weighted(held, np.where(np.arange(70) % 9 == 0, 5, 0))


def low_powers() -> Shelf:
    """Most features, loud and quiet, down by up to 4."""
    return weighted(loud_and_quiet(), -(np.arange(70) % 5))


def mixed_powers() -> Shelf:
    """kappa = 1/8, features at the edge of quiet; powers from -3 to 3."""
    return weighted(quiet_at_the_edge(), np.arange(12) % 7 - 3)


def quiet_powers() -> Shelf:
    """All quiet; powers from -60 to -54."""
    return weighted(all_quiet(), np.arange(60) % 7 - MOST_POWER)


def loud_powers_below_zero() -> Shelf:
    """All loud; powers from -9 to -5."""
    return weighted(none_quiet(), np.arange(55) % 5 - 9)


def loud_far_below_the_quiet() -> Shelf:
    """Loud features brought below the quiet ones, whose powers are 1 and 2."""
    held = loud_and_quiet()
    powers = 1 + np.arange(70) % 2
    powers[held.loud] = np.arange(len(held.loud)) % 4 - 5
    return weighted(held, powers)


def powers_alone() -> Shelf:
    """kappa = 2^-40, every score in level 0; powers from -3 to 4, some features loud."""
    held = shelf(spread(np.random.default_rng(6), 60, 2**14), np.arange(0, 60, 7), 1, 40)
    return weighted(held, np.arange(60) % 8 - 3)


def powers_against_scores() -> Shelf:
    """Levels near 750 brought down to those far below, which are raised."""
    held = far_above_the_rest()
    low = np.where(held.levels > 560, MOST_POWER, 9)
    return weighted(held, np.where(held.levels > 690, -MOST_POWER, low))


def powers_on_sums_of_64_bits() -> Shelf:
    return weighted(sums_of_64_bits(), np.arange(60) % 6 - 2)


PRIORS = (rare_high_powers, low_powers, mixed_powers, quiet_powers, loud_powers_below_zero,
          loud_far_below_the_quiet, powers_alone, powers_against_scores, powers_on_sums_of_64_bits)


@pytest.mark.parametrize("fill", SHELVES + PRIORS)
def test_picks_from_a_seed_follow_the_closed_form(fill):
    assert_picks_follow(fill(), Bits(seed=20))


@pytest.mark.parametrize("fill", SHELVES + PRIORS)
def test_picks_from_the_real_source_follow_the_closed_form(fill):
    """Error rate per run: 17 times 1e-8."""
    assert_picks_follow(fill(), Bits())


@pytest.mark.parametrize("source", [lambda: Bits(seed=21), Bits], ids=["a seed", "real source"])
@pytest.mark.parametrize("fill", SHELVES + PRIORS)
def test_barred_features_leave_the_draw_to_the_others(fill, source):
    """The likeliest third and a third of the rest are barred. Error rate per run: 17 times 1e-8."""
    held = fill()
    order = np.argsort(-(float(held.kappa) * abs(held.scores) + held.powers), kind="stable")
    third = len(order) // 3
    barred = np.r_[order[:third], order[third::3]]
    for feature in np.r_[barred, barred[:2]]:
        held.room.bar(int(feature))
        held.room._check()
    assert_picks_follow(held, source(), N_PICKS // 4, barred)


@pytest.mark.parametrize("fill", [loud_and_quiet, rare_high_powers, low_powers,
                                  loud_far_below_the_quiet])
@pytest.mark.parametrize("multiplier", [37, 20, 5, 1])
def test_picks_follow_a_rate_that_was_changed(fill, multiplier):
    """Slower rates keep quiet features under a level. Error rate per run: 16 times 1e-8."""
    held = fill()
    held.room.set_rate(multiplier)
    held.room._check()
    assert_picks_follow(held._replace(kappa=Fraction(multiplier, 1024)), Bits(seed=22),
                        N_PICKS // 4)


@pytest.mark.parametrize("fill", PRIORS[:2])
def test_powers_rates_and_bars_together(fill):
    """A rate for every pick and each feature picked once. Error rate per run: 12 times 1e-8."""
    held, barred = fill(), []
    for multiplier in (1, 4, 9, 16, 25, 37):
        held.room.set_rate(multiplier)
        held.room._check()
        assert_picks_follow(held._replace(kappa=Fraction(multiplier, 1024)), Bits(seed=23),
                            N_PICKS // 8, barred)
        while len(barred) < 2 * multiplier - 9:
            barred.append(held.room.pick(Bits(seed=len(barred)))[0])
            held.room.bar(barred[-1])
            held.room._check()
    assert len(set(barred)) == len(barred) == 65


def test_one_feature_must_stay_in_the_draw():
    held = loud_and_quiet()
    for feature in range(len(held.scores) - 1):
        held.room.bar(feature)
    assert {held.room.pick(Bits(seed=1))[0] for _ in range(20)} == {len(held.scores) - 1}
    with pytest.raises(ValueError, match="every other feature is barred"):
        held.room.bar(len(held.scores) - 1)
    held.room.bar(0)
    for feature in (-1, len(held.scores)):
        with pytest.raises(IndexError, match="no feature"):
            held.room.bar(feature)


def test_the_chi_square_test_sees_a_rate_three_percent_off():
    held = loud_and_quiet()
    wrong = held._replace(kappa=held.kappa * Fraction(103, 100))
    with pytest.raises(AssertionError):
        assert_picks_follow(wrong, Bits(seed=20))


def test_the_chi_square_test_sees_one_power_one_off():
    held = low_powers()
    wrong = held.prior.copy()
    wrong[np.argmax(pick_probabilities(held.scores, held.kappa, held.powers).sum(axis=1))] -= 1
    with pytest.raises(AssertionError):
        assert_picks_follow(held._replace(prior=wrong), Bits(seed=20))


# --- what powers are ----------------------------------------------------------------------------


@pytest.mark.parametrize("fill", SHELVES)
@pytest.mark.parametrize("power", [0, 7, -MOST_POWER, MOST_POWER])
def test_the_same_power_for_all_is_none_bit_for_bit(fill, power):
    """Only ratios of weights count."""
    n = len(fill().scores)
    drawn = []
    for held in (fill(), weighted(fill(), np.full(n, power))):
        bits, picks = Bits(seed=30), []
        for _ in range(min(n - 1, 12)):
            picks += [held.room.pick(bits) for _ in range(100)]
            held.room.bar(picks[-1][0])
        held.room.set_rate(1)
        held.room._check()
        picks += [held.room.pick(bits) for _ in range(100)]
        drawn.append((picks, held.room.counters, bits.words_drawn))
    assert drawn[0] == drawn[1]


WRONG_POWERS = [
    (np.zeros(69, dtype=np.int8), "shape"),
    (np.zeros((70, 1), dtype=np.int8), "shape"),
    (0, "shape"),
    (np.zeros(70), "integers"),
    (np.zeros(70, dtype=bool), "integers"),
    (["1"] * 70, "integers"),
    ([None] * 70, "integers"),
    (np.full(70, MOST_POWER + 1), "within"),
    (np.r_[-MOST_POWER - 1, np.zeros(69, dtype=np.int16)], "within"),
    (np.full(70, 2**64 - 1, dtype=np.uint64), "within"),
]


@pytest.mark.parametrize(("powers", "fault"), WRONG_POWERS)
def test_wrong_powers_are_refused(powers, fault):
    rows = loud_and_quiet().room.source
    with pytest.raises(ValueError, match=fault):
        Scores(70, rows, 37, 10, powers)


@pytest.mark.parametrize("kind", [np.int8, np.int16, np.int64, np.uint8, list])
def test_powers_come_as_any_integers_and_are_copied(kind):
    rows = loud_and_quiet().room.source
    given = np.arange(70) % 9
    handed = given.tolist() if kind is list else given.astype(kind)
    room = Scores(70, rows, 37, 10, handed)
    handed[0] = 8
    assert room.powers.dtype == np.int8 and (room.powers == given).all()


def tries_per_pick(room: Scores, n_picks: int = 500) -> float:
    bits, before = Bits(seed=31), room.counters["tries"]
    for _ in range(n_picks):
        room.pick(bits)
    return (room.counters["tries"] - before) / n_picks


@pytest.mark.parametrize("loud", [[], range(5), range(5, 10), range(10)])
def test_low_powers_cost_no_tries_once_the_high_ones_are_barred(loud):
    """A power of -60 left alone is as good as 0: the bound comes down with the last high power."""
    held = weighted(shelf(np.zeros(10), loud, 1, 3), np.repeat([MOST_POWER, 0, -MOST_POWER],
                                                               [1, 4, 5]))
    for feature in range(9):
        assert tries_per_pick(held.room) < 60
        held.room.bar(feature)
        held.room._check()


def test_scores_of_low_powers_are_seldom_computed():
    """Powers of -20 but for one feature in 64: many tries, no more scores than without powers."""
    held = weighted(shelf(np.zeros(640), [], 1, 3), np.where(np.arange(640) % 64, -20, 0))
    assert 64 < tries_per_pick(held.room) < 256
    counters = held.room.counters
    assert counters["quiet"] < 3 * counters["picks"]


# --- powers on their way from a fit ---------------------------------------------------------------


def rooms_with_powers(powers, bits, exclude=None):
    """(rows, scores, kappa) as a fit opens them, for 40 features and a greedy plan."""
    rng = np.random.default_rng(9)
    X = (rng.random((400, 40)) < np.linspace(0.01, 0.5, 40)).astype(float)
    facts = PublicFacts(features=40, rows=400)
    plan = plan_fit(facts, Guarantee(0.05, 1e-6), method="greedy", picks=4,
                    exclude=exclude, prior=2.0 ** np.asarray(powers))
    table = build_table(sp.csr_array(X), X[:, 39], facts, plan.entry_levels)
    kappa = Fraction(max(plan.multipliers) * table.unit, 2**plan.shift)
    return *open_rooms(plan, table, bits), kappa


def test_a_fit_hands_powers_on():
    """Error rate 1e-8, and 0 for what is excluded."""
    powers = np.arange(40) % 6 - 2
    powers[[3, 33]] = 12
    rows, room, kappa = rooms_with_powers(powers, Bits(seed=5), exclude=[33, 34])
    rows.place(0)
    room.absorb(rows.first_scores())
    room._check()
    assert 2 not in room.loud and 3 in room.loud and 4 not in room.loud and 39 in room.loud
    scores = np.array([rows.score(j) for j in range(40)])
    assert_picks_follow(Shelf(room, scores, room.loud, kappa, powers), Bits(seed=6),
                        N_PICKS // 4, [33, 34])


few_powers = st.lists(st.integers(-MOST_POWER, MOST_POWER), min_size=1, max_size=5)


@settings(max_examples=200, deadline=None, derandomize=True, database=None)
@given(few_powers, st.integers(1, 300), st.integers(0, 2**32))
def test_few_features_are_loud_for_their_power_and_the_others_get_past_it(kinds, n, seed):
    """With scores all quiet: under 1 in 16 loud, and at least 1 in 16 proposals heard, where those
    of the loud count as heard."""
    powers = np.random.default_rng(seed).choice(kinds, n).astype(np.int8)
    table = Table(ColumnTable(1, np.zeros(n + 1, dtype=np.int64), np.zeros(0, dtype=np.int32),
                              None),
                  np.zeros(1), 1, 1)
    loud = loud_features(table, 1, 1, 40, powers)
    assert len(loud) < n / 16 and len(loud_features(table, 1, 1, 40)) == 0
    quiet = np.delete(powers, loud).astype(float)
    assert loud.dtype == np.int32 and powers[loud].min(initial=127) > quiet.max()
    heard = np.exp2(quiet - quiet.max()).sum() + len(loud)
    assert heard >= n / 16
    higher = np.unique(powers[loud])[:1].astype(float)
    assert (np.exp2(np.minimum(powers - higher[:, None], 0)).mean(axis=1) < 1 / 16).all()


# --- the heap under stress -----------------------------------------------------------------------

STEPS = 2000


class Stress:
    """A heap whose scores are steered by moves.

    Features below SPARSE lie in rows of one to three of them: a move lists its changes. The others
    lie in rows of 150 of them: a move changes more scores than a list may hold.
    """

    N_FEATURES, N_ROWS, SPARSE = 300, 120, 100

    def __init__(self, seed: int, multiplier: int, shift: int, powers=None):
        self.rng = np.random.default_rng(seed)
        n = self.N_ROWS
        parts = (np.zeros(n, dtype=np.int32), np.zeros(n, dtype=np.uint16), STRAIGHT,
                 MOST_DERIVATIVE, np.full(STEPS + 1, STRAIGHT_SCALE))
        self.eager = Eager(self.table(), *parts)
        loud = np.arange(self.N_FEATURES, dtype=np.int32)
        table = ColumnTable(n, *column_arrays(self.eager.X))
        self.rows = Rows(table, loud, *parts, False)
        self.powers = powers
        self.room = Scores(self.N_FEATURES, self.rows, multiplier, shift, powers)
        self.kappa = Fraction(multiplier, 2**shift)
        self.rows.place(0)
        self.room.absorb(self.rows.first_scores())
        self.seen = Counter()
        self.barred = np.zeros(self.N_FEATURES, dtype=int)

    def table(self) -> np.ndarray:
        X = np.zeros((self.N_ROWS, self.N_FEATURES), dtype=np.int64)
        for row in X[::2]:
            row[self.rng.choice(self.SPARSE, self.rng.integers(1, 4), replace=False)] = 1
        for row in X[1::2]:
            row[self.rng.choice(range(self.SPARSE, self.N_FEATURES), 150, replace=False)] = 1
        return X

    @property
    def held(self) -> Shelf:
        return Shelf(self.room, self.eager.scores, self.rows.loud, self.kappa, self.powers)

    @property
    def top_level(self) -> int:
        return int(self.held.levels.max())

    def move(self, feature: int, weight: int):
        q, level, rebuilds = self.eager.q, self.top_level, self.room.counters["rebuilds"]
        self.eager.move(feature, weight)
        self.room.absorb(self.rows.move(feature, weight))
        self.room._check()
        assert (self.room.score == self.eager.scores).all()
        rebuilt = self.room.counters["rebuilds"] > rebuilds
        self.note(q != self.eager.q, self.top_level - level, rebuilt)

    def note(self, changed: np.ndarray, rise: int, rebuilt: bool):
        """What kind of change it was, where the ids it can have touched leave no doubt."""
        held = self.eager.X[changed] != 0
        room = len(self.rows.change.touched)
        if held.any(axis=0).sum() > room:
            assert rebuilt
            self.seen["dense"] += 1
        elif held.sum() <= room:
            self.seen["listed"] += not rebuilt
            self.seen["listed, outgrown"] += rebuilt and rise > 0
            self.seen["listed, collapsed"] += rebuilt and rise < 0

    def calm(self):
        """Everything taken back."""
        for feature in self.rng.permutation(np.flatnonzero(self.eager.v)).tolist():
            self.move(feature, -int(self.eager.v[feature]))
        assert not self.eager.scores.any()

    def wander(self):
        """Moves of any size among the sparse or among the other features, most then taken back."""
        low, high = (0, self.SPARSE) if self.rng.random() < 0.8 else (self.SPARSE, self.N_FEATURES)
        made = [(int(self.rng.integers(low, high)),
                 int(self.rng.choice([-1, 1]) * 10 ** self.rng.uniform(0, 4.2)))
                for _ in range(self.rng.integers(1, 12))]
        for feature, weight in made:
            self.move(feature, weight)
        keep = 0.2 if low == 0 else 0.0
        for feature, weight in made:
            if self.rng.random() >= keep:
                self.move(feature, -weight)


def all_kinds_of_powers(n: int) -> np.ndarray:
    """Few high, most 0, some low."""
    rng = np.random.default_rng(7)
    return np.where(rng.random(n) < 0.3, rng.integers(-MOST_POWER, 21, n), 0).astype(np.int8)


@pytest.mark.parametrize("powers", [None, all_kinds_of_powers(300)], ids=["no prior", "powers"])
@pytest.mark.parametrize("multiplier, shift", [(1, 1), (5, 3), (37, 5), (3, 6), (1, 14)])
def test_a_heap_stays_whole_under_any_changes(multiplier, shift, powers):
    """Error rate per run: 10 times 1e-8."""
    stress = Stress(multiplier + shift, multiplier, shift, powers)
    while stress.rows.moves_made < 1500:
        stress.wander()
    assert stress.seen["dense"] > 100 and stress.seen["listed"] > 100
    if stress.kappa > Fraction(1, 2):
        assert stress.seen["listed, outgrown"] > 3 and stress.seen["listed, collapsed"] > 3
    by_score = np.argsort(abs(stress.held.scores))
    assert_law_is_exact(stress.held, by_score[[0, 1, 150, -3, -2, -1]].tolist())
    stress.calm()
    assert_law_is_exact(stress.held, [0, 299])
    for feature in stress.rng.choice(stress.SPARSE, 40, replace=False).tolist():
        stress.move(feature, int(stress.rng.uniform(-3, 3) / stress.kappa))
    assert_picks_follow(stress.held, Bits(seed=multiplier))


@pytest.mark.parametrize("powers", [None, all_kinds_of_powers(300)], ids=["no prior", "powers"])
@pytest.mark.parametrize(("multiplier", "shift"), [(1, 1), (7, 3), (3, 12)])
def test_the_heap_survives_bars_between_moves(multiplier, shift, powers):
    """Scores of barred features go on; the others' buckets are those of a heap without them."""
    stress = Stress(8, multiplier, shift, powers)
    barred = stress.rng.permutation(stress.N_FEATURES)[:200]
    for feature in barred.tolist():
        strongest = int(np.argmax(abs(stress.eager.scores) * (stress.barred == 0)))
        for target in {feature, strongest}:
            stress.room.bar(target)
            stress.barred[target] = 1
            stress.room._check()
        weight = int(stress.rng.integers(-3000, 3000))
        stress.eager.move(feature, weight)
        stress.room.absorb(stress.rows.move(feature, weight))
        stress.room._check()
        assert (stress.room.score == stress.eager.scores).all()
        if (stress.barred == 0).sum() <= 20:
            break
    picks = {stress.room.pick(Bits(seed=s))[0] for s in range(30)}
    assert not stress.barred[list(picks)].any()
