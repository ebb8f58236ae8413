"""The device folder: what is stored comes back bit for bit, or is refused in one line; never half of it."""

import errno
import json
import os
import shutil
import subprocess
import sys
from dataclasses import fields, replace
from pathlib import Path

import numpy as np
import pytest

from hyperforecast import storage
from hyperforecast.checks import InputError
from hyperforecast.device import (
    DeviceFolder, FolderBusy, FolderDamaged, FolderNotWritable, UpdateStatus, carryover_bundle, carryover_from,
)
from hyperforecast.increments import check_increment
from hyperforecast.learning import HeadTrainer, close_boundary, open_boundary, predict_codes, try_settings
from hyperforecast.settings import METHODS, Plan, Settings
from hyperforecast.storage import bundle_checksum, checksum, dump_json, write_bundle_folder

STORED = Path(__file__).parent / "data" / "device-version-1"
ENTRY = {"number": 1, "time": "2031-05-01T06:00:00+00:00", "kept": True}


def clouds(labels, *, seed=0, rows=12, features=3):
    """Return an increment of Gaussian classes one apart along each feature."""
    rng = np.random.default_rng(seed)
    X = np.concatenate([rng.normal(code, 0.5, (rows, features)) for code in range(len(labels))])
    return check_increment(X, np.repeat(labels, rows))


def learned(method="wa", batches=(["nut", "bolt"], ["hook", "nut"]), *, hidden_units=4, plan=None):
    """Return the carryover of the built-in learner after a few increments."""
    plan = plan or Plan(method, hidden_units, 2, 8, 60)
    settings = Settings(0.02, 0.5, 5 if plan.rehearses else None)
    carryover = None
    for seed, labels in enumerate(batches):
        boundary = open_boundary(plan, carryover, clouds(labels, seed=seed), seed=seed)
        attempt = try_settings(HeadTrainer(), boundary, [settings], seed=seed)[0]
        carryover = close_boundary(HeadTrainer(), boundary, attempt, seed=seed)
    return carryover


def store(path, carryover, history=()):
    folder = DeviceFolder(path)
    with folder.locked(create=True):
        folder.store(carryover, list(history))
    return folder


def parts(value):
    """Return everything in a carryover as comparable parts, arrays as type, shape and bytes."""
    if isinstance(value, np.ndarray):
        return value.dtype.str, value.shape, value.tobytes()
    if isinstance(value, dict):
        return {name: parts(one) for name, one in value.items()}
    if hasattr(value, "__dataclass_fields__"):
        return {one.name: parts(getattr(value, one.name)) for one in fields(value)}
    return value


@pytest.fixture(scope="module")
def template(tmp_path_factory):
    path = tmp_path_factory.mktemp("template") / "arm"
    store(path, learned(batches=(["nut", "bolt"],)), [ENTRY])
    return store(path, learned(), [ENTRY, {**ENTRY, "number": 2}]).path


@pytest.fixture
def two(tmp_path, template):
    """A folder of two generations."""
    return DeviceFolder(shutil.copytree(template, tmp_path / "arm"))


@pytest.mark.parametrize("method", METHODS)
@pytest.mark.parametrize("hidden_units", [0, 4])
@pytest.mark.parametrize("batches", [(["nut", "bolt"],), (["nut", "bolt"], ["hook", "nut"]), ([3, -1], [2**62, 3])])
def test_a_carryover_comes_back_bit_for_bit_and_learns_on_as_if_never_stored(tmp_path, method, hidden_units, batches):
    carryover = learned(method, batches, hidden_units=hidden_units)
    generation = store(tmp_path / "arm", carryover, [ENTRY]).read()
    assert parts(generation.carryover) == parts(carryover)
    assert generation.history == [ENTRY] and generation.number == 1
    assert generation.checksum == bundle_checksum(carryover_bundle(carryover, [ENTRY]))
    settings = Settings(0.02, 0.5, 5 if carryover.plan.rehearses else None)
    heads, labels = [], ["rod", "nut"] if carryover.classes.dtype.kind == "U" else [7, 3]
    for one in (carryover, generation.carryover):
        boundary = open_boundary(one.plan, one, clouds(labels))
        heads.append(try_settings(HeadTrainer(), boundary, [settings], seed=1)[0].head)
    assert parts(heads[0]) == parts(heads[1])


def test_labels_in_any_script_and_a_trainers_own_arrays_come_back(tmp_path):
    carryover = learned(batches=(["Schäkel", "ボルト", "\x1b[31m", '"'],))
    head = {"step": np.array(7), "flags": np.array([True, False]), "names": np.array(["a", "bc"]),
            "big": np.arange(3, dtype=">f8"), "fortran": np.asfortranarray(np.arange(6.0).reshape(2, 3)),
            "none": np.empty((0, 4), np.float16), "odd": np.array([np.nan, -0.0, np.inf])}
    back = store(tmp_path / "arm", replace(carryover, head=head)).read().carryover
    assert back.classes.tolist() == carryover.classes.tolist()
    assert parts(back.head) == parts(head)


@pytest.mark.parametrize("head", [{"../up": np.zeros(1)}, {"a b": np.zeros(1)}, {"w": np.array([None])},
                                  {"w": np.zeros(1, "f4,i4")}, {"w": [1.0]}, {"w" * 99: np.zeros(1)}])
def test_a_trainers_arrays_must_be_plain_and_plainly_named(two, head):
    with pytest.raises(InputError, match="must be letters, digits|must be an array of numbers or text"):
        store(two.path, replace(learned(), head=head))
    assert two.read().number == 2 and sorted(os.listdir(two.path)) == ["generation-000001", "generation-000002", "lock"]


def test_manifest_tells_plan_classes_and_history_without_this_program(two):
    facts = json.loads((two.path / "generation-000002" / "manifest.json").read_text())["facts"]
    assert facts["plan"] == {"method": "wa", "hidden_units": 4, "passes": 2, "batch_size": 8, "memory_limit": 60}
    assert facts["classes"] == ["bolt", "nut", "hook"] and facts["n_boundaries"] == 2
    assert [entry["number"] for entry in facts["history"]] == [1, 2]


def test_the_current_generation_and_the_one_before_are_kept(two):
    for number in range(3, 13):
        store(two.path, learned(), [{**ENTRY, "number": number}])
        assert two.numbers() == [number - 1, number] and two.read().history[-1]["number"] == number
    assert sorted(os.listdir(two.path)) == ["generation-000011", "generation-000012", "lock"]


def test_a_long_history_loses_its_oldest_entries_and_never_all(tmp_path):
    entries = [{**ENTRY, "number": n, "text": "x" * 100_000} for n in range(1, 41)]
    kept = store(tmp_path / "arm", learned(), entries).read().history
    assert kept == entries[-len(kept):] and 10 < len(kept) < 40
    huge = {**ENTRY, "text": "x" * 3_000_000}
    assert store(tmp_path / "arm", learned(), [ENTRY, huge]).read().history == [huge]
    with pytest.raises(InputError, match="must fit a manifest"):
        store(tmp_path / "arm", learned(), [{**ENTRY, "text": "x" * 20_000_000}])


def test_a_copy_elsewhere_works(two, tmp_path):
    shutil.copytree(two.path, tmp_path / "far" / "away")
    copy = DeviceFolder(tmp_path / "far" / "away")
    assert parts(copy.read()) == parts(two.read())
    assert str(tmp_path).encode() not in b"".join(
        file.read_bytes() for file in copy.path.rglob("*") if file.is_file())


def test_what_an_update_that_died_left_behind_is_cleared_away(two):
    partial = two.path / "generation-000003.partial"
    partial.mkdir()
    (partial / "center.npy").write_bytes(b"half")
    assert two.read().number == 2
    store(two.path, learned())
    assert sorted(os.listdir(two.path)) == ["generation-000002", "generation-000003", "lock"]


def test_revert_goes_back_one_generation(two):
    first = learned(batches=(["nut", "bolt"],))
    assert two.revert() == 1
    assert parts(two.read().carryover) == parts(first) and sorted(os.listdir(two.path)) == ["generation-000001", "lock"]
    with pytest.raises(InputError, match="must hold an intact generation before the current one"):
        two.revert()


def test_revert_passes_over_damaged_generations(two, monkeypatch):
    with monkeypatch.context() as patch:
        # As after an update that could not remove the oldest.
        patch.setattr("hyperforecast.device.folder.GENERATIONS_KEPT", 3)
        store(two.path, learned())
    for number in (2, 3):
        (two.path / f"generation-00000{number}" / "scale.npy").write_bytes(b"")
    with pytest.raises(FolderDamaged, match="generation 1 is intact"):
        two.read()
    assert two.revert() == 1 and two.numbers() == [1]


# --- damage ---------------------------------------------------------------------------------------------------------

def files(folder):
    return sorted(path.name for path in folder.iterdir())


def damages(data, rng):
    """Yield damaged versions of a file's bytes: truncated, grown, zeroed from somewhere on, a bit changed."""
    for length in sorted({0, 1, 8, len(data) // 2, len(data) - 1}):
        yield data[:length]
    yield data + b"\0"
    yield data[:len(data) // 3] + bytes(len(data) - len(data) // 3)
    for _ in range(12):
        changed = bytearray(data)
        changed[rng.integers(len(data))] ^= 1 << rng.integers(8)
        yield bytes(changed)


def test_any_damage_to_the_newest_generation_is_refused_and_the_way_back_named(two):
    newest, rng = two.path / "generation-000002", np.random.default_rng(0)
    whole = parts(two.read())
    for name in files(newest):
        original = (newest / name).read_bytes()
        for damaged in damages(original, rng):
            (newest / name).write_bytes(damaged)
            with pytest.raises(FolderDamaged, match="generation 1 is intact: revert to it") as caught:
                two.read()
            assert "\n" not in str(caught.value) and caught.value.status == UpdateStatus.DAMAGED
        (newest / name).unlink()
        with pytest.raises(FolderDamaged, match="generation 1 is intact"):
            two.read()
        (newest / name).mkdir()
        with pytest.raises(FolderDamaged, match="generation 1 is intact"):
            two.read()
        (newest / name).rmdir()
        (newest / name).write_bytes(original)
    assert parts(two.read()) == whole
    (newest / "center.npy").write_bytes(b"")
    assert two.revert() == 1 and two.read().number == 1


def test_a_pipe_or_device_in_place_of_a_file_is_refused_not_read_for_ever(two):
    (two.path / "generation-000002" / "scale.npy").unlink()
    os.mkfifo(two.path / "generation-000002" / "scale.npy")
    with pytest.raises(FolderDamaged, match="pipe or device"):
        two.read()


def test_with_both_generations_damaged_there_is_no_way_back(two):
    for number in (1, 2):
        (two.path / f"generation-00000{number}" / "manifest.json").write_bytes(b"{}")
    with pytest.raises(FolderDamaged, match="no other generation is intact"):
        two.read()
    with pytest.raises(InputError, match="must hold an intact generation before the current one"):
        two.revert()
    assert two.numbers() == [1, 2]


def rewrite(generation, change):
    """Change a generation's bundle and store it with proper checksums, as somebody who means harm could."""
    bundle, _ = storage.read_bundle_folder(generation, "carryover", newest=2)
    change(bundle)
    shutil.rmtree(generation)
    generation.mkdir()
    write_bundle_folder(generation, bundle)


def rewrite_manifest(generation, change):
    document = json.loads((generation / "manifest.json").read_bytes())
    document.pop("sha256")
    change(document)
    (generation / "manifest.json").write_bytes(dump_json({**document, "sha256": checksum(dump_json(document))}))


def test_a_generation_of_a_newer_version_is_refused_as_such(two):
    rewrite(two.path / "generation-000002", lambda bundle: setattr(bundle, "version", 3))
    with pytest.raises(InputError, match="must be of version 1 to 2; received version 3") as caught:
        two.read()
    assert not isinstance(caught.value, FolderDamaged)


def test_a_bundle_of_another_kind_is_refused(two):
    rewrite(two.path / "generation-000002", lambda bundle: setattr(bundle, "kind", "forecaster"))
    with pytest.raises(FolderDamaged, match="must be a carryover"):
        two.read()


@pytest.mark.parametrize("name", ["../generation-000001/center", "/etc/hostname", "..", "a/b", "a\\b", "", "a\0", "ü",
                                  "a" * 81])
def test_a_manifest_cannot_name_files_outside_its_folder(two, name):
    def change(document):
        document["arrays"][name] = document["arrays"]["center"]

    rewrite_manifest(two.path / "generation-000002", change)
    with pytest.raises(FolderDamaged, match="must list arrays by a plain name"):
        two.read()


@pytest.mark.parametrize("entry", [
    {"shape": [2**40, 2**40]}, {"shape": [-3]}, {"shape": ["3"]}, {"shape": 3}, {"shape": None}, {"shape": [3] * 99},
    {"shape": [3.0]}, {"shape": [True]}, {"shape": [4]}, {"shape": [3, 1]}, {"dtype": "|O"}, {"dtype": "O8"},
    {"dtype": "<f8"}, {"dtype": "<f3"}, {"dtype": "<U999999999999"}, {"dtype": "a5"}, {"dtype": "i4,i4"},
    {"dtype": "(2,"}, {"dtype": ["<f4"]}, {"dtype": None}, {"sha256": "0" * 64}, {"sha256": None}, {"extra": 1},
])
def test_absurd_shapes_and_types_in_a_manifest_are_refused(two, entry):
    rewrite_manifest(two.path / "generation-000002", lambda document: document["arrays"]["center"].update(entry))
    with pytest.raises(FolderDamaged):
        two.read()


@pytest.mark.parametrize("text", [
    b"", b"null", b"[]", b"{", b"[" * 100_000, b'{"a":' * 5_000, b"\xff\xfe{}", b'{"kind": 1e999}',
    b'{"kind":"carryover","version":1,"facts":{"x":1e999},"arrays":{},"sha256":""}',
    b'{"kind":"carryover","version":1,"facts":{"x":"\\ud800"},"arrays":{},"sha256":""}',
    b'{"kind":"carryover","version":1,"facts":' + b"[" * 900 + b"]" * 900 + b',"arrays":{},"sha256":""}',
    b'{"kind":"carryover","version":' + b"9" * 5_000 + b',"facts":{},"arrays":{},"sha256":""}',
])
def test_a_manifest_of_any_other_content_is_refused(two, text):
    (two.path / "generation-000002" / "manifest.json").write_bytes(text)
    with pytest.raises(FolderDamaged):
        two.read()


def other_arrays():
    """Return changes of a bundle's arrays that leave a part missing, of another kind or shape, or out of range."""
    names = [name for name in carryover_bundle(learned(), []).arrays if not name.startswith("head_")]
    changes = [(name, "missing", None) for name in names]
    changes += [(name, "text", lambda array: array.astype(str)) for name in names]
    changes += [(name, "longer", lambda array: np.concatenate([array, array])) for name in names]
    changes += [(name, "three axes", lambda array: array.reshape(-1, 1, 1)) for name in names]
    changes += [(name, "not a number", lambda array: np.full_like(array, np.nan))
                for name in ("center", "scale", "exemplar_Z", "check_Z", "class_mean", "class_variance")]
    changes += [(name, "negative", lambda array: array - 99)
                for name in ("scale", "exemplar_y", "exemplar_rank", "check_y", "check_rank", "class_count",
                             "class_variance", "best_check_accuracy")]
    changes += [(name, "large", lambda array: array + 99) for name in ("exemplar_y", "check_y", "best_check_accuracy")]
    changes += [(name, "out of order", lambda array: array[::-1]) for name in ("exemplar_rank", "check_rank")]
    return changes


@pytest.mark.parametrize("name, what, change", other_arrays(),
                         ids=lambda value: value if isinstance(value, str) else None)
def test_arrays_that_do_not_fit_together_are_refused(name, what, change):
    bundle = carryover_bundle(learned(), [])
    if change is None:
        del bundle.arrays[name]
    else:
        bundle.arrays[name] = change(bundle.arrays[name])
    with pytest.raises(InputError):
        carryover_from(bundle)


@pytest.mark.parametrize("name, value", [
    ("plan", None), ("plan", {}), ("plan", {"method": "wa"}), ("plan", []), ("classes", []), ("classes", "nut"),
    ("classes", None), ("classes", ["nut", "nut", "hook"]), ("classes", ["nut", 3, "hook"]), ("classes", ["nut"]),
    ("classes", [1, 2, 2**70]), ("classes", [1.0, 2.0, 3.0]), ("classes", [True, False, 2]), ("classes", [[], [], []]),
    ("n_boundaries", 0), ("n_boundaries", -1), ("n_boundaries", "2"), ("n_boundaries", True), ("n_boundaries", 1.5),
    ("history", {}), ("history", [1]), ("history", [{}]), ("history", [{"number": "1"}]), ("extra", 1),
])
def test_facts_of_another_form_are_refused(name, value):
    bundle = carryover_bundle(learned(), [])
    bundle.facts[name] = value
    with pytest.raises(InputError):
        carryover_from(bundle)


@pytest.mark.parametrize("name, value", [("method", "other"), ("hidden_units", -1), ("passes", 0), ("passes", None),
                                         ("batch_size", "8"), ("memory_limit", 0), ("memory_limit", "much")])
def test_a_plan_of_other_values_is_refused(name, value):
    bundle = carryover_bundle(learned(), [])
    bundle.facts["plan"][name] = value
    with pytest.raises(InputError, match=name):
        carryover_from(bundle)


# --- folders that are none ------------------------------------------------------------------------------------------

def test_a_missing_or_empty_folder_reads_as_one_clear_line_and_is_not_made(tmp_path):
    folder = DeviceFolder(tmp_path / "arm")
    with pytest.raises(InputError, match="with a generation in it; received nothing of that name; make"):
        folder.read()
    with pytest.raises(InputError, match="nothing of that name"), folder.locked():
        pass
    assert not folder.path.exists()
    folder.path.mkdir()
    with pytest.raises(InputError, match="received no generation; make a first update"):
        folder.read()


def test_a_folder_or_file_of_something_else_is_refused_and_left_alone(tmp_path):
    (tmp_path / "notes.txt").write_text("mine")
    with pytest.raises(InputError, match="a folder with other content .notes.txt."):
        DeviceFolder(tmp_path)
    with pytest.raises(InputError, match="must be a device folder; received Not a directory"):
        DeviceFolder(tmp_path / "notes.txt")
    nowhere = DeviceFolder(tmp_path / "no" / "arm")
    with pytest.raises(FolderNotWritable, match="No such file"), nowhere.locked(create=True):
        pass
    assert os.listdir(tmp_path) == ["notes.txt"]


def test_names_that_only_look_like_generations_are_passed_over(two):
    for name in ("generation-0000009", "generation-9", "generation-000009.old", "note"):
        (two.path / name).mkdir()
    assert two.numbers() == [1, 2]


def test_the_second_of_two_updates_is_refused_at_once_and_the_lock_goes_with_its_holder(two):
    with two.locked():
        with pytest.raises(FolderBusy, match="must not be in use") as caught, DeviceFolder(two.path).locked():
            pass
        assert caught.value.status == UpdateStatus.BUSY
        assert two.read().number == 2
    holder = subprocess.Popen(
        [sys.executable, "-c", "import sys; from hyperforecast.device import DeviceFolder\n"
         "with DeviceFolder(sys.argv[1]).locked(): print('held', flush=True); sys.stdin.read()", str(two.path)],
        stdin=subprocess.PIPE, stdout=subprocess.PIPE, text=True)
    assert holder.stdout.readline() == "held\n"
    with pytest.raises(FolderBusy), two.locked():
        pass
    holder.kill()
    holder.communicate()
    assert store(two.path, learned()).numbers() == [2, 3]


READ_ONLY = """
import os, sys
from hyperforecast.device import DeviceFolder, FolderNotWritable
os.chdir(sys.argv[1])
if os.getuid() == 0:
    os.setgid(65534); os.setuid(65534)
folder = DeviceFolder(".")
print(folder.read().number)
try:
    with folder.locked():
        folder.store(folder.read().carryover, [])
except FolderNotWritable as error:
    print(error)
"""


@pytest.mark.parametrize("with_lock", [True, False])
def test_a_read_only_folder_can_be_read_and_an_update_says_why_not(two, with_lock):
    if with_lock:
        os.chmod(two.path / "lock", 0o666)
    else:
        (two.path / "lock").unlink()
    os.chmod(two.path, 0o555)
    try:
        run = subprocess.run([sys.executable, "-c", READ_ONLY, str(two.path)], capture_output=True, text=True)
    finally:
        os.chmod(two.path, 0o755)
    assert run.stderr == ""
    assert run.stdout.splitlines()[0] == "2"
    rule = "must take a new generation" if with_lock else "must be a folder that can be written to"
    assert run.stdout.splitlines()[1].startswith(f".: {rule}; received Permission denied")
    assert two.numbers() == [1, 2]


# --- failing disks --------------------------------------------------------------------------------------------------

class Saboteur:
    """Counts writes, fsyncs, renames and new folders, and fails the one of number `at` as a full disk does."""

    def __init__(self, monkeypatch, at):
        self.at, self.done = at, 0
        for name in ("fsync", "rename", "mkdir"):
            monkeypatch.setattr(os, name, self.wrapped(getattr(os, name)))
        monkeypatch.setattr(storage, "open", self.opened, raising=False)

    def wrapped(self, function):
        def call(*args, **keywords):
            self.done += 1
            if self.done == self.at:
                raise OSError(errno.ENOSPC, os.strerror(errno.ENOSPC))
            return function(*args, **keywords)
        return call

    def opened(self, path, mode="r"):
        file = open(path, mode)
        if "w" in mode:
            whole = file.write
            file = _Handle(file, self.wrapped(lambda data: whole(data)))
        return file


class _Handle:
    """A file whose writing can be made to fail."""

    def __init__(self, file, write):
        self.file, self.write = file, write
        self.flush, self.fileno = file.flush, file.fileno

    def __enter__(self):
        return self

    def __exit__(self, *_):
        self.file.close()


def test_whichever_write_fails_the_current_generation_stays_and_the_next_update_works(two, monkeypatch):
    carryover, before = learned(), parts(two.read())
    at = failures = 0
    while True:
        at += 1
        with monkeypatch.context() as patch:
            saboteur = Saboteur(patch, at)
            try:
                store(two.path, carryover)
            except FolderNotWritable as error:
                failures += 1
                assert "No space left on device; nothing has changed" in str(error)
                assert error.status == UpdateStatus.NOT_WRITABLE
            else:
                break
        assert parts(two.read()) == before and sorted(os.listdir(two.path)) == [
            "generation-000001", "generation-000002", "lock"]
    # mkdir, a write and an fsync for each file, the folder's fsync, the rename, the fsync of what holds it.
    assert failures == 1 + 2 * len(files(two.path / "generation-000003")) + 3
    # What failed last is the removal of the oldest generation: that waits for the next update.
    assert saboteur.done == saboteur.at and two.numbers() == [1, 2, 3]
    store(two.path, carryover)
    assert two.numbers() == [3, 4]


def test_an_interrupted_write_leaves_nothing(two, monkeypatch):
    def interrupt(*_):
        raise KeyboardInterrupt

    with monkeypatch.context() as patch:
        patch.setattr(os, "rename", interrupt)
        with pytest.raises(KeyboardInterrupt):
            store(two.path, learned())
    assert sorted(os.listdir(two.path)) == ["generation-000001", "generation-000002", "lock"]


# --- folders of former versions -------------------------------------------------------------------------------------

def test_a_folder_stored_by_version_1_still_loads(tmp_path):
    shutil.copytree(STORED, tmp_path / "arm")
    generation = DeviceFolder(tmp_path / "arm").read()
    carryover = generation.carryover
    assert carryover.classes.tolist() == ["bolt", "nut", "hook"] and generation.history == [ENTRY]
    expected = json.loads((STORED.parent / "device-version-1.json").read_text())
    rows = np.array(expected["rows"], np.float32)
    assert predict_codes(HeadTrainer(), carryover.head, carryover.standardized(rows)).tolist() == expected["codes"]
    scores = HeadTrainer().class_scores(carryover.head, carryover.standardized(rows))
    np.testing.assert_allclose(scores, expected["scores"], rtol=1e-4, atol=1e-5)
    assert generation.checksum == expected["checksum"]
