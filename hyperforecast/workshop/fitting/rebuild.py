"""Rebuilding a forecaster from its recipe: rounds of gathering, some of them steered, then the fit on all their records.

A recipe is a TOML file; streams are relative to it:

    seed = 0
    [[round]]
    streams = ["some.toml", "others.toml"]
    [[round]]
    streams = ["more.toml"]
    [round.steering]            # by a forecaster fitted on the rounds before
    without = ["languages"]     # sources left out of that fit
    folds = 2
    [[round]]
    streams = ["still_more.toml"]
    steered_by = "steering"     # or by METHOD.forecaster in a folder, relative to the recipe
    [fit]                       # of the forecaster itself; keys as for steering

The same recipe gives the same forecaster to the bit on the same machine with the same versions, however often it was
interrupted and whatever else the records file holds: each fit reads the trajectories of its rounds and no others.
"""

import tomllib
from dataclasses import dataclass
from pathlib import Path

from hyperforecast.checks import InputError, check_keys, check_whole
from hyperforecast.forecasting import load_forecaster, save_forecaster
from hyperforecast.storage import checksum, dump_json, read_bytes
from hyperforecast.workshop.fitting.dataset import load_dataset
from hyperforecast.workshop.fitting.fit import fit_forecaster
from hyperforecast.workshop.gathering import RecordsFile, gather, trajectory_key
from hyperforecast.workshop.streams import load_streams

LARGEST_RECIPE = 2**20
RECORDS = "records.sqlite"


@dataclass(frozen=True)
class Fit:
    """What a fit leaves out, and in how many groups it holds sources out; None: each alone."""

    without: tuple = ()
    folds: int | None = None


@dataclass(frozen=True)
class Round:
    """A round of gathering: its streams, and what steers it: a `Fit`, a folder of forecasters, or None."""

    definitions: tuple
    steering: Fit | Path | None


@dataclass(frozen=True)
class Recipe:
    """How a forecaster is made: the seed of everything, the rounds in order, and the fit on what they gathered."""

    seed: int
    rounds: tuple
    fit: Fit


def read_recipe(path):
    """Return the `Recipe` in a TOML file; `InputError`, naming file and key, if it breaks a rule."""
    path = Path(path)
    try:
        document = tomllib.loads(read_bytes(path, largest=LARGEST_RECIPE).decode("utf-8"))
    except (ValueError, RecursionError) as error:
        if isinstance(error, InputError):
            raise
        raise InputError(path, "must be a TOML file", error) from None
    check_keys(path, document, ("seed", "round", "fit"))
    tables = document.get("round")
    if not isinstance(tables, list) or not tables or not all(isinstance(table, dict) for table in tables):
        raise InputError(path, "must hold [[round]] tables", "none" if tables is None else repr(tables))
    rounds = []
    for number, table in enumerate(tables, 1):
        where = f"{path} round {number}"
        check_keys(where, table, ("streams", "steering", "steered_by"))
        if number == 1 and "steering" in table:
            raise InputError(where, "cannot be steered", "steering", "no round comes before it")
        if "steering" in table and "steered_by" in table:
            raise InputError(where, "must be steered by one thing", "steering and steered_by", "remove one of them")
        definitions = [one for file in _texts(f"{where} streams", table.get("streams"))
                       for one in load_streams(path.parent / file)]
        rounds.append(Round(tuple(definitions), _steering(where, table, path.parent)))
    return Recipe(check_whole(f"{path} seed", document.get("seed", 0)), tuple(rounds),
                  _fit(f"{path} fit", document.get("fit", {})))


def fit_records(records, method, fit, *, only=None, seed=0, workers=1, progress=None):
    """Return a `Forecaster` of one method fitted on a `RecordsFile` as a `Fit` says; its recipe tells what was left out.

    `only` is a set of keys of trajectories, None for all; `progress` is that of `fit_forecaster`.
    """
    dataset = load_dataset(records, method, without=fit.without, only=only)
    return fit_forecaster(dataset, recipe={"without": sorted(fit.without)}, folds=fit.folds, seed=seed, workers=workers,
                          progress=progress)


def rebuild(recipe, method, folder, *, workers=1, progress=None):
    """Run what a folder lacks of a `Recipe`, and return the path of the forecaster of one method.

    Parameters
    ----------
    recipe : Recipe
    method : str
    folder : str or Path
        Made if it does not exist. It keeps the records of all methods, and the forecasters that steer.
    workers : int
        Processes; the result does not depend on it.
    progress : callable, optional
        Called with lines of text, and with the `Progress` of gathering.
    """
    folder, progress = Path(folder), progress or (lambda told: None)
    folder.mkdir(parents=True, exist_ok=True)
    path, keys = folder / RECORDS, set()

    def fitted(fit):
        return fit_records(RecordsFile(path), method, fit, only=keys, seed=recipe.seed, workers=workers,
                           progress=lambda one: progress(f"held out {one.source}: {one.boundaries} boundaries"))

    for number, one in enumerate(recipe.rounds, 1):
        steering = None
        if isinstance(one.steering, Path):
            steering = load_forecaster(one.steering / f"{method}.forecaster")
        elif one.steering:
            # Kept under the name of all that it is made of: another recipe's is not taken for it.
            made_of = checksum(dump_json([sorted(keys), one.steering.__dict__, recipe.seed]))[:12]
            kept = folder / f"steering.{method}.{made_of}.forecaster"
            if not kept.exists():
                progress(f"fitting the forecaster that steers round {number}")
                save_forecaster(kept, fitted(one.steering))
            steering = load_forecaster(kept)
        progress(f"round {number} of {len(recipe.rounds)}: {len(one.definitions)} streams")
        gather(one.definitions, path, methods=[method], seed=recipe.seed, workers=workers,
               forecasters={method: steering} if steering else None, progress=progress)
        keys |= {trajectory_key(definition, method, recipe.seed, steering) for definition in one.definitions}
    progress("fitting the forecaster")
    made = folder / f"{method}.forecaster"
    save_forecaster(made, fitted(recipe.fit))
    return made


def _steering(where, table, folder):
    if "steered_by" in table:
        if not isinstance(table["steered_by"], str):
            raise InputError(f"{where} steered_by", "must be a folder, relative to the recipe", repr(table["steered_by"]))
        return folder / table["steered_by"]
    return _fit(f"{where} steering", table["steering"]) if "steering" in table else None


def _fit(where, table):
    if not isinstance(table, dict):
        raise InputError(where, "must be a table", repr(table))
    check_keys(where, table, ("without", "folds"))
    without = _texts(f"{where} without", table["without"]) if "without" in table else ()
    return Fit(tuple(without), check_whole(f"{where} folds", table["folds"], low=2) if "folds" in table else None)


def _texts(name, value):
    if not isinstance(value, list) or not value or not all(isinstance(one, str) for one in value):
        raise InputError(name, "must be a list of texts", "none" if value is None else repr(value))
    return value
