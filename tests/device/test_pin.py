"""Pinned forecasters: no other advises, what an upgrade changes, and what is left of the one before."""

from dataclasses import replace

import numpy as np
import pytest

from hyperforecast.checks import InputError
from hyperforecast.device import (
    DeviceFolder, compare_forecasters, forecaster_for, mean_errors, pin_forecaster, pinned_path, roll_back,
    unpin_forecaster, update, upgrade_forecaster, verify_pinned,
)
from hyperforecast.forecasting import (
    Preferences, TreeEnsemble, forecaster_bytes, load_forecaster, save_forecaster, with_checksum,
)
from hyperforecast.forecasting.signature import make_key, read_public_key, sign_file
from hyperforecast.increments import check_increment
from hyperforecast.settings import Plan, Settings

LENIENT = {"most_lost": 1.0, "most_lost_by_class": 1.0}


def clouds(labels, seed):
    rng = np.random.default_rng(seed)
    y = np.repeat(labels, 30)
    places = {label: np.random.default_rng([7, *label.encode()]).normal(0, 3, 5) for label in labels}
    return check_increment(np.stack([places[label] for label in y.tolist()]) + rng.normal(0, 1, (len(y), 5)), y)


@pytest.fixture
def files(forecasters, tmp_path):
    """Two forecasters for WA that differ, and one for EWC, as files by name."""
    one = forecasters["wa"]
    # It expects that nothing goes well, and is sure of it.
    no_splits = [np.empty(0) for _ in range(4)]
    nothing = TreeEnsemble(one.models["old"].n_features, *no_splits, np.array([-1]), np.array([-9.0]))
    gloomy = {**one.models, "old": nothing}
    two = with_checksum(replace(one, models=gloomy, thresholds=dict.fromkeys(one.thresholds, 0.0)))
    paths = {}
    for name, forecaster in (("one", one), ("two", two), ("ewc", forecasters["ewc"])):
        paths[name] = tmp_path / f"{name}.forecaster"
        save_forecaster(paths[name], forecaster)
    return paths


@pytest.fixture
def folder(tmp_path, files):
    """A device after three updates, advised by forecaster one."""
    folder = DeviceFolder(tmp_path / "arm")
    one = load_forecaster(files["one"])
    update(folder, clouds(["nut", "bolt"], 0), plan=Plan("wa", 8, 4, 16, 120))
    update(folder, clouds(["hook"], 1), forecaster=one, **LENIENT)
    update(folder, clouds(["rod", "pin"], 2), forecaster=one, settings=Settings(1e-5, 1.0, 4),
           preferences=Preferences(old_weight=0.9, tolerance=0.1), **LENIENT)
    return folder


def test_a_pinned_device_is_advised_by_that_forecaster_alone(folder, files):
    one, two = load_forecaster(files["one"]), load_forecaster(files["two"])
    assert pin_forecaster(folder, files["one"]).checksum == one.checksum
    files["one"].unlink()
    before = folder.read()
    report = update(folder, clouds(["ring"], 3), **LENIENT)
    assert report.entry["forecaster"] == one.checksum
    update(folder, clouds(["clip"], 4), forecaster=one, **LENIENT)
    content = folder.read().checksum
    for dry_run in (True, False):
        with pytest.raises(InputError, match=f"the one that the device is pinned to, {one.checksum[:16]}.*--upgrade"):
            update(folder, clouds(["cap"], 5), forecaster=two, dry_run=dry_run)
    with pytest.raises(InputError, match="pinned already"):
        pin_forecaster(folder, files["two"])
    assert folder.read().checksum == content
    assert before.care.steps[-1]["step"] == "forecaster pinned" and before.care.steps[-1]["forecaster"] == one.checksum
    # Pinning does not cost the generation to go back to, and going back does not unpin.
    assert roll_back(folder).care.pin.checksum == one.checksum
    assert forecaster_for(folder, folder.read()).checksum == one.checksum


def test_a_copy_that_is_missing_or_altered_advises_nothing(folder, files):
    pin = pin_forecaster(folder, files["one"]) and folder.read().care.pin
    path = pinned_path(folder, pin)
    path.write_bytes(files["two"].read_bytes())
    with pytest.raises(InputError, match="pinned to"):
        update(folder, clouds(["ring"], 3))
    path.write_bytes(files["one"].read_bytes()[:5000])
    with pytest.raises(InputError, match="complete forecaster file"):
        update(folder, clouds(["ring"], 3))
    path.unlink()
    with pytest.raises(InputError, match="readable file"):
        update(folder, clouds(["ring"], 3))


def test_an_upgrade_replaces_the_copy_and_is_told(folder, files):
    with pytest.raises(InputError, match="use --pin"):
        upgrade_forecaster(folder, files["two"])
    pin_forecaster(folder, files["one"])
    upgrade_forecaster(folder, files["two"])
    one, two = load_forecaster(files["one"]), load_forecaster(files["two"])
    assert [path.read_bytes() for path in folder.path.glob("*.forecaster*")] == [files["two"].read_bytes()]
    step = folder.read().care.steps[-1]
    assert (step["step"], step["before"], step["forecaster"]) == ("forecaster upgraded", one.checksum, two.checksum)
    assert update(folder, clouds(["ring"], 3), retries=0).entry["forecaster"] == two.checksum
    with pytest.raises(InputError, match="must be a forecaster for wa"):
        upgrade_forecaster(folder, files["ewc"])
    unpin_forecaster(folder)
    assert not list(folder.path.glob("*.forecaster*")) and folder.read().care.pin is None
    with pytest.raises(InputError, match="no pin"):
        unpin_forecaster(folder)


def test_the_forecaster_that_ships_can_be_pinned(folder):
    pin_forecaster(folder, "shipped")
    shipped = load_forecaster("wa")
    assert forecaster_for(folder, folder.read()).checksum == shipped.checksum
    assert pinned_path(folder, folder.read().care.pin).read_bytes() == forecaster_bytes("wa")


def test_a_device_pinned_with_a_key_takes_signed_forecasters_alone(folder, files, tmp_path):
    pytest.importorskip("cryptography", reason="pip install '.[signing]'")
    ours, theirs = (read_public_key(make_key(tmp_path / name)) for name in ("ours.pem", "theirs.pem"))
    with pytest.raises(InputError, match=r"one.forecaster.sig: must be a readable file"):
        pin_forecaster(folder, files["one"], public_key=ours)
    sign_file(files["one"], tmp_path / "ours.pem")
    with pytest.raises(InputError, match="must be the signature"):
        pin_forecaster(folder, files["one"], public_key=theirs)
    assert folder.read().care.pin is None
    pin_forecaster(folder, files["one"], public_key=ours)
    pin = folder.read().care.pin
    verify_pinned(folder, pin)
    with pytest.raises(InputError, match="must be the signature"):
        verify_pinned(folder, pin, theirs)
    sign_file(files["two"], tmp_path / "theirs.pem")
    with pytest.raises(InputError, match="must be the signature"):
        upgrade_forecaster(folder, files["two"])
    with pytest.raises(InputError, match="must be named"):
        upgrade_forecaster(folder, "shipped")
    assert folder.read().care.pin == pin
    ours_of_two = sign_file(files["two"], tmp_path / "ours.pem", signature_path=tmp_path / "ours.sig")
    upgrade_forecaster(folder, files["two"], signature_path=ours_of_two)
    verify_pinned(folder, folder.read().care.pin)
    assert len(list(folder.path.glob("*.forecaster*"))) == 2
    copy = pinned_path(folder, folder.read().care.pin)
    copy.write_bytes(copy.read_bytes()[:-1] + b"x")
    with pytest.raises(InputError, match="must be the signature"):
        verify_pinned(folder, folder.read().care.pin)


def test_the_comparison_repeats_what_was_advised_and_expected(folder, files):
    one, two = load_forecaster(files["one"]), load_forecaster(files["two"])
    generation = folder.read()
    compared = compare_forecasters(generation, one, two)
    assert [row.update for row in compared] == [2, 3]
    for row, entry in zip(compared, generation.history[1:]):
        assert row.advised["before"].as_dict() == entry["advice"]["settings"]
        assert row.promised["before"].as_dict() == pytest.approx(entry["advice"]["expected"]["all"])
        assert row.used.as_dict() == entry["settings"] and row.achieved == entry["achieved"]["all"]
        assert row.expected["before"].as_dict() == pytest.approx(entry["expected"]["all"])
        distance = {side: abs(row.expected[side].value - row.achieved) for side in ("before", "after")}
        assert row.nearer == min(distance, key=distance.get)
    # Gloom is false here: nothing is expected of old classes, and one of three to two of five classes are new.
    assert compared[0].expected["after"].value <= 1 / 3 and compared[1].expected["after"].value <= 2 / 5
    errors = mean_errors(compared)
    distances = [abs(entry["expected"]["all"]["value"] - entry["achieved"]["all"]) for entry in generation.history[1:]]
    assert errors["after"]["held"] == 0.0 and errors["before"]["error"] == pytest.approx(np.mean(distances))
    assert compare_forecasters(generation, two, one)[0].expected["before"] == compared[0].expected["after"]
    with pytest.raises(InputError, match="must be one for wa"):
        compare_forecasters(generation, one, load_forecaster(files["ewc"]))
    assert all(row.nearer == "equal" for row in compare_forecasters(generation, one, one))
