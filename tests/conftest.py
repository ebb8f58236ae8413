"""Records and forecasters that several rooms' tests use, each made once: tiny streams, few attempts, few trees."""

import pathlib

import pytest

from hyperforecast.workshop.fitting import fit_forecaster, load_dataset, models, networks
from hyperforecast.workshop.gathering import RecordsFile, gather
from hyperforecast.workshop.streams import load_streams

STREAMS = "".join(
    f'[[stream]]\nname = "{family}"\nsource = "{family}"\nseeds = [0, 1]\nincrements = {increments}\n'
    f"classes = {classes}\nraw_dimension = {dimension}\nrows_per_class = 14\n"
    for family, increments, classes, dimension in (
        ("synthetic_gaussian", 3, 6, 5), ("synthetic_drifting", 4, 8, 6), ("synthetic_rectified", 3, 6, 8)))


@pytest.fixture(scope="session")
def demo_small():
    """The definitions in bench_streams/demo_small.toml."""
    return load_streams(pathlib.Path(__file__).parents[1] / "bench_streams" / "demo_small.toml")


@pytest.fixture(scope="session")
def records(tmp_path_factory, demo_small):
    """A `RecordsFile` of eight small streams, three sources, two methods."""
    folder = tmp_path_factory.mktemp("records")
    (folder / "streams.toml").write_text(STREAMS)
    definitions = demo_small + load_streams(folder / "streams.toml")
    gather(definitions, folder / "some.sqlite", methods=("wa", "ewc"), attempts=(16, 0, 8))
    return RecordsFile(folder / "some.sqlite")


@pytest.fixture(scope="session")
def datasets(records):
    """The `Dataset` of each gathered method."""
    return {method: load_dataset(records, method) for method in ("wa", "ewc")}


@pytest.fixture(scope="session")
def forecasters(datasets):
    """A small `Forecaster` of each gathered method."""
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(models, "ROUNDS", 20)
        patch.setattr(models, "SMALL_ROUNDS", 10)
        patch.setattr(networks, "MOST_EPOCHS", 8)
        # Few records: leaves of 200 attempts would leave nothing to split.
        patch.setattr(models, "LARGE", {"num_leaves": 31, "min_data_in_leaf": 20})
        return {method: fit_forecaster(dataset, recipe={"records": "eight small streams"})
                for method, dataset in datasets.items()}
