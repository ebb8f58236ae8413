"""Contests: streams and methods in parallel, into a result file that an interrupted contest goes on from.

A piece is one stream learned by one method. Pieces of several calls may share a file, so that each source can be
entered with forecasters that were fitted without it.
"""

import platform
import time
from dataclasses import dataclass, replace
from importlib import metadata

import joblib
from threadpoolctl import threadpool_limits

from hyperforecast.checks import InputError, check_choice, check_keys, check_whole
from hyperforecast.learning import HeadTrainer
from hyperforecast.settings import METHODS, Plan
from hyperforecast.workshop.contest import one_step, whole_stream
from hyperforecast.workshop.contest.course import Course
from hyperforecast.workshop.contest.results import open_contest

RUNNERS = {one_step.KIND: one_step.run_one_step, whole_stream.KIND: whole_stream.run_whole_stream}


@dataclass(frozen=True)
class Progress:
    """How far a contest is: pieces stored and wanted, seconds left by the pace of this run, the last piece."""

    stored: int
    total: int
    seconds_left: float
    piece: dict

    def __str__(self):
        last = self.piece
        return (f"{self.stored} of {self.total} pieces, about {self.seconds_left / 60:.0f} min left; "
                f"last: {last['stream'].rpartition('/')[0]} {last['method']} in {last['seconds']:.1f} s")


def run_contest(definitions, forecasters, path, *, kind, plan=Plan(), seed=0, workers=1, trainer=None, progress=None):
    """Run the pieces that a result file does not hold yet; return the `Contest` in it.

    Parameters
    ----------
    definitions : list of StreamDefinition
    forecasters : dict of str to Forecaster
        By method; each method enters every stream.
    path : path
        The result file; created if it does not exist, written after each piece in one rename.
    kind : {"one_step", "whole_stream"}
    plan : Plan
        Its method is replaced.
    seed : int
    workers : int
        Processes of the joblib backend that is active; the results do not depend on it, seconds aside.
    trainer : Trainer, optional
        The built-in one by default.
    progress : callable, optional
        Called with a `Progress` after each piece.

    Raises
    ------
    InputError
        If a forecaster is of another method or was fitted on a stream's own source, or the file holds another contest.
    """
    check_choice("kind", kind, RUNNERS)
    check_keys("forecasters", forecasters, METHODS)
    wanted = {(one.key, method): (one, method) for one in definitions for method in forecasters}
    for definition, method in wanted.values():
        _check_unseen(forecasters[method], method, definition.source)
    plan_facts = {name: value for name, value in plan.checked().as_dict().items() if name != "method"}
    contest = open_contest(path, kind=kind, plan=plan_facts, seed=check_whole("seed", seed))
    held = contest.forecaster_of()
    for key in wanted.keys() & held.keys():
        if held[key] != forecasters[key[1]].checksum:
            raise InputError(path, f"must hold the piece {' '.join(key)} of the same forecaster", held[key],
                             "use another result file")
    todo = [key for key in wanted if key not in held]
    tasks = (joblib.delayed(_run_piece)(
        Course(wanted[key][0], forecasters[key[1]], replace(plan, method=key[1]), seed, trainer or HeadTrainer()), kind)
        for key in todo)
    started = time.perf_counter()
    finished = joblib.Parallel(n_jobs=workers, return_as="generator_unordered", pre_dispatch="2*n_jobs")(tasks)
    for done, piece in enumerate(finished, 1):
        contest.add(piece)
        contest.write(path)
        if progress:
            left = (time.perf_counter() - started) / done * (len(todo) - done)
            progress(Progress(len(wanted) - len(todo) + done, len(wanted), left, piece))
    return contest


def _check_unseen(forecaster, method, source):
    """Refuse a forecaster that was, or may have been, fitted on records of a stream's own source."""
    if forecaster.method != method:
        raise InputError("forecasters", f"must hold a forecaster of {method} under that name", forecaster.method)
    fitted_on = forecaster.recipe.get("boundaries")
    if not isinstance(fitted_on, dict) or not fitted_on:
        raise InputError("forecasters", f"must tell in the recipe of {method} what sources it was fitted on", "nothing")
    if source in fitted_on:
        raise InputError("forecasters", f"must be fitted without the source of the stream, {source}",
                         f"{method} fitted on {', '.join(sorted(fitted_on))}", "fit it again without that source")


def _run_piece(course, kind):
    definition, method = course.definition, course.plan.method
    started = time.perf_counter()
    # On one core, CPU seconds are those of the work itself.
    with threadpool_limits(1):
        outcome = RUNNERS[kind](course)
    versions = {package: metadata.version(package) for package in ("hyperforecast", "numpy", "scipy")}
    return {
        "stream": definition.key, "source": definition.source, "method": method, "definition": definition.as_dict(),
        "forecaster": course.forecaster.checksum, "versions": {**versions, "python": platform.python_version()},
        "seconds": time.perf_counter() - started, "outcome": outcome,
    }
