"""Gathering: many trajectories in parallel into a records file, with progress, stoppable and resumable."""

import time

import joblib
import numpy as np

from hyperforecast.workshop.gathering.records import RecordsFile
from hyperforecast.workshop.gathering.trajectories import run_trajectory, trajectory_key


def gather(definitions, records_path, *, methods, seed=0, workers=1, attempts=None, forecasters=None,
           trainer=None, progress=None):
    """Run the trajectories that a records file does not hold yet; return how many were run.

    Parameters
    ----------
    definitions : list of StreamDefinition
    records_path : path
        Created if it does not exist; what it holds is not run again.
    methods : sequence of str
    seed : int
    workers : int
        Processes of the joblib backend that is active; the records do not depend on it, seconds aside.
    attempts : (int, int, int), optional
        See `run_trajectory`.
    forecasters : dict of str to Forecaster, optional
        Those that steer this round, by method.
    trainer : Trainer, optional
    progress : callable, optional
        Called with a `Progress` after each trajectory.
    """
    records = RecordsFile(records_path, create=True)
    stored, forecasters = records.stored(), forecasters or {}
    # In random order, methods innermost: a run that is stopped has seen all kinds of streams and all methods.
    order = np.random.default_rng(seed).permutation(len(definitions))
    todo = [(definitions[place], method) for place in order for method in methods
            if trajectory_key(definitions[place], method, seed, forecasters.get(method)) not in stored]
    tasks = (joblib.delayed(_run)(definition, method, seed, attempts, forecasters.get(method), trainer)
             for definition, method in todo)
    total = len(definitions) * len(methods)
    started = time.perf_counter()
    finished = joblib.Parallel(n_jobs=workers, return_as="generator_unordered", pre_dispatch="2*n_jobs")(tasks)
    for done, trajectory in enumerate(finished, 1):
        records.store(trajectory)
        if progress:
            progress(Progress(total - len(todo) + done, total, done, time.perf_counter() - started, trajectory))
    return len(todo)


def _run(definition, method, seed, attempts, forecaster, trainer):
    return run_trajectory(definition, method, seed=seed, attempts=attempts, forecaster=forecaster, trainer=trainer)


class Progress:
    """How far a gathering is.

    Attributes
    ----------
    stored, total : int
        Trajectories in the records file, and wanted.
    seconds_left : float
        Estimated from the trajectories of this run.
    trajectory : Trajectory
        The last one stored.
    """

    def __init__(self, stored, total, done, seconds, trajectory):
        self.stored, self.total, self.trajectory = stored, total, trajectory
        self.seconds_left = seconds / done * (total - stored)

    def __str__(self):
        last = self.trajectory
        return (f"{self.stored} of {self.total} trajectories, about {self.seconds_left / 60:.0f} min left; "
                f"last: {last.stream} {last.method}, {len(last.boundaries)} boundaries in {last.seconds:.1f} s")
