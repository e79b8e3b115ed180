"""Threads: whatever their number, the same table, the same scores, the same release."""

from __future__ import annotations

import threading
import time

import numpy as np
import pytest
import scipy.sparse as sp

from sordino import Guarantee, InputError, PublicFacts, plan_fit
from sordino._core.crew import Crew
from sordino.table import build_table, sound_matrix

N_ROWS, N_FEATURES = 3000, 200


def wide(seed: int = 1, values: bool = False) -> sp.csr_array:
    rng = np.random.default_rng(seed)
    held = rng.random((N_ROWS, N_FEATURES)) < 0.5 / np.arange(1, N_FEATURES + 1) ** 0.7
    return sp.csr_array(held * (rng.normal(size=held.shape) if values else 1.0))


def small_crew(threads: int) -> Crew:
    return Crew(threads, least=1, chunk=17)


# --- the crew


@pytest.mark.parametrize("threads", [1, 2, 5])
@pytest.mark.parametrize("n", [0, 1, 16, 17, 18, 1000])
def test_everything_is_done_once(threads, n):
    done = np.zeros(n, dtype=int)

    def work(member, first, stop):
        assert 0 <= member < threads and 0 < stop - first <= 17
        done[first:stop] += 1

    small_crew(threads).share(n, work)
    assert (done == 1).all()
    members = []
    Crew(threads).each(members.append)
    assert sorted(members) == list(range(threads))


def test_little_work_stays_on_the_calling_thread():
    seen = set()
    Crew(4).share(1000, lambda member, first, stop: seen.add(threading.current_thread()))
    assert seen == {threading.current_thread()}


@pytest.mark.parametrize("failing", [0, 1, 2])
def test_a_failure_of_any_member_is_raised_and_the_crew_goes_on(failing):
    crew = Crew(3)

    def fail(member):
        if member == failing:
            raise ValueError(f"member {member}")

    for _ in range(3):
        with pytest.raises(ValueError, match=f"member {failing}"):
            crew.each(fail)
    ended = []
    crew.each(ended.append)
    assert len(ended) == 3


def test_an_interrupt_ends_the_others():
    crew = Crew(2, least=1, chunk=1)
    begun = threading.Event()

    def work(member, first, stop):
        if member == 0:
            begun.wait(10)
            raise KeyboardInterrupt
        begun.set()
        time.sleep(0.001)

    with pytest.raises(KeyboardInterrupt):
        crew.share(10**9, work)


# --- the table


@pytest.mark.parametrize("values", [False, True])
@pytest.mark.parametrize("threads", [2, 3, 7])
def test_the_table_is_the_same(values, threads):
    X, facts = wide(values=values), PublicFacts(features=N_FEATURES, rows=N_ROWS)
    one = build_table(X, np.zeros(N_ROWS), facts, 2**14)
    other = build_table(X, np.zeros(N_ROWS), facts, 2**14, crew=Crew(threads))
    other.columns._check()
    assert (one.unit, one.levels) == (other.unit, other.levels)
    for name in ("offsets", "rows", "values"):
        assert np.array_equal(getattr(one.columns, name), getattr(other.columns, name)), name


@pytest.mark.parametrize("threads", [2, 3, 50])
def test_tables_of_few_rows_and_of_empty_ones(threads):
    facts = PublicFacts(features=3, rows=4)
    for X in (np.zeros((4, 3)), np.eye(4, 3), np.array([[0.0, 0, 0], [1, 1, 1]])):
        one, other = (build_table(X, np.zeros(len(X)), facts, 2**14, crew=crew)
                      for crew in (None, Crew(threads)))
        assert np.array_equal(one.columns.rows, other.columns.rows)
        assert np.array_equal(one.columns.offsets, other.columns.offsets)


@pytest.mark.parametrize("threads", [1, 2, 4])
def test_the_first_fault_is_named_whatever_the_threads(threads):
    X = wide(values=True)
    for row in (2900, 1700, 40):        # the later ones lie in other members' spans
        X.data[X.indptr[row]] = np.nan
    with pytest.raises(InputError, match="row 40, column"):
        sound_matrix(X, N_FEATURES, crew=Crew(threads))


# --- whole fits


@pytest.mark.parametrize("options", [
    {"method": "greedy"}, {"method": "frank-wolfe"},
    {"method": "frank-wolfe", "schedule": "shrinking", "steps": 60},
    {"method": "greedy", "include": [3], "prior": {5: 8.0}, "start": {7: 0.5}},
])
@pytest.mark.parametrize("values", [False, True])
def test_releases_and_counters_are_the_same(monkeypatch, options, values):
    """Sharing of the smallest pieces, by 1 to 4 threads, under the same bits."""
    X = wide(values=values)
    y = np.random.default_rng(2).random(N_ROWS) < 0.2 + 0.5 * (X[:, [0]].toarray().ravel() > 0)
    plan = plan_fit(PublicFacts(features=N_FEATURES, rows=N_ROWS), Guarantee(20.0, 1e-6), **options)
    monkeypatch.setattr("sordino.fit.Crew", small_crew)
    ways = ("rebuilds", "level_moves")      # of the heap: sparse changes come dense when shared
    found = []
    for threads in (1, 2, 3, 4):
        release = plan.fit(X, y, rehearsal_seed=4, threads=threads)
        counters = {name: value for name, value in release.profile.counters.items()
                    if name not in ways}
        found.append((release.features.tolist(), release.coefficients.tolist(), release.intercept,
                      counters))
    assert all(each == found[0] for each in found)
