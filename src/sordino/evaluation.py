"""Private evaluation: a release measured once, with noise, on rows that no fit has seen.

Of binary labels, the margins are counted by label in public bins; of numeric ones, four sums are
taken. The counts and sums are whole numbers, the noise on them is exact discrete Gaussian, and all
that an `Evaluation` says follows from them without further cost. Its standard errors are of that
noise: how the rows themselves were sampled is not in them.

Bins are counted three times over, singly and in runs of 8 and of 64, under one guarantee. All
figures come from the least-squares estimate of the bins, which is unbiased and linear in the
counts (Hay, Rastogi, Miklau and Suciu 2010, from memory). Runs carry what bins share, so that bins
can be fine without their noise adding up: at epsilon 0.5 and delta 1e-6, on 10,000 rows of balanced
labels, an AUC has a standard error of 0.003 to 0.006, where 256 bins counted once give up to 0.022.
"""

from __future__ import annotations

import io
import math
from dataclasses import dataclass
from functools import cache, cached_property
from pathlib import Path
from typing import NamedTuple

import numpy as np
import scipy.sparse as sp
from scipy.special import expit, logit

from ._core.bits import Bits
from .accounting import Cost, gaussian_cost, zcdp_of_epsilon
from .charging import Bill, account_of, charged_for, plan_hash
from .checks import checked_keys, real_number, whole_number, yes_or_no
from .errors import InputError
from .facts import MOST_ROWS, MOST_ROWS_PER_PERSON, Guarantee
from .intake import rows_of_part, rows_to_keep
from .losses import MARGIN_END
from .persons import codes_of
from .release import Release, checked_spending
from .table import checked_labels

BINS = 256
RUNS = (1, 8, 64)           # bins per cell
BEND = 0.5                  # margin from which bins widen
LEAST_REACH = 2.0**-10
FURTHEST_CENTRE = 2.0**20
GROUPS = (0.01, 0.03, 0.1, 0.2, 0.3, 0.4, 0.5, 0.6, 0.7, 0.8, 0.9, 0.97, 0.99)
LOSS_FLOOR = 0.001          # log loss takes probabilities as at least this far from 0 and 1
SUM_UNITS = 2**19
MOST_NOISY = 2**120
TELLING = 3                 # a ratio needs a denominator of so many standard errors
NORMAL_95 = 1.959964
COUNTED = ("rows", "label 1", "label 0")


def evaluate(release: Release, X, y, guarantee: Guarantee, *, book=None, persons=None, rows=None,
             rows_per_person=None, rehearsal_seed=None) -> Evaluation:
    """Measure a release privately on held-out rows, once.

    X                (n, features) as `Release.margin` takes it; entries are not clipped
    y                (n,) labels as the facts of the release describe them
    guarantee        for these rows; delta above 0
    book             a BudgetBook, its path, or a part of one, to whose rows it then keeps: charged
                     before anything is drawn. A rehearsal is free
    persons          (n,) ids: of a person with more rows than rows_per_person, that many are kept,
                     chosen at random
    rows             how many there are, where public ("replace-one"): checked. Under "add-remove"
                     a planning figure, on which nothing hangs
    rows_per_person  how many rows one person may own; by default as in the facts of the release
    rehearsal_seed   a whole number makes a reproducible run, which is NOT private and says so

    Only rows that had no part in the fit measure it fairly. Raises InputError before anything is
    charged or drawn for malformed input, and BudgetError where the book has not enough left.
    """
    seed = None if rehearsal_seed is None else whole_number("rehearsal_seed", rehearsal_seed, 0)
    _check_promise(release, guarantee, seed)
    most = release.plan.facts.rows_per_person if rows_per_person is None else whole_number(
        "rows_per_person", rows_per_person, 1, MOST_ROWS_PER_PERSON)
    margins, labels = _taken_in(release, X, y, guarantee, rows)
    codes = None if persons is None else codes_of(persons, len(labels))
    account = account_of(book)
    part = rows_of_part(account, persons)
    kind = BinaryEvaluation if release.binary else NumericEvaluation
    form = kind.form_for(release)
    variance = _least_variance(form.squared_sensitivity(most, guarantee.neighbours), guarantee)
    terms = Terms(guarantee, most, persons is not None, seed is not None, variance)
    bill = Bill(
        f"evaluation of a {release.plan.loss_form.kind} model at epsilon {guarantee.epsilon:g}",
        (terms.cost_of(form),), guarantee, most, plan_hash(release.plan))
    with charged_for(None if seed is not None else account, bill, persons) as spending:
        bits = Bits(seed)
        kept = rows_to_keep(codes, most, part, bits)
        if kept is not None:
            margins, labels = margins[kept], labels[kept]
        exact = form.measured(margins, labels).tolist()
        noise = bits.discrete_gaussians(variance, len(exact))
        bits.raise_failure()
    return kind(terms, form, tuple(a + b for a, b in zip(exact, noise)), spending)


def _check_promise(release: Release, guarantee: Guarantee, seed):
    if not isinstance(guarantee, Guarantee):
        raise InputError("an evaluation needs a Guarantee")
    if guarantee.delta == 0:
        raise InputError("an evaluation needs delta above 0: Gaussian noise has no pure guarantee")
    if release.rehearsal and seed is None:
        raise InputError("this release is a rehearsal, which is not private: it can only be "
                         "evaluated as one, with rehearsal_seed=")


def _taken_in(release: Release, X, y, guarantee: Guarantee, rows) -> tuple[np.ndarray, np.ndarray]:
    """(margins, labels) of sound input, labels clipped to the range of the facts."""
    margins = _margins(release, X)
    n = len(margins)
    if not 0 < n <= MOST_ROWS:
        raise InputError(f"X has {n:,} rows; between 1 and {MOST_ROWS:,} are needed")
    if rows is not None:
        stated = whole_number("rows", rows, 1, MOST_ROWS)
        if guarantee.neighbours == "replace-one" and stated != n:
            raise InputError(f'{stated:,} rows are stated, public under "replace-one", but the '
                             f"table has {n:,}")
    return margins, checked_labels(y, n, release.known.facts.label)


def _margins(release: Release, X) -> np.ndarray:
    """`Release.margin`, dense tables in CSR form.

    Each row of a sparse product is summed by itself, in its own order. A dense product makes no
    such promise: its rounding may hang on where a row stands, hence on the rows before it.
    """
    if sp.issparse(X):
        return release.margin(X)
    table = np.asarray(X)
    if table.ndim != 2 or table.dtype.kind not in "buif":
        return release.margin(table)        # which says what is wrong
    return release.margin(sp.csr_array(table.astype(np.float64, copy=False)))


def _least_variance(squared_sensitivity: int, guarantee: Guarantee) -> int:
    """The least whole variance of Gaussian noise that keeps the guarantee by its zCDP."""
    budget = zcdp_of_epsilon(guarantee.epsilon, guarantee.delta)
    variance = max(1, math.ceil(squared_sensitivity / (2 * budget)) - 1)
    while gaussian_cost(math.sqrt(squared_sensitivity), variance).zcdp > budget:
        variance += max(1, variance >> 50)
    return variance


# --- kept with a release

def evaluation_of(release: Release, content: dict) -> Evaluation:
    """An evaluation of this release from its `content`; InputError for what cannot be one."""
    checked_keys("an evaluation", content, ("guarantee", "rows_per_person", "persons_bounded",
                                            "rehearsal", "variance", "noisy", "spending"))
    terms = Terms(
        Guarantee.from_dict(content["guarantee"]),
        whole_number("rows_per_person", content["rows_per_person"], 1, MOST_ROWS_PER_PERSON),
        yes_or_no("persons_bounded", content["persons_bounded"]),
        yes_or_no("rehearsal", content["rehearsal"]),
        whole_number("variance", content["variance"], 1),
    )
    kind = BinaryEvaluation if release.binary else NumericEvaluation
    form, noisy = kind.form_for(release), content["noisy"]
    if not isinstance(noisy, list) or len(noisy) != form.size:
        raise InputError(f"noisy must be a list of {form.size:,} whole numbers")
    for value in noisy:
        whole_number("a noisy count", value, -MOST_NOISY, MOST_NOISY)
    promise = terms.guarantee
    if terms.cost_of(form).zcdp > zcdp_of_epsilon(promise.epsilon, promise.delta):
        raise InputError("the evaluation costs more than its guarantee")
    return kind(terms, form, tuple(noisy), checked_spending(content["spending"]))


# --- what is measured

@dataclass(frozen=True)
class MarginHistogram:
    """Margins counted by label over BINS public bins, in cells of 1, 8 and 64 bins.

    centre  the intercept of the release
    reach   how far margins lie from it at most where entries keep to their bounds

    Bins have equal widths in asinh(margin / BEND) between centre - reach and centre + reach, the
    first and last taking in all that lies beyond; edges next to the bounds of calibration groups
    are moved onto them. All of it follows from the release. On normal margins of AUC 0.6 to 0.98,
    from 0.3 to 4 times as large as calibrated ones, bins cost an AUC less than 0.001.
    """

    centre: float
    reach: float

    @classmethod
    def of(cls, release: Release) -> MarginHistogram:
        known = release.known
        reach = math.fsum(abs(known.in_bounds(release.features, release.coefficients)))
        centre = min(max(release.intercept, -FURTHEST_CENTRE), FURTHEST_CENTRE)
        return cls(centre, min(max(reach, LEAST_REACH), MARGIN_END))

    @property
    def size(self) -> int:
        """How many counts are measured."""
        return 2 * sum(BINS // run for run in RUNS)

    @cached_property
    def bounds(self) -> np.ndarray:
        """float64 (BINS + 1,): where bins end, ascending."""
        ends = np.array([self.centre - self.reach, self.centre + self.reach])
        bounds = BEND * np.sinh(np.linspace(*np.arcsinh(ends / BEND), BINS + 1))
        for margin in logit(GROUPS):
            if ends[0] < margin < ends[1]:
                bounds[1 + np.argmin(abs(bounds[1:-1] - margin))] = margin
        return bounds

    @property
    def middles(self) -> np.ndarray:
        """float64 (BINS,): the margins that stand for the rows of a bin."""
        return (self.bounds[:-1] + self.bounds[1:]) / 2

    def measured(self, margins: np.ndarray, labels: np.ndarray) -> np.ndarray:
        """int64 (2 * cells,): the cells of label 0, then those of label 1.

        Bin k holds bounds[k] < margin <= bounds[k + 1], so that a label is predicted as
        `Release.predict` does. Where a row lands depends on that row alone.
        """
        bins = np.searchsorted(self.bounds[1:-1], margins)
        places = BINS * (labels > 0) + bins
        counts = np.bincount(places, minlength=2 * BINS).reshape(2, BINS)
        cells = [counts.reshape(2, -1, run).sum(axis=2) for run in RUNS]
        return np.concatenate(cells, axis=1).ravel()

    def squared_sensitivity(self, rows_per_person: int, neighbours: str) -> int:
        """The square of the sensitivity in L2 of what is measured, between neighbours.

        A row lands in exactly one cell of each of the three runs, so it adds one vector of squared
        length 3, of zeros and ones. A person's b <= r rows add up to u with |u| <= b sqrt(3)
        (triangle inequality), hence |u|^2 <= 3 r^2: that is "add-remove". Under "replace-one" rows
        that add up to u make way for such that add up to v, and
        |v - u|^2 = |v|^2 + |u|^2 - 2 u.v <= 6 r^2, as u and v have no negative entry.
        """
        return len(RUNS) * rows_per_person**2 * (1 if neighbours == "add-remove" else 2)


@dataclass(frozen=True)
class LabelSums:
    """Four sums over rows, of labels and predictions clipped to a public label range.

    low, high  the label range

    With z the label and p the prediction in half ranges from the middle, both in [-1, 1], the sums
    are of 1, z, 2 z^2 and (p - z)^2, each term in units of 1/SUM_UNITS, to the nearest.
    """

    low: float
    high: float

    size = 4                    # sums

    @property
    def half(self) -> float:
        return self.high / 2 - self.low / 2

    @property
    def middle(self) -> float:
        return self.high / 2 + self.low / 2

    def measured(self, margins: np.ndarray, labels: np.ndarray) -> np.ndarray:
        """int64 (4,): the sums."""
        z, p = (np.clip((values - self.middle) / self.half, -1, 1) for values in (labels, margins))
        terms = np.stack([np.ones_like(z), z, 2 * z**2, (p - z)**2])
        return np.rint(SUM_UNITS * terms).astype(np.int64).sum(axis=1)

    def squared_sensitivity(self, rows_per_person: int, neighbours: str) -> int:
        """The square of the sensitivity in L2 of the four sums together, between neighbours.

        In SUM_UNITS a row's terms lie in {1}, [-1, 1], [0, 2] and [0, 4], rounding included, as
        these ends are whole in those units. So r rows more or less move the sums by at most r, r,
        2r and 4r: in square by 22 r^2. Where a <= r rows make way for b <= r others, sums of terms
        of one sign move by at most r times the largest, the sum of z by at most (a + b): in square
        by r^2 + 4 r^2 + 4 r^2 + 16 r^2.
        """
        return (22 if neighbours == "add-remove" else 25) * (rows_per_person * SUM_UNITS)**2


# --- what comes of it

class Estimate(float):
    """A figure, and the standard error that the noise puts on it.

    Not a number where the noise hides what it would be divided by.
    """

    standard_error: float

    def __new__(cls, value: float, standard_error: float):
        estimate = super().__new__(cls, value)
        estimate.standard_error = float(standard_error)
        return estimate

    def __getnewargs__(self):
        return float(self), self.standard_error

    def __repr__(self) -> str:
        return f"{float(self):.6g} +- {self.standard_error:.2g}"

    def within(self, low: float, high: float) -> Estimate:
        """The nearest value of [low, high]: where the true figure is known to lie."""
        value = float(self)
        return Estimate(value if math.isnan(value) else min(max(value, low), high),
                        self.standard_error)

    def to_dict(self) -> dict:
        return {"value": _or_null(float(self)), "standard_error": _or_null(self.standard_error)}


UNKNOWN = Estimate(math.nan, math.nan)


@dataclass(frozen=True)
class Terms:
    """Under what an evaluation was made.

    guarantee        for the rows it was made on
    rows_per_person  how many rows of one person it protects
    persons_bounded  whether a person's surplus rows were dropped, or just promised not to be there
    rehearsal        True: made with a fixed seed, NOT private, must not leave
    variance         of the noise on every count or sum
    """

    guarantee: Guarantee
    rows_per_person: int
    persons_bounded: bool
    rehearsal: bool
    variance: int

    def cost_of(self, form: MarginHistogram | LabelSums) -> Cost:
        squared = form.squared_sensitivity(self.rows_per_person, self.guarantee.neighbours)
        return gaussian_cost(math.sqrt(squared), self.variance)


@dataclass(frozen=True, eq=False, repr=False)
class Evaluation:
    """What was measured, privately: a BinaryEvaluation or a NumericEvaluation.

    terms     under what it was made
    form      what was measured
    noisy     the noisy counts or sums, whole numbers: all that was learned from the rows
    spending  what the budget book of the rows had charged by then; None where no book was kept
    """

    terms: Terms
    form: MarginHistogram | LabelSums
    noisy: tuple[int, ...]
    spending: dict | None = None

    kind = ""
    notes = ()

    @property
    def guarantee(self) -> Guarantee:
        return self.terms.guarantee

    @property
    def rehearsal(self) -> bool:
        return self.terms.rehearsal

    @property
    def cost(self) -> Cost:
        return self.terms.cost_of(self.form)

    @property
    def figures(self) -> dict[str, Estimate]:
        """{name: Estimate}: the figures that sum it up."""
        raise NotImplementedError

    def plot(self, path):
        """Write its curves as PNG or SVG, by the ending of the path; needs matplotlib."""
        raise InputError("an evaluation of a linear model has no curves to plot")

    @property
    def content(self) -> dict:
        """What has to be kept of it to have it again beside its release: see `evaluation_of`."""
        terms = self.terms
        return {
            "guarantee": terms.guarantee.to_dict(),
            "rows_per_person": terms.rows_per_person,
            "persons_bounded": terms.persons_bounded,
            "rehearsal": terms.rehearsal,
            "variance": terms.variance,
            "noisy": list(self.noisy),
            "spending": self.spending,
        }

    def to_dict(self) -> dict:
        """Everything in it, ready for JSON; figures that are not known are null."""
        return self.content | {
            "kind": self.kind,
            "zcdp": self.cost.zcdp,
            "figures": {name: figure.to_dict() for name, figure in self.figures.items()},
        }

    def __repr__(self) -> str:
        mark = "REHEARSAL, " if self.rehearsal else ""
        figures = ", ".join(f"{name} {figure!r}" for name, figure in self.figures.items())
        return f"<Evaluation: {mark}{figures}>"

    def __str__(self) -> str:
        return "\n".join(self._lines())

    def _lines(self) -> list[str]:
        promise, most = self.guarantee, self.terms.rows_per_person
        unit = "one row" if most == 1 else f"one person of up to {most:,} rows"
        change = "more or less" if promise.neighbours == "add-remove" else "changed"
        return [
            *(["REHEARSAL: not private, must not leave."] if self.rehearsal else []),
            f"Private evaluation of a {self.kind} model",
            f"epsilon {promise.epsilon:g}, delta {promise.delta:g} (zCDP {self.cost.zcdp:.4g})",
            f"{unit} {change} ({promise.neighbours})",
            "",
            f"{'figure':<24}{'value':>14}{'+- noise':>12}",
            *(f"{name:<24}{_cell(figure, 14, name in COUNTED)}"
              f"{_cell(figure.standard_error, 12, name in COUNTED)}"
              for name, figure in self.figures.items()),
            "",
            "+- noise: one standard error of the noise; chance in the sampling of the",
            "rows is not in it.",
            *self.notes,
        ]


class CalibrationGroup(NamedTuple):
    """The rows whose predicted probability lies in (low, high].

    rows       how many
    predicted  their mean predicted probability, by the middles of their bins
    share      the share of them that have label 1
    """

    low: float
    high: float
    rows: Estimate
    predicted: Estimate
    share: Estimate


class BinaryEvaluation(Evaluation):
    """Of labels 0 and 1: AUC, ROC, accuracy, log loss and calibration, from noisy counts."""

    kind = "logistic"
    notes = (f"Log loss: predictions are kept {LOSS_FLOOR:g} away from 0 and 1.",)

    @classmethod
    def form_for(cls, release: Release) -> MarginHistogram:
        return MarginHistogram.of(release)

    @cached_property
    def counts(self) -> np.ndarray:
        """float64 (2, BINS): unbiased estimates of how many rows of either label a bin holds.

        With error of the covariance variance * inv(A^T A), A being which bins a cell covers.
        """
        noisy = np.array(self.noisy, dtype=np.float64).reshape(2, -1)
        return noisy @ _cells() @ _covariance()

    # --- figures

    @property
    def figures(self) -> dict[str, Estimate]:
        return {"rows": self.rows, "label 1": self.positives, "label 0": self.negatives,
                "AUC": self.auc, "accuracy": self.accuracy(), "log loss": self.log_loss}

    @property
    def rows(self) -> Estimate:
        return self._sum(np.ones((2, BINS)))

    @property
    def positives(self) -> Estimate:
        """Rows of label 1."""
        return self._sum(_of_label(1))

    @property
    def negatives(self) -> Estimate:
        """Rows of label 0."""
        return self._sum(_of_label(0))

    @cached_property
    def auc(self) -> Estimate:
        """The area under the ROC curve, ties and rows of one bin counting half.

        With the estimates n_i and p_i of label 0 and 1 in bin i, and N and P their sums, it is
        sum_i p_i (n_1 + ... + n_(i-1) + n_i / 2) / (P N). The noise of the two labels is
        independent, so the numerator is unbiased. The error is that of its derivatives in every
        n_i and p_i; as these are taken at the noisy counts, it is too large rather than too small
        where noise matters in the second order.
        """
        if not (self._tells(_of_label(0)) and self._tells(_of_label(1))):
            return UNKNOWN
        shares = self.counts / self.counts.sum(axis=1, keepdims=True)
        below = shares.cumsum(axis=1) - shares / 2      # mid-distribution functions
        value = float(shares[1] @ below[0])
        slopes = np.stack([1 - below[1] - value, below[0] - value])
        error = self._error(slopes / self.counts.sum(axis=1, keepdims=True))
        return Estimate(value, error).within(0.0, 1.0)

    def accuracy(self, threshold: float = 0.5) -> Estimate:
        """The share of right predictions where label 1 is predicted above a probability.

        Exact but for the noise at 0.5 and the other bounds of calibration groups; in between, the
        rows of a bin are taken to be spread evenly over it.
        """
        if not 0 <= real_number("threshold", threshold) <= 1:
            raise InputError(f"threshold must lie between 0 and 1, not {threshold:g}")
        low, high = self.form.bounds[:-1], self.form.bounds[1:]
        above = np.clip((high - logit(threshold)) / (high - low), 0, 1)
        return self._mean(np.stack([1 - above, above])).within(0.0, 1.0)

    @property
    def log_loss(self) -> Estimate:
        """The mean of -ln of the probability that was given to the label.

        The rows of a bin count as if at its middle, those beyond the outermost bounds as if in the
        outermost bins, and probabilities as at least LOSS_FLOOR away from 0 and 1.
        """
        end = logit(1 - LOSS_FLOOR)
        margins = np.clip(self.form.middles, -end, end)
        return self._mean(np.logaddexp(0, np.stack([margins, -margins]))).within(0.0, math.inf)

    @cached_property
    def calibration(self) -> list[CalibrationGroup]:
        """The groups of predicted probability between GROUPS that hold any bin."""
        probabilities = expit(self.form.middles)
        group_of = np.searchsorted(GROUPS, probabilities)
        ends = (0.0, *GROUPS, 1.0)
        return [self._group(ends[k], ends[k + 1], group_of == k, probabilities)
                for k in np.unique(group_of)]

    def _group(self, low, high, inside: np.ndarray, probabilities) -> CalibrationGroup:
        both = np.stack([inside, inside]).astype(np.float64)
        predicted = self._mean(both * probabilities, both).within(low, high)
        share = self._mean(both * _of_label(1), both).within(0.0, 1.0)
        return CalibrationGroup(float(low), float(high), self._sum(both), predicted, share)

    @cached_property
    def roc(self) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
        """(fpr, tpr, thresholds), float64 (BINS + 1,) each, thresholds descending from 1 to 0.

        Rates of false and true positives where label 1 is predicted above each threshold. The
        noise has been smoothed out of their order, by isotonic regression: for display. The AUC
        comes from the counts themselves.
        """
        thresholds = np.r_[1.0, expit(self.form.bounds[-2:0:-1]), 0.0]
        rates = [np.full(BINS + 1, math.nan)] * 2
        if self._tells(_of_label(0)) and self._tells(_of_label(1)):
            rates = [_ascending(rate) for rate in self._raw_rates()]
        return *rates, thresholds

    def _raw_rates(self) -> np.ndarray:
        """float64 (2, BINS + 1): fpr and tpr as the counts have them."""
        sums = np.cumsum(self.counts[:, ::-1], axis=1)
        return np.pad(sums / sums[:, -1:], ((0, 0), (1, 0)))

    def _rate_errors(self) -> np.ndarray:
        """float64 (2, BINS + 1): standard errors of `_raw_rates`."""
        above = np.tri(BINS + 1, BINS, -1)[:, ::-1]     # row k: the k highest bins
        totals = self.counts.sum(axis=1)
        slopes = [(above - rate[:, None]) / total for rate, total in
                  zip(self._raw_rates(), totals)]
        return np.stack([np.sqrt(self.terms.variance * _quadratic(slope)) for slope in slopes])

    # --- sums of counts

    def _sum(self, weights: np.ndarray) -> Estimate:
        """The sum of counts by weights, (2, BINS)."""
        return Estimate(float((weights * self.counts).sum()), self._error(weights))

    def _mean(self, weights: np.ndarray, of: np.ndarray | None = None) -> Estimate:
        """The ratio of two sums of counts; of: by default all rows."""
        of = np.ones((2, BINS)) if of is None else of
        if not self._tells(of):
            return UNKNOWN
        total = self._sum(of)
        value = self._sum(weights) / total
        return Estimate(value, self._error((weights - value * of) / total))

    def _tells(self, of: np.ndarray) -> bool:
        """Whether a sum is far enough above its noise to divide by."""
        total = self._sum(of)
        return total > TELLING * total.standard_error

    def _error(self, slopes: np.ndarray) -> float:
        """The standard error of what has these slopes, (2, BINS), in the counts."""
        return math.sqrt(self.terms.variance * _quadratic(slopes).sum())

    # --- what is shown

    def to_dict(self) -> dict:
        fpr, tpr, thresholds = (
            [_or_null(value) for value in values.tolist()] for values in self.roc)
        groups = [{name: value.to_dict() if isinstance(value, Estimate) else value
                   for name, value in group._asdict().items()} for group in self.calibration]
        return super().to_dict() | {
            "bounds": self.form.bounds.tolist(),
            "roc": {"fpr": fpr, "tpr": tpr, "thresholds": thresholds},
            "calibration": groups,
        }

    def _lines(self) -> list[str]:
        groups = [
            f"{f'{group.low:g} to {group.high:g}':<15}{_cell(group.rows, 11, True)}"
            f"{_cell(group.rows.standard_error, 9, True)}{_cell(group.predicted, 14)}"
            f"{_cell(group.share, 14)}{_cell(group.share.standard_error, 12)}"
            for group in self.calibration
        ]
        return [
            *super()._lines(),
            "",
            f"{'predicted':<15}{'rows':>11}{'+-':>9}{'mean pred.':>14}{'share of 1':>14}{'+-':>12}",
            *groups,
        ]

    def plot(self, path):
        """Write the ROC curve and the calibration as PNG or SVG, with what noise puts on them.

        path  its ending, .png or .svg, says which

        Raises InputError for another ending, where there is nothing to draw, where matplotlib is
        not installed, and where the file cannot be written.
        """
        kind = Path(path).suffix.lower().lstrip(".")
        if kind not in ("png", "svg"):
            raise InputError(f"{path}: plots are written as .png or .svg")
        if math.isnan(self.auc):
            raise InputError("the noise hides one of the labels: there is no curve to plot")
        _write(Path(path), self._drawn(kind))

    def _drawn(self, kind: str) -> bytes:
        """The plot as a file of this kind."""
        figure = _new_figure()
        left, right = figure.subplots(1, 2)
        mark = "REHEARSAL, not private: " if self.rehearsal else ""
        promise = self.guarantee
        figure.suptitle(f"{mark}epsilon {promise.epsilon:g}, delta {promise.delta:g}; shades and "
                        "bars: 95 % of the noise", fontsize=10)
        self._draw_roc(left)
        self._draw_calibration(right)
        drawn = io.BytesIO()
        figure.savefig(drawn, format=kind)
        return drawn.getvalue()

    def _draw_roc(self, axes):
        fpr, tpr, _ = self.roc
        across, up = NORMAL_95 * self._rate_errors()
        shade = {"color": "tab:blue", "alpha": 0.2, "linewidth": 0}
        axes.fill_between(fpr, np.clip(tpr - up, 0, 1), np.clip(tpr + up, 0, 1), **shade)
        axes.fill_betweenx(tpr, np.clip(fpr - across, 0, 1), np.clip(fpr + across, 0, 1), **shade)
        axes.plot(fpr, tpr, color="tab:blue")
        axes.plot([0, 1], [0, 1], color="gray", linewidth=0.8, linestyle="dotted")
        axes.set(xlabel="false positive rate", ylabel="true positive rate", aspect="equal",
                 title=f"ROC: AUC {self.auc:.4f} +- {self.auc.standard_error:.4f}")

    def _draw_calibration(self, axes):
        known = [group for group in self.calibration if not math.isnan(group.share)]
        axes.plot([0, 1], [0, 1], color="gray", linewidth=0.8, linestyle="dotted")
        axes.errorbar([group.predicted for group in known], [group.share for group in known],
                      yerr=[NORMAL_95 * group.share.standard_error for group in known],
                      fmt="o", color="tab:blue", capsize=3)
        axes.set(xlabel="mean predicted probability", ylabel="share of label 1", aspect="equal",
                 xlim=(-0.02, 1.02), ylim=(-0.02, 1.02), title="Calibration")


class NumericEvaluation(Evaluation):
    """Of numeric labels: squared error and R^2, from noisy sums.

    Labels and predictions are clipped to the label range, so residuals to its width.
    """

    kind = "linear"
    notes = ("Labels and predictions are clipped to the label range.",)

    @classmethod
    def form_for(cls, release: Release) -> LabelSums:
        return LabelSums(*release.known.facts.label)

    @property
    def figures(self) -> dict[str, Estimate]:
        return {"rows": self.rows, "mean label": self.mean_label,
                "squared error": self.squared_error, "R^2": self.r2}

    @property
    def rows(self) -> Estimate:
        return Estimate(self._sums[0], self._error((1, 0, 0, 0)))

    @property
    def mean_label(self) -> Estimate:
        """In units of the label."""
        if not self._tells():
            return UNKNOWN
        n, labels, _, _ = self._sums
        mean, form = labels / n, self.form
        error = self._error((-mean / n, 1 / n, 0, 0))
        return Estimate(form.middle + form.half * mean,
                        form.half * error).within(form.low, form.high)

    @property
    def squared_error(self) -> Estimate:
        """The mean squared residual, in squared units of the label."""
        if not self._tells():
            return UNKNOWN
        n, _, _, squares = self._sums
        mean, unit = squares / n, self.form.half**2
        error = self._error((-mean / n, 0, 0, 1 / n))
        return Estimate(unit * mean, unit * error).within(0.0, math.inf)

    @property
    def r2(self) -> Estimate:
        """1 - (sum of squared residuals) / (sum of squared deviations of labels from their mean).

        Its error is that of its derivatives in the four sums.
        """
        if not self._tells():
            return UNKNOWN
        n, labels, squares, residuals = self._sums
        mean = labels / n
        around_mean = squares - n * mean**2
        of_around = np.array([mean**2, -2 * mean, 1, 0])
        if not around_mean > TELLING * self._error(of_around):
            return UNKNOWN
        left = residuals / around_mean
        slopes = (left * of_around - np.array([0, 0, 0, 1])) / around_mean
        return Estimate(1 - left, self._error(slopes)).within(-math.inf, 1.0)

    @cached_property
    def _sums(self) -> tuple[float, ...]:
        """Of 1, z, z^2 and (p - z)^2."""
        n, labels, twice, residuals = (value / SUM_UNITS for value in self.noisy)
        return n, labels, twice / 2, residuals

    def _tells(self) -> bool:
        return self.rows > TELLING * self.rows.standard_error

    def _error(self, slopes) -> float:
        """The standard error of what has these slopes in `_sums`, whose noise is independent."""
        units = np.array([1, 1, 0.5, 1]) * math.sqrt(self.terms.variance) / SUM_UNITS
        return float(np.linalg.norm(np.asarray(slopes) * units))


# --- bins and cells

@cache
def _cells() -> np.ndarray:
    """float64 (cells, BINS): 1 where a cell covers a bin."""
    return np.concatenate([np.kron(np.eye(BINS // run), np.ones(run)) for run in RUNS])


@cache
def _covariance() -> np.ndarray:
    """float64 (BINS, BINS): inv(A^T A), of the least-squares estimate per unit of variance."""
    cells = _cells()
    return np.linalg.inv(cells.T @ cells)


def _quadratic(slopes: np.ndarray) -> np.ndarray:
    """s^T inv(A^T A) s of every row s of slopes, (k, BINS)."""
    return ((slopes @ _covariance()) * slopes).sum(axis=1)


def _of_label(label: int) -> np.ndarray:
    """float64 (2, BINS): 1 on the counts of a label."""
    weights = np.zeros((2, BINS))
    weights[label] = 1
    return weights


def _ascending(rates: np.ndarray) -> np.ndarray:
    """The nearest ascending rates in [0, 1], from 0 to 1."""
    from scipy.optimize import isotonic_regression

    smooth = np.clip(isotonic_regression(rates).x, 0, 1)
    smooth[0], smooth[-1] = 0, 1
    return smooth


# --- what is shown

def _cell(value: float, width: int, whole: bool = False) -> str:
    """A figure in a column, to four digits or whole; - where it is not known."""
    number = float(value)
    if math.isnan(number):
        return f"{'-':>{width}}"
    if abs(number) >= 1e9 or 0 < abs(number) < (0.5 if whole else 1e-3):
        return f"{number:>{width}.3g}"
    return f"{number:>{width},.{0 if whole else 4}f}"


def _or_null(value: float) -> float | None:
    return None if math.isnan(value) else value


def _new_figure():
    try:
        from matplotlib.figure import Figure
    except ImportError:
        raise InputError("plots need matplotlib, which is not installed") from None
    return Figure(figsize=(10, 5), layout="constrained")


def _write(path: Path, content: bytes):
    try:
        path.write_bytes(content)
    except OSError as error:
        raise InputError(f"{path} cannot be written: {error.strerror}") from None
