"""Sparse linear and logistic regression under differential privacy, for wide sparse data.

State what is public (`PublicFacts`) and what is promised (`Guarantee`), let `plan_fit` decide the
rest, read the plan, then `plan.fit(X, y)` once. What comes back is a `Release`.
"""

from .errors import InputError, NotYetError, SordinoError
from .facts import Guarantee, PublicFacts
from .plan import Plan, plan_fit
from .release import Release, load_release

__all__ = [
    "Guarantee",
    "InputError",
    "NotYetError",
    "Plan",
    "PublicFacts",
    "Release",
    "SordinoError",
    "load_release",
    "plan_fit",
]


def __getattr__(name: str):
    if name == "__version__":
        from importlib.metadata import version

        return version("sordino")
    raise AttributeError(f"module {__name__!r} has no attribute {name!r}")
