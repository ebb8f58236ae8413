"""Rows that stay in their file until they are asked for, so that increments may be larger than memory.

Plain arrays are held as they are and worked on as a whole; `chunks` and `joined` spare the other rooms the difference.
"""

import os
from functools import cached_property

import numpy as np

from hyperforecast.checks import InputError

# Bytes of rows that are read at a time: small enough for the processor's cache where they are only summed up.
SUMMED_BYTES, CHUNK_BYTES = 2**19, 2**22
# In standard deviations.
FAR_FROM_ZERO = 4
# Rows in rising order that fill at least this share of their span are read in one go.
DENSE = 0.5


class FileRows:
    """A table in a file, row after row, that looks like an array; rows are read when they are asked for.

    Parameters
    ----------
    file : binary file
        Closed when this is no longer needed.
    name : str or Path
        What errors call it.
    offset : int
        Where in the file the first row begins.
    shape : tuple of int
        (n, d).
    dtype : dtype
    """

    ndim = 2

    def __init__(self, file, name, *, offset, shape, dtype):
        self.file, self.name, self.offset, self.shape, self.dtype = file, name, offset, tuple(shape), np.dtype(dtype)
        self._row_bytes = self.shape[1] * self.dtype.itemsize

    def __del__(self):
        self.file.close()

    def __len__(self):
        return self.shape[0]

    def __array__(self, dtype=None, copy=None):
        return np.asarray(self[:], dtype)

    def __getitem__(self, rows):
        """Return an array of the rows in a slice without steps, a mask or an array of indices."""
        if isinstance(rows, slice):
            start, stop, step = rows.indices(len(self))
            if step != 1:
                raise IndexError("rows of a file are read without steps")
            return self.read(start, np.empty((max(stop - start, 0), self.shape[1]), self.dtype))
        rows = np.asarray(rows)
        if rows.dtype == bool:
            rows = np.flatnonzero(rows)
        if not rows.size:
            return np.empty((*rows.shape, self.shape[1]), self.dtype)
        flat = rows.ravel()
        first, last = int(flat.min()), int(flat.max())
        if first < 0 or last >= len(self):
            raise IndexError(f"rows from 0 to {len(self) - 1}")
        if flat.size >= DENSE * (last - first + 1):
            read = self[first:last + 1][flat - first]
        else:
            read = np.empty((flat.size, self.shape[1]), self.dtype)
            for place, row in enumerate(flat.tolist()):
                self.read(row, read[place:place + 1])
        return read.reshape(*rows.shape, self.shape[1])

    @property
    def nbytes(self):
        """Bytes in the file."""
        return len(self) * self._row_bytes

    @cached_property
    def moments(self):
        """Mean and variance of every feature over all rows, shape (2, d), float64; computed once.

        Not finite where a value is not, or does not fit float32.
        """
        with np.errstate(all="ignore"):
            found = _moments(self, np.float32)
            # Squares overflow earlier than values.
            return found if np.isfinite(found).all() else _moments(self, np.float64)

    def read(self, start, into):
        """Fill an array (k, d) of the file's type with the rows from `start` on; return it."""
        target, at = memoryview(into).cast("B") if into.size else memoryview(b""), self.offset + start * self._row_bytes
        done = 0
        while done < len(target):
            got = os.preadv(self.file.fileno(), [target[done:]], at + done)
            if not got:
                raise InputError(self.name, "must not change while it is read", "a file that has become shorter")
            done += got
        return into


def chunk_rows(X, n_bytes=CHUNK_BYTES):
    """Return how many rows of a table, as float32, fit into `n_bytes`; at least one."""
    return max(n_bytes // (4 * X.shape[1]), 1)


def chunks(X, *, n_bytes=CHUNK_BYTES):
    """Yield (slice, array) over the rows of a table: all at once for a plain array, else so many as fit `n_bytes`."""
    size = len(X) if isinstance(X, np.ndarray) else chunk_rows(X, n_bytes)
    for start in range(0, len(X), max(size, 1)):
        rows = slice(start, min(start + size, len(X)))
        yield rows, X[rows]


class JoinedRows:
    """Tables of float32, (n_1, d), (n_2, d) ..., one after the other, of which rows can be taken; see `joined`."""

    ndim = 2

    def __init__(self, parts):
        self.parts = parts
        self.starts = np.cumsum([0, *map(len, parts)])
        self.shape = (int(self.starts[-1]), parts[0].shape[1])

    def __len__(self):
        return self.shape[0]

    def __getitem__(self, rows):
        """Return an array of the rows in a slice, or in an array of indices."""
        return self.take(np.arange(*rows.indices(len(self))) if isinstance(rows, slice) else np.asarray(rows))

    def take(self, places, axis=0):
        """Return the rows at `places`, an array of indices of any shape."""
        taken = np.empty((*places.shape, self.shape[1]), np.float32)
        part_of = np.searchsorted(self.starts, places, side="right") - 1
        for number, part in enumerate(self.parts):
            here = part_of == number
            taken[here] = part[places[here] - self.starts[number]]
        return taken


def joined(parts):
    """Return tables one after the other: an array where all are arrays (the only one itself), else `JoinedRows`."""
    if len(parts) == 1:
        return parts[0]
    return np.concatenate(parts) if all(isinstance(part, np.ndarray) for part in parts) else JoinedRows(parts)


def column_moments(X):
    """Return mean and variance of every column of a table (n, d), shape (2, d), in one reading and little memory."""
    return X.moments if isinstance(X, FileRows) else _moments(X, np.float64)


def _moments(X, dtype):
    """Return `column_moments` by sums in `dtype` over small pieces, in float64 over all of them.

    The shifted-data algorithm, common practice: where the mean is far from zero, the sums are of what lies around a
    first mean, so that their difference does not cancel. It takes half as long again.
    """
    size, (n_rows, n_features) = chunk_rows(X, SUMMED_BYTES), X.shape
    first = X[:size].astype(np.float32)
    pivot = first.mean(axis=0, dtype=np.float64).astype(dtype)
    shifts = bool((np.abs(pivot) > FAR_FROM_ZERO * first.std(axis=0)).any())
    pivot *= shifts
    ones, total, squares = np.ones(size, dtype), np.zeros(n_features), np.zeros(n_features)
    # Memory that is fresh for every piece would take longer to get than to fill.
    buffer, rest = np.empty((size, n_features), X.dtype), np.empty((size, n_features), dtype)
    for start in range(0, n_rows, size):
        count = min(size, n_rows - start)
        piece = X.read(start, buffer[:count]) if isinstance(X, FileRows) else X[start:start + count]
        # As float32, which the head will see.
        piece = piece.astype(np.float32, copy=False).astype(dtype, copy=False)
        if shifts:
            piece = np.subtract(piece, pivot, out=rest[:count])
        total += ones[:count] @ piece
        squares += ones[:count] @ np.multiply(piece, piece, out=rest[:count])
    mean = total / n_rows
    return np.stack([pivot + mean, np.maximum(squares / n_rows - mean**2, 0)])
