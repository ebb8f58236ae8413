"""Options that several commands share."""

import os

from hyperforecast.checks import check_whole


def add_device(parser):
    """Name an increment and a device folder."""
    parser.add_argument("--increment", required=True, metavar="FILE", help=".npz, .npy, .csv or .parquet")
    parser.add_argument("--device", required=True, metavar="DIR")


def add_forecaster(parser):
    """Name a forecaster, where it is not the one that ships."""
    parser.add_argument("--forecaster", metavar="FILE", help="(the one that ships for the method)")


def add_streams(parser):
    """Name stream definitions."""
    parser.add_argument("--streams", nargs="+", required=True, metavar="FILE", help="stream definitions in TOML")


def add_workers(parser):
    """How many processes to use."""
    parser.add_argument("--workers", type=int, default=os.cpu_count() or 1, help="(%(default)s, all processors)")


def chosen_forecaster(options, method):
    """Return the forecaster that was named, or the one that ships for a method."""
    from hyperforecast.forecasting import load_forecaster

    return load_forecaster(options.forecaster or method)


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
