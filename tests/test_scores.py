"""The choice side: the score heap under stress, and picks against the closed form.

Closed form: signed feature (j, s) has probability proportional to 2^(kappa * -s * G_j), the base-2
exponential mechanism (Ilvento 2020, from memory).
"""

from __future__ import annotations

import math
from collections import Counter
from fractions import Fraction
from io import BytesIO
from typing import NamedTuple

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from reference import STRAIGHT, STRAIGHT_SCALE, Eager, column_arrays, pick_probabilities
from scipy.stats import chi2

from sordino._core.bits import Bits
from sordino._core.rows import Rows
from sordino._core.scores import Scores
from sordino._core.table import ColumnTable

WINDOW = 80             # levels below the top that are weighed exactly, as in scores.pyx
MOST_DERIVATIVE = 2**14
FLAT = np.zeros(4097, dtype=np.int32)


class Shelf(NamedTuple):
    """A choice side that holds given scores."""

    room: Scores
    scores: np.ndarray      # int64 (n_features,)
    loud: np.ndarray
    kappa: Fraction


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


def log2_acceptance(room: Scores, words: list[int], sign: int) -> float:
    """log2 of the chance that a proposal is kept: each word keeps it with a share of its own."""
    start = [*words, int(sign > 0)]
    kept = attempt(room, start)
    assert kept.accepted and kept.sign == sign
    log2_chance = 0.0
    for place in range(kept.n_words - len(start)):
        keeps = lambda word: attempt(room, [*start, *[0] * place, word]).accepted  # noqa: E731
        share = 1 + last_true(0, 2**64, keeps) if keeps(1) else 1
        log2_chance += math.log2(share) - 64
    return log2_chance


def expected_proposals(held: Shelf) -> Counter:
    """Draws by the rule of the heap: 2^(level - floor) in the window, one each below it.

    If there are quiet features, every feature id has one more draw, which starts again when loud.
    """
    levels = {j: math.floor(held.kappa * abs(int(held.scores[j]))) for j in held.loud.tolist()}
    floor = max(0, max(levels.values(), default=0) - WINDOW)
    mass = Counter({j: 2 ** max(0, level - floor) for j, level in levels.items()})
    if len(levels) < len(held.scores):
        quiet = [j for j in range(len(held.scores)) if j not in levels]
        mass.update(quiet)
        mass[None] = len(levels)
    return +mass


def assert_law_is_exact(held: Shelf, features=None):
    """Proposals for every feature; acceptance, both signs, for `features` (all if left out).

    A pick has probability in proportion to (draws that propose j) * 1/2 * (chance to keep (j, s)).
    """
    expected = expected_proposals(held)
    first = proposals(held.room, expected)
    constants = []
    for j in range(len(held.scores)) if features is None else features:
        for sign in (-1, 1):
            kept = log2_acceptance(held.room, words_of(first[j], expected.total()), sign)
            exponent = float(held.kappa * -sign * int(held.scores[j]))
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
})


def random_shelf(seed, n_features, levels, multiplier, shift, loud_share) -> Shelf:
    """Scores within +-levels, as far as derivatives reach; any feature that may be quiet can be."""
    rng = np.random.default_rng(seed)
    kappa = Fraction(multiplier, 2**shift)
    reach = min(int(levels / kappa), MOST_DERIVATIVE)
    derivatives = rng.integers(-reach, reach + 1, n_features)
    is_loud = (rng.random(n_features) < loud_share) | (abs(derivatives) > quiet_edge(kappa))
    return shelf(derivatives, np.flatnonzero(is_loud), multiplier, shift)


def test_the_law_of_a_pick_word_by_word():
    """No statistics: the share of random words behind every outcome, against the closed form."""
    seen = Counter()

    @settings(max_examples=200, deadline=None, derandomize=True, database=None)
    @given(laws)
    def every_law(law):
        held = random_shelf(**law)
        assert_law_is_exact(held)
        expected = expected_proposals(held)
        levels = held.kappa * abs(held.scores)
        seen["quiet and loud"] += 0 < len(held.loud) < len(held.scores)
        seen["none loud"] += len(held.loud) == 0
        seen["none quiet"] += len(held.loud) == len(held.scores)
        seen["below the window"] += levels.min() < levels.max() - WINDOW
        seen["draws of two words"] += expected.total() > 2**64
        seen["levels above the headroom"] += levels.max() > 1024
        seen["fractional"] += any(level.denominator > 1 for level in levels)

    every_law()
    for what in ("quiet and loud", "none loud", "none quiet", "below the window",
                 "draws of two words", "levels above the headroom", "fractional"):
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
    expected[open_to_picks] = pick_probabilities(held.scores[open_to_picks], held.kappa)
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


@pytest.mark.parametrize("fill", SHELVES)
def test_picks_from_a_seed_follow_the_closed_form(fill):
    assert_picks_follow(fill(), Bits(seed=20))


@pytest.mark.parametrize("fill", SHELVES)
def test_picks_from_the_real_source_follow_the_closed_form(fill):
    """Error rate per run: eight times 1e-8."""
    assert_picks_follow(fill(), Bits())


@pytest.mark.parametrize("source", [lambda: Bits(seed=21), Bits], ids=["a seed", "real source"])
@pytest.mark.parametrize("fill", SHELVES)
def test_barred_features_leave_the_draw_to_the_others(fill, source):
    """The strongest third and a third of the rest are barred. Error rate per run: 8 times 1e-8."""
    held = fill()
    order = np.argsort(-abs(held.scores), kind="stable")
    third = len(order) // 3
    barred = np.r_[order[:third], order[third::3]]
    for feature in np.r_[barred, barred[:2]]:
        held.room.bar(int(feature))
        held.room._check()
    assert_picks_follow(held, source(), N_PICKS // 4, barred)


@pytest.mark.parametrize("multiplier", [37, 20, 5, 1])
def test_picks_follow_a_rate_that_was_changed(multiplier):
    """Slower rates keep quiet features under a level. Error rate per run: 4 times 1e-8."""
    held = loud_and_quiet()
    held.room.set_rate(multiplier)
    held.room._check()
    assert_picks_follow(held._replace(kappa=Fraction(multiplier, 1024)), Bits(seed=22),
                        N_PICKS // 4)


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


# --- the heap under stress -----------------------------------------------------------------------

STEPS = 2000


class Stress:
    """A heap whose scores are steered by moves.

    Features below SPARSE lie in rows of one to three of them: a move lists its changes. The others
    lie in rows of 150 of them: a move changes more scores than a list may hold.
    """

    N_FEATURES, N_ROWS, SPARSE = 300, 120, 100

    def __init__(self, seed: int, multiplier: int, shift: int):
        self.rng = np.random.default_rng(seed)
        n = self.N_ROWS
        parts = (np.zeros(n, dtype=np.int32), np.zeros(n, dtype=np.uint16), STRAIGHT,
                 MOST_DERIVATIVE, np.full(STEPS + 1, STRAIGHT_SCALE))
        self.eager = Eager(self.table(), *parts)
        loud = np.arange(self.N_FEATURES, dtype=np.int32)
        table = ColumnTable(n, *column_arrays(self.eager.X))
        self.rows = Rows(table, loud, *parts, False)
        self.room = Scores(self.N_FEATURES, self.rows, multiplier, shift)
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
        return Shelf(self.room, self.eager.scores, self.rows.loud, self.kappa)

    @property
    def top_level(self) -> int:
        return math.floor(self.kappa * int(abs(self.eager.scores).max()))

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


@pytest.mark.parametrize("multiplier, shift", [(1, 1), (5, 3), (37, 5), (3, 6), (1, 14)])
def test_a_heap_stays_whole_under_any_changes(multiplier, shift):
    stress = Stress(multiplier + shift, multiplier, shift)
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


@pytest.mark.parametrize(("multiplier", "shift"), [(1, 1), (7, 3), (3, 12)])
def test_the_heap_survives_bars_between_moves(multiplier, shift):
    """Scores of barred features go on; the others' buckets are those of a heap without them."""
    stress = Stress(8, multiplier, shift)
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
