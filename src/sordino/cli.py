"""The terminal: `sordino plan|fit|predict|evaluate|statement|book|demo`.

Output goes to stdout, progress, notes and errors to stderr. Exit status 0: done; 2: something the
user can mend; 130: interrupted; 1: anything else. With SORDINO_TRACEBACK set in the environment,
anything else is not told in one line but shown as Python shows it.
"""

from __future__ import annotations

import argparse
import io
import json
import os
import sys
import tempfile
from collections.abc import Callable
from contextlib import contextmanager
from pathlib import Path

from .errors import InputError
from .facts import NEIGHBOURS, Guarantee

COMMANDS = {
    "plan": "what a study costs and can detect, before any data is read",
    "fit": "fit a study once, and write the release and its statement",
    "predict": "the probability of label 1, or the label if numeric, a line for each row",
    "evaluate": "how well a release does on held-out rows, measured privately",
    "statement": "the disclosure statement of a release, in Markdown or HTML",
    "book": "the budget book of a data set: what was spent on it, and what is left",
    "demo": "the whole job on invented data, in seconds",
}
NOTHING_RELEASED = "interrupted: nothing was released"


def main(arguments: list[str] | None = None) -> int:
    """Run one command; returns the exit status."""
    options = argparse.Namespace(interrupted="interrupted")
    if isinstance(sys.stdout, io.TextIOWrapper):
        sys.stdout.reconfigure(errors="backslashreplace")   # no name may stop a fit that is done
    try:
        status = _status(arguments, options)
        print(end="", flush=True)
        return status
    except InputError as error:
        return _refuse(error, 2)
    except KeyboardInterrupt:
        return _refuse(options.interrupted, 130)
    except BrokenPipeError:
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
        return 1
    except Exception as error:
        if "SORDINO_TRACEBACK" in os.environ:
            raise
        return _refuse(f"{type(error).__name__}: {error}", 1)


def _status(arguments: list[str] | None, options: argparse.Namespace) -> int:
    """Run one command; help ends early, as does a demo that fails, with a status of their own."""
    try:
        _parser().parse_args(arguments, options)
        options.run(options)
        return 0
    except SystemExit as stop:
        return stop.code


def _refuse(reason: object, status: int) -> int:
    print("sordino:", " ".join(str(reason).split()), file=sys.stderr)
    return status


# --- options

class _Parser(argparse.ArgumentParser):
    """Refuses in one line, like everything else."""

    def __init__(self, **settings):
        super().__init__(allow_abbrev=False, **settings)

    def error(self, message: str):
        raise InputError(f"{message} ({self.prog} --help says more)")


class _Version(argparse.Action):
    def __call__(self, parser, *_):
        from importlib.metadata import version

        print("sordino", version("sordino"))
        parser.exit()


def _parser() -> argparse.ArgumentParser:
    listed = "\n".join(f"  {name:11}{what}" for name, what in COMMANDS.items())
    parser = _Parser(
        prog="sordino",
        description="Sparse regression under differential privacy, for wide sparse data.\n\n"
                    f"commands:\n{listed}\n\nsordino COMMAND --help says more of each.",
        formatter_class=argparse.RawDescriptionHelpFormatter,
    )
    parser.add_argument("--version", action=_Version, nargs=0, help="print the version and stop")
    commands = parser.add_subparsers(metavar="COMMAND", required=True, help="one of those above")
    for name, declare in _DECLARED.items():
        what = COMMANDS[name]
        command = commands.add_parser(name, description=f"{what[0].upper()}{what[1:]}.")
        command.set_defaults(run=declare(command))
    return parser


def _declare_plan(command: argparse.ArgumentParser) -> Callable:
    _add_study(command)
    shown = command.add_mutually_exclusive_group()
    shown.add_argument("--explain", action="store_true",
                       help="every number, and the public fact it comes from")
    shown.add_argument("--json", action="store_true", help="the plan as JSON")
    return _plan


def _declare_fit(command: argparse.ArgumentParser) -> Callable:
    _add_study(command)
    command.add_argument("--rehearsal", type=_seed, metavar="SEED",
                         help="a run that can be repeated and is NOT private: it says so "
                              "wherever it shows up")
    command.add_argument("--replace", action="store_true",
                         help="write over an earlier release and statement")
    command.add_argument("--profile", action="store_true",
                         help="say where the time went, on stderr: for inside only")
    command.add_argument("--threads", type=int, default=1, metavar="N",
                         help="that share the work; the release is the same for any number "
                              "(default: 1)")
    command.add_argument("--quiet", action="store_true", help="neither the plan nor progress")
    command.add_argument("--json", action="store_true", help="the release as JSON")
    command.set_defaults(interrupted=NOTHING_RELEASED)
    return _fit


def _declare_predict(command: argparse.ArgumentParser) -> Callable:
    _add_model(command)
    command.add_argument("data", metavar="DATA",
                         help=".mtx, .npz or svmlight, where a label must begin each row but is "
                              "not used")
    command.add_argument("--first-column", type=int, choices=(0, 1), default=1,
                         help="the id of the first column in svmlight (default: 1)")
    _add_out(command)
    command.add_argument("--json", action="store_true", help="as JSON")
    return _predict


def _declare_evaluate(command: argparse.ArgumentParser) -> Callable:
    _add_model(command)
    command.add_argument("data", metavar="DATA", help="held-out rows: svmlight, .mtx or .npz")
    command.add_argument("--labels", metavar="FILE",
                         help="beside .mtx and .npz: one a line, or .npy")
    command.add_argument("--first-column", type=int, choices=(0, 1), default=1,
                         help="the id of the first column in svmlight (default: 1)")
    command.add_argument("--epsilon", type=float, required=True, metavar="E",
                         help="of the guarantee for these rows")
    command.add_argument("--delta", type=float, required=True, metavar="D")
    command.add_argument("--neighbours", choices=NEIGHBOURS, default=NEIGHBOURS[0],
                         help="default: %(default)s")
    command.add_argument("--persons", metavar="FILE", help="whose each row is: one id a line")
    command.add_argument("--book", metavar="PATH", help="the budget book to charge")
    command.add_argument("--part", nargs=2, metavar=("SPLIT", "PART"),
                         help="the part of the data that is charged, and kept to")
    command.add_argument("--keep", action="store_true",
                         help="keep it in the release file, for its statement")
    command.add_argument("--plot", metavar="FILE", help="ROC and calibration, as .png or .svg")
    command.add_argument("--rehearsal", type=_seed, metavar="SEED",
                         help="a run that can be repeated and is NOT private")
    command.add_argument("--json", action="store_true", help="as JSON")
    return _evaluate


def _declare_statement(command: argparse.ArgumentParser) -> Callable:
    _add_model(command)
    command.add_argument("--html", action="store_true",
                         help="as a web page in one file, not Markdown")
    _add_out(command)
    return _statement


def _declare_demo(command: argparse.ArgumentParser) -> Callable:
    command.add_argument("--folder", type=Path, default=Path("sordino-demo"), metavar="F",
                         help="where its files go (default: %(default)s)")
    command.add_argument("--replace", action="store_true",
                         help="write over what an earlier demo left there")
    return _demo


def _declare_book(command: argparse.ArgumentParser) -> Callable:
    actions = command.add_subparsers(metavar="open|show|check|split", required=True)
    for name, (what, declare) in _BOOK_ACTIONS.items():
        action = actions.add_parser(name, description=f"{what[0].upper()}{what[1:]}.", help=what)
        action.add_argument("book", metavar="PATH", help="the budget book")
        action.set_defaults(act=declare(action))
    return _book


def _declare_book_open(action: argparse.ArgumentParser) -> Callable:
    action.add_argument("--epsilon", type=float, required=True, metavar="E",
                        help="the cap: what all releases together may cost")
    action.add_argument("--delta", type=float, default=0.0, metavar="D",
                        help="of the cap (default: 0, for which every plan must be pure)")
    action.add_argument("--neighbours", choices=NEIGHBOURS, default=NEIGHBOURS[0],
                        help="of every plan that is charged (default: %(default)s)")
    action.add_argument("--rows-per-person", type=int, default=1, metavar="R",
                        help="the most rows a person owns in the data (default: 1)")
    return _book_open


def _declare_book_show(action: argparse.ArgumentParser) -> Callable:
    action.add_argument("--json", action="store_true", help="as JSON")
    return _book_show


def _declare_book_check(action: argparse.ArgumentParser) -> Callable:
    return _book_check


def _declare_book_split(action: argparse.ArgumentParser) -> Callable:
    action.add_argument("--key", required=True, metavar="K",
                        help="a public text; persons are split by a hash of their id under it")
    action.add_argument("--part", dest="parts", action="append", required=True, type=_share,
                        metavar="NAME=SHARE", help="a part and its share of the persons")
    return _book_split


_BOOK_ACTIONS = {
    "open": ("start a book under a cap, where there is none yet", _declare_book_open),
    "show": ("every charge, and what is left", _declare_book_show),
    "check": ("say whether the book is whole: exit status 0 if so", _declare_book_check),
    "split": ("split the data in disjoint parts, each spent on by itself", _declare_book_split),
}

_DECLARED = {
    "plan": _declare_plan,
    "fit": _declare_fit,
    "predict": _declare_predict,
    "evaluate": _declare_evaluate,
    "statement": _declare_statement,
    "book": _declare_book,
    "demo": _declare_demo,
}


def _add_study(command: argparse.ArgumentParser):
    command.add_argument("study", metavar="STUDY.toml",
                         help="the study file; sordino demo writes one with every key")


def _add_model(command: argparse.ArgumentParser):
    command.add_argument("model", metavar="MODEL.json", help="a release that sordino fit wrote")


def _add_out(command: argparse.ArgumentParser):
    command.add_argument("--out", type=Path, metavar="FILE", help="to a file, not the terminal")


def _seed(text: str) -> int:
    if not (text.isascii() and text.isdigit()):
        raise argparse.ArgumentTypeError(f"must be a whole number of at least 0, not {text}")
    return int(text)


def _share(text: str) -> tuple[str, float]:
    name, _, share = text.rpartition("=")
    try:
        return name, float(share)
    except ValueError:
        raise argparse.ArgumentTypeError(f"must be NAME=SHARE, not {text}") from None


# --- commands

def _plan(options):
    from .study import load_study

    plan = load_study(options.study).plan()
    if options.json:
        print(json.dumps(_plan_table(plan), indent=1, ensure_ascii=False))
    else:
        print(plan.explain() if options.explain else plan)


def _fit(options):
    from .study import load_study

    study = load_study(options.study)
    plan, names, account = study.plan(), study.names(), study.account()
    for path in filter(None, (study.model, study.statement)):
        _check_target(path, options.replace)
    if not (options.json or options.quiet):
        print(plan, end="\n\n", flush=True)
    if account is not None and options.rehearsal is None:
        options.interrupted = f"{NOTHING_RELEASED}; look whether {study.data['book']} was charged"
    if options.rehearsal is not None:
        print("*** REHEARSAL: the seed is fixed, so this run is NOT private. ***", file=sys.stderr)
    with _progress(not options.quiet) as report:
        data = study.read_data(lambda part: report(part, "reading the file"))
        release = plan.fit(data.X, data.y, persons=study.persons(), book=account, names=names,
                           progress=report, rehearsal_seed=options.rehearsal,
                           threads=options.threads)
    options.interrupted = f"interrupted while writing: look whether {study.model} is there"
    _save(study, release)
    if options.json:
        print(study.model.read_text(encoding="utf-8"), end="")
    else:
        _show(study, release)
    if options.profile:
        print(release.profile, file=sys.stderr)


def _predict(options):
    from .files import read_table
    from .release import load_release

    release = load_release(options.model)
    if options.out is not None:
        _check_out(options.out, options.model, options.data)
    _note_rehearsal(release)
    with _progress(True) as report:
        data = read_table(options.data, features=release.plan.facts.features,
                          first_column=options.first_column,
                          progress=lambda part: report(part, "reading the file"))
    name, predict = (("probabilities", release.predict_probability) if release.binary else
                     ("predictions", release.predict))
    values = predict(data.X).tolist()
    if options.json:
        _give(json.dumps({"rehearsal": release.rehearsal, name: values}) + "\n", options.out,
              quiet=True)
    else:
        _give("".join(f"{value!r}\n" for value in values), options.out)


def _evaluate(options):
    from .files import read_ids, read_table
    from .release import load_release

    release = load_release(options.model)
    _note_rehearsal(release)
    account = _account(options)
    with _progress(True) as report:
        data = read_table(options.data, features=release.plan.facts.features,
                          labels=options.labels, first_column=options.first_column,
                          progress=lambda part: report(part, "reading the file"))
    if data.y is None:
        raise InputError(f"{data.source} holds no labels: name a file of them, --labels FILE")
    persons = None if options.persons is None else read_ids(options.persons)
    guarantee = Guarantee(options.epsilon, options.delta, options.neighbours)
    evaluation = release.evaluate(data.X, data.y, guarantee, book=account, persons=persons,
                                  rehearsal_seed=options.rehearsal)
    if options.keep:
        kept = release.with_evaluation(evaluation)
        kept.save(options.model, rehearsal=release.rehearsal)
    if options.plot is not None:
        evaluation.plot(options.plot)
    print(json.dumps(evaluation.to_dict(), indent=1) if options.json else evaluation)


def _account(options):
    """The book, or the part of it, that the options name."""
    from .book import BudgetBook

    if options.book is None:
        if options.part is not None:
            raise InputError("--part needs --book")
        return None
    book = BudgetBook(options.book)
    return book if options.part is None else book.part(*options.part)


def _statement(options):
    from .release import load_release

    release = load_release(options.model)
    if options.out is not None:
        _check_out(options.out, options.model)
    _note_rehearsal(release)
    _give(release.statement(html=options.html), options.out)


def _book(options):
    options.act(options)


def _book_open(options):
    from .book import BudgetBook

    cap = Guarantee(options.epsilon, options.delta, options.neighbours)
    BudgetBook.open(options.book, cap, rows_per_person=options.rows_per_person)
    print(f"{options.book}: nothing spent of epsilon {cap.epsilon:g} at delta {cap.delta:g} "
          f"({cap.neighbours})")


def _book_show(options):
    from .book import BudgetBook

    book = BudgetBook(options.book)
    print(json.dumps(book.to_dict(), indent=1) if options.json else book)


def _book_check(options):
    from .book import BudgetBook

    book = BudgetBook(options.book)
    charges = len(book.entries)
    print(f"{options.book}: whole; {charges:,} {'charge' if charges == 1 else 'charges'}, epsilon "
          f"{book.epsilon_spent:.6g} of {book.cap.epsilon:g} spent")


def _book_split(options):
    from .book import BudgetBook
    from .parts import Split

    parts = dict(options.parts)
    if len(parts) < len(options.parts):
        raise InputError("a part is named twice")
    BudgetBook(options.book).add_split(Split(options.key, parts))
    print(f"{options.book}: split {options.key!r} has the parts {', '.join(parts)}")


def _demo(options):
    from .demo import run_demo

    run_demo(options.folder, replace=options.replace, command=main)


# --- what is shown

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
        "smallest_difference": {
            str(share): plan.smallest_difference(share) for share in (0.001, 0.01, 0.1)
        },
        "sees_anything": plan.sees_anything,
    }


def _show(study, release):
    print(release, end="\n\n")
    print(f"{'Rehearsal:' if release.rehearsal else 'Release:':11} {study.model}")
    if study.statement is not None:
        print(f"{'Statement:':11} {study.statement}")


def _note_rehearsal(release):
    if release.rehearsal:
        print("sordino: this model is a REHEARSAL: not private, must not leave", file=sys.stderr)


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
        task = bar.add_task("reading the file", total=1.0)
        yield lambda fraction, what: bar.update(task, completed=fraction, description=what)


def _silent(fraction: float, what: str):
    """Progress that nobody watches."""


# --- what is written

def _check_target(path: Path, replace: bool):
    """Refuse, before any data is read, what could not be written once the budget is spent."""
    _check_writable(path)
    if path.exists() and not replace:
        raise InputError(f"{path} is there already: --replace writes over it")


def _check_out(path: Path, *read: str):
    """Refuse to write where it is impossible, or over what is read."""
    _check_writable(path)
    if os.path.realpath(path) in map(os.path.realpath, read):
        raise InputError(f"{path} cannot be written: it is what is read")


def _check_writable(path: Path):
    if not path.parent.is_dir():
        raise InputError(f"{path} cannot be written: there is no folder {path.parent}")
    if path.is_dir():
        raise InputError(f"{path} cannot be written: it is a folder")
    if not os.access(path.parent, os.W_OK | os.X_OK):
        raise InputError(f"{path} cannot be written: {path.parent} is not yours to write to")


def _save(study, release):
    from .release import write_text

    try:
        release.save(study.model, rehearsal=release.rehearsal)
    except InputError as error:
        kept = Path(tempfile.mkdtemp(prefix="sordino-")) / study.model.name
        release.save(kept, rehearsal=release.rehearsal)
        raise InputError(
            f"{error}. The fit is done and has spent its epsilon: keep {kept}"
        ) from None
    if study.statement is not None:
        write_text(study.statement, release.statement())


def _give(text: str, path: Path | None, quiet: bool = False):
    """Text to a file, whole or not at all, or to stdout."""
    if path is None:
        sys.stdout.write(text)
        return
    from .release import write_text

    write_text(path, text)
    if not quiet:
        print(f"{'Written:':11} {path}")


if __name__ == "__main__":
    sys.exit(main())
