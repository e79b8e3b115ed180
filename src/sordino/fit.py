"""Run a plan on data, once: validate, draw, fit, release."""

from __future__ import annotations

import sys
import time
from collections.abc import Callable, Sequence

import numpy as np
from threadpoolctl import threadpool_limits

from ._core.bits import Bits
from ._core.crew import Crew
from ._core.rows import Rows
from ._core.scores import Scores
from .charging import account_of, charged
from .checks import whole_number
from .errors import InputError
from .intake import laid_out, taken_in
from .losses import MARGIN_UNIT
from .plan import GreedyPlan, Plan
from .plan.corrections import COEFFICIENT_UNIT, MOST_COEFFICIENT
from .release import Profile, Release
from .solvers.corrections import ChosenSet
from .solvers.frank_wolfe import frank_wolfe
from .solvers.greedy import greedy
from .solvers.intercept import MOST_INTERCEPT
from .solvers.solution import Solution
from .table import Table

MOST_THREADS = 256
PASSING = 1 / 16        # share of proposals that get past the bound set by the quiet powers


def fit(plan: Plan, X, y, *, persons=None, book=None, rehearsal_seed=None, progress=False,
        threads=1, names=None) -> Release:
    """Run `plan` on the data and return what may leave.

    X               (n, features) sparse in any scipy format, or dense; never modified
    y               (n,) labels as the facts describe them
    persons         (n,) ids of any type: whose each row is. Of a person with more rows than the
                    facts allow, as many as they allow are kept, chosen at random
    book            a BudgetBook, its path, or a part of one (`BudgetBook.part`: the fit then keeps
                    to the rows of its persons). Charged before the data is touched; a fit is
                    refused where too little is left. A rehearsal is free
    rehearsal_seed  a whole number makes a reproducible run, which is NOT private and says so
    progress        True prints to stderr; a callable gets (fraction done, what is being done)
    threads         that share the work; the release is the same for any number of them
    names           public feature names, one per feature: those of the chosen features are kept

    Raises InputError before anything is drawn if the data is malformed or does not match the facts.
    Ctrl-C ends a fit between two slices of work, with nothing released.
    """
    _check_options(threads, names, plan)
    crew = Crew(threads)
    seed, account = _checked_seed(rehearsal_seed), account_of(book)
    report = _reporter(progress)
    profile = Profile()
    with profile.phase("build"):
        intake = taken_in(plan, X, y, persons,
                          lambda part: report(0.1 * part, "checking the table"), account, crew)
    with charged(None if seed is not None else account, plan, persons) as spending:
        bits = Bits(seed)
        with profile.phase("build"):
            known, table = laid_out(plan, intake, bits,
                                    lambda part: report(0.1 + 0.2 * part, "laying out the table"),
                                    crew)
        with profile.phase("orient"):
            rows, scores = open_rooms(known, table, bits, crew)
        with profile.phase("solve"), threadpool_limits(threads, user_api="blas"):
            solution = _solve(known, table, rows, scores, bits,
                              lambda step: report(0.3 + 0.7 * step / plan.picks, "fitting"))
        bits.raise_failure()
    profile.take(table, rows, scores)
    return _release(plan, known, solution, bits.rehearsal, names, persons is not None, profile,
                    spending)


def open_rooms(plan: Plan, table: Table, bits: Bits,
               crew: Crew | None = None) -> tuple[Rows, Scores]:
    """The data side and the choice side for one run of a plan over a table."""
    loss, unit = plan.loss_form, table.unit / table.levels / MARGIN_UNIT
    powers = plan.knowledge.powers(plan.facts.features)
    lift, shift = _stored_rate(plan, table)
    multiplier = max(plan.multipliers) << lift
    rows = Rows(
        table.columns,
        loud_features(table, plan.resolution, multiplier, shift, powers),
        loss.targets(table.labels, plan.resolution),
        bits.array(table.n_rows, np.uint16),
        loss.nodes(plan.resolution),
        plan.resolution,
        plan.unit_margins() * unit,
        plan.shrinking,
        COEFFICIENT_UNIT * unit,
        crew,
    )
    scores = Scores(plan.facts.features, rows, multiplier, shift, powers)
    for feature in plan.barred:
        scores.bar(feature)
    return rows, scores


def _solve(plan: Plan, table: Table, rows: Rows, scores: Scores, bits: Bits, watch) -> Solution:
    chosen, start = ChosenSet(table, plan.limit), _start_in_bounds(plan)
    if not isinstance(plan, GreedyPlan):
        return frank_wolfe(plan, rows, scores, bits, chosen, start, watch)
    lift, _ = _stored_rate(plan, table)
    rates = [multiplier << lift for multiplier in plan.multipliers]
    return greedy(plan, rows, scores, bits, chosen, rates, start, watch)


def _start_in_bounds(plan: Plan) -> Solution | None:
    """The plan's public coefficients in the units of the solvers."""
    start, loss = plan.knowledge.start, plan.loss_form
    if start is None:
        return None
    values = plan.in_bounds(start.features, start.coefficients)
    limited = np.clip(values, -MOST_COEFFICIENT, MOST_COEFFICIENT)      # where bounds were learned
    coefficients = dict(zip(start.features, limited.tolist()))
    intercept = (start.intercept - loss.centre) / loss.unit
    return Solution(coefficients, min(max(intercept, -MOST_INTERCEPT), MOST_INTERCEPT))


def loud_features(table: Table, resolution: int, multiplier: int, shift: int,
                  powers=None) -> np.ndarray:
    """int32 ascending: features whose score can pass one level, kappa * R * sum_i |x_ij| > 1, and
    those with powers so high and rare that other features would seldom get past such a bound.

    Every other feature is quiet: the scores room needs no score of it until it is proposed.
    """
    most_quiet = (1 << shift) // (multiplier * resolution * table.largest)
    is_loud = np.diff(table.columns.offsets) > most_quiet
    if powers is not None:
        is_loud |= powers > _highest_quiet(powers)
    return np.flatnonzero(is_loud).astype(np.int32)


def _highest_quiet(powers: np.ndarray) -> int:
    """The highest power p of any feature at which the mean of 2^(min(p_j, p) - p) is >= PASSING.

    So fewer than PASSING of the features are above it.
    """
    given, counts = np.unique(powers, return_counts=True)
    below = np.minimum(np.subtract.outer(given, given), 0).astype(np.float64)
    passing = counts @ np.exp2(below) / counts.sum()
    return given[passing >= PASSING].max()


def _stored_rate(plan: Plan, table: Table) -> tuple[int, int]:
    """(lift, shift): multiplier * 2^lift / 2^shift is the rate for scores in stored units.

    That is multiplier * unit / 2^plan.shift; the unit is a power of two.
    """
    whole = table.unit.bit_length() - 1
    lowered = min(whole, plan.shift - 1)
    return whole - lowered, plan.shift - lowered


def _check_options(threads, names, plan):
    whole_number("threads", threads, 1, MOST_THREADS)
    if names is not None:
        _check_names(names, plan.facts.features)


def _check_names(names, features: int):
    if not isinstance(names, (Sequence, np.ndarray)) or isinstance(names, str):
        raise InputError("names must be a list, tuple or array with one name per feature")
    if len(names) != features:
        raise InputError(f"there are {len(names):,} names for {features:,} features")


def _checked_seed(seed) -> int | None:
    return None if seed is None else whole_number("rehearsal_seed", seed, 0)


def _release(plan: Plan, known: Plan, solution: Solution, rehearsal: bool, names,
             persons_bounded: bool, profile, spending) -> Release:
    features = np.array(list(solution.coefficients), dtype=np.int64)
    values = np.array(list(solution.coefficients.values()), dtype=np.float64)
    loss = known.loss_form
    coefficients = loss.unit * values / known.facts.bounds_of(features)
    intercept = loss.centre + loss.unit * solution.intercept
    chosen = None if names is None else tuple(str(names[j]) for j in features)
    deviations = np.array([solution.deviations.get(j, np.nan) for j in solution.coefficients])
    learned = {name: getattr(known.facts, name) for name in plan.facts.learned}
    return Release(plan, features, coefficients, intercept, rehearsal, chosen, profile,
                   learned=learned, persons_bounded=persons_bounded,
                   deviations=loss.unit * deviations / known.facts.bounds_of(features),
                   intercept_deviation=loss.unit * solution.intercept_deviation,
                   spending=spending)


def _reporter(progress) -> Callable[[float, str], None]:
    if callable(progress):
        return progress
    if not progress:
        return lambda fraction, text: None
    return _Line()


class _Line:
    """One line on stderr, rewritten a few times a second."""

    def __init__(self):
        self.next = 0.0

    def __call__(self, fraction: float, text: str):
        now = time.monotonic()
        if now >= self.next or fraction >= 1:
            self.next = now + 0.2
            end = "\n" if fraction >= 1 else ""
            print(f"\r{text}: {fraction:4.0%} ", end=end, file=sys.stderr, flush=True)
