"""Whether to update now: does it pay to collect more rows first, does an update pay at all, is it time to retrain.

Records hold one increment of each boundary, so that the models know rows only as they differ between streams. What more
rows would bring is therefore forecast by a power law on the error that simple classifiers make on this very increment.
"""

from dataclasses import dataclass

import numpy as np

from hyperforecast.describing.view import median

# The least gain in accuracy on all classes that counts as worth waiting for, or worth an update.
LEAST_GAIN = 0.02
# Error on new classes falls by n^-DECAY with n rows of a class. Learning curves of many kinds follow power laws with
# exponents from 0.1 to 0.5 (Hestness et al. 2017, "Deep learning scaling is predictable, empirically", from memory).
DECAY = 0.25
# How much of that gain in simple classifiers a head makes its own, by method: least squares over the boundaries of
# `bench_streams/bench_waiting.py`, whose table judges each source by the others' factors.
GAINED = {"ewc": 0.6, "lwf": 0.3, "icarl": 0.6, "wa": 1.4}
# The forecast reaches no further than this many times the rows of a typical class.
FARTHEST = 2.0
# Shares of the rows to collect at which the curve is told.
STAGES = (0.0, 0.25, 0.5, 0.75, 1.0)
# Classes for each hidden unit from which on a wider head is taken to do better: a plain rule that no committed result
# backs yet; `bench_streams/bench_room.py` measures it.
CROWDED = 2.0
# Descriptors of the features themselves, and what it means that they lie above all that the records hold.
DRIFT = {
    "shift_of_returning": "classes that came again have moved",
    "cut_share": "many values lie far outside the range of the first increment",
    "energy": "features are far larger than in the first increment",
    "frechet_distance": "rows lie far from all that was learned before",
}


@dataclass(frozen=True)
class Waiting:
    """What it would bring to collect more rows before updating.

    Attributes
    ----------
    least_gain : float
        The gain in accuracy that counts.
    needed : dict of label to int
        Rows to collect of each class; empty where nothing is to be won.
    rows : list of int
        Rows collected in all, along the curve; the last is the sum of `needed`.
    expected : list of float
        Accuracy on all classes to expect with them.
    """

    least_gain: float
    needed: dict
    rows: list
    expected: list

    @property
    def gain(self):
        """What all the rows needed bring."""
        return self.expected[-1] - self.expected[0]

    @property
    def pays(self):
        """Whether waiting pays."""
        return bool(self.needed) and self.gain >= self.least_gain

    def as_dict(self):
        """Return a JSON-able dict; no label is a key."""
        return {"pays": self.pays, "gain": self.gain, "least_gain": self.least_gain,
                "needed": [{"class": label, "rows": count} for label, count in self.needed.items()],
                "curve": [{"rows": rows, "expected": value} for rows, value in zip(self.rows, self.expected)]}

    def __str__(self):
        if not self.pays:
            return f"Update now: collecting more rows first is expected to bring {self.gain:+.3f}"
        counts = sorted(set(self.needed.values()))
        few = len(self.needed) <= 3
        what = " and ".join(f"{count} more rows of {label}" for label, count in self.needed.items()) if few else (
            f"{counts[0]}" + (f" to {counts[-1]}" if counts[1:] else "")
            + f" more rows of each of the {len(self.needed)} new classes")
        return (f"Not yet: collect about {what} first; expected to bring {self.gain:+.3f} "
                f"({self.expected[-1]:.3f} on all classes)")


def await_rows(advice, counts, *, least_gain=LEAST_GAIN):
    """Return the `Waiting` of an increment.

    Parameters
    ----------
    advice : Advice
    counts : dict of label to int
        Rows of each new class in the increment.
    least_gain : float

    Notes
    -----
    Let E be the error of leave-one-out classifiers on the increment's rows with the old classes at hand (from the mean
    of the descriptors `nearest_mean_accuracy_all` and `ridge_accuracy_new`), m the median of the counts n_c of the new
    classes, C all classes, g the method's part in `GAINED`. Class c then errs by E_c ~ n_c^-DECAY, mean E, and with n
    rows it brings g E_c (1 - (n / n_c)^-DECAY) / C of the accuracy on all classes. Scarce classes are brought to m rows
    if that is enough; else all classes to twice m.
    """
    start, error = advice.expected_all.value, _error(advice)
    if not counts or error is None:
        return Waiting(least_gain, {}, [0], [start])
    held = np.array(list(counts.values()), dtype=np.float64)
    typical = float(median(held))
    errors, part = _by_class(error, held), GAINED[advice.forecaster.method]
    n_classes = advice.descriptors["classes_old"] + len(counts)

    def gained(added):
        return float(part * (errors * (1 - (1 + added / held) ** -DECAY)).sum() / n_classes)

    for target in (typical, FARTHEST * typical):
        added = np.maximum(np.ceil(target - held), 0)
        if added.any() and gained(added) >= least_gain:
            break
    needed = {label: int(count) for label, count in zip(counts, added) if count}
    stages = [np.round(added * share) for share in STAGES]
    return Waiting(least_gain, needed, [int(one.sum()) for one in stages],
                   [min(start + gained(one), 1.0) for one in stages])


def _error(advice):
    """Mean error of the leave-one-out classifiers on the increment's rows; None if it cannot be had."""
    values = [advice.descriptors.get(name, np.nan) for name in ("nearest_mean_accuracy_all", "ridge_accuracy_new")]
    known = [value for value in values if np.isfinite(value)]
    return 1 - float(np.mean(known)) if known else None


def _by_class(error, held):
    """Errors of classes with `held` rows each, (C,), whose mean is `error`."""
    shares = held**-DECAY
    return error * shares / shares.mean()


@dataclass(frozen=True)
class NothingNew:
    """What to expect of an update with an increment that brings no new class.

    Attributes
    ----------
    least_gain : float
    now : float or None
        Accuracy on check rows of old classes before the update; None without check rows.
    expected : Expected
        Accuracy on all classes after it. Records hold no such boundary, so that its level is rough: the difference to
        `now` tells nothing.
    gain : float or None
        What the new rows of classes known before are expected to bring; None if that cannot be had.
    rehearses : bool
        Whether the method keeps exemplars.
    """

    least_gain: float
    now: float | None
    expected: object
    gain: float | None
    rehearses: bool

    @property
    def pays(self):
        """Whether an update is expected to pay; None where the gain cannot be had."""
        return None if self.gain is None else self.gain >= self.least_gain

    def as_dict(self):
        """Return a JSON-able dict."""
        return {"pays": self.pays, "gain": self.gain, "least_gain": self.least_gain, "now": self.now,
                "expected": self.expected.as_dict()}

    def __str__(self):
        now = "" if self.now is None else f"{self.now:.3f} is reached now on check rows; "
        if self.gain is None:
            return f"No new class: {now}what an update would bring cannot be told"
        verdict = "the update pays" if self.pays else "the update can wait"
        caution = "" if self.rehearses else "; without exemplars, such updates gained little where they were measured"
        return f"No new class: {now}the new rows are expected to bring {self.gain:+.3f}: {verdict}{caution}"


def nothing_new(advice, counts, seen, *, least_gain=LEAST_GAIN):
    """Return the `NothingNew` of an increment that brings no new class.

    Parameters
    ----------
    advice : Advice
    counts, seen : sequences of int
        Rows of each class of the increment, in it and learned before.
    least_gain : float

    Notes
    -----
    By the power law of `await_rows`: a class that errs by E_c with the n_c rows of the increment errs by
    E_c (s_c / n_c)^-DECAY with the s_c rows seen, and gains the share g (1 - (1 + n_c / s_c)^-DECAY) of that.
    """
    now, error = advice.descriptors.get("check_accuracy_old", np.nan), _error(advice)
    gain = None
    if error is not None:
        held, before = (np.array(list(values), dtype=np.float64) for values in (counts, seen))
        errors = np.minimum(_by_class(error, held) * (before / held) ** -DECAY, 1)
        errors *= GAINED[advice.forecaster.method]
        gain = float((errors * (1 - (1 + held / before) ** -DECAY)).sum() / advice.descriptors["classes_old"])
    return NothingNew(least_gain, float(now) if np.isfinite(now) else None, advice.expected_all, gain,
                      "kept_per_class" in advice.box.names)


def retraining_signs(advice):
    """Return why it is time to retrain at base, a list of lines; empty where nothing speaks for it.

    Features drift: a descriptor in `DRIFT` lies above the range of the records. Room: there are `CROWDED` times as many
    classes as hidden units. That is a plain rule; forecasts for other widths of a head that exists tell too little of
    the difference to be of use here.
    """
    ranges = advice.forecaster.familiarity
    highest = dict(zip(ranges.names.tolist(), ranges.high.tolist()))
    lines = []
    for name, meaning in DRIFT.items():
        value, high = advice.descriptors.get(name, np.nan), highest.get(name, np.nan)
        if value > high:
            lines.append(f"{meaning}: {name} is {value:.3g}, the records go up to {high:.3g}")
    units = advice.descriptors.get("hidden_units", np.nan)
    classes = advice.descriptors["classes_old"] + advice.descriptors["classes_new"]
    if 0 < units <= classes / CROWDED:
        lines.append(f"the head has run out of room: {classes:.0f} classes for {units:.0f} hidden units")
    return lines
