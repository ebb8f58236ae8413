"""A disk that fails: at each single write, fsync, rename and new folder in turn, full or broken.

Counts grow with HYPERFORECAST_FAULTS=full; pytest -rP prints them.
"""

import errno
import io
import json
import os
import shutil

import numpy as np
import pytest

from hyperforecast import storage
from hyperforecast.cli import main
from hyperforecast.device import DeviceFolder, update
from hyperforecast.forecasting import load_forecaster, save_forecaster
from hyperforecast.increments import check_increment
from hyperforecast.settings import Plan

FULL = os.environ.get("HYPERFORECAST_FAULTS") == "full"
ERRORS = (errno.ENOSPC, errno.EIO) if FULL else (errno.ENOSPC,)


class FailingDisk:
    """Counts what changes the disk, and fails the operation of number `at`; a write that fails has written half."""

    def __init__(self, patch, at, error):
        self.at, self.error, self.done = at, error, 0
        for name in ("fsync", "rename", "replace", "mkdir"):
            patch.setattr(os, name, self.failing(getattr(os, name)))
        patch.setattr(storage, "open", self.opened, raising=False)

    def failing(self, function):
        def call(*args, **keywords):
            self.fail()
            return function(*args, **keywords)
        return call

    def fail(self, before=lambda: None):
        self.done += 1
        if self.done == self.at:
            before()
            raise OSError(self.error, os.strerror(self.error))

    def opened(self, path, mode="r"):
        return _Writer(self, path, mode) if "w" in mode else open(path, mode)


class _Writer(io.FileIO):
    def __init__(self, disk, path, mode):
        self.disk = disk
        super().__init__(path, mode.replace("b", ""))

    def write(self, data):
        self.disk.fail(lambda: super(_Writer, self).write(data[:len(data) // 2]))
        return super().write(data)


@pytest.fixture(scope="module")
def template(tmp_path_factory, forecasters):
    """A device folder of two generations, an increment for the next, and a forecaster."""
    folder, rng = tmp_path_factory.mktemp("template"), np.random.default_rng(0)
    forecaster = forecasters["ewc"]
    save_forecaster(folder / "f.forecaster", forecaster)
    for number, classes in enumerate((3, 5)):
        increment = check_increment(rng.normal(size=(60, 4)), np.arange(60) % classes)
        update(folder / "arm", increment, plan=None if number else Plan("ewc", 0, 2, 16, 300), forecaster=forecaster,
               most_lost=1, most_lost_by_class=1)
    np.savez(folder / "next.npz", X=rng.normal(size=(60, 4)), y=np.arange(60) % 6)
    return folder


@pytest.fixture
def folder(template, tmp_path):
    return shutil.copytree(template, tmp_path / "work")


def contents(path):
    return {one.relative_to(path): one.read_bytes() for one in sorted(path.rglob("*")) if one.is_file()}


def failures(command, expected, folder, monkeypatch, capsys, error):
    """Fail each operation of a command in turn until it gets through; return how many failed."""
    before, at = contents(folder), 0
    while True:
        at += 1
        with monkeypatch.context() as patch:
            disk = FailingDisk(patch, at, error)
            code = main(command)
        shown = capsys.readouterr()
        if disk.done < at:
            assert code in (0, 3)
            return at - 1
        if code in (0, 3):
            # What failed was the removal of what is no longer needed.
            shutil.rmtree(folder)
            restore(folder, before)
            continue
        assert code in expected and not shown.out
        assert shown.err.count("\n") == 1 and os.strerror(error) in shown.err, shown.err
        assert contents(folder) == before, f"operation {at}"


def restore(folder, files):
    for name, data in files.items():
        (folder / name).parent.mkdir(parents=True, exist_ok=True)
        (folder / name).write_bytes(data)


@pytest.mark.parametrize("error", ERRORS, ids=os.strerror)
def test_an_update_that_cannot_be_stored_is_one_line_and_changes_nothing(error, folder, monkeypatch, capsys):
    command = ["update", "--increment", str(folder / "next.npz"), "--device", str(folder / "arm"), "--forecaster",
               str(folder / "f.forecaster")]
    count = failures(command, {6}, folder, monkeypatch, capsys, error)
    print(f"{count} writes, fsyncs, renames and new folders of an update failed in turn: {os.strerror(error)}")
    # A new folder, a write and an fsync of each file, the fsync of the generation, its rename, the fsync of the device.
    generation = DeviceFolder(folder / "arm").read()
    files = len(os.listdir(folder / "arm" / f"generation-{generation.number:06d}"))
    assert count >= 2 * files + 4
    assert generation.history[-1]["number"] == 3


@pytest.mark.parametrize("error", ERRORS, ids=os.strerror)
def test_a_first_update_that_cannot_be_stored_leaves_nothing(error, folder, monkeypatch, capsys):
    command = ["update", "--increment", str(folder / "next.npz"), "--device", str(folder / "new"), "--method", "ewc",
               "--memory-limit", "300"]
    count = failures(command, {6}, folder, monkeypatch, capsys, error)
    print(f"{count} operations of a first update failed in turn: {os.strerror(error)}")
    assert count > 20


@pytest.mark.parametrize("error", ERRORS, ids=os.strerror)
def test_an_export_that_cannot_be_written_leaves_the_old_one(error, folder, monkeypatch, capsys):
    (folder / "export.json").write_text(json.dumps({"old": True}))
    command = ["history", "--device", str(folder / "arm"), "--export", str(folder / "export.json")]
    # A write, its fsync, the rename, and the fsync of the folder, after which the new one may be there already.
    with monkeypatch.context() as patch:
        for at in (1, 2, 3):
            FailingDisk(patch, at, error)
            assert main(command) == 2
            shown = capsys.readouterr()
            assert shown.err.count("\n") == 1 and os.strerror(error) in shown.err
            assert json.loads((folder / "export.json").read_text()) == {"old": True}
            patch.undo()
    assert sorted(os.listdir(folder)) == ["arm", "export.json", "f.forecaster", "next.npz"]


@pytest.mark.parametrize("error", ERRORS, ids=os.strerror)
@pytest.mark.parametrize("at", [1, 2, 3])
def test_a_forecaster_that_cannot_be_written_leaves_the_old_one(at, error, folder, monkeypatch, forecasters):
    before = load_forecaster(folder / "f.forecaster").checksum
    with monkeypatch.context() as patch:
        FailingDisk(patch, at, error)
        with pytest.raises(storage.InputError, match=os.strerror(error)):
            save_forecaster(folder / "f.forecaster", forecasters["wa"])
    assert load_forecaster(folder / "f.forecaster").checksum == before
    assert sorted(os.listdir(folder)) == ["arm", "f.forecaster", "next.npz"]
