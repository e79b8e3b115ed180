"""Glosses of WordNet: is it a noun that is explained?"""

from __future__ import annotations

from collections.abc import Iterator
from pathlib import Path

import numpy as np

from .fetch import open_file
from .real_set import RealSet, split, term_table

PACKAGE = "wordnet-base"
PARTS = ("noun", "verb", "adj", "adv")


def load_wordnet(cache: Path) -> RealSet:
    """Glosses by which words they hold."""
    return _glosses_by_words(cache, "wordnet", most=1)


def load_wordnet_counts(cache: Path) -> RealSet:
    """Glosses by how often they hold which words, at most three times."""
    return _glosses_by_words(cache, "wordnet-counts", most=3)


def _glosses_by_words(cache: Path, name: str, most: int) -> RealSet:
    glosses = [
        (part, key, gloss)
        for part in PARTS
        for key, gloss in read_glosses(open_file(PACKAGE, cache, f"usr/share/wordnet/data.{part}"))
    ]
    parts, keys, texts = zip(*glosses)
    X, words = term_table(texts, most)
    entries = "0/1" if most == 1 else f"counted up to {most}"
    return split(
        X, (np.array(parts) == "noun").astype(float), list(map(" ".join, zip(parts, keys))),
        name=name,
        source=f"Package wordnet-base: glosses by words, {entries}; the label is whether a noun is "
        "explained",
        names=words,
        loss="logistic",
        label="binary",
        entry_bound=float(most),
        public="The vocabulary is read off the rows; it counts as public because the glosses are.",
    )


def read_glosses(path: Path) -> Iterator[tuple[str, str]]:
    """Key and gloss of each line of a database file; lines of its licence start with spaces."""
    with path.open(encoding="ascii") as file:
        for line in file:
            if not line.startswith(" "):
                fields, _, gloss = line.partition(" | ")
                yield fields.partition(" ")[0], gloss
