"""Warm starts: where a search should begin, as plain JSON that any optimizer can take up.

The document names the method, the scale and range of each setting, and the points, best first, each
with a spread per setting: a factor of at least 1. The good region is expected from value / spread to
value * spread (`hyperforecast.forecasting.Advice.spreads_at`); 1 means that nothing is known about its width.
"""

from dataclasses import dataclass

from hyperforecast.checks import InputError, check_choice, check_keys, check_number
from hyperforecast.settings import METHODS, Settings, SettingsBox
from hyperforecast.storage import dump_json, read_json, write_atomically

KIND = "hyperforecast warm starts"
VERSION = 1


@dataclass(frozen=True)
class WarmStart:
    """A point to try early.

    Attributes
    ----------
    settings : Settings
    spread : dict of str to float
        For each setting that applies, the factor (>= 1) by which the good value may lie higher or lower.
    """

    settings: Settings
    spread: dict


def warm_starts_of(advice):
    """Return a `WarmStart` for each of the ranked settings of an `Advice`, with its spreads there."""
    return [WarmStart(one, advice.spreads_at(one)) for one in advice.ranked]


def write_warm_starts(path, warm_starts, method):
    """Write a list of `WarmStart`, best first, for a method to a JSON file."""
    low, high = SettingsBox(method).from_unit([[0.0] * SettingsBox(method).n_dimensions,
                                               [1.0] * SettingsBox(method).n_dimensions])
    document = {
        "kind": KIND,
        "version": VERSION,
        "method": method,
        "scale": "logarithmic",
        "ranges": {name: [value, getattr(high, name)] for name, value in low.as_dict().items()},
        "points": [{"settings": one.settings.checked(method).as_dict(), "spread": _checked_spread(one)}
                   for one in warm_starts],
    }
    write_atomically(path, dump_json(document))


def read_warm_starts(path, method):
    """Return the list of `WarmStart` in a file of `write_warm_starts`.

    Raises
    ------
    InputError
        If the file is missing, not such a document, for another method, or holds values out of range.
    """
    document = read_json(path)
    if not isinstance(document, dict) or document.get("kind") != KIND:
        raise InputError(path, f"must be a document of the kind {KIND!r}", "other content")
    if document.get("version") != VERSION:
        raise InputError(path, f"must be of version {VERSION}", repr(document.get("version")),
                         "use the program's version that wrote it, or a newer one")
    check_choice(f"{path} (method)", document.get("method"), METHODS)
    if document["method"] != method:
        raise InputError(path, f"must hold warm starts for the method {method}", document["method"])
    points = document.get("points")
    if not isinstance(points, list):
        raise InputError(path, "must hold a list of points", type(points).__name__)
    return [_parse_point(f"{path} (point {index})", point, method) for index, point in enumerate(points)]


def _parse_point(name, point, method):
    names = SettingsBox(method).names
    if not isinstance(point, dict) or any(not isinstance(point.get(part), dict) for part in ("settings", "spread")):
        raise InputError(name, "must hold settings and their spread", point)
    check_keys(name, point["settings"], names)
    if set(point["settings"]) != set(names):
        raise InputError(name, f"must set {', '.join(names)}", ", ".join(point["settings"]))
    try:
        start = WarmStart(Settings(**point["settings"]).checked(method), point["spread"])
        return WarmStart(start.settings, _checked_spread(start))
    except InputError as error:
        raise InputError(f"{name}: {error.parameter}", error.rule, error.received, error.remedy) from None


def _checked_spread(start):
    names = tuple(start.settings.as_dict())
    if set(start.spread) != set(names):
        raise InputError("spread", f"must give a factor for {', '.join(names)}", ", ".join(start.spread) or "none")
    return {name: check_number(f"spread of {name}", start.spread[name], low=1.0) for name in names}
