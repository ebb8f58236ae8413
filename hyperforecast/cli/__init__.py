"""The command line. Results go to standard output, progress and messages to standard error.

Read in this order: this file finds and runs a command; `field` holds those of a device, `care` those that take over, use
and check it between updates, `classes` those for its classes, `trust` those that say which forecaster may advise,
`base` those of base; `options` and `text` hold what they share.

Exit codes: 0 done; 2 bad input (one line says what, nothing was changed); 130 interrupted. Of an update also those of
`hyperforecast.device.UpdateStatus`: 3 rolled back; 4 another update is at work; 5 the device folder is damaged; 6 it
cannot be written.
"""

import os

# One thread for each product: results are the same on every number of cores, and workers do not crowd each other out.
os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")

import argparse  # noqa: E402
import sys  # noqa: E402

from hyperforecast.checks import InputError  # noqa: E402
from hyperforecast.cli import base, care, classes, field, question, trust  # noqa: E402
from hyperforecast.cli.text import CAUTION  # noqa: E402

BAD_INPUT = 2
INTERRUPTED = 130


def main(arguments=None):
    """Run a command; return its exit code."""
    arguments = sys.argv[1:] if arguments is None else arguments
    options = _parser(arguments[:1]).parse_args(arguments)
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


class _Nothing:
    """Takes the options of a command that is not asked for."""

    def __getattr__(self, _):
        return self

    def __call__(self, *_, **__):
        return self


def _parser(wanted):
    """Return a parser of the one command in `wanted`, of all if there is none of that name: options take long to add."""
    parser = _Parser(prog="hyperforecast", description="Settings for class-incremental learning on small devices, "
                     "advised at once from a forecaster, without a trial run.", epilog=CAUTION)
    commands = parser.add_subparsers(dest="command", required=True, metavar="COMMAND", parser_class=_Parser)

    def command(name, run, summary):
        if wanted and name not in wanted:
            return _Nothing()
        sub = commands.add_parser(name, help=summary, description=summary)
        sub.set_defaults(run=run)
        sub.add_argument("--json", action="store_true", help="write the result as JSON")
        return sub

    field.add_commands(command)
    question.add_commands(command)
    care.add_commands(command)
    classes.add_commands(command)
    trust.add_commands(command)
    base.add_commands(command)
    return parser if commands.choices or not wanted else _parser([])
