"""Charging a budget book for a run: before its data is touched, whatever becomes of it."""

from __future__ import annotations

import hashlib
import json
import os
import warnings
from collections.abc import Iterator
from contextlib import contextmanager, suppress
from dataclasses import dataclass

from .accounting import Cost
from .book import BookPart, BudgetBook
from .errors import InputError
from .facts import Guarantee
from .plan import Plan


@dataclass(frozen=True)
class Bill:
    """What a run is charged for.

    what             in words
    costs            of every part of it
    guarantee        whose delta and neighbouring relation it has
    rows_per_person  the most rows of a person that it protects
    plan             SHA-256 of the plan, of the fit or of the release that is looked at
    """

    what: str
    costs: tuple[Cost, ...]
    guarantee: Guarantee
    rows_per_person: int
    plan: str

    @classmethod
    def of_fit(cls, plan: Plan) -> Bill:
        words = (f"fit of a {plan.loss_form.kind} model by {plan.method} at epsilon "
                 f"{plan.guarantee.epsilon:g}")
        return cls(words, plan.costs, plan.guarantee, plan.facts.rows_per_person, plan_hash(plan))


def charged(book, plan: Plan, persons):
    """`charged_for` a fit by this plan."""
    return charged_for(book, Bill.of_fit(plan), persons)


@contextmanager
def charged_for(book, bill: Bill, persons) -> Iterator[dict | None]:
    """Charge a book for a run, which happens inside; yields what is spent by then.

    book     BudgetBook, BookPart or a path; None: nothing is charged, and None is yielded
    persons  the ids that rows were given with, or None

    Raises InputError, with nothing charged, where the book has not enough left, is kept for another
    relation or for persons with more rows than the bill protects. A run that fails leaves its
    charge, abandoned. A book that cannot note the end of a run keeps it "reserved", which counts
    all the same: neither the result nor the error of the run is lost over that.
    """
    if book is None:
        yield None
        return
    account = account_of(book)
    _check_unit(account, bill.rows_per_person, persons)
    number = account.charge(bill.what, bill.costs, bill.guarantee, plan=bill.plan)
    try:
        yield _book(account).spending(number)
    except BaseException:
        with suppress(Exception):
            account.abandon(number)
        raise
    try:
        account.settle(number)
    except InputError as error:
        warnings.warn(f"charge {number} stays reserved in the book, and counts all the same: "
                      f"{error}", stacklevel=1)


def plan_hash(plan: Plan) -> str:
    """SHA-256 of the plan as JSON with sorted keys."""
    text = json.dumps(plan.to_dict(), sort_keys=True, separators=(",", ":"))
    return hashlib.sha256(text.encode()).hexdigest()


def account_of(book) -> BudgetBook | BookPart | None:
    """What a fit is charged to, from what it was given."""
    if book is None or isinstance(book, (BudgetBook, BookPart)):
        return book
    if isinstance(book, (str, os.PathLike)):
        return BudgetBook(book)
    raise InputError(f"book must be a BudgetBook, a part of one or a path, not {book!r}")


def _check_unit(account: BudgetBook | BookPart, protected: int, persons):
    owned = _book(account).rows_per_person
    if persons is None and protected < owned:
        raise InputError(
            f"{_book(account).path}: a person may own {owned:,} rows here, more than the "
            f"{protected:,} that are protected: state rows_per_person={owned}, or give persons= to "
            "drop surplus rows"
        )


def _book(account: BudgetBook | BookPart) -> BudgetBook:
    return account if isinstance(account, BudgetBook) else account.book


