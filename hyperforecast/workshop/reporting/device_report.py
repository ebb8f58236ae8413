"""The life of a device as a page: its updates, what was expected and achieved, and what people did and decided."""

import numpy as np

from hyperforecast.device import advisers, step_in_words
from hyperforecast.workshop.reporting.charts import expected_and_achieved, line_chart
from hyperforecast.workshop.reporting.page import Page
from hyperforecast.workshop.reporting.update_report import CAUTION, class_rows, verdict, when

# In the table of classes: the last updates, and the classes that do worst now.
MOST_UPDATES, MOST_CLASSES = 12, 40


def device_document(generation, *, name):
    """Return what there is to tell of a device's life, a JSON-able dict; `name` is what the device is called."""
    carryover, care = generation.carryover, generation.care
    return {
        "device": name, "generation": generation.number, "checksum": generation.checksum,
        "plan": carryover.plan.as_dict(), "features": carryover.n_features, "classes": carryover.classes.tolist(),
        "exemplars": len(carryover.exemplars), "check_rows": len(carryover.check_rows),
        "acceptance_rows": 0 if care.acceptance is None else len(care.acceptance),
        "floors": [{"class": label, "floor": floor} for label, floor in care.floors.items()],
        "pinned": care.pin and care.pin.checksum, "updates": generation.history, "steps": list(care.steps),
    }


def device_page(document):
    """Return the `Page` of a `device_document`."""
    history = document["updates"]
    verdicts = [verdict(one) for one in history]
    counts = ", ".join(f"{verdicts.count(one)} {one}" for one in ("kept", "rolled back", "undone by hand")
                       if one in verdicts)
    page = Page(f"Device {document['device']}", (
        f"{len(history)} updates{': ' * bool(counts)}{counts}; it knows {len(document['classes'])} classes and holds "
        f"{document['exemplars']} exemplars and {document['check_rows']} check rows."))
    page.facts({**{name.replace("_", " "): value for name, value in document["plan"].items() if value is not None},
                "features": document["features"], "acceptance rows": document["acceptance_rows"],
                "floors": ", ".join(f"{one['class']} {one['floor']:.0%}" for one in document["floors"]) or "none",
                "forecaster": f"pinned, {document['pinned'][:16]}" if document["pinned"] else "not pinned",
                "generation": document["generation"], "checksum": document["checksum"]})
    if history:
        _updates(page, history)
        _classes(page, history)
        _settings(page, history)
        _expectations(page, history)
    _people(page, document)
    page.paragraph(CAUTION)
    return page


def _updates(page, history):
    page.section("Updates")
    page.table(
        ["update", "time", "rows", "new classes", "settings", "expected", "achieved", "outcome"],
        [[one["number"], when(one["time"]), one["rows"],
          ", ".join(map(str, one["classes_new"])) or "none",
          ", ".join(f"{key.replace('_', ' ')} {value:.3g}" for key, value in one["settings"].items()),
          "-" if one["expected"] is None else "{value:.0%} ({low:.0%} to {high:.0%})".format(**one["expected"]["all"]),
          _share(one["achieved"]["all"]),
          verdict(one) + (": " + "; ".join(one["reasons"]) if one["reasons"] else "")] for one in history],
        caption="Accuracy over all classes, on rows held back from training.")
    turned_back = [place for place, one in enumerate(history) if verdict(one) != "kept"]
    page.charts(line_chart(
        "accuracy on held-back rows", {f"{name} classes": [_number(one["achieved"][name]) for one in history]
                                       for name in ("all", "old", "new")},
        y_label="accuracy", x_label="update", first=history[0]["number"], shares=True, ringed=turned_back),
        caption="After each update" + ("; ringed ones were rolled back or undone." if turned_back else "."))


def _classes(page, history):
    """A table of shares: each class after each update that was kept and tells."""
    telling = [one for one in history if one["kept"] and class_rows(one)][-MOST_UPDATES:]
    if not telling:
        return
    after = [{} for _ in telling]
    for place, entry in enumerate(telling):
        for one in class_rows(entry):
            after[place].setdefault(one["class"], []).append(_number(one["after"]))
    # Classes that were merged since stand there twice.
    table = {label: [_mean(one.get(label, [])) for one in after]
             for label in dict.fromkeys(label for one in after for label in one)}
    worst_first = sorted(table, key=lambda label: (np.isnan(table[label][-1]), table[label][-1]))[:MOST_CLASSES]
    shown = [label for label in table if label in worst_first]
    page.section("Classes")
    page.heat_tables({"accuracy on held-back rows": np.array([table[label] for label in shown])},
                     rows=list(map(str, shown)), columns=[str(one["number"]) for one in telling],
                     caption="Percent, by update that was kept" + (
                         f"; the {MOST_CLASSES} of {len(table)} classes that do worst now." if len(shown) < len(table)
                         else "."))


def _settings(page, history):
    page.section("Settings")
    charts, differ = [], False
    for key in history[-1]["settings"]:
        used = [one["settings"][key] for one in history]
        advised = [np.nan if one["advice"] is None else one["advice"]["settings"][key] for one in history]
        series = {"used": used}
        if any(there != here for there, here in zip(advised, used) if not np.isnan(there)):
            series["advised"], differ = advised, True
        charts.append(line_chart(key.replace("_", " "), series, y_label=key.replace("_", " "), x_label="update",
                                 first=history[0]["number"], logarithmic=True))
    page.charts(*charts, caption=f"Used in the last try of each update, {'and' if differ else 'as'} advised.")


def _expectations(page, history):
    known = [one for one in history if one["expected"] is not None and one["achieved"]["all"] is not None]
    if not known:
        return
    page.section("Expected against achieved")
    page.charts(expected_and_achieved("all classes", {"update": [
        (*(one["expected"]["all"][end] for end in ("value", "low", "high")), one["achieved"]["all"])
        for one in known]}), caption="Forecast before training, with its 90% interval, and what came of it.")
    later = [(one, outcome) for one in history for outcome in one.get("outcomes", ())]
    if later:
        page.table(["update", "expected", "on held-back rows", "later", "rows", "when"],
                   [[one["number"], _share(one["expected"] and one["expected"]["all"]["value"]),
                     _share(one["achieved"]["all"]), _share(outcome["all"]), outcome["rows"], when(outcome["time"])]
                    for one, outcome in later], caption="Labels that came later.")


def _people(page, document):
    history = document["updates"]
    advised = advisers(history)
    if advised:
        page.section("Forecasters")
        page.table(["forecaster", "version", "advised updates"],
                   [[one["forecaster"][:16], one["version"] or "unknown", ", ".join(map(str, one["updates"]))]
                    for one in advised],
                   caption="By the first digits of their checksums.")
    overruled = [one for one in history if isinstance(one["overruled"], dict)]
    if overruled:
        page.section("Advice overruled")
        page.table(["update", "by", "because", "outcome", "expected", "achieved"],
                   [[one["number"], one["overruled"]["by"], one["overruled"]["because"], verdict(one),
                     _share(one["expected"] and one["expected"]["all"]["value"]), _share(one["achieved"]["all"])]
                    for one in overruled], caption="Who decided otherwise, why, and what came of it.")
    if document["steps"]:
        page.section("Done by hand")
        page.table(["after update", "time", "what"],
                   [[one["after_update"], when(one["time"]), step_in_words(one)]
                    for one in document["steps"]], caption="Between updates.")


def _mean(values):
    known = [value for value in values if not np.isnan(value)]
    return float(np.mean(known)) if known else np.nan


def _number(value):
    return np.nan if value is None else value


def _share(value):
    return "-" if value is None else f"{value:.0%}"
