"""The demo's report: parts of each delivery, accuracy over time, settings advised, expected against achieved."""

import numpy as np

from hyperforecast.workshop.reporting.charts import expected_and_achieved, line_chart
from hyperforecast.workshop.reporting.page import Page
from hyperforecast.workshop.streams.salvage_yard import FAMILIES, delivery_pictures

CAUTION = ("Advice is statistical. It must never be the only safeguard of a safety function; local codes and licensed "
           "practice come first.")


def demo_page(deliveries, *, seed):
    """Return the `Page` of a list of `Delivery`."""
    last, later = deliveries[-1], deliveries[1:]
    page = Page("Six deliveries to a salvage yard", (
        "A sorting cell learns three part families with every delivery and must not lose the old ones, while its lamp "
        f"ages. With advised settings it ends at {np.nanmean(last.advised):.0%} of unseen parts sorted right, with the "
        f"best constant settings at {np.nanmean(last.constant):.0%}."))
    page.section("What arrived")
    for delivery in deliveries:
        page.pictures(delivery_pictures(delivery.number - 1, 4, seed=seed).items(),
                      caption=f"Delivery {delivery.number}: some of its parts, under the lamp as it was then.")
    page.section("Accuracy on every family over time")
    page.heat_tables(
        {"with advice": np.array([one.advised for one in deliveries]).T,
         "with the best constant": np.array([one.constant for one in deliveries]).T},
        rows=FAMILIES, columns=[str(one.number) for one in deliveries],
        caption="Share of unseen parts sorted right after each delivery, all under the lamp of that day.")
    page.charts(line_chart(
        "all families so far", {"with advice": [np.nanmean(one.advised) for one in deliveries],
                                "best constant": [np.nanmean(one.constant) for one in deliveries]},
        y_label="sorted right", x_label="delivery", shares=True), caption="Mean over the families seen by then.")
    page.section("Settings")
    page.charts(*[
        line_chart(name.replace("_", " "), {"advised": [getattr(one.advice.settings, name) for one in later],
                                            "constant": [getattr(one.constant_settings, name) for one in later]},
                   y_label=name.replace("_", " "), x_label="delivery", first=2, logarithmic=True)
        for name in later[0].advice.settings.as_dict()],
        caption="At the first delivery nothing can be forgotten; both begin with the same opening settings.")
    page.table(["delivery", "what moved the advice"],
               [[str(one.number), "; ".join(map(str, one.advice.reasons)) or "nothing unusual"] for one in later],
               caption="The descriptors whose typical value would have changed the advice most.")
    page.section("Expected against achieved")
    page.charts(expected_and_achieved("all families", {"delivery": [
        (one.advice.expected_all.value, one.advice.expected_all.low, one.advice.expected_all.high,
         np.nanmean(one.advised)) for one in later]}),
        caption="What the forecaster expected before any training, with its 90% interval. It has never seen these parts.")
    page.paragraph(CAUTION)
    return page
