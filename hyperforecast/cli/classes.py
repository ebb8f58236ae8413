"""Commands for classes: those of a device, and those of an increment before it is learned."""

from hyperforecast.checks import InputError
from hyperforecast.cli.text import number, say, table

# Suspicious rows in the table for people.
MOST_SHOWN = 20


def add_commands(command):
    """Add the commands for classes; `command` is that of `hyperforecast.cli`."""
    classes = command("classes", _classes, "List the classes of a device, or change one of them.")
    classes.add_argument("--device", required=True, metavar="DIR")
    change = classes.add_mutually_exclusive_group()
    change.add_argument("--floor", nargs=2, metavar=("NAME", "ACCURACY"),
                        help="an update may not take the class below it; 0 takes the floor away")
    change.add_argument("--rename", nargs=2, metavar=("OLD", "NEW"), help="call a class by another name")
    change.add_argument("--merge", nargs=2, metavar=("FROM", "INTO"), help="make one class of two")
    change.add_argument("--retire", metavar="NAME",
                        help="predict it no longer and free its exemplars; it may come again")
    change.add_argument("--erase", metavar="NAME",
                        help="leave no trace of it in the folder's files; cannot be rolled back")

    check = command("check", _check, "Doubt the labels of an increment before it is learned; nothing is changed.")
    check.add_argument("--increment", required=True, metavar="FILE", help=".npz, .npy, .csv or .parquet")
    check.add_argument("--device", metavar="DIR", help="judge it beside the classes and rows that a device holds")


def _check(options):
    from hyperforecast.describing import similar_names, suspicious_labels
    from hyperforecast.device import DeviceFolder
    from hyperforecast.increments import check_labels_kind, read_increment

    carryover = None if options.device is None else DeviceFolder(options.device).read().carryover
    increment = read_increment(options.increment, n_features=carryover and carryover.n_features)
    known = []
    if carryover is not None:
        check_labels_kind(increment.y, carryover.classes)
        known = carryover.classes.tolist()
    names = similar_names(sorted(set(increment.y.tolist())), known)
    found = suspicious_labels(increment, carryover)
    lines = [f"class {new} is new and its name looks like that of class {other}" for other, new in names]
    lines.append(f"{len(found)} of {found.looked_at} labels looked at are more likely wrong than right; nothing is "
                 f"said about {len(increment) - found.looked_at} rows of very small classes.")
    told = found.as_dict()
    if len(found):
        rows = [(one["row"], one["label"], one["likelier"], f"{one['probability']:.2f}")
                for one in told["rows"][:MOST_SHOWN]]
        lines.append(table(("row", "label", "more like", "probably wrong"), rows))
    if len(found) > MOST_SHOWN:
        lines.append(f"and {len(found) - MOST_SHOWN} more, with --json")
    say(options, {"similar_names": [list(pair) for pair in names], "suspicious": told}, lines)


def _classes(options):
    from hyperforecast.device import DeviceFolder, class_table, erase, merge, rename, retire, set_floor

    folder, done = DeviceFolder(options.device), []
    if options.floor:
        name, floor = options.floor
        set_floor(folder, name, _accuracy(floor))
        done.append(f"Floor of {name}: {floor}")
    elif options.rename:
        rename(folder, *options.rename)
        done.append(f"{options.rename[0]} is called {options.rename[1]} now.")
    elif options.merge:
        merge(folder, *options.merge)
        done.append(f"{options.merge[0]} is part of {options.merge[1]} now.")
    elif options.retire:
        retire(folder, options.retire)
        done.append(f"{options.retire} is retired: no longer predicted, its exemplars are freed.")
    elif options.erase:
        erasure = erase(folder, options.erase)
        done.append(f"Erased, with every older generation. None of its {erasure.rows} rows and no mention of its name "
                    f"is left in the {erasure.files} files of the folder.")
    generation = folder.read()
    listed = class_table(generation)
    rows = [(one.label, one.learned_rows, one.exemplars, one.check_rows, one.acceptance_rows, number(one.accuracy),
             number(one.best), number(one.floor)) for one in listed]
    names = ("class", "rows learned", "exemplars", "check rows", "acceptance rows", "accuracy now", "best", "floor")
    done += [f"{one.label}: no row to check its floor on; use evaluate --keep-as-acceptance"
             for one in listed if one.floor is not None and one.accuracy is None]
    say(options, {"device": options.device, "generation": generation.number,
                  "classes": [one.as_dict() for one in listed]}, [table(names, rows), *done])


def _accuracy(text):
    try:
        return float(text)
    except ValueError:
        raise InputError("--floor", "must be followed by a class and a number from 0 to 1", repr(text)) from None
