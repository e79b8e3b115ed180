"""The benchmarks' own parts: invented tables, the textbook method, the reports, the package texts."""

from __future__ import annotations

import dataclasses
import json

import numpy as np
import pytest
from scipy.special import expit

from bench import cases, debian_packages, text, textbook
from bench.data import planted_labels, zipf_prevalences, zipf_table
from bench.report import write_report


def test_prevalences_add_up_and_fall_like_zipf():
    p = zipf_prevalences(10_000, mean_entries=30, exponent=1.0, top_share=0.5)
    assert p.sum() == pytest.approx(30) and p.max() == 0.5 and (np.diff(p) <= 0).all()
    tail = p[1000:]
    np.testing.assert_allclose(tail * np.arange(1001, 10_001), tail[0] * 1001)


def test_tables_are_sorted_0_1_csr_of_the_size_asked_for():
    X = zipf_table(2_000, 5_000, 20, seed=1)
    assert X.shape == (2_000, 5_000) and X.has_canonical_format and (X.data == 1).all()
    assert X.nnz / 2_000 == pytest.approx(20, rel=0.05)
    assert (X != zipf_table(2_000, 5_000, 20, seed=1)).nnz == 0


def test_planted_labels_follow_their_model():
    X = zipf_table(20_000, 2_000, 30, seed=2)
    planted = planted_labels(X, 8, 0.5, base_rate=0.3, seed=2)
    assert np.count_nonzero(planted.coefficients) == 8
    chance = expit(X @ planted.coefficients + planted.intercept)
    assert chance.mean() == pytest.approx(0.3)
    assert abs(planted.labels - chance).mean() < 0.5


@pytest.mark.parametrize(("steps", "rows"), [(50, 74.34), (200, 148.7), (800, 297.4)])
def test_textbook_noise_is_that_of_the_published_calibration(steps, rows):
    """Values of theory.md, section 2, epsilon 1, delta 1e-6; formula there from the paper."""
    assert textbook.laplace_scale(1.0, 1e-6, steps) == pytest.approx(rows, rel=5e-4)


@pytest.mark.parametrize("schedule", ["shrinking", "paced"])
def test_the_textbook_method_without_noise_lowers_the_loss(schedule):
    X = zipf_table(3_000, 500, 20, seed=3)
    planted = planted_labels(X, 6, 1.0, seed=3)
    fit = textbook.frank_wolfe(
        textbook.prepare(X), planted.labels, epsilon=1.0, delta=1e-6, steps=60, radius=6.0,
        schedule=schedule, noise="none", intercept=planted.intercept, seed=1,
    )
    at_zero = cases.log_loss(planted.labels, np.full(3_000, planted.intercept))
    true = cases.log_loss(planted.labels, X @ planted.coefficients + planted.intercept)
    assert cases.log_loss(planted.labels, fit.margin(X)) < true + 0.3 * (at_zero - true)
    assert len(set(np.flatnonzero(planted.coefficients)) & set(fit.features)) >= 4
    assert abs(fit.coefficients).sum() <= 6.0 + 1e-9


def test_both_ways_to_draw_pick_the_least_score_when_noise_is_small():
    scores = np.random.default_rng(4).normal(size=40_000) * 100
    scores[31_000] = -1e6
    scores[7] = 9e5
    for draw in textbook.DRAWS.values():
        assert draw(scores, 1e-3, np.random.default_rng(1)) == (31_000, 1)


def test_small_cases_run_and_report(tmp_path, monkeypatch):
    small = {"rows": 2_000, "features": 3_000, "entries_per_row": 25, "steps": 5}
    monkeypatch.setattr(cases, "CASES", {
        "signal": dataclasses.replace(cases.CASES["signal"], **small),
        "accuracy": dataclasses.replace(cases.CASES["accuracy"], **small, fresh_rows=500, seeds=2),
    })
    results = {name: cases.run(name, False, lambda line: None) for name in cases.CASES}
    page = write_report(results, tmp_path, quick=False)
    stored = json.loads((tmp_path / "report.json").read_text())
    signal = stored["cases"]["signal"]
    assert signal["sordino"]["table_bytes"] <= signal["sordino"]["table_bytes_bound"]
    assert signal["ratio"]["plain"]["solve"] > 0
    assert [row["seeds"] for row in stored["cases"]["accuracy"]["summary"]] == [2] * 4
    shown = page.read_text()
    assert "## signal" in shown and "## accuracy" in shown and "BROKEN" not in shown


def test_the_text_case_runs_and_reports(tmp_path, monkeypatch):
    rng = np.random.default_rng(5)
    X = zipf_table(1_500, 300, 15, seed=5)
    common = np.argsort(-np.bincount(X.indices))[:3]
    kind = X[:, common].sum(axis=1) + rng.normal(size=1_500) > 1
    sections = np.where(kind, "libs", "games").tolist()
    documents = debian_packages.Documents(X, [f"w{j}" for j in range(300)], sections)
    monkeypatch.setattr(text, "load_documents", lambda with_maintainer: documents)
    case = text.TextCase("text", "invented", train_rows=1_000, epsilons=(4.0,), fits=2)
    monkeypatch.setattr(cases, "CASES", {"text": case})
    results = {"text": cases.run("text", False, lambda line: None)}
    methods = [row["method"] for row in results["text"]["rows"]]
    assert methods == ["frank-wolfe", "greedy", "textbook", "L1, not private"]
    assert all(row["auc"] > 0.55 for row in results["text"]["rows"])
    assert "| greedy | 4 |" in write_report(results, tmp_path, quick=False).read_text()


LISTS = """\
Package: libhut1
Section: libs
Depends: libridge2 (>= 1.0), libc-hut
Description: shared Hut library
 keeps huts warm; and huts dry
Tag: role::shared-lib

Package: hutkeeper
Section: contrib/games
Maintainer: Nobody In Particular
Description: keep a hut

Package: libhut1
Section: oldlibs
Description: a second paragraph of the same name
"""


def test_package_paragraphs_become_rows():
    packages = list(debian_packages.distinct_packages(debian_packages.parse_packages(LISTS)))
    assert [(p.name, p.section) for p in packages] == [("libhut1", "libs"), ("hutkeeper", "games")]
    matrix, words = debian_packages.word_table(p.text for p in packages)
    first = {words[j] for j in matrix[[0]].indices}
    assert {"libridge2", "libc-hut", "shared", "hut", "huts", "warm", "role", "shared-lib"} <= first
    assert "nobody" not in words and (matrix.data == 1).all()
    assert [debian_packages.is_compiled_library(p.section) for p in packages] == [True, False]
    both, _ = debian_packages.word_table((p.text for p in packages), min_documents=2)
    assert both.shape == (2, 1)
