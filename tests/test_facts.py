"""Public facts and the guarantee: what is refused, and round trips."""

from __future__ import annotations

import json

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from sordino import Guarantee, InputError, PublicFacts

GOOD = {"features": 10, "rows": 100}


@pytest.mark.parametrize(
    ("changed", "named"),
    [
        ({"features": 0}, "features must be between 1 and 2,147,483,647"),
        ({"features": 2**31}, "features must be between"),
        ({"features": 10.0}, "features must be a whole number"),
        ({"features": True}, "features must be a whole number"),
        ({"rows": 0}, "rows must be between 1 and 2,147,483,647"),
        ({"rows": 2**31}, "rows must be between 1 and 2,147,483,647"),
        ({"rows": "many"}, "rows must be a whole number"),
        ({"entry_bound": 0}, "entry_bound must be a finite number above 0"),
        ({"entry_bound": -1.0}, "entry_bound must be a finite number above 0"),
        ({"entry_bound": float("nan")}, "entry_bound must be a finite number above 0"),
        ({"entry_bound": float("inf")}, "entry_bound must be a finite number above 0"),
        ({"entry_bound": 1e-320}, "entry_bound must lie between 1e-100 and 1e\\+100"),
        ({"entry_bound": 1e300}, "entry_bound must lie between"),
        ({"entry_bound": np.ones(9)}, r"shape \(9,\)"),
        ({"entry_bound": np.ones((10, 1))}, r"shape \(10, 1\)"),
        ({"entry_bound": [1.0] * 9 + [0.0]}, "entry_bound of feature 9"),
        ({"entry_bound": [1.0] * 9 + [np.nan]}, "entry_bound of feature 9"),
        ({"entry_bound": "wide"}, "entry_bound must be a number, one number per feature"),
        ({"label": "yes/no"}, 'label must be "binary"'),
        ({"label": (1.0, 1.0)}, "low below high"),
        ({"label": (0.0, float("inf"))}, "finite"),
        ({"label": (0.0,)}, "label must be"),
        ({"label": (0, 10**400)}, "label must be"),
        ({"entry_bound": [1.0] * 9 + [10**400]}, "entry_bound must be a number, one number"),
        ({"rows_per_person": 0}, "rows_per_person must be between"),
    ],
)
def test_facts_out_of_range_are_named(changed, named):
    with pytest.raises(InputError, match=named):
        PublicFacts(**GOOD | changed)


@pytest.mark.parametrize(
    ("given", "named"),
    [
        ({"epsilon": 0.0}, "epsilon"),
        ({"epsilon": -1.0}, "epsilon"),
        ({"epsilon": float("nan")}, "epsilon"),
        ({"epsilon": float("inf")}, "epsilon"),
        ({"epsilon": 1e-12}, "epsilon must lie between"),
        ({"epsilon": 1e12}, "epsilon must lie between"),
        ({"epsilon": "1"}, "epsilon"),
        ({"epsilon": True}, "epsilon"),
        ({"epsilon": 1.0, "delta": -1e-9}, "delta"),
        ({"epsilon": 1.0, "delta": 1.0}, "delta"),
        ({"epsilon": 1.0, "delta": float("nan")}, "delta"),
        ({"epsilon": 1.0, "delta": "small"}, "delta"),
        ({"epsilon": 1.0, "neighbours": "add"}, "neighbours must be 'add-remove' or 'replace-one'"),
        ({"epsilon": 1.0, "neighbours": ["add-remove"]}, "neighbours must be"),
    ],
)
def test_guarantees_out_of_range_are_named(given, named):
    with pytest.raises(InputError, match=named):
        Guarantee(**given)


def test_bounds_per_feature_are_a_read_only_copy():
    bounds = np.arange(1.0, 11.0)
    facts = PublicFacts(**GOOD, entry_bound=bounds)
    bounds[0] = 99.0
    assert facts.bounds_of(np.array([0, 9])).tolist() == [1.0, 10.0]
    with pytest.raises(ValueError, match="read-only"):
        facts.entry_bound[0] = 2.0
    assert PublicFacts(**GOOD, entry_bound=2.5).bounds_of(np.array([3, 3])).tolist() == [2.5, 2.5]


bound = st.floats(1e-100, 1e100)


@st.composite
def any_facts(draw):
    features = draw(st.integers(1, 30))
    runs = st.lists(st.sampled_from([0.5, 1.0, 7.25]), min_size=features, max_size=features)
    return PublicFacts(
        features=features,
        rows=draw(st.integers(1, 10**9)),
        entry_bound=draw(st.one_of(bound, runs)),
        label=draw(st.sampled_from(["binary", (0.0, 1.0), (-3.5, 10.25)])),
    )


@given(any_facts())
@settings(derandomize=True, deadline=None)
def test_facts_come_back_from_json(facts):
    assert PublicFacts.from_dict(json.loads(json.dumps(facts.to_dict()))) == facts


def test_a_shared_bound_per_feature_stays_short_in_json():
    facts = PublicFacts(features=100_000, rows=1, entry_bound=np.repeat([1.0, 2.0], 50_000))
    assert facts.to_dict()["entry_bound"] == [[1.0, 50_000], [2.0, 50_000]]


@pytest.mark.parametrize(
    ("changed", "named"),
    [
        ({"entry_bound": [[1.0, 10**18]]}, "between 1 and 10"),
        ({"entry_bound": [[1.0, 4], [2.0, 4]]}, "covers 8 features, not 10"),
        ({"entry_bound": [[1.0, 5, 5]]}, r"list of \[bound, how many features\]"),
        ({"entry_bound": [1.0] * 10}, r"list of \[bound, how many features\]"),
        ({"entry_bound": [["1", 10]]}, "entry_bound must be a finite number"),
        ({"entry_bound": None}, "entry_bound"),
        ({"entry_bound": [[1.0, 2]], "features": "ten"}, "features must be a whole number"),
        ({"extra": 1}, "unknown key 'extra'"),
    ],
)
def test_stated_facts_are_read_strictly(changed, named):
    with pytest.raises(InputError, match=named):
        PublicFacts.from_dict(PublicFacts(**GOOD).to_dict() | changed)


@pytest.mark.parametrize("missing", ["features", "rows", "entry_bound", "label", "rows_per_person"])
def test_stated_facts_must_be_complete(missing):
    fields = PublicFacts(**GOOD).to_dict()
    del fields[missing]
    with pytest.raises(InputError, match=f"lacks the key '{missing}'"):
        PublicFacts.from_dict(fields)
