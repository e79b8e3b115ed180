"""What leaves: coefficients, intercept, plan and guarantee; predictions; the release file.

A release file is JSON: a name, a version, a checksum, and the content. It is read strictly:
whatever is missing, unknown, of the wrong type, out of range or altered is refused.
"""

from __future__ import annotations

import hashlib
import json
import math
import os
import tempfile
import time
from contextlib import contextmanager
from dataclasses import dataclass, field, replace
from functools import cached_property
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np
import scipy.sparse as sp
from scipy.special import expit

from .book import Entry
from .bounds import GRID, SIGNED_GRID
from .checks import checked_keys, real_number, yes_or_no
from .errors import InputError
from .facts import Guarantee
from .plan import Plan
from .table import with_sound_ids

if TYPE_CHECKING:
    from .evaluation import Evaluation

KIND = "sordino release"
VERSION = 1
MOST_BYTES = 2**28
SHOWN = 10
SLICE = 2**20               # entries of a table that are widened at a time
ROUNDING = 1e-9             # relative, of a sum of coefficients


@dataclass(frozen=True, eq=False, repr=False)
class Release:
    """A fitted model, and what was promised about it.

    plan          the plan it came from
    features      int64 (k,) ids of the chosen features, ascending
    coefficients  float64 (k,) in the units of the data
    intercept     in units of margin: log odds, or the units of a numeric label
    rehearsal     True: made with a fixed seed, NOT private, must not leave
    names         public names of the chosen features, (k,), or None
    profile       counters and seconds, for inside only: never saved; None once loaded
    deviations    float64 (k,): the part of each coefficient's standard deviation that comes from
                  the noise of corrections, which is public; NaN where theory gives none. Neither
                  sampling error is in it, nor the noise of second moments, nor that other
                  features might have been picked
    intercept_deviation  likewise
    evaluations   private evaluations that are kept with it: see `with_evaluation`
    spending      what the budget book of the data had charged by then, this fit included; None
                  where no book was kept
    learned       facts that the fit learned privately: {"entry_bound": b, "label": (low, high)}
    persons_bounded  whether a person's surplus rows were dropped, or just promised not to be there
    """

    plan: Plan
    features: np.ndarray
    coefficients: np.ndarray
    intercept: float
    rehearsal: bool
    names: tuple[str, ...] | None = None
    profile: Profile | None = None
    learned: dict = field(default_factory=dict)
    persons_bounded: bool = False
    deviations: np.ndarray | None = None
    intercept_deviation: float = math.nan
    spending: dict | None = None
    evaluations: tuple[Evaluation, ...] = ()

    def __post_init__(self):
        if self.deviations is None:
            object.__setattr__(self, "deviations", np.full(len(self.features), np.nan))
        for name, dtype in (("features", np.int64), ("coefficients", np.float64),
                            ("deviations", np.float64)):
            values = np.array(getattr(self, name), dtype=dtype)
            values.flags.writeable = False
            object.__setattr__(self, name, values)

    @property
    def guarantee(self) -> Guarantee:
        return self.plan.guarantee

    @cached_property
    def known(self) -> Plan:
        """The plan with the facts that were learned."""
        return self.plan.with_facts(**self.learned) if self.learned else self.plan

    @property
    def binary(self) -> bool:
        """Whether labels are 0 or 1."""
        return self.plan.facts.label == "binary"

    # --- predictions

    def margin(self, X) -> np.ndarray:
        """float64 (n,): X @ w + intercept, for X (n, features) sparse in any format or dense.

        Entries are used as they are, not clipped to their bounds. Raises InputError for another
        number of columns, ids out of range and entries that are not finite. Time O(entries of X);
        memory one float64 per feature and row (formats other than CSR may be widened to float64).
        """
        table = X if sp.issparse(X) else np.asarray(X)
        columns = self.plan.facts.features
        if table.ndim != 2 or table.shape[1] != columns or table.dtype.kind not in "buif":
            raise InputError(
                f"X must be a table of numbers with {columns:,} columns, not "
                f"{table.dtype} of shape {table.shape}"
            )
        if sp.issparse(table):
            weights = np.zeros(columns)
            weights[self.features] = self.coefficients
            product = _sparse_times(table, weights)
        else:
            product = table[:, self.features].astype(np.float64) @ self.coefficients
        wrong = np.flatnonzero(~np.isfinite(product))
        if len(wrong):
            raise InputError(f"row {wrong[0]} of X holds an entry that is not a finite number")
        return product + self.intercept

    def predict_probability(self, X) -> np.ndarray:
        """float64 (n,): the probability of label 1, expit of the margin.

        Raises InputError for a model of numeric labels.
        """
        if not self.binary:
            raise InputError("a linear model has no probabilities: use predict")
        return expit(self.margin(X))

    def predict(self, X) -> np.ndarray:
        """(n,): the likelier label, int64 0 or 1; for numeric labels the margin itself, float64."""
        margin = self.margin(X)
        return (margin > 0).astype(np.int64) if self.binary else margin

    def evaluate(self, X, y, guarantee: Guarantee, *, book=None, persons=None, rows=None,
                 rows_per_person=None, rehearsal_seed=None) -> Evaluation:
        """Measure this model privately on rows that no fit has seen: see `evaluation.evaluate`."""
        from .evaluation import evaluate

        return evaluate(self, X, y, guarantee, book=book, persons=persons, rows=rows,
                        rows_per_person=rows_per_person, rehearsal_seed=rehearsal_seed)

    def with_evaluation(self, evaluation: Evaluation) -> Release:
        """This release with one more evaluation, for its statement and its file."""
        if evaluation.rehearsal and not self.rehearsal:
            raise InputError("this evaluation is a rehearsal, which is not private: it cannot be "
                             "kept with a release that may leave")
        return replace(self, evaluations=(*self.evaluations, evaluation))

    # --- what is said and kept

    def statement(self, *, html: bool = False) -> str:
        """For a disclosure board: what this release gives away, and what it does not.

        Markdown, or with html=True a web page in one file that needs nothing else.
        """
        from .statement import statement, statement_page

        return statement_page(self) if html else statement(self)

    def save(self, path, *, rehearsal: bool = False):
        """Write the release file, whole or not at all.

        A rehearsal is only saved with rehearsal=True, and the file says so. Raises InputError where
        it cannot be written.
        """
        if self.rehearsal and not rehearsal:
            raise InputError(
                "this is a rehearsal: it is not private and must not leave. "
                "save(path, rehearsal=True) keeps it all the same, marked as one"
            )
        content = self._content()
        page = {
            "kind": KIND, "version": VERSION, "sha256": _checksum(content), "content": content,
        }
        write_text(Path(path), _as_text(page))

    def _content(self) -> dict:
        return {
            "rehearsal": self.rehearsal,
            "intercept": self.intercept,
            "features": self.features.tolist(),
            "names": None if self.names is None else list(self.names),
            "coefficients": self.coefficients.tolist(),
            "deviations": [_or_null(value) for value in self.deviations.tolist()],
            "intercept_deviation": _or_null(self.intercept_deviation),
            "learned": {name: list(value) if isinstance(value, tuple) else value
                        for name, value in self.learned.items()},
            "persons_bounded": self.persons_bounded,
            "spending": self.spending,
            "evaluations": [evaluation.content for evaluation in self.evaluations],
            "plan": self.plan.to_dict(),
        }

    def __repr__(self) -> str:
        mark = "REHEARSAL, " if self.rehearsal else ""
        promise = self.guarantee
        return (
            f"<Release: {mark}{len(self.features)} features, epsilon {promise.epsilon:g}, "
            f"delta {promise.delta:g}, {promise.neighbours}>"
        )

    def __str__(self) -> str:
        promise = self.guarantee
        lines = ["REHEARSAL: not private, must not leave."] if self.rehearsal else []
        lines += [
            f"Release of a {self.plan.loss_form.kind} model: {len(self.features):,} of "
            f"{self.plan.facts.features:,} features, intercept {self.intercept:+.4f}",
            f"epsilon {promise.epsilon:g}, delta {promise.delta:g}, {self._unit_words()} "
            f"{'more or less' if promise.neighbours == 'add-remove' else 'changed'} "
            f"({promise.neighbours})",
            *(f"learned privately: {name} {value}" for name, value in self.learned.items()),
            "",
            *self._largest_lines(),
        ]
        return "\n".join(lines)

    def _unit_words(self) -> str:
        most = self.plan.facts.rows_per_person
        return "one row" if most == 1 else f"one person of up to {most:,} rows"

    def _largest_lines(self) -> list[str]:
        order = np.argsort(-abs(self.coefficients), kind="stable")[:SHOWN]
        known = not np.isnan(self.deviations).all()
        lines = [
            f"{self.coefficients[k]:+12.4f}"
            + (_deviation_cell(self.deviations[k]) if known else "")
            + f"  {self.features[k]:>10}"
            + ("" if self.names is None else f"  {_printable(self.names[k])}")
            for k in order
        ]
        if not lines:
            return ["No feature was chosen."]
        left = len(self.features) - len(lines)
        heading = (f"{'coefficient':>12}{'  +- noise' if known else ''}  {'feature':>10}"
                   + ("" if self.names is None else "  name"))
        return [heading, *lines, *([f"... and {left:,} more"] if left else [])]


def _deviation_cell(deviation: float) -> str:
    return f"{'' if math.isnan(deviation) else format(deviation, '.4f'):>10}"


def _printable(name: str) -> str:
    """A name that cannot steer the terminal it is shown on."""
    return "".join(letter if letter.isprintable() else "?" for letter in name)


def _sparse_times(X, weights: np.ndarray) -> np.ndarray:
    """float64 (n,): X @ weights, with CSR widened to float64 one slice of rows at a time."""
    X = with_sound_ids(X.tocsr() if X.format in ("lil", "dok") else X)
    if X.format != "csr":
        return X.astype(np.float64, copy=False) @ weights
    product, first = np.empty(X.shape[0]), 0
    while first < X.shape[0]:
        stop = int(np.searchsorted(X.indptr, X.indptr[first] + SLICE, side="right")) - 1
        stop = max(stop, first + 1)
        product[first:stop] = X[first:stop].astype(np.float64) @ weights
        first = stop
    return product


def load_release(path) -> Release:
    """A Release from a file that `save` wrote; raises InputError for anything else."""
    source = os.fsdecode(path)
    try:
        text = _read_bounded(source)
        page = _parsed(text)
        checked_keys("the file", page, ("kind", "version", "sha256", "content"))
        if page["kind"] != KIND:
            raise InputError("it is not a release file")
        if page["version"] != VERSION or isinstance(page["version"], bool):
            raise InputError(
                f"it has version {page['version']!r}; this sordino reads version {VERSION}"
            )
        if page["sha256"] != _checksum(page["content"]):
            raise InputError("its checksum does not fit: it was altered or damaged")
        if text != _as_text(page):
            raise InputError("its layout is not that of a saved release: it was altered")
        return _release(page["content"])
    except InputError as error:
        raise InputError(f"{source}: {error}") from None
    except (OverflowError, MemoryError):
        raise InputError(f"{source}: it holds a number too large for a release") from None


def _release(content) -> Release:
    """A release from the content of a file, every part checked."""
    checked_keys("content", content, ("rehearsal", "intercept", "features", "names",
                                      "coefficients", "deviations", "intercept_deviation",
                                      "learned", "persons_bounded", "spending", "evaluations",
                                      "plan"))
    rehearsal = yes_or_no("rehearsal", content["rehearsal"])
    intercept = real_number("intercept", content["intercept"])
    plan = Plan.from_dict(content["plan"])
    learned = _checked_learned(content["learned"], plan)
    known = plan.with_facts(**learned) if learned else plan
    if intercept != known.loss_form.centre and not plan.intercept:
        raise InputError("there is an intercept, which the plan has not")
    features = _checked_features(content["features"], plan)
    coefficients = _checked_coefficients(content["coefficients"], features, known)
    names = _checked_names(content["names"], len(features))
    release = Release(plan, features, coefficients, intercept, rehearsal, names, learned=learned,
                   persons_bounded=yes_or_no("persons_bounded", content["persons_bounded"]),
                   deviations=_checked_deviations(content["deviations"], len(features)),
                   intercept_deviation=_deviation(content["intercept_deviation"]),
                   spending=checked_spending(content["spending"]))
    return _with_evaluations(release, content["evaluations"])


def _with_evaluations(release: Release, contents) -> Release:
    from .evaluation import evaluation_of

    if not isinstance(contents, list):
        raise InputError("evaluations must be a list")
    for content in contents:
        release = release.with_evaluation(evaluation_of(release, content))
    return release


def checked_spending(spending) -> dict | None:
    """What a book had charged, as `charging.charged` tells it."""
    if spending is None:
        return None
    checked_keys("spending", spending, ("cap", "epsilon_spent", "charges"))
    Guarantee.from_dict(spending["cap"])
    real_number("epsilon_spent", spending["epsilon_spent"])
    if not isinstance(spending["charges"], list):
        raise InputError("charges must be a list")
    for charge in spending["charges"]:
        Entry.from_dict(charge)
    return spending


def _checked_deviations(values, count: int) -> np.ndarray:
    if not isinstance(values, list) or len(values) != count:
        raise InputError("deviations must be a list with one number or null per feature")
    return np.array([_deviation(value) for value in values])


def _deviation(value) -> float:
    """A standard deviation; NaN for null."""
    if value is None:
        return math.nan
    if real_number("a deviation", value) < 0:
        raise InputError(f"a deviation must be at least 0, not {value:g}")
    return float(value)


def _or_null(value: float) -> float | None:
    return None if math.isnan(value) else value


def _checked_learned(values, plan: Plan) -> dict:
    """Learned facts: points of the public grids."""
    learned = dict(checked_keys("learned", values, plan.facts.learned))
    if "entry_bound" in learned and not _on_grid(learned["entry_bound"], GRID):
        raise InputError("the learned entry_bound is not one that can be picked")
    if "label" in learned:
        ends = learned["label"]
        if not (isinstance(ends, list) and len(ends) == 2
                and all(_on_grid(end, SIGNED_GRID) for end in ends) and ends[0] < ends[1]):
            raise InputError("the learned label range is not one that can be picked")
        learned["label"] = tuple(ends)
    return learned


def _on_grid(value, grid: np.ndarray) -> bool:
    return isinstance(value, float) and bool(np.isin(value, grid))


def _checked_features(ids, plan: Plan) -> np.ndarray:
    last = plan.facts.features - 1
    if not isinstance(ids, list) or not all(type(j) is int and 0 <= j <= last for j in ids):
        raise InputError(f"features must be a list of whole numbers between 0 and {last:,}")
    if any(after <= before for before, after in zip(ids, ids[1:])):
        raise InputError("features must ascend")
    known = plan.knowledge
    if excluded := set(ids) & set(known.exclude):
        raise InputError(f"feature {min(excluded)} is one that the plan excludes")
    picked = set(ids) - set(known.include) - set(known.started)
    if len(picked) > plan.picks:
        raise InputError(f"there are {len(picked):,} features picked, more than the plan's "
                         f"{plan.picks:,}")
    return np.array(ids, dtype=np.int64)


def _checked_coefficients(values, features: np.ndarray, plan: Plan) -> np.ndarray:
    if not isinstance(values, list) or len(values) != len(features):
        raise InputError("coefficients must be a list with one number per feature")
    coefficients = np.array([real_number("a coefficient", value) for value in values])
    reached = math.fsum(abs(plan.in_bounds(features, coefficients)))
    most = plan.own_reach + plan.start_reach()
    if reached > most * (1 + ROUNDING):
        raise InputError(
            f"coefficients reach {reached:.6g} in bounds, beyond the plan's {most:.6g}"
        )
    return coefficients


def _checked_names(names, count: int) -> tuple[str, ...] | None:
    if names is None:
        return None
    if not isinstance(names, list) or not all(isinstance(name, str) for name in names):
        raise InputError("names must be a list of texts, or null")
    if len(names) != count:
        raise InputError(f"there are {len(names):,} names for {count:,} features")
    return tuple(names)


# --- the file

def _checksum(content) -> str:
    """SHA-256 of the content as JSON with sorted keys and no spaces, in UTF-8."""
    text = json.dumps(content, sort_keys=True, separators=(",", ":"), ensure_ascii=False)
    return hashlib.sha256(text.encode("utf-8", "surrogatepass")).hexdigest()


def _as_text(page: dict) -> str:
    """The file, to the letter."""
    return json.dumps(page, indent=1, ensure_ascii=False) + "\n"


def write_text(path: Path, text: str):
    """Write to a neighbour, then rename: the file is never seen half-written."""
    try:
        handle, neighbour = tempfile.mkstemp(dir=path.parent, prefix=f".{path.name}.")
        try:
            with os.fdopen(handle, "w", encoding="utf-8") as file:
                file.write(text)
                file.flush()
                os.fsync(file.fileno())
            os.chmod(neighbour, 0o666 & ~_umask())
            os.replace(neighbour, path)
        except BaseException:
            os.unlink(neighbour)
            raise
    except (OSError, UnicodeEncodeError) as error:
        raise InputError(f"{path} cannot be written: {getattr(error, 'strerror', error)}") from None


def _umask() -> int:
    mask = os.umask(0)
    os.umask(mask)
    return mask


def _read_bounded(source: str) -> str:
    try:
        with open(source, "rb") as file:
            stored = file.read(MOST_BYTES + 1)
    except OSError as error:
        raise InputError(error.strerror) from None
    if len(stored) > MOST_BYTES:
        raise InputError(f"it is larger than {MOST_BYTES >> 20} MiB, more than a release ever is")
    try:
        return stored.decode()
    except UnicodeDecodeError:
        raise InputError("it is not text in UTF-8: it was altered or damaged") from None


def _parsed(text: str):
    try:
        return json.loads(text, object_pairs_hook=_each_key_once, parse_constant=_refuse_constant)
    except (ValueError, RecursionError) as error:
        if isinstance(error, InputError):
            raise
        raise InputError(f"it is not whole JSON: it was cut short or altered ({error})") from None


def _each_key_once(pairs: list) -> dict:
    fields = dict(pairs)
    if len(fields) != len(pairs):
        raise InputError("a key is given twice")
    return fields


def _refuse_constant(text: str):
    raise InputError(f"{text} is not a finite number")


# --- for inside only

class Profile:
    """Where a fit spent its time. It depends on the data: for inside only, never saved.

    seconds      by phase: build and orient make the table, the others are the solve
    counters     what the kernels did
    table_bytes  bytes of both orientations of the table
    """

    def __init__(self):
        self.seconds: dict[str, float] = {}
        self.counters: dict[str, int] = {}
        self.table_bytes = 0

    @contextmanager
    def phase(self, name: str):
        """Add the time of a block to a phase."""
        started = time.perf_counter()
        yield
        self.seconds[name] = self.seconds.get(name, 0.0) + time.perf_counter() - started

    def take(self, table, rows, scores):
        """Read the clocks and counters of both rooms; what they did not use of the solve is left.

        Corrections of a chosen set, noisy looks at an intercept, and the loop itself.
        """
        solve = self.seconds.pop("solve", 0.0)
        in_rooms = {
            "first scores": rows.seconds_first_scores,
            "picks": scores.seconds_picks,
            "row updates": rows.seconds_updates,
            "heap": scores.seconds_heap,
        }
        self.seconds |= in_rooms | {"corrections": max(0.0, solve - sum(in_rooms.values()))}
        self.counters = {
            **rows.counters,
            **scores.counters,
            "loud": len(rows.loud),
            "loud_entries": len(rows.loud_of),
        }
        self.table_bytes = table.columns.n_bytes + rows.n_bytes

    def __str__(self) -> str:
        seconds = [f"{name:14} {value:10.4f} s" for name, value in self.seconds.items()]
        counters = [f"{name:14} {value:12,}" for name, value in self.counters.items()]
        return "\n".join(
            ["For inside only: these figures depend on the data.", "", *seconds, "", *counters,
             f"{'table bytes':14} {self.table_bytes:12,}"]
        )
