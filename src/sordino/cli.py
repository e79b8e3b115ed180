"""The terminal: `sordino plan|fit|predict|statement|demo`.

Output goes to stdout, progress and errors to stderr. Exit status 0: done; 2: something the user can
mend; 130: interrupted; 1: anything else.
"""

from __future__ import annotations

import argparse
import json
import os
import sys
from contextlib import contextmanager
from pathlib import Path

from .errors import InputError


def main(arguments: list[str] | None = None) -> int:
    """Run one command; returns the exit status."""
    options = _parser().parse_args(arguments)
    try:
        options.run(options)
        sys.stdout.flush()
        return 0
    except InputError as error:
        return _refuse(error, 2)
    except KeyboardInterrupt:
        return _refuse("interrupted: nothing was released", 130)
    except BrokenPipeError:
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
        return 0
    except Exception as error:
        return _refuse(f"{type(error).__name__}: {error}", 1)


def _refuse(reason: object, status: int) -> int:
    print("sordino:", " ".join(str(reason).split()), file=sys.stderr)
    return status


def _parser() -> argparse.ArgumentParser:
    parser = argparse.ArgumentParser(
        prog="sordino", description="Private sparse regression for wide data, end to end."
    )
    parser.add_argument("--version", action=_Version, nargs=0, help="print the version")
    commands = parser.add_subparsers(title="commands", metavar="COMMAND", required=True)

    plan = commands.add_parser("plan", help="what a study costs and can detect; reads no data")
    plan.add_argument("study", metavar="STUDY.toml")
    plan.add_argument("--explain", action="store_true", help="every number, and where it is from")
    plan.add_argument("--json", action="store_true", help="the plan as JSON")
    plan.set_defaults(run=_plan)

    fit = commands.add_parser("fit", help="fit a study once; writes the release")
    fit.add_argument("study", metavar="STUDY.toml")
    fit.add_argument("--replace", action="store_true", help="write over an earlier release")
    fit.add_argument("--rehearsal", type=int, metavar="SEED",
                     help="reproducible and NOT private; marked so wherever it shows up")
    fit.add_argument("--profile", action="store_true",
                     help="where the time went, on stderr: for inside only")
    fit.add_argument("--quiet", action="store_true", help="no progress")
    fit.add_argument("--json", action="store_true", help="the release as JSON")
    fit.set_defaults(run=_fit)

    predict = commands.add_parser("predict", help="the probability of label 1 for every row")
    predict.add_argument("model", metavar="MODEL.json")
    predict.add_argument("data", metavar="DATA", help="svmlight, .mtx or .npz")
    predict.add_argument("--first-column", type=int, choices=(0, 1), default=1,
                         help="the id of the first column in svmlight (default: 1)")
    predict.add_argument("--out", type=Path, metavar="FILE", help="instead of the terminal")
    predict.add_argument("--json", action="store_true", help="as a JSON list")
    predict.set_defaults(run=_predict)

    statement = commands.add_parser("statement", help="the disclosure statement, in Markdown")
    statement.add_argument("model", metavar="MODEL.json")
    statement.add_argument("--out", type=Path, metavar="FILE", help="instead of the terminal")
    statement.set_defaults(run=_statement)

    demo = commands.add_parser("demo", help="the whole job on invented data, in seconds")
    demo.add_argument("--folder", type=Path, default=Path("sordino-demo"), metavar="F",
                      help="where its files go (default: %(default)s)")
    demo.add_argument("--replace", action="store_true", help="write over files that are there")
    demo.set_defaults(run=_demo)
    return parser


class _Version(argparse.Action):
    def __call__(self, parser, *_):
        from importlib.metadata import version

        print("sordino", version("sordino"))
        parser.exit()


# --- commands

def _plan(options):
    from .study import load_study

    plan = load_study(options.study).plan()
    if options.json:
        _print_json(_plan_table(plan))
    else:
        print(plan.explain() if options.explain else plan)


def _fit(options):
    from .release import write_text
    from .study import load_study

    study = load_study(options.study)
    plan, names = study.plan(), study.names()
    _check_targets(study, options.replace)
    if not options.json:
        print(f"Fitting {plan.steps} private steps, epsilon {plan.guarantee.epsilon:g}, delta "
              f"{plan.guarantee.delta:g}.", end="\n\n", flush=True)
    if options.rehearsal is not None:
        print("REHEARSAL: the seed is fixed, so this run is NOT private.", file=sys.stderr)
    with _progress(not options.quiet) as report:
        data = study.read_data(lambda part: report(part, "reading the file"))
        release = plan.fit(data.X, data.y, names=names, progress=report,
                           rehearsal_seed=options.rehearsal)
    release.save(study.model, rehearsal=release.rehearsal)
    if study.statement is not None:
        write_text(study.statement, release.statement())
    if options.json:
        print(study.model.read_text(encoding="utf-8"), end="")
    else:
        print(release, end="\n\n")
        print(f"Release:    {study.model}")
        if study.statement is not None:
            print(f"Statement:  {study.statement}")
    if options.profile:
        print(release.profile, file=sys.stderr)


def _predict(options):
    from .files import read_table
    from .release import load_release

    release = load_release(options.model)
    if release.rehearsal:
        print("sordino: this model is a rehearsal: not private, must not leave", file=sys.stderr)
    with _progress(True) as report:
        data = read_table(options.data, features=release.plan.facts.features,
                          first_column=options.first_column,
                          progress=lambda part: report(part, "reading the file"))
    chances = release.predict_probability(data.X).tolist()
    text = json.dumps(chances) if options.json else "\n".join(map(repr, chances))
    _give(text + "\n", options.out)


def _statement(options):
    from .release import load_release

    _give(load_release(options.model).statement(), options.out)


def _demo(options):
    from .demo import run_demo

    run_demo(options.folder, replace=options.replace, command=main)


# --- what they share

def _plan_table(plan) -> dict:
    """The plan, and what is read off it, for a program to read."""
    return {
        "plan": plan.to_dict(),
        "zcdp": plan.zcdp,
        "epsilon_spent": plan.epsilon_spent,
        "pick_epsilon": plan.pick_epsilon,
        "noise_rows": plan.noise_rows,
        "rounding_rows": plan.rounding_rows,
        "smallest_effect_rows": plan.smallest_effect_rows,
        "smallest_risk_difference": {
            str(share): plan.smallest_risk_difference(share) for share in (0.001, 0.01, 0.1)
        },
        "sees_anything": plan.sees_anything,
    }


def _print_json(value):
    print(json.dumps(value, indent=1, ensure_ascii=False))


def _check_targets(study, replace: bool):
    """Refuse, before any data is read, what could not be written once the budget is spent."""
    for path in (study.model, study.statement):
        if path is None:
            continue
        if path.exists() and not replace:
            raise InputError(f"{path} is there already: --replace writes over it")
        if path.is_dir() or not os.access(path.parent, os.W_OK | os.X_OK):
            raise InputError(f"{path} cannot be written")


def _give(text: str, path: Path | None):
    if path is None:
        sys.stdout.write(text)
    else:
        from .release import write_text

        write_text(path, text)
        print(f"Written:    {path}")


@contextmanager
def _progress(wanted: bool):
    """Yields report(fraction, what): a bar on a terminal where rich is installed, else nothing."""
    if not wanted or not sys.stderr.isatty():
        yield _silent
        return
    try:
        from rich.console import Console
        from rich.progress import BarColumn, Progress, TextColumn, TimeElapsedColumn
    except ImportError:
        yield _silent
        return
    bar = Progress(TextColumn("{task.description:17}"), BarColumn(),
                   TextColumn("{task.percentage:3.0f} %"), TimeElapsedColumn(),
                   console=Console(stderr=True), transient=True)
    with bar:
        task = bar.add_task("", total=1.0)
        yield lambda fraction, what: bar.update(task, completed=fraction, description=what)


def _silent(fraction: float, what: str):
    """Progress that nobody watches."""
