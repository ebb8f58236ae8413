"""Task streams: which rows arrive at each boundary, and which rows are held out to judge by.

A `Collection` is labelled rows; a `Stream` deals them. Per class 60% of the rows
are for training, 20% for selection (at most 50) and 20% for scoring (at most 100).
"""

import zlib
from dataclasses import dataclass

import numpy as np

from hyperforecast.checks import InputError, check_whole
from hyperforecast.increments import Increment
from hyperforecast.workshop.streams.treatments import fit_treatment

SHARES = {"training": 0.6, "selection": 0.2, "scoring": 0.2}
MOST_ROWS = {"selection": 50, "scoring": 100}
CONTEST_ROWS_PER_CLASS = 100
FEWEST_ROWS = 5
GROUP_DRAWS = 100


def generator(seed, *purpose):
    """Return the random generator of one purpose (words, whole numbers) under a seed."""
    return np.random.default_rng([seed, *(zlib.crc32(str(word).encode()) for word in purpose)])


@dataclass(frozen=True)
class Collection:
    """Labelled rows that a stream is dealt from.

    Attributes
    ----------
    X : ndarray of shape (n, d)
        Features of any real type; a stream hands them out as float32.
    y : ndarray of shape (n,), int64 or text
        Labels.
    groups : ndarray of shape (n,), optional
        Group of each row (speaker, font family), never shared between training, selection and scoring.
    image_shape : (height, width), optional
        If the features are the pixels of an image, row by row.
    """

    X: np.ndarray
    y: np.ndarray
    groups: np.ndarray | None = None
    image_shape: tuple | None = None


class Stream:
    """A sequence of increments with the rows to judge them by.

    Parameters
    ----------
    collection : Collection
    increments : sequence of sequences of labels
        Labels of each increment, the first with two or more. A label that comes again brings new rows.
    name : str
    source : str
        Unit of leaving one source out: streams with a common origin share it.
    seed : int, 0 or more
        Of the split and of everything else that is random.
    rows_per_class : int, or dict of label to int
        Most training rows of a class in one increment.
    features : {"raw", "pca", "fourier", "convolution"}
        Treatment of the features (see `treatments.fit_treatment`).
    dimension : int, optional
        Number of features after treatment; raw features take none.
    sensor : callable, optional
        ``sensor(X, t, rng)`` gives rows as the sensor of boundary t shows them.

    Raises
    ------
    InputError
        If a label is not in the collection, comes twice in an increment, or has too few rows to split.
    """

    def __init__(self, collection, increments, *, name, source, seed, rows_per_class=CONTEST_ROWS_PER_CLASS,
                 features="raw", dimension=None, sensor=None):
        self.name = name
        self.source = source
        self.seed = check_whole("seed", seed)
        self._collection = collection
        self._sensor = sensor
        self._increments = check_labels_of_increments(increments)
        self._seen = [np.array(list(dict.fromkeys(sum(self._increments[:t + 1], ()))))
                      for t in range(self.n_boundaries)]
        self._parts = split_rows(collection, self._seen[-1].tolist(), self.seed)
        self._arrivals = self._deal_training(rows_per_class)
        self._treatment = None
        self._treatment = fit_treatment(
            features, dimension, lambda: self.training(0).X, generator(self.seed, "treatment"),
            image_shape=collection.image_shape)

    def _deal_training(self, rows_per_class):
        """Return, for each boundary, the list of each class's training rows."""
        limit = rows_per_class if isinstance(rows_per_class, dict) else dict.fromkeys(
            self._seen[-1].tolist(), check_whole("rows_per_class", rows_per_class, low=1))
        labels = [label for increment in self._increments for label in increment]
        shares = {label: iter(np.array_split(self._parts[label]["training"], labels.count(label)))
                  for label in limit if label in self._parts}
        return [[next(shares[label])[:limit[label]] for label in increment] for increment in self._increments]

    @property
    def n_boundaries(self):
        """Number of increments, hence of boundaries."""
        return len(self._increments)

    @property
    def n_features(self):
        """Number of features d of every increment."""
        return self.training(0).n_features

    def classes(self, t):
        """Return the labels of increment t, in order."""
        return np.array(self._increments[t])

    def seen(self, t):
        """Return the labels of all classes seen by boundary t, in order of arrival."""
        return self._seen[t]

    def training(self, t):
        """Return the `Increment` that arrives at boundary t, in random order."""
        rows = np.concatenate(self._arrivals[t])
        return self._rows(generator(self.seed, "arrival", t).permutation(rows), t, "training")

    def selection(self, t):
        """Return the selection rows of all classes seen by boundary t, as they look at time t."""
        return self._held_out("selection", t)

    def scoring(self, t):
        """Return the scoring rows of all classes seen by boundary t, as they look at time t."""
        return self._held_out("scoring", t)

    def _held_out(self, part, t):
        return self._rows(np.concatenate([self._parts[label][part] for label in self._seen[t].tolist()]), t, part)

    def _rows(self, rows, t, part):
        X = self._collection.X[rows].astype(np.float32)
        if self._sensor is not None:
            X = self._sensor(X, t, generator(self.seed, "sensor", part, t)).astype(np.float32)
        if self._treatment is not None:
            X = self._treatment(X)
        return Increment(X, self._collection.y[rows])


def check_labels_of_increments(increments):
    """Return increments as a tuple of tuples of labels, or raise `InputError`."""
    increments = tuple(tuple(increment) for increment in increments)
    if len(increments) < 2:
        raise InputError("increments", "must be at least two", len(increments))
    for t, increment in enumerate(increments):
        fewest = 2 if t == 0 else 1
        if len(increment) < fewest:
            raise InputError("increments", f"must have at least {fewest} classes in increment {t}", list(increment))
        if len(set(increment)) < len(increment):
            raise InputError("increments", f"must name a class once in increment {t}", list(increment))
    if len({isinstance(label, str) for increment in increments for label in increment}) > 1:
        raise InputError("increments", "must hold labels that are all texts or all whole numbers", "both")
    return increments


def split_rows(collection, labels, seed):
    """Return {label: {"training": rows, "selection": rows, "scoring": rows}}, disjoint and seeded.

    Groups are dealt whole: all rows of a group serve one part.
    """
    rows_of = {label: np.flatnonzero(collection.y == label) for label in labels}
    for label, rows in rows_of.items():
        if len(rows) < FEWEST_ROWS:
            raise InputError("increments", f"must name classes with at least {FEWEST_ROWS} rows",
                             f"{label!r} with {len(rows)}")
    if collection.groups is None:
        parts = {label: _split_class(generator(seed, "split", label).permutation(rows))
                 for label, rows in rows_of.items()}
    else:
        parts = _split_groups(collection, rows_of, generator(seed, "split"))
    for label in labels:
        for part, most in MOST_ROWS.items():
            parts[label][part] = parts[label][part][:most]
    return parts


def _split_class(rows):
    held = max(1, round(SHARES["scoring"] * len(rows)))
    return {"scoring": rows[:held], "selection": rows[held:2 * held], "training": rows[2 * held:]}


def _split_groups(collection, rows_of, rng):
    used = np.concatenate(list(rows_of.values()))
    groups, index, sizes = np.unique(collection.groups[used], return_inverse=True, return_counts=True)
    wanted = np.array(list(SHARES.values()))
    of_row = np.full(len(collection.y), -1)
    for _ in range(GROUP_DRAWS):
        missing = wanted * len(used)
        part_of_group = np.empty(len(groups), dtype=int)
        for group in rng.permutation(len(groups)):
            part_of_group[group] = np.argmax(missing / wanted)
            missing[part_of_group[group]] -= sizes[group]
        of_row[used] = part_of_group[index]
        parts = {}
        for label, rows in rows_of.items():
            rows = rng.permutation(rows)
            parts[label] = {name: rows[of_row[rows] == at] for at, name in enumerate(SHARES)}
        if all(len(rows) for part in parts.values() for rows in part.values()):
            return parts
    raise InputError("groups", "must leave each class rows for training, selection and scoring",
                     f"{len(groups)} groups for {len(rows_of)} classes", "leave out the classes with few groups")
