"""Damaged files: every one of a device folder, and a forecaster, cut at many places and with single bits changed.

Always told, never a traceback, never advice from damaged data, and the generation before is offered. Counts grow with
HYPERFORECAST_FAULTS=full; pytest -rP prints them.
"""

import os
import shutil

import numpy as np
import pytest

from hyperforecast.checks import InputError
from hyperforecast.cli import main
from hyperforecast.device import DeviceFolder, FolderDamaged, pin_forecaster, update
from hyperforecast.forecasting import load_forecaster, save_forecaster
from hyperforecast.increments import check_increment
from hyperforecast.settings import Plan

FULL = os.environ.get("HYPERFORECAST_FAULTS") == "full"
CUTS, CHANGES, COMMANDS = (50, 200, 20) if FULL else (6, 24, 1)


@pytest.fixture(scope="module")
def template(tmp_path_factory, forecasters):
    """A device folder of two generations, an increment for the next, and a forecaster."""
    folder, rng = tmp_path_factory.mktemp("template"), np.random.default_rng(0)
    save_forecaster(folder / "f.forecaster", forecasters["wa"])
    for number, classes in enumerate((3, 5)):
        increment = check_increment(rng.normal(size=(60, 4)), np.arange(60) % classes)
        update(folder / "arm", increment, plan=None if number else Plan("wa", 4, 2, 16, 60), forecaster=forecasters["wa"],
               most_lost=1, most_lost_by_class=1)
    np.savez(folder / "next.npz", X=rng.normal(size=(60, 4)), y=np.arange(60) % 6)
    return folder


@pytest.fixture
def folder(template, tmp_path):
    return shutil.copytree(template, tmp_path / "work")


def damaged(data, rng):
    """Yield copies of bytes: cut at CUTS places, then CHANGES with one random byte changed."""
    for length in np.unique(np.linspace(0, len(data) - 1, CUTS).astype(int)):
        yield data[:length]
    for _ in range(CHANGES):
        place, change = int(rng.integers(len(data))), int(rng.integers(1, 256))
        yield data[:place] + bytes([data[place] ^ change]) + data[place + 1:]


def test_damage_to_any_file_of_a_generation_is_told_and_the_one_before_offered(folder, capsys):
    device, rng, count = DeviceFolder(folder / "arm"), np.random.default_rng(0), 0
    newest = folder / "arm" / f"generation-{device.read().number:06d}"
    commands = [["advise", "--increment", str(folder / "next.npz")], ["update", "--increment", str(folder / "next.npz")],
                ["history"], ["predict", "--rows", str(folder / "next.npz")], ["classes"]]
    for file in sorted(newest.iterdir()):
        whole = file.read_bytes()
        for number, data in enumerate(damaged(whole, rng)):
            file.write_bytes(data)
            count += 1
            with pytest.raises(FolderDamaged, match="generation 1 is intact: revert to it") as caught:
                device.read()
            assert str(caught.value).isprintable()
            if number < COMMANDS:
                command = commands[count % len(commands)]
                assert main([*command, "--device", str(folder / "arm")]) == 5
                shown = capsys.readouterr()
                assert not shown.out and shown.err.count("\n") == 1 and "generation 1 is intact" in shown.err
        file.write_bytes(whole)
    print(f"{count} damaged copies of {len(list(newest.iterdir()))} files of a generation, each one told")
    (newest / "manifest.json").write_bytes(b"")
    assert main(["rollback", "--device", str(folder / "arm")]) == 0
    assert DeviceFolder(folder / "arm").read().carryover.n_boundaries == 1


def test_damage_to_the_generation_before_does_not_matter_until_it_is_needed(folder):
    device, rng = DeviceFolder(folder / "arm"), np.random.default_rng(1)
    whole = device.read().checksum
    for file in sorted((folder / "arm" / "generation-000001").iterdir()):
        data = file.read_bytes()
        for changed in list(damaged(data, rng))[:CUTS]:
            file.write_bytes(changed)
            assert device.read().checksum == whole and device.before() is None
        file.write_bytes(data)


def test_a_damaged_lock_is_no_matter(folder, forecasters):
    (folder / "arm" / "lock").write_bytes(b"\0junk")
    report = update(folder / "arm", check_increment(np.zeros((9, 4)) + np.arange(9)[:, None], np.arange(9) % 3),
                    forecaster=forecasters["wa"])
    assert report.generation == 3


def test_damage_to_a_forecaster_is_told(folder, capsys):
    path, rng, count = folder / "f.forecaster", np.random.default_rng(2), 0
    whole = path.read_bytes()
    assert load_forecaster(path).checksum
    command = ["advise", "--increment", str(folder / "next.npz"), "--device", str(folder / "arm"), "--forecaster", str(path)]
    for number, data in enumerate(damaged(whole, rng)):
        path.write_bytes(data)
        count += 1
        with pytest.raises(InputError, match="f.forecaster: must be a") as caught:
            load_forecaster(path)
        assert str(caught.value).isprintable()
        if number < COMMANDS:
            assert main(command) == 2
            shown = capsys.readouterr()
            assert not shown.out and shown.err.count("\n") == 1 and "f.forecaster" in shown.err
    print(f"{count} damaged copies of a forecaster, each one told")


def test_damage_to_a_pinned_forecaster_is_told(folder, capsys):
    device = DeviceFolder(folder / "arm")
    pin_forecaster(device, str(folder / "f.forecaster"))
    path, = (folder / "arm").glob("*.forecaster")
    whole = path.read_bytes()
    for data in list(damaged(whole, np.random.default_rng(3)))[::10]:
        path.write_bytes(data)
        assert main(["advise", "--increment", str(folder / "next.npz"), "--device", str(folder / "arm")]) == 2
        shown = capsys.readouterr()
        assert not shown.out and shown.err.count("\n") == 1
