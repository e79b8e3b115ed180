"""What one row can do: neighbouring tables run through one public history, side by side.

A row moves every score by at most R * M quantisation steps (add-remove), a changed row by at most
2 * R * M (replace-one), whatever the picks, weights and intercepts were; and no other row is
touched by it at all.
"""

from __future__ import annotations

import dataclasses
import math
from collections import Counter
from fractions import Fraction
from typing import NamedTuple

import numpy as np
import pytest
import scipy.sparse as sp
from hypothesis import given, settings
from hypothesis import strategies as st
from reference import MARGIN_UNIT, course, pick_probabilities

import sordino
from sordino._core.rows import Rows
from sordino._core.scores import Scores
from sordino.errors import InputError
from sordino.fit import _stored_rate, open_rooms
from sordino.table import build_table


class Data(NamedTuple):
    """Records: entries float64 (n, d), labels (n,) of 0 and 1, dithers uint16 (n,)."""

    X: np.ndarray
    y: np.ndarray
    dither: np.ndarray

    def array(self, n, dtype):
        """The dithers, in place of random bits."""
        assert n == len(self.dither) and dtype == self.dither.dtype
        return self.dither


class Neighbours(NamedTuple):
    """Two tables; rows `kept[0]` of the one are rows `kept[1]` of the other."""

    data: tuple[Data, Data]
    kept: tuple[np.ndarray, np.ndarray]


class Side:
    """Rows and scores of one of two neighbouring tables, as a fit opens them."""

    def __init__(self, plan, data: Data):
        self.plan = plan
        self.table = build_table(sp.csr_array(data.X), data.y, plan.facts, plan.entry_levels)
        self.rows, self.scores_room = open_rooms(plan, self.table, data)

    def with_curve(self, nodes, limit: int) -> Side:
        """The same side with another table of derivatives and another limit on them."""
        rows = self.rows
        self.rows = Rows(rows.table, rows.loud, rows.target, rows.dither, nodes, limit, rows.scale,
                         self.plan.schedule == "shrinking", rows.offset_unit)
        self.scores_room = Scores(self.plan.facts.features, self.rows, 1, 40)
        return self

    def start(self, intercept: int):
        self.rows.place(intercept)
        self.scores_room.absorb(self.rows.first_scores())

    def follow(self, event: tuple):
        """A move (feature, weight), or coefficients beside the moves (features, weights, intercept)
        with a feature and a weight or none."""
        if len(event) == 2:
            self.scores_room.absorb(self.rows.move(*event))
            return
        features, weights, intercept = event
        self.rows.shift_offset(np.array(features, dtype=np.int32),
                               np.array(weights, dtype=np.int64), intercept)
        self.scores_room.absorb(self.rows.catch_up())

    @property
    def scores(self) -> np.ndarray:
        """int64 (d,): every score, in quantised units; kept ones as they are kept."""
        scores = np.array([self.rows.score(j) for j in range(self.plan.facts.features)])
        loud = self.rows.loud
        assert (self.scores_room.score[: len(loud)] == scores[loud]).all()
        return self.table.unit * scores

    @property
    def ways(self) -> tuple:
        """How rows were refreshed so far."""
        return self.rows.counters["sweeps"], self.rows.counters["due"]


def together(one: Side, other: Side, history):
    """Take both sides through the history, pausing before the first move and after every event."""
    first, *rest = history
    for side in (one, other):
        side.start(*first)
    yield
    for event in rest:
        for side in (one, other):
            side.follow(event)
        yield


def largest_move(one: Side, other: Side, history) -> int:
    """The most by which any one score parts, in quantised units, at any time."""
    return max(int(abs(one.scores - other.scores).max()) for _ in together(one, other, history))


# --- random neighbours and histories -------------------------------------------------------------


def random_records(rng, n: int, bound: np.ndarray, entries: str) -> Data:
    """Entries as shares of their bounds, some of them past it."""
    d = len(bound)
    held = rng.random((n, d)) < rng.choice([0.05, 0.3, 1.0])
    values = {
        "0/1": np.ones((n, d)),
        "one value": np.full((n, d), 0.3),
        "halves": rng.integers(-2, 3, (n, d)) / 2,
        "real": rng.normal(0, 1, (n, d)),
        "far beyond": rng.choice([-1e6, 1e6, 1.0], (n, d)),
    }[entries]
    return Data(bound * held * values, rng.integers(0, 2, n).astype(float),
                rng.integers(0, 2**16, n).astype(np.uint16))


def random_neighbours(rng, plan, entries: str, own_entries: str) -> Neighbours:
    """The plan's rows, and one row more at any place, or one row changed in all it holds."""
    n, bound = plan.facts.rows, plan.facts.entry_bound
    one = random_records(rng, n, bound, entries)
    row = random_records(rng, 1, bound, own_entries)
    at = int(rng.integers(n))
    others = np.delete(np.arange(n), at)
    if plan.guarantee.neighbours == "replace-one":
        swapped = Data(*(np.concatenate([a[:at], b, a[at + 1:]]) for a, b in zip(one, row)))
        return Neighbours((one, swapped), (others, others))
    grown = Data(*(np.concatenate([a[:at], b, a[at:]]) for a, b in zip(one, row)))
    return Neighbours((one, grown), (np.arange(n), np.delete(np.arange(n + 1), at)))


def random_plan(rng, n, d, relation, schedule, steps, resolution, entry_levels):
    """A plan whose resolution and entry levels are as asked for."""
    facts = sordino.PublicFacts(features=d, rows=n, entry_bound=rng.uniform(0.5, 2, d))
    guarantee = sordino.Guarantee(1.0, 1e-6, relation)
    plan = sordino.plan_fit(facts, guarantee, method="frank-wolfe", steps=steps, schedule=schedule,
                            radius=float(rng.choice([0.5, 10.0, 300.0])))
    return dataclasses.replace(plan, resolution=resolution, entry_levels=entry_levels)


def random_history(rng, plan) -> list[tuple]:
    """The first intercept, then moves of any features, and now and then a new intercept together
    with coefficients that no move shrinks."""
    def intercept():
        return int(rng.choice([0.0, 15.0, -15.0, *rng.normal(0, 2, 3)]) / MARGIN_UNIT)

    def beside():
        features = rng.integers(0, plan.facts.features, rng.integers(3)).tolist()
        weights = [int(w) for w in np.rint(rng.normal(0, 2, len(features)) * 2**25)]
        return features, weights, intercept()

    history = [(intercept(),)]
    for weight in course(plan.schedule, plan.steps)[0].tolist():
        if rng.random() < 0.1:
            history.append(beside())
        feature = int(rng.integers(min(plan.facts.features, rng.choice([1, 1000]))))
        history.append((feature, weight * int(rng.choice([-1, 1]))))
    return history


kinds = st.sampled_from(["0/1", "one value", "halves", "real", "far beyond"])
cases = st.fixed_dictionaries({
    "seed": st.integers(0, 2**32),
    "n": st.one_of(st.integers(1, 30), st.integers(100, 400)),
    "d": st.integers(1, 12),
    "entries": kinds,
    "own_entries": kinds,
    "relation": st.sampled_from(["add-remove", "replace-one"]),
    "schedule": st.sampled_from(["paced", "shrinking", "shrinking"]),
    "steps": st.integers(1, 40),
    "resolution": st.sampled_from([2**power for power in range(15)]),
    "entry_levels": st.sampled_from([1, 2, 100, 2**14]),
})


def opened(seed, n, d, entries, own_entries, relation, schedule, steps, resolution, entry_levels):
    """(plan, neighbours, both sides, history) of one case."""
    rng = np.random.default_rng(seed)
    plan = random_plan(rng, n, d, relation, schedule, steps, resolution, entry_levels)
    neighbours = random_neighbours(rng, plan, entries, own_entries)
    sides = tuple(Side(plan, data) for data in neighbours.data)
    return plan, neighbours, sides, random_history(rng, plan)


def over_cases(check, examples: int):
    """check(plan, neighbours, sides, history) over so many cases."""
    @settings(max_examples=examples, deadline=None, derandomize=True, database=None)
    @given(cases)
    def each(case):
        check(*opened(**case))

    each()


# --- what is promised ----------------------------------------------------------------------------


def test_one_row_moves_scores_and_their_total_by_no_more_than_promised():
    reached = Counter()

    def check(plan, neighbours, sides, history):
        most = plan.resolution * plan.guarantee.swap_factor
        one, other = sides
        for _ in together(one, other, history):
            move = abs(one.scores - other.scores).max()
            assert move <= most * plan.entry_levels
            assert abs(one.rows.total() - other.rows.total()) <= most
            reached[plan.guarantee.neighbours] += move == most * plan.entry_levels

    over_cases(check, 500)
    assert reached["add-remove"] > 0 and reached["replace-one"] > 0, "the bound is met"


def test_no_other_row_is_touched():
    """Margins and derivatives of all other rows are the same on both tables, at every step, where
    the two tables store entries in different units and refresh their rows in different ways too."""
    seen = Counter()

    def check(plan, neighbours, sides, history):
        one, other = sides
        mine, theirs = neighbours.kept
        for _ in together(one, other, history):
            assert (one.rows.q[mine] == other.rows.q[theirs]).all()
            z = [side.table.unit * side.rows.z for side in sides]
            assert (z[0][mine] == z[1][theirs]).all()
            assert (one.rows.offset[mine] == other.rows.offset[theirs]).all()
        seen["units differ"] += one.table.unit != other.table.unit
        seen["ways differ"] += one.ways != other.ways
        seen["sweeps"] += one.ways[0] > 0
        seen["due"] += one.ways[1] > 0

    over_cases(check, 500)
    assert all(seen[what] >= 10 for what in ("units differ", "ways differ", "sweeps", "due")), seen


@pytest.mark.parametrize("steps, numerator", [(3, 4915), (100, 10921), (200, 10481)])
def test_a_row_cannot_change_the_margins_of_others_through_the_unit_of_storage(steps, numerator):
    """All rows hold one value, whose multiples times the scale round differently from those of 1;
    the row that comes in holds another value, so entries can no longer be stored as ones."""
    facts = sordino.PublicFacts(features=1, rows=2000)
    plan = sordino.plan_fit(facts, sordino.Guarantee(1.0, 1e-6), steps=steps, radius=10.0)
    plan = dataclasses.replace(plan, resolution=2**14)
    rng = np.random.default_rng(1)
    dither = rng.integers(0, 2**16, 2001).astype(np.uint16)
    X = np.append(np.full(2000, numerator / plan.entry_levels), 1.0)[:, None]
    one = Side(plan, Data(X[:-1], np.zeros(2000), dither[:-1]))
    other = Side(plan, Data(X, np.zeros(2001), dither))
    for _ in together(one, other, [(0,)] + steps * [(0, 1)]):
        assert (one.rows.q == other.rows.q[:-1]).all()


@pytest.mark.parametrize("epsilon", [1e-9, 1e-6, 1e-4, 1.0])
def test_whether_a_plan_can_run_is_not_for_one_row_to_decide(epsilon):
    """A rate too small for 64 bits is refused by the plan, not by a fit whose entries need it."""
    facts = sordino.PublicFacts(features=2, rows=10)
    try:
        plan = sordino.plan_fit(facts, sordino.Guarantee(epsilon), steps=100_000, intercept=False)
    except InputError:
        return
    ones = np.eye(10, 2)
    for own in ([1.0, 0.0], [0.3, 0.0]):
        data = Data(np.vstack([ones, own]), np.zeros(11), np.zeros(11, dtype=np.uint16))
        Side(plan, data)


def test_the_law_of_a_pick_moves_by_no_more_than_its_epsilon():
    """In whole numbers, and in logarithms of the closed form.

    log p(j, s) is ln 2 * kappa * u up to a constant, so its change has the range of that of u.
    """
    def check(plan, neighbours, sides, history):
        one, other = sides
        kappa = Fraction(plan.multiplier, 2**plan.shift)
        factor = {"add-remove": 2, "replace-one": 4}[plan.guarantee.neighbours]
        assert plan.swap_range == factor * plan.resolution * plan.entry_levels
        promised = float(kappa * plan.swap_range) * math.log(2)
        assert plan.pick_epsilon == pytest.approx(promised, rel=1e-14)
        for side in sides:
            lift, shift = _stored_rate(plan, side.table)
            assert Fraction(plan.multiplier << lift, 2**shift) == kappa * side.table.unit
        for _ in together(one, other, history):
            move = one.scores - other.scores
            utilities = np.concatenate([move, -move])
            assert np.ptp(utilities) <= plan.swap_range
            laws = [pick_probabilities(side.scores, kappa) for side in sides]
            with np.errstate(divide="ignore"):
                logs = np.log(laws[0]), np.log(laws[1])
            seen = np.isfinite(logs[0]) & np.isfinite(logs[1])
            assert np.ptp(logs[0][seen] - logs[1][seen]) <= plan.pick_epsilon * (1 + 1e-9) + 1e-9

    over_cases(check, 150)


# --- a planted bug -------------------------------------------------------------------------------


@pytest.mark.parametrize("relation", ["add-remove", "replace-one"])
@pytest.mark.parametrize("schedule", ["paced", "shrinking"])
def test_derivatives_that_are_not_clipped_are_found_out(relation, schedule):
    """A curve three times too steep does no harm while derivatives are clipped; unclipped, it does.

    The same function finds both.
    """
    def worst(limit_factor: int) -> Fraction:
        """The largest move over ten cases, as a share of what is promised."""
        shares = []
        for seed in range(10):
            plan, _, sides, history = opened(seed, 20, 5, "real", "far beyond", relation, schedule,
                                             20, 64, 2**14)
            for side in sides:
                side.with_curve(3 * side.rows.nodes, limit_factor * plan.resolution)
            promised = plan.swap_range // 2
            shares.append(Fraction(largest_move(*sides, history), promised))
        return max(shares)

    assert worst(limit_factor=1) == 1
    assert worst(limit_factor=3) > 1
