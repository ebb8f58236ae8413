"""Two forecasters side by side on a device's own past boundaries.

The history holds the descriptors of each boundary and what advice was to care for there, so that either can be asked
again what it would have advised, and what it would have expected of the settings that were used. Where these were tried, what they achieved is known.
"""

from dataclasses import dataclass

import numpy as np

from hyperforecast.checks import InputError
from hyperforecast.forecasting import advise_settings
from hyperforecast.settings import Settings, SettingsBox

SIDES = ("before", "after")


@dataclass(frozen=True)
class Comparison:
    """Two forecasters at one past boundary.

    Attributes
    ----------
    update : int
        Its number in the history.
    advised : dict of str to Settings
        What each of `SIDES` advises there.
    promised : dict of str to Expected
        The accuracy on all classes that each expects of its own advice.
    used : Settings
        Those of the last try of that update.
    expected : dict of str to Expected
        The accuracy on all classes that each expects of the settings that were used.
    achieved : float or None
        The accuracy that came of them.
    """

    update: int
    advised: dict
    promised: dict
    used: Settings
    expected: dict
    achieved: float | None

    @property
    def nearer(self):
        """Which of `SIDES` was nearer to what was achieved, "equal", or None where that is not known."""
        if self.achieved is None:
            return None
        before, after = (abs(self.expected[side].value - self.achieved) for side in SIDES)
        return "equal" if before == after else "before" if before < after else "after"

    def as_dict(self):
        """Return a JSON-able dict."""
        return {"update": self.update, "used": self.used.as_dict(), "achieved": self.achieved, "nearer": self.nearer,
                **{side: {"advised": self.advised[side].as_dict(), "promised": self.promised[side].as_dict(),
                          "expected": self.expected[side].as_dict()} for side in SIDES}}


def compare_forecasters(generation, before, after):
    """Return the list of `Comparison` over a device's past boundaries, oldest first; the first update has no advice.

    Parameters
    ----------
    generation : Generation
        Whose history is gone through.
    before, after : Forecaster
        For the plan's method.

    Raises
    ------
    InputError
        If one is for another method.
    """
    method = generation.carryover.plan.method
    for forecaster in (before, after):
        if forecaster.method != method:
            raise InputError("forecaster", f"must be one for {method}, the method of the plan", forecaster.method)
    sides = dict(zip(SIDES, (before, after)))
    return [_compared(entry, method, sides) for entry in generation.history if entry["descriptors"] is not None]


def mean_errors(comparisons):
    """Return, for each of `SIDES`, {"error", "held"}: how far expectations lay from what was achieved, on average, and
    the share of intervals that held it; None if no outcome is known."""
    known = [one for one in comparisons if one.achieved is not None]
    if not known:
        return None
    return {side: {"error": float(np.mean([abs(one.expected[side].value - one.achieved) for one in known])),
                   "held": float(np.mean([one.expected[side].low <= one.achieved <= one.expected[side].high
                                          for one in known]))} for side in SIDES}


def _compared(entry, method, sides):
    descriptors = {name: np.nan if value is None else value for name, value in entry["descriptors"].items()}
    kept = descriptors.get("most_kept", np.nan)
    box = SettingsBox(method) if np.isnan(kept) else SettingsBox(method, int(kept))
    used = Settings(**entry["settings"])
    advice = {side: advise_settings(forecaster, descriptors, box, **entry.get("preferences", {}))
              for side, forecaster in sides.items()}
    return Comparison(
        update=entry["number"], advised={side: one.settings for side, one in advice.items()},
        promised={side: one.expected_all for side, one in advice.items()}, used=used,
        expected={side: forecaster.at(descriptors).expected([used])["all"].at(0)
                  for side, forecaster in sides.items()},
        # A try that diverged scores nothing that a forecast could be held to.
        achieved=None if entry["diverged"] else entry["achieved"]["all"])
