"""Public knowledge: what the user states beyond the facts costs nothing and is told everywhere."""

from __future__ import annotations

import numpy as np
import pytest
import scipy.sparse as sp

import sordino
from sordino import Guarantee, PublicFacts, plan_fit

N_ROWS, N_FEATURES = 2000, 30


@pytest.fixture(scope="module")
def table():
    """Features 0 and 1 decide the label together; feature 0 the more."""
    rng = np.random.default_rng(4)
    X = (rng.random((N_ROWS, N_FEATURES)) < 0.4).astype(float)
    y = (rng.random(N_ROWS) < 0.1 + 0.5 * X[:, 0] + 0.3 * X[:, 1]).astype(float)
    return sp.csr_array(X), y


def planned(method: str, **options):
    facts = PublicFacts(features=N_FEATURES, rows=N_ROWS)
    return plan_fit(facts, Guarantee(4.0, 1e-6), method=method, **options)


@pytest.mark.parametrize("method", ["frank-wolfe", "greedy"])
def test_excluded_features_are_never_picked(table, method):
    for _ in range(5):
        release = planned(method, exclude=[0, *range(10, 20)]).fit(*table)
        assert not {0, *range(10, 20)} & set(release.features.tolist())
        assert 1 in release.features        # by far the strongest of the others


@pytest.mark.parametrize("method", ["frank-wolfe", "greedy"])
def test_excluding_costs_nothing_and_helps_to_see(method):
    size = {"picks": 5} if method == "greedy" else {}
    free, told = planned(method, **size), planned(method, **size, exclude=range(20))
    assert told.zcdp == free.zcdp and told.pick_epsilon == free.pick_epsilon
    assert told.smallest_effect_rows < free.smallest_effect_rows
    assert told.knowledge.exclude == tuple(range(20))


@pytest.mark.parametrize("method", ["frank-wolfe", "greedy"])
def test_excluding_is_told_and_kept(table, tmp_path, method):
    plan = planned(method, exclude=(5, 3))
    release = plan.fit(*table)
    release.save(tmp_path / "model.json")
    assert sordino.load_release(tmp_path / "model.json").plan == plan
    clause = "2 features never picked, stated as public by the user"
    for text in (str(plan), plan.explain(), release.statement()):
        assert clause in " ".join(text.split())
    assert "stated as public by the user" not in str(planned(method))


def test_all_but_one_may_be_excluded(table):
    plan = planned("greedy", exclude=[j for j in range(N_FEATURES) if j != 7])
    assert plan.picks == 1 and plan.fit(*table).features.tolist() == [7]
