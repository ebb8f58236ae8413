"""Histories of devices in a records file: each update once, whichever file brings it, and beside those of searches."""

import json
import shutil

import numpy as np
import pytest

from hyperforecast.checks import InputError
from hyperforecast.cli import main
from hyperforecast.describing import DESCRIPTORS
from hyperforecast.device import DeviceFolder, update
from hyperforecast.device.export import export_history, read_export
from hyperforecast.increments import check_increment
from hyperforecast.settings import Plan, Settings
from hyperforecast.workshop.fitting import load_dataset
from hyperforecast.workshop.gathering import RecordsFile, merge

IDLE = Settings(1e-5, 1.0, 5)


def clouds(labels, *, seed=0, rows=30):
    rng = np.random.default_rng(seed)
    X = np.concatenate([rng.normal(code, 1, (rows, 5)) for code in range(len(labels))])
    return check_increment(X, np.repeat(labels, rows))


def lived(folder, batches, *, forecasters, seed=0):
    """The device folder after an update for each batch of labels."""
    for number, labels in enumerate(batches):
        first = number == 0 and not DeviceFolder(folder).numbers()
        update(folder, clouds(labels, seed=10 * seed + number), plan=Plan("wa", 0, 2, 16, 100) if first else None,
               forecaster=forecasters["wa"], settings=IDLE, most_lost=1, most_lost_by_class=1)
    return DeviceFolder(folder)


@pytest.fixture
def export(tmp_path):
    def export(folder, name, **options):
        export_history(tmp_path / name, folder.read(), **options)
        return read_export(tmp_path / name)
    return export


@pytest.fixture
def records_file(tmp_path):
    return RecordsFile(tmp_path / "merged.sqlite", create=True)


def content(records):
    return [repr(one) for one in records.trajectories()]


def test_updates_become_records_with_the_outcomes_they_had(tmp_path, forecasters, export, records_file):
    folder = lived(tmp_path / "arm", [["nut", "bolt"], ["hook"], ["nut", "ring"]], forecasters=forecasters)
    merged = merge(records_file, export(folder, "a.json"))
    history = folder.read().history
    assert (merged.device, merged.method, merged.updates, merged.added, merged.without_outcome) == (
        history[0]["device"], "wa", 2, 2, 0)
    for one, entry in zip(records_file.trajectories(), history[1:]):
        assert one.source == one.stream == f"device:{entry['device']}" and one.method == "wa"
        assert one.plan == folder.read().carryover.plan.as_dict()
        boundary, = one.boundaries
        attempt, = boundary.attempts
        assert (boundary.number, boundary.classes_old, boundary.classes_new) == (
            entry["number"], entry["classes_old"], len(entry["classes_new"]))
        assert boundary.outcome_rows == entry["achieved"]["rows"] and attempt.settings == IDLE
        assert attempt.strategy == "overruled"
        assert (attempt.accuracy_old, attempt.accuracy_new) == (entry["achieved"]["old"], entry["achieved"]["new"])
        assert boundary.most_kept == entry["descriptors"]["most_kept"] and boundary.descriptors.keys() == DESCRIPTORS.keys()
        assert {name: None if np.isnan(value) else value for name, value in boundary.descriptors.items()} \
            == entry["descriptors"]


def test_merging_again_changes_nothing_and_a_longer_history_adds_what_is_new(tmp_path, forecasters, export, records_file):
    folder = lived(tmp_path / "arm", [["nut", "bolt"], ["hook"]], forecasters=forecasters)
    short = export(folder, "a.json")
    assert merge(records_file, short).added == 1
    before = content(records_file)
    # With class names or without, and from a copy: it is the same update.
    again = export(DeviceFolder(shutil.copytree(folder.path, tmp_path / "copy")), "b.json", class_names=True)
    assert merge(records_file, short).added == merge(records_file, again).added == 0
    assert content(records_file) == before
    longer = export(lived(tmp_path / "arm", [["ring"], ["pin"]], forecasters=forecasters, seed=1), "c.json")
    merged = merge(records_file, longer)
    assert (merged.updates, merged.added) == (3, 2) and set(before) < set(content(records_file))
    assert merge(records_file, short).added == merge(records_file, longer).added == 0


def test_two_devices_do_not_collide_nor_does_a_copy_that_went_another_way(tmp_path, forecasters, export, records_file):
    """The same data, plan and numbers of updates on two devices; and one folder that went on in two places."""
    one, two = (lived(tmp_path / name, [["nut", "bolt"], ["hook"]], forecasters=forecasters) for name in ("one", "two"))
    assert [merge(records_file, export(folder, "x.json")).added for folder in (one, two)] == [1, 1]
    assert len({source for _, source, *_ in records_file.counts()}) == 2
    shutil.copytree(one.path, tmp_path / "fork")
    ends = [export(lived(tmp_path / name, [["ring"]], forecasters=forecasters, seed=seed), "x.json")
            for seed, name in enumerate(("one", "fork"), 3)]
    # Update 3 of the same identity twice, with other rows.
    assert [end.updates[-1].number for end in ends] == [3, 3] and ends[0].device == ends[1].device
    assert [merge(records_file, end).added for end in ends] == [1, 1]
    assert len(content(records_file)) == 4


def test_what_was_advised_and_what_was_given_instead_both_count_and_are_told_apart(tmp_path, forecasters, export,
                                                                                   records_file):
    folder = lived(tmp_path / "arm", [["nut", "bolt"], ["hook"]], forecasters=forecasters)
    update(folder, clouds(["ring"], seed=7), forecaster=forecasters["wa"], retries=0, most_lost=1, most_lost_by_class=1)
    assert merge(records_file, export(folder, "a.json")).added == 2
    strategies = [one.strategy for each in records_file.trajectories() for one in each.boundaries[0].attempts]
    assert sorted(strategies) == ["overruled", "update"]


def test_rolled_back_tries_are_outcomes_too(tmp_path, forecasters, export, records_file):
    folder = lived(tmp_path / "arm", [["nut", "bolt"]], forecasters=forecasters)
    # Nothing may be lost, and every class has a floor that cannot be reached.
    report = update(folder, clouds(["hook"], seed=5), forecaster=forecasters["wa"], settings=Settings(1.0, 1e3, 5),
                    most_lost=0, most_lost_by_class=0)
    assert not report.entry["kept"]
    assert merge(records_file, export(folder, "a.json")).added == 1
    attempt, = next(records_file.trajectories()).boundaries[0].attempts
    assert attempt.settings == Settings(1.0, 1e3, 5) and attempt.diverged == report.entry["diverged"]


def test_tries_that_no_check_row_tells_of_are_left_out(tmp_path, forecasters, export, records_file):
    update(tmp_path / "arm", clouds(["nut", "bolt"], rows=4), plan=Plan("wa", 0, 2, 16, 100))
    update(tmp_path / "arm", clouds(["hook"], rows=4, seed=1), forecaster=forecasters["wa"])
    merged = merge(records_file, export(DeviceFolder(tmp_path / "arm"), "a.json"))
    assert (merged.updates, merged.added, merged.without_outcome) == (1, 0, 1) and not content(records_file)


def test_merged_records_are_fitted_on_beside_searched_ones(tmp_path, records, forecasters, export):
    shutil.copy(records.path, tmp_path / "all.sqlite")
    both = RecordsFile(tmp_path / "all.sqlite")
    folder = lived(tmp_path / "arm", [["nut", "bolt"], ["hook"], ["ring", "nut"]], forecasters=forecasters)
    history = export(folder, "a.json")
    assert merge(both, history).added == 2
    searched, dataset = load_dataset(records, "wa"), load_dataset(both, "wa")
    source = f"device:{history.device}"
    assert dataset.n_boundaries == searched.n_boundaries + 2 and dataset.compared.sum() == searched.n_boundaries
    assert (dataset.sources == source).tolist() == (~dataset.compared).tolist()
    assert load_dataset(both, "wa", without=[source]).n_boundaries == searched.n_boundaries


def test_the_command_merges_all_files_or_none(tmp_path, forecasters, export, capsys):
    folder = lived(tmp_path / "arm", [["nut", "bolt"], ["hook"]], forecasters=forecasters)
    export(folder, "a.json")
    good, bad, records_path = str(tmp_path / "a.json"), tmp_path / "bad.json", str(tmp_path / "r.sqlite")
    bad.write_text(json.dumps({"kind": "device history"}))
    assert main(["merge", "--records", records_path, "--from", good, str(bad)]) == 2
    shown = capsys.readouterr()
    assert shown.err.count("\n") == 1 and "bad.json" in shown.err and not (tmp_path / "r.sqlite").exists()
    for added in (1, 0):
        assert main(["merge", "--records", records_path, "--from", good, "--json"]) == 0
        told = json.loads(capsys.readouterr().out)
        assert told["merged"] == [{"file": good, "device": folder.read().history[0]["device"], "method": "wa",
                                   "updates": 1, "added": added, "without_outcome": 0}]
    with pytest.raises(InputError, match="two sources"):
        load_dataset(RecordsFile(records_path), "wa")
