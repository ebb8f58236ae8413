"""Benchmark of forecasting: a shipped forecaster at one boundary through numpy, against LightGBM on the same trees.

Run from a checkout with the workshop extra: OPENBLAS_NUM_THREADS=1 python bench_streams/bench_forecasting.py [--json]

At a boundary advice weighs a lattice of candidate settings, then others around the best of them. numpy's seconds
are those of a `BoundaryForecast`: filling in the boundary's descriptors, then scoring the candidates, through all
that a forecaster holds, networks beside the trees too; LightGBM gets the same rows, descriptors and all, and predicts
with one thread (`num_threads=1`). Its models are rebuilt from the shipped trees, split for split; trees must give the
same scores to the bit. CPU seconds, the best of several turns, in turns.
"""

import argparse
import json
import os
import sys
from dataclasses import asdict, dataclass

import lightgbm
import numpy as np
from bench_learning import in_turns, second_boundary

from hyperforecast.describing import describe
from hyperforecast.forecasting import load_forecaster
from hyperforecast.forecasting.choice import AROUND_EACH, CENTERS, SPREAD_OUT, lattice
from hyperforecast.learning import HeadTrainer
from hyperforecast.settings import METHODS, SettingsBox

TURNS = 40
LIMIT = 3.0
# What orders candidates, and what the user may ask of each of them besides.
WEIGHED = ("shortfall", "later", "diverged")
TOLD = (*WEIGHED, "old", "new")


@dataclass(frozen=True)
class Figure:
    """Milliseconds of both ways at one boundary, and numpy's over LightGBM's."""

    method: str
    models: str
    trees: int
    leaves: int
    candidates: int
    numpy_ms: float
    lightgbm_ms: float
    ratio: float

    @property
    def passed(self):
        return self.ratio <= LIMIT


def lightgbm_model(ensemble):
    """The Booster of a `TreeEnsemble`: LightGBM's own text, tree by tree, from the stored splits in preorder."""
    names = [f"Column_{f}" for f in range(ensemble.n_features)]
    lines = ["tree", "version=v4", "num_class=1", "num_tree_per_iteration=1", "label_index=0",
             f"max_feature_idx={ensemble.n_features - 1}", "objective=regression", f"feature_names={' '.join(names)}",
             f"feature_infos={' '.join(['[-1e300:1e300]'] * ensemble.n_features)}", ""]
    leaves = iter(ensemble.leaf_value)
    nodes = iter(ensemble.split)
    for number in range(ensemble.n_trees):
        splits, left, right, values = [], [], [], []

        def grow():
            """Take one subtree from the nodes; return LightGBM's number of its root, ~leaf or split."""
            split = next(nodes)
            if split < 0:
                values.append(next(leaves))
                return ~(len(values) - 1)
            own = len(splits)
            splits.append(split)
            left.append(None)
            right.append(None)
            left[own] = grow()
            right[own] = grow()
            return own

        grow()
        columns = {
            "split_feature": ensemble.feature[splits], "split_gain": np.ones(len(splits), int),
            "threshold": ensemble.threshold[splits],
            "decision_type": 2 * ensemble.default_left[splits] + 4 * ensemble.missing[splits],
            "left_child": left, "right_child": right, "leaf_value": values}
        lines += [f"Tree={number}", f"num_leaves={len(values)}", "num_cat=0"]
        lines += [f"{name}={' '.join(map(repr, np.array(column).tolist()))}" for name, column in columns.items()]
        lines += ["is_linear=0", "shrinkage=1", ""]
    return lightgbm.Booster(model_str="\n".join([*lines, "end of trees", ""]))


def candidates(box):
    """As many settings as advice weighs, in the two helpings in which it weighs them."""
    points = lattice(SPREAD_OUT + CENTERS * AROUND_EACH, box.n_dimensions)
    return [box.from_unit(points[:SPREAD_OUT]), box.from_unit(points[SPREAD_OUT:])]


def measure(method, names):
    forecaster = load_forecaster(method)
    boundary = second_boundary(method=method)
    descriptors = describe(HeadTrainer(), boundary)
    helpings = candidates(SettingsBox(method, boundary.most_kept))
    score = {
        "shortfall": lambda at, settings: at.shortfall(settings), "later": lambda at, settings: at.later(settings),
        "diverged": lambda at, settings: at.divergence(settings),
        "old": lambda at, settings: at.outcome(settings)}
    wanted = [score[name] for name in names if name in score]  # `outcome` gives old and new in one

    def through_numpy():
        at = forecaster.at(descriptors)
        for settings in helpings:
            for one in wanted:
                one(at, settings)

    rows = [np.hstack([np.tile(forecaster.vector(descriptors), (len(settings), 1)),
                       forecaster.at(descriptors).coordinates(settings)]) for settings in helpings]
    boosters = {name: lightgbm_model(forecaster.models[name]) for name in names}
    for name, booster in boosters.items():
        for X in rows:
            assert np.array_equal(booster.predict(X, raw_score=True), forecaster.models[name].predict(X))

    def through_lightgbm():
        for X in rows:
            for booster in boosters.values():
                booster.predict(X, raw_score=True, num_threads=1)

    seconds = in_turns({"numpy": through_numpy, "lightgbm": through_lightgbm}, TURNS)
    models = [forecaster.models[name] for name in names]
    return Figure(method, ", ".join(names), sum(model.n_trees for model in models),
                  sum(len(model.leaf_value) for model in models), sum(map(len, helpings)),
                  round(1e3 * seconds["numpy"], 2), round(1e3 * seconds["lightgbm"], 2),
                  round(seconds["numpy"] / seconds["lightgbm"], 3))


def main():
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--json", action="store_true", help="print JSON")
    as_json = parser.parse_args().json
    if os.environ.get("OPENBLAS_NUM_THREADS") != "1":
        parser.error("set OPENBLAS_NUM_THREADS=1: everything that is compared runs on one thread")
    figures = [measure(method, names) for method in METHODS for names in (WEIGHED, TOLD)]
    if as_json:
        print(json.dumps([{**asdict(one), "limit": LIMIT, "passed": one.passed} for one in figures], indent=2))
    else:
        for one in figures:
            print(f"{'pass' if one.passed else 'MISSED':<7}{one.method:<6} {one.ratio:.2f} <= {LIMIT:g}  numpy "
                  f"{one.numpy_ms:.1f} ms, LightGBM {one.lightgbm_ms:.1f} ms: {one.candidates} candidates, {one.trees} "
                  f"trees of {one.leaves} leaves ({one.models})")
    return 0 if all(one.passed for one in figures) else 1


if __name__ == "__main__":
    sys.exit(main())
