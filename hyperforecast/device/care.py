"""What the person who looks after a device has laid down, beside what the device has learned.

It lies in every generation of the device folder and does not change what is learned, only what is kept.
A *step* is something that was done by hand between updates, a JSON-able dict: `time` (UTC, ISO text), `after_update`
(number of the last update before it, 0 if none), `step` (what was done) and what else there is to tell. Labels stand
in `class`, `from` and `into`.
"""

import re
from dataclasses import dataclass, field, replace
from datetime import UTC, datetime

import numpy as np

from hyperforecast.checks import InputError, check_number, check_whole
from hyperforecast.device.extractor import MOST_FEATURES, Sketch
from hyperforecast.increments import Increment, check_features, check_labels
from hyperforecast.storage import stored_array

# The last steps are kept, older ones dropped.
MOST_STEPS = 1000
CHECKSUM = re.compile("[0-9a-f]{64}")


@dataclass(frozen=True)
class Pin:
    """The forecaster that alone may advise a device; see `hyperforecast.device.pin`.

    Attributes
    ----------
    checksum : str
        SHA-256 of its content, in hexadecimal.
    public_key : str or None
        The key in PEM that its signature, and that of every upgrade, must be made with.
    """

    checksum: str
    public_key: str | None = None


@dataclass(frozen=True)
class Care:
    """What has been laid down for a device.

    Attributes
    ----------
    floors : dict of label to float
        Accuracy, in [0, 1], that an update may not take a class below. A class that is not known now keeps its floor.
    acceptance : Increment or None
        Rows that every update is checked on, never trained on; not counted in the memory limit. They may be of classes
        still to come.
    steps : tuple of dict
        What was done by hand, oldest first.
    pin : Pin or None
    extractor : str or None
        What the user calls the extractor of the features.
    sketch : Sketch or None
        What its features look like; see `hyperforecast.device.extractor`.
    """

    floors: dict = field(default_factory=dict)
    acceptance: Increment | None = None
    steps: tuple = ()
    pin: Pin | None = None
    extractor: str | None = None
    sketch: Sketch | None = None

    def with_step(self, step, history, **told):
        """Return the care with one more step; `history` is that of updates, `told` what there is to tell of it."""
        one = {"time": datetime.now(UTC).isoformat(timespec="seconds"),
               "after_update": history[-1]["number"] if history else 0, "step": step, **told}
        return replace(self, steps=(*self.steps, one)[-MOST_STEPS:])


def step_in_words(step):
    """Return a step in words, but for when it was; checksums by their first digits."""
    told = [f"{key.replace('_', ' ')} {_brief(value)}" for key, value in step.items()
            if key not in ("time", "after_update", "step") and value not in ([], None)]
    return step["step"] + (f" ({'; '.join(told)})" if told else "")


def _brief(value):
    text = ", ".join(map(str, value)) if isinstance(value, list) else str(value)
    return text[:16] if CHECKSUM.fullmatch(text) else text


def care_parts(care):
    """Return (facts, arrays) of a `Care`, to be stored in a bundle."""
    facts = {"floors": [[label, floor] for label, floor in care.floors.items()], "steps": list(care.steps),
             "acceptance_classes": [], "pin": None if care.pin is None else dict(care.pin.__dict__),
             "extractor": care.extractor, "sketch_freedoms": None if care.sketch is None else care.sketch.freedoms}
    arrays = {} if care.sketch is None else {"extractor_sketch": care.sketch.covariance}
    if care.acceptance is not None:
        classes, codes = np.unique(care.acceptance.y, return_inverse=True)
        facts["acceptance_classes"] = classes.tolist()
        arrays |= {"acceptance_X": np.array(care.acceptance.X, np.float32), "acceptance_y": codes.astype(np.int64)}
    return facts, arrays


def care_from(facts, arrays, *, n_features):
    """Return the `Care` of stored parts, every one checked; `InputError` if one is missing or not proper."""
    if not isinstance(facts, dict) or set(facts) != set(care_parts(Care())[0]):
        raise InputError("care", f"must be {', '.join(care_parts(Care())[0])}", "others")
    floors, steps, labels = facts["floors"], facts["steps"], facts["acceptance_classes"]
    if not isinstance(floors, list) or not all(
            isinstance(one, list) and len(one) == 2 and type(one[0]) in (int, str) for one in floors):
        raise InputError("floors", "must be pairs of a label and a number", "others")
    if not isinstance(steps, list) or not all(isinstance(one, dict) and isinstance(one.get("step"), str)
                                              for one in steps):
        raise InputError("steps", "must be a list of steps", "others")
    if not isinstance(labels, list):
        raise InputError("acceptance_classes", "must be a list of labels", "others")
    acceptance = None
    if labels:
        X = stored_array(arrays, "acceptance_X", kinds="f", shape=(None, n_features))
        X = check_features(X, name="acceptance_X")
        codes = stored_array(arrays, "acceptance_y", kinds="i", shape=(len(X),))
        if not ((codes >= 0) & (codes < len(labels))).all():
            raise InputError("acceptance_y", "must hold codes of acceptance_classes", "others")
        acceptance = Increment(X, check_labels(np.array(labels, object), len(labels), name="acceptance_classes")[codes])
    if not isinstance(facts["extractor"], (str, type(None))):
        raise InputError("extractor", "must be a name or null", "others")
    sketch = None
    if facts["sketch_freedoms"] is not None:
        side = min(n_features, MOST_FEATURES)
        sketch = Sketch(stored_array(arrays, "extractor_sketch", kinds="f", shape=(side, side)),
                        check_whole("sketch_freedoms", facts["sketch_freedoms"], low=1))
        if not np.isfinite(sketch.covariance).all():
            raise InputError("extractor_sketch", "must hold finite numbers", "others")
    return Care({label: check_number("floor", floor, low=0, high=1) for label, floor in floors}, acceptance,
                tuple(steps), _pin_from(facts["pin"]), facts["extractor"], sketch)


def _pin_from(facts):
    if facts is None:
        return None
    proper = isinstance(facts, dict) and set(facts) == {"checksum", "public_key"}
    if not proper or not isinstance(facts["checksum"], str) or not CHECKSUM.fullmatch(facts["checksum"]) \
            or not isinstance(facts["public_key"], (str, type(None))):
        raise InputError("pin", "must be a checksum and perhaps a public key", "others")
    return Pin(**facts)
