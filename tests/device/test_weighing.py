"""Questions before an update: nothing is trained or stored, and answers agree with the advice."""

import json

import numpy as np
import pytest

from hyperforecast.checks import InputError
from hyperforecast.device import DeviceFolder, update, weigh
from hyperforecast.forecasting import NothingNew, load_forecaster
from hyperforecast.increments import check_increment
from hyperforecast.learning import HeadTrainer
from hyperforecast.settings import METHODS, Plan, Settings


def clouds(labels, *, seed=0, rows=40):
    """Return an increment of Gaussian classes; a label always lies at the same place."""
    rng = np.random.default_rng(seed)
    X = [rng.normal(0, 1, (rows, 6)) + np.random.default_rng([7, *label.encode()]).normal(0, 2, 6) for label in labels]
    return check_increment(np.concatenate(X), np.repeat(labels, rows))


@pytest.fixture(scope="module", params=["wa", "ewc", "icarl"])
def device(request, tmp_path_factory):
    folder = tmp_path_factory.mktemp("device") / "arm"
    plan = Plan(request.param, 16, 4, 16, 100)
    for t, labels in enumerate((["nut", "bolt", "rod"], ["hook", "ring"])):
        update(folder, clouds(labels, seed=t), plan=plan, most_lost=1.0, most_lost_by_class=1.0)
    return folder


def test_weighing_stores_nothing_and_agrees_with_the_advice(device):
    before = DeviceFolder(device).read()
    increment = clouds(["pin", "cap"], seed=2)
    weighing = weigh(device, increment, settings={"learning_rate": 0.1})
    assert DeviceFolder(device).read().checksum == before.checksum
    method = before.carryover.plan.method
    assert weighing.advice.settings == update(device, increment, dry_run=True).advice.settings
    assert weighing.beside.settings[0] == weighing.advice.settings
    assert weighing.own.settings[0].learning_rate == 0.1
    assert weighing.own.settings[0].regularization == weighing.advice.settings.regularization
    assert {one.method for one in weighing.methods} == set(METHODS)
    own, = (one for one in weighing.methods if one.own)
    assert own.method == method and own.settings == weighing.advice.settings and own.missing == []
    levels = [one.outlook.all.value[0] for one in weighing.methods]
    assert levels == sorted(levels, reverse=True)
    json.dumps(weighing.as_dict(), allow_nan=False)


def test_more_memory_helps_only_methods_that_rehearse(device):
    weighing = weigh(device, clouds(["pin", "cap"], seed=2))
    memory = [one for one in weighing.more if "memory" in one.what]
    if weighing.advice.forecaster.method == "ewc":
        assert [one.settings for one in memory] == [None]
    else:
        # 100 rows for seven classes are 14 each, 3 of them for checks; a megabyte holds 31,250 rows more.
        assert weighing.advice.box.most_kept == 11 and len(memory) == 2
        assert all("80 instead of 11" in one.means for one in memory)
    assert any("pass takes about" in one.means for one in weighing.more)


def test_an_increment_without_new_classes_is_told_apart(device):
    assert isinstance(weigh(device, clouds(["nut", "hook"], seed=3)).waiting, NothingNew)


def test_features_that_moved_are_a_sign_to_retrain_at_base(device):
    calm = clouds(["nut", "hook"], seed=3)
    assert weigh(device, calm).retrain == []
    # Another gain and offset of the sensor: classes lie three times as far apart, and elsewhere.
    moved = check_increment(3 * calm.X + 9, calm.y)
    signs = weigh(device, moved).retrain
    assert any("classes that came again have moved" in sign for sign in signs)


def test_settings_beyond_the_limits_are_refused(device):
    increment = clouds(["pin", "cap"], seed=2)
    with pytest.raises(InputError, match="learning_rate"):
        weigh(device, increment, settings=Settings(7.0, 1.0))
    if DeviceFolder(device).read().carryover.plan.rehearses:
        with pytest.raises(InputError, match="what the memory limit allows"):
            weigh(device, increment, settings={"kept_per_class": 12})


class Foreign(HeadTrainer):
    """Another trainer, to the device's mind."""


def test_the_methods_are_compared_for_the_built_in_trainer_alone(device):
    plan = DeviceFolder(device).read().carryover.plan
    increment = clouds(["pin", "cap"], seed=2)
    assert len(weigh(device, increment, trainer=Foreign()).methods) == len(METHODS)

    class Other:
        def __getattr__(self, name):
            return getattr(HeadTrainer(), name)

    told = weigh(device, increment, trainer=Other(), forecasters={plan.method: load_forecaster(plan.method)})
    assert [one.own for one in told.methods] == [True]


@pytest.mark.parametrize("method", METHODS)
def test_a_carryover_goes_over_to_any_method(device, method):
    carryover = DeviceFolder(device).read().carryover
    switched = HeadTrainer().with_method(carryover, method)
    assert switched.plan.method == method and "class_means" not in switched.head
    # Importance is there for EWC, of every part of the head and never negative.
    importance = {name: part for name, part in switched.head.items() if name.startswith("importance_")}
    parts = set(switched.head) - set(importance)
    assert set(importance) == ({f"importance_{name}" for name in parts} if method == "ewc" else set())
    assert all((part >= 0).all() and part.any() for part in importance.values())
    held = len(switched.exemplars)
    assert held == (len(carryover.exemplars) or len(carryover.check_rows) if switched.plan.rehearses else 0)
