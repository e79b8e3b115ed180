"""Corrections of a chosen set: exact integer sums, and how far one row can move them."""

from __future__ import annotations

import math

import numpy as np
import pytest
import scipy.sparse as sp
from hypothesis import given, settings
from hypothesis import strategies as st
from reference import quantised

from sordino import Guarantee, PublicFacts, plan_fit
from sordino._core.bits import Bits
from sordino.plan.corrections import WEIGHT_BITS
from sordino.solvers.corrections import ChosenSet, ceil_sqrt, noisy, trusted_newton
from sordino.table import build_table

LEVELS = 2**14
seeds = st.integers(0, 2**32 - 1)


def random_rows(rng, n: int, d: int, kind: str) -> np.ndarray:
    held = rng.random((n, d)) < rng.uniform(0.1, 0.9)
    return held * (1.0 if kind == "0/1" else rng.uniform(-1.5, 1.5, (n, d)))     # some are clipped


def chosen_from(X: np.ndarray, features, limit: int) -> ChosenSet:
    facts = PublicFacts(features=X.shape[1], rows=len(X))
    table = build_table(sp.csr_array(X), np.zeros(len(X)), facts, LEVELS)
    chosen = ChosenSet(table, limit)
    for feature in features:
        chosen.add(int(feature))
    return chosen


def by_hand(X: np.ndarray, features, limit: int):
    """(x' (n, 1 + k), weights (n,)) in Python's own integers."""
    levels = quantised(X, 1.0, LEVELS)
    rows = [[LEVELS, *(int(row[j]) for j in features)] for row in levels]
    weights = []
    for row in rows:
        square = sum(x * x for x in row)
        root = math.isqrt(square - 1) + 1
        weights.append(min(2**WEIGHT_BITS, (limit << WEIGHT_BITS) // root))
    return rows, weights


@pytest.mark.parametrize("kind", ["0/1", "real"])
@settings(max_examples=60, derandomize=True, deadline=None)
@given(seeds, st.floats(0.2, 4.0))
def test_sums_are_those_of_python_integers(kind, seed, norm):
    rng = np.random.default_rng(seed)
    n, d = int(rng.integers(1, 30)), int(rng.integers(1, 12))
    X = random_rows(rng, n, d, kind)
    features = rng.permutation(d)[: rng.integers(0, d + 1)]
    limit = round(norm * LEVELS)
    chosen, (rows, weights) = chosen_from(X, features, limit), by_hand(X, features, limit)
    q = rng.integers(-64, 65, n).astype(np.int16)
    assert chosen.weights.tolist() == weights
    assert chosen.gradient(q).tolist() == [
        sum(int(q[i]) * weights[i] * rows[i][c] for i in range(n)) for c in range(len(features) + 1)
    ]
    for c, feature in enumerate(features, 1):
        assert chosen.moments(int(feature)).tolist() == [
            sum(rows[i][c] * weights[i] * rows[i][b] for i in range(n))
            for b in range(len(features) + 1)
        ]


@pytest.mark.parametrize("kind", ["0/1", "real"])
@settings(max_examples=100, derandomize=True, deadline=None)
@given(seeds, st.floats(0.2, 4.0))
def test_one_row_moves_the_sums_by_no_more_than_promised(kind, seed, norm):
    """L2 norms compared as whole numbers; all other rows keep their weights."""
    rng = np.random.default_rng(seed)
    n, d, R = int(rng.integers(2, 30)), int(rng.integers(1, 12)), 64
    X = random_rows(rng, n, d, kind)
    features, limit = rng.permutation(d)[: rng.integers(1, d + 1)], round(norm * LEVELS)
    q = rng.integers(-R, R + 1, n).astype(np.int16)
    q[-1] = R
    whole, less = chosen_from(X, features, limit), chosen_from(X[:-1], features, limit)
    assert (whole.weights[:-1] == less.weights).all()
    most = limit << WEIGHT_BITS

    def squared_move(one, other):
        return sum((int(a) - int(b)) ** 2 for a, b in zip(one, other))

    assert squared_move(whole.gradient(q), less.gradient(q[:-1])) <= (R * most) ** 2
    for feature in features.tolist():
        move = squared_move(whole.moments(feature), less.moments(feature))
        assert move <= (LEVELS * most) ** 2


def test_the_bound_is_nearly_met():
    """A long row, derivative at its end: the move is within 2 % of the bound."""
    X, limit = np.ones((1, 40)), 2 * LEVELS
    chosen = chosen_from(X, range(40), limit)
    move = math.sqrt(sum(int(v) ** 2 for v in chosen.gradient(np.array([64], dtype=np.int16))))
    assert 0.98 <= move / (64 * (limit << WEIGHT_BITS)) <= 1


@settings(derandomize=True, deadline=None)
@given(st.lists(st.integers(1, 2**62), min_size=1), st.integers(1, 2**31))
def test_roots_are_rounded_up(squares, root):
    squares += [root * root, max(root * root - 1, 1), root * root + 1]
    squares = [square for square in squares if square <= 2**62]
    expected = [math.isqrt(square - 1) + 1 for square in squares]
    assert ceil_sqrt(np.array(squares, dtype=np.int64)).tolist() == expected


def test_noise_is_whole_and_of_the_variance_asked_for():
    """Mean square of 4,000 draws within 6 standard errors: error rate below 1e-6."""
    sums = np.zeros(4_000, dtype=np.int64)
    drawn = noisy(sums, 400, Bits(seed=5))
    assert (drawn == np.rint(drawn)).all()
    assert abs((drawn**2).mean() - 400) < 6 * 400 * math.sqrt(2 / 4_000)


def test_a_newton_step_solves_floors_and_trusts():
    rng = np.random.default_rng(1)
    A = rng.normal(size=(5, 5))
    H, g = A @ A.T + np.eye(5), rng.normal(size=5)
    skewed = H + 0.3 * (A - A.T)
    gain, slope = trusted_newton(skewed, 1e-9, 0.0)
    np.testing.assert_allclose(gain @ g, np.linalg.solve(H, g))
    np.testing.assert_allclose(slope, H)
    gain, slope = trusted_newton(-H, 2.0, 0.0)
    np.testing.assert_allclose(gain @ g, g / 2.0)
    np.testing.assert_allclose(slope, 2.0 * np.eye(5), atol=1e-12)
    ridge = H @ np.linalg.inv(H @ H + 9 * np.eye(5))
    np.testing.assert_allclose(trusted_newton(H, 1e-9, 3.0)[0] @ g, ridge @ g)


# --- rows made to do harm ------------------------------------------------------------------------


ADVERSARIES = {
    "every feature at its bound": lambda rng, d: np.ones(d),
    "every feature, one sign each": lambda rng, d: rng.choice([-1.0, 1.0], d),
    "far beyond every bound": lambda rng, d: rng.choice([-1e300, 1e300], d),
    "beyond 16 bits": lambda rng, d: rng.choice([-(2.0**31), -40_000.0, 32_768.0, 65_537.0], d),
    "the largest whole steps": lambda rng, d: rng.choice([1.0, 1 - 2.0**-14, -1.0], d),
    "just under a whole root": lambda rng, d: np.full(d, np.sqrt(3 - 1e-9) / 3),
    "one huge entry": lambda rng, d: np.where(np.arange(d) == rng.integers(d), -1e300, 0.0),
    "tiny entries": lambda rng, d: np.full(d, 0.51 / LEVELS),
    "nothing": lambda rng, d: np.zeros(d),
}


def adversarial(rng, d: int, bounds) -> np.ndarray:
    """(len(ADVERSARIES), d): one row of each kind, in the units of the data."""
    with np.errstate(over="ignore"):
        rows = np.array([make(rng, d) for make in ADVERSARIES.values()]) * bounds
    return np.clip(rows, -1.7e308, 1.7e308)


def squared_length(sums) -> int:
    return sum(int(value) ** 2 for value in sums)


@pytest.mark.parametrize("form", [sp.csr_array, sp.csc_array, sp.coo_array, np.asarray])
@pytest.mark.parametrize("n_chosen", [1, 2, 3, 16, 256])
@settings(max_examples=12, derandomize=True, deadline=None)
@given(seeds, st.sampled_from([1, LEVELS // 3, LEVELS, 2 * LEVELS, 3 * LEVELS + 1, 40 * LEVELS]))
def test_clipping_holds_for_adversarial_rows_through_the_door(form, n_chosen, seed, limit):
    """w |x'| <= 2^B L, of whole numbers, for every row of a table that also holds all the others,
    whatever unit it is stored in; so a row moves the gradient by R 2^B L and the moments by
    M 2^B L at most, with a derivative at either end."""
    rng = np.random.default_rng(seed)
    d, R = n_chosen + 1, 2**14
    bounds = rng.choice([1.0, 1e-3, 7.0, 1e80], d)
    X = adversarial(rng, d, bounds)
    facts = PublicFacts(features=d, rows=len(X), entry_bound=bounds)
    table = build_table(form(X), np.zeros(len(X)), facts, LEVELS)
    chosen, features = ChosenSet(table, limit), rng.permutation(d)[:n_chosen].tolist()
    for feature in features:
        chosen.add(feature)
    levels = quantised(X, bounds, LEVELS)
    assert abs(levels).max() == LEVELS
    most = limit << WEIGHT_BITS
    for i, row in enumerate(levels):
        entries = [LEVELS, *(int(row[j]) for j in features)]
        weight = int(chosen.weights[i])
        assert 0 <= weight <= 2**WEIGHT_BITS
        assert weight**2 * squared_length(entries) <= most**2
        assert (weight + 1) ** 2 * squared_length(entries) > (most - weight - 1) ** 2 * (
            weight < 2**WEIGHT_BITS), "and no row is clipped for nothing"
        for end in (-R, R):
            q = np.zeros(len(X), dtype=np.int16)
            q[i] = end
            gradient = chosen.gradient(q)
            assert gradient.tolist() == [end * weight * entry for entry in entries]
            assert squared_length(gradient) <= (R * most) ** 2


@pytest.mark.parametrize("n_chosen", [1, 3, 16, 64])
@settings(max_examples=10, derandomize=True, deadline=None)
@given(seeds, st.sampled_from([1, LEVELS, 2 * LEVELS]))
def test_moments_of_adversarial_rows_are_bounded_row_by_row(n_chosen, seed, limit):
    """Each row in a table of its own, which it has to itself to choose the unit of."""
    rng = np.random.default_rng(seed)
    X, most = adversarial(rng, n_chosen, np.ones(n_chosen)), limit << WEIGHT_BITS
    whole = chosen_from(X, range(n_chosen), limit)
    alone = [chosen_from(row[None, :], range(n_chosen), limit) for row in X]
    for feature in {0, n_chosen // 2, n_chosen - 1}:
        parts = [chosen.moments(feature) for chosen in alone]
        assert all(squared_length(part) <= (LEVELS * most) ** 2 for part in parts)
        assert whole.moments(feature).tolist() == np.sum(parts, axis=0).tolist()
    assert whole.weights.tolist() == [int(chosen.weights[0]) for chosen in alone]


def test_sums_over_as_many_rows_as_a_plan_allows_do_not_overflow():
    """The largest derivative and weight on every row: what one row adds, times most_rows, fits."""
    for plan in (
        plan_fit(PublicFacts(features=9, rows=10**5), Guarantee(1e9, 1e-6), method="greedy"),
        plan_fit(PublicFacts(features=9, rows=10**5), Guarantee(1e9, 1e-6), method="frank-wolfe",
                 include=[1, 2]),
    ):
        row = chosen_from(np.ones((1, 9)), [1, 2], plan.limit)
        gradient = row.gradient(np.array([plan.resolution], dtype=np.int16))
        assert plan.most_rows >= 10**5
        for sums in (gradient, row.moments(1)):
            assert max(map(abs, sums.tolist())) * plan.most_rows < 2**63
