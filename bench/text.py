"""Real text: the packages of a Debian machine, every method at its defaults.

The vocabulary is read off the rows; it counts as public because the lists are.
"""

from __future__ import annotations

from dataclasses import dataclass
from time import perf_counter

import numpy as np
from scipy.sparse import csr_array

import sordino

from . import textbook
from .data import log_loss
from .debian_packages import is_language_library, load_documents, split_rows


@dataclass(frozen=True)
class TextCase:
    """Package words (description, dependencies, tags, maintainer) against the kind of package."""

    name: str
    about: str
    train_rows: int = 50_000
    epsilons: tuple[float, ...] = (0.5, 1.0, 4.0)
    delta: float = 1e-6
    fits: int = 10
    seed: int = 1


def run_text(case: TextCase, quick: bool, say) -> dict:
    """AUC and log loss on the test rows: means over fits, by method and epsilon."""
    documents = load_documents(with_maintainer=True)
    y = np.array([is_language_library(section) for section in documents.sections], dtype=float)
    train, test = split_rows(len(y), case.train_rows, case.seed)
    X = csr_array(documents.matrix)
    held_out = X[test], y[test]
    table = textbook.prepare(X[train])
    facts = sordino.PublicFacts(features=X.shape[1], rows=case.train_rows)
    rows = []
    for epsilon in case.epsilons:
        say(f"epsilon {epsilon:g}")
        guarantee = sordino.Guarantee(epsilon, case.delta)
        for method in ("frank-wolfe", "greedy"):
            plan = sordino.plan_fit(facts, guarantee, method=method)
            rows.append(_private(plan, X[train], y[train], held_out, case.fits))
        plan = sordino.plan_fit(facts, guarantee, method="frank-wolfe")
        rows.append(_textbook(plan, table, y[train], held_out))
    greedy = [row["features"] for row in rows if row["method"] == "greedy"]
    say("L1 logistic regression without privacy")
    rows += [_without_privacy(X[train], y[train], held_out, count) for count in greedy]
    return {"shape": list(X.shape), "entries": int(X.nnz), "rows": rows}


def measures(margin: np.ndarray, y: np.ndarray) -> tuple[float, float]:
    """(AUC, log loss)"""
    from sklearn.metrics import roc_auc_score

    return roc_auc_score(y, margin), log_loss(y, margin)


def _private(plan, X, y, held_out, fits: int) -> dict:
    found, seconds, chosen = [], [], []
    for _ in range(fits):
        started = perf_counter()
        release = plan.fit(X, y)
        seconds.append(perf_counter() - started)
        found.append(measures(release.margin(held_out[0]), held_out[1]))
        chosen.append(len(release.features))
    return _row(plan.method, plan.guarantee.epsilon, found, np.median(seconds), np.median(chosen))


def _textbook(plan, table, y, held_out) -> dict:
    """The textbook's noise on the steps, radius and schedule that our rules give."""
    found = []
    for seed in range(3):
        fit = textbook.as_planned(plan, table, y, radius=plan.radius, seed=seed)
        found.append(measures(fit.margin(held_out[0]), held_out[1]))
    return _row("textbook", plan.guarantee.epsilon, found, sum(fit.seconds.values()),
                len(fit.features))


def _without_privacy(X, y, held_out, most: float) -> dict:
    """scikit-learn's L1 logistic regression: the last of a path with no more features."""
    from sklearn.linear_model import LogisticRegression

    X = csr_array((X.data, X.indices.astype(np.int32), X.indptr.astype(np.int32)), shape=X.shape)
    best, started = None, perf_counter()
    for strength in np.geomspace(2e-4, 0.1, 30):
        model = LogisticRegression(C=strength, l1_ratio=1, solver="liblinear").fit(X, y)
        if np.count_nonzero(model.coef_) > most:
            break
        best = model
    found = measures(best.decision_function(held_out[0]), held_out[1])
    return _row("L1, not private", None, [found], perf_counter() - started,
                np.count_nonzero(best.coef_))


def _row(method: str, epsilon, found, seconds, features) -> dict:
    auc, loss = np.mean(found, axis=0)
    return {
        "method": method, "epsilon": epsilon, "auc": float(auc), "log_loss": float(loss),
        "seconds": float(seconds), "features": float(features),
    }
