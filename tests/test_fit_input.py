"""What `plan.fit` refuses before anything is drawn, what it takes at the edges, and how it ends."""

from __future__ import annotations

import dataclasses
import os
import subprocess
import sys
import textwrap
from concurrent.futures import ThreadPoolExecutor

import numpy as np
import pytest
import scipy.sparse as sp
from test_table import FORMS, MALFORMED, freeze, malformed, sample, snapshot

from sordino import Guarantee, PublicFacts, plan_fit
from sordino import fit as fitting
from sordino._core.bits import Bits
from sordino.errors import InputError
from sordino.fit import open_rooms
from sordino.plan import MOST_STEPS, Course
from sordino.table import build_table

GUARANTEE = Guarantee(epsilon=2.0, delta=1e-6)


class Undrawn:
    """Stands in for Bits and fails the test when anything is asked of it."""

    def __init__(self, *arguments, **options):
        pass

    def __getattr__(self, name):
        pytest.fail(f"bits.{name} was used")


@pytest.fixture
def undrawn(monkeypatch):
    monkeypatch.setattr(fitting, "Bits", Undrawn)


def small_plan(guarantee=GUARANTEE, rows=6, **options):
    return plan_fit(PublicFacts(features=5, rows=rows), guarantee, steps=5, **options)


def random_data(n: int, d: int, per_row: int, seed: int = 1) -> tuple[sp.csr_array, np.ndarray]:
    """0/1 entries, and labels that follow the first two features."""
    rng = np.random.default_rng(seed)
    step = d // per_row
    columns = np.arange(per_row) * step + rng.integers(0, step, (n, per_row))
    X = sp.csr_array((np.ones(n * per_row), columns.ravel(), np.arange(n + 1) * per_row), (n, d))
    margin = 3 * X[:, [0]].toarray() - 3 * X[:, [step]].toarray()
    return X, (rng.random(n) < 1 / (1 + np.exp(-margin[:, 0]))).astype(int)


def content(release) -> tuple:
    return (
        release.features.tolist(), release.coefficients.tolist(), release.intercept,
        release.rehearsal,
    )


# --- refused before anything is drawn

@pytest.mark.filterwarnings("ignore:indptr array has non-integer dtype")
@pytest.mark.parametrize("what", MALFORMED)
def test_malformed_data(what, undrawn):
    X, y, pattern = malformed(what)
    kept = snapshot(X) if sp.issparse(X) and X.dtype != object else None
    with pytest.raises(InputError, match=pattern):
        small_plan().fit(X, y)
    assert kept is None or snapshot(X) == kept


@pytest.mark.parametrize(
    "options, error, pattern",
    [
        ({"persons": [0, 0, 1, 1, 2]}, InputError, "persons has shape"),
        ({"persons": [0, 0, 1, None, 2, 2]}, InputError, "id of row 3 is missing"),
        ({"book": "none.book"}, InputError, "none.book: there is no such book"),
        ({"book": 3}, InputError, "book must be a BudgetBook"),
        ({"threads": 257}, InputError, "threads must be between 1 and 256"),
        ({"threads": 0}, InputError, "threads must be between 1 and 256"),
        ({"threads": 1.0}, InputError, "threads must be a whole number"),
        ({"threads": True}, InputError, "threads must be a whole number"),
        ({"rehearsal_seed": -1}, InputError, "rehearsal_seed must be at least 0"),
        ({"rehearsal_seed": 1.5}, InputError, "rehearsal_seed must be a whole number"),
        ({"rehearsal_seed": "7"}, InputError, "rehearsal_seed must be a whole number"),
        ({"rehearsal_seed": True}, InputError, "rehearsal_seed must be a whole number"),
        ({"names": ["a", "b"]}, InputError, "there are 2 names for 5 features"),
        ({"names": []}, InputError, "there are 0 names for 5 features"),
        ({"names": list("abcdef")}, InputError, "there are 6 names for 5 features"),
        ({"names": "abcde"}, InputError, "names must be a list"),
        ({"names": set("abcde")}, InputError, "names must be a list"),
        ({"names": 5}, InputError, "names must be a list"),
    ],
)
def test_options(options, error, pattern, undrawn):
    with pytest.raises(error, match=pattern):
        small_plan().fit(*sample(), **options)


@pytest.mark.parametrize("stated", [1, 5, 7, 60])
def test_another_number_of_rows_than_is_public(stated, undrawn):
    plan = small_plan(Guarantee(2.0, 1e-6, "replace-one"), rows=stated)
    with pytest.raises(InputError, match=f'state {stated} rows, .*"replace-one".* has 6'):
        plan.fit(*sample())


@pytest.mark.parametrize("stated", [1, 5, 7, 600])
def test_the_number_of_rows_is_only_a_figure_under_add_remove(stated):
    assert len(small_plan(rows=stated).fit(*sample(), rehearsal_seed=1).features) >= 1


def test_far_more_rows_than_planned(monkeypatch):
    """A full column of entries as large as can be, at the finest resolution: scores of 2^28 a row.

    The plan leaves room for four times its rows; what must not happen is an overflow.
    """
    facts = PublicFacts(features=2, rows=100)
    plan = plan_fit(facts, Guarantee(1e6, 1e-6), steps=3)
    assert plan.resolution == plan.entry_levels == 2**14
    rows = 20_000
    X, y = np.c_[np.full(rows, 1.0), np.full(rows, 0.37)], np.arange(rows) % 2
    assert len(plan.fit(X[:400], y[:400], rehearsal_seed=1).features)
    monkeypatch.setattr(fitting, "Bits", Undrawn)
    with pytest.raises(InputError, match="20,000 rows, many more than the 100 the plan"):
        plan.fit(X, y)


# --- facts, guarantees and plans out of range

@pytest.mark.parametrize("epsilon", [0, -1.0, np.nan, np.inf, "1", None, True, 1j])
def test_epsilon_out_of_range(epsilon):
    with pytest.raises(InputError, match="epsilon"):
        Guarantee(epsilon=epsilon, delta=1e-6)


@pytest.mark.parametrize("delta", [-1e-9, 1, 1.5, np.nan, np.inf, "0", None, True])
def test_delta_out_of_range(delta):
    with pytest.raises(InputError, match="delta"):
        Guarantee(epsilon=1.0, delta=delta)


def test_delta_missing_where_an_intercept_needs_it():
    with pytest.raises(InputError, match="needs delta above 0"):
        small_plan(Guarantee(1.0), intercept=True)
    assert not small_plan(Guarantee(1.0)).intercept
    assert small_plan(Guarantee(1.0), intercept=False).first_variance == 0


@pytest.mark.parametrize(
    "options, pattern",
    [
        ({"steps": 0}, "steps must be between 1 and"),
        ({"steps": MOST_STEPS + 1}, "steps must be between 1 and"),
        ({"steps": 2.0}, "steps must be a whole number"),
        ({"steps": "5"}, "steps must be a whole number"),
        ({"radius": 0}, "radius must be"),
        ({"radius": -1.0}, "radius must be"),
        ({"radius": np.nan}, "radius must be"),
        ({"radius": np.inf}, "radius must be"),
        ({"radius": "3"}, "radius must be"),
        ({"schedule": "slow"}, "schedule must be 'paced' or 'shrinking'"),
        ({"schedule": ["paced"]}, "schedule must be 'paced' or 'shrinking'"),
        ({"loss": "hinge"}, 'loss must be "logistic"'),
        ({"loss": "squared"}, "needs a label range"),
        ({"method": "newton"}, "method must be 'frank-wolfe'"),
        ({"method": "greedy", "radius": 5}, "radius= belongs to the other method"),
        ({"picks": 5}, "picks= belongs to the other method"),
        ({"intercept": 1}, "intercept must be"),
        ({"include": [5]}, "a feature of include must be between"),
        ({"exclude": [-1]}, "a feature of exclude must be between"),
        ({"prior": [1]}, "5 weights, one per feature"),
        ({"start": [1]}, "start must be a release"),
    ],
)
def test_plan_options(options, pattern):
    with pytest.raises(InputError, match=pattern):
        plan_fit(PublicFacts(features=5, rows=6), GUARANTEE,
                 **{"method": "frank-wolfe"} | options)


@pytest.mark.parametrize("neighbours", ["add", "replace", "", None, 1])
def test_unknown_neighbours(neighbours):
    with pytest.raises(InputError, match="neighbours must be"):
        Guarantee(1.0, 1e-6, neighbours)


@pytest.mark.parametrize(
    "options, pattern",
    [
        ({"features": 0}, "features must be between 1 and 2,147,483,647"),
        ({"features": 2**31}, "features must be between 1 and 2,147,483,647"),
        ({"features": 5.0}, "features must be a whole number"),
        ({"rows": 0}, "rows must be"),
        ({"rows": "6"}, "rows must be a whole number"),
        ({"entry_bound": 0}, "entry_bound must"),
        ({"entry_bound": -1.0}, "entry_bound must"),
        ({"entry_bound": np.nan}, "entry_bound must"),
        ({"entry_bound": np.inf}, "entry_bound must"),
        ({"entry_bound": "1"}, "entry_bound"),
        ({"entry_bound": [1.0, 2.0]}, r"entry_bound has shape \(2,\)"),
        ({"entry_bound": [1, 1, 0, 1, 1]}, "entry_bound of feature 2"),
        ({"entry_bound": [1, 1, 1, 1, np.nan]}, "entry_bound of feature 4"),
        ({"label": "text"}, 'label must be "binary"'),
        ({"label": (1.0, 0.0)}, "low below high"),
        ({"rows_per_person": 2**21}, "rows_per_person must be between"),
    ],
)
def test_facts_out_of_range(options, pattern):
    with pytest.raises(InputError, match=pattern):
        PublicFacts(**{"features": 5, "rows": 6, **options})


# --- extreme figures work, or are refused by name

def fitted_or_refused(facts: dict, guarantee: dict, X=None, **options):
    """A release with finite numbers within its radius, or None if an InputError came first."""
    if X is None:
        X, _ = sample()
    try:
        facts = PublicFacts(**{"features": 5, "rows": 6, **facts})
        plan = plan_fit(facts, Guarantee(**guarantee), **{"steps": 5, **options})
        release = plan.fit(X, sample()[1], rehearsal_seed=3)
    except InputError:
        return None
    assert np.isfinite(release.coefficients).all() and np.isfinite(release.intercept)
    reached = (abs(release.coefficients) * facts.bounds_of(release.features)).sum()
    assert reached <= plan.radius * (1 + 1e-9)
    return release


@pytest.mark.filterwarnings("error::RuntimeWarning")
@pytest.mark.parametrize("per_feature", [False, True])
@pytest.mark.parametrize(
    "bound", [5e-324, 1e-320, 1e-308, 1e-304, 1e-200, 1e-30, 1e-3, 1e30, 1e200, 1e300, 1e308]
)
def test_extreme_entry_bounds(bound, per_feature):
    """Entries at their bound, at 0 although stored, and far past it."""
    X, _ = sample()
    X.data = X.data * bound
    X.data[:2] = 0.0, 1e300
    given_bound = [1.0, bound, bound, 2.0, bound] if per_feature else bound
    release = fitted_or_refused({"entry_bound": given_bound}, {"epsilon": 2.0, "delta": 1e-6}, X)
    assert release is not None or not 1e-30 <= bound <= 1e30


def test_the_unit_of_the_data_does_not_matter():
    """Entries and bounds scaled alike by a power of two: the same picks, coefficients to match."""
    X, y = random_data(200, 50, 5)
    guarantee = Guarantee(5.0, 1e-6)
    fits = {}
    for scale in (1.0, 2.0**-80, 2.0**90):
        facts = PublicFacts(features=50, rows=200, entry_bound=scale)
        fits[scale] = plan_fit(facts, guarantee, steps=20).fit(X * scale, y, rehearsal_seed=4)
    for scale, release in fits.items():
        assert (release.features == fits[1.0].features).all()
        assert (release.coefficients * scale == fits[1.0].coefficients).all()


@pytest.mark.filterwarnings("error::RuntimeWarning")
@pytest.mark.parametrize("schedule", ["paced", "shrinking"])
@pytest.mark.parametrize("radius", [5e-324, 1e-300, 1e-9, 1e3, 1e12, 1e100, 1e303, 1e305, 1e308])
def test_extreme_radii(radius, schedule):
    """From 1e12 on every margin that moves is past the end of the table: the same picks at all."""
    def fitted(radius):
        guarantee = {"epsilon": 1e4, "delta": 1e-6}
        return fitted_or_refused({}, guarantee, radius=radius, schedule=schedule)

    release = fitted(radius)
    assert release is not None or not 1e-9 <= radius <= 1e12
    if release is not None and radius > 1e12:
        assert release.features.tolist() == fitted(1e12).features.tolist()
        assert release.intercept == fitted(1e12).intercept


@pytest.mark.filterwarnings("error::RuntimeWarning")
@pytest.mark.parametrize("delta", [0.0, 1e-300, 1e-6, 0.999])
@pytest.mark.parametrize("epsilon", [5e-324, 1e-12, 1e-9, 1e-6, 1e-3, 1e3, 1e6, 1e9, 1e100, 1e308])
def test_extreme_guarantees(epsilon, delta):
    X, _ = sample()
    X.data *= np.resize([1.0, 0.37], 12)        # entries that need 16 bits
    release = fitted_or_refused({}, {"epsilon": epsilon, "delta": delta}, X)
    assert release is not None or not 1e-6 <= epsilon <= 1e6


@pytest.mark.parametrize("delta", [0.0, 1e-6])
@pytest.mark.parametrize("epsilon", [1e-9, 1e-6, 1e6, 1e9])
@pytest.mark.parametrize("rows", [1, 10**6, 2**31 - 1])
def test_a_plan_that_is_made_can_be_run(rows, epsilon, delta):
    """Whether scores and rate fit 64 bits is said when the plan is made: it depends on no entry."""
    try:
        plan = small_plan(Guarantee(epsilon, delta), rows=rows)
    except InputError as refusal:
        assert "64 bits" in str(refusal) or "epsilon" in str(refusal)
        return
    X, y = sample()
    for entries in ([1.0], [1.0, 0.37]):        # nothing stored; 16 bits stored
        X.data = np.resize(entries, 12)
        assert plan.fit(X, y, rehearsal_seed=1).plan is plan


@pytest.mark.parametrize("schedule", ["paced", "shrinking"])
@pytest.mark.parametrize("delta", [0.0, 1e-6])
@pytest.mark.parametrize("label", [0, 1, -1])
@pytest.mark.parametrize("entry", [0.0, 1.0, -0.3])
def test_one_row_and_one_feature(schedule, delta, label, entry):
    facts = PublicFacts(features=1, rows=1)
    plan = plan_fit(facts, Guarantee(1.0, delta), steps=4, schedule=schedule)
    release = plan.fit(np.array([[entry]]), [label], rehearsal_seed=1)
    assert set(release.features.tolist()) <= {0} and np.isfinite(release.coefficients).all()


def test_rows_without_entries():
    plan = small_plan(rows=6)
    for X in (sp.csr_array((6, 5)), np.zeros((6, 5)), sp.coo_array((6, 5))):
        release = plan.fit(X, [0, 1, 1, 0, 1, 0], rehearsal_seed=2)
        assert (release.features < 5).all()


def test_three_million_features_and_few_entries():
    d = 3_000_000
    X = sp.csr_array((np.ones(4), np.array([0, d - 1, 5, d - 1]), [0, 2, 4, 4]), shape=(3, d))
    plan = plan_fit(PublicFacts(features=d, rows=3), GUARANTEE, steps=10)
    release = plan.fit(X, [0, 1, 1], rehearsal_seed=1)
    assert (np.diff(release.features) > 0).all() and release.features[-1] < d
    assert len(release.features) > 5, "with noise alone, features hardly repeat"


# --- the same fit from every form of the data, which is left alone

@pytest.mark.parametrize("form", ["csr_matrix", "csc_array", "coo_array", "dense", "lists"])
def test_every_form_of_the_data_gives_the_same_release(form):
    X, y = random_data(100, 40, 5)
    plan = plan_fit(PublicFacts(features=40, rows=100), GUARANTEE, steps=10)
    expected = content(plan.fit(X, y, rehearsal_seed=5))
    assert content(plan.fit(FORMS[form](X), y.tolist(), rehearsal_seed=5)) == expected
    assert content(plan.fit(FORMS[form](X), 2 * y - 1, rehearsal_seed=5)) == expected


@pytest.mark.parametrize("ids", [np.int32, np.int64])
@pytest.mark.parametrize("form", ["csr_array", "csc_array", "coo_array", "dense"])
def test_a_fit_leaves_the_callers_arrays_alone(form, ids):
    X, y = random_data(100, 40, 5)
    X.indices, X.indptr = X.indices.astype(ids), X.indptr.astype(ids)
    X, y = freeze(FORMS[form](X)), y.astype(np.int8)
    y.flags.writeable = False
    before = snapshot(X), y.tobytes()
    plan_fit(PublicFacts(features=40, rows=100), GUARANTEE, steps=10).fit(X, y, rehearsal_seed=5)
    assert (snapshot(X), y.tobytes()) == before


def test_names_of_the_chosen_features_are_kept():
    X, y = random_data(100, 40, 5)
    plan = plan_fit(PublicFacts(features=40, rows=100), GUARANTEE, steps=10)
    names = [f"term {j}" for j in range(40)]
    for given_names in (names, tuple(names), np.array(names)):
        release = plan.fit(X, y, rehearsal_seed=5, names=given_names)
        assert list(release.names) == [f"term {j}" for j in release.features]


# --- row-locality

@pytest.mark.parametrize("schedule", ["paced", "shrinking"])
def test_a_row_does_not_depend_on_what_other_rows_hold(schedule):
    """One more row, whose entries make the table store all others differently.

    With the entries alike, 3 of a bound of 10, every entry is 4915 steps; the further row holds 1.
    Steps and radius are such that margins fall on whole fixed-point numbers, where the last bit of
    a product decides.
    """
    n, d, steps = 1000, 10, 49
    rng = np.random.default_rng(2)
    X = 3.0 * (rng.random((n, d)) < 0.5)
    y = rng.integers(0, 2, n)
    facts = PublicFacts(features=d, rows=n, entry_bound=10.0)
    plan = plan_fit(facts, GUARANTEE, steps=steps, radius=float(steps), schedule=schedule)
    plan = dataclasses.replace(plan, resolution=2**14)
    sides = []
    for more in (0, 1):
        data = np.vstack([X, np.eye(more, d)]), np.r_[y, np.zeros(more, dtype=int)]
        table = build_table(*data, facts, plan.entry_levels)
        rows, _ = open_rooms(plan, table, Bits(3))
        rows.place(0)
        sides.append(rows)
    alone, joined = sides
    moves = zip(rng.integers(0, d, steps).tolist(), Course.of(plan).weight.tolist())
    for feature, weight in moves:
        alone.move(feature, weight)
        joined.move(feature, weight)
        assert (alone.q == joined.q[:n]).all()


# --- random bits

@pytest.fixture(scope="module")
def noisy():
    """A plan that sees nothing much, over many features: picks are close to uniform."""
    X, y = random_data(300, 5_000, 10)
    plan = plan_fit(PublicFacts(features=5_000, rows=300), Guarantee(0.1, 1e-6), steps=40)
    return plan, X, y


def test_a_rehearsal_repeats_with_its_seed(noisy):
    plan, X, y = noisy
    fits = [content(plan.fit(X, y, rehearsal_seed=seed)) for seed in (7, 7, np.int64(7), 8, 2**80)]
    assert fits[0] == fits[1] == fits[2]
    assert len({str(fit) for fit in fits}) == 3
    assert all(fit[-1] for fit in fits), "marked as rehearsals"


def test_rehearsals_side_by_side_in_threads_are_the_same(noisy):
    plan, X, y = noisy
    seeds = [1, 2, 3, 1, 2, 3]
    with ThreadPoolExecutor(3) as pool:
        fits = list(pool.map(lambda seed: content(plan.fit(X, y, rehearsal_seed=seed)), seeds))
    assert fits[:3] == fits[3:] == [content(plan.fit(X, y, rehearsal_seed=s)) for s in (1, 2, 3)]


def test_two_fits_never_draw_the_same_bits(noisy):
    """40 picks of 10,000 signed features, none much likelier than another: alike with probability
    far below 1e-100."""
    plan, X, y = noisy
    first, second = plan.fit(X, y), plan.fit(X, y)
    assert not first.rehearsal and not second.rehearsal
    assert first.features.tolist() != second.features.tolist()
    assert first.intercept != second.intercept


def test_a_forked_child_draws_bits_of_its_own(noisy):
    plan, X, y = noisy
    read, write = os.pipe()
    child = os.fork()
    if child == 0:
        try:
            os.write(write, plan.fit(X, y).features.tobytes())
        finally:
            os._exit(0)
    os.close(write)
    with os.fdopen(read, "rb") as pipe:
        of_child = pipe.read()
    os.waitpid(child, 0)
    assert of_child and of_child != plan.fit(X, y).features.tobytes()


def test_a_source_that_fails_ends_the_fit(noisy, monkeypatch):
    plan, X, y = noisy

    def broken(n_bytes):
        raise OSError("no entropy")

    monkeypatch.setattr(fitting, "Bits", lambda seed: Bits(refill=broken))
    with pytest.raises(OSError):
        plan.fit(X, y)


def test_progress_runs_from_nothing_to_all(noisy):
    plan, X, y = noisy
    seen = []
    plan.fit(X, y, rehearsal_seed=1, progress=lambda fraction, text: seen.append((fraction, text)))
    fractions = [fraction for fraction, _ in seen]
    assert fractions == sorted(fractions) and fractions[-1] == 1
    assert [text for _, text in seen][0] != seen[-1][1] == "fitting"


# --- Ctrl-C

INTERRUPTED = """
    import os, signal, threading

    signal.signal(signal.SIGINT, signal.default_int_handler)    # background jobs may ignore it
    import numpy as np
    import scipy.sparse as sp
    from sordino import Guarantee, PublicFacts, plan_fit, table

    n, d, k = 20_000, 2_000, 40
    rng = np.random.default_rng(0)
    columns = np.arange(k) * (d // k) + rng.integers(0, d // k, (n, k))
    X = sp.csr_array((np.ones(n * k), columns.ravel(), np.arange(n + 1) * k), shape=(n, d))
    y = rng.integers(0, 2, n)
    facts, guarantee = PublicFacts(features=d, rows=n), Guarantee(50.0, 1e-6)
    long = plan_fit(facts, guarantee, steps=100_000, schedule="shrinking")
    short = plan_fit(facts, guarantee, steps=20, schedule="shrinking")
    begun = threading.Event()

    def interrupt():
        begun.wait()
        os.kill(os.getpid(), signal.SIGINT)

    def progress(fraction, text):
        if text == PHASE and fraction > LEAST:
            begun.set()

    SETUP
    threading.Thread(target=interrupt, daemon=True).start()
    outcome = None
    try:
        outcome = long.fit(DATA, y, progress=progress)
    except KeyboardInterrupt:
        print("interrupted", outcome)
    RESET
    first = short.fit(X, y, rehearsal_seed=1)
    second = short.fit(X, y, rehearsal_seed=1)
    print((first.coefficients == second.coefficients).all(), len(first.features) > 0)
"""

# In the middle of the reading each slice is one row; the conversion is held up for good.
WHEN = {
    "reading": {
        "PHASE": '"checking the table"', "LEAST": "0.01", "DATA": "X",
        "SETUP": "table.SLICE = 1", "RESET": "table.SLICE = 2**21",
    },
    "converting": {
        "PHASE": '""', "LEAST": "0", "DATA": "X.tocsc()",
        "SETUP": "table._converted = lambda X: (begun.set(), threading.Event().wait())",
        "RESET": "",
    },
    "fitting": {
        "PHASE": '"fitting"', "LEAST": "0", "DATA": "X", "SETUP": "", "RESET": "",
    },
}


@pytest.mark.parametrize("when", WHEN)
def test_an_interrupted_fit_returns_nothing_and_the_next_one_works(when):
    """In a process of its own, as the signal is real. The long fit takes some seconds if it is let
    run, against the instant that a signal takes."""
    script = textwrap.dedent(INTERRUPTED)
    for word, text in WHEN[when].items():
        script = script.replace(word, text)
    done = subprocess.run([sys.executable, "-c", script], capture_output=True, text=True,
                          timeout=120)
    assert done.stdout.splitlines() == ["interrupted None", "True True"], done.stderr
