"""Do the invented streams surround the measured ones? A picture of descriptor space, and the numbers behind it.

Run from a checkout with the workshop extra, on records as the README gathers them:

    OPENBLAS_NUM_THREADS=1 python bench_streams/descriptor_space.py --records records.sqlite

It writes descriptor_space.json and descriptor_space.png beside itself: for each method the share of open boundaries
within the synthetic ones' range (1% to 99%) of each descriptor, and the share that lies too far out for a familiarity
fitted on synthetic boundaries alone; drawn for one method, with the descriptors that matter most to its forecaster.
"""

import argparse
import json
from pathlib import Path

import numpy as np
from matplotlib.figure import Figure

from hyperforecast.forecasting import load_forecaster
from hyperforecast.storage import write_atomically
from hyperforecast.workshop.fitting import load_dataset
from hyperforecast.workshop.gathering import RecordsFile
from hyperforecast.workshop.reporting.descriptor_space import RANGE, descriptor_space

HERE = Path(__file__).parent
PANELS = 12
DRAWN = 60  # boundaries of an open source at most, evenly
MARKERS = "os^Dv*P"
INK, SOFT = "#1c1b19", "#b9b4aa"


def draw(space, method, influential, path):
    figure = Figure(figsize=(13, 15), layout="constrained", dpi=90)
    above, below = figure.subfigures(2, 1, height_ratios=[1, 1.1])
    axes = above.subplots()
    axes.plot(*space.plane[space.synthetic].T, ".", color=SOFT, markersize=5, label="synthetic boundaries")
    for source, marker in zip(space.unfamiliar, MARKERS):
        own = np.flatnonzero(space.sources == source)
        own = own[np.linspace(0, len(own) - 1, min(DRAWN, len(own))).astype(int)]
        axes.plot(*space.plane[own].T, marker, color=INK, fillstyle="none", markersize=5.5, markeredgewidth=0.8,
                  linestyle="none", label=source)
    axes.set(xlabel=f"first component ({space.explained[0]:.0%} of the variance)",
             ylabel=f"second component ({space.explained[1]:.0%})",
             title=f"{method.upper()}: boundaries in the plane of two principal components of {len(space.names)} "
                   f"descriptors; {space.flagged:.1%} of open ones lie too far out")
    axes.legend(loc="best", ncols=2)
    sources = list(space.unfamiliar)
    for number, (axes, name) in enumerate(zip(below.subplots(PANELS // 3, 3).flat, influential)):
        place = space.names.index(name)
        low, high = space.ranges[place]
        values = space.described[:, place]
        axes.axvspan(low, high, color=SOFT, alpha=0.5, linewidth=0)
        for row, (source, marker) in enumerate(zip(sources, MARKERS)):
            middle, *ends = np.nanquantile(values[space.sources == source], (0.5, *RANGE))
            axes.hlines(row, *ends, color=INK, linewidth=1.2)
            axes.plot(middle, row, marker, color=INK, markersize=5)
        if low > 0 and high > 30 * low:
            axes.set_xscale("log")
        axes.set_yticks(range(len(sources)), sources if number % 3 == 0 else [], fontsize=7)
        axes.invert_yaxis()
        axes.set_title(f"{name.replace('_', ' ')}: {space.within[place]:.0%} within", fontsize=9)
        axes.tick_params(axis="x", labelsize=7)
    below.suptitle("Range of synthetic boundaries (1% to 99%, grey) and of each open source (median, 1% to 99%)",
                   fontsize=10)
    figure.savefig(path)


def main():
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--records", required=True, metavar="FILE")
    parser.add_argument("--method", nargs="+", default=["wa", "ewc", "lwf", "icarl"],
                        help="the first is drawn (all four)")
    options = parser.parse_args()
    document = {}
    for method in options.method:
        dataset = load_dataset(RecordsFile(options.records), method)
        space = descriptor_space(dataset.descriptors, dataset.sources)
        document[method] = space.as_dict()
        print(f"{method}: {document[method]['boundaries']['open']} open boundaries, {space.flagged:.1%} too far out; "
              f"within the synthetic range of a descriptor: median {np.median(space.within):.1%}, least "
              + ", ".join(f"{space.names[place]} {space.within[place]:.0%}" for place in np.argsort(space.within)[:5]))
        if method == options.method[0]:
            draw(space, method, load_forecaster(method).influential[:PANELS], HERE / "descriptor_space.png")
    write_atomically(HERE / "descriptor_space.json", (json.dumps(document, indent=1) + "\n").encode())


if __name__ == "__main__":
    main()
