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
from sordino.plan.corrections import COEFFICIENT_UNIT
from sordino.solvers.frank_wolfe import frank_wolfe
from sordino.table import build_table

MOST_INTERCEPT = 15.0
LOSSES = {"logistic": "binary", "squared": (-3.0, 5.0), "huber": (-3.0, 5.0)}     # their labels


# --- losses, from the specification --------------------------------------------------------------


def label_unit(plan) -> tuple[float, float]:
    """(centre, unit): predictions are centre + unit * margin."""
    if plan.loss == "logistic":
        return 0.0, 1.0
    low, high = plan.facts.label
    return (low + high) / 2, plan.residual_bound * (high - low) / 2


def curve_and_targets(plan, y) -> tuple[np.ndarray, np.ndarray]:
    """The derivative is curve(margin) - target(label), both int64 in units of 2^-16 / R.

    Of a clipped residual: a straight line of slope 1 to either side, with R for its limit.
    """
    whole = plan.resolution * 2**16
    if plan.loss == "logistic":
        return Logistic().nodes(plan.resolution), np.asarray(y, dtype=np.int64) * whole
    centre, unit = label_unit(plan)
    labels = (np.clip(y, *plan.facts.label) - centre) / unit
    line = whole // 128 * np.arange(-2048, 2049)
    return line, np.rint(whole * labels).astype(np.int64)


# --- a run watched by the oracle -----------------------------------------------------------------


def oracle_of(plan, X, y, dither) -> Eager:
    """The oracle of one fit, in quantised units of the entries."""
    unit = 1 / plan.entry_levels / MARGIN_UNIT
    scale = course(plan.schedule, plan.steps)[1] * (plan.radius * unit)
    curve, target = curve_and_targets(plan, y)
    entries = quantised(X, plan.facts.entry_bound, plan.entry_levels)
    return Eager(entries, target, dither, curve, plan.resolution, scale, COEFFICIENT_UNIT * unit)


class Watched:
    """Rows, scores and bits of one run in one: every call goes to them and to the oracle."""

    def __init__(self, plan, rows, scores, bits, oracle: Eager, law=None):
        self.plan, self.rows, self.scores, self.bits = plan, rows, scores, bits
        self.oracle, self.law = oracle, law
        self.unit = int(abs(oracle.X).max()) // rows.table.largest
        self.quiet = np.setdiff1d(np.arange(plan.facts.features), rows.loud)[:200]
        self.weights = course(plan.schedule, plan.steps)[0]
        self.picks, self.intercepts = [], []
        self.powers = plan.knowledge.powers(plan.facts.features)
        self.placed = 0         # sum of the derivatives when they were last brought up to date
        self.corrections = 0

    def run(self, *rest):
        return frank_wolfe(self.plan, self, self, self, *rest)

    def place(self, intercept):
        self.oracle.set_intercept(intercept)
        self.rows.place(intercept)
        self.placed = self.oracle.total

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

    @property
    def n_rows(self):
        return self.rows.n_rows

    def total(self):
        assert self.rows.total() == self.placed
        return self.rows.total()

    def derivatives(self):
        """As a correction asks for them: at the margins of this moment, whatever q is."""
        q = self.rows.derivatives()
        assert (q == self.oracle.q).all()
        self.corrections += 1
        return q

    def absorb(self, change):
        self.scores.absorb(change)
        self.placed = self.oracle.total
        n_loud, scores = len(self.rows.loud), self.oracle.scores
        assert (self.rows.q == self.oracle.q).all()
        kept = self.scores.score[:n_loud].astype(np.int64)
        assert (self.unit * kept == scores[self.rows.loud]).all()
        assert all(self.unit * self.rows.score(j) == scores[j] for j in self.quiet)

    def pick(self, bits):
        self.picks.append(self.scores.pick(self.bits))
        assert self.picks[-1][0] not in self.plan.barred
        if self.law is not None:
            self.law.note(self.picks[-1], self.closed_form())
        return self.picks[-1]

    def closed_form(self) -> np.ndarray:
        """float64 (d, 2): the law of the next pick; what is barred has no part in it."""
        kappa = Fraction(self.plan.multiplier, 2**self.plan.shift)
        powers = 0 if self.powers is None else self.powers
        p = pick_probabilities(self.oracle.scores, kappa, powers)
        p[list(self.plan.barred)] = 0
        return p / p.sum()

    def discrete_gaussian(self, variance):
        assert variance in (self.plan.first_variance, self.plan.rows_variance)
        return self.bits.discrete_gaussian(variance)

    def discrete_gaussians(self, variance, count):
        assert variance in (self.plan.correction_variance, self.plan.moment_variance)
        return self.bits.discrete_gaussians(variance, count)


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
    unit = label_unit(plan)[1]
    w, picks = np.zeros(plan.facts.features), []
    for step, weight in enumerate(course(plan.schedule, plan.steps)[0].tolist()):
        if step > 0 and step in plan.intercept_looks:
            oracle.set_intercept(next(intercepts))
        feature, sign = choose(oracle.scores)
        vertex = np.zeros_like(w)
        bound = plan.facts.bounds_of(np.array([feature]))[0]
        vertex[feature] = sign * plan.radius * unit / bound
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
    bounds, (centre, unit) = plan.facts.bounds_of(release.features), label_unit(plan)
    assert (abs(release.coefficients) * bounds).sum() <= plan.radius * unit * (1 + 1e-12)
    intercept = (release.intercept - centre) / unit
    assert abs(intercept) <= (MOST_INTERCEPT if plan.intercept else 0)
    assert intercept / MARGIN_UNIT == round(intercept / MARGIN_UNIT)


def assert_fitted_margins(run: Watched, w, units: int = 2):
    """The margins the run ended on are those of w over the quantised entries, to so many units."""
    oracle, bound = run.oracle, run.plan.facts.bounds_of(np.arange(run.plan.facts.features))
    in_bounds = w * bound / label_unit(run.plan)[1]
    margins = oracle.X @ in_bounds / run.plan.entry_levels + oracle.intercept * MARGIN_UNIT
    within = abs(margins) < 16 - units * MARGIN_UNIT
    assert abs(oracle.margins * MARGIN_UNIT - margins)[within].max(initial=0) <= units * MARGIN_UNIT


# --- fits ----------------------------------------------------------------------------------------


def random_data(rng, n: int, d: int, entries: str, decades: float = 1.5, loss="logistic"):
    """(X, y, entry_bound): labels lean on the first features; some entries pass their bound, and
    some numeric labels their range.

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
    if loss != "logistic":
        return X, 1 + lean + rng.normal(size=n), bound
    return X, (rng.random(n) < 1 / (1 + np.exp(-lean))).astype(float), bound


def plan_for(X, bound, epsilon, **options):
    facts = sordino.PublicFacts(features=X.shape[1], rows=X.shape[0], entry_bound=bound,
                                label=LOSSES[options.get("loss", "logistic")])
    neighbours = options.pop("neighbours", "add-remove")
    return sordino.plan_fit(facts, sordino.Guarantee(epsilon, 1e-6, neighbours),
                            method="frank-wolfe", **options)


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
    "loss": st.sampled_from(["logistic", "squared", "huber"]),
})


def test_every_step_of_a_fit_equals_the_oracle(monkeypatch):
    @settings(max_examples=250, deadline=None, derandomize=True, database=None)
    @given(fits, options)
    def every_fit(fit, options):
        rng = np.random.default_rng(fit["seed"])
        X, y, bound = random_data(rng, fit["n"], fit["d"], fit["entries"], loss=options["loss"])
        plan = plan_for(X, bound, fit["epsilon"], **options)
        release, run = watched_fit(monkeypatch, plan, X, y, fit["seed"])
        replayed = iter(run.picks)
        w, _ = published(plan, X, y, run, lambda scores: next(replayed))
        assert_release(release, w)
        assert_fitted_margins(run, w)

    every_fit()


def random_knowledge(rng, d: int, loss: str) -> dict:
    """Features included, excluded, weighed and started from, which may be one another's."""
    ids = rng.permutation(d)
    include, exclude = ids[: rng.integers(1, 4)], ids[-rng.integers(1, 3):]
    started = ids[:-4][rng.random(d - 4) < 0.3]
    start = {int(j): float(value) for j, value in zip(started, rng.normal(0, 0.5, len(started)))}
    start[None] = float(rng.normal(1, 0.5))
    weights = {int(j): 2.0 ** rng.integers(-3, 4) for j in ids[:6]}
    return {"include": include.tolist(), "exclude": exclude.tolist(), "prior": weights,
            "start": rng.choice([None, start])}


def test_every_step_with_public_knowledge_equals_the_oracle(monkeypatch):
    """Included features are corrected beside moves that may shrink, started ones rest or are moved:
    scores at every pick and derivatives at every correction are those computed from nothing.

    Corrected coefficients are followed in steps of 2^-25 in bounds: half a step off in 60 of them
    moves a margin by less than a unit, beside the two that moves are rounded by.
    """
    seen = set()

    @settings(max_examples=100, deadline=None, derandomize=True, database=None)
    @given(fits.filter(lambda fit: fit["d"] >= 8), options)
    def every_fit(fit, options):
        rng = np.random.default_rng(fit["seed"])
        X, y, bound = random_data(rng, fit["n"], fit["d"], fit["entries"], loss=options["loss"])
        knowledge = random_knowledge(rng, fit["d"], options["loss"])
        plan = plan_for(X, bound, fit["epsilon"], **options | {"intercept": True} | knowledge)
        release, run = watched_fit(monkeypatch, plan, X, y, fit["seed"])
        assert set(plan.knowledge.include) <= set(release.features.tolist())
        assert not set(plan.knowledge.exclude) & set(release.features.tolist())
        assert run.corrections == plan.corrections == len(plan.intercept_looks)
        w = np.zeros(fit["d"])
        w[release.features] = release.coefficients
        assert_fitted_margins(run, w, 4)
        seen.add((plan.schedule, plan.knowledge.start is None))

    every_fit()
    assert len(seen) == 4


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
