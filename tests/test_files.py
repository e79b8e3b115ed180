"""Files of sparse data: round trips, the same matrix whatever the blocks, and named errors.

References outside the project: scikit-learn's load_svmlight_file and dump_svmlight_file, scipy.io's
mmwrite and scipy.sparse's save_npz.
"""

from __future__ import annotations

import gc
import gzip
import io
import os
import pickle
import re
import subprocess
import sys

import numpy as np
import pytest
import scipy.io
import scipy.sparse as sp
from hypothesis import given, settings
from hypothesis import strategies as st
from sklearn.datasets import dump_svmlight_file, load_svmlight_file

from sordino import files
from sordino.errors import InputError
from sordino.facts import MOST_FEATURES
from sordino.files import read_names, read_table, write_svmlight

GOOD_LINES = b"1 1:1 3:0.5\n# a comment\n\n0 2:-2 # another\n" * 4      # 16 lines, 8 rows
COORDINATE = "%%MatrixMarket matrix coordinate real general\n"


@pytest.fixture(autouse=True)
def _in_a_folder_of_its_own(tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)


def random_table(seed=0, n=40, d=30, density=0.15) -> tuple[sp.csr_array, np.ndarray]:
    rng = np.random.default_rng(seed)
    X = sp.random_array((n, d), density=density, format="csr", rng=rng,
                        data_sampler=rng.standard_normal)
    X.sort_indices()
    return X, rng.integers(0, 2, n).astype(np.float64)


def write(name: str, content: bytes | str) -> str:
    with open(name, "wb") as file:
        file.write(content.encode() if isinstance(content, str) else content)
    return name


def assert_same(ours, expected):
    """The same shape, entries and places, nothing merged, dropped or reordered."""
    assert type(ours) is sp.csr_array and ours.shape == expected.shape
    assert ours.has_canonical_format
    np.testing.assert_array_equal(ours.indptr, expected.indptr)
    np.testing.assert_array_equal(ours.indices, expected.indices)
    np.testing.assert_array_equal(ours.data, expected.data)


def message(call, *args, **options) -> str:
    """The one line that a refused call says."""
    with pytest.raises(InputError) as caught:
        call(*args, **options)
    assert "\n" not in str(caught.value)
    return str(caught.value)


# --- svmlight, good files

@pytest.mark.parametrize("first", [0, 1])
@pytest.mark.parametrize("low", [0, -1])
def test_svmlight_as_scikit_learn_reads_it(first, low):
    X, y = random_table()
    y[y == 0] = low
    dump_svmlight_file(X, y, "train.svm", zero_based=first == 0, comment="made up")
    expected, labels = load_svmlight_file("train.svm", n_features=30, zero_based=first == 0)
    data = read_table("train.svm", features=30, first_column=first)
    assert_same(data.X, expected)
    np.testing.assert_array_equal(data.y, labels)
    assert data.X.dtype == data.y.dtype == np.float64 and data.source == "train.svm"
    assert data.X.indices.dtype == data.X.indptr.dtype == np.int32


@pytest.mark.parametrize("first", [0, 1])
def test_scikit_learn_reads_what_we_write(first):
    X, y = random_table(1)
    write_svmlight("out.svm", X, y, first_column=first)
    ours, labels = load_svmlight_file("out.svm", n_features=30, zero_based=first == 0)
    assert_same(sp.csr_array(ours), X)
    np.testing.assert_array_equal(labels, y)


@pytest.mark.parametrize("block", [1, 7, 64, 1000])
def test_blocks_do_not_matter(monkeypatch, block):
    X, y = random_table(2)
    write_svmlight("train.svm", X, y)
    monkeypatch.setattr(files, "BLOCK", block)
    data = read_table("train.svm")
    whole, labels = load_svmlight_file("train.svm", zero_based=False)
    assert_same(data.X, whole)
    np.testing.assert_array_equal(data.y, labels)


@pytest.mark.parametrize("suffix", [".svm", ".svmlight", ".libsvm", ".txt", ".SVM"])
@pytest.mark.parametrize("packed", ["", ".gz"])
def test_suffixes_and_packing(suffix, packed):
    X, y = random_table(3)
    write_svmlight("table" + suffix + packed, X, y)
    assert (open("table" + suffix + packed, "rb").read(2) == b"\x1f\x8b") == bool(packed)
    data = read_table("table" + suffix + packed, features=30)
    assert_same(data.X, X)
    np.testing.assert_array_equal(data.y, y)


def test_comments_blank_lines_crlf_and_no_last_newline():
    text = "# head, qid:1 and under_scores\r\n\r\n+1 1:1 3:2.5e0 # tail\r\n-1\r\n \t\r\n0 2:.5"
    data = read_table(write("train.svm", text), features=4)
    np.testing.assert_array_equal(data.X.toarray(), [[1, 0, 2.5, 0], [0] * 4, [0, 0.5, 0, 0]])
    np.testing.assert_array_equal(data.y, [1, -1, 0])


def test_width_left_out_is_the_highest_id():
    assert read_table(write("a.svm", "1 2:1\n0 7:1\n1 1:1\n")).X.shape == (3, 7)
    assert read_table(write("a.svm", "1 2:1\n0 6:1\n"), first_column=0).X.shape == (2, 7)
    assert read_table(write("a.svm", "1\n0\n")).X.shape == (2, 1)     # as scikit-learn has it


def test_the_widest_table_there_is():
    data = read_table(write("a.svm", f"1 1:1 {MOST_FEATURES}:2\n"), features=MOST_FEATURES)
    assert data.X.shape == (1, MOST_FEATURES) and data.X.indices.tolist() == [0, MOST_FEATURES - 1]


def test_stored_zeros_stay():
    assert read_table(write("a.svm", "1 1:0 2:1\n")).X.nnz == 2


def test_read_only_file():
    os.chmod(write("a.svm", GOOD_LINES), 0o444)
    assert read_table("a.svm").X.shape == (8, 3)


@st.composite
def tables(draw):
    d = draw(st.integers(1, 12))
    number = st.floats(allow_nan=False, allow_infinity=False)
    row = st.dictionaries(st.integers(0, d - 1), number, max_size=d)
    rows = draw(st.lists(row, min_size=1, max_size=8))
    labels = draw(st.lists(number, min_size=len(rows), max_size=len(rows)))
    entries = [(i, j, row[j]) for i, row in enumerate(rows) for j in sorted(row)]
    i, j, v = zip(*entries) if entries else ((), (), ())
    shape = (len(rows), d)
    return sp.csr_array((np.array(v, float), (np.array(i, int), np.array(j, int))), shape), labels


@settings(max_examples=100, deadline=None)
@given(tables(), st.integers(0, 1), st.integers(1, 200))
def test_svmlight_round_trip_is_exact(table, first, block):
    X, y = table
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(files, "BLOCK", block)
        write_svmlight("loop.svm", X, y, first_column=first)
        data = read_table("loop.svm", features=X.shape[1], first_column=first)
    assert_same(data.X, X)
    np.testing.assert_array_equal(data.y, y)
    np.testing.assert_array_equal(np.signbit(data.X.data), np.signbit(X.data))


def svmlight_by_the_rules(text: str, features: int):
    """(labels, entries), or the number of the first line that breaks a rule: the rules, plainly."""
    number = re.compile(r"[-+]?(\d+\.?\d*|\.\d+)([eE][-+]?\d+)?")
    labels, entries = [], []
    for line, content in enumerate(text.split("\n"), 1):
        fields = content.split("#")[0].split()
        if not fields:
            continue
        pairs = [re.fullmatch(r"([-+]?\d+):(\S+)", field) for field in fields[1:]]
        if not number.fullmatch(fields[0]) or None in pairs:
            return line
        ids = [int(pair[1]) for pair in pairs]
        values = [pair[2] for pair in pairs]
        if ids != sorted(set(ids)) or not all(1 <= id <= features for id in ids):
            return line
        if not all(number.fullmatch(value) for value in values):
            return line
        if not np.isfinite([float(value) for value in (fields[0], *values)]).all():
            return line
        labels.append(float(fields[0]))
        entries += [(len(labels) - 1, id - 1, float(v)) for id, v in zip(ids, values)]
    return labels, entries


PIECES = st.sampled_from(
    ["1", "0", "-1", "1:1", "2:0.5", "3:-2", "9:1", "12:1", "0:1", "+4:1e3", "2:1e999", "nan",
     "2:", ":", "1:1:1", "qid:3", "3:1_0", "1_0:1", "5:nan", "x", "1e5:1", "-3:1", "#", "e", "\t",
     "7:.", "99999999999999999999:1", "4294967297:1", "-0", "6:+.5", "8:0x1"]
)


@settings(max_examples=300, deadline=None)
@given(st.lists(st.lists(PIECES, max_size=5), min_size=1, max_size=6), st.integers(1, 60))
def test_every_text_is_read_by_the_rules_or_refused_at_its_line(lines, block):
    text = "1 1:1\n" + "\n".join(" ".join(line) for line in lines)
    expected = svmlight_by_the_rules(text, 9)
    write("any.svm", text)
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(files, "BLOCK", block)
        if isinstance(expected, int):
            assert message(read_table, "any.svm", features=9).startswith(
                f"any.svm, line {expected}: "
            )
            return
        data = read_table("any.svm", features=9)
    labels, entries = expected
    coo = data.X.tocoo()
    assert list(zip(coo.row.tolist(), coo.col.tolist(), coo.data.tolist())) == entries
    assert data.y.tolist() == labels


# --- svmlight, bad files

@pytest.mark.parametrize("block", [30, 2**22])
@pytest.mark.parametrize("packed", ["", ".gz"])
@pytest.mark.parametrize("line, fault", [
    (b"1 0:1", "column id 0 is below 1, the id of the first column (first_column=0 reads ids "
               "that start at 0)"),
    (b"1 -3:1", "column id -3 is below 1, the id of the first column"),
    (b"1 1:1 6:1", "column id 6 is out of range: the id of the last column is 5"),
    (b"1 99999999999999999999:1",
     "column id 99999999999999999999 is out of range: the id of the last column is 5"),
    (b"1 3:1 2:1", "column id 2 comes after 3: ids must ascend"),
    (b"1 3:1 3:1", "column id 3 is given twice"),
    (b"yes 1:1", "label 'yes' is not a number"),
    (b"1,2 1:1", "label '1,2' is not a number"),
    (b"nan 1:1", "label 'nan' is not a finite number"),
    (b"1e999 1:1", "label '1e999' is not a finite number"),
    (b"1 1:inf", "value of column 1: 'inf' is not a finite number"),
    (b"1 1:1 2:-1e999", "value of column 2: '-1e999' is not a finite number"),
    (b"1 2:NaN", "value of column 2: 'NaN' is not a finite number"),
    (b"1 2:x", "value of column 2: 'x' is not a number"),
    (b"1 2:1_0", "value of column 2: '1_0' is not a number"),
    (b"1 2:", "value of column 2: '' is not a number"),
    (b"1 a:1", "column id 'a' is not a whole number"),
    (b"1 1_1:1", "column id '1_1' is not a whole number"),
    (b"1 1.0:1", "column id '1.0' is not a whole number"),
    (b"1 :1", "column id '' is not a whole number"),
    (b"1 2", "'2' is not of the form id:value"),
    (b"1 qid:4 1:1", "query ids (qid:) are not supported"),
    ("1 1:1 # \u00e9".encode(), "byte 0xc3 is not ASCII"),
    (b"1 1:1\x00", "value of column 1: '1\\x00' is not a number"),
])
def test_a_bad_line_is_named(monkeypatch, block, packed, line, fault):
    monkeypatch.setattr(files, "BLOCK", block)
    text = GOOD_LINES + line + b"\r\n" + GOOD_LINES
    name = write("train.svm" + packed, gzip.compress(text) if packed else text)
    assert message(read_table, name, features=5) == f"{name}, line 17: {fault}"


def test_the_first_bad_line_is_the_one_named():
    write("train.svm", GOOD_LINES + b"1 2:x\n1 3:y\n")
    assert message(read_table, "train.svm").startswith("train.svm, line 17: ")


def test_a_long_bad_field_is_cut():
    assert len(message(read_table, write("train.svm", "1 " + "x" * 10**5))) < 100


def test_ids_from_0_have_their_own_range():
    write("train.svm", "1 0:1\n1 5:1\n")
    assert read_table("train.svm", features=6, first_column=0).X.shape == (2, 6)
    assert message(read_table, "train.svm", features=5, first_column=0) == (
        "train.svm, line 2: column id 5 is out of range: the id of the last column is 4"
    )
    write("train.svm", "1 -1:1\n")
    assert "column id -1 is below 0" in message(read_table, "train.svm", first_column=0)


def test_ids_past_32_bits_are_not_wrapped():
    for id in (MOST_FEATURES + 1, 2**32 + 1, 2**64 + 1):
        write("train.svm", f"1 1:1\n0 {id}:1\n")
        assert f"line 2: column id {id} is out of range" in message(read_table, "train.svm")


@pytest.mark.parametrize("text", [b"", b"\n\n", b"# only a comment\n"])
@pytest.mark.parametrize("packed", ["", ".gz"])
def test_no_rows(text, packed):
    name = write("train.svm" + packed, gzip.compress(text) if packed else text)
    assert message(read_table, name) == f"{name} holds no rows"


def test_missing_scikit_learn_is_an_extra(monkeypatch):
    monkeypatch.setitem(sys.modules, "sklearn.datasets", None)
    assert "pip install sordino[terminal]" in message(read_table, write("a.svm", GOOD_LINES))


def test_scikit_learn_is_imported_only_to_read_svmlight():
    code = "import sys, sordino.files; assert not {'sklearn', 'scipy.io'} & set(sys.modules)"
    subprocess.run([sys.executable, "-c", code], check=True)


# --- Matrix Market

@pytest.mark.parametrize("packed", ["", ".gz"])
@pytest.mark.parametrize("dtype", [np.float64, np.int64])
def test_matrix_market_as_scipy_wrote_it(packed, dtype):
    X = (random_table(4)[0] * 100).astype(dtype)
    X.eliminate_zeros()
    buffer = io.BytesIO()
    scipy.io.mmwrite(buffer, X)
    write("x.mtx" + packed, gzip.compress(buffer.getvalue()) if packed else buffer.getvalue())
    data = read_table("x.mtx" + packed, features=30)
    assert_same(data.X, X)
    assert data.X.dtype == dtype and data.X.indices.dtype == np.int32 and data.y is None


def test_matrix_market_in_any_order_with_patterns_and_crlf():
    text = COORDINATE.replace("real", "pattern") + "% made up\r\n2 3 3\r\n2 3\r\n1 2\r\n2 1\r\n"
    data = read_table(write("x.mtx", text))
    np.testing.assert_array_equal(data.X.toarray(), [[0, 1, 0], [1, 0, 1]])


def test_matrix_market_array_and_symmetric():
    write("x.mtx", "%%MatrixMarket matrix array real general\n2 2\n1\n0\n3\n4\n")
    np.testing.assert_array_equal(read_table("x.mtx").X.toarray(), [[1, 3], [0, 4]])
    write("x.mtx", COORDINATE.replace("general", "symmetric") + "2 2 2\n1 1 5\n2 1 7\n")
    np.testing.assert_array_equal(read_table("x.mtx").X.toarray(), [[5, 7], [7, 0]])


@pytest.mark.parametrize("packed", ["", ".gz"])
@pytest.mark.parametrize("text, fault", [
    ("", ", line 1: cannot be read as Matrix Market"),
    ("1 1:1\n", ", line 1: cannot be read as Matrix Market"),
    (COORDINATE + "2 2 1\n1 3 1\n", ", line 3: cannot be read as Matrix Market: Column index"),
    (COORDINATE + "2 2 1\n0 1 1\n", ", line 3: cannot be read as Matrix Market: Row index"),
    (COORDINATE + "2 2 1\n1 1 x\n", ", line 3: cannot be read as Matrix Market: Invalid"),
    (COORDINATE + "2 2 1\n1 1 1\n1 2 1\n", ", line 4: cannot be read as Matrix Market: Too many"),
    (COORDINATE + "2 2 2\n1 1 1\n", ": cannot be read as Matrix Market: Truncated"),
    (COORDINATE + "% c\n\n2 2 3\n1 2 3\n\n1 1 1\n1 2 4\n",
     ", line 8: row 1, column 2 is given twice"),
    (COORDINATE + "2 2 2\n1 1 1\n2 1 nan\n",
     ", line 4: row 2, column 1 holds nan: entries must be finite numbers"),
    (COORDINATE + "2 2 2\n1 1 1e999\n2 1 nan\n", ", line 3: row 1, column 1 holds inf"),
    (COORDINATE.replace("general", "symmetric") + "2 2 2\n2 1 4\n2 1 5\n",
     ": row 2, column 1 is given twice"),
    ("%%MatrixMarket matrix array real general\n1 2\n1\nnan\n", ": row 1, column 2 holds nan"),
    (COORDINATE.replace("real", "complex") + "1 2 1\n1 1 1 1\n", ": must be a matrix of real"),
    (COORDINATE + "0 2 0\n", " holds no rows"),
    (COORDINATE + "1 3 1\n1 3 1\n", " has 3 columns; 2 features are expected"),
    # a size line that promises 364 TiB of entries
    (COORDINATE + "2 2 99999999999999\n1 1 1\n", ": cannot be read as Matrix Market"),
])
def test_bad_matrix_market(packed, text, fault):
    content = text.encode()
    name = write("x.mtx" + packed, gzip.compress(content) if packed else content)
    assert message(read_table, name, features=2).startswith(name + fault)
    gc.collect()


@pytest.mark.parametrize("twin", [150_000, 299_999])
def test_the_line_of_an_entry_in_a_long_matrix_market_file(twin):
    """Long enough (3 MB) for scipy to parse it in several pieces, on several threads."""
    n = 300_000
    places = np.random.default_rng(5).permutation(n) + 1
    places[twin] = places[100_000]
    entries = "\n".join(f"{i} 1 0.5" for i in places.tolist())
    write("x.mtx", f"{COORDINATE}{n} 1 {n}\n{entries}\n")
    assert message(read_table, "x.mtx") == (
        f"x.mtx, line {3 + twin}: row {places[twin]}, column 1 is given twice"
    )


# --- .npz

@pytest.mark.parametrize("container", [sp.csr_array, sp.csr_matrix])
@pytest.mark.parametrize("layout", ["csr", "csc", "coo", "bsr", "dia"])
@pytest.mark.parametrize("dtype", [np.float64, np.float32, np.int16, np.bool_])
def test_npz_of_every_layout(container, layout, dtype):
    X = container(random_table(6)[0].astype(dtype))
    X.eliminate_zeros()
    sp.save_npz("x.npz", X.asformat(layout))
    data = read_table("x.npz", features=30)
    if layout == "bsr":
        data.X.eliminate_zeros()        # blocks are filled up with zeros
    assert_same(data.X, X)
    assert data.X.dtype == dtype and data.y is None


@pytest.mark.parametrize("index", [np.int32, np.int64])
def test_both_index_types(index):
    X, y = random_table(7)
    X.indices, X.indptr = X.indices.astype(index), X.indptr.astype(index)
    sp.save_npz("x.npz", X)
    assert_same(read_table("x.npz").X, X)
    write_svmlight("x.svm", X, y)
    assert_same(read_table("x.svm", features=30).X, X)


def test_npz_with_ids_out_of_order_is_put_in_order():
    sp.save_npz("x.npz", sp.csr_array(([1.0, 2.0], [1, 0], [0, 2]), shape=(1, 2)))
    np.testing.assert_array_equal(read_table("x.npz").X.toarray(), [[2, 1]])
    assert read_table("x.npz").X.has_sorted_indices


def save_parts(layout: str, **parts):
    np.savez("x.npz", format=layout.encode(), shape=[2, 2], **parts)


@pytest.mark.parametrize("layout, parts, fault", [
    ("csr", {"data": [1, 2], "indices": [0, 7], "indptr": [0, 1, 2]}, ": indices must be < 2"),
    ("csr", {"data": [1, 2], "indices": [0, -1], "indptr": [0, 1, 2]}, ": indices must be >= 0"),
    ("csc", {"data": [1, 2], "indices": [0, 7], "indptr": [0, 1, 2]}, ": indices must be < 2"),
    ("csr", {"data": [1, 2], "indices": [0, 1], "indptr": [0, 3, 2]}, ": indptr must"),
    ("csr", {"data": [1, 2], "indices": [0, 1], "indptr": [0, 1]}, ": cannot be read"),
    ("csr", {"data": [1, 2], "indices": [1, 1], "indptr": [0, 0, 2]},
     ": row 1, column 1 is given twice"),
    ("csc", {"data": [1, 2], "indices": [1, 1], "indptr": [0, 0, 2]},
     ": row 1, column 1 is given twice"),
    ("coo", {"data": [1, 2, 3], "row": [0, 1, 0], "col": [1, 0, 1]},
     ": row 0, column 1 is given twice"),
    ("coo", {"data": [1, 2], "row": [0, 1], "col": [1, 9]}, ": cannot be read"),
    ("csr", {"data": [1, np.nan], "indices": [0, 1], "indptr": [0, 0, 2]},
     ": row 1, column 1 holds nan: entries must be finite numbers"),
    ("csr", {"data": [1, 2j], "indices": [0, 1], "indptr": [0, 1, 2]}, ": must be a matrix of"),
    ("test", {"data": [1]}, ": cannot be read as a scipy sparse matrix: Unknown format"),
    ("csr", {"data": [1]}, ": cannot be read as a scipy sparse matrix"),
])
def test_bad_npz(layout, parts, fault):
    save_parts(layout, **parts)
    assert message(read_table, "x.npz").startswith("x.npz" + fault)


@pytest.mark.parametrize("content", [b"", b"PK", b"1 1:1\n", b"PK\x05\x06" + bytes(18)])
def test_npz_that_is_none(content):
    assert message(read_table, write("x.npz", content)).startswith("x.npz: ")


def test_npz_of_other_things():
    np.savez("x.npz", a=np.arange(3))
    assert message(read_table, "x.npz") == (
        "x.npz: cannot be read as a scipy sparse matrix: The file x.npz does not contain a sparse "
        "array or matrix."
    )
    sp.save_npz("x.npz", sp.coo_array(np.array([1.0, 2.0])))
    assert message(read_table, "x.npz") == "x.npz: must be a matrix of real numbers"
    sp.save_npz("x.npz", sp.csr_array((0, 3)))
    assert message(read_table, "x.npz") == "x.npz holds no rows"
    sp.save_npz("x.npz", sp.csr_array((4, 3)))
    assert message(read_table, "x.npz", features=5) == (
        "x.npz has 3 columns; 5 features are expected"
    )


def test_damaged_npz():
    sp.save_npz("x.npz", random_table(8)[0], compressed=False)
    content = bytearray(open("x.npz", "rb").read())
    content[content.index(b"NUMPY") + 200] ^= 1
    assert message(read_table, write("x.npz", bytes(content))).startswith("x.npz: ")


class Tripwire:
    """Leaves a file behind when it is unpickled."""

    def __reduce__(self):
        return open, ("tripped", "w")


@pytest.mark.parametrize("part", ["format", "data", "indices", "indptr", "shape"])
def test_a_pickle_in_npz_is_refused_and_never_opened(part):
    parts = {"format": b"csr", "data": [1.0], "indices": [0], "indptr": [0, 1], "shape": [1, 1]}
    np.savez("x.npz", **(parts | {part: np.array([Tripwire()], dtype=object)}))
    assert "allow_pickle=False" in message(read_table, "x.npz")
    assert not os.path.exists("tripped")


def test_a_bare_pickle_is_refused_and_never_opened():
    for name in ("x.npz", "x.mtx", "x.svm"):
        assert message(read_table, write(name, pickle.dumps(Tripwire()))).startswith(name)
    write("y.npy", pickle.dumps(Tripwire()))
    sp.save_npz("x.npz", sp.eye_array(2))
    assert message(read_table, "x.npz", labels="y.npy").startswith("y.npy: cannot be read as .npy")
    np.save("y.npy", np.array([Tripwire(), 1], dtype=object))
    assert "allow_pickle=False" in message(read_table, "x.npz", labels="y.npy")
    assert not os.path.exists("tripped")


# --- labels

@pytest.mark.parametrize("matrix", ["x.npz", "x.mtx"])
@pytest.mark.parametrize("labels", ["y.txt", "y.npy"])
@pytest.mark.parametrize("low", [0, -1])
def test_labels_beside_a_matrix(matrix, labels, low):
    X, y = random_table(9)
    y[y == 0] = low
    sp.save_npz("x.npz", X)
    scipy.io.mmwrite("x.mtx", X)
    write("y.txt", "\r\n".join(f"{label:g}" for label in y) + "\r\n\r\n")
    np.save("y.npy", y.astype(np.int8))
    data = read_table(matrix, features=30, labels=labels)
    assert_same(data.X, X)
    assert data.y.dtype == np.float64
    np.testing.assert_array_equal(data.y, y)


@pytest.mark.parametrize("text, fault", [
    ("1\n0\nx\n", "y.txt, line 3: 'x' is not a number"),
    ("1\n\n0\n", "y.txt, line 2: '' is not a number"),
    ("1\n0 1\n", "y.txt, line 2: '0 1' is not a number"),
    ("1\n1_0\n", "y.txt, line 2: '1_0' is not a number"),
    ("1\n0\n1\nnan\n", "y.txt, line 4: 'nan' is not a finite number"),
    ("1\n\u00e9\n", "y.txt, line 2: byte 0xc3 is not ASCII"),
    ("1\n0\n1\n", "y.txt holds 3 labels, but x.npz has 2 rows"),
    ("", "y.txt holds 0 labels, but x.npz has 2 rows"),
])
def test_bad_label_text(text, fault):
    sp.save_npz("x.npz", sp.eye_array(2))
    assert message(read_table, "x.npz", labels=write("y.txt", text)) == fault


@pytest.mark.parametrize("labels, fault", [
    (np.ones((2, 1)), "y.npy holds float64 of shape (2, 1), not a 1-D array of real"),
    (np.array(["a", "b"]), "y.npy holds <U1 of shape (2,), not a 1-D array of real"),
    (np.ones(2, complex), "y.npy holds complex128 of shape (2,), not a 1-D array of real"),
    (np.ones(5), "y.npy holds 5 labels, but x.npz has 2 rows"),
])
def test_bad_label_arrays(labels, fault):
    sp.save_npz("x.npz", sp.eye_array(2))
    np.save("y.npy", labels)
    assert message(read_table, "x.npz", labels="y.npy").startswith(fault)


def test_svmlight_takes_no_labels():
    write("a.svm", GOOD_LINES)
    assert message(read_table, "a.svm", labels="y.txt") == (
        "a.svm holds its own labels: svmlight takes no labels file"
    )


# --- names

def test_names():
    write("names.txt", b"\xef\xbb\xbf" + "alpha\r\n beta gamma \r\n\u00e9t\u00e9\r\n\r\n".encode())
    assert read_names("names.txt", 3) == read_names("names.txt") == ("alpha", "beta gamma", "été")


@pytest.mark.parametrize("content, fault", [
    ("a\nb\n", "names.txt holds 2 names for 3 features"),
    ("a\n\nc\n", "names.txt, line 2: the name is empty"),
    ("a\nb\na\n", "names.txt, line 3: 'a' already stands in line 1"),
    (b"a\nb\n\xff\n", "names.txt, line 3: byte 0xff is not UTF-8"),
    ("", "names.txt holds no names"),
])
def test_bad_names(content, fault):
    assert message(read_names, write("names.txt", content), 3) == fault


# --- writing

def test_text_is_short_and_labels_are_as_given():
    X = np.array([[1.0, 0, 0.1], [0, 0, 0], [-3, 2.5e-300, 0]])
    write_svmlight("a.svm", X, [True, False, True])
    assert open("a.svm", "rb").read() == b"1 1:1 3:0.1\n0\n1 1:-3 2:2.5e-300\n"
    write_svmlight("a.svm", X.astype(int), np.array([1, -1, 1]), first_column=0)
    assert open("a.svm", "rb").read() == b"1 0:1\n-1\n1 0:-3\n"


@pytest.mark.parametrize("container", [sp.csr_array, sp.csr_matrix, sp.csc_array, sp.coo_array])
def test_the_callers_arrays_are_only_read(container):
    X = container(random_table(10)[0])
    y = np.zeros(40, dtype=np.int32)
    held = [X.data, y] + ([X.row, X.col] if X.format == "coo" else [X.indices, X.indptr])
    for array in held:
        array.flags.writeable = False
    write_svmlight("a.svm", X, y)
    assert_same(read_table("a.svm", features=30).X, sp.csr_array(X))
    now = [X.data, y] + ([X.row, X.col] if X.format == "coo" else [X.indices, X.indptr])
    assert all(a is b for a, b in zip(held, now))


@pytest.mark.parametrize("layout", ["bsr", "dia", "dok", "lil"])
def test_other_layouts_are_written_too(layout):
    X = sp.csr_array(np.diag([1.0, 2.0, 3.0]))
    write_svmlight("a.svm", X.asformat(layout), [0, 1, 1])
    assert_same(read_table("a.svm").X, X)


def test_unsorted_rows_are_written_in_order_and_left_as_they_were():
    X = sp.csr_array(([1.0, 2.0], [1, 0], [0, 2]), shape=(1, 2))
    write_svmlight("a.svm", X, [1])
    assert open("a.svm").read() == "1 1:2 2:1\n" and X.indices.tolist() == [1, 0]


@pytest.mark.parametrize("X, y, fault", [
    (np.ones((2, 2)), [1], "y must be 2 numbers, one per row"),
    (np.ones((2, 2)), ["a", "b"], "y must be 2 numbers, one per row"),
    (np.ones((2, 2)), [1, np.nan], "label of row 1 is not a finite number"),
    (np.array([[1, np.inf]]), [1], "the matrix: row 0, column 1 holds inf"),
    (np.ones(2), [1], "the matrix: must be a matrix of real numbers"),
    (sp.csr_array(([1, 1], [0, 0], [0, 2]), shape=(1, 2)), [1],
     "the matrix: row 0, column 0 is given twice"),
])
def test_what_cannot_be_written(X, y, fault):
    assert message(write_svmlight, "a.svm", X, y).startswith(fault)
    assert not os.path.exists("a.svm")


def test_a_place_that_cannot_be_written():
    fault = message(write_svmlight, "nowhere/a.svm", np.ones((1, 1)), [1])
    assert fault == "nowhere/a.svm: No such file or directory"


# --- opening, progress, interrupts

@pytest.mark.parametrize("name", ["a.csv", "a", "a.gz", "a.npz.gz", "svm"])
def test_unknown_kind(name):
    fault = message(read_table, write(name, GOOD_LINES))
    assert fault.startswith(f"{name}: unknown kind of file")
    known = (".svm", ".svmlight", ".libsvm", ".txt", ".mtx", ".npz")
    assert all(suffix in fault for suffix in known)


@pytest.mark.parametrize("name", ["gone.svm", "gone.svm.gz", "gone.mtx", "gone.npz", "a/../b.svm"])
def test_missing_file(name):
    assert message(read_table, name) == f"{name}: No such file or directory"


def test_missing_labels_and_names():
    sp.save_npz("x.npz", sp.eye_array(2))
    assert message(read_table, "x.npz", labels="gone.txt").startswith("gone.txt: No such file")
    assert message(read_table, "x.npz", labels="gone.npy").startswith("gone.npy: No such file")
    assert message(read_names, "gone.txt").startswith("gone.txt: No such file")


def test_directories_and_loops(tmp_path):
    os.mkdir("folder.svm")
    assert message(read_table, "folder.svm") == "folder.svm: Is a directory"
    os.symlink("loop.mtx", "loop.mtx")
    assert message(read_table, tmp_path / "loop.mtx").startswith(f"{tmp_path / 'loop.mtx'}: ")


def test_no_permission():
    os.chmod(write("a.svm", GOOD_LINES), 0)
    if os.access("a.svm", os.R_OK):
        pytest.skip("this user may read everything")
    assert message(read_table, "a.svm") == "a.svm: Permission denied"


@pytest.mark.parametrize("name", ["a.svm.gz", "a.mtx.gz"])
@pytest.mark.parametrize("damage", ["cut", "flipped", "not packed"])
def test_damaged_packing(name, damage):
    write_svmlight("plain.svm", *random_table(11, n=300))
    scipy.io.mmwrite("plain.mtx", random_table(11, n=300)[0])
    content = bytearray(gzip.compress(open("plain" + name[1:-3], "rb").read()))
    if damage == "cut":
        content = content[:-9]
    elif damage == "flipped":
        content[-6] ^= 1        # in the checksum
    else:
        content = b"not packed"
    assert message(read_table, write(name, bytes(content))).startswith(f"{name}: ")
    gc.collect()


@pytest.mark.parametrize("first_column", [2, -1, True, "1"])
def test_first_column_is_0_or_1(first_column):
    write("a.svm", GOOD_LINES)
    assert "first_column" in message(read_table, "a.svm", first_column=first_column)
    assert "first_column" in message(write_svmlight, "b.svm", np.ones((1, 1)), [1], first_column)


def all_kinds() -> list[str]:
    X, y = random_table(12, n=2000)
    write_svmlight("x.svm", X, y)
    write_svmlight("x.svm.gz", X, y)
    scipy.io.mmwrite("x.mtx", X)
    sp.save_npz("x.npz", X)
    return ["x.svm", "x.svm.gz", "x.mtx", "x.npz"]


def test_progress_climbs_to_1(monkeypatch):
    monkeypatch.setattr(files, "BLOCK", 1000)
    monkeypatch.setattr(files, "BUFFER", 1000)
    for name in all_kinds():
        seen = []
        read_table(name, progress=seen.append)
        assert len(seen) > 10 and seen == sorted(seen), name
        assert 0 < seen[0] < 0.5 and seen[-1] == 1.0, name


def test_progress_ends_at_1_when_part_of_the_file_is_not_read():
    X = random_table(13)[0]
    np.savez("x.npz", a_note=np.zeros(10**6), format=b"csr", data=X.data, indices=X.indices,
             indptr=X.indptr, shape=X.shape)
    seen = []
    assert_same(read_table("x.npz", progress=seen.append).X, X)
    assert seen == sorted(seen) and seen[-1] == 1.0


@pytest.mark.parametrize("error", [KeyboardInterrupt, ZeroDivisionError])
def test_what_progress_raises_comes_through(monkeypatch, error):
    """Whenever it is raised; scipy's Matrix Market reader must survive it too."""
    monkeypatch.setattr(files, "BLOCK", 1000)
    monkeypatch.setattr(files, "BUFFER", 1000)
    for name in all_kinds():
        for calls in (1, 2, 5):
            left = iter(range(calls))

            def progress(fraction):
                if next(left, None) is None:
                    raise error

            with pytest.raises(error):
                read_table(name, progress=progress)
            gc.collect()
