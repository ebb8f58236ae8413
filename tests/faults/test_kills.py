"""Updates killed at any moment, and updates that meet: the folder opens at the old or the new generation and learns on.

Counts grow with HYPERFORECAST_FAULTS=full; pytest -rP prints them.
"""

import os
import subprocess
import sys
import time

import numpy as np
import pytest

from hyperforecast.device import DeviceFolder, UpdateStatus, update
from hyperforecast.forecasting import save_forecaster
from hyperforecast.increments import check_increment
from hyperforecast.settings import Plan

FULL = os.environ.get("HYPERFORECAST_FAULTS") == "full"
KILLS, PROCESSES_KILLED, RACES = (300, 20, 10) if FULL else (12, 2, 1)
ONE_THREAD = {**os.environ, "OPENBLAS_NUM_THREADS": "1"}

# Imports once, then forks: each child updates until it is killed; the parent checks what is left, and goes on from it.
KILLER = """
import os, signal, sys, time
import numpy as np
from hyperforecast.device import DeviceFolder, update
from hyperforecast.forecasting import load_forecaster
from hyperforecast.increments import check_increment
from hyperforecast.settings import Plan, Settings

folder, forecaster, how, count = sys.argv[1], load_forecaster(sys.argv[2]), sys.argv[3], int(sys.argv[4])
rng = np.random.default_rng(int(sys.argv[5]))
idle = Settings(1e-5, 1.0)
# A killed process loses nothing that it has handed to the system: without waiting for the disk the trials are quick.
os.fsync = lambda handle: None

def increment(number):
    return check_increment(np.random.default_rng(number).normal(size=(30, 4)), np.arange(30) % (2 + number % 3))

def one_update():
    numbers = DeviceFolder(folder).numbers()
    number = numbers[-1] if numbers else 0
    return update(folder, increment(number), plan=None if numbers else Plan("ewc", 0, 1, 16, 4000),
                  forecaster=forecaster, settings=idle, most_lost=1, most_lost_by_class=1)

def killed_at_step(step):
    last, run = None, 0

    def counted(function):
        def call(*args, **keywords):
            nonlocal step, last, run
            # Of many calls of one kind in a row only the first two count as steps.
            last, run = function, run + 1 if function is last else 1
            step -= run <= 2
            if step == 0:
                os.kill(os.getpid(), signal.SIGKILL)
            return function(*args, **keywords)
        return call
    for name in ("fsync", "rename", "mkdir", "rmdir", "unlink"):
        setattr(os, name, counted(getattr(os, name)))

for _ in range(2):
    one_update()
died = 0
for trial in range(1, count + 1):
    child = os.fork()
    if child == 0:
        if how == "anywhere":
            while True:
                one_update()
        killed_at_step(trial)
        one_update()
        os._exit(0)
    if how == "anywhere":
        time.sleep(rng.uniform(0, 0.1))
        os.kill(child, signal.SIGKILL)
    died += os.WIFSIGNALED(os.waitpid(child, 0)[1])
    before = DeviceFolder(folder).read()
    assert before.number == before.carryover.n_boundaries == before.history[-1]["number"]
    report = one_update()
    assert report.generation == report.entry["number"] == before.number + 1
    names = set(os.listdir(folder))
    assert names == {"lock", *(f"generation-{n:06d}" for n in DeviceFolder(folder).numbers()[-2:])}, names
print(died)
"""


def run_killer(tmp_path, forecaster, how, count):
    save_forecaster(tmp_path / "f.forecaster", forecaster)
    arguments = [str(tmp_path / "arm"), str(tmp_path / "f.forecaster"), how, str(count), "0"]
    run = subprocess.run([sys.executable, "-c", KILLER, *arguments], capture_output=True, text=True, env=ONE_THREAD)
    assert run.returncode == 0, run.stderr
    return int(run.stdout)


def test_updates_killed_at_any_moment_leave_a_folder_that_opens_and_learns_on(tmp_path, forecasters):
    died = run_killer(tmp_path, forecasters["ewc"], "anywhere", KILLS)
    print(f"{died} updates killed at random moments; every folder opened, every next update worked")
    assert died == KILLS


def test_updates_killed_before_each_step_of_storing_leave_a_folder_that_opens_and_learns_on(tmp_path, forecasters):
    # mkdir, fsyncs of files, rename, fsync of the folder, and rename, unlinks and rmdir of the oldest: nine steps.
    assert run_killer(tmp_path, forecasters["ewc"], "step", 11) == 9


# --- real processes ---------------------------------------------------------------------------------------------------

@pytest.fixture
def device(tmp_path, forecasters):
    """(A folder after one update, the arguments of the command that does the next)."""
    rng = np.random.default_rng(0)
    update(tmp_path / "arm", check_increment(rng.normal(size=(60, 4)), np.arange(60) % 3), plan=Plan("ewc", 0, 2, 16, 300))
    save_forecaster(tmp_path / "f.forecaster", forecasters["ewc"])
    np.savez(tmp_path / "next.npz", X=rng.normal(size=(60, 4)), y=np.arange(60) % 5)
    command = [sys.executable, "-m", "hyperforecast.cli", "update", "--device", str(tmp_path / "arm"), "--increment",
               str(tmp_path / "next.npz"), "--forecaster", str(tmp_path / "f.forecaster")]
    return DeviceFolder(tmp_path / "arm"), command


def run(command):
    return subprocess.Popen(command, stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True, env=ONE_THREAD)


def test_commands_killed_at_any_moment_leave_a_folder_that_opens_and_learns_on(device):
    folder, command = device
    started = time.monotonic()
    process = run(command)
    process.communicate()
    assert process.returncode in (UpdateStatus.KEPT, UpdateStatus.ROLLED_BACK)
    takes, died = time.monotonic() - started, 0
    rng = np.random.default_rng(1)
    for _ in range(PROCESSES_KILLED):
        before = folder.read().history[-1]["number"]
        process = run(command)
        time.sleep(rng.uniform(0.3, 1.1) * takes)
        process.kill()
        process.communicate()
        died += process.returncode < 0
        assert folder.read().history[-1]["number"] in ((before, before + 1) if process.returncode < 0 else (before + 1,))
    process = run(command)
    _, told = process.communicate()
    assert process.returncode in (UpdateStatus.KEPT, UpdateStatus.ROLLED_BACK) and told == ""
    print(f"{died} of {PROCESSES_KILLED} commands killed before they ended; the folder opened each time")


def test_of_commands_that_meet_one_is_at_work_the_others_are_told_and_nothing_is_lost(device):
    folder, command = device
    busy = kept = 0
    for _ in range(RACES):
        before = folder.read().history[-1]["number"]
        processes = [run(command) for _ in range(3)]
        told = [process.communicate()[1] for process in processes]
        codes = [process.returncode for process in processes]
        assert set(codes) <= {UpdateStatus.KEPT, UpdateStatus.ROLLED_BACK, UpdateStatus.BUSY}, told
        done = len(codes) - codes.count(UpdateStatus.BUSY)
        assert done >= 1 and folder.read().history[-1]["number"] == before + done
        assert all(line.count("\n") == (code == UpdateStatus.BUSY) for line, code in zip(told, codes))
        busy, kept = busy + len(codes) - done, kept + done
    assert [one["number"] for one in folder.read().history] == list(range(1, kept + 2))
    print(f"{3 * RACES} commands at once in threes: {kept} updates stored, {busy} refused as busy, none lost")
