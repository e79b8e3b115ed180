"""Privacy accounting: what mechanisms cost, what that means in (epsilon, delta), and back."""

from .calibrate import calibrate_picks, textbook_pick_epsilon
from .convert import (
    advanced_epsilon,
    bounded_range_zcdp,
    composed_epsilon,
    delta_of_zcdp,
    discrete_gaussian_delta,
    epsilon_and_route,
    epsilon_of_zcdp,
    gaussian_delta,
    gaussian_sigma,
    nonadaptive_pick_delta,
    zcdp_of_epsilon,
)
from .curves import Cost, gaussian_cost, laplace_cost, pick_cost
from .profile import adaptive_pick_epsilon_bounds

__all__ = [
    "Cost",
    "adaptive_pick_epsilon_bounds",
    "advanced_epsilon",
    "bounded_range_zcdp",
    "calibrate_picks",
    "composed_epsilon",
    "delta_of_zcdp",
    "discrete_gaussian_delta",
    "epsilon_and_route",
    "epsilon_of_zcdp",
    "gaussian_cost",
    "gaussian_delta",
    "gaussian_sigma",
    "laplace_cost",
    "nonadaptive_pick_delta",
    "pick_cost",
    "textbook_pick_epsilon",
    "zcdp_of_epsilon",
]
