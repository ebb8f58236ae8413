"""Options that several commands share."""

import os
from dataclasses import asdict, replace

from hyperforecast.checks import InputError, check_keys, check_number, check_whole
from hyperforecast.settings import METHODS, UPDATE_LIMITS, Plan

PLAN_HELP = {
    "method": "what holds on to old classes", "hidden_units": "width of the hidden layer, 0 for none",
    "passes": "passes over the rows", "batch_size": "rows of a minibatch",
    "memory_limit": 'most exemplars held, or bytes as "2 MB"',
    "time_limit": "seconds that an update may take, reading the increment aside; none lifts it",
    "working_memory": 'bytes that an update may hold at once, as "200 MB"; none lifts it',
}


def add_device(parser, *, required=True):
    """Name an increment and a device folder."""
    parser.add_argument("--increment", required=required, metavar="FILE", help=".npz, .npy, .csv or .parquet")
    parser.add_argument("--device", required=required, metavar="DIR")


def add_forecaster(parser):
    """Name a forecaster, where it is not the one that ships."""
    parser.add_argument("--forecaster", metavar="FILE", help="(the one that the device is pinned to, "
                        "else the one that ships for the method)")


def add_extractor(parser):
    """Name the extractor that the features come from."""
    parser.add_argument("--extractor", metavar="NAME", help="name or hash of what extracts the features; once given, "
                        "another one is refused")
    parser.add_argument("--another-extractor", action="store_true",
                        help="features of another extractor are meant: neither its name nor its features are refused")


def add_plan(parser, *, leave_out=()):
    """Add the options of a plan, but for some."""
    plan = parser.add_argument_group("plan, fixed at the first update")
    limits = parser.add_argument_group("limits of an update, as they were until named anew")
    for name, default in asdict(Plan()).items():
        if name not in leave_out:
            kind = int if isinstance(default, int) and name != "memory_limit" else str
            (limits if name in UPDATE_LIMITS else plan).add_argument(
                f"--{name.replace('_', '-')}", type=kind, choices=METHODS if name == "method" else None,
                help=PLAN_HELP[name] + ("" if default is None else f" ({default})"))


def given_plan(options):
    """Return the parts of a plan that were named, by name."""
    given = {name: getattr(options, name, None) for name in PLAN_HELP}
    given = {name: value for name, value in given.items() if value is not None}
    if "memory_limit" in given and given["memory_limit"].isdecimal():
        given["memory_limit"] = int(given["memory_limit"])
    given.update({name: None for name in UPDATE_LIMITS if given.get(name) == "none"})
    if given.get("time_limit") is not None:
        text = given["time_limit"]
        try:
            given["time_limit"] = float(text)
        except ValueError:
            raise InputError("--time-limit", "must be a number of seconds, or none", repr(text)) from None
    return given


def add_streams(parser):
    """Name stream definitions."""
    parser.add_argument("--streams", nargs="+", required=True, metavar="FILE", help="stream definitions in TOML")


def add_workers(parser):
    """How many processes to use."""
    parser.add_argument("--workers", type=int, default=os.cpu_count() or 1, help="(%(default)s, all processors)")


def chosen_forecaster(options, folder, generation):
    """Return the forecaster that was named, or the one that a device's `generation` is advised by."""
    from hyperforecast.device import forecaster_for
    from hyperforecast.forecasting import load_forecaster

    return forecaster_for(folder, generation, given=load_forecaster(options.forecaster) if options.forecaster else None)


def forecasters_by_method(paths):
    """Return {method: Forecaster} of forecaster files."""
    from hyperforecast.forecasting import load_forecaster

    forecasters = {}
    for path in paths:
        forecaster = load_forecaster(path)
        if forecaster.method in forecasters:
            raise InputError("--forecaster", "must name one file for each method", f"two for {forecaster.method}")
        forecasters[forecaster.method] = forecaster
    return forecasters


def add_settings(parser, then):
    """Name settings of one's own; `then` says what is done with them."""
    parser.add_argument("--settings", metavar="NAME=VALUE,...", help=f"{then}: learning_rate, regularization, "
                        "kept_per_class; those left out are as advised")


def chosen_settings(options):
    """Return --settings as a dict, None without."""
    if options.settings is None:
        return None
    settings = {}
    for part in options.settings.split(","):
        name, _, value = (text.strip() for text in part.partition("="))
        check_keys("--settings", [name], ("learning_rate", "regularization", "kept_per_class"))
        try:
            settings[name] = int(value) if name == "kept_per_class" else float(value)
        except ValueError:
            raise InputError(f"--settings {name}", "must be a number", repr(value)) from None
    return settings


def add_preferences(parser):
    """What advice is to care for."""
    group = parser.add_argument_group("what advice is to care for; a device keeps it from update to update")
    group.add_argument("--old-weight", metavar="SHARE", help='weight of old classes, new ones have the rest, 0 to 1; or '
                       '"count", by their number (count)')
    group.add_argument("--now-weight", type=float, metavar="SHARE", help="weight of this boundary, the two that follow "
                       "have the rest (1/3)")
    group.add_argument("--unfamiliar", metavar="WHAT", help='at a boundary unlike the records: "constant", "warn", or '
                       '"try N", train with N of the ranked settings and keep the best (try 4)')
    group.add_argument("--tolerance", type=float, metavar="SHARE", help="accuracy that may be given away for fewer "
                       "exemplars (0.005)")


def chosen_preferences(options, kept):
    """Return the preferences that were kept, changed as the options say."""
    given = {name: value for name in kept.as_dict() if (value := getattr(options, name)) is not None}
    if "old_weight" in given:
        try:
            given["old_weight"] = None if given["old_weight"] == "count" else float(given["old_weight"])
        except ValueError:
            raise InputError("--old-weight", 'must be a number from 0 to 1, or "count"',
                             repr(given["old_weight"])) from None
    return replace(kept, **given).checked()


def add_least_gain(parser):
    """What counts as a gain."""
    parser.add_argument("--least-gain", type=float, metavar="SHARE",
                        help="gain in accuracy on all classes that is worth waiting or updating for (2 points)")


def least_gain(options):
    """Return --least-gain as an argument by name, none where it was not given."""
    if options.least_gain is None:
        return {}
    return {"least_gain": check_number("--least-gain", options.least_gain, low=0, high=1)}


def definitions(paths):
    """Return the `StreamDefinition`s of TOML files."""
    from hyperforecast.workshop.streams import load_streams

    return [definition for path in paths for definition in load_streams(path)]


def checked_seed(options):
    """Return --seed, checked."""
    return check_whole("--seed", options.seed)


def checked_workers(options):
    """Return --workers, checked."""
    return check_whole("--workers", options.workers, low=1)
