"""The house: imports run down the list of modules, towards `_core`, and heavy ones are lazy."""

from __future__ import annotations

import ast
import re
import subprocess
import sys
from dataclasses import dataclass
from pathlib import Path

import pytest

import sordino

HOUSE = Path(sordino.__file__).parent
LONGEST_LINE = 100

# From the floor up. A module, or every module of a package, may import those before it and `_core`.
ORDER = (
    "errors", "checks", "persons", "parts", "facts", "accounting", "ledger", "book", "losses",
    "bounds", "plan", "plan_text", "page", "table", "intake", "charging", "solvers", "release",
    "evaluation", "fit", "statement", "files", "study", "demo", "cli",
)
DOORS = ("__init__", "__main__")        # over everything

# Imports up the list, inside a function: methods that are only a door to a later module.
DOORWAYS = {
    ("plan", "Plan.fit", "fit"),
    ("plan", "Plan.__str__", "plan_text"),
    ("plan", "Plan.explain", "plan_text"),
    ("release", "Release.evaluate", "evaluation"),
    ("release", "Release.statement", "statement"),
    ("release", "_with_evaluations", "evaluation"),
}

HEAVY = ("numba", "sklearn", "matplotlib", "rich")


@dataclass(frozen=True)
class Import:
    """One import of sordino's own: `place` is the function it stands in, "" at module level."""

    source: Path
    line: int
    place: str
    target: str         # what is imported: a module or package directly under sordino

    @property
    def level(self) -> str:
        return level_of(self.source)

    def __str__(self) -> str:
        return f"{self.source.relative_to(HOUSE)}:{self.line} imports {self.target}"


def level_of(source: Path) -> str:
    """The module or package directly under sordino that a file belongs to."""
    return source.relative_to(HOUSE).with_suffix("").parts[0]


def python_files() -> list[Path]:
    return sorted(HOUSE.rglob("*.py"))


def kernel_files() -> list[Path]:
    return sorted(path for path in (HOUSE / "_core").iterdir() if path.suffix in (".pyx", ".pxd"))


def imports_of(source: Path) -> list[Import]:
    found: list[Import] = []
    _collect(ast.parse(source.read_text()).body, source, "", found)
    return found


def _collect(nodes, source: Path, place: str, found: list[Import]):
    for node in nodes:
        if isinstance(node, ast.If) and ast.unparse(node.test).endswith("TYPE_CHECKING"):
            _collect(node.orelse, source, place, found)
        elif isinstance(node, (ast.Import, ast.ImportFrom)):
            found += [Import(source, node.lineno, place, name) for name in _targets(node, source)]
        elif isinstance(node, (ast.FunctionDef, ast.AsyncFunctionDef, ast.ClassDef)):
            _collect(node.body, source, f"{place}.{node.name}".lstrip("."), found)
        else:
            _collect(ast.iter_child_nodes(node), source, place, found)


def _targets(node: ast.Import | ast.ImportFrom, source: Path) -> list[str]:
    """The modules directly under sordino that an import statement names."""
    if isinstance(node, ast.Import):
        paths = [alias.name for alias in node.names]
    elif node.level == 0:
        paths = [f"{node.module}.{alias.name}" for alias in node.names]
    else:
        package = ("sordino", *source.relative_to(HOUSE).parts[:-1])
        base = package[: len(package) - node.level + 1]
        middle = node.module.split(".") if node.module else []
        paths = [".".join([*base, *middle, alias.name]) for alias in node.names]
    parts = [path.split(".") for path in paths]
    return [names[1] if len(names) > 1 else "__init__" for names in parts if names[0] == "sordino"]


def goes_down(found: Import) -> bool:
    """Whether an import leads to an earlier level, or stays within its own package."""
    if found.level in DOORS or found.target in ("_core", found.level):
        return True
    below = ORDER[: ORDER.index(found.level)] if found.level in ORDER else ()
    return found.target in below


def test_every_module_has_its_place():
    levels = {level_of(path) for path in python_files()}
    assert levels <= {*ORDER, *DOORS, "_core"}, "a new module needs a place in ORDER"
    assert "plan" in levels and "_core" in levels, "this looks at the real package"


@pytest.mark.parametrize("source", python_files(), ids=lambda path: str(path.relative_to(HOUSE)))
def test_imports_run_down_the_list(source):
    up = [found for found in imports_of(source) if not goes_down(found)]
    barred = [
        str(found) for found in up
        if not found.place or (found.level, found.place, found.target) not in DOORWAYS
    ]
    assert not barred


def test_every_doorway_is_used():
    used = {
        (found.level, found.place, found.target)
        for source in python_files() for found in imports_of(source) if found.place
    }
    assert {door for door in DOORWAYS if (HOUSE / f"{door[2]}.py").exists()} <= used


def test_a_wrong_import_would_be_seen(tmp_path, monkeypatch):
    monkeypatch.setitem(globals(), "HOUSE", tmp_path)
    (tmp_path / "accounting").mkdir()
    source = tmp_path / "accounting" / "curves.py"
    source.write_text(
        "from __future__ import annotations\n"
        "from typing import TYPE_CHECKING\n"
        "import numpy as np\n"
        "from ..errors import InputError\n"
        "from .convert import settled\n"
        "from .. import plan\n"
        "import sordino.table as table\n"
        "from sordino import fit\n"
        "if TYPE_CHECKING:\n"
        "    from ..release import Release\n"
        "try:\n"
        "    from .._core.bits import Bits\n"
        "except ImportError:\n"
        "    from ..cli import main\n"
        "class Cost:\n"
        "    def show(self):\n"
        "        from ..statement import statement\n"
    )
    found = imports_of(source)
    assert [(x.line, x.place, x.target) for x in found if not goes_down(x)] == [
        (6, "", "plan"), (7, "", "table"), (8, "", "fit"), (14, "", "cli"),
        (17, "Cost.show", "statement"),
    ]


@pytest.mark.parametrize("source", kernel_files(), ids=lambda path: path.name)
def test_kernels_know_nothing_above_them(source):
    """Text, so that `cimport` and strings handed to the import machinery count too."""
    for line in source.read_text().splitlines():
        if re.search(r"\bc?import\b", line) and not line.lstrip().startswith("#"):
            assert not re.search(r"\bfrom\s+\.\.|\bsordino\b(?!\._core)", line), line


def test_the_light_import():
    """`import sordino`, and a plan printed, load nothing heavy."""
    work = (
        "import sys, sordino\n"
        f"heavy = lambda: [name for name in {HEAVY!r} if name in sys.modules]\n"
        "print(heavy())\n"
        "facts = sordino.PublicFacts(features=100, rows=1000)\n"
        "sordino.plan_fit(facts, sordino.Guarantee(1.0, 1e-6))\n"
        "print(heavy())\n"
    )
    done = subprocess.run([sys.executable, "-c", work], capture_output=True, text=True, check=True)
    assert done.stdout.split() == ["[]", "[]"]


@pytest.mark.parametrize(
    "source", [*python_files(), *kernel_files()], ids=lambda path: str(path.relative_to(HOUSE))
)
def test_lines_are_short(source):
    text = source.read_text()
    long = [n for n, line in enumerate(text.splitlines(), 1) if len(line) > LONGEST_LINE]
    assert not long, f"lines over {LONGEST_LINE} characters: {long}"
    assert "\t" not in text and text.endswith("\n") or not text
