"""Heavy tails: what it does to a fit that one row in a hundred is a hundred times too large.

Clipping entries at a public bound, or at one that is learned privately, is compared with dividing
all rows by the largest norm among them, as is often done to give every row a norm within 1. (That
norm is read off the data, which no guarantee covers; the comparison lets it pass.)
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass
from typing import NamedTuple

import numpy as np
from scipy.sparse import csr_array

import sordino

from .data import linear_labels, log_loss, planted_labels, zipf_table

SPREAD = (0.5, 1.0)         # of entries: within the public bound of 1
METHODS = ("frank-wolfe", "greedy")
EXPLAINED = 0.5             # of a numeric label's variance, by the planted signal


@dataclass(frozen=True)
class TailsCase:
    """Both losses on planted signals, with and without the scaling of a few rows."""

    name: str
    about: str
    rows: int = 20_000
    fresh_rows: int = 20_000
    features: int = 20_000
    entries_per_row: float = 40
    true_features: int = 10
    strength: float = 1.5
    scaled_share: float = 0.01
    scaled_by: float = 100.0
    epsilon: float = 1.0
    delta: float = 1e-6
    repeats: int = 5
    seed: int = 1


class Problem(NamedTuple):
    """Rows to fit and fresh ones, before any scaling; the label as `PublicFacts` takes it."""

    loss: str
    label: str | tuple[float, float]
    X: csr_array
    y: np.ndarray
    X_fresh: csr_array
    y_fresh: np.ndarray


def run_tails(case: TailsCase, quick: bool, say: Callable[[str], None]) -> dict:
    """Losses on fresh rows that nobody scaled, by loss, method and how tails are dealt with."""
    rows = []
    for make in (logistic_problem, linear_problem):
        problem = make(case)
        say(problem.loss)
        rows += [_losses(case, problem, method) for method in METHODS]
    return {"tails": rows}


def logistic_problem(case: TailsCase) -> Problem:
    X = _table(case)
    planted = planted_labels(X, case.true_features, case.strength, seed=case.seed)
    return _problem(case, "logistic", "binary", X, planted.labels)


def linear_problem(case: TailsCase) -> Problem:
    X = _table(case)
    planted = planted_labels(X, case.true_features, case.strength, seed=case.seed)
    y, label = linear_labels(X, planted.coefficients, EXPLAINED, seed=case.seed)
    return _problem(case, "squared", label, X, y)


def _table(case: TailsCase) -> csr_array:
    X = zipf_table(
        case.rows + case.fresh_rows, case.features, case.entries_per_row, seed=case.seed
    )
    X.data = np.random.default_rng(case.seed).uniform(*SPREAD, size=X.nnz)
    return X


def _problem(case: TailsCase, loss: str, label, X: csr_array, y: np.ndarray) -> Problem:
    return Problem(loss, label, X[: case.rows], y[: case.rows], X[case.rows :], y[case.rows :])


def _losses(case: TailsCase, problem: Problem, method: str) -> dict:
    """Losses of every way to deal with tails, each without and with scaled rows."""
    tables = {"plain": problem.X, "scaled": with_scaled_rows(case, problem.X)}
    plans = {bound: _plan(case, problem, method, bound) for bound in (1.0, "learn")}
    clipped, learned, divided = {}, {}, {}
    for name, X in tables.items():
        clipped[name] = _mean_loss(case, problem, plans[1.0], X, 1.0)
        learned[name] = _mean_loss(case, problem, plans["learn"], X, 1.0)
        divided[name] = _mean_loss(case, problem, plans[1.0], X, largest_norm(X))
    constant = np.full(case.fresh_rows, _best_constant(problem))
    return {
        "loss": problem.loss, "method": method, "clipped": clipped, "learned": learned,
        "divided": divided, "rise": _rise(clipped), "learned_rise": _rise(learned),
        "constant": _loss(problem, constant),
    }


def _plan(case: TailsCase, problem: Problem, method: str, entry_bound: float | str):
    facts = sordino.PublicFacts(
        features=case.features, rows=case.rows, entry_bound=entry_bound, label=problem.label
    )
    guarantee = sordino.Guarantee(case.epsilon, case.delta)
    return sordino.plan_fit(facts, guarantee, method=method, loss=problem.loss)


def _rise(losses: dict[str, float]) -> float:
    return losses["scaled"] / losses["plain"] - 1


def with_scaled_rows(case: TailsCase, X: csr_array) -> csr_array:
    """X with a share of its rows, drawn at random, scaled up."""
    rng = np.random.default_rng(case.seed + 1)
    factors = np.ones(X.shape[0])
    chosen = rng.choice(X.shape[0], round(case.scaled_share * X.shape[0]), replace=False)
    factors[chosen] = case.scaled_by
    return csr_array((X.data * np.repeat(factors, np.diff(X.indptr)), X.indices, X.indptr),
                     shape=X.shape)


def largest_norm(X: csr_array) -> float:
    """The largest L2 norm of a row."""
    return math.sqrt((X * X).sum(axis=1).max())


def _mean_loss(case: TailsCase, problem: Problem, plan, X: csr_array, divisor: float) -> float:
    """Over repeats, of fits to X / divisor, whose entries the plan clips at its bound."""
    X, X_fresh = X / divisor, problem.X_fresh / divisor
    releases = (plan.fit(X, problem.y) for _ in range(case.repeats))
    return float(np.mean([_loss(problem, release.margin(X_fresh)) for release in releases]))


def _loss(problem: Problem, margin: np.ndarray) -> float:
    """Log loss; or the mean squared error of predictions within the range, over the variance."""
    if problem.loss == "logistic":
        return log_loss(problem.y_fresh, margin)
    error = np.clip(margin, *problem.label) - problem.y_fresh
    return float((error**2).mean() / problem.y_fresh.var())


def _best_constant(problem: Problem) -> float:
    """The margin that fits the labels without any feature."""
    rate = problem.y.mean()
    return math.log(rate / (1 - rate)) if problem.loss == "logistic" else rate
