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
