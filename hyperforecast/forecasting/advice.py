"""Advice: settings chosen by a forecaster at a boundary, with no attempt."""

from dataclasses import dataclass, field
from functools import cached_property

import numpy as np

from hyperforecast.forecasting.choice import apart, fewest_kept, objective, weighed
from hyperforecast.forecasting.familiarity import FamiliarityVerdict
from hyperforecast.forecasting.forecaster import BoundaryForecast, Forecaster
from hyperforecast.forecasting.preferences import Preferences
from hyperforecast.settings import Settings, SettingsBox

# A setting is good as far as the expected outcome stays within this of that at the point; looked for in so many steps
# along each axis, up to half of it in both directions.
GOOD, STEPS = 0.01, 33


@dataclass(frozen=True)
class Advice:
    """Settings for a boundary, and what to think of them.

    Attributes
    ----------
    settings : Settings
        At a boundary unlike the records the best constant, if that is what the user prefers there.
    alternatives : list of Settings
        Ranked, best first, without the advised ones; they differ from each other.
    expected_old, expected_new, expected_all : Expected
        Accuracy on classes seen before, on those that are new (or of the increment, if none is), and on all, each
        with a 90% interval.
    divergence : float
        Probability that training diverges.
    familiarity : FamiliarityVerdict
    constant : Settings
        What the best constant would have been here.
    descriptors : dict of str to float
    forecaster : Forecaster
    forecast : BoundaryForecast
        Of the forecaster, here.
    box : SettingsBox
    preferences : Preferences
    before : dict of str to float
        Descriptors at the last boundary, that reasons are given against; empty where there is none.
    """

    settings: Settings
    alternatives: list
    expected_old: object
    expected_new: object
    expected_all: object
    divergence: float
    familiarity: FamiliarityVerdict
    constant: Settings
    descriptors: dict
    forecaster: Forecaster = field(repr=False)
    forecast: BoundaryForecast = field(repr=False, compare=False)
    box: SettingsBox = field(repr=False)
    preferences: Preferences = Preferences()
    before: dict = field(default_factory=dict, repr=False)

    @cached_property
    def reasons(self):
        """What moved each setting, as a list of `Reason`, the greatest first; computed when first asked for."""
        # Reasons take advice.
        from hyperforecast.forecasting.reasons import explain

        return explain(self)

    @cached_property
    def spreads(self):
        """How wide the good region around the advised settings is, see `spreads_at`; computed when first asked for."""
        return self.spreads_at(self.settings)

    def spreads_at(self, settings):
        """Return {setting: factor >= 1}: from value / factor to value * factor the expected outcome stays good.

        Good is within a point of the outcome at `settings` itself, the other settings staying as they are. Where the
        value is not in the middle of what is good, the factor still spans as much: it is the square root of the highest
        good value over the lowest.
        """
        center, middle = self.box.to_unit([settings])[0], STEPS // 2
        offsets = np.linspace(-0.5, 0.5, STEPS)
        lines = np.clip(center + offsets[:, None] * np.eye(len(center))[:, None], 0, 1)
        lines = self.box.from_unit(lines.reshape(-1, len(center)))
        values = objective(self.forecast, lines, self.preferences).reshape(-1, STEPS)
        factors = {}
        for name, line, good in zip(self.box.names, np.reshape(lines, (-1, STEPS)),
                                    values >= values[:, middle:middle + 1] - GOOD):
            below, above = good[middle::-1], good[middle:]
            low = line[middle + 1 - (len(below) if below.all() else below.argmin())]
            high = line[middle - 1 + (len(above) if above.all() else above.argmin())]
            factors[name] = float(f"{np.sqrt(getattr(high, name) / getattr(low, name)):.4g}")
        return factors

    @property
    def ranked(self):
        """The advised settings and the alternatives, best first."""
        return [self.settings, *self.alternatives]

    @property
    def unfamiliar(self):
        """What is done because the boundary is unlike the records: `Preferences.unfamiliar`, None where it is not."""
        return None if self.familiarity.familiar else self.preferences.unfamiliar

    @property
    def to_try(self):
        """The settings to try side by side, the best of which is to be kept: the advised ones alone, or more of them."""
        return self.ranked[:self.preferences.tried if self.unfamiliar else 1]

    def as_dict(self):
        """Return a JSON-able dict."""
        return {
            "method": self.forecaster.method, "settings": self.settings.as_dict(), "spreads": self.spreads,
            "alternatives": [one.as_dict() for one in self.alternatives],
            "expected": {"old": self.expected_old.as_dict(), "new": self.expected_new.as_dict(),
                         "all": self.expected_all.as_dict()},
            "divergence": self.divergence,
            "familiarity": self.familiarity.as_dict(), "unfamiliar": self.unfamiliar,
            "constant": self.constant.as_dict(), "preferences": self.preferences.as_dict(),
            "reasons": [one.as_dict() for one in self.reasons],
            "descriptors": {name: None if np.isnan(value) else value for name, value in self.descriptors.items()},
            "forecaster": self.forecaster.checksum,
        }


def advise_settings(forecaster, descriptors, box, *, before=None, **preferences):
    """Return the `Advice` of a forecaster for a boundary.

    Parameters
    ----------
    forecaster : Forecaster
    descriptors : dict of str to float
        NaN, or no entry, is missing.
    box : SettingsBox
        The settings that are open at the boundary.
    before : dict of str to float, optional
        Descriptors at the device's last boundary: reasons are given against them.
    preferences : old_weight, now_weight, tolerance, unfamiliar
        See `Preferences`.
    """
    preferences = Preferences(**preferences).checked()
    forecast = forecaster.at(descriptors)
    settings, scores = weighed(forecast, box, preferences)
    best = fewest_kept(forecast, settings[int(np.argmax(scores))], box, preferences)
    familiarity, constant = forecaster.familiarity.assess(descriptors), forecaster.constant_settings(descriptors, box)
    if not familiarity.familiar and preferences.unfamiliar == "constant":
        # What the models would have advised comes next.
        settings, scores, best = [best, *settings], np.concatenate([[np.inf], scores]), constant
    alternatives = apart(box, best, settings, scores)
    expected = forecast.expected([best])
    return Advice(
        settings=best, alternatives=alternatives, expected_old=expected["old"].at(0),
        expected_new=expected["new"].at(0), expected_all=expected["all"].at(0),
        divergence=float(forecast.divergence([best])[0]),
        familiarity=familiarity, constant=constant, descriptors=descriptors, forecaster=forecaster,
        forecast=forecast, box=box, preferences=preferences, before=before or {},
    )
