"""Labelled feature vectors that arrive at a boundary, checked on arrival.

Files: .npz with the arrays X and y, a pair NAME.npy (features, memory-mapped)
and NAME.labels.npy, .csv with a header line and a column named label, and
.parquet with the same (needs pyarrow). Features in .npy and .npz that would
take more than HELD_BYTES stay in their file, as `hyperforecast.rows.FileRows`;
of a deflated .npz, in a temporary file.
"""

import io
import math
import shutil
import struct
import sys
import zipfile
from dataclasses import dataclass
from pathlib import Path

import numpy as np

from hyperforecast.checks import InputError
from hyperforecast.rows import FileRows
from hyperforecast.storage import opened_zip, read_array_header

LABEL_COLUMN = "label"
LARGEST_TEXT_FILE = 2**31
CHUNK_ROWS = 16_384
# Features are held in memory up to this size, as they are or as float32.
HELD_BYTES = 2**26
BLOCK_BYTES = 2**20
# No features that were measured are deflated so much: what does not stay in its file is not believed beyond.
MOST_EXPANDED = 100
# All labels of an array take the room of the longest.
LONGEST_LABEL = 1000


@dataclass(frozen=True)
class Increment:
    """Rows that arrive together.

    Attributes
    ----------
    X : ndarray of shape (n, d), float32; or FileRows
        Features.
    y : ndarray of shape (n,), int64 or text
        Labels.
    """

    X: np.ndarray | FileRows
    y: np.ndarray

    def __len__(self):
        return len(self.y)

    @property
    def n_features(self):
        """Number of features d."""
        return self.X.shape[1]


def check_features(X, *, name="X", n_features=None):
    """Return features as a finite float32 array (n, d), a memory map or `FileRows` as it is; or raise `InputError`.

    Parameters
    ----------
    X : array-like of shape (n, d)
    name : str
        What errors call it.
    n_features : int, optional
        The feature count it must have.
    """
    try:
        X = X if isinstance(X, (np.ndarray, FileRows)) else np.asarray(X)
    except ValueError:
        raise InputError(name, "must be a table of numbers, every row of the same length", "ragged rows") from None
    if _is_masked(X):
        raise InputError(name, "must hold no masked values", "a masked array", "drop or mend such rows")
    if X.dtype.kind == "O":
        try:
            X = X.astype(np.float64)
        except (TypeError, ValueError, OverflowError):
            raise InputError(name, "must hold numbers only, every row of the same length", _first_words(X)) from None
    if X.dtype.kind == "c":
        raise InputError(name, "must hold real numbers", "Complex data not supported", "split them in two features")
    if X.dtype.kind not in "fiub":
        raise InputError(name, "must hold real numbers", f"values of type {X.dtype}")
    if X.ndim != 2:
        raise InputError(name, "must have two dimensions, rows and features", f"{X.ndim}, shape {X.shape}",
                         "Reshape your data")
    if 0 in X.shape:
        raise InputError(
            name, "must hold at least one row and one feature",
            f"{len(X)} row(s), {X.shape[1]} feature(s) (shape={X.shape}) while a minimum of 1 is required.")
    if n_features is not None and X.shape[1] != n_features:
        raise InputError(name, f"must have {n_features} features as before", f"{X.shape[1]}")
    if isinstance(X, FileRows) and np.isfinite(X.moments).all():
        # Nothing that is not finite leaves a mean finite.
        return X
    for start in range(0, len(X), CHUNK_ROWS):
        with np.errstate(over="ignore"):
            chunk = X[start:start + CHUNK_ROWS].astype(np.float32, copy=False)
        finite = np.isfinite(chunk)
        if not finite.all():
            row, column = np.argwhere(~finite)[0]
            value = "NaN" if np.isnan(chunk[row, column]) else X[start + row:start + row + 1][0, column]
            raise InputError(name, "must hold finite numbers that fit float32",
                             f"{value} in row {start + row}, column {column}", "drop or mend such rows")
    return X if isinstance(X, (np.memmap, FileRows)) else X.astype(np.float32, copy=False)


def _is_masked(values):
    # Without the import nobody can have made a masked array; it takes long.
    return "numpy.ma" in sys.modules and np.ma.is_masked(values)


def check_labels(y, n_rows, *, name="y"):
    """Return labels as an int64 or text array of shape (n_rows,), or raise `InputError`."""
    if _is_masked(y):
        raise InputError(name, "must hold no masked values", "a masked array", "drop or mend such rows")
    try:
        y = np.asarray(y)
    except ValueError:
        raise InputError(name, "must be one label for each row", "ragged values") from None
    if y.ndim != 1 or len(y) != n_rows:
        raise InputError(name, f"must be one label for each of the {n_rows} rows", f"shape {y.shape}")
    if y.dtype.kind == "O":
        whole = all(isinstance(label, (int, np.integer)) and not isinstance(label, bool) for label in y)
        if not whole and not all(isinstance(label, str) for label in y):
            raise InputError(name, "must hold text only or whole numbers only", _first_words(y))
    else:
        whole = y.dtype.kind in "iubf"
    if y.dtype.kind == "f" and (not np.isfinite(y).all() or (y != np.round(y)).any()):
        raise InputError(name, "must hold text or whole numbers, no continuous values",
                         _first_words(y[(y != np.round(y)) | ~np.isfinite(y)]))
    if whole:
        y = y.astype({"f": np.float64, "b": np.int64}.get(y.dtype.kind, y.dtype), copy=False)
        fits = (y >= -2**63) & (y < 2**63)
        if not fits.all():
            raise InputError(name, "must hold whole numbers of 64 bits", _first_words(y[~fits.astype(bool)]))
        return y.astype(np.int64)
    if y.dtype.kind not in "OU":
        raise InputError(name, "must hold text or whole numbers", f"values of type {y.dtype}")
    longest = max(map(len, y)) if y.dtype.kind == "O" else y.dtype.itemsize // 4
    if longest > LONGEST_LABEL:
        raise InputError(name, f"must hold labels of at most {LONGEST_LABEL} characters", longest)
    y = y.astype(str if y.dtype.kind == "O" else y.dtype.newbyteorder("="))
    signs = y.view(np.uint32)
    if ((signs > 0x10FFFF) | (signs >= 0xD800) & (signs < 0xE000)).any():
        raise InputError(name, "must hold text that UTF-8 can write", "signs that are no characters")
    empty = np.char.str_len(np.char.strip(y)) == 0
    if empty.any():
        raise InputError(name, "must name a class in every row", f"an empty label in row {np.argmax(empty)}")
    return y


def check_labels_kind(y, classes):
    """Refuse labels y, text or whole numbers, that are of another kind than `classes`."""
    kind, other = ("text", "whole numbers") if classes.dtype.kind == "U" else ("whole numbers", "text")
    if classes.dtype.kind != y.dtype.kind:
        raise InputError("y", f"must hold {kind} as before", other)


def check_increment(X, y, *, n_features=None):
    """Return an `Increment` of checked features and labels, or raise `InputError`."""
    X = check_features(X, n_features=n_features)
    return Increment(X, check_labels(y, len(X)))


def read_increment(path, *, n_features=None):
    """Return the `Increment` in a .npz, .npy, .csv or .parquet file, or raise `InputError`."""
    X, y = _read_rows(path, n_features, labelled=True)
    return Increment(X, y)


def read_features(path, *, n_features=None):
    """Return the feature rows (n, d) in a file like those of `read_increment`, whose labels may be missing."""
    return _read_rows(path, n_features, labelled=False)[0]


def _read_rows(path, n_features, *, labelled):
    """Return features and labels; the labels are None where they are not wanted."""
    path = Path(path)
    readers = {".npz": _read_npz, ".npy": _read_npy_pair, ".csv": _read_csv, ".parquet": _read_parquet}
    if path.suffix not in readers:
        raise InputError(path, f"must end in one of {', '.join(readers)}", repr(path.suffix))
    try:
        if not path.is_file():
            raise InputError(path, "must be a file that exists", "nothing of that name")
        X, y = readers[path.suffix](path, labelled)
        X = check_features(X, n_features=n_features)
        return X, check_labels(y, len(X)) if labelled else None
    except InputError as error:
        if error.parameter in ("X", "y"):
            raise InputError(f"{path} ({error.parameter})", error.rule, error.received, error.remedy) from None
        raise
    except OSError as error:
        raise InputError(path, "must be a readable file", error.strerror or error) from None


def _first_words(values):
    flat = np.ravel(values)[:3]
    return ", ".join(repr(value.item() if isinstance(value, np.generic) else value)[:40] for value in flat)


def _read_npz(path, labelled):
    with opened_zip(path, path, what="a complete .npz file") as archive:
        names = archive.namelist()
        if not {"X.npy", "y.npy"} <= {*names, *(() if labelled else ("y.npy",))}:
            raise InputError(path, "must hold the arrays X and y" if labelled else "must hold the array X",
                             ", ".join(names) or "none")
        X = _read_member(path, archive, "X.npy")
        return X, _read_member(path, archive, "y.npy", rows=len(X)) if labelled and _is_table(X) else None


def read_arrays(path):
    """Return every array in a .npz file by its name, or raise `InputError`."""
    path = Path(path)
    if not path.is_file():
        raise InputError(path, "must be a file that exists", "nothing of that name")
    with opened_zip(path, path, what="a complete .npz file") as archive:
        return {name.removesuffix(".npy"): _read_member(path, archive, name) for name in archive.namelist()}


def _stays_in_file(shape, fortran, dtype):
    """Whether an array is too large to hold, and can be read row by row."""
    fits = math.prod(shape) * max(dtype.itemsize, 4) <= HELD_BYTES
    return not fits and len(shape) == 2 and not fortran and dtype.kind in "fiub"


def _is_table(X):
    """Whether there is use in reading labels; `check_features` says why not."""
    return X.ndim == 2 and 0 not in X.shape


def _check_label_header(shape, dtype, rows):
    """Refuse labels that cannot be those of so many rows, before they are read."""
    if shape != (rows,):
        raise InputError("y", f"must be one label for each of the {rows} rows", f"shape {shape}")
    if dtype.kind == "U" and dtype.itemsize > 4 * LONGEST_LABEL:
        raise InputError("y", f"must hold labels of at most {LONGEST_LABEL} characters", dtype.itemsize // 4)


def _read_member(path, archive, member, *, rows=None):
    """Read features, or the labels of so many `rows`."""
    name = f"{path} ({member})"
    with archive.open(member) as stream:
        # The header is read through a small window: a hostile one cannot make us allocate.
        head = io.BytesIO(stream.read(12_000))
        shape, fortran, dtype = read_array_header(name, head)
    expected = math.prod(shape) * dtype.itemsize
    present = archive.getinfo(member).file_size - head.tell()
    if expected != present:
        raise InputError(name, "must hold as many bytes as its header says", f"{present}, not {expected}")
    # Deflate cannot expand more than about 1032 times; far more is a lie in the directory.
    if present > 1100 * max(min(archive.getinfo(member).compress_size, path.stat().st_size), 1):
        raise InputError(name, "must not expand more than deflate can", f"{present} bytes")
    if rows is not None:
        _check_label_header(shape, dtype, rows)
    elif present > max(HELD_BYTES, MOST_EXPANDED * archive.getinfo(member).compress_size) \
            and not _stays_in_file(shape, fortran, dtype):
        raise InputError(name, f"must be numbers, row after row in C order, to expand more than {MOST_EXPANDED} times",
                         f"{present} bytes of {dtype}, shape {shape}{', Fortran order' if fortran else ''}")
    with archive.open(member) as stream:
        if member == "X.npy" and _stays_in_file(shape, fortran, dtype):
            file, start = _streamed(path, archive.getinfo(member), stream)
            return FileRows(file, name, offset=start + head.tell(), shape=shape, dtype=dtype)
        return np.lib.format.read_array(stream, allow_pickle=False)


def _streamed(path, info, stream):
    """Read a member to its end, which checks it; return a file that holds it unpacked, and where it begins there."""
    import tempfile

    deflated = info.compress_type != zipfile.ZIP_STORED
    if deflated and shutil.disk_usage(tempfile.gettempdir()).free < info.file_size:
        raise InputError(path, f"must find room in {tempfile.gettempdir()} to be unpacked", f"{info.file_size} bytes",
                         "set TMPDIR to a folder with room, or use .npy")
    # Unlinked from the start, a temporary file goes with the last that reads it.
    file, start = (tempfile.TemporaryFile(), 0) if deflated else (open(path, "rb"), 0)
    try:
        while block := stream.read(BLOCK_BYTES):
            if deflated:
                file.write(block)
        if deflated:
            file.flush()
        else:
            # A local header of 30 bytes, whose last two numbers are the lengths of the name and of what follows it.
            file.seek(info.header_offset)
            start = info.header_offset + 30 + sum(struct.unpack("<HH", file.read(30)[-4:]))
    except BaseException:
        file.close()
        raise
    return file, start


def _map_npy(path, *, rows=None):
    with open(path, "rb") as stream:
        shape, fortran, dtype = read_array_header(path, stream)
        offset = stream.tell()
    expected = offset + math.prod(shape) * dtype.itemsize
    if path.stat().st_size != expected:
        raise InputError(path, "must hold as many bytes as its header says", f"{path.stat().st_size}, not {expected}")
    if rows is not None:
        _check_label_header(shape, dtype, rows)
    elif _stays_in_file(shape, fortran, dtype):
        return FileRows(open(path, "rb"), path, offset=offset, shape=shape, dtype=dtype)
    return np.load(path, mmap_mode="r", allow_pickle=False)


def _read_npy_pair(path, labelled):
    if not labelled:
        return _map_npy(path), None
    labels = path.with_suffix(".labels.npy")
    if not labels.is_file():
        raise InputError(path, f"must have its labels beside it in {labels.name}", "no such file")
    X = _map_npy(path)
    return X, np.array(_map_npy(labels, rows=len(X))) if _is_table(X) else None


def _read_csv(path, labelled):
    import csv

    if path.stat().st_size > LARGEST_TEXT_FILE:
        raise InputError(path, f"must hold at most {LARGEST_TEXT_FILE} bytes", path.stat().st_size, "use .npy")
    features, labels = [], []
    try:
        with open(path, newline="", encoding="utf-8-sig") as stream:
            rows = csv.reader(stream, strict=True)
            header = next(rows, [])
            if header.count(LABEL_COLUMN) not in ((1,) if labelled else (0, 1)):
                raise InputError(path, f"must have one column named {LABEL_COLUMN} in its header line",
                                 ", ".join(header)[:80].strip() or "no header")
            at = header.index(LABEL_COLUMN) if LABEL_COLUMN in header else None
            for row in rows:
                if len(row) != len(header):
                    raise InputError(path, f"must have {len(header)} values in every line",
                                     f"{len(row)} in line {rows.line_num}")
                label, values = ("", row) if at is None else (row[at], row[:at] + row[at + 1:])
                try:
                    features.append(np.array(values, dtype=np.float64))
                except ValueError:
                    raise InputError(path, f"must hold numbers in every column but {LABEL_COLUMN}",
                                     f"{', '.join(row)[:80]} in line {rows.line_num}") from None
                if len(label) > LONGEST_LABEL:
                    raise InputError(path, f"must hold labels of at most {LONGEST_LABEL} characters",
                                     f"{len(label)} in line {rows.line_num}")
                labels.append(label)
    except (UnicodeDecodeError, csv.Error) as error:
        raise InputError(path, "must be a .csv file in UTF-8", error) from None
    if not labels:
        raise InputError(path, "must hold at least one row", "a header alone")
    return np.array(features), whole_or_text(np.array(labels))


def whole_or_text(labels):
    """Return text labels as whole numbers if every one of them is written as one."""
    try:
        numbers = labels.astype(np.int64)
    except (ValueError, OverflowError):
        return labels
    return numbers if (numbers.astype(str) == labels).all() else labels


def _read_parquet(path, labelled):
    try:
        import pyarrow.parquet
    except ImportError:
        raise InputError(path, "needs pyarrow to be read", "no pyarrow here",
                         "install hyperforecast[workshop], or convert to .npz") from None
    try:
        table = pyarrow.parquet.read_table(path)
    except (pyarrow.ArrowException, OSError, ValueError) as error:
        raise InputError(path, "must be a .parquet file", error) from None
    if table.column_names.count(LABEL_COLUMN) not in ((1,) if labelled else (0, 1)):
        raise InputError(path, f"must have one column named {LABEL_COLUMN}", ", ".join(table.column_names)[:80])
    labels = np.array(table.column(LABEL_COLUMN).to_pylist(), dtype=object) if labelled else None
    columns = [name for name in table.column_names if name != LABEL_COLUMN]
    if not columns:
        raise InputError(path, "must hold at least one feature column", "none")
    features = np.array([table.column(name).to_pylist() for name in columns], dtype=object).T
    return features, labels
