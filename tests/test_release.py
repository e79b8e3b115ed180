"""The release: predictions, the file, and everything the file is refused for."""

from __future__ import annotations

import copy
import hashlib
import json
import os
import stat

import numpy as np
import pytest
import scipy.sparse as sp
from scipy.special import expit

import sordino
from sordino import InputError, load_release
from sordino.release import Release, _as_text, _checksum

N_ROWS, N_FEATURES = 300, 40


@pytest.fixture(scope="module")
def table():
    rng = np.random.default_rng(7)
    X = sp.random_array((N_ROWS, N_FEATURES), density=0.2, format="csr", rng=rng)
    y = (rng.random(N_ROWS) < expit(4 * X[:, [3]].toarray().ravel() - 1)).astype(float)
    return X, y


@pytest.fixture(scope="module")
def plan():
    facts = sordino.PublicFacts(features=N_FEATURES, rows=N_ROWS)
    return sordino.plan_fit(facts, sordino.Guarantee(epsilon=8.0, delta=1e-6), steps=12)


@pytest.fixture(scope="module")
def release(plan, table):
    return plan.fit(*table, names=[f"word {j}" for j in range(N_FEATURES)])


@pytest.fixture(scope="module")
def rehearsal(plan, table):
    return plan.fit(*table, rehearsal_seed=5)


@pytest.fixture
def saved(release, tmp_path):
    path = tmp_path / "model.json"
    release.save(path)
    return path


def edited(saved, change) -> InputError:
    """What loading says after `change(content)`, the checksum made to fit."""
    page = json.loads(saved.read_text())
    change(page["content"])
    page["sha256"] = _checksum(page["content"])
    saved.write_text(_as_text(page), encoding="utf-8")
    with pytest.raises(InputError) as caught:
        load_release(saved)
    return str(caught.value)


# --- predictions


def test_predictions_are_expit_of_the_linear_predictor(release, table):
    """Reference: scipy.special.expit over a dense product in numpy."""
    X, _ = table
    w = np.zeros(N_FEATURES)
    w[release.features] = release.coefficients
    expected = X.toarray() @ w + release.intercept
    for form in (X, X.tocsc(), X.tocoo(), sp.csr_matrix(X), X.toarray(), X.toarray().astype("f4")):
        tolerance = 1e-6 if form.dtype == np.float32 else 1e-13
        np.testing.assert_allclose(release.margin(form), expected, atol=tolerance)
        np.testing.assert_allclose(release.predict_probability(form), expit(expected),
                                   atol=tolerance)
    labels = release.predict(X)
    assert labels.dtype == np.int64 and (labels == (expected > 0)).all()


@pytest.mark.parametrize("wrong", [np.ones((3, N_FEATURES + 1)), np.ones(N_FEATURES),
                                   np.full((2, N_FEATURES), "a"), sp.csr_array((2, 3))])
def test_tables_of_another_shape_or_kind_are_refused(release, wrong):
    with pytest.raises(InputError, match="40 columns"):
        release.margin(wrong)


@pytest.mark.parametrize("dtype", [bool, np.int8, np.uint64, np.float32, np.float64])
@pytest.mark.parametrize("form", ["csr", "csc", "coo", "bsr", "dia", "lil", "dok", "dense"])
def test_every_format_and_number_type_gives_the_same_margins(release, form, dtype):
    """Reference: a dense product in numpy."""
    least = 0 if dtype == np.uint64 else -2
    X = np.random.default_rng(3).integers(least, 3, (25, N_FEATURES)).astype(dtype)
    w = np.zeros(N_FEATURES)
    w[release.features] = release.coefficients
    given = X if form == "dense" else sp.csr_array(X).asformat(form)
    margin = release.margin(given)
    assert margin.dtype == np.float64
    np.testing.assert_allclose(margin, X.astype(np.float64) @ w + release.intercept, rtol=1e-12)


def test_margins_in_slices_are_margins_of_the_whole(release, table, monkeypatch):
    X, _ = table
    whole = release.margin(X)
    read_only = sp.csr_array(X)
    for values in (read_only.data, read_only.indices, read_only.indptr):
        values.flags.writeable = False
    for entries in (1, 7, 100):
        monkeypatch.setattr("sordino.release.SLICE", entries)
        assert release.margin(read_only).tobytes() == whole.tobytes()
    assert release.margin(X[:0]).shape == (0,)


def test_entries_are_used_unclipped(release):
    X = np.zeros((1, N_FEATURES))
    X[0, release.features[0]] = 1e6
    expected = 1e6 * release.coefficients[0] + release.intercept
    np.testing.assert_allclose(release.margin(X), [expected], rtol=1e-15)


@pytest.mark.parametrize("value", [np.nan, np.inf])
def test_entries_that_are_not_finite_are_named(release, value):
    X = np.zeros((3, N_FEATURES))
    X[1, release.features[0]] = value
    for given in (X, sp.csr_array(X), sp.csc_array(X)):
        with pytest.raises(InputError, match="row 1 of X"):
            release.margin(given)


@pytest.mark.parametrize("form", ["csr", "csc", "coo", "bsr"])
def test_ids_out_of_range_are_refused_not_followed(release, form):
    """scipy's products trust the ids: without a check, this reads outside the arrays."""
    X = sp.csr_array(np.eye(4, N_FEATURES)).asformat(form)
    (X.coords[1] if form == "coo" else X.indices)[-1] = 2**30
    with pytest.raises(InputError, match="malformed"):
        release.margin(X)


def test_coefficients_stay_within_the_radius_and_are_read_only(release, plan):
    assert abs(release.coefficients).sum() <= plan.radius * (1 + 1e-12)
    assert (np.diff(release.features) > 0).all()
    assert release.names == tuple(f"word {j}" for j in release.features)
    for values in (release.features, release.coefficients):
        with pytest.raises(ValueError, match="read-only"):
            values[:1] = 0


def test_coefficients_are_in_the_units_of_the_data(table):
    """A table in other units, with its bounds, gives the same picks and rescaled coefficients."""
    X, y = table
    scales = np.linspace(0.5, 4, N_FEATURES)
    guarantee = sordino.Guarantee(epsilon=8.0, delta=1e-6)
    fits = []
    for factor in (np.ones(N_FEATURES), scales):
        facts = sordino.PublicFacts(features=N_FEATURES, rows=N_ROWS, entry_bound=factor)
        plan = sordino.plan_fit(facts, guarantee, steps=12)
        fits.append(plan.fit(sp.csr_array(X * factor), y, rehearsal_seed=1))
    assert fits[0].features.tolist() == fits[1].features.tolist()
    np.testing.assert_allclose(fits[1].coefficients * scales[fits[0].features],
                               fits[0].coefficients, rtol=1e-12)


# --- the file


def test_a_saved_release_comes_back_bit_for_bit(release, saved):
    back = load_release(saved)
    assert back.features.tobytes() == release.features.tobytes()
    assert back.coefficients.tobytes() == release.coefficients.tobytes()
    assert back.intercept == release.intercept and back.names == release.names
    assert back.plan == release.plan and back.guarantee == release.guarantee
    assert back.rehearsal is False and back.profile is None
    again = saved.with_name("again.json")
    back.save(again)
    assert again.read_bytes() == saved.read_bytes()


def test_the_checksum_is_sha256_of_the_canonical_content(saved):
    page = json.loads(saved.read_text())
    canonical = json.dumps(page["content"], sort_keys=True, separators=(",", ":"))
    assert page["sha256"] == hashlib.sha256(canonical.encode()).hexdigest()


def test_nothing_that_depends_on_the_data_beyond_the_model_is_saved(saved):
    content = json.loads(saved.read_text())["content"]
    assert set(content) == {"rehearsal", "intercept", "features", "names", "coefficients",
                            "deviations", "intercept_deviation", "learned", "persons_bounded", "spending", "evaluations", "plan"}


def test_a_file_cut_short_anywhere_is_refused(saved):
    whole = saved.read_bytes()
    for length in range(0, len(whole), 17):
        saved.write_bytes(whole[:length])
        with pytest.raises(InputError, match="model.json: "):
            load_release(saved)


def test_a_file_with_any_byte_altered_is_refused(saved):
    whole = saved.read_bytes()
    for at in range(0, len(whole), 5):
        saved.write_bytes(whole[:at] + bytes([whole[at] ^ 1]) + whole[at + 1:])
        with pytest.raises(InputError, match="model.json: "):
            load_release(saved)


@pytest.mark.parametrize(
    ("change", "named"),
    [
        (lambda c: c.update(extra=1), "unknown key 'extra'"),
        (lambda c: c.pop("intercept"), "lacks the key 'intercept'"),
        (lambda c: c.update(rehearsal=0), "rehearsal must be true or false"),
        (lambda c: c.update(intercept="0"), "intercept must be a finite number"),
        (lambda c: c.update(intercept=True), "intercept must be a finite number"),
        (lambda c: c["features"].reverse(), "features must ascend"),
        (lambda c: c["features"].__setitem__(0, -1), "between 0 and 39"),
        (lambda c: c["features"].__setitem__(-1, 40), "between 0 and 39"),
        (lambda c: c["features"].__setitem__(0, True), "list of whole numbers"),
        (lambda c: c["features"].__setitem__(0, 0.5), "list of whole numbers"),
        (lambda c: c.update(features=list(range(13))), "more than the plan's 12"),
        (lambda c: c["coefficients"].pop(), "one number per feature"),
        (lambda c: c["coefficients"].__setitem__(0, None), "a coefficient must be a finite number"),
        (lambda c: c["coefficients"].__setitem__(0, 1e6), "beyond the plan's 12"),
        (lambda c: c["names"].pop(), "names for"),
        (lambda c: c["names"].__setitem__(0, 3), "names must be a list of texts"),
        (lambda c: c.update(plan=None), "plan must be an object"),
        (lambda c: c["plan"].pop("steps"), "plan lacks the key 'steps'"),
        (lambda c: c["plan"].update(surprise=1), "unknown key 'surprise'"),
        (lambda c: c["plan"].update(steps=0), "steps must be between"),
        (lambda c: c["plan"].update(steps=12.0), "steps must be a whole number"),
        (lambda c: c["plan"].update(method="least-angle"), "method must be"),
        (lambda c: c["plan"].update(schedule="slow"), "schedule must be"),
        (lambda c: c["plan"].update(loss="cubic"), "loss must be"),
        (lambda c: c["plan"].update(route=7), "route must be"),
        (lambda c: c["plan"].update(radius=-1.0), "radius must be"),
        (lambda c: c["plan"].update(radius=1e-9), "beyond the plan"),
        (lambda c: c["plan"].update(resolution=3), "power of two"),
        (lambda c: c["plan"].update(entry_levels=2**40), "entry_levels must be between"),
        (lambda c: c["plan"].update(shift=0), "shift must be between"),
        (lambda c: c["plan"].update(intercept="yes"), "intercept must be true or false"),
        (lambda c: c["plan"].update(intercept_looks=[0, 12]), "intercept_looks do not fit"),
        (lambda c: c["plan"].update(first_variance=0), "first_variance must be"),
        (lambda c: c["plan"].update(first_variance=1), "more than its guarantee"),
        (lambda c: c["plan"].update(shift=c["plan"]["shift"] - 2), "more than its guarantee"),
        (lambda c: c["plan"]["guarantee"].update(epsilon=0.5), "more than its guarantee"),
        (lambda c: c["plan"]["guarantee"].update(delta=2), "delta must be"),
        (lambda c: c["plan"]["guarantee"].pop("neighbours"), "lacks the key 'neighbours'"),
        (lambda c: c["plan"]["facts"].update(features=0), "features must be"),
        (lambda c: c["plan"]["facts"].update(rows=10**18), "rows must be between"),
        (lambda c: c["plan"]["facts"].update(entry_bound=[[1.0, 10**18]]), "a run of bounds must"),
        (lambda c: c["plan"]["facts"].update(entry_bound=[[1.0, 39]]), "covers 39 features"),
        (lambda c: c["plan"]["facts"].update(entry_bound=[[1.0]]), "list of [bound, how many"),
        (lambda c: c["plan"]["facts"].update(entry_bound=[[-1.0, 40]]), "entry_bound must be"),
        (lambda c: c["plan"].update(radius=10**400), ""),
        (lambda c: c.update(intercept=10**400), ""),
        (lambda c: c["coefficients"].__setitem__(0, 10**400), ""),
        (lambda c: c["plan"].update(intercept=False, intercept_looks=[], first_variance=0,
                                    rows_variance=0),
         "an intercept, which the plan has not"),
        (lambda c: c["plan"]["facts"].update(rows_per_person=2), "more than its guarantee"),
        (lambda c: c["plan"]["knowledge"].update(exclude=[c["features"][0]]), "one that the plan excludes"),
        (lambda c: c["plan"]["knowledge"].update(exclude=[3, 2]), "must hold ids that ascend"),
        (lambda c: c["plan"]["knowledge"].update(exclude=None), "exclude must be a list"),
    ],
)
def test_content_that_could_not_have_been_saved_is_refused(saved, change, named):
    assert named in edited(saved, change)


@pytest.mark.parametrize(
    ("text", "named"),
    [
        ("", "not whole JSON"),
        ("[]", "must be an object"),
        ("{}", "lacks the key 'kind'"),
        ('{"kind": 1, "kind": 2}', "given twice"),
        ('{"kind": NaN}', "NaN is not a finite number"),
        ('{"kind": "x", "version": 1, "sha256": "", "content": 0}', "not a release file"),
        ('{"kind": "sordino release", "version": 2, "sha256": "", "content": 0}', "version 2"),
        ('{"kind": "sordino release", "version": true, "sha256": "", "content": 0}', "version True"),
        ('{"kind": "sordino release", "version": 1, "sha256": "0", "content": 0}', "checksum"),
        ("[" * 100_000, "not whole JSON"),
        ("\udcff", "not text in UTF-8"),
    ],
)
def test_other_files_are_refused(tmp_path, text, named):
    path = tmp_path / "other.json"
    path.write_bytes(text.encode("utf-8", "surrogateescape"))
    with pytest.raises(InputError, match=named):
        load_release(path)


def test_missing_and_oversized_files_are_refused(tmp_path, monkeypatch):
    with pytest.raises(InputError, match="none.json: No such file"):
        load_release(tmp_path / "none.json")
    monkeypatch.setattr("sordino.release.MOST_BYTES", 10)
    (tmp_path / "big.json").write_text(" " * 11)
    with pytest.raises(InputError, match="larger than"):
        load_release(tmp_path / "big.json")


def test_a_save_that_fails_leaves_the_old_file_and_no_litter(release, saved, monkeypatch):
    before = saved.read_bytes()

    def full(*_):
        raise OSError(28, "No space left on device")

    monkeypatch.setattr("os.fsync", full)
    with pytest.raises(InputError, match="cannot be written: No space left"):
        release.save(saved)
    assert saved.read_bytes() == before and os.listdir(saved.parent) == ["model.json"]
    with pytest.raises(InputError, match="cannot be written"):
        release.save(saved.parent / "no" / "such" / "folder.json")


def test_a_saved_file_has_the_usual_permissions(saved):
    ordinary = saved.with_name("ordinary")
    ordinary.touch()
    assert stat.S_IMODE(saved.stat().st_mode) == stat.S_IMODE(ordinary.stat().st_mode)


# --- rehearsals


def test_a_rehearsal_is_marked_wherever_it_shows_up(rehearsal, tmp_path):
    path = tmp_path / "rehearsal.json"
    with pytest.raises(InputError, match="rehearsal"):
        rehearsal.save(path)
    assert not path.exists()
    rehearsal.save(path, rehearsal=True)
    assert json.loads(path.read_text())["content"]["rehearsal"] is True
    back = load_release(path)
    assert back.rehearsal is True
    for text in (repr(back), str(back), back.statement()[:500]):
        assert "rehearsal" in text.lower()
    with pytest.raises(InputError, match="rehearsal"):
        back.save(path)


def test_a_private_release_is_not_marked(release):
    assert "rehearsal" not in (repr(release) + str(release)).lower()


def test_a_release_reads_well(release, plan, table):
    text = str(release)
    assert f"{len(release.features)} of 40 features" in text
    assert f"{release.intercept:+.4f}" in text
    largest = np.argmax(abs(release.coefficients))
    assert f"{release.coefficients[largest]:+.4f}" in text and release.names[largest] in text
    empty = Release(plan, np.array([]), np.array([]), 0.0, False)
    assert "No feature was chosen." in str(empty)
    assert (empty.margin(table[0]) == 0).all()


def test_names_cannot_steer_a_terminal(plan):
    names = ("\x1b[2Jgone", "two\nlines")
    shown = str(Release(plan, np.array([1, 2]), np.array([1.0, 2.0]), 0.0, False, names))
    assert "\x1b" not in shown and "two?lines" in shown and "?[2Jgone" in shown


def test_the_profile_is_for_inside_only(release):
    phases = list(release.profile.seconds)
    assert phases == [
        "build", "orient", "first scores", "picks", "row updates", "heap", "corrections",
    ]
    assert release.profile.counters["picks"] == 12
    assert "inside only" in str(release.profile)


def test_rehearsals_repeat_and_private_fits_do_not(plan, table):
    first, again = (plan.fit(*table, rehearsal_seed=9) for _ in range(2))
    assert copy.deepcopy(first._content()) == again._content()
    other = plan.fit(*table, rehearsal_seed=10)
    assert other._content() != first._content()


# --- features by decision, and models to start from


@pytest.fixture(scope="module", params=["greedy", "frank-wolfe"])
def knowing(request, table):
    facts = sordino.PublicFacts(features=N_FEATURES, rows=N_ROWS)
    size = {"picks": 3} if request.param == "greedy" else {"steps": 4, "radius": 2.0}
    plan = sordino.plan_fit(facts, sordino.Guarantee(8.0, 1e-6), method=request.param, **size,
                            include=[1, 2], exclude=[5], start={7: 2.0, 8: -0.5, None: 0.25})
    return plan.fit(*table)


@pytest.fixture
def known(knowing, tmp_path):
    path = tmp_path / "model.json"
    knowing.save(path)
    return path


def test_a_release_that_knew_more_comes_back(knowing, known):
    back = load_release(known)
    assert back._content() == knowing._content() and back.plan == knowing.plan
    assert {1, 2, 7, 8} <= set(back.features.tolist())
    size = len(back.features) - 4
    assert size <= knowing.plan.picks


def whole(content, more: int):
    """The features of the model from the start and so many others."""
    others = [j for j in range(9, N_FEATURES)][:more]
    content["features"] = sorted([1, 2, 7, 8] + others)
    content["coefficients"] = [0.0] * (4 + more)


@pytest.mark.parametrize(
    ("change", "named"),
    [
        (lambda c: whole(c, 5), "5 features picked, more than the plan's"),
        (lambda c: c.update(features=[5], coefficients=[0.1]), "feature 5 is one that the plan "
                                                               "excludes"),
        (lambda c: (whole(c, 0), c.update(coefficients=[0.0, 0.0, 1e6, 0.0])), "beyond the plan's"),
        (lambda c: c["plan"]["knowledge"]["start"].update(coefficients=None), "start must be"),
        (lambda c: c["plan"]["knowledge"].update(include=[1, 2, 5]), "in exclude and in include"),
        (lambda c: c["plan"]["knowledge"].update(include=[]), ""),
        (lambda c: c["plan"]["knowledge"].pop("prior"), "knowledge lacks the key 'prior'"),
    ],
)
def test_knowledge_that_was_altered_is_refused(known, change, named):
    assert named in edited(known, change)


def test_coefficients_may_reach_as_far_as_plan_and_start_allow(knowing, known):
    """Moves reach the radius and what is corrected 32 of margin each, on top of the start."""
    plan = knowing.plan
    own = 32 * 7 if plan.method == "greedy" else 2 + 32 * 2
    for reach, fits in ((own + 2.5, True), (own + 2.51, False)):
        page = json.loads(known.read_text())
        whole(page["content"], 0)
        page["content"]["coefficients"][0] = -float(reach)
        page["content"]["deviations"] = [None] * len(page["content"]["features"])
        page["sha256"] = _checksum(page["content"])
        known.write_text(_as_text(page))
        if fits:
            assert load_release(known).coefficients[0] == -reach
        else:
            with pytest.raises(InputError, match="beyond the plan's"):
                load_release(known)


def test_an_intercept_without_one_in_a_linear_plan_is_the_middle_of_the_range(table, tmp_path):
    X, y = table
    facts = sordino.PublicFacts(features=N_FEATURES, rows=N_ROWS, label=(-1.0, 4.0))
    plan = sordino.plan_fit(facts, sordino.Guarantee(8.0), loss="squared", steps=4)
    path = tmp_path / "model.json"
    plan.fit(X, y).save(path)
    assert load_release(path).intercept == 1.5
    for wrong in (0.0, 1.500001):
        assert "an intercept, which the plan has not" in edited(
            path, lambda c, wrong=wrong: c.update(intercept=wrong))
        plan.fit(X, y).save(path)
