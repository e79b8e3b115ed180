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

import math

import numpy as np
import scipy.sparse as sp

from .._core.bits import Bits
from ..accounting import gaussian_cost, zcdp_of_epsilon
from ..charging import Bill, account_of, charged_for, plan_hash
from ..checks import checked_keys, whole_number, yes_or_no
from ..errors import InputError
from ..facts import MOST_ROWS, MOST_ROWS_PER_PERSON, Guarantee
from ..intake import rows_of_part, rows_to_keep
from ..persons import codes_of
from ..release import Release, checked_spending
from ..table import checked_labels
from .figures import BinaryEvaluation, Evaluation, NumericEvaluation, Terms

MOST_NOISY = 2**120


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
