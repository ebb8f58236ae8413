"""A device folder from a head that was trained elsewhere: linear, or with one hidden layer of rectified units.

The weights lie in a .npz file, under names of our own or as a state dict of PyTorch's layers has them; X (n, d) are
features, scores are logits, one for each class:

    scores = max((X - center) / scale @ hidden_weights + hidden_bias, 0) @ output_weights + output_bias

    hidden_weights   (d, H), left out for a linear head          or  *.weight (H, d), of the first of two layers
    hidden_bias      (H,)                                        or  *.bias (H,)
    output_weights   (H, C), or (d, C) for a linear head         or  *.weight (C, H) or (C, d), of the last layer
    output_bias      (C,)                                        or  *.bias (C,)
    center, scale    (d,), left out where the features were not scaled
    classes          (C,), labels in the order of the outputs; left out, the labels of the exemplars, sorted

An output layer with a single unit is that of the second of two classes, under a logistic function.
"""

import re
from dataclasses import dataclass, replace
from pathlib import Path

import numpy as np

from hyperforecast.checks import InputError
from hyperforecast.device.care import Care
from hyperforecast.device.extractor import check_extractor_name, sampled, sketch_of
from hyperforecast.forecasting import opening_settings
from hyperforecast.increments import check_labels, check_labels_kind, read_arrays
from hyperforecast.learning import Attempt, HeadTrainer, close_boundary, open_boundary

OWN_NAMES = ("hidden_weights", "hidden_bias", "output_weights", "output_bias")
OTHER_NAMES = ("center", "scale", "classes")
LAYER = re.compile(r"(.*\.)?(weight|bias)")


@dataclass(frozen=True)
class Weights:
    """A head that was trained elsewhere.

    Attributes
    ----------
    head : dict of str to ndarray
        `output_weights` (H or d, C) and `output_bias` (1, C), for a hidden layer `hidden_weights` (d, H) and
        `hidden_bias` (1, H); float32.
    center, scale : ndarrays of shape (d,), float32, or None
    classes : ndarray of shape (C,), or None
    """

    head: dict
    center: np.ndarray | None = None
    scale: np.ndarray | None = None
    classes: np.ndarray | None = None

    @property
    def hidden_units(self):
        """Width of the hidden layer, 0 for none."""
        return self.head["hidden_weights"].shape[1] if "hidden_weights" in self.head else 0

    @property
    def n_features(self):
        """Number of features d."""
        return len(self.head["hidden_weights" if self.hidden_units else "output_weights"])


def read_weights(path):
    """Return the `Weights` in a .npz file, every part checked; `InputError` if one is missing or does not fit."""
    path = Path(path)
    arrays = read_arrays(path)
    layers = [name for name in arrays if LAYER.fullmatch(name)]
    given = [name for name in arrays if name in OWN_NAMES]
    strange = sorted(set(arrays) - set(layers) - set(given) - set(OTHER_NAMES))
    if strange or bool(layers) == bool(given):
        raise InputError(path, f"must hold {', '.join(OWN_NAMES)}, or weight and bias of one or two layers, and "
                         "perhaps " + ", ".join(OTHER_NAMES), ", ".join(strange or arrays) or "nothing")
    own = _own_names(path, arrays, layers) if layers else {name: arrays[name] for name in given}
    if set(own) not in (set(OWN_NAMES), set(OWN_NAMES[2:])):
        raise InputError(path, "must hold weights and biases of the output layer, and of a hidden one or of none",
                         ", ".join(own))
    head = {name: _numbers(path, name, array) for name, array in own.items()}
    head = {name: array.reshape(1, -1) if name.endswith("bias") else array for name, array in head.items()}
    if head["output_weights"].ndim == 2 and head["output_weights"].shape[1] == 1:
        # The logit of the second class; that of the first is zero.
        for name in ("output_weights", "output_bias"):
            head[name] = np.hstack([np.zeros_like(head[name]), head[name]])
    width = head["hidden_bias"].shape[1] if "hidden_bias" in head else len(head["output_weights"])
    n_features = len(head.get("hidden_weights", head["output_weights"]))
    shapes = {"hidden_weights": (n_features, width), "hidden_bias": (1, width),
              "output_weights": (width, head["output_bias"].shape[1]), "output_bias": head["output_bias"].shape}
    scaling = {name: _numbers(path, name, arrays[name]) for name in ("center", "scale") if name in arrays}
    for name, array in {**head, **scaling}.items():
        wanted = shapes.get(name, (n_features,))
        if array.shape != wanted:
            raise InputError(f"{path} ({name})", f"must have the shape {wanted}, as the others have it", array.shape)
    if len(scaling) == 1 or not (scaling.get("scale", np.ones(1)) > 0).all():
        raise InputError(path, "must hold both center and scale, the scale above zero, or neither", ", ".join(scaling))
    classes = arrays.get("classes")
    if classes is not None:
        classes = check_labels(classes, shapes["output_bias"][1], name=f"{path} (classes)")
        if len(np.unique(classes)) < len(classes):
            raise InputError(f"{path} (classes)", "must name every class once", classes.tolist())
    return Weights(head, scaling.get("center"), scaling.get("scale"), classes)


def adopt_head(folder, weights, increment, *, plan, extractor=None, seed=0):
    """Make a device folder of `Weights` and labelled rows; return the number of its generation, 1.

    The device predicts as the head did (rows beyond 10 standard deviations aside). Of the rows, some of each class are
    held back as check rows, summaries and, for EWC, the weights' importance are computed from the others, and with
    rehearsal as many as the memory limit allows are kept as exemplars. Features are standardized as the head had them,
    or, if it saw them as they are, by these rows, with the weights adapted. For iCaRL the head's own outputs decide
    until the first update, class means from then on.

    Parameters
    ----------
    folder : DeviceFolder
        That of a new device.
    weights : Weights
    increment : Increment
        Some rows of every class: a few hundred in all are better than a few.
    plan : Plan
        Its hidden units must be those of the weights.
    extractor : str, optional
        See `update`.

    Raises
    ------
    InputError
        If the folder is a device's already, or the parts do not fit.
    """
    plan = plan.checked()
    if plan.hidden_units != weights.hidden_units:
        raise InputError("hidden_units", f"must be {weights.hidden_units}, as the weights have", plan.hidden_units)
    if increment.n_features != weights.n_features:
        raise InputError("exemplars", f"must have {weights.n_features} features, as the weights have",
                         increment.n_features)
    classes = np.unique(increment.y) if weights.classes is None else weights.classes
    n_outputs = weights.head["output_bias"].shape[1]
    check_labels_kind(increment.y, classes)
    if len(classes) != n_outputs or set(classes.tolist()) != set(increment.y.tolist()):
        raise InputError("exemplars", f"must hold rows of each of the {n_outputs} classes of the weights, no others",
                         f"{len(np.unique(increment.y))} classes")
    with folder.locked(create=True):
        if folder.numbers():
            raise InputError(folder.path, "must be a new name", "a device's folder", "name another one")
        scaling = None if weights.center is None else (weights.center, weights.scale)
        boundary = open_boundary(plan, None, increment, seed=seed, scaling=scaling)
        order = [classes.tolist().index(label) for label in boundary.classes.tolist()]
        head = {name: np.ascontiguousarray(array[:, order]) if name.startswith("output_") else array
                for name, array in weights.head.items()}
        if scaling is None:
            head = _rescaled(head, boundary.center, boundary.scale)
        settings = opening_settings(plan)
        if plan.rehearses:
            settings = replace(settings, kept_per_class=boundary.most_kept)
        attempt = Attempt(settings, head, diverged=False, operations=0)
        carryover = close_boundary(HeadTrainer(), boundary, attempt, seed=seed)
        name = check_extractor_name(None, extractor, another=False)
        care = Care(extractor=name, sketch=sketch_of(*sampled(boundary)))
        care = care.with_step("adopted", [], rows=len(increment), classes=len(classes))
        return folder.store(carryover, [], care)


def _own_names(path, arrays, layers):
    """Layers of a state dict, in their order, under our own names; PyTorch has weights as (outputs, inputs)."""
    stems = list(dict.fromkeys(LAYER.fullmatch(name)[1] or "" for name in layers))
    if len(stems) > 2 or any(f"{stem}{part}" not in arrays for stem in stems for part in ("weight", "bias")):
        raise InputError(path, "must hold weight and bias of one or two layers", ", ".join(layers))
    named = {}
    for place, stem in zip(("hidden", "output")[-len(stems):], stems):
        named[f"{place}_weights"], named[f"{place}_bias"] = arrays[f"{stem}weight"].T, arrays[f"{stem}bias"]
    return named


def _numbers(path, name, array):
    if array.dtype.kind not in "fiu" or not np.isfinite(array).all() or array.ndim not in (1, 2):
        raise InputError(f"{path} ({name})", "must be a table or list of finite numbers",
                         f"{array.dtype} {array.shape}")
    return array.astype(np.float32)


def _rescaled(head, center, scale):
    """The head of features X as one of (X - center) / scale."""
    layer = "hidden" if "hidden_weights" in head else "output"
    weights = head[f"{layer}_weights"].astype(np.float64)
    bias = head[f"{layer}_bias"] + center.astype(np.float64) @ weights
    return {**head, f"{layer}_weights": (weights * scale[:, None]).astype(np.float32),
            f"{layer}_bias": bias.astype(np.float32)}
