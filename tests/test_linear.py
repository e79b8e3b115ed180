"""Linear models: squared loss with clipped residuals and Huber's, against outside references, and
in the units of the label from the plan to the prediction."""

from __future__ import annotations

import dataclasses
import json
import re
from functools import cache

import numpy as np
import pytest
import scipy.sparse as sp
from scipy.optimize import minimize
from sklearn.datasets import load_diabetes
from sklearn.linear_model import HuberRegressor, Lasso, LinearRegression

import sordino
from sordino import Guarantee, InputError, PublicFacts, load_release, plan_fit
from sordino.cli import main
from sordino.files import write_svmlight

METHODS = ("greedy", "frank-wolfe")
NO_NOISE = Guarantee(1e9, 1e-6)     # the noise left is far below one rounding step
N_ROWS, N_FEATURES, N_TRUE = 3000, 12, 3
RANGE = (-6.0, 10.0)


@cache
def table(outliers: bool = True):
    """(X, y): three 0/1 features matter; labels lie in RANGE, a tenth of them far from the line."""
    rng = np.random.default_rng(3)
    X = (rng.random((N_ROWS, N_FEATURES)) < rng.uniform(0.2, 0.6, N_FEATURES)).astype(float)
    errors = rng.standard_t(3, N_ROWS) if outliers else rng.uniform(-1, 1, N_ROWS)
    return X, np.clip(2 + X[:, :N_TRUE] @ [3.0, -2.0, 1.5] + errors, *RANGE)


def facts_of(X, label=RANGE, **more) -> PublicFacts:
    return PublicFacts(features=X.shape[1], rows=len(X), label=label, **more)


def without_noise(facts: PublicFacts, method: str, **options):
    """A plan with negligible noise; a greedy one corrects until it stands still."""
    plan = plan_fit(facts, NO_NOISE, method=method, **options)
    if method == "frank-wolfe":
        return plan
    return dataclasses.replace(plan, final_corrections=60, averaged=20)


def dense(release) -> np.ndarray:
    w = np.zeros(release.plan.facts.features)
    w[release.features] = release.coefficients
    return w


# --- without noise, it is what others compute ----------------------------------------------------


@cache
def hubers() -> tuple[np.ndarray, float, float]:
    """(coefficients, intercept, b) by scikit-learn, which estimates the scale of the residuals too:
    at that scale its coefficients minimise the loss with b = 1.35 scale."""
    X, y = table()
    best = HuberRegressor(epsilon=1.35, alpha=0, tol=1e-10, max_iter=1000).fit(X[:, :N_TRUE], y)
    return best.coef_, float(best.intercept_), 1.35 * best.scale_


def assert_hubers(release):
    """To rounding: dithers of 3,000 rows at R = 2048 leave 1e-5 of b or so in a mean."""
    coefficients, intercept, b = hubers()
    np.testing.assert_allclose(dense(release)[:N_TRUE], coefficients, atol=2e-4)
    assert abs(dense(release)[N_TRUE:]).max() < 1e-6
    assert release.intercept == pytest.approx(intercept, abs=2e-4)
    X, y = table()
    clipped = abs(y - release.predict(X)) > b
    assert 0.1 < clipped.mean() < 0.5, "many residuals are clipped"


@pytest.mark.parametrize("loss", ["squared", "huber"])
def test_picked_features_come_to_hubers_regression(loss):
    """Reference: scikit-learn's HuberRegressor. Rows of at most three 0/1 features and the
    intercept are no longer than 2, so none is clipped."""
    X, y = table()
    plan = without_noise(facts_of(X), "greedy", picks=N_TRUE, loss=loss,
                         residual_bound=hubers()[2] / 8)
    release = plan.fit(sp.csr_array(X), y, rehearsal_seed=1)
    assert release.features.tolist() == [0, 1, 2]
    assert_hubers(release)


@pytest.mark.parametrize("schedule", ["paced", "shrinking"])
def test_features_included_by_frank_wolfe_come_to_hubers_regression(schedule):
    """Reference: scikit-learn's HuberRegressor; the moves have no room."""
    X, y = table()
    plan = without_noise(facts_of(X), "frank-wolfe", loss="huber", residual_bound=hubers()[2] / 8,
                         include=range(N_TRUE), radius=1e-9, steps=100, schedule=schedule)
    assert_hubers(plan.fit(sp.csr_array(X), y, rehearsal_seed=1))


@pytest.mark.parametrize("options", [
    {"method": "greedy", "picks": 10, "exclude": [10]},
    {"method": "greedy", "picks": 1, "include": range(10)},
    {"method": "frank-wolfe", "steps": 100, "radius": 1e-9, "include": range(10)},
])
def test_least_squares_of_all_features(options):
    """Reference: scikit-learn's LinearRegression on its diabetes data, and an empty column.

    Bounds are four times the largest entries, so no row is longer than 2; a residual bound of the
    whole label range clips none.
    """
    data, y = load_diabetes(return_X_y=True)
    X = np.column_stack([data, np.zeros(len(data))])
    bounds = np.r_[4 * abs(data).max(axis=0), 1.0]
    plan = without_noise(facts_of(X, (25.0, 346.0), entry_bound=bounds), loss="squared",
                         residual_bound=2.0, **options)
    release = plan.fit(X, y, rehearsal_seed=2)
    best = LinearRegression().fit(data, y)
    np.testing.assert_allclose(dense(release)[:10], best.coef_, atol=10.0)      # of up to 792
    np.testing.assert_allclose(release.predict(X), best.predict(data), atol=0.2)
    assert release.intercept == pytest.approx(best.intercept_, abs=0.02)
    error = lambda prediction: ((y - prediction) ** 2).mean()  # noqa: E731
    assert error(release.predict(X)) <= error(best.predict(data)) * (1 + 1e-6)


def test_long_rows_weigh_less_in_least_squares():
    """Reference: scikit-learn's LinearRegression with weights 2/length where rows are longer."""
    rng = np.random.default_rng(4)
    X = (rng.random((2000, 9)) < 0.6).astype(float)
    X[:, 8] = 0
    y = X @ rng.normal(size=9) + rng.uniform(-1, 1, 2000)
    weights = np.minimum(1, 2 / np.sqrt(1 + X[:, :8].sum(axis=1)))
    assert (weights < 1).mean() > 0.7
    plan = without_noise(facts_of(X, (-12.0, 12.0)), "greedy", picks=1, include=range(8),
                         loss="squared", residual_bound=2.0)
    best = LinearRegression().fit(X[:, :8], y, sample_weight=weights)
    release = plan.fit(X, y, rehearsal_seed=1)
    # weights are rounded down to multiples of 1/256
    np.testing.assert_allclose(dense(release)[:8], best.coef_, atol=0.01)


def clipped_loss(w, c, b: float, X, y) -> float:
    size = abs(y - X @ w - c)
    return float(np.where(size <= b, size**2 / 2, b * size - b * b / 2).mean())


def best_in_ball(X, y, b: float, radius: float) -> float:
    """The least mean clipped loss over |w|_1 <= radius and any intercept, by scipy's SLSQP over
    w = w_plus - w_minus."""
    d = X.shape[1]

    def loss_and_slope(v):
        w, c = v[:d] - v[d:-1], v[-1]
        slope = np.clip(X @ w + c - y, -b, b) / len(y)
        along = X.T @ slope
        return clipped_loss(w, c, b, X, y), np.r_[along, -along, slope.sum()]

    room = {"type": "ineq", "fun": lambda v: radius - v[:-1].sum(),
            "jac": lambda v: np.r_[-np.ones(2 * d), 0.0]}
    found = minimize(loss_and_slope, np.r_[np.zeros(2 * d), np.median(y)], jac=True, method="SLSQP",
                     bounds=[(0, None)] * 2 * d + [(None, None)], constraints=[room],
                     options={"ftol": 1e-12, "maxiter": 500})
    assert found.success
    return float(found.fun)


@pytest.mark.parametrize("schedule", ["paced", "shrinking"])
def test_frank_wolfe_reaches_the_least_clipped_loss_in_its_ball(schedule):
    """Reference: scipy's SLSQP, for a ball that is too small for the three features."""
    X, y = table()
    b, radius = 1.0, 3.5
    plan = without_noise(facts_of(X), "frank-wolfe", loss="huber", residual_bound=b / 8, steps=1000,
                         radius=radius / b, schedule=schedule)
    release = plan.fit(sp.csr_array(X), y, rehearsal_seed=1)
    w, best = dense(release), best_in_ball(X, y, b, radius)
    assert abs(w).sum() <= radius * (1 + 1e-12)
    excess = clipped_loss(w, release.intercept, b, X, y) - best
    assert -1e-6 < excess < 2e-3 * best


@pytest.mark.parametrize("schedule", ["paced", "shrinking"])
def test_frank_wolfe_reaches_the_lasso(schedule):
    """Reference: scikit-learn's Lasso, in the ball of its own L1 norm; no residual is clipped."""
    X, y = table()
    best = Lasso(alpha=0.05, tol=1e-12).fit(X, y)
    plan = without_noise(facts_of(X), "frank-wolfe", loss="squared", residual_bound=2.0, steps=1000,
                         radius=float(abs(best.coef_).sum() / 16), schedule=schedule)
    release = plan.fit(sp.csr_array(X), y, rehearsal_seed=1)
    squared = lambda prediction: ((y - prediction) ** 2).mean()  # noqa: E731
    reached, least = squared(release.predict(X)), squared(best.predict(X))
    assert reached <= least + 1e-3 * (y.var() - least)
    np.testing.assert_allclose(dense(release), best.coef_, atol=0.12)


def test_both_methods_agree_where_no_residual_is_clipped():
    """Reference: scikit-learn's LinearRegression, for a ball with room to spare."""
    X, y = table(outliers=False)
    best = LinearRegression().fit(X[:, :N_TRUE], y)
    for method, options in (("greedy", {"picks": 3}),
                            ("frank-wolfe", {"steps": 60, "include": [0, 1, 2], "radius": 1e-6})):
        plan = without_noise(facts_of(X), method, loss="squared", residual_bound=1.0, **options)
        release = plan.fit(sp.csr_array(X), y, rehearsal_seed=4)
        assert abs(y - release.predict(X)).max() < 8, "no residual is clipped at b = 8"
        np.testing.assert_allclose(dense(release)[:N_TRUE], best.coef_, atol=1e-3)
        assert release.intercept == pytest.approx(best.intercept_, abs=1e-3)


# --- one loss by two names -----------------------------------------------------------------------


def private_plan(method: str, facts: PublicFacts, loss="squared", **options):
    size = {"picks": 4} if method == "greedy" else {"steps": 30}
    return plan_fit(facts, Guarantee(3.0, 1e-6), method=method, loss=loss, **size | options)


@pytest.mark.parametrize("method", METHODS)
def test_squared_and_hubers_loss_differ_in_their_bound_alone(method):
    X, y = table()
    squared, huber = (private_plan(method, facts_of(X), loss, residual_bound=0.3).fit(
        X, y, rehearsal_seed=7) for loss in ("squared", "huber"))
    assert squared.features.tolist() == huber.features.tolist()
    assert squared.coefficients.tolist() == huber.coefficients.tolist()
    assert squared.intercept == huber.intercept
    ruled = [private_plan(method, facts_of(X), loss).residual_bound
             for loss in ("squared", "huber")]
    assert ruled == [0.25, 0.125]


@pytest.mark.parametrize("method", METHODS)
def test_labels_beyond_their_range_count_as_its_ends(method):
    X, y = table()
    far = np.where(y == RANGE[1], 1e300, np.where(y < -3, -1e300, y))
    plan = private_plan(method, facts_of(X))
    release = plan.fit(X, far, rehearsal_seed=7)
    same = plan.fit(X, np.clip(far, *RANGE), rehearsal_seed=7)
    assert release._content() == same._content()


# --- units of the label --------------------------------------------------------------------------


@pytest.mark.parametrize("method", METHODS)
@pytest.mark.parametrize("options", [
    {}, {"include": [5, 6]}, {"exclude": [0], "prior": {1: 8.0}},
])
def test_labels_in_another_unit_give_the_same_fit(method, options):
    """Labels and their range times a power of two, and shifted by one: the same picks, scaled
    coefficients to the last bit, an intercept that follows."""
    X, y = table()
    y = np.rint(y * 2**10) / 2**10          # so that no sum below is rounded
    first = private_plan(method, facts_of(X), **options).fit(X, y, rehearsal_seed=7)
    for factor, shift in ((2.0**-30, 0.0), (2.0**20, 0.0), (1.0, 2.0**12), (4.0, -(2.0**8))):
        facts = facts_of(X, tuple(factor * np.array(RANGE) + shift))
        plan = private_plan(method, facts, **options)
        other = plan.fit(X, factor * y + shift, rehearsal_seed=7)
        assert other.features.tolist() == first.features.tolist()
        assert (other.coefficients == factor * first.coefficients).all()
        assert other.intercept - shift == pytest.approx(factor * first.intercept, rel=1e-11)
        predicted = factor * first.predict(X) + shift
        np.testing.assert_allclose(other.predict(X), predicted, rtol=1e-11)


@pytest.mark.parametrize("method", METHODS)
def test_a_start_in_another_unit_gives_the_same_fit(method):
    X, y = table()
    y = np.rint(y * 2**10) / 2**10
    start = {2: 1.25, 7: -0.5, None: 3.0}
    first = private_plan(method, facts_of(X), start=start).fit(X, y, rehearsal_seed=7)
    facts = facts_of(X, tuple(4 * np.array(RANGE) + 16))
    moved = {2: 5.0, 7: -2.0, None: 28.0}
    other = private_plan(method, facts, start=moved).fit(X, 4 * y + 16, rehearsal_seed=7)
    assert (other.coefficients == 4 * first.coefficients).all()
    assert other.intercept == pytest.approx(4 * first.intercept + 16, rel=1e-12)


def test_without_an_intercept_predictions_start_at_the_middle_of_the_range():
    X, y = table()
    plan = plan_fit(facts_of(X, (-6.0, 10.0)), Guarantee(1.0), loss="squared", steps=5)
    release = plan.fit(X, y)
    assert not plan.intercept and release.intercept == 2.0
    assert release.predict(np.zeros((1, N_FEATURES))).tolist() == [2.0]


@pytest.mark.parametrize("method", METHODS)
@pytest.mark.parametrize("label", [-5.5, 2.0, 9.0])
def test_a_label_that_never_varies_is_the_intercept(method, label):
    """Rows without entries: nothing else is there to tell it."""
    X = sp.csr_array((500, 4))
    plan = without_noise(facts_of(np.zeros((500, 4))), method, loss="squared",
                         **({"picks": 2} if method == "greedy" else {"steps": 60}))
    release = plan.fit(X, np.full(500, label), rehearsal_seed=1)
    assert release.predict(X)[0] == pytest.approx(label, abs=2e-3)


@pytest.mark.parametrize("method", METHODS)
def test_a_few_wild_labels_move_predictions_little(method):
    """A hundredth of the labels at the far end of their range: what residuals are clipped for.
    Least squares (scikit-learn's LinearRegression) goes a third of a unit astray on them."""
    X, y = table(outliers=False)
    wild = y.copy()
    wild[:: 100] = -1e6
    facts = facts_of(X, (-30.0, 30.0))
    options = {"picks": 3} if method == "greedy" else {"include": range(3), "radius": 1e-6}
    calm, stirred = (without_noise(facts, method, loss="huber", residual_bound=1 / 16, **options)
                     .fit(X, labels, rehearsal_seed=1).predict(X) for labels in (y, wild))
    assert abs(calm - stirred).max() < 0.08
    least = LinearRegression().fit(X[:, :3], np.clip(wild, -30, 30)).predict(X[:, :3])
    assert abs(calm - least).mean() > 0.25


# --- what is released ----------------------------------------------------------------------------


@pytest.fixture(scope="module", params=METHODS)
def release(request):
    X, y = table()
    return private_plan(request.param, facts_of(X)).fit(X, y)


def test_predictions_are_in_the_units_of_the_label(release):
    X, y = table()
    predicted = release.predict(X)
    assert predicted.dtype == np.float64
    np.testing.assert_allclose(predicted, X @ dense(release) + release.intercept, rtol=1e-12)
    assert (predicted == release.margin(X)).all()
    best = LinearRegression().fit(X, y).score(X, y)         # 0.590; here 0.585 +- 0.0015 or better
    assert 1 - ((y - predicted) ** 2).mean() / y.var() > 0.9 * best


def test_a_linear_model_has_no_probabilities(release):
    X, _ = table()
    assert not release.binary
    with pytest.raises(InputError, match="a linear model has no probabilities"):
        release.predict_probability(X)


def test_a_linear_release_comes_back(release, tmp_path):
    X, _ = table()
    release.save(tmp_path / "model.json")
    back = load_release(tmp_path / "model.json")
    assert back.plan == release.plan and back._content() == release._content()
    assert back.predict(X).tobytes() == release.predict(X).tobytes()
    assert "linear model" in str(back) and "2^-" not in str(back)


def test_words_are_those_of_a_linear_model(release):
    plan = release.plan
    texts = {"plan": str(plan), "explain": plan.explain(), "statement": release.statement()}
    for name, text in texts.items():
        words = " ".join(text.split())
        assert "mean label" in words, name
        for foreign in ("label rate", "log odds", "logistic", "label 1", "exp(-m)"):
            assert foreign not in words, (name, foreign)
        assert max(map(len, text.splitlines())) < 80
    assert "of the bound of a residual" in " ".join(texts["statement"].split())
    assert "residuals clipped at 2 in the label's units" in " ".join(texts["statement"].split())
    assert "label from -6 to 10" in " ".join(texts["plan"].split())
    assert "half ranges of the label, 2 in its units" in " ".join(texts["explain"].split())


def test_words_of_a_logistic_model_stay():
    plan = plan_fit(PublicFacts(features=500, rows=9000), Guarantee(1.0, 1e-6))
    assert "label rate" in str(plan) and "mean label" not in str(plan) + plan.explain()


def test_the_statement_tells_where_predictions_start():
    """Without an intercept of its own a linear model still predicts the middle of the range."""
    X, y = table()
    plan = plan_fit(facts_of(X, (-6.0, 11.0)), Guarantee(1.0), loss="squared", steps=5)
    said = " ".join(plan.fit(X, y).statement().split("\n## ")[1].split("\n|")[0].split())
    assert re.search(r"(?<![\d.])2\.5(?![\d])", said), said


# --- what can be seen ----------------------------------------------------------------------------


@pytest.mark.parametrize("bound", [1 / 16, 0.25, 2.0])
@pytest.mark.parametrize("neighbours", ["add-remove", "replace-one"])
def test_differences_are_in_units_of_the_label(bound, neighbours):
    """n f (1 - f) (a - b)/b is the score of a feature that parts mean labels by a - b."""
    facts = PublicFacts(features=1000, rows=50_000, label=(-6.0, 10.0))
    plan = plan_fit(facts, Guarantee(1.0, 1e-6, neighbours), loss="huber", residual_bound=bound)
    for share in (0.01, 0.3, 0.5):
        expected = plan.smallest_effect_rows * 8 * bound / (50_000 * share * (1 - share))
        assert plan.smallest_difference(share) == pytest.approx(expected, rel=1e-12)
    assert plan.most_difference == 16 * bound
    assert plan.sees_anything == (plan.smallest_effect_rows * 2 <= 50_000)


@pytest.mark.parametrize("bound", [1 / 16, 0.1, 0.25, 1.0, 2.0])
def test_the_resolution_of_a_plan_is_one_its_loss_allows(bound):
    """R 2^16 (1/b + 1) must fit 32 bits however little noise there is."""
    for method in METHODS:
        plan = plan_fit(PublicFacts(features=5, rows=10**6, label=(0, 1)), NO_NOISE, method=method,
                        loss="squared", residual_bound=bound)
        assert plan.resolution == plan.loss_form.most_resolution
        assert plan.resolution * 2**16 * (1 / bound + 1) < 2**31
        fields = plan.to_dict() | {"resolution": 2 * plan.resolution}
        with pytest.raises(InputError, match="resolution must be between|more than its guarantee"):
            sordino.Plan.from_dict(fields)


# --- the terminal --------------------------------------------------------------------------------


STUDY = """
[data]
matrix = "{matrix}"
{more}
[facts]
features = 12
rows = 3000
label = [-6, 10]
[guarantee]
epsilon = 3.0
delta = 1e-6
[method]
loss = "squared"
residual_bound = 0.5
[release]
model = "model.json"
statement = "statement.md"
"""


def in_one_file(folder, X, y):
    write_svmlight(folder / "x.svm", X, y)
    return "x.svm", ""


def in_two_files(folder, X, y):
    sp.save_npz(folder / "x.npz", X)
    np.savetxt(folder / "y.txt", y)
    return "x.npz", 'labels = "y.txt"'


@pytest.mark.parametrize("store", [in_one_file, in_two_files])
def test_numeric_labels_at_the_terminal(tmp_path, capsys, store):
    """Predictions are in the units of the label, one number a line."""
    X, y = sp.csr_array(table()[0]), table()[1]
    matrix, more = store(tmp_path, X, y)
    study = tmp_path / "study.toml"
    study.write_text(STUDY.format(matrix=matrix, more=more))
    assert main(["plan", str(study)]) == 0
    assert "private sparse linear regression" in capsys.readouterr().out
    assert main(["fit", str(study)]) == 0
    capsys.readouterr()
    model = tmp_path / "model.json"
    release = load_release(model)
    assert release.plan.method == "greedy" and release.plan.residual_bound == 0.5
    assert "sparse linear model" in (tmp_path / "statement.md").read_text()
    predicted = release.predict(X)
    assert np.corrcoef(predicted, y)[0, 1] > 0.5
    assert main(["predict", str(model), str(tmp_path / matrix)]) == 0
    assert np.array(capsys.readouterr().out.split(), dtype=float).tolist() == predicted.tolist()
    assert main(["predict", str(model), str(tmp_path / matrix), "--json"]) == 0
    said = json.loads(capsys.readouterr().out)
    assert said == {"rehearsal": False, "predictions": predicted.tolist()}


def test_a_loss_without_its_label_range_is_refused_at_the_terminal(tmp_path, capsys):
    study = tmp_path / "study.toml"
    study.write_text(STUDY.format(matrix="x.svm", more="").replace("label = [-6, 10]", ""))
    assert main(["plan", str(study)]) == 2
    out, err = capsys.readouterr()
    assert out == "" and 'loss "squared" needs a label range' in err and err.count("\n") == 1
