"""What a device pays for advice, and for an increment larger than its memory, as ratios measured in one run.

    OPENBLAS_NUM_THREADS=1 python bench_streams/bench_device.py [--rows 1000000] [--json]

Advice: descriptors and advice over one attempt, at the boundary of `bench_learning.py` with 450 and with 20,000 rows.
Large increments: a .npy pair of rows by 512 float32 features in a temporary folder (2 GB for a million rows) is checked
and described at a device's second boundary, and as a first increment, where the moments of all rows are its scaling;
over the time of reading the warm file once, a megabyte at a time. A process of its own holds nothing else, and then
learns the increment in one pass; its peaks are the system's account, Python and numpy included.
All seconds are of the processor, the best of several turns. Exits with 1 if a limit is missed.
"""

import argparse
import json
import os
import resource
import shutil
import subprocess
import sys
import tempfile
import time
from pathlib import Path

import numpy as np

from hyperforecast.describing import describe
from hyperforecast.forecasting import advise_settings, load_forecaster
from hyperforecast.increments import Increment, read_increment
from hyperforecast.learning import HeadTrainer, close_boundary, open_boundary, try_settings
from hyperforecast.settings import Plan, Settings, SettingsBox

WIDE, CLASSES, BLOCK = 512, 10, 2**20
TURNS = 5


def write_increment(path, rows):
    """Write Gaussian classes, little by little, as a .npy pair."""
    rng = np.random.default_rng(0)
    centers = rng.standard_normal((CLASSES, WIDE), dtype=np.float32)
    y = rng.integers(0, CLASSES, rows) + CLASSES
    np.save(path.with_suffix(".labels.npy"), y)
    with open(path, "wb") as file:
        np.lib.format.write_array_header_1_0(file, {"descr": "<f4", "fortran_order": False, "shape": (rows, WIDE)})
        for start in range(0, rows, 2000):
            codes = y[start:start + 2000] - CLASSES
            file.write((rng.standard_normal((len(codes), WIDE), dtype=np.float32) + centers[codes]).tobytes())


def read_once(path):
    block = bytearray(BLOCK)
    with open(path, "rb", buffering=0) as file:
        while file.readinto(block):
            pass


def small_carryover(plan):
    """What a device carries after a first increment of 450 rows."""
    rng = np.random.default_rng(1)
    y = np.repeat(np.arange(CLASSES), 45)
    boundary = open_boundary(plan, None, Increment(rng.standard_normal((len(y), WIDE), dtype=np.float32), y))
    attempt = try_settings(HeadTrainer(), boundary, [Settings(0.02, 1.0, 20)], seed=0)[0]
    return close_boundary(HeadTrainer(), boundary, attempt, seed=0)


def peak():
    # In KiB on Linux.
    return 1024 * resource.getrusage(resource.RUSAGE_SELF).ru_maxrss


def measure_large(path):
    """Return, as a dict, what one process finds out about a file: seconds of the processor, and bytes."""
    plan, trainer, settings = Plan("wa", 64, 1, 32, 2000), HeadTrainer(), Settings(0.02, 1.0, 20)
    before = small_carryover(plan)
    started_with = peak()

    def described(carryover):
        boundary = open_boundary(plan, carryover, read_increment(path))
        describe(trainer, boundary)
        return boundary

    jobs = {"read": lambda: read_once(path), "first": lambda: described(None), "second": lambda: described(before)}
    best = dict.fromkeys(jobs, np.inf)
    read_once(path)
    for _ in range(TURNS):
        for name, job in jobs.items():
            started = time.process_time()
            job()
            best[name] = min(best[name], time.process_time() - started)
    told = {**best, "started_with": started_with, "peak": peak()}
    started, boundary = time.process_time(), described(before)
    close_boundary(trainer, boundary, try_settings(trainer, boundary, [settings], seed=0)[0], seed=0)
    return {**told, "learned": time.process_time() - started, "peak_of_learning": peak()}


def large_increments(rows):
    """Figures of increments that stay in their file, from a fresh process; the file is removed again."""
    size = 4 * WIDE * rows
    with tempfile.TemporaryDirectory() as folder:
        if shutil.disk_usage(folder).free < 1.5 * size:
            sys.exit(f"{folder} must have room for {1.5e-9 * size:.1f} GB: set TMPDIR, or ask for fewer --rows")
        path = Path(folder) / "large.npy"
        write_increment(path, rows)
        child = subprocess.run([sys.executable, __file__, "--measure", str(path)], check=True, capture_output=True)
    # Only now: a process counts its parent's peak as its own.
    from bench_learning import Figure

    told = json.loads(child.stdout)
    what = f"{rows:,} rows of {WIDE} features, {1e-9 * size:.2f} GB"
    return [
        *(Figure(f"{name} increment checked and described over reading it", told[name] / told["read"], 3.0,
                 f"{what}: {told[name]:.2f} s and {told['read']:.2f} s") for name in ("first", "second")),
        Figure("peak memory of that, MB", told["peak"] / 1e6, 300, f"{told['started_with'] / 1e6:.0f} MB before"),
        Figure("peak memory of learning it, MB", told["peak_of_learning"] / 1e6, 300,
               f"one pass in chunks, {told['learned']:.1f} s"),
    ]


def advice(rows, limit):
    """Descriptors and advice over the attempt that they spare, with so many new rows."""
    from bench_learning import NEW, Figure, in_turns, second_boundary

    boundary, forecaster = second_boundary(rows // NEW), load_forecaster("wa")
    box, settings = SettingsBox("wa", boundary.most_kept), [Settings(0.02, 0.1, 20)]
    seconds = in_turns({
        "advice": lambda: advise_settings(forecaster, describe(HeadTrainer(), boundary), box),
        "attempt": lambda: try_settings(HeadTrainer(), boundary, settings, seed=0)}, turns=TURNS)
    return Figure(f"advice over one attempt, {rows:,} rows", seconds["advice"] / seconds["attempt"], limit,
                  f"{1e3 * seconds['advice']:.0f} ms and {1e3 * seconds['attempt']:.0f} ms")


def main():
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--rows", type=int, default=1_000_000, help="of the large increment (%(default)s)")
    parser.add_argument("--json", action="store_true", help="print JSON")
    parser.add_argument("--measure", metavar="FILE", help=argparse.SUPPRESS)
    options = parser.parse_args()
    if os.environ.get("OPENBLAS_NUM_THREADS") != "1":
        parser.error("set OPENBLAS_NUM_THREADS=1: everything that is compared runs on one thread")
    if options.measure:
        print(json.dumps(measure_large(Path(options.measure))))
        return 0
    figures = [*large_increments(options.rows), advice(450, 2.0), advice(20_000, 0.05)]
    if options.json:
        print(json.dumps([{"name": one.name, "value": round(one.value, 4), "limit": one.limit,
                           "passed": bool(one.passed), "detail": one.detail} for one in figures], indent=2))
    else:
        for one in figures:
            print(f"{'pass' if one.passed else 'MISSED':<7}{one.name:<54}{one.value:>8.3f}  <= {one.limit:<6g}"
                  f"{one.detail}")
    return 0 if all(one.passed for one in figures) else 1


if __name__ == "__main__":
    sys.exit(main())
