"""Commands for base: demo, gather, merge, fit, rebuild, search, contest, report."""

import os

import numpy as np

from hyperforecast.checks import InputError
from hyperforecast.cli.options import (
    add_device, add_forecaster, add_streams, add_workers, checked_seed, checked_workers, chosen_forecaster, definitions,
    forecasters_by_method,
)
from hyperforecast.cli.text import CAUTION, progress, say, settings_lines, table
from hyperforecast.settings import METHODS


def add_commands(command):
    """Add the commands of base; `command` is that of `hyperforecast.cli`."""
    demo = command("demo", _demo, "Six deliveries to a salvage yard's sorting cell: advice next to the best constant.")
    demo.add_argument("--html", default="hyperforecast-demo.html", metavar="FILE", help="report to write (%(default)s)")
    demo.add_argument("--seed", type=int, default=0, help="of pictures and training (%(default)s)")
    demo.add_argument("--deliveries", metavar="DIR", help="write the deliveries as files for the other commands, and stop")

    gather = command("gather", _gather, "Search at the boundaries of many streams, into a records file; resumes.")
    add_streams(gather)
    gather.add_argument("--records", required=True, metavar="FILE", help="made if it does not exist")
    gather.add_argument("--method", nargs="+", choices=METHODS, default=list(METHODS), help="(all)")
    gather.add_argument("--forecaster", nargs="+", default=[], metavar="FILE", help="steer a further round: search around "
                        "what these advise, one for each method; fitted without the sources that they shall be judged on")
    gather.add_argument("--seed", type=int, default=0, help="(%(default)s)")
    add_workers(gather)

    merge = command("merge", _merge, "Merge histories that devices exported into a records file, to fit on; repeatable.")
    merge.add_argument("--records", required=True, metavar="FILE", help="made if it does not exist")
    merge.add_argument("--from", required=True, nargs="+", dest="exports", metavar="FILE",
                       help="files of hyperforecast history --export")

    fit = command("fit", _fit, "Fit a forecaster to records of one method; judged on held-out sources.")
    fit.add_argument("--records", required=True, metavar="FILE")
    fit.add_argument("--method", required=True, choices=METHODS)
    fit.add_argument("--forecaster", required=True, metavar="FILE", help="forecaster to write")
    fit.add_argument("--without", nargs="+", default=[], metavar="SOURCE", help="sources to leave out")
    fit.add_argument("--folds", type=int, metavar="N", help="groups of sources held out together (each alone)")
    fit.add_argument("--seed", type=int, default=0, help="(%(default)s)")
    add_workers(fit)

    rebuild = command("rebuild", _rebuild, "Rebuild a forecaster from its recipe, round by round, the same to the bit; resumes.")
    rebuild.add_argument("--recipe", required=True, metavar="FILE", help="TOML; models/recipe.toml made those that ship")
    rebuild.add_argument("--method", required=True, choices=METHODS)
    rebuild.add_argument("--folder", required=True, metavar="DIR", help="for records and forecasters; made if need be")
    add_workers(rebuild)

    search = command("search", _search, "Search settings for an increment, attempt by attempt; slower than advice.")
    add_device(search)
    add_forecaster(search)
    search.add_argument("--selection", metavar="FILE", help="labelled rows to score attempts on "
                        "(rows held back from the increment and from training)")
    search.add_argument("--strategy", choices=("tpe", "random", "space_filling"), default="tpe", help="(%(default)s)")
    search.add_argument("--attempts", type=int, default=64, help="(%(default)s)")
    search.add_argument("--warm", action="store_true", help="begin with what the forecaster advises")
    search.add_argument("--warm-starts", metavar="FILE", help="write the forecaster's ranked settings and spreads as "
                        "JSON, for any optimizer, and stop")
    search.add_argument("--seed", type=int, default=0, help="(%(default)s)")

    contest = command("contest", _contest, "Advice against constants and full search on streams; resumes.")
    add_streams(contest)
    contest.add_argument("--forecaster", nargs="+", required=True, metavar="FILE",
                         help="one for each method that competes, fitted without the streams' sources")
    contest.add_argument("--result", required=True, metavar="FILE", help="JSON; an unfinished one is continued")
    contest.add_argument("--kind", choices=("one_step", "whole_stream"), default="one_step", help="(%(default)s)")
    add_workers(contest)

    report = command("report", _report, "A self-contained HTML report of a device, a records file or a contest.")
    subject = report.add_mutually_exclusive_group(required=True)
    subject.add_argument("--device", metavar="DIR")
    subject.add_argument("--records", metavar="FILE")
    subject.add_argument("--result", metavar="FILE")
    report.add_argument("--update", type=int, metavar="N", help="with --device: this update alone, on one page")
    report.add_argument("--html", required=True, metavar="FILE", help="report to write")


def _demo(options):
    progress("drawing parts ...")
    if options.deliveries:
        from hyperforecast.workshop.demo import write_trained_head
        from hyperforecast.workshop.streams.salvage_yard import write_deliveries

        written = write_deliveries(options.deliveries, seed=checked_seed(options))
        paths = [str(path) for path in (*written, write_trained_head(options.deliveries, seed=options.seed))]
        say(options, {"files": paths}, paths)
        return
    from hyperforecast.workshop.demo import run_demo
    from hyperforecast.workshop.reporting.demo_report import demo_page

    deliveries = run_demo(seed=checked_seed(options), progress=lambda one: progress(f"delivery {one.number} learned"))
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
    say(options, {"deliveries": document, "html": options.html}, [
        table(("new families", "learning rate", "regularization", "kept", "expected (90%)", "advised", "constant"), rows),
        f"Sorted right after the last delivery, over all {sum(len(one.families) for one in deliveries)} families: "
        f"{last['advised']:.1%} with advice, {last['constant']:.1%} with the best constant settings.",
        f"Report: {options.html}", CAUTION])


def _settings_cells(settings):
    if settings is None:
        return "opening", "", ""
    return f"{settings.learning_rate:.3g}", f"{settings.regularization:.3g}", settings.kept_per_class or "-"


def _gather(options):
    from hyperforecast.workshop.gathering import RecordsFile, gather

    streams, forecasters = definitions(options.streams), forecasters_by_method(options.forecaster)
    if forecasters and set(options.method) - set(forecasters):
        raise InputError("--forecaster", "must name one for each method", ", ".join(forecasters), "or name --method")
    n_run = gather(streams, options.records, methods=options.method, seed=checked_seed(options),
                   workers=checked_workers(options), forecasters=forecasters, progress=progress)
    counts = RecordsFile(options.records).counts()
    names = ("method", "source", "trajectories", "boundaries", "attempts")
    say(options, {"run": n_run, "records": [dict(zip(names, row)) for row in counts]},
         [f"{n_run} trajectories run; {options.records} now holds", table(names, counts)])


def _merge(options):
    from hyperforecast.device.export import read_export
    from hyperforecast.workshop.gathering import RecordsFile, merge

    histories = [read_export(path) for path in options.exports]
    records = RecordsFile(options.records, create=True)
    merged = [{"file": path, **merge(records, one).as_dict()} for path, one in zip(options.exports, histories)]
    names = ("file", "device", "method", "updates", "added", "without_outcome")
    say(options, {"records": options.records, "merged": merged},
        [table([name.replace("_", " ") for name in names], [[one[name] for name in names] for one in merged])])


def _fit(options):
    from hyperforecast.forecasting import save_forecaster
    from hyperforecast.workshop.fitting import Fit, fit_records
    from hyperforecast.workshop.gathering import RecordsFile

    forecaster = fit_records(
        RecordsFile(options.records), options.method, Fit(tuple(options.without), options.folds), seed=checked_seed(options),
        workers=checked_workers(options),
        progress=lambda one: progress(f"held out {one.source}: {one.boundaries} boundaries"))
    save_forecaster(options.forecaster, forecaster)
    recipe = forecaster.recipe
    rows = [(one["source"], one["boundaries"], *(f"{one[way]:.3f}" for way in ("constant", "direct", "outcome", "best")))
            for one in recipe["held_out"]]
    say(options, {"forecaster": options.forecaster, "checksum": forecaster.checksum, "ranking": forecaster.ranking,
                   "recipe": recipe},
         ["Mean accuracy on recorded attempts of sources that were held out, chosen by",
          table(("source", "boundaries", "constant", "direct", "outcome", "best"), rows),
          f"Gap closed: outcome models {recipe['gap_closed']['outcome']:.2f}, "
          f"direct regressors {recipe['gap_closed']['direct']:.2f}; the {forecaster.ranking} models advise.",
          f"{options.forecaster}: {os.path.getsize(options.forecaster)} bytes, checksum {forecaster.checksum[:12]}"])


def _rebuild(options):
    from hyperforecast.forecasting import load_forecaster
    from hyperforecast.workshop.fitting import read_recipe, rebuild

    path = rebuild(read_recipe(options.recipe), options.method, options.folder, workers=checked_workers(options),
                   progress=progress)
    made, shipped = load_forecaster(path), load_forecaster(options.method)
    same = made.checksum == shipped.checksum
    others = {name: (made.recipe["versions"][name], version) for name, version in shipped.recipe["versions"].items()
              if made.recipe["versions"][name] != version}
    lines = [f"{path}: checksum {made.checksum[:12]}; " + (
        "the one that ships, to the bit." if same else f"the one that ships has {shipped.checksum[:12]}.")]
    if others:
        lines.append("Made with other versions: " + ", ".join(
            f"{name} {here}, it was {there}" for name, (here, there) in others.items()))
    say(options, {"forecaster": str(path), "checksum": made.checksum, "shipped": shipped.checksum, "same": same,
                  "versions": made.recipe["versions"]}, lines)


def _search(options):
    from hyperforecast.device import DeviceFolder
    from hyperforecast.increments import read_increment
    from hyperforecast.workshop.searching import prepare_search, write_warm_starts

    folder = DeviceFolder(options.device)
    generation = folder.read()
    carryover = generation.carryover
    increment, selection = (path and read_increment(path, n_features=carryover.n_features)
                            for path in (options.increment, options.selection))
    search = prepare_search(carryover, increment, chosen_forecaster(options, folder, generation), selection=selection,
                            seed=checked_seed(options))
    if options.warm_starts:
        warm_starts = search.warm_starts()
        write_warm_starts(options.warm_starts, warm_starts, carryover.plan.method)
        say(options, {"warm_starts": options.warm_starts, "points": len(warm_starts)},
             [f"{len(warm_starts)} warm starts written to {options.warm_starts}"])
        return
    result = search.run(
        strategy=options.strategy, attempts=options.attempts, warm=options.warm, seed=options.seed,
        on_progress=lambda one: progress(f"{len(one)} of {options.attempts} attempts, best {one.best_so_far[-1]:.3f}"))
    say(options, {**result.as_dict(), "warm": options.warm, "best": result.best.as_dict()},
         [f"Best of {len(result)} attempts: {result.best_so_far[-1]:.3f} on {len(search.search.y)} rows, "
          f"attempt {result.best_index + 1}", *settings_lines(result.best)])


def _contest(options):
    from hyperforecast.workshop.contest import as_text, run_contest, summarize

    contest = run_contest(definitions(options.streams), forecasters_by_method(options.forecaster), options.result, kind=options.kind,
                          workers=checked_workers(options), progress=progress)
    summary = summarize(contest)
    say(options, summary, [as_text(summary), f"Result file: {options.result}"])


def _report(options):
    document, lines = {"html": options.html}, []
    if options.update is not None and not options.device:
        raise InputError("--update", "must be given with --device", options.update)
    if options.device:
        from hyperforecast.device import DeviceFolder
        from hyperforecast.workshop.reporting.device_report import device_document, device_page
        from hyperforecast.workshop.reporting.update_report import update_document, update_page

        generation, name = DeviceFolder(options.device).read(), os.path.basename(os.path.abspath(options.device))
        if options.update is None:
            told = device_document(generation, name=name)
            page = device_page(told)
        else:
            told = update_document(generation, options.update, name=name)
            page = update_page(told)
        document.update(told)
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
    say(options, document, [*lines, f"Report: {options.html}"])
