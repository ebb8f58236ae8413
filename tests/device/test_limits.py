"""The time limit of an update: what is planned, what is given up, and what happens to training that is late."""

import json
from dataclasses import replace

import numpy as np
import pytest

from hyperforecast.checks import InputError
from hyperforecast.cli import main
from hyperforecast.device import DeviceFolder, UpdateStatus, carryover_bundle, update
from hyperforecast.device.export import export_history, read_export
from hyperforecast.device.limits import measured_speed
from hyperforecast.forecasting import Preferences
from hyperforecast.increments import check_increment
from hyperforecast.learning import HeadTrainer, boundary_seed, open_boundary, try_settings
from hyperforecast.settings import Plan, Settings
from hyperforecast.storage import bundle_checksum

# Operations a second of the devices that are played here.
SPEED = 1e6
LENIENT = {"most_lost": 1.0, "most_lost_by_class": 1.0}


class Clock:
    """Says what it is told to; goes on by `tick` whenever it is looked at."""

    def __init__(self, tick=0.0):
        self.now, self.tick = 0.0, tick

    def __call__(self):
        self.now += self.tick
        return self.now


class Timed(HeadTrainer):
    """Takes the time that a device of SPEED (or of a `slowdown` of it) would; never asks whether it is over."""

    def __init__(self, clock):
        self.clock, self.slowdown, self.failures, self.jobs = clock, 1.0, 0, []

    def learn(self, jobs, *, seed):
        self.jobs += jobs
        attempts = super().learn([replace(one, stop=None) for one in jobs], seed=seed)
        self.clock.now += self.slowdown * sum(one.operations for one in attempts) / SPEED
        self.failures -= 1
        return [replace(one, diverged=one.diverged or self.failures >= 0) for one in attempts]


def clouds(labels, *, seed=0, rows=40):
    rng = np.random.default_rng(seed)
    places = [np.random.default_rng([7, *label.encode()]).normal(0, 3, 6) for label in labels]
    return check_increment(np.concatenate([rng.normal(0, 1, (rows, 6)) + place for place in places]),
                           np.repeat(labels, rows))


FIRST, SECOND = clouds(["nut", "bolt", "rod"]), clouds(["hook", "ring"], seed=1)


def plan_of(method, **limits):
    return Plan(method, 8, 20, 16, 120, **limits)


def content(folder):
    """What a folder carries, whatever its plan and history say."""
    carryover = DeviceFolder(folder).read().carryover
    return bundle_checksum(carryover_bundle(replace(carryover, plan=Plan()), []))


def operations_of_a_pass(trainer, folder, increment, plan):
    """Counted by hand: 2 for each multiplication and addition; forward, backward, and no gradient at the input."""
    carryover = DeviceFolder(folder).read().carryover if DeviceFolder(folder).numbers() else None
    boundary = open_boundary(plan, carryover, increment, seed=boundary_seed(0, carryover))
    rows = len(boundary.y) + len(boundary.old_exemplars.cut(boundary.most_kept if plan.rehearses else 0))
    steps = -(-rows // plan.batch_size)
    return steps * plan.batch_size * 2 * (2 * 6 * 8 + 3 * 8 * boundary.n_classes)


@pytest.mark.parametrize("method", ["ewc", "wa"])
def test_without_a_need_the_limit_changes_no_bit(tmp_path, forecasters, method):
    for name, plan in (("free", plan_of(method)), ("limited", plan_of(method, time_limit=1e6))):
        update(tmp_path / name, FIRST, plan=plan, **LENIENT)
        report = update(tmp_path / name, SECOND, forecaster=forecasters[method], **LENIENT)
        assert report.status == UpdateStatus.KEPT
        assert (report.entry["limits"] is None) == (name == "free")
    assert report.entry["limits"]["given_up"] == [] and report.entry["limits"]["time"]["passes"] == 20
    assert content(tmp_path / "free") == content(tmp_path / "limited")


@pytest.mark.parametrize("method", ["ewc", "wa"])
def test_passes_are_planned_from_counted_operations_and_a_measured_speed(tmp_path, forecasters, method):
    clock, plan = Clock(), plan_of(method)
    trainer, folder = Timed(clock), tmp_path / "arm"
    once = operations_of_a_pass(trainer, folder, FIRST, plan)
    # Time for eight passes and a half; what measures the speed goes off it.
    limit = 8.5 * once / SPEED / 0.7
    report = update(folder, FIRST, plan=replace(plan, time_limit=limit), trainer=trainer, clock=clock, **LENIENT)
    limits = report.entry["limits"]["time"]
    calibration = trainer.jobs[:2]
    spent = sum(trainer.operations_of(job) for job in calibration) / SPEED
    passes = int((limit - spent) * 0.7 * SPEED / once)
    assert 0 < passes < 8 and limits["passes"] == passes and limits["rows"] == 96
    assert limits["speed"] == pytest.approx(SPEED) and limits["speed_from"] == "calibration"
    assert limits["operations_planned"] == passes * once == report.entry["operations"]
    assert report.entry["training_seconds"] == pytest.approx(limits["seconds_planned"]) == passes * once / SPEED
    assert report.entry["seconds"] == pytest.approx(spent + passes * once / SPEED, abs=1e-4) and \
        report.entry["seconds"] < limit
    assert limits["given_up"] == [f"{passes} of 20 passes, to keep the time limit of {limit:g} s"]
    # What is carried is what a plan of so few passes would have made of it, and the plan stays the user's.
    update(tmp_path / "few", FIRST, plan=replace(plan, passes=passes), **LENIENT)
    assert content(folder) == content(tmp_path / "few")
    assert DeviceFolder(folder).read().carryover.plan == replace(plan, time_limit=limit)

    # From now on training itself has told the speed; the advice is for the passes that there will be.
    once = operations_of_a_pass(trainer, folder, SECOND, plan)
    limit, before = 5.5 * once / SPEED / 0.7, len(trainer.jobs)
    report = update(folder, SECOND, plan=replace(plan, time_limit=limit), trainer=trainer, clock=clock,
                    forecaster=forecasters[method], **LENIENT)
    limits = report.entry["limits"]["time"]
    assert (limits["passes"], limits["speed_from"]) == (5, "updates") and len(trainer.jobs) == before + 1
    assert limits["speed"] == pytest.approx(SPEED)
    assert report.entry["descriptors"]["passes"] == report.advice.descriptors["passes"] == 5
    assert report.entry["operations"] == report.entry["operations_planned"] <= limits["operations_planned"]
    assert json.loads(json.dumps(report.entry)) == DeviceFolder(folder).read().history[-1]
    assert report.carryover.plan.passes == 20


def test_the_speed_is_that_of_the_latest_tries_that_went_to_their_end():
    def entry(operations, seconds, **told):
        return {"earlier_tries": [], "operations_planned": operations, "training_seconds": seconds, "stopped": False,
                "diverged": False, **told}

    # An entry of an older version tells nothing.
    history = [{"earlier_tries": []}, entry(1e9, 1.0), *[entry(10.0, 1.0)] * 3, entry(7e9, 1.0, stopped=True),
               entry(20.0, 2.0, earlier_tries=[entry(70.0, 1.0), entry(5e9, 1.0, diverged=True)])]
    assert measured_speed(history) == (10 + 10 + 10 + 70 + 20) / 6
    assert measured_speed([]) is measured_speed(history[:1]) is None


@pytest.mark.parametrize("method", ["ewc", "wa"])
def test_if_no_pass_fits_a_share_of_every_class_is_trained_on(tmp_path, forecasters, method):
    clock, plan = Clock(), plan_of(method)
    trainer, folder = Timed(clock), tmp_path / "arm"
    update(folder, FIRST, plan=plan, trainer=trainer, clock=clock, **LENIENT)
    many = clouds(["hook", "ring"], seed=1, rows=400)
    once = operations_of_a_pass(trainer, folder, many, plan)
    limit = 0.5 * once / SPEED / 0.7
    report = update(folder, many, plan=replace(plan, time_limit=limit), trainer=trainer, clock=clock,
                    forecaster=forecasters[method], **LENIENT)
    rows = report.entry["limits"]["time"]["rows"]
    total = 800 - 2 * report.entry["by_class"]["check_rows"][-1]
    assert report.entry["limits"]["time"]["passes"] == 1 and total / 4 < rows <= total / 2
    job = trainer.jobs[-1]
    assert len(job.boundary.y) == report.entry["descriptors"]["rows"] in (rows - 1, rows)
    assert np.ptp(np.bincount(job.boundary.y)[3:]) <= 1
    assert report.entry["limits"]["given_up"][1] == f"trained on {rows} of {total} rows, to keep the time limit of " \
        f"{limit:g} s"
    assert report.entry["seconds"] <= limit and report.entry["by_class"]["arrived"] == [0, 0, 0, 400, 400]
    # Held back as ever.
    assert report.entry["achieved"]["rows"] == 5 * report.entry["by_class"]["check_rows"][-1] > 20


def test_an_update_that_cannot_fit_is_refused_before_it_starts(tmp_path, forecasters):
    clock, plan = Clock(), plan_of("wa")
    trainer, folder = Timed(clock), tmp_path / "arm"
    update(folder, FIRST, plan=plan, trainer=trainer, clock=clock)
    before, learned = DeviceFolder(folder).read().checksum, len(trainer.jobs)
    # Of a pass over 68 new rows and 54 exemplars.
    needed = operations_of_a_pass(trainer, folder, SECOND, plan) * (16 + 54) / (68 + 54) / SPEED / 0.7
    with pytest.raises(InputError, match=f"time_limit: must leave about {needed:.2g} s for one pass over 16 rows and "
                       "54 exemplars; received 0.01 s, of which 0.01 s are left for training; raise it"):
        update(folder, SECOND, plan=replace(plan, time_limit=0.01), trainer=trainer, clock=clock,
               forecaster=forecasters["wa"])
    assert DeviceFolder(folder).read().checksum == before and len(trainer.jobs) == learned


def test_training_that_is_late_is_stopped_and_rolled_back(tmp_path, forecasters):
    clock, plan = Clock(), plan_of("wa")
    folder = tmp_path / "arm"
    update(folder, FIRST, plan=plan, trainer=Timed(clock), clock=clock)
    before = content(folder)
    # Slow from one moment to the next: 50 looks at the clock, one each 8 steps, until the limit.
    report = update(folder, SECOND, plan=replace(plan, passes=20, time_limit=1.0), clock=Clock(0.1),
                    forecaster=forecasters["wa"])
    assert report.status == UpdateStatus.ROLLED_BACK and report.entry["stopped"]
    assert report.entry["operations"] < report.entry["operations_planned"]
    reason, = report.entry["reasons"]
    share = report.entry["operations"] / report.entry["operations_planned"]
    assert reason == f"the time limit of 1 s was over after {share:.0%} of training"
    assert content(folder) == before and report.entry["earlier_tries"] == []
    # What was stopped tells nothing of the speed, and base nothing of the settings.
    generation = DeviceFolder(folder).read()
    assert measured_speed(generation.history) == pytest.approx(SPEED)
    with pytest.raises(InputError, match="history: must tell of an update after the first"):
        export_history(tmp_path / "away.json", generation)
    update(folder, SECOND, plan=replace(plan, time_limit=1e5), forecaster=forecasters["wa"], **LENIENT)
    assert export_history(tmp_path / "away.json", DeviceFolder(folder).read()) == 1
    assert read_export(tmp_path / "away.json").plan == plan


def test_a_trainer_that_does_not_ask_is_found_late_afterwards(tmp_path, forecasters):
    clock, plan = Clock(), plan_of("wa")
    trainer, folder = Timed(clock), tmp_path / "arm"
    update(folder, FIRST, plan=plan, trainer=trainer, clock=clock)
    before, trainer.slowdown = content(folder), 10.0
    once = operations_of_a_pass(trainer, folder, SECOND, plan)
    report = update(folder, SECOND, plan=replace(plan, time_limit=5 * once / SPEED), trainer=trainer, clock=clock,
                    forecaster=forecasters["wa"], retries=3, **LENIENT)
    assert report.status == UpdateStatus.ROLLED_BACK and not report.entry["stopped"] and content(folder) == before
    assert report.entry["reasons"][0].startswith("the time limit of ") and "when training had ended, by" in \
        report.entry["reasons"][0]
    assert len(report.entry["reasons"]) == 1 and report.entry["earlier_tries"] == []


@pytest.mark.parametrize("tries_that_fit", [1, 2])
def test_another_try_is_made_if_it_fits(tmp_path, forecasters, tries_that_fit):
    clock, plan = Clock(), plan_of("wa")
    trainer, folder = Timed(clock), tmp_path / "arm"
    update(folder, FIRST, plan=plan, trainer=trainer, clock=clock)
    trainer.failures = 1
    # A try with the most exemplars; planned with some time to spare, it may take less.
    full = 20 * operations_of_a_pass(trainer, folder, SECOND, plan) / SPEED
    limit = {1: 1.45, 2: 2.1}[tries_that_fit] * full
    # One try after another, even if the boundary is not familiar.
    report = update(folder, SECOND, plan=replace(plan, time_limit=limit), trainer=trainer, clock=clock,
                    forecaster=forecasters["wa"], preferences=Preferences(unfamiliar="warn"), **LENIENT)
    assert report.entry["limits"]["time"]["passes"] == 20
    assert len(report.entry["earlier_tries"]) == tries_that_fit - 1 and report.entry["kept"] == (tries_that_fit == 2)
    reasons = [*report.entry["earlier_tries"], report.entry][0]["reasons"]
    assert reasons[0] == "training diverged" and len(reasons) == 3 - tries_that_fit
    assert all("are left, too little for another try, which takes" in one for one in reasons[1:])


def test_limits_may_change_and_nothing_else_of_the_plan(tmp_path, forecasters):
    folder, plan = tmp_path / "arm", plan_of("wa", time_limit=50.0)
    update(folder, FIRST, plan=plan)
    assert DeviceFolder(folder).read().carryover.plan == plan
    with pytest.raises(InputError, match="plan: must stay"):
        update(folder, SECOND, plan=replace(plan, passes=3), forecaster=forecasters["wa"])
    report = update(folder, SECOND, plan=replace(plan, time_limit=None), forecaster=forecasters["wa"], **LENIENT)
    assert report.entry["limits"] is None and report.carryover.plan == plan_of("wa")


@pytest.mark.parametrize("limit", [0, -1.0, float("nan"), "3", True, 1e8])
def test_a_time_limit_is_a_sensible_number_of_seconds(limit):
    with pytest.raises(InputError, match="time_limit: must be a number from 0.001 to 1e\\+07"):
        Plan(time_limit=limit).checked()


def test_heads_side_by_side_all_stop():
    boundary = open_boundary(Plan("wa", 512, 20, 16, 120), None, FIRST)
    looks = iter([False, False, True, True, True, True])
    # So many heads that they fill two blocks.
    attempts = try_settings(HeadTrainer(), boundary, [Settings(0.02, 1.0, 5)] * 150, seed=0, stop=lambda: next(looks))
    assert all(one.stopped for one in attempts) and {one.operations > 0 for one in attempts} == {True, False}
    assert not any(one.diverged for one in attempts)


def test_the_command_line_sets_limits_and_rules(tmp_path, forecasters, capsys):
    from hyperforecast.forecasting import save_forecaster

    save_forecaster(tmp_path / "a.forecaster", forecasters["wa"])
    np.savez(tmp_path / "first.npz", X=FIRST.X, y=FIRST.y)
    np.savez(tmp_path / "second.npz", X=SECOND.X, y=SECOND.y)
    folder = str(tmp_path / "arm")

    def run(file, *more):
        code = main(["update", "--device", folder, "--increment", str(tmp_path / file), *more])
        return code, capsys.readouterr()

    code, told = run("first.npz", "--time-limit", "600", "--memory-limit", "120", "--hidden-units", "8")
    assert code == 0 and "as measured in a short training" in told.out and "s in all" in told.out
    second = ("--forecaster", str(tmp_path / "a.forecaster"))
    code, told = run("second.npz", *second, "--time-limit", "soon")
    assert code == 2 and told.err.startswith("hyperforecast update: --time-limit: must be a number of seconds")
    code, told = run("second.npz", *second, "--retries", "-1")
    assert code == 2 and "retries: must be a whole number" in told.err
    code, told = run("second.npz", *second, "--time-limit", "0.001")
    assert code == 2 and "time_limit: must leave about" in told.err and len(told.err.splitlines()) == 1
    code, told = run("second.npz", *second, "--most-lost", "0", "--most-lost-by-class", "0", "--retries", "2",
                     "--settings", "learning_rate=1", "--by", "test", "--because", "to forget", "--json")
    entry = json.loads(told.out)
    assert code == UpdateStatus.ROLLED_BACK == 3 and entry["limits"]["time"]["speed_from"] == "updates"
    code, told = run("second.npz", *second, "--time-limit", "none", "--most-lost", "1", "--most-lost-by-class", "1",
                     "--json")
    assert json.loads(told.out)["limits"] is None
    assert code == 0 and DeviceFolder(folder).read().carryover.plan.time_limit is None


def test_the_help_lists_every_exit_code(capsys):
    with pytest.raises(SystemExit):
        main(["update", "--help"])
    told = " ".join(capsys.readouterr().out.split())
    words = {UpdateStatus.KEPT: "0 kept", UpdateStatus.ROLLED_BACK: "3 rolled back", UpdateStatus.BUSY:
             "4 another update is at work", UpdateStatus.DAMAGED: "5 the folder is damaged",
             UpdateStatus.NOT_WRITABLE: "6 the folder cannot be written"}
    assert set(words) == set(UpdateStatus) and all(word in told for word in words.values())
