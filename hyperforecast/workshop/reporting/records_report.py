"""A records file as a page: how many boundaries of which sources, what they look like, what searching them won."""

from collections import defaultdict

import numpy as np

from hyperforecast.workshop.reporting.charts import interval_chart
from hyperforecast.workshop.reporting.page import Page

DESCRIBED = ("classes_old", "features", "rows_per_class", "effective_rank", "nearest_mean_accuracy_all", "curvature_new")


def records_page(records):
    """Return the `Page` of a `RecordsFile`."""
    best, middle, described, diverged = (defaultdict(list) for _ in range(4))
    for trajectory in records.trajectories():
        for one in trajectory.boundaries:
            outcome = [(one.classes_old * a.accuracy_old + one.classes_new * a.accuracy_new)
                       / (one.classes_old + one.classes_new) for a in one.attempts]
            best[trajectory.method, trajectory.source].append(max(outcome))
            middle[trajectory.method, trajectory.source].append(np.median(outcome))
            diverged[trajectory.method, trajectory.source].append(np.mean([a.diverged for a in one.attempts]))
            described[trajectory.source].append([one.descriptors.get(name, np.nan) for name in DESCRIBED])
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
    return page
