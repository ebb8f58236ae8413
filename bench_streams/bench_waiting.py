"""Does it pay to wait where the program says so? Measured on open streams whose sources the forecasters never saw.

    OPENBLAS_NUM_THREADS=1 python bench_streams/bench_waiting.py --streams bench_streams/gather_open.toml \\
        --forecaster */*.forecaster --result bench_streams/bench_waiting.json [--seeds 100 101]

At every boundary from the second on, the rows of each class of the increment are split in half. The device has the first
half and asks (`await_rows`). It is then updated at once with that half, and with the rows that the answer asks for added
to it (from the other half, as far as it has them), each with its own advice; both several times with other seeds. What
follows beats updating at once if its mean accuracy on scoring rows, every class seen alike, is higher. The same where
nothing is said tells what waiting would have brought there. Afterwards the other half arrives at the device that was
updated at once, as an increment without new classes (`nothing_new`).
The walk goes on from an update with all rows. Result files go on where they were; a table is printed at the end.
"""

import argparse
from dataclasses import asdict, dataclass
from pathlib import Path

import numpy as np

from hyperforecast.checks import InputError
from hyperforecast.describing import describe
from hyperforecast.forecasting import advise_settings, await_rows, load_forecaster, nothing_new, opening_settings
from hyperforecast.increments import Increment
from hyperforecast.learning import HeadTrainer, Job, close_boundary, open_boundary, standardize
from hyperforecast.settings import METHODS, Plan, SettingsBox
from hyperforecast.storage import dump_json, read_json, write_atomically
from hyperforecast.workshop.gathering import derived_seed
from hyperforecast.workshop.searching import BoundarySearch, class_codes
from hyperforecast.workshop.streams import load_streams

TRAINED = 3
TRAINER = HeadTrainer()


@dataclass(frozen=True)
class Asked:
    """One boundary: what was said, and what came of both ways.

    `later_*` tell of the other half that arrives afterwards as an increment without new classes: the verdict, the
    forecast gain (None without check rows) and the gain measured.
    """

    boundary: int
    rows: int
    needed: int
    said: bool
    forecast_gain: float
    at_once: float
    waited: float
    later_pays: bool | None
    later_forecast: float | None
    later_gain: float

    @property
    def gain(self):
        return self.waited - self.at_once


def asked_at(stream, t, carryover, forecaster, seed):
    """Return (what was asked, carryover after an update with all rows) at boundary t."""
    first, second = halves(stream.training(t), derived_seed(seed, "halves"))
    boundary, advice = advised(carryover, first, forecaster, seed)
    new = {label: count for label, count in counted(first).items() if label not in carryover.classes.tolist()}
    waiting = await_rows(advice, new)
    at_once, attempts = learned(boundary, advice, stream, t, seed)
    collected = rows_of(second, waiting.needed)
    waited, _ = at_once, None
    if len(collected):
        both = Increment(np.concatenate([first.X, collected.X]), np.concatenate([first.y, collected.y]))
        waited, _ = learned(*advised(carryover, both, forecaster, seed), stream, t, seed)
    updated = close_boundary(TRAINER, boundary, attempts[0], seed=seed)
    again, then = advised(updated, second, forecaster, seed)
    told = nothing_new(then)
    before = judge(boundary, stream, t)(attempts[0])
    after, _ = learned(again, then, stream, t, seed)
    asked = Asked(t, len(first), len(collected), waiting.pays, waiting.gain, at_once, waited, told.pays,
                  None if told.now is None else told.expected.value - told.now, after - before)
    whole, advice = advised(carryover, stream.training(t), forecaster, seed)
    attempt = TRAINER.learn([Job(whole, advice.settings)], seed=seed)[0]
    return asked, close_boundary(TRAINER, whole, attempt, seed=seed)


def halves(increment, seed):
    """Return an increment as two, the rows of each class dealt in turn."""
    order = np.random.default_rng(seed).permutation(len(increment))
    first = np.zeros(len(increment), bool)
    for label in np.unique(increment.y):
        first[order[increment.y[order] == label][::2]] = True
    return tuple(Increment(increment.X[rows], increment.y[rows]) for rows in (first, ~first))


def counted(increment):
    return dict(zip(*(part.tolist() for part in np.unique(increment.y, return_counts=True))))


def rows_of(increment, needed):
    """Return at most as many rows of each class as are needed."""
    rows = [np.flatnonzero(increment.y == label)[:count] for label, count in needed.items()]
    rows = np.concatenate(rows) if rows else np.empty(0, int)
    return Increment(increment.X[rows], increment.y[rows])


def advised(carryover, increment, forecaster, seed):
    """Return a boundary and the advice there."""
    boundary = open_boundary(carryover.plan, carryover, increment, seed=seed)
    descriptors = describe(TRAINER, boundary, seed=seed)
    return boundary, advise_settings(forecaster, descriptors, SettingsBox(carryover.plan.method, boundary.most_kept))


def judge(boundary, stream, t):
    """Return the function from an attempt to its accuracy on scoring rows, all classes seen alike."""
    rows = stream.scoring(t)
    Z, y = standardize(rows.X, boundary.center, boundary.scale), class_codes(boundary, rows.y)
    search = BoundarySearch(TRAINER, boundary, Z, y, seed=0)
    return lambda attempt: float(search.outcome(attempt, Z, y).all)


def learned(boundary, advice, stream, t, seed):
    """Return the mean accuracy of the advised settings, trained with several seeds, and the attempts."""
    attempts = [TRAINER.learn([Job(boundary, advice.settings)], seed=derived_seed(seed, k))[0] for k in range(TRAINED)]
    return float(np.mean([judge(boundary, stream, t)(one) for one in attempts])), attempts


def walk(definition, forecaster):
    """Return what was `Asked` at the boundaries of a stream."""
    stream, plan, told = definition.build(), Plan(forecaster.method), []
    seed = derived_seed("waiting", definition.key, plan.method, 0)
    boundary = open_boundary(plan, None, stream.training(0), seed=seed)
    attempt = TRAINER.learn([Job(boundary, opening_settings(plan))], seed=seed)[0]
    carryover = close_boundary(TRAINER, boundary, attempt, seed=seed)
    for t in range(1, stream.n_boundaries):
        asked, carryover = asked_at(stream, t, carryover, forecaster,
                                    derived_seed("waiting", definition.key, plan.method, t))
        told.append(asked)
    return told


def unseen(forecasters, method, source):
    """Return the first forecaster of a method that was fitted without a source, None if there is none."""
    return next((one for one in forecasters if one.method == method and source not in one.recipe["boundaries"]), None)


def table(pieces):
    """Lines that sum up the pieces of a result file: by source, by method, and over all."""
    groups = {}
    for piece in pieces:
        for name in (piece["source"], piece["method"], "all"):
            groups.setdefault(name, []).extend(Asked(**one) for one in piece["asked"])
    order = sorted({piece["source"] for piece in pieces}) + sorted({piece["method"] for piece in pieces}) + ["all"]
    lines = [f"{'':20}{'asked':>6}{'said':>7}{'beats':>7}{'gain':>8}{'forecast':>9}   where not said: {'beats':>5}"
             f"{'gain':>8}   no new class, 'pays': {'share':>5}{'gain':>8}{'else':>8}"]
    for name in order:
        told = groups[name]
        said, not_said = ([one for one in told if one.said is wanted] for wanted in (True, False))
        pays, not_pays = ([one.later_gain for one in told if one.later_pays is wanted] for wanted in (True, False))
        lines.append(
            f"{name:20}{len(told):6}{len(said) / len(told):7.0%}{share(one.gain > 0 for one in said):>7}"
            f"{points(one.gain for one in said):>8}{points(one.forecast_gain for one in said):>9}"
            f"{share(one.gain > 0 for one in not_said):>24}{points(one.gain for one in not_said):>8}"
            f"{share([one.later_pays is True for one in told]):>30}{points(pays):>8}{points(not_pays):>8}")
    return lines


def share(flags):
    flags = list(flags)
    return f"{np.mean(flags):.0%}" if flags else "-"


def points(values):
    values = list(values)
    return f"{100 * np.mean(values):+.1f}" if values else "-"


def main():
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--streams", nargs="+", required=True)
    parser.add_argument("--forecaster", nargs="+", required=True, help="of several methods, each fitted without some source")
    parser.add_argument("--result", required=True)
    parser.add_argument("--seeds", nargs="+", type=int, help="of the streams (all)")
    options = parser.parse_args()
    forecasters = [load_forecaster(path) for path in options.forecaster]
    pieces = read_json(options.result, largest=2**26)["pieces"] if Path(options.result).exists() else []
    stored = {(piece["stream"], piece["method"]) for piece in pieces}
    for definition in [one for path in options.streams for one in load_streams(path)]:
        if options.seeds and definition.seed not in options.seeds:
            continue
        for method in METHODS:
            forecaster = unseen(forecasters, method, definition.source)
            if forecaster is None or (definition.key, method) in stored:
                continue
            try:
                told = walk(definition, forecaster)
            except InputError as error:
                print(f"left out: {error}")
                continue
            pieces.append({"stream": definition.key, "source": definition.source, "method": method,
                           "forecaster": forecaster.checksum, "asked": [asdict(one) for one in told]})
            write_atomically(options.result, dump_json({"pieces": pieces}))
    print("\n".join(table(pieces)))


if __name__ == "__main__":
    main()
