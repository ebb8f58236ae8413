"""The classes of a device, looked after by hand: listed, given floors, renamed, merged, retired, erased.

Every change is a new generation of the folder and a step in what has been laid down; `roll_back` undoes the last one,
but for an erasure.
"""

import re
from dataclasses import asdict, dataclass, replace

import numpy as np

from hyperforecast.checks import InputError, check_number
from hyperforecast.device.status import FolderNotWritable
from hyperforecast.device.use import evaluate
from hyperforecast.increments import Increment, check_labels
from hyperforecast.learning import HeadTrainer, accuracies, merge_classes, rename_class, without_class

ERASED = "(erased)"
# A row is searched for by its bytes if it holds this many different values.
TELLING_VALUES = 4
# In the history and the steps these hold labels, alone or in a list; other text may have them among its words.
LABEL_KEYS = ("class", "from", "into", "classes_new", "classes_again")
# Text that never speaks of classes.
SILENT_KEYS = ("step", "time", "forecaster", "verdict")


@dataclass(frozen=True)
class ClassStatus:
    """How a class stands.

    Attributes
    ----------
    label : str or int
    learned_rows : int
        Rows it was learned from, all boundaries together.
    exemplars, check_rows, acceptance_rows : int
    accuracy : float or None
        Now, over its check rows and acceptance rows together; None without any.
    best : float or None
        The best accuracy on its check rows after any boundary.
    floor : float or None
    """

    label: object
    learned_rows: int
    exemplars: int
    check_rows: int
    acceptance_rows: int
    accuracy: float | None
    best: float | None
    floor: float | None

    def as_dict(self):
        """Return a JSON-able dict."""
        return asdict(self)


@dataclass(frozen=True)
class Erasure:
    """A class erased, and the search for what might be left of it.

    Attributes
    ----------
    generation : int
        The only generation that the folder holds now.
    rows : int
        Exemplars, check rows and acceptance rows that were erased and then looked for, byte for byte.
    files : int
        Files of the folder that were searched for them and for the name.
    """

    generation: int
    rows: int
    files: int


def class_table(generation, *, trainer=None):
    """Return a `ClassStatus` for each class of a `Generation`, in order of arrival."""
    carryover, care = generation.carryover, generation.care
    trainer = HeadTrainer() if trainer is None else trainer
    n_classes, rows = len(carryover.classes), carryover.check_rows
    count = np.bincount(rows.y, minlength=n_classes)
    hits = np.nan_to_num(accuracies(trainer, carryover.head, rows.Z, rows.y, n_classes)) * count
    accepted = np.zeros(n_classes, np.int64)
    if care.acceptance is not None and np.isin(care.acceptance.y, carryover.classes).any():
        confusion = evaluate(carryover, care.acceptance, trainer=trainer).confusion
        accepted, hits = confusion.sum(axis=1), hits + np.diag(confusion)
    exemplars = np.bincount(carryover.exemplars.y, minlength=n_classes)
    table = []
    for code, label in enumerate(carryover.classes.tolist()):
        judged, best = int(count[code] + accepted[code]), carryover.best_check_accuracy[code]
        table.append(ClassStatus(
            label, int(carryover.summaries.count[code]), int(exemplars[code]), int(count[code]), int(accepted[code]),
            float(hits[code] / judged) if judged else None, None if np.isnan(best) else float(best),
            care.floors.get(label)))
    return table


def set_floor(folder, label, floor):
    """Give a class a floor that updates may not break (0: none); return the number of the new generation.

    Parameters
    ----------
    folder : DeviceFolder
    label : str or int
    floor : float in [0, 1]
        See `update` for the rule.
    """
    check_number("floor", floor, low=0, high=1)
    with folder.locked():
        current = folder.read()
        label = current.carryover.classes[_code(current, label)].item()
        floors = {name: one for name, one in current.care.floors.items() if name != label}
        care = replace(current.care, floors={**floors, label: float(floor)} if floor else floors)
        care = care.with_step("floor", current.history, **{"class": label, "floor": float(floor)})
        return folder.store(current.carryover, current.history, care, in_place=True)


def rename(folder, old, new):
    """Call class `old` by another name, in the history too; return the number of the new generation.

    Raises
    ------
    InputError
        If there is no such class, or `new` is not a proper label or another class's.
    """
    with folder.locked():
        current = folder.read()
        code, classes = _code(current, old), current.carryover.classes
        old, new = classes[code].item(), _label(classes, new)
        check_labels([new], 1, name="new name")
        if new in classes.tolist():
            raise InputError("new name", "must not be that of another class", repr(new), "merge them instead")
        care = _care_renamed(current.care, old, new).with_step("renamed", current.history, **{"from": old, "into": new})
        return folder.store(rename_class(current.carryover, code, new), _mentions(current.history, {old: new}), care)


def merge(folder, label, into, *, trainer=None):
    """Merge class `label` into class `into`, in the history too; return the number of the new generation.

    Exemplars, check rows, summary, outputs and importances are merged as `hyperforecast.learning.merge_classes` says;
    a floor of `label` alone becomes that of `into`.

    Raises
    ------
    InputError
        If there is no such class, or both are the same.
    """
    with folder.locked():
        current = folder.read()
        code, place = _code(current, label), _code(current, into)
        if code == place:
            raise InputError("class", "must be merged into another one", repr(into))
        label, into = (current.carryover.classes[one].item() for one in (code, place))
        carryover = merge_classes(HeadTrainer() if trainer is None else trainer, current.carryover, code, place)
        care = _care_renamed(current.care, label, into)
        care = care.with_step("merged", current.history, **{"from": label, "into": into})
        return folder.store(carryover, _mentions(current.history, {label: into}), care)


def retire(folder, label, *, trainer=None):
    """Let a class go: it is no longer predicted and its exemplars are freed; return the number of the new generation.

    The history still tells of it. Rows of it that arrive later are learned as a new class.
    """
    with folder.locked():
        current = folder.read()
        code = _code(current, label)
        label = current.carryover.classes[code].item()
        carryover = without_class(HeadTrainer() if trainer is None else trainer, current.carryover, code)
        floors = {name: floor for name, floor in current.care.floors.items() if name != label}
        care = replace(current.care, floors=floors).with_step("retired", current.history, **{"class": label})
        return folder.store(carryover, current.history, care)


def erase(folder, label, *, trainer=None):
    """Erase a class, known or retired, and every trace of it in the folder's files; return an `Erasure`.

    Its outputs, exemplars, check rows, acceptance rows, summary and importances go, its name and former names where
    history and steps tell of it, and all generations before. Afterwards every file is searched for the rows and the
    name. What remains is what training drew from all rows together: feature scaling, hidden weights, and the numbers
    in the history. A disk may keep the bytes of files that are gone; that is beyond a program's reach.

    Raises
    ------
    InputError
        If nothing in the folder tells of such a class, or it is the only one.
    FolderNotWritable
        If an older generation cannot be removed; erase again then.
    """
    with folder.locked():
        current, before = folder.read(), folder.before()
        classes = current.carryover.classes
        label = _label(classes, label)
        carryover, known = current.carryover, label in classes.tolist()
        names = _names_of(label, current.care.steps) - set(classes.tolist()) | {label}
        silence = dict.fromkeys(names, ERASED)
        care = replace(current.care, steps=tuple(_mentions(current.care.steps, silence)),
                       floors={name: floor for name, floor in current.care.floors.items() if name not in names})
        history = _mentions(current.history, silence)
        acceptance = current.care.acceptance
        gone = acceptance is not None and np.isin(acceptance.y, list(names))
        told = known or np.any(gone) or label in current.care.floors or history != current.history \
            or care.steps != current.care.steps \
            or before is not None and label in before.carryover.classes.tolist()
        if not told:
            raise InputError("class", "must be one that the folder tells of", repr(label), "see `classes`")
        rows = {row.tobytes() for generation in (current, before) if generation is not None
                for row in _rows_of(generation.carryover, names)}
        if np.any(gone):
            rows |= {row.tobytes() for row in acceptance.X[gone]}
            stays = None if gone.all() else Increment(acceptance.X[~gone], acceptance.y[~gone])
            care = replace(care, acceptance=stays)
        if known:
            code = classes.tolist().index(label)
            carryover = without_class(HeadTrainer() if trainer is None else trainer, carryover, code)
        # A row that another class holds as well is no trace of this one.
        rows -= {row.tobytes() for row in _rows_of(carryover, carryover.classes.tolist())}
        care = care.with_step("erased", history, rows=len(rows))
        generation = folder.store(carryover, history, care, alone=True)
        return Erasure(generation, len(rows), _searched(folder, generation, names, rows))


def _searched(folder, generation, names, rows):
    """Look for traces in every file of the folder; return how many files there are."""
    others = [one for one in folder.numbers() if one != generation]
    files = [path for path in sorted(folder.path.rglob("*")) if path.is_file()]
    contents = {path: path.read_bytes() for path in files}
    # Rows of a few values, such as zeros, turn up by chance.
    telling = [row for row in rows if len(np.unique(np.frombuffer(row, np.float32))) >= TELLING_VALUES]
    holding = [path for path, content in contents.items() if any(row in content for row in telling)]
    now = folder.read()
    silence = dict.fromkeys(names, ERASED)
    mentioned = _mentions(now.history, silence) != now.history or \
        _mentions(now.care.steps, silence) != list(now.care.steps)
    if others or holding or mentioned:
        raise FolderNotWritable(folder.path, "must let go of every trace of the class",
                                ", ".join(map(str, others or [path.name for path in holding] or ["its name"])),
                                "mend the folder's permissions, then erase again")
    return len(files)


def _rows_of(carryover, labels):
    """Yield the rows that a carryover holds of classes, as stored."""
    codes = [code for code, label in enumerate(carryover.classes.tolist()) if label in labels]
    for held in (carryover.exemplars, carryover.check_rows):
        yield from held.Z[np.isin(held.y, codes)]


def _names_of(label, steps):
    """A class's name and the former names of what it holds."""
    names = {label}
    for step in reversed(steps):
        if step["step"] in ("renamed", "merged") and step.get("into") in names:
            names.add(step["from"])
    return names


def _care_renamed(care, old, new):
    floors = dict(care.floors)
    if old in floors:
        floors[new] = max(floors.pop(old), floors.get(new, 0.0))
    acceptance = care.acceptance
    if acceptance is not None:
        labels = [new if label == old else label for label in acceptance.y.tolist()]
        acceptance = Increment(acceptance.X, check_labels(labels, len(labels)))
    return replace(care, floors=floors, acceptance=acceptance)


def _mentions(document, names):
    """Return a JSON-able document with labels replaced: whole ones under LABEL_KEYS, and among the words of text."""
    patterns = [(_pattern(old), str(new)) for old, new in names.items()]

    def change(value, key=None):
        if isinstance(value, dict):
            return {name: value[name] if name in SILENT_KEYS else change(value[name], name) for name in value}
        if isinstance(value, (list, tuple)):
            changed = [change(one, key) for one in value]
            return list(dict.fromkeys(changed)) if key in ("classes_new", "classes_again") else changed
        if key in LABEL_KEYS:
            return names.get(value, value)
        if isinstance(value, str):
            for pattern, new in patterns:
                value = pattern.sub(lambda match: new, value)
        return value

    return change(document)


def _pattern(label):
    """How a label stands among words; a whole number only after the word class."""
    text = str(label)
    left = r"(?<!\w)" if re.match(r"\w", text) else ""
    right = r"(?!\w)" if re.match(r"\w", text[-1]) else ""
    if not isinstance(label, str):
        left, right = "(?<=class )", r"(?![\w.])"
    return re.compile(left + re.escape(text) + right)


def _label(classes, label):
    """The label as one of the kind that the device has; text that is no whole number stays text, and fits nothing."""
    if classes.dtype.kind == "U":
        return str(label)
    try:
        return int(label)
    except ValueError:
        raise InputError("class", "must be a whole number, as the device's are", repr(label)) from None


def _code(generation, label):
    """The code of a class that is known, or an `InputError`."""
    classes = generation.carryover.classes.tolist()
    label = _label(generation.carryover.classes, label)
    if label not in classes:
        raise InputError("class", "must be one that the device knows", repr(label),
                         f"it knows {', '.join(map(str, classes[:20]))}")
    return classes.index(label)
