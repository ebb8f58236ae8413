"""The working memory of an update: what is estimated against what Python's own account says, and what is given up."""

import tracemalloc
from dataclasses import replace

import numpy as np
import pytest

from hyperforecast import increments
from hyperforecast.checks import InputError
from hyperforecast.device import DeviceFolder, UpdateStatus, limits, update
from hyperforecast.device.limits import room
from hyperforecast.increments import Increment, read_increment
from hyperforecast.rows import FileRows
from hyperforecast.settings import Plan, Settings

D, ROWS = 128, 9000
LENIENT = {"most_lost": 1.0, "most_lost_by_class": 1.0, "retries": 0}


def drawn(classes, rows=ROWS, seed=0):
    rng = np.random.default_rng(seed)
    # Class after class, as files often are, a chunk of rows is of a single one.
    y = np.repeat(classes, rows // len(classes))
    centers = np.random.default_rng(1).standard_normal((8, D), dtype=np.float32)
    return Increment(rng.standard_normal((len(y), D), dtype=np.float32) + centers[y], y)


def on_disk(folder, increment, name):
    np.save(folder / f"{name}.npy", increment.X)
    np.save(folder / f"{name}.labels.npy", increment.y)
    return folder / f"{name}.npy"


@pytest.mark.parametrize("hidden_units", [0, 16])
@pytest.mark.parametrize("kind", ["held", "file"])
@pytest.mark.parametrize("method", ["ewc", "wa"])
def test_the_estimate_is_an_upper_bound_and_no_wild_one(tmp_path, forecasters, monkeypatch, method, kind, hidden_units):
    monkeypatch.setattr(increments, "HELD_BYTES", 2**20)
    settings = Settings(0.01, 1.0, 10 if method == "wa" else None)
    plan = Plan(method, hidden_units, 1, 64, 500, working_memory="1 GB")
    for number, classes in enumerate(([0, 1, 2], [3, 4])):
        increment = drawn(classes, seed=number)
        path, size = on_disk(tmp_path, increment, number), increment.X.nbytes + increment.y.nbytes
        if kind == "file":
            del increment
        tracemalloc.start()
        try:
            if kind == "file":
                increment, size = read_increment(path), 0
                assert isinstance(increment.X, FileRows)
            report = update(tmp_path / "arm", increment, plan=plan if number == 0 else None, settings=settings,
                            forecaster=forecasters[method], **LENIENT)
            peak = tracemalloc.get_traced_memory()[1] + size
        finally:
            tracemalloc.stop()
        assert report.status == UpdateStatus.KEPT
        memory = report.entry["limits"]["memory"]
        assert memory["held"] == (kind == "held") and memory["given_up"] == [] and memory["rows"] == ROWS
        # Of small increments the allowance for advice is the greater part.
        spared = limits.ADVICE_BYTES if number else 0
        assert 0.45 * (memory["bytes_planned"] - spared) <= peak <= memory["bytes_planned"]


def test_memory_is_given_up_for_step_by_step(tmp_path, forecasters):
    folder, plan = tmp_path / "arm", Plan("wa", 16, 1, 64, 500)
    update(folder, drawn([0, 1, 2]), plan=plan, **LENIENT)
    carryover, increment = DeviceFolder(folder).read().carryover, drawn([3, 4], rows=60_000, seed=1)
    free = room(plan, carryover, increment)
    assert (free.held, free.rows, free.given_up) == (True, 60_000, ())

    def tight(megabytes):
        return room(replace(plan, working_memory=f"{megabytes} MB"), carryover, increment)

    most, made = free.bytes_planned / 1e6, "standardized rows are made whenever they are needed, not held"
    assert tight(round(most + 0.1, 1)) == free
    less = tight(round(most - 0.1, 1))
    assert (less.held, less.rows) == (False, 60_000) and less.bytes_planned < 0.8 * free.bytes_planned
    assert less.given_up == (f"{made}, to keep the working memory of {round(most - 0.1, 1)} MB",)
    least = less.bytes_planned / 1e6
    few = tight(round(least - 0.5, 1))
    assert not few.held and 2 < few.rows < 60_000 and few.bytes_planned <= (round(least - 0.5, 1)) * 1e6
    assert few.given_up[-1].startswith(f"trained on at most {few.rows} of 60000 rows")
    with pytest.raises(InputError, match=r"working_memory: must hold about \d+\.\d MB to train on 64 rows of this "
                       "increment of 60000; received 1 MB; raise it"):
        tight(1)


def test_an_update_is_fitted_or_refused_before_it_starts(tmp_path, forecasters):
    folder, plan = tmp_path / "arm", Plan("wa", 16, 1, 64, 500)
    update(folder, drawn([0, 1, 2]), plan=plan, **LENIENT)
    carryover, increment = DeviceFolder(folder).read().carryover, drawn([3, 4], rows=60_000, seed=1)
    before = DeviceFolder(folder).read().checksum
    with pytest.raises(InputError, match="working_memory: must hold about"):
        update(folder, increment, plan=replace(plan, working_memory="2 MB"), forecaster=forecasters["wa"])
    assert DeviceFolder(folder).read().checksum == before
    made = limits.working_bytes(plan, carryover, increment, n_old=3, n_classes=5, rows=60_000, held=False,
                                largest_class=30_000)
    report = update(folder, increment, plan=replace(plan, working_memory=f"{made / 1e6 - 0.5:.3f} MB"),
                    forecaster=forecasters["wa"], **LENIENT)
    memory = report.entry["limits"]["memory"]
    assert report.status == UpdateStatus.KEPT and len(report.entry["limits"]["given_up"]) == 2
    assert memory["rows"] - 2 <= report.entry["descriptors"]["rows"] <= memory["rows"] < 60_000
    assert report.entry["by_class"]["arrived"][3:] == [30_000, 30_000]
    assert report.carryover.plan.passes == 1 and report.entry["achieved"]["rows"] == 40


@pytest.mark.parametrize("wrong", ["200", "lots", 200, "0 MB", 2.5])
def test_a_working_memory_is_bytes(wrong):
    with pytest.raises(InputError, match="working_memory: must be bytes such as"):
        Plan(working_memory=wrong).checked()


def test_a_limit_of_memory_and_one_of_time_go_together(tmp_path, forecasters):
    folder, plan = tmp_path / "arm", Plan("wa", 16, 2, 64, 500, time_limit=1e5, working_memory="1 GB")
    report = update(folder, drawn([0, 1, 2]), plan=plan, **LENIENT)
    told = report.entry["limits"]
    assert told["time"]["passes"] == 2 and told["memory"]["held"] and told["given_up"] == []
    assert DeviceFolder(folder).read().carryover.plan == plan
