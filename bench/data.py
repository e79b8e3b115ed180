"""Invented sparse tables with a Zipf-like spread of features, and labels planted in them."""

from __future__ import annotations

import math
from typing import NamedTuple

import numpy as np
from scipy.optimize import brentq
from scipy.sparse import csc_array, csr_array
from scipy.special import expit

COMMON_BAND = (0.20, 0.51)
RARER_BAND = (0.01, 0.05)
# Columns above this prevalence are drawn entry by entry, the others by count and then rows.
_DENSE_PREVALENCE = 0.01
LABEL_DEVIATIONS = 3        # label range, in standard deviations around the mean


class Planted(NamedTuple):
    """Labels and the model they were drawn from."""

    labels: np.ndarray  # (rows,) float64 of 0 and 1
    coefficients: np.ndarray  # (features,) float64, zero but for the true features
    intercept: float


def zipf_prevalences(features: int, mean_entries: float, exponent: float, top_share: float):
    """Column prevalences p_j = min(top_share, c / j^exponent), float64 (features,), descending.

    c is solved so that they add up to mean_entries, the expected number of entries of a row.
    Raises ValueError where no c does.
    """
    if not 0 < mean_entries < top_share * features:
        raise ValueError(
            f"mean_entries must lie between 0 and top_share * features = {top_share * features:g}"
        )
    shape = np.arange(1, features + 1, dtype=np.float64) ** -exponent

    def excess(log_c):
        return np.minimum(top_share, np.exp(log_c) * shape).sum() - mean_entries

    log_least = np.log(mean_entries / shape.sum()) - 1
    log_most = np.log(top_share / shape[-1])
    return np.minimum(top_share, np.exp(brentq(excess, log_least, log_most)) * shape)


def zipf_table(
    rows: int,
    features: int,
    entries_per_row: float,
    *,
    exponent: float = 1.0,
    top_share: float = 0.5,
    seed: int,
) -> csr_array:
    """A 0/1 table, CSR (rows, features): float64 ones, int32 ids, ascending within a row.

    Each entry is one with probability p_j, independently; p is `zipf_prevalences` in an order
    shuffled over the feature ids, so that an id tells nothing of its prevalence.
    """
    rng = np.random.default_rng(seed)
    prevalence = rng.permutation(
        zipf_prevalences(features, entries_per_row, exponent, top_share)
    )
    dense = prevalence > _DENSE_PREVALENCE
    counts = rng.binomial(rows, np.where(dense, 0.0, prevalence))
    keys = [_distinct_rows(counts, rows, rng)]
    for column in np.flatnonzero(dense):
        keys.append(column * rows + np.flatnonzero(rng.random(rows) < prevalence[column]))
    return _table_of(np.sort(np.concatenate(keys)), rows, features)


def planted_labels(
    X: csr_array, n_true: int, strength: float, base_rate: float = 0.5, *, seed: int
) -> Planted:
    """Labels drawn from a logistic model with n_true true features.

    Half of the true features are held by 20 to 50 % of the rows, half by 1 to 5 %, spread evenly
    over the prevalences of their band. Coefficients are +strength and -strength in turn; the
    intercept makes the mean probability base_rate. Raises ValueError where a band has too few
    features.
    """
    prevalence = _prevalence(X)
    common = _spread_over_band(prevalence, COMMON_BAND, (n_true + 1) // 2)
    rarer = _spread_over_band(prevalence, RARER_BAND, n_true // 2)
    coefficients = np.zeros(X.shape[1])
    for band in (common, rarer):
        coefficients[band] = strength * _signs_in_turn(len(band))
    return logistic_labels(X, coefficients, base_rate, seed=seed)


def equal_shares(X: csr_array, n_true: int) -> np.ndarray:
    """Coefficients, float64 (features,), of n_true features that 20 to 50 % of the rows hold.

    Spread evenly over the prevalences of that band, with signs in turn; each gives X @ coefficients
    a variance of 1/n_true. Raises ValueError where the band has too few features.
    """
    prevalence = _prevalence(X)
    true = _spread_over_band(prevalence, COMMON_BAND, n_true)
    held = prevalence[true]
    coefficients = np.zeros(X.shape[1])
    coefficients[true] = _signs_in_turn(n_true) / np.sqrt(n_true * held * (1 - held))
    return coefficients


def logistic_labels(X: csr_array, coefficients: np.ndarray, base_rate: float = 0.5, *,
                    seed: int) -> Planted:
    """Labels drawn from a logistic model; the intercept makes the mean probability base_rate."""
    scores = X @ coefficients
    intercept = brentq(lambda b: expit(scores + b).mean() - base_rate, -50, 50)
    drawn = np.random.default_rng(seed).random(X.shape[0])
    return Planted((drawn < expit(scores + intercept)).astype(np.float64), coefficients, intercept)


def linear_labels(X: csr_array, coefficients: np.ndarray, explained: float, *,
                  seed: int) -> tuple[np.ndarray, tuple[float, float]]:
    """Labels of mean 0 of which X @ coefficients explains this share of the variance; their range.

    Noise is normal. The range lies three standard deviations around the mean.
    """
    signal = X @ coefficients
    noise = signal.std() * math.sqrt(1 / explained - 1)
    drawn = np.random.default_rng(seed).normal(scale=noise, size=len(signal))
    reach = LABEL_DEVIATIONS * float(signal.std()) / math.sqrt(explained)
    return signal - signal.mean() + drawn, (-reach, reach)


def log_loss(y: np.ndarray, margin: np.ndarray) -> float:
    """Mean of ln(1 + exp(-+margin)) over rows, y in {0, 1}."""
    return float(np.logaddexp(0, np.where(y > 0, -margin, margin)).mean())


def _distinct_rows(counts: np.ndarray, rows: int, rng: np.random.Generator) -> np.ndarray:
    """Keys column * rows + row, ascending: counts[column] distinct rows, uniform among such sets.

    Rows are drawn with replacement and repeats are drawn again: no row is favoured, so every set
    of that size is as likely as any other.
    """
    keys = np.empty(0, dtype=np.int64)
    missing = counts
    while missing.any():
        columns = np.repeat(np.arange(len(counts)), missing)
        drawn = columns * rows + rng.integers(rows, size=len(columns))
        keys = _sorted_distinct(np.concatenate([keys, drawn]))
        missing = counts - np.bincount(keys // rows, minlength=len(counts))
    return keys


def _sorted_distinct(keys: np.ndarray) -> np.ndarray:
    keys.sort()
    return keys[np.diff(keys, prepend=-1) != 0]


def _table_of(keys: np.ndarray, rows: int, features: int) -> csr_array:
    columns, row_ids = np.divmod(keys, rows)
    starts = np.zeros(features + 1, dtype=np.int32)
    np.cumsum(np.bincount(columns, minlength=features), out=starts[1:])
    ones = np.ones(len(keys))
    table = csc_array((ones, row_ids.astype(np.int32), starts), shape=(rows, features))
    return table.tocsr()


def _prevalence(X: csr_array) -> np.ndarray:
    """The share of the rows that holds each feature."""
    return np.bincount(X.indices, minlength=X.shape[1]) / X.shape[0]


def _signs_in_turn(count: int) -> np.ndarray:
    return np.where(np.arange(count) % 2, -1.0, 1.0)


def _spread_over_band(prevalence: np.ndarray, band: tuple[float, float], count: int):
    """`count` feature ids, evenly spaced among those of this band in descending prevalence."""
    low, high = band
    inside = np.flatnonzero((prevalence >= low) & (prevalence <= high))
    if len(inside) < count:
        raise ValueError(
            f"only {len(inside)} features are held by {low:.0%} to {high:.0%} of the rows; "
            f"{count} are needed: ask for fewer true features or more entries per row"
        )
    inside = inside[np.argsort(-prevalence[inside], kind="stable")]
    return inside[np.linspace(0, len(inside) - 1, count).round().astype(np.int64)]
