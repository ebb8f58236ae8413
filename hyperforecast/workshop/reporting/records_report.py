"""A records file as a page: how many boundaries of which sources, what they look like, what searching them won."""

from collections import defaultdict

import numpy as np

from hyperforecast.describing import DESCRIPTORS
from hyperforecast.workshop.reporting.charts import interval_chart, scatter_chart
from hyperforecast.workshop.reporting.descriptor_space import descriptor_space
from hyperforecast.workshop.reporting.page import Page

# Descriptors that the fewest open boundaries share with the synthetic ones.
LEAST_SHARED = 8
DESCRIBED = ("classes_old", "features", "rows_per_class", "effective_rank", "nearest_mean_accuracy_all", "curvature_new")


def records_page(records):
    """Return the `Page` of a `RecordsFile`."""
    best, middle, described, diverged, whole = (defaultdict(list) for _ in range(5))
    for trajectory in records.trajectories():
        for one in trajectory.boundaries:
            outcome = [(one.classes_old * a.accuracy_old + one.classes_new * a.accuracy_new)
                       / (one.classes_old + one.classes_new) for a in one.attempts]
            best[trajectory.method, trajectory.source].append(max(outcome))
            middle[trajectory.method, trajectory.source].append(np.median(outcome))
            diverged[trajectory.method, trajectory.source].append(np.mean([a.diverged for a in one.attempts]))
            described[trajectory.source].append([one.descriptors.get(name, np.nan) for name in DESCRIBED])
            whole[trajectory.method].append(
                (trajectory.source, [one.descriptors.get(name, np.nan) for name in DESCRIPTORS]))
    counts = records.counts()
    page = Page("Gathered records", (
        f"{sum(row[4] for row in counts):,} attempts at {sum(row[3] for row in counts):,} boundaries of "
        f"{len({row[1] for row in counts})} sources, by {len({row[0] for row in counts})} methods."))
    page.section("Outcomes")
    page.table(["method", "source", "trajectories", "boundaries", "attempts", "best attempt", "median attempt", "diverged"],
               [[*row, *(f"{np.mean(part[row[:2]]):.3f}" for part in (best, middle, diverged))] for row in counts],
               caption="Mean over boundaries of the accuracy on all classes, of the best and of the median attempt.")
    page.section("Boundaries in descriptor space")
    names = sorted(described)
    charts = []
    for place, name in enumerate(DESCRIBED):
        spread = [np.nanquantile(np.array(described[source])[:, place], (0.5, 0.05, 0.95)) for source in names]
        charts.append(interval_chart(name.replace("_", " "), names, {"boundaries": np.array(spread)},
                                     x_label="median, and 5% to 95%", marks=(0.0,)))
    page.charts(*charts, caption="Where the boundaries of each source lie. Synthetic sources should surround open ones.")
    spaces = {method: descriptor_space([row for _, row in rows], [source for source, _ in rows])
              for method, rows in sorted(whole.items())}
    _surrounded(page, {method: space for method, space in spaces.items() if space})
    return page


def _surrounded(page, spaces):
    """Tell, by method, whether synthetic boundaries surround open ones; nothing where there are not both."""
    if not spaces:
        return
    page.section("Do synthetic boundaries surround open ones?")
    page.charts(*(scatter_chart(f"{method}, in the plane of two principal components",
                                {"synthetic": space.plane[space.synthetic],
                                 **{source: space.plane[space.sources == source] for source in space.unfamiliar}},
                                x_label=f"first component, {space.explained[0]:.0%} of the variance",
                                y_label=f"second, {space.explained[1]:.0%}") for method, space in spaces.items()),
                caption="Components of all descriptors, each in spreads from its median, tamed far out.")
    sources = sorted({source for space in spaces.values() for source in space.unfamiliar})
    page.table(["method", "open boundaries", "too far out", *sources],
               [[method, int((~space.synthetic).sum()), f"{space.flagged:.1%}",
                 *("{0} of {1}".format(*space.unfamiliar[source]) if source in space.unfamiliar else "-"
                   for source in sources)] for method, space in spaces.items()],
               caption="Open boundaries that lie too far out for a familiarity fitted on synthetic ones alone.")
    page.table(["method", "median over descriptors", "the least"],
               [[method, f"{np.median(space.within):.1%}", ", ".join(
                   f"{space.names[place].replace('_', ' ')} {space.within[place]:.0%}"
                   for place in np.argsort(space.within, kind="stable")[:LEAST_SHARED])]
                for method, space in spaces.items()],
               caption="Share of open boundaries within the range, 1% to 99%, of the synthetic ones, by descriptor.")
