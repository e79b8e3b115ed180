"""A real data set, its split, and tables of terms."""

from __future__ import annotations

import re
from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from hashlib import blake2b

import numpy as np
from scipy.sparse import csr_array

import sordino

TEST_SHARE = 5      # one row of so many is held out
WORD = re.compile(r"[a-z][a-z0-9+\-.]*[a-z0-9+]")


@dataclass(frozen=True)
class RealSet:
    """A data set with its public facts, split into rows to fit and rows to test.

    source          the package that carries it, and what a row and its label are
    X_train, X_test CSR float64 (rows, features)
    y_train, y_test float64 (rows,): 0/1, or in the units of `label`
    names           of the features, in order
    loss, label     as `plan_fit` and `PublicFacts` take them
    entry_bound     as `PublicFacts` takes it
    public          what counts as public, and why
    """

    name: str
    source: str
    X_train: csr_array
    y_train: np.ndarray
    X_test: csr_array
    y_test: np.ndarray
    names: Sequence[str]
    loss: str
    label: str | tuple[float, float]
    entry_bound: float
    public: str

    @property
    def facts(self) -> sordino.PublicFacts:
        rows, features = self.X_train.shape
        return sordino.PublicFacts(
            features=features, rows=rows, entry_bound=self.entry_bound, label=self.label
        )


def split(X: csr_array, y: np.ndarray, keys: Sequence[str], **fields) -> RealSet:
    """The set whose test rows are those that a fixed hash of their key says."""
    held_out = np.array([is_held_out(key) for key in keys])
    return RealSet(
        X_train=X[~held_out], y_train=y[~held_out], X_test=X[held_out], y_test=y[held_out],
        **fields,
    )


def is_held_out(key: str) -> bool:
    """Whether a row of this key is for testing."""
    digest = blake2b(key.encode(), digest_size=8).digest()
    return int.from_bytes(digest, "big") % TEST_SHARE == 0


def term_table(texts: Iterable[str], most: int = 1) -> tuple[csr_array, list[str]]:
    """How often each text holds each word, at most `most`; and the words, in order of columns."""
    documents = [WORD.findall(text.lower()) for text in texts]
    words = np.array([word for document in documents for word in document])
    vocabulary, columns = np.unique(words, return_inverse=True)
    starts = np.cumsum([0, *map(len, documents)])
    table = csr_array(
        (np.ones(len(columns)), columns, starts), shape=(len(documents), len(vocabulary))
    )
    table.sum_duplicates()
    np.minimum(table.data, most, out=table.data)
    return table, vocabulary.tolist()
