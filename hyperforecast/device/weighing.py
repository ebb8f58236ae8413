"""Questions to ask before an update: what to expect of other settings, another method, more memory, time or rows.

Nothing is trained and nothing is stored.
"""

from dataclasses import dataclass, field, replace

import numpy as np

from hyperforecast.checks import InputError, check_number
from hyperforecast.describing import describe
from hyperforecast.device.cycle import update
from hyperforecast.device.folder import DeviceFolder
from hyperforecast.device.limits import measured_speed
from hyperforecast.forecasting import (
    LEAST_GAIN, Advice, NothingNew, Outlook, Ridge, Waiting, advise_settings, along, await_rows, load_forecaster,
    nothing_new, outlook, retraining_signs, ridge,
)
from hyperforecast.learning import HeadTrainer, Job, boundary_seed, open_boundary
from hyperforecast.settings import KEPT_PER_CLASS, METHODS, SettingsBox, Settings, completed

MEGABYTE, MINUTE = 10**6, 60.0
METHODS_CAVEAT = (
    "Compared are the forecasters of the four methods on this boundary, as if the head of this device went on with "
    "another method from here; a head trained with that method from its first increment would be another one. What a "
    "method needs of the head is made up for: importance (EWC) is taken from the rows held, and a method that "
    "rehearses has no more exemplars than the rows held here."
)


@dataclass(frozen=True)
class Standing:
    """What one method is forecast to reach at a boundary.

    Attributes
    ----------
    method : str
    own : bool
        Whether it is the method of the device.
    settings : Settings
        Advised for it.
    outlook : Outlook
        Of these settings.
    familiar : bool
        Whether its records know boundaries like this one.
    missing : list of str
        Descriptors that its forecaster reads and that this device can give for its own method alone.
    """

    method: str
    own: bool
    settings: Settings
    outlook: Outlook
    familiar: bool
    missing: list

    def as_dict(self):
        """Return a JSON-able dict."""
        return {"method": self.method, "own": self.own, **self.outlook.as_dicts()[0], "familiar": self.familiar,
                "missing": self.missing}


@dataclass(frozen=True)
class More:
    """What more of something would bring, all else as it is.

    Attributes
    ----------
    what : str
        What there would be more of.
    means : str
        What it comes to here.
    settings : Settings or None
        Advised then; None where it changes nothing.
    gain : float
        Change of the expected accuracy on all classes.
    """

    what: str
    means: str
    settings: Settings | None
    gain: float

    def as_dict(self):
        """Return a JSON-able dict."""
        return {"what": self.what, "means": self.means, "settings": self.settings and self.settings.as_dict(),
                "gain": self.gain}


@dataclass(frozen=True)
class Weighing:
    """What can be said about a boundary before an update.

    Attributes
    ----------
    advice : Advice
    own : Outlook or None
        Of the settings that were asked about.
    beside : Outlook
        Of the advised settings, the constant and the first alternatives.
    curves : dict of str to Outlook
        Along each setting, the others as advised.
    ridge : Ridge
    methods : list of Standing
        Best expected first; the method of the device alone where another trainer than the built-in one is at work.
    more : list of More
    waiting : Waiting or NothingNew
        The latter for an increment without new classes.
    retrain : list of str
        Why it is time to retrain at base; empty where nothing speaks for it.
    """

    advice: Advice = field(repr=False)
    own: Outlook | None
    beside: Outlook
    curves: dict
    ridge: Ridge
    methods: list
    more: list
    waiting: Waiting | NothingNew
    retrain: list

    def as_dict(self):
        """Return a JSON-able dict."""
        return {
            "advice": self.advice.as_dict(), "own": self.own and self.own.as_dicts()[0],
            "beside": self.beside.as_dicts(), "curves": {name: one.as_dicts() for name, one in self.curves.items()},
            "ridge": {name: {"low": low, "high": high} for name, (low, high) in self.ridge.spans().items()},
            "limits": {"kept_per_class": self.advice.box.most_kept if "kept_per_class" in self.curves else None},
            "methods": [one.as_dict() for one in self.methods], "methods_caveat": METHODS_CAVEAT,
            "more": [one.as_dict() for one in self.more], "waiting": self.waiting.as_dict(), "retrain": self.retrain,
        }


def weigh(folder, increment, *, settings=None, forecasters=None, trainer=None, preferences=None, least_gain=LEAST_GAIN,
          seed=0):
    """Return the `Weighing` of an increment that has arrived at a device.

    Parameters
    ----------
    folder : str, Path or DeviceFolder
    increment : Increment
    settings : Settings or dict, optional
        Settings of one's own to ask about; a dict names some of them, the others are as advised.
    forecasters : dict of str to Forecaster, optional
        By method; for a method that is not there, the one that ships.
    trainer : Trainer, optional
        That of the first update, as in `hyperforecast.device.update`.
    preferences : Preferences, optional
        What the advice is to care for; as in the last update by default.
    least_gain : float in [0, 1]
        The least gain in accuracy on all classes that counts, for waiting and for an update.
    seed : int
        That of the update that is in question: check rows are drawn with it.

    Raises
    ------
    InputError
        As `update` does; the device must have had its first update.
    """
    folder = folder if isinstance(folder, DeviceFolder) else DeviceFolder(folder)
    check_number("least_gain", least_gain, low=0, high=1)
    generation, forecasters = folder.read(), forecasters or {}
    carryover = generation.carryover
    plan = carryover.plan
    advice = update(folder, increment, forecaster=forecasters.get(plan.method), trainer=trainer, preferences=preferences,
                    seed=seed, dry_run=True).advice
    boundary = open_boundary(plan, carryover, increment, seed=boundary_seed(seed, carryover))
    asked = None
    if settings is not None:
        own = settings if isinstance(settings, dict) else settings.as_dict()
        own = completed(own, advice.settings, plan.method)
        _within_memory(own, advice.box)
        asked = outlook(advice, [own])
    return Weighing(
        advice=advice, own=asked, beside=outlook(advice, [advice.settings, advice.constant, *advice.alternatives[:2]]),
        curves={name: along(advice, name) for name in advice.box.names}, ridge=ridge(advice),
        methods=_methods(advice, carryover, increment, forecasters, trainer, seed),
        more=[*_more_memory(advice, carryover), *_more_time(advice, trainer, boundary, measured_speed(generation.history))],
        waiting=when(advice, increment, carryover, least_gain=least_gain), retrain=retraining_signs(advice),
    )


def when(advice, increment, carryover, *, least_gain=LEAST_GAIN):
    """Return the `Waiting` of an increment that meets a carryover, or `NothingNew` if none of its classes is new."""
    labels, counts = np.unique(increment.y, return_counts=True)
    new = ~np.isin(labels, carryover.classes)
    if not new.any():
        seen = dict(zip(carryover.classes.tolist(), carryover.summaries.count.tolist()))
        return nothing_new(advice, counts.tolist(), [seen[label] for label in labels.tolist()], least_gain=least_gain)
    return await_rows(advice, dict(zip(labels[new].tolist(), counts[new].tolist())), least_gain=least_gain)


def _within_memory(settings, box):
    kept = settings.kept_per_class
    if kept is not None and kept > box.most_kept:
        raise InputError("kept_per_class", f"must be at most {box.most_kept}, what the memory limit allows here", kept,
                         "raise the memory limit, or keep fewer")


def _methods(advice, carryover, increment, forecasters, trainer, seed):
    """Return the `Standing` of each method."""
    own = carryover.plan.method
    told = [_standing(advice, advice)]
    if trainer is None or isinstance(trainer, HeadTrainer):
        seed = boundary_seed(seed, carryover)
        for method in METHODS:
            if method == own:
                continue
            forecaster = forecasters.get(method) or load_forecaster(method)
            switched = HeadTrainer().with_method(carryover, method)
            boundary = open_boundary(switched.plan, switched, increment, seed=seed)
            descriptors = describe(HeadTrainer(), boundary, seed=seed)
            there = advise_settings(forecaster, descriptors, SettingsBox(method, boundary.most_kept),
                                    **advice.preferences.as_dict())
            told.append(_standing(there, advice))
    return sorted(told, key=lambda one: -one.outlook.all.value[0])


def _standing(there, here):
    """Return the `Standing` of the method of the advice `there`, on the device that `here` is the advice for."""
    # What no record of the method holds is not missed.
    read = [name for name, typical in zip(there.forecaster.descriptor_names, there.forecaster.typical)
            if np.isfinite(typical)]
    missing = [name for name in read if np.isnan(there.descriptors[name]) and not np.isnan(here.descriptors[name])]
    return Standing(there.forecaster.method, there is here, there.settings, outlook(there, [there.settings]),
                    there.familiarity.familiar, missing)


def _more_memory(advice, carryover):
    """Yield what one more megabyte would bring."""
    plan, name = carryover.plan, "one more megabyte of memory"
    if not plan.rehearses:
        yield More(name, f"{plan.method} trains without exemplars: nothing", None, 0.0)
        return
    rows = MEGABYTE // (4 * carryover.n_features + 8)
    classes = int(advice.descriptors["classes_old"] + advice.descriptors["classes_new"])
    most = advice.box.most_kept
    larger = min(most + rows // classes, KEPT_PER_CLASS[1])
    if larger == most:
        yield More(name, f"{most} exemplars of each class are allowed already, more are not kept: nothing", None, 0.0)
        return
    means = f"{rows} rows, {larger} instead of {most} exemplars of each class"
    yield _again(advice, name, f"{means}, now, with the exemplars that are held", {"most_kept": float(larger)}, larger)
    held = advice.descriptors["exemplars_per_class"] * larger / most
    yield _again(advice, name, f"{means}, once as many more are held ({held:.0f} of each class)",
                 {"most_kept": float(larger), "exemplars_per_class": held}, larger)


def _more_time(advice, trainer, boundary, speed):
    """Yield what one more minute would bring, at a speed in operations a second that updates have measured."""
    name, passes = "one more minute of training", advice.descriptors["passes"]
    if speed is None:
        yield More(name, "not known, no update has measured the speed yet", None, 0.0)
        return
    once = replace(boundary, plan=replace(boundary.plan, passes=1))
    seconds = (trainer or HeadTrainer()).operations_of(Job(once, advice.settings)) / speed
    more = int(MINUTE / seconds)
    ranges = advice.forecaster.familiarity
    known = float(ranges.high[ranges.names.tolist().index("passes")])
    means = f"a pass takes about {seconds:.2g} s, so {more} more passes"
    if not more or known <= passes:
        told = "nothing" if not more else f"not known, the records go up to {known:.0f} passes"
        yield More(name, f"{means}: {told}", None, 0.0)
        return
    reached = min(passes + more, known)
    steps = advice.descriptors["steps_without_exemplars"] * reached / passes
    if reached < passes + more:
        means += f"; forecast for {reached:.0f} passes, the most that the records know"
    yield _again(advice, name, means, {"passes": reached, "steps_without_exemplars": steps}, advice.box.most_kept)


def _again(advice, what, means, altered, most_kept):
    """Return the `More` of altered descriptors."""
    then = advise_settings(advice.forecaster, {**advice.descriptors, **altered},
                           SettingsBox(advice.forecaster.method, most_kept), **advice.preferences.as_dict())
    return More(what, means, then.settings, then.expected_all.value - advice.expected_all.value)
