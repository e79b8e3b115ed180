"""The choice side: the score heap under stress, and picks against the closed form.

Closed form: signed feature (j, s) has probability proportional to 2^(kappa * -s * G_j), the base-2
exponential mechanism (Ilvento 2020, from memory).
"""

from __future__ import annotations

import math
from collections import Counter
from fractions import Fraction
from typing import NamedTuple

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from reference import Eager, column_arrays, pick_probabilities
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


def shelf(derivatives, loud, multiplier: int, shift: int, entries: int = 1, value: int = 1) -> Shelf:
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
    bits = Bits(refill=lambda n_bytes: b"".join(w.to_bytes(8, "little") for w in words)
                .ljust(n_bytes, b"\0"))
    tries = room.counters["tries"]
    feature, sign = room.pick(bits)
    return Attempt(feature, sign, room.counters["tries"] == tries + 1, bits.words_drawn)


def words_of(draw: int, total: int) -> list[int]:
    """The random words that draw this number below `total`."""
    return [draw] if (total - 1).bit_length() <= 64 else [draw >> 64, draw % 2**64]


def last_true(low: int, high: int, holds) -> int:
    """The last number of [low, high) at which `holds`, which holds at low and never again once not."""
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
    """log2 of the chance that a proposal is kept: the product of each word's share that keeps it."""
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


@settings(max_examples=40, deadline=None, derandomize=True, database=None)
@given(
    seed=st.integers(0, 2**32),
    n_features=st.integers(1, 12),
    reach=st.sampled_from([0, 1, 3, 30, 100, 1000, 16000]),
    multiplier=st.sampled_from([1, 3, 5, 37, 1023]),
    shift=st.sampled_from([1, 2, 5, 10, 20, 40]),
    loud_share=st.sampled_from([0.0, 0.5, 1.0]),
)
def test_the_law_of_a_pick_word_by_word(seed, n_features, reach, multiplier, shift, loud_share):
    """No statistics: the share of random words behind every outcome, against the closed form."""
    rng = np.random.default_rng(seed)
    derivatives = rng.integers(-reach, reach + 1, n_features)
    is_loud = (rng.random(n_features) < loud_share)
    is_loud |= abs(derivatives) > quiet_edge(Fraction(multiplier, 2**shift))
    assert_law_is_exact(shelf(derivatives, np.flatnonzero(is_loud), multiplier, shift))
