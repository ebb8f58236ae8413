"""Requests for advice from trainers in other languages: a JSON document of descriptors (`schemas/request.schema.json`).

    method          what holds on to old classes
    descriptors     by name; null, or no entry, where one is not known
    most_kept       icarl and wa: exemplars per class that the memory allows from now on, or instead
    memory_limit    exemplars that it holds in all, check rows included, or bytes as "2 MB"

The answer is what `Advice.as_dict` returns (`schemas/advice.schema.json`).
"""

import math
from dataclasses import dataclass

from hyperforecast.checks import InputError, check_choice, check_whole
from hyperforecast.device.documents import check_descriptors, check_object
from hyperforecast.forecasting import advise_settings
from hyperforecast.learning import class_limits
from hyperforecast.settings import KEPT_PER_CLASS, METHODS, Plan, SettingsBox
from hyperforecast.storage import read_json

LIMITS = ("most_kept", "memory_limit")


@dataclass(frozen=True)
class Request:
    """What is asked: method, descriptors by name (NaN: not known) and exemplars per class that the memory allows."""

    method: str
    descriptors: dict
    most_kept: int

    def advice(self, forecaster):
        """Return the `Advice` of a `Forecaster`; `InputError` if it is one for another method."""
        if forecaster.method != self.method:
            raise InputError("forecaster", f"must be one for {self.method}, the method of the request", forecaster.method)
        return advise_settings(forecaster, self.descriptors, SettingsBox(self.method, self.most_kept))


def read_request(path):
    """Return the `Request` in a JSON file, every part checked; `InputError` if one is missing or not proper."""
    try:
        return _checked(read_json(path))
    except InputError as error:
        if error.parameter == str(path):
            raise
        raise InputError(f"{path} ({error.parameter})", error.rule, error.received, error.remedy) from None


def _checked(document):
    check_object("document", document, ("method", "descriptors"), LIMITS)
    method = check_choice("method", document["method"], METHODS)
    descriptors = check_descriptors("descriptors", document["descriptors"])
    given = [name for name in LIMITS if name in document]
    if not Plan(method).rehearses:
        if given:
            raise InputError(given[0], f"must be left out: {method} trains without exemplars", document[given[0]])
        return Request(method, descriptors, KEPT_PER_CLASS[1])
    if len(given) != 1:
        raise InputError("most_kept", f"or else memory_limit must be given for {method}", ", ".join(given) or "neither")
    most_kept = (check_whole("most_kept", document["most_kept"], low=1, high=2**53) if given == ["most_kept"]
                 else _most_kept(Plan(method, memory_limit=document["memory_limit"]).checked(), descriptors))
    most_kept = min(most_kept, KEPT_PER_CLASS[1])
    return Request(method, {"most_kept": float(most_kept), **descriptors}, most_kept)


def _most_kept(plan, descriptors):
    """Exemplars of a class that the memory limit of a plan leaves room for."""
    in_bytes = isinstance(plan.memory_limit, str)
    needed = ("classes_old", "classes_new", *(("features",) if in_bytes else ()))
    numbers = [descriptors.get(name, math.nan) for name in needed]
    if any(math.isnan(number) for number in numbers):
        raise InputError("memory_limit", f"needs the descriptors {', '.join(needed)}", "not all of them",
                         "give them, or give most_kept instead")
    old, new, features = (int(min(number, 2**53)) for number in (*numbers, 1)[:3])
    return class_limits(plan, features, old + new)[1]
