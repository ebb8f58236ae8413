"""How many boundaries are called unfamiliar: of held-out open sources, and of streams made strange; and what then helps.

    python bench_streams/bench_familiarity.py --records FILE [--streams N] [--json]

Familiarity is fitted on the records without the source in question. Strange streams are the open and synthetic ones of
gather_open.toml and gather_synthetic.toml with a fault (hyperforecast/workshop/streams/strange.py), walked through with
the reference settings; N of them for each kind. At the boundaries that are called unfamiliar the constant, the advice
of the forecaster that ships, and the best of its first four on check rows are tried; their accuracy over all classes is
that on a fifth of every increment's rows, set aside before. Not among them are shuffled labels and classes under two
names, where there is nothing right to learn.
"""

import argparse
import json
import pathlib
import time

import numpy as np

from hyperforecast.describing import DESCRIPTORS, describe
from hyperforecast.forecasting import Familiarity, advise_settings, load_forecaster, opening_settings
from hyperforecast.increments import Increment
from hyperforecast.learning import (
    HeadTrainer, accuracies, check_accuracies, close_boundary, open_boundary, standardize, try_settings,
)
from hyperforecast.settings import METHODS, SettingsBox
from hyperforecast.workshop.gathering import RecordsFile
from hyperforecast.workshop.gathering.trajectories import draw_plan, reference_settings
from hyperforecast.workshop.streams import KINDS, OPEN_SETS, load_streams, make_strange

FOLDER = pathlib.Path(__file__).parent
OPEN_SOURCES = {one.source for one in OPEN_SETS.values()}
LEARNABLE = ("thousandfold", "shifted", "one feature", "single rows", "thousand classes")
SET_ASIDE = 0.2


class Records:
    """Descriptors and sources of the recorded boundaries, by method, and familiarity without a source."""

    def __init__(self, path):
        self.described, self.sources, self._fitted = {}, {}, {}
        for method in METHODS:
            boundaries = [(one.descriptors, trajectory.source) for trajectory in RecordsFile(path).trajectories(method=method)
                          for one in trajectory.boundaries]
            self.described[method] = [described for described, _ in boundaries]
            self.sources[method] = np.array([source for _, source in boundaries])

    def without(self, method, source):
        """Return the `Familiarity` of a method's records without a source."""
        if (method, source) not in self._fitted:
            kept = np.flatnonzero(self.sources[method] != source)
            D = [[self.described[method][k].get(name, np.nan) for name in DESCRIPTORS] for k in kept]
            self._fitted[method, source] = Familiarity.fit(D, list(DESCRIPTORS), self.sources[method][kept], seed=0)
        return self._fitted[method, source]


def held_out(records):
    """Return {method: {source: share flagged}} over the recorded boundaries of open sources, and the pooled share."""
    flagged = {method: {source: [not records.without(method, source).assess(records.described[method][k]).familiar
                                 for k in np.flatnonzero(records.sources[method] == source)]
                        for source in sorted(OPEN_SOURCES & set(records.sources[method].tolist()))}
               for method in METHODS}
    every = [one for by_source in flagged.values() for ones in by_source.values() for one in ones]
    return {"pooled": round(float(np.mean(every)), 4), "boundaries": len(every),
            **{method: {source: round(float(np.mean(ones)), 4) for source, ones in by_source.items()}
               for method, by_source in flagged.items()}}


def with_codes(stream):
    """Return a stream's increments with whole numbers for labels."""
    codes, increments = {}, []
    for t in range(stream.n_boundaries):
        increment = stream.training(t)
        increments.append(Increment(increment.X, np.array(
            [codes.setdefault(label, len(codes)) for label in increment.y.tolist()])))
    return increments


def walk(stream, kind, method, seed, records, forecasters):
    """Return a dict of what was told at each boundary where the fault shows."""
    rng = np.random.default_rng(seed)
    strange = make_strange(with_codes(stream), kind, rng)
    if not strange.boundaries:
        return []
    plan = draw_plan(method, stream, rng)
    if kind == "thousand classes":
        # Room for four rows of a class.
        plan = type(plan)(method, plan.hidden_units, 3, plan.batch_size, 4000)
    trainer, carryover, told, aside = HeadTrainer(), None, [], []
    for t, increment in enumerate(strange.increments[:strange.boundaries[-1] + 1]):
        part = rng.random(len(increment)) < SET_ASIDE if kind in LEARNABLE else np.zeros(len(increment), bool)
        # A class keeps its first row.
        part[np.unique(increment.y, return_index=True)[1]] = False
        aside.append(Increment(increment.X[part], increment.y[part]))
        increment = Increment(increment.X[~part], increment.y[~part])
        boundary = open_boundary(plan, carryover, increment, seed=seed + t)
        if t in strange.boundaries:
            described = describe(trainer, boundary, seed=seed + t)
            verdict = records.without(method, stream.source).assess(described)
            told.append({"kind": kind, "source": stream.source, "familiar": verdict.familiar})
            if not verdict.familiar and kind in LEARNABLE:
                told[-1].update(attempted(trainer, boundary, described, forecasters[method], aside, seed + t))
        settings = opening_settings(plan) if carryover is None else reference_settings(plan)
        attempt = try_settings(trainer, boundary, [settings], seed=seed + t)[0]
        carryover = close_boundary(trainer, boundary, attempt, seed=seed + t)
    return told


def attempted(trainer, boundary, described, forecaster, aside, seed):
    """Return the accuracy over all classes of the constant, the advice, and the best of four on check rows."""
    rows = [one for one in aside if len(one)]
    if not rows:
        return {}
    advice = advise_settings(forecaster, described, SettingsBox(boundary.plan.method, boundary.most_kept))
    attempts = try_settings(trainer, boundary, [advice.constant, *advice.ranked[:4]], seed=seed)
    Z = standardize(np.concatenate([one.X for one in rows]), boundary.center, boundary.scale)
    place = {label: code for code, label in enumerate(boundary.classes.tolist())}
    y = np.array([place[label] for one in rows for label in one.y.tolist()])

    def accuracy(attempt):
        return float(np.nanmean(accuracies(trainer, attempt.head, Z, y, boundary.n_classes)))

    best = int(np.argmax(check_accuracies(trainer, boundary, attempts[1:])))
    return {"constant": accuracy(attempts[0]), "advice": accuracy(attempts[1]), "best of four": accuracy(attempts[1 + best])}


def main():
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--records", required=True)
    parser.add_argument("--streams", type=int, default=20, help="of each kind (%(default)s)")
    parser.add_argument("--json", action="store_true")
    options = parser.parse_args()
    started = time.perf_counter()
    records = Records(options.records)
    result = {"held-out open sources, share flagged": held_out(records)}
    definitions = [one for name in ("gather_open.toml", "gather_synthetic.toml") for one in load_streams(FOLDER / name)]
    forecasters = {method: load_forecaster(method) for method in METHODS}
    told = []
    for n, place in enumerate(np.random.default_rng(0).permutation(len(definitions))[:options.streams]):
        stream = definitions[place].build()
        for m, kind in enumerate(KINDS):
            told += walk(stream, kind, METHODS[(n + m) % len(METHODS)], 1000 * n + m, records, forecasters)
    flagged = {kind: [not one["familiar"] for one in told if one["kind"] == kind] for kind in KINDS}
    result["strange streams, share flagged"] = {
        "pooled": round(float(np.mean([not one["familiar"] for one in told])), 4), "boundaries": len(told),
        **{kind: {"flagged": round(float(np.mean(ones)), 4), "boundaries": len(ones)} for kind, ones in flagged.items()}}
    tried = [one for one in told if "advice" in one]
    result["accuracy at those flagged"] = {
        kind: {"boundaries": len(ones), **{way: round(float(np.mean([one[way] for one in ones])), 4)
                                           for way in ("constant", "advice", "best of four")}}
        for kind in ("all", *LEARNABLE) if (ones := [one for one in tried if kind in ("all", one["kind"])])}
    result["seconds"] = round(time.perf_counter() - started)
    if options.json:
        (FOLDER / "bench_familiarity.json").write_text(json.dumps(result, indent=1) + "\n")
    print(json.dumps(result, indent=1))


if __name__ == "__main__":
    main()
