"""The study file: read strictly, paths relative to it."""

from __future__ import annotations

import numpy as np
import pytest

from sordino import BudgetBook, Guarantee, InputError, PublicFacts, Split, plan_fit
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
    with pytest.raises(InputError, match=r"study.toml, \[facts\]: entry_bound has shape \(2,\)"):
        load_study(write(WHOLE.replace("entry_bound = 2", 'entry_bound = "bounds.npy"')))
    with pytest.raises(InputError, match=r"study.toml, \[facts\]: .*none.txt: No such file"):
        load_study(write(WHOLE.replace("entry_bound = 2", 'entry_bound = "none.txt"')))


def test_a_numeric_label_range_is_a_pair(write):
    study = load_study(write(WHOLE.replace('label = "binary"', "label = [0.0, 10.0]")))
    assert study.facts.label == (0.0, 10.0)


@pytest.mark.parametrize(
    ("old", "new", "said"),
    [
        ("[facts]", "[fact]", ": unknown table [fact]; did you mean facts?"),
        ("[method]", "[zzz]", ": unknown table [zzz]; known are data, facts, guarantee, method, "
                              "release"),
        ("epsilon = 2", "epsilom = 2",
         ": unknown key epsilom in [guarantee]; did you mean epsilon?"),
        ("epsilon = 2", "Epsilon = 2",
         ": unknown key Epsilon in [guarantee]; did you mean epsilon?"),
        ("steps = 7", "zzz = 7", ": unknown key zzz in [method]; known are name, loss, steps, "
                                 "radius, schedule, picks, intercept, residual_bound, include, "
                                 "exclude, prior, start"),
        ("\n[data]", "steps = 7\n[data]", ": unknown key steps before any table; known are data, "
                                          "facts, guarantee, method, release"),
        ("epsilon = 2", "", ": epsilon is missing in [guarantee]"),
        ('matrix = "x.mtx"', "", ": matrix is missing in [data]"),
        ("features = 3", "", ": features is missing in [facts]"),
        ("rows = 100", "", ": rows is missing in [facts]"),
        ('model = "out/model.json"', "", ": model is missing in [release]"),
        ("features = 3", "features = 3.0",
         ": features in [facts] must be a whole number, not 3.0"),
        ("features = 3", "features = true",
         ": features in [facts] must be a whole number, not true"),
        ("rows = 100", 'rows = "100"', ': rows in [facts] must be a whole number, not "100"'),
        ("epsilon = 2", "epsilon = true",
         ": epsilon in [guarantee] must be a number, not true"),
        ("intercept = false", "intercept = 0",
         ": intercept in [method] must be true or false, not 0"),
        ('matrix = "x.mtx"', 'matrix = ""',
         ': matrix in [data] must be the path of a file in quotes, not ""'),
        ('model = "out/model.json"', "model = {a = 1}",
         ": model in [release] must be the path of a file in quotes, not a table"),
        ("steps = 7", 'steps = "7"', ': steps in [method] must be a whole number, not "7"'),
        ('label = "binary"', "label = 1",
         ': label in [facts] must be "binary" or [low, high] or "learn", not 1'),
        ("entry_bound = 2", "entry_bound = [1]",
         ": entry_bound in [facts] must be a number or the path of a file in quotes or "
         '"learn", not [1]'),
        ("epsilon = 2", "epsilon = -2",
         ", [guarantee]: epsilon must be a finite number above 0, not -2"),
        ("epsilon = 2", "epsilon = nan",
         ", [guarantee]: epsilon must be a finite number above 0, not nan"),
        ("delta = 1e-6", "delta = 1.0",
         ", [guarantee]: delta must be at least 0 and below 1, not 1.0"),
        ("features = 3", "features = 0",
         ", [facts]: features must be between 1 and 2,147,483,647, not 0"),
        ('model = "out/model.json"', 'model = "x.mtx"',
         ": model in [release] names the same file as matrix in [data], {folder}/x.mtx"),
        ('model = "out/model.json"', 'model = "a/../statement.md"',
         ": statement in [release] names the same file as model in [release], "
         "{folder}/statement.md"),
        ('model = "out/model.json"', 'model = "study.toml"',
         ": model in [release] names the same file as the study file, {folder}/study.toml"),
    ],
)
def test_what_is_wrong_is_named(write, old, new, said):
    assert old in WHOLE
    path = write(WHOLE.replace(old, new, 1))
    with pytest.raises(InputError) as refused:
        load_study(path)
    assert str(refused.value) == f"{path}{said.replace('{folder}', str(path.parent))}"


@pytest.mark.parametrize(("old", "new", "line"), [
    ("[facts]", "[facts", 8), ("rows = 100", "rows = 100\nrows = 100", 11), ("= 0", "= 0_", 6),
    ('"statement.md"\n', '"""statement.md\n', 30),
])
def test_the_line_that_is_not_toml_is_named(write, old, new, line):
    assert old in WHOLE
    with pytest.raises(InputError, match=rf"study.toml, line {line}: not TOML: [^()]+$"):
        load_study(write(WHOLE.replace(old, new, 1)))


@pytest.mark.parametrize(
    ("old", "new", "said"),
    [
        ("steps = 7", "steps = 0", ": steps must be between 1 and 100,000, not 0"),
        ("radius = 4", "radius = -1.0", ": radius must be a finite number above 0, not -1.0"),
        ('loss = "logistic"', 'loss = "cubic"', ": loss must be"),
        ('name = "frank-wolfe"', 'name = "greedy"', ": steps= belongs to the other method"),
        ('schedule = "shrinking"', 'schedule = "slow"',
         ": schedule must be 'paced' or 'shrinking', not 'slow'"),
    ],
)
def test_a_method_that_cannot_be_planned_names_the_study(write, old, new, said):
    assert old in WHOLE
    path = write(WHOLE.replace(old, new, 1))
    with pytest.raises(InputError) as refused:
        load_study(path).plan()
    assert str(refused.value).startswith(f"{path}{said}")


def test_other_trouble_is_named(write, tmp_path):
    with pytest.raises(InputError, match="none.toml: No such file"):
        load_study(tmp_path / "none.toml")
    with pytest.raises(InputError, match=r"data must be a table, \[data\]"):
        load_study(write("data = 3"))
    with pytest.raises(InputError, match=r"study.toml, \[facts\]: rows_per_person"):
        load_study(write(WHOLE.replace("rows_per_person = 1", "rows_per_person = 0")))
    path = write("")
    path.write_bytes(b"[data]\nmatrix = \"\xff\"")
    with pytest.raises(InputError, match="study.toml, line 2: byte 0xff is not UTF-8"):
        load_study(path)
    path.write_text(LEAST, encoding="utf-8-sig")
    assert load_study(path).facts.features == 3         # the mark that some editors put first
    with pytest.raises(InputError, match="nested too deeply"):
        load_study(write("x = " + "[" * 100_000))


def test_an_output_may_not_be_an_input_under_another_name(write, tmp_path):
    (tmp_path / "x.mtx").write_text("")
    (tmp_path / "alias.json").symlink_to(tmp_path / "x.mtx")
    with pytest.raises(InputError, match="names the same file as matrix"):
        load_study(write(WHOLE.replace("out/model.json", "alias.json")))


def test_paths_are_relative_to_the_study_not_to_where_one_stands(write, tmp_path, monkeypatch):
    write(WHOLE)
    (tmp_path / "elsewhere").mkdir()
    monkeypatch.chdir(tmp_path / "elsewhere")
    study = load_study("../study.toml")
    assert str(study.model) == "../out/model.json" and study.data["matrix"] == "../x.mtx"
    absolute = WHOLE.replace("x.mtx", "/far/x.mtx")
    write(absolute)
    assert load_study("../study.toml").data["matrix"] == "/far/x.mtx"


# --- public knowledge, persons, bounds to be learned


KNOWING = """
[data]
matrix = "x.npz"
labels = "y.txt"
persons = "persons.txt"
[facts]
features = 6
rows = 4000
entry_bound = "learn"
label = "learn"
rows_per_person = 2
[guarantee]
epsilon = 8.0
delta = 1e-6
[method]
loss = "huber"
residual_bound = 0.5
include = [4, 1]
exclude = [3]
prior = "weights.txt"
start = "earlier.json"
[release]
model = "model.json"
"""


@pytest.fixture
def earlier(tmp_path):
    """An earlier release that is there to start from, and the weights of a prior."""
    facts = PublicFacts(features=6, rows=400, label=(-1.0, 3.0))
    plan = plan_fit(facts, Guarantee(8.0, 1e-6), loss="squared", picks=2, exclude=[3])
    rng = np.random.default_rng(1)
    release = plan.fit(rng.integers(0, 2, (400, 6)), rng.normal(size=400))
    release.save(tmp_path / "earlier.json")
    (tmp_path / "weights.txt").write_text("1\n1\n8\n1\n1\n0.25\n")
    return release


def test_public_knowledge_arrives(write, earlier):
    study = load_study(write(KNOWING))
    assert study.facts == PublicFacts(features=6, rows=4000, entry_bound="learn", label="learn",
                                      rows_per_person=2)
    plan = study.plan()
    assert (plan.method, plan.loss, plan.residual_bound) == ("greedy", "huber", 0.5)
    assert plan.knowledge.include == (1, 4) and plan.knowledge.exclude == (3,)
    assert plan.knowledge.prior == ((2, 3), (5, -2))
    start = plan.knowledge.start
    assert start.features == tuple(earlier.features.tolist())
    assert start.coefficients == tuple(earlier.coefficients.tolist())
    assert start.intercept == earlier.intercept


def test_persons_are_read_a_line_for_each_row(write, earlier, tmp_path):
    study = load_study(write(KNOWING))
    (tmp_path / "persons.txt").write_text("anna\n ben \n17\nanna\n")
    assert study.persons() == ("anna", "ben", "17", "anna")
    (tmp_path / "persons.txt").write_text("anna\n\n17\n")
    with pytest.raises(InputError, match="persons.txt, line 2: the id is empty"):
        study.persons()
    (tmp_path / "persons.txt").unlink()
    with pytest.raises(InputError, match="persons.txt: No such file"):
        study.persons()
    assert load_study(write(KNOWING.replace('persons = "persons.txt"', ""))).persons() is None


def test_learn_is_a_word_not_a_file(write, earlier, tmp_path):
    (tmp_path / "learn").write_text("1\n" * 6)
    assert load_study(write(KNOWING)).facts.learned == ("entry_bound", "label")
    stated = load_study(write(KNOWING.replace('bound = "learn"', 'bound = "./learn"')))
    assert stated.facts.entry_bound.tolist() == 6 * [1.0]


@pytest.mark.parametrize(
    ("old", "new", "said"),
    [
        ("exclude = [3]", "exclude = 3", "exclude in \\[method\\] must be a list of feature ids, "
                                         "not 3"),
        ("weights.txt", "none.txt", "study.toml, \\[method\\]: .*none.txt: No such file"),
        ("earlier.json", "none.json", "study.toml, \\[method\\]: .*none.json: No such file"),
        ("earlier.json", "weights.txt", "study.toml, \\[method\\]: .*weights.txt: "),
        ('model = "model.json"', 'model = "earlier.json"',
         "model in \\[release\\] names the same file as start in \\[method\\]"),
        ('model = "model.json"', 'model = "persons.txt"',
         "model in \\[release\\] names the same file as persons in \\[data\\]"),
        ('label = "learn"', 'label = "guess"', r"study.toml, \[facts\]: label must be"),
    ],
)
def test_wrong_knowledge_is_named(write, earlier, old, new, said):
    assert old in KNOWING
    with pytest.raises(InputError, match=said):
        load_study(write(KNOWING.replace(old, new, 1)))


@pytest.mark.parametrize(
    ("old", "new", "said"),
    [
        ("exclude = [3]", "exclude = [4]", "feature 4 is in exclude and in include"),
        ("exclude = [3]", 'exclude = ["3"]', "a feature of exclude must be a whole number"),
        ("include = [4, 1]", "include = [6]", "a feature of include must be between 0 and 5"),
        ("residual_bound = 0.5", "residual_bound = 3", "residual_bound must lie between"),
        ("rows = 4000", "rows = 20", "20 rows are too few to learn a bound from"),
    ],
)
def test_knowledge_that_contradicts_itself_names_the_study(write, earlier, old, new, said):
    assert old in KNOWING
    path = write(KNOWING.replace(old, new, 1))
    with pytest.raises(InputError) as refused:
        load_study(path).plan()
    assert str(refused.value).startswith(f"{path}: {said}")


def test_a_rehearsal_is_not_started_from(write, earlier, tmp_path):
    rng = np.random.default_rng(1)
    rehearsal = earlier.plan.fit(rng.integers(0, 2, (400, 6)), rng.normal(size=400),
                                 rehearsal_seed=1)
    rehearsal.save(tmp_path / "earlier.json", rehearsal=True)
    with pytest.raises(InputError, match="rehearsal"):
        load_study(write(KNOWING)).plan()


# --- the budget book

def with_book(text: str, more: str = "") -> str:
    return text.replace("[facts]", f'book = "a.book"\n{more}\n[facts]')


@pytest.fixture
def book(tmp_path):
    book = BudgetBook.open(tmp_path / "a.book", Guarantee(1.0, 1e-6))
    book.add_split(Split("k", {"a": 0.5, "b": 0.5}))
    return book


def test_a_study_names_its_book(write, book):
    assert load_study(write(LEAST)).account() is None
    assert load_study(write(with_book(LEAST))).account().path == book.path


def test_a_study_names_its_part_of_the_data(write, book):
    text = with_book(LEAST, 'persons = "p.txt"\npart = ["k", "b"]')
    account = load_study(write(text)).account()
    assert (account.book.path, account.split.key, account.name) == (book.path, "k", "b")


@pytest.mark.parametrize(
    ("more", "said"),
    [
        ('part = ["k"]', r"part in \[data\] must be \[split, part\], two texts"),
        ('part = ["k", 1]', r"part in \[data\] must be \[split, part\], two texts"),
        ('part = "k"', r"part in \[data\] must be \[split, part\], not \"k\""),
        ('part = ["k", "a"]', r"part in \[data\] needs persons beside it"),
    ],
)
def test_a_part_that_is_none_is_refused(write, book, more, said):
    with pytest.raises(InputError, match=f"study.toml: {said}"):
        load_study(write(with_book(LEAST, more)))


def test_a_part_needs_a_book(write):
    text = LEAST.replace("[facts]", 'persons = "p.txt"\npart = ["k", "a"]\n[facts]')
    with pytest.raises(InputError, match=r"part in \[data\] needs book beside it"):
        load_study(write(text))


def test_a_book_that_is_not_there_names_the_study(write, tmp_path):
    path = write(with_book(LEAST))
    study = load_study(path)
    with pytest.raises(InputError) as refused:
        study.account()
    assert str(refused.value) == f"{path}: {tmp_path}/a.book: there is no such book"


def test_a_release_never_replaces_the_book(write, book):
    with pytest.raises(InputError, match=r"model in \[release\] names the same file as book"):
        load_study(write(with_book(LEAST.replace("model.json", "a.book"))))
