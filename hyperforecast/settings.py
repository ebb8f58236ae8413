"""What the user fixes (`Plan`), what is chosen at each boundary (`Settings`), and their ranges.

Scale-free coordinates express settings relative to a boundary's own scales
(curvature, steps, rows), which carries over between data sets better than raw values.
"""

import re
from dataclasses import asdict, dataclass, replace

import numpy as np

from hyperforecast.checks import InputError, check_choice, check_keys, check_number, check_whole

METHODS = ("ewc", "lwf", "icarl", "wa")
REHEARSAL_METHODS = ("icarl", "wa")
# Parts of a plan that hold for one update as well as for another; None is no limit.
UPDATE_LIMITS = ("time_limit", "working_memory")

# Ranges of every policy, search and design; all are covered on a logarithmic scale.
LEARNING_RATES = (1e-5, 1.0)
REGULARIZATIONS = {"ewc": (1e-2, 1e6), "lwf": (1e-3, 1e3), "icarl": (1e-3, 1e3), "wa": (1e-3, 1e3)}
KEPT_PER_CLASS = (1, 80)


@dataclass(frozen=True)
class Settings:
    """The settings of one boundary.

    Parameters
    ----------
    learning_rate : float in [1e-5, 1]
        Of stochastic gradient descent with momentum 0.9, on standardized features.
    regularization : float
        EWC: factor lambda of the Fisher penalty, in [1e-2, 1e6]. LwF, iCaRL, WA: weight of the
        distillation loss beside the cross-entropy, in [1e-3, 1e3].
    kept_per_class : int in [1, 80], or None
        Exemplars that every class holds at most from this boundary on; None for the methods that train
        without exemplars (EWC, LwF).
    """

    learning_rate: float
    regularization: float
    kept_per_class: int | None = None

    def checked(self, method):
        """Return these settings, as Python's own numbers, if they are valid for `method`, else raise `InputError`."""
        rate = check_number("learning_rate", self.learning_rate, low=LEARNING_RATES[0], high=LEARNING_RATES[1])
        low, high = REGULARIZATIONS[method]
        strength = check_number("regularization", self.regularization, low=low, high=high)
        kept = self.kept_per_class
        if method in REHEARSAL_METHODS:
            kept = check_whole("kept_per_class", kept, low=KEPT_PER_CLASS[0], high=KEPT_PER_CLASS[1])
        elif kept is not None:
            raise InputError("kept_per_class", f"must be None: {method} trains without exemplars", kept)
        return Settings(rate, strength, kept)

    def as_dict(self):
        """Return the settings as a JSON-able dict, without the ones that do not apply."""
        return {name: value for name, value in asdict(self).items() if value is not None}


@dataclass(frozen=True)
class Plan:
    """What the user fixes for all boundaries.

    Parameters
    ----------
    method : {"ewc", "lwf", "icarl", "wa"}
    hidden_units : int
        Width of the head's hidden layer; 0 is a linear head.
    passes : int
        Passes over the training rows at each boundary.
    batch_size : int
    memory_limit : int or str
        Most exemplars held in all, check rows included; or bytes, as "2 MB" (10^6) or "512 KiB" (2^10).
    time_limit : float in [0.001, 1e7], or None
        Seconds that an update may take; passes are planned to fit, see `hyperforecast.device.limits`.
    working_memory : str or None
        Bytes that an update may hold at once, as "200 MB": increment, carryover and all that is made of them, beside
        Python and its libraries.
    """

    method: str = "wa"
    hidden_units: int = 64
    passes: int = 10
    batch_size: int = 32
    memory_limit: int | str = 2000
    time_limit: float | None = None
    working_memory: str | None = None

    def checked(self):
        """Return this plan, with Python's own numbers, if it is valid, else raise `InputError`."""
        limit = self.memory_limit
        if isinstance(limit, str):
            parse_bytes("memory_limit", limit)
        else:
            limit = check_whole("memory_limit", limit, low=1)
        return Plan(
            method=check_choice("method", self.method, METHODS),
            hidden_units=check_whole("hidden_units", self.hidden_units, low=0, high=4096),
            passes=check_whole("passes", self.passes, low=1, high=10_000),
            batch_size=check_whole("batch_size", self.batch_size, low=1, high=65_536), memory_limit=limit,
            time_limit=self.time_limit if self.time_limit is None else
            check_number("time_limit", self.time_limit, low=1e-3, high=1e7), working_memory=self._working_memory())

    def _working_memory(self):
        text = self.working_memory
        if text is not None:
            if not isinstance(text, str):
                raise InputError("working_memory", 'must be bytes such as "200 MB"', repr(text))
            parse_bytes("working_memory", text)
        return text

    @property
    def working_bytes(self):
        """Bytes that an update may hold at once, infinite without a limit."""
        return np.inf if self.working_memory is None else parse_bytes("working_memory", self.working_memory)

    def without_limits(self):
        """Return the plan without the limits that may change from update to update."""
        return replace(self, **dict.fromkeys(UPDATE_LIMITS))

    def memory_rows(self, n_features):
        """Return how many rows of `n_features` float32 numbers (and a label of 8 bytes) the memory limit holds."""
        if isinstance(self.memory_limit, str):
            return parse_bytes("memory_limit", self.memory_limit) // (4 * n_features + 8)
        return self.memory_limit

    def rows_per_class(self, n_features, n_classes):
        """Return the rows that each of `n_classes` may hold; `InputError` if it is less than one."""
        rows = self.memory_rows(n_features) // n_classes
        if rows < 1:
            raise InputError("memory_limit", f"must hold at least one exemplar for each of {n_classes} classes",
                             repr(self.memory_limit), "raise it")
        return rows

    @property
    def rehearses(self):
        """Whether the method trains on exemplars."""
        return self.method in REHEARSAL_METHODS

    def as_dict(self):
        """Return the plan as a JSON-able dict, without the limits that are not set."""
        return {name: value for name, value in asdict(self).items() if value is not None}


UNITS = {"b": 1, "kb": 10**3, "mb": 10**6, "gb": 10**9, "kib": 2**10, "mib": 2**20, "gib": 2**30}


def parse_bytes(name, text):
    """Return the bytes that a text such as "2 MB" or "512 KiB" names; `name` is what errors call it."""
    match = re.fullmatch(r"\s*([0-9]{1,15}(?:\.[0-9]{1,15})?)\s*([A-Za-z]+)\s*", text)
    if not match or match[2].lower() not in UNITS or float(match[1]) * UNITS[match[2].lower()] < 1:
        exemplars = "a number of exemplars, or of " if name == "memory_limit" else ""
        raise InputError(name, f'must be {exemplars}bytes such as "2 MB" or "512 KiB"', repr(text))
    return int(float(match[1]) * UNITS[match[2].lower()])


class SettingsBox:
    """The box of settings open at one boundary, mapped to the unit cube on a logarithmic scale.

    Parameters
    ----------
    method : str
    most_kept : int
        Exemplars per class that the memory allows at this boundary; caps `kept_per_class`.
    """

    def __init__(self, method, most_kept=KEPT_PER_CLASS[1]):
        self.method, self.most_kept = method, min(most_kept, KEPT_PER_CLASS[1])
        self.names = ("learning_rate", "regularization")
        bounds = [LEARNING_RATES, REGULARIZATIONS[method]]
        if method in REHEARSAL_METHODS:
            self.names += ("kept_per_class",)
            # The half steps at both ends give the extreme whole numbers their fair share.
            bounds.append((KEPT_PER_CLASS[0] - 0.5, self.most_kept + 0.5))
        self._low, high = np.log(np.array(bounds, dtype=np.float64).T)
        self._span = high - self._low

    @property
    def n_dimensions(self):
        """Number of settings that are open."""
        return len(self.names)

    def from_unit(self, points):
        """Return the list of `Settings` at the unit-cube `points` of shape (n, n_dimensions)."""
        values = np.exp(self._low + np.clip(points, 0.0, 1.0) * self._span)
        # Six digits keep the value inside its range and its JSON short.
        numbers = [[float(f"{value:.6g}") for value in column] for column in values[:, :2].T.tolist()]
        kept = [None] * len(values)
        if self.n_dimensions == 3:
            kept = np.clip(np.round(values[:, 2]), KEPT_PER_CLASS[0], self.most_kept).astype(int).tolist()
        return [Settings(*one) for one in zip(*numbers, kept)]

    def to_unit(self, settings):
        """Return the (n, n_dimensions) unit-cube points of a list of `Settings`, clipped to the box."""
        values = np.array([[getattr(one, name) for name in self.names] for one in settings], dtype=np.float64)
        return np.clip((np.log(values.reshape(-1, len(self.names))) - self._low) / self._span, 0.0, 1.0)


def completed(given, base, method):
    """Return checked `Settings`: those that the dict `given` names, the others as in `base`."""
    check_keys("settings", given, SettingsBox(method).names)
    return replace(base, **given).checked(method)


COORDINATES = (
    "log_learning_rate", "log_regularization", "log_kept_per_class", "log_steps", "exemplar_share",
    "step_on_new", "step_on_exemplars", "travel", "travel_on_new", "anchor_step", "anchor_balance", "anchor_travel",
    "stability",
)
# The scales that `scale_free` reads from a boundary's descriptors.
SCALES = ("curvature_new", "curvature_exemplars", "anchor_curvature", "rows", "classes_old", "passes", "batch_size")


def scale_free(settings, scales):
    """Return settings in coordinates relative to a boundary's own scales, shape (n, len(COORDINATES)).

    Parameters
    ----------
    settings : list of Settings
    scales : dict of str to float
        The descriptors named in `SCALES`; NaN makes the coordinates that need it NaN.

    Notes
    -----
    All but `exemplar_share` are decimal logarithms. With learning rate a, regularization r, curvature c of the new
    rows' loss, curvature e of the exemplars' loss, curvature k of the anchor at regularization 1 and s steps:
    `step_on_new` a c and `step_on_exemplars` a e (gradient descent with momentum b is stable below 2 (1 + b)),
    `travel` a s, `travel_on_new` a s c, `anchor_step` a r k, `anchor_balance` r k / c, `anchor_travel` a s r k,
    `stability` a (c + r k). `exemplar_share` is the share of exemplars among the training rows.
    """
    rate = np.array([one.learning_rate for one in settings], dtype=np.float64)
    strength = np.array([one.regularization for one in settings], dtype=np.float64)
    kept = np.array([one.kept_per_class or 0 for one in settings], dtype=np.float64)
    new, exemplars, anchor = (scales[name] for name in ("curvature_new", "curvature_exemplars", "anchor_curvature"))
    old_rows = kept * scales["classes_old"]
    rows = scales["rows"] + old_rows
    steps = scales["passes"] * np.ceil(rows / scales["batch_size"])
    with np.errstate(all="ignore"):
        logs = np.log10(np.stack([
            rate, strength, kept, steps, np.ones_like(rate), rate * new, rate * exemplars, rate * steps,
            rate * steps * new, rate * strength * anchor, strength * anchor / new, rate * steps * strength * anchor,
            rate * (new + strength * anchor),
        ], axis=1))
    logs[:, COORDINATES.index("exemplar_share")] = old_rows / rows
    logs[~np.isfinite(logs)] = np.nan
    return logs
