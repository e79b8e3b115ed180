"""What public knowledge is worth: a prior with the true features among one feature in a hundred."""

from __future__ import annotations

import math
import statistics
from collections import defaultdict
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from typing import NamedTuple

import numpy as np
from scipy.sparse import csr_array

import sordino

from .data import equal_shares, linear_labels, logistic_labels, zipf_table

METHODS = ("greedy", "frank-wolfe")
LOSSES = ("logistic", "squared")


@dataclass(frozen=True)
class PriorCase:
    """Signals so weak that a fit without a prior misses many; data and fits anew for each seed.

    strength   standard deviation of the true features' part of the log-odds
    explained  share of a numeric label's variance that is the true features'
    powers     of two: what a prior lets its features weigh
    radius     of Frank-Wolfe, near the L1 norm of the true coefficients: moves much larger than
               those go back and forth over a few features, whatever the prior
    epsilons   a grid, ascending, of fits without a prior
    epsilons_with_prior  those at which a prior's worth is asked
    """

    name: str
    about: str
    rows: int = 20_000
    features: int = 100_000
    entries_per_row: float = 60
    true_features: int = 10
    strength: float = 0.21
    explained: float = 0.008
    favoured_share: float = 0.01
    powers: tuple[int, ...] = (7, 10)
    radius: float = 3.0
    epsilons: tuple[float, ...] = (0.5, 0.71, 1.0, 1.41, 2.0, 2.83, 4.0)
    epsilons_with_prior: tuple[float, ...] = (0.5, 1.0)
    delta: float = 1e-6
    seeds: int = 21


class Problem(NamedTuple):
    """One table with a label for each loss, and what nobody is told."""

    X: csr_array
    labels: dict[str, np.ndarray]           # by loss
    ranges: dict[str, str | tuple[float, float]]
    true: np.ndarray                        # int64: ids of the true features
    favoured: np.ndarray                    # int64: those and others, drawn at random


def run_prior(case: PriorCase, quick: bool, say: Callable[[str], None]) -> dict:
    """Shares of the true features found, by loss, method and prior, and what a prior is worth."""
    found = defaultdict(list)
    for seed in range(1, case.seeds + 1):
        say(f"seed {seed} of {case.seeds}")
        for setting, share in _shares(case, problem(case, seed)):
            found[setting].append(share)
    shares = [
        {"loss": loss, "method": method, "power": power, "epsilon": epsilon,
         "median": statistics.median(each), "mean": statistics.mean(each), "each": each}
        for (loss, method, power, epsilon), each in found.items()
    ]
    return {"shares": shares, "worth": [_worth(case, shares, one) for one in shares
                                        if one["power"] is not None]}


def problem(case: PriorCase, seed: int) -> Problem:
    X = zipf_table(case.rows, case.features, case.entries_per_row, seed=seed)
    coefficients = equal_shares(X, case.true_features)
    planted = logistic_labels(X, case.strength * coefficients, seed=seed)
    y, label = linear_labels(X, coefficients, case.explained, seed=seed)
    true = np.flatnonzero(coefficients)
    others = np.delete(np.arange(case.features), true)
    count = round(case.favoured_share * case.features) - len(true)
    drawn = np.random.default_rng(seed).choice(others, count, replace=False)
    return Problem(X, {"logistic": planted.labels, "squared": y},
                   {"logistic": "binary", "squared": label}, true, np.union1d(true, drawn))


def _shares(case: PriorCase, one: Problem) -> Iterator[tuple[tuple, float]]:
    """((loss, method, power or None, epsilon), share of the true features found)"""
    settings = [(None, epsilon) for epsilon in case.epsilons]
    settings += [(power, epsilon) for power in case.powers for epsilon in case.epsilons_with_prior]
    for loss in LOSSES:
        facts = sordino.PublicFacts(
            features=case.features, rows=case.rows, label=one.ranges[loss]
        )
        for method in METHODS:
            for power, epsilon in settings:
                prior = None if power is None else dict.fromkeys(one.favoured.tolist(), 2.0**power)
                plan = sordino.plan_fit(
                    facts, sordino.Guarantee(epsilon, case.delta), method=method, loss=loss,
                    prior=prior, radius=case.radius if method == "frank-wolfe" else None,
                )
                release = plan.fit(one.X, one.labels[loss])
                found = len(np.intersect1d(release.features, one.true))
                yield (loss, method, power, epsilon), found / len(one.true)


def _worth(case: PriorCase, shares: list[dict], wanted: dict) -> dict:
    """Of one prior at one epsilon: the epsilon that finds as many without it, over this one."""
    without = [one for one in shares if one["power"] is None
               and (one["loss"], one["method"]) == (wanted["loss"], wanted["method"])]
    medians = [one["median"] for one in without]
    equal = epsilon_reaching(wanted["median"], case.epsilons, medians)
    return {
        **{name: wanted[name] for name in ("loss", "method", "power", "epsilon")},
        "without": medians[case.epsilons.index(wanted["epsilon"])], "with": wanted["median"],
        "worth": None if equal is None else equal / wanted["epsilon"],
    }


def epsilon_reaching(share: float, epsilons: tuple[float, ...], shares: list[float]):
    """The smallest epsilon at which the share is reached, on straight lines over log epsilon.

    None where the grid ends below it; the first of the grid where that reaches it.
    """
    if share <= shares[0]:
        return epsilons[0]
    for low, high, below, above in zip(epsilons, epsilons[1:], shares, shares[1:]):
        if above >= share:
            part = (share - below) / (above - below)
            return low * math.exp(part * math.log(high / low))
    return None
