"""What follows from the noisy numbers of an evaluation, with the error that noise puts on it."""

from __future__ import annotations

import io
import math
from dataclasses import dataclass
from functools import cached_property
from pathlib import Path
from typing import NamedTuple

import numpy as np
from scipy.special import expit, logit

from ..accounting import Cost, gaussian_cost
from ..checks import real_number
from ..errors import InputError
from ..facts import Guarantee
from ..release import Release
from .forms import BINS, GROUPS, SUM_UNITS, LabelSums, MarginHistogram, cells, covariance

LOSS_FLOOR = 0.001          # log loss takes probabilities as at least this far from 0 and 1
TELLING = 3                 # a ratio needs a denominator of so many standard errors
NORMAL_95 = 1.959964
COUNTED = ("rows", "label 1", "label 0")


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
        return noisy @ cells() @ covariance()

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


# --- sums over bins

def _quadratic(slopes: np.ndarray) -> np.ndarray:
    """s^T inv(A^T A) s of every row s of slopes, (k, BINS)."""
    return ((slopes @ covariance()) * slopes).sum(axis=1)


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
