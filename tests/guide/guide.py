"""The README's guide as a thing that can be run: its commands in order, and what they print.

    python tests/guide/guide.py new.forecaster

runs them in a temporary folder, with a forecaster for WA as new.forecaster there, and writes what they print now into
the README: numbers and exit codes of the lines that are shown. What is left out (a line "...") stays left out. When
lines come or go, choose anew by hand.
"""

import contextlib
import io
import os
import re
import shlex
import shutil
import sys
import tempfile
from dataclasses import dataclass
from difflib import SequenceMatcher
from pathlib import Path

from hyperforecast.cli import main

README = Path(__file__).parents[2] / "README.md"
HEADING = "## An engineer's day"
INDENT, PROMPT, CUT = "    ", "    $ ", "..."
STATUS = re.compile(r"\s+# exit code (\d+)$")


@dataclass
class Command:
    """A command of the guide.

    Attributes
    ----------
    line : str
        As it is typed, continued lines joined.
    status : int
        The exit code that the guide says, 0 if it says none.
    start, end : int
        Its output stands in the README's lines from `start` to before `end`.
    """

    line: str
    status: int
    start: int
    end: int


def commands(lines):
    """Return the `Command`s of the guide in the README's lines."""
    at = lines.index(HEADING) + 1
    after = next((n for n in range(at, len(lines)) if lines[n].startswith("## ")), len(lines))
    found = []
    while at < after:
        if not lines[at].startswith(PROMPT):
            at += 1
            continue
        typed = lines[at][len(PROMPT):]
        while typed.endswith("\\"):
            at += 1
            typed = typed[:-1].rstrip() + " " + lines[at].strip()
        start = at + 1
        end = start
        while end < after and lines[end].startswith(INDENT) and not lines[end].startswith(PROMPT):
            end += 1
        told = STATUS.search(typed)
        found.append(Command(STATUS.sub("", typed), int(told[1]) if told else 0, start, end))
        at = end
    return found


def run(command):
    """Run a `Command` in the folder where we are; return (exit code, lines of standard output)."""
    program, *arguments = shlex.split(command.line)
    assert program == "hyperforecast", command.line
    shown = io.StringIO()
    with contextlib.redirect_stdout(shown), contextlib.redirect_stderr(io.StringIO()):
        status = main(arguments)
    return int(status), shown.getvalue().splitlines()


def renewed(shown, printed):
    """Return the lines that are shown with their numbers as they are printed now, each by the likest that is left."""
    result = []
    for line in shown:
        if line.strip() != CUT:
            likeness = [SequenceMatcher(None, _words(line.strip()), _words(other.strip())).ratio() for other in printed]
            if likeness and max(likeness) > 0.6:
                place = likeness.index(max(likeness))
                line, printed = INDENT + printed[place], printed[place + 1:]
        result.append(line.rstrip())
    return result


def _words(line):
    return re.sub(r"[0-9a-f]{16}|[\d.e+-]*\d", "0", line).split()


def _renew(forecaster):
    lines = README.read_text(encoding="utf-8").splitlines()
    parts, at, here = [], 0, os.getcwd()
    with tempfile.TemporaryDirectory() as folder:
        shutil.copy(forecaster, Path(folder) / "new.forecaster")
        os.chdir(folder)
        for command in commands(lines):
            status, printed = run(command)
            print(f"{status}  {command.line}", *printed, sep="\n")
            typed = STATUS.sub("", lines[command.start - 1]) + (f"    # exit code {status}" if status else "")
            parts += [*lines[at:command.start - 1], typed, *renewed(lines[command.start:command.end], printed)]
            at = command.end
        os.chdir(here)
    README.write_text("\n".join([*parts, *lines[at:]]) + "\n", encoding="utf-8")


if __name__ == "__main__":
    _renew(sys.argv[1])
