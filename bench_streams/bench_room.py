"""When has a head run out of room? Accuracy of narrow heads against wide ones, by classes for each hidden unit.

    OPENBLAS_NUM_THREADS=1 python bench_streams/bench_room.py --result bench_streams/bench_room.json

Streams of many classes are learned with advised settings (forecasters that ship) by heads of 8, 16, 32 and 64 hidden
units, each going its own way. What counts is how far a head stays behind that of 64 units on the same scoring rows. This
is what the rule in `hyperforecast.forecasting.waiting` (CROWDED) has to be held against.
"""

import argparse
from dataclasses import replace
from pathlib import Path

import numpy as np

from hyperforecast.describing import describe
from hyperforecast.forecasting import advise_settings, load_forecaster, opening_settings
from hyperforecast.learning import HeadTrainer, Job, close_boundary, open_boundary, standardize
from hyperforecast.settings import REHEARSAL_METHODS, Plan, SettingsBox
from hyperforecast.storage import dump_json, write_atomically
from hyperforecast.workshop.searching import BoundarySearch, class_codes
from hyperforecast.workshop.streams import load_streams

STREAMS = Path(__file__).parent / "gather_open.toml"
NAMES, SEEDS = ("languages, 30", "languages, 60", "letters", "glyphs, 50"), (100,)
UNITS, WIDE = (8, 16, 32), 64
EDGES = (0.0, 0.5, 1.0, 1.5, 2.0, 3.0, 8.0)
TRAINER = HeadTrainer()


def accuracies(stream, plan, forecaster):
    """Return {classes seen: accuracy on scoring rows} along a stream."""
    carryover, reached = None, {}
    for t in range(stream.n_boundaries):
        boundary, settings = open_boundary(plan, carryover, stream.training(t), seed=t), opening_settings(plan)
        if t:
            box = SettingsBox(plan.method, boundary.most_kept)
            settings = advise_settings(forecaster, describe(TRAINER, boundary, seed=t), box).settings
        attempt = TRAINER.learn([Job(boundary, settings)], seed=t)[0]
        carryover = close_boundary(TRAINER, boundary, attempt, seed=t)
        rows = stream.scoring(t)
        Z, y = standardize(rows.X, boundary.center, boundary.scale), class_codes(boundary, rows.y)
        if t:
            search = BoundarySearch(TRAINER, boundary, Z, y, seed=0)
            reached[boundary.n_classes] = float(search.outcome(attempt, Z, y).all)
    return reached


def main():
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--result", required=True)
    options = parser.parse_args()
    rows = []
    for definition in load_streams(STREAMS):
        if definition.name not in NAMES or definition.seed not in SEEDS:
            continue
        stream = definition.build()
        for method in REHEARSAL_METHODS:
            plan, forecaster = Plan(method), load_forecaster(method)
            wide = accuracies(stream, replace(plan, hidden_units=WIDE), forecaster)
            for units in UNITS:
                narrow = accuracies(stream, replace(plan, hidden_units=units), forecaster)
                rows += [{"stream": definition.key, "method": method, "hidden_units": units, "classes": classes,
                          "accuracy": narrow[classes], "wide": wide[classes]} for classes in wide]
    write_atomically(options.result, dump_json({"wide": WIDE, "rows": rows}))
    print(f"{'classes for each unit':24}{'boundaries':>12}{'behind 64 units':>18}{'behind at all':>16}")
    crowding = np.array([row["classes"] / row["hidden_units"] for row in rows])
    behind = np.array([row["wide"] - row["accuracy"] for row in rows])
    for low, high in zip(EDGES, EDGES[1:]):
        own = (low <= crowding) & (crowding < high)
        if own.any():
            print(f"{f'{low} to {high}':24}{own.sum():12}{100 * behind[own].mean():15.1f} pt"
                  f"{(behind[own] > 0).mean():16.0%}")


if __name__ == "__main__":
    main()
