"""Reading and writing sparse data: svmlight, Matrix Market and scipy's .npz, labels and names.

Every error names the file as it was given and, in text, the line. Nothing is ever unpickled.
"""

from __future__ import annotations

import gzip
import io
import math
import os
import re
import zipfile
import zlib
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from itertools import islice
from reprlib import repr as shortened

import numpy as np
import scipy.sparse as sp

from .checks import whole_number
from .errors import InputError
from .facts import MOST_FEATURES

BLOCK = 2**22       # bytes of svmlight text parsed at a time, about 0.1 s: what Ctrl-C waits for
BUFFER = 2**20      # bytes asked of the operating system at a time

SVMLIGHT = (".svm", ".svmlight", ".libsvm", ".txt")
MATRIX_MARKET = (".mtx",)
NPZ = (".npz",)

# Once comments are gone, all that a well-formed svmlight line is made of.
_ALPHABET = b"0123456789+-.eE: \t\r\n\v\f"
_COMMENT = re.compile(rb"#[^\n]*")
_UNREADABLE = (ValueError, TypeError, KeyError, AttributeError, NotImplementedError, OverflowError,
               MemoryError, zipfile.BadZipFile)


@dataclass(frozen=True, eq=False)
class Data:
    """A table as a file holds it.

    X       csr_array (n, features), column ids ascending in each row, no entry stored twice;
            float64, or the number type of the file
    y       float64 (n,), or None where no labels were given
    source  the file, as it was named
    """

    X: sp.csr_array
    y: np.ndarray | None
    source: str


def read_table(path, *, features: int | None = None, labels=None, first_column: int = 1,
               progress: Callable[[float], None] | None = None) -> Data:
    """Read a sparse table; its kind goes by the end of its name.

    path          .svm, .svmlight, .libsvm, .txt: svmlight text; .mtx: Matrix Market (any of these
                  may be packed, .svm.gz); .npz: a matrix saved by scipy.sparse.save_npz
    features      number of columns; left out: that of the file, in svmlight the highest id used
    labels        for Matrix Market and .npz: a text file with one number a line, or a 1-D .npy;
                  left out: y is None. svmlight holds its own.
    first_column  the id of the first column in svmlight text, 1 (the convention) or 0
    progress      called with the fraction of bytes read, in [0, 1]

    Raises InputError for anything malformed or unreadable, naming the file and the line.
    svmlight needs scikit-learn. Memory: little more than the matrix returned for svmlight and for
    CSR in .npz with ids in order, two to three times as much for the rest.
    """
    source, read = _reader(path)
    if features is not None:
        features = whole_number("features", features, 1, MOST_FEATURES)
    first_column = whole_number("first_column", first_column, 0, 1)
    report = progress or (lambda fraction: None)
    svmlight = read is _read_svmlight
    if svmlight and labels is not None:
        raise InputError(f"{source} holds its own labels: svmlight takes no labels file")
    y = None if labels is None else read_numbers(labels)
    with _opened(source, report) as file:
        if svmlight:
            X, y = read(file, source, features, first_column)
        else:
            X = read(file, source, features)
    if labels is not None:
        _check_count(y, labels, X, source)
    report(1.0)
    return Data(X, y, source)


def read_numbers(path) -> np.ndarray:
    """float64 (n,) from a text file with one number a line, or a 1-D .npy.

    Raises InputError, naming the line, for anything but finite numbers in text.
    """
    source = os.fsdecode(path)
    return _npy_numbers(source) if source.lower().endswith(".npy") else _text_numbers(source)


def read_names(path, features: int | None = None) -> tuple[str, ...]:
    """Feature names from UTF-8 text, one a line; spaces around a name do not count.

    Raises InputError for an empty or repeated name, or if there are not `features` of them.
    """
    source = os.fsdecode(path)
    names = _filled_lines(source, "name")
    lines = {}
    for line, name in enumerate(names, 1):
        if lines.setdefault(name, line) != line:
            raise InputError(
                f"{source}, line {line}: {shortened(name)} already stands in line {lines[name]}"
            )
    if features is not None and len(names) != features:
        raise InputError(f"{source} holds {len(names):,} names for {features:,} features")
    return tuple(names)


def read_ids(path) -> tuple[str, ...]:
    """Ids of persons from UTF-8 text, one a line and row; spaces around an id do not count.

    Raises InputError for an empty one.
    """
    return tuple(_filled_lines(os.fsdecode(path), "id"))


def _filled_lines(source: str, noun: str) -> list[str]:
    """The lines of a text, none of them empty."""
    lines = _text_lines(source, "utf-8-sig")
    for number, line in enumerate(lines, 1):
        if not line:
            raise InputError(f"{source}, line {number}: the {noun} is empty")
    if not lines:
        raise InputError(f"{source} holds no {noun}s")
    return lines


def write_svmlight(path, X, y, first_column: int = 1) -> None:
    """Write a table as svmlight text that reads back to the very same numbers.

    path          the file, replaced if it is there; packed if its name ends in .gz
    X             (n, features) sparse in any scipy format, or dense; stored zeros are written
    y             (n,) finite labels
    first_column  the id that the first column gets, 1 (the convention) or 0

    Raises InputError for entries given twice, for numbers that are not finite, and for a file that
    cannot be written.
    """
    target = os.fsdecode(path)
    first_column = whole_number("first_column", first_column, 0, 1)
    matrix = _canonical(X, None, "the matrix", _place_in_memory)
    labels = np.asarray(y)
    if labels.shape != matrix.shape[:1] or labels.dtype.kind not in "buif":
        raise InputError(f"y must be {matrix.shape[0]:,} numbers, one per row")
    if not np.isfinite(labels).all():
        raise InputError(f"label of row {np.isfinite(labels).argmin()} is not a finite number")
    with _naming_failures(target):
        with open(target, "wb", BUFFER) as plain, _packing(plain, target) as file:
            file.writelines(_svmlight_lines(matrix, labels.astype(np.float64), first_column))


def _svmlight_lines(matrix: sp.csr_array, labels: np.ndarray, first_column: int) -> Iterator[bytes]:
    values = matrix.data.astype(np.float64, copy=False)
    offsets = matrix.indptr.tolist()
    for label, start, stop in zip(labels.tolist(), offsets, offsets[1:]):
        ids = (matrix.indices[start:stop] + first_column).tolist()
        entries = zip(ids, map(_shortest, values[start:stop].tolist()))
        line = " ".join([_shortest(label), *(f"{id}:{value}" for id, value in entries)])
        yield line.encode() + b"\n"


def _shortest(number: float) -> str:
    """The shortest text that reads back to the same float; whole numbers have no point."""
    return repr(number).removesuffix(".0")


# --- opening

def _reader(path) -> tuple[str, Callable]:
    """The path as text, and the function that reads files of its kind."""
    source = os.fsdecode(path)
    name = source.lower()
    if name.endswith(NPZ):
        return source, _read_npz
    name = name.removesuffix(".gz")
    if name.endswith(SVMLIGHT):
        return source, _read_svmlight
    if name.endswith(MATRIX_MARKET):
        return source, _read_matrix_market
    raise InputError(
        f"{source}: unknown kind of file; known are {', '.join(SVMLIGHT)} (svmlight), "
        f"{', '.join(MATRIX_MARKET)} (Matrix Market), each also with .gz, "
        f"and {', '.join(NPZ)} (scipy)"
    )


class _Meter(io.FileIO):
    """A file that reports the share of its bytes read so far.

    Every reader here, compiled ones too, comes back to it for more: that is where Ctrl-C gets in.
    """

    def __init__(self, path: str, report: Callable[[float], None]):
        super().__init__(path)
        self.report, self.done = report, 0
        self.size = max(os.fstat(self.fileno()).st_size, 1)

    def readinto(self, buffer) -> int:
        count = super().readinto(buffer)
        self.done += count
        self.report(min(self.done / self.size, 1.0))
        return count


@contextmanager
def _opened(source: str, report: Callable[[float], None] = lambda fraction: None):
    """The bytes of a file, unpacked if its name ends in .gz."""
    with _naming_failures(source), io.BufferedReader(_Meter(source, report), BUFFER) as file:
        yield gzip.GzipFile(fileobj=file) if source.lower().endswith(".gz") else file


def _packing(file, target: str):
    """Where to write text for `target`: the open file, by way of gzip if its name ends in .gz."""
    return gzip.GzipFile("", "wb", 6, file, mtime=0) if target.lower().endswith(".gz") else file


@contextmanager
def _naming_failures(source: str):
    """What the operating system or the packing refuses becomes an InputError."""
    try:
        yield
    except (OSError, EOFError, zlib.error) as error:
        raise InputError(f"{source}: {getattr(error, 'strerror', None) or error}") from error


def _text_lines(source: str, encoding: str) -> list[str]:
    """The lines without the spaces around them; empty ones at the end do not count."""
    with _opened(source) as file:
        content = file.read()
    try:
        text = content.decode(encoding).rstrip()
    except UnicodeDecodeError as error:
        line = error.object[: error.start].count(b"\n") + 1
        byte = error.object[error.start]
        name = encoding.upper().removesuffix("-SIG")
        raise InputError(f"{source}, line {line}: byte 0x{byte:02x} is not {name}") from None
    return [line.strip() for line in text.split("\n")] if text else []


# --- svmlight

def _read_svmlight(file, source: str, features: int | None, first_column: int):
    """(X, y), parsed by scikit-learn in blocks of lines."""
    load = _svmlight_parser()
    limit = MOST_FEATURES if features is None else features
    labels, lengths, width = [], [], 1
    ids, values = np.empty(0, dtype=np.int32), np.empty(0, dtype=np.float64)
    for line, block in _blocks(file):
        parsed = _parsed_block(load, block, limit, first_column)
        if parsed is None:
            _refuse_block(source, line, block, limit, first_column)
        X, y = parsed
        labels.append(y)
        lengths.append(np.diff(X.indptr))
        _append(ids, X.indices)
        _append(values, X.data)
        width = max(width, X.shape[1])
    if not any(map(len, labels)):
        raise InputError(f"{source} holds no rows")
    y = np.concatenate(labels)
    offsets = np.zeros(len(y) + 1, dtype=np.int32 if len(ids) < 2**31 else np.int64)
    np.cumsum(np.concatenate(lengths), out=offsets[1:])
    return sp.csr_array((values, ids, offsets), shape=(len(y), features or width)), y


def _svmlight_parser() -> Callable:
    try:
        from sklearn.datasets import load_svmlight_file
    except ImportError:
        raise InputError(
            "reading svmlight needs scikit-learn: pip install sordino[terminal]"
        ) from None
    return load_svmlight_file


def _blocks(file) -> Iterator[tuple[int, bytes]]:
    """(number of the first line, whole lines of about BLOCK bytes), to the end of the file."""
    line = 1
    while block := file.read(BLOCK):
        block += file.readline()
        yield line, block
        line += block.count(b"\n")


def _parsed_block(load: Callable, block: bytes, limit: int, first_column: int):
    """(X, y), or None if anything is wrong.

    The parser takes more than the format allows (digits parted by "_", query ids, nan), so only
    the format's own characters get to it.
    """
    text = _COMMENT.sub(b"", block)
    if not block.isascii() or text.translate(None, _ALPHABET):
        return None
    try:
        X, y = load(io.BytesIO(text), zero_based=first_column == 0)
    except (ValueError, OverflowError):
        return None
    sound = X.shape[1] <= limit and np.isfinite(X.data).all() and np.isfinite(y).all()
    return (X, y) if sound else None


def _append(array: np.ndarray, part: np.ndarray):
    """Grow the array in place: the allocator moves pages, so there is never a second copy."""
    start = len(array)
    array.resize(start + len(part), refcheck=False)
    array[start:] = part


def _refuse_block(source: str, first_line: int, block: bytes, limit: int, first_column: int):
    for line, text in enumerate(block.split(b"\n"), first_line):
        fault = _line_fault(text, limit, first_column)
        if fault:
            raise InputError(f"{source}, line {line}: {fault}")
    raise InputError(f"{source}, lines {first_line} to {line}: scikit-learn cannot read this text")


def _line_fault(line: bytes, limit: int, first_column: int) -> str | None:
    """The first thing wrong with a line of svmlight text: label id:value id:value ... # comment"""
    if not line.isascii():
        return f"byte 0x{next(byte for byte in line if byte > 127):02x} is not ASCII"
    fields = [field.decode() for field in line.partition(b"#")[0].split()]
    if not fields:
        return None
    if fault := _number_fault(fields[0]):
        return f"label {fault}"
    previous = first_column - 1
    for field in fields[1:]:
        id_text, colon, value = field.partition(":")
        if id_text == "qid":
            return "query ids (qid:) are not supported"
        if not colon:
            return f"{shortened(field)} is not of the form id:value"
        id = _number(int, id_text)
        if id is None:
            return f"column id {shortened(id_text)} is not a whole number"
        if fault := _id_fault(id, previous, limit, first_column):
            return f"column id {id} {fault}"
        if fault := _number_fault(value):
            return f"value of column {id}: {fault}"
        previous = id
    return None


def _id_fault(id: int, previous: int, limit: int, first_column: int) -> str | None:
    if id < first_column:
        hint = " (first_column=0 reads ids that start at 0)" if id == 0 else ""
        return f"is below {first_column}, the id of the first column{hint}"
    if id - first_column >= limit:
        return f"is out of range: the id of the last column is {limit - 1 + first_column}"
    if id == previous:
        return "is given twice"
    if id < previous:
        return f"comes after {previous}: ids must ascend"
    return None


def _number_fault(text: str) -> str | None:
    number = _number(float, text)
    if number is None:
        return f"{shortened(text)} is not a number"
    return None if math.isfinite(number) else f"{shortened(text)} is not a finite number"


def _number(kind: type, text: str):
    """The text as an int or float, or None."""
    try:
        return None if "_" in text else kind(text)
    except ValueError:
        return None


# --- Matrix Market and .npz

def _read_matrix_market(file, source: str, features: int | None) -> sp.csr_array:
    from scipy.io import mmread

    try:
        matrix = mmread(_ReadOnly(file))
    except _UNREADABLE as error:
        line, fault = re.fullmatch(r"(?:Line (\d+): )?(.*)", _one_line(error)).groups()
        where = f"{source}, line {line}" if line else source
        raise InputError(f"{where}: cannot be read as Matrix Market: {fault}") from error
    return _canonical(matrix, features, source, _place_in_matrix_market)


def _read_npz(file, source: str, features: int | None) -> sp.csr_array:
    if not zipfile.is_zipfile(file):
        raise InputError(f"{source}: not a zip archive, as every .npz file is")
    file.seek(0)
    try:
        matrix = sp.load_npz(file)
    except _UNREADABLE as error:
        fault = _one_line(error).replace(str(file), source)
        raise InputError(f"{source}: cannot be read as a scipy sparse matrix: {fault}") from error
    return _canonical(matrix, features, source, _place_in_memory)


class _ReadOnly:
    """A file that can be read and nothing else.

    scipy's reader looks for `seek`, which it also calls when it is torn down. After an error or
    Ctrl-C that is later than the file is closed, and what `seek` then raises ends the process.
    """

    def __init__(self, file):
        self.read = file.read


def _one_line(error: Exception) -> str:
    return " ".join(str(error).split())


def _canonical(matrix, features: int | None, source: str, place: Callable) -> sp.csr_array:
    """The matrix as CSR with ascending ids, checked; its own arrays are not written to.

    place(source, entries, k) says where the k-th of its entries stands.
    """
    if not sp.issparse(matrix):
        matrix = _dense_entries(matrix, source)
    _check_shape(matrix, features, source)
    if matrix.format not in ("csr", "csc", "coo"):
        matrix = matrix.tocoo()
    finite = np.isfinite(matrix.data[: matrix.nnz])     # there may be room to spare
    if not finite.all():
        entries, k = matrix.tocoo(), finite.argmin()
        where = place(source, entries, k)
        raise InputError(f"{where} holds {entries.data[k]}: entries must be finite numbers")
    csr = sp.csr_array(matrix)
    if not csr.has_sorted_indices:
        csr = csr.sorted_indices()
    if csr.nnz < matrix.nnz or not csr.has_canonical_format:
        entries = matrix.tocoo()
        raise InputError(f"{place(source, entries, _first_repeat(entries))} is given twice")
    return csr


def _dense_entries(matrix, source: str) -> sp.coo_array:
    dense = np.asarray(matrix)
    if dense.ndim != 2 or dense.dtype.kind not in "buif":
        raise InputError(f"{source}: must be a matrix of real numbers")
    return sp.coo_array(dense)


def _check_shape(matrix, features: int | None, source: str):
    if matrix.ndim != 2 or matrix.dtype.kind not in "buif":
        raise InputError(f"{source}: must be a matrix of real numbers")
    if features is not None and matrix.shape[1] != features:
        raise InputError(
            f"{source} has {matrix.shape[1]:,} columns; {features:,} features are expected"
        )
    if not matrix.shape[0]:
        raise InputError(f"{source} holds no rows")
    if hasattr(matrix, "check_format"):
        try:
            type(matrix)(matrix).check_format(full_check=True)      # it may prune what it checks
        except ValueError as error:
            raise InputError(f"{source}: {_one_line(error)}") from None


def _first_repeat(entries: sp.coo_array) -> int:
    """The first entry whose row and column were given before."""
    row, column = entries.row, entries.col
    order = np.lexsort((column, row))
    before, after = order[:-1], order[1:]
    return after[(row[before] == row[after]) & (column[before] == column[after])].min()


def _place_in_memory(source: str, entries: sp.coo_array, k: int) -> str:
    return f"{source}: row {entries.row[k]}, column {entries.col[k]}"


def _place_in_matrix_market(source: str, entries: sp.coo_array, k: int) -> str:
    """Rows and columns count from 1, as in the file; the line is known if it holds one entry."""
    entry = f"row {entries.row[k] + 1}, column {entries.col[k] + 1}"
    with _opened(source) as file:
        banner = file.readline().lower().split()
        if banner[2:5:2] != [b"coordinate", b"general"]:
            return f"{source}: {entry}"
        held = (line for line, text in enumerate(file, 2) if text.strip() and text[:1] != b"%")
        line = next(islice(held, 1 + k, None))      # the sizes come before the entries
    return f"{source}, line {line}: {entry}"


# --- numbers beside a matrix

def _npy_numbers(source: str) -> np.ndarray:
    with _opened(source) as file:
        try:
            numbers = np.lib.format.read_array(file, allow_pickle=False)
        except _UNREADABLE as error:
            raise InputError(f"{source}: cannot be read as .npy: {_one_line(error)}") from error
    if numbers.ndim != 1 or numbers.dtype.kind not in "buif":
        raise InputError(
            f"{source} holds {numbers.dtype} of shape {numbers.shape}, not a 1-D array of real "
            "numbers"
        )
    return numbers.astype(np.float64)


def _text_numbers(source: str) -> np.ndarray:
    texts = _text_lines(source, "ascii")
    for line, text in enumerate(texts, 1):
        if fault := _number_fault(text):
            raise InputError(f"{source}, line {line}: {fault}")
    return np.fromiter(map(float, texts), dtype=np.float64, count=len(texts))


def _check_count(y: np.ndarray, labels, X: sp.csr_array, source: str):
    if len(y) != X.shape[0]:
        raise InputError(
            f"{os.fsdecode(labels)} holds {len(y):,} labels, but {source} has {X.shape[0]:,} rows"
        )
