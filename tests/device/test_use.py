"""A device at work: predictions and evaluations agree with scikit-learn; outcomes, acceptance set, going back."""

import json

import numpy as np
import pytest
from scipy.special import softmax
from sklearn.metrics import balanced_accuracy_score, confusion_matrix

from hyperforecast.checks import InputError
from hyperforecast.device import (
    DeviceFolder, FolderDamaged, UpdateStatus, carryover_bundle, evaluate, keep_acceptance, predict, record_outcome,
    roll_back, update,
)
from hyperforecast.increments import Increment, check_increment
from hyperforecast.learning import HeadTrainer
from hyperforecast.settings import Plan, Settings
from hyperforecast.storage import bundle_checksum

GOOD = Settings(0.02, 1.0, 10)
# Forgets old classes for new ones.
FORGETFUL = Settings(0.3, 0.001, 1)


def clouds(labels, *, seed=0, rows=40, features=6, apart=4.0):
    """Return an increment of Gaussian classes; a label always lies at the same place."""
    rng = np.random.default_rng(seed)
    places = [np.random.default_rng([7, *str(label).encode()]).normal(0, apart / np.sqrt(2), features)
              for label in labels]
    X = np.concatenate([rng.normal(0, 1, (rows, features)) + place for place in places])
    return check_increment(X, np.repeat(labels, rows))


def content(generation):
    """Name what a generation carries, whatever its history."""
    return bundle_checksum(carryover_bundle(generation.carryover, []))


@pytest.fixture
def folder(tmp_path, forecasters):
    """A device after two updates."""
    folder = DeviceFolder(tmp_path / "arm")
    update(folder, clouds(["nut", "bolt", "rod"]), plan=Plan("wa", 8, 10, 16, 120))
    assert update(folder, clouds(["hook", "ring"], seed=1), settings=GOOD,
                  forecaster=forecasters["wa"]).status is UpdateStatus.KEPT
    return folder


def test_probabilities_are_the_softmax_of_the_scores_and_the_label_their_largest(folder):
    carryover, rows = folder.read().carryover, clouds(["nut", "ring"], seed=3)
    prediction = predict(carryover, rows.X)
    scores = HeadTrainer().class_scores(carryover.head, carryover.standardized(rows.X))
    np.testing.assert_allclose(prediction.probabilities, softmax(scores.astype(float), axis=1), rtol=1e-6)
    assert (prediction.labels == carryover.classes[scores.argmax(axis=1)]).all()


def test_evaluation_agrees_with_scikit_learn_and_sets_unknown_classes_aside(folder):
    carryover = folder.read().carryover
    rows = clouds(["nut", "ring", "hook", "plate"], seed=4, apart=1.0)
    evaluation = evaluate(carryover, rows)
    known = rows.y != "plate"
    predicted = predict(carryover, rows.X[known]).labels
    expected = confusion_matrix(rows.y[known], predicted, labels=carryover.classes)
    assert (evaluation.confusion == expected).all() and evaluation.unknown == {"plate": 40}
    # scikit-learn warns of classes that are predicted and have no rows; such classes count in neither mean.
    with pytest.warns(UserWarning, match="not in y_true"):
        assert evaluation.mean() == pytest.approx(balanced_accuracy_score(rows.y[known], predicted))
    told = evaluation.as_dict()
    assert json.loads(json.dumps(told)) == told
    assert [one["class"] for one in told["by_class"]] == ["nut", "hook", "ring"]


@pytest.mark.parametrize("labels, rule", [([1, 2], "must hold text"), (["plate"], "must hold a class that the device")])
def test_rows_that_say_nothing_about_the_device_are_refused(folder, labels, rule):
    with pytest.raises(InputError, match=rule):
        evaluate(folder.read().carryover, clouds(labels))


def test_labels_that_come_days_later_become_outcomes_of_past_updates(folder, forecasters):
    before = folder.read()
    rows = clouds(["nut", "hook", "ring"], seed=5)
    evaluation, told = record_outcome(folder, rows, 2)
    assert (told["update"], told["updates_later"]) == (2, 0)
    assert told["new"]["accuracy"] == evaluation.mean(["hook", "ring"])
    assert told["old"]["accuracy"] == evaluation.mean(["nut"])
    assert told["all"]["expected"] == before.history[1]["expected"]["all"]
    after = folder.read()
    outcome, = after.history[1]["outcomes"]
    assert outcome["all"] == evaluation.mean() and outcome["rows"] == 120 and len(outcome["by_class"]) == 3
    # The learning goes on from the same state, and there is still an update to go back on.
    assert content(after) == content(before) and folder.numbers() == [1, 3]
    # One update later the folder still holds what update 2 left; two later it does not.
    for number, labels in ((3, ["plate"]), (4, ["clip"])):
        assert update(folder, clouds(labels, seed=number), settings=GOOD, forecaster=forecasters["wa"]).entry["kept"]
        evaluation, told = record_outcome(folder, rows, 2)
        left = before if number == 3 else folder.read()
        assert (evaluation.confusion == evaluate(left.carryover, rows).confusion).all()
        assert told["updates_later"] == (0 if number == 3 else 2)
    assert [one["updates_later"] for one in folder.read().history[1]["outcomes"]] == [0, 0, 2]


def test_an_outcome_needs_an_update_that_was_kept(folder, forecasters):
    update(folder, clouds(["plate", "clip"], seed=2), settings=FORGETFUL, most_lost=0, forecaster=forecasters["wa"])
    assert not folder.read().history[-1]["kept"]
    for number, reason in ((9, "does not tell"), (3, "rolled back")):
        with pytest.raises(InputError, match=reason):
            record_outcome(folder, clouds(["nut"]), number)


def test_every_update_is_checked_on_the_acceptance_set(folder, forecasters):
    keep_acceptance(folder, clouds(["nut", "bolt", "plate"], seed=6))
    generation = folder.read()
    assert len(generation.care.acceptance) == 120 and generation.care.steps[-1]["step"] == "acceptance set"
    assert (folder.read().care.acceptance.X == clouds(["nut", "bolt", "plate"], seed=6).X).all()
    report = update(folder, clouds(["plate", "clip"], seed=2), settings=FORGETFUL, most_lost_by_class=0.3,
                    forecaster=forecasters["wa"])
    assert report.status is UpdateStatus.ROLLED_BACK
    assert any("acceptance rows" in reason for reason in report.entry["reasons"])
    # Two old classes of 40 rows each, and one that this update brought.
    accepted = report.entry["acceptance"]
    assert accepted["rows"] == 120 and accepted["old_before"] == evaluate(generation.carryover, clouds(
        ["nut", "bolt"], seed=6)).mean() and accepted["new"] is not None
    keep_acceptance(folder, None)
    assert folder.read().care.acceptance is None


def test_acceptance_rows_are_not_learned_and_not_counted_in_the_memory_limit(folder, tmp_path, forecasters):
    other = DeviceFolder(tmp_path / "other")
    update(other, clouds(["nut", "bolt", "rod"]), plan=Plan("wa", 8, 10, 16, 120))
    update(other, clouds(["hook", "ring"], seed=1), settings=GOOD, forecaster=forecasters["wa"])
    keep_acceptance(folder, clouds(["nut", "bolt"], seed=6, rows=200))
    for one in (folder, other):
        update(one, clouds(["plate"], seed=2), settings=GOOD, forecaster=forecasters["wa"])
    assert content(folder.read()) == content(other.read())


def test_rollback_undoes_an_update_and_once_more_brings_it_back(folder):
    second = folder.read()
    first = folder.before()
    record_outcome(folder, clouds(["nut"]), 2)
    back = roll_back(folder, because="the labels were wrong")
    assert content(back) == content(first) and back.number == 4
    assert back.history[1]["undone"] and back.history[1]["outcomes"] and "undone" not in back.history[0]
    step = back.care.steps[-1]
    assert (step["undone"], step["again"], step["because"]) == ([2], [], "the labels were wrong")
    with pytest.raises(InputError, match="undone"):
        record_outcome(folder, clouds(["nut"]), 2)
    again = roll_back(folder)
    assert content(again) == content(second) and "undone" not in again.history[1]
    assert again.care.steps[-1]["again"] == [2]


def test_after_a_rejected_update_rollback_undoes_the_last_one_that_was_kept(folder, forecasters):
    report = update(folder, clouds(["plate", "clip"], seed=2), settings=FORGETFUL, most_lost=0,
                    forecaster=forecasters["wa"])
    assert report.status is UpdateStatus.ROLLED_BACK
    back = roll_back(folder)
    assert back.carryover.classes.tolist() == ["bolt", "nut", "rod"]
    assert [bool(one.get("undone")) for one in back.history] == [False, True, False]


def test_rollback_passes_over_a_damaged_generation(folder):
    first = folder.before()
    (folder.path / "generation-000002" / "scale.npy").write_bytes(b"")
    with pytest.raises(FolderDamaged):
        folder.read()
    assert content(roll_back(folder)) == content(first) == content(folder.read()) and folder.numbers() == [1, 3]


def test_there_must_be_something_to_go_back_to(tmp_path):
    folder = DeviceFolder(tmp_path / "arm")
    update(folder, clouds(["nut", "bolt", "rod"]), plan=Plan("wa", 8, 5, 16, 120))
    with pytest.raises(InputError, match="none before it"):
        roll_back(folder)


def test_an_acceptance_set_may_be_a_view_of_another_kind_of_memory(folder):
    rows = clouds(["nut", "rod"], seed=8)
    keep_acceptance(folder, Increment(rows.X[::2], rows.y[::2]))
    assert (folder.read().care.acceptance.y == rows.y[::2]).all()
