"""The study file: read strictly, paths relative to it."""

from __future__ import annotations

import numpy as np
import pytest

from sordino import InputError, NotYetError, PublicFacts
from sordino.study import load_study

WHOLE = """
[data]
matrix = "x.mtx"
labels = "y.txt"
names = "names.txt"
first_column = 0

[facts]
features = 3
rows = 100
entry_bound = 2
label = "binary"
rows_per_person = 1

[guarantee]
epsilon = 2
delta = 1e-6
neighbours = "replace-one"

[method]
name = "frank-wolfe"
loss = "logistic"
steps = 7
radius = 4
schedule = "shrinking"
intercept = false

[release]
model = "out/model.json"
statement = "statement.md"
"""
LEAST = """
[data]
matrix = "x.svm"
[facts]
features = 3
rows = 100
[guarantee]
epsilon = 1.0
[release]
model = "model.json"
"""


@pytest.fixture
def write(tmp_path):
    def write(text: str):
        path = tmp_path / "study.toml"
        path.write_text(text, encoding="utf-8")
        return path

    return write


def test_every_key_arrives(write, tmp_path):
    study = load_study(write(WHOLE))
    assert study.facts == PublicFacts(features=3, rows=100, entry_bound=2.0)
    assert study.guarantee.to_dict() == {
        "epsilon": 2.0, "delta": 1e-6, "neighbours": "replace-one",
    }
    plan = study.plan()
    assert (plan.steps, plan.radius, plan.schedule, plan.intercept) == (7, 4.0, "shrinking", False)
    assert study.model == tmp_path / "out" / "model.json"
    assert study.statement == tmp_path / "statement.md"
    assert study.data["matrix"] == str(tmp_path / "x.mtx")
    assert study.data["labels"] == str(tmp_path / "y.txt")


def test_what_is_left_out_is_left_to_the_rules(write):
    study = load_study(write(LEAST))
    assert study.statement is None and study.method == {} and study.names() is None
    assert study.guarantee.delta == 0 and study.plan().intercept is False


def test_a_study_reads_its_data_and_names(write, tmp_path):
    path = write(WHOLE)
    (tmp_path / "x.mtx").write_text(
        "%%MatrixMarket matrix coordinate real general\n2 3 2\n1 1 1\n2 3 2\n"
    )
    (tmp_path / "y.txt").write_text("0\n1\n")
    (tmp_path / "names.txt").write_text("low\nmiddle\nhigh\n")
    study = load_study(path)
    data = study.read_data()
    assert data.X.toarray().tolist() == [[1, 0, 0], [0, 0, 2]] and data.y.tolist() == [0, 1]
    assert study.names() == ("low", "middle", "high")


def test_a_matrix_without_labels_is_named(write, tmp_path):
    path = write(WHOLE.replace('labels = "y.txt"\n', ""))
    (tmp_path / "x.mtx").write_text(
        "%%MatrixMarket matrix coordinate real general\n2 3 1\n1 1 1\n"
    )
    with pytest.raises(InputError, match=r"study.toml: .*x.mtx holds no labels"):
        load_study(path).read_data()


def test_bounds_may_stand_in_a_file(write, tmp_path):
    path = write(WHOLE.replace("entry_bound = 2", 'entry_bound = "bounds.txt"'))
    (tmp_path / "bounds.txt").write_text("1\n2.5\n3\n")
    assert load_study(path).facts.entry_bound.tolist() == [1.0, 2.5, 3.0]
    np.save(tmp_path / "bounds.npy", np.array([1.0, 2.5]))
    with pytest.raises(InputError, match=r"study.toml: entry_bound has shape \(2,\)"):
        load_study(write(WHOLE.replace("entry_bound = 2", 'entry_bound = "bounds.npy"')))


def test_a_numeric_label_range_is_a_pair(write):
    study = load_study(write(WHOLE.replace('label = "binary"', "label = [0.0, 10.0]")))
    assert study.facts.label == (0.0, 10.0)


@pytest.mark.parametrize(
    ("old", "new", "named"),
    [
        ("[facts]", "[fact]", r"unknown table \[fact\]; did you mean facts\?"),
        ("[method]", "[zzz]", r"unknown table \[zzz\]; known are data, facts"),
        ("epsilon = 2", "epsilom = 2", r"unknown key epsilom in \[guarantee\]; did you mean epsi"),
        ("steps = 7", "picks = 7", r"unknown key picks in \[method\]"),
        ("epsilon = 2", "", r"epsilon is missing in \[guarantee\]"),
        ('matrix = "x.mtx"', "", r"matrix is missing in \[data\]"),
        ('model = "out/model.json"', "", r"model is missing in \[release\]"),
        ("features = 3", "features = 3.0", r"features in \[facts\] must be a whole number"),
        ("features = 3", "features = true", r"features in \[facts\] must be a whole number"),
        ("rows = 100", 'rows = "100"', r"rows in \[facts\] must be a whole number, not '100'"),
        ("epsilon = 2", "epsilon = true", r"epsilon in \[guarantee\] must be a number"),
        ("intercept = false", "intercept = 0", r"intercept in \[method\] must be true or false"),
        ('label = "binary"', "label = 1", r"label in \[facts\] must be a text or a list"),
        ("entry_bound = 2", "entry_bound = [1]", r"entry_bound in \[facts\] must be a number or a text"),
        ("epsilon = 2", "epsilon = -2", "epsilon must be a finite number above 0"),
        ("features = 3", "features = 0", "features must be between"),
        ("[facts]", "[facts", "is not TOML"),
        ("rows = 100", "rows = 100\nrows = 100", "is not TOML"),
    ],
)
def test_what_is_wrong_is_named(write, old, new, named):
    assert old in WHOLE
    with pytest.raises(InputError, match=rf"study.toml(:| is) ?.*{named}|study.toml {named}"):
        load_study(write(WHOLE.replace(old, new, 1)))


def test_other_trouble_is_named(write, tmp_path):
    with pytest.raises(InputError, match="none.toml: No such file"):
        load_study(tmp_path / "none.toml")
    with pytest.raises(InputError, match=r"data must be a table, \[data\]"):
        load_study(write("data = 3"))
    with pytest.raises(NotYetError, match="rows_per_person"):
        load_study(write(WHOLE.replace("rows_per_person = 1", "rows_per_person = 2")))
    path = write("")
    path.write_bytes(b"[data]\nmatrix = \"\xff\"")
    with pytest.raises(InputError, match="is not TOML"):
        load_study(path)
