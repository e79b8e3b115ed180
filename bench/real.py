"""Real open data that packages carry: our methods at their defaults, the textbook's, and L1."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import dataclass
from pathlib import Path
from time import perf_counter

import numpy as np
from scipy.sparse import csc_array, csr_array

import sordino
from sordino.losses import named_loss

from . import textbook
from .data import log_loss
from .open_data.fetch import Unavailable, default_cache
from .open_data.mice import load_mice
from .open_data.packages import load_packages
from .open_data.real_set import RealSet
from .open_data.verses import load_verses
from .open_data.wordnet import load_wordnet, load_wordnet_counts

SETS: dict[str, Callable[[Path], RealSet]] = {
    "mice": load_mice,
    "packages": load_packages,
    "wordnet": load_wordnet,
    "wordnet-counts": load_wordnet_counts,
    "verses": load_verses,
}

METHODS = ("frank-wolfe", "greedy")
# A path of L1 penalties falls by this factor, and ends when the loss has risen so often in a row.
PATH_FACTOR = 1.25
PATH_RISES = 3
PATH_LENGTH = 60
INTERCEPT_SCALING = 10.0

Measures = dict[str, float]
Say = Callable[[str], None]


@dataclass(frozen=True)
class RealCase:
    """Sets by name, each at every epsilon."""

    name: str
    about: str
    sets: tuple[str, ...] = tuple(SETS)
    epsilons: tuple[float, ...] = (0.5, 1.0, 4.0)
    delta: float = 1e-6
    repeats: int = 5


def run_real(case: RealCase, quick: bool, say: Say, cache: Path | None = None) -> dict:
    """For each set what it is and how the methods compare, or why it was skipped."""
    sets, repeats = {}, 2 if quick else case.repeats
    for name in case.sets:
        say(f"reading {name}")
        try:
            started = perf_counter()
            real = SETS[name](cache or default_cache())
            seconds = perf_counter() - started
            rows = compare(real, case.epsilons, repeats, case.delta, say)
        except Unavailable as error:
            say(f"skipped {name}: {error}")
            sets[name] = {"skipped": str(error)}
        else:
            sets[name] = {**described(real), "reading_seconds": seconds, "rows": rows}
    return {"sets": sets, "repeats": repeats}


def described(real: RealSet) -> dict:
    """What a report tells of a set."""
    return {
        "source": real.source,
        "public": real.public,
        "loss": real.loss,
        "label": real.label,
        "entry_bound": real.entry_bound,
        "train_rows": real.X_train.shape[0],
        "test_rows": real.X_test.shape[0],
        "features": real.X_train.shape[1],
        "entries": int(real.X_train.nnz),
        "largest_effect": largest_effect(real),
    }


def largest_effect(real: RealSet) -> float:
    """The largest score of a feature when nothing is fitted but the mean, as a share of the rows.

    Entries are in bounds; residuals are clipped as they are by default, in units of that bound.
    """
    unit = named_loss(real.loss, real.label).unit
    residuals = np.clip((real.y_train - real.y_train.mean()) / unit, -1, 1)
    scores = real.X_train.T @ residuals / real.entry_bound
    return float(abs(scores).max() / len(residuals))


def compare(real: RealSet, epsilons: tuple[float, ...], repeats: int, delta: float = 1e-6,
            say: Say = lambda line: None) -> list[dict]:
    """Every method on one set, judged on its test rows; a row of the report for each.

    Ours have nothing but the public facts and the guarantee. The textbook method has the steps
    and the schedule of our Frank-Wolfe, a constant among its features as intercept and, which
    flatters it, that one of `textbook.RADII` that is best on the test rows. L1 without privacy has
    as many features as greedy chose, or fewer, and once the penalty that is best on the test rows.
    """
    table = textbook.prepare(textbook.with_constant(real.X_train, real.entry_bound))
    rows, greedy_features = [], []
    for epsilon in epsilons:
        say(f"{real.name}, epsilon {epsilon:g}")
        guarantee = sordino.Guarantee(epsilon, delta)
        plans = {
            method: sordino.plan_fit(real.facts, guarantee, method=method, loss=real.loss)
            for method in METHODS
        }
        rows += [_private(real, plan, repeats) for plan in plans.values()]
        greedy_features.append(rows[-1]["features"])
        rows.append(_textbook(real, plans["frank-wolfe"], table, repeats))
    say(f"{real.name}, L1 without privacy")
    return rows + _without_privacy(real, greedy_features)


# --- how a model is judged


def measures(real: RealSet, margin: np.ndarray) -> Measures:
    """AUC and log loss, or R^2 of predictions clipped to the label range, on the test rows."""
    from sklearn.metrics import r2_score, roc_auc_score

    y = real.y_test
    if real.loss == "logistic":
        return {"auc": roc_auc_score(y, margin), "log_loss": log_loss(y, margin)}
    return {"r_squared": r2_score(y, np.clip(margin, *real.label))}


def _loss(found: Measures) -> float:
    """What is to be small."""
    return found["log_loss"] if "log_loss" in found else 1 - found["r_squared"]


def _mean(found: list[Measures]) -> Measures:
    return {name: float(np.mean([one[name] for one in found])) for name in found[0]}


def _row(method: str, epsilon: float | None, found: list[Measures], features, seconds) -> dict:
    return {
        "method": method, "epsilon": epsilon, **_mean(found), "features": float(features),
        "seconds": float(seconds), "each": found,
    }


# --- the methods


def _private(real: RealSet, plan, repeats: int) -> dict:
    found, features, seconds = [], [], []
    for _ in range(repeats):
        started = perf_counter()
        release = plan.fit(real.X_train, real.y_train)
        seconds.append(perf_counter() - started)
        features.append(len(release.features))
        found.append(measures(real, release.margin(real.X_test)))
    row = _row(plan.method, plan.guarantee.epsilon, found, np.median(features), np.median(seconds))
    return {**row, "smallest_effect": plan.smallest_effect_rows / plan.facts.rows}


def _textbook(real: RealSet, plan, table: textbook.Prepared, repeats: int) -> dict:
    middle, half = textbook.label_scale(real.label)
    X_test = textbook.with_constant(real.X_test, real.entry_bound)
    candidates = []
    for radius in textbook.RADII:
        found, features, seconds = [], [], []
        for seed in range(repeats):
            fit = textbook.as_planned(plan, table, real.y_train, radius=radius, seed=seed)
            found.append(measures(real, middle + half * fit.margin(X_test)))
            features.append(len(fit.features))
            seconds.append(sum(fit.seconds.values()))
        candidates.append(
            _row("textbook", plan.guarantee.epsilon, found, np.median(features), np.median(seconds))
        )
    return min(candidates, key=_loss)


def _without_privacy(real: RealSet, most_features: list[float]) -> list[dict]:
    """Rows with no more than these numbers of features, and one for the best penalty."""
    path = []
    for row in _l1_path(real):
        path.append(row)
        losses = [_loss(step) for step in path]
        past_best = len(path) - 1 - int(np.argmin(losses))
        if past_best >= PATH_RISES and row["features"] > max(most_features):
            break
    last_within = {
        max((step for step, row in enumerate(path) if row["features"] <= most), default=0)
        for most in most_features
    }
    best = {**min(path, key=_loss), "method": "L1, not private, best penalty"}
    return [path[step] for step in sorted(last_within)] + [best]


def _l1_path(real: RealSet) -> Iterator[dict]:
    """Rows of scikit-learn's models as the penalty falls from where it leaves no feature in.

    Seconds are those of the path so far.
    """
    fit = _l1_logistic(real) if real.loss == "logistic" else _l1_squared(real)
    strength = 1 / abs(real.X_train.T @ (real.y_train - real.y_train.mean())).max()
    seconds = 0.0
    for _ in range(PATH_LENGTH):
        started = perf_counter()
        coefficients, margin = fit(strength)
        seconds += perf_counter() - started
        features = np.count_nonzero(coefficients)
        yield _row("L1, not private", None, [measures(real, margin)], features, seconds)
        strength *= PATH_FACTOR


def _l1_logistic(real: RealSet):
    """Strength C, which multiplies the summed loss, to coefficients and margins of test rows.

    liblinear has a penalty on the intercept too; it takes that off again as the scaling grows.
    """
    from sklearn.linear_model import LogisticRegression

    X = _short_ids(csr_array(real.X_train))

    def fit(strength: float):
        model = LogisticRegression(
            C=strength, l1_ratio=1, solver="liblinear", intercept_scaling=INTERCEPT_SCALING
        ).fit(X, real.y_train)
        return model.coef_, model.decision_function(real.X_test)

    return fit


def _l1_squared(real: RealSet):
    """Like `_l1_logistic`, for half the squares, each fit starting from the last."""
    from sklearn.linear_model import Lasso

    X = _short_ids(csc_array(real.X_train))
    model = Lasso(warm_start=True, tol=1e-3)

    def fit(strength: float):
        model.set_params(alpha=1 / (strength * X.shape[0])).fit(X, real.y_train)
        return model.coef_, model.predict(real.X_test)

    return fit


def _short_ids(X):
    """X with the 32-bit ids that scikit-learn asks for; the entries are shared."""
    ids = (X.data, X.indices.astype(np.int32), X.indptr.astype(np.int32))
    return type(X)(ids, shape=X.shape)
