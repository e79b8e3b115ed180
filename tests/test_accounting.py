"""Privacy accounting against published formulas, independent arithmetic, and its own promises.

Check values: computed for this project with multi-precision arithmetic or brute force from the
formula of the source named beside them. Formulas marked "from memory" were written down from
memory of the source.
"""

import math

import mpmath
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from sordino.accounting import (
    Cost,
    adaptive_pick_epsilon_bounds,
    advanced_epsilon,
    bounded_range_zcdp,
    calibrate_picks,
    composed_epsilon,
    delta_of_zcdp,
    discrete_gaussian_delta,
    epsilon_and_route,
    epsilon_of_zcdp,
    gaussian_cost,
    gaussian_delta,
    gaussian_sigma,
    laplace_cost,
    nonadaptive_pick_delta,
    pick_cost,
    textbook_pick_epsilon,
    zcdp_of_epsilon,
)
from sordino.errors import InputError

DELTA = 1e-6
repeatable = settings(max_examples=100, deadline=None, derandomize=True)


def log_uniform(low, high):
    return st.floats(math.log(low), math.log(high)).map(math.exp)


rhos = log_uniform(1e-12, 1e4)
epsilons = log_uniform(1e-4, 1e4)
deltas = log_uniform(1e-15, 0.5)
pure_costs = st.builds(Cost, log_uniform(1e-8, 10), log_uniform(1e-6, 10))
noisy_costs = log_uniform(1e-8, 10).map(lambda rho: Cost(rho, math.inf))
cost_lists = st.lists(st.one_of(pure_costs, noisy_costs), max_size=5)


def printed(text):
    """(value, half a unit of the last digit) of a decimal as it is printed."""
    digits, _, exponent = text.partition("e")
    places = len(digits.partition(".")[2])
    return float(text), 0.5 * 10.0 ** (int(exponent or 0) - places) * (1 + 1e-6)


def assert_printed_as(value, text):
    expected, half_unit = printed(text)
    assert abs(value - expected) <= half_unit


# zCDP to (epsilon, delta). Source: Canonne, Kamath and Steinke 2020 (from memory).

ZCDP_TO_EPSILON = [
    (0.001, 1e-6, "0.18289537719"),
    (0.01, 1e-5, "0.54572554827"),
    (0.01, 1e-6, "0.62169265456"),
    (0.01, 1e-9, "0.81017446787"),
    (0.05, 1e-6, "1.4715947505"),
    (0.1, 1e-5, "1.914238832"),
    (0.1, 1e-6, "2.1419389284"),
    (0.5, 1e-6, "5.2215344445"),
    (1, 1e-5, "7.0771966958"),
    (1, 1e-6, "7.7662166253"),
    (1, 1e-9, "9.5214636718"),
    (10, 1e-6, "32.221660949"),
]
EPSILON_TO_ZCDP = [
    (0.5, "0.006641524357"),
    (1, "0.02435597036"),
    (2, "0.08815268838"),
    (4, "0.3110649549"),
    (8, "1.052358005"),
]


@pytest.mark.parametrize("zcdp, delta, epsilon", ZCDP_TO_EPSILON)
def test_epsilon_of_zcdp_check_values(zcdp, delta, epsilon):
    assert_printed_as(epsilon_of_zcdp(zcdp, delta), epsilon)
    assert delta_of_zcdp(zcdp, float(epsilon)) == pytest.approx(delta, rel=1e-8)


@pytest.mark.parametrize("epsilon, zcdp", EPSILON_TO_ZCDP)
def test_zcdp_of_epsilon_check_values(epsilon, zcdp):
    assert_printed_as(zcdp_of_epsilon(epsilon, DELTA), zcdp)


def exact_epsilon(zcdp, delta):
    """The infimum over orders in 50-digit arithmetic, by golden section over ln(alpha - 1)."""
    with mpmath.workdps(50):
        rho, d = mpmath.mpf(zcdp), mpmath.mpf(delta)

        def epsilon(u):
            a = mpmath.exp(u)
            return rho * (1 + a) - mpmath.log((1 + a) * d) / a + mpmath.log(a / (1 + a))

        low, high = mpmath.mpf(-60), mpmath.mpf(60)
        golden = (mpmath.sqrt(5) - 1) / 2
        for _ in range(180):
            left, right = high - golden * (high - low), low + golden * (high - low)
            low, high = (low, right) if epsilon(left) < epsilon(right) else (left, high)
        return max(mpmath.mpf(0), epsilon((low + high) / 2))


@pytest.mark.parametrize("zcdp", [1e-12, 1e-7, 1e-3, 1.0, 1e4])
@pytest.mark.parametrize("delta", [1e-12, 1e-5, 0.3])
def test_conversion_is_tight_and_never_below_the_infimum(zcdp, delta):
    exact, found = exact_epsilon(zcdp, delta), epsilon_of_zcdp(zcdp, delta)
    assert exact <= found <= exact * (1 + 1e-12) + 1e-20


def test_conversion_at_the_ends():
    assert epsilon_of_zcdp(0, 0) == epsilon_of_zcdp(0, DELTA) == 0
    assert epsilon_of_zcdp(0.1, 0) == epsilon_of_zcdp(math.inf, DELTA) == math.inf
    assert zcdp_of_epsilon(1, 0) == 0
    assert delta_of_zcdp(0, 1) == 0
    assert delta_of_zcdp(math.inf, 1) == 1
    assert 0 < delta_of_zcdp(1e-12, 50) < 1e-300


@repeatable
@given(rhos, rhos, deltas, deltas)
def test_epsilon_of_zcdp_is_monotone(rho, more, delta, less):
    rho, more, less, delta = *sorted((rho, more)), *sorted((delta, less))
    slack = 1 + 1e-13
    assert epsilon_of_zcdp(rho, delta) <= epsilon_of_zcdp(more, delta) * slack
    assert epsilon_of_zcdp(rho, delta) <= epsilon_of_zcdp(rho, less) * slack


@repeatable
@given(epsilons, deltas)
def test_zcdp_of_epsilon_is_safe_and_tight(epsilon, delta):
    rho = zcdp_of_epsilon(epsilon, delta)
    assert epsilon_of_zcdp(rho, delta) <= epsilon
    assert epsilon_of_zcdp(rho * (1 + 1e-9), delta) > epsilon


@repeatable
@given(log_uniform(1e-6, 1e3), deltas)
def test_delta_of_zcdp_inverts_the_conversion_from_above(rho, delta):
    epsilon = epsilon_of_zcdp(rho, delta)
    back = delta_of_zcdp(rho, epsilon)
    if epsilon > 0:
        assert delta * (1 - 1e-9) <= back <= delta * (1 + 1e-9)
    assert back >= delta_of_zcdp(rho, epsilon * 1.01)


# The Gaussian mechanism. Source: Balle and Wang 2018, Theorem 8 (from memory).

GAUSSIAN_SIGMAS = [
    (0.1, 1e-5, 1, "30.749566132"),
    (0.5, 1e-5, 1, "7.03182667558"),
    (0.5, 1e-6, 1, "8.05761848073"),
    (1, 1e-5, 1, "3.73063163482"),
    (1, 1e-6, 1, "4.22467888933"),
    (1, 1e-9, 1, "5.49526615724"),
    (2, 1e-6, 1, "2.23047627119"),
    (4, 1e-6, 1, "1.19351858716"),
    (8, 1e-6, 1, "0.652935384358"),
    (10, 1e-5, 1, "0.499888619709"),
    (1, 1e-6, 2, "8.44935777865"),
    (3, 1e-8, 0.5, "0.909321471477"),
]


@pytest.mark.parametrize("epsilon, delta, sensitivity, sigma", GAUSSIAN_SIGMAS)
def test_gaussian_sigma_check_values(epsilon, delta, sensitivity, sigma):
    assert_printed_as(gaussian_sigma(epsilon, delta, sensitivity), sigma)


def test_the_conversion_is_not_optimal_for_gaussian_noise():
    # rho = 0.05 at delta 1e-6: 1.4716 by the conversion, 1.3676 by Balle and Wang 2018
    sigma = 1 / math.sqrt(2 * 0.05)
    assert gaussian_delta(sigma, 1, 1.36765) <= DELTA <= gaussian_delta(sigma, 1, 1.36755)


@pytest.mark.parametrize("sigma", [0.05, 0.7, 4.9, 5.1, 300.0, 1e6])
@pytest.mark.parametrize("epsilon", [0.0, 1e-7, 1e-3, 0.4, 5.0, 60.0])
def test_gaussian_delta_against_multi_precision(sigma, epsilon):
    with mpmath.workdps(60):
        m, s = 1 / (2 * mpmath.mpf(sigma)), mpmath.mpf(epsilon) * mpmath.mpf(sigma)
        exact = mpmath.ncdf(m - s) - mpmath.exp(epsilon) * mpmath.ncdf(-m - s)
        found = gaussian_delta(sigma, 1, epsilon)
        assert exact * (1 - mpmath.mpf(10) ** -15) <= found
        assert found <= exact * (1 + mpmath.mpf(10) ** -11) or found == math.ulp(0.0)


@repeatable
@given(epsilons, deltas, log_uniform(1e-3, 1e3))
def test_gaussian_sigma_is_safe_and_tight(epsilon, delta, sensitivity):
    sigma = gaussian_sigma(epsilon, delta, sensitivity)
    assert gaussian_delta(sigma, sensitivity, epsilon) <= delta
    assert gaussian_delta(sigma * (1 - 1e-9), sensitivity, epsilon) > delta


# The discrete Gaussian. Source: Canonne, Kamath and Steinke 2020, Theorem 7 (from memory).

DISCRETE_GAUSSIAN_DELTAS = [
    (1, 1, 1, "0.141351339406"),
    (1, 16, 1, "3.05545464927e-6"),
    (0.5, 100, 1, "6.93437034752e-9"),
    (1, 25, 2, "1.31843552874e-3"),
    (2, 4, 1, "1.07409010334e-5"),
]


def brute_discrete_gaussian_delta(epsilon, sigma_squared, sensitivity):
    """sum over y of (p(y) - e^epsilon p(y + sensitivity))_+, in 40-digit arithmetic."""
    with mpmath.workdps(40):
        reach = int(16 * math.sqrt(sigma_squared) + epsilon * sigma_squared) + sensitivity + 9
        weight = {
            y: mpmath.exp(-mpmath.mpf(y * y) / (2 * mpmath.mpf(sigma_squared)))
            for y in range(-reach, reach + sensitivity + 1)
        }
        factor = mpmath.exp(mpmath.mpf(epsilon))
        gains = (weight[y] - factor * weight[y + sensitivity] for y in range(-reach, reach + 1))
        return mpmath.fsum(max(gain, 0) for gain in gains) / mpmath.fsum(weight.values())


@pytest.mark.parametrize("epsilon, sigma_squared, sensitivity, delta", DISCRETE_GAUSSIAN_DELTAS)
def test_discrete_gaussian_delta_check_values(epsilon, sigma_squared, sensitivity, delta):
    assert_printed_as(discrete_gaussian_delta(epsilon, sigma_squared, sensitivity), delta)


@pytest.mark.parametrize(
    "case",
    [case[:3] for case in DISCRETE_GAUSSIAN_DELTAS]
    + [(0, 0.3, 1), (3, 0.01, 1), (0.1, 400, 30), (0, 900, 1), (0.01, 20.5, 7), (1, 2, 50)],
)
def test_discrete_gaussian_delta_by_brute_sum(case):
    exact = brute_discrete_gaussian_delta(*case)
    assert exact * (1 - 1e-14) <= discrete_gaussian_delta(*case) <= exact * (1 + 1e-11)


def test_discrete_gaussian_delta_tends_to_the_continuous_one():
    assert discrete_gaussian_delta(1e-4, 1e10, 50) == pytest.approx(
        gaussian_delta(1e5, 50, 1e-4), rel=1e-8
    )
    assert 0 < discrete_gaussian_delta(10, 1e4, 1) < 1e-300
    with pytest.raises(InputError, match="sigma_squared"):
        discrete_gaussian_delta(1, 1e13, 1)


# Picks. Sources: Cesar and Rogers 2021; Dong, Durfee and Rogers 2020 (from memory).

BOUNDED_RANGE_ZCDP = [
    (0.1, "0.00124982642746"),
    (0.5, "0.0311420922612"),
    (1, "0.123301561482"),
    (2, "0.474474647071"),
    (4, "1.66984963351"),
]

# k, eta, advanced composition (Dwork and Roth 2014, Theorem 3.20, from memory), zCDP,
# non-adaptive optimum, certified bounds of the adaptive optimum; delta 1e-6
COMPOSITIONS = [
    (10, 0.01, "0.1672", "0.06052", "0.05457", 0.05485, 0.05494),
    (10, 0.05, "0.8568", "0.33493", "0.30188", 0.30381, 0.30425),
    (10, 0.2, "3.767", "1.4716", "1.3159", 1.3283, 1.3303),
    (100, 0.01, "0.5357", "0.20590", "0.18891", 0.18930, 0.19000),
    (100, 0.05, "2.885", "1.1429", "1.0577", 1.0600, 1.0638),
    (100, 0.2, "14.94", "5.2215", "4.8620", 4.8729, 4.8920),
    (400, 0.01, "1.092", "0.42994", "0.39666", 0.39694, 0.39980),
    (400, 0.05, "6.282", "2.4191", "2.2521", 2.2538, 2.2703),
    (400, 0.2, "38.74", "11.689", "10.975", 10.984, 11.073),
]


@pytest.mark.parametrize("eta, zcdp", BOUNDED_RANGE_ZCDP)
def test_bounded_range_zcdp_check_values(eta, zcdp):
    assert_printed_as(bounded_range_zcdp(eta), zcdp)


@pytest.mark.parametrize("eta", [1e-9, 1e-3, 0.0499, 0.0501, 0.7, 30.0])
def test_bounded_range_zcdp_against_multi_precision(eta):
    with mpmath.workdps(50):
        x = mpmath.mpf(eta) / -mpmath.expm1(-mpmath.mpf(eta))
        assert bounded_range_zcdp(eta) == pytest.approx(float(x - 1 - mpmath.log(x)), rel=1e-12)
    assert bounded_range_zcdp(eta) <= pick_cost(eta).zcdp


@pytest.mark.parametrize("k, eta, advanced, zcdp, nonadaptive, low, high", COMPOSITIONS)
def test_composition_check_values(k, eta, advanced, zcdp, nonadaptive, low, high):
    assert_printed_as(advanced_epsilon(eta, k, DELTA), advanced)
    assert_printed_as(composed_epsilon([pick_cost(eta).times(k)], DELTA), zcdp)
    value, half_unit = printed(nonadaptive)
    assert nonadaptive_pick_delta(value - half_unit, eta, k) > DELTA
    assert nonadaptive_pick_delta(value + half_unit, eta, k) < DELTA


@pytest.mark.parametrize("k, eta, advanced, zcdp, nonadaptive, low, high", COMPOSITIONS)
def test_adaptive_bounds_check_values(k, eta, advanced, zcdp, nonadaptive, low, high):
    m = {10: 600, 100: 150, 400: 80}[k]
    lower, upper = adaptive_pick_epsilon_bounds(eta, k, DELTA, m)
    last_digit = 2 * printed(nonadaptive)[1]
    assert low - eta / m - last_digit <= lower <= high + last_digit
    assert low - last_digit <= upper <= float(zcdp)
    assert lower >= float(nonadaptive) - eta / m - last_digit
    assert upper <= lower * (1 + 2 / m) + eta / m


@pytest.mark.parametrize("m, upper", [(20, 1.1175), (40, 1.0888), (80, 1.0744), (150, 1.0677)])
def test_adaptive_upper_bound_by_grid(m, upper):
    # k = 100, eta = 0.05; the reference figures are rounded up to the grid
    step = 0.05 / m
    found = adaptive_pick_epsilon_bounds(0.05, 100, DELTA, m)[1]
    assert math.ceil(found / step) * step == pytest.approx(upper, abs=0.00006)


def test_adaptive_bounds_with_a_gaussian_release():
    # half of rho = 0.02436 to 200 picks, half to a Gaussian release: 0.927 to 0.932; zCDP 1.000
    rho = zcdp_of_epsilon(1, DELTA)
    lower, upper = adaptive_pick_epsilon_bounds(math.sqrt(4 * rho / 200), 200, DELTA, 80, rho / 2)
    assert 0.926 <= lower <= 0.932
    assert 0.927 <= upper <= 0.934


@pytest.mark.parametrize("eta, epsilon", [(0.3, 0.1), (1.0, 0.5), (2.0, 0.0)])
def test_adaptive_bounds_hold_the_closed_form_of_one_pick(eta, epsilon):
    # sup over t of q (1 - e^(epsilon-t)) is reached at t = (epsilon + eta)/2
    delta = math.expm1((epsilon - eta) / 2) ** 2 / -math.expm1(-eta)
    assert nonadaptive_pick_delta(epsilon, eta, 1) == pytest.approx(delta, rel=1e-12)
    lower, upper = adaptive_pick_epsilon_bounds(eta, 1, delta, 200)
    assert epsilon - 2 * eta / 200 <= lower <= epsilon + 1e-9
    assert epsilon - 1e-9 <= upper <= epsilon + 2 * eta / 200


def test_adaptive_bounds_hold_a_search_over_two_picks():
    """The optimum over second picks that depend on the first, found without any grid on x."""
    eta, epsilon = 0.5, 0.3
    t = np.linspace(0, eta, 4001)
    high = np.expm1(t - eta) / np.expm1(-eta)

    def one_pick(x):
        gain = high * np.maximum(-np.expm1(x - t), 0)
        return (gain + (1 - high) * np.maximum(-np.expm1(x - t + eta), 0)).max()

    first = range(0, 4001, 20)
    delta = max(
        high[i] * one_pick(epsilon - t[i]) + (1 - high[i]) * one_pick(epsilon - t[i] + eta)
        for i in first
    )
    lower, upper = adaptive_pick_epsilon_bounds(eta, 2, delta, 400)
    assert epsilon - 0.005 <= lower <= epsilon + 1e-4
    assert epsilon - 1e-4 <= upper <= epsilon + 0.005


# Costs of single mechanisms.


def test_costs_of_mechanisms():
    assert pick_cost(0.4) == Cost(0.4**2 / 8, 0.4)  # Cesar and Rogers 2021
    assert gaussian_cost(3, 50) == Cost(0.09, math.inf)  # Bun and Steinke 2016, from memory
    assert laplace_cost(2, 5) == Cost(0.4**2 / 2, 0.4)  # Bun and Steinke 2016, from memory


def test_costs_compose():
    assert Cost(0.5, 1) + Cost(0.25, 2) == Cost(0.75, 3)
    assert (Cost(0.5, 1) + gaussian_cost(1, 1)).pure == math.inf
    assert Cost(0.5, 1).times(4) == Cost(2, 4)
    assert gaussian_cost(1, 1).times(0) == Cost.nothing()
    assert Cost.nothing() + Cost(0.5, 1) == Cost(0.5, 1)


# Composition.


def test_routes_are_taken_where_they_win():
    picks, noise = pick_cost(0.05), gaussian_cost(1, 400)
    assert epsilon_and_route([], 0) == (0, "pure")
    assert epsilon_and_route([picks.times(3)], DELTA) == (pytest.approx(0.15), "pure")
    assert epsilon_and_route([picks.times(100)], DELTA)[1] == "zcdp"
    assert epsilon_and_route([picks, noise.times(100)], 0) == (math.inf, "zcdp")
    tiny = pick_cost(1e-6)
    assert epsilon_and_route([noise, tiny], DELTA)[1] == "zcdp"
    assert epsilon_and_route([gaussian_cost(1, 8), pick_cost(20.0)], DELTA) == (
        pytest.approx(20 + epsilon_of_zcdp(1 / 16, DELTA)),
        "pure + zcdp",
    )


@repeatable
@given(cost_lists, deltas)
def test_composed_epsilon_is_the_best_of_the_routes(costs, delta):
    by_zcdp = epsilon_of_zcdp(sum(cost.zcdp for cost in costs), delta)
    by_pure = sum(cost.pure for cost in costs)
    pure = sum(cost.pure for cost in costs if cost.pure < math.inf)
    rest = sum(cost.zcdp for cost in costs if cost.pure == math.inf)
    best = min(by_zcdp, by_pure, pure + epsilon_of_zcdp(rest, delta))
    assert composed_epsilon(iter(costs), delta) == pytest.approx(best, rel=1e-12, abs=1e-300)


@repeatable
@given(cost_lists, st.one_of(pure_costs, noisy_costs), deltas)
def test_composed_epsilon_grows_with_every_mechanism(costs, another, delta):
    more = composed_epsilon([*costs, another], delta)
    assert composed_epsilon(costs, delta) <= more * (1 + 1e-12)


# Calibration.


def shares_of_budget(epsilon, delta):
    """Costs that leave a good part of the budget to the picks."""
    return st.sampled_from(
        [
            Cost.nothing(),
            laplace_cost(0.3 * epsilon, 1),
            Cost(0.4 * zcdp_of_epsilon(epsilon, delta), math.inf),
            Cost(0.01 * zcdp_of_epsilon(epsilon, delta), math.inf),
        ]
    )


@repeatable
@given(st.data(), log_uniform(0.01, 50), deltas, st.integers(1, 5000))
def test_calibrated_picks_are_safe_and_tight(data, epsilon, delta, picks):
    other = data.draw(shares_of_budget(epsilon, delta))
    pick_epsilon, route = calibrate_picks(epsilon, delta, picks, other)

    def spent(pick_epsilon):
        return epsilon_and_route([pick_cost(pick_epsilon).times(picks), other], delta)

    assert spent(pick_epsilon)[0] <= epsilon
    assert spent(pick_epsilon * (1 + 1e-9))[0] > epsilon
    assert route in ("pure", "zcdp", "pure + zcdp")


def test_calibration_by_every_route():
    assert calibrate_picks(1, 0, 4) == (0.25, "pure")
    assert calibrate_picks(1, 0, 4, laplace_cost(1, 2)) == (0.125, "pure")
    pick_epsilon, route = calibrate_picks(1, DELTA, 200)
    assert (pick_epsilon, route) == (
        pytest.approx(math.sqrt(8 * 0.02435597036 / 200), rel=1e-9),
        "zcdp",
    )
    pick_epsilon, route = calibrate_picks(20, DELTA, 1, Cost(1e-5, math.inf))
    assert (pick_epsilon, route) == (
        pytest.approx(20 - epsilon_of_zcdp(1e-5, DELTA), rel=1e-9),
        "pure + zcdp",
    )


def test_calibration_refuses_what_cannot_be_kept():
    with pytest.raises(InputError, match="delta must be above 0"):
        calibrate_picks(1, 0, 10, gaussian_cost(1, 100))
    with pytest.raises(InputError, match="alone cost epsilon 2 "):
        calibrate_picks(1, 0, 10, laplace_cost(2, 1))
    with pytest.raises(InputError, match="leave nothing"):
        calibrate_picks(1, 0, 10, laplace_cost(1, 1))
    with pytest.raises(InputError, match="alone cost epsilon"):
        calibrate_picks(1, DELTA, 10, gaussian_cost(1, 1))
    with pytest.raises(InputError, match="delta must be above 0"):
        textbook_pick_epsilon(1, 0, 10)


# Scale of the noise in units of radius/rows at epsilon 1. Source: Talwar, Thakurta and Zhang 2015,
# Algorithm 2 (Laplace noise), against Gumbel noise calibrated in zCDP.


@pytest.mark.parametrize(
    "steps, textbook, ours",
    [(50, "74.34", "32.04"), (200, "148.7", "64.08"), (800, "297.4", "128.2")],
)
def test_noise_scale_against_the_textbook(steps, textbook, ours):
    laplace_scale = 1 / textbook_pick_epsilon(1, DELTA, steps)
    gumbel_scale = 2 / calibrate_picks(1, DELTA, steps)[0]
    assert_printed_as(laplace_scale, textbook)
    assert_printed_as(gumbel_scale, ours)
    assert_printed_as(laplace_scale / gumbel_scale, "2.320")
    deviations = (laplace_scale * math.sqrt(2)) / (gumbel_scale * math.pi / math.sqrt(6))
    assert_printed_as(deviations, "2.559")


# Bad input.


@pytest.mark.parametrize(
    "call, name",
    [
        (lambda: Cost(-1, 0), "zcdp"),
        (lambda: Cost(0, math.nan), "pure"),
        (lambda: Cost(0, 0).times(-1), "k"),
        (lambda: pick_cost(-0.1), "pick_epsilon"),
        (lambda: gaussian_cost(1, 0), "sigma_squared"),
        (lambda: laplace_cost(0, 1), "sensitivity"),
        (lambda: epsilon_of_zcdp(-1, DELTA), "zcdp"),
        (lambda: epsilon_of_zcdp(1, 1), "delta"),
        (lambda: zcdp_of_epsilon(math.nan, DELTA), "epsilon"),
        (lambda: delta_of_zcdp(1, "1"), "epsilon"),
        (lambda: gaussian_delta(0, 1, 1), "sigma"),
        (lambda: gaussian_sigma(1, 0, 1), "delta"),
        (lambda: discrete_gaussian_delta(1, 1, 0.5), "sensitivity"),
        (lambda: nonadaptive_pick_delta(1, 0, 3), "eta"),
        (lambda: advanced_epsilon(0.1, True, DELTA), "k"),
        (lambda: composed_epsilon([], -1e-9), "delta"),
        (lambda: calibrate_picks(0, DELTA, 3), "epsilon"),
        (lambda: calibrate_picks(1, DELTA, 2.0), "picks"),
        (lambda: textbook_pick_epsilon(1, DELTA, 0), "steps"),
        (lambda: adaptive_pick_epsilon_bounds(0.1, 3, 0), "delta"),
    ],
)
def test_bad_input_is_named(call, name):
    with pytest.raises(InputError, match=rf"^{name}\b"):
        call()
