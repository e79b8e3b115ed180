"""The benchmarks' own parts: invented tables, the textbook method, reports, package texts."""

from __future__ import annotations

import dataclasses
import gzip
import json
import struct
import subprocess
from pathlib import Path

import numpy as np
import pytest
from scipy.special import expit

from bench import cases, data, debian_packages, linear, prior, real, tails, text, textbook
from bench.data import planted_labels, zipf_prevalences, zipf_table
from bench.open_data import fetch, mice, packages, real_set, verses, wordnet
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


def test_the_textbook_method_fits_squares_of_clipped_residuals():
    X = zipf_table(3_000, 500, 20, seed=3)
    planted = planted_labels(X, 6, 0.2, seed=3)
    y = X @ planted.coefficients
    y -= y.mean()
    outlying = np.where(np.arange(3_000) < 5, 1e6, y)
    table = textbook.prepare(X)
    for labels in (y, outlying):
        fit = textbook.frank_wolfe(
            table, labels, epsilon=1.0, delta=1e-6, steps=100, radius=1.2, schedule="paced",
            noise="none", loss="squared", seed=1,
        )
        assert ((fit.margin(X) - y)[5:] ** 2).mean() < 0.2 * (y[5:] ** 2).mean()


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


# --- real open data


def invented_set(loss: str) -> real_set.RealSet:
    X = zipf_table(4_000, 400, 15, seed=6)
    planted = planted_labels(X, 4, 2.0, seed=6)
    y = planted.labels if loss == "logistic" else X @ planted.coefficients
    return real_set.split(
        2 * X, y, [f"row {i}" for i in range(4_000)], name="huts", source="Invented",
        names=[f"w{j}" for j in range(400)], loss=loss,
        label="binary" if loss == "logistic" else (-6.0, 6.0), entry_bound=2.0, public="All of it.",
    )


def test_one_row_in_five_is_held_out_by_its_key_alone():
    held_out = [real_set.is_held_out(f"row {i}") for i in range(10_000)]
    assert 1_800 < sum(held_out) < 2_200
    one = invented_set("logistic")
    assert one.X_test.shape[0] == len(one.y_test) == sum(held_out[:4_000])
    assert one.X_train.shape[0] == len(one.y_train) == one.facts.rows == 4_000 - len(one.y_test)


def test_terms_are_counted_up_to_a_bound():
    texts = ["Hut, hut; HUT hut. A hut's roof", "", "the roof (of 12 g++ huts)."]
    counts, words = real_set.term_table(texts, most=3)
    assert words == ["g++", "hut", "huts", "of", "roof", "the"]
    assert counts.toarray().tolist() == [[0, 3, 0, 0, 1, 0], [0] * 6, [1, 0, 1, 1, 1, 1]]
    assert (real_set.term_table(texts)[0].toarray() == np.minimum(counts.toarray(), 1)).all()


@pytest.mark.parametrize("loss", ["logistic", "squared"])
def test_methods_are_compared_on_test_rows(loss):
    one = invented_set(loss)
    rows = real.compare(one, epsilons=(4.0,), repeats=2)
    private, free = rows[:3], rows[3:]
    assert [row["method"] for row in private] == ["frank-wolfe", "greedy", "textbook"]
    assert [row["epsilon"] for row in rows] == [4.0] * 3 + [None] * 2
    assert free[0]["features"] <= private[1]["features"]
    measure = "auc" if loss == "logistic" else "r_squared"
    floor = 0.6 if loss == "logistic" else 0.2
    assert all(row[measure] > floor for row in private) and free[1][measure] >= free[0][measure]
    assert all(row[measure] == pytest.approx(np.mean([each[measure] for each in row["each"]]))
               for row in rows)
    assert real.largest_effect(one) > private[1]["smallest_effect"]


def test_largest_effect_is_a_share_of_rows_in_bounds_of_entries_and_residuals():
    X = np.array([[2.0, 0], [2, 0], [0, 1], [0, 0]])
    one = dataclasses.replace(
        invented_set("squared"), X_train=real_set.csr_array(X),
        y_train=np.array([1.2, 3, -1.2, -3]),
    )
    assert real.largest_effect(one) == pytest.approx((1.2 / 1.5 + 1) / 4)


def test_a_set_that_cannot_be_had_is_skipped_and_told(tmp_path, monkeypatch):
    def absent(cache):
        raise fetch.Unavailable("package huts cannot be had")

    monkeypatch.setattr(real, "SETS", {"huts": absent, "more": lambda _: invented_set("logistic")})
    case = real.RealCase("real", "invented", sets=("huts", "more"), epsilons=(4.0,), repeats=2)
    monkeypatch.setattr(cases, "CASES", {"real": case})
    results = {"real": cases.run("real", False, lambda line: None, tmp_path)}
    assert list(results["real"]["sets"]["huts"]) == ["skipped"]
    shown = write_report(results, tmp_path, quick=False).read_text()
    assert "Skipped: package huts cannot be had." in shown
    assert "| greedy | 4 |" in shown and "L1, not private, best penalty" in shown


def test_packages_are_fetched_once_and_failures_are_named(tmp_path, monkeypatch):
    called = []

    def run(command, cwd, **options):
        called.append(command[0])
        if command[-1] == "nohut":
            raise subprocess.CalledProcessError(100, command, stderr="E: no package nohut\n")
        if command[0] == "apt-get":
            (Path(cwd) / "hut_1_all.deb").touch()
        else:
            (Path(cwd) / "files").mkdir()
            (Path(cwd) / "files" / "roof").touch()

    monkeypatch.setattr(subprocess, "run", run)
    assert fetch.open_file("hut", tmp_path, "roof").is_file()
    assert fetch.unpacked("hut", tmp_path) == tmp_path / "hut"
    assert called == ["apt-get", "dpkg-deb"] and list(tmp_path.iterdir()) == [tmp_path / "hut"]
    with pytest.raises(fetch.Unavailable, match="package hut holds no door"):
        fetch.open_file("hut", tmp_path, "door")
    with pytest.raises(fetch.Unavailable, match="package nohut cannot be had: E: no package nohut"):
        fetch.unpacked("nohut", tmp_path)


def test_machines_without_the_tools_are_told(tmp_path, monkeypatch):
    monkeypatch.setenv("PATH", str(tmp_path))
    with pytest.raises(fetch.Unavailable, match="apt-get is not there"):
        fetch.unpacked("hut", tmp_path)


def test_package_sizes_are_logarithms_of_kibibytes():
    lists = "\n\n".join(
        f"Package: hut{i}\nInstalled-Size: {10 ** (i % 3)}\nDescription: roof{i % 3}"
        for i in range(60)
    ) + "\n\nPackage: sizeless\nDescription: roof7\n"
    one = packages.package_sizes(lists)
    assert len(one.y_train) + len(one.y_test) == 60
    assert one.names == ["roof0", "roof1", "roof2"]
    np.testing.assert_array_equal(one.y_train, one.X_train @ np.arange(3))


def test_glosses_are_read_past_the_licence(tmp_path):
    file = tmp_path / "data.noun"
    file.write_text("  1 Terms of use | none\n00001740 03 n 01 hut 0 000 | a small | house  \n")
    assert list(wordnet.read_glosses(file)) == [("00001740", "a small | house  \n")]


def test_genotypes_and_traits_are_read_from_text(tmp_path):
    genotypes, traits = tmp_path / "g.gz", tmp_path / "t.gz"
    genotypes.write_bytes(gzip.compress(b"m1, A, G, 1, 0, 0.25\nm2, G, A, 2, 1, 0\n"))
    traits.write_bytes(gzip.compress(b"1\tNA\t3\t4\t5\t0.5\nNA\t1\t2\t3\t4\tNA\n"))
    names, dosages = mice.read_genotypes(genotypes)
    assert names == ["m1", "m2"] and dosages.tolist() == [[1, 2], [0, 1], [0.25, 0]]
    np.testing.assert_array_equal(mice.read_trait(traits), [0.5, np.nan])


def lzw_of_literals(text: str) -> bytes:
    """A window of fewer than 256 letters as 9-bit codes of single letters, low bits first."""
    bits = sum(ord(letter) << (9 * place) for place, letter in enumerate(text))
    return bits.to_bytes((9 * len(text) + 7) // 8, "little")


def test_verses_are_read_window_by_window(tmp_path):
    pieces = ["A name\nGe1:1 In a hut.\nMal4:6 le", "st I come\nMat1:1 The hut\n1Jn1:1 That\n"]
    windows = list(map(lzw_of_literals, pieces))
    edges = np.cumsum([92 + 4 * 3, *map(len, windows)])
    file = tmp_path / "data"
    file.write_bytes(
        struct.pack(">84xII3I", 65536, 2, *edges) + b"".join(windows)
    )
    read = verses.read_windows(file)
    assert read == "".join(pieces)
    one = verses.verses_by_words(read)
    assert sorted([*one.y_train, *one.y_test]) == [0, 0, 1, 1]
    assert "lest" in one.names and "ge1" not in one.names and "mat1" not in one.names


# --- heavy tails


def test_clipping_keeps_the_loss_where_dividing_by_the_largest_norm_loses_all(
    tmp_path, monkeypatch
):
    case = tails.TailsCase(
        "tails", "invented", rows=8_000, fresh_rows=4_000, features=2_000, true_features=4,
        epsilon=4.0, repeats=2,
    )
    monkeypatch.setattr(cases, "CASES", {"tails": case})
    results = {"tails": cases.run("tails", False, lambda line: None)}
    rows = results["tails"]["tails"]
    assert [row["method"] for row in rows[:2]] == ["frank-wolfe", "greedy"]
    for row in rows:
        assert row["clipped"]["plain"] < 0.97 * row["constant"] and row["rise"] < 0.05
        assert row["learned"]["scaled"] < 0.97 * row["constant"] and row["learned_rise"] < 0.05
        assert row["divided"]["scaled"] > 0.99 * row["constant"]
    assert "| logistic | greedy |" in write_report(results, tmp_path, quick=False).read_text()


def test_one_row_in_a_hundred_is_scaled():
    case = tails.TailsCase("tails", "invented", rows=1_000, fresh_rows=200, features=500)
    X = tails.linear_problem(case).X
    factors = tails.with_scaled_rows(case, X).sum(axis=1) / X.sum(axis=1)
    assert np.isclose(factors, 100).sum() == 10 and np.isclose(factors, 1).sum() == 990
    assert tails.largest_norm(X) == pytest.approx(np.sqrt((X.toarray() ** 2).sum(axis=1).max()))


# --- linear models and public knowledge


def test_true_features_have_equal_shares_of_variance_and_labels_their_range():
    X = data.zipf_table(20_000, 2_000, 30, seed=7)
    coefficients = data.equal_shares(X, 6)
    true = np.flatnonzero(coefficients)
    held = X[:, true].mean(axis=0)
    assert len(true) == 6 and (held > 0.19).all() and (held < 0.52).all()
    np.testing.assert_allclose(held * (1 - held) * coefficients[true] ** 2, 1 / 6)
    y, (low, high) = data.linear_labels(X, coefficients, 0.2, seed=7)
    signal = X @ coefficients
    assert np.corrcoef(signal, y)[0, 1] ** 2 == pytest.approx(0.2, abs=0.05)
    assert high == -low == pytest.approx(3 * y.std(), rel=0.05) and abs(y.mean()) < 0.1


def test_the_linear_case_finds_the_true_features_and_reports(tmp_path, monkeypatch):
    case = linear.LinearCase(
        "linear", "invented", rows=4_000, fresh_rows=2_000, features=500, entries_per_row=20,
        true_features=5, epsilon=8.0, seeds=3,
    )
    monkeypatch.setattr(cases, "CASES", {"linear": case})
    results = {"linear": cases.run("linear", False, lambda line: None)}
    rows = {(row["method"], row["loss"]): row for row in results["linear"]["linear"]}
    assert list(rows) == [("greedy", "squared"), ("greedy", "huber"), ("frank-wolfe", "squared"),
                          ("frank-wolfe", "huber"), ("textbook", "squared")]
    best = rows["greedy", "squared"]
    assert best["least_true_found"] == 5 and 0.9 < best["share_of_least_squares"] <= 1.01
    assert best["r_squared"] > rows["textbook", "squared"]["r_squared"] > 0.02
    assert len(results["linear"]["runs_by_method"]) == 5 * 3
    shown = write_report(results, tmp_path, quick=False).read_text()
    assert "| greedy | squared | 5 (5) |" in shown and "| textbook | squared |" in shown


def test_least_squares_on_the_true_features_explains_what_was_planted():
    case = linear.LinearCase("linear", "invented", rows=10_000, fresh_rows=10_000, features=500,
                             entries_per_row=20, true_features=5)
    one = linear.problem(case, 1)
    assert one.X.shape == (10_000, 500) and len(one.true) == 5
    assert linear.least_squares(one) == pytest.approx(0.5, abs=0.03)


def test_the_prior_case_tells_what_a_prior_is_worth(tmp_path, monkeypatch):
    """At epsilon 0.01 picks are noise: two of 4,000 features, unless the prior favours the true.

    That three of five fits without it find one of the four has a chance below 1e-7 for each loss.
    """
    case = prior.PriorCase(
        "prior", "invented", rows=2_000, features=4_000, entries_per_row=25, true_features=4,
        strength=2.0, explained=0.5, favoured_share=0.001, powers=(40,), epsilons=(0.01, 64.0),
        epsilons_with_prior=(0.01,), seeds=5,
    )
    monkeypatch.setattr(cases, "CASES", {"prior": case})
    results = {"prior": cases.run("prior", False, lambda line: None)}
    shares, worth = results["prior"]["shares"], results["prior"]["worth"]
    assert len(shares) == 2 * 2 * 3 and all(len(one["each"]) == 5 for one in shares)
    assert [row["method"] for row in worth] == ["greedy", "frank-wolfe"] * 2
    for row in worth[::2]:
        assert (row["without"], row["with"]) == (0, 0.5) and 1 < row["worth"] <= 6400
    shown = write_report(results, tmp_path, quick=False).read_text()
    assert "| logistic | greedy | 2^40 | 0.01 | 0% | 50% |" in shown


def test_the_features_that_a_prior_favours_are_the_true_ones_and_others():
    case = prior.PriorCase("prior", "invented", rows=2_000, features=2_000, entries_per_row=25,
                           true_features=4, favoured_share=0.02)
    one = prior.problem(case, 1)
    assert len(one.true) == 4 and len(one.favoured) == 40
    assert set(one.true) < set(one.favoured) and (np.diff(one.favoured) > 0).all()


def test_epsilons_are_read_off_straight_lines_over_their_logarithm():
    shares = [0.2, 0.4, 0.3, 0.8]
    reach = lambda share: prior.epsilon_reaching(share, (1.0, 4.0, 8.0, 16.0), shares)  # noqa: E731
    assert reach(0.1) == reach(0.2) == 1.0 and reach(0.3) == pytest.approx(2.0)
    assert reach(0.4) == 4.0 and reach(0.55) == pytest.approx(8 * 2**0.5)
    assert reach(0.8) == 16.0 and reach(0.81) is None
