"""Learned bounds: what a row contributes, how far it moves the losses, and what is then picked."""

from __future__ import annotations

import math
from fractions import Fraction

import mpmath
import numpy as np
import pytest
import scipy.sparse as sp
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.stats import chi2
from test_table import (
    FORMS,
    MALFORMED,
    Case,
    arrays_of,
    cases,
    freeze,
    labels_of,
    malformed,
    snapshot,
)

from sordino import table as door
from sordino._core.bits import Bits
from sordino.accounting import Cost, pick_cost
from sordino.bounds import (
    ENTRY_QUANTILES,
    FAILURE,
    GRID,
    LABEL_QUANTILES,
    SIGNED_GRID,
    QuantilePick,
    learned_entry_bound,
    learned_label_range,
    loss_range,
    planned_quantile,
    private_quantile,
    quantile_rate,
)
from sordino.errors import InputError
from sordino.facts import BOUNDS
from sordino.table import build_table, sampled_magnitudes, sound_matrix

P_FAIL = 1e-8       # of each chi-square test; their seeds are fixed
DIGITS = 50

repeatable = settings(max_examples=200, deadline=None, derandomize=True, database=None)

RELATIONS = ("add-remove", "replace-one")
ENTRY, LABEL = ENTRY_QUANTILES[0], LABEL_QUANTILES[0]


def pick_of(quantile, budget: Cost, relation="add-remove", rows_per_person=1) -> QuantilePick:
    """A pick of that quantile at the largest rate within the budget."""
    units = loss_range(*quantile, rows_per_person, relation)
    return QuantilePick(*quantile, *quantile_rate(budget, units))


def zcdp(rho: float) -> Cost:
    return Cost(rho, math.inf)


def pure(epsilon: float) -> Cost:
    return Cost(math.inf, epsilon)


SURE = {quantile: pick_of(quantile, pure(1e6)) for quantile in (ENTRY, LABEL)}  # the best, always


# --- the grid

def test_the_grid():
    assert len(GRID) == 641 and len(SIGNED_GRID) == 1283
    assert (np.diff(SIGNED_GRID) > 0).all() and (SIGNED_GRID == -SIGNED_GRID[::-1]).all()
    assert GRID[::8].tolist() == [2.0**k for k in range(-40, 41)]
    with mpmath.workdps(DIGITS):
        for k, value in zip(range(-320, 321), GRID):
            exact = mpmath.mpf(2) ** (mpmath.mpf(k) / 8)
            assert abs(mpmath.mpf(float(value)) / exact - 1) < 2.0**-51
    assert BOUNDS[0] <= GRID[0] and GRID[-1] <= BOUNDS[1]


# --- losses

def losses_by_definition(quantile, contributions, grid) -> list[int]:
    (a, c), n = quantile, len(contributions)
    rounded = [min([b for b in grid if b >= v], default=math.inf) for v in contributions]
    below = [sum(v < b for v in rounded) for b in grid]
    up_to = [sum(v <= b for v in rounded) for b in grid]
    return [max(0, c * low - a * n, a * n - c * high) for low, high in zip(below, up_to)]


SMALL_GRID = np.array([-4.0, -1.0, 0.0, 0.5, 1.0, 2.0, 8.0])
values = st.sampled_from([-9.0, -4.0, -0.7, 0.0, 0.2, 0.5, 1.0, 1.5, 2.0, 7.0, 8.0, 9.0, 1e300])
samples = st.lists(values, max_size=12)
quantiles = st.sampled_from([*ENTRY_QUANTILES, *LABEL_QUANTILES, (1, 10), (2, 3)])


def losses_of(quantile, contributions, grid=SMALL_GRID) -> np.ndarray:
    pick = QuantilePick(*quantile, 1, 1)
    return pick.losses(np.array(contributions, dtype=np.float64), grid)


@repeatable
@given(samples, quantiles)
def test_losses_are_those_of_the_definition(contributions, quantile):
    losses = losses_of(quantile, contributions)
    assert losses.dtype == np.int64
    assert losses.tolist() == losses_by_definition(quantile, contributions, SMALL_GRID)
    inside = [v for v in contributions if v <= SMALL_GRID[-1]]
    if len(inside) == len(contributions):
        assert losses.min() == 0, "some candidate is the quantile"


@repeatable
@given(samples, quantiles)
def test_where_nothing_lies_the_loss_is_the_usual_one(contributions, quantile):
    """|c #(<= b) - a N| for b strictly between contributions."""
    a, c = quantile
    for b, loss in zip(SMALL_GRID, losses_of(quantile, contributions)):
        lower = max([x for x in SMALL_GRID if x < b], default=-math.inf)
        if not any(lower < v <= b for v in contributions):
            up_to = sum(v <= b for v in contributions)
            assert loss == abs(c * up_to - a * len(contributions))


@pytest.mark.parametrize("data, bound", [
    ([1.0] * 50, 1.0),                              # 0/1 data: not whatever lies above 1
    ([1.0] * 40 + [2.0] * 10, 2.0),                 # 0/1/2
    ([1.0] * 95 + [2.0] * 5, 1.0),
    ([3.0] * 50, 2 ** (13 / 8)),                    # rounded up to the grid: 3.084...
])
def test_whole_numbers_have_one_best_candidate(data, bound):
    losses = losses_of(ENTRY, data, GRID)
    best = np.flatnonzero(losses == 0)
    assert GRID[best] == pytest.approx([bound], rel=1e-15)
    others = np.delete(losses, best)
    assert others.min() >= len(data) / 4


def per_row(quantile, relation: str) -> int:
    """The promised sensitivity to one row, written out."""
    a, c = quantile
    return max(a, c - a) if relation == "add-remove" else c


@repeatable
@given(samples, values, quantiles)
def test_a_row_more_moves_no_loss_by_more_than_promised(contributions, value, quantile):
    one = losses_of(quantile, contributions)
    other = losses_of(quantile, [*contributions, value])
    assert abs(one - other).max() <= per_row(quantile, "add-remove")


@repeatable
@given(samples, st.none() | values, st.none() | values, quantiles)
def test_a_row_in_anothers_place_moves_no_loss_by_more_than_promised(rest, old, new, quantile):
    """Either row may also contribute nothing."""
    one, other = (
        losses_of(quantile, rest + [v for v in [value] if v is not None]) for value in (old, new)
    )
    assert abs(one - other).max() <= per_row(quantile, "replace-one")


@repeatable
@given(samples, st.lists(values, max_size=4), st.lists(values, max_size=4), quantiles,
       st.sampled_from(RELATIONS))
def test_a_person_moves_losses_within_the_promised_range(rest, old, new, quantile, relation):
    """A person of at most r rows; under "replace-one" another takes the place."""
    rows = max(len(old), len(new), 1)
    if relation == "add-remove":
        rows, new = max(len(old), 1), []
    change = losses_of(quantile, rest + old) - losses_of(quantile, rest + new)
    assert change.max() - change.min() <= loss_range(*quantile, rows, relation)
    assert abs(change).max() * 2 <= loss_range(*quantile, rows, relation)


@pytest.mark.parametrize("quantile", [ENTRY, LABEL, (1, 2)])
@pytest.mark.parametrize("relation, rest, old, new", [
    ("add-remove", [-4.0] * 9 + [1.0] * 3, [8.0], []),
    ("replace-one", [0.5] * 100, [-4.0], [8.0]),
])
def test_the_promised_sensitivity_is_reached(quantile, relation, rest, old, new):
    change = losses_of(quantile, rest + old) - losses_of(quantile, rest + new)
    assert abs(change).max() == per_row(quantile, relation)


def test_loss_ranges():
    assert loss_range(9, 10, 1, "add-remove") == loss_range(1, 10, 1, "add-remove") == 18
    assert loss_range(9, 10, 1, "replace-one") == 20
    assert loss_range(9, 10, 5, "replace-one") == 100
    assert loss_range(39, 40, 3, "add-remove") == 234


# --- what a pick costs

@pytest.mark.parametrize("rho", [1e-12, 1e-6, 0.001, 0.02436, 1.0, 30.0])
@pytest.mark.parametrize("quantile", [(1, 2), ENTRY, LABEL])
@pytest.mark.parametrize("relation", RELATIONS)
@pytest.mark.parametrize("rows_per_person", [1, 7, 10_000])
def test_a_rate_keeps_to_its_zcdp_budget(rho, quantile, relation, rows_per_person):
    pick = pick_of(quantile, zcdp(rho), relation, rows_per_person)
    assert 2**19 <= pick.multiplier < 2**20 and 1 <= pick.shift <= 62
    cost = pick.cost(rows_per_person, relation)
    assert cost == pick_cost(pick.epsilon(rows_per_person, relation))
    assert (1 - 1e-5) * rho < cost.zcdp <= rho
    units = 2 * rows_per_person * per_row(quantile, relation)
    with mpmath.workdps(DIGITS):
        exact = mpmath.mpf(pick.multiplier) / 2**pick.shift * mpmath.log(2) * units
        assert abs(exact / cost.pure - 1) < 1e-15
        assert exact**2 / 8 <= rho


@pytest.mark.parametrize("epsilon", [1e-6, 0.1, 1.0, 100.0])
@pytest.mark.parametrize("quantile", [(1, 2), ENTRY, LABEL])
def test_a_rate_keeps_to_its_pure_budget(epsilon, quantile):
    cost = pick_of(quantile, pure(epsilon)).cost(1, "add-remove")
    assert (1 - 1e-5) * epsilon < cost.pure <= epsilon
    both = pick_of(quantile, Cost(epsilon**2 / 32, epsilon)).cost(1, "add-remove")
    assert both.pure == pytest.approx(epsilon / 2, rel=1e-5)
    assert both.zcdp <= epsilon**2 / 32


@pytest.mark.parametrize("budget", [pure(1e9), Cost(math.inf, math.inf)])
def test_a_boundless_budget_gives_a_rate_that_fits(budget):
    multiplier, shift = quantile_rate(budget, 2)
    assert multiplier <= 2**20 and 1 <= shift <= 62


@pytest.mark.parametrize("budget", [Cost.nothing(), zcdp(1e-45), Cost(1.0, 1e-20)])
def test_too_small_a_budget(budget):
    with pytest.raises(InputError, match="is too small to learn a bound with"):
        quantile_rate(budget, 18)


@pytest.mark.parametrize("fields", [
    (10, 10, 5, 5), (0, 10, 5, 5), (1, 1, 5, 5), (1, 2000, 5, 5), (9, 10, 0, 5), (9, 10, 5, 0),
    (9, 10, 2**20 + 1, 5), (9, 10, 5, 63), (9.0, 10, 5, 5), (9, 10, True, 5), (9, 10, "5", 5),
])
def test_what_cannot_be_a_pick(fields):
    with pytest.raises(InputError, match="of a quantile must be|a quantile must be"):
        QuantilePick(*fields)


# --- planning

@pytest.mark.parametrize("rows, rho, relation, planned", [
    (10_000, 0.001, "add-remove", LABEL_QUANTILES[1]),      # 19/20: 356 of 500 rows
    (100_000, 0.001, "add-remove", LABEL_QUANTILES[0]),
    (10_000, 0.01, "add-remove", LABEL_QUANTILES[0]),
    (5_000, 0.001, "add-remove", LABEL_QUANTILES[2]),
])
def test_a_quantile_that_so_many_rows_can_settle(rows, rho, relation, planned):
    pick = planned_quantile(LABEL_QUANTILES, 1283, zcdp(rho), rows, 1, relation)
    assert (pick.a, pick.c) == planned and pick == pick_of(planned, zcdp(rho), relation)
    assert pick.rank_error(1283, FAILURE) <= (1 - pick.a / pick.c) * rows
    for quantile in LABEL_QUANTILES[: LABEL_QUANTILES.index(planned)]:
        further = pick_of(quantile, zcdp(rho), relation)
        assert further.rank_error(1283, FAILURE) > (1 - quantile[0] / quantile[1]) * rows


def test_too_few_rows_to_learn_from():
    pattern = "^300 rows are too few to learn a bound from at pick epsilon 0.0894: state the bound$"
    with pytest.raises(InputError, match=pattern):
        planned_quantile(ENTRY_QUANTILES, len(GRID), zcdp(0.001), 300, 1, "add-remove")


def test_several_rows_per_person_need_more_rows():
    few = planned_quantile(ENTRY_QUANTILES, len(GRID), zcdp(0.001), 10_000, 1, "replace-one")
    many = planned_quantile(ENTRY_QUANTILES, len(GRID), zcdp(0.001), 10_000, 5, "replace-one")
    assert (few.a, few.c) == (9, 10) and (many.a, many.c) == (4, 5)
    assert few.cost(1, "replace-one").zcdp == pytest.approx(0.001, rel=1e-5)
    assert many.cost(5, "replace-one").zcdp == pytest.approx(0.001, rel=1e-5)


# --- probabilities

def chances(losses, pick: QuantilePick) -> list:
    """The probabilities that losses stand for at the rate of a pick, by mpmath."""
    kappa = mpmath.mpf(pick.multiplier) / 2**pick.shift
    weights = [mpmath.mpf(2) ** (-kappa * int(loss)) for loss in losses]
    total = mpmath.fsum(weights)
    return [weight / total for weight in weights]


@settings(repeatable, max_examples=60)
@given(samples, st.lists(values, min_size=1, max_size=3), st.lists(values, max_size=3), quantiles,
       st.sampled_from(RELATIONS), st.sampled_from([0.01, 0.3, 2.0]))
def test_neighbours_are_told_apart_by_no_more_than_the_cost_says(
    rest, old, new, quantile, relation, epsilon
):
    """Probabilities within exp(epsilon), and their log-ratios within a range of epsilon."""
    new = new if relation == "replace-one" else []
    rows = max(len(old), len(new))
    pick = pick_of(quantile, pure(epsilon), relation, rows)
    with mpmath.workdps(DIGITS):
        kappa = mpmath.mpf(pick.multiplier) / 2**pick.shift
        promised = kappa * mpmath.log(2) * 2 * rows * per_row(quantile, relation)
        ratios = [
            mpmath.log(p / q) for p, q in zip(
                chances(losses_of(quantile, rest + old), pick),
                chances(losses_of(quantile, rest + new), pick),
            )
        ]
        assert max(ratios) - min(ratios) <= promised * (1 + mpmath.mpf(10) ** -40)
        assert max(map(abs, ratios)) <= promised
        assert promised <= epsilon


# --- picking

# Quantile of {1, 2, 3, 4, 5} in [0, 10], q = 1/2, epsilon = 1, by P(interval k) proportional to
# length * exp(-epsilon |k - qn| / 2): Smith 2011, worked out apart from this code.
WORKED = [0.0678702, 0.11189905, 0.18449034, 0.18449034, 0.11189905, 0.33935102]


def worked_example() -> tuple[np.ndarray, QuantilePick]:
    """Losses of ten candidates, one in the middle of each unit cell of [0, 10], and the pick.

    The contributions lie on candidates of their own between those. The example reckons with a
    sensitivity of 1 of |k - n/2|, where 1/2 is true: so its epsilon 1 is one of 1/2 here.
    """
    grid = np.arange(1, 21) / 2
    losses = losses_of((1, 2), [1, 2, 3, 4, 5], grid)[::2]
    assert losses.tolist() == [5, 3, 1, 1, 3, 5, 5, 5, 5, 5]
    return losses, pick_of((1, 2), pure(0.5))


def test_the_worked_example_by_its_weights():
    losses, pick = worked_example()
    found = [float(p) for p in chances(losses, pick)]
    assert [*found[:5], sum(found[5:])] == pytest.approx(WORKED, abs=1e-6)


def assert_fits(draws, expected):
    counts = np.bincount(draws, minlength=len(expected))
    wanted = len(draws) * np.asarray(expected, dtype=float)
    assert wanted.min() >= 10
    assert ((counts - wanted) ** 2 / wanted).sum() < chi2.isf(P_FAIL, len(expected) - 1)


def test_the_worked_example_by_drawing():
    losses, pick = worked_example()
    bits = Bits(21)
    draws = [
        min(private_quantile(losses, pick.multiplier, pick.shift, bits), 5) for _ in range(20_000)
    ]
    assert_fits(draws, WORKED)


@pytest.mark.parametrize("epsilon", [0.05, 0.5, 1.5])
def test_candidates_are_drawn_with_the_probabilities_of_their_losses(epsilon):
    contributions = np.array([0.2, 0.5, 0.5, 1.5, 2.0, 7.0])
    pick, bits = pick_of(ENTRY, pure(epsilon)), Bits(22)
    place = {b: k for k, b in enumerate(SMALL_GRID)}
    draws = [place[pick.of(contributions, SMALL_GRID, bits)] for _ in range(20_000)]
    assert_fits(draws, chances(losses_of(ENTRY, contributions), pick))


class Scripted:
    """Proposals in order; `asked` is what each acceptance was asked with."""

    def __init__(self, proposals):
        self.proposals = iter(proposals)
        self.asked = []

    def below(self, n):
        return next(self.proposals)

    def bernoulli_pow2(self, whole, part, b):
        assert 0 <= part < 2**b
        self.asked.append(whole + Fraction(part, 2**b))
        return len(self.asked) == 3


def test_a_proposal_is_accepted_by_its_excess_over_the_least_loss():
    bits = Scripted([0, 1, 2])
    assert private_quantile(np.array([7, 2**40 + 2, 2]), 3, 4, bits) == 2
    assert bits.asked == [Fraction(3 * 5, 16), Fraction(3 * 2**40, 16), 0]


def test_the_largest_losses_fit():
    """2^31 rows on the wrong side of a candidate, in the most parts, at the largest rate."""
    losses = np.array([2**10 * 2**31, 0])
    assert private_quantile(losses, 2**20, 1, Bits(1)) == 1


def test_a_failing_source_is_an_error():
    with pytest.raises(OSError):
        private_quantile(np.zeros(5, dtype=np.int64), 1, 1, Bits(refill=lambda n: b""))


# --- what is learned

def chance_outside(pick, contributions, grid, least, most) -> float:
    """Probability that the pick lies outside [least, most], from the weights."""
    with mpmath.workdps(DIGITS):
        found = chances(pick.losses(contributions, grid), pick)
        return float(mpmath.fsum(p for p, b in zip(found, grid) if not least <= b <= most))


def one_step_up(value: float) -> float:
    return float(GRID[np.searchsorted(GRID, value)])


MAGNITUDES = {
    "log-normal": lambda rng, n: rng.lognormal(3, 1, n),
    "1 % scaled by 100": lambda rng, n: (
        rng.lognormal(0, 1, n) * np.where(rng.random(n) < 0.01, 100, 1)
    ),
    "Cauchy": lambda rng, n: abs(rng.standard_cauchy(n)),
    "counts": lambda rng, n: rng.geometric(0.3, n).astype(float),
    "genotypes": lambda rng, n: rng.choice([1.0, 2.0], n),
    "ones": lambda rng, n: np.ones(n),
    "tiny": lambda rng, n: rng.uniform(1e-9, 2e-9, n),
}


@pytest.mark.parametrize("relation", RELATIONS)
@pytest.mark.parametrize("kind", MAGNITUDES)
def test_the_entry_bound_is_near_its_quantile(kind, relation):
    """10,000 rows, zCDP 0.001: between the true 85 % and 95 % quantiles, rounded up to the grid.

    The probability to miss, from the weights themselves, is below 1e-7; the draw has a seed.
    """
    magnitudes = MAGNITUDES[kind](np.random.default_rng(31), 10_000)
    pick = pick_of(ENTRY, zcdp(0.001), relation)
    least, most = np.quantile(magnitudes, [0.85, 0.95], method="inverted_cdf")
    least, most = one_step_up(least), one_step_up(most)
    assert chance_outside(pick, magnitudes, GRID, least, most) < 1e-7
    bound = learned_entry_bound(magnitudes, pick, Bits(35))
    assert isinstance(bound, float) and least <= bound <= most


LABELS = {
    "normal": lambda rng, n: rng.normal(0, 3, n),
    "shifted": lambda rng, n: rng.normal(3500, 500, n),
    "all negative": lambda rng, n: -rng.lognormal(2, 1, n),
    "0/1": lambda rng, n: rng.integers(0, 2, n).astype(float),
    "counts": lambda rng, n: rng.poisson(1, n).astype(float),
    "heavy tails": lambda rng, n: rng.standard_t(1.5, n),
}


@pytest.mark.parametrize("kind", LABELS)
def test_the_label_range_is_near_its_quantiles(kind):
    """10,000 rows, zCDP 0.01 for each end: between the 0.5 % and 4.5 % quantiles at either end,
    rounded outwards. From the weights, each end misses with probability below 1e-7."""
    labels = LABELS[kind](np.random.default_rng(32), 10_000)
    pick = pick_of(LABEL, zcdp(0.01))
    ends = {}
    for sign in (1, -1):
        side = sign * labels
        least, most = np.quantile(side, [0.955, 0.995], method="inverted_cdf")
        least, most = (SIGNED_GRID[np.searchsorted(SIGNED_GRID, v)] for v in (least, most))
        assert chance_outside(pick, side, SIGNED_GRID, least, most) < 1e-7
        ends[sign] = least, most
    low, high = learned_label_range(labels, pick, Bits(33))
    assert ends[1][0] <= high <= ends[1][1] and ends[-1][0] <= -low <= ends[-1][1]


def test_every_label_lies_within_a_range_learned_from_few_of_them():
    """At an enormous rate the ends are the extremes of 10 labels, rounded outwards."""
    labels = np.array([-5.0, -1, 0, 0, 1, 2, 3, 3, 3, 100])
    low, high = learned_label_range(labels, SURE[LABEL], Bits(1))
    assert low <= -5 < low * 2 ** (-1 / 8) and high * 2 ** (-1 / 8) < 100 <= high


@pytest.mark.parametrize("label, expected", [
    (0.0, (-GRID[0], GRID[0])),
    (1.0, (2 ** (-1 / 8), 2 ** (1 / 8))),
    (-1.0, (-(2 ** (1 / 8)), -(2 ** (-1 / 8)))),
    (5.0, (2 ** (18 / 8), 2 ** (19 / 8))),
    (GRID[-1], (GRID[-2], GRID[-1])),
    (-GRID[-1], (-GRID[-1], -GRID[-2])),
])
def test_labels_that_are_all_the_same(label, expected):
    low, high = learned_label_range(np.full(50, label), SURE[LABEL], Bits(1))
    assert (low, high) == pytest.approx(expected, rel=1e-15) and low < high


def test_a_range_is_never_empty():
    """Of no labels, either end is anything: crossed ends are exchanged, equal ones widened."""
    bits, nothing = Bits(2), np.zeros(0)
    for _ in range(300):
        low, high = learned_label_range(nothing, SURE[LABEL], bits)
        assert low < high and low in SIGNED_GRID and high in SIGNED_GRID


def test_a_bound_of_no_contributions_is_any_candidate():
    bits = Bits(3)
    drawn = {learned_entry_bound(np.zeros(0), SURE[ENTRY], bits) for _ in range(300)}
    assert drawn <= set(GRID) and len(drawn) > 100


@pytest.mark.parametrize("rho, failure", [(0.001, 1e-3), (0.01, 1e-9)])
@pytest.mark.parametrize("kind", MAGNITUDES)
def test_the_rank_error_bounds_what_the_weights_give(kind, rho, failure):
    magnitudes = MAGNITUDES[kind](np.random.default_rng(34), 5_000)
    pick = pick_of(ENTRY, zcdp(rho))
    most = pick.rank_error(len(GRID), failure) * pick.c
    losses = pick.losses(magnitudes, GRID)
    with mpmath.workdps(DIGITS):
        beyond = mpmath.fsum(p for p, loss in zip(chances(losses, pick), losses) if loss > most)
    assert beyond <= failure


def test_the_rank_error_of_an_ordinary_plan():
    """2 (9/10) (ln 641 + ln 1000) / epsilon rows at epsilon = sqrt(8 zcdp), by hand: 269."""
    rows = pick_of(ENTRY, zcdp(0.001)).rank_error(len(GRID), 1e-3)
    assert rows == pytest.approx(1.8 * math.log(641_000) / math.sqrt(0.008), rel=1e-4)
    assert 268 < rows < 270


# --- what a row contributes

class Keyed:
    """A source whose array is given."""

    def __init__(self, keys):
        self.keys = np.asarray(keys, dtype=np.uint32)

    def array(self, n, dtype):
        assert n == len(self.keys) and dtype == np.uint32
        return self.keys


def keys_of(n: int, seed: int) -> np.ndarray:
    keys = np.random.default_rng(seed).integers(0, 2**32, n, dtype=np.uint32)
    keys[: n // 4] = 2**32 - 1
    return keys


def contributions_by_definition(X: sp.csr_array, keys) -> list[float | None]:
    found = []
    for i, key in enumerate(keys):
        entries = [x for x in X.data[X.indptr[i]:X.indptr[i + 1]] if x != 0]
        found.append(abs(float(entries[int(key) * len(entries) >> 32])) if entries else None)
    return found


def magnitudes_of(X, keys, kept=None) -> list[float]:
    magnitudes = sampled_magnitudes(sound_matrix(X, X.shape[1]), Keyed(keys), kept)
    assert magnitudes.dtype == np.float64
    return magnitudes.tolist()


@repeatable
@given(cases, st.integers(0, 2**32), st.sampled_from([1, 3, 64, 2**21]))
def test_contributions_are_those_of_the_definition(case, seed, size):
    """Zeros that are stored do not count, in slices of any size, for all rows or some."""
    X, _ = case.draw()
    keys = keys_of(case.n_rows, seed)
    expected = contributions_by_definition(X, keys)
    kept = np.random.default_rng(seed).random(case.n_rows) < 0.5
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(door, "SLICE", size)
        assert magnitudes_of(X, keys) == [v for v in expected if v is not None]
        assert magnitudes_of(X, keys, kept) == [
            v for v, keeps in zip(expected, kept) if keeps and v is not None
        ]


@repeatable
@given(cases, st.integers(0, 2**32), st.data())
def test_a_row_contributes_the_same_whatever_the_others_hold(case, seed, data):
    """A row taken out, with its key: what the others contribute stays, in order."""
    X, _ = Case(**{**vars(case), "n_rows": case.n_rows + 1}).draw()
    keys = keys_of(X.shape[0], seed)
    out = data.draw(st.integers(0, case.n_rows))
    rest = np.arange(X.shape[0]) != out
    own = magnitudes_of(X[[out]], keys[[out]])
    before = magnitudes_of(X[:out], keys[:out]) if out else []
    after = magnitudes_of(X[out + 1:], keys[out + 1:]) if out < case.n_rows else []
    assert len(own) <= 1
    assert magnitudes_of(X, keys) == before + own + after
    assert magnitudes_of(X[rest], keys[rest]) == before + after


@pytest.mark.parametrize("dtype", [np.float32, np.float64, np.int8, np.int64, bool, np.longdouble])
@pytest.mark.parametrize("form", FORMS)
@pytest.mark.filterwarnings("ignore:the matrix subclass")
def test_every_form_and_type_contributes_the_same(form, dtype):
    X, _ = Case(41, 30, 20, 0.3, "0/1", 1.0, False).draw()
    keys = keys_of(30, 41)
    matrix = sound_matrix(FORMS[form](X.astype(dtype)), 20)
    assert sampled_magnitudes(matrix, Keyed(keys)).tolist() == magnitudes_of(X, keys)


def test_magnitudes_have_no_sign():
    X = sp.csr_array(np.array([[-3.5, 0], [0, 2], [0, 0], [0, -1e-300]]))
    assert magnitudes_of(X, [0, 0, 0, 0]) == [3.5, 2.0, 1e-300]
    assert magnitudes_of(sp.csr_array((3, 2)), [0, 1, 2]) == []


def test_every_entry_of_a_row_is_as_likely():
    n = 20_000
    X = sp.csr_array(np.tile([0.0, 1, 2, 0, 3, 4, 5, 6, 7], (n, 1)))
    magnitudes = sampled_magnitudes(sound_matrix(X, 9), Bits(42))
    assert_fits(magnitudes.astype(int) - 1, np.full(7, 1 / 7))


@pytest.mark.filterwarnings("ignore:indptr array has non-integer dtype")
@pytest.mark.parametrize("what", [name for name in MALFORMED if "label" not in name])
def test_malformed_tables_are_named_before_bounds_are_known(what):
    X, _, pattern = malformed(what)
    with pytest.raises(InputError, match=pattern):
        sound_matrix(X, 5)


@pytest.mark.parametrize("form", ["csr_array", "csc_array", "coo_array", "dense"])
@pytest.mark.parametrize("pool", ["0/1", "general"])
def test_a_table_is_built_from_what_was_checked(form, pool):
    """One conversion for all, and the caller's arrays are never written."""
    X, facts = Case(43, 50, 20, 0.3, pool, 1.0, True).draw()
    X.eliminate_zeros()
    given_form, y = freeze(FORMS[form](X)), labels_of(50)
    before, fractions = snapshot(given_form), []
    matrix = sound_matrix(given_form, 20, fractions.append)
    sampled_magnitudes(matrix, Bits(1))
    assert fractions[-1] == 1
    built = build_table(matrix, y, facts, 2**14)
    assert arrays_of(built) == arrays_of(build_table(X, y, facts, 2**14))
    assert snapshot(given_form) == before


def test_from_a_table_to_its_bound():
    """Entries of a hundred kinds of row; the bound is that of one entry per row, not of all."""
    rng = np.random.default_rng(45)
    n, d = 2_000, 50
    held = rng.random((n, d)) < 0.2
    held[:20] = True                                # a few long rows of large entries
    X = sp.csr_array(np.where(held, rng.uniform(0.5, 1.0, (n, d)), 0.0))
    X[:20] *= 1e6
    pick = planned_quantile(ENTRY_QUANTILES, len(GRID), zcdp(0.01), n, 1, "add-remove")
    bits = Bits(46)
    bound = learned_entry_bound(sampled_magnitudes(sound_matrix(X, d), bits), pick, bits)
    assert 0.8 < bound <= 1.0
