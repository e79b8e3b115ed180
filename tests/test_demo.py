"""The demo runs whole, and the README's code runs as it stands."""

from __future__ import annotations

import re
from pathlib import Path

import numpy as np
import pytest
from sklearn.metrics import log_loss as reference_log_loss
from sklearn.metrics import roc_auc_score

import sordino
from sordino import demo
from sordino.cli import main

README = Path(__file__).parent.parent / "README.md"


def test_the_demo_does_the_whole_job(tmp_path, capsys):
    """Chance that fewer than 10 of 16 words are found, each far above the noise: below 1e-6."""
    folder = tmp_path / "huts"
    assert main(["demo", "--folder", str(folder)]) == 0
    said = capsys.readouterr().out
    for command in ("plan", "fit", "statement", "predict"):
        assert f"$ sordino {command} {folder}" in said
    assert {path.name for path in folder.iterdir()} == {
        "train.svm", "test.svm", "words.txt", "study.toml", "model.json", "statement.md",
        "predictions.txt",
    }
    release = sordino.load_release(folder / "model.json")
    assert len(set(release.names) & set(demo.TELLING)) >= 10
    found = float(re.search(r"AUC is ([0-9.]+)", said.replace("\n# ", " "))[1])
    assert 0.7 < found < 0.85
    assert release.plan.facts.features > release.plan.facts.rows >= 10_000


def test_the_demo_does_not_write_over_what_is_there(tmp_path, capsys):
    (tmp_path / "mine.txt").write_text("keep")
    assert main(["demo", "--folder", str(tmp_path)]) == 2
    assert "holds files already" in capsys.readouterr().err


def test_measures_agree_with_scikit_learn():
    rng = np.random.default_rng(2)
    labels, chances = rng.integers(0, 2, 500), np.round(rng.random(500), 2) * 0.98 + 0.01
    assert demo.auc(chances, labels) == pytest.approx(roc_auc_score(labels, chances), abs=1e-12)
    assert demo.log_loss(chances, labels) == pytest.approx(
        reference_log_loss(labels, chances), abs=1e-12
    )


def test_words_are_distinct():
    assert len(set(demo.words())) == demo.WORDS


def test_the_code_in_the_readme_runs(tmp_path, monkeypatch, capsys):
    code = re.search(r"```python\n(.*?)```", README.read_text(encoding="utf-8"), re.S)[1]
    monkeypatch.chdir(tmp_path)
    space: dict = {}
    exec(compile(code, "README.md", "exec"), space)
    assert 7 in space["release"].features
    assert (tmp_path / "model.json").exists() and "epsilon 1" in capsys.readouterr().out


def test_the_study_in_the_readme_is_one(tmp_path):
    from sordino.study import load_study

    text = re.search(r"```toml\n(.*?)```", README.read_text(encoding="utf-8"), re.S)[1]
    (tmp_path / "study.toml").write_text(text)
    assert load_study(tmp_path / "study.toml").plan().sees_anything
