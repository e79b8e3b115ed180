"""Sparse linear and logistic regression under differential privacy, for wide sparse data.

State what is public (`PublicFacts`) and what is promised (`Guarantee`), let `plan_fit` decide the
rest, read the plan, then `plan.fit(X, y)` once. What comes back is a `Release`.
"""

from importlib import import_module

# Where each name lives. Modules load when a name is first asked for, so that the terminal starts
# at once and can be interrupted.
_HOMES = {
    "BudgetBook": "book",
    "BudgetError": "errors",
    "Evaluation": "evaluation",
    "Guarantee": "facts",
    "InputError": "errors",
    "NotYetError": "errors",
    "Plan": "plan",
    "PublicFacts": "facts",
    "Release": "release",
    "SordinoError": "errors",
    "Split": "parts",
    "load_release": "release",
    "plan_fit": "plan",
}

__all__ = list(_HOMES)


def __getattr__(name: str):
    if name == "__version__":
        from importlib.metadata import version

        return version("sordino")
    if name not in _HOMES:
        raise AttributeError(f"module {__name__!r} has no attribute {name!r}")
    value = getattr(import_module(f".{_HOMES[name]}", __name__), name)
    globals()[name] = value
    return value


def __dir__():
    return sorted({*globals(), *__all__, "__version__"})
