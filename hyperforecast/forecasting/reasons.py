"""Reasons: which descriptors moved each setting, against the last boundary of the device or a typical one.

A reason says what the models say: advice is taken again with the descriptors put back, and the factor is that of the
advised setting to the one that would have been advised. Which descriptors are worth that is found out cheaply: by how
much each pulls at the slopes of the expected outcome around the advised settings.
"""

from dataclasses import asdict, dataclass

import numpy as np

from hyperforecast.describing import DESCRIPTORS
from hyperforecast.describing.words import GROUP_WORDS, in_words
from hyperforecast.forecasting.choice import choose, objective
from hyperforecast.forecasting.forecaster import BoundaryForecast
from hyperforecast.settings import SCALES, scale_free

# Descriptors, by their influence on the models, that are looked into; how often advice is taken again.
MOST_LOOKED_INTO, MOST_RETAKEN = 10, 2
# Steps from the advised settings, in the unit cube, over which slopes are taken.
SLOPE_STEPS = (0.12, 0.36)
# A setting that moves by less than this factor has not moved.
LEAST_FACTOR = 1.1
# A group of descriptors is named only where it moves a setting so much more than any single one does.
GROUP_GAIN = 1.5
MOST_NAMED = 3
LAST, TYPICAL = "at the last boundary", "in the records"


@dataclass(frozen=True)
class Change:
    """A descriptor, its value here, and the one that it is held against."""

    descriptor: str
    value: float
    reference: float

    @property
    def times(self):
        """How many times the reference it is; NaN where that has no meaning."""
        return self.value / self.reference if self.value > 0 and self.reference > 0 else np.nan


@dataclass(frozen=True)
class Reason:
    """What one or more descriptors did to a setting.

    Attributes
    ----------
    setting : str
    factor : float
        The advised value over the one that would be advised with the descriptors put back.
    changes : tuple of Change
        The descriptor, or the descriptors of one group together, the most changed first.
    since : str
        What the descriptors were put back to: their values at the last boundary, or the median over the records.
    """

    setting: str
    factor: float
    changes: tuple
    since: str

    def as_dict(self):
        """Return a JSON-able dict."""
        return {"setting": self.setting, "factor": self.factor, "since": self.since,
                "changes": [asdict(one) for one in self.changes], "text": str(self)}

    def __str__(self):
        how, times = ("higher", self.factor) if self.factor > 1 else ("lower", 1 / self.factor)
        told = "; ".join(self._told(one) for one in self.changes[:MOST_NAMED])
        if len(self.changes) > 1:
            told = f"{GROUP_WORDS[DESCRIPTORS[self.changes[0].descriptor].group]}: {told}"
        return f"{self.setting.replace('_', ' ')} {times:.2g} times {how}, because of {told}"

    def _told(self, change):
        times, name = change.times, in_words(change.descriptor)
        if times >= 1.5:
            name += f", {times:.2g} times as much"
        elif times <= 1 / 1.5:
            name += f", {1 / times:.2g} times less"
        return f"{name} ({change.value:.3g}, {change.reference:.3g} {self.since})"


class _OpenForecast(BoundaryForecast):
    """A forecaster at one boundary with some descriptors left open; asked for pairs (descriptors, list of settings)."""

    def __init__(self, forecaster, descriptors, names):
        super().__init__(forecaster, descriptors)
        self.narrowed = forecaster.narrowed(descriptors, names)
        self._open = [name for name in forecaster.descriptor_names if name in names]

    def _raw(self, model, rows):
        return self.narrowed[model].predict(rows)

    def coordinates(self, pairs):
        return np.concatenate([np.hstack([
            np.tile([described[name] for name in self._open], (len(settings), 1)),
            scale_free(settings, {name: described.get(name, np.nan) for name in SCALES})])
            for described, settings in pairs])


def explain(advice):
    """Return the reasons of an `Advice`, at most one for each setting, the greatest first.

    Descriptors are held against those of the last boundary (`Advice.before`) where there is one, else against their
    medians over the records. The constant, where it is advised, has none.
    """
    forecaster, box, here = advice.forecaster, advice.box, advice.descriptors
    if advice.settings == advice.constant and advice.unfamiliar == "constant":
        return []
    reference, since = advice.before, LAST
    if not reference:
        reference, since = dict(zip(forecaster.descriptor_names, forecaster.typical.tolist())), TYPICAL
    # NaN differs from everything, and is not to be put back to.
    names = [name for name in forecaster.influential
             if abs(here.get(name, np.nan) - reference.get(name, np.nan)) > 0][:MOST_LOOKED_INTO]
    trials = [(name,) for name in names] + _groups(names)
    if not trials:
        return []
    put_back = [{**here, **{name: reference[name] for name in trial}} for trial in trials]
    forecast = _OpenForecast(forecaster, here, names)
    pulls = _pulls(advice, forecast, put_back)
    factors = {}

    def retake(places):
        place = places[0]
        if place not in factors and len(factors) < MOST_RETAKEN:
            instead = choose(forecast.narrowed.at(put_back[place]), box, advice.preferences)
            factors[place] = {name: getattr(advice.settings, name) / getattr(instead, name) for name in box.names}

    strongest = np.argsort(-pulls, axis=0, kind="stable")
    by_setting = [strongest[:, k].tolist() for k in np.argsort(-pulls.max(axis=0), kind="stable")]
    for places in by_setting:
        retake([place for place in places if len(trials[place]) == 1])
    for places, name in zip(by_setting, box.names):
        groups = [place for place in places if len(trials[place]) > 1]
        if groups and not any(_moved(factors[place][name]) for place in factors):
            retake(groups)
    reasons = []
    for k, name in enumerate(box.names):
        # A setting that nothing pulls at moves by chance. Of two that move it alike the single descriptor is told.
        strength = {place: abs(np.log(one[name])) / (GROUP_GAIN if len(trials[place]) > 1 else 1)
                    for place, one in factors.items() if _moved(one[name]) and pulls[place, k] > 0}
        if strength:
            place = max(strength, key=strength.get)
            changes = [Change(one, float(here[one]), float(reference[one])) for one in trials[place]]
            reasons.append(Reason(name, float(factors[place][name]), tuple(_most_changed(forecaster, changes)), since))
    return sorted(reasons, key=lambda one: -abs(np.log(one.factor)))


def _groups(names):
    """Groups of descriptors that have two or more of `names`, as tuples of these."""
    groups = {}
    for name in names:
        if name in DESCRIPTORS:
            groups.setdefault(DESCRIPTORS[name].group, []).append(name)
    return [tuple(members) for members in groups.values() if len(members) > 1]


def _moved(factor):
    return max(factor, 1 / factor) >= LEAST_FACTOR


def _most_changed(forecaster, changes):
    """Return changes in order of their size, in spreads over the records."""
    scale = dict(zip(forecaster.familiarity.names.tolist(), forecaster.familiarity.scale.tolist()))
    return sorted(changes, key=lambda one: -abs(one.value - one.reference) / scale.get(one.descriptor, np.inf))


def _pulls(advice, forecast, put_back):
    """Return how much the descriptors here pull at each setting, against each way of putting some back: (n, D)."""
    box = advice.box
    center = box.to_unit([advice.settings])[0]
    steps = np.concatenate([step * np.eye(len(center)) for step in SLOPE_STEPS])
    probes = box.from_unit(np.clip(np.concatenate([center + steps, center - steps]), 0, 1))
    values = objective(forecast, [(described, probes) for described in (advice.descriptors, *put_back)],
                       advice.preferences).reshape(-1, 2, len(SLOPE_STEPS), len(center))
    slopes = (values[:, 0] - values[:, 1]).sum(axis=1)
    return np.abs(slopes[0] - slopes[1:])
