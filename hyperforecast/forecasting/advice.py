"""Advice: settings chosen by a forecaster at a boundary, with no attempt."""

from dataclasses import dataclass, field, replace
from functools import cached_property

import numpy as np

from hyperforecast.forecasting.familiarity import FamiliarityVerdict
from hyperforecast.forecasting.forecaster import BoundaryForecast, Forecaster, old_share
from hyperforecast.forecasting.preferences import Preferences
from hyperforecast.settings import KEPT_PER_CLASS, Settings, SettingsBox

# Candidates that are weighed over the whole box, and around the best of them.
SPREAD_OUT = 256
CENTERS, AROUND_EACH = 6, 16
# Width of the neighbourhood, in unit-cube distance, over which expected outcomes are averaged: the edge of the good
# region is steep, and a candidate among good neighbours is the safer one.
NEIGHBOURHOOD = 0.05
# What the probability of divergence costs, in accuracy: the advice keeps a margin from the cliff.
DIVERGENCE_PRICE = 0.3
ALTERNATIVES = 8
# Alternatives differ from better ranked ones by at least this much, in unit-cube distance.
FEWEST_APART = 0.08
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
    settings, scores = _weigh(forecast, box, preferences)
    best = _fewest_kept(forecast, settings[int(np.argmax(scores))], box, preferences)
    familiarity, constant = forecaster.familiarity.assess(descriptors), forecaster.constant_settings(descriptors, box)
    if not familiarity.familiar and preferences.unfamiliar == "constant":
        # What the models would have advised comes next.
        settings, scores, best = [best, *settings], np.concatenate([[np.inf], scores]), constant
    alternatives = _apart(box, best, settings, scores)
    expected = forecast.expected([best])
    return Advice(
        settings=best, alternatives=alternatives, expected_old=expected["old"].at(0),
        expected_new=expected["new"].at(0), expected_all=expected["all"].at(0),
        divergence=float(forecast.divergence([best])[0]),
        familiarity=familiarity, constant=constant, descriptors=descriptors, forecaster=forecaster,
        forecast=forecast, box=box, preferences=preferences, before=before or {},
    )


def choose(forecast, box, preferences):
    """Return the `Settings` with the best expected outcome, in the sense of `Preferences`."""
    settings, scores = _weigh(forecast, box, preferences)
    return _fewest_kept(forecast, settings[int(np.argmax(scores))], box, preferences)


def lattice(n, n_dimensions):
    """Return n points that fill the unit cube evenly, shape (n, n_dimensions), always the same.

    The additive recurrence with the powers of 1/g, where g^(D+1) = g + 1 (Roberts 2018, "The Unreasonable
    Effectiveness of Quasirandom Sequences", from memory).
    """
    g = 1.5
    for _ in range(40):
        g = (1 + g) ** (1 / (n_dimensions + 1))
    return (0.5 + np.arange(1, n + 1)[:, None] * g ** -np.arange(1.0, n_dimensions + 1)) % 1.0


def _weigh(forecast, box, preferences):
    """Return candidate settings and their scores: over the whole box, then around the best."""
    points = lattice(SPREAD_OUT, box.n_dimensions)
    scores = _scores(forecast, box.from_unit(points), box, preferences)
    centers = points[np.argsort(-_smooth(points, scores), kind="stable")[:CENTERS]]
    offsets = (lattice(AROUND_EACH, box.n_dimensions) - 0.5) * 4 * NEIGHBOURHOOD
    around = np.clip((centers[:, None] + offsets).reshape(-1, box.n_dimensions), 0, 1)
    scores = np.concatenate([scores, _scores(forecast, box.from_unit(around), box, preferences)])
    points = np.concatenate([points, around])
    return box.from_unit(points), _smooth(points, scores)


def _scores(forecast, settings, box, preferences):
    """Return what candidates are ranked by, shape (n,)."""
    # Direct forecasts know nothing of weights.
    if forecast.forecaster.ranking == "direct" and preferences.old_weight is None:
        return -np.linalg.norm(box.to_unit(settings) - forecast.direct(box), axis=1)
    return objective(forecast, settings, preferences)


def objective(forecast, settings, preferences):
    """Return the expected outcome (n,), now and later, from the best, less the price of perhaps diverging."""
    now = preferences.now_weight
    value = now * forecast.shortfall(settings)
    if now < 1:
        value = value + (1 - now) * forecast.later(settings)
    if preferences.old_weight is not None:
        # w old + (1 - w) new lies (w - share) (old - new) above the accuracy that counts every class alike. Between
        # old and new classes, what is won now is taken to last.
        outcome = forecast.outcome(settings)
        value = value + (preferences.old_weight - old_share(forecast.descriptors)) * (outcome["old"] - outcome["new"])
    return value - DIVERGENCE_PRICE * forecast.divergence(settings)


def _smooth(points, scores):
    """Return scores averaged over each point's neighbourhood."""
    lengths = (points**2).sum(axis=1)
    squares = lengths[:, None] + lengths - 2 * points @ points.T
    weights = np.exp(squares * (-0.5 / NEIGHBOURHOOD**2))
    # Rounded, so that ties are ties, and the first of them wins.
    return np.round(weights @ scores / weights.sum(axis=1), 9)


def _fewest_kept(forecast, best, box, preferences):
    """Return `best` with the fewest exemplars per class whose expected outcome is within tolerance of the best."""
    if best.kept_per_class is None:
        return best
    kept = np.flatnonzero(np.bincount(np.round(np.geomspace(KEPT_PER_CLASS[0], box.most_kept, 24)).astype(int)))
    candidates = [replace(best, kept_per_class=int(k)) for k in kept]
    values = objective(forecast, candidates, preferences)
    return candidates[int(np.argmax(values >= values.max() - preferences.tolerance))]


def _apart(box, best, settings, scores):
    """Return ranked alternatives that differ from `best` and from each other."""
    chosen = [best]
    points = box.to_unit(settings)
    taken = box.to_unit([best])
    for place in np.argsort(-scores, kind="stable"):
        if len(chosen) > ALTERNATIVES:
            break
        if np.linalg.norm(taken - points[place], axis=1).min() >= FEWEST_APART:
            chosen.append(settings[place])
            taken = np.concatenate([taken, points[place:place + 1]])
    return chosen[1:]
