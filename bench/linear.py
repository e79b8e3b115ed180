"""Linear models on wide invented data: true features found, R^2 beside ordinary least squares."""

from __future__ import annotations

import statistics
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from time import perf_counter
from typing import NamedTuple

import numpy as np
from scipy.sparse import csr_array

import sordino

from . import textbook
from .data import equal_shares, linear_labels, zipf_table

METHODS = ("greedy", "frank-wolfe")
LOSSES = ("squared", "huber")


@dataclass(frozen=True)
class LinearCase:
    """Every method at its defaults, over seeds: data and fits anew for each."""

    name: str
    about: str
    rows: int = 20_000
    fresh_rows: int = 20_000
    features: int = 100_000
    entries_per_row: float = 60
    true_features: int = 20
    explained: float = 0.5      # of the label's variance, by the true features
    epsilon: float = 1.0
    delta: float = 1e-6
    seeds: int = 15


class Problem(NamedTuple):
    """Rows to fit, fresh rows, the public label range, and what nobody is told."""

    X: csr_array
    y: np.ndarray
    X_fresh: csr_array
    y_fresh: np.ndarray
    label: tuple[float, float]
    true: np.ndarray        # int64: ids of the true features

    def r_squared(self, predictions: np.ndarray) -> float:
        """On the fresh rows, of predictions clipped to the label range."""
        error = np.clip(predictions, *self.label) - self.y_fresh
        return 1 - float((error**2).mean() / self.y_fresh.var())


def run_linear(case: LinearCase, quick: bool, say: Callable[[str], None]) -> dict:
    """Every run, and a row of the report for each method and loss: medians over seeds."""
    runs = []
    for seed in range(1, case.seeds + 1):
        say(f"seed {seed} of {case.seeds}")
        runs += _runs(case, problem(case, seed), seed)
    return {"runs_by_method": runs, "linear": _medians(runs)}


def problem(case: LinearCase, seed: int) -> Problem:
    X = zipf_table(
        case.rows + case.fresh_rows, case.features, case.entries_per_row, seed=seed
    )
    coefficients = equal_shares(X, case.true_features)
    y, label = linear_labels(X, coefficients, case.explained, seed=seed)
    return Problem(X[: case.rows], y[: case.rows], X[case.rows :], y[case.rows :], label,
                   np.flatnonzero(coefficients))


def least_squares(one: Problem) -> float:
    """R^2 of ordinary least squares on the true features and a constant."""
    columns = textbook.with_constant(one.X[:, one.true]).toarray()
    solution, *_ = np.linalg.lstsq(columns, one.y, rcond=None)
    return one.r_squared(textbook.with_constant(one.X_fresh[:, one.true]) @ solution)


def _runs(case: LinearCase, one: Problem, seed: int) -> Iterator[dict]:
    facts = sordino.PublicFacts(features=case.features, rows=case.rows, label=one.label)
    guarantee = sordino.Guarantee(case.epsilon, case.delta)
    best = least_squares(one)
    for method in METHODS:
        for loss in LOSSES:
            plan = sordino.plan_fit(facts, guarantee, method=method, loss=loss)
            yield {"seed": seed, "method": method, "loss": loss, **_ours(plan, one, best)}
    plan = sordino.plan_fit(facts, guarantee, method="frank-wolfe", loss="squared")
    yield {"seed": seed, "method": "textbook", "loss": "squared",
           **_textbook(plan, one, best, seed)}


def _ours(plan, one: Problem, best: float) -> dict:
    started = perf_counter()
    release = plan.fit(one.X, one.y)
    seconds = perf_counter() - started
    return _judged(one, best, release.features, release.margin(one.X_fresh), seconds)


def _textbook(plan, one: Problem, best: float, seed: int) -> dict:
    """With the radius that turns out best on the fresh rows."""
    middle, half = textbook.label_scale(one.label)
    table = textbook.prepare(textbook.with_constant(one.X))
    X_fresh = textbook.with_constant(one.X_fresh)
    candidates = []
    for radius in textbook.RADII:
        fit = textbook.as_planned(plan, table, one.y, radius=radius, seed=seed)
        predictions = middle + half * fit.margin(X_fresh)
        seconds = table.seconds + sum(fit.seconds.values())
        candidates.append(_judged(one, best, fit.features, predictions, seconds))
    return max(candidates, key=lambda found: found["r_squared"])


def _judged(one: Problem, best: float, features: np.ndarray, predictions: np.ndarray,
            seconds: float) -> dict:
    r_squared = one.r_squared(predictions)
    return {
        "true_found": len(np.intersect1d(features, one.true)), "features": len(features),
        "r_squared": r_squared, "share_of_least_squares": r_squared / best, "seconds": seconds,
    }


def _medians(runs: list[dict]) -> list[dict]:
    """In the order of the runs; of the true features found and of R^2 also the least."""
    grouped: dict[tuple[str, str], list[dict]] = {}
    for run in runs:
        grouped.setdefault((run["method"], run["loss"]), []).append(run)
    return [
        {
            "method": method, "loss": loss,
            **{name: statistics.median(run[name] for run in group)
               for name in ("true_found", "features", "r_squared", "share_of_least_squares",
                            "seconds")},
            "least_true_found": min(run["true_found"] for run in group),
            "least_share": min(run["share_of_least_squares"] for run in group),
        }
        for (method, loss), group in grouped.items()
    ]
