"""The plan: a function of public facts, strict on reading, and what it says about itself.

Formulas are written out here from their sources, and do not come from the functions tested.
"""

from __future__ import annotations

import copy
import json
import math
import re

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from sordino import Guarantee, InputError, NotYetError, Plan, PublicFacts, plan_fit
from sordino.losses import Logistic
from sordino.plan import default_radius, default_steps
from sordino.plan_text import at_most, exactly

FACTS = PublicFacts(features=60_000, rows=40_000)
PROMISE = Guarantee(epsilon=1.0, delta=1e-6)
SOME_DELTAS = (0.0, 1e-12, 1e-6, 1e-3)


def log_uniform(low, high):
    return st.floats(math.log(low), math.log(high)).map(math.exp)


@st.composite
def plans(draw):
    features = draw(st.integers(1, 50))
    bound = draw(st.one_of(
        log_uniform(1e-3, 1e3),
        st.lists(st.sampled_from([0.5, 1.0, 2.0]), min_size=features, max_size=features),
    ))
    if not isinstance(bound, list):
        features = draw(st.integers(1, 10**7))
    facts = PublicFacts(features=features, rows=draw(st.integers(1, 10**6)), entry_bound=bound)
    guarantee = Guarantee(draw(log_uniform(1e-3, 1e3)), draw(st.sampled_from(SOME_DELTAS)),
                          draw(st.sampled_from(["add-remove", "replace-one"])))
    return plan_fit(facts, guarantee, schedule=draw(st.sampled_from(["paced", "shrinking"])),
                    steps=draw(st.sampled_from([None, 1, 2, 7, 400])))


repeatable = settings(max_examples=60, deadline=None, derandomize=True)


def epsilon_of(zcdp: float, delta: float) -> float:
    """The least of rho a + ln(1/(a delta))/(a - 1) + ln(1 - 1/a) over many a > 1.

    Source: Canonne, Kamath and Steinke 2020, from memory. Every a gives a valid bound.
    """
    if delta == 0:
        return math.inf
    a = 1 + np.exp(np.linspace(-15, 25, 40_001))
    return float((zcdp * a - np.log(a * delta) / (a - 1) + np.log1p(-1 / a)).min())


def swaps(plan) -> int:
    return 2 if plan.guarantee.neighbours == "replace-one" else 1


def pick_epsilon(plan) -> float:
    """kappa ln 2 times 2RM (add-remove) or 4RM (replace-one)."""
    most = 2 * plan.resolution * plan.entry_levels * swaps(plan)
    return plan.multiplier / 2**plan.shift * math.log(2) * most


def effect_rows(plan) -> float:
    """(1/c)(ln(2d) + logit(0.9)), picks weighing a score of u rows by exp(c u)."""
    c = pick_epsilon(plan) / (2 * swaps(plan))
    return (math.log(2 * plan.facts.features) + math.log(0.9 / 0.1)) / c


# --- what a plan promises


@repeatable
@given(plans())
def test_every_plan_keeps_its_guarantee(plan):
    """Picks cost eps0^2/8 in zCDP (Cesar and Rogers 2021) or eps0 purely, looks at the intercept
    s^2 R^2/(2 variance) (Bun and Steinke 2016; both from memory)."""
    eps0, delta = pick_epsilon(plan), plan.guarantee.delta
    picks, pure = plan.steps * eps0**2 / 8, plan.steps * eps0
    looks = 0.0
    if plan.intercept:
        looks = (swaps(plan) * plan.resolution) ** 2 / (2 * plan.first_variance)
        looks *= len(plan.intercept_looks)
        looks += swaps(plan) ** 2 / (2 * plan.rows_variance)
    assert plan.zcdp == pytest.approx(picks + looks, rel=1e-12)
    assert plan.pick_epsilon == pytest.approx(eps0, rel=1e-12)
    routes = {"zcdp": epsilon_of(picks + looks, delta),
              "pure": math.inf if looks else pure,
              "pure + zcdp": pure + epsilon_of(looks, delta) if looks else math.inf}
    spent = min(routes.values())
    assert plan.epsilon_spent == pytest.approx(spent, rel=1e-5)
    assert 0.9 * plan.guarantee.epsilon < spent <= plan.guarantee.epsilon * (1 + 1e-6)
    assert routes[plan.route] == pytest.approx(spent, rel=1e-5)


@pytest.mark.parametrize(
    ("epsilon", "zcdp"),
    [(0.5, 0.006641524357), (1.0, 0.02435597036), (2.0, 0.08815268838), (4.0, 0.3110649549)],
)
def test_a_plan_spends_its_budget(epsilon, zcdp):
    """Against the inverse conversion at delta 1e-6, solved numerically by other means (mpmath)."""
    plan = plan_fit(FACTS, Guarantee(epsilon, 1e-6))
    assert plan.route == "zcdp" and 0.999 * zcdp <= plan.zcdp <= zcdp * (1 + 1e-9)


def test_replacing_a_row_doubles_the_noise():
    """One neighbour is two changes, so the same picks see half as well."""
    one, other = (plan_fit(FACTS, Guarantee(1.0, 1e-6, neighbours), steps=60, intercept=False)
                  for neighbours in ("add-remove", "replace-one"))
    assert other.noise_rows == pytest.approx(2 * one.noise_rows, rel=1e-5)
    assert other.smallest_effect_rows == pytest.approx(2 * one.smallest_effect_rows, rel=1e-5)
    assert other.pick_epsilon == pytest.approx(one.pick_epsilon, rel=1e-5)


def test_without_delta_a_plan_is_pure():
    """Picks share epsilon evenly; zCDP has no pure guarantee to convert to."""
    plan = plan_fit(FACTS, Guarantee(1.0), steps=8)
    assert plan.route == "pure" and not plan.intercept
    assert (plan.intercept_looks, plan.first_variance, len(plan.costs)) == ((), 0, 1)
    assert pick_epsilon(plan) <= 1 / 8 and pick_epsilon(plan) == pytest.approx(1 / 8, rel=1e-5)
    assert plan.epsilon_spent == pytest.approx(8 * pick_epsilon(plan), rel=1e-12)


@repeatable
@given(plans())
def test_the_resolution_is_the_smallest_that_keeps_rounding_out_of_the_noise(plan):
    """sqrt(n)/(2R) rows stay under 1/20 of the noise, and would not with R/2.

    The resolution is fixed before the rate is rounded down, which adds less than a hundredth to the
    noise.
    """
    noise = 2 * swaps(plan) / pick_epsilon(plan)
    rounding = math.sqrt(plan.facts.rows) / (2 * plan.resolution)
    assert rounding <= noise / 20 or plan.resolution == 2**14
    assert plan.resolution == 1 or 2 * rounding > 0.99 * noise / 20
    assert plan.resolution.bit_count() == 1 and plan.resolution <= 2**14


def zcdp_of(epsilon: float, delta: float) -> float:
    """The rho that `epsilon_of` turns into epsilon, by bisection over ln rho."""
    if delta == 0:
        return 0.0
    low, high = math.log(1e-18), math.log(epsilon + 1)
    for _ in range(60):
        middle = (low + high) / 2
        low, high = (low, middle) if epsilon_of(math.exp(middle), delta) > epsilon else (
            middle, high)
    return math.exp(low)


@settings(max_examples=25, deadline=None, derandomize=True)
@given(st.integers(1, 10**8), st.integers(1, 10**7), log_uniform(1e-2, 50),
       st.sampled_from(SOME_DELTAS), st.sampled_from(["add-remove", "replace-one"]))
def test_default_steps_leave_their_share_of_the_rows(features, rows, epsilon, delta, neighbours):
    """Of two ways to compose T picks, the one with the stronger pick; their smallest effect,
    2 s L/pick_epsilon rows with L = ln(2d) + logit(0.9), is then n sqrt(2/T)/L."""
    steps = default_steps(PublicFacts(features=features, rows=rows),
                          Guarantee(epsilon, delta, neighbours))
    assert 5 <= steps <= 1000
    s = 2 if neighbours == "replace-one" else 1
    logs = math.log(2 * features) + math.log(9)
    rho = zcdp_of(epsilon, delta)

    def surplus(t: float) -> float:
        """The share of the rows allowed, over the smallest effect: falls with t, 1 at the rule."""
        strongest = max(math.sqrt(8 * rho / t), epsilon / t)
        return math.sqrt(2 / t) / logs * rows / (2 * s * logs / strongest)

    assert steps == 5 or surplus(steps - 0.51) >= 1 - 1e-6
    assert steps == 1000 or surplus(steps + 0.51) <= 1 + 1e-6


def test_the_default_radius_follows_the_steps():
    for schedule, factor in (("paced", 3.6), ("shrinking", 1.8)):
        for steps in (1, 5, 81, 400, 100_000):
            radius = default_radius(schedule, steps, Logistic())
            assert radius == pytest.approx(factor * math.sqrt(steps), rel=0.05)
            assert len(f"{radius:g}".strip("0").replace(".", "").strip("0")) <= 2
    given_steps = plan_fit(FACTS, PROMISE, steps=81)
    assert given_steps.radius == 32.0, "3.6 * 9 = 32.4, to two digits"


@repeatable
@given(plans())
def test_what_a_plan_can_see(plan):
    assert plan.noise_rows == pytest.approx(2 * swaps(plan) / pick_epsilon(plan), rel=1e-12)
    assert plan.rounding_rows == pytest.approx(math.sqrt(plan.facts.rows) / 2 / plan.resolution)
    assert plan.smallest_effect_rows == pytest.approx(effect_rows(plan), rel=1e-12)
    for share in (0.001, 0.01, 0.1, 0.5):
        expected = effect_rows(plan) / (plan.facts.rows * share * (1 - share))
        assert plan.smallest_difference(share) == pytest.approx(expected, rel=1e-12)
    assert plan.sees_anything == (effect_rows(plan) <= plan.facts.rows / 4)


@repeatable
@given(plans())
def test_a_plan_is_a_function_of_facts_and_guarantee(plan):
    again = plan_fit(copy.deepcopy(plan.facts), copy.deepcopy(plan.guarantee),
                     schedule=plan.schedule, steps=plan.steps)
    assert again == plan and again.to_dict() == plan.to_dict()


def test_what_is_left_out_is_chosen():
    plan = plan_fit(FACTS, PROMISE, method="frank-wolfe")
    assert (plan.method, plan.schedule, plan.loss, plan.intercept) == (
        "frank-wolfe", "paced", "logistic", True)
    assert plan.picks == plan.steps
    assert plan.intercept_looks[0] == 0 and plan.intercept_looks[-1] == plan.steps
    assert not plan_fit(FACTS, Guarantee(1.0)).intercept, "no intercept where delta is 0"
    strong, weak = (plan_fit(FACTS, Guarantee(epsilon, 1e-6), steps=50) for epsilon in (0.1, 4))
    assert strong.noise_rows > weak.noise_rows and strong.resolution < weak.resolution


def test_greedy_is_the_default_where_delta_pays_for_it():
    assert plan_fit(FACTS, PROMISE).method == "greedy"
    assert plan_fit(FACTS, PROMISE, picks=3).method == "greedy"
    assert plan_fit(FACTS, PROMISE, include=[3]).method == "greedy"
    for option in ({"steps": 9}, {"radius": 2.0}, {"schedule": "shrinking"}):
        assert plan_fit(FACTS, PROMISE, **option).method == "frank-wolfe"
    assert plan_fit(FACTS, Guarantee(1.0)).method == "frank-wolfe"
    linear = PublicFacts(features=500, rows=40_000, label=(0, 1))
    for loss in ("squared", "huber"):
        assert plan_fit(linear, PROMISE, loss=loss).method == "greedy"
        assert plan_fit(linear, Guarantee(1.0), loss=loss).method == "frank-wolfe"


def test_options_of_both_methods_are_refused():
    with pytest.raises(InputError, match="belongs to the other method"):
        plan_fit(FACTS, PROMISE, picks=3, steps=9)


def test_picks_without_delta_are_told_what_is_missing():
    """Options of greedy ask for greedy, which asks for a delta."""
    with pytest.raises(InputError, match="needs delta above 0"):
        plan_fit(FACTS, Guarantee(1.0), picks=3)


def test_the_default_radius_is_smaller_for_steeper_losses():
    """0.225 sqrt(T) (paced), half that (shrinking), in half ranges: over the residual bound."""
    linear = PublicFacts(features=500, rows=40_000, label=(-5.0, 3.0))
    for schedule, factor in (("paced", 0.9), ("shrinking", 0.45)):
        for loss, times in (("squared", 1), ("huber", 2)):
            plan = plan_fit(linear, PROMISE, steps=81, schedule=schedule, loss=loss)
            assert plan.radius == pytest.approx(9 * factor * times, rel=0.05)
            assert number("never passes it; the rule gives #:", plan.explain()) == plan.radius


@pytest.mark.parametrize(
    ("options", "kind", "named"),
    [
        ({"method": "greedy", "steps": 5}, InputError, "greedy takes picks="),
        ({"method": "greedy", "picks": 0}, InputError, "picks must be between"),
        ({"method": "greedy", "intercept": False}, InputError, "always has an intercept"),
        ({"method": "lasso"}, InputError, "method must be 'frank-wolfe'"),
        ({"loss": "squared"}, InputError, "needs a label range"),
        ({"residual_bound": 0.5}, InputError, "residual_bound= belongs"),
        ({"loss": abs}, NotYetError, "a loss of your own"),
        ({"loss": "hinge"}, InputError, "loss must be"),
        ({"schedule": "brisk"}, InputError, "schedule must be 'paced' or 'shrinking'"),
        ({"steps": 0}, InputError, "steps must be between 1 and 100,000"),
        ({"steps": 100_001}, InputError, "steps must be between"),
        ({"steps": 1.5}, InputError, "steps must be a whole number"),
        ({"steps": True}, InputError, "steps must be a whole number"),
        ({"radius": 0.0}, InputError, "radius must be a finite number above 0"),
        ({"radius": math.inf}, InputError, "radius must be a finite number above 0"),
        ({"radius": math.nan}, InputError, "radius must be a finite number above 0"),
        ({"picks": 10}, InputError, "frank-wolfe takes steps="),
        ({"intercept": 1}, InputError, "intercept must be"),
        ({"include": [1], "exclude": [1]}, InputError, "feature 1 is in exclude and in include"),
        ({"include": range(257)}, InputError, "257 features would be in the model"),
        ({"include": [1], "intercept": False}, InputError, "together with an intercept"),
        ({"exclude": [10**9]}, InputError, "a feature of exclude must be between"),
        ({"exclude": 3}, InputError, "exclude must be feature ids, not 3"),
        ({"exclude": ["a"]}, InputError, "a feature of exclude must be a whole number"),
        ({"exclude": range(FACTS.features)}, InputError, "no feature is left to pick"),
        ({"prior": [1]}, InputError, "60,000 weights, one per feature"),
        ({"prior": {7: 0.0}}, InputError, "the prior of feature 7 must be"),
        ({"prior": {7: 1e30}}, InputError, "2^100 from the most common one"),
        ({"prior": {60_000: 2}}, InputError, "a feature of prior must be between"),
        ({"start": [1]}, InputError, "start must be a release or"),
        ({"start": {1: "x"}}, InputError, "a coefficient of start must be"),
        ({"start": {1: 2.0}, "exclude": [1]}, InputError, "is in exclude and in start"),
        ({"start": {1: 2.0, None: 1.0}, "intercept": False}, InputError, "start has an intercept"),
    ],
)
def test_options_that_do_not_fit_are_named(options, kind, named):
    with pytest.raises(kind, match=re.escape(named)):
        plan_fit(FACTS, PROMISE, **{"method": "frank-wolfe"} | options)


def test_facts_that_do_not_fit_are_named():
    with pytest.raises(InputError, match="PublicFacts and a Guarantee"):
        plan_fit(PROMISE, FACTS)
    with pytest.raises(InputError, match="needs delta above 0"):
        plan_fit(FACTS, Guarantee(1.0), intercept=True)
    with pytest.raises(InputError, match="binary"):
        plan_fit(PublicFacts(features=3, rows=10, label=(0.0, 1.0)), PROMISE)


# --- to a dict and back


@repeatable
@given(plans())
def test_a_plan_survives_json(plan):
    text = json.dumps(plan.to_dict(), allow_nan=False)
    back = Plan.from_dict(json.loads(text))
    assert back == plan and json.dumps(back.to_dict()) == text
    assert np.array_equal(back.facts.entry_bound, plan.facts.entry_bound)


METHODS = ("frank-wolfe", "greedy")
PATHS = [(method, key) for method in METHODS
         for key in plan_fit(FACTS, PROMISE, method=method).to_dict()]
PATHS += [(METHODS[0], "facts", key) for key in FACTS.to_dict()]
PATHS += [(METHODS[0], "guarantee", key) for key in PROMISE.to_dict()]
PATHS += [(METHODS[1], "knowledge", key) for key in ("include", "exclude", "prior", "start")]
JUNK = [None, True, -1, 0, 0.5, 10**18, -(10**18), math.inf, math.nan, "", "zcdp", [], [0], [[]],
        [[1.0, 10**18]], [[1.0, -1]], [[1.0, True]], [["1", 1]], {}, {"features": 1}]


@pytest.mark.parametrize("path", PATHS, ids=".".join)
def test_junk_in_a_field_is_an_input_error_or_a_sound_plan(path):
    """Run-lengths of 10^18 among it: nothing of that size may be made."""
    for junk in JUNK:
        method, *parents, last = path
        fields = plan_fit(FACTS, PROMISE, method=method, prior={3: 4}, start={5: 1.0}).to_dict()
        place = fields
        for parent in parents:
            place = place[parent]
        place[last] = junk
        try:
            plan = Plan.from_dict(fields)
        except InputError as error:
            assert "\n" not in str(error)
        else:
            assert plan.epsilon_spent <= plan.guarantee.epsilon
            assert str(plan) and plan.explain()
        del place[last]
        with pytest.raises(InputError, match=last):
            Plan.from_dict(fields)


LEARNING = PublicFacts(features=60_000, rows=40_000, entry_bound="learn", label="learn",
                       rows_per_person=2)


def learning(method: str, **options) -> Plan:
    """A linear plan that knows something of features and learns both its bounds."""
    return plan_fit(LEARNING, PROMISE, method=method, loss="huber", include=[4], exclude=[9],
                    prior={3: 4}, start={5: 1.0}, **options)


LEARNING_PATHS = [(method, *path) for method in METHODS for path in (
    *((key,) for key in learning(method).to_dict()),
    *(("facts", key) for key in ("entry_bound", "label", "rows_per_person")),
    *(("entry_quantile", key) for key in ("a", "c", "multiplier", "shift")),
    *(("label_quantile", key) for key in ("a", "c", "multiplier", "shift")),
    *(("knowledge", key) for key in ("include", "exclude", "prior", "start")),
    *(("knowledge", "start", key) for key in ("features", "coefficients", "intercept")),
)]


@pytest.mark.parametrize("path", LEARNING_PATHS, ids=".".join)
def test_junk_in_a_plan_that_learns_is_an_input_error_or_a_sound_plan(path):
    for junk in [*JUNK, "learn", "binary", [2, 3], [[0, 1]], {"a": 1, "c": 2}]:
        method, *parents, last = path
        fields = learning(method).to_dict()
        place = fields
        for parent in parents:
            place = place[parent]
        place[last] = junk
        try:
            plan = Plan.from_dict(fields)
        except InputError as error:
            assert "\n" not in str(error)
        else:
            assert plan.epsilon_spent <= plan.guarantee.epsilon
            assert str(plan) and plan.explain()
        del place[last]
        with pytest.raises(InputError, match=last):
            Plan.from_dict(fields)


@pytest.mark.parametrize("method", METHODS)
@pytest.mark.parametrize(
    ("label", "loss", "changed", "named"),
    [
        ((0, 4), "squared", {"residual_bound": None}, "residual_bound is missing"),
        ((0, 4), "squared", {"residual_bound": 0.01}, "residual_bound must lie between"),
        ((0, 4), "squared", {"residual_bound": "0.25"}, "residual_bound must be a finite number"),
        ((0, 4), "squared", {"loss": "logistic"}, 'needs label="binary"'),
        ((0, 4), "squared", {"loss": "cubic"}, "loss must be"),
        ((0, 4), "squared", {"entry_quantile": {"a": 1, "c": 2, "multiplier": 1, "shift": 9}},
         "entry_quantile does not fit the facts"),
        ("binary", "logistic", {"residual_bound": 0.25}, "residual_bound= belongs"),
        ("binary", "logistic", {"loss": "huber"}, "needs a label range"),
    ],
)
def test_a_loss_that_does_not_fit_its_labels_is_refused(method, label, loss, changed, named):
    facts = PublicFacts(features=500, rows=40_000, label=label)
    fields = plan_fit(facts, PROMISE, method=method, loss=loss).to_dict()
    assert Plan.from_dict(fields).to_dict() == fields
    with pytest.raises(InputError, match=named):
        Plan.from_dict(fields | changed)


@pytest.mark.parametrize("fields", [None, [], "plan", 3])
def test_only_a_dict_is_read(fields):
    for kind in (Plan, PublicFacts, Guarantee):
        with pytest.raises(InputError, match="must be an object"):
            kind.from_dict(fields)


@pytest.mark.parametrize(
    ("changed", "named"),
    [
        ({"shift": -1}, "more than its guarantee of 1"),
        ({"multiplier": 2}, "more than its guarantee of 1"),
        ({"steps": 1, "intercept_looks": 0}, "intercept_looks do not fit the steps"),
    ],
)
def test_a_plan_that_costs_more_than_it_promises_is_refused(changed, named):
    """A rate twice as high, or looks that are taken but not charged."""
    fields = plan_fit(FACTS, PROMISE, method="frank-wolfe").to_dict()
    fields["shift"] += changed.get("shift", 0)
    fields["multiplier"] *= changed.get("multiplier", 1)
    if fields["multiplier"] > 2**20:
        fields["multiplier"], fields["shift"] = fields["multiplier"] // 2, fields["shift"] - 1
    if "intercept_looks" in changed:
        fields["intercept_looks"] = [0]
    with pytest.raises(InputError, match=named):
        Plan.from_dict(fields)


# --- how it reads


NUMBER = r"(\d[\d,]*(?:\.\d+)?(?:e[-+]?\d+)?)"


def number(pattern: str, text: str) -> float:
    """The number where `pattern`, read over lines and wide spaces, has its #."""
    found = re.search(pattern.replace("#", NUMBER), " ".join(text.split()))
    assert found, f"no {pattern!r} in {text}"
    return float(found[1].replace(",", ""))


def entry(name: str, explanation: str) -> float:
    """The first number beside a name in an explanation."""
    found = re.search(rf"^  {re.escape(name)} +{NUMBER}", explanation, re.MULTILINE)
    assert found, f"no {name!r} in {explanation}"
    return float(found[1].replace(",", ""))


def three_digits(value: float):
    return pytest.approx(value, rel=5.1e-3)


@repeatable
@given(plans())
def test_the_texts_are_narrow(plan):
    for text in (str(plan), plan.explain()):
        assert max(map(len, text.splitlines())) < 80
        assert text.isascii() and "nan" not in text.split()


@pytest.mark.parametrize("neighbours", ["add-remove", "replace-one"])
def test_the_summary_holds_the_figures(neighbours):
    plan = plan_fit(PublicFacts(features=5000, rows=2_000_000), Guarantee(2.0, 1e-7, neighbours),
                    steps=120, radius=30.0)
    text = str(plan)
    flat = " ".join(text.split())
    assert "2,000,000 rows by 5,000 features" in flat and "binary label" in flat
    assert f"epsilon 2, delta 1e-07 ({neighbours})" in flat
    assert ("added or taken away" in flat) == (neighbours == "add-remove")
    assert "paced: 120 steps" in flat and "radius 30" in flat
    assert "an intercept, measured 17 times from before the first step to after the last" in flat
    zcdp = 120 * pick_epsilon(plan) ** 2 / 8
    look = (swaps(plan) * plan.resolution) ** 2 / (2 * plan.first_variance)
    looks, rows = 17 * look, swaps(plan) ** 2 / (2 * plan.rows_variance)
    whole = zcdp + looks + rows
    assert number("zCDP #", text) == pytest.approx(whole, rel=1e-5)
    assert number("cost epsilon #", text) == pytest.approx(epsilon_of(whole, 1e-7), 1e-5)
    assert number("# % for the picks", text) == three_digits(100 * zcdp / whole)
    assert number("# % for the rows", text) == three_digits(100 * rows / whole)
    assert number("# % for the intercept", text) == three_digits(100 * looks / whole)
    assert number("noise # rows", text) == three_digits(2 * swaps(plan) / pick_epsilon(plan))
    assert number("resolution #", text) == plan.resolution
    assert number("adds at most # rows", text) == three_digits(
        math.sqrt(2_000_000) / (2 * plan.resolution))
    seen = text.partition("\neffect")[2]
    assert number("a score of # rows", seen) == three_digits(effect_rows(plan))
    for share in (0.001, 0.01, 0.1):
        difference = effect_rows(plan) / (2_000_000 * share * (1 - share))
        assert difference < 1
        assert number(f"held by {100 * share:g} % of rows #", text) == three_digits(difference)


def test_the_summary_says_from_where_on_anything_is_seen():
    plan = plan_fit(FACTS, PROMISE, method="frank-wolfe")
    text = str(plan)
    assert re.search(r"held by 0.1 % of rows +cannot be seen", text)
    assert re.search(r"held by +1 % of rows +cannot be seen", text)
    least = number("once # % of rows", text) / 100
    assert least * (1 - least) == pytest.approx(effect_rows(plan) / 40_000, rel=6e-3)
    assert least < 0.5


def test_the_summary_without_an_intercept():
    text = str(plan_fit(FACTS, Guarantee(1.0)))
    assert "no intercept" in text and "pure epsilons add up" in text and "100 %" in text


def test_parts_that_add_up_in_two_currencies_are_shared_in_them():
    plan = plan_fit(PublicFacts(features=10, rows=500), Guarantee(50.0, 1e-6), steps=2)
    assert plan.route == "pure + zcdp"
    picks = 2 * pick_epsilon(plan)
    rest = sum(cost.zcdp for cost in plan.costs[1:])
    share = 100 * picks / (picks + epsilon_of(rest, 1e-6))
    assert number("# % for the picks", str(plan)) == three_digits(share)


@pytest.mark.parametrize("text", [str, Plan.explain])
def test_a_plan_that_is_blind_says_so(text):
    blind = plan_fit(PublicFacts(features=1000, rows=100), Guarantee(0.01, 1e-6),
                     method="frank-wolfe")
    words = " ".join(text(blind).split())
    assert "THIS PLAN CANNOT DETECT ANYTHING" in words
    assert "more epsilon, fewer steps or more rows" in words
    assert number("a score of only # rows", words) == 25, "half the rows, all labels: n/4"
    assert number("# times too few", words) == three_digits(effect_rows(blind) / 25)
    assert "CANNOT DETECT" not in text(plan_fit(FACTS, PROMISE))


@pytest.mark.parametrize("delta", [1e-6, 0.0])
def test_what_the_rules_give_is_told_beside_what_was_chosen(delta):
    """81 picks by rule where n sqrt(rho) allows them, or (epsilon n/(sqrt 2 L^2))^(2/3)."""
    facts, promise = PublicFacts(features=60_000, rows=50_000), Guarantee(1.0, delta)
    logs = math.log(120_000) + math.log(9)
    by_rule = round(max(2 * 50_000 * math.sqrt(zcdp_of(1.0, delta)) / logs**2,
                        (50_000 / (math.sqrt(2) * logs**2)) ** (2 / 3)))
    ruled = plan_fit(facts, promise, method="frank-wolfe")
    own = plan_fit(facts, promise, steps=50, radius=9.25)
    assert ruled.steps == by_rule
    for plan, steps, radius in ((ruled, by_rule, ruled.radius), (own, 50, 9.25)):
        text = plan.explain()
        assert (entry("steps T", text), entry("radius", text)) == (steps, radius)
        assert number("one private pick each; the rule gives #:", text) == by_rule
        assert number("never passes it; the rule gives #:", text) == pytest.approx(
            3.6 * math.sqrt(steps), rel=0.05)


@repeatable
@given(log_uniform(1e-300, 1e300))
def test_figures_read_back_and_never_understate(value):
    assert float(exactly(value)) == value
    assert value <= float(at_most(value)) <= value * (1 + 1e-5)


def test_every_number_is_explained():
    bounds = np.repeat([0.5, 2.0], 50)
    plan = plan_fit(PublicFacts(features=100, rows=90_000, entry_bound=bounds),
                    Guarantee(3.0, 1e-5, "replace-one"), steps=40, schedule="shrinking")
    text = plan.explain()
    shown = {
        "features d": 100, "rows n": 90_000, "entry bound B": 0.5, "epsilon, delta": 3,
        "one-row changes s": 2, "steps T": 40, "radius": plan.radius, "entry levels M": 2**14,
        "looks at the intercept": 17, "resolution R": plan.resolution,
        "range of a score difference": 4 * plan.resolution * 2**14,
        "rate kappa": plan.multiplier, "sensitivity of the derivatives' sum": 2 * plan.resolution,
        "variance of a look": plan.first_variance,
    }
    for name, value in shown.items():
        assert entry(name, text) == value, name
    derived = {
        "pick epsilon eps0": pick_epsilon(plan),
        "error of a look": math.sqrt(plan.first_variance) / (plan.resolution * 90_000),
        "picks, zCDP": 40 * pick_epsilon(plan) ** 2 / 8,
        "selection noise": 4 / pick_epsilon(plan),
        "rounding": 300 / (2 * plan.resolution),
        "smallest effect": effect_rows(plan),
        "epsilon spent": plan.epsilon_spent,
    }
    for name, value in derived.items():
        assert entry(name, text) == three_digits(value), name
    for part in (f"/2^{plan.shift}", "2/(t + 2)", "0.5 to 2", "3, 1e-05", "replace-one"):
        assert part in text
    for source in ("Frank and Wolfe 1956", "Jaggi 2013", "Talwar, Thakurta and Zhang 2015",
                   "Ilvento 2020", "Cesar and Rogers 2021",
                   "Canonne, Kamath and Steinke 2020"):
        assert source in " ".join(text.split())
