"""Trainers that are not ours, through every door: gathering, fitting, searching, a contest and the update cycle."""

import doctest
import json

import numpy as np
import pytest

from hyperforecast.checks import InputError
from hyperforecast.describing import DESCRIPTORS
from hyperforecast.device import DeviceFolder, UpdateStatus, update
from hyperforecast.increments import check_increment
from hyperforecast.learning import HeadTrainer, Job, close_boundary, open_boundary, predict_codes, trainer, try_settings
from hyperforecast.settings import Plan, Settings, SettingsBox
from hyperforecast.workshop.contest import run_contest
from hyperforecast.workshop.fitting import fit_forecaster, load_dataset, models, networks
from hyperforecast.workshop.gathering import RecordsFile, gather, run_trajectory
from hyperforecast.workshop.searching import prepare_search
from hyperforecast.workshop.streams import load_streams

STREAMS = "".join(
    f'[[stream]]\nname = "{family}"\nsource = "{family}"\nseeds = [0]\nincrements = 3\nclasses = 6\n'
    f"raw_dimension = 6\nrows_per_class = 14\n"
    for family in ("synthetic_gaussian", "synthetic_rectified", "synthetic_own_covariance"))
PLAN = Plan("wa", hidden_units=8, passes=3, batch_size=16, memory_limit=80)
# What each supplies of the descriptors of the model.
SUPPLIED = {"sgd": set(), "torch": {"confidence_new", "importance_mean", "anchor_curvature"}}


@pytest.fixture(scope="module", params=["sgd", "torch"])
def name(request):
    if request.param == "torch":
        pytest.importorskip("torch", reason="needs PyTorch: pip install torch==2.13.0")
    return request.param


@pytest.fixture(scope="module")
def foreign(name):
    """The trainer."""
    if name == "sgd":
        from sgd_trainer import SgdTrainer
        return SgdTrainer()
    from torch_trainer import TorchTrainer
    return TorchTrainer()


@pytest.fixture(scope="module")
def definitions(tmp_path_factory):
    path = tmp_path_factory.mktemp("streams") / "streams.toml"
    path.write_text(STREAMS)
    return load_streams(path)


@pytest.fixture(scope="module")
def gathered(foreign, definitions, tmp_path_factory):
    """A `RecordsFile` of two sources, gathered with the trainer."""
    path = tmp_path_factory.mktemp("foreign") / "records.sqlite"
    gather(definitions[:2], path, methods=("wa",), attempts=(16, 0, 8), trainer=foreign)
    return RecordsFile(path)


@pytest.fixture(scope="module")
def forecaster(gathered):
    """Fitted on those records."""
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(models, "ROUNDS", 20)
        patch.setattr(models, "SMALL_ROUNDS", 10)
        patch.setattr(networks, "MOST_EPOCHS", 8)
        patch.setattr(models, "LARGE", {"num_leaves": 31, "min_data_in_leaf": 20})
        return fit_forecaster(load_dataset(gathered, "wa"), recipe={"trainer": "not ours"})


def clouds(labels, *, seed=0, rows=30, features=6):
    """Return an increment of Gaussian classes; a label always lies at the same place."""
    rng = np.random.default_rng(seed)
    places = [np.random.default_rng([7, *label.encode()]).normal(0, 1.5, features) for label in labels]
    X = np.concatenate([rng.normal(0, 1, (rows, features)) + place for place in places])
    return check_increment(X, np.repeat(labels, rows))


INCREMENTS = [["nut", "bolt"], ["hook"], ["ring", "nut"]]


def learned(foreign, settings, plan=PLAN, increments=INCREMENTS):
    """Return the carryover after some increments."""
    carryover = None
    for t, labels in enumerate(increments):
        boundary = open_boundary(plan, carryover, clouds(labels, seed=t), seed=t)
        carryover = close_boundary(foreign, boundary, try_settings(foreign, boundary, [settings], seed=t)[0], seed=t)
    return carryover


def accuracy(foreign, carryover, labels):
    rows = clouds(labels, seed=99)
    return np.mean(carryover.classes[predict_codes(foreign, carryover.head, carryover.standardized(rows.X))] == rows.y)


def check_advice(advice, box):
    """Advice is finite and in the box."""
    points = box.to_unit(advice.ranked)
    assert box.from_unit(points) == advice.ranked
    forecasts = (advice.expected_old, advice.expected_new, advice.expected_all)
    assert all(0 <= one.low <= one.value <= one.high <= 1 for one in forecasts)


# The protocol

def test_the_example_in_the_docstring_runs():
    outcome = doctest.testmod(trainer)
    assert outcome.attempted and not outcome.failed


def test_what_a_trainer_reports_goes_into_json():
    attempt = trainer.Attempt(Settings(0.1, 1.0), {}, np.isnan(np.float32(0)), np.int64(7))
    assert json.dumps([attempt.diverged, attempt.operations]) == "[false, 7.0]"


def test_a_class_of_one_or_two_first_and_old_classes_again(foreign):
    one_by_one = [["nut"], ["bolt"], ["rod"], ["nut", "plate"]]
    carryover = learned(foreign, Settings(0.05, 0.001, 10), increments=one_by_one)
    assert accuracy(foreign, carryover, ["nut", "bolt", "rod", "plate"]) > 0.8


def test_attempts_depend_on_nothing_beside_them(foreign):
    boundary = open_boundary(PLAN, learned(foreign, Settings(0.05, 0.001, 10)), clouds(["rod"]))
    jobs = [Job(boundary, Settings(rate, 0.01, 5)) for rate in (0.1, 0.01)]
    together = foreign.learn(jobs, seed=3)
    for attempt, job in zip(together, jobs):
        alone, = foreign.learn([job], seed=3)
        np.testing.assert_equal(vars(alone), vars(attempt))
    assert any((together[0].head[part] != together[1].head[part]).any() for part in together[0].head)


def test_rehearsal_keeps_what_is_forgotten_without(foreign):
    settings = {"wa": Settings(0.05, 0.001, 20), "lwf": Settings(0.05, 0.001)}
    old = {}
    for method in settings:
        plan = Plan(method, hidden_units=8, passes=10, batch_size=16, memory_limit=200)
        carryover = learned(foreign, settings[method], plan, INCREMENTS[:2])
        assert bool(len(carryover.exemplars)) == plan.rehearses
        old[method] = accuracy(foreign, carryover, INCREMENTS[0])
    assert old["wa"] > 0.9 and old["lwf"] < 0.9


def test_a_strong_penalty_holds_the_weights_and_a_stiff_one_runs_away():
    pytest.importorskip("torch", reason="needs PyTorch: pip install torch==2.13.0")
    from torch_trainer import TorchTrainer
    plan = Plan("ewc", hidden_units=8, passes=10, batch_size=16, memory_limit=80)
    carryover = learned(TorchTrainer(), Settings(0.05, 0.01), plan, INCREMENTS[:1])
    boundary = open_boundary(plan, carryover, clouds(["hook"]))
    before = carryover.head
    weak, strong, stiff = try_settings(TorchTrainer(), boundary, [
        Settings(0.01, 0.01), Settings(0.01, 1e4), Settings(1.0, 1e6)], seed=0)

    def moved(attempt):
        return sum((before[f"importance_{part}"] * (attempt.head[part][:len(old)] - old)**2).sum()
                   for part, old in before.items() if not part.startswith("importance_"))

    assert moved(strong) < 0.3 * moved(weak)
    assert [one.diverged for one in (weak, strong, stiff)] == [False, False, True]


# The doors

def test_what_the_trainer_does_not_supply_is_missing_from_the_records(name, gathered):
    trajectories = list(gathered.trajectories())
    assert [len(one.boundaries) for one in trajectories] == [2, 2]
    of_the_model = {one.name for one in DESCRIPTORS.values() if one.group == "model"}
    for boundary in (one for trajectory in trajectories for one in trajectory.boundaries):
        assert len(boundary.attempts) == 24
        known = {descriptor for descriptor, value in boundary.descriptors.items() if np.isfinite(value)}
        assert known & of_the_model == SUPPLIED[name] and len(known - of_the_model) > 20
        assert len({(attempt.accuracy_old, attempt.accuracy_new) for attempt in boundary.attempts}) > 5


def test_without_rehearsal_too(foreign, definitions):
    trajectory = run_trajectory(definitions[0], "ewc", seed=0, attempts=(4, 0, 2), trainer=foreign)
    attempts = [attempt for boundary in trajectory.boundaries for attempt in boundary.attempts]
    assert len(attempts) == 12 and all(attempt.settings.kept_per_class is None for attempt in attempts)


@pytest.mark.parametrize("of", ["its own", "the built-in trainer's"])
def test_advice_and_a_search(foreign, forecaster, forecasters, of):
    chosen = forecaster if of == "its own" else forecasters["wa"]
    carryover = learned(foreign, Settings(0.05, 0.001, 10))
    prepared = prepare_search(carryover, clouds(["rod"]), chosen, trainer=foreign)
    check_advice(prepared.advice, SettingsBox("wa", prepared.search.boundary.most_kept))
    found = prepared.run(strategy="tpe", attempts=12, warm=True, seed=0)
    assert found.settings[0] == prepared.advice.settings and len(prepared.search.attempts) == 12
    best = prepared.search.outcomes[found.settings.index(found.best)]
    assert best.all == max(one.all for one in prepared.search.outcomes) > 0.4


def test_a_contest(foreign, definitions, forecaster, tmp_path):
    contest = run_contest(definitions[2:], {"wa": forecaster}, tmp_path / "contest.json", kind="one_step",
                          plan=PLAN, trainer=foreign)
    steps = contest.pieces[0]["outcome"]
    assert len(steps) == 2
    for step in steps:
        on_selection = {policy: choice["selection"] for policy, choice in step["policies"].items()}
        # The best of more candidates is no worse.
        assert on_selection["advice"] <= on_selection["advice+4"] <= on_selection["advice+8"]
        assert on_selection["random-8"] <= on_selection["random-64"]
    assert steps[0]["policies"]["search-64"]["scoring"]["all"] > 0.6


def test_updates_of_a_device(foreign, forecaster, tmp_path):
    lenient = {"most_lost": 1.0, "most_lost_by_class": 1.0, "trainer": foreign}
    update(tmp_path / "arm", clouds(INCREMENTS[0]), plan=PLAN, **lenient)
    for t in (1, 2):
        report = update(tmp_path / "arm", clouds(INCREMENTS[t], seed=t), forecaster=forecaster, **lenient)
        assert report.status == UpdateStatus.KEPT
        check_advice(report.advice, SettingsBox("wa", PLAN.memory_limit))
    stored = DeviceFolder(tmp_path / "arm").read().carryover
    np.testing.assert_equal(stored.head, report.carryover.head)
    rows = stored.check_rows
    right = predict_codes(foreign, stored.head, rows.Z) == rows.y
    by_class = [right[rows.y == code].mean() for code in range(4)]
    assert report.entry["achieved"]["all"] == pytest.approx(np.mean(by_class))
    with pytest.raises(InputError, match="forecaster: must be given with a trainer of one's own"):
        update(tmp_path / "arm", clouds(["rod"]), **lenient)
    with pytest.raises(InputError, match="must hold a head that HeadTrainer scores a row with"):
        update(tmp_path / "arm", clouds(["rod"]))
    update(tmp_path / "built-in", clouds(INCREMENTS[0]), plan=PLAN)
    with pytest.raises(InputError, match=f"must hold a head that {type(foreign).__name__} scores a row with"):
        update(tmp_path / "built-in", clouds(["rod"]), forecaster=forecaster, trainer=foreign)
