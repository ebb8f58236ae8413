"""A table of accuracies on two open streams that has to come out in the known order.

Forgetting without a remedy, less of it with each method, least with exemplars, none with all rows at hand: the order
that surveys of the trade report, e.g. Masana et al. 2022, "Class-incremental learning: survey" (from memory).
"""

import itertools

import numpy as np
import pytest

from hyperforecast.increments import Increment
from hyperforecast.learning import HeadTrainer, accuracies, close_boundary, open_boundary, standardize, try_settings
from hyperforecast.settings import Plan, Settings
from hyperforecast.workshop.streams import Stream, load_open

STREAMS = {
    "digits": [[0, 1], [2, 3], [4, 5], [6, 7], [8, 9]],
    "olive": [["Umbria", "Calabria"], ["Coast-Sardinia", "North-Apulia"], ["East-Liguria", "Sicily"],
              ["West-Liguria", "South-Apulia"], ["Inland-Sardinia"]],
}
SEEDS = range(5)
RATES = (3e-4, 3e-3, 3e-2)
GRIDS = {
    "ewc": [Settings(rate, strength) for rate, strength in itertools.product((1e-4, *RATES), (1.0, 1e2, 1e4))],
    "lwf": [Settings(rate, strength) for rate, strength in itertools.product(RATES, (0.1, 1.0, 10.0))],
    "icarl": [Settings(rate, strength, 20) for rate, strength in itertools.product(RATES, (0.1, 1.0, 10.0))],
    "wa": [Settings(rate, strength, 20) for rate, strength in itertools.product(RATES, (0.1, 1.0, 10.0))],
    # EWC with the weakest penalty there is, its learning rate chosen by the new classes alone.
    "fine-tuning": [Settings(rate, 1e-2) for rate in RATES],
    # All rows of all classes at once, as one first increment.
    "joint": [Settings(rate, 1.0) for rate in RATES],
}
PLANS = {"fine-tuning": "ewc", "joint": "ewc"}


def walk(stream, policy):
    """Mean over the later boundaries of the accuracy on (all, first, new) classes, every class alike, scoring rows.

    At each boundary the setting of the grid that does best on selection rows is kept.
    """
    plan, trainer = Plan(PLANS.get(policy, policy), 32, 8, 16, 400), HeadTrainer()
    carryover, scores = None, []
    for t in range(stream.n_boundaries):
        increment = stream.training(t)
        if policy == "joint":
            parts, carryover = [stream.training(s) for s in range(t + 1)], None
            increment = Increment(np.concatenate([one.X for one in parts]), np.concatenate([one.y for one in parts]))
        boundary = open_boundary(plan, carryover, increment, seed=t)
        code = {label: place for place, label in enumerate(boundary.classes.tolist())}
        new = [code[label] for label in stream.classes(t).tolist()]
        first = [code[label] for label in stream.classes(0).tolist()]

        def by_class(attempt, rows):
            Z = standardize(rows.X, boundary.center, boundary.scale)
            y = np.array([code[label] for label in rows.y.tolist()])
            return accuracies(trainer, attempt.head, Z, y, boundary.n_classes)

        attempts = try_settings(trainer, boundary, GRIDS[policy], seed=stream.seed)
        judged = [by_class(attempt, stream.selection(t)) for attempt in attempts]
        best = attempts[int(np.argmax([one[new].mean() if policy == "fine-tuning" else one.mean() for one in judged]))]
        found = by_class(best, stream.scoring(t))
        if t:
            scores.append((found.mean(), found[first].mean(), found[new].mean()))
        carryover = close_boundary(trainer, boundary, best, seed=t)
    return np.mean(scores, axis=0)


def table(name):
    """{policy: (seeds, 3)}: accuracy on all, first and new classes."""
    rows = {}
    for policy in GRIDS:
        walks = []
        for seed in SEEDS:
            stream = Stream(load_open(name), STREAMS[name], name=name, source=name, seed=seed, rows_per_class=40)
            walks.append(walk(stream, policy))
        rows[policy] = np.array(walks)
    print(f"\n{name:<14}{'all':>12}{'first':>12}{'new':>12}   mean and deviation over {len(SEEDS)} seeds")
    for policy, scores in rows.items():
        cells = (f"{mean:.3f} {deviation:.3f}" for mean, deviation in zip(scores.mean(axis=0), scores.std(axis=0)))
        print(f"{policy:<14}" + "".join(f"{cell:>12}" for cell in cells))
    return rows


@pytest.mark.parametrize("name", STREAMS)
def test_order_of_the_methods(name):
    means = {policy: scores.mean(axis=0) for policy, scores in table(name).items()}
    every, first, new = ({policy: one[k] for policy, one in means.items()} for k in range(3))
    # Without a remedy the first classes are all but gone, though the new ones are learned.
    assert first["fine-tuning"] < 0.15 and new["fine-tuning"] > 0.85
    for method in ("ewc", "lwf", "icarl", "wa"):
        assert every[method] > every["fine-tuning"] + 0.05
        assert every[method] < every["joint"] + 0.01
    for rehearsing, other in itertools.product(("icarl", "wa"), ("ewc", "lwf")):
        assert every[rehearsing] > every[other] + 0.05
