"""The terminal, in process: what each command prints, writes and returns."""

from __future__ import annotations

import json
import subprocess
import sys

import numpy as np
import pytest
import scipy.io
import scipy.sparse as sp

import sordino
from sordino.cli import main
from sordino.files import write_svmlight

N_ROWS, N_FEATURES = 400, 30
STUDY = """
[data]
matrix = "{matrix}"
{more}
[facts]
features = 30
rows = 400
[guarantee]
epsilon = 8.0
delta = 1e-6
[method]
steps = 9
[release]
model = "model.json"
statement = "statement.md"
"""


@pytest.fixture(scope="module")
def table():
    rng = np.random.default_rng(3)
    X = sp.csr_array((rng.random((N_ROWS, N_FEATURES)) < 0.3).astype(float))
    y = (rng.random(N_ROWS) < 0.2 + 0.6 * X[:, [4]].toarray().ravel()).astype(float)
    return X, y


@pytest.fixture
def study(table, tmp_path):
    write_svmlight(tmp_path / "x.svm", *table)
    path = tmp_path / "study.toml"
    path.write_text(STUDY.format(matrix="x.svm", more=""))
    return path


def refused(capsys, *arguments, status=2) -> str:
    """The one line on stderr of a command that fails."""
    assert main(list(map(str, arguments))) == status
    out, err = capsys.readouterr()
    assert out == "" and err.startswith("sordino: ") and err.count("\n") == 1
    return err


def test_plan_prints_the_plan_and_reads_no_data(study, capsys):
    (study.parent / "x.svm").unlink()
    assert main(["plan", str(study)]) == 0
    facts = sordino.PublicFacts(features=N_FEATURES, rows=N_ROWS)
    plan = sordino.plan_fit(facts, sordino.Guarantee(8.0, 1e-6), steps=9)
    assert capsys.readouterr().out == f"{plan}\n"
    assert main(["plan", str(study), "--explain"]) == 0
    assert capsys.readouterr().out == f"{plan.explain()}\n"
    assert main(["plan", str(study), "--json"]) == 0
    said = json.loads(capsys.readouterr().out)
    assert sordino.Plan.from_dict(said["plan"]) == plan
    assert said["smallest_effect_rows"] == plan.smallest_effect_rows
    assert set(said["smallest_risk_difference"]) == {"0.001", "0.01", "0.1"}


def store_svmlight(folder, X, y):
    write_svmlight(folder / "t.svm", X, 2 * y - 1)
    return "t.svm", ""


def store_matrix_market(folder, X, y):
    scipy.io.mmwrite(folder / "t.mtx", X)
    np.savetxt(folder / "y.txt", y, fmt="%d")
    return "t.mtx", 'labels = "y.txt"'


def store_npz(folder, X, y):
    sp.save_npz(folder / "t.npz", X)
    np.save(folder / "y.npy", y)
    return "t.npz", 'labels = "y.npy"'


@pytest.mark.parametrize("store", [store_svmlight, store_matrix_market, store_npz])
def test_from_a_file_to_a_release_a_statement_and_predictions(store, table, tmp_path, capsys):
    X, y = table
    matrix, more = store(tmp_path, X, y)
    (tmp_path / "names.txt").write_text("".join(f"term {j}\n" for j in range(N_FEATURES)))
    study = tmp_path / "study.toml"
    study.write_text(STUDY.format(matrix=matrix, more=f'{more}\nnames = "names.txt"'))
    assert main(["fit", str(study)]) == 0
    out, err = capsys.readouterr()
    release = sordino.load_release(tmp_path / "model.json")
    assert str(release) in out and str(tmp_path / "model.json") in out and err == ""
    assert release.rehearsal is False and release.names[0].startswith("term ")
    assert (tmp_path / "statement.md").read_text() == release.statement()

    assert main(["statement", str(tmp_path / "model.json")]) == 0
    assert capsys.readouterr().out == release.statement()

    assert main(["predict", str(tmp_path / "model.json"), str(tmp_path / matrix)]) == 0
    printed = np.array(capsys.readouterr().out.split(), dtype=float)
    assert (printed == release.predict_probability(X)).all()
    assert main(["predict", str(tmp_path / "model.json"), str(tmp_path / matrix), "--json"]) == 0
    assert json.loads(capsys.readouterr().out) == printed.tolist()
    target = tmp_path / "p.txt"
    assert main(["predict", str(tmp_path / "model.json"), str(tmp_path / matrix),
                 "--out", str(target)]) == 0
    assert np.loadtxt(target).tolist() == printed.tolist()


def test_fit_as_json_is_the_release_file_and_nothing_else(study, capsys):
    assert main(["fit", str(study), "--json"]) == 0
    out = capsys.readouterr().out
    assert out == (study.parent / "model.json").read_text()
    assert json.loads(out)["content"]["rehearsal"] is False


def test_an_earlier_release_is_not_written_over_unasked(study, capsys):
    model = study.parent / "model.json"
    assert main(["fit", str(study)]) == 0
    capsys.readouterr()
    before = model.read_bytes()
    assert "model.json is there already" in refused(capsys, "fit", study)
    assert model.read_bytes() == before
    assert main(["fit", str(study), "--replace"]) == 0
    assert sordino.load_release(model).rehearsal is False


def test_what_cannot_be_written_is_said_before_the_data_is_read(study, capsys, monkeypatch):
    study.write_text(study.read_text().replace('"model.json"', '"no/such/model.json"'))
    monkeypatch.setattr("sordino.study.Study.read_data", lambda *_: pytest.fail("read the data"))
    assert "model.json cannot be written" in refused(capsys, "fit", study)


def test_a_rehearsal_is_marked_everywhere(study, capsys):
    assert main(["fit", str(study), "--rehearsal", "5"]) == 0
    out, err = capsys.readouterr()
    assert "REHEARSAL" in out and "NOT private" in err
    model = study.parent / "model.json"
    assert sordino.load_release(model).rehearsal is True
    assert "rehearsal" in (study.parent / "statement.md").read_text()[:400].lower()
    assert main(["predict", str(model), str(study.parent / "x.svm")]) == 0
    assert "rehearsal" in capsys.readouterr().err
    first = model.read_bytes()
    assert main(["fit", str(study), "--rehearsal", "5", "--replace"]) == 0
    assert model.read_bytes() == first


def test_the_profile_goes_to_stderr_only(study, capsys):
    assert main(["fit", str(study), "--profile"]) == 0
    out, err = capsys.readouterr()
    assert "inside only" in err and "inside only" not in out
    assert "inside only" not in (study.parent / "model.json").read_text()


@pytest.mark.parametrize(
    ("old", "new", "named"),
    [
        ("epsilon = 8.0", "epsilom = 8.0", "unknown key epsilom in [guarantee]"),
        ('"x.svm"', '"none.svm"', "none.svm: No such file"),
        ("features = 30", "features = 20", "x.svm, line"),
        ("rows = 400\n", 'rows = 40\nlabel = "x"\n', 'label must be "binary"'),
    ],
)
def test_what_the_user_can_mend_is_one_line_and_status_2(study, capsys, old, new, named):
    study.write_text(study.read_text().replace(old, new))
    assert named in refused(capsys, "fit", study, "--json")
    assert not (study.parent / "model.json").exists()


def test_a_label_that_is_wrong_is_named(study, capsys):
    text = (study.parent / "x.svm").read_text()
    (study.parent / "x.svm").write_text("7" + text[1:])
    assert "label of row 0 is 7" in refused(capsys, "fit", study, "--json")


def test_anything_else_is_status_1(study, capsys, monkeypatch):
    def broken(*_, **__):
        raise RuntimeError("out of\nluck")

    monkeypatch.setattr("sordino.study.Study.read_data", broken)
    said = refused(capsys, "fit", study, "--json", status=1)
    assert said == "sordino: RuntimeError: out of luck\n"


def test_an_interrupt_releases_nothing(study, capsys, monkeypatch):
    def interrupted(*_, **__):
        raise KeyboardInterrupt

    monkeypatch.setattr("sordino.plan.Plan.fit", interrupted)
    assert "interrupted: nothing was released" in refused(capsys, "fit", study, "--json",
                                                          status=130)
    assert not (study.parent / "model.json").exists()


def test_an_altered_release_is_refused(study, capsys):
    assert main(["fit", str(study), "--quiet"]) == 0
    capsys.readouterr()
    model = study.parent / "model.json"
    model.write_text(model.read_text().replace('"rows": 400', '"rows": 401'))
    assert "was altered" in refused(capsys, "statement", model)


def test_usage_errors_are_status_2(capsys):
    for arguments in ([], ["plan"], ["unknown"], ["predict", "m", "d", "--first-column", "2"]):
        with pytest.raises(SystemExit) as stopped:
            main(arguments)
        assert stopped.value.code == 2
    capsys.readouterr()


def test_the_installed_program_says_its_version_and_loads_little():
    code = (
        "import sys\nfrom sordino.cli import main\n"
        "try: main(['--version'])\nexcept SystemExit: pass\n"
        "print([m for m in ('sklearn', 'rich', 'matplotlib', 'numba') if m in sys.modules])"
    )
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert done.stdout == f"sordino {sordino.__version__}\n[]\n"


def test_a_closed_pipe_is_no_error(study):
    done = subprocess.run(
        f'"{sys.executable}" -m sordino.cli plan "{study}" --explain | head -n 1',
        shell=True, capture_output=True, text=True,
    )
    assert done.stderr == ""
