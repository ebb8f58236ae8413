"""Features of another extractor are refused, by name and by what they look like; those of the same one are not."""

import numpy as np
import pytest
from sklearn.datasets import load_digits

from hyperforecast.checks import InputError
from hyperforecast.device import DeviceFolder, UpdateStatus, roll_back, update
from hyperforecast.device.extractor import looks_foreign, sketch_of
from hyperforecast.increments import check_increment
from hyperforecast.learning import ClassSummaries, standardize
from hyperforecast.learning.boundary import fit_scaling
from hyperforecast.settings import Plan, Settings

SETTINGS = Settings(0.02, 1.0, 10)


def network(seed):
    """A frozen random layer of rectified units over the digits' pixels."""
    rng = np.random.default_rng(seed)
    weights, bias = rng.normal(size=(64, 48)) / 8, rng.normal(size=48)
    return lambda X: np.maximum((X - 5) / 4 @ weights + bias, 0)


def digits(classes, extractor=network(1)):
    X, y = load_digits(return_X_y=True)
    rows = np.isin(y, classes)
    return check_increment(extractor(X[rows]), y[rows])


@pytest.fixture
def folder(tmp_path):
    folder = DeviceFolder(tmp_path / "arm")
    update(folder, digits([0, 1, 2, 3]), plan=Plan("wa", 16, 10, 32, 400), extractor="net 1")
    return folder


def refused(folder, increment, match, **options):
    number = folder.numbers()[-1]
    with pytest.raises(InputError, match=match):
        update(folder, increment, settings=SETTINGS, most_lost=1, most_lost_by_class=1, **options)
    assert folder.numbers()[-1] == number


def learned(folder, increment, **options):
    return update(folder, increment, settings=SETTINGS, most_lost=1, most_lost_by_class=1, **options)


def test_another_name_is_refused_and_none_is_not(folder):
    refused(folder, digits([4, 5]), "must be the device's, net 1; received net 2", extractor="net 2")
    refused(folder, digits([4, 5]), "extractor: must be a name", extractor=" ")
    assert learned(folder, digits([4, 5])).entry["kept"]
    assert learned(folder, digits([6, 7]), extractor="net 1").entry["kept"]
    assert folder.read().care.extractor == "net 1"


@pytest.mark.parametrize("other", [network(2), lambda X: network(1)(X)[:, ::-1], lambda X: network(1)(X) * 20],
                         ids=["another network", "another order", "another unit"])
def test_features_that_look_like_those_of_another_extractor_are_refused(folder, other):
    refused(folder, digits([4, 5, 6], other), "features of the extractor that the device has learned with, net 1")
    with pytest.raises(InputError, match="--another-extractor"):
        update(folder, digits([4, 5, 6], other), dry_run=True)


def test_they_are_learned_where_they_are_meant_and_the_next_ones_are_judged_by_them(folder):
    assert learned(folder, digits([4, 5, 6], network(2)), extractor="net 2", another_extractor=True).entry["kept"]
    assert folder.read().care.extractor == "net 2"
    assert learned(folder, digits([7, 8], network(2))).entry["kept"]
    back = roll_back(folder)
    assert back.care.extractor == "net 2"


def test_what_was_rolled_back_leaves_the_extractor_as_it_was(folder):
    report = update(folder, digits([4, 5], network(2)), extractor="net 2", another_extractor=True, most_lost=0,
                    settings=Settings(0.5, 0.001, 1))
    assert report.status is UpdateStatus.ROLLED_BACK and folder.read().care.extractor == "net 1"


def test_going_back_brings_the_extractor_of_before_back(folder):
    learned(folder, digits([4, 5, 6], network(2)), extractor="net 2", another_extractor=True)
    assert roll_back(folder).care.extractor == "net 1"
    assert learned(folder, digits([4, 5, 6])).entry["kept"]


def verdict(first, second):
    """Judge rows of two classes against a sketch of rows of two others."""
    (X, y), scaling = first, fit_scaling(first[0])
    Z = standardize(X, *scaling)
    summaries = ClassSummaries(np.empty(0, np.int64), *(np.empty((0, Z.shape[1]), np.float32),) * 2).merged(Z, y, 2)
    return looks_foreign(sketch_of(Z, y), summaries, standardize(second[0], *scaling), second[1])


@pytest.mark.parametrize("seed", range(30))
def test_round_classes_in_any_place_tell_nothing(seed):
    rng = np.random.default_rng(seed)
    y = np.repeat([0, 1], 20)
    first, second = (rng.normal(size=(40, 6)) + rng.normal(0, 5, (2, 6))[y] for _ in range(2))
    assert not verdict((first, y), (second, y))


def test_too_few_rows_tell_nothing():
    rng = np.random.default_rng(0)
    assert sketch_of(rng.normal(size=(12, 6)).astype(np.float32), np.repeat([0, 1], 6)) is None
    y = np.repeat([0, 1], 20)
    assert not verdict((rng.normal(size=(40, 6)), y), (100 * rng.normal(size=(4, 6)), np.array([2, 2, 3, 3])))
