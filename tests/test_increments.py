"""Increments: good ones of every kind of file are the same; bad ones get one line that says where and why."""

import csv
import io
import os
import re
import struct
import zipfile
from itertools import count

import numpy as np
import pyarrow
import pyarrow.parquet
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from hyperforecast import increments
from hyperforecast.checks import InputError
from hyperforecast.increments import Increment, check_features, check_increment, check_labels, read_increment
from hyperforecast.storage import array_bytes

# The same 200 examples every time; set HYPERFORECAST_FUZZ to a number for as many new ones.
fuzzed = settings(max_examples=int(os.environ.get("HYPERFORECAST_FUZZ", 200)), deadline=None,
                  derandomize="HYPERFORECAST_FUZZ" not in os.environ)
X = np.array([[1.5, -2.0, 3e-7], [0.0, 4.0, 1e30], [2.0, 2.0, 2.0], [7.0, -0.5, 0.1]])
TEXT, WHOLE = np.array(["nut", "bolt", "écrou", "nut"]), np.array([3, -1, 2**40, 3])


def write(path, X, y):
    """Write rows to a file of the kind that its name tells."""
    if path.suffix == ".npz":
        np.savez_compressed(path, X=X, y=y)
    elif path.suffix == ".npy":
        np.save(path, X)
        np.save(path.with_suffix(".labels.npy"), y)
    elif path.suffix == ".csv":
        with open(path, "w", newline="", encoding="utf-8") as stream:
            rows = csv.writer(stream)
            rows.writerow(["a", "label", *(f"f{i}" for i in range(1, X.shape[1]))])
            rows.writerows([row[0], label, *row[1:]] for row, label in zip(X.tolist(), y.tolist()))
    else:
        columns = {f"f{i}": column for i, column in enumerate(X.T)}
        pyarrow.parquet.write_table(pyarrow.table({"label": y, **columns}), path)
    return path


def refused(path, rule, **options):
    with pytest.raises(InputError, match=rule) as caught:
        read_increment(path, **options)
    line = str(caught.value)
    assert line.startswith(str(path.parent)) and line.isprintable()
    return caught.value


@pytest.mark.parametrize("y", [TEXT, WHOLE], ids=["text", "whole"])
@pytest.mark.parametrize("suffix", [".npz", ".npy", ".csv", ".parquet"])
def test_every_kind_of_file_gives_the_same_increment(suffix, y, tmp_path):
    increment = read_increment(write(tmp_path / f"parts{suffix}", X, y), n_features=3)
    np.testing.assert_array_equal(np.asarray(increment.X, np.float32), X.astype(np.float32))
    assert increment.y.dtype.kind == ("U" if y is TEXT else "i") and increment.y.tolist() == y.tolist()
    assert (len(increment), increment.n_features) == (4, 3)


@pytest.mark.parametrize("order", ["C", "F"])
@pytest.mark.parametrize("dtype", ["<f4", ">f4", "<f8", "<f2", "|i1", "|u1", "<i8", ">u2", "|b1"])
def test_numbers_of_every_type_are_features(dtype, order, tmp_path):
    table = np.array([[1, 0, 1], [0, 1, 1]]).astype(dtype, order=order)
    for path in (tmp_path / "a.npz", tmp_path / "a.npy"):
        increment = read_increment(write(path, table, np.array([0, 1])))
        np.testing.assert_array_equal(np.asarray(increment.X, np.float32), [[1, 0, 1], [0, 1, 1]])


def test_large_features_stay_on_disk(tmp_path):
    increment = read_increment(write(tmp_path / "parts.npy", X, TEXT))
    assert isinstance(increment.X, np.memmap) and not increment.X.flags.writeable


def test_labels_of_a_csv_are_whole_numbers_only_if_all_are_written_so(tmp_path):
    for labels, expected in ((["1", "-2"], [1, -2]), (["1", "02"], ["1", "02"]), (["1", "2.0"], ["1", "2.0"]),
                             (["1", "x"], ["1", "x"]), (["1", "9" * 19], ["1", "9" * 19]), (["1", "٢"], ["1", "٢"])):
        path = write(tmp_path / "a.csv", X[:2], np.array(labels))
        assert read_increment(path).y.tolist() == expected


# Arrays in Python.

class Table:
    """Something with columns that numpy can make an array of."""

    def __init__(self, array):
        self.array = array

    def __array__(self, dtype=None, copy=None):
        return np.asarray(self.array, dtype)


@pytest.mark.parametrize("table", [
    X.tolist(), X, X.astype(object), np.asfortranarray(X), X[::-1, ::-1][::-1, ::-1], Table(X), np.ma.array(X),
    X.astype(np.longdouble),
], ids=["lists", "array", "objects", "columns first", "views", "table", "unmasked", "long double"])
def test_features_come_out_as_float32(table):
    checked = check_features(table)
    assert checked.dtype == np.float32
    np.testing.assert_array_equal(checked, X.astype(np.float32))


@pytest.mark.parametrize("table, rule", [
    ([[1, 2], [3]], "must be a table of numbers, every row of the same length; received ragged rows"),
    ([[1, 2], ["a", 2]], "must hold real numbers; received values of type <U"),
    ([["1", "2"]], "must hold real numbers"), ([[b"1"]], "must hold real numbers"),
    (np.array([["a", 1.0]], object), "must hold numbers only, every row of the same length; received 'a', 1.0"),
    (np.array([[[1, 2], None]], object), "must hold numbers only"), ([[{}]], "must hold numbers only"),
    ([[10**400]], "must hold numbers only"), (np.array([[1j]], object), "must hold numbers only"),
    ([[1 + 2j]], "must hold real numbers; received Complex data not supported"),
    (np.array([["2026-01-01"]], "M8[D]"), "must hold real numbers; received values of type datetime64"),
    (np.zeros((2, 2), [("a", "f4")]), "must hold real numbers"), ({1, 2}, "must hold numbers only"),
    (None, "must have two dimensions, rows and features; received 0, shape ()"), (3.0, "must have two dimensions"),
    ("text", "must hold real numbers"),
    ([1.0, 2.0], "must have two dimensions, rows and features; received 1, shape (2,)"),
    (np.zeros((2, 2, 2)), "must have two dimensions"), ([], "must have two dimensions"),
    (np.zeros((0, 3)), "must hold at least one row and one feature; received 0 row(s), 3 feature(s)"),
    (np.zeros((3, 0)), "must hold at least one row and one feature; received 3 row(s), 0 feature(s)"),
    ([[]], "at least one"),
    ([[1, np.nan]], "must hold finite numbers that fit float32; received NaN in row 0, column 1"),
    ([[1, None]], "received NaN in row 0, column 1"), ([[1], [-np.inf]], "received -inf in row 1, column 0"),
    ([[1], [1e39]], "received 1e+39 in row 1, column 0"), ([[np.longdouble("1e4000")]], "received inf in row 0"),
    (np.ma.array([[1.0, 2.0]], mask=[[0, 1]]), "must hold no masked values"),
], ids=count())
def test_features_that_are_none_are_refused(table, rule):
    with pytest.raises(InputError, match="^" + re.escape("table: ") + ".*" + re.escape(rule)) as caught:
        check_features(table, name="table")
    assert str(caught.value).isprintable()


def test_bad_features_are_found_in_every_part_of_a_large_array():
    table = np.zeros((2 * increments.CHUNK_ROWS + 5, 2))
    table[-1, 1] = np.nan
    with pytest.raises(InputError, match=f"received NaN in row {len(table) - 1}, column 1; drop or mend such rows"):
        check_features(table)
    table[-1, 1] = 0
    assert check_features(table, n_features=2).shape == table.shape
    with pytest.raises(InputError, match="^X: must have 3 features as before; received 2$"):
        check_features(table, n_features=3)


@pytest.mark.parametrize("labels, expected", [
    ([1, 2], [1, 2]), ([True, False], [1, 0]), ([1.0, -2.0], [1, -2]), (np.array([1, 2], np.uint8), [1, 2]),
    (np.array([2**63 - 1, 0], np.uint64), [2**63 - 1, 0]), (np.array([-2**63, 5], object), [-2**63, 5]),
    (np.array([2, 3], np.float16), [2, 3]), (np.array([1, 2], ">i4"), [1, 2]), ([-2.0**63, 0], [-2**63, 0]),
    (["a", "b"], ["a", "b"]), (np.array(["a", "bc"], object), ["a", "bc"]), (np.array(["a", "螺"], ">U3"), ["a", "螺"]),
    ([1, "a"], ["1", "a"]), (np.array(["nut\n", " bolt"]), ["nut\n", " bolt"]),
    (np.array(["a", "b"])[::-1], ["b", "a"]),
    (np.array(["x" * 1000, "y"]), ["x" * 1000, "y"]), (np.ma.array([1, 2]), [1, 2]),
], ids=count())
def test_labels_come_out_as_whole_numbers_or_text(labels, expected):
    checked = check_labels(labels, 2)
    assert checked.tolist() == expected and checked.dtype.isnative and checked.dtype.kind in "iU"
    assert checked.dtype == np.int64 or checked.dtype.kind == "U"


@pytest.mark.parametrize("labels, rule", [
    ([1], "must be one label for each of the 2 rows; received shape (1,)"), ([1, 2, 3], "must be one label for each"),
    ([[1, 2]], "must be one label for each of the 2 rows; received shape (1, 2)"),
    ([[1], [2]], "must be one label for each"),
    (None, "must be one label for each"), ("ab", "must be one label for each"), (7, "must be one label for each"),
    ([[1], [2, 3]], "must be one label for each row; received ragged values"), ([], "must be one label for each"),
    ([1.5, 2], "must hold text or whole numbers, no continuous values; received 1.5"), ([np.nan, 1], "received nan"),
    ([np.inf, 1], "no continuous values"), ([1e300, 1], "must hold whole numbers of 64 bits; received 1e+300"),
    ([2.0**63, 1], "must hold whole numbers of 64 bits"),
    (np.array([10**30, 1], object), "must hold whole numbers of 64 bits"),
    (np.array([2**63, 1], np.uint64), "must hold whole numbers of 64 bits; received 9223372036854775808"),
    (np.array([1, "a"], object), "must hold text only or whole numbers only; received 1, 'a'"),
    (np.array([None, "a"], object), "must hold text only or whole numbers only"),
    (np.array([True, 1], object), "must hold text only"), (np.array([1.0, 2.0], object), "must hold text only"),
    ([b"a", b"b"], "must hold text or whole numbers; received values of type |S1"),
    ([1j, 2], "must hold text or whole"),
    (np.array(["2026-01-01"] * 2, "M8[D]"), "must hold text or whole numbers"),
    (["a", ""], "must name a class in every row; received an empty label in row 1"),
    ([" \t\n", "a"], "empty label in row 0"),
    (["a", "\0"], "must name a class in every row; received an empty label in row 1"),
    (["a", "\ud800"], "must hold text that UTF-8 can write"),
    (np.array([0x41, 0x110000], np.uint32).view("<U1"), "must hold text that UTF-8 can write"),
    (["a", "x" * 1001], "must hold labels of at most 1000 characters; received 1001"),
    (np.array(["a", "x" * 10**6], object), "must hold labels of at most 1000 characters; received 1000000"),
    (np.ma.array([1, 2], mask=[0, 1]), "must hold no masked values"),
], ids=count())
def test_labels_that_are_none_are_refused(labels, rule):
    with pytest.raises(InputError, match="^y: .*" + re.escape(rule)) as caught:
        check_labels(labels, 2)
    assert str(caught.value).isprintable()


def test_features_and_labels_are_checked_together():
    increment = check_increment(X, TEXT, n_features=3)
    assert isinstance(increment, Increment) and len(increment) == 4
    with pytest.raises(InputError, match="^y: must be one label for each of the 4 rows; received shape"):
        check_increment(X, TEXT[:3])


# Files.

def test_a_file_must_be_of_a_known_kind_and_there(tmp_path):
    assert refused(tmp_path / "a.xls", "must end in one of .npz, .npy, .csv, .parquet; received '.xls'")
    assert refused(tmp_path / "a", "must end in one of .npz, .npy, .csv, .parquet; received ''")
    (tmp_path / "folder.csv").mkdir()
    os.mkfifo(tmp_path / "pipe.npz")
    for name in ("a.csv", "a.npz", "a.npy", "a.parquet", "folder.csv", "pipe.npz", "a\0b.csv"):
        error = refused(tmp_path / name, "must be a file that exists; received nothing of that name")
        assert error.parameter == str(tmp_path / name)
    refused(tmp_path / ("x" * 300 + ".csv"), "must be a readable file; received File name too long")


@pytest.mark.parametrize("suffix", [".npz", ".npy", ".csv", ".parquet"])
def test_bad_values_are_named_with_file_and_place(suffix, tmp_path):
    bad = X.copy()
    bad[2, 1] = np.nan
    path = write(tmp_path / f"a{suffix}", bad, TEXT)
    error = refused(path, "must hold finite numbers that fit float32; received NaN in row 2, column 1")
    assert error.parameter == f"{path} (X)"
    path = write(tmp_path / f"b{suffix}", X, TEXT)
    assert refused(path, "must have 5 features as before; received 3", n_features=5)


@pytest.mark.parametrize("suffix", [".npz", ".npy"])
def test_labels_must_be_as_many_as_rows(suffix, tmp_path):
    path = write(tmp_path / f"a{suffix}", X, TEXT[:3])
    assert refused(path, re.escape("(y): must be one label for each of the 4 rows; received shape (3,)"))


def raw_csv(tmp_path, text):
    path = tmp_path / "a.csv"
    path.write_bytes(text if isinstance(text, bytes) else text.encode())
    return path


@pytest.mark.parametrize("text, rule", [
    ("", "must have one column named label in its header line; received no header"),
    ("a,b\n1,2\n", "must have one column named label in its header line; received a, b"),
    ("\t", "must have one column named label in its header line; received no header"),
    ("label,label,a\nx,y,1\n", "must have one column named label"),
    ("Label,a\nx,1\n", "must have one column named label"),
    ("label,a\n", "must hold at least one row; received a header alone"),
    ("label\nx\n", re.escape("(X): must hold at least one row and one feature")),
    ("label,a,b\nx,1,2\ny,1\n", "must have 3 values in every line; received 2 in line 3"),
    ("label,a\nx,1,2\n", "must have 2 values in every line; received 3 in line 2"),
    ("label,a\nx,1\n\ny,2\n", "must have 2 values in every line; received 0 in line 3"),
    ("label,a\nx,one\n", "must hold numbers in every column but label; received x, one in line 2"),
    ("label,a\nx,\n", "must hold numbers in every column but label"), ("label,a\nx,\"1,5\"\n", "must hold numbers"),
    ("label,a\nx,nan\n", "must hold finite numbers that fit float32; received NaN in row 0"),
    ("label,a\nx,inf\n", "must hold finite numbers"), ("label,a\nx,1e39\n", "must hold finite numbers"),
    ("label,a\nx,1e999\n", "must hold finite numbers"),
    ("label,a\n,1\n", "must name a class in every row"), ("label,a\n\" \",1\n", "must name a class in every row"),
    ("label,a\n" + "x" * 1001 + ",1\n", "must hold labels of at most 1000 characters; received 1001 in line 2"),
    ("label,a\nx,\"1\n", "must be a .csv file in UTF-8; received unexpected end of data"),
    (b"label,a\n\xff,1\n", "must be a .csv file in UTF-8"),
    ("label,a\nx,1\n".encode("utf-16"), "must be a .csv file in UTF-8"),
    (b"\x00\x01\x02", "must have one column named label"),
    ("label,a\nx," + "1" * 140_000, "must be a .csv file in UTF-8; received field larger than field limit"),
    ("label;a\nx;1\n", "must have one column named label in its header line; received label;a"),
    ("\x1b[2Jlabel,a\nx,1\n", re.escape(r"received \x1b[2Jlabel, a")),
], ids=count())
def test_a_csv_that_breaks_a_rule_is_refused(text, rule, tmp_path):
    refused(raw_csv(tmp_path, text), rule)


@pytest.mark.parametrize("text", [
    "a,label,b\n1,x,2\n3,y,4\n", "\ufeffa,label,b\r\n1,x,2\r\n3,y,4", "a,label,b\r1,x,2\r3,y,4\r",
    '"a","label","b"\n"1","x","2"\n 3 ,y, 4e0\n', "a,label,a\n1,x,2\n3,y,4\n"])
def test_a_csv_may_be_written_in_several_ways(text, tmp_path):
    increment = read_increment(raw_csv(tmp_path, text))
    assert increment.X.tolist() == [[1, 2], [3, 4]] and increment.y.tolist() == ["x", "y"]


def test_one_long_label_does_not_take_memory_for_all(tmp_path):
    """An array of text is as wide as its longest: 2 MB of .csv would be 100 GB of labels."""
    path = raw_csv(tmp_path, "label,a\n" + "x,1\n" * 200_000 + "y" * 130_000 + ",1\n")
    refused(path, "must hold labels of at most 1000 characters; received 130000 in line 200002")


def test_a_csv_has_a_largest_size(tmp_path, monkeypatch):
    monkeypatch.setattr(increments, "LARGEST_TEXT_FILE", 10)
    refused(raw_csv(tmp_path, "label,a\nx,1\n"), "must hold at most 10 bytes; received 12; use .npy")


def header(descr, shape, data=b""):
    text = str({"descr": descr, "fortran_order": False, "shape": shape}).encode()
    text += b" " * (-(len(text) + 11) % 64) + b"\n"
    return b"\x93NUMPY\x01\x00" + len(text).to_bytes(2, "little") + text + data


PICKLED = io.BytesIO()
np.save(PICKLED, np.array([["a", 1]], dtype=object), allow_pickle=True)
BAD_ARRAYS = {
    "objects": (PICKLED.getvalue(), "must hold real numbers or text, no Python objects; received object"),
    "fields": (header([("a", "<f4")], (2,), bytes(8)), "must hold real numbers or text"),
    "complex": (header("<c8", (1, 1), bytes(8)), "must hold real numbers or text"),
    "dates": (header("<M8[s]", (1, 1), bytes(8)), "must hold real numbers or text"),
    "unknown type": (header("<f3", (1, 1), bytes(3)), "must be an array in .npy format"),
    "odd type": (header(("<f4",), (1, 1), bytes(4)), "must be an array in .npy format"),
    "absurd shape": (header("<f4", (10**30, 1)), "must have a shape that memory can hold"),
    "absurd shape, no bytes": (header("<f4", (2**62, 0)), "must have a shape that memory can hold"),
    "negative shape": (header("<f4", (-1, 4)), "must have a shape that memory can hold"),
    "boolean shape": (header("<f4", (True, 1), bytes(4)), "must have a shape that memory can hold"),
    "many dimensions": (header("<f4", (1,) * 65, bytes(4)), "must have a shape that memory can hold"),
    "gigabytes told, bytes there": (header("<f4", (2**30, 4), bytes(64)), "must hold as many bytes as its header says"),
    "cut": (array_bytes(np.zeros((4, 3)))[:-1], "must hold as many bytes as its header says"),
    "too long": (array_bytes(np.zeros((4, 3))) + b"x", "must hold as many bytes as its header says"),
    "empty": (b"", "must be an array in .npy format"), "text": (b"1,2,3\n", "must be an array in .npy format"),
    "long header": (header("x" * 20_000, (1, 1)), "must be an array in .npy format"),
    "nested header": (header("<f4", (1, 1), bytes(4)).replace(b"{", b"[" * 300, 1), "must be an array in .npy format"),
    "one row only": (array_bytes(np.zeros(3)), "must have two dimensions"),
    "no rows": (array_bytes(np.zeros((0, 3))), "must hold at least one row and one feature"),
    "text features": (array_bytes(np.array([["a"]])), "must hold real numbers"),
}


@pytest.mark.parametrize("case", BAD_ARRAYS)
def test_arrays_in_npz_and_npy_files_that_break_a_rule_are_refused(case, tmp_path):
    data, rule = BAD_ARRAYS[case]
    labels = array_bytes(np.array([1]))
    (tmp_path / "a.npy").write_bytes(data)
    (tmp_path / "a.labels.npy").write_bytes(labels)
    refused(tmp_path / "a.npy", rule)
    refused(zipped(tmp_path / "a.npz", {"X.npy": data, "y.npy": labels}), rule)


def test_labels_in_npz_and_npy_files_are_checked_as_well(tmp_path):
    rows = array_bytes(np.zeros((2, 1)))
    for labels, rule in ((BAD_ARRAYS["absurd shape"]), (PICKLED.getvalue(), "no Python objects"),
                         (header("<U0", (2**60,)), "must hold real numbers or text"),
                         (header("<U1", (2,), b"\xff" * 8), "must hold text that UTF-8 can write"),
                         (header("|S1", (2,), b"ab"), "must hold real numbers or text"),
                         (array_bytes(np.array([0.5, 1])), "no continuous values")):
        (tmp_path / "a.npy").write_bytes(rows)
        (tmp_path / "a.labels.npy").write_bytes(labels)
        refused(tmp_path / "a.npy", rule)
        refused(zipped(tmp_path / "a.npz", {"X.npy": rows, "y.npy": labels}), rule)


def test_a_npy_file_needs_its_labels(tmp_path):
    np.save(tmp_path / "a.npy", X)
    refused(tmp_path / "a.npy", "must have its labels beside it in a.labels.npy; received no such file")


def zipped(path, members, compression=zipfile.ZIP_DEFLATED):
    with zipfile.ZipFile(path, "w", compression) as archive:
        for name, data in members.items():
            archive.writestr(name, data)
    return path


def test_a_npz_file_holds_rows_and_labels(tmp_path):
    good = {"X.npy": array_bytes(X), "y.npy": array_bytes(TEXT)}
    for missing in ({}, {"X.npy": good["X.npy"]}, {"y.npy": good["y.npy"]}, {"../X.npy": b"", "/y.npy": b""},
                    {"X": good["X.npy"], "y": good["y.npy"]}):
        refused(zipped(tmp_path / "a.npz", missing), "must hold the arrays X and y; received ")
    assert len(read_increment(zipped(tmp_path / "a.npz", {**good, "../more.npy": b"anything", "z": b""}))) == 4
    for compression in (zipfile.ZIP_BZIP2, zipfile.ZIP_LZMA):
        refused(zipped(tmp_path / "a.npz", good, compression), "must be stored or deflated")


def test_a_damaged_npz_file_is_refused_or_unharmed(tmp_path):
    path = write(tmp_path / "a.npz", X, TEXT)
    whole, rng = path.read_bytes(), np.random.default_rng(0)
    for length in np.linspace(0, len(whole) - 1, 20).astype(int):
        path.write_bytes(whole[:length])
        refused(path, "must be a complete .npz file; received .*; copy it again from the source")
    found = 0
    for _ in range(60):
        place, change = int(rng.integers(len(whole))), int(rng.integers(1, 256))
        path.write_bytes(whole[:place] + bytes([whole[place] ^ change]) + whole[place + 1:])
        try:
            increment = read_increment(path)
        except InputError as error:
            assert str(error).isprintable()
            found += 1
        else:
            np.testing.assert_array_equal(increment.X, X.astype(np.float32))
            assert increment.y.tolist() == TEXT.tolist()
    assert found > 40


def test_bombs_are_not_unpacked(tmp_path):
    """The directory of a .npz file may tell anything; the file's own size bounds what deflate can have packed."""
    rows = header("<f4", (2**28, 4))
    path = zipped(tmp_path / "a.npz", {"X.npy": rows, "y.npy": array_bytes(np.zeros(1, int))})
    data = bytearray(path.read_bytes())
    place = data.index(b"PK\x01\x02")
    # Compressed and uncompressed size in the central directory (PKWARE APPNOTE 4.3.12).
    struct.pack_into("<II", data, place + 20, 2**31, len(rows) + 2**32 - len(rows) - 1)
    path.write_bytes(data)
    refused(path, "must hold as many bytes as its header says")
    rows = header("<f4", (2**28, 3))
    path = zipped(path, {"X.npy": rows, "y.npy": array_bytes(np.zeros(1, int))})
    data = bytearray(path.read_bytes())
    struct.pack_into("<II", data, data.index(b"PK\x01\x02") + 20, 2**31, len(rows) + 12 * 2**28)
    path.write_bytes(data)
    refused(path, "must not expand more than deflate can; received 3221225472 bytes")


@pytest.mark.parametrize("columns, rule", [
    ({"a": [1.0]}, "must have one column named label; received a"),
    ({"label": ["x"]}, "must hold at least one feature column"),
    ({"label": ["x", None], "a": [1.0, 2.0]}, "must hold text only or whole numbers only"),
    ({"label": ["x", "y"], "a": [1.0, None]}, "received NaN in row 1, column 0"),
    ({"label": ["x", "y"], "a": ["1", "one"]}, "must hold numbers only"),
    ({"label": ["x", "y"], "a": [[1.0], [2.0]]}, "must "), ({"label": ["x", "y"], "a": [[1.0], [2.0, 3.0]]}, "must "),
    ({"label": [0.5, 1.5], "a": [1.0, 2.0]}, "must hold text only or whole numbers only"),
    ({"label": pyarrow.array([], "string"), "a": pyarrow.array([], "double")}, "must hold at least one row"),
    ({"label": [b"x"], "a": [1.0]}, "must hold text only"), ({"label": [True], "a": [1.0]}, "must hold text only"),
], ids=count())
def test_a_parquet_file_that_breaks_a_rule_is_refused(columns, rule, tmp_path):
    pyarrow.parquet.write_table(pyarrow.table(columns), tmp_path / "a.parquet")
    refused(tmp_path / "a.parquet", rule)


def test_columns_of_one_name_and_damaged_parquet_files_are_refused(tmp_path):
    path = tmp_path / "a.parquet"
    pyarrow.parquet.write_table(pyarrow.table([pyarrow.array([1])] * 3, names=["a", "a", "label"]), path)
    refused(path, "must be a .parquet file; received Multiple matches")
    whole = write(path, X, TEXT).read_bytes()
    for data in (b"", b"PAR1", whole[:-1], whole[:len(whole) // 2], b"PAR1" + whole[300:], X.tobytes()):
        path.write_bytes(data)
        refused(path, "must be a .parquet file")


def test_parquet_without_pyarrow_says_what_to_install(tmp_path, monkeypatch):
    import sys

    path = write(tmp_path / "a.parquet", X, TEXT)
    monkeypatch.setitem(sys.modules, "pyarrow", None)
    monkeypatch.setitem(sys.modules, "pyarrow.parquet", None)
    assert refused(path, "needs pyarrow to be read").remedy == "install hyperforecast[workshop], or convert to .npz"


# Bytes that nobody thought of.

@pytest.fixture(scope="module")
def folder(tmp_path_factory):
    return tmp_path_factory.mktemp("fuzz")


@st.composite
def changed(draw, whole):
    """Bytes of a file with some of them changed, left out or put in."""
    data = bytearray(whole)
    for _ in range(draw(st.integers(1, 4))):
        place = draw(st.integers(0, len(data)))
        data[place:place + draw(st.integers(0, 8))] = draw(st.binary(max_size=8))
    return bytes(data)


SIDES = st.integers(-2, 6) | st.sampled_from([2**31, 2**62, 2**63, 10**30, True, None, 1.0, "1"])
ARRAYS = st.one_of(
    st.binary(max_size=200), changed(array_bytes(X)), changed(array_bytes(TEXT)), changed(array_bytes(WHOLE)),
    changed(PICKLED.getvalue()),
    st.builds(header, st.sampled_from(["<f4", "<f8", ">f2", "|i1", "<u8", "|b1", "<U3", "|O", "|S2", "<c8", "<M8[s]",
                                       "V4", "<U0", ("<f4", 2), [("a", "<f4")], [], {}, None, 3, "<f99", "f4,f4"]),
              st.lists(SIDES, max_size=3).map(tuple) | SIDES, st.binary(max_size=64)))


def assert_increment_or_input_error(path):
    try:
        increment = read_increment(path)
    except InputError as error:
        assert str(error).isprintable()
        return
    assert increment.X.ndim == 2 and len(increment.X) == len(increment.y) > 0 and increment.n_features > 0
    assert np.isfinite(np.asarray(increment.X, np.float32)).all()
    assert increment.y.dtype == np.int64 or increment.y.dtype.kind == "U" and all(map(str.strip, increment.y.tolist()))


@fuzzed
@given(ARRAYS, st.one_of(st.just(array_bytes(WHOLE)), st.just(array_bytes(TEXT)), ARRAYS))
def test_any_bytes_in_npy_files_are_an_increment_or_an_input_error(folder, rows, labels):
    (folder / "a.npy").write_bytes(rows)
    (folder / "a.labels.npy").write_bytes(labels)
    assert_increment_or_input_error(folder / "a.npy")


GOOD_NPZ = io.BytesIO()
np.savez_compressed(GOOD_NPZ, X=X, y=TEXT)


@fuzzed
@given(st.binary(max_size=200) | changed(GOOD_NPZ.getvalue()) | st.tuples(ARRAYS, ARRAYS))
def test_any_bytes_in_a_npz_file_are_an_increment_or_an_input_error(folder, content):
    path = folder / "a.npz"
    if isinstance(content, bytes):
        path.write_bytes(content)
    else:
        zipped(path, dict(zip(("X.npy", "y.npy"), content)))
    assert_increment_or_input_error(path)


CELLS = st.sampled_from(["1", "-2.5", "1e3", "nan", "inf", "1e999", "", " ", "x", '"', '"a,b"', "label", "1_0",
                         "\0", "٢", "\ud7ff"])


@fuzzed
@given(st.one_of(
    st.binary(max_size=120), st.text(max_size=80).map(lambda text: f"label,a\n{text}".encode()),
    st.lists(st.lists(CELLS, min_size=1, max_size=4).map(",".join), max_size=5).map("\n".join).map(
        lambda text: f"a,label,b\n{text}".encode()),
    changed(b"a,label,b\n1,nut,2\n3,bolt,4\n")))
def test_any_bytes_in_a_csv_file_are_an_increment_or_an_input_error(folder, data):
    (folder / "a.csv").write_bytes(data)
    assert_increment_or_input_error(folder / "a.csv")
