"""The update cycle: what it advises, learns, checks, rolls back and writes down; and updates that are killed."""

import json
import os
import subprocess
import sys
from dataclasses import replace
from datetime import datetime

import numpy as np
import pytest

import hyperforecast
from hyperforecast.checks import InputError
from hyperforecast.classifier import GrowingClassifier
from hyperforecast.device import DeviceFolder, FolderBusy, UpdateStatus, carryover_bundle, cycle, update
from hyperforecast.forecasting import Preferences, TreeEnsemble, opening_settings, save_forecaster
from hyperforecast.increments import Increment, check_increment
from hyperforecast.learning import HeadTrainer
from hyperforecast.settings import METHODS, Plan, Settings
from hyperforecast.storage import bundle_checksum
from hyperforecast.workshop.fitting import fit_forecaster, load_dataset
from hyperforecast.workshop.gathering import RecordsFile, run_trajectory
from hyperforecast.workshop.streams import StreamDefinition

PLANS = {method: Plan(method, 8, 4, 16, 120) for method in METHODS}
# Learns nothing and forgets nothing; forgets old classes for new ones.
IDLE = Settings(1e-5, 1.0)
FORGETFUL = Settings(0.2, 0.01)
ONE_THREAD = {**os.environ, "OPENBLAS_NUM_THREADS": "1"}


@pytest.fixture(scope="module")
def forecasters(tmp_path_factory):
    """Small forecasters by method, gathered and fitted on the spot."""
    records = RecordsFile(tmp_path_factory.mktemp("gathered") / "records.sqlite", create=True)
    for family in ("gaussian", "drifting"):
        definition = StreamDefinition(family, f"synthetic_{family}", family, 0, increments=3, classes=6,
                                      raw_dimension=6, rows_per_class=20)
        for method in METHODS:
            records.store(run_trajectory(definition, method, seed=0, attempts=(16, 0, 0)))
    return {method: fit_forecaster(load_dataset(records, method), recipe={}) for method in METHODS}


def clouds(labels, *, seed=0, rows=40, features=6, apart=4.0):
    """Return an increment of Gaussian classes; a label always lies at the same place."""
    rng = np.random.default_rng(seed)
    places = [np.random.default_rng([7, *str(label).encode()]).normal(0, apart / np.sqrt(2), features)
              for label in labels]
    X = np.concatenate([rng.normal(0, 1, (rows, features)) + place for place in places])
    return check_increment(X, np.repeat(labels, rows))


def update(folder, increment, *, preferences=Preferences(unfamiliar="warn"), **options):
    """An update that follows the advice though these tiny forecasters know no such boundary."""
    return cycle.update(folder, increment, preferences=preferences, **options)


FIRST, SECOND, THIRD = ["nut", "bolt", "rod"], ["hook", "ring"], ["nut", "plate"]


@pytest.fixture
def started(tmp_path, forecasters):
    """A function that makes the device folder of a method with its first update."""
    def start(method="ewc", name="arm"):
        update(tmp_path / name, clouds(FIRST), plan=PLANS[method])
        return tmp_path / name
    return start


def content(folder):
    return bundle_checksum(carryover_bundle(DeviceFolder(folder).read().carryover, []))


# --- the cycle ------------------------------------------------------------------------------------------------------

@pytest.mark.parametrize("method", METHODS)
def test_first_and_later_updates(tmp_path, forecasters, method):
    # Without limits: what is looked at here is the cycle, not the rules.
    lenient = {"most_lost": 1.0, "most_lost_by_class": 1.0}
    first = update(tmp_path / "arm", clouds(FIRST), plan=PLANS[method], **lenient)
    assert (first.status, first.generation, first.advice) == (UpdateStatus.KEPT, 1, None)
    assert first.entry["settings"] == opening_settings(PLANS[method]).as_dict()
    assert first.entry["classes_new"] == sorted(FIRST) and first.entry["classes_old"] == 0
    assert first.entry["achieved"]["old"] is None and first.entry["achieved"]["new"] > 0.8
    for number, labels, new, again in ((2, SECOND, ["hook", "ring"], []), (3, THIRD, ["plate"], ["nut"]),
                                       (4, ["ring"], [], ["ring"])):
        report = update(str(tmp_path / "arm"), clouds(labels, seed=number), forecaster=forecasters[method], **lenient)
        entry = report.entry
        assert (report.status, report.generation, entry["number"]) == (UpdateStatus.KEPT, number, number)
        assert (entry["classes_new"], entry["classes_again"]) == (new, again)
        assert entry["settings"] == report.advice.settings.as_dict() == entry["advice"]["settings"]
        assert entry["expected"] == entry["advice"]["expected"]
        assert entry["forecaster"] == forecasters[method].checksum and not entry["overruled"]
        assert entry["forecaster_version"] == hyperforecast.__version__
        assert entry["descriptors"]["classes_new"] == len(new) and entry["rows"] == 40 * len(labels)
        assert 0 <= entry["achieved"]["old"] <= 1 and entry["operations"] > 0 and entry["seconds"] > 0
        assert datetime.fromisoformat(entry["time"]).utcoffset().total_seconds() == 0
    generation = DeviceFolder(tmp_path / "arm").read()
    assert [one["number"] for one in generation.history] == [1, 2, 3, 4]
    assert generation.history[-1] == json.loads(json.dumps(entry)) == entry
    assert generation.carryover.n_boundaries == 4 and len(generation.carryover.classes) == 6
    assert report.as_dict() == {"status": "kept", "generation": 4, **entry}


def test_achieved_is_measured_on_rows_never_trained_on(started, forecasters):
    folder = started()
    before = DeviceFolder(folder).read().carryover
    increment = clouds(SECOND, seed=1)
    report = update(folder, increment, forecaster=forecasters["ewc"], settings=IDLE)
    rows, head = report.carryover.check_rows, report.carryover.head
    by_class = [np.mean(HeadTrainer().class_scores(head, rows.Z[rows.y == code]).argmax(axis=1) == code)
                for code in range(5)]
    achieved = report.entry["achieved"]
    assert achieved["rows"] == len(rows) == 5 * 8
    assert achieved["old"] == pytest.approx(np.mean(by_class[:3]))
    assert achieved["new"] == pytest.approx(np.mean(by_class[3:]))
    assert achieved["all"] == pytest.approx(np.mean(by_class))
    assert achieved["old_before"] == pytest.approx(np.mean(before.best_check_accuracy))
    by_class_told = report.entry["by_class"]
    assert by_class_told["class"] == report.carryover.classes.tolist() and by_class_told["check_rows"] == [8] * 5
    assert by_class_told["arrived"] == [0, 0, 0, 40, 40] and by_class_told["before"][3:] == [None, None]
    np.testing.assert_allclose(by_class_told["after"], by_class, atol=1e-4)
    np.testing.assert_allclose(by_class_told["before"][:3], before.best_check_accuracy, atol=1e-4)
    exemplars = report.carryover.exemplars.Z
    assert not {row.tobytes() for row in rows.Z} & {row.tobytes() for row in exemplars}


@pytest.mark.parametrize("method", METHODS)
def test_a_growing_classifier_learns_the_same_bit_for_bit(tmp_path, forecasters, method):
    plan, lenient = PLANS[method], {"most_lost": 1.0, "most_lost_by_class": 1.0}
    classifier = GrowingClassifier(**plan.as_dict(), forecaster=forecasters[method], random_state=5)
    for number, labels in enumerate((FIRST, SECOND, THIRD)):
        increment = clouds(labels, seed=number)
        classifier.partial_fit(increment.X, increment.y)
        update(tmp_path / "arm", increment, plan=plan if number == 0 else None, forecaster=forecasters[method], seed=5,
               preferences=Preferences(), **lenient)
    assert content(tmp_path / "arm") == bundle_checksum(carryover_bundle(classifier.carryover_, []))


def test_the_order_of_history_is_that_of_numbers_even_if_the_clock_jumps_back(started, forecasters, monkeypatch):
    class Earlier(datetime):
        @classmethod
        def now(cls, zone):
            return datetime(1999, 1, 1, tzinfo=zone)

    folder = started()
    monkeypatch.setattr(cycle, "datetime", Earlier)
    update(folder, clouds(SECOND), forecaster=forecasters["ewc"], settings=IDLE)
    history = DeviceFolder(folder).read().history
    assert [entry["number"] for entry in history] == [1, 2] and history[1]["time"] < history[0]["time"]


def test_a_history_holds_no_rows_of_data(started, forecasters):
    folder = started()
    increment = clouds(SECOND)
    update(folder, increment, forecaster=forecasters["ewc"])
    told = json.dumps(DeviceFolder(folder).read().history[-1])
    assert not any(repr(float(value)) in told for value in np.unique(increment.X))
    assert len(told) < 12_000


def test_a_dry_run_stops_after_the_advice_and_changes_nothing(started, forecasters, tmp_path):
    dry = update(tmp_path / "new", clouds(FIRST), plan=PLANS["wa"], dry_run=True)
    assert dry.status is None and dry.entry["settings"] == opening_settings(PLANS["wa"]).as_dict()
    assert not (tmp_path / "new").exists()
    folder = started()
    before = DeviceFolder(folder).read()
    with DeviceFolder(folder).locked():
        dry = update(folder, clouds(SECOND), forecaster=forecasters["ewc"], dry_run=True)
    assert (dry.status, dry.generation, dry.entry["kept"]) == (None, None, False)
    assert dry.entry["settings"] == dry.advice.settings.as_dict() and "achieved" not in dry.entry
    assert dry.as_dict()["status"] == "dry_run" and json.dumps(dry.as_dict())
    assert DeviceFolder(folder).read().checksum == before.checksum


# --- the rules ------------------------------------------------------------------------------------------------------

def test_a_device_keeps_what_advice_is_to_care_for(tmp_path, forecasters):
    told = Preferences(old_weight=0.9, now_weight=0.5, tolerance=0.02, unfamiliar="warn")
    update(tmp_path / "cell", clouds(FIRST), plan=PLANS["wa"], preferences=told)
    folder, forecaster = DeviceFolder(tmp_path / "cell"), forecasters["wa"]
    kept = cycle.update(folder, clouds(SECOND, seed=1), forecaster=forecaster, dry_run=True)
    assert kept.entry["preferences"] == told.as_dict() and kept.advice.preferences == told
    usual = update(folder, clouds(SECOND, seed=1), forecaster=forecaster, preferences=Preferences(), dry_run=True)
    assert usual.advice.preferences == Preferences()
    assert kept.advice.expected_old.value >= usual.advice.expected_old.value
    # A dry run leaves it as it was; an update does not.
    assert cycle.update(folder, clouds(SECOND, seed=1), forecaster=forecaster).advice.preferences == told
    update(folder, clouds(THIRD, seed=2), forecaster=forecaster, preferences=Preferences(now_weight=1))
    assert cycle.kept_preferences(folder.read().history) == Preferences(now_weight=1)
    with pytest.raises(InputError, match="^old_weight: must be a number from 0 to 1; received 2"):
        update(folder, clouds(THIRD, seed=3), forecaster=forecaster, preferences=Preferences(old_weight=2))


def test_a_boundary_unlike_the_records_is_tried_or_left_to_the_constant(started, forecasters):
    folder, odd = started("wa"), clouds(SECOND, seed=1)
    odd = check_increment(odd.X * 1000, odd.y)
    report = update(folder, odd, forecaster=forecasters["wa"], preferences=Preferences(unfamiliar="try 3"),
                    another_extractor=True)
    tried, entry = report.entry["unfamiliar"]["tried"], report.entry
    assert entry["unfamiliar"]["policy"] == "try 3" and entry["advice"]["familiarity"]["why"]
    assert sorted(map(str, (one["settings"] for one in tried))) == sorted(
        str(one.as_dict()) for one in report.advice.ranked[:3])
    accuracies = [one["check_accuracy"] for one in tried]
    assert accuracies == sorted(accuracies, reverse=True)
    first = (entry["earlier_tries"] or [entry])[0]
    assert first["settings"] == tried[0]["settings"]
    if not first["diverged"]:
        assert accuracies[0] == pytest.approx(first["achieved"]["all"], abs=1e-4)
    # The same settings alone come out the same.
    if entry["kept"]:
        alone = update(started("wa", name="alone"), odd, forecaster=forecasters["wa"], settings=Settings(**entry["settings"]),
                       preferences=Preferences(unfamiliar="constant"), another_extractor=True)
        assert alone.entry["achieved"] == entry["achieved"] and alone.entry["unfamiliar"] is None
    constant = update(started("wa", name="other"), odd, forecaster=forecasters["wa"], retries=0,
                      preferences=Preferences(unfamiliar="constant"), another_extractor=True)
    assert constant.entry["unfamiliar"] == {"policy": "constant", "tried": []}
    assert constant.entry["settings"] == constant.advice.constant.as_dict()


@pytest.mark.parametrize("damaged", [{"old_weight": "much"}, {"weight": 1}, [], "old"])
def test_damaged_preferences_are_refused(damaged):
    with pytest.raises(InputError):
        cycle.kept_preferences([{"preferences": damaged}])
    assert cycle.kept_preferences([{}]) == Preferences()


def rolled_back(folder, report, before):
    """Assert that nothing but the history has changed."""
    assert report.status == UpdateStatus.ROLLED_BACK == 3 and not report.entry["kept"]
    assert content(folder) == before
    assert DeviceFolder(folder).read().history[-1] == report.entry
    assert report.generation == DeviceFolder(folder).read().number
    return report.entry["reasons"]


def test_a_diverged_update_is_rolled_back(started, forecasters):
    folder = started()
    before = content(folder)
    # An anchor of strength 10^6 at rate 1 is far beyond what gradient descent bears (rate times curvature below 2).
    report = update(folder, clouds(SECOND), forecaster=forecasters["ewc"], settings=Settings(1.0, 1e6))
    assert rolled_back(folder, report, before) == ["training diverged"] and report.entry["diverged"]
    assert report.entry["overruled"] and report.entry["earlier_tries"] == []
    after = update(folder, clouds(SECOND), forecaster=forecasters["ewc"], settings=IDLE)
    assert (after.status, after.entry["number"], after.entry["classes_old"]) == (UpdateStatus.KEPT, 3, 3)


def test_an_overruled_advice_is_written_down_with_who_and_why(started, forecasters):
    folder = started()
    report = update(folder, clouds(SECOND), forecaster=forecasters["ewc"], settings={"learning_rate": 1e-5},
                    by="shift 2", because="the belt must not stop today")
    entry = DeviceFolder(folder).read().history[-1]
    assert entry == report.entry and entry["overruled"] == {"by": "shift 2", "because": "the belt must not stop today"}
    # What was not given is as advised; both forecasts stand side by side, and what came of it.
    advised = entry["advice"]["settings"]
    assert entry["settings"] == {**advised, "learning_rate": 1e-5} != advised
    assert set(entry["expected"]) == set(entry["advice"]["expected"]) and entry["achieved"]["rows"] > 0


@pytest.mark.parametrize("given, wrong", [
    ({"by": "shift 2"}, "because"), ({"settings": IDLE, "because": "so"}, "by"),
    ({"by": "shift 2", "because": "so"}, "settings"), ({"settings": IDLE, "by": " ", "because": "so"}, "by"),
    ({"settings": {"speed": 1}}, "settings"), ({"settings": {"learning_rate": 7.0}}, "learning_rate"),
])
def test_overruling_without_a_reason_or_settings_is_refused(started, forecasters, given, wrong):
    folder = started()
    before = content(folder)
    with pytest.raises(InputError) as refused:
        update(folder, clouds(SECOND), forecaster=forecasters["ewc"], **given)
    assert refused.value.parameter == wrong and content(folder) == before


@pytest.mark.parametrize("limits, reasons", [
    ({"most_lost": 1.0, "most_lost_by_class": 1.0}, []),
    ({"most_lost_by_class": 1.0}, ["accuracy on old classes fell by"]),
    ({"most_lost": 1.0}, ["accuracy on class"]),
    ({}, ["accuracy on old classes fell by", "accuracy on class"]),
])
def test_an_update_that_loses_old_classes_is_rolled_back(started, forecasters, limits, reasons):
    folder = started()
    before = content(folder)
    report = update(folder, clouds(SECOND), forecaster=forecasters["ewc"], settings=FORGETFUL, **limits)
    achieved = report.entry["achieved"]
    assert achieved["old_before"] - achieved["old"] > 0.6
    if reasons:
        given = rolled_back(folder, report, before)
        assert all(any(reason in one for one in given) for reason in reasons)
        assert all(any(reason in one for reason in reasons) for one in given)
    else:
        assert report.status == UpdateStatus.KEPT


def test_a_class_with_few_check_rows_is_not_judged_alone(tmp_path, forecasters):
    # 19 rows: a fifth held back is 3 check rows for each class.
    update(tmp_path / "arm", clouds(FIRST, rows=19), plan=PLANS["ewc"])
    report = update(tmp_path / "arm", clouds(SECOND), forecaster=forecasters["ewc"], settings=FORGETFUL, most_lost=1.0)
    assert report.status == UpdateStatus.KEPT and report.entry["achieved"]["old"] < 0.4


def certain(forecaster, low):
    """Return the forecaster with models that expect at least the accuracy `low` everywhere, 0.02 more in the middle."""
    def constant(value):
        return TreeEnsemble(forecaster.models["old"].n_features, *[np.empty(0)] * 4, np.array([-1]), np.array([value]))

    models = {**forecaster.models, "old": constant(low + 0.02), "new": constant(low + 0.02),
              "spread_all": constant(np.log(0.02))}
    return replace(forecaster, models=models, thresholds=dict.fromkeys(forecaster.thresholds, 1.0))


@pytest.mark.parametrize("beyond, kept", [(-0.01, True), (0.01, False)])
def test_an_update_below_its_forecast_by_more_than_the_noise_is_rolled_back(started, forecasters, beyond, kept):
    folder, increment = started(), clouds(SECOND, rows=20)
    before = content(folder)
    lenient = {"most_lost": 1.0, "most_lost_by_class": 1.0, "settings": IDLE}
    reached = update(folder, increment, forecaster=certain(forecasters["ewc"], 0.0), **lenient).entry["achieved"]
    DeviceFolder(folder).revert()
    # Three old classes have 8 check rows and two new ones 4: the variance of the mean over the five is
    # low (1 - low) (3 / 8 + 2 / 4) / 25. Where does low - 2 s pass what is reached?
    assert reached["rows"] == 3 * 8 + 2 * 4 and 0.3 < reached["all"] < 0.7
    lows = np.linspace(reached["all"], 1, 100_000)
    low = lows[np.argmax(lows - 2 * np.sqrt(lows * (1 - lows) * (3 / 8 + 2 / 4) / 25) > reached["all"])]
    report = update(folder, increment, forecaster=certain(forecasters["ewc"], low + beyond), **lenient)
    assert report.entry["expected"]["all"]["low"] == pytest.approx(low + beyond)
    if kept:
        assert report.status == UpdateStatus.KEPT
    else:
        assert f"below the forecast's low end {low + beyond:.2f}" in rolled_back(folder, report, before)[0]


def test_mixed_up_labels_are_rolled_back(started, forecasters):
    folder = started("wa")
    before = content(folder)
    # Rows of the old classes arrive under new names.
    mixed = Increment(clouds(FIRST, seed=1).X, clouds(["hook", "ring", "plate"]).y)
    good = Settings(0.05, 0.1, 20)
    report = update(folder, mixed, forecaster=forecasters["wa"], settings=good)
    assert rolled_back(folder, report, before)[0].startswith("accuracy on old classes fell by")
    report = update(folder, clouds(["hook", "ring", "plate"], seed=1), forecaster=forecasters["wa"],
                    settings=good)
    assert report.status == UpdateStatus.KEPT and report.entry["achieved"]["all"] > 0.7


class Reckless(HeadTrainer):
    """Diverges in its first attempts, as many as it is told."""

    def __init__(self, failures):
        self.failures = failures

    def learn(self, jobs, *, seed):
        self.failures -= 1
        return [replace(one, diverged=one.diverged or self.failures >= 0) for one in super().learn(jobs, seed=seed)]


@pytest.mark.parametrize("failures, retries, kept", [(1, 1, True), (2, 1, False), (1, 0, False), (3, 3, True)])
def test_a_try_that_is_not_kept_is_followed_by_the_next_alternatives(started, forecasters, failures, retries, kept):
    folder = started()
    report = update(folder, clouds(SECOND), forecaster=forecasters["ewc"], trainer=Reckless(failures), retries=retries,
                    most_lost=1.0, most_lost_by_class=1.0)
    tried = [*report.entry["earlier_tries"], report.entry]
    assert report.entry["kept"] == kept and len(tried) == min(failures, retries) + 1
    assert [one["settings"] for one in tried] == [one.as_dict() for one in report.advice.ranked[:len(tried)]]
    assert all(one["reasons"] == ["training diverged"] for one in tried[:-1])


def test_a_first_update_tries_again_more_slowly_and_stores_nothing_if_it_must_roll_back(tmp_path):
    report = update(tmp_path / "arm", clouds(FIRST), plan=PLANS["wa"], trainer=Reckless(2))
    assert (report.status, report.generation, report.carryover) == (UpdateStatus.ROLLED_BACK, None, None)
    rates = [one["settings"]["learning_rate"] for one in (*report.entry["earlier_tries"], report.entry)]
    assert rates == pytest.approx([0.02, 0.002])
    assert DeviceFolder(tmp_path / "arm").numbers() == []
    report = update(tmp_path / "arm", clouds(FIRST), plan=PLANS["wa"], trainer=Reckless(1))
    assert (report.status, report.generation) == (UpdateStatus.KEPT, 1)


def test_with_no_check_rows_only_divergence_counts(tmp_path, forecasters):
    # Four rows of a class are too few to hold one back.
    update(tmp_path / "arm", clouds(FIRST, rows=4), plan=PLANS["ewc"])
    report = update(tmp_path / "arm", clouds(SECOND, rows=4), forecaster=forecasters["ewc"], settings=FORGETFUL)
    assert report.entry["kept"]
    assert report.entry["achieved"] == {"old": None, "new": None, "all": None, "old_before": None, "rows": 0}


# --- input that breaks a rule ---------------------------------------------------------------------------------------

@pytest.mark.parametrize("arguments, line", [
    ({"increment": clouds(SECOND, features=5)}, "increment: must have 6 features as before; received 5"),
    ({"increment": clouds([1, 2])}, "y: must hold text as before"),
    ({"plan": Plan("ewc", 9)}, "plan: must stay as the first update fixed it"),
    ({"plan": Plan("other")}, "method: must be one of"),
    ({"settings": Settings(7.0, 1.0)}, "learning_rate: must be a number from"),
    ({"settings": Settings(0.1, 1.0, 20)}, "kept_per_class: must be None"),
    ({"retries": -1}, "retries: must be a whole number"),
    ({"most_lost": 1.5}, "most_lost: must be a number from 0 to 1"),
    ({"most_lost_by_class": float("nan")}, "most_lost_by_class: must be a number"),
    ({"seed": -1}, "seed: must be a whole number"),
])
def test_bad_input_is_one_line_and_changes_nothing(started, forecasters, arguments, line):
    folder = started()
    before = DeviceFolder(folder).read().checksum
    with pytest.raises(InputError, match=line):
        update(folder, **{"increment": clouds(SECOND), "forecaster": forecasters["ewc"], **arguments})
    assert DeviceFolder(folder).read().checksum == before and DeviceFolder(folder).numbers() == [1]


def test_a_forecaster_for_another_method_is_refused(started, forecasters):
    with pytest.raises(InputError, match="forecaster: must be one for ewc, the method of the plan; received wa"):
        update(started(), clouds(SECOND), forecaster=forecasters["wa"])


@pytest.mark.parametrize("head", [{}, {"weights": np.zeros(3)}, {"output_weights": np.zeros((8, 2), np.float32)},
                                  {"output_weights": np.zeros((6, 2), np.float32),
                                   "output_bias": np.zeros((1, 2), np.float32)}])
def test_a_head_of_another_trainer_is_refused(started, forecasters, head):
    folder = DeviceFolder(started())
    with folder.locked():
        generation = folder.read()
        folder.store(replace(generation.carryover, head=head), generation.history)
    with pytest.raises(InputError, match="must hold a head that HeadTrainer scores a row with"):
        update(folder, clouds(SECOND), forecaster=forecasters["ewc"])


def test_a_first_update_needs_a_plan_and_makes_no_folder_without(tmp_path):
    with pytest.raises(InputError, match="make a first update, with a plan"):
        update(tmp_path / "arm", clouds(FIRST))
    with pytest.raises(InputError, match="passes"):
        update(tmp_path / "arm", clouds(FIRST), plan=Plan(passes=0))
    assert not (tmp_path / "arm").exists()


def test_the_plan_may_be_repeated(started, forecasters):
    report = update(started(), clouds(SECOND), plan=PLANS["ewc"], forecaster=forecasters["ewc"], settings=IDLE)
    assert report.entry["kept"]


def test_an_update_while_another_is_at_work_is_refused(started, forecasters):
    folder = started()
    with DeviceFolder(folder).locked(), pytest.raises(FolderBusy):
        update(folder, clouds(SECOND), forecaster=forecasters["ewc"])


# --- the lower storey -----------------------------------------------------------------------------------------------

NUMPY_ALONE = """
import sys

UPPER = {"scipy", "sklearn", "lightgbm", "joblib", "pandas", "matplotlib", "pyarrow", "PIL"}

class Blocked:
    def find_spec(self, name, path=None, target=None):
        if name.split(".")[0] in UPPER or name.startswith("hyperforecast.workshop"):
            raise ModuleNotFoundError(f"no {name} on a device", name=name)

sys.meta_path.insert(0, Blocked())
import numpy as np
from hyperforecast import GrowingClassifier, advise
from hyperforecast.device import update
from hyperforecast.forecasting import load_forecaster
from hyperforecast.increments import read_increment
from hyperforecast.settings import Plan

folder, forecaster, *files = sys.argv[1:]
for number, file in enumerate(files):
    report = update(folder, read_increment(file), plan=None if number else Plan("wa", 8, 4, 16, 120),
                    forecaster=load_forecaster(forecaster), most_lost=1, most_lost_by_class=1)
    print(report.status.name, report.advice is not None and [str(reason) for reason in report.advice.reasons] != None)
first, second = map(read_increment, files[:2])
classifier = GrowingClassifier(forecaster=forecaster).partial_fit(first.X, first.y)
print(advise(classifier, second.X, second.y).settings.as_dict().keys() == report.advice.settings.as_dict().keys())
assert not UPPER & {name.split(".")[0] for name in sys.modules}
"""


def test_advice_and_updates_need_numpy_alone(tmp_path, forecasters):
    save_forecaster(tmp_path / "f.forecaster", forecasters["wa"])
    files = []
    for number, labels in enumerate((FIRST, SECOND, THIRD)):
        increment = clouds(labels, seed=number)
        files.append(str(tmp_path / f"{number}.npz"))
        np.savez(files[-1], X=increment.X, y=increment.y)
    run = subprocess.run([sys.executable, "-W", "error", "-c", NUMPY_ALONE, str(tmp_path / "arm"),
                          str(tmp_path / "f.forecaster"), *files], capture_output=True, text=True, env=ONE_THREAD)
    assert run.returncode == 0, run.stderr
    assert run.stdout.split() == ["KEPT", "False", "KEPT", "True", "KEPT", "True", "True"]
