"""Private evaluation: what neighbours differ by, the noise asked for, and figures with their errors.

Statistical tests run on fixed seeds; each would fail with probability below 1e-6 on fresh ones.
"""

from __future__ import annotations

import json
import math
import pickle
import sys

import numpy as np
import pytest
import scipy.sparse as sp
from hypothesis import given, settings
from hypothesis import strategies as st
from hypothesis.extra import numpy as hnp
from scipy.special import expit
from scipy.stats import binom, chi2
from sklearn.metrics import accuracy_score, log_loss, r2_score, roc_auc_score, roc_curve

from sordino import BudgetBook, BudgetError, Guarantee, InputError, PublicFacts, Split, plan_fit
from sordino import evaluation as module
from sordino._core.bits import Bits
from sordino.accounting import epsilon_of_zcdp
from sordino.evaluation.figures import (
    LOSS_FLOOR,
    BinaryEvaluation,
    Estimate,
    Evaluation,
    NumericEvaluation,
    Terms,
)
from sordino.evaluation.forms import BINS, GROUPS, RUNS, SUM_UNITS, LabelSums, MarginHistogram
from sordino.release import Release

PROMISE = Guarantee(0.5, 1e-6)
REPLACE = Guarantee(0.5, 1e-6, "replace-one")
P_FAIL = 1e-7       # of each statistical check
RUNS_OF_NOISE = 300

repeatable = settings(max_examples=100, deadline=None, derandomize=True, database=None)


def scored(label="binary", intercept=0.0, reach=16.0, rehearsal=False, most=1) -> Release:
    """A release of one feature, whose entry is the margin less the intercept."""
    facts = PublicFacts(features=1, rows=10_000, entry_bound=reach, label=label,
                        rows_per_person=most)
    loss = "logistic" if label == "binary" else "squared"
    plan = plan_fit(facts, Guarantee(1.0, 1e-6), loss=loss)
    return Release(plan, [0], [1.0], intercept, rehearsal)


def binormal(seed: int, n: int, d: float, scale: float = 1.0):
    """Margins and labels, calibrated at scale 1; an AUC of Phi(d / sqrt(2))."""
    rng = np.random.default_rng(seed)
    y = (rng.random(n) < 0.5).astype(np.int64)
    return scale * (d * rng.normal(size=n) + d * d * (y - 0.5)), y


def numeric(seed: int, n: int):
    rng = np.random.default_rng(seed)
    y = rng.normal(3.0, 1.5, size=n)
    return y + rng.normal(0.3, 0.8, size=n), y


def column(margins) -> np.ndarray:
    return np.asarray(margins, dtype=np.float64)[:, None]


def without_noise(margins, y, release=None) -> BinaryEvaluation:
    """What an evaluation would say if its noise happened to be 0."""
    release = release or scored()
    form = MarginHistogram.of(release)
    noisy = tuple(form.measured(np.asarray(margins, dtype=float), np.asarray(y)).tolist())
    return BinaryEvaluation(Terms(PROMISE, 1, False, True, 1), form, noisy)


@pytest.fixture
def no_bits(monkeypatch):
    """Whatever draws, fails."""
    def refuse(*args, **options):
        raise AssertionError("random bits were asked for")

    monkeypatch.setattr(module, "Bits", refuse)


# --- what neighbours differ by

HISTOGRAM = MarginHistogram(0.4, 16.0)
SUMS = LabelSums(-1.0, 7.0)
FORMS = {"histogram": HISTOGRAM, "sums": SUMS}

any_float = st.floats(allow_nan=False, allow_infinity=False)


@st.composite
def rows_of(draw, size):
    """(margins, labels): labels 0 or 1, which both forms take."""
    margins = draw(hnp.arrays(np.float64, size, elements=st.one_of(any_float, st.floats(-20, 20))))
    return margins, draw(hnp.arrays(np.float64, size, elements=st.sampled_from([0.0, 1.0])))


def squared_length(change: np.ndarray) -> int:
    return sum(value * value for value in change.tolist())


@pytest.mark.parametrize("form", FORMS.values(), ids=FORMS)
@repeatable
@given(others=rows_of(6), gone=rows_of(3), come=rows_of(3), left=st.integers(0, 3))
def test_a_persons_rows_move_what_is_measured_by_the_sensitivity_at_most(
        form, others, gone, come, left):
    def measured(*tables):
        return form.measured(*(np.concatenate(parts) for parts in zip(*tables)))

    come = tuple(values[:left] for values in come)
    added = measured(others, gone) - form.measured(*others)
    assert squared_length(added) <= form.squared_sensitivity(3, "add-remove")
    swapped = measured(others, come) - measured(others, gone)
    assert squared_length(swapped) <= form.squared_sensitivity(3, "replace-one")


@repeatable
@given(rows_of(1))
def test_one_row_changes_one_count_of_every_run_by_one(row):
    cells = HISTOGRAM.measured(*row)
    per_run = np.split(cells.reshape(2, -1), np.cumsum([BINS // run for run in RUNS])[:-1], axis=1)
    assert [part.sum() for part in per_run] == [1, 1, 1]
    assert set(cells.tolist()) == {0, 1}


def test_the_sensitivities_are_reached():
    r = 3
    alike, other = (np.full(r, -5.0), np.zeros(r)), (np.full(r, 5.0), np.ones(r))
    added, swapped = HISTOGRAM.measured(*alike), HISTOGRAM.measured(*other)
    assert squared_length(added) == HISTOGRAM.squared_sensitivity(r, "add-remove") == 27
    assert squared_length(swapped - added) == HISTOGRAM.squared_sensitivity(r, "replace-one") == 54
    far = SUMS.measured(np.full(r, -1e9), np.full(r, 7.0))
    assert squared_length(far) == SUMS.squared_sensitivity(r, "add-remove")
    assert far.tolist() == [r * SUM_UNITS * most for most in (1, 1, 2, 4)]


def test_a_margin_hangs_on_its_own_row_alone():
    """Whatever the table around it, to the last bit: dense products promise no such thing."""
    rng = np.random.default_rng(2)
    plan = plan_fit(PublicFacts(features=37, rows=100), Guarantee(1.0, 1e-6))
    release = Release(plan, np.arange(37), rng.normal(size=37) / 100, 0.1, False)
    X = rng.normal(size=(50, 37))
    whole = module._margins(release, X)
    assert np.array_equal(whole, module._margins(release, sp.csr_array(X)))
    assert np.allclose(whole, release.margin(X), rtol=1e-12)
    for start in range(1, 9):
        assert np.array_equal(whole[start:], module._margins(release, X[start:]))
        assert np.array_equal(whole[start:], module._margins(release, np.asfortranarray(X[start:])))


# --- the noise asked for

@pytest.mark.parametrize("promise", [PROMISE, REPLACE, Guarantee(4.0, 1e-5), Guarantee(0.01, 1e-9)],
                         ids=str)
@pytest.mark.parametrize("label", ["binary", (0.0, 10.0)], ids=str)
def test_variance_is_the_least_whole_one_that_keeps_the_guarantee(promise, label):
    evaluation = scored(label).evaluate(column([0.5, -1]), [0, 1], promise, rows_per_person=2,
                                        rehearsal_seed=0)
    variance = evaluation.terms.variance
    squared = evaluation.form.squared_sensitivity(2, promise.neighbours)
    assert evaluation.cost.zcdp == pytest.approx(squared / (2 * variance), rel=1e-12)
    assert evaluation.cost.pure == math.inf
    assert epsilon_of_zcdp(squared / (2 * variance), promise.delta) <= promise.epsilon
    fewer = variance - max(1, variance >> 40)       # beyond that, floats end
    assert epsilon_of_zcdp(squared / (2 * fewer), promise.delta) > promise.epsilon


@pytest.mark.parametrize("label", ["binary", (0.0, 10.0)], ids=str)
def test_what_is_noisy_is_exact_counts_and_exact_draws(label):
    margins, y = binormal(3, 500, 1.0)
    evaluation = scored(label).evaluate(column(margins), y, PROMISE, rehearsal_seed=7)
    exact = evaluation.form.measured(margins, y).tolist()
    draws = Bits(7).discrete_gaussians(evaluation.terms.variance, len(exact))
    assert [a - b for a, b in zip(evaluation.noisy, exact)] == draws
    assert all(type(value) is int for value in evaluation.noisy)


def test_fresh_bits_are_drawn_without_a_seed():
    X, y = column([0.5, -1.0]), [1, 0]
    first, second = (scored().evaluate(X, y, PROMISE) for _ in range(2))
    assert first.noisy != second.noisy and not first.rehearsal


def test_surplus_rows_of_a_person_are_dropped():
    """Persons 0..9 of 5 rows: with 2 kept of each, all in one bin, the counts are those of 20."""
    persons = np.repeat(np.arange(10), 5)
    evaluation = scored().evaluate(column(np.full(50, 3.0)), np.ones(50), PROMISE,
                                   persons=persons, rows_per_person=2, rehearsal_seed=1)
    form, bits = evaluation.form, Bits(1)
    bits.array(50, np.uint64)
    draws = bits.discrete_gaussians(evaluation.terms.variance, len(evaluation.noisy))
    exact = [a - b for a, b in zip(evaluation.noisy, draws)]
    assert exact == form.measured(np.full(20, 3.0), np.ones(20)).tolist()
    assert evaluation.terms.persons_bounded and evaluation.terms.rows_per_person == 2
    by_default = scored(most=4).evaluate(column([1.0]), [1], PROMISE, rehearsal_seed=1)
    assert by_default.terms.rows_per_person == 4


# --- bins

@pytest.mark.parametrize("centre", [-1e300, -30.0, -4.0, 0.0, 0.37, 1e5, 1e300])
@pytest.mark.parametrize("reach", [0.0, 0.01, 0.5, 4.0, 1e12])
def test_bins_ascend_whatever_the_release(centre, reach):
    form = MarginHistogram.of(Release(scored().plan, [0], [reach / 16], centre, False))
    assert (np.diff(form.bounds) > 0).all() and np.isfinite(form.bounds).all()
    inside = [p for p in GROUPS if form.bounds[0] < math.log(p / (1 - p)) < form.bounds[-1]]
    assert np.isclose(expit(form.bounds)[:, None], inside, rtol=1e-12, atol=0).any(axis=0).all()


@pytest.mark.parametrize("d", [0.36, 1.2, 1.8, 2.9])
@pytest.mark.parametrize("scale", [0.3, 1.0, 4.0])
def test_bins_cost_an_auc_less_than_two_thousandths(d, scale):
    margins, y = binormal(11, 100_000, d, scale)
    assert abs(without_noise(margins, y).auc - roc_auc_score(y, margins)) < 0.001


# --- figures as noise vanishes, against scikit-learn

def test_counts_come_back_from_cells():
    margins, y = binormal(4, 2000, 1.5)
    evaluation = without_noise(margins, y)
    singly = np.array(evaluation.noisy).reshape(2, -1)[:, :BINS]
    assert np.allclose(evaluation.counts, singly, atol=1e-8)
    assert evaluation.positives == pytest.approx(y.sum())
    assert evaluation.rows == pytest.approx(2000)


def test_figures_of_tied_margins_are_exact():
    """Against scikit-learn, on margins of few values, each with a bin of its own."""
    margins, y = binormal(5, 3000, 1.5)
    margins = np.round(margins) * 0.8 - 0.1
    evaluation = without_noise(margins, y)
    assert evaluation.auc == pytest.approx(roc_auc_score(y, margins), abs=1e-9)
    for threshold in (0.0, 0.03, 0.3, 0.5, 0.97, 1.0):
        right = accuracy_score(y, expit(margins) > threshold)
        assert evaluation.accuracy(threshold) == pytest.approx(right, abs=1e-9)
    fpr, tpr, _ = roc_curve(y, margins)
    ours = np.stack(evaluation.roc[:2], axis=1)
    assert all(abs(ours - point).sum(axis=1).min() < 1e-6 for point in np.stack([fpr, tpr], axis=1))


def test_figures_agree_with_scikit_learn_as_noise_vanishes():
    margins, y = binormal(6, 50_000, 1.5)
    evaluation = scored().evaluate(column(margins), y, Guarantee(1e6, 0.1), rehearsal_seed=1)
    assert evaluation.terms.variance == 1
    assert evaluation.auc == pytest.approx(roc_auc_score(y, margins), abs=1e-3)
    assert evaluation.accuracy() == pytest.approx(accuracy_score(y, margins > 0), abs=1e-3)
    # between bounds of groups, up to how evenly rows are spread over one bin
    assert evaluation.accuracy(0.62) == pytest.approx(
        accuracy_score(y, expit(margins) > 0.62), abs=2e-3)
    kept = np.clip(expit(margins), LOSS_FLOOR, 1 - LOSS_FLOOR)
    assert evaluation.log_loss == pytest.approx(log_loss(y, kept), abs=2e-3)


def test_calibration_groups_hold_what_they_say():
    margins, y = binormal(7, 50_000, 1.5)
    p = expit(margins)
    groups = without_noise(margins, y).calibration
    assert [group.low for group in groups] == [0.0, *GROUPS]
    assert [group.high for group in groups] == [*GROUPS, 1.0]
    for group in groups:
        inside = (p > group.low) & (p <= group.high)
        assert group.rows == pytest.approx(inside.sum(), abs=1e-6)
        assert group.share == pytest.approx(y[inside].mean(), abs=1e-9)
        assert group.predicted == pytest.approx(p[inside].mean(), abs=2e-3)


def test_numeric_figures_agree_with_scikit_learn_as_noise_vanishes():
    margins, y = numeric(8, 5000)
    evaluation = scored((0.0, 6.0)).evaluate(column(margins), y, Guarantee(1e6, 0.1),
                                             rehearsal_seed=1)
    predicted, labels = np.clip(margins, 0, 6), np.clip(y, 0, 6)
    assert evaluation.rows == pytest.approx(5000, abs=0.1)
    assert evaluation.mean_label == pytest.approx(labels.mean(), abs=1e-4)
    assert evaluation.squared_error == pytest.approx(((predicted - labels)**2).mean(), abs=1e-4)
    assert evaluation.r2 == pytest.approx(r2_score(labels, predicted), abs=1e-4)


# --- standard errors

def check_errors(pairs):
    """Of (estimate, exact value): a chi-square test of the errors, and how many 95 % ones cover.

    Errors may be 10 % too large, as that of the AUC is where bins are nearly empty (coverage 0.97),
    and bins may shift a figure by 0.1 of an error (2 % of the sum of squares; coverage 0.948).
    """
    scores = np.array([(estimate - exact) / estimate.standard_error for estimate, exact in pairs])
    n, total = len(scores), float((scores**2).sum())
    assert chi2.ppf(P_FAIL, n) / 1.1**2 < total < 1.02 * chi2.isf(P_FAIL, n)
    covered = (abs(scores) < 1.96).sum()
    assert binom.ppf(P_FAIL, n, 0.948) <= covered <= binom.isf(P_FAIL, n, 0.972)


@pytest.mark.parametrize("d, scale", [(0.75, 1.0), (1.8, 0.5), (2.9, 1.0)])
def test_noise_keeps_to_its_standard_errors(d, scale):
    """At epsilon 0.5 and delta 1e-6 on 10,000 rows; the AUC is within 0.02 of scikit-learn's."""
    margins, y = binormal(9, 10_000, d, scale)
    release, X = scored(), column(margins)
    runs = [release.evaluate(X, y, PROMISE, rehearsal_seed=k) for k in range(RUNS_OF_NOISE)]
    auc, right = roc_auc_score(y, margins), accuracy_score(y, margins > 0)
    loss = log_loss(y, np.clip(expit(margins), LOSS_FLOOR, 1 - LOSS_FLOOR))
    assert np.mean([abs(run.auc - auc) < 0.02 for run in runs]) >= 0.95
    check_errors([(run.auc, auc) for run in runs])
    check_errors([(run.accuracy(), right) for run in runs])
    check_errors([(run.log_loss, loss) for run in runs])
    check_errors([(run.positives, y.sum()) for run in runs])
    middle = (expit(margins) > 0.4) & (expit(margins) <= 0.5)
    check_errors([(run.calibration[6].share, y[middle].mean()) for run in runs])


def test_rates_of_the_curve_keep_to_their_errors():
    margins, y = binormal(9, 10_000, 1.5)
    release, X, exact = scored(), column(margins), without_noise(margins, y)
    runs = [release.evaluate(X, y, PROMISE, rehearsal_seed=k) for k in range(100)]
    for side in (0, 1):
        check_errors([(Estimate(run._raw_rates()[side, 128], run._rate_errors()[side, 128]),
                       exact._raw_rates()[side, 128]) for run in runs])


def test_noise_of_numeric_figures_keeps_to_its_standard_errors():
    margins, y = numeric(10, 10_000)
    release, X = scored((0.0, 6.0)), column(margins)
    runs = [release.evaluate(X, y, PROMISE, rehearsal_seed=k) for k in range(RUNS_OF_NOISE)]
    predicted, labels = np.clip(margins, 0, 6), np.clip(y, 0, 6)
    check_errors([(run.r2, r2_score(labels, predicted)) for run in runs])
    check_errors([(run.squared_error, ((predicted - labels)**2).mean()) for run in runs])
    check_errors([(run.mean_label, labels.mean()) for run in runs])
    check_errors([(run.rows, 10_000) for run in runs])


def test_what_the_noise_hides_is_not_told(tmp_path):
    binary = scored().evaluate(column([0.5, -1.0]), [1, 0], Guarantee(0.01, 1e-6), rehearsal_seed=0)
    told = (binary.auc, binary.accuracy(), binary.log_loss, *binary.roc[0])
    assert all(map(math.isnan, told)) and not math.isnan(binary.rows)
    assert binary.to_dict()["figures"]["AUC"] == {"value": None, "standard_error": None}
    with pytest.raises(InputError, match="no curve to plot"):
        binary.plot(tmp_path / "a.png")
    linear = scored((0.0, 6.0)).evaluate(column([0.5]), [1], Guarantee(0.01, 1e-6),
                                         rehearsal_seed=3)
    assert all(map(math.isnan, (linear.r2, linear.mean_label, linear.squared_error)))
    json.dumps([binary.to_dict(), linear.to_dict()], allow_nan=False)
    assert " - " in str(binary) and " - " in str(linear)


# --- input

X, Y = column([0.5, -1.0, 2.0]), [1, 0, 1]
BAD = {
    "delta 0": (X, Y, Guarantee(1.0), {}, "delta above 0"),
    "no guarantee": (X, Y, 1.0, {}, "needs a Guarantee"),
    "NaN": (column([0.5, math.nan, 2]), Y, PROMISE, {}, "row 1 of X"),
    "sparse infinity": (sp.csr_array(column([0.5, 1, math.inf])), Y, PROMISE, {}, "row 2 of X"),
    "columns": (np.ones((3, 2)), Y, PROMISE, {}, "1 columns"),
    "words": (np.array([["a"]] * 3), Y, PROMISE, {}, "table of numbers"),
    "no rows": (np.ones((0, 1)), [], PROMISE, {}, "X has 0 rows"),
    "labels": (X, [1, 0, 2], PROMISE, {}, "label of row 2"),
    "label count": (X, [1, 0], PROMISE, {}, "y has shape"),
    "persons": (X, Y, PROMISE, {"persons": [1, 2, None]}, "id of row 2 is missing"),
    "rows": (X, Y, REPLACE, {"rows": 4}, "4 rows are stated"),
    "rows per person": (X, Y, PROMISE, {"rows_per_person": 0}, "rows_per_person"),
    "seed": (X, Y, PROMISE, {"rehearsal_seed": -1}, "rehearsal_seed"),
    "book": (X, Y, PROMISE, {"book": 7}, "book must be"),
}


@pytest.mark.parametrize("X, y, promise, options, words", BAD.values(), ids=BAD)
def test_bad_input_is_refused_before_a_draw_or_a_charge(X, y, promise, options, words, no_bits,
                                                        tmp_path):
    neighbours = getattr(promise, "neighbours", "add-remove")
    book = BudgetBook.open(tmp_path / "study.book", Guarantee(5, 1e-5, neighbours))
    with pytest.raises(InputError, match=words):
        scored().evaluate(X, y, promise, **{"book": book} | options)
    assert book.entries == []


def test_a_rehearsal_is_only_evaluated_as_one(no_bits):
    with pytest.raises(InputError, match="rehearsal_seed="):
        scored(rehearsal=True).evaluate(X, Y, PROMISE)


def test_rows_are_checked_where_they_are_public():
    assert scored().evaluate(X, Y, REPLACE, rows=3, rehearsal_seed=0).rehearsal
    assert scored().evaluate(X, Y, PROMISE, rows=999, rehearsal_seed=0).rehearsal


# --- the book

@pytest.fixture
def book(tmp_path) -> BudgetBook:
    return BudgetBook.open(tmp_path / "study.book", Guarantee(1.0, 1e-6))


@pytest.mark.parametrize("as_path", [False, True])
def test_an_evaluation_is_charged_and_settled(book, as_path):
    evaluation = scored().evaluate(X, Y, PROMISE, book=book.path if as_path else book)
    entry, = book.entries
    assert entry.state == "settled" and entry.zcdp == evaluation.cost.zcdp and entry.pure is None
    assert entry.what == "evaluation of a logistic model at epsilon 0.5"
    assert evaluation.spending["charges"] == [entry.to_dict() | {"state": "reserved"}]
    assert book.epsilon_spent <= 0.5


def test_a_charge_beyond_the_cap_is_refused_before_a_draw(book, no_bits):
    with pytest.raises(BudgetError, match="would fit"):
        scored().evaluate(X, Y, Guarantee(1.1, 1e-6), book=book)
    assert book.entries == []


def test_a_rehearsal_is_free_and_marked(book, tmp_path):
    evaluation = scored().evaluate(X, Y, Guarantee(50.0, 1e-6), book=book, rehearsal_seed=3)
    assert book.entries == [] and evaluation.spending is None
    assert evaluation.rehearsal and evaluation.to_dict()["rehearsal"]
    assert str(evaluation).startswith("REHEARSAL: not private")
    assert repr(evaluation).startswith("<Evaluation: REHEARSAL")
    margins, y = binormal(1, 2000, 1.5)
    scored().evaluate(column(margins), y, PROMISE, rehearsal_seed=3).plot(tmp_path / "a.svg")
    drawn = (tmp_path / "a.svg").read_text()
    assert "REHEARSAL" in drawn


def test_a_failing_evaluation_is_abandoned(book, no_bits):
    with pytest.raises(AssertionError, match="random bits"):
        scored().evaluate(X, Y, PROMISE, book=book)
    assert [entry.state for entry in book.entries] == ["abandoned"]


def test_an_evaluation_keeps_to_the_rows_of_its_part(tmp_path):
    """At noise of 2.6 rows, with the real source: 40 of them are 15 standard errors."""
    split = Split("held out", {"fit": 0.5, "test": 0.5})
    book = BudgetBook.open(tmp_path / "b.book", Guarantee(1e6, 1e-6))
    book.add_split(split)
    margins, y = binormal(2, 400, 1.0)
    held = split.rows_of("test", np.arange(400))
    found = scored().evaluate(column(margins), y, Guarantee(1e5, 1e-6), persons=np.arange(400),
                              book=book.part("held out", "test"))
    assert found.rows == pytest.approx(held.sum(), abs=40)
    assert found.positives == pytest.approx(y[held].sum(), abs=40)


def test_a_part_is_charged_in_parallel(book):
    split = Split("held out", {"fit": 0.5, "test": 0.5})
    book.add_split(split)
    persons = np.flatnonzero(split.rows_of("test", np.arange(40)))
    margins, y = binormal(2, len(persons), 1.0)
    for name in ("fit", "test"):
        ids = np.flatnonzero(split.rows_of(name, np.arange(40)))[:10]
        scored().evaluate(column(margins[:len(ids)]), y[:len(ids)], Guarantee(1.0, 1e-6),
                          book=book.part("held out", name), persons=ids)
    assert book.epsilon_spent <= 1.0


def test_persons_of_more_rows_need_protection(tmp_path, no_bits):
    book = BudgetBook.open(tmp_path / "b.book", Guarantee(1.0, 1e-6), rows_per_person=4)
    with pytest.raises(InputError, match="rows_per_person=4"):
        scored().evaluate(X, Y, PROMISE, book=book)


# --- what is shown

EVALUATIONS = {
    "binary": lambda: scored(intercept=-0.4).evaluate(
        column(binormal(1, 5000, 1.5)[0]), binormal(1, 5000, 1.5)[1], PROMISE, rehearsal_seed=3),
    "numeric": lambda: scored((0.0, 6.0)).evaluate(
        column(numeric(1, 5000)[0]), numeric(1, 5000)[1], REPLACE, rows_per_person=3,
        rehearsal_seed=3),
}


@pytest.mark.parametrize("make", EVALUATIONS.values(), ids=EVALUATIONS)
def test_its_text_is_a_table_and_its_dict_is_json(make):
    evaluation = make()
    assert isinstance(evaluation, Evaluation)
    lines = str(evaluation).splitlines()
    assert max(map(len, lines)) <= 79
    for name, figure in evaluation.figures.items():
        assert any(line.startswith(name) for line in lines)
        assert isinstance(figure, float) and figure.standard_error > 0
    fields = json.loads(json.dumps(evaluation.to_dict(), allow_nan=False))
    assert fields["zcdp"] == evaluation.cost.zcdp
    assert fields["noisy"] == list(evaluation.noisy)
    assert fields["guarantee"] == evaluation.guarantee.to_dict()
    assert fields["figures"].keys() == evaluation.figures.keys()
    if isinstance(evaluation, NumericEvaluation):
        assert "one person of up to 3 rows changed" in str(evaluation)


def test_the_curve_is_one():
    fpr, tpr, thresholds = EVALUATIONS["binary"]().roc
    for rates in (fpr, tpr):
        assert rates[0] == 0 and rates[-1] == 1 and (np.diff(rates) >= 0).all()
    assert (np.diff(thresholds) < 0).all() and (thresholds[0], thresholds[-1]) == (1, 0)


def test_plots_are_files_of_their_kind(tmp_path):
    evaluation = EVALUATIONS["binary"]()
    evaluation.plot(tmp_path / "a.png")
    assert (tmp_path / "a.png").read_bytes().startswith(b"\x89PNG\r\n\x1a\n")
    evaluation.plot(str(tmp_path / "a.svg"))
    assert "<svg" in (tmp_path / "a.svg").read_text()
    with pytest.raises(InputError, match=".png or .svg"):
        evaluation.plot(tmp_path / "a.pdf")
    with pytest.raises(InputError, match="cannot be written"):
        evaluation.plot(tmp_path / "nowhere" / "a.png")
    with pytest.raises(InputError, match="no curves"):
        EVALUATIONS["numeric"]().plot(tmp_path / "b.png")


def test_plots_without_matplotlib_say_so(tmp_path, monkeypatch):
    monkeypatch.setitem(sys.modules, "matplotlib.figure", None)
    with pytest.raises(InputError, match="matplotlib"):
        EVALUATIONS["binary"]().plot(tmp_path / "a.png")


def test_an_estimate_is_a_number():
    estimate = Estimate(0.25, 0.01)
    assert estimate + 1 == 1.25 and repr(estimate) == "0.25 +- 0.01"
    copy = pickle.loads(pickle.dumps(estimate))
    assert copy == estimate and copy.standard_error == 0.01
    assert estimate.within(0.5, 1) == 0.5 and estimate.within(0, 1).standard_error == 0.01


def test_thresholds_are_checked():
    evaluation = EVALUATIONS["binary"]()
    for threshold in (-0.1, 1.1, math.nan, "half"):
        with pytest.raises(InputError, match="threshold"):
            evaluation.accuracy(threshold)
