"""Data on its way in: checked whole before anything is drawn, then bounded, then laid out.

The order matters. Nothing random happens to input that is not known to be sound; surplus rows of a
person go before a bound is learned from the rows that stay, so that no person has more say in it
than the plan charges for.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from ._core.bits import Bits
from ._core.crew import Crew
from .book import BookPart
from .bounds import learned_entry_bound, learned_label_range
from .errors import InputError
from .persons import codes_of, kept_rows
from .plan import Plan
from .plan.corrections import MOST_COEFFICIENT
from .table import Csr, Table, build_table, checked_labels, sampled_magnitudes, sound_matrix

ANY_LABEL = (-np.inf, np.inf)


@dataclass(frozen=True)
class Intake:
    """Sound input to a plan.

    matrix  X, checked to its last entry
    labels  float64 (n,), not yet clipped where their range is to be learned
    codes   int64 (n,): the person of every row; None where nobody said
    part    bool (n,): the rows of the part of the data that is charged; None for all
    """

    matrix: Csr
    labels: np.ndarray
    codes: np.ndarray | None
    part: np.ndarray | None


def taken_in(plan: Plan, X, y, persons, report: Callable, account=None,
             crew: Crew | None = None) -> Intake:
    """X, y and persons, checked against the plan; raises InputError. Nothing is drawn.

    account  what the plan is charged to: a book, a part of one, or None
    """
    matrix = sound_matrix(X, plan.facts.features, report, crew, plan.facts, plan.entry_levels)
    _check_size(plan, matrix.n_rows)
    label = ANY_LABEL if "label" in plan.facts.learned else plan.facts.label
    labels = checked_labels(y, matrix.n_rows, label)
    codes = None if persons is None else codes_of(persons, matrix.n_rows)
    if not plan.facts.learned:
        _check_start(plan)
    return Intake(matrix, labels, codes, rows_of_part(account, persons))


def rows_of_part(account, persons) -> np.ndarray | None:
    """bool (n,): the rows of the part of the data that is charged; None for all."""
    return account.rows(persons) if isinstance(account, BookPart) else None


def _check_size(plan: Plan, n_rows: int):
    if plan.guarantee.neighbours == "replace-one" and n_rows != plan.facts.rows:
        raise InputError(
            f'the facts state {plan.facts.rows:,} rows, public under "replace-one", but the table '
            f"has {n_rows:,}"
        )
    if n_rows > plan.most_rows:
        raise InputError(
            f"the table has {n_rows:,} rows, many more than the {plan.facts.rows:,} the plan was "
            "made for: plan again with a figure nearer to it"
        )


def _check_start(plan: Plan):
    """Refuse public coefficients to start from that pass what margins are made for."""
    start = plan.knowledge.start
    if start is None:
        return
    values = plan.in_bounds(start.features, start.coefficients)
    far = np.flatnonzero(abs(values) > MOST_COEFFICIENT)
    if len(far):
        raise InputError(
            f"the coefficient of feature {start.features[far[0]]} in start, "
            f"{start.coefficients[far[0]]:g}, is too large: {values[far[0]]:.3g} of margin at the "
            "entry bound"
        )


def laid_out(plan: Plan, intake: Intake, bits: Bits, report: Callable,
             crew: Crew | None = None) -> tuple[Plan, Table]:
    """(the plan with its learned facts, the table of the rows that are kept)."""
    kept = rows_to_keep(intake.codes, plan.facts.rows_per_person, intake.part, bits)
    plan = _learned(plan, intake, kept, bits)
    table = build_table(intake.matrix, intake.labels, plan.facts, plan.entry_levels, report,
                        crew)
    return plan, table if kept is None else table.keeping(kept)


def rows_to_keep(codes: np.ndarray | None, most: int, part: np.ndarray | None,
                 bits: Bits) -> np.ndarray | None:
    """bool (n,): the rows of the part, without the surplus rows of any person; None for all."""
    if codes is None:
        return None
    kept = kept_rows(codes, most, bits.array(len(codes), np.uint64))
    return kept if part is None else kept & part


def _learned(plan: Plan, intake: Intake, kept: np.ndarray | None, bits: Bits) -> Plan:
    facts = {}
    if plan.entry_quantile is not None:
        magnitudes = sampled_magnitudes(intake.matrix, bits, kept)
        facts["entry_bound"] = learned_entry_bound(magnitudes, plan.entry_quantile, bits)
    if plan.label_quantile is not None:
        labels = intake.labels if kept is None else intake.labels[kept]
        facts["label"] = learned_label_range(labels, plan.label_quantile, bits)
    return plan.with_facts(**facts) if facts else plan
