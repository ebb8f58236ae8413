"""Whether to update now: does it pay to collect more rows first, does an update pay at all, is it time to retrain.

Records hold one increment of each boundary, so that the models know rows only as they differ between streams. What more
rows would bring is therefore forecast by a power law on the error that simple classifiers make on this very increment.
"""

from dataclasses import dataclass

import numpy as np

# The least gain in accuracy on all classes that counts as worth waiting for, or worth an update.
LEAST_GAIN = 0.02
# Error on new classes falls by n^-DECAY with n rows of a class. Learning curves of many kinds follow power laws with
# exponents from 0.1 to 0.5 (Hestness et al. 2017, "Deep learning scaling is predictable, empirically", from memory);
# this one fits the gains in `bench_streams/bench_waiting.py` on the languages and on the digits alike.
DECAY = 0.25
# The forecast reaches no further than this many times the rows of a typical class.
FARTHEST = 2.0
# Shares of the rows to collect at which the curve is told.
STAGES = (0.0, 0.25, 0.5, 0.75, 1.0)
# Classes for each hidden unit from which on a wider head does clearly better, see `bench_streams/bench_room.py`.
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
    classes, C all classes. Class c then errs by E_c ~ n_c^-DECAY, mean E, and with n rows it gains
    E_c (1 - (n / n_c)^-DECAY) / C of the accuracy on all classes. Scarce classes are brought to m rows if that is
    enough; else all classes to twice m.
    """
    values = [advice.descriptors.get(name, np.nan) for name in ("nearest_mean_accuracy_all", "ridge_accuracy_new")]
    known = [value for value in values if np.isfinite(value)]
    start = advice.expected_all.value
    if not counts or not known:
        return Waiting(least_gain, {}, [0], [start])
    held = np.array(list(counts.values()), dtype=np.float64)
    typical = float(np.median(held))
    shares = held**-DECAY
    errors = (1 - np.mean(known)) * shares / shares.mean()
    n_classes = advice.descriptors["classes_old"] + len(counts)

    def gained(added):
        return float((errors * (1 - (1 + added / held) ** -DECAY)).sum() / n_classes)

    for target in (typical, FARTHEST * typical):
        added = np.maximum(np.ceil(target - held), 0)
        if added.any() and gained(added) >= least_gain:
            break
    needed = {label: int(count) for label, count in zip(counts, added) if count}
    stages = [np.round(added * share) for share in STAGES]
    return Waiting(least_gain, needed, [int(one.sum()) for one in stages],
                   [min(start + gained(one), 1.0) for one in stages])


@dataclass(frozen=True)
class NothingNew:
    """What to expect of an update with an increment that brings no new class.

    Attributes
    ----------
    least_gain : float
    now : float or None
        Accuracy on check rows of old classes before the update; None without check rows.
    expected : Expected
        Accuracy on all classes after it.
    """

    least_gain: float
    now: float | None
    expected: object

    @property
    def pays(self):
        """Whether an update is expected to pay; None where the accuracy now is not known."""
        return None if self.now is None else self.expected.value - self.now >= self.least_gain

    def as_dict(self):
        """Return a JSON-able dict."""
        return {"pays": self.pays, "now": self.now, "expected": self.expected.as_dict(), "least_gain": self.least_gain}

    def __str__(self):
        told = f"No new class: {self.expected.value:.3f} expected after the update"
        if self.now is None:
            return f"{told}; what is reached now is not known, no check rows are held"
        verdict = "the update pays" if self.pays else "the update can wait"
        return f"{told}, {self.now:.3f} reached now on check rows: {verdict}"


def nothing_new(advice, *, least_gain=LEAST_GAIN):
    """Return the `NothingNew` of an increment that brings no new class."""
    now = advice.descriptors.get("check_accuracy_old", np.nan)
    return NothingNew(least_gain, float(now) if np.isfinite(now) else None, advice.expected_all)


def retraining_signs(advice):
    """Return why it is time to retrain at base, a list of lines; empty where nothing speaks for it.

    Features drift: a descriptor in `DRIFT` lies above the range of the records. Room: there are `CROWDED` times as many
    classes as hidden units. That is a rule from measurements; forecasts for other widths of a head that exists are of
    no use here, they tell a tenth of the difference.
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
