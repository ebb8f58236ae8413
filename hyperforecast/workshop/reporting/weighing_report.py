"""A boundary before its update as a page: the advice beside other settings, methods, limits and the time to update."""

from hyperforecast.device import METHODS_CAVEAT
from hyperforecast.forecasting import RIDGE, RISKY
from hyperforecast.workshop.reporting.charts import outlook_chart, plane_chart
from hyperforecast.workshop.reporting.page import Page

CAUTION = ("Forecasts are statistical; nothing was trained for this page. They must never be the only safeguard of a "
           "safety function; local codes and licensed practice come first.")
OUTLOOK = ("all classes", "old classes", "new classes", "diverges", "points behind the advised")


def weighing_page(weighing, *, name):
    """Return the `Page` of a `hyperforecast.device.Weighing`; `name` is what the device is called."""
    advice = weighing.advice
    page = Page(f"Device {name}: before the update", (
        f"With the advised settings {advice.expected_all.value:.0%} on all classes are to be expected "
        f"({advice.expected_all.low:.0%} to {advice.expected_all.high:.0%}, 90% interval). {weighing.waiting}."))
    names = [setting.replace("_", " ") for setting in advice.box.names]
    page.section("Settings side by side")
    page.table(["", *names, *OUTLOOK], _rows(weighing), caption=(
        "Expected accuracy with its 90% interval, every class alike; probability of divergence; points of accuracy on "
        "all classes behind the advised settings (below 0: ahead)."))
    page.section("Along each setting")
    page.charts(*[_curve(weighing, setting, one) for setting, one in weighing.curves.items()], caption=(
        "One setting at a time, the others as advised. The grey band is the 90% interval of all classes; upright lines "
        "mark what is advised and what was asked about."))
    plane = weighing.ridge
    marks = {"advised": weighing.beside.settings[0], "best constant": weighing.beside.settings[1]}
    if weighing.own is not None:
        marks["asked about"] = weighing.own.settings[0]
    page.charts(plane_chart(
        "learning rate and regularization", plane.learning_rates, plane.regularizations, plane.behind, good=plane.good,
        shut=plane.divergence > RISKY, x_label="learning rate", y_label="regularization",
        marks={what: (one.learning_rate, one.regularization) for what, one in marks.items()}), caption=(
            f"How far settings stay behind the best of this plane, the price of perhaps diverging included; the darker "
            f"the farther. Outlined: the ridge, within "
            f"{100 * RIDGE:.0f} points of the best. Hatched: more likely to diverge than {RISKY:.0%}."))
    page.facts({f"{setting.replace('_', ' ')} of the ridge": f"{low:.3g} to {high:.3g}"
                for setting, (low, high) in plane.spans().items()})
    page.section("Methods")
    page.table(["method", "settings", *OUTLOOK[:4], "remark"], [
        [one.method, ", ".join(f"{key} {value:.3g}" for key, value in one.settings.as_dict().items()),
         *_expectations(one.outlook, 0), "; ".join(
             ["the device's own"] * one.own + ["not familiar"] * (not one.familiar)
             + [f"not to be had here: {', '.join(one.missing)}"] * bool(one.missing)) or "-"]
        for one in weighing.methods], caption="Each with the settings advised for it.")
    page.paragraph(METHODS_CAVEAT)
    page.section("More memory, more time")
    page.table(["what", "what it comes to", "expected on all classes"], [
        [one.what, one.means, "no change" if one.settings is None else f"{100 * one.gain:+.1f} points"]
        for one in weighing.more], caption="All else as it is; settings advised anew.")
    page.section("Update now?")
    page.paragraph(f"{weighing.waiting}.")
    if hasattr(weighing.waiting, "rows"):
        page.table(["rows collected first", "expected on all classes"],
                   [[rows, value] for rows, value in zip(weighing.waiting.rows, weighing.waiting.expected)],
                   caption=f"A gain of {100 * weighing.waiting.least_gain:.3g} points counts as worth waiting for.")
    for sign in weighing.retrain or ["Nothing speaks for retraining at base."]:
        page.paragraph(f"Time to retrain at base: {sign}" if weighing.retrain else sign)
    page.paragraph(CAUTION)
    return page


def _rows(weighing):
    labels = ["advised", "best constant", *(f"alternative {n}" for n in range(2, len(weighing.beside.settings)))]
    rows = [[label, *_outlook(weighing.beside, n)] for n, label in enumerate(labels)]
    return rows if weighing.own is None else [rows[0], ["asked about", *_outlook(weighing.own, 0)], *rows[1:]]


def _outlook(outlook, n):
    return [*outlook.settings[n].as_dict().values(), *_expectations(outlook, n), f"{100 * outlook.behind[n]:.1f}"]


def _expectations(outlook, n):
    one = outlook.all.at(n)
    return [f"{one.value:.0%} ({one.low:.0%} to {one.high:.0%})", f"{outlook.old.value[n]:.0%}",
            f"{outlook.new.value[n]:.0%}", f"{outlook.divergence[n]:.2f}"]


def _curve(weighing, setting, curve):
    label = setting.replace("_", " ")
    marks = {"advised": getattr(weighing.advice.settings, setting)}
    if weighing.own is not None:
        marks["asked about"] = getattr(weighing.own.settings[0], setting)
    return outlook_chart(
        f"along {label}", [getattr(one, setting) for one in curve.settings],
        {"all classes": curve.all.value, "old classes": curve.old.value, "new classes": curve.new.value},
        low=curve.all.low, high=curve.all.high, marks=marks, x_label=label,
        limit=weighing.advice.box.most_kept if setting == "kept_per_class" else None)
