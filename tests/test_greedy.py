"""Greedy selection with corrections: the plan, the run against the oracle, the accuracy."""

from __future__ import annotations

import json
import math
from importlib import import_module

import numpy as np
import pytest
import scipy.sparse as sp
from hypothesis import given, settings
from hypothesis import strategies as st
from reference import Eager, quantised
from scipy.special import expit
from sklearn.linear_model import LogisticRegression
from test_frank_wolfe import LOSSES, curve_and_targets, random_knowledge

import sordino
from sordino import Guarantee, InputError, PublicFacts, plan_fit
from sordino.losses import Logistic
from sordino.plan import GreedyPlan, Plan, default_picks
from sordino.plan.corrections import COEFFICIENT_BITS, WEIGHT_BITS

MARGIN_UNIT = 2.0**-17
RHO = {0.5: 0.006641524357, 1.0: 0.02435597036, 2.0: 0.08815268838, 4.0: 0.3110649549}


def planned(n=1000, d=50, epsilon=4.0, neighbours="add-remove", **options) -> GreedyPlan:
    return plan_fit(PublicFacts(features=d, rows=n, **options.pop("facts", {})),
                    Guarantee(epsilon, 1e-6, neighbours), method="greedy", **options)


def table(rng, n: int, d: int, n_true: int, kind: str = "0/1"):
    """(X, y): the first n_true features matter, in turn for and against."""
    held = rng.random((n, d)) < rng.uniform(0.1, 0.5, d)
    X = held * (1.0 if kind == "0/1" else rng.uniform(-1.2, 1.2, (n, d)))
    strength = np.where(np.arange(n_true) % 2, -1.5, 1.5)
    y = rng.random(n) < expit(X[:, :n_true] @ strength - 0.3)
    return X, y.astype(float)


# --- the plan


@pytest.mark.parametrize("epsilon", RHO)
def test_the_whole_budget_is_spent_and_no_more(epsilon):
    """zCDP at delta 1e-6 from theory.md, section 1a, inverse table."""
    plan = planned(50_000, 60_000, epsilon)
    assert RHO[epsilon] * (1 - 1e-4) <= plan.zcdp <= RHO[epsilon] * (1 + 1e-9)
    assert plan.epsilon_spent <= epsilon


@pytest.mark.parametrize(("neighbours", "s"), [("add-remove", 1), ("replace-one", 2)])
def test_costs_follow_their_formulas(neighbours, s):
    """Picks eps0^2/8 (Cesar and Rogers 2021); noisy sums Delta^2/(2 sigma^2), with the L2 bounds
    proved in sordino.solvers.corrections."""
    plan = planned(20_000, 500, 1.0, neighbours, picks=9)
    R, M, L, B = plan.resolution, plan.entry_levels, plan.limit, WEIGHT_BITS
    epsilons = [rate * 2 * R * M * s * math.log(2) / 2**plan.shift for rate in plan.multipliers]
    picks = sum(e * e / 8 for e in epsilons)
    rows = s**2 / (2 * plan.rows_variance)
    first = (R * s) ** 2 / (2 * plan.first_variance)
    corrections = 13 * (R * 2**B * L * s) ** 2 / (2 * plan.correction_variance)
    moments = 9 * (M * 2**B * L * s) ** 2 / (2 * plan.moment_variance)
    parts = [picks, rows, first, corrections, moments]
    assert [cost.zcdp for cost in plan.costs] == pytest.approx(parts, 1e-12)
    assert plan.zcdp == pytest.approx(sum(parts), rel=1e-12)
    assert plan.pick_epsilon == pytest.approx(max(epsilons))
    assert epsilons == sorted(epsilons)
    assert (epsilons[-1] / epsilons[0]) ** 2 == pytest.approx(16, rel=1e-3)


def test_default_picks_follow_their_rule():
    facts, promise = PublicFacts(features=60_000, rows=50_000), Guarantee(1.0, 1e-6)
    assert default_picks(facts, promise, Logistic()) == round(math.sqrt(50_000 * math.sqrt(RHO[1.0])) / 3)
    assert planned(50, 3, 0.1).picks == 2 and planned(10, 1).picks == 1
    assert planned(10**7, 10**6, 8.0).picks == 256


@settings(max_examples=60, derandomize=True, deadline=None)
@given(st.integers(2, 10**7), st.integers(1, 10**6), st.floats(1e-3, 100),
       st.sampled_from(["add-remove", "replace-one"]), st.one_of(st.none(), st.integers(1, 60)))
def test_plans_keep_their_guarantee_and_come_back_from_json(n, d, epsilon, neighbours, picks):
    plan = planned(n, d, epsilon, neighbours, picks=None if picks is None else min(picks, d))
    assert plan.epsilon_spent <= epsilon and plan.most_rows >= n
    assert Plan.from_dict(json.loads(json.dumps(plan.to_dict()))) == plan
    assert planned(n, d, epsilon, neighbours, picks=plan.picks) == plan


@pytest.mark.parametrize(
    ("changed", "named"),
    [
        ({"picks": 4}, "one whole number per pick"),
        ({"picks": 51}, "picks must be between"),
        ({"multipliers": None}, "multipliers must be a list"),
        ({"multipliers": [1, 2, 0, 3, 4]}, "a multiplier must be between"),
        ({"limit": 0}, "limit must be"),
        ({"limit": 2**16}, "more than its guarantee"),
        ({"correction_variance": 1}, "more than its guarantee"),
        ({"moment_variance": 10}, "more than its guarantee"),
        ({"first_variance": 0}, "first_variance must be"),
        ({"final_corrections": 40}, "more than its guarantee"),
        ({"averaged": 5}, "averaged must be between"),
        ({"steps": 5}, "unknown key 'steps'"),
        ({"method": "frank-wolfe"}, "lacks the key"),
        ({"method": None}, "method must be"),
    ],
)
def test_plans_that_could_not_have_been_made_are_refused(changed, named):
    with pytest.raises(InputError, match=named):
        Plan.from_dict(planned(picks=5).to_dict() | changed)


def test_what_greedy_cannot_do_is_said():
    facts = PublicFacts(features=5, rows=100)
    with pytest.raises(InputError, match="needs delta above 0"):
        plan_fit(facts, Guarantee(1.0), method="greedy")
    with pytest.raises(InputError, match="picks must be between 1 and 5"):
        planned(d=5, picks=6)


# --- the run, step by step


@pytest.mark.parametrize("loss", LOSSES)
@pytest.mark.parametrize("kind", ["0/1", "real"])
@settings(max_examples=25, derandomize=True, deadline=None)
@given(st.integers(0, 2**32 - 1))
def test_every_pick_sees_the_scores_of_the_oracle(kind, loss, seed):
    """Lazy equals eager: at every pick scores, and at every correction derivatives, are those
    computed from nothing at the coefficients and intercept of that moment."""
    rng = np.random.default_rng(seed)
    n, d = int(rng.integers(5, 150)), int(rng.integers(2, 15))
    X, y = table(rng, n, d, 1, kind)
    plan = planned(n, d, float(rng.choice([0.1, 1.0, 30.0])), picks=int(rng.integers(1, d + 1)),
                   loss=loss, facts={"label": LOSSES[loss]})
    seen = watched_run(plan, X, y if loss == "logistic" else 6 * y + rng.normal(-2, 2, n))
    assert len(seen["picks"]) == len(set(seen["picks"])) == plan.picks
    assert seen["corrections"] == plan.corrections


@pytest.mark.parametrize("loss", LOSSES)
@settings(max_examples=40, derandomize=True, deadline=None)
@given(st.integers(0, 2**32 - 1))
def test_public_knowledge_changes_nothing_about_that(loss, seed):
    """The same with features included, excluded, weighed and started from; none of them but the
    weighed ones is ever drawn."""
    rng = np.random.default_rng(seed)
    n, d = int(rng.integers(5, 150)), int(rng.integers(10, 25))
    X, y = table(rng, n, d, 1, str(rng.choice(["0/1", "real"])))
    knowledge = random_knowledge(rng, d, loss)
    started = set(knowledge["start"] or {}) - {None}
    barred = {*knowledge["include"], *knowledge["exclude"], *started}
    plan = planned(n, d, float(rng.choice([0.1, 1.0, 30.0])), loss=loss,
                   picks=min(3, d - len(barred)), facts={"label": LOSSES[loss]}, **knowledge)
    seen = watched_run(plan, X, y if loss == "logistic" else 6 * y + rng.normal(-2, 2, n))
    assert len(seen["picks"]) == plan.picks and not barred & set(seen["picks"])
    assert seen["corrections"] == plan.corrections == 1 + plan.picks + 4
    assert plan.moments == len({*knowledge["include"], *started}) + plan.picks


def watched_run(plan: GreedyPlan, X, y) -> dict:
    """A fit through `plan.fit` whose rooms are compared with the oracle as it goes."""
    fit = import_module("sordino.fit")
    seen = {"picks": [], "corrections": 0}
    levels = quantised(X, 1.0, plan.entry_levels)

    def oracle(rows, intercept):
        unit = 2.0**-COEFFICIENT_BITS / plan.entry_levels / MARGIN_UNIT
        curve, target = curve_and_targets(plan, y)
        eager = Eager(levels, target, np.asarray(rows.dither), curve, plan.resolution,
                      np.array([unit]))
        eager.v += seen["v"]
        eager.set_intercept(intercept)
        return eager

    class Watched:
        """Passes everything on to the rows, noting where they stand."""

        def __init__(self, rows):
            self.rows = rows

        def __getattr__(self, name):
            return getattr(self.rows, name)

        def place(self, intercept):
            seen["intercept"] = intercept
            self.rows.place(intercept)

        def shift(self, features, weights, intercept):
            np.add.at(seen["v"], features, weights)
            seen["intercept"] = intercept
            self.rows.shift(features, weights, intercept)

        def derivatives(self):
            q = self.rows.derivatives()
            assert (q == oracle(self.rows, seen["intercept"]).q).all()
            seen["corrections"] += 1
            return q

    class Picking:
        def __init__(self, scores, rows):
            self.scores, self.rows = scores, rows

        def __getattr__(self, name):
            return getattr(self.scores, name)

        def pick(self, bits):
            eager = oracle(self.rows, seen["intercept"])
            assert (self.rows.q == eager.q).all()
            self.scores._check()
            unit = seen["unit"]
            for l, feature in enumerate(self.scores.loud):
                assert unit * int(self.scores.score[l]) == eager.scores[feature]
            feature, sign = self.scores.pick(bits)
            seen["picks"].append(feature)
            return feature, sign

    real = fit.greedy

    def run(plan, rows, scores, bits, chosen, *rest):
        seen["v"] = np.zeros(plan.facts.features, dtype=np.int64)
        seen["unit"] = chosen.unit
        solution = real(plan, Watched(rows), Picking(scores, rows), bits, chosen, *rest)
        scores.absorb(rows.catch_up())
        rows._check()
        scores._check()
        return solution

    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(fit, "greedy", run)
        release = plan.fit(sp.csr_array(X), y, rehearsal_seed=3)
    assert sorted({*seen["picks"], *plan.in_model}) == release.features.tolist()
    return seen


# --- what comes out


def test_with_negligible_noise_it_is_logistic_regression_on_the_chosen_features():
    """Reference: scikit-learn without penalty on the same three features. Rows of at most three
    0/1 features and the intercept are no longer than 2, so no row is clipped."""
    rng = np.random.default_rng(5)
    X, y = table(rng, 4000, 20, 3)
    release = planned(4000, 20, 1e5, picks=3).fit(sp.csr_array(X), y, rehearsal_seed=2)
    assert release.features.tolist() == [0, 1, 2]
    best = LogisticRegression(C=1e9, tol=1e-10, max_iter=1000).fit(X[:, :3], y)
    np.testing.assert_allclose(release.coefficients, best.coef_[0], atol=0.1)
    assert release.intercept == pytest.approx(best.intercept_[0], abs=0.1)
    excess = log_loss(y, release.margin(X)) - log_loss(y, best.decision_function(X[:, :3]))
    assert 0 <= excess < 3e-4


def test_planted_features_are_found_at_epsilon_1():
    """Six features, each with a score of hundreds of rows at a noise of some 15: with the real
    source; chance of missing two or more below 1e-6."""
    rng = np.random.default_rng(6)
    X, y = table(rng, 20_000, 400, 6)
    release = planned(20_000, 400, 1.0, picks=8).fit(sp.csr_array(X), y)
    assert len({0, 1, 2, 3, 4, 5} & set(release.features.tolist())) >= 5
    assert log_loss(y, release.margin(X)) < log_loss(y, np.full(len(y), np.log(y.mean()
                                                     / (1 - y.mean())))) - 0.05


def log_loss(y, margin) -> float:
    return float(np.logaddexp(0, np.where(y > 0, -margin, margin)).mean())


def test_bounds_per_feature_only_change_units():
    rng = np.random.default_rng(7)
    X, y = table(rng, 500, 8, 2)
    bounds = 2.0 ** rng.integers(-3, 4, 8)
    one = planned(500, 8, 10.0, picks=4).fit(sp.csr_array(X), y, rehearsal_seed=1)
    other = planned(500, 8, 10.0, picks=4, facts={"entry_bound": bounds}).fit(
        sp.csr_array(X * bounds), y, rehearsal_seed=1)
    assert one.features.tolist() == other.features.tolist()
    np.testing.assert_allclose(other.coefficients * bounds[other.features], one.coefficients)


def test_every_feature_may_be_picked_and_tiny_tables_work():
    X, y = np.array([[1.0, 0.0], [0.0, 1.0], [1.0, 1.0]]), np.array([1.0, 0.0, 1.0])
    release = planned(3, 2, 5.0, picks=2).fit(X, y)
    assert release.features.tolist() == [0, 1]
    assert planned(1, 1, 1.0).fit(np.array([[1.0]]), np.array([1])).features.tolist() == [0]


def test_a_release_is_saved_shown_and_stated(tmp_path):
    rng = np.random.default_rng(8)
    X, y = table(rng, 2000, 30, 3)
    plan = planned(2000, 30, 2.0, picks=5)
    release = plan.fit(sp.csr_array(X), y)
    release.save(tmp_path / "model.json")
    back = sordino.load_release(tmp_path / "model.json")
    assert back.plan == plan and back.coefficients.tobytes() == release.coefficients.tobytes()
    said = " ".join(release.statement().split())
    for figure in (plan.correction_variance, plan.moment_variance, plan.first_variance):
        assert f"{figure:,}" in said
    assert "5 picks of one fresh feature each" in said and "clipping at 2 bounds" in said
    assert "radius" not in said
    told = " ".join(str(plan).split())
    assert "5 features, all different" in told
    assert "and 4.95 % for the second moments" in told
    explained = " ".join(plan.explain().split())
    assert f"{plan.moment_sensitivity:,}" in explained and "the rule gives" in explained
    assert max(map(len, [*str(plan).splitlines(), *plan.explain().splitlines()])) <= 80
