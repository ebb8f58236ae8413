"""Tables of a contest, recomputed from its result file.

Unit is the source: boundaries are averaged within each stream, streams within each source; 95% intervals come from
drawing sources, then streams within them, or streams where there is one source only.
"""

from dataclasses import dataclass

import numpy as np

from hyperforecast.checks import InputError
from hyperforecast.metrics import average_accuracy, average_incremental_accuracy, backward_transfer, forgetting
from hyperforecast.workshop.contest import one_step, whole_stream
from hyperforecast.workshop.contest.policies import CEILING, FLOOR
from hyperforecast.workshop.contest.statistics import bootstrap_mean, bootstrap_ratio, compare_ranks, signed_rank_test

SEED = 0
POOLED = "all methods"
COSTS = ("attempts", "operations", "seconds")
# Pairs of policies that are tested against each other where there are enough sources.
PAIRS = (("advice", FLOOR), ("advice+4", FLOOR), ("advice+4", CEILING))
MEASURES = ("average_incremental", "final", "backward_transfer", "forgetting")


def summarize(contest):
    """Return a contest's tables as a JSON-able dict: "contest" and, for each method and all of them, "methods".

    Every estimate is a dict of "estimate", "low" and "high"; None is a number that cannot be had.

    Raises
    ------
    InputError
        If the contest has no pieces.
    """
    if not contest.pieces:
        raise InputError("contest", "must hold at least one piece", "none", "run it first")
    rows_of, table = ((_step_rows, _one_step_table) if contest.kind == one_step.KIND
                      else (_way_rows, _whole_stream_table))
    names = sorted({piece["method"] for piece in contest.pieces})
    methods = {name: table(rows_of([one for one in contest.pieces if one["method"] == name])) for name in names}
    if len(names) > 1:
        methods[POOLED] = table(rows_of(contest.pieces))
    return {"contest": contest.kind, "plan": contest.plan, "seed": contest.seed, "methods": methods}


@dataclass(frozen=True)
class _Rows:
    """Numbers of each boundary or way, by name (n,), with the source and stream of each; NaN where there is none."""

    sources: np.ndarray
    streams: np.ndarray
    values: dict

    def __getitem__(self, name):
        return self.values[name]

    @property
    def counts(self):
        """How many sources, streams and rows there are, as a dict."""
        return {"n_sources": len(set(self.sources)), "n_streams": len(set(self.streams)), "n": len(self.streams)}

    def of(self, source):
        """Return the rows of one source."""
        here = self.sources == source
        return _Rows(self.sources[here], self.streams[here], {name: one[here] for name, one in self.values.items()})

    @property
    def units(self):
        """What is drawn first and then within it: sources and streams, or streams where there is one source."""
        return (self.sources if len(set(self.sources)) > 1 else self.streams), self.streams

    def mean(self, values):
        """Return the estimate of a mean, with its interval."""
        return _plain(bootstrap_mean(values, *self.units, seed=SEED))

    def ratio(self, numerators, denominators):
        """Return the estimate of a ratio of sums, with its interval."""
        return _plain(bootstrap_ratio(numerators, denominators, *self.units, seed=SEED))

    def by_source(self, values):
        """Return the mean of each source over its streams, (S,), in order of name."""
        return np.array([np.mean([values[self.streams == stream].mean() for stream in sorted(set(rows.streams))])
                         for rows in map(self.of, sorted(set(self.sources)))])


def _plain(interval):
    return {"estimate": interval.estimate, "low": interval.low, "high": interval.high}


def _rows(entries):
    """Return `_Rows` of a list of (piece, {name: number})."""
    sources, streams = (np.array([piece[name] for piece, _ in entries]) for name in ("source", "stream"))
    return _Rows(sources, streams, {name: np.array([numbers[name] for _, numbers in entries], np.float64)
                                    for name in entries[0][1]})


def _step_rows(pieces):
    entries = []
    for piece in pieces:
        for boundary in piece["outcome"]:
            achieved, expected = boundary["policies"]["advice"]["scoring"]["all"], boundary["expected"]["all"]
            numbers = {"noise": np.var(boundary["noise"], ddof=1), "again": np.mean(boundary["noise"]),
                       "covered": expected["low"] <= achieved <= expected["high"],
                       "width": expected["high"] - expected["low"], "advising": boundary["advice_seconds"]}
            for name, choice in boundary["policies"].items():
                numbers[name] = choice["scoring"]["all"]
                numbers.update({(name, cost): choice[cost] for cost in COSTS})
            entries.append((piece, numbers))
    return _rows(entries)


def _way_rows(pieces):
    entries = []
    for piece in pieces:
        numbers = {}
        for name, way in piece["outcome"].items():
            n_tasks = len(way["task_classes"])
            R = np.full((n_tasks, n_tasks), np.nan)
            R[np.tril_indices(n_tasks)] = np.concatenate(way["matrix"])
            numbers[name] = average_incremental_accuracy(R, test_sizes=way["task_classes"])
            numbers[name, "average_incremental"] = numbers[name]
            numbers[name, "final"] = average_accuracy(R, test_sizes=way["task_classes"])
            numbers[name, "backward_transfer"] = backward_transfer(R)
            numbers[name, "forgetting"] = forgetting(R)
            numbers[name, "exemplars"] = np.mean([choice["exemplars"] for choice in way["boundaries"]])
            numbers.update({(name, cost): np.sum([choice[cost] for choice in way["boundaries"]]) for cost in COSTS})
        entries.append((piece, numbers))
    return _rows(entries)


def _one_step_table(rows):
    return {
        **rows.counts,
        "policies": {name: {"accuracy": rows.mean(rows[name]), **_against_ends(rows, name), **_costs(rows, name)}
                     for name in one_step.ENTRANTS},
        "sources": {source: _source_table(rows.of(source)) for source in sorted(set(rows.sources))},
        "noise": {"deviation": float(np.sqrt(rows.by_source(rows["noise"]).mean())),
                  "ceiling_again": float(rows.by_source(rows["again"]).mean())},
        "interval": _interval(rows),
        "advising_seconds": float(rows.by_source(rows["advising"]).mean()),
        "tests": _tests(rows, one_step.ENTRANTS),
    }


def _source_table(rows):
    """Return one source's table; "worst" is the least difference from the constant at any boundary."""
    return {**rows.counts, "interval": _interval(rows), "policies": {
        name: {"accuracy": float(rows.by_source(rows[name])[0]), **_against_ends(rows, name),
               "worst": float((rows[name] - rows[FLOOR]).min())}
        for name in one_step.ENTRANTS}}


def _interval(rows):
    return {"coverage": rows.mean(rows["covered"]), "median_width": float(np.median(rows["width"]))}


def _against_ends(rows, name):
    gained = rows[name] - rows[FLOOR]
    return {"over_constant": rows.mean(gained), "gap_closed": rows.ratio(gained, rows[CEILING] - rows[FLOOR])}


def _whole_stream_table(rows):
    return {
        **rows.counts,
        "policies": {name: {
            **{measure: rows.mean(rows[name, measure]) for measure in MEASURES},
            "over_constant": rows.mean(rows[name] - rows[FLOOR]), "over_search": rows.mean(rows[name] - rows[CEILING]),
            **_costs(rows, name), "exemplars": float(rows.by_source(rows[name, "exemplars"]).mean()),
        } for name in whole_stream.ENTRANTS},
        "sources": {source: {**rows.of(source).counts, "policies": {
            name: {"average_incremental": float(rows.of(source)[name].mean()),
                   "over_constant": rows.of(source).mean(rows.of(source)[name] - rows.of(source)[FLOOR])}
            for name in whole_stream.ENTRANTS}} for source in sorted(set(rows.sources))},
        "tests": _tests(rows, whole_stream.ENTRANTS),
    }


def _costs(rows, name):
    """Mean cost per boundary (one step) or per stream (whole stream), every source alike."""
    return {cost: float(rows.by_source(rows[name, cost]).mean()) for cost in COSTS}


def _tests(rows, names):
    scores = {name: rows.by_source(rows[name]) for name in names}
    pairs = {f"{one} against {other}": signed_rank_test(scores[one] - scores[other]).as_dict() for one, other in PAIRS}
    return {"signed_rank": pairs, "ranks": compare_ranks(np.stack(list(scores.values()), axis=1), names).as_dict()}


def as_text(summary):
    """Return the tables of `summarize` as text of fixed width, about 120 columns."""
    show = _one_step_text if summary["contest"] == one_step.KIND else _whole_stream_text
    return "\n\n".join(show(name, table) for name, table in summary["methods"].items()) + "\n"


def _one_step_text(method, table):
    policies = [(name, f"{one['attempts']:.3g}", ranged(one["accuracy"]), ranged(one["over_constant"], signed=True),
                 ranged(one["gap_closed"], digits=2), f"{one['operations']:.1e}", f"{one['seconds']:.3f}")
                for name, one in table["policies"].items()]
    shown, noise = ("advice", "advice+4"), table["noise"]
    sources = [(source, one["n_streams"], *(f"{one['policies'][name]['accuracy']:.3f}"
                                            for name in (FLOOR, *shown, CEILING)),
                *(ranged(one["policies"][name]["gap_closed"], digits=2) for name in shown),
                f"{one['policies']['advice']['worst']:+.3f}", f"{one['interval']['coverage']['estimate']:.2f}",
                f"{one['interval']['median_width']:.2f}") for source, one in table["sources"].items()]
    return "\n".join([
        f"One step, {method}: {_counts(table, 'boundaries')}.",
        _aligned(("policy", "attempts", "accuracy", f"over {FLOOR}", "gap closed", "operations", "CPU s"), policies),
        "",
        _aligned(("source", "streams", FLOOR, *shown, CEILING, *(f"gap: {name}" for name in shown), "worst", "held",
                  "width"), sources),
        "Worst: advice's least difference from the constant at a boundary. Held: share of outcomes within the 90% interval,"
        " and its median width.",
        f"Noise floor: with other seeds the same settings vary by {noise['deviation']:.3f} (standard deviation);"
        f" {CEILING}'s settings then reach {noise['ceiling_again']:.3f}.",
        f"Advice's 90% interval held the accuracy reached in {ranged(table['interval']['coverage'])} of cases;"
        f" its median width is {table['interval']['median_width']:.3f}.",
        f"Descriptors and advice take {1000 * table['advising_seconds']:.0f} ms of CPU time at a boundary.",
        *_tests_text(table["tests"]),
    ])


def _whole_stream_text(method, table):
    policies = [(name, *(ranged(one[measure], signed=measure == "backward_transfer") for measure in MEASURES))
                for name, one in table["policies"].items()]
    against = [(name, ranged(one["over_constant"], signed=True), ranged(one["over_search"], signed=True),
                f"{one['exemplars']:.0f}", f"{one['attempts']:.0f}", f"{one['operations']:.1e}",
                f"{one['seconds']:.2f}")
               for name, one in table["policies"].items()]
    names = list(table["policies"])
    sources = [(source, one["n_streams"], *(f"{one['policies'][name]['average_incremental']:.3f}" for name in names),
                ranged(one["policies"]["advice"]["over_constant"], signed=True))
               for source, one in table["sources"].items()]
    return "\n".join([
        f"Whole stream, {method}: {_counts(table, 'ways')}.",
        _aligned(("policy", "average incremental", "final", "backward transfer", "forgetting"), policies), "",
        _aligned(("incremental", f"over {FLOOR}", f"over {CEILING}", "exemplars", "attempts", "operations", "CPU s"),
                 against), "",
        _aligned(("incremental", "streams", *names, f"advice over {FLOOR}"), sources),
        *_tests_text(table["tests"]),
    ])


def _counts(table, rows):
    unit = "sources" if table["n_sources"] > 1 else "streams"
    return (f"{table['n_sources']} source(s), {table['n_streams']} streams, {table['n']} {rows}; "
            f"means over {unit}, 95% intervals from drawing {unit}")


def _tests_text(tests):
    if "reason" in tests["ranks"]:
        return [f"No test: {tests['ranks']['reason']}."]
    pairs = [f"{pair}: p = {one['p_value']:.4f}" for pair, one in tests["signed_rank"].items()]
    ranks = [f"{name} {rank:.2f}" for name, rank in tests["ranks"]["average_ranks"].items()]
    return ["Wilcoxon's signed-rank test over sources: " + "; ".join(pairs) + ".",
            f"Average ranks over sources (critical difference {tests['ranks']['critical_difference']:.2f}): "
            + ", ".join(ranks) + "."]


def ranged(estimate, *, digits=3, signed=False):
    """Return an estimate as text, such as "0.520 [0.401, 0.612]"; a dash is a number that cannot be had."""
    value, low, high = ("–" if estimate[name] is None else f"{estimate[name]:{'+' if signed else ''}.{digits}f}"
                        for name in ("estimate", "low", "high"))
    return value if low == high == "–" else f"{value} [{low}, {high}]"


def _aligned(columns, rows):
    """Return a table as text: the first column to the left, the others to the right."""
    table = [[str(cell) for cell in row] for row in (columns, *rows)]
    widths = [max(map(len, column)) for column in zip(*table)]
    lines = ["  ".join([row[0].ljust(widths[0]), *(cell.rjust(width) for cell, width in zip(row[1:], widths[1:]))])
             for row in table]
    return "\n".join([lines[0], "-" * len(lines[0]), *lines[1:]])
