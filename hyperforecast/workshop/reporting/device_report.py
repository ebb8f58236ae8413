"""The life of a device as a page: its updates, what was expected and achieved, and why some were rolled back."""

import numpy as np

from hyperforecast.workshop.reporting.charts import expected_and_achieved, line_chart
from hyperforecast.workshop.reporting.page import Page

CAUTION = ("Accuracies here come from a few rows held back on the device. They must never be the only safeguard of a "
           "safety function; local codes and licensed practice come first.")


def device_page(generation, *, name):
    """Return the `Page` of a device `Generation`; `name` is what the device is called."""
    history, carryover = generation.history, generation.carryover
    kept = [one for one in history if one["kept"]]
    page = Page(f"Device {name}", (
        f"{len(history)} updates, {len(kept)} kept; it knows {len(carryover.classes)} classes and holds "
        f"{len(carryover.exemplars)} exemplars and {len(carryover.check_rows)} check rows."))
    page.facts({**carryover.plan.as_dict(), "features": carryover.n_features, "generation": generation.number,
                "checksum": generation.checksum})
    page.section("Updates")
    page.table(
        ["update", "time", "rows", "new classes", "settings", "expected", "achieved", "outcome"],
        [[one["number"], one["time"], one["rows"], ", ".join(map(str, one["classes_new"])) or "none",
          ", ".join(f"{key} {value:.3g}" for key, value in one["settings"].items()),
          "-" if one["expected"] is None else "{value:.0%} ({low:.0%} to {high:.0%})".format(**one["expected"]["all"]),
          _share(one["achieved"]["all"]),
          "kept" if one["kept"] else "rolled back: " + "; ".join(one["reasons"])] for one in history],
        caption="Accuracy over all classes, on rows held back from training.")
    page.charts(line_chart(
        "accuracy on held-back rows", {name: [_number(one["achieved"][name]) for one in history]
                                       for name in ("all", "old", "new")},
        y_label="accuracy", x_label="update", shares=True), caption="After each update, kept or not.")
    advised = [one for one in history if one["expected"] is not None and one["achieved"]["all"] is not None]
    if advised:
        page.section("Settings")
        page.charts(*[line_chart(key.replace("_", " "), {"used": [one["settings"][key] for one in history]},
                                 y_label=key.replace("_", " "), x_label="update", logarithmic=True)
                      for key in history[-1]["settings"]], caption="Of the last try of each update.")
        page.section("Expected against achieved")
        page.charts(expected_and_achieved("all classes", {"update": [
            (*(one["expected"]["all"][end] for end in ("value", "low", "high")), one["achieved"]["all"])
            for one in advised]}), caption="Forecast before training, with its 90% interval, and what came of it.")
    page.paragraph(CAUTION)
    return page


def _number(value):
    return np.nan if value is None else value


def _share(value):
    return "-" if value is None else f"{value:.0%}"
