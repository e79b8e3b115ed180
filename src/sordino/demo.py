"""The whole job on invented data, as a user would do it: `sordino demo`.

The scenario is invented. A club keeps mountain huts; every guest of a summer wrote one entry in a
guest book. The club wants to tell other clubs which words go with guests who came back the next
year, and must not give any guest's entry away.
"""

from __future__ import annotations

import io
import itertools
import shlex
from collections.abc import Callable, Iterator
from contextlib import redirect_stdout
from pathlib import Path
from textwrap import fill

import numpy as np
import scipy.sparse as sp
from scipy.special import expit
from scipy.stats import rankdata

from .errors import InputError
from .files import write_svmlight
from .release import Release, load_release

GUESTS, LATER_GUESTS = 40_000, 10_000
WORDS = 60_000
WORDS_AN_ENTRY = 18
SEED = 20_260
WIDTH = 78

# word: (share of entries that hold it, its part in the log-odds of coming back)
TELLING = {
    "sunrise": (0.22, 1.1), "snoring": (0.18, -1.1), "marmots": (0.14, 1.0), "queue": (0.16, -1.0),
    "soup": (0.38, 0.8), "drizzle": (0.27, -0.8), "stars": (0.20, 0.9), "blisters": (0.20, -0.9),
    "accordion": (0.11, 1.1), "cramped": (0.10, -1.1), "stove": (0.18, 0.8),
    "draughty": (0.12, -1.0), "ridge": (0.24, 0.7), "mud": (0.22, -0.7), "gentians": (0.13, 0.9),
    "thunder": (0.17, -0.9), "cowbells": (0.19, 0.8), "porridge": (0.15, -0.9),
    "dumplings": (0.12, 0.9), "lost": (0.12, -0.9), "cards": (0.10, 1.1), "fleas": (0.09, -1.2),
    "ibex": (0.05, 0.6), "wasps": (0.05, -0.6),
}
# no two begin alike, so different syllables make different words
SYLLABLES = ("ba", "do", "fe", "gri", "hul", "jo", "ka", "lem", "mi", "no", "pra", "rus", "so",
             "ti", "vu", "zen")

STUDY = """\
# A study: what is public, what is promised, and where things are. Every key a
# study may have is here; what stands behind a # is left to its rule. Paths are
# relative to this file.

[data]
matrix = "train.svm"        # svmlight; or Matrix Market (.mtx) or scipy .npz
# labels = "labels.txt"     # beside .mtx and .npz: one number a line, or .npy
first_column = 1            # the id of the first column in svmlight: 1 or 0
names = "words.txt"         # one name a line, from a list that is public
# persons = "persons.txt"   # one id a row, where a person may own several
# book = "huts.book"        # a budget book: sordino book open
# part = ["split", "fit"]   # the part of the data this study keeps to

[facts]                     # what may be said without reading the data
features = {words}
rows = {guests}
entry_bound = 1.0           # or a file, one per feature; or "learn"
label = "binary"            # 0/1 or -1/+1; or [low, high]; or "learn"
rows_per_person = 1

[guarantee]
epsilon = 1.0
delta = 1e-6
neighbours = "add-remove"   # one row more or less; or "replace-one"

[method]                    # may be left out as a whole
name = "greedy"             # or "frank-wolfe"
loss = "logistic"           # or for numeric labels "squared" or "huber"
# residual_bound = 0.25     # squared, huber: in half ranges of the label
# picks = 26                # greedy: how many features
# steps = 65                # frank-wolfe: private picks of a feature
# radius = 29.0             # the most that |coefficient| * bound may add up to
# schedule = "paced"        # or "shrinking"
# intercept = true
# include = [3, 14]         # feature ids, from 0: in the model by decision
# exclude = [15, 92]        # never picked
# prior = "prior.txt"       # one weight per feature (text, .npy)
# start = "earlier.json"    # a release to continue from

[release]
model = "model.json"        # what may leave
statement = "statement.md"  # may be left out
"""


def run_demo(folder: Path, *, replace: bool, command: Callable[[list[str]], int]):
    """Write the data, then plan, fit, state and predict by way of `command`, saying what to see.

    command takes arguments of `sordino` and returns an exit status. Raises InputError if the folder
    holds files and replace is False; ends with SystemExit where a command fails.
    """
    _make_folder(folder, replace)
    study, model = str(folder / "study.toml"), str(folder / "model.json")
    step = _Steps(command)
    _say(
        "The scenario, all of it invented: a club keeps mountain huts, and each of "
        f"{GUESTS:,} guests left one entry in a guest book. Which words go with guests who came "
        "back the next year? Other clubs may know that; no guest's entry may be given away. "
        f"{len(TELLING)} of the {WORDS:,} words were given a part in the answer."
    )
    later = _write_files(folder)
    _say(f"Written to the folder {folder}: train.svm, test.svm, words.txt, study.toml")

    step("plan", study)
    _say(
        "Look at the last paragraph: before any entry is read, it says which words can be found "
        "at this epsilon, and which will be hidden by the noise."
    )

    _say("Now the fit. --quiet leaves out the plan, which you have just seen.")
    step("fit", study, "--quiet", *(["--replace"] if replace else []))
    _say(*_found(load_release(model)))

    step("statement", model, paragraphs=3)
    _say(
        "This is for a disclosure board: what is released, what is guaranteed, what was taken as "
        f"public, and what is not covered. The fit has put all of it into "
        f"{folder / 'statement.md'}."
    )

    predictions = folder / "predictions.txt"
    step("predict", model, str(folder / "test.svm"), "--out", str(predictions))
    _say(*_judged(np.loadtxt(predictions), later))

    _say(
        "Your own data:",
        f"1. Copy {study}; name your files in it and state what is public.",
        "2. sordino plan STUDY.toml: change the facts, epsilon or picks until you like what can "
        "be seen. This costs nothing.",
        "3. sordino fit STUDY.toml: once. Each fit spends its epsilon, and they add up.",
        "4. Hand out the release with its statement.",
    )


def _make_folder(folder: Path, replace: bool):
    try:
        folder.mkdir(parents=True, exist_ok=True)
        held = any(folder.iterdir())
    except OSError as error:
        raise InputError(f"{folder} cannot be the demo's folder: {error.strerror}") from None
    if held and not replace:
        raise InputError(f"{folder} holds files already: --replace writes over those of a demo, "
                         "--folder names another")


class _Steps:
    """Runs commands, each shown as it would be typed."""

    def __init__(self, command: Callable[[list[str]], int]):
        self.command = command

    def __call__(self, *arguments: str, paragraphs: int | None = None):
        """Run one; where `paragraphs` is given, show only so many of its output."""
        print(_as_typed(arguments), end="\n\n", flush=True)
        if paragraphs is None:
            self._run(arguments)
        else:
            with redirect_stdout(io.StringIO()) as output:
                self._run(arguments)
            shown, left = _parted(output.getvalue(), paragraphs)
            print(f"{shown}\n\n... ({left} more lines)")
        print(flush=True)

    def _run(self, arguments: tuple[str, ...]):
        status = self.command(list(arguments))
        if status:
            raise SystemExit(status)


def _parted(text: str, paragraphs: int) -> tuple[str, int]:
    """The first paragraphs, and how many lines come after them."""
    parts = text.split("\n\n")
    shown, left = "\n\n".join(parts[:paragraphs]), "\n\n".join(parts[paragraphs:])
    return shown, len(left.splitlines())


def _as_typed(arguments: tuple[str, ...]) -> str:
    """A command as one types it, its options on a line of their own where it is wide."""
    text = f"$ sordino {shlex.join(arguments)}"
    return text if len(text) <= WIDTH else text.replace(" --", " \\\n      --", 1)


# --- the data

def words() -> list[str]:
    """The public word list: the telling words first, then words made of syllables."""
    return [*TELLING, *itertools.islice(_made_words(), WORDS - len(TELLING))]


def _made_words() -> Iterator[str]:
    """All words of two syllables, then of three, then of four."""
    rng = np.random.default_rng(SEED)
    for length in (2, 3, 4):
        made = list(map("".join, itertools.product(SYLLABLES, repeat=length)))
        yield from (made[k] for k in rng.permutation(len(made)))


def guest_books(guests: int, rng: np.random.Generator) -> tuple[sp.csr_array, np.ndarray]:
    """(X, y): 0/1 words (guests, WORDS), Zipf-like; y is 1 where the guest came back."""
    share, weight = np.array(list(TELLING.values())).T
    told = sp.csr_array((rng.random((guests, len(share))) < share).astype(np.float64))
    guest = np.repeat(np.arange(guests), WORDS_AN_ENTRY)
    word = (WORDS - len(share)) * rng.random(len(guest)) ** 3
    rest = sp.coo_array(
        (np.ones(len(guest)), (guest, word.astype(np.int64))), shape=(guests, WORDS - len(share))
    )
    X = sp.csr_array(sp.hstack([told, rest.tocsr().minimum(1)], format="csr"))
    probability = expit(told @ weight - share @ weight)
    return X, (rng.random(guests) < probability).astype(np.float64)


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

def _found(release: Release) -> Iterator[str]:
    coefficients = dict(zip(release.names, release.coefficients))
    found = [word for word in TELLING if word in coefficients]
    right = sum(coefficients[word] * TELLING[word][1] > 0 for word in found)
    yield (
        f"Look at the words: of the {len(TELLING)} that were given a part, the release holds "
        f"{len(found)}, {right} of them with the right sign. Its {len(coefficients)} features "
        f"also hold {len(coefficients) - len(found)} that noise picked."
    )
    plan = release.plan
    for share, missed in _by_share(TELLING.keys() - coefficients.keys()):
        yield (
            f"Not found: {', '.join(missed)}, in {100 * share:g} % of the entries. There this plan "
            f"sees differences in rate from {plan.smallest_difference(share):.2f} on."
        )
    yield "The fit drew fresh random bits: another one would differ."


def _by_share(words: set[str]) -> Iterator[tuple[float, list[str]]]:
    """Telling words by the share of entries that hold them, the commonest first."""
    for share in sorted({TELLING[word][0] for word in words}, reverse=True):
        yield share, sorted(word for word in words if TELLING[word][0] == share)


def _judged(probabilities: np.ndarray, labels: np.ndarray) -> Iterator[str]:
    rate = labels.mean()
    yield (
        f"The file holds one probability of coming back for each of {len(labels):,} guests of the "
        f"next summer, who were not in the fit. Their AUC is {auc(probabilities, labels):.3f} "
        f"(0.5 is guessing), their log loss {log_loss(probabilities, labels):.3f} "
        f"({log_loss(np.full(len(labels), rate), labels):.3f} for the base rate alone)."
    )
    yield (
        "These guests are invented, so they may be looked at. On real rows such a figure gives "
        "something away, and needs a private measurement of its own."
    )


def auc(probabilities: np.ndarray, labels: np.ndarray) -> float:
    """The share of pairs of a 1 and a 0 that are ordered rightly, ties counting half."""
    positive = labels > 0
    n, m = positive.sum(), (~positive).sum()
    return float((rankdata(probabilities)[positive].sum() - n * (n + 1) / 2) / (n * m))


def log_loss(probabilities: np.ndarray, labels: np.ndarray) -> float:
    """The mean of -log of the probability given to what happened."""
    return float(-np.log(np.where(labels > 0, probabilities, 1 - probabilities)).mean())


def _say(*paragraphs: str):
    """Remarks, told apart from output by a # before each line."""
    for text in paragraphs:
        margin = "#    " if text[:1].isdigit() and text[1:3] == ". " else "# "
        print(fill(text, WIDTH, initial_indent="# ", subsequent_indent=margin,
                   break_long_words=False, break_on_hyphens=False))
    print(flush=True)
