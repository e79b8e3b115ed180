"""Sizes of Debian packages against their words, from the lists that this machine keeps."""

from __future__ import annotations

from pathlib import Path

import numpy as np

from ..debian_packages import TEXT_FIELDS, available_lists, distinct_packages, parse_packages
from .fetch import Unavailable
from .real_set import RealSet, split, term_table

SIZE_FIELD = "Installed-Size"


def load_packages(cache: Path) -> RealSet:
    """Packages: words of description, dependencies, tags and maintainer against the size."""
    try:
        lists = available_lists()
    except RuntimeError as error:
        raise Unavailable(str(error)) from None
    return package_sizes(lists)


def package_sizes(lists: str) -> RealSet:
    """The set that a text of control paragraphs makes; packages without a size are left out."""
    texts = distinct_packages(parse_packages(lists, TEXT_FIELDS + ("Maintainer",)))
    sizes = distinct_packages(parse_packages(lists, (SIZE_FIELD,)))
    packages = [
        (words.name, words.text, int(size.text))
        for words, size in zip(texts, sizes)
        if size.text.isdecimal()
    ]
    names, texts, kibibytes = zip(*packages)
    X, words = term_table(texts)
    return split(
        X, np.log10(np.maximum(kibibytes, 1)), names,
        name="packages",
        source="Package lists of this machine: packages by words; the label is log10 of the "
        "installed size in KiB",
        names=words,
        loss="squared",
        label=(0.0, 6.0),
        entry_bound=1.0,
        public="The vocabulary is read off the rows; it counts as public because the lists are. "
        "The label range stands for 1 KiB to 1 GB.",
    )
