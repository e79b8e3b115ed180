"""The logistic loss in fixed point: its table of nodes, its targets, the intercept's formulas."""

from __future__ import annotations

import math

import numpy as np
import pytest
from reference import CELL, GRAIN, MARGIN_END, fine_derivatives
from scipy.integrate import quad
from scipy.optimize import brentq
from scipy.special import expit, logit

from sordino.errors import InputError, NotYetError
from sordino.losses import (
    MARGIN_UNIT,
    MOST_RESOLUTION,
    ClippedResidual,
    Logistic,
    fixed_point,
    named_loss,
)

RESOLUTIONS = [2**k for k in range(15)]
DOCUMENTED_ERROR = 8e-7     # of the curve between nodes, against expit
LOSS = Logistic()


def node_margins() -> np.ndarray:
    return np.arange(-MARGIN_END, MARGIN_END + 1, CELL) * MARGIN_UNIT


@pytest.mark.parametrize("resolution", RESOLUTIONS)
def test_nodes_are_the_curve_to_the_nearest_unit(resolution):
    nodes = LOSS.nodes(resolution)
    assert nodes.dtype == np.int32 and nodes.shape == (2 * MARGIN_END // CELL + 1,)
    assert abs(nodes - resolution * GRAIN * expit(node_margins())).max() <= 0.5 + 1e-6
    assert (np.diff(nodes) >= 0).all()
    assert nodes[0] >= 0 and nodes[-1] <= resolution * GRAIN < 2**31


def test_the_curve_between_nodes_is_within_its_stated_error():
    """At the finest resolution rounding is 2^-31 a node, so what shows is the straight line."""
    margins = np.arange(-MARGIN_END, MARGIN_END, 7)         # 7 and 1024 share no factor
    fine = fine_derivatives(LOSS.nodes(MOST_RESOLUTION), margins)
    errors = abs(fine / (MOST_RESOLUTION * GRAIN) - expit(margins * MARGIN_UNIT))
    assert errors.max() < DOCUMENTED_ERROR
    assert errors.max() > DOCUMENTED_ERROR / 2, "the stated error is not far from the real one"


@pytest.mark.parametrize("resolution", RESOLUTIONS)
def test_the_curve_is_far_nearer_than_one_rounding_step(resolution):
    margins = np.arange(-MARGIN_END, MARGIN_END, 101)
    fine = fine_derivatives(LOSS.nodes(resolution), margins)
    real = resolution * expit(margins * MARGIN_UNIT)
    assert abs(fine / GRAIN - real).max() < DOCUMENTED_ERROR * resolution + 2 / GRAIN
    assert (np.diff(fine) >= 0).all(), "convex: the derivative never falls"


def test_margins_past_the_end_are_off_by_less_than_the_end_is():
    assert expit(-MARGIN_END * MARGIN_UNIT) < 1.2e-7


@pytest.mark.parametrize("resolution", RESOLUTIONS)
def test_targets(resolution):
    targets = LOSS.targets(np.array([0.0, 1.0, 1.0]), resolution)
    assert targets.dtype == np.int32
    assert targets.tolist() == [0, resolution * GRAIN, resolution * GRAIN]


@pytest.mark.parametrize("label", [0.0, 1.0])
def test_nodes_less_the_target_are_the_derivative_of_the_loss(label):
    """Derivative of log(1 + exp(m)) - label * m, by central differences."""
    margins, h = node_margins()[1:-1:50], 1e-5
    loss = lambda m: np.logaddexp(0, m) - label * m  # noqa: E731
    slope = (loss(margins + h) - loss(margins - h)) / (2 * h)
    fine = LOSS.nodes(MOST_RESOLUTION)[1:-1:50] - LOSS.targets(np.array([label]), MOST_RESOLUTION)
    assert abs(fine / (MOST_RESOLUTION * GRAIN) - slope).max() < 1e-9


@pytest.mark.parametrize("rate", [0.001, 0.02, 0.3, 0.5, 0.9, 0.999])
def test_the_first_intercept_fits_the_label_rate(rate):
    """With margins all 0 the mean derivative is 1/2 - rate; the best constant is logit(rate)."""
    first = LOSS.first_intercept(0.5 - rate, 1e-6)
    assert first == pytest.approx(logit(rate), abs=1e-12)
    assert first == pytest.approx(brentq(lambda b: expit(b) - rate, -20, 20, xtol=1e-13), abs=1e-9)


@pytest.mark.parametrize("least", [1e-6, 0.01, 0.3, 0.5])
@pytest.mark.parametrize("mean", [-3.0, -0.5, 0.5, 0.7])
def test_the_first_intercept_of_an_extreme_measurement_is_held_back(mean, least):
    edge = logit(1 - least) if mean < 0 else logit(least)
    assert LOSS.first_intercept(mean, least) == pytest.approx(edge, abs=1e-9)


@pytest.mark.parametrize("intercept", [-6.0, -1.5, 0.0, 0.4, 5.0])
def test_curvature_is_the_slope_of_the_derivative(intercept):
    h = 1e-5
    slope = (expit(intercept + h) - expit(intercept - h)) / (2 * h)
    assert LOSS.curvature(intercept) == pytest.approx(slope, rel=1e-7)


def test_curvature_never_vanishes():
    assert LOSS.curvature(-15.0) == LOSS.curvature(15.0) == 1e-3


@pytest.mark.parametrize("spread", [0.3, 1.0, 3.0])
@pytest.mark.parametrize("rate", [0.1, 0.5, 0.8])
def test_no_spread_of_margins_has_a_larger_mean_curvature(rate, spread):
    """Normal margins centred so that the mean of p is `rate`: the mean of p(1-p) is smaller."""
    def mean(function, centre):
        density = lambda u: np.exp(-u * u / 2) / np.sqrt(2 * np.pi)  # noqa: E731
        return quad(lambda u: function(expit(centre + spread * u)) * density(u), -9, 9)[0]

    centre = brentq(lambda c: mean(lambda p: p, c) - rate, -20, 20)
    assert LOSS.curvature(logit(rate)) >= mean(lambda p: p * (1 - p), centre)


@pytest.mark.parametrize("fixed", [-(2**31), -MARGIN_END, -1, 0, 1, 12345, MARGIN_END])
def test_fixed_point_round_trip(fixed):
    assert fixed_point(fixed * MARGIN_UNIT) == fixed


@pytest.mark.parametrize("margin", [-15.0, -0.1, 1 / 3, 7.77, 1e-9])
def test_fixed_point_is_the_nearest(margin):
    assert abs(fixed_point(margin) * MARGIN_UNIT - margin) <= MARGIN_UNIT / 2


def test_losses_by_name():
    assert named_loss("logistic", "binary") == LOSS
    for name, bound in (("squared", 0.25), ("huber", 0.125)):
        assert named_loss(name, (0.0, 3.0)) == ClippedResidual(name, 0.0, 3.0, bound)
        assert named_loss(name, (0.0, 3.0), 1).residual_bound == 1.0
        with pytest.raises(InputError, match="needs a label range"):
            named_loss(name, "binary")
    for bound in (0.0, 0.06, 2.1, "1", True, math.nan):
        with pytest.raises(InputError, match="residual_bound must"):
            named_loss("squared", (0.0, 3.0), bound)
    with pytest.raises(NotYetError, match="not yet supported"):
        named_loss(abs, "binary")
    for unknown in ("hinge", None, 3, ["logistic"]):
        with pytest.raises(InputError, match='loss must be "logistic"'):
            named_loss(unknown, "binary")
    with pytest.raises(InputError, match='needs label="binary"'):
        named_loss("logistic", (0.0, 1.0))


# --- residuals that are clipped: squared loss and Huber's


BOUNDS = [1 / 16, 0.07, 0.1, 0.125, 0.2, 0.25, 1 / 3, 0.5, 0.77, 1.0, 1.5, 2.0]
RANGES = [(0.0, 1.0), (-3.0, 5.0), (1e6, 1e6 + 2**20), (-1e-9, 1e-9)]


def residuals(bound: float, resolution: int, label_range=RANGES[1], name="squared"):
    """(fine derivative in GRAIN (labels, margins), what it stands for), for labels over the range
    and a little past it, and margins over the whole table."""
    loss = ClippedResidual(name, *label_range, bound)
    low, high = label_range
    labels = np.r_[np.linspace(low, high, 41), low - (high - low), high + (high - low)]
    far = np.r_[np.linspace(-MARGIN_END, MARGIN_END - 1, 1501), MARGIN_END - 1 - CELL]
    near = (1 / bound + np.linspace(-1.02, 1.02, 1001)) / MARGIN_UNIT
    margins = np.clip(np.rint(np.r_[far, near, -near, 0, -1]), -MARGIN_END, MARGIN_END - 1)
    margins = margins.astype(np.int64)
    fine = fine_derivatives(loss.nodes(resolution), margins) - loss.targets(
        labels, resolution).astype(np.int64)[:, None]
    predictions = (low / 2 + high / 2) + margins * MARGIN_UNIT * bound * (high / 2 - low / 2)
    residual = predictions - np.clip(labels, low, high)[:, None]
    exact = np.clip(residual / (bound * (high / 2 - low / 2)), -1, 1)
    return np.clip(fine, -resolution * GRAIN, resolution * GRAIN), exact


def most_resolution(bound: float) -> int:
    """The largest R of 2^14, 2^13, ... whose nodes R 2^16 (1/bound + 1) fit 32 bits."""
    return next(2**k for k in range(14, -1, -1) if 2**k * GRAIN * (1 / bound + 1) < 2**31)


@pytest.mark.parametrize("bound", BOUNDS)
def test_the_table_is_the_clipped_residual_at_the_finest_resolution(bound):
    """clip((prediction - label)/b, -1, 1) to rounding: half a grain of the target, one of the floor
    between nodes, and what floats lose of a residual."""
    loss = ClippedResidual("squared", *RANGES[1], bound)
    R = loss.most_resolution
    assert R in (most_resolution(bound), most_resolution(bound) // 2)
    fine, exact = residuals(bound, R)
    assert abs(fine - R * GRAIN * exact).max() <= 1.5 + 1e-6 * R


@pytest.mark.parametrize("label_range", RANGES)
@pytest.mark.parametrize("name", ["squared", "huber"])
def test_the_table_is_the_same_in_any_unit_of_the_label(name, label_range):
    for bound, resolution in ((0.25, 2**12), (0.125, 1), (1.0, 2**6)):
        fine, exact = residuals(bound, resolution, label_range, name)
        lost = 4 * np.finfo(float).eps * max(map(abs, label_range)) / (
            bound * (label_range[1] - label_range[0]) / 2)
        assert abs(fine - resolution * GRAIN * exact).max() <= 1.5 + resolution * GRAIN * lost


@pytest.mark.parametrize("bound", BOUNDS)
def test_nodes_of_residuals_never_fall_and_fit_32_bits(bound):
    """Nodes and targets are computed wide and stored as int32: none may have wrapped."""
    loss = ClippedResidual("huber", 0.0, 1.0, bound)
    for resolution in (1, 2, 64, loss.most_resolution):
        nodes = loss.nodes(resolution)
        targets = loss.targets(np.linspace(-1, 2, 301), resolution)
        assert nodes.dtype == targets.dtype == np.int32
        assert (np.diff(nodes) >= 0).all() and (np.diff(targets) >= 0).all()
        assert nodes[0] == -nodes[-1] < 0 and nodes[len(nodes) // 2] == 0
        assert abs(int(targets[-1]) - resolution * GRAIN / bound) <= 0.5
        assert targets[-1] == -targets[0]


@pytest.mark.parametrize("bound", BOUNDS)
def test_rounded_derivatives_stay_within_the_resolution(bound):
    """The lattice that the rows use: floor(R * derivative + u) for the smallest and largest u."""
    fine, exact = residuals(bound, 64)
    for dither in (0, GRAIN - 1):
        q = (fine + dither) // GRAIN
        assert (abs(q) <= 64 + (dither > 0)).all()
        assert abs(q - 64 * exact).max() <= 1 + 2.5 / GRAIN


def test_the_derivative_is_that_of_the_loss():
    """Huber 1964: r^2/2 within b, b|r| - b^2/2 beyond; by central differences in the prediction."""
    low, high, bound = -3.0, 5.0, 0.3
    b = bound * (high - low) / 2
    loss = ClippedResidual("huber", low, high, bound)
    margins = np.arange(-MARGIN_END, MARGIN_END, 1501)
    predictions, h = 1.0 + margins * MARGIN_UNIT * b, 1e-5
    rho = lambda r: np.where(abs(r) <= b, r * r / 2, b * abs(r) - b * b / 2)  # noqa: E731
    for label in (-3.0, -1.1, 0.4, 4.9):
        slope = (rho(predictions + h - label) - rho(predictions - h - label)) / (2 * h)
        fine = fine_derivatives(loss.nodes(2**10), margins) - int(loss.targets(
            np.array([label]), 2**10)[0])
        derivative = np.clip(fine / (2**10 * GRAIN), -1, 1)
        smooth = abs(abs(predictions - label) - b) > 2 * h      # a difference straddles the corner
        assert abs(b * derivative - slope)[smooth].max() < 1e-5


@pytest.mark.parametrize(("mean", "first"), [(0.3, -0.3), (-1.0, 1.0), (5.0, -1.0), (-7.0, 1.0)])
def test_the_first_intercept_of_residuals_is_a_newton_step(mean, first):
    loss = ClippedResidual("squared", 0.0, 1.0, 0.25)
    assert loss.first_intercept(mean, 0.01) == first and loss.curvature(first) == 1.0


def test_units_of_residuals_do_not_overflow():
    """Ranges near the ends of floats: no difference of the ends is formed before it is halved."""
    loss = ClippedResidual("squared", -1.5e308, 1.5e308, 0.25)
    assert loss.centre == 0.0 and loss.unit == 0.25 * 1.5e308
    assert loss.targets(np.array([-1.5e308, 0.0, 1.5e308]), 1).tolist() == [
        -4 * GRAIN, 0, 4 * GRAIN]
