"""Corrections of a chosen set: exact integer sums, and how far one row can move them."""

from __future__ import annotations

import math

import numpy as np
import pytest
import scipy.sparse as sp
from hypothesis import given, settings
from hypothesis import strategies as st
from reference import quantised

from sordino import PublicFacts
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
