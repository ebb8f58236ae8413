"""One update on one page of paper: what arrived, what was advised and why, what was expected, what came of it."""

import numpy as np

from hyperforecast.checks import InputError
from hyperforecast.device import step_in_words
from hyperforecast.forecasting import Preferences
from hyperforecast.workshop.reporting.charts import change_chart, interval_chart
from hyperforecast.workshop.reporting.page import Page, plain, shown

CAUTION = ("Accuracies here come from a few rows held back on the device. They must never be the only safeguard of a "
           "safety function; local codes and licensed practice come first.")
# What has room on the page; the document (JSON) has all: classes, reasons for one try, letters of a name and of a text.
MOST_CLASSES, MOST_REASONS = 14, 2
LONGEST_NAME, LONGEST_TEXT = 40, 110
KINDS = ("old", "new", "all")


def update_document(generation, number, *, name):
    """Return what there is to tell of one update, a JSON-able dict.

    Parameters
    ----------
    generation : Generation
        The device's current one.
    number : int
        Of the update in the history.
    name : str
        What the device is called.

    Raises
    ------
    InputError
        If the history does not tell of such an update.
    """
    history = generation.history
    place = next((at for at, one in enumerate(history) if one["number"] == number), None)
    if place is None:
        numbers = f"{history[0]['number']} to {history[-1]['number']}" if history else "none"
        raise InputError("--update", f"must be one that the history tells of, {numbers}", number)
    return {"device": name, "plan": generation.carryover.plan.as_dict(), "verdict": verdict(history[place]),
            "classes": class_rows(history[place]), "update": history[place],
            "steps_afterwards": [one for one in generation.care.steps if one["after_update"] == number]}


def verdict(entry):
    """Return what became of an update of the history: "kept", "rolled back" or "undone by hand"."""
    return "rolled back" if not entry["kept"] else "undone by hand" if entry.get("undone") else "kept"


def when(time):
    """Return a time of the history (UTC, ISO text) as a report shows it."""
    return time.replace("T", " ").removesuffix("+00:00") + " UTC"


def class_rows(entry):
    """Return a list of dicts, one for each class known at an update: class, new, arrived, check_rows, before, after.

    Empty for updates of an older version, whose history does not tell.
    """
    listed = entry.get("by_class")
    if not listed:
        return []
    columns = [listed[key] for key in ("class", "arrived", "check_rows", "before", "after")]
    return [{"class": label, "new": code >= entry["classes_old"], "arrived": arrived, "check_rows": rows,
             "before": before, "after": after}
            for code, (label, arrived, rows, before, after) in enumerate(zip(*columns, strict=True))]


def update_page(document):
    """Return the `Page` of an `update_document`."""
    entry, told = document["update"], document["verdict"]
    page = Page(f"Update {entry['number']} of {document['device']}: {told}", _lead(entry, told), one_sheet=True)
    page.section("What arrived")
    page.facts(_arrived(document))
    doubts = document["update"].get("doubts", [])
    page.items([f"In doubt: {_cut(one, LONGEST_TEXT)}." for one in doubts[:MOST_REASONS]])
    if len(doubts) > MOST_REASONS:
        page.paragraph(f"{len(doubts) - MOST_REASONS} more doubts stand in the history.")
    page.section("What was advised, and why")
    _advised(page, entry)
    page.section("What was expected, and what came of it")
    _outcome(page, document)
    page.section("Why it was " + told)
    page.items(_decision(document))
    page.paragraph(CAUTION)
    return page


def _lead(entry, told):
    new = len(entry["classes_new"])
    known = entry["classes_old"] + (new if told == "kept" else 0)
    learned = f"with {new} new {'class' if new == 1 else 'classes'}" if new else "of classes known before"
    achieved, expected = entry["achieved"], entry["expected"]
    parts = [f"{entry['rows']} rows {learned} arrived; the device then knew {known} classes."]
    if achieved["all"] is not None:
        forecast = ", expected {value:.0%} ({low:.0%} to {high:.0%})".format(**expected["all"]) if expected else ""
        parts.append(f"Accuracy over all classes: {achieved['all']:.0%} on {achieved['rows']} rows held back from "
                     f"training{forecast}.")
    return " ".join(parts)


def _arrived(document):
    entry, plan = document["update"], document["plan"]
    facts = {"when": f"{when(entry['time'])}, in {shown(entry['seconds'])} s", "rows": entry["rows"],
             "new classes": _named(entry["classes_new"]), "known classes again": _named(entry["classes_again"]),
             "classes known before": entry["classes_old"],
             "plan": ", ".join(f"{name.replace('_', ' ')} {value}" for name, value in plan.items()
                               if value is not None)}
    if entry["forecaster"]:
        facts["forecaster"] = f"{entry['forecaster'][:16]}, version {entry.get('forecaster_version') or 'unknown'}"
    return facts


def _named(labels):
    shortened = labels[:MOST_CLASSES]
    rest = f" and {len(labels) - len(shortened)} more" if len(labels) > len(shortened) else ""
    return (", ".join(_cut(label, LONGEST_NAME) for label in shortened) or "none") + rest


def _cut(text, longest):
    text = plain(text)
    return text if len(text) <= longest else text[:longest - 1] + "…"


def _advised(page, entry):
    advice = entry["advice"]
    chosen = {} if advice is None else {"advised": advice["settings"]}
    for place, one in enumerate([*entry["earlier_tries"], entry], 1):
        chosen["trained with" if not entry["earlier_tries"] else f"try {place}"] = one["settings"]
    rows = [[name.replace("_", " "), *(one[name] for one in chosen.values())] for name in entry["settings"]]
    overruled = entry["overruled"] if isinstance(entry["overruled"], dict) else None
    page.table(["setting", *chosen], rows, caption=(
        "Opening settings: at the first update nothing can be forgotten." if advice is None
        else "The advice was overruled." if overruled else "Settings, as advised and as trained with."))
    points = []
    if overruled:
        points.append(f"Overruled by {_cut(overruled['by'] or 'nobody named', LONGEST_NAME)}: "
                      + _cut(overruled["because"] or "no reason given", LONGEST_TEXT))
    if advice is not None:
        familiarity = advice["familiarity"]
        points.append(f"Familiarity {familiarity['score']:.2f}: " + (
            "the records know boundaries like this one." if familiarity["familiar"]
            else "not familiar, few records lie this far out; the advice is a guess.")
            + f" Probability of divergence {advice['divergence']:.3f}.")
        points += [f"Unlike the records: {_cut(one, LONGEST_TEXT)}." for one in familiarity.get("why", ())[:MOST_REASONS]]
        cared = ", ".join(f"{name.replace('_', ' ')} {shown(value)}" for name, value in
                          entry.get("preferences", {}).items() if value != getattr(Preferences(), name, None))
        points += [f"Preferences: {cared}."] if cared else []
        reasons = advice["reasons"] or ["No descriptor moved the advice from the usual"]
        points += [f"{_cut(reason, LONGEST_TEXT)}." for reason in reasons]
    unfamiliar = entry.get("unfamiliar")
    if unfamiliar:
        tried = [f"{one['check_accuracy']:.0%}" for one in unfamiliar["tried"] or () if one["check_accuracy"] >= 0]
        points.append(f"Told what to do where a boundary is unlike the records: {unfamiliar['policy']}"
                      + (f"; tried side by side, {', '.join(tried)} on held-back rows." if tried else "."))
    page.items(points)


def _outcome(page, document):
    entry, classes = document["update"], document["classes"]
    achieved, expected = entry["achieved"], entry["expected"]
    kinds = [kind for kind in KINDS if achieved[kind] is not None]
    series = {}
    if expected:
        series["expected"] = [[expected[kind][end] for end in ("value", "low", "high")] for kind in kinds]
    series["achieved"] = [[achieved[kind], np.nan, np.nan] for kind in kinds]
    charts = [interval_chart("all, old and new classes", [f"{kind} classes" for kind in kinds],
                             {name: np.array(points) for name, points in series.items()}, x_label="accuracy",
                             shares=True)]
    chosen = _telling(classes)
    if chosen:
        charts.append(change_chart(
            "each class, before and after", [str(one["class"]) for one in chosen],
            [_number(one["before"]) for one in chosen], [_number(one["after"]) for one in chosen],
            [f"{one['check_rows']} rows" for one in chosen]))
    caption = ("Whiskers are 90% intervals of what was forecast before training. " if expected else "") + (
        "Of each class a few rows are held back; a dashed line is a loss." if chosen else "")
    if len(chosen) < len(classes):
        others = [one for one in classes if one not in chosen]
        after = [one["after"] for one in others if one["after"] is not None]
        caption += (f" {len(others)} other classes, which lost less, are not drawn"
                    + (f"; they come to {np.mean(after):.0%} on average." if after else "."))
    page.charts(*charts, caption=caption.strip())


def _telling(classes):
    """Classes to draw, in the order of the device: all, or the new ones and those that lost most."""
    if len(classes) <= MOST_CLASSES:
        return classes
    def lost(one):
        known = one["before"] is not None and one["after"] is not None
        return one["before"] - one["after"] if known else -1.0
    new = [one for one in classes if one["new"]][:MOST_CLASSES // 2]
    old = sorted((one for one in classes if not one["new"]), key=lost, reverse=True)[:MOST_CLASSES - len(new)]
    return [one for one in classes if one in new or one in old]


def _decision(document):
    entry = document["update"]
    points = []
    for place, one in enumerate([*entry["earlier_tries"], entry], 1):
        who = f"Try {place}" if entry["earlier_tries"] else "It"
        told = one["reasons"][:MOST_REASONS if one is entry else 1]
        points += [f"{who} was not kept: {_cut(reason, LONGEST_TEXT)}." for reason in told]
        if len(told) < len(one["reasons"]):
            points[-1] += f" And {len(one['reasons']) - len(told)} more reasons of this kind."
    if entry["kept"]:
        achieved = entry["achieved"]
        points.append("Training did not diverge, " + (
            "and no rule about losses or the forecast was broken"
            + (f": on old classes {achieved['old_before']:.0%} before and {achieved['old']:.0%} after"
               if None not in (achieved["old"], achieved["old_before"]) else "") if entry["classes_old"]
            else "the only rule at a first update") + ".")
    if entry.get("limits"):
        points += [f"Given up: {_cut(one, LONGEST_TEXT)}." for one in entry["limits"]["given_up"]]
    accepted = entry.get("acceptance")
    if accepted and accepted["all"] is not None:
        points.append(f"On the acceptance set: {accepted['all']:.0%} over {accepted['rows']} rows.")
    points += [f"Labels that came later, {when(one['time'])}: {shown(one['all'])} over {one['rows']} rows."
               for one in entry.get("outcomes", ())]
    if entry.get("undone"):
        points.append(f"Undone by hand, {when(entry['undone'])}.")
    return points + [f"Afterwards, {when(one['time'])}: {_cut(step_in_words(one), LONGEST_TEXT)}."
                     for one in document["steps_afterwards"][:MOST_REASONS]]


def _number(value):
    return np.nan if value is None else value
