"""A device at work: predictions, evaluation on labelled rows, outcomes that come late, and going back by hand."""

from dataclasses import dataclass, replace
from datetime import UTC, datetime

import numpy as np

from hyperforecast.checks import InputError
from hyperforecast.device.folder import DeviceFolder
from hyperforecast.increments import check_labels_kind
from hyperforecast.learning import CHUNK_ROWS, HeadTrainer, class_probabilities, predict_codes


@dataclass(frozen=True)
class Prediction:
    """What the head makes of rows.

    Attributes
    ----------
    classes : ndarray of shape (C,)
    labels : ndarray of shape (n,)
        The most probable class of each row.
    probabilities : ndarray of shape (n, C), float64
    """

    classes: np.ndarray
    labels: np.ndarray
    probabilities: np.ndarray


@dataclass(frozen=True)
class Evaluation:
    """How a head does on labelled rows.

    Attributes
    ----------
    classes : ndarray of shape (C,)
        The classes known.
    confusion : ndarray of shape (C, C), int64
        Rows of each class (first axis) that were taken for each class (second axis).
    unknown : dict of label to int
        Rows of classes that are not known; they count in nothing else.
    """

    classes: np.ndarray
    confusion: np.ndarray
    unknown: dict

    @property
    def rows(self):
        """Rows of each class, (C,)."""
        return self.confusion.sum(axis=1)

    @property
    def accuracies(self):
        """Accuracy on each class's rows, (C,); NaN for a class without."""
        with np.errstate(invalid="ignore"):
            return np.diag(self.confusion) / self.rows

    def mean(self, labels=None):
        """Return the mean of the accuracies over the classes in `labels` (None: all) that have rows; None if none."""
        chosen = self.rows > 0
        if labels is not None:
            chosen &= np.array([label in labels for label in self.classes.tolist()], bool)
        return float(self.accuracies[chosen].mean()) if chosen.any() else None

    def by_class(self):
        """Return a JSON-able dict for each class with rows: class, rows, accuracy, and what it was taken for."""
        told = []
        for code in np.flatnonzero(self.rows):
            taken = self.confusion[code].copy()
            taken[code] = 0
            places = np.argsort(-taken, kind="stable")[:3]
            told.append({
                "class": self.classes[code].item(), "rows": int(self.rows[code]),
                "accuracy": float(self.accuracies[code]),
                "taken_for": [{"class": self.classes[one].item(), "rows": int(taken[one])}
                              for one in places if taken[one]]})
        return told

    def as_dict(self):
        """Return a JSON-able dict."""
        return {"rows": int(self.rows.sum()), "accuracy": self.mean(), "by_class": self.by_class(),
                "classes": self.classes.tolist(), "confusion": self.confusion.tolist(),
                "unknown_classes": [{"class": label, "rows": rows} for label, rows in self.unknown.items()]}


def predict(carryover, X, *, trainer=None):
    """Return the `Prediction` of a `Carryover` for feature rows X (n, d)."""
    trainer = HeadTrainer() if trainer is None else trainer
    probabilities = np.empty((len(X), len(carryover.classes)))
    codes = np.empty(len(X), np.int64)
    for start in range(0, len(X), CHUNK_ROWS):
        Z = carryover.standardized(X[start:start + CHUNK_ROWS])
        probabilities[start:start + CHUNK_ROWS] = class_probabilities(trainer, carryover.head, Z)
        codes[start:start + CHUNK_ROWS] = predict_codes(trainer, carryover.head, Z)
    return Prediction(carryover.classes, carryover.classes[codes], probabilities)


def evaluate(carryover, increment, *, trainer=None):
    """Return the `Evaluation` of a `Carryover` on the labelled rows of an `Increment`.

    Raises
    ------
    InputError
        If the labels are of another kind than the device's, or none of them is known.
    """
    check_labels_kind(increment.y, carryover.classes)
    trainer = HeadTrainer() if trainer is None else trainer
    place = {label: code for code, label in enumerate(carryover.classes.tolist())}
    labels, codes, count = np.unique(increment.y, return_inverse=True, return_counts=True)
    known = np.array([place.get(label, -1) for label in labels.tolist()], np.int64)
    if (known < 0).all():
        raise InputError("y", "must hold a class that the device knows", ", ".join(map(repr, labels.tolist()[:3])))
    n_classes = len(carryover.classes)
    confusion = np.zeros((n_classes, n_classes), np.int64)
    y = known[codes]
    for start in range(0, len(y), CHUNK_ROWS):
        rows = np.flatnonzero(y[start:start + CHUNK_ROWS] >= 0) + start
        taken = predict_codes(trainer, carryover.head, carryover.standardized(increment.X[rows]))
        np.add.at(confusion, (y[rows], taken), 1)
    unknown = {label: int(n) for label, n, code in zip(labels.tolist(), count, known) if code < 0}
    return Evaluation(carryover.classes, confusion, unknown)


def against_forecast(evaluation, history, number):
    """Return what update `number` of a history was expected to achieve beside what an `Evaluation` shows.

    A JSON-able dict: `update`, `updates_later` (how many were kept since), and for "old", "new" and "all" classes the
    accuracy (null without rows), its forecast (null without one) and whether the accuracy lies `within`, `below` or
    `above` the forecast's interval. New are the classes that update brought, or those that came again if it brought
    none; classes of later updates count in nothing.

    Raises
    ------
    InputError
        If the history tells of no such update, or it was not kept.
    """
    entry = _kept_entry(history, number)
    later = [one for one in history if one["number"] > number and _stands(one)]
    new = set(entry["classes_new"] or entry["classes_again"])
    others = {label for one in later for label in one["classes_new"]} - new
    old = set(evaluation.classes.tolist()) - new - others
    told = {"update": number, "updates_later": len(later)}
    for name, labels in (("old", old), ("new", new), ("all", old | new)):
        accuracy, expected = evaluation.mean(labels), entry["expected"] and entry["expected"][name]
        verdict = None
        if accuracy is not None and expected:
            verdict = "below" if accuracy < expected["low"] else "above" if accuracy > expected["high"] else "within"
        told[name] = {"accuracy": accuracy, "expected": expected, "verdict": verdict}
    return told


def record_outcome(folder, increment, number, *, trainer=None):
    """Store labelled rows' accuracies as an outcome of the past update `number`; return (Evaluation, outcome).

    The entry of that update gets it in its list `outcomes`: time, rows, `old`, `new` and `all` as `against_forecast`
    tells them, `updates_later`, and `by_class`. They are those of the generation that the update left, if the folder
    still holds it, and else of the current one, some updates later.

    Parameters
    ----------
    folder : DeviceFolder
    increment : Increment
    number : int

    Raises
    ------
    InputError
        If the update is not in the history, was not kept, or the rows do not fit.
    """
    with folder.locked():
        current = folder.read()
        _kept_entry(current.history, number)
        left = _left_by(folder, current, number)
        evaluation = evaluate(left.carryover, increment, trainer=trainer)
        told = against_forecast(evaluation, left.history, number)
        outcome = {
            "time": _now(), "rows": int(evaluation.rows.sum()), "updates_later": told["updates_later"],
            **{name: told[name]["accuracy"] for name in ("old", "new", "all")},
            "by_class": [{name: one[name] for name in ("class", "rows", "accuracy")} for one in evaluation.by_class()]}
        history = [{**one, "outcomes": [*one.get("outcomes", []), outcome]} if one["number"] == number else one
                   for one in current.history]
        folder.store(current.carryover, history, current.care, in_place=True)
    return evaluation, told


def keep_acceptance(folder, increment):
    """Let the device carry an `Increment` as its acceptance set (None: carry none); return the generation's number.

    Every update is checked on it from now on, by the rules of `update`. It replaces the one before.

    Raises
    ------
    InputError
        If the rows do not fit the device, or none is of a known class.
    """
    with folder.locked():
        current = folder.read()
        if increment is not None:
            evaluate(current.carryover, increment)
        care = replace(current.care, acceptance=increment)
        care = care.with_step("acceptance set" if increment is not None else "no acceptance set", current.history,
                              rows=0 if increment is None else len(increment))
        return folder.store(current.carryover, current.history, care, in_place=True)


def roll_back(folder, *, because=None):
    """Go back by hand to what the device carried in the generation before; return the new `Generation`.

    It is a generation of its own: the history stays, the updates that were undone get `undone`, the time, and the step
    is written down. What was undone is the generation before now, so that going back once more brings it back. Floors,
    the acceptance set and the pinned forecaster stay as they are; only where classes had been merged, renamed or
    retired since they, too, go back. A damaged generation is passed over and removed.

    Raises
    ------
    InputError
        If there is nothing to go back to.
    """
    with folder.locked():
        before = folder.before()
        if before is None:
            raise InputError(folder.path, "must hold an intact generation before the current one", "none before it")
        try:
            current = folder.read()
        except InputError:
            current = None
        # Of a damaged generation nothing is believed, not even its history.
        history, care = (before if current is None else current).history, (before if current is None else current).care
        classes = before.carryover.classes.tolist()
        if current is not None and current.carryover.classes.tolist()[:len(classes)] != classes:
            care = replace(before.care, steps=care.steps, pin=care.pin)
        # The extractor belongs to what was learned from it.
        care = replace(care, extractor=before.care.extractor, sketch=before.care.sketch)
        known = {one["number"] for one in before.history if _stands(one)}
        undone = [one["number"] for one in history if _stands(one) and one["number"] not in known]
        again = [one["number"] for one in history if one.get("undone") and one["number"] in known]
        history = [{**one, "undone": _now()} if one["number"] in undone
                   else {key: value for key, value in one.items() if key != "undone"} if one["number"] in again
                   else one for one in history]
        care = care.with_step("rolled back", history, to_generation=before.number, undone=undone, again=again,
                              **({} if because is None else {"because": because}))
        folder.store(before.carryover, history, care, in_place=current is None)
        return folder.read()


def _stands(entry):
    """Whether an update of the history was kept, and not undone by hand since."""
    return entry["kept"] and not entry.get("undone")


def _kept_entry(history, number):
    entry = next((one for one in history if one["number"] == number), None)
    if entry is None or not _stands(entry):
        kept = ", ".join(str(one["number"]) for one in history[-8:] if _stands(one))
        why = "of which the history does not tell" if entry is None else "undone" if entry["kept"] else "rolled back"
        raise InputError("update", f"must be one that was kept ({kept})", f"{number}, {why}")
    return entry


def _left_by(folder, current, number):
    """The generation in which update `number` is the last that stands, the current one if there is none."""
    for generation in (current, folder.before()):
        standing = [one["number"] for one in generation.history if _stands(one)] if generation is not None else []
        if standing and standing[-1] == number:
            return generation
    return current


def _now():
    return datetime.now(UTC).isoformat(timespec="seconds")
