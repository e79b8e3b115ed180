"""The study file: data, facts, guarantee, method and release of one study, in TOML.

It is read strictly: an unknown key, a missing one or a value of the wrong type is an error that
names the file, the table and the key. Paths are relative to the folder of the study file.
"""

from __future__ import annotations

import difflib
import os
import tomllib
from dataclasses import dataclass, field
from pathlib import Path

import numpy as np

from .errors import InputError
from .facts import Guarantee, PublicFacts
from .files import Data, read_names, read_numbers, read_table
from .plan import Plan, plan_fit

# what a value may be: {in words: types}
TEXT = {"a text": str}
WHOLE = {"a whole number": int}
NUMBER = {"a number": (int, float)}
YES_OR_NO = {"true or false": bool}
LIST = {"a list": list}

# table: {key: what its value may be}
KEYS = {
    "data": {"matrix": TEXT, "labels": TEXT, "first_column": WHOLE, "names": TEXT},
    "facts": {"features": WHOLE, "rows": WHOLE, "entry_bound": NUMBER | TEXT,
              "label": TEXT | LIST, "rows_per_person": WHOLE},
    "guarantee": {"epsilon": NUMBER, "delta": NUMBER, "neighbours": TEXT},
    "method": {"name": TEXT, "loss": TEXT, "steps": WHOLE, "radius": NUMBER, "schedule": TEXT,
               "intercept": YES_OR_NO},
    "release": {"model": TEXT, "statement": TEXT},
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

    def names(self) -> tuple[str, ...] | None:
        """The public names of all features, or None."""
        path = self.data.get("names")
        return None if path is None else read_names(path, self.facts.features)


def load_study(path) -> Study:
    """Read a study file; raises InputError for anything that is not as it should be."""
    source = os.fsdecode(path)
    tables = _checked_tables(source, _parsed(source))
    folder = Path(source).parent
    data = dict(tables["data"])
    for name in ("matrix", "labels", "names"):
        if name in data:
            data[name] = str(folder / data[name])
    release = {name: folder / value for name, value in tables["release"].items()}
    method = dict(tables.get("method", {}))
    if "name" in method:
        method["method"] = method.pop("name")
    try:
        facts = PublicFacts(**_facts(tables["facts"], folder))
        guarantee = Guarantee(**tables["guarantee"])
    except InputError as error:
        raise type(error)(f"{source}: {error}") from None
    return Study(source, data, facts, guarantee, method=method, **release)


def _facts(table: dict, folder: Path) -> dict:
    """Keys of [facts] as PublicFacts takes them."""
    facts = dict(table)
    if isinstance(facts.get("entry_bound"), str):
        facts["entry_bound"] = read_numbers(str(folder / facts["entry_bound"]))
    if isinstance(facts.get("label"), list):
        facts["label"] = tuple(facts["label"])
    return facts


def _parsed(source: str) -> dict:
    try:
        with open(source, "rb") as file:
            return tomllib.load(file)
    except OSError as error:
        raise InputError(f"{source}: {error.strerror}") from None
    except (tomllib.TOMLDecodeError, UnicodeDecodeError) as error:
        raise InputError(f"{source} is not TOML: {error}") from None


def _checked_tables(source: str, tables: dict) -> dict:
    for name, table in tables.items():
        if name not in KEYS:
            raise InputError(f"{source}: unknown table [{name}]{_nearest(name, KEYS)}")
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
        if not any(_is_of(value, types) for types in allowed.values()):
            wanted = " or ".join(allowed)
            raise InputError(f"{source}: {key} in [{name}] must be {wanted}, not {value!r}")


def _is_of(value, types) -> bool:
    """isinstance, but true and false are no numbers."""
    return isinstance(value, types) and (types is bool or not isinstance(value, bool))


def _nearest(word: str, known) -> str:
    near = difflib.get_close_matches(word, known, n=1, cutoff=0.5)
    return f"; did you mean {near[0]}?" if near else f"; known are {', '.join(known)}"
