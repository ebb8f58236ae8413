"""Classes looked after by hand: floors, merging, renaming, retiring, and erasing without a trace."""

import json
import shutil

import numpy as np
import pytest
from scipy.special import log_softmax

from hyperforecast.checks import InputError
from hyperforecast.device import (
    DeviceFolder, UpdateStatus, carryover_bundle, class_table, erase, evaluate, keep_acceptance, merge, predict,
    rename, retire, roll_back, set_floor, update,
)
from hyperforecast.device.status import FolderNotWritable
from hyperforecast.increments import check_increment
from hyperforecast.learning import HeadTrainer
from hyperforecast.settings import METHODS, Plan, Settings
from hyperforecast.storage import bundle_checksum

FORGETFUL = Settings(0.3, 0.001, 1)


def clouds(labels, *, seed=0, rows=40, features=6, apart=4.0):
    """Return an increment of Gaussian classes; a label always lies at the same place."""
    rng = np.random.default_rng(seed)
    places = [np.random.default_rng([7, *str(label).encode()]).normal(0, apart / np.sqrt(2), features)
              for label in labels]
    X = np.concatenate([rng.normal(0, 1, (rows, features)) + place for place in places])
    return check_increment(X, np.repeat(labels, rows))


def learned(path, method="wa", *, labels=(["nut", "bolt", "rod"], ["hook", "ring"])):
    """A device after two updates with settings of one's own."""
    folder, plan = DeviceFolder(path), Plan(method, 8, 10, 16, 120)
    good = Settings(0.02, 1.0, 10 if plan.rehearses else None)
    for seed, names in enumerate(labels):
        report = update(folder, clouds(names, seed=seed), plan=plan if not seed else None, settings=good, most_lost=1,
                        most_lost_by_class=1)
        assert report.entry["kept"]
    return folder


@pytest.fixture(scope="module")
def template(tmp_path_factory):
    return learned(tmp_path_factory.mktemp("template") / "arm").path


@pytest.fixture
def folder(tmp_path, template):
    return DeviceFolder(shutil.copytree(template, tmp_path / "arm"))


def content(generation):
    return bundle_checksum(carryover_bundle(generation.carryover, []))


def scores(carryover, X):
    return HeadTrainer().class_scores(carryover.head, carryover.standardized(X)).astype(float)


# --- floors ----------------------------------------------------------------------------------------------------------

def test_the_table_tells_of_every_class(folder):
    set_floor(folder, "rod", 0.9)
    keep_acceptance(folder, clouds(["nut"], seed=4, rows=10))
    generation = folder.read()
    table = class_table(generation)
    assert [one.label for one in table] == generation.carryover.classes.tolist()
    assert [one.floor for one in table] == [None, None, 0.9, None, None]
    assert [one.acceptance_rows for one in table] == [0, 10, 0, 0, 0]
    # 120 rows for 3 classes allow 8 check rows each, for 5 classes 6: the first ones are cut.
    assert [(one.learned_rows, one.check_rows) for one in table] == [(32, 6)] * 3 + [(34, 6)] * 2
    assert {one.exemplars for one in table} == {10}
    nut = evaluate(generation.carryover, clouds(["nut"], seed=4, rows=10)).mean()
    checked = generation.carryover.check_rows
    own = checked.y == 1
    right = (HeadTrainer().class_scores(generation.carryover.head, checked.Z[own]).argmax(axis=1) == 1).sum()
    assert table[1].accuracy == pytest.approx((10 * nut + right) / 16)


def test_an_update_may_not_break_a_floor(folder, tmp_path):
    other = DeviceFolder(shutil.copytree(folder.path, tmp_path / "other"))
    set_floor(folder, "nut", 0.95)
    keep_acceptance(folder, clouds(["nut"], seed=9, rows=60))
    reports = [update(one, clouds(["plate", "clip"], seed=2), settings=FORGETFUL, most_lost=1, most_lost_by_class=1)
               for one in (folder, other)]
    assert [one.status for one in reports] == [UpdateStatus.ROLLED_BACK, UpdateStatus.KEPT]
    assert any(reason.startswith("accuracy on class nut is") and "below its floor 0.95" in reason
               for reason in reports[0].entry["reasons"])
    set_floor(folder, "nut", 0)
    assert folder.read().care.floors == {}


def test_a_floor_that_was_broken_before_bars_only_what_falls_further(folder):
    set_floor(folder, "nut", 1.0)
    wrong = clouds(["rod"], seed=3, rows=8)
    # Rows of another class, judged as nuts: the floor is broken whatever is learned.
    keep_acceptance(folder, check_increment(wrong.X, np.repeat("nut", 8)))
    report = update(folder, clouds(["rod"], seed=2), settings=Settings(1e-5, 1.0, 10))
    assert not any("floor" in reason for reason in report.entry["reasons"])


@pytest.mark.parametrize("label, floor", [("wing", 0.9), ("nut", 1.2), ("nut", -0.1), ("nut", np.nan)])
def test_floors_are_for_known_classes_and_shares(folder, label, floor):
    with pytest.raises(InputError, match="class|floor"):
        set_floor(folder, label, floor)
    assert folder.numbers() == [1, 2]


# --- rename ----------------------------------------------------------------------------------------------------------

def test_a_class_keeps_everything_under_its_new_name(folder):
    before = folder.read()
    set_floor(folder, "hook", 0.5)
    keep_acceptance(folder, clouds(["hook", "nut"], seed=4))
    rename(folder, "hook", "crane hook")
    after = folder.read()
    assert after.carryover.classes.tolist() == ["bolt", "nut", "rod", "crane hook", "ring"]
    rows = clouds(["hook"], seed=5).X
    assert (scores(after.carryover, rows) == scores(before.carryover, rows)).all()
    assert after.care.floors == {"crane hook": 0.5} and "crane hook" in after.care.acceptance.y
    assert after.history[1]["classes_new"] == ["crane hook", "ring"]
    assert after.care.steps[-1]["from"] == "hook"
    # Going back brings the old name back, floor and acceptance set too.
    back = roll_back(folder)
    assert "hook" in back.carryover.classes and back.care.floors == {"hook": 0.5} and "hook" in back.care.acceptance.y


@pytest.mark.parametrize("old, new", [("wing", "x"), ("hook", "nut"), ("hook", " ")])
def test_a_new_name_must_be_proper_and_free(folder, old, new):
    with pytest.raises(InputError):
        rename(folder, old, new)


# --- merge -----------------------------------------------------------------------------------------------------------

@pytest.mark.parametrize("method", METHODS)
def test_a_merged_class_answers_for_both(tmp_path, method):
    folder = learned(tmp_path / "arm", method)
    before = folder.read().carryover
    merge(folder, "hook", "nut")
    after = folder.read().carryover
    assert after.classes.tolist() == ["bolt", "nut", "rod", "ring"]
    rows = clouds(["nut", "hook", "bolt", "rod", "ring"], seed=6)
    merged_rows = check_increment(rows.X, np.where(rows.y == "hook", "nut", rows.y))
    was = predict(before, rows.X).labels
    expected = (np.where(was == "hook", "nut", was) == merged_rows.y).mean()
    assert (predict(after, rows.X).labels == merged_rows.y).mean() >= expected - 0.05
    # Moments pool as those of all rows would.
    count, mean, variance = (getattr(after.summaries, name)[1] for name in ("count", "mean", "variance"))
    counts = before.summaries.count[[1, 3]]
    assert count == counts.sum() == (66 if method in ("wa", "icarl") else 64)
    np.testing.assert_allclose(mean, counts @ before.summaries.mean[[1, 3]] / count, atol=1e-5)
    second = counts @ (before.summaries.variance + before.summaries.mean.astype(float)**2)[[1, 3]] / count
    np.testing.assert_allclose(variance, second - mean.astype(float)**2, atol=1e-4)
    for held, cut in ((after.check_rows, 8), (after.exemplars, 10 if method in ("wa", "icarl") else 0)):
        own = held.y == 1
        assert own.sum() == cut and held.rank[own].tolist() == list(range(cut))
        halves = [np.isin(held.Z[own], source.Z[source.y == code]).all(axis=1).sum()
                  for source in (before.check_rows if cut == 8 else before.exemplars,) for code in (1, 3)]
        assert halves == [cut // 2] * 2
    # The device learns on.
    settings = Settings(0.01, 1.0, 10 if method in ("wa", "icarl") else None)
    assert update(folder, clouds(["plate", "hook"], seed=7), settings=settings, most_lost=1,
                  most_lost_by_class=1).entry["classes_new"] == ["hook", "plate"]
    assert folder.read().history[1]["classes_new"] == ["nut", "ring"]


def test_the_merged_output_is_close_to_the_probability_of_either(tmp_path):
    folder = learned(tmp_path / "arm", "wa")
    before = folder.read().carryover
    merge(folder, "ring", "hook")
    rows = clouds(["nut", "hook", "bolt", "rod", "ring"], seed=6).X
    p = np.exp(log_softmax(scores(before, rows), axis=1))
    exact = np.column_stack([p[:, :3], p[:, 3] + p[:, 4]])
    assert np.abs(np.exp(log_softmax(scores(folder.read().carryover, rows), axis=1)) - exact).mean() < 0.05


def test_ewc_importances_add(tmp_path):
    folder = learned(tmp_path / "arm", "ewc")
    before = folder.read().carryover.head
    merge(folder, "hook", "nut")
    after = folder.read().carryover.head
    np.testing.assert_array_equal(after["importance_output_weights"][:, 1],
                                  before["importance_output_weights"][:, [1, 3]].sum(axis=1))
    np.testing.assert_array_equal(after["importance_hidden_weights"], before["importance_hidden_weights"])


def test_floors_merge_to_the_higher_one(folder):
    set_floor(folder, "hook", 0.7)
    set_floor(folder, "nut", 0.4)
    merge(folder, "hook", "nut")
    assert folder.read().care.floors == {"nut": 0.7}
    with pytest.raises(InputError, match="another one"):
        merge(folder, "nut", "nut")


# --- retire ----------------------------------------------------------------------------------------------------------

@pytest.mark.parametrize("method", METHODS)
def test_a_retired_class_is_predicted_no_more_and_can_come_again(tmp_path, method):
    folder = learned(tmp_path / "arm", method)
    before = folder.read()
    retire(folder, "nut")
    after = folder.read()
    assert after.carryover.classes.tolist() == ["bolt", "rod", "hook", "ring"]
    rows = clouds(["nut", "bolt", "rod", "hook", "ring"], seed=6).X
    # What is left is the old distribution, given that it is none of the retired class.
    left = np.delete(scores(before.carryover, rows), 1, axis=1)
    np.testing.assert_allclose(scores(after.carryover, rows), left, rtol=1e-5, atol=1e-5)
    for name in ("exemplars", "check_rows"):
        old, new = getattr(before.carryover, name), getattr(after.carryover, name)
        assert (new.Z == old.Z[old.y != 1]).all()
        assert (after.carryover.classes[new.y] == before.carryover.classes[old.y[old.y != 1]]).all()
    assert after.history == before.history
    settings = Settings(0.02, 1.0, 10 if method in ("wa", "icarl") else None)
    report = update(folder, clouds(["nut"], seed=7), settings=settings, most_lost=1, most_lost_by_class=1)
    assert report.entry["classes_new"] == ["nut"]
    assert folder.read().carryover.classes.tolist() == ["bolt", "rod", "hook", "ring", "nut"]


def test_retiring_can_be_rolled_back_and_the_last_class_stays(folder):
    before = folder.read()
    retire(folder, "nut")
    assert content(roll_back(folder)) == content(before)
    for label in ("nut", "bolt", "rod", "hook"):
        retire(folder, label)
    with pytest.raises(InputError, match="must not be the only one"):
        retire(folder, "ring")


# --- erase -----------------------------------------------------------------------------------------------------------

def files(folder):
    return {str(path): path.read_bytes() for path in folder.path.rglob("*") if path.is_file()}


def eventful(path, method):
    """A device whose history, steps, floors, acceptance set and both generations tell of the class zirkel."""
    folder = learned(path, method, labels=(["nut", "bolt"], ["zirkel", "ring"]))
    set_floor(folder, "zirkel", 0.3)
    keep_acceptance(folder, clouds(["zirkel", "nut"], seed=4, rows=9))
    settings = Settings(0.01, 1.0, 10 if method in ("wa", "icarl") else None)
    assert update(folder, clouds(["zirkel", "clip"], seed=5), settings=settings, most_lost=1,
                  most_lost_by_class=1).entry["classes_again"] == ["zirkel"]
    update(folder, clouds(["plate"], seed=6), settings=Settings(0.9, 0.01, settings.kept_per_class), most_lost=0,
           most_lost_by_class=0)
    return folder


@pytest.mark.parametrize("method", METHODS)
def test_of_an_erased_class_no_byte_is_left(tmp_path, method):
    folder = eventful(tmp_path / "arm", method)
    generations = [folder.read(), folder.before()]
    rows = {row.tobytes() for one in generations for held in (one.carryover.exemplars, one.carryover.check_rows)
            for row in held.Z[held.y == one.carryover.classes.tolist().index("zirkel")]}
    rows |= {row.tobytes() for row in clouds(["zirkel"], seed=4, rows=9).X}
    code = generations[0].carryover.classes.tolist().index("zirkel")
    summaries = {array[code].tobytes() for one in generations
                 for array in (one.carryover.summaries.mean, one.carryover.summaries.variance)}
    columns = {array[:, code].tobytes() for one in generations for name, array in one.carryover.head.items()
               if "output_weights" in name}
    # The search is worth something: all of it is there before.
    before = b"".join(files(folder).values())
    assert b"zirkel" in before and all(row in before for row in rows | summaries)
    erasure = erase(folder, "zirkel")
    assert folder.numbers() == [erasure.generation] and (erasure.rows, erasure.files) == (len(rows), len(files(folder)))
    after = files(folder)
    for name, data in after.items():
        assert not any(trace in data for trace in rows | summaries), name
        assert b"zirkel" not in data.lower() and "zirkel".encode("utf-32-le") not in data, name
    stored = [np.load(path, allow_pickle=False) for path in folder.path.rglob("*.npy")]
    assert not any(array.ndim == 2 and array.T.copy()[k].tobytes() in columns
                   for array in stored for k in range(array.shape[-1]))
    # The rest is as it was, and the device goes on.
    generation = folder.read()
    assert generation.carryover.classes.tolist() == ["bolt", "nut", "ring", "clip"][:len(generation.carryover.classes)]
    assert generation.history[1]["classes_new"] == ["ring", "(erased)"]
    assert generation.care.acceptance.y.tolist() == ["nut"] * 9 and generation.care.floors == {}
    assert generation.care.steps[-1] | {"time": ""} == {"time": "", "after_update": 4, "step": "erased",
                                                        "rows": len(rows)}
    with pytest.raises(InputError, match="none before it"):
        roll_back(folder)
    with pytest.raises(InputError, match="must be one that the folder tells of"):
        erase(folder, "zirkel")


def test_words_that_only_hold_the_name_stay(folder):
    rename(folder, "ring", "nutcracker")
    erase(folder, "nut")
    assert folder.read().history[1]["classes_new"] == ["hook", "nutcracker"]


def test_former_names_and_merged_classes_are_erased_too(folder):
    rename(folder, "hook", "crane hook")
    merge(folder, "ring", "crane hook")
    erase(folder, "crane hook")
    for name, data in files(folder).items():
        assert not any(word in data for word in (b"hook", b"ring\"")), name


def test_a_retired_class_can_be_erased(folder):
    retire(folder, "hook")
    assert b"hook" in b"".join(files(folder).values())
    erase(folder, "hook")
    assert b"hook" not in b"".join(files(folder).values())


def test_whole_numbers_are_erased_where_they_stand_for_a_class(tmp_path):
    folder = learned(tmp_path / "arm", labels=([3, 4], [7, 8]))
    set_floor(folder, "7", 0.5)
    update(folder, clouds([9, 10], seed=2), settings=FORGETFUL, most_lost=0, most_lost_by_class=0)
    erase(folder, "7")
    generation = folder.read()
    assert generation.carryover.classes.tolist() == [3, 4, 8]
    assert generation.history[1]["classes_new"] == ["(erased)", 8]
    reasons = generation.history[2]["reasons"]
    assert not any("class 7" in reason for reason in reasons) and any("0." in reason for reason in reasons)
    with pytest.raises(InputError, match="whole number"):
        retire(folder, "nut")


def test_an_erasure_that_was_cut_short_is_completed(folder, monkeypatch):
    with monkeypatch.context() as patch:
        patch.setattr("hyperforecast.device.folder._remove", lambda path: None)
        with pytest.raises(FolderNotWritable, match="erase again"):
            erase(folder, "nut")
    assert b"nut" in b"".join(path.read_bytes() for path in (folder.path / "generation-000002").iterdir())
    erase(folder, "nut")
    assert len(folder.numbers()) == 1


def test_the_search_after_an_erasure_finds_what_was_left_behind(folder, monkeypatch):
    held = folder.read().carryover.exemplars
    stray = folder.path / "generation-000099.partial"

    def leaky(self, *parts, **options):
        stray.write_bytes(b"..." + held.Z[held.y == 1][0].tobytes())
        return store(self, *parts, **options)

    store = DeviceFolder.store
    monkeypatch.setattr(DeviceFolder, "store", leaky)
    with pytest.raises(FolderNotWritable, match="every trace of the class; received generation-000099.partial"):
        erase(folder, "nut")


def test_every_change_is_a_step_that_the_history_tells(folder):
    set_floor(folder, "rod", 0.2)
    rename(folder, "rod", "bar")
    merge(folder, "ring", "hook")
    retire(folder, "bolt")
    steps = folder.read().care.steps
    assert [one["step"] for one in steps] == ["floor", "renamed", "merged", "retired"]
    assert all(one["after_update"] == 2 for one in steps) and json.loads(json.dumps(steps)) == list(steps)
