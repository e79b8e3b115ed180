"""The data side: lazy equals eager, bit for bit, on every path a row can take.

Oracle: `reference.Eager`, which recomputes margins, derivatives and scores from nothing.
"""

from __future__ import annotations

from collections import Counter
from dataclasses import dataclass

import mpmath
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from reference import (
    MARGIN_UNIT,
    STRAIGHT,
    STRAIGHT_SCALE,
    Eager,
    column_arrays,
    course,
    fine_derivatives,
)

from sordino._core.crew import Crew
from sordino._core.rows import Rows
from sordino._core.scores import Scores
from sordino._core.table import ColumnTable
from sordino.losses import Logistic

SLICE = 4_000_000       # entries of work between two looks at the signals, as in rows.pyx


@dataclass(frozen=True)
class Case:
    """A random table and a random public history over it.

    largest  1: 0/1 entries; else whole numbers within [-largest, largest]
    reach    margins stay within this of the intercept
    """

    seed: int
    n_rows: int
    n_cols: int
    density: float
    spread: float
    largest: int
    resolution: int
    steps: int
    schedule: str
    reach: float
    loud_share: float


def crew_of(seed: int) -> Crew | None:
    """One thread, or in a third of the cases each two and three that share whatever they can."""
    return None if seed % 3 == 0 else Crew(1 + seed % 3, least=1, chunk=5)


class Run:
    """Rows and scores beside the oracle, through one history."""

    def __init__(self, case: Case):
        self.case = case
        self.rng = np.random.default_rng(case.seed)
        self.X = random_table(self.rng, case)
        self.loud = np.flatnonzero(self.rng.random(case.n_cols) < case.loud_share)
        self.quiet = np.setdiff1d(np.arange(case.n_cols), self.loud)
        self.weights, scale = course(case.schedule, case.steps)
        scale *= case.reach / case.largest / MARGIN_UNIT
        labels = self.rng.integers(0, 2, case.n_rows).astype(np.float64)
        loss = Logistic()
        parts = (
            loss.targets(labels, case.resolution),
            self.rng.integers(0, 2**16, case.n_rows).astype(np.uint16),
            loss.nodes(case.resolution),
            case.resolution,
            scale,
        )
        offset_unit = float(self.rng.choice([1.0, 0.37])) / case.largest / MARGIN_UNIT
        self.eager = Eager(self.X, *parts, offset_unit)
        table = ColumnTable(case.n_rows, *column_arrays(self.X))
        table._check()
        self.rows = Rows(table, self.loud.astype(np.int32), *parts, case.schedule == "shrinking",
                         offset_unit, crew_of(case.seed))
        self.scores = Scores(case.n_cols, self.rows, 3, int(self.rng.integers(1, 40)))
        self.paths = Counter()

    def whole(self, check_every: int = 1) -> Counter:
        """Run to the end, comparing at every step; returns how often each path was taken."""
        self.start()
        for weight in self.weights:
            if self.rng.random() < 0.15:
                self.shift_offset(random_intercept(self.rng))
            self.move(self.random_feature(), int(weight) * int(self.rng.choice([-1, 1])))
            if self.rows.moves_made % check_every == 0:
                self.check_invariants()
        self.check_invariants()
        return self.paths

    def start(self):
        self.rows.place(0)
        self.eager.set_intercept(random_intercept(self.rng))
        self.rows.place(self.eager.intercept)
        self.scores.absorb(self.rows.first_scores())
        self.compare()

    def shift_offset(self, intercept: int):
        """A new intercept, and coefficients of up to two features that no move shrinks."""
        features = self.rng.integers(0, self.case.n_cols, self.rng.integers(3)).astype(np.int32)
        weights = self.rng.integers(-3, 4, len(features))
        self.eager.shift_offset(features, weights, intercept)
        self.rows.shift_offset(features, weights, intercept)
        self.scores.absorb(self.rows.catch_up())
        self.paths["intercept"] += 1
        self.compare()

    def move(self, feature: int, weight: int):
        before, rebuilds = self.rows.counters, self.scores.counters["rebuilds"]
        self.eager.move(feature, weight)
        self.scores.absorb(self.rows.move(feature, weight))
        self.note_path(before, self.scores.counters["rebuilds"] > rebuilds)
        self.compare()

    def note_path(self, before: dict, rebuilt: bool):
        grown = {name: value - before[name] for name, value in self.rows.counters.items()}
        if self.case.schedule == "paced":
            self.paths["paced"] += 1
        elif grown["sweeps"]:
            self.paths["sweep"] += 1
        else:
            self.paths["calendar"] += 1
            self.paths["due"] += grown["due"] > 0
            self.paths["calendar after a sweep"] += grown["due"] > 0 and self.paths["sweep"] > 0
        self.paths["long move"] += grown["pushed"] > SLICE
        self.paths["rebuilt" if rebuilt else "listed"] += 1

    def compare(self):
        q, scores = self.eager.q, self.eager.scores
        assert (self.rows.q == q).all()
        assert self.rows.total() == q.sum()
        assert (self.scores.score[: len(self.loud)] == scores[self.loud]).all()
        for j in self.quiet[:50]:
            assert self.rows.score(j) == scores[j]

    def check_invariants(self):
        self.rows._check()
        self.scores._check()
        assert (self.rows.z == self.eager.z).all()

    def random_feature(self) -> int:
        """The more common, the likelier."""
        counts = 1 + (self.X != 0).sum(axis=0)
        return int(self.rng.choice(self.case.n_cols, p=counts / counts.sum()))


def random_table(rng, case: Case) -> np.ndarray:
    """Entries with column prevalences spread over `spread` decades below `density`."""
    prevalence = case.density * 10.0 ** -rng.uniform(0, case.spread, case.n_cols)
    held = rng.random((case.n_rows, case.n_cols)) < prevalence
    values = rng.integers(-case.largest, case.largest + 1, held.shape)
    return held * (values if case.largest > 1 else 1)


def random_intercept(rng) -> int:
    return int(rng.choice([0, 15, -15, *rng.normal(0, 2, 3)]) / MARGIN_UNIT)


resolutions = st.sampled_from([2**power for power in range(15)] + 3 * [2**14])
largests = st.sampled_from([1, 1, 3, 127, 128, 2**14, 2**14])
often_shrinking = st.sampled_from(["shrinking", "shrinking", "paced"])
seeds = st.integers(0, 2**32)
small_cases = st.builds(
    Case,
    seed=seeds,
    n_rows=st.integers(1, 120),
    n_cols=st.integers(1, 12),
    density=st.floats(0.05, 1),
    spread=st.sampled_from([0.0, 1.0]),
    largest=largests,
    resolution=resolutions,
    steps=st.integers(1, 60),
    schedule=often_shrinking,
    reach=st.sampled_from([0.1, 1.0, 10.0, 1000.0, 1e7]),
    loud_share=st.sampled_from([0.0, 0.5, 1.0]),
)
medium_cases = st.builds(
    Case,
    seed=seeds,
    n_rows=st.integers(300, 2000),
    n_cols=st.integers(100, 300),
    density=st.floats(0.02, 0.5),
    spread=st.sampled_from([1.0, 2.0]),
    largest=largests,
    resolution=resolutions,
    steps=st.integers(20, 80),
    schedule=often_shrinking,
    reach=st.sampled_from([1.0, 10.0]),
    loud_share=st.sampled_from([0.3, 0.7, 1.0]),
)


def paths_over(cases, examples: int, check_every: int) -> Counter:
    """Every path taken, and every kind of storage used, over so many random runs."""
    seen = Counter()

    @settings(max_examples=examples, deadline=None, derandomize=True, database=None)
    @given(cases)
    def runs(case):
        run = Run(case)
        seen.update(run.whole(check_every))
        values = run.rows.table.values
        seen["no values" if values is None else values.dtype.name] += 1
        seen["wide" if run.scores.score.dtype == np.int64 else "narrow"] += 1

    runs()
    return seen


PATHS = ("sweep", "calendar", "due", "paced", "intercept", "no values", "int8", "int16", "wide",
         "narrow")


def test_small_runs_equal_the_oracle():
    seen = paths_over(small_cases, examples=1000, check_every=1)
    for path in PATHS:
        assert seen[path] >= 20, f"{path}: {seen}"


def test_medium_runs_equal_the_oracle():
    seen = paths_over(medium_cases, examples=120, check_every=10)
    for path in (*PATHS, "calendar after a sweep", "listed", "rebuilt"):
        assert seen[path] >= 10, f"{path}: {seen}"


@settings(max_examples=200, derandomize=True, deadline=None)
@given(small_cases, st.integers(1, 4))
def test_margins_may_run_ahead_of_scores(case, n_shifts):
    """`shift` moves margins and nothing else; `catch_up` brings q and scores there, both exact."""
    run = Run(case)
    run.start()
    for weight in run.weights[:3]:
        run.move(run.random_feature(), int(weight))
        before = run.eager.q
        for _ in range(n_shifts):
            features = run.rng.integers(0, case.n_cols, run.rng.integers(0, 6)).astype(np.int32)
            weights = run.rng.integers(-5, 6, len(features)) * int(weight)
            run.eager.set_intercept(random_intercept(run.rng))
            run.rows.shift(features, weights, run.eager.intercept)
            np.add.at(run.eager.v, features, weights)
            assert (run.rows.z == run.eager.z).all()
            assert (run.rows.derivatives() == run.eager.q).all()
            assert (run.rows.q == before).all()
        run.scores.absorb(run.rows.catch_up())
        run.compare()
        run.check_invariants()


def test_a_shift_of_an_unknown_feature_moves_nothing():
    run = Run(Case(1, 50, 5, 0.5, 0.0, 1, 16, 5, "paced", 1.0, 1.0))
    run.start()
    for unknown in (-1, 5):
        with pytest.raises(IndexError, match="no feature"):
            run.rows.shift(np.array([0, unknown], dtype=np.int32), np.array([7, 7]), 0)
    assert not run.rows.z.any()


@pytest.mark.parametrize("n_cols", [2**16, 2**16 + 1, 70_000])
@pytest.mark.parametrize("schedule", ["shrinking", "paced"])
@pytest.mark.parametrize("resolution", [16, 2**14])
def test_loud_ids_of_two_and_four_bytes(n_cols, schedule, resolution):
    case = Case(seed=7, n_rows=40, n_cols=n_cols, density=0.5, spread=2.0, largest=2**14,
                resolution=resolution, steps=12, schedule=schedule, reach=10.0, loud_share=1.1)
    run = Run(case)
    assert run.rows.loud_of.dtype == (np.uint16 if n_cols <= 2**16 else np.int32)
    assert run.scores.score.dtype == (np.int64 if resolution == 2**14 else np.int32)
    run.whole(check_every=12)


def test_a_move_longer_than_one_slice():
    case = Case(seed=1, n_rows=600_000, n_cols=10, density=0.9, spread=0.0, largest=127,
                resolution=2**14, steps=2, schedule="shrinking", reach=10.0, loud_share=1.1)
    run = Run(case)
    run.start()
    run.shift_offset(0)
    for feature, weight in enumerate(run.weights.tolist()):
        run.move(feature, weight)
    assert run.paths["long move"] == 2, run.paths


def test_a_return_to_the_calendar_longer_than_one_slice():
    """Putting a row on the calendar counts as eight entries of work, so 600,000 take two slices."""
    case = Case(seed=2, n_rows=600_000, n_cols=8, density=0.9, spread=2.0, largest=1,
                resolution=1, steps=30, schedule="shrinking", reach=1.0, loud_share=1.1)
    run = Run(case)
    common, rare = np.argsort((run.X != 0).sum(axis=0))[[-1, 0]]
    run.start()
    for step, weight in enumerate(run.weights.tolist()):
        run.move(common if step < 3 else rare, weight)
    assert run.paths["sweep"] > 3
    assert run.paths["calendar after a sweep"] > 3, run.paths
    run.check_invariants()


@pytest.mark.parametrize("n_rows, kind", [(3, np.int32), (4, np.int64), (8, np.int64)])
def test_sums_take_64_bits_as_soon_as_32_could_overflow(n_rows, kind):
    """All derivatives swing from -R to R over entries of 2^14: a change of n_rows * 2^29."""
    X = np.full((n_rows, 1), 2**14)
    parts = (np.zeros(n_rows, dtype=np.int32), np.full(n_rows, 2**16 - 1, dtype=np.uint16),
             STRAIGHT, 2**14, np.full(4, STRAIGHT_SCALE))
    eager = Eager(X, *parts)
    rows = Rows(ColumnTable(n_rows, *column_arrays(X)), np.zeros(1, dtype=np.int32), *parts, False)
    scores = Scores(1, rows, 1, 40)
    rows.place(0)
    scores.absorb(rows.first_scores())
    assert scores.score.dtype == kind
    for weight in (1, -2, 2):
        eager.move(0, weight)
        scores.absorb(rows.move(0, weight))
        assert abs(eager.scores[0]) == n_rows * 2**28
        assert scores.score[0] == eager.scores[0]
        scores._check()


def test_moves_outside_the_plan_are_refused():
    run = Run(Case(seed=3, n_rows=5, n_cols=3, density=1.0, spread=0.0, largest=1, resolution=4,
                   steps=1, schedule="paced", reach=1.0, loud_share=1.1))
    run.start()
    for feature in (-1, 3):
        with pytest.raises(IndexError, match="no feature"):
            run.rows.move(feature, 1)
    run.move(0, 1)
    with pytest.raises(IndexError, match="every planned move"):
        run.rows.move(0, 1)
    run.check_invariants()


@pytest.mark.parametrize("resolution", [1, 16, 2**14])
def test_the_logistic_table_against_many_digits(resolution):
    """Nodes to half a unit of 2^-16 / R; between them a chord, within 8e-7 at every resolution.

    Source: expit in 40 digits, by mpmath.
    """
    nodes = Logistic().nodes(resolution)
    unit = resolution * 2**16
    assert nodes.shape == (4097,)
    with mpmath.workdps(40):
        exact = [unit / (1 + mpmath.exp(-(mpmath.mpf(k) / 128 - 16))) for k in range(4097)]
        apart = [abs(int(node) - value) for node, value in zip(nodes, exact)]
    assert max(apart) <= 0.5 + 1e-6
    margins = np.arange(-(2**21), 2**21, 37)
    fine = fine_derivatives(nodes, margins) / unit
    real = 1 / (1 + np.exp(-margins * MARGIN_UNIT))
    assert abs(fine - real).max() <= 8e-7 + 1.5 / unit
