"""Advice: settings chosen by a forecaster at a boundary, with no attempt."""

from dataclasses import dataclass, field, replace
from functools import cached_property

import numpy as np

from hyperforecast.forecasting.familiarity import FamiliarityVerdict
from hyperforecast.forecasting.forecaster import Forecaster, old_share
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
# Descriptors, by their influence on the models, whose part in the advice is looked into.
MOST_EXPLAINED = 10


@dataclass(frozen=True)
class Reason:
    """What one descriptor did to the advice: with its typical value instead, `setting` would be `factor` times less.

    Attributes
    ----------
    descriptor, setting : str
    value, typical : float
        The descriptor here, and its median over the records.
    factor : float
        Advised value over the value that would be advised with the typical descriptor.
    moved : float
        How far the advice moves in the unit cube of settings.
    """

    descriptor: str
    setting: str
    value: float
    typical: float
    factor: float
    moved: float

    def __str__(self):
        how = "higher" if self.factor > 1 else "lower"
        times = max(self.factor, 1 / self.factor)
        return (f"{self.setting} {times:.2g} times {how} than with a typical {self.descriptor}: "
                f"{self.value:.3g} here, {self.typical:.3g} in the records")


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
    box : SettingsBox
    preferences : Preferences
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
    box: SettingsBox = field(repr=False)
    preferences: Preferences = Preferences()

    @cached_property
    def reasons(self):
        """The descriptors that moved the advice most, as `Reason`, greatest first; computed when first asked for."""
        return explain(self.forecaster, self.descriptors, self.box, preferences=self.preferences)

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
            "method": self.forecaster.method, "settings": self.settings.as_dict(),
            "alternatives": [one.as_dict() for one in self.alternatives],
            "expected": {"old": self.expected_old.as_dict(), "new": self.expected_new.as_dict(),
                         "all": self.expected_all.as_dict()},
            "divergence": self.divergence,
            "familiarity": self.familiarity.as_dict(), "unfamiliar": self.unfamiliar,
            "constant": self.constant.as_dict(), "preferences": self.preferences.as_dict(),
            "reasons": [{**one.__dict__, "text": str(one)} for one in self.reasons],
            "descriptors": {name: None if np.isnan(value) else value for name, value in self.descriptors.items()},
            "forecaster": self.forecaster.checksum,
        }


def advise_settings(forecaster, descriptors, box, **preferences):
    """Return the `Advice` of a forecaster for a boundary.

    Parameters
    ----------
    forecaster : Forecaster
    descriptors : dict of str to float
        NaN, or no entry, is missing.
    box : SettingsBox
        The settings that are open at the boundary.
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
        familiarity=familiarity, constant=constant, descriptors=descriptors, forecaster=forecaster, box=box,
        preferences=preferences,
    )


def explain(forecaster, descriptors, box, *, preferences=Preferences(), count=3):
    """Return the `count` most telling `Reason`: each descriptor in turn is set to its typical value, and advice taken.

    Only the most influential descriptors are looked into, over the candidates that cover the whole box.
    """
    points = lattice(SPREAD_OUT, box.n_dimensions)
    settings = box.from_unit(points)
    near = forecaster.narrowed(descriptors, forecaster.influential[:MOST_EXPLAINED])

    def choice(described):
        return points[int(np.argmax(_smooth(points, _scores(near.at(described), settings, box, preferences))))]

    here = choice(descriptors)
    typical = dict(zip(forecaster.descriptor_names, forecaster.typical))
    reasons = []
    for name in forecaster.influential[:MOST_EXPLAINED]:
        value = descriptors.get(name, np.nan)
        if np.isnan(value) or np.isnan(typical[name]):
            continue
        advised, instead = box.from_unit(np.stack([here, choice({**descriptors, name: typical[name]})]))
        # Of settings, not of points: several points stand for one number of exemplars.
        change = np.subtract(*box.to_unit([advised, instead]))
        if not change.any():
            continue
        most = int(np.argmax(np.abs(change)))
        setting = box.names[most]
        factor = getattr(advised, setting) / getattr(instead, setting)
        reasons.append(Reason(name, setting, float(value), float(typical[name]), float(factor),
                              float(np.linalg.norm(change))))
    return sorted(reasons, key=lambda one: -one.moved)[:count]


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
    return _objective(forecast, settings, preferences)


def _objective(forecast, settings, preferences):
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
    values = _objective(forecast, candidates, preferences)
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
