"""The cases: what is run side by side, in one process, on one thread."""

from __future__ import annotations

import gc
import statistics
from collections.abc import Callable
from contextlib import contextmanager
from dataclasses import asdict, dataclass
from functools import partial
from pathlib import Path
from time import perf_counter

import numpy as np

import sordino

from . import textbook
from .book import BookCase, run_book
from .data import Planted, log_loss, planted_labels, zipf_table
from .linear import LinearCase, run_linear
from .prior import PriorCase, run_prior
from .real import RealCase, run_real
from .tails import TailsCase, run_tails
from .text import TextCase, run_text

DELTA = 1e-6
REPEATS = 21
QUICK_STEPS = 40  # of the textbook method, in a case run with --quick
_MAKING_THE_TABLE = {"build", "orient"}  # both orientations of it

Say = Callable[[str], None]


@dataclass(frozen=True)
class SpeedCase:
    """Both methods on one invented table, timed."""

    name: str
    about: str
    rows: int
    features: int
    entries_per_row: float
    epsilon: float
    steps: int
    scaled_when_quick: bool
    radius: float = 10.0
    schedule: str = "shrinking"
    true_features: int = 20
    strength: float = 0.5
    seed: int = 1


@dataclass(frozen=True)
class AccuracyCase:
    """Both methods on planted signals, judged on fresh rows, over seeds."""

    name: str
    about: str
    rows: int
    fresh_rows: int
    features: int
    entries_per_row: float
    epsilons: tuple[float, ...]
    steps: int
    seeds: int
    radius: float = 10.0
    schedules: tuple[str, ...] = ("shrinking", "paced")
    true_features: int = 20
    strength: float = 0.5


CASES = {
    case.name: case
    for case in (
        SpeedCase(
            "signal",
            "nearly every step picks a very common feature",
            rows=100_000,
            features=1_000_000,
            entries_per_row=76,
            epsilon=1.0,
            steps=200,
            scaled_when_quick=False,
        ),
        SpeedCase(
            "noise",
            "noise dominates the picks",
            rows=200_000,
            features=3_000_000,
            entries_per_row=75,
            epsilon=0.1,
            steps=400,
            scaled_when_quick=True,
        ),
        AccuracyCase(
            "accuracy",
            "excess log loss on fresh rows, textbook noise against ours",
            rows=50_000,
            fresh_rows=20_000,
            features=200_000,
            entries_per_row=60,
            epsilons=(0.5, 1.0),
            steps=100,
            seeds=10,
        ),
        LinearCase("linear", "squared and Huber's loss, true features found and R^2"),
        PriorCase("prior", "what it is worth to know 1 % of the features that hold the true ones"),
        TextCase("text", "words of Debian packages, language libraries against the rest"),
        RealCase("real", "open data that packages carry, every method at its defaults"),
        TailsCase("tails", "one row in a hundred scaled up a hundred times"),
        BookCase("book", "the budget book: cost of a charge, many processes, kills"),
    )
}


def run(name: str, quick: bool, say: Say, cache: Path | None = None) -> dict:
    """Run a case; `say` gets a line at each stage. Returns its settings and every number.

    cache  where packages of open data are unpacked; left out: see `open_data.fetch`
    """
    case = CASES[name]
    measure = {
        SpeedCase: run_speed, AccuracyCase: run_accuracy, LinearCase: run_linear,
        PriorCase: run_prior, TextCase: run_text, RealCase: partial(run_real, cache=cache),
        TailsCase: run_tails, BookCase: run_book,
    }[type(case)]  # fmt: skip
    started = perf_counter()
    results = measure(case, quick, say)
    return {"settings": asdict(case), "seconds": perf_counter() - started, **results}


# --- speed


def run_speed(case: SpeedCase, quick: bool, say: Say) -> dict:
    """Solve alone, whole fit, memory and table size of both methods on one table."""
    say(f"drawing {case.rows:,} x {case.features:,}")
    X = zipf_table(case.rows, case.features, case.entries_per_row, seed=case.seed)
    planted = planted_labels(X, case.true_features, case.strength, seed=case.seed)
    stop_after = QUICK_STEPS if quick and case.scaled_when_quick else None
    say(f"sordino: {REPEATS} fits")
    ours = _our_speed(case, X, planted)
    say(f"sordino, two threads: {REPEATS} fits")
    two_threads = _our_speed(case, X, planted, threads=2)
    gc.collect()
    theirs = _textbook_speed(case, X, planted, stop_after, say)
    ratios = {
        draw: {
            "solve": side["solve_seconds"] / ours["solve_seconds"],
            "fit": side["fit_seconds"] / ours["fit_seconds"],
        }
        for draw, side in theirs["draws"].items()
    }
    return {"entries": X.nnz, "textbook": theirs, "sordino": ours, "two_threads": two_threads,
            "ratio": ratios}


def _textbook_speed(case: SpeedCase, X, planted: Planted, stop_after: int | None, say: Say):
    """Its figures: those of one draw after the other, under "draws"."""
    draws = {}
    with peak_memory() as memory:
        table = textbook.prepare(X)
        for draw in textbook.DRAWS:
            say(f"textbook, {draw} draws: {stop_after or case.steps} of {case.steps} steps")
            fit = _textbook_fit(case, table, planted.labels, stop_after=stop_after, draw=draw)
            scale = case.steps / len(fit.picks)
            solve = scale * sum(fit.seconds.values())
            draws[draw] = {
                "solve_seconds": solve,
                "fit_seconds": table.seconds + solve,
                "seconds_by_phase": {name: scale * value for name, value in fit.seconds.items()},
                "log_loss": None if scale != 1 else log_loss(planted.labels, fit.margin(X)),
                "features_chosen": len(fit.features),
            }
    return {
        "draws": draws,
        "steps_run": len(fit.picks),
        "scaled": scale != 1,
        "product": table.product,
        "product_seconds": table.products,
        "noise_scale_rows": fit.noise_scale,
        "peak_memory": memory,
    }


def _textbook_fit(case: SpeedCase, table, y, **options):
    return textbook.frank_wolfe(
        table,
        y,
        epsilon=case.epsilon,
        delta=DELTA,
        steps=case.steps,
        radius=case.radius,
        schedule=case.schedule,
        seed=case.seed,
        **options,
    )


def _our_speed(case: SpeedCase, X, planted: Planted, threads: int = 1) -> dict:
    started = perf_counter()
    plan = _plan(case, case.rows, case.epsilon, case.schedule)
    plan_seconds = perf_counter() - started
    fits = []
    with peak_memory() as memory:
        for _ in range(REPEATS):
            started = perf_counter()
            release = plan.fit(X, planted.labels, threads=threads)
            fits.append((perf_counter() - started, dict(release.profile.seconds)))
    phases = [seconds for _, seconds in fits]
    table_bytes = release.profile.table_bytes
    return {
        "solve_seconds": statistics.median(map(solve_seconds, phases)),
        "solve_quartiles": statistics.quantiles(map(solve_seconds, phases), n=4),
        "fit_seconds": statistics.median(seconds for seconds, _ in fits),
        "plan_seconds": plan_seconds,
        "repeats": [{"fit": seconds, "solve": solve_seconds(by)} for seconds, by in fits],
        "seconds_by_phase": {
            name: statistics.median(seconds[name] for seconds in phases) for name in phases[0]
        },
        "noise_scale_rows": 2 / plan.pick_epsilon,
        "resolution": plan.resolution,
        "features_chosen": len(release.features),
        "log_loss": log_loss(planted.labels, release.margin(X)),
        "table_bytes": table_bytes,
        "table_bytes_bound": 8 * X.nnz + 24 * (case.rows + case.features),
        "table_bytes_per_entry": table_bytes / X.nnz,
        "peak_memory": memory,
    }


def solve_seconds(phases: dict[str, float]) -> float:
    """Solve alone: all phases of a fit but those that make the table."""
    return sum(value for name, value in phases.items() if name not in _MAKING_THE_TABLE)


# --- accuracy


def run_accuracy(case: AccuracyCase, quick: bool, say: Say) -> dict:
    """Excess log loss over the true model on fresh rows, for each seed, schedule and epsilon."""
    runs = []
    for seed in range(1, case.seeds + 1):
        say(f"seed {seed} of {case.seeds}")
        runs += _accuracy_runs(case, seed)
    return {"runs": runs, "summary": _summaries(case, runs)}


def _accuracy_runs(case: AccuracyCase, seed: int) -> list[dict]:
    X = zipf_table(
        case.rows + case.fresh_rows, case.features, case.entries_per_row, seed=seed
    )
    planted = planted_labels(X, case.true_features, case.strength, seed=seed)
    train, fresh = X[: case.rows], X[case.rows :]
    y, y_fresh = np.split(planted.labels, [case.rows])
    table = textbook.prepare(train)
    best = log_loss(y_fresh, fresh @ planted.coefficients + planted.intercept)
    runs = []
    for schedule in case.schedules:
        for epsilon in case.epsilons:
            theirs = textbook.frank_wolfe(
                table,
                y,
                epsilon=epsilon,
                delta=DELTA,
                steps=case.steps,
                radius=case.radius,
                schedule=schedule,
                seed=seed,
            )
            plan = _plan(case, case.rows, epsilon, schedule)
            ours = plan.fit(train, y, threads=1)
            runs.append(
                {
                    "seed": seed,
                    "schedule": schedule,
                    "epsilon": epsilon,
                    "true_model": best,
                    "textbook": log_loss(y_fresh, theirs.margin(fresh)) - best,
                    "sordino": log_loss(y_fresh, ours.margin(fresh)) - best,
                }
            )
    return runs


def _summaries(case: AccuracyCase, runs: list[dict]) -> list[dict]:
    summaries = []
    for schedule in case.schedules:
        for epsilon in case.epsilons:
            chosen = [r for r in runs if (r["schedule"], r["epsilon"]) == (schedule, epsilon)]
            summaries.append(
                {
                    "schedule": schedule,
                    "epsilon": epsilon,
                    "textbook": statistics.median(run["textbook"] for run in chosen),
                    "sordino": statistics.median(run["sordino"] for run in chosen),
                    "lower": sum(run["sordino"] < run["textbook"] for run in chosen),
                    "seeds": len(chosen),
                }
            )
    return summaries


# --- shared


def _plan(case: SpeedCase | AccuracyCase, rows: int, epsilon: float, schedule: str):
    return sordino.plan_fit(
        sordino.PublicFacts(features=case.features, rows=rows),
        sordino.Guarantee(epsilon=epsilon, delta=DELTA),
        method="frank-wolfe",
        loss="logistic",
        steps=case.steps,
        radius=case.radius,
        schedule=schedule,
        intercept=False,
    )


@contextmanager
def peak_memory():
    """Yields a dict that holds, after the block, bytes resident before it and at its peak.

    Linux only, through the peak that the kernel keeps and lets a process reset; elsewhere the
    dict stays empty.
    """
    measured: dict[str, int] = {}
    before = _reset_peak()
    yield measured
    if before is not None:
        peak = _status_bytes("VmHWM")
        measured.update(before=before, peak=peak, rise=peak - before)


def _reset_peak() -> int | None:
    """Bytes resident now, the peak set to that; None where it cannot be done."""
    try:
        Path("/proc/self/clear_refs").write_text("5")
        return _status_bytes("VmRSS")
    except OSError:
        return None


def _status_bytes(field: str) -> int:
    for line in Path("/proc/self/status").read_text().splitlines():
        name, _, value = line.partition(":")
        if name == field:
            return 1024 * int(value.split()[0])
    raise OSError(f"the system tells no {field} of a process")
