"""Standard deviations that known noise makes: linear propagation, and against many real fits."""

from __future__ import annotations

from importlib import import_module

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.special import expit

import sordino
from sordino.solvers.uncertainty import Deviations

FITS = 150


@settings(max_examples=40, derandomize=True, deadline=None)
@given(st.integers(0, 2**32 - 1), st.integers(1, 4), st.integers(0, 5))
def test_deviations_are_those_of_the_linear_recursion(seed, averaged, included):
    """All noises are followed one by one through d <- (1 - A H) d - A e, H being what is learned
    of the slope supposed: exact."""
    rng = np.random.default_rng(seed)
    first, variance = rng.uniform(0.1, 2.0, 2)
    deviations, shares = Deviations(first, averaged), []
    learned = deviations.slope.learned
    deviations.slope.learned = lambda *seen: shares.append(learned(*seen)) or shares[-1]
    noise = np.array([[np.sqrt(first)]])            # (values, unit noises drawn so far)
    states = []
    for correction in range(included + averaged):
        if correction < included:
            deviations.include()
            noise = np.pad(noise, ((0, 1), (0, 0)))
        k = len(noise)
        gain, slope = random_slope(rng, k) / 4, random_slope(rng, k)
        deviations.correct(gain, slope, rng.normal(size=k), variance)
        noise = np.c_[noise - shares[-1] * gain @ slope @ noise, -np.sqrt(variance) * gain]
        states.append(noise)
    width = noise.shape[1]
    last = [np.pad(state, ((0, 0), (0, width - state.shape[1]))) for state in states[-averaged:]]
    np.testing.assert_allclose(deviations.covariance, noise @ noise.T, rtol=1e-9, atol=1e-12)
    np.testing.assert_allclose(deviations.of_mean(), np.linalg.norm(np.mean(last, axis=0), axis=1))


def random_slope(rng, k: int) -> np.ndarray:
    """Symmetric, eigenvalues between 0 and 2."""
    basis, _ = np.linalg.qr(rng.normal(size=(k, k)))
    return basis * rng.uniform(0, 2, k) @ basis.T


@pytest.mark.parametrize("share", [0.4, 0.7])
def test_a_slope_below_the_one_supposed_is_learned(share):
    """Gradients of slope share * H, no noise but what is stated: the covariance that it settles at
    is the one of that slope. Learned from noise alone, hence within 20 % over forty runs."""
    rng = np.random.default_rng(3)
    k, variance = 20, 0.01
    slope = random_slope(rng, k) + np.eye(k)
    gain = 0.85 * np.linalg.inv(slope)
    settled = np.linalg.inv(slope @ slope) * 0.85**2 * variance / (1 - (1 - 0.85 * share) ** 2)
    found = [settled_run(rng, share, slope, gain, variance) ** 2 for _ in range(40)]
    np.testing.assert_allclose(np.mean(found, axis=0), np.diag(settled), rtol=0.4)


def settled_run(rng, share: float, slope, gain, variance: float) -> np.ndarray:
    values, deviations = rng.normal(size=len(gain)), Deviations(0.0, 1)
    for _ in values[1:]:
        deviations.include()
    for _ in range(15):
        noise = np.sqrt(variance) * rng.normal(size=len(values))
        gradient = share * slope @ values + noise
        deviations.correct(gain, slope, gradient, variance)
        values = values - gain @ gradient
    return deviations.of_mean()


@pytest.mark.parametrize("loss", ["logistic", "squared"])
@pytest.mark.parametrize("epsilon", [1.0, 4.0])
def test_fits_spread_as_far_as_is_said(loss, epsilon, monkeypatch):
    """Fits of one table with five features, all picked: standard deviations over fits against the
    ones that solutions state.

    The noise of second moments, which solutions leave out, is in the fits. Seeds are fixed: the
    outcome is the same in every run.
    """
    spread, said = spread_of_fits(loss, epsilon, monkeypatch)
    ratios = said / spread
    assert 0.75 < np.median(ratios) < 1.25
    assert 0.5 < ratios.min() and ratios.max() < 1.8


def spread_of_fits(loss: str, epsilon: float, monkeypatch) -> tuple[np.ndarray, np.ndarray]:
    """Standard deviations over fits, and the root mean square of those stated: (6,) each."""
    X, y, label = table_of(loss)
    facts = sordino.PublicFacts(features=5, rows=len(y), label=label)
    plan = sordino.plan_fit(facts, sordino.Guarantee(epsilon, 1e-6), method="greedy", loss=loss,
                            picks=5)
    module = import_module("sordino.fit")
    solve, solutions = module.greedy, []
    monkeypatch.setattr(module, "greedy",
                        lambda *room: solutions.append(solve(*room)) or solutions[-1])
    for seed in range(FITS):
        plan.fit(X, y, rehearsal_seed=seed)
    found = np.array([[s.intercept, *s.coefficients.values()] for s in solutions])
    said = np.array([[s.intercept_deviation, *s.deviations.values()] for s in solutions])
    assert all(list(s.deviations) == list(s.coefficients) == [0, 1, 2, 3, 4] for s in solutions)
    return found.std(axis=0, ddof=1), np.sqrt((said**2).mean(axis=0))


def table_of(loss: str):
    rng = np.random.default_rng(4)
    X = (rng.random((4000, 5)) < [0.5, 0.4, 0.3, 0.2, 0.1]).astype(float)
    margin = X @ [1.5, -1.5, 1.5, -1.5, 1.5] - 0.3
    if loss == "logistic":
        return X, (rng.random(4000) < expit(margin)).astype(float), "binary"
    return X, margin + rng.normal(size=4000), (-4.0, 4.0)
