"""The update cycle of a device: advise, learn once, check, keep or roll back, write down.

An entry of the history, a JSON-able dict, tells of one update:

    number, time            from 1, and UTC as ISO text; the order is that of the numbers, clocks may jump
    device                  identity of the device: random, 32 hexadecimal digits, made at its first update
    rows, classes_old       rows of the increment, and how many classes were known before
    classes_new             labels that were new
    classes_again           labels of the increment that were known before
    doubts                  in words: names and labels of the increment that look wrong; nothing follows from them here
    descriptors             by name; null where one could not be had
    advice                  settings, expected accuracies with intervals, divergence, familiarity, and reasons in words;
                            null at the first update
    forecaster              checksum of the one that advised, or null
    forecaster_version      version of the program that fitted it, or null
    preferences             what advice was to care for, see `hyperforecast.forecasting.Preferences`: the next update keeps
                            them unless it is told otherwise
    unfamiliar              null, or what was done because the boundary is unlike the records: {"policy", "tried"}, the
                            preference, and with "try N" the settings that were tried side by side, each with its
                            accuracy on check rows (below 0: it diverged), the best first
    overruled               null, or {"by", "because"} where settings were given, whatever was advised: who decided so
                            and why, in their words; what was advised instead stands in `advice`
    settings, expected, diverged, stopped, achieved, acceptance, by_class, operations, operations_planned,
    training_seconds, reasons
                            of the last try: what it was trained with, forecast and achieved (see `update`), the same
                            on the acceptance set or null, what training took, and had been counted in advance if it
                            went to the end, and why it was not kept, in words; by_class holds lists of
                            one length, one place for each class known: `class` (its label), `arrived` (rows of the
                            increment), `check_rows`, and its accuracy on these `before` and `after` the try (null
                            without check rows, and before it was known)
    earlier_tries           the tries before it, each with the same eleven
    kept                    whether the last try was kept; otherwise the device carries on as before
    limits                  null without limits; else `time` and `memory`, what was planned (`Allowance` and `Room` of
                            `hyperforecast.device.limits`) or null, and all that was `given_up`, in words
    seconds                 spent on the update
    outcomes                only where labels came later: see `hyperforecast.device.use.record_outcome`
    undone                  only where it was undone by hand: when; see `hyperforecast.device.use.roll_back`

Labels stand in whole values, or in the words of reasons; nothing has a label for its key.
"""

import os
import time
from contextlib import nullcontext
from dataclasses import dataclass, replace
from datetime import UTC, datetime

import numpy as np

from hyperforecast.checks import InputError, check_number, check_whole
from hyperforecast.describing import describe
from hyperforecast.device.care import Care
from hyperforecast.device.doubts import quick_doubts
from hyperforecast.device.extractor import check_extractor_name, looks_foreign, sampled, sketch_of
from hyperforecast.device.folder import DeviceFolder
from hyperforecast.device.limits import Stopwatch, allowance, calibrated_speed, measured_speed, room
from hyperforecast.device.pin import forecaster_for
from hyperforecast.device.status import UpdateStatus
from hyperforecast.forecasting import Advice, Preferences, advise_settings, opening_settings
from hyperforecast.learning import (
    Carryover, HeadTrainer, Job, accuracies, boundary_seed, check_accuracies, close_boundary, open_boundary,
    standardize, try_settings,
)
from hyperforecast.settings import SettingsBox, completed

# A try is not kept if old classes lose more than this on average, or one of them more than that.
MOST_LOST = 0.3
MOST_LOST_BY_CLASS = 0.6
# A single class is judged only if it has this many check rows.
FEWEST_ROWS_OF_CLASS = 4
# Accuracy may lie below its forecast by this many standard deviations of so few check rows.
NOISE_DEVIATIONS = 2.0
# Without alternatives, at the first update, the next try is this much slower.
SLOWER = 0.1
# Characters of who overruled the advice, and of why.
LONGEST_TEXT = 1000


@dataclass(frozen=True)
class UpdateReport:
    """What became of an update.

    Attributes
    ----------
    status : UpdateStatus or None
        KEPT or ROLLED_BACK; None for a dry run.
    generation : int or None
        Number of the generation that tells of it; None if nothing was stored.
    entry : dict
        What the history says of it.
    advice : Advice or None
        None at the first update.
    carryover : Carryover or None
        What the device carries now; None if the first update was rolled back or a dry run.
    """

    status: UpdateStatus | None
    generation: int | None
    entry: dict
    advice: Advice | None
    carryover: Carryover | None

    def as_dict(self):
        """Return a JSON-able dict: the entry, with status and generation."""
        status = "dry_run" if self.status is None else self.status.name.lower()
        return {"status": status, "generation": self.generation, **self.entry}


def update(folder, increment, *, plan=None, forecaster=None, trainer=None, settings=None, by=None, because=None,
           preferences=None, extractor=None, another_extractor=False, retries=1, most_lost=MOST_LOST, most_lost_by_class=MOST_LOST_BY_CLASS, seed=0,
           dry_run=False, clock=time.perf_counter):
    """Learn an increment on a device, in one new generation of its folder; return an `UpdateReport`.

    Parameters
    ----------
    folder : str, Path or DeviceFolder
        Made by the first update.
    increment : Increment
    plan : Plan, optional
        Needed at the first update, and fixed by it, except for its `UPDATE_LIMITS`.
    forecaster : Forecaster, optional
        By default the one that the device is pinned to, or the one that ships for the plan's method, which knows the
        built-in trainer alone.
    trainer : Trainer, optional
        The built-in one by default.
    settings : Settings or dict, optional
        Train with these, whatever is advised. A dict names some of them; the others are as advised.
    by, because : str, optional
        Who overrules the advice and why, for the history: both, together with settings.
    preferences : Preferences, optional
        What advice is to care for, from now on; by default what it was told at earlier updates.
    extractor : str, optional
        What the user calls the extractor of the features; it must be what it was called before.
    another_extractor : bool
        Whether features of another extractor are meant; otherwise they are refused.
    retries : int
        How often a try that is not kept is followed by another one: with the next alternative of the advice, at the
        first update with a tenth of the learning rate. Settings that were given are tried once.
    most_lost, most_lost_by_class : float in [0, 1]
        See the rules below.
    seed : int
        With the same seed, settings and data, a `GrowingClassifier` learns the same.
    dry_run : bool
        Stop after the advice: nothing is trained or stored, and the folder may be read-only.
    clock : callable
        Seconds from anywhere, for the time limit and for what the history says of time.

    Raises
    ------
    InputError
        If the increment, the plan or another argument breaks a rule; `FolderBusy`, `FolderDamaged` or
        `FolderNotWritable` for what they say. The current generation stays as it is.

    Notes
    -----
    A try is checked on rows never trained on: the check rows that the device holds of old classes, and rows held back
    from the increment. Let b_c and a_c be the accuracy on the n_c check rows of class c before and after, C the number
    of classes that have some. `achieved` holds the mean of a_c over old classes (`old`), over new classes, or those of
    the increment if none is new (`new`), and over all (`all`), the mean of b_c over old classes (`old_before`), and
    the number of check rows (`rows`). The try is not kept if

    - training diverged;
    - the mean of b_c - a_c over old classes is more than `most_lost`;
    - b_c - a_c of an old class with n_c >= 4 is more than `most_lost_by_class`;
    - `all` is below low - 2 s, where low is the low end of the interval forecast for these settings and
      s = sqrt(low (1 - low) sum_c 1 / n_c) / C is the standard deviation of a mean over classes of binomial shares.

    The second and third rule hold for the acceptance set, too, if the device carries one. And of a class with a floor
    of its own (`hyperforecast.device.care`) the accuracy over its check rows and acceptance rows together may not come
    to lie below the floor, nor fall further where it lay below before; here no allowance is made for few rows.

    Under a time limit the passes are planned, and advised for, that will fit; a try that is late all the same is
    stopped, or found late afterwards, and not kept, and none is begun that would not fit.

    At the first update, which has no old classes and no forecast, only the first rule can apply. An update that is
    rolled back stores a generation too, in place of the current one: its history tells of it, its carryover is that of
    before. Where there is none before, nothing is stored.
    """
    started = clock()
    folder = folder if isinstance(folder, DeviceFolder) else DeviceFolder(folder)
    check_whole("retries", retries)
    overruled = _overruled(settings, by, because)
    check_whole("seed", seed, high=2**32 - 1)
    most_lost = check_number("most_lost", most_lost, low=0, high=1)
    most_lost_by_class = check_number("most_lost_by_class", most_lost_by_class, low=0, high=1)
    if plan is not None:
        plan.checked()
    with nullcontext() if dry_run else folder.locked(create=plan is not None):
        before = folder.read() if plan is None or folder.numbers() else None
        carryover = None if before is None else before.carryover
        history = [] if before is None else before.history
        plan = _agreed_plan(plan, carryover, increment)
        watch = Stopwatch(clock, plan.time_limit, started)
        seed = boundary_seed(seed, carryover)
        fits = None if plan.working_memory is None else room(plan, carryover, increment)
        rows = {} if fits is None else {"held": fits.held, "most_rows": fits.rows}
        boundary = open_boundary(plan, carryover, increment, seed=seed, **rows)
        trainer = HeadTrainer() if trainer is None else trainer
        _check_head(folder, trainer, carryover)
        care = _of_extractor(Care() if before is None else before.care, boundary, extractor, another_extractor)
        preferences = kept_preferences(history) if preferences is None else preferences.checked()

        def advised(boundary):
            return None if carryover is None else \
                _advise(folder, before, trainer, boundary, forecaster, preferences, seed)

        spent = watch.spent
        advice, allowed = advised(boundary), None
        if plan.time_limit is not None:
            spent = watch.spent - spent
            allowed = _allowed(trainer, boundary, increment, history, watch, spent, seed)
            if allowed.given_up:
                # Its rows go before others come.
                boundary = None
                rows["most_rows"] = allowed.rows
                boundary = open_boundary(replace(plan, passes=allowed.passes), carryover, increment, seed=seed, **rows)
                advice = advised(boundary)
        candidates = _candidates(plan, advice, settings, retries)
        check = _Check(trainer, boundary, increment, advice, most_lost, most_lost_by_class, care)
        tries, ready, tried = [], {}, []
        if not dry_run and settings is None and advice is not None and len(advice.to_try) > 1:
            side_by_side = advice.to_try if allowed is None else \
                advice.to_try[:max(int(watch.left / allowed.seconds_planned), 1)]
            ready, tried = _side_by_side(trainer, boundary, side_by_side, preferences, watch, seed)
            candidates = list(ready)[:1 + retries]
        for candidate in () if dry_run else candidates:
            if tries and candidate not in ready and allowed is not None and watch.left < allowed.seconds_planned:
                if not watch.is_over():
                    tries[-1]["reasons"].append(f"{watch.left:.2g} s are left, too little for another try, which takes "
                                                f"{allowed.seconds_planned:.2g} s")
                break
            if candidate not in ready:
                ready |= _side_by_side(trainer, boundary, [candidate], preferences, watch, seed)[0]
            attempt, seconds = ready[candidate]
            told = check.judged(attempt, seconds)
            tries.append(told)
            closed = None if told["reasons"] else close_boundary(trainer, boundary, attempt, seed=seed)
            if watch.is_over():
                when = f"when training had ended, by {-watch.left:.2g} s"
                if attempt.stopped:
                    when = f"after {told['operations'] / max(told['operations_planned'], 1):.0%} of training"
                told["reasons"].insert(0, f"the time limit of {plan.time_limit:g} s was over {when}")
            if not told["reasons"]:
                carryover = replace(closed, plan=plan)
                break
        entry = {
            "number": history[-1]["number"] + 1 if history else 1,
            "time": datetime.now(UTC).isoformat(timespec="seconds"), "device": _identity(history),
            **_arrived(boundary, increment), "doubts": quick_doubts(increment, boundary.carryover, seed=seed),
            **_advised(advice), "preferences": preferences.as_dict(),
            "unfamiliar": _unfamiliar(advice, settings, tried), "overruled": overruled,
            **(tries[-1] if tries else {"settings": candidates[0].as_dict()}), "earlier_tries": tries[:-1],
            "kept": bool(tries) and not tries[-1]["reasons"],
            "limits": _limits(allowed, fits), "seconds": round(watch.spent, 4),
        }
        stored = not dry_run and carryover is not None
        generation = None
        if stored:
            care = care if entry["kept"] else before.care
            generation = folder.store(carryover, [*history, entry], care, in_place=not entry["kept"])
    status = None if dry_run else UpdateStatus.KEPT if entry["kept"] else UpdateStatus.ROLLED_BACK
    return UpdateReport(status, generation, entry, advice, carryover)


def _side_by_side(trainer, boundary, settings, preferences, watch, seed):
    """Train with several settings; return {settings: (attempt, seconds)} and what the history tells, the best first."""
    spent = watch.spent
    attempts = try_settings(trainer, boundary, settings, seed=seed, stop=watch.stop)
    seconds = (watch.spent - spent) / len(attempts)
    accuracy = check_accuracies(trainer, boundary, attempts, old_weight=preferences.old_weight)
    order = np.argsort(-accuracy, kind="stable")
    return ({settings[k]: (attempts[k], seconds) for k in order},
            [{"settings": settings[k].as_dict(), "check_accuracy": round(float(accuracy[k]), 4)} for k in order])


def _unfamiliar(advice, settings, tried):
    """What the history tells of a boundary unlike the records, if nobody overruled the advice."""
    if advice is None or advice.unfamiliar is None or settings is not None:
        return None
    return {"policy": advice.unfamiliar, "tried": tried}


def kept_preferences(history):
    """Return the `Preferences` that a device was last told, from its history; `InputError` if they are damaged."""
    told = [entry["preferences"] for entry in history if "preferences" in entry]
    return Preferences.from_dict("preferences in the history", told[-1]) if told else Preferences()


def _of_extractor(care, boundary, name, another):
    """Return the care with the extractor's name and sketch; features that look like another's are refused."""
    name = check_extractor_name(care.extractor, name, another=another)
    Z, y = sampled(boundary)
    if boundary.carryover is not None and not another and care.sketch is not None \
            and looks_foreign(care.sketch, boundary.carryover.summaries, Z, y):
        raise InputError("increment", "must hold features of the extractor that the device has learned with"
                         + (f", {care.extractor}" if care.extractor else ""),
                         "features of another spread, order or place",
                         "extract them with that one, or say --another-extractor if it is meant")
    first = boundary.carryover is None or another
    return replace(care, extractor=name, sketch=sketch_of(Z, y) if first else care.sketch)


def _identity(history):
    """The device's identity, a new one if its history has none."""
    return next((one["device"] for one in reversed(history) if "device" in one), None) or os.urandom(16).hex()


def _agreed_plan(plan, carryover, increment):
    if carryover is None:
        return plan
    if plan is not None and plan.without_limits() != carryover.plan.without_limits():
        raise InputError("plan", f"must stay as the first update fixed it, {carryover.plan}", plan, "leave it out")
    if increment.n_features != carryover.n_features:
        raise InputError("increment", f"must have {carryover.n_features} features as before", increment.n_features)
    return carryover.plan if plan is None else plan


def _allowed(trainer, boundary, increment, history, watch, advising, seed):
    """Return what a try may take, if advice, which took `advising` seconds, is taken once more."""
    speed, source = measured_speed(history), "updates"
    if speed is None:
        speed, source = calibrated_speed(trainer, boundary.plan, boundary.carryover, increment, seed=seed,
                                         clock=watch.clock), "calibration"
    return allowance(trainer, boundary, seconds=watch.left - advising, speed=speed, speed_from=source)


def _limits(allowed, fits):
    """Return what the history tells of the limits of an update."""
    if allowed is None and fits is None:
        return None
    return {"time": allowed and allowed.as_dict(), "memory": fits and fits.as_dict(),
            "given_up": [words for one in (allowed, fits) if one is not None for words in one.given_up]}


def _check_head(folder, trainer, carryover):
    """Refuse a head that is another trainer's."""
    if carryover is None:
        return
    expected, received = (1, len(carryover.classes)), "one that it cannot score with"
    try:
        received = np.shape(trainer.class_scores(carryover.head, np.zeros((1, carryover.n_features), np.float32)))
    except Exception:  # Whatever a trainer makes of arrays that are not its own.
        pass
    if received != expected:
        raise InputError(folder.path, f"must hold a head that {type(trainer).__name__} scores a row with, {expected}",
                         received, "use the trainer of the first update")


def _advise(folder, before, trainer, boundary, forecaster, preferences, seed):
    method = boundary.plan.method
    if forecaster is None and before.care.pin is None and not isinstance(trainer, HeadTrainer):
        raise InputError("forecaster", "must be given with a trainer of one's own", "none",
                         "gather records with that trainer and fit a forecaster on them")
    forecaster = forecaster_for(folder, before, given=forecaster)
    if forecaster.method != method:
        raise InputError("forecaster", f"must be one for {method}, the method of the plan", forecaster.method)
    descriptors = describe(trainer, boundary, seed=seed)
    return advise_settings(forecaster, descriptors, SettingsBox(method, boundary.most_kept),
                           before=_last_descriptors(before.history), **preferences.as_dict())


def _last_descriptors(history):
    """Descriptors at the last boundary, None where there are none."""
    told = [entry["descriptors"] for entry in history if entry.get("descriptors")]
    return {name: np.nan if value is None else value for name, value in told[-1].items()} if told else None


def _overruled(settings, by, because):
    """Return who overrules the advice and why, None if it stands."""
    if (by is None) != (because is None):
        raise InputError("by" if by is None else "because", "must say who overrules the advice, and why", "none")
    if settings is None:
        if by is not None:
            raise InputError("settings", "must be given where somebody overrules the advice", "none")
        return None
    for name, text in (("by", by), ("because", because)):
        if text is not None and (not isinstance(text, str) or not text.strip() or len(text) > LONGEST_TEXT):
            raise InputError(name, f"must be a text of 1 to {LONGEST_TEXT} characters", repr(text))
    return {"by": by, "because": because}


def _candidates(plan, advice, settings, retries):
    """Settings to try, in order."""
    opening = opening_settings(plan)
    if isinstance(settings, dict):
        return [completed(settings, opening if advice is None else advice.settings, plan.method)]
    if settings is not None:
        return [settings.checked(plan.method)]
    if advice is not None:
        return advice.ranked[:1 + retries]
    return [replace(opening, learning_rate=opening.learning_rate * SLOWER**k) for k in range(1 + retries)]


class _Check:
    """Judges attempts at a boundary by the rules of `update`."""

    def __init__(self, trainer, boundary, increment, advice, most_lost, most_lost_by_class, care):
        labels, count = np.unique(increment.y, return_counts=True)
        self.arrived = dict(zip(labels.tolist(), count.tolist()))
        self.trainer, self.boundary, self.advice = trainer, boundary, advice
        self.most_lost, self.most_lost_by_class = most_lost, most_lost_by_class
        self.new = np.arange(boundary.n_old, boundary.n_classes) if boundary.n_old < boundary.n_classes \
            else boundary.arrived
        self.rows = _CheckedRows("check rows", trainer, boundary, *_rows_of(boundary.check_set()))
        self.acceptance = _CheckedRows("acceptance rows", trainer, boundary, *_acceptance_rows(boundary, care))
        self.floors = {code: care.floors[label] for code, label in enumerate(boundary.classes.tolist())
                       if label in care.floors}

    def judged(self, attempt, seconds):
        """Return what the history tells of an attempt that took so many seconds to train."""
        after, accepted = (rows.accuracies(attempt.head) for rows in (self.rows, self.acceptance))
        achieved = self._achieved(self.rows, after)
        expected = None
        if self.advice is not None:
            forecast = self.advice.forecaster.at(self.advice.descriptors).expected([attempt.settings])
            expected = {name: one.at(0).as_dict() for name, one in forecast.items()}
        return {"settings": attempt.settings.as_dict(), "expected": expected, "diverged": attempt.diverged,
                "stopped": attempt.stopped, "achieved": achieved,
                "acceptance": self._achieved(self.acceptance, accepted) if len(self.acceptance) else None,
                "by_class": self._by_class(after), "operations": attempt.operations,
                "operations_planned": self.trainer.operations_of(Job(self.boundary, attempt.settings)),
                "training_seconds": round(seconds, 6),
                "reasons": list(self._reasons(attempt, after, accepted, achieved, expected))}

    def _achieved(self, rows, after):
        return {"old": _mean(after[:self.boundary.n_old]), "new": _mean(after[self.new]), "all": _mean(after),
                "old_before": _mean(rows.before), "rows": len(rows)}

    def _by_class(self, after):
        boundary = self.boundary
        before = np.concatenate([self.rows.before, np.full(boundary.n_classes - boundary.n_old, np.nan)])
        labels = boundary.classes.tolist()
        return {"class": labels, "arrived": [self.arrived.get(label, 0) for label in labels],
                "check_rows": self.rows.count.tolist(), "before": _rounded(before), "after": _rounded(after)}

    def _reasons(self, attempt, after, accepted, achieved, expected):
        """Yield why the attempt is not to be kept."""
        if attempt.diverged:
            yield "training diverged"
        if attempt.diverged or attempt.stopped:
            return
        yield from self._losses(self.rows, after)
        yield from self._losses(self.acceptance, accepted)
        yield from self._broken_floors(after, accepted)
        if expected is not None and achieved["all"] is not None:
            low, count = expected["all"]["low"], self.rows.count[self.rows.count > 0]
            noise = NOISE_DEVIATIONS * np.sqrt(low * (1 - low) * (1 / count).sum()) / len(count)
            if achieved["all"] < low - noise:
                yield (f"accuracy over all classes is {achieved['all']:.2f} on {len(self.rows)} check rows, below the "
                       f"forecast's low end {low:.2f} by more than the noise of so few rows, {noise:.2f}")

    def _losses(self, rows, after):
        lost = rows.before - after[:self.boundary.n_old]
        count = rows.count[:self.boundary.n_old]
        mean = _mean(lost)
        if mean is not None and mean > self.most_lost:
            yield (f"accuracy on old classes fell by {mean:.2f} on average over {count.sum()} {rows.name}, "
                   f"more than {self.most_lost:.2f}")
        for code in np.flatnonzero((count >= FEWEST_ROWS_OF_CLASS) & (lost > self.most_lost_by_class)):
            yield (f"accuracy on class {self.boundary.classes[code]} fell by {lost[code]:.2f} over {count[code]} "
                   f"{rows.name}, more than {self.most_lost_by_class:.2f}")

    def _broken_floors(self, after, accepted):
        n_old = self.boundary.n_old
        for code, floor in self.floors.items():
            count = int(self.rows.count[code] + self.acceptance.count[code])
            if not count:
                continue
            now = self._pooled(code, after, accepted)
            before = self._pooled(code, self.rows.before, self.acceptance.before) if code < n_old else np.inf
            if now < floor and now < before:
                yield (f"accuracy on class {self.boundary.classes[code]} is {now:.2f} over {count} rows, "
                       f"below its floor {floor:.2f}")

    def _pooled(self, code, on_check_rows, on_acceptance_rows):
        """Accuracy on a class over both kinds of rows."""
        count = np.array([self.rows.count[code], self.acceptance.count[code]])
        return np.nan_to_num([on_check_rows[code], on_acceptance_rows[code]]) @ count / count.sum()


class _CheckedRows:
    """Rows that attempts at a boundary are checked on, and the old head's accuracy on them."""

    def __init__(self, name, trainer, boundary, Z, y):
        self.name, self.trainer, self.Z, self.y = name, trainer, Z, y
        self.count = np.bincount(y, minlength=boundary.n_classes)
        n_old = boundary.n_old
        self.before = np.empty(0) if boundary.carryover is None else self.accuracies(boundary.carryover.head)[:n_old]

    def __len__(self):
        return len(self.y)

    def accuracies(self, head):
        """Accuracy on the rows of each class."""
        return accuracies(self.trainer, head, self.Z, self.y, len(self.count))


def _rows_of(exemplars):
    return exemplars.Z, exemplars.y


def _acceptance_rows(boundary, care):
    """Standardized acceptance rows of the classes known at a boundary, and their codes."""
    if care.acceptance is None:
        return np.empty((0, boundary.n_features), np.float32), np.empty(0, np.int64)
    place = {label: code for code, label in enumerate(boundary.classes.tolist())}
    codes = np.array([place.get(label, -1) for label in care.acceptance.y.tolist()], np.int64)
    return standardize(care.acceptance.X[codes >= 0], boundary.center, boundary.scale), codes[codes >= 0]


def _mean(values):
    """Mean of the known values as a float, None if there is none."""
    known = values[~np.isnan(values)]
    return float(known.mean()) if len(known) else None


def _rounded(values):
    """Accuracies as a list of floats in four digits, None where unknown."""
    return [None if np.isnan(value) else round(float(value), 4) for value in values]


def _arrived(boundary, increment):
    again = boundary.arrived[boundary.arrived < boundary.n_old]
    return {"rows": len(increment), "classes_old": boundary.n_old, "classes_again": boundary.classes[again].tolist(),
            "classes_new": boundary.classes[boundary.n_old:].tolist()}


def _advised(advice):
    if advice is None:
        return {"descriptors": None, "advice": None, "forecaster": None, "forecaster_version": None}
    told = advice.as_dict()
    shortened = {name: told[name] for name in ("settings", "expected", "divergence", "familiarity")}
    return {"descriptors": told["descriptors"], "forecaster": told["forecaster"],
            "forecaster_version": advice.forecaster.version,
            "advice": {**shortened, "reasons": [str(reason) for reason in advice.reasons]}}
