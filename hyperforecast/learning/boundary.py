"""What a device carries between boundaries, and a boundary: carryover and increment, nothing trained yet."""

from dataclasses import dataclass

import numpy as np

from hyperforecast.increments import HELD_BYTES, check_labels_kind
from hyperforecast.learning.exemplars import Exemplars
from hyperforecast.rows import chunk_rows, column_moments
from hyperforecast.settings import KEPT_PER_CLASS, Plan

# Rows of each class held back from training, for descriptors and checks.
MOST_CHECK_ROWS = 8
# Exemplars are chosen among so many bytes of rows, where the rows are not held in memory.
CANDIDATE_BYTES = 2**24
# Standardized features beyond this many standard deviations are cut to it.
LARGEST_Z = 10.0


@dataclass(frozen=True)
class ClassSummaries:
    """First and second moments of every class when it was last learned, in standardized features.

    Attributes
    ----------
    count : ndarray of shape (C,), int64
    mean, variance : ndarrays of shape (C, d), float32
    """

    count: np.ndarray
    mean: np.ndarray
    variance: np.ndarray

    def merged(self, Z, y, n_classes):
        """Return the summaries after rows Z (n, d) with codes y (n,) have arrived; counts pool, moments too."""
        n_features = Z.shape[1]
        count = np.zeros(n_classes, np.int64)
        mean, variance = (np.zeros((n_classes, n_features), np.float32) for _ in range(2))
        n_old = len(self.count)
        count[:n_old], mean[:n_old], variance[:n_old] = self.count, self.mean, self.variance
        for code in present_codes(y):
            rows = Z[y == code].astype(np.float64)
            n, m, v = len(rows), rows.mean(axis=0), rows.var(axis=0)
            total = count[code] + n
            share = n / total
            shift = m - mean[code]
            variance[code] = (1 - share) * variance[code] + share * v + share * (1 - share) * shift**2
            mean[code] += share * shift
            count[code] = total
        return ClassSummaries(count, mean, variance)


@dataclass(frozen=True)
class Carryover:
    """What a device keeps between boundaries.

    Attributes
    ----------
    plan : Plan
    classes : ndarray of shape (C,), int64 or text
        Labels in order of arrival; a class's place is its code.
    center, scale : ndarrays of shape (d,), float32
        Feature scaling, fixed at the first increment.
    head : dict of str to ndarray
        The trainer's own arrays.
    exemplars : Exemplars
        Rows to train on; empty for the methods without rehearsal.
    check_rows : Exemplars
        Rows never trained on, for descriptors and checks; counted in the memory limit.
    summaries : ClassSummaries
    best_check_accuracy : ndarray of shape (C,), float64
        Per class, the best accuracy on its check rows after any boundary; NaN where there were none.
    n_boundaries : int
        Boundaries learned so far.
    """

    plan: Plan
    classes: np.ndarray
    center: np.ndarray
    scale: np.ndarray
    head: dict
    exemplars: Exemplars
    check_rows: Exemplars
    summaries: ClassSummaries
    best_check_accuracy: np.ndarray
    n_boundaries: int

    @property
    def n_features(self):
        """Number of features d."""
        return len(self.center)

    def standardized(self, X):
        """Return features X (n, d) as this device's head sees them, float32."""
        return standardize(X, self.center, self.scale)


def present_codes(y):
    """Return the class codes that occur in y (n,), sorted, int64.

    As `np.unique`, which would import numpy.ma: a fifth of what numpy itself takes to import.
    """
    return np.flatnonzero(np.bincount(y))


def standardize(X, center, scale):
    """Return (X - center) / scale, cut to +-10, as float32."""
    # Overflow means far beyond the cut.
    with np.errstate(over="ignore"):
        Z = np.subtract(X, center, dtype=np.float32)
        Z /= scale
    return np.clip(Z, -LARGEST_Z, LARGEST_Z, out=Z)


class StandardizedRows:
    """Standardized rows (n, d) that are read and made when asked for; they look like an array.

    Parameters
    ----------
    X : table of shape (m, d)
    places : ndarray of shape (n,), int
        Which rows of X.
    center, scale : ndarrays of shape (d,)
    """

    ndim, dtype = 2, np.dtype(np.float32)

    def __init__(self, X, places, center, scale):
        self.X, self.places, self.center, self.scale = X, places, center, scale
        self.shape = (len(places), X.shape[1])

    def __len__(self):
        return len(self.places)

    def __getitem__(self, rows):
        """Return an array of the rows in a slice, a mask or an array of indices of any shape."""
        return standardize(self.X[self.places[rows]], self.center, self.scale)

    def __array__(self, dtype=None, copy=None):
        return np.asarray(self[:], dtype)

    def take(self, places, axis=0):
        """Return the rows at `places`, an array of indices of any shape."""
        return self[places]


def fit_scaling(X, *, held=True):
    """Return (center, scale) of shape (d,), float32: mean and standard deviation of every feature.

    In little memory if the rows X are not to be held as a whole.

    A feature that hardly varies gets a tenth of the root mean square deviation over all features instead of its
    own, so that its later changes are not blown up; where nothing varies the scale is 1.
    """
    if held:
        center, deviation = X.mean(axis=0, dtype=np.float64), X.std(axis=0, dtype=np.float64)
    else:
        center, variance = column_moments(X)
        deviation = np.sqrt(variance)
    typical = np.sqrt(np.mean(deviation**2))
    scale = np.maximum(deviation, 0.1 * typical) if typical > 1e-30 else np.ones_like(deviation)
    return center.astype(np.float32), scale.astype(np.float32)


@dataclass(frozen=True)
class Boundary:
    """The moment an increment has arrived and nothing has been trained on it yet.

    Attributes
    ----------
    plan : Plan
    carryover : Carryover or None
        None at the first increment.
    classes : ndarray of shape (C,)
        Old classes in order of arrival, then the new ones.
    n_old : int
        Classes seen before.
    center, scale : ndarrays of shape (d,)
    Z, y : ndarrays of shape (n, d) and (n,)
        Standardized rows to train on, and their class codes. Where the rows are not held in memory Z is a
        `StandardizedRows`, to be worked through in `hyperforecast.rows.chunks`, or to take rows of.
    held_back : Exemplars
        Rows of the increment held back from training.
    check_per_class, most_kept : int
        Check rows and exemplars that the memory allows each class from now on.
    """

    plan: Plan
    carryover: Carryover | None
    classes: np.ndarray
    n_old: int
    center: np.ndarray
    scale: np.ndarray
    Z: np.ndarray
    y: np.ndarray
    held_back: Exemplars
    check_per_class: int
    most_kept: int

    @property
    def n_classes(self):
        """Classes seen, the increment's included."""
        return len(self.classes)

    @property
    def n_features(self):
        """Number of features d."""
        return len(self.center)

    @property
    def number(self):
        """Number of this boundary, from 0."""
        return 0 if self.carryover is None else self.carryover.n_boundaries

    @property
    def arrived(self):
        """Codes of the classes in the increment, sorted, int64."""
        return present_codes(self.y)

    @property
    def old_exemplars(self):
        """Exemplars of old classes, as carried."""
        return Exemplars.none(self.n_features) if self.carryover is None else self.carryover.exemplars

    @property
    def old_check_rows(self):
        """Check rows of old classes, as carried."""
        return Exemplars.none(self.n_features) if self.carryover is None else self.carryover.check_rows

    def candidates(self):
        """Return (Z, y), arrays of the rows that exemplars are chosen among: all, or as many as memory should hold.

        These are spread evenly over each class's rows, and enough to choose from what may be kept.
        """
        if isinstance(self.Z, np.ndarray):
            return self.Z, self.y
        order = np.argsort(self.y, kind="stable")
        _, start, count = np.unique(self.y[order], return_index=True, return_counts=True)
        most = max(chunk_rows(self.Z, CANDIDATE_BYTES) // len(count), 2 * self.most_kept)
        picked = [np.unique(np.linspace(first, first + n - 1, min(most, n)).astype(np.int64))
                  for first, n in zip(start, count)]
        rows = np.sort(order[np.concatenate(picked)])
        return self.Z[rows], self.y[rows]

    def check_set(self):
        """Return the rows held back from training, of old classes (cut to what the memory allows) and of new ones."""
        old = self.old_check_rows.cut(self.check_per_class)
        return old.without(self.held_back.y).joined(self.held_back)


def boundary_seed(seed, carryover):
    """Return the seed of the boundary that follows a carryover (None: of the first), under a learner's own seed."""
    return seed + 7919 * (0 if carryover is None else carryover.n_boundaries)


def class_limits(plan, n_features, n_classes):
    """Return (check rows, exemplars) that the plan's memory allows each of `n_classes`; `InputError` if less than one."""
    rows = plan.rows_per_class(n_features, n_classes)
    check_rows = min(MOST_CHECK_ROWS, rows // 4 if plan.rehearses else rows)
    return check_rows, min(rows - check_rows, KEPT_PER_CLASS[1])


def open_boundary(plan, carryover, increment, *, seed=0, most_rows=None, held=None, scaling=None):
    """Return the `Boundary` at which `increment` meets `carryover` (None: it is the first increment).

    A few rows of each class, at most 8 and at most a fifth, drawn with `seed`, are held back from training. With
    `most_rows` (at least one for each class) the same share of every class, that many rows at most, is trained on.
    At the first increment features are scaled by the increment itself, or by `scaling`, (center, scale).
    Unless the standardized rows are to be `held` in memory they are made whenever they are asked for; by default they
    are held where the increment is, or is small.

    Raises
    ------
    InputError
        If the labels are of another kind than before, or the memory limit is too small.
    """
    # Without the counts it would import numpy.ma, which takes long.
    labels, _ = np.unique(increment.y, return_counts=True)
    old = labels[:0] if carryover is None else carryover.classes
    check_labels_kind(labels, old)
    is_new = ~np.isin(labels, old)
    classes = np.concatenate([old, labels[is_new]])
    place = {label: code for code, label in enumerate(classes.tolist())}
    y = np.array([place[label] for label in labels.tolist()], np.int64)[np.searchsorted(labels, increment.y)]
    check_per_class, most_kept = class_limits(plan, increment.n_features, len(classes))
    held = is_held(increment.X) if held is None else held
    if carryover is not None:
        scaling = carryover.center, carryover.scale
    center, scale = fit_scaling(increment.X, held=held) if scaling is None else scaling
    training, checked, rank = _hold_back(y, check_per_class, most_rows, np.random.default_rng([seed, 0x6368]))
    Z = StandardizedRows(increment.X, training, center, scale)
    held_back = Exemplars(StandardizedRows(increment.X, checked, center, scale)[:], y[checked], rank)
    return Boundary(
        plan=plan, carryover=carryover, classes=classes, n_old=len(old), center=center, scale=scale,
        Z=Z[:] if held else Z, y=y[training], held_back=held_back, check_per_class=check_per_class, most_kept=most_kept,
    )


def is_held(X):
    """Whether the rows X of an increment are held in memory; those of a file or of a large mapping are not."""
    return isinstance(X, np.ndarray) and not (isinstance(X, np.memmap) and X.nbytes > HELD_BYTES)


def _hold_back(y, per_class, most_rows, rng):
    """Return the rows to train on in rising order, those held back, and the ranks of these."""
    order = rng.permutation(len(y))
    # Of small whole numbers numpy sorts many times faster.
    order = order[np.argsort(y.astype(np.min_scalar_type(y.max()))[order], kind="stable")]
    count = np.bincount(y)
    count = count[count > 0]
    rank = np.arange(len(y)) - np.repeat(np.cumsum(count) - count, count)
    per_class = np.minimum(per_class, count // 5)
    held = rank < np.repeat(per_class, count)
    by_rank = np.argsort(rank[held], kind="stable")
    rows = order[held][by_rank]
    trains = ~held
    rest = count - per_class
    if most_rows is not None and most_rows < rest.sum():
        # One row of each class, and the same share of its others.
        share = max(most_rows - len(count), 0) / max(rest.sum() - len(count), 1)
        trains &= rank < np.repeat(per_class + 1 + ((rest - 1) * share).astype(np.int64), count)
    training = np.zeros(len(y), bool)
    training[order[trains]] = True
    return np.flatnonzero(training), rows, rank[held][by_rank]
