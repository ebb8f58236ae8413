"""Commands for a device: advise, update, history."""

from dataclasses import replace

from hyperforecast.checks import InputError
from hyperforecast.cli.options import (
    add_device, add_extractor, add_forecaster, add_least_gain, add_plan, add_preferences, add_settings, checked_seed,
    chosen_forecaster, chosen_preferences, chosen_settings, given_plan, least_gain,
)
from hyperforecast.cli.text import (
    CAUTION, adviser_lines, expected, listed, number, say, settings_lines, short, table, when_lines,
)
from hyperforecast.settings import Plan

EXIT_CODES = ("Exit codes: 0 kept, or the end of a dry run; 1 a fault of the program; 2 bad input, nothing was "
              "changed; 3 rolled back, only the history has grown; 4 another update is at work in the folder, try again later; "
              "5 the folder is damaged, see rollback; 6 the folder cannot be written, nothing was changed.")


def add_commands(command):
    """Add the commands of a device; `command` is that of `hyperforecast.cli`."""
    advise = command("advise", _advise, "Advise settings for an increment; nothing is trained.")
    add_device(advise, required=False)
    advise.add_argument("--descriptors", metavar="FILE", help="a JSON request of another trainer, instead of --increment "
                        "and --device")
    advise.add_argument("--schema", choices=("request", "advice"), help="print the JSON Schema of such a request, or of "
                        "the answer to --json, and stop")
    add_forecaster(advise)
    add_preferences(advise)
    add_least_gain(advise)
    add_extractor(advise)

    update = command("update", _update, "Advise, learn, check, keep or roll back; the first one makes the device folder.")
    add_device(update)
    add_forecaster(update)
    add_preferences(update)
    add_extractor(update)
    update.add_argument("--dry-run", action="store_true", help="stop after the advice")
    update.add_argument("--seed", type=int, default=0, help="of training (%(default)s)")
    update.epilog = EXIT_CODES
    rules = update.add_argument_group("rules of rolling back")
    rules.add_argument("--retries", type=int, metavar="N", help="further tries after one that is not kept (1)")
    rules.add_argument("--most-lost", type=float, metavar="SHARE",
                       help="accuracy that old classes may lose on average (0.3)")
    rules.add_argument("--most-lost-by-class", type=float, metavar="SHARE",
                       help="accuracy that a single old class may lose (0.6)")
    overrule = update.add_argument_group("overrule the advice: all three together")
    add_settings(overrule, "train with these")
    overrule.add_argument("--by", metavar="WHO", help="who decides so, for the history")
    overrule.add_argument("--because", metavar="WHY", help="why, for the history")
    add_plan(update)

    history = command("history", _history, "What was advised, expected and achieved at each boundary of a device.")
    history.add_argument("--device", metavar="DIR")
    history.add_argument("--export", metavar="FILE", help="write a file for base (hyperforecast merge): plan, descriptors, "
                         "settings and outcomes, nothing else")
    history.add_argument("--class-names", action="store_true", help="let class names leave the device with the export")
    history.add_argument("--schema", action="store_true", help="print the JSON Schema of an export, and stop")


def _advise(options):
    if options.schema:
        _print_schema(options.schema)
        return
    named = [name for name in ("increment", "device", "descriptors") if getattr(options, name) is not None]
    if named == ["descriptors"]:
        advice, document, lines = _answer(options), {}, []
    elif named == ["increment", "device"]:
        advice, document, lines = _with_timing(options)
    else:
        raise InputError("--increment and --device", "must be named, or --descriptors instead",
                         ", ".join(f"--{name}" for name in named) or "nothing", "see hyperforecast advise --help")
    say(options, {**advice.as_dict(), **document}, [*_advice_lines(advice)[:-1], *lines, CAUTION])


def _with_timing(options):
    """Return the advice, and what is doubtful and whether to update now as a dict and as lines."""
    from hyperforecast.device import when
    from hyperforecast.forecasting import retraining_signs

    increment, report = _dry_run(options)
    timing = when(report.advice, increment, report.carryover, **least_gain(options))
    signs = retraining_signs(report.advice)
    doubts = report.entry["doubts"]
    return (report.advice, {"doubts": doubts, "waiting": timing.as_dict(), "retrain": signs},
            [*limits_lines(report.entry), *doubt_lines(doubts), *when_lines(timing, signs)])


def _print_schema(name):
    import json

    from hyperforecast.device.documents import schema

    print(json.dumps(schema(name), indent=1, ensure_ascii=False))


def _answer(options):
    from hyperforecast.device.request import read_request
    from hyperforecast.forecasting import load_forecaster

    request = read_request(options.descriptors)
    return request.advice(load_forecaster(options.forecaster or request.method))


def _dry_run(options):
    from hyperforecast.device import DeviceFolder, kept_preferences, update
    from hyperforecast.increments import read_increment

    folder = DeviceFolder(options.device)
    generation = folder.read()
    increment = read_increment(options.increment, n_features=generation.carryover.n_features)
    return increment, update(folder, increment, forecaster=chosen_forecaster(options, folder, generation), dry_run=True,
                             preferences=chosen_preferences(options, kept_preferences(generation.history)),
                             extractor=options.extractor, another_extractor=options.another_extractor)


def _advice_lines(advice):
    verdict = advice.familiarity
    lines = ["Advised settings", *_spread_lines(advice), *_preference_lines(advice.preferences),
             "Accuracy to expect, with 90% interval"]
    for name, one in (("old classes", advice.expected_old), ("new classes", advice.expected_new),
                      ("all classes", advice.expected_all)):
        lines.append(f"  {name:<18} {one.value:.3f}  ({one.low:.3f} to {one.high:.3f})")
    lines += [f"Probability of divergence  {advice.divergence:.3f}",
              f"Familiarity  {verdict.score:.2f}: " + (
                  "the records know boundaries like this one" if verdict.familiar
                  else f"NOT FAMILIAR; {_done_about_it(advice)}"), *(f"  {one}" for one in verdict.why)]
    lines += [f"  out of range: {one.name} {one.value:.4g}, records from {one.low:.4g} to {one.high:.4g}"
              for one in verdict.out_of_range[:5]]
    lines += ["What moved the advice most", *(f"  {reason}" for reason in advice.reasons or ["nothing unusual"])]
    lines.append("Alternatives, best first")
    lines += [f"  {place}. {short(one)}" for place, one in enumerate(advice.alternatives, 2)]
    return [*lines, CAUTION]


def _spread_lines(advice):
    """Lines of the advised settings with the factor by which each may differ at the cost of a point."""
    return [f"{line:<32}  as good, to a point, within a factor of {spread:.2g}"
            for line, spread in zip(settings_lines(advice.settings), advice.spreads.values())]


def _done_about_it(advice):
    if advice.unfamiliar == "constant":
        return "the best constant is advised instead"
    if advice.unfamiliar == "warn":
        return "check the result with care"
    return f"an update tries {len(advice.to_try)} of the ranked settings and keeps the best"


def _preference_lines(preferences):
    """A line that says what advice was told to care for, if that is not the usual."""
    usual = type(preferences)().as_dict()
    told = [f"{name.replace('_', ' ')} {format(value, '.3g') if isinstance(value, float) else value or 'by class count'}"
            for name, value in preferences.as_dict().items() if value != usual[name]]
    return [f"Asked for  {', '.join(told)}"] if told else []


def _update(options):
    from hyperforecast.device import DeviceFolder, kept_preferences, update
    from hyperforecast.increments import read_increment

    settings = chosen_settings(options)
    missing = [f"--{name}" for name in ("settings", "by", "because") if getattr(options, name) is None]
    if 0 < len(missing) < 3:
        raise InputError(" and ".join(missing), "must be given with --settings, --by and --because, all three or none",
                         "nothing", "say who overrules the advice, why, and with what settings")
    folder = DeviceFolder(options.device)
    given = given_plan(options)
    plan, forecaster, n_features, history = None, None, None, []
    if folder.numbers():
        generation = folder.read()
        forecaster, n_features = chosen_forecaster(options, folder, generation), generation.carryover.n_features
        plan = replace(generation.carryover.plan, **given) if given else None
        history = generation.history
    else:
        plan = Plan(**given).checked()
    increment = read_increment(options.increment, n_features=n_features)
    report = update(folder, increment, plan=plan, forecaster=forecaster, settings=settings, by=options.by,
                    because=options.because, preferences=chosen_preferences(options, kept_preferences(history)),
                    extractor=options.extractor, another_extractor=options.another_extractor,
                    seed=checked_seed(options), dry_run=options.dry_run, **_rules(options))
    say(options, report.as_dict(), _update_lines(report))
    return report.status or 0


def doubt_lines(doubts):
    """Lines of what is doubtful about an increment."""
    return [f"Doubtful: {doubt}" for doubt in doubts]


def overruled_lines(entry):
    """Lines that say who overruled the advice of a history entry, why, and what was advised; none if it stood."""
    told = entry["overruled"]
    if not isinstance(told, dict) or told["by"] is None:
        return []
    instead = "nothing, it is the first update" if entry["advice"] is None else \
        f"{listed(entry['advice']['settings'])}, expected {expected(entry['advice']['expected'])}"
    return [f"overruled by {told['by']}: {told['because']}", f"  advised was {instead}"]


def _rules(options):
    given = {name: getattr(options, name) for name in ("retries", "most_lost", "most_lost_by_class")}
    return {name: value for name, value in given.items() if value is not None}


def limits_lines(entry):
    """Lines that say what an update of the history was planned to take, and what was given up for it."""
    limits, lines = entry["limits"], []
    if limits is None:
        return lines
    time, memory = limits["time"], limits["memory"]
    if time is not None:
        source = "earlier updates" if time["speed_from"] == "updates" else "a short training"
        lines.append(f"Planned: {time['passes']} passes over {time['rows']} rows in {time['seconds_planned']:.2g} s, "
                     f"at {time['speed']:.2g} operations a second as measured in {source}")
    if memory is not None:
        lines.append(f"Planned: at most {memory['bytes_planned'] / 1e6:.1f} MB of working memory")
    return [*lines, *(f"  given up: {one}" for one in limits["given_up"])]


def _update_lines(report):
    entry = report.entry
    lines = doubt_lines(entry["doubts"])
    lines += [] if report.advice is None else _advice_lines(report.advice)[:-1]
    lines += overruled_lines(entry)
    lines += limits_lines(entry)
    if report.status is None:
        return [*lines, "Dry run: nothing was trained or stored."]
    if entry["unfamiliar"] and entry["unfamiliar"]["tried"]:
        lines += ["Tried side by side, accuracy on rows held back from training",
                  *(f"  {one['check_accuracy']:.3f}  {listed(one['settings'])}" for one in entry["unfamiliar"]["tried"])]
    lines += ["Trained with", *(f"  {name:<18} {value:.4g}" for name, value in entry["settings"].items())]
    achieved = entry["achieved"]
    lines.append(f"Achieved on {achieved['rows']} rows held back from training")
    lines += [f"  {name + ' classes':<18} {achieved[name]:.3f}" for name in ("old", "new", "all")
              if achieved[name] is not None]
    if entry["acceptance"] is not None:
        lines.append(f"  on {entry['acceptance']['rows']} acceptance rows {number(entry['acceptance']['all'])}")
    if entry["limits"] is not None:
        lines.append(f"Took {entry['training_seconds']:.2g} s of training, {entry['seconds']:.2g} s in all")
    lines += [f"  rolled back: {reason}" for one in [*entry["earlier_tries"], entry] for reason in one["reasons"]]
    kept = "Kept" if entry["kept"] else "ROLLED BACK"
    if entry["overruled"] and entry["expected"]:
        lines.append(f"  expected of these settings  {expected(entry['expected'])}")
    return [*lines, f"{kept}; generation {report.generation} of the device folder, update {entry['number']}.", CAUTION]


def _history(options):
    from hyperforecast.device import DeviceFolder, advisers, step_in_words

    if options.schema:
        _print_schema("history")
        return
    if options.device is None:
        raise InputError("--device", "must name a device folder", "nothing", "see hyperforecast history --help")
    generation = DeviceFolder(options.device).read()
    if options.export or options.class_names:
        _export(options, generation)
        return
    rows = [(one["number"], one["time"], one["rows"], len(one["classes_new"]), listed(one["settings"]),
             expected(one["expected"]), number(one["achieved"]["all"]), number(one["achieved"]["old"]),
             "rolled back" if not one["kept"] else "undone" if one.get("undone") else "kept")
            for one in generation.history]
    names = ("update", "time", "rows", "new classes", "settings", "expected (90%)", "achieved", "old classes", "outcome")
    lines = [table(names, rows), *adviser_lines(advisers(generation.history))]
    lines += [f"update {one['number']}: {reason}" for one in generation.history for reason in one["reasons"]]
    lines += [f"update {one['number']}: {line}" for one in generation.history for line in overruled_lines(one)[:1]]
    lines += [f"update {one['number']}: unlike the records ({one['unfamiliar']['policy']}): {why}"
              for one in generation.history if one.get("unfamiliar") for why in one["advice"]["familiarity"]["why"]]
    lines += [f"update {one['number']}: {words}" for one in generation.history for words in
              (one.get("limits") or {"given_up": ()})["given_up"]]
    lines += [f"update {one['number']}: later {number(outcome['all'])} on {outcome['rows']} rows"
              for one in generation.history for outcome in one.get("outcomes", ())]
    steps = generation.care.steps
    lines += [f"after update {one['after_update']}: {step_in_words(one)}" for one in steps]
    say(options, {"device": options.device, "generation": generation.number, "updates": generation.history,
                  "steps": list(steps)}, lines)


def _export(options, generation):
    from hyperforecast.device.export import export_history

    if not options.export:
        raise InputError("--class-names", "must be used with --export", "no --export")
    count = export_history(options.export, generation, class_names=options.class_names)
    say(options, {"export": options.export, "updates": count, "class_names": options.class_names},
        [f"{options.export}: {count} updates {'with' if options.class_names else 'without'} class names"])
