"""The whole-stream contest: every policy goes its own way from the first increment to the last."""

from dataclasses import dataclass

from hyperforecast.checks import InputError
from hyperforecast.learning import Boundary, Carryover, accuracies, close_boundary
from hyperforecast.workshop.contest.policies import POLICIES, Choice, choose

KIND = "whole_stream"
ENTRANTS = ("constant", "tuned-once", "advice", "advice+4", "random-8", "search-64")
# Advice weighs the present boundary and the two that follow, as on a device.
NOW_WEIGHT = 1 / 3


@dataclass(frozen=True)
class _Step:
    """A boundary on a policy's way and what it took along; `choice` is None at the first increment."""

    boundary: Boundary
    head: dict
    carryover: Carryover
    choice: Choice | None = None


def run_whole_stream(course):
    """Return {policy: its way through a `Course`}, JSON-able.

    A way holds the lower triangle of its accuracy `matrix` on scoring rows, the number of classes of each task,
    `task_classes`, and its choices at the `boundaries` from the second on.

    Notes
    -----
    A task is the classes that arrive first in one increment; an increment that brings none belongs to the task
    before it. Weighted by classes, the mean of row i over the tasks seen is the balanced accuracy after task i.
    Scoring rows are opened when every policy has come to the end.

    Raises
    ------
    InputError
        If fewer than two increments bring new classes: nothing could be forgotten.
    """
    stream = course.stream
    n_tasks = len({len(stream.seen(t)) for t in range(stream.n_boundaries)})
    if n_tasks < 2:
        raise InputError(stream.name, "must bring new classes in at least two increments", n_tasks)
    ways = _walk(course)
    return {name: _scored(course, steps) for name, steps in ways.items()}


def _walk(course):
    """Return {policy: list of its `_Step`}; policies share boundaries for as long as they have chosen alike."""
    boundary, attempt = course.opening()
    carryover = close_boundary(course.trainer, boundary, attempt, seed=course.step_seed(0))
    ways = {name: [_Step(boundary, attempt.head, carryover)] for name in ENTRANTS}
    for t in range(1, course.stream.n_boundaries):
        benches = {}
        for name, steps in ways.items():
            carryover, earlier = steps[-1].carryover, steps[-1].choice
            if id(carryover) not in benches:
                benches[id(carryover)] = course.bench(t, carryover, now_weight=NOW_WEIGHT)
            bench = benches[id(carryover)]
            choice = choose(POLICIES[name], bench, earlier and earlier.attempt.settings)
            steps.append(_Step(bench.boundary, choice.attempt.head, bench.close(choice.attempt), choice))
    return ways


def _scored(course, steps):
    """Return one policy's way as a JSON-able dict."""
    by_class, boundaries = [], []
    for step in steps:
        rows = course.scoring(step.boundary)
        by_class.append(accuracies(course.trainer, step.head, rows.Z, rows.y, step.boundary.n_classes))
        if step.choice:
            boundaries.append({"boundary": step.boundary.number, **step.choice.as_dict(),
                               "scoring": float(by_class[-1].mean()), "exemplars": len(step.carryover.exemplars)})
    firsts = [t for t, step in enumerate(steps) if step.boundary.n_classes > step.boundary.n_old]
    lasts = [*(t - 1 for t in firsts[1:]), len(steps) - 1]
    tasks = [slice(steps[t].boundary.n_old, steps[t].boundary.n_classes) for t in firsts]
    matrix = [[float(by_class[t][task].mean()) for task in tasks[:i + 1]] for i, t in enumerate(lasts)]
    return {"matrix": matrix, "task_classes": [task.stop - task.start for task in tasks], "boundaries": boundaries}
