"""The command that questions the advice: weigh."""

import textwrap

from hyperforecast.cli.options import (
    add_device, add_least_gain, add_preferences, add_settings, checked_seed, chosen_preferences, chosen_settings,
    forecasters_by_method, least_gain,
)
from hyperforecast.cli.text import CAUTION, say, short, table, when_lines

# Values of each setting in the table for people.
VALUES_SHOWN = 9


def add_commands(command):
    """Add the command; `command` is that of `hyperforecast.cli`."""
    weigh = command("weigh", _weigh, "What to expect of other settings, another method, more memory, more time, "
                    "more rows; nothing is trained.")
    add_device(weigh)
    add_settings(weigh, "settings of one's own to ask about")
    weigh.add_argument("--forecaster", nargs="+", default=[], metavar="FILE", help="one for a method (for the device's "
                       "own the one it is pinned to, else those that ship)")
    add_least_gain(weigh)
    add_preferences(weigh)
    weigh.add_argument("--seed", type=int, default=0, help="of the update in question (%(default)s)")
    weigh.add_argument("--html", metavar="FILE", help="write a page with pictures, too")


def _weigh(options):
    from hyperforecast.device import DeviceFolder, kept_preferences, weigh
    from hyperforecast.increments import read_increment

    folder = DeviceFolder(options.device)
    generation = folder.read()
    increment = read_increment(options.increment, n_features=generation.carryover.n_features)
    weighing = weigh(folder, increment, settings=chosen_settings(options), seed=checked_seed(options),
                     preferences=chosen_preferences(options, kept_preferences(generation.history)),
                     forecasters=forecasters_by_method(options.forecaster), **least_gain(options))
    lines = _lines(weighing)
    if options.html:
        from hyperforecast.workshop.reporting.weighing_report import weighing_page

        weighing_page(weighing, name=folder.path.name).write(options.html)
        lines.append(f"Page: {options.html}")
    say(options, weighing.as_dict(), [*lines, CAUTION])


def _lines(weighing):
    advice, beside = weighing.advice, weighing.beside
    names = ["advised", "best constant", *(f"alternative {n}" for n in range(2, len(beside.settings)))]
    rows = [_outlook_row(name, beside, n) for n, name in enumerate(names)]
    if weighing.own is not None:
        rows.insert(1, _outlook_row("yours", weighing.own, 0))
    settings = [name.replace("_", " ") for name in advice.box.names]
    lines = ["Accuracy to expect, with 90% intervals; behind: points of accuracy on all classes behind the advised",
             table(("", *settings, "all classes", "old", "new", "diverges", "behind"), rows)]
    for name, curve in weighing.curves.items():
        lines += ["", f"Along {name.replace('_', ' ')}, the others as advised"
                  + (f" (the memory allows {advice.box.most_kept})" if name == "kept_per_class" else ""),
                  table((name.replace("_", " "), "all classes", "old", "new", "diverges", "behind", ""),
                        _curve_rows(weighing, name, curve))]
    spans = weighing.ridge.spans()
    lines += ["", "Good region, within 2 points of the best: " + ", ".join(
        f"{name.replace('_', ' ')} {low:.2g} to {high:.2g}" for name, (low, high) in spans.items())]
    lines += ["", "Methods, each with the settings advised for it", table(
        ("method", "settings", "all classes", "old", "new", "diverges", ""), [
            (one.method, short(one.settings), *_expectations(one.outlook, 0), _remark(one))
            for one in weighing.methods])]
    if len(weighing.methods) > 1:
        from hyperforecast.device import METHODS_CAVEAT

        lines += textwrap.wrap(METHODS_CAVEAT, 118, initial_indent="  ", subsequent_indent="  ")
        lines += [f"  {one.method}: not to be had here: {', '.join(one.missing)}"
                  for one in weighing.methods if one.missing]
    lines += ["", *(f"{one.what[0].upper()}{one.what[1:]}: {one.means}" + (
        f": {one.gain:+.3f} with {short(one.settings)}" if one.settings else "") for one in weighing.more)]
    return [*lines, "", *_when(weighing)]


def _outlook_row(name, outlook, n):
    return (name, *(f"{value:.3g}" for value in outlook.settings[n].as_dict().values()), *_expectations(outlook, n),
            f"{100 * outlook.behind[n]:.1f}")


def _expectations(outlook, n):
    interval = "{0.value:.3f} ({0.low:.2f}-{0.high:.2f})".format
    return (interval(outlook.all.at(n)), f"{outlook.old.value[n]:.3f}", f"{outlook.new.value[n]:.3f}",
            f"{outlook.divergence[n]:.2f}")


def _curve_rows(weighing, name, curve):
    """Some values along a setting, with the nearest to the advised and to one's own marked."""
    values = [getattr(one, name) for one in curve.settings]
    marks = {}
    for mark, outlook in (("advised", weighing.beside), ("yours", weighing.own)):
        if outlook is not None:
            wanted = getattr(outlook.settings[0], name)
            nearest = min(range(len(values)), key=lambda n: abs(values[n] / wanted - 1))
            marks[nearest] = ", ".join(filter(None, [marks.get(nearest), mark]))
    last = len(values) - 1
    shown = sorted({round(last * step / (VALUES_SHOWN - 1)) for step in range(VALUES_SHOWN)} | set(marks))
    return [(f"{values[n]:.3g}", *_expectations(curve, n), f"{100 * curve.behind[n]:.1f}", marks.get(n, ""))
            for n in shown]


def _remark(standing):
    return ", ".join(["the device's own"] * standing.own + ["not familiar"] * (not standing.familiar))


def _when(weighing):
    told, waiting = when_lines(weighing.waiting, weighing.retrain), weighing.waiting
    if not hasattr(waiting, "needed"):
        return told
    lines = told if waiting.pays else [str(waiting), *told]
    curve = [(rows, f"{value:.3f}") for rows, value in zip(waiting.rows, waiting.expected)]
    return [*lines, table(("rows collected first", "all classes"), curve)]
