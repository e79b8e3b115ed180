"""The textbook method to compare with: private Frank-Wolfe in numpy and scipy.

Talwar, Thakurta, Zhang, "Nearly-optimal private LASSO" (2015), Algorithm 2: at every step the
full gradient, fresh Laplace noise on each of the 2d vertices of the L1 ball, and a move to the
noisiest best one. For comparison only: its noise is floating-point and its generator is seeded.
"""

from __future__ import annotations

import math
from contextlib import contextmanager
from dataclasses import dataclass
from time import perf_counter

import numpy as np
from scipy.sparse import csc_array, csr_array, hstack
from scipy.special import expit

# Signed features noised at a time: two float64 blocks of this length stay in a second-level cache.
_BLOCK = 16_384
_TRIALS = 3
RADII = (0.3, 1.0, 3.0, 10.0, 30.0)     # to choose from


@dataclass(frozen=True)
class Prepared:
    """A table made ready for the solver.

    transposed  X.T in the orientation whose product with a vector was the faster one
    columns     X by columns, for the rows of one feature
    product     "csr" or "csc": the orientation of `transposed`
    products    seconds of one product in each orientation
    seconds     what making `columns` took
    """

    transposed: csr_array | csc_array
    columns: csc_array
    product: str
    products: dict[str, float]
    seconds: float


@dataclass(frozen=True)
class TextbookFit:
    """The fitted model and what it took.

    features, coefficients   int64 and float64 (k,), ascending ids
    intercept                the public constant it was given
    picks, signs             int64 (steps,): what each step moved to
    noise_scale              scale of the Laplace noise, in rows
    seconds                  by phase: derivative, gradient, noise, update
    """

    features: np.ndarray
    coefficients: np.ndarray
    intercept: float
    picks: np.ndarray
    signs: np.ndarray
    noise_scale: float
    seconds: dict[str, float]

    def margin(self, X) -> np.ndarray:
        dense = np.zeros(X.shape[1])
        dense[self.features] = self.coefficients
        return X @ dense + self.intercept


def laplace_scale(epsilon: float, delta: float, steps: int) -> float:
    """Scale of the noise on a score, in rows, for the whole of `steps` picks.

    With |x_ij| <= 1 and derivatives |q_i| <= 1 a row added or removed moves each score
    G_j = sum_i q_i x_ij by at most 1, so the least of the scores under Lap(2/e0) noise is
    e0-private. Advanced composition (Dwork and Roth 2014, Theorem 3.20, from memory) of T picks
    costs e0*sqrt(2T ln(1/delta)), its second-order term left out as in Talwar et al.; set equal
    to epsilon this gives 2/e0 = sqrt(8T ln(1/delta))/epsilon.
    """
    return math.sqrt(8 * steps * math.log(1 / delta)) / epsilon


def step_sizes(schedule: str, steps: int, radius: float) -> tuple[np.ndarray, np.ndarray]:
    """What is kept of all coefficients and how far the picked one moves, at every step.

    "shrinking" is w <- (1 - g)w + g*radius*vertex with g = 2/(t + 2), t = 0, 1, ..., so the first
    move goes all the way to a vertex (Jaggi 2013); "paced" is w <- w + (radius/steps)*vertex.
    """
    if schedule == "shrinking":
        share = 2 / (np.arange(steps) + 2)
        return 1 - share, radius * share
    if schedule == "paced":
        return np.ones(steps), np.full(steps, radius / steps)
    raise ValueError(f'schedule must be "shrinking" or "paced", not {schedule!r}')


def prepare(X: csr_array) -> Prepared:
    """Both orientations of X, and which of them multiplies faster here."""
    started = perf_counter()
    columns = X.tocsc()
    seconds = perf_counter() - started
    orientations = {"csr": columns.T, "csc": X.T}
    vector = np.linspace(-1, 1, X.shape[0])
    products = {name: _product_seconds(table, vector) for name, table in orientations.items()}
    product = min(products, key=products.get)
    return Prepared(orientations[product], columns, product, products, seconds)


def frank_wolfe(
    table: Prepared,
    y: np.ndarray,
    *,
    epsilon: float,
    delta: float,
    steps: int,
    radius: float,
    schedule: str = "shrinking",
    noise: str = "laplace",
    draw: str = "plain",
    intercept: float = 0.0,
    loss: str = "logistic",
    seed: int,
    stop_after: int | None = None,
) -> TextbookFit:
    """Private regression over the L1 ball of this radius, add-remove neighbours.

    y         (rows,): 0/1, or within [-1, 1] for squared loss; entries of the table are taken to
              lie within [-1, 1]
    loss      "logistic" or "squared": half the square, residuals clipped to [-1, 1], so that a row
              moves a score by at most 1 in either case
    noise     "laplace" or "none"
    draw      "plain": one call of `Generator.laplace` for all 2d scores; "blocks": noise made and
              searched block by block, by the inverse of its distribution, the fastest found in
              numpy
    stop_after  run only the first so many of the `steps` planned, to time a step
    """
    scale = _noise_scale(noise, epsilon, delta, steps)
    least_score, derivative = DRAWS[draw], DERIVATIVES[loss]
    kept, moves = (sizes[:stop_after] for sizes in step_sizes(schedule, steps, radius))
    rng = np.random.Generator(np.random.SFC64(seed))
    clock = _Clock()
    margin = np.full(len(y), float(intercept))
    picks, signs = np.zeros((2, len(moves)), dtype=np.int64)
    for t, (keep, move) in enumerate(zip(kept, moves)):
        with clock("derivative"):
            q = derivative(margin, y)
        with clock("gradient"):
            gradient = table.transposed @ q
        with clock("noise"):
            picks[t], signs[t] = least_score(gradient, scale, rng)
        with clock("update"):
            _move(margin, table.columns, picks[t], keep, signs[t] * move, intercept)
    features, coefficients = _coefficients(picks, signs * moves, kept)
    return TextbookFit(features, coefficients, intercept, picks, signs, scale, clock.seconds)


def as_planned(plan, table: Prepared, y: np.ndarray, *, radius: float, seed: int) -> TextbookFit:
    """The textbook's noise on the steps, the schedule and the loss of a Frank-Wolfe plan of ours.

    y  (rows,) labels as the plan's facts have them; numeric ones are brought to -1 to 1, so that
       residuals may be clipped to that
    """
    middle, half = label_scale(plan.facts.label)
    labels = np.clip((y - middle) / half, -1, 1)
    return frank_wolfe(
        table, labels, epsilon=plan.guarantee.epsilon, delta=plan.guarantee.delta,
        steps=plan.steps, radius=radius, schedule=plan.schedule, loss=plan.loss, draw="blocks",
        seed=seed,
    )


def label_scale(label: str | tuple[float, float]) -> tuple[float, float]:
    """Middle and half width of a numeric label's range; 0 and 1 for a binary label."""
    low, high = (-1.0, 1.0) if label == "binary" else label
    return (low + high) / 2, (high - low) / 2


def with_constant(X: csr_array, entry_bound: float = 1.0) -> csr_array:
    """Entries over their bound, and a last feature that every row has, to be an intercept."""
    return csr_array(hstack([X / entry_bound, np.ones((X.shape[0], 1))]))


def _logistic_derivative(margin: np.ndarray, y: np.ndarray) -> np.ndarray:
    q = expit(margin)
    q -= y
    return q


def _clipped_residual(margin: np.ndarray, y: np.ndarray) -> np.ndarray:
    q = margin - y
    return np.clip(q, -1, 1, out=q)


def _noise_scale(noise: str, epsilon: float, delta: float, steps: int) -> float:
    if noise == "laplace":
        return laplace_scale(epsilon, delta, steps)
    if noise == "none":
        return 0.0
    raise ValueError(f'noise must be "laplace" or "none", not {noise!r}')


def _least_in_blocks(scores: np.ndarray, scale: float, rng) -> tuple[int, int]:
    """argmin over features j and signs s of s*scores[j] + Lap(scale), as (j, s).

    u uniform on [-1/2, 1/2) gives Lap(scale) as -scale*sign(u)*log(1 - 2|u|).
    """
    uniform = np.empty((2, min(_BLOCK, len(scores))))
    noisy = np.empty_like(uniform)
    least, pick = math.inf, (0, 1)
    for start in range(0, len(scores), _BLOCK):
        block = scores[start : start + _BLOCK]
        u, v = (buffer.reshape(-1)[: 2 * len(block)].reshape(2, -1) for buffer in (uniform, noisy))
        rng.random(out=u)
        u -= 0.5
        np.abs(u, out=v)
        v *= -2
        v += 1
        np.log(v, out=v)
        v *= scale
        np.copysign(v, u, out=v)
        v[0] += block
        v[1] -= block
        at = v.argmin()
        sign_row, feature = divmod(at, len(block))
        if v[sign_row, feature] < least:
            least = v[sign_row, feature]
            pick = (start + feature, 1 - 2 * sign_row)
    return pick


def _least_plainly(scores: np.ndarray, scale: float, rng) -> tuple[int, int]:
    """The same law as `_least_in_blocks`, written with one call per operation."""
    noisy = rng.laplace(scale=scale, size=(2, len(scores)))
    noisy[0] += scores
    noisy[1] -= scores
    sign_row, feature = divmod(noisy.argmin(), len(scores))
    return feature, 1 - 2 * sign_row


def _move(margin, columns: csc_array, feature: int, keep: float, move: float, intercept: float):
    """margin <- intercept + keep*(margin - intercept) + move*X[:, feature], in place."""
    if keep != 1:
        margin *= keep
        margin += (1 - keep) * intercept
    entries = slice(columns.indptr[feature], columns.indptr[feature + 1])
    margin[columns.indices[entries]] += move * columns.data[entries]


def _coefficients(picks: np.ndarray, moves: np.ndarray, kept: np.ndarray):
    """Feature ids, ascending, and their coefficients after all steps."""
    kept_after = np.append(np.cumprod(kept[:0:-1])[::-1], 1.0)
    features, which = np.unique(picks, return_inverse=True)
    return features, np.bincount(which, weights=moves * kept_after)


DRAWS = {"plain": _least_plainly, "blocks": _least_in_blocks}
DERIVATIVES = {"logistic": _logistic_derivative, "squared": _clipped_residual}


def _product_seconds(table, vector: np.ndarray) -> float:
    seconds = []
    for _ in range(_TRIALS):
        started = perf_counter()
        table @ vector
        seconds.append(perf_counter() - started)
    return min(seconds)


class _Clock:
    """Adds up seconds by phase."""

    def __init__(self):
        self.seconds: dict[str, float] = {}

    @contextmanager
    def __call__(self, phase: str):
        started = perf_counter()
        yield
        self.seconds[phase] = self.seconds.get(phase, 0.0) + perf_counter() - started
