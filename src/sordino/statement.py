"""The disclosure statement: what a release gives away and what it does not, for a board."""

from __future__ import annotations

import html
import math
import re
from textwrap import fill
from typing import TYPE_CHECKING

import numpy as np

from .plan import SEEN_WITH, Plan
from .plan_text import (
    PREVALENCES,
    at_most,
    blind_words,
    change_words,
    counted,
    difference_words,
    exactly,
    facts_line,
    figure,
    in_rows,
    percent,
    rate_error,
    route_words,
    shares_of_cost,
)

if TYPE_CHECKING:
    from .release import Release

WIDTH = 88
MOST_SHOWN = 50

LARGE_EPSILON = 10.0
STRONG_EPSILON = 1.0
LARGE_DELTA = 1e-5
LARGEST_EXPONENT = 300 * math.log(10)


def statement(release: Release) -> str:
    """Markdown for a disclosure board; a rehearsal is marked as one at the top."""
    plan = release.plan
    mark = "a REHEARSAL of " if release.rehearsal else ""
    parts = [
        f"# Disclosure statement: {mark}a private sparse {plan.loss} model",
        *(_rehearsal_warning() if release.rehearsal else []),
        "## What is released", *_released(release),
        "## What is guaranteed", *_guaranteed(plan),
        "## How", *_how(plan),
        "## What was taken as public", *_public(release),
        "## What is not covered", *_uncovered(plan),
        "## How wrong it may be", *_error(plan),
        "## Before it is used", *_use(),
        "## Questions a board should ask", *_questions(),
    ]
    return "\n\n".join(parts) + "\n"


def _rehearsal_warning() -> list[str]:
    return [_paragraph(
        "**REHEARSAL: NOT PRIVATE, MUST NOT LEAVE. This model was made with a fixed seed, so its "
        "noise can be computed and taken off again. No guarantee below holds for it; what follows "
        "is what a private run of the same plan would state.**"
    )]


# --- what leaves

def _released(release: Release) -> list[str]:
    facts, chosen = release.plan.facts, len(release.features)
    intercept = (f"an intercept of {release.intercept:+.6g}" if release.plan.intercept else
                 "no intercept")
    paragraph = _paragraph(
        f"{counted(chosen, 'coefficient')} for {facts.features:,} features, all others "
        f"being 0, and {intercept}. They leave in a release file together with this plan, its "
        f"public facts and its guarantee, and nothing else that depends on the confidential rows. "
        f"The predicted probability of label 1 is 1/(1 + exp(-m)), m being the intercept plus the "
        f"sum of coefficient times entry."
    )
    if chosen == 0:
        return [paragraph]
    order = np.argsort(-abs(release.coefficients), kind="stable")[:MOST_SHOWN]
    title = ([] if chosen <= MOST_SHOWN else
             [f"The {MOST_SHOWN} largest; all {chosen:,} are in the release file."])
    return [paragraph, *title, _table(release, order)]


def _table(release: Release, order: np.ndarray) -> str:
    named = release.names is not None
    heads = ["feature", *(["name"] if named else []), "coefficient"]
    rows = [
        [f"{release.features[k]}", *([_cell(release.names[k])] if named else []),
         f"{release.coefficients[k]:+.6g}"]
        for k in order
    ]
    rules = ["---:", *(["---"] if named else []), "---:"]
    return "\n".join(f"| {' | '.join(row)} |" for row in [heads, rules, *rows])


def _cell(name: str) -> str:
    """A name as plain text in a Markdown table: it means nothing to Markdown or HTML."""
    printable = "".join(letter if letter.isprintable() else " " for letter in name)
    return html.escape(re.sub(r"([\\`*_\[\]|~])", r"\\\1", printable), quote=False)


# --- the promise

def _guaranteed(plan: Plan) -> list[str]:
    promise = plan.guarantee
    epsilon, delta = exactly(promise.epsilon), exactly(promise.delta)
    exact = ([] if not promise.delta else [_paragraph(
        "The exception, exactly: up to an event of that probability, releases follow laws that "
        "keep the factor always."
    )])
    return [
        *map(_paragraph, _plain_words(plan)),
        *exact,
        _paragraph(
            f"In symbols: **epsilon {epsilon}, delta {delta}**, neighbours "
            f"\"{promise.neighbours}\". For any two data sets D and D' that differ in that "
            f"{change_words(plan)}, and any set S of releases,"
        ),
        "    P[release(D) in S] <= e^epsilon * P[release(D') in S] + delta",
        _paragraph(
            f"Natively the plan costs zCDP rho = {at_most(plan.zcdp)}. At delta {delta} it spends "
            f"epsilon {at_most(plan.epsilon_spent)} of {epsilon}: {route_words(plan)}."
        ),
        *map(_paragraph, _remarks(plan)),
    ]


def _plain_words(plan: Plan) -> list[str]:
    promise = plan.guarantee
    joins = promise.neighbours == "add-remove"
    exception = f", except with probability {exactly(promise.delta)}" if promise.delta else ""
    likewise = ", with the same exception," if promise.delta else ""
    rows = counted(plan.facts.rows_per_person, "row")
    taking_part = ("whether any one person's row was among the data at all" if joins else
                   "what any one person's row holds, though not how many rows there are")
    doubt = ("is among them" if joins else "holds one record rather than another")
    return [
        f"It is differentially private: it hides {taking_part}. The unit protected is one row, and "
        f"a person has at most {rows}. One person's row changes the probability of any conclusion "
        f"that anyone draws from this release by a factor of at most e^epsilon (about "
        f"{_factor(promise.epsilon)}){exception}.",
        f"Whoever knows all other rows and thinks it as likely as not that a given person's row "
        f"{doubt} ends{likewise} between {_belief(-promise.epsilon)} and "
        f"{_belief(promise.epsilon)} sure of it. This holds whatever else they know or will learn.",
    ]


def _factor(epsilon: float) -> str:
    if epsilon > LARGEST_EXPONENT:
        return "more than 10^300"
    return figure(math.exp(epsilon))


def _belief(log_odds: float) -> str:
    """A probability as a percentage, rounded away from one half."""
    tail = 1000 / (1 + math.exp(min(abs(log_odds), LARGEST_EXPONENT)))
    least = math.floor(tail) / 10
    return f"{least if log_odds < 0 else 100 - least:g} %"


def _remarks(plan: Plan) -> list[str]:
    """How large epsilon and delta are, by common practice."""
    epsilon, delta, rows = plan.guarantee.epsilon, plan.guarantee.delta, plan.facts.rows
    remarks = [f"{_epsilon_remark(epsilon)} (Common practice, not a rule.)"]
    if delta >= 1 / rows:
        remarks.append(
            f"**Delta is large: {delta:g} is not below 1/rows = {1 / rows:.3g}. A delta like that "
            f"would even allow a random person's whole record to be published.**"
        )
    elif delta > LARGE_DELTA:
        remarks.append(f"**Delta is large: {delta:g} is above {LARGE_DELTA:g}, which common "
                       f"practice finds suspicious.** It is {delta * rows:.3g} times 1/rows.")
    elif delta > 1 / rows**2:
        remarks.append(f"Delta is {delta * rows:.3g} times 1/rows; the cautious go down to "
                       f"1/rows^2, here {1 / rows**2:.3g}.")
    return remarks


def _epsilon_remark(epsilon: float) -> str:
    if epsilon >= LARGE_EPSILON:
        return (f"**Epsilon is large: at {LARGE_EPSILON:g} and above the guarantee may mean "
                f"nothing.**")
    if epsilon > STRONG_EPSILON:
        return (f"**Epsilon is above {STRONG_EPSILON:g}**: weaker than what is called strong, and "
                f"short of {LARGE_EPSILON:g}, from where it may mean nothing.")
    return f"An epsilon of at most {STRONG_EPSILON:g} is called strong, 0.1 very strong."


# --- how it was made

def _how(plan: Plan) -> list[str]:
    intercept = (
        f"The intercept is measured {len(plan.intercept_looks)} times as a sum of whole numbers "
        f"with discrete Gaussian noise of variance {plan.intercept_variance:,}."
        if plan.intercept else "There is no intercept."
    )
    return [_bullets(
        f"Mechanisms: {plan.picks:,} picks of a signed feature by the exponential mechanism in "
        f"base 2 (Ilvento 2020), each of pick_epsilon {plan.pick_epsilon:.6g}, in a Frank-Wolfe "
        f"method (Jaggi 2013; Talwar, Thakurta and Zhang 2015), schedule {plan.schedule}. "
        f"{intercept}",
        "Randomness: the operating system's cryptographic generator, a new draw for every run.",
        "Arithmetic: what the noise protects are integers with exact bounds on what one row can "
        "change, and draws are exact: nothing is in floating point between those integers and the "
        "outcome.",
        "Accountant: eps0^2/8 in zCDP for a pick (Cesar and Rogers 2021), zCDP of the discrete "
        "Gaussian and the conversion by Canonne, Kamath and Steinke 2020, rounded to the safe "
        "side.",
        "Trust: whoever ran this held the raw rows. The guarantee is against everyone else.",
    )]


def _public(release: Release) -> list[str]:
    plan = release.plan
    names = ("the list of feature names" if release.names is not None else
             "what each feature id stands for")
    rows = ("the exact number of rows" if plan.guarantee.neighbours == "replace-one" else
            "the number of rows, as a planning figure")
    return [
        _paragraph("The guarantee holds only if these were known without reading the rows:"),
        _bullets(
            f"the facts: {facts_line(plan.facts)}; {rows};",
            f"{names};",
            f"the tuning: method, schedule, {counted(plan.steps, 'step')}, L1 radius "
            f"{plan.radius:g}, epsilon and delta. If any was changed after a look at results on "
            f"these rows, those looks must be accounted for too.",
        ),
    ]


def _uncovered(plan: Plan) -> list[str]:
    rows = plan.facts.rows_per_person
    return [_bullets(
        "Running time, memory and power: how long a fit takes depends on the data. It should run "
        "where nobody outside can watch, and its profile must not be published.",
        "Feature names, bounds and other facts that were not really public.",
        "Other releases from the same people: epsilons and deltas add up, as do the zCDP costs.",
        f"People with more than {counted(rows, 'row')}, households, groups: for k such "
        f"units together epsilon is k times as large, and delta grows faster than that.",
        "Facts about groups: if a model says that a trait goes with a label, that is learned about "
        "people who have the trait whether or not their rows were in the data.",
        "Truth: privacy does not make a model right, fair or causal.",
    )]


def _error(plan: Plan) -> list[str]:
    picks = (
        f"A pick has selection noise of {in_rows(plan.noise_rows)} (scale), and rounding "
        f"adds at most {in_rows(plan.rounding_rows)} (standard deviation). It finds a "
        f"feature with probability {SEEN_WITH:g} from an effect of "
        f"{in_rows(plan.smallest_effect_rows)} on. The least difference in label rate "
        f"that this is, for a 0/1 feature: {_differences(plan)}."
    )
    error = rate_error(plan)
    intercept = (f" Each look at the intercept is off by {error:.2g} of a label rate (standard "
                 f"deviation)." if plan.intercept else "")
    blind = [] if plan.sees_anything else [f"**{blind_words(plan)}**"]
    return [_paragraph(text) for text in [
        *blind,
        picks + intercept,
        "Coefficients are held small by the radius. A feature may have been picked by noise, and "
        "one that was not picked may well matter.",
        "Small subgroups are fitted worst, as their rows weigh little against the noise. Check "
        "the model on each subgroup it will be used for, on other data or under a budget.",
    ]]


def _differences(plan: Plan) -> str:
    return "; ".join(
        f"held by {percent(share)} of rows, {difference_words(plan, share)}"
        for share in PREVALENCES
    )


def _use() -> list[str]:
    return [_paragraph(
        "Epsilon and delta alone do not make a release lawful or wise. If these are health or "
        "other personal data, the decision is your disclosure board's, under local data-protection "
        "law and the terms on which the data was collected. The model is a statistical summary: it "
        "is no medical device and no ground for a decision about a person, and clinical use is a "
        "matter for licensed practitioners."
    )]


def _questions() -> list[str]:
    return [
        _numbered(
            "Whose data is it, and is one row really one person?",
            "Is all that was taken as public really public, the feature names above all?",
            "Who chose epsilon and delta, and do they suit data as sensitive as this?",
            "What else was or will be released from the same people, privately or not, and what "
            "does it add up to?",
            "Was anything tuned, clipped or filtered after a look at the rows?",
            "Who could watch the run: its time, its errors, its logs, the machine?",
            "Is the error stated above small enough for the use intended, in every subgroup?",
            "This is not a standard product but software of its own: who has reviewed and tested "
            "it, and was its promise checked by experiment?",
        ),
        _paragraph(
            "The questions follow the hazards named in NIST SP 800-226, which the authors of this "
            "software know from a secondary summary only."
        ),
    ]


# --- Markdown

def _paragraph(text: str) -> str:
    return _wrapped(text, "", "")


def _bullets(*items: str) -> str:
    return "\n".join(_wrapped(item, "* ", "  ") for item in items)


def _numbered(*items: str) -> str:
    return "\n".join(_wrapped(item, f"{k}. ", "   ") for k, item in enumerate(items, 1))


def _wrapped(text: str, first: str, then: str) -> str:
    return fill(text, WIDTH, initial_indent=first, subsequent_indent=then,
                break_long_words=False, break_on_hyphens=False)
