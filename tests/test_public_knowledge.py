"""Public knowledge: what the user states beyond the facts costs nothing and is told everywhere."""

from __future__ import annotations

import dataclasses
import json
import math
from fractions import Fraction
from importlib import import_module

import numpy as np
import pytest
import scipy.sparse as sp
from hypothesis import given, settings
from hypothesis import strategies as st
from reference import MARGIN_UNIT, pick_probabilities
from scipy.stats import chi2
from sklearn.linear_model import LinearRegression, LogisticRegression
from test_fit_input import Undrawn
from test_frank_wolfe import LOSSES, Ranks, Watched, label_unit, oracle_of, random_data

import sordino
from sordino import Guarantee, InputError, Plan, PublicFacts, plan_fit
from sordino._core.bits import Bits
from sordino.fit import _start_in_bounds, _stored_rate, open_rooms
from sordino.plan.corrections import WEIGHT_BITS
from sordino.solvers.corrections import ChosenSet
from sordino.solvers.greedy import greedy
from sordino.table import build_table

N_ROWS, N_FEATURES = 2000, 30
METHODS = ("frank-wolfe", "greedy")
NO_NOISE = Guarantee(1e9, 1e-6)     # the noise left is far below one rounding step


@pytest.fixture(scope="module")
def table():
    """Features 0 and 1 decide the label together; feature 0 the more."""
    rng = np.random.default_rng(4)
    X = (rng.random((N_ROWS, N_FEATURES)) < 0.4).astype(float)
    y = (rng.random(N_ROWS) < 0.1 + 0.5 * X[:, 0] + 0.3 * X[:, 1]).astype(float)
    return sp.csr_array(X), y


def planned(method: str, **options):
    facts = PublicFacts(features=N_FEATURES, rows=N_ROWS)
    return plan_fit(facts, Guarantee(4.0, 1e-6), method=method, **options)


@pytest.mark.parametrize("method", ["frank-wolfe", "greedy"])
def test_excluded_features_are_never_picked(table, method):
    for _ in range(5):
        release = planned(method, exclude=[0, *range(10, 20)]).fit(*table)
        assert not {0, *range(10, 20)} & set(release.features.tolist())
        assert 1 in release.features        # by far the strongest of the others


@pytest.mark.parametrize("method", ["frank-wolfe", "greedy"])
def test_excluding_costs_nothing_and_helps_to_see(method):
    size = {"picks": 5} if method == "greedy" else {}
    free, told = planned(method, **size), planned(method, **size, exclude=range(20))
    assert told.zcdp == free.zcdp and told.pick_epsilon == free.pick_epsilon
    assert told.smallest_effect_rows < free.smallest_effect_rows
    assert told.knowledge.exclude == tuple(range(20))


@pytest.mark.parametrize("method", ["frank-wolfe", "greedy"])
def test_excluding_is_told_and_kept(table, tmp_path, method):
    plan = planned(method, exclude=(5, 3))
    release = plan.fit(*table)
    release.save(tmp_path / "model.json")
    assert sordino.load_release(tmp_path / "model.json").plan == plan
    clause = "2 features never picked, stated as public by the user"
    for text in (str(plan), plan.explain(), release.statement()):
        assert clause in " ".join(text.split())
    assert "stated as public by the user" not in str(planned(method))


def test_all_but_one_may_be_excluded(table):
    plan = planned("greedy", exclude=[j for j in range(N_FEATURES) if j != 7])
    assert plan.picks == 1 and plan.fit(*table).features.tolist() == [7]


# --- what contradicts itself is refused, before any data is read ---------------------------------


@pytest.mark.parametrize(
    ("options", "said"),
    [
        ({"include": [3, 4], "exclude": [4]}, "feature 4 is in exclude and in include"),
        ({"exclude": [7], "start": {7: 1.0}}, "feature 7 is in exclude and in start"),
        ({"exclude": range(30)}, "no feature is left to pick"),
        ({"include": range(10), "exclude": range(10, 30)}, "no feature is left to pick"),
        ({"include": range(30)}, "no feature is left to pick"),
        ({"include": [30]}, "a feature of include must be between 0 and 29"),
        ({"include": [-1]}, "a feature of include must be between 0 and 29"),
        ({"exclude": [2.0]}, "a feature of exclude must be a whole number"),
        ({"exclude": [True]}, "a feature of exclude must be a whole number"),
        ({"exclude": np.arange(30) > 20}, "a feature of exclude must be a whole number"),
        ({"include": 3}, "include must be feature ids"),
        ({"include": "age"}, "a feature of include must be a whole number"),
        ({"prior": {30: 2.0}}, "a feature of prior must be between 0 and 29"),
        ({"prior": {"3": 2.0}}, "a feature of prior must be a whole number"),
        ({"prior": {3: 0}}, "the prior of feature 3 must be a finite number above 0"),
        ({"prior": {3: -2.0}}, "the prior of feature 3 must be a finite number above 0"),
        ({"prior": {3: math.inf}}, "the prior of feature 3 must be a finite number above 0"),
        ({"prior": {3: None}}, "the prior of feature 3 must be a finite number above 0"),
        ({"prior": np.ones(29)}, "prior must be .* or 30 weights"),
        ({"prior": np.ones((30, 1))}, "prior must be .* or 30 weights"),
        ({"prior": 30 * ["a"]}, "prior must be .* or 30 weights"),
        ({"prior": 2.0}, "prior must be .* or 30 weights"),
        ({"prior": np.r_[np.ones(29), 0.0]}, "the prior of feature 29 must be a finite number"),
        ({"prior": np.r_[np.ones(29), np.nan]}, "the prior of feature 29 must be a finite number"),
        ({"prior": {3: 2.0**61}}, r"at most 2\^60"),
        ({"prior": {3: 2.0**-61}}, r"at most 2\^60"),
        ({"start": {30: 1.0}}, "a feature of start must be between 0 and 29"),
        ({"start": {2: math.nan}}, "a coefficient of start must be a finite number"),
        ({"start": {2: "1"}}, "a coefficient of start must be a finite number"),
        ({"start": {None: math.inf}}, "the intercept of start must be a finite number"),
        ({"start": [(2, 1.0)]}, "start must be a release or"),
        ({"start": "model.json"}, "start must be a release or"),
    ],
)
@pytest.mark.parametrize("method", METHODS)
def test_what_cannot_be_known_is_refused(method, options, said):
    with pytest.raises(InputError, match=said):
        planned(method, **options)


def test_more_features_than_corrections_are_made_for_are_refused():
    facts = PublicFacts(features=1000, rows=N_ROWS)
    start = {j: 0.1 for j in range(190, 257)}
    for method, include, given in (("greedy", range(200), start), ("frank-wolfe", range(257), None)):
        with pytest.raises(InputError, match="257 features would be in the model"):
            plan_fit(facts, Guarantee(4.0, 1e-6), method=method, include=include, start=given)


def test_features_that_are_included_need_an_intercept():
    for promise, intercept in ((Guarantee(4.0, 1e-6), False), (Guarantee(4.0), None)):
        with pytest.raises(InputError, match="corrected together with an intercept"):
            plan_fit(PublicFacts(features=9, rows=99), promise, method="frank-wolfe",
                     intercept=intercept, include=[1])
    with pytest.raises(InputError, match="start has an intercept, which the plan has not"):
        plan_fit(PublicFacts(features=9, rows=99), Guarantee(4.0), start={1: 0.5, None: 0.25})


@pytest.mark.parametrize("method", METHODS)
@pytest.mark.parametrize("loss", LOSSES)
def test_coefficients_that_margins_are_not_made_for_are_refused(method, loss, monkeypatch):
    """32 of margin at the entry bound, in the units of the label; nothing is drawn."""
    monkeypatch.setattr("sordino.fit.Bits", Undrawn)
    facts = PublicFacts(features=5, rows=6, entry_bound=0.5, label=LOSSES[loss])
    plan = plan_fit(facts, Guarantee(4.0, 1e-6), method=method, loss=loss)
    most = 64 * label_unit(plan)[1]
    X, y = np.zeros((6, 5)), np.zeros(6)
    for value in (most * (1 + 1e-9), -1e300):
        plan = plan_fit(facts, Guarantee(4.0, 1e-6), method=method, loss=loss,
                        start={1: most, 3: value})
        with pytest.raises(InputError, match="the coefficient of feature 3 in start.* too large"):
            plan.fit(X, y)


@pytest.mark.parametrize("method", METHODS)
@pytest.mark.parametrize("loss", LOSSES)
def test_an_intercept_far_away_is_held_where_margins_are_made_for(method, loss):
    """As every intercept is: at 15 in units of margin."""
    facts = PublicFacts(features=N_FEATURES, rows=N_ROWS, label=LOSSES[loss])
    X, y = np.eye(6, N_FEATURES), np.zeros(6)
    for value in (1e3, -1e5, 1e300):
        plan = plan_fit(facts, NO_NOISE, method=method, loss=loss, start={4: 0.5, None: value},
                        include=[4])
        opened = opening_of(plan, X, y)
        assert abs(opened[5] - math.copysign(15, value)) < 2 * MARGIN_UNIT


def test_a_rehearsal_is_no_public_knowledge(table):
    """It is not private: a release that starts from it would hand on what it knows, unmarked."""
    rehearsal = planned("greedy").fit(*table, rehearsal_seed=1)
    for method in METHODS:
        with pytest.raises(InputError, match="rehearsal"):
            planned(method, start=rehearsal)


def test_frank_wolfe_may_start_from_all_features():
    """Its moves may pick what has a coefficient already."""
    start = {j: 0.1 for j in range(N_FEATURES)}
    assert planned("frank-wolfe", start=start).knowledge.started == tuple(range(N_FEATURES))


# --- in any form, it is the same -----------------------------------------------------------------


@pytest.mark.parametrize("method", METHODS)
def test_ids_come_in_any_form(method):
    one = planned(method, include=[9, 2], exclude=[5, 3, 5])
    for form in (np.array, set, tuple, iter, lambda ids: np.array(ids, dtype=np.uint8)):
        assert planned(method, include=form([2, 9]), exclude=form([3, 5])) == one
    assert (one.knowledge.include, one.knowledge.exclude) == ((2, 9), (3, 5))


@pytest.mark.parametrize("method", METHODS)
def test_weights_are_rounded_to_powers_of_two_and_count_against_each_other(method):
    one = planned(method, prior={3: 8.0, 7: 0.25})
    assert one.knowledge.prior == ((3, 3), (7, -2))
    weights = np.ones(N_FEATURES)
    weights[[3, 7]] = 8.0, 0.25
    for same in (weights, weights.tolist(), weights * 2.0**-20, weights * 1.4, weights / 1.4,
                 weights * 1e9):
        assert planned(method, prior=same) == one
    assert planned(method, prior={3: 11.3, 7: 0.18}) == one
    for nothing in ({}, {3: 1.0, 4: 1.2}, np.full(N_FEATURES, 7.0)):
        assert planned(method, prior=nothing) == planned(method)


# --- costs ---------------------------------------------------------------------------------------


def costs_by_hand(plan, s: int, looks: int, corrections: int, moments: int) -> dict:
    """Sensitivities s R; R 2^B L s and M 2^B L s in L2; picks of eps0 = kappa ln 2 * 2 R M s."""
    R, M, L, B = plan.resolution, plan.entry_levels, plan.limit, WEIGHT_BITS
    assert plan.gradient_sensitivity == R * 2**B * L * s
    assert plan.moment_sensitivity == M * 2**B * L * s
    assert plan.intercept_sensitivity == R * s
    rates = plan.multipliers if plan.method == "greedy" else plan.steps * [plan.multiplier]
    epsilons = [rate * 2 * R * M * s * math.log(2) / 2**plan.shift for rate in rates]
    return {
        "picks": sum(epsilon**2 / 8 for epsilon in epsilons),
        "rows": s**2 / (2 * plan.rows_variance),
        "intercept": looks * (R * s) ** 2 / (2 * plan.first_variance),
        "corrections": corrections * (R * 2**B * L * s) ** 2 / (2 * plan.correction_variance),
        "second moments": moments * (M * 2**B * L * s) ** 2 / (2 * plan.moment_variance),
    }


@pytest.mark.parametrize(("neighbours", "r", "s"), [
    ("add-remove", 1, 1), ("replace-one", 1, 2), ("add-remove", 3, 3), ("replace-one", 3, 6)])
@pytest.mark.parametrize("loss", LOSSES)
def test_what_included_features_cost(loss, neighbours, r, s):
    """Discrete Gaussian noise costs Delta^2/(2 sigma^2), a pick eps0^2/8."""
    facts = PublicFacts(features=500, rows=20_000, rows_per_person=r, label=LOSSES[loss])
    promise = Guarantee(1.0, 1e-6, neighbours)
    whole = 0.02435597036           # zCDP of epsilon 1 at delta 1e-6: theory.md, section 1a
    for options, counts in (
        ({"method": "frank-wolfe", "steps": 160, "include": [3, 5, 8]}, (1, 17, 3)),
        ({"method": "frank-wolfe", "steps": 2, "include": [3]}, (1, 3, 1)),
        ({"method": "greedy", "picks": 7, "include": [3, 5], "start": {5: 0.1, 9: 0.2}},
         (1, 12, 10)),
    ):
        plan = plan_fit(facts, promise, loss=loss, **options)
        expected = costs_by_hand(plan, s, *counts)
        assert [what for what, _ in plan.parts] == list(expected)
        for what, cost in plan.parts:
            assert cost.zcdp == pytest.approx(expected[what], rel=1e-12), what
        assert plan.zcdp == pytest.approx(sum(expected.values()), rel=1e-12)
        assert 0.999 * whole < plan.zcdp <= whole * (1 + 1e-9)
        assert expected["second moments"] == pytest.approx(0.99 * 0.05 * whole, rel=1e-4)


@pytest.mark.parametrize("method", METHODS)
def test_priors_and_starts_cost_nothing(method):
    """Frank-Wolfe's start as well; greedy corrects what it starts from, as `costs_by_hand` says."""
    size = {"picks": 5} if method == "greedy" else {"steps": 40}
    free, weighed = planned(method, **size), planned(method, **size, prior={4: 16.0, 5: 0.5})
    assert weighed.costs == free.costs and weighed.pick_epsilon == free.pick_epsilon
    if method == "frank-wolfe":
        started = planned(method, **size, start={2: 0.5, None: 1.0})
        assert started.costs == free.costs


@pytest.mark.parametrize("method", METHODS)
def test_what_a_prior_helps_to_see(method):
    """The others at score 0 weigh 2 * sum of 2^p in all: against them a feature that weighs 2^p is
    picked with probability 0.9 from (ln(that) + logit(0.9) - p ln 2) noise rows on."""
    size = {"picks": 5} if method == "greedy" else {"steps": 40}
    plan = planned(method, **size, prior={4: 16.0, 5: 0.5, 6: 4.0, 7: 4.0}, exclude=[6])
    weight = 26 + 16 + 0.5 + 4
    odds = math.log(2 * weight) + math.log(9)
    assert plan.smallest_effect_rows == pytest.approx(plan.noise_rows * odds, rel=1e-12)
    favoured = plan.noise_rows * (odds - 4 * math.log(2))
    assert plan.favoured_effect_rows == pytest.approx(favoured, rel=1e-12)


# --- included features ---------------------------------------------------------------------------


def reference_fit(loss: str, X, y):
    """Unpenalised, by scikit-learn: (coefficients, intercept)."""
    if loss == "logistic":
        best = LogisticRegression(C=1e9, tol=1e-10, max_iter=2000).fit(X, y)
        return best.coef_[0], float(best.intercept_[0])
    best = LinearRegression().fit(X, y)
    return best.coef_, float(best.intercept_)


def labelled(table, loss: str):
    """(X, y) with labels for the loss; no residual is clipped at the bound of `options_of`."""
    X, y = table
    return X, y if loss == "logistic" else 3 * y - 1 + np.linspace(-1, 1, N_ROWS)


def options_of(loss: str) -> dict:
    return {} if loss == "logistic" else {"residual_bound": 1.0}


@pytest.mark.parametrize("loss", ["logistic", "squared"])
@pytest.mark.parametrize("method", METHODS)
def test_included_features_come_to_the_unpenalised_fit(table, method, loss):
    """Reference: scikit-learn. Rows of three 0/1 features and the intercept are not clipped.

    Moves have no room; the one pick falls on a feature that is nowhere.
    """
    X, y = labelled(table, loss)
    X = sp.hstack([X[:, :3], sp.csr_array((N_ROWS, 1))], format="csr")
    facts = PublicFacts(features=4, rows=N_ROWS, label=LOSSES[loss])
    size = {"picks": 1} if method == "greedy" else {"steps": 400, "radius": 1e-9}
    plan = plan_fit(facts, NO_NOISE, method=method, loss=loss, include=range(3), **size,
                    **options_of(loss))
    if method == "greedy":
        plan = dataclasses.replace(plan, final_corrections=30, averaged=10)
    release = plan.fit(X, y, rehearsal_seed=1)
    coefficients, intercept = reference_fit(loss, X[:, :3].toarray(), y)
    assert release.features[:3].tolist() == [0, 1, 2]
    np.testing.assert_allclose(release.coefficients[:3], coefficients, atol=2e-3)
    assert release.intercept == pytest.approx(intercept, abs=2e-3)


class Spied:
    """Scores that note what is drawn."""

    def __init__(self, scores, drawn: list):
        self.scores, self.drawn = scores, drawn

    def __getattr__(self, name):
        return getattr(self.scores, name)

    def pick(self, bits):
        feature, sign = self.scores.pick(bits)
        self.drawn.append(feature)
        return feature, sign


def drawn_by(plan, X, y, monkeypatch) -> tuple[list[int], sordino.Release]:
    """What a private fit draws, and its release."""
    fit, drawn = import_module("sordino.fit"), []
    real = {"greedy": fit.greedy, "frank_wolfe": fit.frank_wolfe}
    with monkeypatch.context() as patch:
        for name, solver in real.items():
            patch.setattr(fit, name, lambda plan, rows, scores, *rest, solver=solver: solver(
                plan, rows, Spied(scores, drawn), *rest))
        return drawn, plan.fit(X, y)


@pytest.mark.parametrize("loss", ["logistic", "squared"])
@pytest.mark.parametrize("method", METHODS)
def test_included_features_are_released_and_never_drawn(table, method, loss, monkeypatch):
    """Though they are by far the strongest, and two of them are held by nobody or by everybody."""
    X, y = labelled(table, loss)
    X = X.tolil()
    X[:, 28], X[:, 29] = 0, 1
    facts = PublicFacts(features=N_FEATURES, rows=N_ROWS, label=LOSSES[loss])
    size = {"picks": 6} if method == "greedy" else {"steps": 50}
    plan = plan_fit(facts, Guarantee(4.0, 1e-6), method=method, loss=loss, **size,
                    include=[0, 1, 28, 29], exclude=[2], start={0: 0.5, 3: 0.5})
    for _ in range(5):
        drawn, release = drawn_by(plan, X, y, monkeypatch)
        assert len(drawn) == plan.picks
        assert {0, 1, 28, 29} <= set(release.features.tolist())
        assert not {0, 1, 2, 28, 29} & set(drawn)
        if method == "greedy":
            assert 3 not in drawn and len(set(drawn)) == 6
            assert set(release.features.tolist()) == {0, 1, 3, 28, 29, *drawn}
        assert np.isfinite(release.coefficients).all()


@pytest.mark.parametrize("method", METHODS)
def test_included_features_are_fitted_at_epsilon_4(table, method):
    """The effect of feature 0 on the log odds is 2.6; with the real source it comes out with a
    standard deviation of 0.23 (frank-wolfe) or 0.12: eight of them are allowed."""
    X, y = table
    size = {"picks": 3} if method == "greedy" else {"steps": 20}
    release = planned(method, include=[0, 1], **size).fit(X, y)
    assert abs(release.coefficients[release.features == 0][0] - 2.6) < 1.8


# --- starting from a model -----------------------------------------------------------------------


class Opening:
    """Rows that note the margins on which the first pick or correction looks."""

    def __init__(self, rows):
        self.rows, self.margins, self.intercept = rows, None, 0

    def __getattr__(self, name):
        return getattr(self.rows, name)

    def place(self, intercept):
        self.intercept = intercept
        self.rows.place(intercept)

    def shift(self, features, weights, intercept):
        self.intercept = intercept
        self.rows.shift(features, weights, intercept)

    def shift_offset(self, features, weights, intercept):
        self.intercept = intercept
        self.rows.shift_offset(features, weights, intercept)

    def derivatives(self):
        self.note()
        return self.rows.derivatives()

    def first_scores(self):
        self.note()
        return self.rows.first_scores()

    def note(self):
        if self.margins is None:
            moved = np.trunc(self.rows.scale[0] * self.rows.z)
            self.margins = (moved + self.rows.offset + self.intercept) * MARGIN_UNIT


def opening_of(plan, X, y) -> np.ndarray:
    """float64 (n,): margins of the rows when a fit opens."""
    fit, opened = import_module("sordino.fit"), []

    def watched(solver):
        def run(plan, rows, *rest):
            opened.append(Opening(rows))
            return solver(plan, opened[0], *rest)

        return run

    with pytest.MonkeyPatch.context() as patch:
        for name in ("greedy", "frank_wolfe"):
            patch.setattr(fit, name, watched(getattr(fit, name)))
        plan.fit(X, y, rehearsal_seed=1)
    return opened[0].margins


@pytest.mark.parametrize("include", [None, [2, 5]])
@pytest.mark.parametrize("loss", LOSSES)
@pytest.mark.parametrize("method, schedule", [
    ("greedy", None), ("frank-wolfe", "paced"), ("frank-wolfe", "shrinking")])
def test_a_fit_opens_at_the_margins_of_its_start(method, schedule, loss, include):
    """Entries in steps of the table, so nothing is lost to them. A margin is off by half a unit for
    the intercept, by one for what is cut off, and by half a step of 2^-25 for a coefficient."""
    rng = np.random.default_rng(6)
    bounds = 2.0 ** rng.integers(-3, 4, 12)
    X = bounds * np.rint(rng.uniform(-1, 1, (200, 12)) * 2**14) / 2**14
    facts = PublicFacts(features=12, rows=200, entry_bound=bounds, label=LOSSES[loss])
    start = {2: 0.7, 5: -0.3, 7: 1.1 / bounds[7], 11: -2.0 / bounds[11], None: 0.6}
    plan = plan_fit(facts, Guarantee(1.0, 1e-6), method=method, loss=loss, schedule=schedule,
                    include=include, start=start)
    intercept = start.pop(None)
    predicted = intercept + X[:, list(start)] @ list(start.values())
    centre, unit = label_unit(plan)
    margins = opening_of(plan, sp.csr_array(X), rng.integers(0, 2, 200).astype(float))
    assert abs(margins - (predicted - centre) / unit).max() < 2 * MARGIN_UNIT


@pytest.mark.parametrize("loss", ["logistic", "squared"])
@pytest.mark.parametrize("method", METHODS)
def test_a_fit_goes_on_from_a_release(table, tmp_path, method, loss):
    """From a release, from the same one loaded, and from its numbers: the same plan, which opens at
    the margins of that release."""
    X, y = labelled(table, loss)
    facts = PublicFacts(features=N_FEATURES, rows=N_ROWS, label=LOSSES[loss])
    first = plan_fit(facts, Guarantee(2.0, 1e-6), picks=4, loss=loss).fit(X, y)
    first.save(tmp_path / "model.json")
    numbers = dict(zip(first.features.tolist(), first.coefficients.tolist()))
    starts = (first, sordino.load_release(tmp_path / "model.json"),
              {None: first.intercept} | numbers,
              dict(reversed(numbers.items())) | {None: first.intercept})
    plans = [plan_fit(facts, Guarantee(2.0, 1e-6), method=method, loss=loss, start=start)
             for start in starts]
    assert all(plan == plans[0] for plan in plans)
    centre, unit = label_unit(plans[0])
    margins = opening_of(plans[0], X, y)
    assert abs(margins - (first.margin(X) - centre) / unit).max() < 2 * MARGIN_UNIT


@pytest.mark.parametrize("loss", ["logistic", "squared"])
@pytest.mark.parametrize("method", METHODS)
def test_a_fit_that_starts_at_the_best_stays_there(table, method, loss):
    """Reference: scikit-learn without penalty. No noise, no room for moves."""
    X, y = labelled(table, loss)
    X = sp.hstack([X[:, :3], sp.csr_array((N_ROWS, 1))], format="csr")
    coefficients, intercept = reference_fit(loss, X[:, :3].toarray(), y)
    start = dict(enumerate(coefficients.tolist())) | {None: intercept}
    size = {"picks": 1} if method == "greedy" else {"steps": 30, "radius": 1e-9}
    facts = PublicFacts(features=4, rows=N_ROWS, label=LOSSES[loss])
    plan = plan_fit(facts, NO_NOISE, method=method, loss=loss, start=start, exclude=[],
                    **size, **options_of(loss))
    release = plan.fit(X, y, rehearsal_seed=1)
    np.testing.assert_allclose(release.coefficients[:3], coefficients, atol=1e-3)
    assert release.intercept == pytest.approx(intercept, abs=1e-3)


@pytest.mark.parametrize("schedule", ["paced", "shrinking"])
def test_moves_come_on_top_of_the_start(table, schedule, monkeypatch):
    """Released are the coefficients of the start, unshrunk, and those of at most T moves."""
    X, y = table
    plan = planned("frank-wolfe", steps=20, radius=0.5, schedule=schedule,
                   start={5: 0.75, 6: -0.25})
    drawn, release = drawn_by(plan, X, y, monkeypatch)
    w = np.zeros(N_FEATURES)
    w[release.features] = release.coefficients
    w[[5, 6]] -= 0.75, -0.25
    assert abs(w).sum() <= 0.5 * (1 + 1e-12)
    assert set(np.flatnonzero(abs(w) > 1e-12)) <= set(drawn)


# --- the law of picks under a prior --------------------------------------------------------------


def assert_uniform(places, per_cell: int):
    """Chi-square in 64 cells; error rate 1e-8."""
    counts = np.bincount((64 * np.array(places)).astype(int), minlength=64)
    assert len(counts) == 64 and counts.sum() == 64 * per_cell
    assert ((counts - per_cell) ** 2 / per_cell).sum() < chi2.isf(1e-8, 63)


@pytest.mark.parametrize(("schedule", "seeded"), [("paced", True), ("shrinking", False)])
def test_picks_of_whole_fits_follow_the_prior(schedule, seeded):
    """p(j, s) proportional to 2^(p_j + kappa u) among what is not barred, step by step."""
    rng = np.random.default_rng(12)
    X, y, bound = random_data(rng, 300, 40, "counts", decades=2.5)
    facts = PublicFacts(features=40, rows=300, entry_bound=bound)
    plan = plan_fit(facts, Guarantee(25.0, 1e-6), steps=160, radius=6.0, schedule=schedule,
                    intercept=False, exclude=[1, 20], start={2: 0.5, 30: -1.0},
                    prior={j: 2.0 ** (j % 7 - 3) for j in range(0, 40, 2)} | {39: 2.0**9})
    table = build_table(sp.csr_array(X), y, plan.facts, plan.entry_levels)
    ranks = Ranks()
    for seed in range(40):
        bits = Bits(seed) if seeded else Bits()
        rows, scores = open_rooms(plan, table, bits)
        chosen = ChosenSet(table, plan.limit)
        run = Watched(plan, rows, scores, bits, oracle_of(plan, X, y, rows.dither), ranks)
        run.run(chosen, _start_in_bounds(plan))
    assert_uniform(ranks.places, 100)


def test_picks_of_greedy_fits_follow_the_prior():
    """The same with the rate of each pick, and without the features that are in the model."""
    rng = np.random.default_rng(13)
    X, y, bound = random_data(rng, 300, 40, "counts", decades=2.5)
    facts = PublicFacts(features=40, rows=300, entry_bound=bound)
    plan = plan_fit(facts, Guarantee(6.0, 1e-6), method="greedy", picks=16, exclude=[1, 20],
                    include=[4], prior={j: 2.0 ** (j % 7 - 3) for j in range(0, 40, 2)})
    table = build_table(sp.csr_array(X), y, plan.facts, plan.entry_levels)
    powers, ranks = plan.knowledge.powers(40), Ranks()

    class Judged(Spied):
        def pick(self, bits):
            rate = Fraction(plan.multipliers[len(self.drawn)], 2**plan.shift)
            scores = [table.unit * self.rows.score(j) for j in range(40)]
            law = pick_probabilities(scores, rate, powers)
            law[[*plan.barred, *self.drawn]] = 0
            feature, sign = super().pick(bits)
            ranks.note((feature, sign), law / law.sum())
            return feature, sign

    lift, _ = _stored_rate(plan, table)
    for seed in range(200):
        bits = Bits(seed)
        rows, scores = open_rooms(plan, table, bits)
        judged = Judged(scores, [])
        judged.rows = rows
        rates = [rate << lift for rate in plan.multipliers]
        greedy(plan, rows, judged, bits, ChosenSet(table, plan.limit), rates)
    assert_uniform(ranks.places, 50)


# --- kept, and told ------------------------------------------------------------------------------


@st.composite
def knowledge(draw) -> dict:
    ids = draw(st.permutations(range(N_FEATURES)))
    start = {j: draw(st.floats(-5, 5)) for j in ids[3:6]} | {None: draw(st.floats(-5, 5))}
    return {
        "include": draw(st.sampled_from([None, ids[:4]])),
        "exclude": draw(st.sampled_from([None, ids[10:25]])),
        "prior": draw(st.sampled_from([None, {j: 2.0 ** (j - 15) for j in ids[:9]}])),
        "start": draw(st.sampled_from([None, start])),
    }


@settings(max_examples=60, deadline=None, derandomize=True)
@given(knowledge(), st.sampled_from(METHODS), st.sampled_from(sorted(LOSSES)))
def test_plans_with_public_knowledge_come_back_from_json(known, method, loss):
    facts = PublicFacts(features=N_FEATURES, rows=N_ROWS, label=LOSSES[loss])
    plan = plan_fit(facts, Guarantee(4.0, 1e-6), method=method, loss=loss, **known)
    assert plan.epsilon_spent <= 4.0 and plan.most_rows >= N_ROWS
    again = Plan.from_dict(json.loads(json.dumps(plan.to_dict())))
    assert again == plan and again.to_dict() == plan.to_dict()


def full(method: str) -> dict:
    plan = planned(method, include=[2, 5], exclude=[7, 9], prior={3: 8.0, 4: 0.5},
                   start={5: 0.5, 6: -1.0, None: 0.25})
    return plan.to_dict()


@pytest.mark.parametrize("method", METHODS)
@pytest.mark.parametrize(
    ("changed", "named"),
    [
        (None, "knowledge must be an object"),
        ({"more": []}, "knowledge has an unknown key 'more'"),
        ({"include": None}, "include must be a list"),
        ({"include": [5, 2]}, "must hold ids that ascend"),
        ({"include": [2, 2, 5]}, "must hold ids that ascend"),
        ({"include": [2, 30]}, "a feature of include must be between 0 and 29"),
        ({"include": [2, 5.0]}, "a feature of include must be a whole number"),
        ({"include": [2, 7]}, "feature 7 is in exclude and in include"),
        ({"exclude": [7, 6]}, "must hold ids that ascend"),
        ({"exclude": [6, 7]}, "feature 6 is in exclude and in start"),
        ({"exclude": [j for j in range(30) if j not in (2, 5)], "start": None},
         "no feature is left to pick|picks must be between"),
        ({"exclude": {"7": 9}}, "exclude must be a list"),
        ({"prior": [3, 4]}, "pairs of a feature id and a power"),
        ({"prior": [[3, 3, 3]]}, "pairs of a feature id and a power"),
        ({"prior": [[4, -1], [3, 3]]}, "must hold ids that ascend"),
        ({"prior": [[3, 3], [3, 3]]}, "must hold ids that ascend"),
        ({"prior": [[3, 61]]}, "a prior's power must be between -60 and 60"),
        ({"prior": [[3, 0.5]]}, "a prior's power must be a whole number"),
        ({"prior": [[30, 1]]}, "a feature of the prior must be between 0 and 29"),
        ({"prior": {"3": 3}}, "prior must be a list"),
        ({"start": []}, "start must be an object"),
        ({"start": {"features": [5], "coefficients": [1.0]}}, "start lacks the key 'intercept'"),
        ({"start": {"features": [6, 5], "coefficients": [1.0, 2.0], "intercept": 0.0}},
         "must hold ids that ascend"),
        ({"start": {"features": [5, 6], "coefficients": [1.0], "intercept": 0.0}},
         "one coefficient per feature"),
        ({"start": {"features": [5, 5], "coefficients": [1.0, 1.0], "intercept": 0.0}},
         "one coefficient per feature"),
        ({"start": {"features": [5], "coefficients": ["1"], "intercept": 0.0}},
         "a coefficient of start must be a finite number"),
        ({"start": {"features": [5], "coefficients": [1.0], "intercept": None}},
         "the intercept of start must be a finite number"),
        ({"start": {"features": [5], "coefficients": [True], "intercept": 0.0}},
         "a coefficient of start must be a finite number"),
    ],
)
def test_knowledge_that_could_not_have_been_stated_is_refused(method, changed, named):
    fields = full(method)
    fields["knowledge"] = None if changed is None else fields["knowledge"] | changed
    with pytest.raises(InputError, match=named):
        Plan.from_dict(fields)


@pytest.mark.parametrize(
    ("changed", "named"),
    [
        ({"limit": 0}, "limit must be above 0"),
        ({"correction_variance": 0}, "correction_variance must be above 0"),
        ({"moment_variance": 0}, "moment_variance must be above 0"),
        ({"correction_variance": 5}, "more than its guarantee"),
        ({"moment_variance": 5}, "more than its guarantee"),
        ({"limit": 2**17}, "more than its guarantee"),
        ({"intercept": False}, "corrected together with an intercept"),
    ],
)
def test_what_included_features_need_cannot_be_left_out(changed, named):
    with pytest.raises(InputError, match=named):
        Plan.from_dict(full("frank-wolfe") | changed)


def test_what_nobody_included_needs_is_refused():
    fields = planned("frank-wolfe").to_dict()
    for name in ("limit", "correction_variance", "moment_variance"):
        with pytest.raises(InputError, match=f"{name} must be 0"):
            Plan.from_dict(fields | {name: 7})


def test_more_included_features_than_were_paid_for_are_refused():
    for method, more in (("frank-wolfe", 4), ("greedy", 40)):
        facts = PublicFacts(features=100, rows=N_ROWS)
        fields = plan_fit(facts, Guarantee(4.0, 1e-6), method=method, include=[2]).to_dict()
        fields["knowledge"]["include"] = list(range(more))
        with pytest.raises(InputError, match="more than its guarantee"):
            Plan.from_dict(fields)


def test_an_intercept_to_start_from_needs_one_in_the_plan():
    """As `plan_fit` refuses it."""
    fields = planned("frank-wolfe", intercept=False, start={3: 0.5}).to_dict()
    assert Plan.from_dict(fields).knowledge.start.intercept == 0
    fields["knowledge"]["start"]["intercept"] = 1.5
    with pytest.raises(InputError, match="start has an intercept, which the plan has not"):
        Plan.from_dict(fields)


TOLD = {
    "include": ([2, 5], "2 features in the model by decision", "included"),
    "exclude": ([7], "1 feature never picked", "excluded"),
    "prior": ({3: 8.0, 4: 0.5}, "a prior by which picks weigh 2 features 2^-1 to 2^3 "
              "times as much as the others", "prior"),
    "start": ({6: -1.0, None: 0.25}, "1 coefficient and an intercept to start from", "start"),
}


@pytest.mark.parametrize("method", METHODS)
@pytest.mark.parametrize("what", TOLD)
def test_each_is_told_as_stated_by_the_user(table, tmp_path, method, what):
    given_, clause, name = TOLD[what]
    plan = planned(method, **{what: given_})
    release = plan.fit(*table)
    release.save(tmp_path / "model.json")
    back = sordino.load_release(tmp_path / "model.json")
    assert back.plan == plan
    users = "stated as public by the user"
    for text in (str(plan), back.statement()):
        words = " ".join(text.split())
        assert f"{clause}, {users}" in words and words.count(users) == 1
    explained = plan.explain()
    lines = [line for line in explained.splitlines() if line.startswith(f"  {name} ")]
    assert len(lines) == 1 and " ".join(explained.split()).count(users) == 1
    for text in (str(plan), explained, release.statement()):
        assert max(map(len, text.splitlines())) < 80
    said = " ".join(release.statement().split("## What was taken as public")[1]
                    .split("## What is not covered")[0].split())
    assert clause in said, "it is in the list of what the guarantee rests on"


@pytest.mark.parametrize("method", METHODS)
def test_all_together_are_told(method):
    plan = planned(method, **{what: given_ for what, (given_, *_) in TOLD.items()})
    words = " ".join(str(plan).split())
    for _, clause, _ in TOLD.values():
        assert f"{clause}, stated as public by the user" in words


def test_corrections_of_included_features_are_told():
    plan = planned("frank-wolfe", include=[2, 5])
    assert "an intercept and 2 features included by decision, together, measured" in " ".join(
        str(plan).split())
    explained = " ".join(plan.explain().split())
    for figure in (plan.correction_variance, plan.moment_variance, plan.gradient_sensitivity,
                   plan.moment_sensitivity, plan.limit):
        assert f"{figure:,}" in explained
    assert "% for the corrections" in " ".join(str(plan).split())


@pytest.mark.parametrize("method", METHODS)
def test_a_favoured_feature_is_told_apart(method):
    plan = planned(method, prior={3: 2.0**10})
    words = " ".join(str(plan).split())
    assert "one that the prior favours most, from" in words
    assert "favours" not in str(planned(method))
