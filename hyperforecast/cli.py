"""The command line. Results go to standard output, progress and messages to standard error.

Exit codes: 0 done; 2 bad input (one line says what, nothing was changed); 130 interrupted. Of an update also those of
`hyperforecast.device.UpdateStatus`: 3 rolled back; 4 another update is at work; 5 the device folder is damaged; 6 it
cannot be written.
"""

import os

# One thread for each product: results are the same on every number of cores, and workers do not crowd each other out.
os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")

import argparse  # noqa: E402
import json  # noqa: E402
import sys  # noqa: E402
from dataclasses import replace  # noqa: E402

import numpy as np  # noqa: E402

from hyperforecast.checks import InputError  # noqa: E402
from hyperforecast.settings import METHODS, Plan  # noqa: E402

BAD_INPUT = 2
INTERRUPTED = 130
CAUTION = ("Advice is statistical. Never let it be the only safeguard of a safety function; "
           "local codes and licensed practice come first.")


def main(arguments=None):
    """Run a command; return its exit code."""
    parser = _parser()
    options = parser.parse_args(arguments)
    try:
        return options.run(options) or 0
    except InputError as error:
        print(f"hyperforecast {options.command}: {error}", file=sys.stderr)
        return int(getattr(error, "status", BAD_INPUT))
    except ModuleNotFoundError as error:
        print(f"hyperforecast {options.command}: needs {error.name}; install it with: "
              f"pip install 'hyperforecast[workshop]'", file=sys.stderr)
        return BAD_INPUT
    except KeyboardInterrupt:
        print(f"hyperforecast {options.command}: interrupted; what is stored stays stored", file=sys.stderr)
        return INTERRUPTED


class _Parser(argparse.ArgumentParser):
    def error(self, message):
        self.exit(BAD_INPUT, f"{self.prog}: {message}; see {self.prog} --help\n")


def _parser():
    parser = _Parser(prog="hyperforecast", description="Settings for class-incremental learning on small devices, "
                     "advised at once from a forecaster, without a trial run.", epilog=CAUTION)
    commands = parser.add_subparsers(dest="command", required=True, metavar="COMMAND", parser_class=_Parser)

    def command(name, run, summary):
        sub = commands.add_parser(name, help=summary, description=summary)
        sub.set_defaults(run=run)
        sub.add_argument("--json", action="store_true", help="write the result as JSON")
        return sub

    demo = command("demo", _demo, "Six deliveries to a salvage yard's sorting cell: advice next to the best constant.")
    demo.add_argument("--html", default="hyperforecast-demo.html", metavar="FILE", help="report to write (%(default)s)")
    demo.add_argument("--seed", type=int, default=0, help="of pictures and training (%(default)s)")

    advise = command("advise", _advise, "Advise settings for an increment; nothing is trained.")
    _add_device(advise)
    _add_forecaster(advise)

    update = command("update", _update, "Advise, learn, check, keep or roll back; the first one makes the device folder.")
    _add_device(update)
    _add_forecaster(update)
    update.add_argument("--dry-run", action="store_true", help="stop after the advice")
    update.add_argument("--seed", type=int, default=0, help="of training (%(default)s)")
    plan = update.add_argument_group("plan, fixed at the first update")
    for name, default in Plan().as_dict().items():
        kind = int if isinstance(default, int) and name != "memory_limit" else str
        plan.add_argument(f"--{name.replace('_', '-')}", type=kind, default=None,
                          choices=METHODS if name == "method" else None,
                          help=f"{PLAN_HELP[name]} ({default})")

    history = command("history", _history, "What was advised, expected and achieved at each boundary of a device.")
    history.add_argument("--device", required=True, metavar="DIR")

    gather = command("gather", _gather, "Search at the boundaries of many streams, into a records file; resumes.")
    _add_streams(gather)
    gather.add_argument("--records", required=True, metavar="FILE", help="made if it does not exist")
    gather.add_argument("--method", nargs="+", choices=METHODS, default=list(METHODS), help="(all)")
    gather.add_argument("--seed", type=int, default=0, help="(%(default)s)")
    _add_workers(gather)

    fit = command("fit", _fit, "Fit a forecaster to records of one method; judged on held-out sources.")
    fit.add_argument("--records", required=True, metavar="FILE")
    fit.add_argument("--method", required=True, choices=METHODS)
    fit.add_argument("--forecaster", required=True, metavar="FILE", help="forecaster to write")
    fit.add_argument("--without", nargs="+", default=[], metavar="SOURCE", help="sources to leave out")
    fit.add_argument("--folds", type=int, metavar="N", help="groups of sources held out together (each alone)")
    fit.add_argument("--seed", type=int, default=0, help="(%(default)s)")
    _add_workers(fit)

    search = command("search", _search, "Search settings for an increment, attempt by attempt; slower than advice.")
    _add_device(search)
    _add_forecaster(search)
    search.add_argument("--selection", metavar="FILE", help="labelled rows to score attempts on "
                        "(rows held back from the increment and from training)")
    search.add_argument("--strategy", choices=("tpe", "random", "space_filling"), default="tpe", help="(%(default)s)")
    search.add_argument("--attempts", type=int, default=64, help="(%(default)s)")
    search.add_argument("--warm", action="store_true", help="begin with what the forecaster advises")
    search.add_argument("--warm-starts", metavar="FILE", help="write the forecaster's ranked settings and spreads as "
                        "JSON, for any optimizer, and stop")
    search.add_argument("--seed", type=int, default=0, help="(%(default)s)")

    contest = command("contest", _contest, "Advice against constants and full search on streams; resumes.")
    _add_streams(contest)
    contest.add_argument("--forecaster", nargs="+", required=True, metavar="FILE",
                         help="one for each method that competes, fitted without the streams' sources")
    contest.add_argument("--result", required=True, metavar="FILE", help="JSON; an unfinished one is continued")
    contest.add_argument("--kind", choices=("one_step", "whole_stream"), default="one_step", help="(%(default)s)")
    _add_workers(contest)

    report = command("report", _report, "A self-contained HTML report of a device, a records file or a contest.")
    subject = report.add_mutually_exclusive_group(required=True)
    subject.add_argument("--device", metavar="DIR")
    subject.add_argument("--records", metavar="FILE")
    subject.add_argument("--result", metavar="FILE")
    report.add_argument("--html", required=True, metavar="FILE", help="report to write")
    return parser


PLAN_HELP = {
    "method": "what holds on to old classes", "hidden_units": "width of the hidden layer, 0 for none",
    "passes": "passes over the rows", "batch_size": "rows of a minibatch",
    "memory_limit": 'most exemplars held, or bytes as "2 MB"',
}


def _add_device(parser):
    parser.add_argument("--increment", required=True, metavar="FILE", help=".npz, .npy, .csv or .parquet")
    parser.add_argument("--device", required=True, metavar="DIR")


def _add_forecaster(parser):
    parser.add_argument("--forecaster", metavar="FILE", help="(the one that ships for the method)")


def _add_streams(parser):
    parser.add_argument("--streams", nargs="+", required=True, metavar="FILE", help="stream definitions in TOML")


def _add_workers(parser):
    parser.add_argument("--workers", type=int, default=os.cpu_count() or 1, help="(%(default)s, all processors)")


def _say(options, document, lines):
    """Write a result: JSON with --json, else lines for people."""
    if options.json:
        print(json.dumps(document, indent=1, allow_nan=False))
    else:
        print("\n".join(lines))


def _progress(text):
    print(text, file=sys.stderr, flush=True)


def _demo(options):
    from hyperforecast.workshop.demo import run_demo
    from hyperforecast.workshop.reporting.demo_report import demo_page

    _progress("drawing parts ...")
    deliveries = run_demo(seed=_seed(options), progress=lambda one: _progress(f"delivery {one.number} learned"))
    demo_page(deliveries, seed=options.seed).write(options.html)
    rows, document = [], []
    for one in deliveries:
        advised, constant = float(np.nanmean(one.advised)), float(np.nanmean(one.constant))
        expected = one.advice and one.advice.expected_all
        rows.append((", ".join(one.families), *(_settings_cells(one.advice and one.advice.settings)),
                     f"{expected.value:.2f} ({expected.low:.2f}-{expected.high:.2f})" if expected else "-",
                     f"{advised:.2f}", f"{constant:.2f}"))
        document.append({"delivery": one.number, "families": list(one.families), "advised": advised,
                         "constant": constant, "advice": one.advice and one.advice.as_dict()})
    last = document[-1]
    _say(options, {"deliveries": document, "html": options.html}, [
        _table(("new families", "learning rate", "regularization", "kept", "expected (90%)", "advised", "constant"), rows),
        f"Sorted right after the last delivery, over all {sum(len(one.families) for one in deliveries)} families: "
        f"{last['advised']:.1%} with advice, {last['constant']:.1%} with the best constant settings.",
        f"Report: {options.html}", CAUTION])


def _settings_cells(settings):
    if settings is None:
        return "opening", "", ""
    return f"{settings.learning_rate:.3g}", f"{settings.regularization:.3g}", settings.kept_per_class or "-"


def _advise(options):
    advice = _dry_run(options).advice
    _say(options, advice.as_dict(), _advice_lines(advice))


def _dry_run(options):
    from hyperforecast.device import DeviceFolder, update
    from hyperforecast.increments import read_increment

    folder = DeviceFolder(options.device)
    carryover = folder.read().carryover
    increment = read_increment(options.increment, n_features=carryover.n_features)
    return update(folder, increment, forecaster=_forecaster(options, carryover.plan.method), dry_run=True)


def _advice_lines(advice):
    verdict = advice.familiarity
    lines = ["Advised settings", *_settings_lines(advice.settings), "Accuracy to expect, with 90% interval"]
    for name, one in (("old classes", advice.expected_old), ("new classes", advice.expected_new),
                      ("all classes", advice.expected_all)):
        lines.append(f"  {name:<18} {one.value:.3f}  ({one.low:.3f} to {one.high:.3f})")
    lines += [f"Probability of divergence  {advice.divergence:.3f}",
              f"Familiarity  {verdict.score:.2f}: " + (
                  "the records know boundaries like this one" if verdict.familiar
                  else "NOT FAMILIAR, few records lie this far out; check the result with care")]
    lines += [f"  out of range: {one.name} {one.value:.4g}, records from {one.low:.4g} to {one.high:.4g}"
              for one in verdict.out_of_range[:5]]
    lines += ["What moved the advice most", *(f"  {reason}" for reason in advice.reasons or ["nothing unusual"])]
    lines.append("Alternatives, best first")
    lines += [f"  {place}. {_short(one)}" for place, one in enumerate(advice.alternatives, 2)]
    return [*lines, CAUTION]


def _settings_lines(settings):
    return [f"  {name:<18} {value:.4g}" for name, value in settings.as_dict().items()]


def _short(settings):
    return _listed(settings.as_dict())


def _listed(settings):
    return ", ".join(f"{name} {value:.3g}" for name, value in settings.items())


def _forecaster(options, method):
    from hyperforecast.forecasting import load_forecaster

    return load_forecaster(options.forecaster or method)


def _update(options):
    from hyperforecast.device import DeviceFolder, update
    from hyperforecast.increments import read_increment

    folder = DeviceFolder(options.device)
    given = {name: getattr(options, name) for name in PLAN_HELP if getattr(options, name) is not None}
    plan, forecaster, n_features = None, None, None
    if folder.numbers():
        carryover = folder.read().carryover
        forecaster, n_features = _forecaster(options, carryover.plan.method), carryover.n_features
        plan = replace(carryover.plan, **_plan_arguments(given)) if given else None
    else:
        plan = Plan(**_plan_arguments(given)).checked()
    increment = read_increment(options.increment, n_features=n_features)
    report = update(folder, increment, plan=plan, forecaster=forecaster, seed=_seed(options), dry_run=options.dry_run)
    _say(options, report.as_dict(), _update_lines(report))
    return report.status or 0


def _plan_arguments(given):
    if "memory_limit" in given and given["memory_limit"].isdecimal():
        given["memory_limit"] = int(given["memory_limit"])
    return given


def _update_lines(report):
    entry = report.entry
    lines = [] if report.advice is None else _advice_lines(report.advice)[:-1]
    if report.status is None:
        return [*lines, "Dry run: nothing was trained or stored."]
    lines += ["Trained with", *(f"  {name:<18} {value:.4g}" for name, value in entry["settings"].items())]
    achieved = entry["achieved"]
    lines.append(f"Achieved on {achieved['rows']} rows held back from training")
    lines += [f"  {name + ' classes':<18} {achieved[name]:.3f}" for name in ("old", "new", "all")
              if achieved[name] is not None]
    lines += [f"  rolled back: {reason}" for one in [*entry["earlier_tries"], entry] for reason in one["reasons"]]
    kept = "Kept" if entry["kept"] else "ROLLED BACK"
    return [*lines, f"{kept}; generation {report.generation} of the device folder, update {entry['number']}.", CAUTION]


def _history(options):
    from hyperforecast.device import DeviceFolder

    generation = DeviceFolder(options.device).read()
    rows = [(one["number"], one["time"], one["rows"], len(one["classes_new"]), _listed(one["settings"]),
             _expected(one["expected"]), _number(one["achieved"]["all"]), _number(one["achieved"]["old"]),
             "kept" if one["kept"] else "rolled back") for one in generation.history]
    names = ("update", "time", "rows", "new classes", "settings", "expected (90%)", "achieved", "old classes", "outcome")
    lines = [_table(names, rows)]
    lines += [f"update {one['number']}: {reason}" for one in generation.history for reason in one["reasons"]]
    _say(options, {"device": options.device, "generation": generation.number, "updates": generation.history}, lines)


def _expected(expected):
    return "-" if expected is None else "{value:.2f} ({low:.2f}-{high:.2f})".format(**expected["all"])


def _number(value):
    return "-" if value is None else f"{value:.2f}"


def _search(options):
    from hyperforecast.device import DeviceFolder
    from hyperforecast.increments import read_increment
    from hyperforecast.workshop.searching import prepare_search, write_warm_starts

    carryover = DeviceFolder(options.device).read().carryover
    increment, selection = (path and read_increment(path, n_features=carryover.n_features)
                            for path in (options.increment, options.selection))
    search = prepare_search(carryover, increment, _forecaster(options, carryover.plan.method), selection=selection,
                            seed=_seed(options))
    if options.warm_starts:
        warm_starts = search.warm_starts()
        write_warm_starts(options.warm_starts, warm_starts, carryover.plan.method)
        _say(options, {"warm_starts": options.warm_starts, "points": len(warm_starts)},
             [f"{len(warm_starts)} warm starts written to {options.warm_starts}"])
        return
    result = search.run(
        strategy=options.strategy, attempts=options.attempts, warm=options.warm, seed=options.seed,
        on_progress=lambda one: _progress(f"{len(one)} of {options.attempts} attempts, best {one.best_so_far[-1]:.3f}"))
    _say(options, {**result.as_dict(), "warm": options.warm, "best": result.best.as_dict()},
         [f"Best of {len(result)} attempts: {result.best_so_far[-1]:.3f} on {len(search.search.y)} rows, "
          f"attempt {result.best_index + 1}", *_settings_lines(result.best)])


def _contest(options):
    from hyperforecast.forecasting import load_forecaster
    from hyperforecast.workshop.contest import as_text, run_contest, summarize

    forecasters = {}
    for path in options.forecaster:
        forecaster = load_forecaster(path)
        if forecaster.method in forecasters:
            raise InputError("--forecaster", "must name one file for each method", f"two for {forecaster.method}")
        forecasters[forecaster.method] = forecaster
    contest = run_contest(_definitions(options.streams), forecasters, options.result, kind=options.kind,
                          workers=_workers(options), progress=_progress)
    summary = summarize(contest)
    _say(options, summary, [as_text(summary), f"Result file: {options.result}"])


def _report(options):
    document, lines = {"html": options.html}, []
    if options.device:
        from hyperforecast.device import DeviceFolder
        from hyperforecast.workshop.reporting.device_report import device_page

        page = device_page(DeviceFolder(options.device).read(), name=os.path.basename(os.path.normpath(options.device)))
    elif options.records:
        from hyperforecast.workshop.gathering import RecordsFile
        from hyperforecast.workshop.reporting.records_report import records_page

        page = records_page(RecordsFile(options.records))
    else:
        from hyperforecast.workshop.contest import as_text, load_contest, summarize
        from hyperforecast.workshop.reporting.contest_report import contest_page

        contest = load_contest(options.result)
        page, document["summary"] = contest_page(contest), summarize(contest)
        lines.append(as_text(document["summary"]))
    page.write(options.html)
    _say(options, document, [*lines, f"Report: {options.html}"])


def _gather(options):
    from hyperforecast.workshop.gathering import RecordsFile, gather

    definitions = _definitions(options.streams)
    n_run = gather(definitions, options.records, methods=options.method, seed=_seed(options), workers=_workers(options),
                   progress=_progress)
    counts = RecordsFile(options.records).counts()
    names = ("method", "source", "trajectories", "boundaries", "attempts")
    _say(options, {"run": n_run, "records": [dict(zip(names, row)) for row in counts]},
         [f"{n_run} trajectories run; {options.records} now holds", _table(names, counts)])


def _fit(options):
    from hyperforecast.forecasting import save_forecaster
    from hyperforecast.workshop.fitting import fit_forecaster, load_dataset
    from hyperforecast.workshop.gathering import RecordsFile

    records = RecordsFile(options.records)
    dataset = load_dataset(records, options.method, without=options.without)
    forecaster = fit_forecaster(
        dataset, recipe={"without": sorted(options.without)}, folds=options.folds, seed=_seed(options), workers=_workers(options),
        progress=lambda one: _progress(f"held out {one.source}: {one.boundaries} boundaries"))
    save_forecaster(options.forecaster, forecaster)
    recipe = forecaster.recipe
    rows = [(one["source"], one["boundaries"], *(f"{one[way]:.3f}" for way in ("constant", "direct", "outcome", "best")))
            for one in recipe["held_out"]]
    _say(options, {"forecaster": options.forecaster, "checksum": forecaster.checksum, "ranking": forecaster.ranking,
                   "recipe": recipe},
         ["Mean accuracy on recorded attempts of sources that were held out, chosen by",
          _table(("source", "boundaries", "constant", "direct", "outcome", "best"), rows),
          f"Gap closed: outcome models {recipe['gap_closed']['outcome']:.2f}, "
          f"direct regressors {recipe['gap_closed']['direct']:.2f}; the {forecaster.ranking} models advise.",
          f"{options.forecaster}: {os.path.getsize(options.forecaster)} bytes, checksum {forecaster.checksum[:12]}"])


def _definitions(paths):
    from hyperforecast.workshop.streams import load_streams

    return [definition for path in paths for definition in load_streams(path)]


def _seed(options):
    from hyperforecast.checks import check_whole

    return check_whole("--seed", options.seed)


def _workers(options):
    from hyperforecast.checks import check_whole

    return check_whole("--workers", options.workers, low=1)


def _table(names, rows):
    """Columns of text, numbers to the right."""
    cells = [[str(value) for value in row] for row in rows]
    widths = [max(len(name), *(len(row[c]) for row in cells), 1) if cells else len(name)
              for c, name in enumerate(names)]
    def line(row):
        return "  ".join(value.ljust(width) if c == 0 else value.rjust(width)
                         for c, (value, width) in enumerate(zip(row, widths))).rstrip()

    return "\n".join(line(row) for row in [names, *cells])


if __name__ == "__main__":
    sys.exit(main())
