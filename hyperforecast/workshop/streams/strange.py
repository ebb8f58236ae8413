"""Streams made strange: faults such as people make with their data, to test what is told of them."""

from dataclasses import dataclass

import numpy as np

from hyperforecast.checks import InputError, check_choice
from hyperforecast.increments import Increment

KINDS = ("thousandfold", "shifted", "one feature", "twice at once", "twice later", "shuffled increment",
         "shuffled stream", "single rows", "thousand classes")
FACTOR = 1000.0
# As Celsius comes as Fahrenheit, in standard deviations over all features.
SHIFT = 32.0
# Of the thousand classes: their ends in four increments.
ENDS = (0, 100, 400, 700, 1000)


@dataclass(frozen=True)
class StrangeStream:
    """Increments with a fault, and the numbers of the boundaries where it shows.

    Attributes
    ----------
    increments : list of Increment
    boundaries : tuple of int
        Empty where the stream has no place for such a fault.
    """

    increments: list
    boundaries: tuple


def make_strange(increments, kind, rng):
    """Return a `StrangeStream` of a list of increments.

    Parameters
    ----------
    increments : list of Increment
        Two at least; they are left as they are.
    kind : str
        One of `KINDS`. A random later increment comes with its features times a thousand, shifted, or with one of them
        times a thousand; with one of its classes under two names, or with an old class under a new name; with its
        labels shuffled, or those of the whole stream; with a single row of each class. A thousand classes are Gaussian
        ones with as many features.
    rng : numpy Generator
    """
    check_choice("kind", kind, KINDS)
    if len(increments) < 2:
        raise InputError("increments", "must be at least two", len(increments))
    later = range(1, len(increments))
    if kind == "thousand classes":
        return StrangeStream(_thousand_classes(increments[0].n_features, rng), (1, 2, 3))
    if kind == "shuffled stream":
        X = np.concatenate([one.X for one in increments])[rng.permutation(sum(map(len, increments)))]
        ends = np.cumsum([len(one) for one in increments])[:-1]
        return StrangeStream([Increment(part, one.y) for part, one in zip(np.split(X, ends), increments)], tuple(later))
    places = [t for t in later if kind != "shuffled increment" or len(np.unique(increments[t].y)) > 1]
    if not places:
        return StrangeStream(list(increments), ())
    t = int(rng.choice(places))
    changed = list(increments)
    _FAULTS[kind](changed, t, rng)
    return StrangeStream(changed, (t,))


def _thousandfold(increments, t, rng):
    increments[t] = Increment(increments[t].X * np.float32(FACTOR), increments[t].y)


def _shifted(increments, t, rng):
    increments[t] = Increment(increments[t].X + np.float32(SHIFT * increments[0].X.std()), increments[t].y)


def _one_feature(increments, t, rng):
    deviation = increments[0].X.std(axis=0)
    X = increments[t].X.copy()
    # One that varies: a thousand times nothing is nothing.
    X[:, rng.choice(np.flatnonzero(deviation >= np.median(deviation)))] *= np.float32(FACTOR)
    increments[t] = Increment(X, increments[t].y)


def _twice_at_once(increments, t, rng):
    y = increments[t].y
    rows = rng.permutation(np.flatnonzero(y == rng.choice(np.unique(y))))
    new = y.astype(object)
    new[rows[:len(rows) // 2]] = _new_label(increments)
    increments[t] = Increment(increments[t].X, np.array(new.tolist()))


def _twice_later(increments, t, rng):
    s = int(rng.integers(t))
    y = increments[s].y
    rows = rng.permutation(np.flatnonzero(y == rng.choice(np.unique(y))))
    moved, stays = rows[:len(rows) // 2], np.setdiff1d(np.arange(len(y)), rows[:len(rows) // 2])
    labels = [*increments[t].y.tolist(), *[_new_label(increments)] * len(moved)]
    increments[t] = Increment(np.concatenate([increments[t].X, increments[s].X[moved]]), np.array(labels))
    increments[s] = Increment(increments[s].X[stays], y[stays])


def _shuffled(increments, t, rng):
    increments[t] = Increment(increments[t].X, rng.permutation(increments[t].y))


def _single_rows(increments, t, rng):
    first = np.unique(increments[t].y, return_index=True)[1]
    increments[t] = Increment(increments[t].X[first], increments[t].y[first])


_FAULTS = {"thousandfold": _thousandfold, "shifted": _shifted, "one feature": _one_feature,
           "twice at once": _twice_at_once, "twice later": _twice_later, "shuffled increment": _shuffled,
           "single rows": _single_rows}


def _new_label(increments):
    labels = np.unique(np.concatenate([one.y for one in increments])).tolist()
    return f"{labels[-1]} again" if isinstance(labels[-1], str) else labels[-1] + 1


def _thousand_classes(n_features, rng):
    centers = rng.normal(0, rng.uniform(1, 4), (ENDS[-1], n_features))
    rows, increments = int(rng.integers(4, 13)), []
    for start, end in zip(ENDS, ENDS[1:]):
        y = np.repeat(np.arange(start, end), rows)
        increments.append(Increment((centers[y] + rng.normal(size=(len(y), n_features))).astype(np.float32), y))
    return increments
