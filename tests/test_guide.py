"""The README's guide does what it says: its commands run in order and end with the exit codes that it tells."""

import guide
import pytest

from hyperforecast.forecasting import save_forecaster


def test_the_guide_runs(tmp_path, monkeypatch, forecasters):
    monkeypatch.chdir(tmp_path)
    save_forecaster("new.forecaster", forecasters["wa"])
    found = guide.commands(guide.README.read_text(encoding="utf-8").splitlines())
    assert len(found) > 12
    for command in found:
        status, printed = guide.run(command)
        assert status == command.status, f"{command.line}: exit code {status}"
        # What is refused is said on standard error.
        assert printed or status == 2, command.line


def test_numbers_are_renewed_and_what_is_left_out_stays_left_out():
    shown = ["    all classes   0.5  (0.4 to 0.6)", "    ...", "    Kept; generation 1 of the folder, update 1."]
    printed = ["Settings", "old classes   0.8  (0.7 to 0.9)", "all classes   0.7  (0.6 to 0.8)", "Reasons",
               "Kept; generation 2 of the folder, update 2."]
    assert guide.renewed(shown, printed) == [
        "    all classes   0.7  (0.6 to 0.8)", "    ...", "    Kept; generation 2 of the folder, update 2."]


def test_commands_of_the_guide_only():
    lines = ["    $ before", guide.HEADING, "Text.", "", "    $ hyperforecast a \\", "          --b c    # exit code 3",
             "    output", "    ...", "", "    $ hyperforecast d", "    $ hyperforecast e", "", "## Next",
             "    $ after"]
    found = guide.commands(lines)
    assert [(one.line, one.status, lines[one.start:one.end]) for one in found] == [
        ("hyperforecast a --b c", 3, ["    output", "    ..."]), ("hyperforecast d", 0, []), ("hyperforecast e", 0, [])]
    with pytest.raises(ValueError):
        guide.commands(["nothing"])
