"""The disclosure statement: marked, complete, and with the right figures in it.

Figures are computed here from the formulas, and do not come from the functions tested.
"""

from __future__ import annotations

import dataclasses
import html
import math
import re
from html.parser import HTMLParser

import numpy as np
import pytest
import scipy.sparse as sp
from hypothesis import given, settings
from hypothesis import strategies as st

from sordino import Guarantee, PublicFacts, load_release, plan_fit
from sordino.release import Release

FACTS = PublicFacts(features=5000, rows=30_000)
PROMISE = Guarantee(epsilon=1.0, delta=1e-7)
SECTIONS = ("What is released", "What is guaranteed", "How it was made", "What was taken as public",
            "What else was spent on the same data",
            "What is not covered", "How wrong it may be",
            "How well it does, as measured privately", "Before it is used",
            "Questions a board should ask")


def released(plan, k: int = 3, names=None, rehearsal=False) -> Release:
    """A release with coefficients -1, 2, -3, ... in 1/k of the radius."""
    values = np.arange(1, k + 1) * (-1.0) ** np.arange(1, k + 1) * plan.radius / k**2
    return Release(plan, 7 * np.arange(k), values, -0.75 if plan.intercept else 0.0, rehearsal,
                   names, None)


def flat(release: Release) -> str:
    return " ".join(release.statement().split())


def number(pattern: str, text: str) -> float:
    """The number where `pattern` has its #."""
    figure = re.search(pattern.replace("#", r"(\d[\d,]*(?:\.\d+)?(?:e[-+]?\d+)?)"), text)
    assert figure, f"no {pattern!r} in {text}"
    return float(figure[1].replace(",", ""))


def promised(epsilon: float, delta: float = 1e-7, rows: int = 30_000, **options) -> str:
    facts = PublicFacts(features=20, rows=rows)
    return flat(released(plan_fit(facts, Guarantee(epsilon, delta), steps=3, **options)))


def table_rows(text: str) -> list[list[str]]:
    """The cells of the coefficients' table, without its two heading lines."""
    lines = [line for line in text.splitlines() if line.startswith("|")]
    return [[cell.strip() for cell in re.split(r"(?<!\\)\|", line)[1:-1]] for line in lines[2:]]


# --- marks


def test_a_rehearsal_is_marked_before_anything_else(tmp_path):
    rng = np.random.default_rng(5)
    X = sp.random_array((200, 20), density=0.3, format="csr", rng=rng)
    plan = plan_fit(PublicFacts(features=20, rows=200), PROMISE, steps=4)
    release = plan.fit(X, (rng.random(200) < 0.5).astype(float), rehearsal_seed=11)
    path = tmp_path / "rehearsal.json"
    release.save(path, rehearsal=True)
    for kept in (release, load_release(path)):
        title, _, warning, *_ = kept.statement().splitlines()
        assert title.startswith("# ") and "REHEARSAL" in title
        assert warning.startswith("**REHEARSAL: NOT PRIVATE, MUST NOT LEAVE.")
        text = flat(kept)
        assert "A private run of this plan would be differentially private" in text
        assert "Randomness: a generator with a fixed seed" in text
        assert "This release is differentially private" not in text
        assert "operating system" not in text
    assert "11" not in re.findall(r"\d+", warning), "the seed itself is not told"


def test_a_private_release_is_not_marked():
    text = released(plan_fit(FACTS, PROMISE, method="frank-wolfe")).statement()
    assert text.splitlines()[0] == "# Disclosure statement: a private sparse logistic model"
    assert "rehearsal" not in text.lower() and "seed" not in text
    assert "This release is differentially private" in text


def test_nothing_a_board_asks_for_is_left_out():
    text = released(plan_fit(FACTS, PROMISE, method="frank-wolfe")).statement()
    assert re.findall(r"^## (.*)$", text, re.MULTILINE) == list(SECTIONS)
    words = " ".join(text.split()).lower()
    for topic in ("exponential mechanism", "discrete gaussian", "operating system's cryptographic",
                  "integers", "cesar and rogers", "canonne", "running time", "feature names",
                  "other releases", "add up", "subgroup", "data-protection law",
                  "licensed", "nist sp 800-226", "secondary summary",
                  "facts about groups", "belongs to the population", "truth",
                  "5,000 features", "binary label", "entries within 1", "1 row per person",
                  "whoever ran this", "your disclosure board", "frank and wolfe 1956",
                  "k rows together are protected k times less", "the document itself was not read"):
        assert topic in words, topic


# What NIST SP 800-226 asks to be told, as theory.md section 10 lists it (from a secondary summary):
# the point, the heading under which it is told, and words that tell it.
POINTS = [
    ("epsilon and delta", "What is guaranteed", "epsilon 1, delta 1e-07"),
    ("unit of privacy", "What is guaranteed", "the unit protected is"),
    ("neighbours", "What is guaranteed", 'neighbours "add-remove"'),
    ("native parameters", "What is guaranteed", "natively the plan costs zcdp"),
    ("lossy conversion", "What is guaranteed", "converted first, budgets add up to more"),
    ("size of epsilon", "What is guaranteed", "epsilon is not below 1"),
    ("large delta", "What is guaranteed", "delta is 0.003 times 1/rows"),
    ("mechanisms", "How it was made", "by the exponential mechanism"),
    ("accountant", "How it was made", "accountant:"),
    ("randomness", "How it was made", "cryptographic generator"),
    ("arithmetic and floating point", "How it was made", "no floating point stands between"),
    ("trust model", "How it was made", "whoever ran this held the raw rows"),
    ("contribution bound, event-level unit", "What was taken as public", "no person has more than"),
    ("what was public", "What was taken as public", "known without reading the rows"),
    ("tuning and data-dependent clipping", "What was taken as public", "looks at these rows"),
    ("all other releases", "What else was spent on the same data", "budgets add up"),
    ("side channels and timing", "What is not covered", "running time"),
    ("error messages", "What is not covered", "errors and refusals"),
    ("access control", "What is not covered", "who can read them"),
    ("exposure when data is collected", "What is not covered", "how they were collected"),
    ("mixing with releases that are not private", "What is not covered", "a release without noise"),
    ("utility and error", "How wrong it may be", "the noise of a pick has a scale of"),
    ("bias and subgroups", "How wrong it may be", "small subgroups are fitted worst"),
    ("whose data", "Questions a board should ask", "whose data is it"),
    ("audit", "Questions a board should ask", "was its promise checked by experiment"),
    ("custom software", "Questions a board should ask", "software of its own"),
]


@pytest.mark.parametrize(("point", "heading", "words"), POINTS, ids=[p for p, _, _ in POINTS])
def test_every_point_of_the_standard_has_its_heading(point, heading, words):
    text = released(plan_fit(FACTS, PROMISE, method="frank-wolfe")).statement()
    section = text.split(f"## {heading}\n")[1].split("\n## ")[0]
    assert words in " ".join(section.split()).lower()


# --- the web page


class Outline(HTMLParser):
    """Headings, and whether every tag that is opened is closed in order; no script, no links out."""

    def __init__(self, page: str):
        super().__init__()
        self.open, self.headings, self.cells = [], [], []
        self.feed(page)
        assert self.open == []

    def handle_starttag(self, tag, attributes):
        assert tag not in ("script", "link", "img", "iframe")
        assert not {"src", "href", "onclick"} & dict(attributes).keys()
        if tag != "meta":
            self.open.append(tag)

    def handle_endtag(self, tag):
        assert self.open.pop() == tag

    def handle_data(self, text):
        if self.open and self.open[-1] in ("h1", "h2"):
            self.headings.append(text)
        if self.open and self.open[-1] == "td":
            self.cells.append(text)


def test_the_web_page_says_the_same_and_needs_nothing_else():
    names = ("a|b", "<script>alert(1)</script>", "fever & cough")
    release = released(plan_fit(FACTS, PROMISE, method="frank-wolfe"), names=names)
    page, text = release.statement(html=True), release.statement()
    outline = Outline(page)
    assert outline.headings[1:] == list(SECTIONS)
    assert [name for name in outline.cells if name in names] == list(reversed(names))
    assert "url(" not in page and "@import" not in page
    plain = html.unescape(re.sub(r"<[^>]+>", " ", page.split("<body>")[1]))
    words = set(re.sub(r"[*#|`\\]|---:?|&lt;|&gt;|&amp;|\d+\. ", " ", text).split())
    missing = {word for word in words if word not in plain and not set(word) & set("<>_")}
    assert not missing, missing


def test_what_a_book_shows_is_told():
    plan = plan_fit(FACTS, PROMISE, method="frank-wolfe")
    charge = {"number": 1, "what": "an earlier fit", "plan": "", "zcdp": 0.0078125, "pure": None,
              "part": ["one", "fit"], "at": "2026-11-30T10:00:00+00:00", "state": "settled"}
    spending = {"cap": Guarantee(3.0, 1e-6).to_dict(), "epsilon_spent": 1.25, "charges": [charge]}
    text = dataclasses.replace(released(plan), spending=spending).statement()
    assert "epsilon 1.25 at delta 1e-06, of a cap of 3 (add-remove)" in " ".join(text.split())
    assert "| 1 | 2026-11-30 | an earlier fit | one / fit | 0.0078125 |" in text


# --- what leaves


def test_the_table_holds_every_coefficient_by_size():
    release = released(plan_fit(FACTS, PROMISE, method="frank-wolfe"), 50)
    rows = table_rows(release.statement())
    assert [int(feature) for feature, _ in rows] == (7 * np.arange(50))[::-1].tolist()
    values = [float(value) for _, value in rows]
    np.testing.assert_allclose(values, release.coefficients[::-1], rtol=1e-5)
    assert "-0.75" in flat(release) and "50 coefficients" in flat(release)


def test_a_long_table_is_cut_and_says_so():
    release = released(plan_fit(FACTS, PROMISE, steps=200), 130)
    rows = table_rows(release.statement())
    assert [int(feature) for feature, _ in rows] == (7 * np.arange(130))[:79:-1].tolist()
    assert "The 50 largest; all 130 are in the release file." in flat(release)


def test_an_empty_release_and_one_without_an_intercept():
    plan = plan_fit(FACTS, Guarantee(1.0))
    text = flat(released(plan, 0))
    assert "0 coefficients" in text and "no intercept" in text and "|" not in text


def test_names_are_plain_text():
    names = ("a|b", "<b>fever</b>\n# not a heading", "`*_[link](x)_*`")
    text = released(plan_fit(FACTS, PROMISE, method="frank-wolfe"), names=names).statement()
    cells = [name for _, name, _ in table_rows(text)]
    assert cells == [r"\`\*\_\[link\](x)\_\*\`", "&lt;b&gt;fever&lt;/b&gt; # not a heading",
                     r"a\|b"]
    assert "the list of feature names" in text


# --- the promise


@pytest.mark.parametrize("neighbours", ["add-remove", "replace-one"])
def test_the_promise_is_stated_with_its_figures(neighbours):
    plan = plan_fit(FACTS, Guarantee(0.7, 1e-8, neighbours), method="frank-wolfe")
    text = flat(released(plan))
    s = 2 if neighbours == "replace-one" else 1
    eps0 = (plan.multiplier / 2**plan.shift * math.log(2)
            * 2 * s * plan.resolution * plan.entry_levels)
    looks = len(plan.intercept_looks) * (s * plan.resolution) ** 2 / (2 * plan.first_variance)
    rows = s**2 / (2 * plan.rows_variance)
    assert "epsilon 0.7" in text and "delta 1e-08" in text and f'"{neighbours}"' in text
    assert "P[release(D) in S] <= e^epsilon * P[release(D') in S] + delta" in text
    assert ("exact number of rows" in text) == (neighbours == "replace-one")
    effect = 2 * s / eps0 * (math.log(2 * 5000) + math.log(9))
    shown = {
        "rho = #": plan.steps * eps0**2 / 8 + looks + rows,
        "pick_epsilon #": eps0,
        "about #": math.exp(0.7),
        "noise of a pick has a scale of # rows": 2 * s / eps0,
        "rounding adds at most # row": math.sqrt(30_000) / (2 * plan.resolution),
        "from an effect of # rows": effect,
        "held by 10 % of rows, #": effect / (30_000 * 0.1 * 0.9),
    }
    for words, value in shown.items():
        assert number(words, text) == pytest.approx(value, rel=5.1e-3), words
    error = math.sqrt(plan.first_variance) / (plan.resolution * 30_000)
    assert number("off by # of a label rate", text) == pytest.approx(error, rel=0.051)
    assert f"variance {plan.first_variance:,} at sensitivity {s * plan.resolution}" in text
    picks = plan.steps * eps0**2 / 8
    for part, following in ((picks, "Rows"), (rows, "Intercept"), (looks, "Randomness")):
        share = 100 * part / (picks + rows + looks)
        said = number(f"; # % of the cost\\. \\* {following}", text)
        assert said == pytest.approx(share, rel=5.1e-3)


figures = st.floats(1e-3, 50)


@settings(max_examples=80, deadline=None, derandomize=True)
@given(figures, st.one_of(st.just(0.0), st.floats(1e-12, 1e-3)),
       st.sampled_from(["add-remove", "replace-one"]), st.integers(1, 10**6), st.integers(1, 20))
def test_no_figure_promises_more_than_the_plan_holds(epsilon, delta, neighbours, rows, steps):
    """What bounds a loss is stated to the digit, what is spent is rounded up, if at all."""
    facts = PublicFacts(features=20, rows=rows)
    plan = plan_fit(facts, Guarantee(epsilon, delta, neighbours), steps=steps)
    text = flat(released(plan, 1))
    assert number(r"\*\*epsilon #", text) == epsilon
    assert number(r"\*\*epsilon [^*]*, delta #\*\*", text) == delta
    if delta:
        assert number("except with probability #", text) == delta
    assert number("rho = #", text) >= plan.zcdp
    assert number("spends epsilon #", text) >= plan.epsilon_spent
    assert number("each of pick_epsilon #", text) >= plan.pick_epsilon
    for share in (0.001, 0.01, 0.1):
        found = re.search(rf"held by {100 * share:g} % of rows, (cannot be seen|[\d.e-]+)", text)
        assert (found[1] == "cannot be seen") == (plan.smallest_difference(share) > 1)


def test_odds_are_turned_into_beliefs_on_the_safe_side():
    """From even odds, e^epsilon bounds the odds afterwards: p/(1 - p) <= e^epsilon."""
    for epsilon in (0.1, 0.5, 1.0, 3.0, 9.0):
        least, most = map(float, re.search(r"between ([\d.]+) % and ([\d.]+) %",
                                           promised(epsilon)).groups())
        bound = 100 / (1 + math.exp(epsilon))
        assert bound - 0.1 <= least <= bound and 100 - bound <= most <= 100 - bound + 0.1


def test_without_delta_there_is_no_exception():
    assert "except" not in promised(1.0, 0.0)
    assert "except with probability 1e-07" in promised(1.0)
    assert "The exception, exactly:" in promised(1.0)


@pytest.mark.parametrize(
    ("epsilon", "remark"),
    [
        (0.1, "An epsilon below 1 is called strong, one of 0.1 very strong."),
        (0.99, "An epsilon below 1 is called strong"),
        (1.0, "**Epsilon is not below 1**"),
        (9.9, "**Epsilon is not below 1**"),
        (10.0, "**Epsilon is large: from 10 on"),
        (1e9, "**Epsilon is large: from 10 on"),
    ],
)
def test_epsilon_is_judged_as_common_practice(epsilon, remark):
    text = promised(epsilon, intercept=False)
    assert remark in text and "Common practice, not a rule." in text
    assert ("more than 10^300" in text) == (epsilon == 1e9)


@pytest.mark.parametrize(
    ("delta", "rows", "remark"),
    [
        (1e-3, 1000, "not below 1/rows = 0.001"),
        (1e-4, 1000, "**Delta is large: 0.0001 is above 1e-05"),
        (1e-6, 50_000, "Delta is 0.05 times 1/rows; the cautious go down to 1/rows^2, here 4e-10"),
        (1e-10, 50_000, None),
        (0.0, 50_000, None),
    ],
)
def test_delta_is_compared_with_the_rows(delta, rows, remark):
    text = promised(5.0, delta, rows)
    assert remark in text if remark else "1/rows" not in text


def test_a_blind_plan_is_named():
    plan = plan_fit(PublicFacts(features=1000, rows=100), Guarantee(0.01, 1e-6), method="frank-wolfe")
    assert "**THIS PLAN CANNOT DETECT ANYTHING." in flat(released(plan))
    assert "CANNOT DETECT" not in flat(released(plan_fit(FACTS, PROMISE, method="frank-wolfe")))


def test_no_line_reads_as_markdown_it_is_not_meant_to_be():
    """Wrapped prose must not start a list, a heading or a quotation at the start of a line."""
    for promise in (PROMISE, Guarantee(20.0, 1e-3, "replace-one")):
        plan = plan_fit(FACTS, promise, method="frank-wolfe")
        for block in released(plan).statement().split("\n\n"):
            if block.startswith(("* ", "1. ", "| ", "    ")):
                continue
            assert not any(re.match(r"[-+*>#] |\d+[.)] ", line)
                           for line in block.splitlines()[1:]), block


# --- corrections of included features, persons


def test_corrections_of_included_features_are_stated_with_their_figures():
    """Sensitivities R 2^8 L and M 2^8 L in L2; shares of the cost add up to all of it."""
    plan = plan_fit(FACTS, PROMISE, method="frank-wolfe", include=[3, 9], steps=100)
    text = flat(released(plan))
    R, M, L = plan.resolution, plan.entry_levels, plan.limit
    gradients = text.split("* Coefficients: ")[1].split(" * ")[0]
    assert gradients.startswith("17 gradients over the intercept and the included features")
    assert f"variance {plan.correction_variance:,} at sensitivity {R * L * 2**8:,}" in gradients
    moments = text.split("* Second moments of those features")[1].split(" * ")[0]
    assert f"variance {plan.moment_variance:,} at sensitivity {M * L * 2**8:,}" in moments
    assert "Intercept: 1 integer sum of all derivatives" in text
    shares = [float(share) for share in re.findall(r"; (\d[\d.]*) % of the cost", text)]
    assert len(shares) == 5 and sum(shares) == pytest.approx(100, abs=0.5)


@pytest.mark.parametrize("neighbours", ["add-remove", "replace-one"])
@pytest.mark.parametrize("method", ["greedy", "frank-wolfe"])
def test_a_person_of_several_rows_is_the_unit(method, neighbours):
    facts = PublicFacts(features=5000, rows=30_000, rows_per_person=7)
    plan = plan_fit(facts, Guarantee(1.0, 1e-7, neighbours), method=method)
    text = flat(Release(plan, np.array([1, 2]), np.array([0.5, -0.5]), 0.0, False))
    assert "The unit protected is all rows of one person, who owns at most 7 rows." in text
    assert "7 rows per person" in text
    assert "one person's rows, at most 7, are" in text
    s = 7 * (2 if neighbours == "replace-one" else 1)
    assert f"variance {plan.first_variance:,} at sensitivity {plan.resolution * s:,}" in text
