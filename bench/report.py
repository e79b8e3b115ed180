"""report.md for people, report.json with every number."""

from __future__ import annotations

import json
import os
import platform
from datetime import datetime, timezone
from importlib.metadata import PackageNotFoundError, version
from pathlib import Path

from threadpoolctl import threadpool_info

_PACKAGES = ("sordino", "numpy", "scipy", "threadpoolctl")


def write_report(results: dict[str, dict], folder: Path, quick: bool) -> Path:
    """Write report.md and report.json into the folder, made if need be; returns report.md."""
    folder.mkdir(parents=True, exist_ok=True)
    machine = describe_machine()
    everything = {
        "written": datetime.now(timezone.utc).isoformat(timespec="seconds"),
        "quick": quick,
        "machine": machine,
        "cases": results,
    }
    (folder / "report.json").write_text(json.dumps(everything, indent=2) + "\n", encoding="utf-8")
    page = folder / "report.md"
    page.write_text(_page(everything), encoding="utf-8")
    return page


def describe_machine() -> dict:
    """Processor, memory, system and versions: what a timing depends on."""
    return {
        "processor": _processor(),
        "processors_seen": os.cpu_count(),
        "memory_bytes": _memory_bytes(),
        "system": f"{platform.system()} {platform.machine()}",
        "python": platform.python_version(),
        "versions": {name: _version(name) for name in _PACKAGES},
        "thread_pools": [
            {key: pool.get(key) for key in ("internal_api", "version", "num_threads")}
            for pool in threadpool_info() if isinstance(pool.get("version"), str)
        ],
    }


def _page(everything: dict) -> str:
    parts = ["# Benchmarks\n", _machine_text(everything)]
    for name, result in everything["cases"].items():
        parts.append(f"## {name}: {result['settings']['about']}\n")
        parts.append(_case_text(result))
    return "\n".join(parts)


def _case_text(result: dict) -> str:
    texts = {
        "textbook": _speed_text, "runs": _accuracy_text, "linear": _linear_text,
        "worth": _prior_text, "sets": _real_text, "tails": _tails_text,
        "book": _book_text,
    }
    return next((text for key, text in texts.items() if key in result), _words_text)(result)


def _machine_text(everything: dict) -> str:
    machine = everything["machine"]
    versions = ", ".join(f"{name} {value}" for name, value in machine["versions"].items())
    memory = machine["memory_bytes"]
    lines = [
        f"{everything['written']}; {machine['processor']}, {machine['processors_seen']} processors"
        + (f", {memory / 2**30:.0f} GiB" if memory else "")
        + f"; {machine['system']}; Python {machine['python']}, {versions}.",
        "",
        "Methods run in one process, on one thread where no other number is told; BLAS has one. "
        "Signal, noise and accuracy have no intercept on either side. The textbook method (Talwar, "
        "Thakurta, Zhang 2015, Algorithm 2) is in numpy and scipy: full gradient and fresh noise on every "
        "signed feature at every step.",
        "",
    ]
    return "\n".join(lines)


def _speed_text(result: dict) -> str:
    settings, theirs, ours = result["settings"], result["textbook"], result["sordino"]
    plain, blocks = theirs["draws"]["plain"], theirs["draws"]["blocks"]
    scaled = (
        f" The textbook method ran {theirs['steps_run']} steps; its seconds are scaled to all."
        if theirs["scaled"]
        else ""
    )
    heading = (
        f"{settings['rows']:,} rows x {settings['features']:,} features, "
        f"{result['entries']:,} entries; epsilon {settings['epsilon']:g}, "
        f"{settings['steps']} steps, {settings['schedule']}, radius {settings['radius']:g}. "
        f"Ours: median of {len(ours['repeats'])} fits.{scaled}\n"
    )
    timed = [
        [label, _seconds(plain[key]), _seconds(blocks[key]), _seconds(ours[key]),
         _times(result["ratio"]["plain"][name]), _times(result["ratio"]["blocks"][name])]
        for label, key, name in (
            ("solve alone, the table made", "solve_seconds", "solve"),
            ("whole fit, from scipy CSR", "fit_seconds", "fit"),
        )
    ]
    timed += [
        [f"{label}, ours on two threads", _seconds(plain[key]), _seconds(blocks[key]),
         _seconds(result["two_threads"][key]), _times(plain[key] / result["two_threads"][key]),
         _times(blocks[key] / result["two_threads"][key])]
        for label, key in (("solve alone", "solve_seconds"), ("whole fit", "fit_seconds"))
    ]
    compared = [
        ["peak memory above the data", _peak(theirs), "", _peak(ours), "", ""],
        ["scale of the noise, rows", f"{theirs['noise_scale_rows']:,.1f}", "",
         f"{ours['noise_scale_rows']:,.1f}",
         _times(theirs["noise_scale_rows"] / ours["noise_scale_rows"]), ""],
        ["features chosen", plain["features_chosen"], blocks["features_chosen"],
         ours["features_chosen"], "", ""],
        ["log loss on these rows", _loss(plain["log_loss"]), _loss(blocks["log_loss"]),
         _loss(ours["log_loss"]), "", ""],
    ]
    columns = ["", "textbook", "textbook, by blocks", "sordino", "ratio", "ratio to blocks"]
    return "\n".join(
        [
            heading,
            _table(columns, timed + compared),
            "Textbook draws its noise by one call of the generator's Laplace sampler for all "
            "signed features; by blocks, it draws and searches in pieces that stay in cache.\n",
            f"Table: {ours['table_bytes']:,} bytes, {ours['table_bytes_per_entry']:.2f} an entry; "
            f"bound 8*entries + 24*(rows + features) = {ours['table_bytes_bound']:,}: "
            f"{'kept' if ours['table_bytes'] <= ours['table_bytes_bound'] else 'BROKEN'}. "
            f"Planning took {_seconds(ours['plan_seconds'])}; resolution {ours['resolution']}.\n",
            f"Textbook by phase: {_phases(plain)}; by blocks: {_phases(blocks)}; product with the "
            f"gradient in {theirs['product'].upper()} of X.T.\n",
            f"Ours by phase: {_phases(ours)}. Quartiles of the solve: "
            f"{', '.join(map(_seconds, ours['solve_quartiles']))}: which features the noise picks "
            "decides how many rows move.\n",
        ]
    )


def _accuracy_text(result: dict) -> str:
    settings = result["settings"]
    heading = (
        f"{settings['rows']:,} rows x {settings['features']:,} features, "
        f"{settings['true_features']} true features, {settings['steps']} steps, radius "
        f"{settings['radius']:g}; log loss on {settings['fresh_rows']:,} fresh rows above that of "
        f"the true model, median over seeds.\n"
    )
    rows = [
        [s["schedule"], f"{s['epsilon']:g}", f"{s['textbook']:.4f}", f"{s['sordino']:.4f}",
         f"{s['lower']} of {s['seeds']}"]
        for s in result["summary"]
    ]
    columns = ["schedule", "epsilon", "textbook", "sordino", "ours lower"]
    return "\n".join([heading, _table(columns, rows)])


def _linear_text(result: dict) -> str:
    settings = result["settings"]
    heading = (
        f"{settings['rows']:,} rows x {settings['features']:,} 0/1 features; "
        f"{settings['true_features']} true features, held by 20 to 50 % of the rows, with equal "
        f"shares of variance, together {settings['explained']:.0%} of it; label range three "
        f"standard deviations around the mean. Epsilon {settings['epsilon']:g}, delta "
        f"{settings['delta']:g}, defaults only. Medians over {settings['seeds']} seeds, each with "
        f"data of its own, the least in brackets. R^2 on {settings['fresh_rows']:,} fresh rows, "
        "its share that of ordinary least squares on the true features. Textbook: steps and "
        "schedule of our Frank-Wolfe, a constant feature as intercept, the radius that is best on "
        "the fresh rows.\n"
    )
    rows = [
        [row["method"], row["loss"], f"{row['true_found']:g} ({row['least_true_found']})",
         f"{row['features']:g}", f"{row['r_squared']:.4f}",
         f"{row['share_of_least_squares']:.3f} ({row['least_share']:.3f})",
         _seconds(row["seconds"])]
        for row in result["linear"]
    ]
    columns = ["method", "loss", "true features", "features", "R^2", "share", "time"]
    return "\n".join([heading, _table(columns, rows)])


def _prior_text(result: dict) -> str:
    settings = result["settings"]
    favoured = round(settings["favoured_share"] * settings["features"])
    heading = (
        f"{settings['rows']:,} rows x {settings['features']:,} 0/1 features; "
        f"{settings['true_features']} true features, held by 20 to 50 % of the rows, together "
        f"{settings['strength']:g} standard deviations of log-odds, or {settings['explained']:.1%} "
        f"of a numeric label's variance. The prior favours {favoured:,} features, those and others "
        f"drawn at random. Delta {settings['delta']:g}, defaults but for Frank-Wolfe's radius of "
        f"{settings['radius']:g}. Shares of the true features found, medians over "
        f"{settings['seeds']} seeds. Worth: the least epsilon that finds as many without the "
        "prior, over the epsilon with it.\n"
    )
    rows = [
        [row["loss"], row["method"], f"2^{row['power']}", f"{row['epsilon']:g}",
         f"{row['without']:.0%}", f"{row['with']:.0%}", _worth(settings, row)]
        for row in result["worth"]
    ]
    columns = ["loss", "method", "weight", "epsilon", "without", "with", "worth"]
    return "\n".join([heading, _table(columns, rows)])


def _worth(settings: dict, row: dict) -> str:
    most = settings["epsilons"][-1] / row["epsilon"]
    return f"over {_times(most)}" if row["worth"] is None else _times(row["worth"])


def _words_text(result: dict) -> str:
    settings, (documents, words) = result["settings"], result["shape"]
    heading = (
        f"{documents:,} packages, {words:,} words, {result['entries']:,} entries; "
        f"{settings['train_rows']:,} rows to fit, the others to test; delta 1e-6, add-remove, "
        f"defaults only. Means over {settings['fits']} fits (textbook: 3); seconds of one fit, "
        "without privacy those of the whole path.\n"
    )
    return "\n".join([heading, _methods_table(result["rows"])])


def _real_text(result: dict) -> str:
    settings = result["settings"]
    heading = (
        f"Delta {settings['delta']:g}, add-remove, defaults only; one row in five, by a hash, to "
        f"test. Means over {result['repeats']} fits; seconds of one fit, without privacy those "
        "of the path so far. Textbook: steps and schedule of our Frank-Wolfe, a constant feature "
        "as intercept, the radius that is best on the test rows. Sees: the smallest effect that "
        "the strongest pick is 90 % sure to find among noise, as a share of the rows. R^2 is of "
        "predictions clipped to the label range.\n"
    )
    parts = [heading]
    for name, one in result["sets"].items():
        parts += [f"### {name}\n", _set_text(one)]
    return "\n".join(parts)


def _set_text(one: dict) -> str:
    if "skipped" in one:
        return f"Skipped: {one['skipped']}.\n"
    label = "binary" if one["label"] == "binary" else "from {:g} to {:g}".format(*one["label"])
    about = (
        f"{one['source']}. {one['train_rows']:,} rows to fit, {one['test_rows']:,} to test, "
        f"{one['features']:,} features, {one['entries']:,} entries; {one['loss']} loss, label "
        f"{label}, entry bound {one['entry_bound']:g}. {one['public']} The largest effect that is "
        f"there: {one['largest_effect']:.1%} of the rows. Read in "
        f"{_seconds(one['reading_seconds'])}.\n"
    )
    return "\n".join([about, _methods_table(one["rows"])])


def _tails_text(result: dict) -> str:
    settings = result["settings"]
    heading = (
        f"{settings['rows']:,} rows x {settings['features']:,} features, entries within a public "
        f"bound of 1; then {settings['scaled_share']:.0%} of the rows times "
        f"{settings['scaled_by']:g}. Epsilon {settings['epsilon']:g}, means over "
        f"{settings['repeats']} fits. Clipped: ours, as the data come. Learned: ours, the bound "
        "learned privately from the same rows. Divided: clipped, on rows over the largest row "
        "norm (which is itself read off the data). Losses on "
        f"{settings['fresh_rows']:,} fresh rows that are never scaled: log loss, or squared error "
        "over the label's variance.\n"
    )
    rows = [
        [row["loss"], row["method"], *map(_loss, row["clipped"].values()), f"{row['rise']:+.2%}",
         *map(_loss, row["learned"].values()), f"{row['learned_rise']:+.2%}",
         *map(_loss, row["divided"].values()), _loss(row["constant"])]
        for row in result["tails"]
    ]
    columns = ["loss", "method", "clipped", "..., tails", "rise", "learned", "..., tails", "rise",
               "divided", "..., tails", "no features"]
    return "\n".join([heading, _table(columns, rows)])


_MEASURES = {
    "auc": ("AUC", "{:.4f}"), "log_loss": ("log loss", "{:.4f}"), "r_squared": ("R^2", "{:.4f}"),
    "smallest_effect": ("sees", "{:.1%}"), "features": ("features", "{:g}"),
}


def _methods_table(rows: list[dict]) -> str:
    """Methods by epsilon, with the measures that these rows have."""
    measured = {key: shown for key, shown in _MEASURES.items() if any(key in row for row in rows)}
    lines = [
        [row["method"], "none" if row["epsilon"] is None else f"{row['epsilon']:g}",
         *(form.format(row[key]) if key in row else "" for key, (_, form) in measured.items()),
         _seconds(row["seconds"])]
        for row in rows
    ]
    columns = ["method", "epsilon", *(title for title, _ in measured.values()), "time"]
    return _table(columns, lines)


def _book_text(result: dict) -> str:
    settings, book = result["settings"], result["book"]
    crowd, kills = book["crowd"], book["kills"]
    heading = (
        "Each charge is on the disk before it returns (journal deleted, folder synchronised). "
        f"{settings['timed']:,} charges each; a book of {settings['charges']:,} charges and as "
        f"many ends opens in {book['timings']['open_ms']:.0f} ms.\n"
    )
    rows = [
        [where, *(f"{book['timings'][key][figure]:.2f} ms"
                  for figure in ("median_ms", "p99_ms", "most_ms"))]
        for where, key in (("new", "new"), (f"{settings['charges']:,} charges", "full"))
    ]
    tail = (
        f"\n{len(crowd['by_process'])} processes charged one book until it refused: "
        f"{crowd['charges']:,} charges in {crowd['seconds']:.1f} s, {min(crowd['by_process'])} to "
        f"{max(crowd['by_process'])} each; epsilon {crowd['epsilon_spent']:g} of {crowd['cap']:g}; "
        f"none lost, none doubled.\n\n{kills['kills']} processes that charge, fit, settle and save "
        f"were killed within {settings['longest_life']:g} s: {kills['charges']:,} charges, "
        f"{kills['releases']:,} releases, every one settled in the book; "
        f"{kills['states'].get('reserved', 0)} charges stay reserved; {kills['journals_left']} "
        f"kills left a journal, {kills['died_before_a_charge']} came before a charge.\n"
    )
    return "\n".join([heading, _table(["book", "median", "99 %", "most"], rows), tail])


def _table(columns: list[str], rows: list[list]) -> str:
    lines = [columns, ["---"] * len(columns), *rows]
    return "\n".join("| " + " | ".join(map(str, line)) + " |" for line in lines) + "\n"


def _seconds(value: float) -> str:
    return f"{value:.2f} s" if value >= 1 else f"{1000 * value:.3g} ms"


def _times(ratio: float) -> str:
    return f"{ratio:,.0f} x" if ratio >= 100 else f"{ratio:.3g} x"


def _loss(value: float | None) -> str:
    return "not run to the end" if value is None else f"{value:.4f}"


def _peak(side: dict) -> str:
    memory = side["peak_memory"]
    return f"{memory['rise'] / 2**20:,.0f} MiB" if memory else "not measured on this system"


def _phases(side: dict) -> str:
    return ", ".join(f"{name} {_seconds(s)}" for name, s in side["seconds_by_phase"].items())


def _version(package: str) -> str:
    try:
        return version(package)
    except PackageNotFoundError:
        return "not installed"


def _processor() -> str:
    try:
        lines = Path("/proc/cpuinfo").read_text().splitlines()
    except OSError:
        return platform.processor() or "unknown processor"
    names = [line.partition(":")[2].strip() for line in lines if line.startswith("model name")]
    return names[0] if names else platform.machine()


def _memory_bytes() -> int | None:
    try:
        return os.sysconf("SC_PAGE_SIZE") * os.sysconf("SC_PHYS_PAGES")
    except (ValueError, OSError, AttributeError):
        return None
