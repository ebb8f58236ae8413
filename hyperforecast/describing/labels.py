"""Doubts about the labels of an increment, before anything is learned: names that look alike, rows of another class.

Both are for a person to look at; nothing is dropped.
"""

import re
import unicodedata
from dataclasses import dataclass

import numpy as np

from hyperforecast.describing.view import squared_distances
from hyperforecast.learning import standardize
from hyperforecast.learning.boundary import fit_scaling

# Kernel ridge regression: squared lengths of the Gaussian kernel over the median squared distance, and the ridge.
LENGTHS = (0.5, 2.0)
RIDGE = 0.5
# Rows regressed together; their kernel matrix is inverted.
MOST_TOGETHER = 1000
# Rows of a class below which nothing is said about it.
FEWEST_ROWS = 4
# Tried for the steepness of the softmax over regressed values, and for the share of wrong labels.
STEEPNESS = np.geomspace(0.5, 10, 20)
# Exponent of the prior of the steepness: where overlap and wrong labels explain rows alike, it takes wrong labels.
STEEPER = 5
WRONG_SHARES = (0.0002, 0.0005, 0.001, 0.002, 0.005, 0.01, 0.02, 0.03, 0.05, 0.08, 0.12, 0.2)
# A label is suspicious if it is more likely wrong than right.
SUSPICIOUS = 0.5
# Letters of a name from which on one letter of difference is a likely slip.
FEWEST_LETTERS = 5


@dataclass(frozen=True)
class SuspiciousLabels:
    """Rows whose labels are more likely wrong than right, the most suspicious first.

    Attributes
    ----------
    rows : ndarray of shape (m,), int64
        Places in the increment, from 0.
    given, likelier : ndarrays of shape (m,)
        Their labels, and the class that each looks like most.
    probability : ndarray of shape (m,), float64
        That the label is wrong.
    looked_at : int
        Rows that were judged.
    """

    rows: np.ndarray
    given: np.ndarray
    likelier: np.ndarray
    probability: np.ndarray
    looked_at: int

    def __len__(self):
        return len(self.rows)

    def as_dict(self):
        """Return a JSON-able dict."""
        columns = (self.rows, self.given, self.likelier, self.probability)
        rows = zip(*map(np.ndarray.tolist, columns))
        return {"looked_at": self.looked_at,
                "rows": [dict(zip(("row", "label", "likelier", "probability"), one)) for one in rows]}


def suspicious_labels(increment, carryover=None, *, most_rows=None, seed=0):
    """Return the `SuspiciousLabels` of an increment.

    Parameters
    ----------
    increment : Increment
    carryover : Carryover, optional
        Its exemplars and check rows stand beside the increment, labels trusted, and its scaling is used.
    most_rows : int, optional
        Look at no more than this many rows of the increment, drawn at random.
    seed : int
        Draws them, and deals them into groups of at most 1000 that are judged each by itself.

    Notes
    -----
    Gaussian-kernel ridge regression on the labels, +1 for a row's class and -1 for others, predicts each row from the
    others in closed form: with A = K + r I, the left-out value is y_i - (A^-1 y)_i / (A^-1)_ii (the leave-one-out
    residual of linear smoothers, Hastie, Tibshirani & Friedman 2009, section 7.10, from memory). A softmax over the
    values, of steepness s, gives p_c, the probability of class c given the row. Let a share e of the labels be wrong,
    uniformly over the K - 1 other classes: the label y is seen with probability (1 - e) p_y + e (1 - p_y) / (K - 1).
    s, e and the kernel's length maximize the likelihood times s^5, a prior that decides where overlap of the classes
    and wrong labels explain the rows alike; the probability of a wrong label is then the second term's share (Bayes).
    A set without wrong labels has an e near zero and raises few doubts, however hard its classes are to tell apart.
    """
    rng = np.random.default_rng([seed, 0x6C61])
    chosen = rng.permutation(len(increment))[:most_rows]
    X = increment.X[chosen]
    Z, trusted = (standardize(X, *fit_scaling(X)), None) if carryover is None else _beside(carryover, X)
    # By hand, as is the median: numpy's own import numpy.ma, a good part of the time that advice may take.
    given = increment.y[chosen].tolist()
    known = [] if carryover is None else carryover.classes.tolist()
    classes = np.array([*known, *sorted(set(given).difference(known))], increment.y.dtype.kind)
    place = {label: code for code, label in enumerate(classes.tolist())}
    y = np.array([place[label] for label in given], np.int64)
    values = np.full((len(LENGTHS), len(y), len(classes)), np.nan)
    groups = -(-len(y) // MOST_TOGETHER)
    for k in range(groups if len(classes) > 1 else 0):
        rows = np.arange(k, len(y), groups)
        values[:, rows] = _left_out(Z[rows], y[rows], trusted, len(classes))
    judged = np.flatnonzero(np.isfinite(values).all(axis=(0, 2)))
    if not len(judged):
        return SuspiciousLabels(judged, classes[judged], classes[judged], np.empty(0), 0)
    y, values = y[judged], values[:, judged]
    fits = [_fitted(one, y) for one in values]
    k = max(range(len(fits)), key=lambda k: fits[k][0])
    values, wrong = values[k], fits[k][1]
    found = np.flatnonzero(wrong > SUSPICIOUS)
    found = found[np.argsort(-wrong[found], kind="stable")]
    values[found, y[found]] = -np.inf
    return SuspiciousLabels(chosen[judged[found]], classes[y[found]], classes[values[found].argmax(axis=1)],
                            wrong[found], len(judged))


def _beside(carryover, X):
    """Standardized rows, and as many that the carryover holds, at most half a group's: the first of every class."""
    held = carryover.exemplars.joined(carryover.check_rows)
    return carryover.standardized(X), held.cut(max(min(len(X), MOST_TOGETHER // 2) // len(carryover.classes), 1))


def _left_out(Z, y, trusted, n_classes):
    """What the others say of each row, (lengths, n, n_classes); not finite where nothing can be said."""
    n_rows = len(y)
    if trusted is not None:
        Z, y = np.concatenate([Z, trusted.Z]), np.concatenate([y, trusted.y])
    values = np.full((len(LENGTHS), n_rows, n_classes), np.nan)
    distances = squared_distances(Z, Z)
    middle = distances.size // 2
    median = np.partition(distances, middle, axis=None)[middle]
    if not median > 0:
        return values
    wanted = (y[:, None] == np.arange(n_classes)) * np.float32(2) - np.float32(1)
    for k, length in enumerate(LENGTHS):
        kernel = np.exp(distances / np.float32(-length * median))
        kernel[np.diag_indices_from(kernel)] += np.float32(RIDGE)
        inverse = np.linalg.inv(kernel)
        values[k] = (wanted - inverse @ wanted / np.diag(inverse)[:, None])[:n_rows]
    values[:, np.bincount(y, minlength=n_classes)[y[:n_rows]] < FEWEST_ROWS] = np.nan
    return values


def _fitted(values, y):
    """The best log-posterior over steepness and share of wrong labels, and each label's probability to be wrong."""
    values = values - values.max(axis=1, keepdims=True)
    share = np.array(WRONG_SHARES)[:, None]
    best, wrong = -np.inf, None
    for steepness in STEEPNESS:
        p = np.exp(steepness * values)
        own = p[np.arange(len(y)), y] / p.sum(axis=1)
        by_mistake = share * (1 - own) / (values.shape[1] - 1)
        seen = (1 - share) * own + by_mistake
        posterior = np.log(seen).sum(axis=1) + STEEPER * np.log(steepness)
        k = posterior.argmax()
        if posterior[k] > best:
            best, wrong = posterior[k], by_mistake[k] / seen[k]
    return best, wrong


def similar_names(labels, known=()):
    """Return pairs (a, b) of different labels that look like one name: b from `labels`, a from either.

    Two texts look alike if they differ in case, spaces or punctuation alone; or, with the same digits and at least 5
    letters, by one letter more, less, other or exchanged with its neighbour. Common practice; whole numbers never do.

    Parameters
    ----------
    labels : sequence of str or int
    known : sequence of str or int
        Labels that were there before; pairs among them are left out.
    """
    labels = [label for label in dict.fromkeys(labels) if isinstance(label, str) and label not in known]
    plain = {label: _plain(label) for label in [*known, *labels] if isinstance(label, str)}
    earlier = [label for label in plain if label not in set(labels)]
    pairs = []
    for label in labels:
        pairs += [(other, label) for other in earlier if _alike(plain[other], plain[label])]
        earlier.append(label)
    return pairs


def _plain(name):
    """A name without case, spaces and punctuation."""
    return re.sub(r"[\W_]+", "", unicodedata.normalize("NFKC", name).casefold())


def _alike(a, b):
    if a == b:
        return bool(a)
    if len(a) > len(b):
        a, b = b, a
    if len(b) - len(a) > 1 or len(a) < FEWEST_LETTERS or re.sub(r"\D", "", a) != re.sub(r"\D", "", b):
        return False
    start = next((k for k in range(len(a)) if a[k] != b[k]), len(a))
    if len(a) < len(b):
        return a[start:] == b[start + 1:]
    exchanged = a[start:start + 2] == b[start:start + 2][::-1] and a[start + 2:] == b[start + 2:]
    return exchanged or a[start + 1:] == b[start + 1:]
