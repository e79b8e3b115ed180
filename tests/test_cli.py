"""The terminal, in process: what each command prints, writes and returns."""

from __future__ import annotations

import json
import os
import signal
import sqlite3
import subprocess
import sys
from pathlib import Path

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
    assert set(said["smallest_difference"]) == {"0.001", "0.01", "0.1"}


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
    assert out == (f"{release.plan}\n\n{release}\n\nRelease:    {tmp_path / 'model.json'}\n"
                   f"Statement:  {tmp_path / 'statement.md'}\n")
    assert err == ""
    assert release.rehearsal is False and release.names[0].startswith("term ")
    assert (tmp_path / "statement.md").read_text() == release.statement()

    assert main(["statement", str(tmp_path / "model.json")]) == 0
    assert capsys.readouterr().out == release.statement()

    assert main(["predict", str(tmp_path / "model.json"), str(tmp_path / matrix)]) == 0
    printed = np.array(capsys.readouterr().out.split(), dtype=float)
    assert (printed == release.predict_probability(X)).all()
    assert main(["predict", str(tmp_path / "model.json"), str(tmp_path / matrix), "--json"]) == 0
    said = json.loads(capsys.readouterr().out)
    assert said == {"rehearsal": False, "probabilities": printed.tolist()}
    target = tmp_path / "p.txt"
    assert main(["predict", str(tmp_path / "model.json"), str(tmp_path / matrix),
                 "--out", str(target)]) == 0
    assert np.loadtxt(target).tolist() == printed.tolist()
    assert capsys.readouterr().out == f"Written:    {target}\n"
    assert main(["predict", str(tmp_path / "model.json"), str(tmp_path / matrix), "--json",
                 "--out", str(target)]) == 0
    assert json.loads(target.read_text()) == said and capsys.readouterr().out == ""


def test_a_statement_goes_to_a_file_if_asked(study, tmp_path, capsys):
    assert main(["fit", str(study), "--quiet"]) == 0
    model = tmp_path / "model.json"
    assert main(["statement", str(model), "--out", str(tmp_path / "board.md")]) == 0
    assert f"Written:    {tmp_path / 'board.md'}\n" in capsys.readouterr().out
    assert (tmp_path / "board.md").read_text() == (tmp_path / "statement.md").read_text()


def test_quiet_leaves_the_plan_out(study, capsys):
    assert main(["fit", str(study), "--quiet"]) == 0
    out, err = capsys.readouterr()
    release = sordino.load_release(study.parent / "model.json")
    assert out.startswith(f"{release}\n") and err == ""


def test_columns_may_start_at_0(table, study, tmp_path, capsys):
    write_svmlight(tmp_path / "zero.svm", *table, first_column=0)
    assert main(["fit", str(study), "--quiet"]) == 0
    release = sordino.load_release(tmp_path / "model.json")
    capsys.readouterr()
    assert "column id 0 is below 1" in refused(capsys, "predict", tmp_path / "model.json",
                                               tmp_path / "zero.svm")
    assert main(["predict", str(tmp_path / "model.json"), str(tmp_path / "zero.svm"),
                 "--first-column", "0"]) == 0
    printed = np.array(capsys.readouterr().out.split(), dtype=float)
    assert (printed == release.predict_probability(table[0])).all()


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


def test_an_earlier_statement_is_not_written_over_unasked(study, capsys):
    (study.parent / "statement.md").write_text("mine")
    assert "statement.md is there already" in refused(capsys, "fit", study)
    assert (study.parent / "statement.md").read_text() == "mine"
    assert not (study.parent / "model.json").exists()


@pytest.mark.parametrize("key", ["model.json", "statement.md"])
@pytest.mark.parametrize(
    ("path", "said"),
    [
        ("no/such/file", "there is no folder {folder}/no/such"),
        ("taken", "it is a folder"),
        ("locked/file", "{folder}/locked is not yours to write to"),
    ],
)
def test_what_cannot_be_written_is_said_before_the_data_is_read(study, capsys, monkeypatch, key,
                                                                path, said):
    folder = study.parent
    (folder / "taken").mkdir()
    (folder / "locked").mkdir()
    may = os.access
    monkeypatch.setattr("os.access", lambda at, mode: at != folder / "locked" and may(at, mode))
    study.write_text(study.read_text().replace(f'"{key}"', f'"{path}"'))
    monkeypatch.setattr("sordino.study.Study.read_data", lambda *_: pytest.fail("read the data"))
    said = said.replace("{folder}", str(folder))
    assert refused(capsys, "fit", study, "--replace") == (
        f"sordino: {folder / path} cannot be written: {said}\n"
    )


def test_predictions_never_replace_what_they_are_made_of(study, capsys):
    assert main(["fit", str(study)]) == 0
    capsys.readouterr()
    model, data = study.parent / "model.json", study.parent / "x.svm"
    before = model.read_bytes(), data.read_bytes()
    for target in (model, data):
        assert "it is what is read" in refused(capsys, "predict", model, data, "--out", target)
    assert "it is what is read" in refused(capsys, "statement", model, "--out", model)
    assert (model.read_bytes(), data.read_bytes()) == before


def test_a_rehearsal_is_marked_everywhere(study, capsys):
    assert main(["fit", str(study), "--rehearsal", "5"]) == 0
    out, err = capsys.readouterr()
    assert "\nREHEARSAL: not private, must not leave." in out and "NOT private" in err
    model = study.parent / "model.json"
    assert sordino.load_release(model).rehearsal is True
    assert "rehearsal" in (study.parent / "statement.md").read_text()[:400].lower()
    assert f"Rehearsal:  {model}\n" in out and "Release:" not in out
    assert main(["predict", str(model), str(study.parent / "x.svm")]) == 0
    assert "REHEARSAL" in capsys.readouterr().err
    assert main(["predict", str(model), str(study.parent / "x.svm"), "--json"]) == 0
    assert json.loads(capsys.readouterr().out)["rehearsal"] is True
    assert main(["statement", str(model)]) == 0
    assert "REHEARSAL" in capsys.readouterr().err
    first = model.read_bytes()
    assert main(["fit", str(study), "--rehearsal", "5", "--replace", "--json"]) == 0
    out, err = capsys.readouterr()
    assert json.loads(out)["content"]["rehearsal"] is True and "NOT private" in err
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
    monkeypatch.delenv("SORDINO_TRACEBACK", raising=False)
    said = refused(capsys, "fit", study, "--json", status=1)
    assert said == "sordino: RuntimeError: out of luck\n"
    monkeypatch.setenv("SORDINO_TRACEBACK", "1")
    with pytest.raises(RuntimeError, match="out of\nluck"):
        main(["fit", str(study)])


@pytest.mark.parametrize("what", ["reading the file", "checking the table", "laying out the table",
                                  "fitting"])
def test_an_interrupt_releases_nothing(study, capsys, monkeypatch, what):
    def interrupt(fraction, doing):
        if doing == what:
            signal.raise_signal(signal.SIGINT)

    monkeypatch.setattr("sordino.cli._silent", interrupt)
    before = set(study.parent.iterdir())
    said = refused(capsys, "fit", study, "--json", status=130)
    assert said == "sordino: interrupted: nothing was released\n"
    assert set(study.parent.iterdir()) == before


def test_an_interrupt_after_the_release_does_not_say_that_there_is_none(study, capsys, monkeypatch):
    def interrupt(*_):
        signal.raise_signal(signal.SIGINT)

    monkeypatch.setattr("sordino.release.write_text", interrupt)
    said = refused(capsys, "fit", study, "--json", status=130)
    assert f"interrupted while writing: look whether {study.parent}/model.json is there" in said


def test_other_commands_are_interrupted_too(study, capsys, monkeypatch):
    def interrupt(*_):
        signal.raise_signal(signal.SIGINT)

    monkeypatch.setattr("sordino.study.load_study", interrupt)
    assert refused(capsys, "plan", study, status=130) == "sordino: interrupted\n"


def test_an_altered_release_is_refused(study, capsys):
    assert main(["fit", str(study), "--quiet"]) == 0
    capsys.readouterr()
    model = study.parent / "model.json"
    model.write_text(model.read_text().replace('"rows": 400', '"rows": 401'))
    assert "was altered" in refused(capsys, "statement", model)


@pytest.mark.parametrize(
    ("arguments", "said"),
    [
        ([], "the following arguments are required: COMMAND (sordino --help says more)"),
        (["plan"], "the following arguments are required: STUDY.toml (sordino plan --help"),
        (["unknown"], "argument COMMAND: invalid choice: 'unknown'"),
        (["predict", "m", "d", "--first-column", "2"], "argument --first-column: invalid choice"),
        (["plan", "s", "--json", "--explain"], "not allowed with argument"),
        (["fit", "s", "--repl"], "unrecognized arguments: --repl"),
        (["fit", "s", "--rehearsal", "-3"], "argument --rehearsal"),
        (["fit", "s", "--rehearsal", "1.5"], "must be a whole number of at least 0, not 1.5"),
    ],
)
def test_usage_errors_are_one_line_and_status_2(capsys, arguments, said):
    assert said in refused(capsys, *arguments)


@pytest.mark.parametrize("command", ["plan", "fit", "predict", "statement", "book", "demo"])
def test_every_command_is_helped(capsys, command):
    assert main(["--help"]) == 0
    assert f"\n  {command} " in capsys.readouterr().out
    assert main([command, "--help"]) == 0
    assert capsys.readouterr().out.startswith(f"usage: sordino {command} ")


def test_the_program_says_its_version_and_loads_little():
    code = (
        "import sys\nfrom sordino.cli import main\n"
        "assert main(['--version']) == 0 == main(['--help'])\n"
        "print([m for m in ('sklearn', 'rich', 'matplotlib', 'numba') if m in sys.modules])"
    )
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert done.stdout.startswith(f"sordino {sordino.__version__}\nusage: sordino ")
    assert done.stdout.endswith("\n[]\n") and done.stderr == ""


@pytest.mark.parametrize("command", ["plan {study}", "--help"])
def test_a_closed_pipe_is_quiet(study, command):
    buffered = {name: value for name, value in os.environ.items() if name != "PYTHONUNBUFFERED"}
    reader, writer = os.pipe()
    os.close(reader)
    with os.fdopen(writer, "wb") as closed:
        done = subprocess.run(
            [sys.executable, "-m", "sordino.cli", *command.format(study=study).split()],
            stdout=closed, stderr=subprocess.PIPE, text=True, env=buffered)
    assert done.stderr == "" and done.returncode == 1


def test_a_name_that_the_terminal_cannot_show_does_not_stop_a_fit(study):
    names = "".join(f"h\u00fctte {j}\n" for j in range(N_FEATURES))
    (study.parent / "names.txt").write_text(names, encoding="utf-8")
    study.write_text(study.read_text().replace("[facts]", 'names = "names.txt"\n[facts]'))
    done = subprocess.run([sys.executable, "-m", "sordino.cli", "fit", str(study)],
                          capture_output=True, env={**os.environ, "PYTHONIOENCODING": "ascii"})
    assert (done.returncode, done.stderr) == (0, b"") and b"h\\xfctte" in done.stdout


def test_without_a_stdout_the_work_is_done(study):
    code = (
        "import sys\nfrom sordino.cli import main\nsys.stdout = None\n"
        "sys.exit(main(['fit', sys.argv[1]]))"
    )
    done = subprocess.run([sys.executable, "-c", code, str(study)], capture_output=True, text=True)
    assert (done.returncode, done.stderr) == (0, "")
    assert not sordino.load_release(study.parent / "model.json").rehearsal


def test_progress_is_shown_on_a_terminal_only(study, capsys, monkeypatch):
    monkeypatch.setattr("sys.stderr.isatty", lambda: True, raising=False)
    monkeypatch.setenv("TERM", "xterm")
    monkeypatch.setenv("FORCE_COLOR", "1")
    assert main(["fit", str(study), "--json"]) == 0
    out, err = capsys.readouterr()
    assert json.loads(out)["content"]["rehearsal"] is False and "100 %" in err
    assert main(["fit", str(study), "--replace", "--quiet"]) == 0
    assert capsys.readouterr().err == ""


def test_progress_is_silent_without_rich(study, capsys, monkeypatch):
    monkeypatch.setattr("sys.stderr.isatty", lambda: True, raising=False)
    monkeypatch.setitem(sys.modules, "rich.console", None)
    assert main(["fit", str(study), "--json"]) == 0
    assert capsys.readouterr().err == ""


def test_a_release_that_cannot_be_written_in_its_place_is_kept_elsewhere(study, capsys, monkeypatch):
    """The budget is spent by then: nothing may be lost."""
    save = sordino.Release.save

    def full(release, path, **options):
        if path == study.parent / "model.json":
            raise sordino.InputError(f"{path} cannot be written: No space left on device")
        save(release, path, **options)

    monkeypatch.setattr("sordino.release.Release.save", full)
    said = refused(capsys, "fit", study, "--json")
    assert "No space left" in said and "spent its epsilon" in said
    kept = Path(said.rsplit("keep ", 1)[1].strip())
    assert sordino.load_release(kept).plan.steps > 0
    kept.unlink()
    kept.parent.rmdir()


# --- persons, learned bounds, public knowledge


KNOWING = """
[data]
matrix = "x.svm"
persons = "persons.txt"
names = "names.txt"
[facts]
features = 30
rows = 2000
entry_bound = "learn"
label = "learn"
rows_per_person = 1
[guarantee]
epsilon = 20.0
delta = 1e-6
[method]
loss = "squared"
picks = 8
include = [7]
exclude = [0]
[release]
model = "model.json"
statement = "statement.md"
"""


@pytest.fixture
def knowing(tmp_path):
    """A study of 2,000 rows of 500 persons, numeric labels, and names."""
    rng = np.random.default_rng(5)
    held = rng.random((2000, N_FEATURES)) < 0.3
    X = sp.csr_array(held * rng.integers(1, 4, (2000, N_FEATURES)))
    y = 5 + X[:, [4]].toarray().ravel() + rng.normal(0, 0.5, 2000)
    write_svmlight(tmp_path / "x.svm", X.astype(float), y)
    (tmp_path / "persons.txt").write_text("".join(f"p{i % 500}\n" for i in range(2000)))
    (tmp_path / "names.txt").write_text("".join(f"term {j}\n" for j in range(N_FEATURES)))
    path = tmp_path / "study.toml"
    path.write_text(KNOWING)
    return path, X, y


def test_persons_and_learned_bounds_at_the_terminal(knowing, capsys):
    path, X, y = knowing
    assert main(["plan", str(path)]) == 0
    out = " ".join(capsys.readouterr().out.split())
    assert "1 feature in the model by decision, stated as public by the user" in out
    assert "entries within a bound to be learned, label range to be learned" in out
    assert main(["plan", str(path), "--json"]) == 0
    said = json.loads(capsys.readouterr().out)
    plan = sordino.Plan.from_dict(said["plan"])
    assert said["epsilon_spent"] == plan.epsilon_spent and plan.knowledge.include == (7,)

    assert main(["fit", str(path)]) == 0
    out, err = capsys.readouterr()
    release = sordino.load_release(path.parent / "model.json")
    assert err == "" and f"learned privately: label {release.learned['label']}" in out
    assert release.persons_bounded and list(release.learned) == ["entry_bound", "label"]
    assert 7 in release.features and 0 not in release.features
    statement = " ".join((path.parent / "statement.md").read_text().split())
    assert "surplus rows were dropped at random" in statement and "Learned privately" in statement

    assert main(["predict", str(path.parent / "model.json"), str(path.parent / "x.svm")]) == 0
    printed = np.array(capsys.readouterr().out.split(), dtype=float)
    assert (printed == release.predict(X)).all()

    path.write_text(KNOWING.replace("exclude", 'start = "model.json"\nexclude')
                    .replace('model = "model.json"', 'model = "next.json"'))
    assert main(["fit", str(path), "--replace", "--quiet"]) == 0
    capsys.readouterr()
    following = sordino.load_release(path.parent / "next.json")
    assert following.plan.knowledge.start.intercept == release.intercept
    assert set(release.features.tolist()) <= set(following.features.tolist())


def test_too_few_persons_are_refused_in_one_line(knowing, capsys):
    path, *_ = knowing
    (path.parent / "persons.txt").write_text("a\nb\n")
    said = refused(capsys, "fit", path, "--json")
    assert "persons has shape (2,); with 2,000 rows it must be (2000,)" in said
    assert not (path.parent / "model.json").exists()


def test_trouble_after_the_plan_is_one_line_too(knowing, capsys):
    """Labels that cannot be binary, persons that do not fit: nothing is written."""
    path, *_ = knowing
    path.write_text(KNOWING.replace('label = "learn"', "").replace('loss = "squared"', ""))
    assert "label of row 0 is" in refused(capsys, "fit", path, "--json")
    assert sorted(file.name for file in path.parent.iterdir()) == [
        "names.txt", "persons.txt", "study.toml", "x.svm"]


# --- the budget book

@pytest.fixture
def book(tmp_path, capsys):
    path = tmp_path / "a.book"
    assert main(["book", "open", str(path), "--epsilon", "20", "--delta", "1e-6"]) == 0
    assert capsys.readouterr().out == (
        f"{path}: nothing spent of epsilon 20 at delta 1e-06 (add-remove)\n")
    return path


def name_in_data(study, lines: str):
    study.write_text(study.read_text().replace("[facts]", f"{lines}\n[facts]"))


def test_a_book_is_opened_under_the_terms_that_are_given(tmp_path, capsys):
    path = tmp_path / "a.book"
    assert main(["book", "open", str(path), "--epsilon", "2", "--neighbours", "replace-one",
                 "--rows-per-person", "3"]) == 0
    found = sordino.BudgetBook(path)
    assert found.cap == sordino.Guarantee(2.0, 0.0, "replace-one") and found.rows_per_person == 3
    capsys.readouterr()
    assert "there is something already" in refused(capsys, "book", "open", path, "--epsilon", "1")
    assert found.cap == sordino.BudgetBook(path).cap


def test_fits_are_charged_to_the_book_of_the_study(study, book, capsys):
    name_in_data(study, 'book = "a.book"')
    assert main(["fit", str(study), "--quiet", "--rehearsal", "1"]) == 0
    assert sordino.BudgetBook(book).entries == []
    assert main(["fit", str(study), "--quiet", "--replace"]) == 0
    release = sordino.load_release(study.parent / "model.json")
    (entry,) = sordino.BudgetBook(book).entries
    assert entry.state == "settled" and entry.zcdp == release.plan.zcdp
    capsys.readouterr()

    assert main(["book", "show", str(book)]) == 0
    shown = capsys.readouterr().out
    assert shown == f"{sordino.BudgetBook(book)}\n"
    assert f"epsilon {release.plan.epsilon_spent:.6g} of 20 spent" in shown
    assert "settled" in shown and "fit of a logistic model by frank-wolfe at epsilon 8" in shown
    assert main(["book", "show", str(book), "--json"]) == 0
    told = json.loads(capsys.readouterr().out)
    assert told == sordino.BudgetBook(book).to_dict()
    assert [fields["what"] for fields in told["entries"]] == [entry.what]
    assert main(["book", "check", str(book)]) == 0
    assert capsys.readouterr().out == (
        f"{book}: whole; 1 charge, epsilon {release.plan.epsilon_spent:.6g} of 20 spent\n")


def test_a_fit_that_passes_the_cap_is_refused_with_what_is_left(study, book, capsys):
    name_in_data(study, 'book = "a.book"')
    study.write_text(study.read_text().replace("epsilon = 8.0", "epsilon = 18.0"))
    assert main(["fit", str(study), "--quiet"]) == 0
    capsys.readouterr()
    said = refused(capsys, "fit", study, "--replace", "--json")
    left = sordino.BudgetBook(book).largest_epsilon(1e-6)
    assert "above the cap of 20 at delta 1e-06" in said and 0 < left < 18
    assert said.endswith(f"a plan of at most epsilon {left:g} at delta 1e-06 would fit\n")
    study.write_text(study.read_text().replace("epsilon = 18.0", f"epsilon = {left}"))
    assert main(["fit", str(study), "--replace", "--json"]) == 0
    assert len(sordino.BudgetBook(book).entries) == 2


def test_fits_of_the_parts_of_a_split(study, book, capsys):
    persons = [f"person {i}" for i in range(N_ROWS)]
    (study.parent / "persons.txt").write_text("\n".join(persons) + "\n")
    assert main(["book", "split", str(book), "--key", "2031", "--part", "fit=0.8",
                 "--part", "test=0.2"]) == 0
    assert capsys.readouterr().out == f"{book}: split '2031' has the parts fit, test\n"
    name_in_data(study, 'book = "a.book"\npersons = "persons.txt"\npart = ["2031", "fit"]')
    assert main(["fit", str(study), "--quiet"]) == 0
    study.write_text(study.read_text().replace('"2031", "fit"', '"2031", "test"'))
    assert main(["fit", str(study), "--quiet", "--replace"]) == 0
    found = sordino.BudgetBook(book)
    assert [entry.part for entry in found.entries] == [("2031", "fit"), ("2031", "test")]
    assert found.epsilon_spent == sordino.load_release(study.parent / "model.json"
                                                       ).plan.epsilon_spent
    capsys.readouterr()
    study.write_text(study.read_text().replace('"2031", "test"', '"2031", "x"'))
    assert f"{study}: {book}: split '2031' has no part 'x'; it has fit, test" in refused(
        capsys, "fit", study, "--replace", "--json")


@pytest.mark.parametrize("number", range(4))
def test_check_says_which_event_was_altered(study, book, capsys, number):
    name_in_data(study, 'book = "a.book"')
    assert main(["book", "split", str(book), "--key", "k", "--part", "a=.5", "--part", "b=.5"]) == 0
    assert main(["fit", str(study), "--quiet"]) == 0
    with sqlite3.connect(book) as connection:
        connection.execute("UPDATE events SET content = replace(content, '0', '1') "
                           "WHERE number = ?", (number,))
    connection.close()
    capsys.readouterr()
    for action in ("check", "show"):
        assert refused(capsys, "book", action, book) == (
            f"sordino: {book}: event {number} was altered\n")
    assert f"event {number} was altered" in refused(capsys, "fit", study, "--replace", "--json")


@pytest.mark.parametrize(
    ("arguments", "said"),
    [
        (["open", "{new}"], "the following arguments are required: --epsilon (sordino book open"),
        (["open", "{new}", "--epsilon", "x"], "argument --epsilon: invalid float value: 'x'"),
        (["open", "{new}", "--epsilon", "0"], "epsilon must be a finite number above 0"),
        (["open", "{new}", "--epsilon", "1", "--delta", "1"], "delta must be at least 0 and below"),
        (["open", "{new}", "--epsilon", "1", "--neighbours", "x"], "--neighbours: invalid choice"),
        (["open", "{new}", "--epsilon", "1", "--rows-per-person", "0"],
         "rows_per_person must be between"),
        (["open", "{folder}", "--epsilon", "1"], "there is something already"),
        (["show", "{new}"], "new.book: there is no such book"),
        (["check", "{new}"], "new.book: there is no such book"),
        (["check", "{folder}"], "it is not a budget book"),
        (["check", "{folder}/x.svm"], "x.svm: it is not a budget book"),
        (["split", "{book}", "--key", "k", "--part", "a"], "--part: must be NAME=SHARE, not a"),
        (["split", "{book}", "--key", "k", "--part", "a=x"], "--part: must be NAME=SHARE, not a=x"),
        (["split", "{book}", "--key", "k", "--part", "a=.5", "--part", "a=.5"],
         "a part is named twice"),
        (["split", "{book}", "--key", "k", "--part", "a=.5", "--part", "b=.4"],
         "shares add up to 0.9, not to 1"),
        (["split", "{book}", "--key", "", "--part", "a=.5", "--part", "b=.5"],
         "the key of a split must be a text"),
        (["split", "{book}", "--part", "a=.5"], "required: --key"),
        (["split", "{new}", "--key", "k", "--part", "a=.5", "--part", "b=.5"], "no such book"),
        (["shut", "{book}"], "invalid choice: 'shut'"),
        ([], "the following arguments are required: open|show|check|split"),
    ],
)
def test_what_is_wrong_with_a_book_is_one_line_and_status_2(study, book, capsys, arguments, said):
    folder = study.parent
    filled = [argument.format(new=folder / "new.book", folder=folder, book=book)
              for argument in arguments]
    assert said in refused(capsys, "book", *filled)
    assert not (folder / "new.book").exists() and not sordino.BudgetBook(book).splits


@pytest.mark.parametrize("action", ["open", "show", "check", "split"])
def test_every_book_action_is_helped(capsys, action):
    assert main(["book", "--help"]) == 0
    assert f"\n    {action} " in capsys.readouterr().out
    assert main(["book", action, "--help"]) == 0
    assert capsys.readouterr().out.startswith(f"usage: sordino book {action} ")


def test_an_interrupted_fit_says_to_look_at_the_book(study, book, capsys, monkeypatch):
    def interrupt(fraction, doing):
        if doing == "fitting":
            signal.raise_signal(signal.SIGINT)

    name_in_data(study, 'book = "a.book"')
    monkeypatch.setattr("sordino.cli._silent", interrupt)
    said = refused(capsys, "fit", study, "--json", status=130)
    assert said == (f"sordino: interrupted: nothing was released; look whether {book} was "
                    "charged\n")
    (entry,) = sordino.BudgetBook(book).entries
    assert entry.state == "abandoned"


# --- threads


def test_threads_change_nothing(study, capsys):
    models = []
    for threads in ("1", "3"):
        assert main(["fit", str(study), "--quiet", "--rehearsal", "5", "--replace", "--threads",
                     threads]) == 0
        models.append((study.parent / "model.json").read_bytes())
    assert models[0] == models[1]
    capsys.readouterr()
    assert "threads must be between 1 and 256" in refused(
        capsys, "fit", study, "--quiet", "--replace", "--threads", "0")
