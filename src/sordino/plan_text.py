"""How a plan reads: a summary to decide by, and an account of every number in it."""

from __future__ import annotations

import math
from decimal import ROUND_CEILING, Context
from textwrap import fill

from .accounting import epsilon_and_route, epsilon_of_zcdp
from .facts import PublicFacts
from .losses import RESIDUAL_BOUNDS
from .plan import (
    DEFAULT_STEPS,
    INTERCEPT_ERROR,
    INTERCEPT_SHARES,
    REACH,
    ROUNDING_SHARE,
    SEEN_WITH,
    FrankWolfePlan,
    GreedyPlan,
    Plan,
    default_picks,
    default_radius,
    default_steps,
)
from .plan.base import LEARNING_SHARE, ROWS_SHARE
from .plan.corrections import COEFFICIENT_BITS, DAMPING, NORM, SHARES, WEIGHT_BITS
from .plan.greedy import LAST_TO_FIRST, MOST_PICKS

WIDTH = 79
MARGIN = 12
VALUES_AT = 40
PREVALENCES = (0.001, 0.01, 0.1)
UNSEEN = "cannot be seen"
SIX_DIGITS_UP = Context(prec=6, rounding=ROUND_CEILING)

ROUTES = {
    "zcdp": "all parts add up in zCDP, which is then converted",
    "pure": "the picks' pure epsilons add up",
    "pure + zcdp": "the picks' pure epsilons, plus the intercept's zCDP converted",
}

CONVERSION = (
    "a zCDP of rho converts to the least over alpha > 1 of rho alpha + "
    "ln(1/(alpha delta))/(alpha - 1) + ln(1 - 1/alpha)"
)

METHOD_SOURCES = {
    "frank-wolfe": (
        "Frank-Wolfe: Frank and Wolfe 1956; over the L1 ball: Jaggi 2013.",
        "Vertices picked privately: Talwar, Thakurta and Zhang 2015.",
    ),
    "greedy": (
        "Greedy selection with joint refits: orthogonal matching pursuit, Pati, Rezaiifar and "
        "Krishnaprasad 1993.",
    ),
}
SOURCES = (
    "Exponential mechanism in base 2, on integers: Ilvento 2020.",
    "A pick of bounded range eps0 costs eps0^2/8 in zCDP: Cesar and Rogers 2021.",
    "Discrete Gaussian noise, and from zCDP to (epsilon, delta): Canonne, Kamath and Steinke 2020.",
)


# --- the summary

def summary(plan: Plan) -> str:
    """What `print(plan)` shows: plain text, under 80 columns."""
    blocks = [
        ("facts", [facts_line(plan.facts), *public_knowledge(plan)]),
        ("guarantee", [promise_line(plan)]),
        ("method", _method_lines(plan)),
        ("cost", _cost_lines(plan)),
        ("noise", _noise_lines(plan)),
        ("effect", _effect_lines(plan)),
    ]
    title = f"A plan for a private sparse {plan.loss_form.kind} regression"
    return "\n\n".join([title, *(_block(name, lines) for name, lines in blocks)])


def _block(name: str, paragraphs: list[str]) -> str:
    """Paragraphs beside their heading; those that start with a space are kept as they are."""
    margin = " " * MARGIN
    lines = [
        margin + text if text.startswith(" ") else
        _wrapped(text, margin)
        for text in paragraphs
    ]
    return name.ljust(MARGIN) + "\n".join(lines).removeprefix(margin)


def facts_line(facts: PublicFacts) -> str:
    """The public facts in one sentence."""
    return (
        f"{counted(facts.rows, 'row')} by {counted(facts.features, 'feature')}, "
        f"{_bound_words(facts)}, {_label_words(facts)}, "
        f"{counted(facts.rows_per_person, 'row')} per person"
    )


def public_knowledge(plan: Plan) -> list[str]:
    """What the user states as public beyond the facts, a clause each."""
    known = plan.knowledge
    clauses = []
    if known.include:
        clauses.append(f"{counted(len(known.include), 'feature')} in the model by decision")
    if known.exclude:
        clauses.append(f"{counted(len(known.exclude), 'feature')} never picked")
    if known.prior:
        clauses.append(f"a prior by which picks weigh {counted(len(known.prior), 'feature')} "
                       f"{_powers(plan)} times as much as the others")
    if known.start is not None:
        clauses.append(f"{counted(len(known.started), 'coefficient')} and an intercept to start "
                       "from")
    return [f"{clause}, stated as public by the user" for clause in clauses]


def _bound_words(facts: PublicFacts) -> str:
    if "entry_bound" in facts.learned:
        return "entries within a bound to be learned"
    if not facts.bound_per_feature:
        return f"entries within {_bounds(facts)}"
    return f"entries within bounds of {_bounds(facts)}, one per feature"


def _bounds(facts: PublicFacts) -> str:
    if "entry_bound" in facts.learned:
        return "to be learned"
    if not facts.bound_per_feature:
        return exactly(facts.entry_bound)
    return f"{exactly(facts.entry_bound.min())} to {exactly(facts.entry_bound.max())}"


def _label_words(facts: PublicFacts) -> str:
    if "label" in facts.learned:
        return "label range to be learned"
    if isinstance(facts.label, str):
        return f"{facts.label} label"
    return "label from {} to {}".format(*map(exactly, facts.label))


def promise_line(plan: Plan) -> str:
    """The guarantee in one sentence."""
    promise = plan.guarantee
    rest = f", plus {exactly(promise.delta)}," if promise.delta else ""
    return (
        f"epsilon {exactly(promise.epsilon)}, delta {exactly(promise.delta)} "
        f"({promise.neighbours}): no outcome becomes more than e^{exactly(promise.epsilon)} times "
        f"as likely{rest} when {change_words(plan)}"
    )


def change_words(plan: Plan) -> str:
    """What neighbours differ in, as a clause."""
    rows, verb = ("row", "is") if plan.facts.rows_per_person == 1 else (
        f"rows, at most {plan.facts.rows_per_person:,},", "are")
    if plan.guarantee.neighbours == "add-remove":
        return f"one person's {rows} {verb} added or taken away"
    return f"one person's {rows} {verb} changed, the number of rows being public"


def _method_lines(plan: Plan) -> list[str]:
    if isinstance(plan, GreedyPlan):
        return [
            f"greedy: {counted(plan.picks, 'feature')}, all different, one private pick each; "
            "after each pick a noisy joint correction of the intercept and all features so far, "
            f"{plan.final_corrections} more at the end, the last {plan.averaged} averaged",
            f"a row counts for less where it is longer than {exactly(plan.norm)} bounds over the "
            "intercept and the chosen features",
        ]
    course = (
        f"Frank-Wolfe, {plan.schedule}: {counted(plan.steps, 'step')} with one private pick each, "
        f"L1 radius {exactly(plan.radius)}"
    )
    if not plan.intercept:
        return [course, "no intercept"]
    measured = "an intercept" if not plan.in_model else (
        f"an intercept and {counted(len(plan.in_model), 'feature')} included by decision, together")
    return [course, f"{measured}, measured {counted(len(plan.intercept_looks), 'time')} from "
                    "before the first step to after the last"]


def _cost_lines(plan: Plan) -> list[str]:
    promise = plan.guarantee
    *shares, last = (f"{percent(share)} for the {part}" for (part, _), share in
                     zip(plan.parts, shares_of_cost(plan)))
    shares = " and ".join([", ".join(shares), last]) if shares else last
    return [
        f"epsilon {at_most(plan.epsilon_spent)} of {exactly(promise.epsilon)} at delta "
        f"{exactly(promise.delta)}: {route_words(plan)}",
        f"zCDP {at_most(plan.zcdp)}; {shares}",
    ]


def route_words(plan: Plan) -> str:
    """How the parts of the cost add up, at its cheapest."""
    return ROUTES[epsilon_and_route(plan.costs, plan.guarantee.delta)[1]]


def shares_of_cost(plan: Plan) -> list[float]:
    """The share of each of `plan.costs`, in the currency in which they add up."""
    route = epsilon_and_route(plan.costs, plan.guarantee.delta)[1]
    if route == "pure + zcdp":
        zcdp = math.fsum(cost.zcdp for cost in plan.costs if cost.pure == math.inf)
        rate = epsilon_of_zcdp(zcdp, plan.guarantee.delta) / zcdp
        parts = [rate * cost.zcdp if cost.pure == math.inf else cost.pure for cost in plan.costs]
    else:
        parts = [cost.pure if route == "pure" else cost.zcdp for cost in plan.costs]
    return [part / math.fsum(parts) for part in parts]


def _picks_differ(plan: Plan) -> bool:
    return plan.multipliers[0] != plan.multipliers[-1]


def _noise_lines(plan: Plan) -> list[str]:
    first = plan.noise_rows_at(plan.multipliers[0])
    growing = (f"{in_rows(first)} at the first pick, falling to "
               if _picks_differ(plan) else "")
    return [
        f"{growing}{in_rows(plan.noise_rows)}{' at the last' if growing else ''}: a pick weighs a "
        f"score of u rows by exp(u/{figure(plan.noise_rows)})",
        f"resolution {plan.resolution:,}: rounding adds at most "
        f"{in_rows(plan.rounding_rows)} (standard deviation)",
    ]


# --- what can be seen

def _effect_lines(plan: Plan) -> list[str]:
    lines = [
        f"{'the last' if _picks_differ(plan) else 'a'} pick sees a feature from a score "
        f"of {in_rows(plan.smallest_effect_rows)} on: against noise alone it takes it with "
        f"probability {SEEN_WITH:g}"
    ]
    if plan.knowledge.prior:
        lines.append(f"one that the prior favours most, from {in_rows(plan.favoured_effect_rows)} "
                     "on")
    if not plan.sees_anything:
        return [*lines, blind_words(plan)]
    lines.append(
        f"as a difference in {label_mean(plan)} between rows with a 0/1 feature and those without:"
    )
    lines += [f"  held by {percent(share):>5} of rows   {difference_words(plan, share)}"
              for share in PREVALENCES]
    least = least_prevalence(plan)
    return [*lines, f"a feature can be seen at all once {percent(least)} of rows "
                    f"({in_rows(least * plan.facts.rows)}) hold it and as many do not"]


def label_mean(plan: Plan) -> str:
    """What differences are differences of."""
    if "label" in plan.facts.learned:
        return "mean label (in half ranges)"
    return "label rate" if plan.facts.label == "binary" else "mean label"


def difference_words(plan: Plan, prevalence: float) -> str:
    """The smallest visible difference at this prevalence, or that there is none."""
    difference = plan.smallest_difference(prevalence)
    return figure(difference) if difference <= plan.most_difference else UNSEEN


def least_prevalence(plan: Plan) -> float:
    """The smaller root f of `smallest_difference(f)` = `most_difference`.

    For plans that see anything.
    """
    product = plan.smallest_difference(0.5) / plan.most_difference / 4
    return 2 * product / (1 + math.sqrt(1 - 4 * product))


def blind_words(plan: Plan) -> str:
    """That nothing can be detected, why, and what would help."""
    most = plan.facts.rows / 4 * plan.most_difference / plan.loss_form.unit
    return (
        f"THIS PLAN CANNOT DETECT ANYTHING. Even a feature held by half the rows that decides "
        f"every label has a score of only {in_rows(most)}, "
        f"{figure(plan.smallest_effect_rows / most)} times too few: picks would be noise. What "
        f"would help: more epsilon, fewer {'picks' if isinstance(plan, GreedyPlan) else 'steps'} "
        "or more rows."
    )


# --- every number

def explanation(plan: Plan) -> str:
    """What `plan.explain()` shows: every number, its formula, and the public fact behind it."""
    parts = [
        ("Stated by you: public facts and the guarantee", _stated(plan)),
        ("Chosen, by you or by plan_fit's rules from what is above", _chosen(plan)),
        ("Computed: the mechanism", _mechanism(plan)),
        ("Computed: what it costs", _costs(plan)),
        ("Computed: what it can see", _sight(plan)),
    ]
    blocks = ["Every number in this plan. No data was read for any of them."]
    blocks += ["\n".join([title, *map(_entry, entries)]) for title, entries in parts]
    sources = METHOD_SOURCES[plan.method] + SOURCES
    blocks.append("\n".join(["Sources", *(_indented(source) for source in sources)]))
    return "\n\n".join(blocks)


def _entry(entry: tuple[str, str, str]) -> str:
    """A name, its value, and under them where the value comes from."""
    name, value, origin = entry
    return f"  {name}".ljust(VALUES_AT) + f"{value}\n{_indented(origin)}"


def _indented(text: str) -> str:
    return _wrapped(text, " " * 6)


def _stated(plan: Plan) -> list[tuple]:
    facts, promise = plan.facts, plan.guarantee
    label = ("range to be learned" if "label" in facts.learned else
             facts.label if facts.label == "binary" else
             "{} to {}".format(*map(exactly, facts.label)))
    standing = ("exact and public" if promise.neighbours == "replace-one" else
                "a planning figure, on which the guarantee does not rest")
    return [
        ("features d", f"{facts.features:,}", "columns of the table"),
        ("rows n", f"{facts.rows:,}", f"rows of the table: {standing}"),
        ("entry bound B", _bounds(facts), "in the units of the data; entries are clipped to it"),
        ("label", label, "any other label is refused" if facts.label == "binary"
         else "labels are clipped to it"),
        ("rows per person", f"{facts.rows_per_person:,}",
         "the guarantee covers a person with that many rows, no more"),
        ("epsilon, delta", f"{exactly(promise.epsilon)}, {exactly(promise.delta)}",
         "of the guarantee"),
        ("neighbours", promise.neighbours, f"of the guarantee: {change_words(plan)}"),
        ("one-row changes s", f"{plan.changes}",
         "that make one neighbour of another: a person's rows under add-remove, twice as many "
         "under replace-one"),
        *_known(plan),
    ]


def _known(plan: Plan) -> list[tuple]:
    """Public knowledge about features."""
    known, users = plan.knowledge, "stated as public by the user"
    entries = []
    if known.include:
        entries.append(("included", f"{len(known.include):,}",
                        f"features in the model by decision, corrected like the others, never "
                        f"drawn, {users}"))
    if known.exclude:
        entries.append(("excluded", f"{len(known.exclude):,}", f"features never picked, {users}"))
    if known.prior:
        entries.append(("prior", counted(len(known.prior), "feature"),
                        f"that a pick weighs {_powers(plan)} times as much as others, {users}"))
    if known.start is not None:
        entries.append(("start", counted(len(known.started), "coefficient"),
                        f"and an intercept to continue from, {users}"))
    return entries


def _powers(plan: Plan) -> str:
    powers = [power for _, power in plan.knowledge.prior]
    least, most = min(powers), max(powers)
    return f"2^{least}" if least == most else f"2^{least} to 2^{most}"


def _chosen(plan: Plan) -> list[tuple]:
    """What the user or a rule decides."""
    return _chosen_greedy(plan) if isinstance(plan, GreedyPlan) else _chosen_frank_wolfe(plan)


def _chosen_greedy(plan: GreedyPlan) -> list[tuple]:
    return [
        ("method", plan.method, "fresh features one by one, each followed by a joint correction"),
        *_loss_entries(plan),
        ("picks k", f"{plan.picks:,}",
         f"all different; the rule gives {_picks_by_rule(plan):,}: "
         f"{plan.loss_form.usual_picks:.3g} sqrt(n sqrt(rho)/s), rho being the zCDP that "
         f"epsilon and delta allow, within 2 and {MOST_PICKS}"),
        ("corrections", f"{plan.corrections:,}",
         f"one after each pick and {plan.final_corrections} at the end, of which the last "
         f"{plan.averaged} are averaged; each a Newton step times {DAMPING:g}"),
        *_clipping_entries(plan),
        _levels_entry(plan),
    ]


def _picks_by_rule(plan: GreedyPlan) -> int:
    return default_picks(plan.facts, plan.guarantee, plan.loss_form)


def _clipping_entries(plan: Plan) -> list[tuple]:
    return [
        ("clipping L", f"{plan.limit:,}",
         f"{NORM:g} M by rule: a row whose entries over the intercept (which counts as M) and the "
         "corrected features are longer than this in L2 weighs L/length, rounded down to "
         f"multiples of 2^-{WEIGHT_BITS}"),
        ("coefficient step", f"2^-{COEFFICIENT_BITS}",
         "over bounds: margins follow corrected coefficients in these steps"),
    ]


def _chosen_frank_wolfe(plan: FrankWolfePlan) -> list[tuple]:
    chosen = [
        ("method", plan.method, "moves along the L1 ball towards one signed feature at a time"),
        *_loss_entries(plan),
        ("schedule", plan.schedule, "w <- w + (radius/T) vertex" if plan.schedule == "paced"
         else "w <- (1 - g) w + g radius vertex with g = 2/(t + 2) at step t"),
        ("steps T", f"{plan.steps:,}", f"one private pick each; {_steps_rule(plan)}"),
        ("radius", exactly(plan.radius),
         f"sum_j |w_j| B_j never passes it; {_radius_rule(plan)}"),
        _levels_entry(plan),
    ]
    if plan.intercept:
        chosen.append(("looks at the intercept", f"{len(plan.intercept_looks)}",
                       "before the first step, after the last, evenly between"))
    if plan.in_model:
        chosen += _clipping_entries(plan)
    return chosen


def _loss_entries(plan: Plan) -> list[tuple[str, str, str]]:
    """The loss, and the bound of a residual where it has one."""
    bounded = "its derivative with respect to the margin lies within [-1, 1]"
    if plan.residual_bound is None:
        return [("loss", plan.loss, bounded)]
    return [
        ("loss", plan.loss, f"half the square of the residual; {bounded}"),
        ("residual bound b", exactly(plan.residual_bound),
         f"half ranges of the label{_in_label_units(plan)}, which is a margin of 1: a residual "
         f"beyond counts as b; {exactly(RESIDUAL_BOUNDS[plan.loss])} by rule"),
    ]


def _in_label_units(plan: Plan) -> str:
    return "" if plan.facts.learned else f", {figure(plan.loss_form.unit)} in its units"


def _levels_entry(plan: Plan) -> tuple[str, str, str]:
    return ("entry levels M", f"{plan.entry_levels:,}",
            "entries become whole numbers rint(x M/B) in [-M, M]")


def _steps_rule(plan: Plan) -> str:
    least, most = DEFAULT_STEPS
    return (
        f"the rule gives {default_steps(plan.facts, plan.guarantee):,}: the larger of "
        f"2 (n/s) sqrt(rho)/L^2, rho being the zCDP that epsilon and delta allow, and "
        f"(epsilon (n/s)/(sqrt(2) L^2))^(2/3), within {least} to {most:,}; "
        f"L = ln(2d) + logit({SEEN_WITH:g})"
    )


def _radius_rule(plan: Plan) -> str:
    return (
        f"the rule gives {exactly(default_radius(plan.schedule, plan.steps, plan.loss_form))}: "
        f"{REACH[plan.schedule] * plan.loss_form.usual_reach:g} sqrt(T) to two digits"
    )


def _mechanism(plan: Plan) -> list[tuple]:
    numbers = [
        ("resolution R", f"{plan.resolution:,}",
         "derivatives become whole numbers floor(R * derivative + dither), -R to R; the smallest "
         f"power of two that keeps rounding under {percent(ROUNDING_SHARE)} of the selection "
         f"noise, at most {plan.loss_form.most_resolution:,}"),
        ("range of a score difference", f"{plan.swap_range:,}",
         "2 R M s: the most by which neighbours can part the scores of two signed features"),
        ("rate kappa", f" to\n{'':{VALUES_AT}}".join(_rates(plan)),
         "signed feature (j, sign) is picked with probability proportional to "
         f"2^(-kappa * sign * score_j); {_rate_rule(plan)}, rounded down"),
        ("pick epsilon eps0", at_most(plan.pick_epsilon),
         "kappa * ln 2 * 2 R M s" + (", of the last pick" if _picks_differ(plan) else "")),
    ]
    return numbers + _quantiles(plan) + _noisy_sums(plan)


def _quantiles(plan: Plan) -> list[tuple]:
    """How facts are learned."""
    quantiles = (("learned entry bound", plan.entry_quantile, "of one magnitude per row"),
                 ("learned label range", plan.label_quantile, "of the labels, from either end"))
    return [
        (what, f"quantile {pick.a}/{pick.c}",
         f"{whose}, picked by the exponential mechanism from a public grid, weighing a loss of one "
         f"part in {pick.c} of a row by 2^-kappa, kappa = {pick.multiplier:,}/2^{pick.shift}; "
         f"{percent(LEARNING_SHARE)} of the budget")
        for what, pick, whose in quantiles if pick is not None
    ]


def _noisy_sums(plan: Plan) -> list[tuple]:
    numbers = []
    if plan.looks:
        numbers += [
            ("variance of the number of rows", f"{plan.rows_variance:,}",
             f"of the discrete Gaussian noise on it, at sensitivity s: off by "
             f"{figure(math.sqrt(plan.rows_variance))} rows (standard deviation); "
             f"{percent(ROWS_SHARE)} of the budget"),
            ("sensitivity of the derivatives' sum", f"{plan.intercept_sensitivity:,}", "R s"),
            ("variance of a look", f"{plan.first_variance:,}",
             "of the discrete Gaussian noise on the sum of all derivatives, as whole numbers; "
             f"{_look_rule(plan)}"),
            ("error of a look", f"{look_error(plan):.3g}",
             f"sqrt(variance)/(R n): standard deviation, in units of {unit_words(plan)}"),
        ]
    if plan.corrections:
        numbers += [
            ("variance of a correction", f"{plan.correction_variance:,}",
             f"on every coordinate of the gradient, whose sensitivity in L2 is R 2^{WEIGHT_BITS} L "
             f"s = {plan.gradient_sensitivity:,}"),
            ("variance of a second moment", f"{plan.moment_variance:,}",
             "on every moment that a feature adds, whose sensitivity in L2 is "
             f"M 2^{WEIGHT_BITS} L s = {plan.moment_sensitivity:,}"),
        ]
    return numbers


def _look_rule(plan: Plan) -> str:
    if plan.corrections:
        return "it costs as much as a correction"
    least, most = INTERCEPT_SHARES
    return (f"all looks together get between {percent(least)} and {percent(most)} of the budget, "
            f"as much as brings the error of one down to {INTERCEPT_ERROR:g}")


def _rates(plan: Plan) -> list[str]:
    """The first and the last rate; one where they are alike."""
    ends = dict.fromkeys((plan.multipliers[0], plan.multipliers[-1]))
    return [f"{end:,}/2^{plan.shift} = {math.ldexp(end, -plan.shift):.6g}" for end in ends]


def _rate_rule(plan: Plan) -> str:
    if isinstance(plan, GreedyPlan):
        return (f"picks get {percent(SHARES['picks'])} of the zCDP, growing from pick to pick to "
                f"{LAST_TO_FIRST} times the first")
    return "the largest kappa that keeps the guarantee"


def look_error(plan: Plan) -> float:
    """The standard deviation of one look at the intercept, in `unit_words`."""
    return math.sqrt(plan.first_variance) / (plan.resolution * plan.facts.rows)


def unit_words(plan: Plan) -> str:
    """What a mean derivative is measured in."""
    return "a label rate" if plan.residual_bound is None else "the bound of a residual"


def _costs(plan: Plan) -> list[tuple]:
    formulas = {
        "picks": "sum of eps0^2/8 over picks" if isinstance(plan, GreedyPlan) else "T eps0^2/8",
        "rows": "s^2/(2 variance)",
        "intercept": f"{plan.looks} * (R s)^2/(2 variance)",
        "entry bound": "eps0^2/8",
        "label range": "2 * eps0^2/8",
        "corrections": f"{plan.corrections} * sensitivity^2/(2 variance)",
        "second moments": f"{plan.moments} * sensitivity^2/(2 variance)",
    }
    lines = [
        (f"{part}, zCDP", at_most(cost.zcdp), f"{formulas[part]}; {percent(share)} of the cost"
         + (f". Their pure epsilon is {at_most(cost.pure)}" if part == "picks" else ""))
        for (part, cost), share in zip(plan.parts, shares_of_cost(plan))
    ]
    conversion = f"; {CONVERSION}" if plan.guarantee.delta else ""
    return lines + [
        ("whole plan, zCDP", at_most(plan.zcdp), "the sum of the parts"),
        ("epsilon spent", at_most(plan.epsilon_spent),
         f"of {exactly(plan.guarantee.epsilon)}, at delta {exactly(plan.guarantee.delta)}: "
         f"{route_words(plan)}{conversion}"),
    ]


def _sight(plan: Plan) -> list[tuple]:
    numbers = [
        ("selection noise", in_rows(plan.noise_rows),
         "2 s/eps0: picks weigh a score of u rows by exp(c u) with c = eps0/(2 s)"),
        ("rounding", in_rows(plan.rounding_rows), "sqrt(n)/(2R), at most, standard deviation"),
        ("smallest effect", in_rows(plan.smallest_effect_rows),
         f"(1/c) (ln(2d) + logit({SEEN_WITH:g})): the score at which one signed feature is picked "
         f"with probability {SEEN_WITH:g} when all others are at 0"),
    ]
    differences = [f"{difference_words(plan, share)} (f = {share:g})" for share in PREVALENCES]
    numbers.append(
        ("difference at share f", f"\n{'':{VALUES_AT}}".join(differences),
         f"in {label_mean(plan)}: smallest effect/(n f (1 - f)), for a 0/1 feature held by a share "
         "f of the rows"
         + ("" if plan.residual_bound is None else ", times the bound of a residual"))
    )
    if not plan.sees_anything:
        return [*numbers, ("visible at all", "nothing", blind_words(plan))]
    return [*numbers, ("least share of rows", percent(least_prevalence(plan)),
                       "the f at which that difference is "
                       f"{figure(plan.most_difference)}, the largest that counts in full")]


# --- words and figures

def counted(count: int, noun: str) -> str:
    return f"{count:,} {noun}" if count == 1 else f"{count:,} {noun}s"


def figure(value: float) -> str:
    """Three digits that count, with commas where that reads better than an exponent."""
    return f"{value:,.0f}" if 999.5 <= value < 1e15 else f"{value:.3g}"


def exactly(value: float) -> str:
    """The shortest text that reads back as this very number."""
    return repr(float(value)).removesuffix(".0")


def at_most(value: float) -> str:
    """Six digits that count, rounded up: what is spent is never understated."""
    return f"{float(SIX_DIGITS_UP.create_decimal(value)):.6g}"


def in_rows(value: float) -> str:
    return f"{figure(value)} {'row' if value == 1 else 'rows'}"


def percent(share: float) -> str:
    """A share, as a percentage to three digits."""
    return f"{100 * share:.3g} %"


def _wrapped(text: str, margin: str) -> str:
    return fill(text, WIDTH, initial_indent=margin, subsequent_indent=margin,
                break_on_hyphens=False)
