"""Genotypes and a blood trait of outbred mice, in the mean-genotype text format of a package."""

from __future__ import annotations

import gzip
from pathlib import Path

import numpy as np
from scipy.sparse import csr_array

from .fetch import open_file
from .real_set import RealSet, split

PACKAGE = "gemma-doc"
TRAIT_COLUMN = 5        # mean corpuscular haemoglobin, the trait with most rows


def load_mice(cache: Path) -> RealSet:
    """Mice against genotypes: how many of one of two alleles, 0 to 2, imputed where missing."""
    genotypes, traits = (
        open_file(PACKAGE, cache, f"usr/share/doc/gemma/example/mouse_hs1940.{kind}.txt.gz")
        for kind in ("geno", "pheno")
    )
    names, dosages = read_genotypes(genotypes)
    trait = read_trait(traits)
    known = np.flatnonzero(np.isfinite(trait))
    return split(
        csr_array(dosages[known]), trait[known], [f"mouse {row}" for row in known],
        name="mice",
        source="Package gemma-doc: mice by allele counts, 0 to 2; the label is mean corpuscular "
        "haemoglobin",
        names=names,
        loss="squared",
        label=(-3.0, 3.0),
        entry_bound=2.0,
        public="The markers and their bound of 2 are those of the array. The trait was normalised "
        "by its publishers to mean 0 and standard deviation 1: its range is 3 of these. Mice are "
        "siblings in part, and some of a family's are in the test rows.",
    )


def read_genotypes(path: Path) -> tuple[list[str], np.ndarray]:
    """Marker names, and float64 (mice, markers); a line is name, two alleles, one value a mouse."""
    names, lines = [], []
    with gzip.open(path, "rt", encoding="ascii") as file:
        for line in file:
            name, _, _, values = line.split(",", 3)
            names.append(name)
            lines.append(np.fromstring(values, sep=","))
    return names, np.array(lines).T


def read_trait(path: Path) -> np.ndarray:
    """float64 (mice,): one column of the traits, NaN where "NA"."""
    with gzip.open(path, "rt", encoding="ascii") as file:
        return np.genfromtxt(file, usecols=TRAIT_COLUMN)
