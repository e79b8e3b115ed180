"""From costs to (epsilon, delta) and back.

Every conversion is rounded to its safe side: an epsilon or a delta is not below the exact value of
its bound, and a budget or a noise scale keeps the guarantee it was made for.
"""

from __future__ import annotations

import math
import sys
from collections.abc import Callable, Iterable

import numpy as np
from scipy.special import erfcx, gammaln, ndtr, xlog1py, xlogy

from ..checks import checked_delta, nonnegative_number, positive_number, whole_number
from ..errors import InputError
from .curves import Cost

ROUNDING = 16 * sys.float_info.epsilon
TAIL_ROUNDING = 1e-12  # three times the largest relative error seen against 60-digit arithmetic
LEAST = math.ulp(0.0)
NODES, WEIGHTS = np.polynomial.legendre.leggauss(12)
LARGEST_LOG = 700.0
LARGEST_DISCRETE_VARIANCE = 1e12


def settled(value: float, direction: int, holds: Callable[[float], bool]) -> float:
    """`value`, moved up (+1) or down (-1) by growing relative steps until `holds(value)`."""
    step = sys.float_info.epsilon
    while not holds(value):
        value *= 1 + direction * step
        step *= 2
    return value


# zCDP. With a = alpha - 1, Canonne, Kamath and Steinke 2020 (Corollary 13) bound delta for every
# a > 0 by
#     ln delta = a (rho (1 + a) - epsilon) - a ln(1 + 1/a) - ln(1 + a),
# so whichever a is tried, the value is a valid bound; the best a only makes it tight. It is the
# only root of a monotone function, found over u = ln a.


def epsilon_of_zcdp(zcdp: float, delta: float) -> float:
    """The smallest epsilon at `delta` that rho-zCDP implies by the tight conversion.

    inf over alpha of rho*alpha + ln(1/(alpha*delta))/(alpha-1) + ln(1-1/alpha), never below 0;
    math.inf at delta = 0 unless zcdp is 0. Source: Canonne, Kamath and Steinke 2020.
    """
    zcdp, delta = nonnegative_number("zcdp", zcdp), checked_delta(delta)
    if zcdp == 0:
        return 0.0
    if delta == 0 or zcdp == math.inf:
        return math.inf
    a = _best_order_for_epsilon(zcdp, delta)
    terms = (zcdp, zcdp * a, -math.log(delta) / a, -math.log1p(a) / a, -math.log1p(1 / a))
    return max(0.0, math.fsum(terms) + ROUNDING * _magnitude(terms))


def zcdp_of_epsilon(epsilon: float, delta: float) -> float:
    """The largest rho for which epsilon_of_zcdp(rho, delta) <= epsilon; 0 at delta = 0."""
    epsilon, delta = nonnegative_number("epsilon", epsilon), checked_delta(delta)
    if delta == 0:
        return 0.0
    if epsilon == math.inf:
        return math.inf
    a = _best_order_for_zcdp(epsilon, delta)
    overhead = (-math.log(delta) - math.log1p(a)) / a - math.log1p(1 / a)
    zcdp = max(0.0, (epsilon - overhead) / (1 + a))
    return settled(zcdp, -1, lambda rho: epsilon_of_zcdp(rho, delta) <= epsilon)


def delta_of_zcdp(zcdp: float, epsilon: float) -> float:
    """The smallest delta at `epsilon` that rho-zCDP implies by the tight conversion, at most 1."""
    zcdp, epsilon = nonnegative_number("zcdp", zcdp), nonnegative_number("epsilon", epsilon)
    if zcdp == 0 or epsilon == math.inf:
        return 0.0
    if zcdp == math.inf:
        return 1.0
    a = _best_order_for_delta(zcdp, epsilon)
    terms = (a * zcdp, a * a * zcdp, -a * epsilon, -xlog1py(a, 1 / a), -math.log1p(a))
    return _exp_up(min(0.0, math.fsum(terms) + ROUNDING * _magnitude(terms)))


def _best_order_for_epsilon(zcdp: float, delta: float) -> float:
    log_zcdp, room = math.log(zcdp), -math.log(delta)

    def slope(u):  # rho a^2 + ln(1 + a) - ln(1/delta)
        return math.exp(2 * u + log_zcdp) + np.logaddexp(0, u) - room

    high = min((math.log(room) - log_zcdp) / 2, room)
    low = min((math.log(room / 2) - log_zcdp) / 2, math.log(room / 2))
    return _exp_of_root(slope, low - 1, high + 1)


def _best_order_for_zcdp(epsilon: float, delta: float) -> float:
    room, epsilon = -math.log(delta), min(epsilon, 1e200)

    def excess(u):  # epsilon where a is the best order, less the epsilon wanted
        zcdp = (room - np.logaddexp(0, u)) * math.exp(-2 * u)
        return zcdp * (1 + 2 * math.exp(u)) - np.logaddexp(0, -u) - epsilon

    low = 0.0
    while excess(low) < 0:
        low -= 4
    return _exp_of_root(excess, low, max(min(room, LARGEST_LOG), low))


def _best_order_for_delta(zcdp: float, epsilon: float) -> float:
    def slope(u):  # rho (1 + 2a) - epsilon - ln(1 + 1/a)
        return zcdp * (1 + 2 * math.exp(u)) - epsilon - np.logaddexp(0, -u)

    high = max(0.0, math.log(epsilon + 1) - math.log(zcdp))
    if epsilon > 0:  # a best order past this one gives an ln delta below -LARGEST_LOG anyway
        high = min(high, max(0.0, math.log(6 * LARGEST_LOG / epsilon)))
    return _exp_of_root(slope, -3 * zcdp - 1, min(high, LARGEST_LOG))


def _root(function: Callable[[float], float], low: float, high: float) -> float:
    from scipy.optimize import brentq  # a fifth of a second to load

    return brentq(function, low, high, xtol=1e-14, rtol=ROUNDING, maxiter=1000)


def _exp_of_root(function: Callable[[float], float], low: float, high: float) -> float:
    if (function(low) > 0) == (function(high) > 0):  # the best order is past the largest allowed
        return math.exp(min(high, LARGEST_LOG))
    root = _root(function, low, high)
    return math.exp(min(max(root, -LARGEST_LOG), LARGEST_LOG))


def _magnitude(terms: Iterable[float]) -> float:
    return math.fsum(map(abs, terms))


def _exp_up(log_value: float) -> float:
    """exp, but at least e^-LARGEST_LOG: a positive delta never underflows to 0."""
    return math.exp(max(log_value, -LARGEST_LOG))


# The Gaussian mechanism.


def gaussian_delta(sigma: float, sensitivity: float, epsilon: float) -> float:
    """The exact delta at `epsilon` of Gaussian noise of standard deviation sigma.

    sigma and sensitivity share a unit. Source: Balle and Wang 2018, Theorem 8,
    Phi(m - s) - e^epsilon Phi(-m - s) with m = Delta/(2 sigma), s = epsilon sigma/Delta.
    """
    ratio = positive_number("sensitivity", sensitivity) / positive_number("sigma", sigma)
    epsilon = nonnegative_number("epsilon", epsilon)
    return _gaussian_profile(ratio / 2, epsilon / ratio)


def _gaussian_profile(m: float, s: float) -> float:
    # e^epsilon phi(-m - s) = phi(m - s), hence delta = phi(m - s) (R(s - m) - R(s + m)) with the
    # Mills ratio R; for small m the difference is the integral of -R'(u) = 1 - u R(u).
    if m - s > 1:
        return _rounded_up(ndtr(m - s) - _density(m - s) * _mills(s + m))
    if m > 0.1:
        difference = _mills(s - m) - _mills(s + m)
    else:
        u = s + m * NODES
        difference = m * np.dot(WEIGHTS, 1 - u * _mills(u))
    return _rounded_up(_density(m - s) * difference)


def _rounded_up(tail: float) -> float:
    return min(1.0, max(LEAST, float(tail) * (1 + TAIL_ROUNDING)))


def _density(x: float) -> float:
    return math.exp(-x * x / 2) / math.sqrt(2 * math.pi)


def _mills(x):
    return math.sqrt(math.pi / 2) * erfcx(x / math.sqrt(2))


def gaussian_sigma(epsilon: float, delta: float, sensitivity: float) -> float:
    """The smallest standard deviation of Gaussian noise that keeps (epsilon, delta).

    In the unit of sensitivity. Source: Balle and Wang 2018, Algorithm 1 (solved by bracketing).
    Raises InputError at delta = 0, which no Gaussian noise keeps.
    """
    epsilon, delta = nonnegative_number("epsilon", epsilon), checked_delta(delta)
    sensitivity = positive_number("sensitivity", sensitivity)
    if delta == 0:
        raise InputError("delta must be above 0 for Gaussian noise, which has no pure guarantee")

    def excess(log_sigma):
        return math.log(gaussian_delta(math.exp(log_sigma), 1.0, epsilon)) - math.log(delta)

    high = 0.0
    while excess(high) > 0:
        high += 2
    low = high - 2
    while excess(low) <= 0:
        low -= 2
    sigma = sensitivity * math.exp(_root(excess, low, high))
    return settled(sigma, +1, lambda s: gaussian_delta(s, sensitivity, epsilon) <= delta)


def discrete_gaussian_delta(epsilon: float, sigma_squared: float, sensitivity: int) -> float:
    """The exact delta at `epsilon` of discrete Gaussian noise on an integer of this sensitivity.

    Source: Canonne, Kamath and Steinke 2020, Theorem 7: P[Y > c] - e^epsilon P[Y > c + Delta] with
    c = epsilon sigma^2/Delta - Delta/2, summed here term by term, so that nothing cancels. Takes
    time in proportion to sigma; raises InputError where sigma_squared is above 1e12.
    """
    epsilon = nonnegative_number("epsilon", epsilon)
    sigma_squared = positive_number("sigma_squared", sigma_squared)
    sensitivity = whole_number("sensitivity", sensitivity, 1)
    if sigma_squared > LARGEST_DISCRETE_VARIANCE:
        raise InputError(
            f"sigma_squared must be at most {LARGEST_DISCRETE_VARIANCE:g} for an exact sum, "
            f"not {sigma_squared:g}; delta_of_zcdp bounds what lies beyond"
        )
    threshold = epsilon * sigma_squared / sensitivity - sensitivity / 2
    reach = 160 * sigma_squared  # beyond it a weight is e^-80 of the one at the threshold
    if threshold < 0 and threshold**2 > reach:
        return 1.0
    if threshold**2 > 2 * LARGEST_LOG * sigma_squared:
        return math.exp(-LARGEST_LOG)
    first = math.floor(threshold) + 1
    last = max(first, math.ceil(math.sqrt(max(threshold, 0) ** 2 + reach))) + 1
    y = np.arange(first, last + 1, dtype=np.float64)
    gain = -np.expm1(epsilon - sensitivity * (2 * y + sensitivity) / (2 * sigma_squared))
    weights = np.exp(-(y**2) / (2 * sigma_squared))
    tail = weights[-1] / math.expm1(min(last / sigma_squared, LARGEST_LOG))
    total = np.dot(weights, np.maximum(gain, 0)) + tail
    return _rounded_up(total / _discrete_normaliser(sigma_squared))


def _discrete_normaliser(sigma_squared: float) -> float:
    """The sum over the integers of exp(-y^2 / (2 sigma^2))."""
    if sigma_squared > 9:  # Poisson summation: the rest is below 2 exp(-2 pi^2 sigma^2)
        return math.sqrt(2 * math.pi * sigma_squared)
    y = np.arange(1, 40)
    return 1 + 2 * float(np.exp(-(y**2) / (2 * sigma_squared)).sum())


# Picks: bounds beside the plain zCDP route, for analysis.


def bounded_range_zcdp(eta: float) -> float:
    """The exact zCDP cost of an eta-bounded-range mechanism: x - 1 - ln x, x = eta/(1 - e^-eta).

    It is the largest Kullback-Leibler divergence of the worst pair (Dong, Durfee and Rogers 2020).
    """
    eta = nonnegative_number("eta", eta)
    if eta < 0.05:  # the alternating series, cut after a positive term
        half_squared = eta * eta / 4
        return half_squared / 2 - half_squared**2 / 36 + half_squared**3 / 405
    excess = (eta + math.expm1(-eta)) / -math.expm1(-eta)
    return excess - math.log1p(excess)


def nonadaptive_pick_delta(epsilon: float, eta: float, k: int) -> float:
    """The exact delta at `epsilon` of k picks fixed in advance, each eta-bounded-range.

    A lower bound, for reference, on what k picks chosen one after the other give away.
    Source: Dong, Durfee and Rogers 2020. Takes time and memory in proportion to k^2.
    """
    epsilon, eta = nonnegative_number("epsilon", epsilon), positive_number("eta", eta)
    k = whole_number("k", k, 1)
    i = np.arange(k + 1)
    t = ((epsilon + (i + 1) * eta) / (k + 1))[:, None]
    t = t[(0 < t) & (t < eta)][:, None]
    if not t.size:
        return 0.0
    high = np.expm1(t - eta) / math.expm1(-eta)
    low = np.expm1(t) / math.expm1(eta)
    choose = gammaln(k + 1) - gammaln(i + 1) - gammaln(k - i + 1)
    probability = np.exp(choose + xlogy(k - i, high) + xlogy(i, low))
    gain = -np.expm1(np.minimum(epsilon - (k * t - i * eta), 0))
    return float((probability * gain).sum(axis=1).max())


def advanced_epsilon(eta: float, k: int, delta: float) -> float:
    """Advanced composition of k eta-DP steps: eta sqrt(2k ln(1/delta)) + k eta (e^eta - 1).

    Source: Dwork and Roth 2014, Theorem 3.20. math.inf at delta = 0.
    """
    eta, k, delta = nonnegative_number("eta", eta), whole_number("k", k, 1), checked_delta(delta)
    if delta == 0:
        return math.inf
    return eta * math.sqrt(-2 * k * math.log(delta)) + k * eta * math.expm1(eta)


# Composition.


def composed_epsilon(costs: Iterable[Cost], delta: float) -> float:
    """The smallest epsilon at `delta` of these mechanisms together; math.inf where there is none.

    See epsilon_and_route for the ways it may be reached.
    """
    return epsilon_and_route(costs, delta)[0]


def epsilon_and_route(costs: Iterable[Cost], delta: float) -> tuple[float, str]:
    """The smallest epsilon at `delta` of these mechanisms together, and how it is reached.

    "pure"         every part has a pure guarantee, and those add up
    "zcdp"         everything adds up in zCDP and is then converted
    "pure + zcdp"  the parts with a pure guarantee add up, the rest adds up in zCDP and is
                   converted at delta, and the two epsilons add up (basic composition)
    """
    costs, delta = list(costs), checked_delta(delta)
    pure = [cost for cost in costs if cost.pure < math.inf]
    rest = [cost for cost in costs if cost.pure == math.inf]
    added = math.fsum(cost.pure for cost in pure)
    routes = [(epsilon_of_zcdp(_total_zcdp(costs), delta), "zcdp")]
    if not rest:
        routes.insert(0, (added, "pure"))
    elif pure:
        routes.append((added + epsilon_of_zcdp(_total_zcdp(rest), delta), "pure + zcdp"))
    return min(routes, key=lambda route: route[0])


def _total_zcdp(costs: Iterable[Cost]) -> float:
    return math.fsum(cost.zcdp for cost in costs)
