"""Whole fits: every step against the eager oracle, every pick against the closed form."""

from __future__ import annotations

from fractions import Fraction
from importlib import import_module

import numpy as np
import pytest
import scipy.sparse as sp
from hypothesis import given, settings
from hypothesis import strategies as st
from reference import MARGIN_UNIT, Eager, course, pick_probabilities, quantised
from scipy.stats import chi2

import sordino
from sordino._core.bits import Bits
from sordino.fit import open_rooms
from sordino.losses import Logistic
from sordino.solvers.frank_wolfe import frank_wolfe
from sordino.table import build_table

MOST_INTERCEPT = 15.0


# --- a run watched by the oracle -----------------------------------------------------------------


def oracle_of(plan, X, y, dither) -> Eager:
    """The oracle of one fit, in quantised units of the entries."""
    scale = course(plan.schedule, plan.steps)[1] * (plan.radius / plan.entry_levels / MARGIN_UNIT)
    target = np.asarray(y, dtype=np.int64) * plan.resolution * 2**16
    entries = quantised(X, plan.facts.entry_bound, plan.entry_levels)
    return Eager(entries, target, dither, Logistic().nodes(plan.resolution), plan.resolution, scale)


class Watched:
    """Rows, scores and bits of one run in one: every call goes to them and to the oracle."""

    def __init__(self, plan, rows, scores, bits, oracle: Eager, law=None):
        self.plan, self.rows, self.scores, self.bits = plan, rows, scores, bits
        self.oracle, self.law = oracle, law
        self.unit = int(abs(oracle.X).max()) // rows.table.largest
        self.quiet = np.setdiff1d(np.arange(plan.facts.features), rows.loud)[:200]
        self.weights = course(plan.schedule, plan.steps)[0]
        self.picks, self.intercepts = [], []

    def run(self, *rest):
        return frank_wolfe(self.plan, self, self, self, *rest)

    def place(self, intercept):
        self.oracle.set_intercept(intercept)
        self.rows.place(intercept)

    def first_scores(self):
        return self.rows.first_scores()

    def shift_offset(self, features, weights, intercept):
        self.intercepts.append(intercept)
        self.oracle.shift_offset(features, weights, intercept)
        self.rows.shift_offset(features, weights, intercept)

    def catch_up(self):
        return self.rows.catch_up()

    def move(self, feature, weight):
        picked, sign = self.picks[-1]
        self.oracle.move(picked, sign * int(self.weights[len(self.picks) - 1]))
        return self.rows.move(feature, weight)

    def total(self):
        assert self.rows.total() == self.oracle.total
        return self.rows.total()

    def absorb(self, change):
        self.scores.absorb(change)
        n_loud, scores = len(self.rows.loud), self.oracle.scores
        assert (self.rows.q == self.oracle.q).all()
        kept = self.scores.score[:n_loud].astype(np.int64)
        assert (self.unit * kept == scores[self.rows.loud]).all()
        assert all(self.unit * self.rows.score(j) == scores[j] for j in self.quiet)

    def pick(self, bits):
        self.picks.append(self.scores.pick(self.bits))
        if self.law is not None:
            kappa = Fraction(self.plan.multiplier, 2**self.plan.shift)
            self.law.note(self.picks[-1], pick_probabilities(self.oracle.scores, kappa))
        return self.picks[-1]

    def discrete_gaussian(self, variance):
        assert variance == self.plan.first_variance
        return self.bits.discrete_gaussian(variance)


def watched_fit(monkeypatch, plan, X, y, seed):
    """(release, run) of plan.fit with every step compared."""
    runs = []

    def watched(plan, rows, scores, bits, *rest):
        runs.append(Watched(plan, rows, scores, bits, oracle_of(plan, X, y, rows.dither)))
        solution = runs[0].run(*rest)
        scores.absorb(rows.catch_up())
        rows._check()
        scores._check()
        return solution

    with monkeypatch.context() as patch:
        patch.setattr(import_module("sordino.fit"), "frank_wolfe", watched)
        release = plan.fit(sp.csr_array(X), y, rehearsal_seed=seed)
    return release, runs[0]


# --- the method as published ---------------------------------------------------------------------


def published(plan, X, y, run: Watched, choose):
    """(coefficients, picks) by Frank and Wolfe's recursion over the oracle's scores.

    w <- (1 - g) w + g * vertex with g = 2/(t + 2), or w <- w + vertex/steps. `choose` gives the
    vertex from the scores; dither and intercepts are those of `run`.
    """
    oracle, intercepts = oracle_of(plan, X, y, run.rows.dither), iter(run.intercepts)
    oracle.set_intercept(next(intercepts))
    w, picks = np.zeros(plan.facts.features), []
    for step, weight in enumerate(course(plan.schedule, plan.steps)[0].tolist()):
        if step > 0 and step in plan.intercept_looks:
            oracle.set_intercept(next(intercepts))
        feature, sign = choose(oracle.scores)
        vertex = np.zeros_like(w)
        vertex[feature] = sign * plan.radius / plan.facts.bounds_of(np.array([feature]))[0]
        if plan.schedule == "shrinking":
            w += 2 / (step + 2) * (vertex - w)
        else:
            w += vertex / plan.steps
        oracle.move(feature, sign * weight)
        picks.append((feature, sign))
    assert len(list(intercepts)) == plan.intercept, "a last look, after the last step"
    return w, picks


def assert_release(release, w):
    """The release holds exactly the features with weight, ascending, and these coefficients."""
    plan, dense = release.plan, np.zeros_like(w)
    dense[release.features] = release.coefficients
    assert (np.diff(release.features) > 0).all() and (release.coefficients != 0).all()
    np.testing.assert_allclose(dense, w, rtol=1e-12, atol=1e-12 * abs(w).max())
    bounds = plan.facts.bounds_of(release.features)
    assert (abs(release.coefficients) * bounds).sum() <= plan.radius * (1 + 1e-12)
    assert abs(release.intercept) <= (MOST_INTERCEPT if plan.intercept else 0)
    assert release.intercept / MARGIN_UNIT == round(release.intercept / MARGIN_UNIT)


def assert_fitted_margins(run: Watched, w):
    """The margins the run ended on are those of w over the quantised entries, to a unit or two."""
    oracle, bound = run.oracle, run.plan.facts.bounds_of(np.arange(run.plan.facts.features))
    margins = oracle.X @ (w * bound) / run.plan.entry_levels + oracle.intercept * MARGIN_UNIT
    within = abs(margins) < 16 - MARGIN_UNIT
    assert abs(oracle.margins * MARGIN_UNIT - margins)[within].max(initial=0) <= 2 * MARGIN_UNIT


# --- fits ----------------------------------------------------------------------------------------


def random_data(rng, n: int, d: int, entries: str, decades: float = 1.5):
    """(X, y, entry_bound): labels lean on the first features; some entries pass their bound.

    Features are held by all rows down to 10^-decades of them.
    """
    held = rng.random((n, d)) < 10.0 ** -rng.uniform(0, decades, d)
    values = {
        "0/1": np.ones((n, d)),
        "counts": rng.poisson(2, (n, d)) + 1,
        "real": rng.normal(size=(n, d)),
    }[entries]
    bound = {"0/1": 1.0, "counts": 8.0, "real": rng.uniform(0.5, 3, d)}[entries]
    X = held * values
    lean = X[:, :4] @ np.array([2.0, -2.0, 1.0, -1.0])[: min(d, 4)]
    return X, (rng.random(n) < 1 / (1 + np.exp(-lean))).astype(float), bound


def plan_for(X, bound, epsilon, **options):
    facts = sordino.PublicFacts(features=X.shape[1], rows=X.shape[0], entry_bound=bound)
    neighbours = options.pop("neighbours", "add-remove")
    return sordino.plan_fit(facts, sordino.Guarantee(epsilon, 1e-6, neighbours), **options)


fits = st.fixed_dictionaries({
    "seed": st.integers(0, 2**32),
    "n": st.integers(1, 300),
    "d": st.integers(4, 60),
    "entries": st.sampled_from(["0/1", "counts", "real"]),
    "epsilon": st.sampled_from([0.1, 1.0, 30.0, 1000.0, 1e6, 1e9]),
})
options = st.fixed_dictionaries({
    "steps": st.integers(1, 40),
    "radius": st.sampled_from([0.3, 5.0, 40.0]),
    "schedule": st.sampled_from(["paced", "shrinking"]),
    "intercept": st.booleans(),
    "neighbours": st.sampled_from(["add-remove", "replace-one"]),
})


def test_every_step_of_a_fit_equals_the_oracle(monkeypatch):
    @settings(max_examples=250, deadline=None, derandomize=True, database=None)
    @given(fits, options)
    def every_fit(fit, options):
        rng = np.random.default_rng(fit["seed"])
        X, y, bound = random_data(rng, fit["n"], fit["d"], fit["entries"])
        plan = plan_for(X, bound, fit["epsilon"], **options)
        release, run = watched_fit(monkeypatch, plan, X, y, fit["seed"])
        replayed = iter(run.picks)
        w, _ = published(plan, X, y, run, lambda scores: next(replayed))
        assert_release(release, w)
        assert_fitted_margins(run, w)

    every_fit()


@pytest.mark.parametrize("schedule", ["paced", "shrinking"])
@pytest.mark.parametrize("intercept", [True, False])
def test_without_noise_the_largest_score_is_picked(monkeypatch, schedule, intercept):
    """At epsilon 1e9 the runner-up is 100 levels down: picked with probability below 2^-90."""
    rng = np.random.default_rng(8)
    X, y, bound = random_data(rng, 400, 50, "real")
    plan = plan_for(X, bound, 1e9, steps=60, radius=8.0, schedule=schedule, intercept=intercept)
    release, run = watched_fit(monkeypatch, plan, X, y, seed=3)

    def largest(scores):
        second, first = np.argsort(abs(scores))[-2:]
        lead = (abs(scores[first]) - abs(scores[second])) * plan.multiplier / 2**plan.shift
        assert lead > 100
        return int(first), -1 if scores[first] > 0 else 1

    w, picks = published(plan, X, y, run, largest)
    assert run.picks == picks
    assert_release(release, w)


@pytest.mark.parametrize("features", [60_000, 70_000])
def test_a_fit_with_many_loud_features(monkeypatch, features):
    """Loud ids of two bytes and of four."""
    rng = np.random.default_rng(9)
    X = np.zeros((50, features))
    X[rng.integers(0, 50, features), np.arange(features)] = 1
    X[:, :20] = rng.random((50, 20)) < 0.5
    y = X[:, 0]
    plan = plan_for(X, 1.0, 1e6, steps=8, schedule="shrinking")
    release, run = watched_fit(monkeypatch, plan, X, y, seed=1)
    assert (run.rows.loud_of.dtype == np.int32) == (features > 65_536)
    assert len(run.rows.loud) > 65_536 or features < 65_536
    replayed = iter(run.picks)
    w, _ = published(plan, X, y, run, lambda scores: next(replayed))
    assert_release(release, w)


def test_a_rehearsal_repeats_itself():
    rng = np.random.default_rng(10)
    X, y, bound = random_data(rng, 200, 40, "counts")
    plan = plan_for(X, bound, 5.0, steps=30)
    first, again, other = (plan.fit(X, y, rehearsal_seed=seed) for seed in (1, 1, 2))
    assert first.rehearsal
    assert first.features.tolist() == again.features.tolist()
    assert first.coefficients.tolist() == again.coefficients.tolist()
    assert first.intercept == again.intercept
    assert first.features.tolist() != other.features.tolist()


# --- the law of the picks over whole fits --------------------------------------------------------


class Ranks:
    """Where each pick falls in the closed form of its own step: uniform on [0, 1) if that is right.

    The signed features are lined up by falling probability; the pick's own stretch is cut at
    random. Given all that went before, the place is uniform, so the places are independent.
    """

    def __init__(self):
        self.rng = np.random.default_rng(11)
        self.places = []

    def note(self, pick, probabilities):
        feature, sign = pick
        p = probabilities.ravel()
        order = np.argsort(-p, kind="stable")
        at = np.flatnonzero(order == 2 * feature + (sign > 0))[0]
        self.places.append(p[order[:at]].sum() + self.rng.random() * p[order[at]])


@pytest.mark.parametrize("source", ["a seed", "the real source"])
@pytest.mark.parametrize("schedule", ["paced", "shrinking"])
def test_picks_of_whole_fits_follow_the_closed_form(schedule, source):
    """Chi-square of 12,800 picks in 64 cells; error rate 1e-8 for each of the two random runs."""
    rng = np.random.default_rng(12)
    X, y, bound = random_data(rng, 300, 40, "counts", decades=2.5)
    plan = plan_for(X, bound, 25.0, steps=160, radius=6.0, schedule=schedule, intercept=False)
    table = build_table(sp.csr_array(X), y, plan.facts, plan.entry_levels)
    ranks = Ranks()
    for seed in range(80):
        bits = Bits(seed) if source == "a seed" else Bits()
        rows, scores = open_rooms(plan, table, bits)
        assert 0 < len(rows.loud) < plan.facts.features
        Watched(plan, rows, scores, bits, oracle_of(plan, X, y, rows.dither), ranks).run(None)
    counts = np.bincount((64 * np.array(ranks.places)).astype(int), minlength=64)
    assert len(counts) == 64 and counts.sum() == 12_800
    assert ((counts - 200) ** 2 / 200).sum() < chi2.isf(1e-8, 63)
