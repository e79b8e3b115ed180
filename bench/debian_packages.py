"""Real sparse text: the package lists that a Debian machine keeps after `apt-get update`.

One document per package, read through the apt tools; features say which words a package's
description, dependencies and tags hold; labels come from its section, which is never read as text.

    python -m bench.debian_packages --folder F [--train-rows N] [--seed S]

writes train.svm, test.svm (svmlight, ids from 1, labels 0 and 1) and vocabulary.txt (one feature
name a line, in the order of the ids).

The vocabulary is read off the very rows that are fitted. It counts as public here because these
lists are; with confidential texts it would give their rare words away.
"""

from __future__ import annotations

import argparse
import re
import subprocess
import sys
from collections.abc import Iterable, Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import NamedTuple

import numpy as np
from scipy.sparse import csr_array

from sordino.files import write_svmlight

WORD = re.compile(r"[a-z][a-z0-9+\-.]+")
TEXT_FIELDS = ("Description", "Description-en", "Depends", "Tag")
LIBRARY_SECTIONS = frozenset({"libs", "libdevel"})
LANGUAGE_SECTIONS = LIBRARY_SECTIONS | {
    "python", "perl", "haskell", "rust", "golang", "javascript", "ruby", "java", "php", "ocaml",
    "lisp", "gnu-r",
}  # fmt: skip


@dataclass(frozen=True)
class Package:
    """One package: its name, its section without archive, its text."""

    name: str
    section: str
    text: str


class Documents(NamedTuple):
    """Packages as a table: matrix CSR (packages, words) of float64 ones, ids ascending in a row."""

    matrix: csr_array
    vocabulary: list[str]
    sections: list[str]


def is_compiled_library(section: str) -> bool:
    """Whether a section holds compiled libraries or what is needed to build with them."""
    return section in LIBRARY_SECTIONS


def is_language_library(section: str) -> bool:
    """Whether a section holds libraries, of C or of a language of their own."""
    return section in LANGUAGE_SECTIONS


LABELS = {"library": is_compiled_library, "language-library": is_language_library}


def load_documents(min_documents: int = 1, with_maintainer: bool = False) -> Documents:
    """This machine's package lists as documents.

    min_documents    words held by fewer packages are left out of the vocabulary
    with_maintainer  whether the maintainer's words count as text

    Raises RuntimeError where apt has no lists.
    """
    fields = TEXT_FIELDS + (("Maintainer",) if with_maintainer else ())
    packages = list(distinct_packages(parse_packages(available_lists(), fields)))
    matrix, vocabulary = word_table((package.text for package in packages), min_documents)
    return Documents(matrix, vocabulary, [package.section for package in packages])


def available_lists() -> str:
    """What `apt-cache dumpavail` prints; RuntimeError if there is no such tool or no lists."""
    try:
        done = subprocess.run(
            ["apt-cache", "dumpavail"], capture_output=True, check=True, encoding="utf-8"
        )
    except FileNotFoundError:
        raise RuntimeError("apt-cache is not there: this needs a Debian machine") from None
    except subprocess.CalledProcessError as error:
        raise RuntimeError(f"apt-cache failed: {error.stderr.strip()}") from None
    if not done.stdout.strip():
        raise RuntimeError("apt has no package lists: run `apt-get update` first")
    return done.stdout


def parse_packages(text: str, fields: tuple[str, ...] = TEXT_FIELDS) -> Iterator[Package]:
    """The packages in a text of control paragraphs, separated by empty lines."""
    for paragraph in text.split("\n\n"):
        values = _fields_of(paragraph)
        if "Package" in values:
            yield Package(
                values["Package"],
                values.get("Section", "").rpartition("/")[2],
                "\n".join(values[name] for name in fields if name in values),
            )


def distinct_packages(packages: Iterable[Package]) -> Iterator[Package]:
    """The first package of each name."""
    seen = set()
    for package in packages:
        if package.name not in seen:
            seen.add(package.name)
            yield package


def word_table(texts: Iterable[str], min_documents: int = 1) -> tuple[csr_array, list[str]]:
    """0/1 table of which text holds which word, and the words in the order of its columns."""
    documents = [sorted(set(WORD.findall(text.lower()))) for text in texts]
    words = np.array([word for document in documents for word in document])
    vocabulary, columns, counts = np.unique(words, return_inverse=True, return_counts=True)
    starts = np.cumsum([0, *map(len, documents)])
    table = csr_array(
        (np.ones(len(columns)), columns, starts), shape=(len(documents), len(vocabulary))
    )
    kept = counts >= min_documents
    return table[:, kept], vocabulary[kept].tolist()


def split_rows(rows: int, train_rows: int, seed: int) -> tuple[np.ndarray, np.ndarray]:
    """Ids of the rows to train on and of the others, in random order; ValueError if none left."""
    if not 0 < train_rows < rows:
        raise ValueError(f"train rows must lie between 1 and {rows - 1:,}, not {train_rows:,}")
    order = np.random.default_rng(seed).permutation(rows)
    return order[:train_rows], order[train_rows:]


def _fields_of(paragraph: str) -> dict[str, str]:
    """Field values of one control paragraph; lines that start with a space continue a field."""
    values, name = {}, None
    for line in paragraph.splitlines():
        if line.startswith((" ", "\t")) and name is not None:
            values[name] += "\n" + line
        else:
            name, _, value = line.partition(":")
            values[name] = value.strip()
    return values


def main(arguments: list[str] | None = None) -> int:
    options = _parser().parse_args(arguments)
    try:
        documents = load_documents(options.min_documents, options.maintainer)
        train, test = split_rows(documents.matrix.shape[0], options.train_rows, options.seed)
    except (RuntimeError, ValueError) as error:
        print(error, file=sys.stderr)
        return 2
    labels = np.array([LABELS[options.label](section) for section in documents.sections])
    print("all rows:", _described(documents.matrix, labels))
    options.folder.mkdir(parents=True, exist_ok=True)
    for name, rows in (("train.svm", train), ("test.svm", test)):
        write_svmlight(options.folder / name, documents.matrix[rows], labels[rows].astype(int))
        print(f"{name}:", _described(documents.matrix[rows], labels[rows]))
    vocabulary = "".join(f"{word}\n" for word in documents.vocabulary)
    (options.folder / "vocabulary.txt").write_text(vocabulary, encoding="utf-8")
    return 0


def _parser() -> argparse.ArgumentParser:
    parser = argparse.ArgumentParser(
        prog="python -m bench.debian_packages",
        description="this machine's Debian package lists as a sparse data set",
    )
    parser.add_argument("--folder", type=Path, required=True, help="where the files go")
    parser.add_argument("--train-rows", type=int, default=50_000, metavar="N")
    parser.add_argument("--seed", type=int, default=1, metavar="S", help="of the split")
    parser.add_argument("--label", choices=LABELS, default="library")
    parser.add_argument("--min-documents", type=int, default=1, metavar="K")
    parser.add_argument("--maintainer", action="store_true", help="maintainers count as text")
    return parser


def _described(matrix: csr_array, labels: np.ndarray) -> str:
    rows, words = matrix.shape
    return f"{rows:,} x {words:,}, {matrix.nnz:,} entries, {labels.mean():.1%} labelled 1"


if __name__ == "__main__":
    sys.exit(main())
