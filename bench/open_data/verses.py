"""Verses of the Bible of 1611: from the New Testament or the Old?"""

from __future__ import annotations

import re
import struct
import subprocess
from pathlib import Path

import numpy as np

from .fetch import Unavailable, open_file
from .real_set import RealSet, split, term_table

PACKAGE = "bible-kjv-text"
FIRST_OF_NEW = "Mat"
VERSE = re.compile(r"^((\d?[A-Za-z]+)\d+:\d+) (.+)$", re.MULTILINE)
# The file, all big-endian: a name, from byte 84 the length of a window and how many there are,
# then where each starts and the last one ends. A window is LZW without its header.
HEADER = struct.Struct(">84xII")
LZW_HEADER = bytes([0x1F, 0x9D, 0x90])


def load_verses(cache: Path) -> RealSet:
    """Verses by which words they hold."""
    return verses_by_words(read_windows(open_file(PACKAGE, cache, "usr/lib/bible.data")))


def verses_by_words(text: str) -> RealSet:
    """The set of a text with lines "Ge1:1 words": book, chapter, verse."""
    keys, books, verses = zip(*VERSE.findall(text))
    new = np.arange(len(books)) >= books.index(FIRST_OF_NEW)
    X, words = term_table(verses)
    return split(
        X, new.astype(float), keys,
        name="verses",
        source="Package bible-kjv-text: verses by words, 0/1; the label is whether the verse is of "
        "the New Testament",
        names=words,
        loss="logistic",
        label="binary",
        entry_bound=1.0,
        public="The vocabulary is read off the rows; it counts as public because the text is.",
    )


def read_windows(path: Path) -> str:
    """The text of a data file, its windows one after the other."""
    data = path.read_bytes()
    _, windows = HEADER.unpack_from(data)
    edges = struct.unpack_from(f">{windows + 1}I", data, HEADER.size)
    return "".join(_expanded(data[start:end]) for start, end in zip(edges, edges[1:]))


def _expanded(window: bytes) -> str:
    """One window; gzip reads LZW."""
    try:
        done = subprocess.run(["gzip", "-dc"], input=LZW_HEADER + window, capture_output=True,
                              check=True)
    except (FileNotFoundError, subprocess.CalledProcessError):
        raise Unavailable("gzip cannot read the verses in this version of the package") from None
    return done.stdout.decode("ascii")
