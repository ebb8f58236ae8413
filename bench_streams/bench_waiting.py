"""Does it pay to wait where the program says so? Measured on open streams whose sources the forecasters never saw.

    OPENBLAS_NUM_THREADS=1 python bench_streams/bench_waiting.py --streams bench_streams/gather_open.toml \\
        --forecaster */*.forecaster --result bench_streams/bench_waiting.json [--seeds 100 101]

At every boundary from the second on, the rows of each class of the increment are split in half. The device has the
first half and asks (`await_rows`). It is then updated at once with that half, and with the rows that the answer asks
for, said or not, added to it (from the other half, as far as it has them), each with its own advice; both several
times with other seeds. Waiting beats updating at once if its mean accuracy on scoring rows, every class seen alike, is
higher.

The forecast is a law of simple classifiers times a factor of each method (`GAINED`). The table fits these factors anew
for every source, on the other sources alone; the last line of it tells what all of them together give. Afterwards the
other half arrives at the device that was updated at once, as an increment without new classes: the gain of that update
is told beside the same forecast, which for as many rows again is that of `nothing_new`, too.

The walk goes on from an update with all rows. Result files go on where they were; a table is printed at the end.
"""

import argparse
from dataclasses import asdict, dataclass
from pathlib import Path

import numpy as np

from hyperforecast.checks import InputError
from hyperforecast.describing import describe
from hyperforecast.forecasting import (
    GAINED, LEAST_GAIN, advise_settings, await_rows, load_forecaster, opening_settings,
)
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

    `law` is the forecast gain without the factor of the method, `needed` the rows that were added. `later_gain` is that
    of the other half, which arrives afterwards as an increment without new classes.
    """

    boundary: int
    rows: int
    needed: int
    law: float
    at_once: float
    waited: float
    later_gain: float

    @property
    def gain(self):
        return self.waited - self.at_once


def asked_at(stream, t, carryover, forecaster, seed):
    """Return (what was asked, carryover after an update with all rows) at boundary t."""
    first, second = halves(stream.training(t), derived_seed(seed, "halves"))
    boundary, advice = advised(carryover, first, forecaster, seed)
    new = {label: count for label, count in counted(first).items() if label not in carryover.classes.tolist()}
    # More than can be had, so that all classes are asked for.
    waiting = await_rows(advice, new, least_gain=1.0)
    at_once, attempts = learned(boundary, advice, stream, t, seed)
    collected = rows_of(second, waiting.needed)
    waited, _ = at_once, None
    if len(collected):
        both = Increment(np.concatenate([first.X, collected.X]), np.concatenate([first.y, collected.y]))
        waited, _ = learned(*advised(carryover, both, forecaster, seed), stream, t, seed)
    updated = close_boundary(TRAINER, boundary, attempts[0], seed=seed)
    again, then = advised(updated, second, forecaster, seed)
    before = judge(boundary, stream, t)(attempts[0])
    after, _ = learned(again, then, stream, t, seed)
    law = waiting.gain / GAINED[forecaster.method]
    asked = Asked(t, len(first), len(collected), law, at_once, waited, after - before)
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


def factors(pieces):
    """Return the factor of each method by least squares, over boundaries at which there was something to wait for."""
    fitted = {}
    for method in METHODS:
        told = [Asked(**one) for piece in pieces if piece["method"] == method for one in piece["asked"]]
        law, gain = np.array([(one.law, one.gain) for one in told if one.needed]).T
        fitted[method] = float(law @ gain / (law @ law))
    return fitted


def table(pieces):
    """Lines that sum up the pieces of a result file: by source, by method, and over all."""
    groups, sources = {}, sorted({piece["source"] for piece in pieces})
    for source in sources:
        others = factors([piece for piece in pieces if piece["source"] != source])
        for piece in [piece for piece in pieces if piece["source"] == source]:
            told = [(one, one.law * others[piece["method"]]) for one in (Asked(**given) for given in piece["asked"])]
            for name in (source, piece["method"], "all"):
                groups.setdefault(name, []).extend(told)
    lines = [f"{'':20}{'asked':>6}{'said':>7}{'beats':>7}{'gain':>8}{'forecast':>9}   not said: {'beats':>5}{'gain':>8}"
             f"   no new class: {'beats':>5}{'gain':>8}   else: {'beats':>5}{'gain':>8}"]
    for name in (*sources, *METHODS, "all"):
        told = groups[name]
        said, not_said = ([(one, gain) for one, gain in told if (gain >= LEAST_GAIN and one.needed > 0) is wanted]
                          for wanted in (True, False))
        lines.append(
            f"{name:20}{len(told):6}{len(said) / len(told):7.0%}{share(one.gain > 0 for one, _ in said):>7}"
            f"{points(one.gain for one, _ in said):>8}{points(gain for _, gain in said):>9}"
            f"{share(one.gain > 0 for one, _ in not_said):>19}{points(one.gain for one, _ in not_said):>8}"
            f"{share(one.later_gain > 0 for one, _ in said):>22}{points(one.later_gain for one, _ in said):>8}"
            f"{share(one.later_gain > 0 for one, _ in not_said):>14}{points(one.later_gain for one, _ in not_said):>8}")
    return [*lines, "Factors: " + ", ".join(f"{method} {factor:.2f}" for method, factor in factors(pieces).items())]


def share(flags):
    flags = list(flags)
    return f"{np.mean(flags):.0%}" if flags else "-"


def points(values):
    values = list(values)
    return f"{100 * np.mean(values):+.1f}" if values else "-"


def main():
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--streams", nargs="+", required=True)
    parser.add_argument("--forecaster", nargs="+", required=True, help="of several methods, fitted without a source")
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
