"""How many wrong labels are found before anything is learned, and how many right ones are doubted.

    OPENBLAS_NUM_THREADS=1 python bench_streams/bench_labels.py [--json]

From each open set 1500 rows (or all, if there are fewer) with 5% of their labels changed to another class, at random;
"at once" judges them as one increment, "third increment" deals the classes into three increments, lets a device learn
the first two (right labels) and judges the third beside the rows that the device holds, its labels changed to those of
other classes of the increment or of old ones. Ten draws each. Precision: share of rows found that are wrong; recall:
share of wrong rows found; doubted: share of rows found where no label was changed.
Prints a table (--json: JSON) and exits with 1 if fewer than three sets reach a recall of 0.5 at a precision of 0.8.
"""

import argparse
import json
import sys
import time

import numpy as np

from hyperforecast.describing import suspicious_labels
from hyperforecast.increments import check_increment
from hyperforecast.learning import HeadTrainer, close_boundary, open_boundary, try_settings
from hyperforecast.settings import Plan, Settings
from hyperforecast.workshop.streams import OPEN_SETS

SETS = ("digits", "vowel", "letters", "olive", "mnist_5k", "ratdat", "shuttle", "languages")
ROWS, DRAWS, FLIPPED = 1500, 10, 0.05
FEWEST_SETS, LEAST_PRECISION, LEAST_RECALL = 3, 0.8, 0.5


def drawn(collection, rng):
    """Rows of a collection, those of classes with at least 8 rows among them."""
    rows = rng.permutation(len(collection.y))[:ROWS]
    X, y = np.asarray(collection.X[rows], np.float32), np.asarray(collection.y[rows])
    labels, count = np.unique(y, return_counts=True)
    enough = np.isin(y, labels[count >= 8])
    return X[enough], np.unique(y[enough], return_inverse=True)[1]


def flipped(y, n_classes, share, rng):
    """Labels with a share of them changed, uniformly to another class."""
    wrong = rng.permutation(len(y))[:round(share * len(y))]
    noisy = y.copy()
    noisy[wrong] = (y[wrong] + rng.integers(1, n_classes, len(wrong))) % n_classes
    return noisy


def device(X, y, parts):
    """What a device carries after it has learned all but the last part of the classes."""
    carryover, plan, trainer = None, Plan("wa", 16, 2, 32, 400), HeadTrainer()
    for part in parts:
        rows = np.isin(y, part)
        boundary = open_boundary(plan, carryover, check_increment(X[rows], y[rows]))
        attempt = try_settings(trainer, boundary, [Settings(0.02, 1.0, 20)], seed=0)[0]
        carryover = close_boundary(trainer, boundary, attempt, seed=0)
    return carryover


def judged(X, y, noisy, carryover):
    """(rows found, of them wrong, wrong rows, rows) of one draw."""
    found = suspicious_labels(check_increment(X, noisy), carryover)
    wrong = noisy != y
    return np.array([len(found), wrong[found.rows].sum(), wrong.sum(), len(y)])


def measured(name):
    """Figures of one open set, by way of arrival."""
    collection, counts, started = OPEN_SETS[name].load(), {}, time.process_time()
    for seed in range(DRAWS):
        rng = np.random.default_rng([seed, *name.encode()])
        X, y = drawn(collection, rng)
        n_classes = int(y.max()) + 1
        parts = np.array_split(rng.permutation(n_classes), 3)
        last = np.isin(y, parts[2])
        for way, rows, carryover in (("at once", np.ones(len(y), bool), None),
                                     ("third increment", last, device(X, y, parts[:2]))):
            for share in (FLIPPED, 0):
                noisy = flipped(y[rows], n_classes, share, rng)
                counts.setdefault((way, share), []).append(judged(X[rows], y[rows], noisy, carryover))
    figures = []
    for way in ("at once", "third increment"):
        found, right, wrong, rows = np.sum(counts[way, FLIPPED], axis=0)
        doubted = np.sum(counts[way, 0], axis=0)
        figures.append({"set": name, "way": way, "rows": int(rows // DRAWS), "classes": n_classes,
                        "precision": round(float(right / max(found, 1)), 4), "recall": round(float(right / wrong), 4),
                        "doubted": round(float(doubted[0] / doubted[3]), 4)})
    print(f"{name}: {time.process_time() - started:.0f} s", file=sys.stderr)
    return figures


def main():
    """Measure, print, and tell whether the figures hold."""
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--json", action="store_true")
    options = parser.parse_args()
    figures = [one for name in SETS for one in measured(name)]
    if options.json:
        print(json.dumps({"flipped": FLIPPED, "draws": DRAWS, "figures": figures}, indent=1))
    else:
        for one in figures:
            print("{set:10} {way:16} {rows:5} rows {classes:3} classes  precision {precision:.2f}  recall "
                  "{recall:.2f}  doubted without wrong labels {doubted:.3f}".format(**one))
    good = {way: sum(one["precision"] >= LEAST_PRECISION and one["recall"] >= LEAST_RECALL for one in figures
                     if one["way"] == way) for way in ("at once", "third increment")}
    return 0 if min(good.values()) >= FEWEST_SETS else 1


if __name__ == "__main__":
    sys.exit(main())
