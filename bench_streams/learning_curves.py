"""Learning curves and ablations of forecasters, one step only, on recorded attempts of measured sources held out.

Run from a checkout with the workshop extra, on records as the README gathers them; it takes about half an hour of CPU
time, prints what it is at, and goes on where it was:

    OPENBLAS_NUM_THREADS=1 python bench_streams/learning_curves.py --records records.sqlite

It writes learning_curves.json (accuracies by source), .md (tables) and .png beside itself.

The measured sources are left out in three groups; everything is fitted on what remains. At each of their boundaries a
way of choosing takes one of the recorded attempts, seeing none of their outcomes. Gap closed = sum(chosen - constant) /
sum(best - constant), where best is the best attempt, the constant is the estimated outcome of the best constant of all
records but the group's, and sums are over sources, each counting alike. Best is chosen on the rows it is scored on, so
the gap looks wider than a contest's. Attempts are ordered by the trees' forecast of the shortfall alone, but for the
row that prices divergence; a forecaster has networks beside the trees.

To rivals of the forecaster's models everything is granted: the number of neighbours and the ridge penalty are the best
of three, in hindsight.
"""

import argparse
import json
import os
import sys
import time
from dataclasses import dataclass, replace
from pathlib import Path

import joblib
import numpy as np
from matplotlib.figure import Figure

from hyperforecast.describing import DESCRIPTORS, GROUPS
from hyperforecast.forecasting import DIVERGENCE_PRICE, Familiarity, load_forecaster
from hyperforecast.settings import COORDINATES
from hyperforecast.storage import write_atomically
from hyperforecast.workshop.fitting import constant_outcome, fit_constants, load_dataset, models
from hyperforecast.workshop.fitting.constants import WIDTHS
from hyperforecast.workshop.gathering import RecordsFile
from hyperforecast.workshop.streams import FAMILIES

FOLDS = 3
SEED = 0
FRACTIONS = {1 / 16: 2, 1 / 8: 2, 1 / 4: 2, 1 / 2: 1}  # of boundaries, and how often drawn
# Sources and families are counted at one and the same number of boundaries, drawn as evenly from them as can be.
DIVERSITY_BOUNDARIES, REPEATS = 300, 2
N_SOURCES, N_FAMILIES = (2, 4, 8, 99), (1, 2, 4, 99)
# What is left out is left out of this share of the boundaries, one draw for all, as fits on all of them take long.
ABLATED = 1 / 4
NEIGHBOURS, PENALTIES = (5, 20, 80), (1e-4, 1e-3, 1e-2)
RAW = ("log_learning_rate", "log_regularization", "log_kept_per_class")
PLACED = (("step_on_new", "log_learning_rate"), ("anchor_balance", "log_regularization"), ("log_kept_per_class",) * 2)
ROWS_AT_ONCE = 8192
HERE = Path(__file__).parent
ALL, PRICED, NOTHING = "outcome models", "divergence priced", "nothing"


@dataclass(frozen=True)
class Fold:
    """Judged sources that are held out together, and masks (B,) of their boundaries and of those to fit on."""

    number: int
    own: np.ndarray
    training: np.ndarray


# Ways of choosing: each returns {variant: scores (n,) of the held-out attempts}.

def by_shortfall(dataset, fold, rows):
    booster = models.train_shortfall(dataset, fold.training, seed=SEED)
    return {"": booster.predict(dataset.inputs(rows), num_threads=1)}


def by_outcome_models(dataset, fold, rows):
    """By the forecast shortfall alone, and as advice does, with a price on divergence."""
    shortfall = by_shortfall(dataset, fold, rows)[""]
    diverges = models.train_divergence(dataset, fold.training, seed=SEED).predict(dataset.inputs(rows), num_threads=1)
    return {"": shortfall, PRICED: shortfall - DIVERGENCE_PRICE * diverges}


def by_direct_regressors(dataset, fold, rows):
    boosters = models.train_direct(dataset, fold.training, seed=SEED)
    unset = np.full((dataset.n_boundaries, len(COORDINATES)), np.nan)
    inputs = np.hstack([dataset.descriptors, unset])
    points = np.stack([booster.predict(inputs, num_threads=1) for booster in boosters.values()], axis=1)
    return {"": -np.linalg.norm(dataset.points[rows] - points[dataset.boundary[rows]], axis=1)}


def by_neighbours(dataset, fold, rows):
    """The mean, over the nearest boundaries in descriptor space, of what attempts near the candidate came to there."""
    described, missing = standardized(dataset, fold.training)
    embedded = np.hstack([described, missing])
    known = np.flatnonzero(fold.training & dataset.compared)
    places = np.stack([np.where(np.isnan(column(dataset, name)), column(dataset, instead), column(dataset, name))
                       for name, instead in PLACED], axis=1)
    places = np.nan_to_num(places) * np.log(10) / WIDTHS
    behind = dataset.all - dataset.best()[dataset.boundary]
    starts = np.searchsorted(dataset.boundary, np.arange(dataset.n_boundaries + 1))
    scores = {k: np.empty(len(rows)) for k in NEIGHBOURS}
    b = dataset.boundary[rows]
    for one in np.unique(b):
        candidates = places[rows[b == one]]
        near = known[np.argsort(((embedded[known] - embedded[one]) ** 2).sum(axis=1), kind="stable")[:max(NEIGHBOURS)]]
        told = np.empty((len(near), len(candidates)))
        for place, neighbour in enumerate(near):
            there = slice(starts[neighbour], starts[neighbour + 1])
            squares = ((candidates[:, None] - places[there]) ** 2).sum(axis=2)
            weights = np.exp(-0.5 * (squares - squares.min(axis=1, keepdims=True)))
            told[place] = weights @ behind[there] / weights.sum(axis=1)
        for k in NEIGHBOURS:
            scores[k][b == one] = told[:k].mean(axis=0)
    return {f"{k} neighbours": values for k, values in scores.items()}


def by_linear_model(dataset, fold, rows):
    """Ridge regression of the shortfall on descriptors, coordinates, and products of both with coordinates."""
    described, _ = standardized(dataset, fold.training)
    fitted = np.flatnonzero((fold.training & dataset.compared)[dataset.boundary])[::2]  # plenty for a linear model
    center, spread = np.nanmean(dataset.coordinates[fitted], axis=0), np.nanstd(dataset.coordinates[fitted], axis=0)
    coordinates = np.nan_to_num((dataset.coordinates - center) / np.where(spread > 0, spread, 1))
    upper = np.triu_indices(coordinates.shape[1])

    def features(attempts):
        c, d = coordinates[attempts], described[dataset.boundary[attempts]]
        products = (d[:, :, None] * c[:, None]).reshape(len(c), -1)
        return np.hstack([np.ones((len(c), 1)), d, c, c[:, upper[0]] * c[:, upper[1]], products]).astype(np.float32)

    weights = models.attempt_weights(dataset, fitted).astype(np.float32)
    target = (dataset.all - dataset.best()[dataset.boundary])[fitted]
    gram, moment = 0.0, 0.0
    for start in range(0, len(fitted), ROWS_AT_ONCE):
        part = slice(start, start + ROWS_AT_ONCE)
        X = features(fitted[part])
        weighted = X * weights[part, None]
        gram, moment = gram + (X.T @ weighted).astype(np.float64), moment + weighted.T @ target[part]
    own = features(rows)
    scale = np.diag(gram) + 1e-9 * np.trace(gram)
    scale[0] = 0  # the level is free
    return {f"penalty {penalty:g}": own @ np.linalg.solve(gram + np.diag(penalty * scale), moment)
            for penalty in PENALTIES}


def column(dataset, name):
    return dataset.coordinates[:, COORDINATES.index(name)]


def standardized(dataset, training):
    """Descriptors as spreads from the median, wild ones tamed, 0 where missing; and which are missing."""
    known = Familiarity.fit(dataset.descriptors[training], list(DESCRIPTORS), dataset.sources[training], seed=SEED)
    described = np.arcsinh((dataset.descriptors - known.centre) / known.scale)
    return np.nan_to_num(described), np.isnan(described).astype(float)


# What is left out of the records.

def some_boundaries(dataset, training, fraction, rng):
    """Whole trajectories drawn until the share of boundaries is reached."""
    trajectories, place, counts = np.unique(dataset.trajectories[training], return_inverse=True, return_counts=True)
    order = rng.permutation(len(trajectories))
    taken = np.zeros(len(trajectories), bool)
    taken[order[np.cumsum(counts[order]) <= max(fraction * training.sum(), counts[order[0]])]] = True
    chosen = training.copy()
    chosen[training] = taken[place]
    return chosen


def some_sources(dataset, training, count, rng, families_only):
    """`DIVERSITY_BOUNDARIES` boundaries of `count` sources, in turn from each."""
    sources = np.unique(dataset.sources[training & dataset.compared])
    if families_only:
        sources = sources[np.isin(sources, list(FAMILIES))]
    sources = rng.permutation(sources)[:count]
    shuffled = rng.permutation(np.flatnonzero(training & np.isin(dataset.sources, sources)))
    turn = np.empty(len(shuffled))
    for source in sources:
        own = dataset.sources[shuffled] == source
        turn[own] = np.arange(own.sum())
    chosen = np.zeros_like(training)
    chosen[shuffled[np.argsort(turn, kind="stable")[:DIVERSITY_BOUNDARIES]]] = True
    return chosen


def blinded(dataset, *, groups=(), coordinates=()):
    """The dataset with groups of descriptors, and some coordinates, unknown."""
    hidden = np.array([one.group in groups for one in DESCRIPTORS.values()])
    unknown = np.isin(COORDINATES, coordinates)
    return replace(dataset, descriptors=np.where(hidden, np.nan, dataset.descriptors),
                   coordinates=np.where(unknown, np.nan, dataset.coordinates))


# The experiments.

@dataclass(frozen=True)
class Experiment:
    """A way of choosing, on a dataset that may lack something, fitted on some of the boundaries."""

    key: str
    way: object = by_shortfall
    blind: object = lambda dataset: dataset
    narrow: object = lambda dataset, training, rng: training


def experiments(method):
    """All experiments, those first that matter most."""
    made = [Experiment(f"way/{name}", way) for name, way in (
        (ALL, by_outcome_models), ("direct regressors", by_direct_regressors), ("nearest neighbours", by_neighbours),
        ("linear model", by_linear_model))]
    made += [Experiment(f"boundaries/{fraction:g}/{turn}",
                        narrow=lambda d, t, rng, fraction=fraction: some_boundaries(d, t, fraction, rng))
             for fraction, turns in FRACTIONS.items() for turn in range(turns)]
    scale_free = tuple(name for name in COORDINATES if name not in RAW)
    made += [Experiment(f"without/{name}", blind=blind, narrow=lambda d, t, rng: ablated(d, t)) for name, blind in (
        (NOTHING, lambda d: d), ("scale-free coordinates", lambda d: blinded(d, coordinates=scale_free)),
        *((f"descriptors of {group}", lambda d, group=group: blinded(d, groups=[group])) for group in GROUPS),
        ("all descriptors", lambda d: blinded(d, groups=GROUPS)))]
    for kind, counts in (("families", N_FAMILIES), ("sources", N_SOURCES)):
        made += [Experiment(f"{kind}/{count}/{turn}", narrow=lambda d, t, rng, count=count, kind=kind:
                            some_sources(d, t, count, rng, kind == "families"))
                 for count in counts for turn in range(REPEATS)]
    kept = {"synthetic sources": lambda d: ~np.isin(d.sources, list(FAMILIES)),
            "measured sources": lambda d: np.isin(d.sources, list(FAMILIES)),
            "the steered round": lambda d: np.char.endswith(d.trajectories, f"|{method}|{SEED}")}
    return made + [Experiment(f"without/{name}", narrow=lambda d, t, rng, keep=keep: ablated(d, t) & keep(d))
                   for name, keep in kept.items()]


def ablated(dataset, training):
    """The boundaries of `training` that experiments fit on which leave something out."""
    return some_boundaries(dataset, training, ABLATED, np.random.default_rng(SEED))


def folds(dataset):
    judged = np.setdiff1d(dataset.sources[dataset.compared], list(FAMILIES))
    for number in range(FOLDS):
        held = np.isin(dataset.sources, judged[number::FOLDS])
        yield Fold(number, held & dataset.compared, ~held)


def run(experiment, dataset, workers):
    """{variant: {"chosen": {source: mean accuracy}, "boundaries": mean number fitted on, "sources": of sources}}."""
    told = joblib.Parallel(n_jobs=workers)(
        joblib.delayed(run_fold)(experiment, dataset, fold) for fold in folds(dataset))
    return {variant: {
        "chosen": {source: value for chosen, _ in told for source, value in chosen[variant].items()},
        **{name: round(float(np.mean([sizes[name] for _, sizes in told])), 1) for name in ("boundaries", "sources")},
    } for variant in told[0][0]}


def run_fold(experiment, dataset, fold):
    """({variant: {source: mean accuracy}}, {"boundaries", "sources"} fitted on)."""
    rng = np.random.default_rng([SEED, fold.number, *experiment.key.encode()])
    narrowed = replace(fold, training=experiment.narrow(dataset, fold.training, rng))
    rows = np.flatnonzero(fold.own[dataset.boundary])
    scores = experiment.way(experiment.blind(dataset), narrowed, rows)
    return ({variant: by_source(dataset, rows, values) for variant, values in scores.items()},
            {"boundaries": int(narrowed.training.sum()),
             "sources": len(np.unique(dataset.sources[narrowed.training]))})


def by_source(dataset, rows, scores):
    """Mean accuracy of the attempts with the highest scores of their boundaries, by source."""
    b = dataset.boundary[rows]
    order = np.lexsort((-scores, b))
    first = rows[order[np.searchsorted(b[order], np.unique(b))]]
    sources = dataset.sources[dataset.boundary[first]]
    return {str(source): round(float(dataset.all[first[sources == source]].mean()), 5)
            for source in np.unique(sources)}


def bars(dataset):
    """{source: {"constant", "best", "boundaries"}}: what every way is measured against."""
    result = {}
    for fold in folds(dataset):
        raw, scale_free, kind = fit_constants(dataset, fold.training, seed=SEED)
        outcome = constant_outcome(dataset, fold.own, raw if kind == "raw" else scale_free)
        best, sources = dataset.best()[fold.own], dataset.sources[fold.own]
        for source in np.unique(sources):
            own = sources == source
            result[str(source)] = {"constant": round(float(outcome[own].mean()), 5),
                                   "best": round(float(best[own].mean()), 5), "boundaries": int(own.sum())}
    return result


# Tables and the picture.

def gap_closed(bar, chosen):
    """Return sum(chosen - constant) / sum(best - constant) over sources."""
    return (sum(chosen[source] - one["constant"] for source, one in bar.items())
            / sum(one["best"] - one["constant"] for one in bar.values()))


def curve(told, kind):
    """Rows (x, mean gap, least, greatest, boundaries) of the experiments of a kind, by their number of `kind`."""
    groups = {}
    for key, result in told["experiments"].items():
        if key.startswith(f"{kind}/"):
            groups.setdefault(key.split("/")[1], []).append(result[""])
    rows = []
    for results in groups.values():
        gaps = [gap_closed(told["bars"], one["chosen"]) for one in results]
        size = np.mean([one["boundaries" if kind == "boundaries" else "sources"] for one in results])
        rows.append((float(size), np.mean(gaps), min(gaps), max(gaps), np.mean([one["boundaries"] for one in results])))
    if kind == "boundaries":
        whole = told["experiments"][f"way/{ALL}"][""]
        gap = gap_closed(told["bars"], whole["chosen"])
        rows.append((whole["boundaries"], gap, gap, gap, whole["boundaries"]))
    return sorted(rows)


def compared(told, kind):
    """Rows (name, gap closed, sources on which it is below the first) of the experiments of a kind."""
    whole = next(result[""]["chosen"] for key, result in told["experiments"].items() if key.startswith(f"{kind}/"))
    rows = []
    for key, result in told["experiments"].items():
        if not key.startswith(f"{kind}/"):
            continue
        gaps = {variant: gap_closed(told["bars"], one["chosen"]) for variant, one in result.items()}
        for variant in gaps if "" in gaps else [max(gaps, key=gaps.get)]:
            below = sum(result[variant]["chosen"][source] < whole[source] for source in whole)
            rows.append((", ".join(filter(None, [key.split("/")[1], variant])), gaps[variant], below))
    return rows


def shipped(method, told):
    """The gap that the forecaster that ships closed on the same sources, held out in other groups.

    None if it was fitted on other records.
    """
    recipe = load_forecaster(method).recipe
    chosen = {one["source"]: one["outcome"] for one in recipe["held_out"]}
    return gap_closed(told["bars"], chosen) if recipe["attempts"] == told["attempts"] else None


def as_markdown(document):
    lines = ["# Learning curves and ablations", "",
             "Written by `bench_streams/learning_curves.py`, whose first lines say what is measured and how. Gap closed, one",
             f"step, on recorded attempts of measured sources held out in {FOLDS} groups.", ""]
    for method, told in document["methods"].items():
        n = len(told["bars"])
        lines += [f"## {method.upper()}: {told['boundaries']} boundaries of {told['sources']} sources, "
                  f"{told['attempts']} attempts", "", "| chosen by | gap closed | worse than the first on |", "|---|---|---|"]
        lines += [f"| {name} | {gap:.3f} | {below} of {n} sources |" for name, gap, below in compared(told, "way")]
        gap = shipped(method, told)
        if gap is not None:
            lines.append("| the forecaster that ships: networks beside the trees, divergence priced, other groups | "
                         f"{gap:.3f} | |")
        lines += ["", f"| outcome models on {ABLATED:.0%} of the boundaries, without | gap closed | "
                  "worse than the first on |", "|---|---|---|"]
        lines += [f"| {name} | {gap:.3f} | {below} of {n} sources |" for name, gap, below in compared(told, "without")]
        for kind in ("boundaries", "sources", "families"):
            lines += ["", f"| {kind} | gap closed | least and greatest of repeats | boundaries |", "|---|---|---|---|"]
            lines += [f"| {x:.0f} | {mean:.3f} | {low:.3f} to {high:.3f} | {size:.0f} |"
                      for x, mean, low, high, size in curve(told, kind)]
        lines += ["", "| source | boundaries | constant | outcome models | best attempt | gap closed |",
                  "|---|---|---|---|---|---|"]
        chosen = told["experiments"][f"way/{ALL}"][""]["chosen"]
        lines += [f"| {source} | {one['boundaries']} | {one['constant']:.3f} | {chosen[source]:.3f} | {one['best']:.3f} | "
                  f"{gap_closed({source: one}, chosen):.2f} |" for source, one in told["bars"].items()]
        lines.append("")
    return "\n".join(lines)


def draw(document, path):
    looks = [{"color": "#1c1b19", "linestyle": "-", "marker": "o"},
             {"color": "#8c6d4a", "linestyle": "--", "marker": "s"}]
    figure = Figure(figsize=(13, 9.5), layout="constrained", dpi=90)
    above, below = figure.subfigures(2, 1, height_ratios=[0.8, 1])
    labels = {"boundaries": "boundaries fitted on", "sources": f"sources, {DIVERSITY_BOUNDARIES} boundaries in all",
              "families": f"synthetic families, {DIVERSITY_BOUNDARIES} boundaries in all"}
    for axes, (kind, label) in zip(above.subplots(1, 3), labels.items()):
        for (method, told), look in zip(document["methods"].items(), looks):
            x, mean, low, high, _ = np.array(curve(told, kind)).T
            axes.plot(x, mean, label=method.upper(), markersize=6, **look)
            axes.vlines(x, low, high, color=look["color"], linewidth=1)
        axes.set_xscale("log", base=2)
        axes.xaxis.set_major_formatter(lambda value, _: f"{value:g}")
        axes.set(xlabel=label, ylabel="gap closed")
        axes.grid(alpha=0.3)
        axes.legend(frameon=False, loc="lower right")
    titles = {"way": "chosen by", "without": f"outcome models on {ABLATED:.0%} of the boundaries, without"}
    for axes, (kind, title) in zip(below.subplots(1, 2), titles.items()):
        for place, ((method, told), look) in enumerate(zip(document["methods"].items(), looks)):
            rows = compared(told, kind)
            at = np.arange(len(rows)) + 0.4 * (place - 0.5)
            gaps = [gap for _, gap, _ in rows]
            axes.barh(at, gaps, 0.36, color=look["color"] if place == 0 else "white", edgecolor=look["color"],
                      hatch="" if place == 0 else "///", label=method.upper())
            for y, gap in zip(at, gaps):
                axes.annotate(f"{gap:.2f}", (max(gap, 0), y), (3, 0), textcoords="offset points", va="center",
                              fontsize=8)
            # The best number of neighbours and penalty differ between methods: the table tells them.
            names = [name if PRICED in name else name.split(",")[0] for name, _, _ in rows]
            axes.set_yticks(np.arange(len(names)), [name.replace(", ", ",\n") for name in names])
        axes.set(title=title, xlabel="gap closed")
        axes.axvline(0, color="#8c867b", linewidth=0.8)
        axes.margins(x=0.12)
        axes.invert_yaxis()
    figure.savefig(path)


def main():
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--records", required=True, metavar="FILE")
    parser.add_argument("--method", nargs="+", default=["wa", "ewc"], help="(wa ewc)")
    parser.add_argument("--result", type=Path, default=HERE / "learning_curves.json", metavar="FILE")
    parser.add_argument("--workers", type=int, default=1, metavar="N", help="folds at a time, at most 3 (%(default)s)")
    options = parser.parse_args()
    if os.environ.get("OPENBLAS_NUM_THREADS") != "1":
        parser.error("set OPENBLAS_NUM_THREADS=1")
    document = json.loads(options.result.read_text()) if options.result.exists() else {"methods": {}}
    for method in options.method:
        dataset = load_dataset(RecordsFile(options.records), method)
        facts = {"boundaries": dataset.n_boundaries, "sources": len(np.unique(dataset.sources)),
                 "attempts": len(dataset.all)}
        told = document["methods"].get(method, {})
        if {name: told.get(name) for name in facts} != facts:
            told = document["methods"][method] = {**facts, "bars": bars(dataset), "experiments": {}}
        for experiment in experiments(method):
            if experiment.key in told["experiments"]:
                continue
            started = time.perf_counter()
            told["experiments"][experiment.key] = result = run(experiment, dataset, options.workers)
            write_atomically(options.result, json.dumps(document, indent=1).encode())
            print(method, experiment.key, f"{time.perf_counter() - started:.0f} s", *(
                f"{variant} {gap_closed(told['bars'], one['chosen']):.3f} ({one['boundaries']:.0f} boundaries)"
                for variant, one in result.items()), file=sys.stderr, flush=True)
    write_atomically(options.result.with_suffix(".md"), as_markdown(document).encode())
    draw(document, options.result.with_suffix(".png"))


if __name__ == "__main__":
    main()
