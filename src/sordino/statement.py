"""The disclosure statement: what a release gives away and what it does not, for a board."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING

import numpy as np

from .book import Entry
from .facts import Guarantee
from .page import Block, Formula, Heading, Paragraph, Points, Table, as_html, as_markdown
from .plan import SEEN_WITH, GreedyPlan, Plan
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
    label_mean,
    percent,
    public_knowledge,
    look_error,
    route_words,
    shares_of_cost,
    unit_words,
)

if TYPE_CHECKING:
    from .release import Release

MOST_SHOWN = 50

LARGE_EPSILON = 10.0
STRONG_EPSILON = 1.0
VERY_STRONG_EPSILON = 0.1
LARGE_DELTA = 1e-5
LARGEST_EXPONENT = 300 * math.log(10)

# Dwork and Roth 2014, Lemma 3.17 (from memory): the pair exists, delta/(1 + e^epsilon) away.
EXCEPTION = (
    "(The exception, exactly: the distributions of releases before and after such a change are "
    "within that probability of two that keep the factor always.)"
)


def statement(release: Release) -> str:
    """Markdown for a disclosure board; a rehearsal is marked as one at the top."""
    return as_markdown(_blocks(release))


def statement_page(release: Release) -> str:
    """The same as a web page, in one file that needs nothing else."""
    return as_html(_blocks(release), _title(release))


def _title(release: Release) -> str:
    mark = "a REHEARSAL of " if release.rehearsal else ""
    return f"Disclosure statement: {mark}a private sparse {release.plan.loss_form.kind} model"


def _blocks(release: Release) -> list[Block]:
    return [
        Heading(_title(release), level=1),
        *(_rehearsal_warning() if release.rehearsal else []),
        Heading("What is released"), *_released(release),
        Heading("What is guaranteed"), *_guaranteed(release),
        Heading("How it was made"), *_how(release),
        Heading("What was taken as public"), *_public(release),
        Heading("What else was spent on the same data"), *_spent(release),
        Heading("What is not covered"), *_uncovered(),
        Heading("How wrong it may be"), *_error(release.known),
        Heading("How well it does, as measured privately"), *_measured(release),
        Heading("Before it is used"), *_use(),
        Heading("Questions a board should ask"), *_questions(release),
    ]


def _rehearsal_warning() -> list[Block]:
    return [Paragraph(
        "**REHEARSAL: NOT PRIVATE, MUST NOT LEAVE. This model was made with a fixed seed, so its "
        "noise can be computed and taken off again. No guarantee below holds for it; what follows "
        "is what a private run of the same plan would state.**"
    )]


# --- what leaves

def _released(release: Release) -> list[Block]:
    facts, chosen = release.plan.facts, len(release.features)
    noise = ("" if math.isnan(release.intercept_deviation) else
             f" (noise {release.intercept_deviation:.3g})")
    intercept = (f"an intercept of {release.intercept:+.6g}{noise}" if release.plan.intercept else
                 "no intercept" if release.binary else
                 f"the middle of the label range, {release.intercept:g}, in place of an intercept")
    paragraph = Paragraph(
        f"{counted(chosen, 'coefficient')} for {facts.features:,} features, all others "
        f"being 0, and {intercept}. The release file holds them with the plan, its public facts "
        f"and its guarantee, and nothing else that depends on the confidential rows. "
        + _prediction(release) + _learned_words(release)
    )
    if chosen == 0:
        return [paragraph]
    meaning = [Paragraph(
        "Noise: the standard deviation that the noise of the corrections, which is public, gives "
        "the coefficient. Neither sampling error is in it, nor the noise of second moments, nor "
        "that other features might have been picked."
    )] if _has_deviations(release) else []
    order = np.argsort(-abs(release.coefficients), kind="stable")[:MOST_SHOWN]
    title = ([] if chosen <= MOST_SHOWN else
             [Paragraph(f"The {MOST_SHOWN} largest; all {chosen:,} are in the release file.")])
    return [paragraph, *title, _table(release, order), *meaning]


def _prediction(release: Release) -> str:
    if release.binary:
        return ("The predicted probability of label 1 is 1/(1+exp(-m)), m being the intercept plus "
                "the sum of coefficient times entry.")
    return ("The predicted label is the intercept plus the sum of coefficient times entry; it is "
            "fitted to labels clipped to their range and residuals clipped at "
            f"{figure(release.known.loss_form.unit)} in the label's units.")


def _table(release: Release, order: np.ndarray) -> Table:
    named, noisy = release.names is not None, _has_deviations(release)
    heads = ["feature", *(["name"] if named else []), "coefficient", *(["noise"] if noisy else [])]
    rows = [
        (f"{release.features[k]}", *([release.names[k]] if named else []),
         f"{release.coefficients[k]:+.6g}",
         *([_noise_cell(release.deviations[k])] if noisy else []))
        for k in order
    ]
    return Table(tuple(heads), tuple(rows))


def _has_deviations(release: Release) -> bool:
    return not np.isnan(release.deviations).all()


def _noise_cell(deviation: float) -> str:
    return "" if math.isnan(deviation) else f"{deviation:.3g}"


# --- the promise

def _guaranteed(release: Release) -> list[Block]:
    plan, promise = release.plan, release.guarantee
    epsilon, delta = exactly(promise.epsilon), exactly(promise.delta)
    return [
        *map(Paragraph, _plain_words(release)),
        Paragraph(
            f"In symbols: **epsilon {epsilon}, delta {delta}**, neighbours "
            f"\"{promise.neighbours}\". For any two data sets D and D' that differ in that "
            f"{change_words(plan)}, and any set S of releases,"
        ),
        Formula("P[release(D) in S] <= e^epsilon * P[release(D') in S] + delta"),
        Paragraph(
            f"Natively the plan costs zCDP rho = {at_most(plan.zcdp)}, the figure to compose with "
            f"others: converted first, budgets add up to more than they are. At delta {delta} it "
            f"spends epsilon {at_most(plan.epsilon_spent)} of {epsilon}: {route_words(plan)}."
        ),
        *map(Paragraph, _remarks(plan)),
    ]


def _learned_words(release: Release) -> str:
    """The facts that the fit learned."""
    said = {"entry_bound": "entries are clipped at {:g}",
            "label": "labels at {0[0]:g} and {0[1]:g}"}
    clauses = [said[name].format(value) for name, value in release.learned.items()]
    return f" Learned privately: {', '.join(clauses)}." if clauses else ""


def _plain_words(release: Release) -> list[str]:
    plan, promise = release.plan, release.guarantee
    subject = "A private run of this plan would be" if release.rehearsal else "This release is"
    joins = promise.neighbours == "add-remove"
    several = plan.facts.rows_per_person > 1
    hidden = (f"whether any one person's {'rows were' if several else 'row was'} among the data at "
              "all" if joins else
              f"what any one person's {'rows hold' if several else 'row holds'}, though not how "
              "many rows there are")
    unit = ("all rows of one person, who owns" if several else "one row, and one person owns")
    rows = "rows change" if several else "row changes"
    doubt = (("are among them" if several else "is among them") if joins else
             f"{'hold' if several else 'holds'} one record rather than another")
    exception = f", except with probability {exactly(promise.delta)}" if promise.delta else ""
    likewise = ", with the same exception," if promise.delta else ""
    return [
        f"{subject} differentially private: it blurs {hidden}. The unit protected is {unit} "
        f"at most {counted(plan.facts.rows_per_person, 'row')}. {'Those' if several else 'That'} "
        f"{rows} the probability of any conclusion drawn from the release by a factor of at most "
        f"e^epsilon ({_factor(promise.epsilon)}){exception}.",
        f"So whoever knows all other rows and thinks it as likely as not that a given person's "
        f"{'rows' if several else 'row'} {doubt} ends{likewise} between "
        f"{_belief(-promise.epsilon)} and {_belief(promise.epsilon)} sure of it, whatever "
        "else they know or will learn." + (f" {EXCEPTION}" if promise.delta else ""),
    ]


def _factor(epsilon: float) -> str:
    if epsilon > LARGEST_EXPONENT:
        return "more than 10^300"
    return f"about {figure(math.exp(epsilon))}"


def _belief(log_odds: float) -> str:
    """A probability as a percentage, rounded away from one half."""
    tail = 1000 / (1 + math.exp(min(abs(log_odds), LARGEST_EXPONENT)))
    least = math.floor(tail) / 10
    return f"{least if log_odds < 0 else 100 - least:g} %"


def _remarks(plan: Plan) -> list[str]:
    """How large epsilon and delta are, by common practice."""
    return [
        f"{_epsilon_remark(plan.guarantee.epsilon)} (Common practice, not a rule.)",
        *_delta_remark(plan.guarantee.delta, plan.facts.rows),
    ]


def _epsilon_remark(epsilon: float) -> str:
    if epsilon >= LARGE_EPSILON:
        return f"**Epsilon is large: from {LARGE_EPSILON:g} on the guarantee may mean nothing.**"
    if epsilon >= STRONG_EPSILON:
        return (f"**Epsilon is not below {STRONG_EPSILON:g}**, where it would be called strong, "
                f"but below {LARGE_EPSILON:g}, from where on it may mean nothing.")
    return (f"An epsilon below {STRONG_EPSILON:g} is called strong, one of "
            f"{VERY_STRONG_EPSILON:g} very strong.")


def _delta_remark(delta: float, rows: int) -> list[str]:
    if delta >= 1 / rows:
        return [f"**Delta is large: {exactly(delta)} is not below 1/rows = {1 / rows:.3g}. Such a "
                f"delta would even allow a random person's whole record to be published.**"]
    if delta > LARGE_DELTA:
        return [f"**Delta is large: {exactly(delta)} is above {LARGE_DELTA:g}, which common "
                f"practice finds suspicious.** It is {delta * rows:.3g} times 1/rows."]
    if delta > 1 / rows**2:
        return [f"Delta is {delta * rows:.3g} times 1/rows; the cautious go down to 1/rows^2, "
                f"here {1 / rows**2:.3g}."]
    return []


# --- how it was made

def _how(release: Release) -> list[Block]:
    randomness = (
        "a generator with a fixed seed, so this run is not private" if release.rehearsal else
        "the operating system's cryptographic generator, drawn anew for every run"
    )
    return [Points((
        *_mechanisms(release.plan),
        f"Randomness: {randomness}.",
        "Arithmetic: what the noise protects are integers with exact bounds on what one row can "
        "change, and draws are exact: no floating point stands between them and the outcome.",
        "Accountant: a pick costs pick_epsilon^2/8 in zCDP (Cesar and Rogers 2021); costs of "
        "discrete Gaussian noise, and the conversion, by Canonne, Kamath and Steinke 2020; rounded "
        "to the safe side.",
        "Trust: whoever ran this held the raw rows. The guarantee is against everyone else.",
    ))]


def _mechanisms(plan: Plan) -> list[str]:
    """One sentence for each of `plan.parts`."""
    shares = {part: f"{percent(share)} of the cost" for (part, _), share in
              zip(plan.parts, shares_of_cost(plan))}
    told = {
        "picks": _picks_words,
        "entry bound": _entry_bound_words,
        "label range": _label_range_words,
        "rows": _rows_words,
        "intercept": _intercept_words,
        "corrections": _corrections_words,
        "second moments": _moments_words,
    }
    return [f"{told[part](plan)}; {share}." for part, share in shares.items()]


def _picks_words(plan: Plan) -> str:
    by = "by the exponential mechanism in base 2 (Ilvento 2020)"
    if isinstance(plan, GreedyPlan):
        first, last = (at_most(plan.epsilon_of_rate(end)) for end in
                       (plan.multipliers[0], plan.multipliers[-1]))
        return (f"Features: {counted(plan.picks, 'pick')} of one fresh feature each {by}, of "
                f"pick_epsilon {first} at first to {last} at last")
    return (
        f"Features: {counted(plan.picks, 'pick')} of one signed feature {by}, each of pick_epsilon "
        f"{at_most(plan.pick_epsilon)}, each one step of {plan.schedule} Frank-Wolfe (Frank and "
        "Wolfe 1956; Jaggi 2013; private steps: Talwar, Thakurta and Zhang 2015)"
    )


def _entry_bound_words(plan: Plan) -> str:
    pick = plan.entry_quantile
    return (f"Entry bound: {_quantile_words(plan, pick)} of the size of one entry per row, chosen "
            "at random")


def _label_range_words(plan: Plan) -> str:
    return (f"Label range: {_quantile_words(plan, plan.label_quantile)} of the labels, from either "
            "end")


def _quantile_words(plan: Plan, pick) -> str:
    epsilon = pick.epsilon(plan.facts.rows_per_person, plan.guarantee.neighbours)
    return (f"the {pick.a}/{pick.c} quantile, picked by the exponential mechanism from a public "
            f"grid of powers of 2^(1/8) with pick_epsilon {at_most(epsilon)} (Smith 2011),")


def _rows_words(plan: Plan) -> str:
    return (f"Rows: their number, with discrete Gaussian noise of variance {plan.rows_variance:,} "
            f"at sensitivity {plan.changes:,}")


def _intercept_words(plan: Plan) -> str:
    return (f"Intercept: {counted(plan.looks, 'integer sum')} of all derivatives with discrete "
            f"Gaussian noise, variance {plan.first_variance:,} at sensitivity "
            f"{plan.intercept_sensitivity:,}")


def _corrections_words(plan: Plan) -> str:
    whose = "chosen" if isinstance(plan, GreedyPlan) else "included"
    return (f"Coefficients: {counted(plan.corrections, 'gradient')} over the intercept and the "
            f"{whose} features, every row clipped in L2, with discrete Gaussian noise of variance "
            f"{plan.correction_variance:,} at sensitivity {plan.gradient_sensitivity:,}")


def _moments_words(plan: Plan) -> str:
    return (f"Second moments of those features, every row clipped likewise, with noise of variance "
            f"{plan.moment_variance:,} at sensitivity {plan.moment_sensitivity:,}")


def _tuning(plan: Plan) -> str:
    if isinstance(plan, GreedyPlan):
        return f"method, {counted(plan.picks, 'pick')}, clipping at {exactly(plan.norm)} bounds"
    return f"method, schedule, {counted(plan.steps, 'step')}, L1 radius {exactly(plan.radius)}"


def _public(release: Release) -> list[Block]:
    plan = release.plan
    names = ("the list of feature names" if release.names is not None else
             "what each feature id stands for")
    rows = ("the exact number of rows" if plan.guarantee.neighbours == "replace-one" else
            "the number of rows, as a planning figure")
    return [
        Paragraph("The guarantee holds only if these were known without reading the rows:"),
        Points((
            f"the facts: {facts_line(plan.facts)}; {rows};",
            f"{_rows_of_a_person(release)};",
            f"{names};",
            *(f"{clause};" for clause in public_knowledge(plan)),
            f"the tuning: {_tuning(plan)}, epsilon and delta. Looks at these rows that led to a "
            "change of any of them cost extra.",
        )),
    ]


def _rows_of_a_person(release: Release) -> str:
    most = counted(release.plan.facts.rows_per_person, "row")
    if release.persons_bounded:
        return (f"that no person has more than {most}: this was made so, by the ids of persons, "
                "which must be right; surplus rows were dropped at random")
    return f"that no person has more than {most}: nobody checked it"


def _spent(release: Release) -> list[Block]:
    """What the budget book of the data says, this fit included."""
    if release.spending is None:
        return [Paragraph(
            "No budget book was kept for this fit, so what else was spent on the same data is not "
            "known here. Ask: budgets add up."
        )]
    cap = Guarantee.from_dict(release.spending["cap"])
    charges = [Entry.from_dict(charge) for charge in release.spending["charges"]]
    spent = Paragraph(
        f"The budget book of the data shows {counted(len(charges), 'charge')} by the time of this "
        f"fit, this one included (the last). Together they come to epsilon "
        f"{at_most(release.spending['epsilon_spent'])} at delta {exactly(cap.delta)}, of a cap of "
        f"{exactly(cap.epsilon)} ({cap.neighbours}). Charges on disjoint parts of the data count "
        "once, for the dearest part."
    )
    return [spent, Table(
        ("no.", "when", "what", "part", "zCDP"),
        tuple((f"{entry.number}", entry.at[:10], entry.what, " / ".join(entry.part) or "all",
               at_most(entry.zcdp)) for entry in charges),
        words=("when", "what", "part"),
    )]


def _uncovered() -> list[Block]:
    return [Points((
        "Running time, for those who can watch it: it depends on the data, and so does the run's "
        "profile, which must stay inside.",
        "Errors and refusals, which may name a row and its value: they must stay inside too.",
        "The raw rows themselves: who can read them, where they are stored, how they were "
        "collected. The guarantee begins with the release.",
        "Feature names, bounds and other facts, if they were not really public.",
        "Other releases on the same people, private or not: budgets add up, and a release without "
        "noise can undo what noise protects.",
        "People with more rows than stated, households, groups: k rows together are protected k "
        "times less (epsilon is k times as large, and delta grows faster than that).",
        "Facts about groups: that a trait goes with a label is learned about everyone who has the "
        "trait, whether or not their rows were in the data. Nor is it hidden who belongs to the "
        "population that the study drew from.",
        "Truth: privacy does not make a model right, fair or causal.",
    ))]


def _error(plan: Plan) -> list[Block]:
    blind = [] if plan.sees_anything else [f"**{blind_words(plan)}**"]
    picks = (
        f"The noise of a pick has a scale of {in_rows(plan.noise_rows)}; rounding adds at most "
        f"{in_rows(plan.rounding_rows)} (standard deviation). A pick finds a feature in noise "
        f"alone with probability {SEEN_WITH:g} from an effect of "
        f"{in_rows(plan.smallest_effect_rows)} on. For a 0/1 feature that is a difference in "
        f"{label_mean(plan)}: {_differences(plan)}."
    )
    looks = "The first look" if isinstance(plan, GreedyPlan) else "Each look"
    intercept = (f" {looks} at the intercept is off by {look_error(plan):.3g} of "
                 f"{unit_words(plan)} (standard deviation)." if plan.intercept else "")
    return [Paragraph(text) for text in [
        *blind,
        picks + intercept,
        f"{_smallness(plan)}A feature may have been picked by noise, and one "
        "that was not picked may well matter. Small subgroups are fitted worst, as their rows "
        "weigh little against the noise: check the model on each subgroup it will be used for, on "
        "other data or under a budget.",
    ]]


def _measured(release: Release) -> list[Block]:
    """What the evaluations that are kept with the release found."""
    if not release.evaluations:
        return [Paragraph(
            "No private evaluation is kept with this release. A figure computed openly on "
            "confidential rows would be a release of its own, without protection."
        )]
    note = Paragraph(
        "Noise: one standard error of the noise that was added. Chance in which rows were there to "
        "measure on is not in it."
    )
    return [block for evaluation in release.evaluations for block in _one_measured(evaluation)] + [
        note]


def _one_measured(evaluation) -> list[Block]:
    promise = evaluation.guarantee
    most = counted(evaluation.terms.rows_per_person, "row")
    return [
        Paragraph(
            "On held-out rows, under a guarantee of their own: epsilon "
            f"{exactly(promise.epsilon)}, delta {exactly(promise.delta)} ({promise.neighbours}, "
            f"at most {most} per person), "
            f"zCDP {at_most(evaluation.cost.zcdp)}, by discrete Gaussian noise on whole numbers, "
            f"variance {evaluation.terms.variance:,}."
        ),
        Table(("figure", "value", "noise"), tuple(
            (name, _figure_cell(figure_), _figure_cell(figure_.standard_error))
            for name, figure_ in evaluation.figures.items()), words=("figure",)),
    ]


def _figure_cell(value: float) -> str:
    return "unknown" if math.isnan(value) else f"{float(value):.4g}"


def _smallness(plan: Plan) -> str:
    return "" if isinstance(plan, GreedyPlan) else "The radius holds coefficients small. "


def _differences(plan: Plan) -> str:
    return "; ".join(
        f"held by {percent(share)} of rows, {difference_words(plan, share)}"
        for share in PREVALENCES
    )


def _use() -> list[Block]:
    return [Paragraph(
        "Epsilon and delta alone do not make a release lawful or wise. If these are health or "
        "other personal data, the decision is your disclosure board's, under local data-protection "
        "law and the terms on which the data was collected. The model is a statistical summary: it "
        "is no medical device and no ground for a decision about a person, and clinical use is a "
        "matter for licensed practitioners."
    )]


def _questions(release: Release) -> list[Block]:
    whose = ("are the ids of persons right" if release.persons_bounded else
             "is one row really one person" if release.plan.facts.rows_per_person == 1 else
             "does really no person own more rows than stated")
    return [
        Points((
            f"Whose data is it, and {whose}?",
            "Is all that was taken as public really public, the feature names above all?",
            "Who chose epsilon and delta, and do they suit data as sensitive as this?",
            "What else was or will be released on the same people, privately or not, and what does "
            "it add up to?",
            "Was anything tuned, clipped or filtered after a look at the rows?",
            "Who could watch the run: its time, its errors, its logs, the machine?",
            "Is the error stated above small enough for the use intended, in every subgroup?",
            "This is not a standard product but software of its own: who has reviewed and tested "
            "it, and was its promise checked by experiment?",
        ), numbered=True),
        Paragraph(
            "The questions follow the hazards named in NIST SP 800-226, through a secondary "
            "summary: the document itself was not read."
        ),
    ]
