"""What commands write: JSON or lines for people on standard output, progress on standard error."""

import json
import sys

CAUTION = ("Advice is statistical. Never let it be the only safeguard of a safety function; "
           "local codes and licensed practice come first.")


def say(options, document, lines):
    """Write a result: JSON with --json, else lines for people."""
    if options.json:
        print(json.dumps(document, indent=1, allow_nan=False))
    else:
        print("\n".join(lines))


def progress(text):
    """Write a line of progress to standard error."""
    print(text, file=sys.stderr, flush=True)


def table(names, rows):
    """Columns of text, numbers to the right."""
    cells = [[str(value) for value in row] for row in rows]
    widths = [max(len(name), *(len(row[c]) for row in cells), 1) if cells else len(name)
              for c, name in enumerate(names)]

    def line(row):
        return "  ".join(value.ljust(width) if c == 0 else value.rjust(width)
                         for c, (value, width) in enumerate(zip(row, widths))).rstrip()

    return "\n".join(line(row) for row in [names, *cells])


def settings_lines(settings):
    """Lines of a `Settings`, one for each."""
    return [f"  {name:<18} {value:.4g}" for name, value in settings.as_dict().items()]


def short(settings):
    """A `Settings` in one line."""
    return listed(settings.as_dict())


def listed(settings):
    """Numbers by name in one line."""
    return ", ".join(f"{name} {value:.3g}" for name, value in settings.items())


def expected(expected):
    """An expected accuracy with its interval, from its dict or None."""
    return "-" if expected is None else "{value:.2f} ({low:.2f}-{high:.2f})".format(**expected["all"])


def number(value):
    """An accuracy, or a dash for None."""
    return "-" if value is None else f"{value:.2f}"


def when_lines(timing, signs):
    """Whether to update now, where there is something to say: more rows first, nothing new, or retraining at base."""
    lines = [str(timing)] if getattr(timing, "needed", None) is None or timing.pays else []
    return lines + [f"Time to retrain at base: {sign}" for sign in signs]


def adviser_lines(advisers):
    """Lines that say which forecasters advised which updates, from `hyperforecast.device.advisers`."""
    return [f"forecaster {one['forecaster'][:16]}, version {one['version'] or 'unknown'}, advised update "
            + ", ".join(map(str, one["updates"])) for one in advisers]
