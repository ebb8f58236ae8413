"""How long `hyperforecast advise` takes as a whole process, and what memory, over `python -c "import numpy"`.

    python bench_streams/bench_cold_start.py            # writes bench_cold_start.json beside this file

The package is installed as a user would have it: built into a wheel, unpacked and compiled, in a virtual environment
whose only other package is numpy. A device of three increments of 450 rows by 64 features is advised on the third. Both
commands run in turn, many times; wall time, processor time and peak memory are the system's account of each process.
"""

import json
import os
import platform
import shutil
import statistics
import subprocess
import sys
import tempfile
import venv
import zipfile
from pathlib import Path

import numpy as np

ROOT = Path(__file__).parents[1]
ROWS, FEATURES, CLASSES = 450, 64, 3
RUNS = int(os.environ.get("HYPERFORECAST_BENCH_RUNS", 60))
ENVIRONMENT = {"PATH": os.environ["PATH"], "OPENBLAS_NUM_THREADS": "1"}


def build_wheel(folder):
    """Build the package into a wheel in a folder and return its path: offline, of a copy, with what is installed here."""
    source = Path(folder) / "source"
    source.mkdir()
    for name in ("hyperforecast", "models"):
        shutil.copytree(ROOT / name, source / name, ignore=shutil.ignore_patterns("__pycache__"))
    for name in ("pyproject.toml", "README.md"):
        shutil.copy(ROOT / name, source / name)
    script = "import sys; from setuptools import build_meta; build_meta.build_wheel(sys.argv[1])"
    subprocess.run([sys.executable, "-W", "ignore", "-c", script, str(folder)], check=True, cwd=source,
                   capture_output=True)
    return next(Path(folder).glob("hyperforecast-*.whl"))


def install(folder, wheel):
    """Return (interpreter, command) of a new environment in a folder that has numpy and the package, both compiled."""
    venv.create(folder / "venv", with_pip=False, symlinks=True)
    packages = next((folder / "venv" / "lib").glob("python*")) / "site-packages"
    for path in Path(np.__file__).parents[1].glob("numpy*"):
        (packages / path.name).symlink_to(path)
    with zipfile.ZipFile(wheel) as archive:
        archive.extractall(packages)
    python = folder / "venv" / "bin" / "python"
    subprocess.run([python, "-m", "compileall", "-q", packages / "hyperforecast"], check=True, env=ENVIRONMENT)
    # As pip writes it.
    command = python.with_name("hyperforecast")
    command.write_text(f"#!{python}\nimport sys\nfrom hyperforecast.cli import main\nsys.exit(main())\n")
    command.chmod(0o755)
    return str(python), str(command)


def write_increments(folder):
    """Write three increments of Gaussian classes; return their paths."""
    rng = np.random.default_rng(0)
    centers = 0.5 * rng.standard_normal((3 * CLASSES, FEATURES))
    paths = []
    for t in range(3):
        y = np.repeat(np.arange(CLASSES) + CLASSES * t, ROWS // CLASSES)
        paths.append(str(folder / f"{t}.npz"))
        np.savez(paths[-1], X=(centers[y] + rng.standard_normal((ROWS, FEATURES))).astype(np.float32), y=y)
    return paths


def measured(command):
    """Run a command; return (wall seconds, processor seconds, peak megabytes)."""
    script = ("import os, sys, time\nstarted = time.perf_counter()\n"
              "child = os.posix_spawn(sys.argv[1], sys.argv[1:], os.environ, "
              "file_actions=[(os.POSIX_SPAWN_OPEN, 1, os.devnull, os.O_WRONLY, 0)])\n"
              "_, status, used = os.wait4(child, 0)\nassert status == 0\n"
              "print(time.perf_counter() - started, used.ru_utime + used.ru_stime, used.ru_maxrss / 1024)")
    # A small parent: the peak of a child counts what it inherits until it runs its own program.
    done = subprocess.run([sys.executable, "-S", "-c", script, *command], check=True, env=ENVIRONMENT, capture_output=True)
    return [float(value) for value in done.stdout.split()]


def run(folder):
    """Return the figures."""
    wheel = build_wheel(folder)
    python, command = install(folder, wheel)
    increments, device = write_increments(folder), str(folder / "cell")
    for path in increments[:2]:
        subprocess.run([command, "update", "--increment", path, "--device", device], env=ENVIRONMENT, check=True,
                       capture_output=True)
    commands = {"numpy": [python, "-c", "import numpy"],
                "advise": [command, "advise", "--increment", increments[2], "--device", device]}
    runs = {name: [] for name in commands}
    for _ in range(RUNS):
        for name, one in commands.items():
            runs[name].append(measured(one))
    figures = {"wheel_megabytes": round(wheel.stat().st_size / 1e6, 2), "runs": RUNS, "rows": ROWS, "features": FEATURES, "python": platform.python_version(),
               "numpy": np.__version__, "machine": platform.machine()}
    for part, place in (("wall_seconds", 0), ("processor_seconds", 1), ("peak_megabytes", 2)):
        told = {name: [one[place] for one in measurements] for name, measurements in runs.items()}
        figures[part] = {name: {"least": round(min(values), 4), "median": round(statistics.median(values), 4)}
                         for name, values in told.items()}
        # Runs lie side by side in time: the ratio of each pair does not see what else the machine was doing.
        figures[part]["ratio"] = {
            "of_least": round(min(told["advise"]) / min(told["numpy"]), 3),
            "median_of_pairs": round(statistics.median(a / n for a, n in zip(told["advise"], told["numpy"])), 3)}
    return figures


if __name__ == "__main__":
    with tempfile.TemporaryDirectory() as folder:
        figures = run(Path(folder))
    (Path(__file__).with_suffix(".json")).write_text(json.dumps(figures, indent=1) + "\n")
    print(json.dumps(figures, indent=1))
