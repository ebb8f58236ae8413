"""The report of a contest, composed from its result file."""

import numpy as np

from hyperforecast.workshop.contest import CEILING, FLOOR, summarize
from hyperforecast.workshop.contest.tables import MEASURES, ranged
from hyperforecast.workshop.reporting.charts import expected_and_achieved, interval_chart, line_chart
from hyperforecast.workshop.reporting.page import Page

_SHOWN = ("advice", "advice+4")
_ALL = "all sources"


def contest_page(contest):
    """Return the `Page` of a `Contest`; `InputError` if it has no pieces."""
    summary = summarize(contest)
    one_step = summary["contest"] == "one_step"
    page = Page("Advice against constants and full search", _ONE_STEP if one_step else _WHOLE_STREAM)
    page.facts({**{name.replace("_", " "): value for name, value in summary["plan"].items()}, "seed": summary["seed"]})
    page.paragraph("Accuracies count every class alike and are those on scoring rows, which no policy has seen. "
                   "Brackets hold 95% intervals, drawn over sources, or over streams where there is one source.")
    for method, table in summary["methods"].items():
        pieces = [piece for piece in contest.pieces if method == piece["method"]]
        page.section(f"{method}: {table['n_sources']} source(s), {table['n_streams']} streams")
        (_one_step if one_step else _whole_stream)(page, table, pieces)
    return page


_ONE_STEP = ("At every boundary all policies start from the same model. The gap closed is 0 for the best constant "
             "and 1 for a full search of 64 attempts.")
_WHOLE_STREAM = "Every policy goes its own way through each stream, from the first increment to the last."


def _one_step(page, table, pieces):
    charts = [_by_source("gap closed", table, "gap_closed", _SHOWN, marks=(0.0, 1.0))]
    if pieces:
        charts.append(expected_and_achieved("advice: expected and achieved", _expected(pieces)))
    page.charts(*charts, caption="Left of 0 the constant is better, right of 1 advice beats the search. Ringed points "
                                 "lie outside their 90% interval.")
    page.table(("policy", "attempts", "accuracy", "over constant", "gap closed", "operations", "CPU seconds"), [
        (name, f"{one['attempts']:.3g}", ranged(one["accuracy"]), ranged(one["over_constant"], signed=True),
         ranged(one["gap_closed"], digits=2), one["operations"], one["seconds"])
        for name, one in table["policies"].items()], caption="Means at a boundary, every source alike.")
    page.table(("source", "boundaries", FLOOR, *_SHOWN, CEILING, *(f"gap: {name}" for name in _SHOWN), "worst"), [
        (source, one["n"], *(one["policies"][name]["accuracy"] for name in (FLOOR, *_SHOWN, CEILING)),
         *(ranged(one["policies"][name]["gap_closed"], digits=2) for name in _SHOWN),
         one["policies"]["advice"]["worst"])
        for source, one in table["sources"].items()],
        caption="Accuracy and gap closed; worst is advice's least difference from the constant at a boundary.")
    page.facts({
        "spread of the same settings over other seeds": table["noise"]["deviation"],
        f"accuracy of {CEILING}'s settings with other seeds": table["noise"]["ceiling_again"],
        "share of advice's 90% intervals that held": ranged(table["interval"]["coverage"]),
        "median width of those intervals": table["interval"]["median_width"],
        "CPU seconds of descriptors and advice": table["advising_seconds"],
    })


def _whole_stream(page, table, pieces):
    gained = _by_source(f"incremental accuracy over {FLOOR}", table, "over_constant", (*_SHOWN, CEILING), marks=(0.0,))
    page.charts(gained, *_ways(pieces),
                caption="Accuracy on all classes seen; lines are means over a source's streams.")
    page.table(("policy", *(measure.replace("_", " ") for measure in MEASURES), f"over {FLOOR}", f"over {CEILING}"), [
        (name, *(ranged(one[measure]) for measure in (*MEASURES, "over_constant", "over_search")))
        for name, one in table["policies"].items()], caption="Means over streams, every source alike.")
    page.table(("policy", "exemplars", "attempts", "operations", "CPU seconds"), [
        (name, round(one["exemplars"]), round(one["attempts"]), one["operations"], one["seconds"])
        for name, one in table["policies"].items()], caption="Exemplars held on average, and costs of a whole stream.")


def _by_source(title, table, measure, policies, *, marks):
    groups = dict(table["sources"])
    if len(groups) > 1:
        groups[_ALL] = table
    series = {name: np.array([[one["policies"][name][measure][end] for end in ("estimate", "low", "high")]
                              for one in groups.values()], dtype=np.float64) for name in policies}
    return interval_chart(title, list(groups), series, x_label=title, marks=marks)


def _expected(pieces):
    points = {}
    for piece in pieces:
        for one in piece["outcome"]:
            expected = one["expected"]["all"]
            points.setdefault(piece["source"], []).append(
                (expected["value"], expected["low"], expected["high"], one["policies"]["advice"]["scoring"]["all"]))
    return points


def _ways(pieces):
    charts = []
    for source in sorted({piece["source"] for piece in pieces}):
        outcomes = [piece["outcome"] for piece in pieces if piece["source"] == source]
        series = {}
        for name in (FLOOR, *_SHOWN, CEILING):
            ways = [[one["scoring"] for one in outcome[name]["boundaries"]] for outcome in outcomes]
            # Streams of one source may differ in length.
            longest = max(map(len, ways))
            series[name] = np.nanmean([way + [np.nan] * (longest - len(way)) for way in ways], axis=0)
        charts.append(line_chart(source, series, y_label="accuracy", shares=True))
    return charts
