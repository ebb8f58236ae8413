"""How often features of another extractor are told from those of the same one, and how often the same is refused.

    OPENBLAS_NUM_THREADS=1 python bench_streams/bench_extractor.py [--json]

Each open set is dealt into increments of new classes; a device's sketch and scaling come from the first, and each
later one, whole and 40 rows of it, is judged. Extractors: the raw features, random Fourier features, fixed random
convolutions (of images) and a random rectified layer; another one is the same with other random numbers, or raw
features in another order or divided by 255.
Prints a table (--json: JSON), exits with 1 if more than 1% of the same are refused, or fewer than 60% of the others.
"""

import argparse
import json
import sys

import numpy as np

from hyperforecast.device.extractor import looks_foreign, sketch_of
from hyperforecast.learning import ClassSummaries, standardize
from hyperforecast.learning.boundary import fit_scaling
from hyperforecast.workshop.streams import OPEN_SETS
from hyperforecast.workshop.streams.treatments import fit_treatment

SETS = ("digits", "vowel", "letters", "olive", "mnist_5k", "ratdat", "shuttle", "languages")
ROWS, FEW, DRAWS, WIDTH = 4000, 40, 3, 64
MOST_REFUSED, LEAST_FOUND = 0.01, 0.6


def rectified(first, seed):
    """A random layer of rectified units over rows standardized by `first`."""
    rng = np.random.default_rng(seed)
    weights, bias = rng.normal(size=(first.shape[1], WIDTH)) / np.sqrt(first.shape[1]), rng.normal(size=WIDTH) / 2
    scaling = fit_scaling(first)
    return lambda X: np.maximum(standardize(X, *scaling) @ weights + bias, 0)


def extractors(collection, first, rng):
    """Pairs of an extractor and another one, by name."""
    orders = rng.permutation(first.shape[1])
    pairs = {"reordered": (lambda X: X, lambda X: X[:, orders]), "rescaled": (lambda X: X, lambda X: X / 255),
             "rectified": tuple(rectified(first, seed) for seed in (1, 2))}
    kinds = ["fourier"] + ["convolution"] * (collection.image_shape is not None)
    for kind in kinds:
        pairs[kind] = tuple(
            fit_treatment(kind, WIDTH, lambda: first, np.random.default_rng(seed), image_shape=collection.image_shape)
            for seed in (1, 2))
    return pairs


def verdicts(collection, seed):
    """Yield (pair, whether another extractor, whether refused)."""
    rng = np.random.default_rng(seed)
    rows = rng.permutation(len(collection.y))[:ROWS]
    X, y = np.asarray(collection.X[rows], np.float32), np.unique(collection.y[rows], return_inverse=True)[1]
    classes = rng.permutation(np.flatnonzero(np.bincount(y) >= 10))
    parts = np.array_split(classes, min(4, max(2, len(classes) // 2)))
    opening = np.isin(y, parts[0])
    for name, pair in extractors(collection, X[opening], rng).items():
        features = [np.asarray(one(X), np.float32) for one in pair]
        scaling = fit_scaling(features[0][opening])
        Z = [standardize(one, *scaling) for one in features]
        codes = np.searchsorted(np.sort(parts[0]), y[opening])
        none = ClassSummaries(np.empty(0, np.int64), *(np.empty((0, Z[0].shape[1]), np.float32),) * 2)
        summaries = none.merged(Z[0][opening], codes, len(parts[0]))
        sketch = sketch_of(Z[0][opening], codes)
        if sketch is None:
            continue
        for part in parts[1:]:
            whole = np.flatnonzero(np.isin(y, part))
            for chosen in (whole, rng.permutation(whole)[:FEW]):
                for other in (False, True):
                    yield name, other, looks_foreign(sketch, summaries, Z[other][chosen], y[chosen])


def main():
    """Measure, print, and tell whether the figures hold."""
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--json", action="store_true")
    options = parser.parse_args()
    judged = [(name, *one) for name in SETS for seed in range(DRAWS) for one in verdicts(OPEN_SETS[name].load(), seed)]
    figures = []
    for place, kind in ((0, "set"), (1, "extractor")):
        for value in dict.fromkeys(one[place] for one in judged):
            shares = {other: [one[3] for one in judged if one[place] == value and one[2] is other]
                      for other in (False, True)}
            figures.append({kind: value, "increments": len(shares[False]),
                            "same_refused": round(float(np.mean(shares[False])), 4),
                            "other_refused": round(float(np.mean(shares[True])), 4)})
    overall = [float(np.mean([one[3] for one in judged if one[2] is other])) for other in (False, True)]
    figures.append({"set": "all", "increments": len(judged) // 2, "same_refused": round(overall[0], 4),
                    "other_refused": round(overall[1], 4)})
    print(json.dumps({"figures": figures}, indent=1) if options.json else "\n".join(map(str, figures)))
    return 0 if overall[0] <= MOST_REFUSED and overall[1] >= LEAST_FOUND else 1


if __name__ == "__main__":
    sys.exit(main())
