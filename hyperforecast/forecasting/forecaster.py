"""A fitted forecaster: expected outcomes of settings at a boundary, evaluated with numpy alone.

A forecaster file is a bundle (`hyperforecast.storage`) of kind "forecaster": trees, networks, familiarity data and
facts.
"""

import os
from dataclasses import dataclass
from importlib import import_module
from pathlib import Path

import numpy as np

from hyperforecast.checks import InputError, check_choice, check_number, check_whole
from hyperforecast.forecasting.familiarity import Familiarity
from hyperforecast.forecasting.networks import NetworkEnsemble
from hyperforecast.forecasting.trees import TreeEnsemble
from hyperforecast.settings import (
    COORDINATES, METHODS, REHEARSAL_METHODS, SCALES, Settings, SettingsBox, scale_free,
)
from hyperforecast.storage import (
    LARGEST_ARRAY, Bundle, bundle_checksum, read_bundle_file, read_bytes, stored_array, write_bundle_file,
)

KIND = "forecaster"
VERSION = 2
# What is forecast, in the order of the arrays: accuracy on old and on new classes.
OUTCOMES = ("old", "new")
RANGES = ("old", "new", "all")
MODELS = (*OUTCOMES, "shortfall", "diverged", "later", *(f"spread_{name}" for name in RANGES))
# A second model of the shortfall; forecasters of version 1 have none.
NETWORK = "shortfall_network"
RANKINGS = ("outcome", "direct")
CONSTANTS = ("raw", "scale_free")
SMALLEST = 1e-300


@dataclass(frozen=True)
class Expected:
    """An expected accuracy and the 90% interval around it, arrays of one shape or floats in [0, 1]."""

    value: np.ndarray
    low: np.ndarray
    high: np.ndarray

    def at(self, place):
        """Return the `Expected` of one candidate, as floats."""
        return Expected(float(self.value[place]), float(self.low[place]), float(self.high[place]))

    def as_dict(self):
        """Return a JSON-able dict."""
        return {"value": float(self.value), "low": float(self.low), "high": float(self.high)}


@dataclass(frozen=True)
class Constant:
    """The best fixed choice over the records.

    Attributes
    ----------
    kind : {"raw", "scale_free"}
        Whether the numbers are settings, or settings relative to the boundary's scales: learning rate times
        curvature of the new rows, and regularization times curvature of the anchor over curvature of the new rows.
    learning_rate, regularization : float
    kept_per_class : int or None
    """

    kind: str
    learning_rate: float
    regularization: float
    kept_per_class: int | None

    def settings(self, descriptors, box):
        """Return the constant as `Settings` at a boundary, cut to the box; None if it needs a scale that is missing."""
        rate, strength = self.learning_rate, self.regularization
        if self.kind == "scale_free":
            # A head that has diverged may have no curvature at all.
            with np.errstate(all="ignore"):
                new, anchor = (np.float64(descriptors.get(name, np.nan))
                               for name in ("curvature_new", "anchor_curvature"))
                rate, strength = float(rate / new), float(strength * new / anchor)
            if not (np.isfinite(rate) and np.isfinite(strength) and rate > 0 and strength > 0):
                return None
        return box.from_unit(box.to_unit([Settings(rate, strength, self.kept_per_class)]))[0]

    def as_dict(self):
        """Return a JSON-able dict."""
        return dict(self.__dict__)


@dataclass(frozen=True)
class Forecaster:
    """Models of outcomes at boundaries of one method.

    Attributes
    ----------
    method : str
    descriptor_names : tuple of str
        Descriptors that the models read, in order; the coordinates of `hyperforecast.settings` follow.
    models : dict of str to TreeEnsemble or NetworkEnsemble
        Those of `MODELS`, `NETWORK`, and one by the name of each setting where direct forecasts advise.
    ranking : {"outcome", "direct"}
        What orders candidates: the expected outcome, or nearness to directly forecast settings.
    thresholds : dict of str to float
        For each of `RANGES` the conformal threshold of errors over spread; infinite with too few sources.
    familiarity : Familiarity
    raw_constant, scale_free_constant : Constant
        The best fixed choices over the records, and
    constant_kind : {"raw", "scale_free"}
        which of them does better there.
    typical : ndarray of shape (F,)
        Median of each descriptor over the records.
    influential : tuple of str
        Descriptors by their gain in the models of outcomes, greatest first.
    recipe : dict
        What made it: records, sources, seeds, versions, figures.
    checksum : str
        SHA-256 of the content.
    """

    method: str
    descriptor_names: tuple
    models: dict
    ranking: str
    thresholds: dict
    familiarity: Familiarity
    raw_constant: Constant
    scale_free_constant: Constant
    constant_kind: str
    typical: np.ndarray
    influential: tuple
    recipe: dict
    checksum: str = ""

    @property
    def version(self):
        """Version of the program that fitted it, by its recipe, or None."""
        versions = self.recipe.get("versions")
        version = versions.get("hyperforecast") if isinstance(versions, dict) else None
        return version if isinstance(version, str) else None

    def vector(self, descriptors):
        """Return a dict of descriptors as the models' vector (F,); a name that is not there is missing (NaN)."""
        return np.array([descriptors.get(name, np.nan) for name in self.descriptor_names], dtype=np.float64)

    def constant_settings(self, descriptors, box):
        """Return the best constant as `Settings` at a boundary."""
        settings = self.scale_free_constant.settings(descriptors, box) if self.constant_kind == "scale_free" else None
        return settings or self.raw_constant.settings(descriptors, box)

    def at(self, descriptors):
        """Return the `BoundaryForecast` for a dict of descriptors."""
        return BoundaryForecast(self, descriptors)

    def narrowed(self, descriptors, names):
        """Return something whose `at` gives the same, quicker, for descriptors that differ from these in `names` alone."""
        return _Narrowed(self, descriptors, names)


class BoundaryForecast:
    """A forecaster at one boundary: its models with the descriptors filled in, so that only settings are left open.

    Parameters
    ----------
    forecaster : Forecaster
    descriptors : dict of str to float
    models : mapping of str to TreeEnsemble, optional
        Those of the forecaster, or what is left of them where only the descriptors in
    names : sequence of str, optional
        are left open.
    """

    def __init__(self, forecaster, descriptors, *, models=None, names=None):
        self.forecaster, self.descriptors = forecaster, descriptors
        self._models = forecaster.models if models is None else models
        names = forecaster.descriptor_names if names is None else names
        self._vector = np.array([*(descriptors.get(name, np.nan) for name in names), *[0.0] * len(COORDINATES)])
        self._fixed = np.arange(len(self._vector)) < len(names)
        self._scales = {name: descriptors.get(name, np.nan) for name in SCALES}
        self._restricted = {}

    def _raw(self, model, coordinates):
        if model not in self._restricted:
            self._restricted[model] = self._models[model].restrict(self._vector, self._fixed)
        return self._restricted[model].predict(coordinates)

    def coordinates(self, settings):
        """Return the scale-free coordinates (n, G) of a list of `Settings` here."""
        return scale_free(settings, self._scales)

    def outcome(self, settings):
        """Return {"old", "new", "all"}: expected accuracies (n,) of a list of `Settings`."""
        coordinates = self.coordinates(settings)
        expected = {name: np.clip(self._raw(name, coordinates), 0, 1) for name in OUTCOMES}
        return {**expected, "all": combined(expected["old"], expected["new"], self.descriptors)}

    def expected(self, settings):
        """Return {"old", "new", "all"}: `Expected` with 90% intervals of a list of `Settings`, arrays (n,)."""
        coordinates = self.coordinates(settings)
        result = {}
        for name, value in self.outcome(settings).items():
            spread = np.exp(self._raw(f"spread_{name}", coordinates)) * self.forecaster.thresholds[name]
            result[name] = Expected(value, np.clip(value - spread, 0, 1), np.clip(value + spread, 0, 1))
        return result

    def shortfall(self, settings):
        """Return how far (n,) each settings is expected to stay from the best accuracy on all classes here; at most 0.

        Models of their own, the mean of trees and networks: they spend nothing on what differs between boundaries, and
        order settings better than differences of `outcome`. Networks know shortfalls up to 0.3 only.
        """
        coordinates = self.coordinates(settings)
        parts = [self._raw(name, coordinates) for name in ("shortfall", NETWORK) if name in self.forecaster.models]
        return np.minimum(sum(parts) / len(parts), 0)

    def divergence(self, settings):
        """Return the probability (n,) that each of a list of `Settings` diverges."""
        return 1 / (1 + np.exp(-self._raw("diverged", self.coordinates(settings))))

    def later(self, settings):
        """Return the expected advantage (n,) of each settings for the accuracy one and two boundaries later.

        The mean of both, relative to good settings at this boundary.
        """
        return self._raw("later", self.coordinates(settings))

    def direct(self, box):
        """Return the directly forecast settings as a point (D,) of the unit cube of `box`."""
        none = np.full((1, len(COORDINATES)), np.nan)
        return np.array([self._raw(name, none)[0] for name in box.names])


class _Narrowed(dict):
    """Models of a forecaster, each restricted when first asked for, so that some descriptors only are left open."""

    def __init__(self, forecaster, descriptors, names):
        super().__init__()
        self._forecaster = forecaster
        self._names = [name for name in forecaster.descriptor_names if name in names]
        self._vector = np.concatenate([forecaster.vector(descriptors), np.zeros(len(COORDINATES))])
        is_open = [name in names for name in forecaster.descriptor_names] + [True] * len(COORDINATES)
        self._fixed = ~np.array(is_open)

    def __missing__(self, model):
        self[model] = self._forecaster.models[model].restrict(self._vector, self._fixed)
        return self[model]

    def at(self, descriptors):
        return BoundaryForecast(self._forecaster, descriptors, models=self, names=self._names)


def combined(old, new, descriptors):
    """Return the accuracy on all classes seen, every class alike, from that on old and on new ones."""
    share = old_share(descriptors)
    return share * old + (1 - share) * new


def old_share(descriptors):
    """Return the share of old classes among all classes seen.

    As many old as new ones are taken for granted where the descriptors do not tell.
    """
    n_old, n_new = (descriptors.get(name, np.nan) for name in ("classes_old", "classes_new"))
    return 0.5 if np.isnan(n_old) or np.isnan(n_new) else n_old / (n_old + n_new)


def save_forecaster(path, forecaster):
    """Write a forecaster file atomically; return its checksum."""
    return write_bundle_file(path, _to_bundle(forecaster))


def _to_bundle(forecaster):
    arrays = {"typical": forecaster.typical, **forecaster.familiarity.to_arrays("familiarity_")}
    for name, model in forecaster.models.items():
        arrays.update(model.to_arrays(f"{name}_"))
    facts = {
        "method": forecaster.method, "descriptor_names": list(forecaster.descriptor_names),
        "coordinates": list(COORDINATES), "models": sorted(forecaster.models), "ranking": forecaster.ranking,
        # JSON knows no infinity: null says that too few sources were there to bound the error.
        "thresholds": {name: value if np.isfinite(value) else None for name, value in forecaster.thresholds.items()},
        "raw_constant": forecaster.raw_constant.as_dict(),
        "scale_free_constant": forecaster.scale_free_constant.as_dict(), "constant_kind": forecaster.constant_kind,
        "influential": list(forecaster.influential), "recipe": forecaster.recipe,
    }
    return Bundle(KIND, VERSION, facts, arrays)


def with_checksum(forecaster):
    """Return the forecaster with the checksum that its file will have."""
    return Forecaster(**{**forecaster.__dict__, "checksum": bundle_checksum(_to_bundle(forecaster))})


def load_forecaster(source):
    """Return the `Forecaster` in a file, or the one that ships for a method.

    Parameters
    ----------
    source : str or Path
        A method ("ewc", "lwf", "icarl", "wa"), or the path of a forecaster file.

    Raises
    ------
    InputError
        If the file is missing, damaged, or of another kind or version.
    """
    return _load(_path_of(source))


def forecaster_bytes(source):
    """Return the bytes of a forecaster file; `source` and errors as for `load_forecaster`, but for damage."""
    return read_bytes(_path_of(source), largest=LARGEST_ARRAY)


def _path_of(source):
    if not isinstance(source, (str, os.PathLike)):
        raise InputError("forecaster", "must be a method or the path of a forecaster file", repr(source))
    if source in METHODS:
        return Path(import_module("hyperforecast.models").__path__[0]) / f"{source}.forecaster"
    return source


def _load(path):
    bundle, checksum = read_bundle_file(path, KIND, newest=VERSION)
    try:
        return _from_bundle(bundle, checksum)
    except InputError as error:
        raise InputError(f"{path} ({error.parameter})", error.rule, error.received, error.remedy) from None
    except (KeyError, TypeError, ValueError, AttributeError) as error:
        raise InputError(path, "must be a complete forecaster", error, "copy it again from the source") from None


def _from_bundle(bundle, checksum):
    """Return the forecaster in a bundle, every part checked: it may be made by somebody who means harm."""
    facts, arrays = bundle.facts, bundle.arrays
    if facts["coordinates"] != list(COORDINATES):
        raise InputError("coordinates", "must be this program's", facts["coordinates"],
                         "fit it again with this version")
    method = check_choice("method", facts["method"], METHODS)
    ranking = check_choice("ranking", facts["ranking"], RANKINGS)
    names = tuple(facts["descriptor_names"])
    if not all(isinstance(name, str) for name in names) or not set(facts["influential"]) <= set(names):
        raise InputError("influential", "must be among the descriptors", facts["influential"])
    models = {name: (NetworkEnsemble if name == NETWORK else TreeEnsemble).from_arrays(arrays, f"{name}_")
              for name in facts["models"]}
    needed = {*MODELS, *(SettingsBox(method).names if ranking == "direct" else ())}
    n_features = len(names) + len(COORDINATES)
    if not needed <= set(models) or any(model.n_features != n_features for model in models.values()):
        raise InputError("models", f"must be {', '.join(sorted(needed))}, of {n_features} features", ", ".join(models))
    familiarity = Familiarity.from_arrays(arrays, "familiarity_")
    if tuple(familiarity.names.tolist()) != names:
        raise InputError("familiarity", "must be that of the descriptors", "others")
    if not isinstance(facts["recipe"], dict):
        raise InputError("recipe", "must be told by names", facts["recipe"])
    return Forecaster(
        method=method, descriptor_names=names, models=models, ranking=ranking,
        thresholds={name: np.inf if facts["thresholds"][name] is None else
                    check_number(f"threshold of {name}", facts["thresholds"][name], low=0) for name in RANGES},
        familiarity=familiarity, raw_constant=_constant(facts, "raw", method),
        scale_free_constant=_constant(facts, "scale_free", method),
        constant_kind=check_choice("constant_kind", facts["constant_kind"], CONSTANTS),
        typical=stored_array(arrays, "typical", kinds="f", shape=(len(names),)),
        influential=tuple(facts["influential"]), recipe=facts["recipe"], checksum=checksum,
    )


def _constant(facts, kind, method):
    constant = Constant(**facts[f"{kind}_constant"])
    check_choice(f"kind of the {kind} constant", constant.kind, (kind,))
    for name in ("learning_rate", "regularization"):
        check_number(f"{name} of the {kind} constant", getattr(constant, name), low=SMALLEST)
    if method in REHEARSAL_METHODS:
        check_whole(f"kept_per_class of the {kind} constant", constant.kept_per_class, low=1)
    elif constant.kept_per_class is not None:
        raise InputError(f"kept_per_class of the {kind} constant", "must be none", constant.kept_per_class)
    return constant
