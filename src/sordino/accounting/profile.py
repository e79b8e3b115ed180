"""How much adaptive picks really give away: certified bounds around the exact optimum."""

from __future__ import annotations

import math

import numpy as np

from ..checks import checked_delta, nonnegative_number, positive_number, whole_number
from ..errors import InputError
from .convert import composed_epsilon, gaussian_delta
from .curves import Cost, pick_cost

ROUNDING = 2.0**-48
START_ROUNDING = 1e-11  # the Gaussian profile is rounded up by less


def adaptive_pick_epsilon_bounds(
    eta: float, k: int, delta: float, m: int = 80, gaussian_zcdp: float = 0.0
) -> tuple[float, float]:
    """(lower, upper) around the smallest epsilon at `delta` of k adaptive eta-bounded-range picks.

    With gaussian_zcdp = rho above 0 the picks are followed by one Gaussian release of cost rho.
    The upper value exceeds the optimum by about one part in m, the lower one falls short by about
    eta/m; time grows as m^2 k^1.5.
    Raises InputError at delta = 0.

    The recursion (after the two-point reduction of Dong, Durfee and Rogers 2020). Let d_j(x) be
    the largest P(S) - e^x Q(S) that any adaptive choice of the last j picks (and the Gaussian
    release) allows.

    1. d_j(x) as a function of r = e^x is a supremum of affine functions of r with slopes in
       [-1, 0]: it is convex and falls.
    2. Let the first of j picks give y with loss L(y) = ln P(y)/Q(y). What the rest can add is
       P(y) d_{j-1}(x - L(y)), so d_j(x) is the supremum over picks of E_P[d_{j-1}(x - L)]. Bounded
       range says that L lies in [t - eta, t] for some t; as E_P[e^-L] = 1, t is in [0, eta].
    3. By (1), d_{j-1}(x - L) is convex in e^-L, whose mean is 1. Moving the mass of a variable of
       given mean to the ends of its interval raises the mean of a convex function, hence
       d_j(x) = max over t of q d_{j-1}(x - t) + (1 - q) d_{j-1}(x - t + eta), where
       q = (1 - e^(t-eta)) / (1 - e^-eta) makes that mean 1; and this pair has bounded range.
    4. d_0(x) = (1 - e^x)_+, or the Gaussian profile of Balle and Wang 2018.

    Lower: with h = eta/m and t among 0, h, ..., mh every x stays a multiple of h, and some of the
    choices of t can only give a smaller maximum.

    Upper: the same grid with m + 1 cells. For any t in [0, eta] let t' be the next multiple of h
    at or above t, and eta' = eta + h. Since t' >= t and eta' - t' > eta - t, the interval
    [t' - eta', t'] contains [t - eta, t]; by (3), on a wider interval with the same mean the two
    ends give a mean at least as large. So the maximum over t' in {0, h, ..., mh} of the two-point
    mean with eta' is at least d_j(x), and by induction it stays so with upper values of d_{j-1}
    in place of exact ones, their weights being at least 0. Between grid points the chord in e^x
    is an upper value, by (1).

    Off the grid: swapping P and Q leaves the class of picks as it is, hence
    d_j(-x) = 1 - e^-x + e^-x d_j(x), which gives all x < 0. Beyond the right end d_j falls (upper)
    and is at least 0 (lower). Rounding is outdone at every step.
    """
    eta, k, delta = positive_number("eta", eta), whole_number("k", k, 1), checked_delta(delta)
    m, gaussian_zcdp = whole_number("m", m, 1), nonnegative_number("gaussian_zcdp", gaussian_zcdp)
    if delta == 0:
        raise InputError("delta must be above 0; at delta = 0 the epsilons of the picks add up")
    h = eta / m
    cost = pick_cost(eta).times(k) + Cost(gaussian_zcdp, math.inf if gaussian_zcdp else 0.0)
    ceiling = composed_epsilon([cost], delta)
    loss_deviation = math.sqrt(2 * cost.zcdp)
    x = h * np.arange(math.ceil((ceiling + 3 * loss_deviation) / h) + 2 * m + 2)
    start = _profile_without_picks(x, gaussian_zcdp)
    lower = _after_picks(start, x, k, cells=m, safe_side=-1)
    upper = _after_picks(start, x, k, cells=m + 1, safe_side=+1)
    return _crossing_below(x, lower, delta), min(ceiling, _crossing_above(x, upper, delta))


def _profile_without_picks(x: np.ndarray, gaussian_zcdp: float) -> np.ndarray:
    if gaussian_zcdp == 0:
        return np.zeros(len(x))
    sigma = 1 / math.sqrt(2 * gaussian_zcdp)
    return np.array([gaussian_delta(sigma, 1.0, epsilon) for epsilon in x])


def _after_picks(start, x, k, cells, safe_side):
    """d_k on the grid x, which starts at 0; rounded up (safe_side +1) or down (-1)."""
    n, t, eta = len(x), x[:cells], x[cells]
    high = np.expm1(t - eta) / np.expm1(-eta)
    low = np.expm1(t) / np.expm1(eta)
    mirror = -x[cells:0:-1]
    nudge = 1 + safe_side * ROUNDING
    padded = np.zeros(n + 2 * cells)
    left, inside, right = np.split(padded, [cells, cells + n])
    inside[:] = np.minimum(start * (1 + safe_side * START_ROUNDING), 1)
    first, second = np.empty(n), np.empty(n)
    for _ in range(k):
        reflected = np.exp(mirror) * inside[cells:0:-1] - np.expm1(mirror)
        left[:] = np.minimum(reflected * nudge, 1)
        if safe_side > 0:
            right[:] = inside[-1]
        best = inside.copy()
        for i in range(1, cells):
            np.multiply(padded[cells - i : cells - i + n], high[i], out=first)
            np.multiply(padded[2 * cells - i : 2 * cells - i + n], low[i], out=second)
            np.add(first, second, out=first)
            np.maximum(best, first, out=best)
        np.minimum(best * nudge, 1, out=inside)
    return inside


def _crossing_below(x, lower, delta):
    """The last grid point that is certainly too small; 0 if there is none."""
    above = np.flatnonzero(lower > delta)
    return float(x[above[-1]]) if len(above) else 0.0


def _crossing_above(x, upper, delta):
    """Where the chord in e^x falls to delta; math.inf if the grid ends above it."""
    above = np.flatnonzero(upper > delta)
    if not len(above):
        return 0.0
    i = above[-1]
    if i + 1 == len(x):
        return math.inf
    share = (upper[i] - delta) / (upper[i] - upper[i + 1])
    return float(x[i] + math.log1p(share * math.expm1(x[i + 1] - x[i]))) * (1 + ROUNDING)
