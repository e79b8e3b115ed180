"""The budget book under fire: what a charge costs, many processes at once, killed processes."""

from __future__ import annotations

import multiprocessing
import os
import random
import signal
import statistics
import tempfile
import time
from collections import Counter
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from scipy.sparse import csr_array

import sordino
from sordino.accounting import Cost, gaussian_cost, pick_cost
from sordino.charging import plan_hash

# Nothing is warmed up in a child that is killed after a moment: it starts as a fork.
FORK = multiprocessing.get_context("fork")
GUARANTEE = sordino.Guarantee(1.0, 1e-6)
CHARGE = 2.0**-10           # pure epsilon of a charge of the crowd: sums of it are exact


@dataclass(frozen=True)
class BookCase:
    """Timings on the disk of the folder for temporary files."""

    name: str
    about: str
    timed: int = 500
    charges: int = 2_000
    processes: int = 8
    kills: int = 200
    longest_life: float = 0.2       # seconds until a process is killed, at most
    seed: int = 1


def run_book(case: BookCase, quick: bool, say: Callable[[str], None]) -> dict:
    """Figures of the three trials; a trial that goes wrong raises AssertionError."""
    kills = case.kills // 10 if quick else case.kills
    with tempfile.TemporaryDirectory() as name:
        folder = Path(name)
        say(f"{case.timed} charges in a new book, and as many behind {case.charges:,}")
        timings = charge_timings(folder / "timed.book", case.timed, case.charges)
        say(f"{case.processes} processes, {case.charges:,} charges")
        crowd = crowd_charges(folder / "crowd.book", case.processes, case.charges)
        say(f"{kills} kills")
        (folder / "kills").mkdir()
        killed = survive_kills(folder / "kills", kills, case.longest_life, case.seed)
    return {"book": {"timings": timings, "crowd": crowd, "kills": killed}}


# --- what a charge costs

def charge_timings(path: Path, timed: int, charges: int) -> dict:
    """Milliseconds of a charge, median and 99 %, in a new book and behind many charges."""
    book = sordino.BudgetBook.open(path, sordino.Guarantee(1e6, 1e-6))
    costs = [pick_cost(1e-4), gaussian_cost(1.0, 1e9), gaussian_cost(1.0, 1e9)]
    new = [_seconds_of_charge(book, costs) for _ in range(timed)]
    while len(book.entries) < charges:
        book.settle(book.charge("a fit", costs, GUARANTEE))
    started = time.perf_counter()
    book = sordino.BudgetBook(path)
    opened = time.perf_counter() - started
    full = [_seconds_of_charge(book, costs) for _ in range(timed)]
    return {"new": _milliseconds(new), "full": _milliseconds(full), "open_ms": 1000 * opened}


def _seconds_of_charge(book, costs) -> float:
    started = time.perf_counter()
    book.charge("a fit", costs, GUARANTEE)
    return time.perf_counter() - started


def _milliseconds(seconds: list[float]) -> dict:
    return {"median_ms": 1000 * statistics.median(seconds),
            "p99_ms": 1000 * float(np.quantile(seconds, 0.99)), "most_ms": 1000 * max(seconds)}


# --- many at once

def crowd_charges(path: Path, processes: int, charges: int) -> dict:
    """Processes that charge one book until it refuses; it has room for `charges` in all."""
    cap = sordino.Guarantee(charges * CHARGE)
    book = sordino.BudgetBook.open(path, cap)
    started = time.perf_counter()
    with FORK.Pool(processes) as pool:
        told = pool.starmap(_charge_until_refused, [(book, who) for who in range(processes)],
                            chunksize=1)
    seconds = time.perf_counter() - started
    numbers = sorted(number for numbers in told for number in numbers)
    entries = sordino.BudgetBook(path).entries
    assert numbers == [entry.number for entry in entries], "a charge was lost or doubled"
    assert len({entry.what for entry in entries}) == len(entries) == charges
    assert book.epsilon_spent == cap.epsilon, "the cap was passed, or not reached"
    return {"seconds": seconds, "charges": len(entries), "by_process": sorted(map(len, told)),
            "epsilon_spent": book.epsilon_spent, "cap": cap.epsilon}


def _charge_until_refused(book, who: int) -> list[int]:
    numbers = []
    while True:
        try:
            numbers.append(book.charge(f"charge {len(numbers)} of process {who}",
                                       [Cost(CHARGE**2 / 2, CHARGE)], sordino.Guarantee(CHARGE)))
        except sordino.BudgetError:
            return numbers


# --- killed processes

def survive_kills(folder: Path, kills: int, longest_life: float, seed: int) -> dict:
    """Kill processes that charge, fit, settle and release; look at the book after each.

    The book must open, which checks it whole, and must show a settled charge for every plan of
    which there is a release.
    """
    path = folder / "a.book"
    sordino.BudgetBook.open(path, sordino.Guarantee(1e6, 1e-6))
    rng = random.Random(seed)
    hot, new, known = 0, Counter(), 0
    for run in range(kills):
        child = FORK.Process(target=_fit_for_ever, args=(path, folder, run))
        child.start()
        time.sleep(rng.uniform(0, longest_life))
        os.kill(child.pid, signal.SIGKILL)
        child.join()
        assert child.exitcode == -signal.SIGKILL, "it died by itself"
        hot += Path(f"{path}-journal").exists()
        entries = sordino.BudgetBook(path).entries
        settled = {entry.plan for entry in entries if entry.state == "settled"}
        assert released_plans(folder) <= settled, "a release without its charge"
        new[len(entries) - known] += 1
        known = len(entries)
    states = Counter(entry.state for entry in entries)
    return {"kills": kills, "charges": len(entries), "releases": len(released_plans(folder)),
            "states": dict(states), "journals_left": hot, "died_before_a_charge": new[0]}


def released_plans(folder: Path) -> set[str]:
    return {path.stem for path in folder.glob("*.json")}


def _fit_for_ever(path: Path, folder: Path, run: int):
    """Fits of plans that differ, each saved under the hash of its plan."""
    rng = np.random.default_rng(run)
    X = csr_array((rng.random((60, 8)) < 0.4).astype(float))
    y = (rng.random(60) < 0.5).astype(float)
    facts = sordino.PublicFacts(features=8, rows=60)
    for i in range(10**6):
        guarantee = sordino.Guarantee(0.5 + run * 1e-3 + i * 1e-6, 1e-6)
        plan = sordino.plan_fit(facts, guarantee, method="frank-wolfe", steps=3)
        release = plan.fit(X, y, book=path)
        release.save(folder / f"{plan_hash(plan)}.json")
