"""Commands that take over, use and check a device: adopt, predict, evaluate, rollback."""

from hyperforecast.checks import InputError, check_choice
from hyperforecast.cli.options import add_plan, given_plan
from hyperforecast.cli.text import number, say, table
from hyperforecast.settings import Plan

# The classes that this many rows were taken for, in the table for people.
MOST_SHOWN = 2
OUTPUT_FORMATS = (".csv", ".npz")


def add_commands(command):
    """Add the commands that take over, use and check a device; `command` is that of `hyperforecast.cli`."""
    adopt = command("adopt", _adopt, "Make a device folder of a head that was trained elsewhere, and some rows.")
    adopt.add_argument("--weights", required=True, metavar="FILE",
                       help=".npz: output_weights, output_bias, perhaps hidden_weights, hidden_bias, center, scale, "
                       "classes; or weight and bias of PyTorch's layers")
    adopt.add_argument("--exemplars", required=True, metavar="FILE",
                       help="labelled rows of every class: .npz, .npy, .csv or .parquet")
    adopt.add_argument("--device", required=True, metavar="DIR", help="a new name")
    adopt.add_argument("--extractor", metavar="NAME", help="name or hash of what extracts the features")
    add_plan(adopt, leave_out=("hidden_units",))

    predict = command("predict", _predict, "Labels and probabilities for rows; nothing is learned.")
    predict.add_argument("--device", required=True, metavar="DIR")
    predict.add_argument("--rows", required=True, metavar="FILE",
                         help=".npz, .npy, .csv or .parquet; labels may be missing")
    predict.add_argument("--out", metavar="FILE", help="write .csv or .npz instead of lines on standard output")

    evaluate = command("evaluate", _evaluate, "Accuracy on labelled rows, by class and beside the forecast.")
    evaluate.add_argument("--device", required=True, metavar="DIR")
    evaluate.add_argument("--rows", metavar="FILE", help="labelled rows (the acceptance set that the device carries)")
    evaluate.add_argument("--of-update", type=int, metavar="N",
                          help="the rows are what became of update N: store the result in its history")
    evaluate.add_argument("--keep-as-acceptance", action="store_true",
                          help="let the device carry these rows: every update is checked on them from now on")
    evaluate.add_argument("--drop-acceptance", action="store_true", help="let go of the acceptance set")

    rollback = command("rollback", _rollback, "Go back to the generation before; the history stays and tells of it.")
    rollback.add_argument("--device", required=True, metavar="DIR")
    rollback.add_argument("--because", metavar="TEXT", help="why, for the history")


def _adopt(options):
    from hyperforecast.device import DeviceFolder, adopt_head, class_table, read_weights
    from hyperforecast.increments import read_increment

    folder, weights = DeviceFolder(options.device), read_weights(options.weights)
    increment = read_increment(options.exemplars, n_features=weights.n_features)
    plan = Plan(hidden_units=weights.hidden_units, **given_plan(options))
    adopt_head(folder, weights, increment, plan=plan, extractor=options.extractor)
    generation = folder.read()
    classes, rows = class_table(generation), generation.carryover.check_rows
    lines = [f"{options.device} carries a head of {weights.n_features} features, {weights.hidden_units} hidden units "
             f"and {len(classes)} classes, {len(generation.carryover.exemplars)} exemplars and {len(rows)} check rows.",
             table(("class", "exemplars", "check rows", "accuracy now"),
                   [(one.label, one.exemplars, one.check_rows, number(one.accuracy)) for one in classes])]
    say(options, {"device": options.device, "generation": generation.number,
                  "plan": generation.carryover.plan.as_dict(), "classes": [one.as_dict() for one in classes]}, lines)


def _predict(options):
    from hyperforecast.device import DeviceFolder, predict
    from hyperforecast.increments import read_features

    carryover = DeviceFolder(options.device).read().carryover
    prediction = predict(carryover, read_features(options.rows, n_features=carryover.n_features))
    if options.out:
        _write_prediction(options.out, prediction)
        say(options, {"rows": len(prediction.labels), "out": options.out},
            [f"{len(prediction.labels)} rows predicted; {options.out}"])
        return
    rows = [{"label": label, "probabilities": row}
            for label, row in zip(prediction.labels.tolist(), prediction.probabilities.tolist())]
    say(options, {"classes": prediction.classes.tolist(), "rows": rows},
        [table(("row", "label", "probability"),
               [(n, one["label"], f"{max(one['probabilities']):.3f}") for n, one in enumerate(rows)])])


def _write_prediction(path, prediction):
    """Write labels and probabilities of every class to a .csv or .npz file."""
    import csv
    import io
    from pathlib import Path

    import numpy as np

    from hyperforecast.storage import write_atomically

    if check_choice("--out", Path(path).suffix, OUTPUT_FORMATS) == ".npz":
        stream = io.BytesIO()
        np.savez(stream, labels=prediction.labels, probabilities=prediction.probabilities, classes=prediction.classes)
        write_atomically(path, stream.getvalue())
        return
    text = io.StringIO(newline="")
    rows = csv.writer(text, lineterminator="\n")
    rows.writerow(["label", *(f"p({label})" for label in prediction.classes.tolist())])
    rows.writerows([label, *(f"{p:.6g}" for p in row)]
                   for label, row in zip(prediction.labels.tolist(), prediction.probabilities.tolist()))
    write_atomically(path, text.getvalue().encode())


def _evaluate(options):
    from hyperforecast.device import DeviceFolder, against_forecast, evaluate, keep_acceptance, record_outcome
    from hyperforecast.increments import read_increment

    folder = DeviceFolder(options.device)
    generation = folder.read()
    if options.drop_acceptance:
        if options.rows:
            raise InputError("--drop-acceptance", "must be used without rows", options.rows)
        number = keep_acceptance(folder, None)
        say(options, {"acceptance_rows": 0, "generation": number}, ["The device carries no acceptance set."])
        return
    if options.rows:
        increment = read_increment(options.rows, n_features=generation.carryover.n_features)
    elif options.of_update is None and not options.keep_as_acceptance and generation.care.acceptance is not None:
        increment = generation.care.acceptance
    else:
        raise InputError("--rows", "must name labelled rows, or the device carry an acceptance set", "neither")
    beside, lines = None, []
    if options.of_update is not None:
        evaluation, beside = record_outcome(folder, increment, options.of_update)
        lines.append(f"Stored as an outcome of update {options.of_update}.")
    else:
        evaluation = evaluate(generation.carryover, increment)
        standing = [one["number"] for one in generation.history if one["kept"] and not one.get("undone")]
        beside = against_forecast(evaluation, generation.history, standing[-1]) if standing else None
    if options.keep_as_acceptance:
        keep_acceptance(folder, increment)
        lines.append(f"The device carries these rows as its acceptance set: {increment.X.nbytes} bytes, beside the "
                     "memory limit.")
    say(options, {**evaluation.as_dict(), "forecast": beside, "acceptance_rows": len(increment)
                  if options.keep_as_acceptance else None}, [*_evaluation_lines(evaluation, beside), *lines])


def _evaluation_lines(evaluation, beside):
    rows = []
    for one in evaluation.by_class():
        taken = ", ".join(f"{other['class']} ({other['rows']})" for other in one["taken_for"][:MOST_SHOWN])
        rows.append((one["class"], one["rows"], f"{one['accuracy']:.3f}", taken or "-"))
    lines = [table(("class", "rows", "accuracy", "taken for"), rows),
             f"Mean over classes {evaluation.mean():.3f} on {evaluation.rows.sum()} rows"]
    lines += [f"  not known: class {label}, {count} rows, counted in nothing"
              for label, count in evaluation.unknown.items()]
    if beside is None:
        return lines
    later = f", {beside['updates_later']} updates later" if beside["updates_later"] else ""
    lines.append(f"Beside the forecast of update {beside['update']}{later}")
    for name in ("old", "new", "all"):
        one = beside[name]
        forecast = "no forecast" if one["expected"] is None else \
            "expected {value:.3f} ({low:.3f} to {high:.3f})".format(**one["expected"])
        verdict = {"below": ": BELOW", "above": ": above", "within": ": within", None: ""}[one["verdict"]]
        lines.append(f"  {name + ' classes':<18} {number(one['accuracy'])}  {forecast}{verdict}")
    return lines


def _rollback(options):
    from hyperforecast.device import DeviceFolder, roll_back

    generation = roll_back(DeviceFolder(options.device), because=options.because)
    step = generation.care.steps[-1]
    lines = [f"Generation {generation.number} carries what generation {step['to_generation']} did: "
             f"{len(generation.carryover.classes)} classes, {generation.carryover.n_boundaries} boundaries."]
    lines += [f"Update {one} is undone." for one in step["undone"]]
    lines += [f"Update {one} stands again." for one in step["again"]]
    say(options, {"generation": generation.number, **step}, lines)
