"""`python -m bench` lists the cases; `python -m bench signal noise accuracy` runs them."""

from __future__ import annotations

import argparse
import os
import sys
from functools import partial
from pathlib import Path

# Set on some machines for old builds of BLAS; they make a current numpy slower, and so would
# flatter us. BLAS reads them as it loads, hence a fresh start before numpy is imported.
_SLOWING = ("OPENBLAS_CORETYPE", "OPENBLAS_L2_SIZE")


def main(arguments: list[str] | None = None) -> int:
    options = _parser().parse_args(arguments)
    _restart_without(_SLOWING)
    from threadpoolctl import threadpool_limits

    from .cases import CASES, run
    from .report import write_report

    if not options.cases:
        print("\n".join(f"{name:10} {case.about}" for name, case in CASES.items()))
        return 0
    unknown = [name for name in options.cases if name not in CASES]
    if unknown:
        _parser().error(f"no case named {unknown[0]}; there are {', '.join(CASES)}")
    with threadpool_limits(1):
        results = {}
        for name in options.cases:
            say = partial(_say, name)
            results[name] = run(name, options.quick, say, options.cache)
        page = write_report(results, options.out, options.quick)
    print(page.read_text(encoding="utf-8"))
    return 0


def _parser() -> argparse.ArgumentParser:
    parser = argparse.ArgumentParser(
        prog="python -m bench", description="sordino against the textbook method, side by side"
    )
    parser.add_argument("cases", nargs="*", metavar="CASE", help="none: list the cases")
    parser.add_argument(
        "--quick", action="store_true",
        help="noise: fewer textbook steps, scaled and marked; real: fewer fits; book: fewer kills",
    )
    parser.add_argument(
        "--out", type=Path, default=Path("bench/results"), metavar="FOLDER",
        help="where report.md and report.json go (default: %(default)s)",
    )
    parser.add_argument(
        "--cache", type=Path, metavar="FOLDER",
        help="real: where packages are unpacked (default: sordino-bench in the user's cache)",
    )
    return parser


def _restart_without(variables: tuple[str, ...]):
    if any(name in os.environ for name in variables):
        kept = {name: value for name, value in os.environ.items() if name not in variables}
        os.execve(sys.executable, sys.orig_argv, kept)


def _say(name: str, line: str):
    print(f"{name}: {line}", file=sys.stderr, flush=True)


if __name__ == "__main__":
    sys.exit(main())
