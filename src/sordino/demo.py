"""The whole job on invented data, as a user would do it: `sordino demo`.

The scenario is invented. A club keeps mountain huts; every guest of a summer wrote one entry in a
guest book. The club wants to tell other clubs which words go with guests who came back the next
year, and must not give any guest's entry away.
"""

from __future__ import annotations

import itertools
from collections.abc import Callable
from pathlib import Path

import numpy as np
import scipy.sparse as sp
from scipy.special import expit
from scipy.stats import rankdata

from .errors import InputError
from .files import write_svmlight
from .release import load_release

GUESTS, LATER_GUESTS = 40_000, 10_000
WORDS = 60_000
WORDS_AN_ENTRY = 18
SEED = 20_260

# word: (share of entries that hold it, its part in the log-odds of coming back)
TELLING = {
    "sunrise": (0.22, 1.1), "snoring": (0.18, -1.1), "marmots": (0.14, 1.0), "queue": (0.16, -1.0),
    "soup": (0.30, 0.8), "drizzle": (0.25, -0.7), "stars": (0.20, 0.9), "blisters": (0.20, -0.8),
    "wardens": (0.12, 0.9), "cramped": (0.10, -1.0), "stove": (0.18, 0.6), "draughty": (0.09, -0.9),
    "ridge": (0.24, 0.6), "mud": (0.22, -0.6), "cards": (0.08, 0.9), "dumplings": (0.10, 0.8),
}
SYLLABLES = ("ba", "do", "fe", "gri", "hul", "jo", "ka", "lem", "mi", "no", "pra", "rus", "so",
             "ti", "vu", "zen")

STUDY = """\
# A study: what is public, what is promised, and where things are. Every key a study may have is
# here; those behind a # are left to their rules.

[data]
matrix = "train.svm"        # svmlight; or Matrix Market (.mtx) or scipy .npz, with labels = "..."
# labels = "labels.txt"     # one number a line, or .npy; only beside .mtx and .npz
first_column = 1            # the id of the first column in svmlight
names = "words.txt"         # one name a line, from a public list

[facts]                     # true without reading the data
features = {words}
rows = {guests}
entry_bound = 1.0           # or a file with one bound per feature
label = "binary"            # 0/1 or -1/+1
rows_per_person = 1

[guarantee]
epsilon = 1.0
delta = 1e-6
neighbours = "add-remove"   # one row more or less; or "replace-one"

[method]
name = "frank-wolfe"
loss = "logistic"
# steps = 60                # private picks
# radius = 28.0             # what the coefficients may add up to, in bounds
# schedule = "paced"        # or "shrinking"
# intercept = true

[release]
model = "model.json"
statement = "statement.md"
"""


def run_demo(folder: Path, *, replace: bool, command: Callable[[list[str]], int]):
    """Write the data, then plan, fit, state and predict by way of `command`, saying what to see."""
    _make_folder(folder, replace)
    _say(
        "The scenario, all of it invented: a club keeps mountain huts, and each of "
        f"{GUESTS:,} guests left one entry in a guest book. Which words go with guests who came "
        "back the next year? Other clubs may know that; no guest's entry may be given away. "
        f"{len(TELLING)} of the {WORDS:,} words were given a part in the answer."
    )
    later = _write_files(folder)
    _say(f"Files are in {folder}/: train.svm, test.svm, words.txt, study.toml")
    step = _Steps(command)

    step("plan", str(folder / "study.toml"))
    _say(
        "Look at the last lines: before any entry is read, they say which words can be found at "
        "all at this epsilon. Words rarer than that are hidden by the noise."
    )

    step("fit", str(folder / "study.toml"), "--replace", "--quiet")
    _say(_found(load_release(folder / "model.json")))

    step("statement", str(folder / "model.json"), "--out", str(folder / "statement.md"))
    _say(
        f"The statement for a disclosure board is {folder / 'statement.md'}: what is released, "
        "what is guaranteed, what was taken as public, and what is not covered. It begins:"
    )
    lines = (folder / "statement.md").read_text(encoding="utf-8").splitlines()
    print("\n".join(f"    {line}".rstrip() for line in lines[:8]), end="\n\n")

    predictions = folder / "predictions.txt"
    step("predict", str(folder / "model.json"), str(folder / "test.svm"), "--out",
         str(predictions))
    _say(_judged(np.loadtxt(predictions), later))

    _say(
        f"Your own data: copy {folder / 'study.toml'}, name your files in it, state what is "
        "public, and run `sordino plan` on it. A study is fitted once; each fit spends its epsilon."
    )


def _make_folder(folder: Path, replace: bool):
    if folder.is_dir() and any(folder.iterdir()) and not replace:
        raise InputError(f"{folder} holds files already: --replace writes over those of the demo")
    try:
        folder.mkdir(parents=True, exist_ok=True)
    except OSError as error:
        raise InputError(f"{folder}: {error.strerror}") from None


class _Steps:
    """Runs commands, each shown as it would be typed."""

    def __init__(self, command: Callable[[list[str]], int]):
        self.command = command

    def __call__(self, *arguments: str):
        print("$ sordino", *arguments, end="\n\n", flush=True)
        status = self.command(list(arguments))
        if status:
            raise SystemExit(status)
        print(flush=True)


# --- the data

def words() -> list[str]:
    """The public word list: the telling words first, then words made of syllables."""
    made = map("".join, itertools.product(SYLLABLES, repeat=4))
    return [*TELLING, *itertools.islice(made, WORDS - len(TELLING))]


def guest_books(guests: int, rng: np.random.Generator) -> tuple[sp.csr_array, np.ndarray]:
    """(X, y): 0/1 words (guests, WORDS), Zipf-like; y is 1 where the guest came back."""
    share, weight = np.array(list(TELLING.values())).T
    told = sp.csr_array((rng.random((guests, len(share))) < share).astype(np.float64))
    guest = np.repeat(np.arange(guests), WORDS_AN_ENTRY)
    word = (WORDS - len(share)) * rng.random(len(guest)) ** 4
    rest = sp.coo_array(
        (np.ones(len(guest)), (guest, word.astype(np.int64))), shape=(guests, WORDS - len(share))
    )
    X = sp.csr_array(sp.hstack([told, rest.tocsr().minimum(1)], format="csr"))
    chance = expit(told @ weight - share @ weight)
    return X, (rng.random(guests) < chance).astype(np.float64)


def _write_files(folder: Path) -> np.ndarray:
    """Write everything the commands need; returns the labels of the later guests."""
    rng = np.random.default_rng(SEED)
    write_svmlight(folder / "train.svm", *guest_books(GUESTS, rng))
    X, later = guest_books(LATER_GUESTS, rng)
    write_svmlight(folder / "test.svm", X, later)
    (folder / "words.txt").write_text("\n".join(words()) + "\n", encoding="utf-8")
    study = STUDY.format(words=f"{WORDS:_}", guests=f"{GUESTS:_}")
    (folder / "study.toml").write_text(study, encoding="utf-8")
    return later


# --- what to look at

def _found(release) -> str:
    found = [name for name in release.names if name in TELLING]
    signs = {name: np.sign(weight) for name, (_, weight) in TELLING.items()}
    right = sum(
        signs[name] == np.sign(coefficient)
        for name, coefficient in zip(release.names, release.coefficients) if name in TELLING
    )
    text = (
        f"Of the {len(TELLING)} telling words the release holds {len(found)}, {right} of them with "
        f"the right sign; the other {len(release.names) - len(found)} features were picked by "
        "noise. The run drew fresh random bits: another one would differ."
    )
    return text


def _judged(chances: np.ndarray, labels: np.ndarray) -> str:
    rate = labels.mean()
    knowing_nothing = -(rate * np.log(rate) + (1 - rate) * np.log1p(-rate))
    return (
        f"One chance of coming back for each of {len(labels):,} guests of the next summer, who "
        f"were not in the fit. Their AUC is {auc(chances, labels):.3f}, their log loss "
        f"{log_loss(chances, labels):.3f} ({knowing_nothing:.3f} for the base rate alone). These "
        "guests are invented, so they may be looked at; on real rows such a figure gives "
        "something away and needs a private measurement of its own."
    )


def auc(chances: np.ndarray, labels: np.ndarray) -> float:
    """The share of pairs of a 1 and a 0 that the chances order rightly, ties counting half."""
    positive = labels > 0
    n, m = positive.sum(), (~positive).sum()
    return float((rankdata(chances)[positive].sum() - n * (n + 1) / 2) / (n * m))


def log_loss(chances: np.ndarray, labels: np.ndarray) -> float:
    return float(-np.log(np.where(labels > 0, chances, 1 - chances)).mean())


def _say(text: str):
    from textwrap import fill

    print(fill(text, 78, initial_indent="# ", subsequent_indent="# "), end="\n\n", flush=True)
