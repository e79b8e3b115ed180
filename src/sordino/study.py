"""The study file: data, facts, guarantee, method and release of one study, in TOML.

It is read strictly: an unknown key, a missing one or a value of the wrong type is an error that
names the file, the table and the key. Paths are relative to the folder of the study file.
"""

from __future__ import annotations

import difflib
import os
import re
import tomllib
from contextlib import contextmanager
from dataclasses import dataclass, field
from pathlib import Path
from reprlib import repr as shortened

from .book import BookPart, BudgetBook
from .errors import InputError
from .facts import LEARN, Guarantee, PublicFacts
from .files import Data, read_ids, read_names, read_numbers, read_table
from .plan import Plan, plan_fit
from .release import load_release

# how tomllib words a fault: what it is, and at which line, if not at the end
FAULT = re.compile(r"(.*?)(?: \(at (?:line (\d+), column \d+|end of document)\))?", re.DOTALL)

# what a value may be: {in words: types}
TEXT = {"a text in quotes": str}
PATH = {"the path of a file in quotes": str}
WHOLE = {"a whole number": int}
NUMBER = {"a number": (int, float)}
YES_OR_NO = {"true or false": bool}
IDS = {"a list of feature ids": list}
LEARNED = {'"learn"': str}

# table: {key: what its value may be}
KEYS = {
    "data": {"matrix": PATH, "labels": PATH, "first_column": WHOLE, "names": PATH,
             "persons": PATH, "book": PATH, "part": {"[split, part]": list}},
    "facts": {"features": WHOLE, "rows": WHOLE, "entry_bound": NUMBER | PATH | LEARNED,
              "label": {'"binary"': str, "[low, high]": list} | LEARNED, "rows_per_person": WHOLE},
    "guarantee": {"epsilon": NUMBER, "delta": NUMBER, "neighbours": TEXT},
    "method": {"name": TEXT, "loss": TEXT, "steps": WHOLE, "radius": NUMBER, "schedule": TEXT,
               "picks": WHOLE, "intercept": YES_OR_NO, "residual_bound": NUMBER,
               "include": IDS, "exclude": IDS, "prior": PATH, "start": PATH},
    "release": {"model": PATH, "statement": PATH},
}
REQUIRED = {
    "data": ("matrix",),
    "facts": ("features", "rows"),
    "guarantee": ("epsilon",),
    "release": ("model",),
}


@dataclass(frozen=True)
class Study:
    """A study, checked.

    source     the study file, as it was named
    data       keys of [data], paths resolved
    facts, guarantee
    method     keys of [method], as `plan_fit` takes them
    model      where the release goes
    statement  where the statement goes, or None
    """

    source: str
    data: dict
    facts: PublicFacts
    guarantee: Guarantee
    model: Path
    statement: Path | None = None
    method: dict = field(default_factory=dict)

    def plan(self) -> Plan:
        """The plan of this study; reads no data."""
        with _naming(self.source):
            return plan_fit(self.facts, self.guarantee, **self.method)

    def read_data(self, progress=None) -> Data:
        """The table and its labels; see `sordino.files.read_table`."""
        given = {key: self.data[key] for key in ("labels", "first_column") if key in self.data}
        data = read_table(self.data["matrix"], features=self.facts.features, progress=progress,
                          **given)
        if data.y is None:
            raise InputError(f"{self.source}: {data.source} holds no labels: name a file of them, "
                             "labels = ..., in [data]")
        return data

    def persons(self) -> tuple[str, ...] | None:
        """The id of the person that each row is of, or None."""
        path = self.data.get("persons")
        return None if path is None else read_ids(path)

    def account(self) -> BudgetBook | BookPart | None:
        """The budget book of the data, or the part of it that this study keeps to."""
        if "book" not in self.data:
            return None
        with _naming(self.source):
            book = BudgetBook(self.data["book"])
            return book.part(*self.data["part"]) if "part" in self.data else book

    def names(self) -> tuple[str, ...] | None:
        """The public names of all features, or None."""
        path = self.data.get("names")
        return None if path is None else read_names(path, self.facts.features)


def load_study(path) -> Study:
    """Read a study file; raises InputError for anything that is not as it should be."""
    source = os.fsdecode(path)
    tables = _checked_tables(source, _parsed(source))
    _resolve_paths(tables, Path(source).parent)
    _check_paths(source, tables)
    with _naming(f"{source}, [facts]"):
        facts = PublicFacts(**_facts(tables["facts"]))
    with _naming(f"{source}, [guarantee]"):
        guarantee = Guarantee(**tables["guarantee"])
    _check_part(source, tables["data"])
    data = {key: str(value) if isinstance(value, Path) else value
            for key, value in tables["data"].items()}
    with _naming(f"{source}, [method]"):
        method = _method(tables.get("method", {}))
    return Study(source, data, facts, guarantee, method=method, **tables["release"])


def _parsed(source: str) -> dict:
    text = _text(source)
    try:
        return tomllib.loads(text)
    except tomllib.TOMLDecodeError as error:
        fault, line = FAULT.fullmatch(str(error)).groups()
        line = line or len(text.removesuffix("\n").split("\n"))
        raise InputError(f"{source}, line {line}: not TOML: {fault}") from None
    except RecursionError:
        raise InputError(f"{source}: not a study file: its values are nested too deeply") from None


def _text(source: str) -> str:
    try:
        return Path(source).read_bytes().decode("utf-8-sig")
    except OSError as error:
        raise InputError(f"{source}: {error.strerror}") from None
    except UnicodeDecodeError as error:
        line = error.object[: error.start].count(b"\n") + 1
        byte = error.object[error.start]
        raise InputError(f"{source}, line {line}: byte 0x{byte:02x} is not UTF-8") from None


def _facts(table: dict) -> dict:
    """Keys of [facts] as PublicFacts takes them."""
    facts = dict(table)
    if isinstance(facts.get("entry_bound"), Path):
        facts["entry_bound"] = read_numbers(facts["entry_bound"])
    if isinstance(facts.get("label"), list):
        facts["label"] = tuple(facts["label"])
    return facts


def _check_part(source: str, data: dict):
    if "part" not in data:
        return
    if len(data["part"]) != 2 or not all(isinstance(name, str) for name in data["part"]):
        raise InputError(f"{source}: part in [data] must be [split, part], two texts")
    for needed in ("book", "persons"):
        if needed not in data:
            raise InputError(f"{source}: part in [data] needs {needed} beside it")


def _method(table: dict) -> dict:
    """Keys of [method] as `plan_fit` takes them: public knowledge is read from its files."""
    method = {"method" if key == "name" else key: value for key, value in table.items()}
    if "prior" in method:
        method["prior"] = read_numbers(method["prior"])
    if "start" in method:
        method["start"] = load_release(method["start"])
    return method


@contextmanager
def _naming(place: str):
    """An InputError raised within names the place it is about."""
    try:
        yield
    except InputError as error:
        raise type(error)(f"{place}: {error}") from None


# --- tables and keys

def _checked_tables(source: str, tables: dict) -> dict:
    for name, table in tables.items():
        if name not in KEYS:
            what = f"table [{name}]" if isinstance(table, dict) else f"key {name} before any table"
            raise InputError(f"{source}: unknown {what}{_nearest(name, KEYS)}")
        if not isinstance(table, dict):
            raise InputError(f"{source}: {name} must be a table, [{name}]")
        _check_table(source, name, table)
    for name, keys in REQUIRED.items():
        for key in keys:
            if key not in tables.get(name, {}):
                raise InputError(f"{source}: {key} is missing in [{name}]")
    return tables


def _check_table(source: str, name: str, table: dict):
    for key, value in table.items():
        if key not in KEYS[name]:
            raise InputError(f"{source}: unknown key {key} in [{name}]{_nearest(key, KEYS[name])}")
        allowed = KEYS[name][key]
        if value == "" or not any(_is_of(value, types) for types in allowed.values()):
            wanted = " or ".join(allowed)
            raise InputError(f"{source}: {key} in [{name}] must be {wanted}, not {_shown(value)}")


def _is_of(value, types) -> bool:
    """isinstance, but true and false are no numbers."""
    return isinstance(value, types) and (types is bool or not isinstance(value, bool))


def _shown(value) -> str:
    """A value as TOML has it, cut short."""
    if isinstance(value, bool):
        return str(value).lower()
    if isinstance(value, dict):
        return "a table"
    return f'"{value}"' if isinstance(value, str) and len(value) < 30 else shortened(value)


def _nearest(word: str, known) -> str:
    near = difflib.get_close_matches(word.lower(), known, n=1, cutoff=0.5)
    return f"; did you mean {near[0]}?" if near else f"; known are {', '.join(known)}"


# --- paths

def _resolve_paths(tables: dict, folder: Path):
    """Every path becomes a Path, relative ones from the folder of the study file."""
    for name, table in tables.items():
        for key, value in table.items():
            kinds = KEYS[name][key].items()
            word = value == LEARN and LEARNED.items() <= kinds
            if isinstance(value, str) and PATH.items() <= kinds and not word:
                table[key] = folder / value


def _check_paths(source: str, tables: dict):
    """What is written must not be what is read, nor be written twice."""
    taken = {os.path.realpath(source): "the study file"}
    for name in ("data", "facts", "method", "release"):
        for key, path in tables.get(name, {}).items():
            if not isinstance(path, Path):
                continue
            place = f"{key} in [{name}]"
            other = taken.setdefault(os.path.realpath(path), place)
            if name == "release" and other != place:
                raise InputError(f"{source}: {place} names the same file as {other}, {path}")
