"""The limits of one update: what fits into its time and its working memory, and what is given up for them.

Time: passes are planned before training, from counted operations and a speed measured on this device; if not even one
pass over all rows fits, one pass over some of them. Whatever takes longer all the same is stopped, and rolled back.

Working memory: the arrays that the built-in trainer makes are counted before anything is opened. If they do not fit
while the standardized rows are held, these are made anew from the increment whenever they are needed, which gives up
nothing but time; if that does not fit, fewer rows are trained on.
"""

from dataclasses import asdict, dataclass, replace

import numpy as np

from hyperforecast.checks import InputError
from hyperforecast.describing.view import MOST_ROWS as SAMPLED_ROWS
from hyperforecast.forecasting import opening_settings
from hyperforecast.increments import Increment, check_labels_kind
from hyperforecast.learning import Job, open_boundary, try_settings
from hyperforecast.learning.boundary import CANDIDATE_BYTES, is_held
from hyperforecast.rows import CHUNK_BYTES, SUMMED_BYTES

# Share of the time left that training is planned to fill; checks, the choice of exemplars and chance take the rest.
SHARE_TRAINED = 0.7
# Tries, the latest ones, that the speed is measured on.
LATEST_TRIES = 5
# What is trained on, twice, to measure the speed where no update has told it yet.
CALIBRATION_ROWS, CALIBRATION_PASSES = 512, 4


# What advice takes, whatever the increment: forecaster, candidates, sampled rows but for their features.
ADVICE_BYTES = 16 * 2**20
# Whole numbers, copies and masks of each row while a boundary is opened, and while it is trained on.
OPENING_ROW_BYTES, TRAINING_ROW_BYTES = 64, 48
# For all that is not counted.
SPARE = 1.05


class Stopwatch:
    """The time of one update.

    Parameters
    ----------
    clock : callable
        Seconds, from anywhere.
    limit : float or None
        Seconds that the update may take.
    started : float
        What the clock said when it began.
    """

    def __init__(self, clock, limit, started):
        self.clock, self.limit, self.started = clock, limit, started

    @property
    def spent(self):
        """Seconds since the update began."""
        return self.clock() - self.started

    @property
    def left(self):
        """Seconds until the limit; infinite without one."""
        return np.inf if self.limit is None else self.limit - self.spent

    def is_over(self):
        """Whether the limit is passed."""
        return self.left < 0

    @property
    def stop(self):
        """What a `Job` asks; None without a limit."""
        return None if self.limit is None else self.is_over


@dataclass(frozen=True)
class Allowance:
    """What one try may take.

    Attributes
    ----------
    passes, rows : int
        Passes, and new rows that are trained on.
    operations_planned, seconds_planned : float
        Of one try, at most, in the trainer's count.
    speed : float
        Operations a second.
    speed_from : str
        What the speed was measured in: "updates", earlier ones, or "calibration".
    given_up : tuple of str
        In words.
    """

    passes: int
    rows: int
    operations_planned: float
    seconds_planned: float
    speed: float
    speed_from: str
    given_up: tuple = ()

    def as_dict(self):
        """Return a JSON-able dict."""
        return {**asdict(self), "given_up": list(self.given_up)}


def measured_speed(history):
    """Return the operations a second of the latest tries that went to their end, None if there are none."""
    tries = [one for entry in history for one in (*entry["earlier_tries"], entry)
             if one.get("training_seconds", 0) > 0 and not one["stopped"] and not one["diverged"]]
    tries = tries[-LATEST_TRIES:]
    return sum(one["operations_planned"] for one in tries) / sum(one["training_seconds"] for one in tries) \
        if tries else None


def calibrated_speed(trainer, plan, carryover, increment, *, seed, clock):
    """Return the operations a second of a short training on rows of an increment, nothing of which is kept."""
    rows = np.unique(np.linspace(0, len(increment) - 1, CALIBRATION_ROWS).astype(np.int64))
    boundary = open_boundary(replace(plan, passes=CALIBRATION_PASSES), carryover,
                             Increment(np.asarray(increment.X[rows]), increment.y[rows]), seed=seed)
    settings = opening_settings(plan)
    # The first time pays for what is done only once.
    for _ in range(2):
        started = clock()
        try_settings(trainer, boundary, [settings], seed=seed)
        seconds = clock() - started
    return trainer.operations_of(Job(boundary, settings)) / max(seconds, 1e-9)


def allowance(trainer, boundary, *, seconds, speed, speed_from):
    """Return the `Allowance` of a try at a boundary: as many passes of its plan as `seconds` hold.

    Raises
    ------
    InputError
        If one pass does not even fit over as many rows as a minibatch has, or as there are classes in the increment.
    """
    plan, n_rows = boundary.plan, len(boundary.y)
    kept = boundary.most_kept if plan.rehearses else None
    # Most exemplars: the advice that says how many will be for these passes.
    once = Job(replace(boundary, plan=replace(plan, passes=1)), replace(opening_settings(plan), kept_per_class=kept))
    operations = trainer.operations_of(once)
    passes = SHARE_TRAINED * max(seconds, 0) * speed / operations
    if passes >= 1:
        planned = min(plan.passes, int(passes))
        share, rows = planned, n_rows
    else:
        others = len(once.exemplars)
        planned, rows = 1, int(passes * (n_rows + others)) - others
        fewest = min(max(plan.batch_size, len(boundary.arrived)), n_rows)
        share = (max(rows, fewest) + others) / (n_rows + others)
        if rows < fewest:
            needed = share * operations / speed / SHARE_TRAINED
            raise InputError("time_limit", f"must leave about {needed:.2g} s for one pass over {fewest} rows and "
                             f"{others} exemplars", f"{plan.time_limit:g} s, of which {max(seconds, 0):.2g} s are left "
                             "for training", "raise it")
    given_up = []
    if planned < plan.passes:
        given_up.append(f"{planned} of {plan.passes} passes, to keep the time limit of {plan.time_limit:g} s")
    if rows < n_rows:
        given_up.append(f"trained on {rows} of {n_rows} rows, to keep the time limit of {plan.time_limit:g} s")
    return Allowance(planned, rows, share * operations, share * operations / speed, speed, speed_from, tuple(given_up))


@dataclass(frozen=True)
class Room:
    """What fits into the working memory.

    Attributes
    ----------
    held : bool
        Whether the standardized rows are held, or made whenever they are needed.
    rows : int
        New rows to train on.
    bytes_planned : int
        Most bytes at once.
    given_up : tuple of str
        In words.
    """

    held: bool
    rows: int
    bytes_planned: int
    given_up: tuple = ()

    def as_dict(self):
        """Return a JSON-able dict."""
        return {**asdict(self), "given_up": list(self.given_up)}


def room(plan, carryover, increment):
    """Return the `Room` of an increment under a plan's working memory.

    Raises
    ------
    InputError
        If not even as many rows fit as a minibatch has, or as there are classes in the increment.
    """
    if carryover is not None:
        check_labels_kind(increment.y, carryover.classes)
    labels, counts = np.unique(increment.y, return_counts=True)
    n_rows, limit = len(increment), plan.working_bytes
    n_old = 0 if carryover is None else len(carryover.classes)
    n_classes = n_old + len(labels) - (0 if carryover is None else int(np.isin(labels, carryover.classes).sum()))

    def needed(rows, held):
        return working_bytes(plan, carryover, increment, n_old=n_old, n_classes=n_classes, rows=rows, held=held,
                             largest_class=-(-int(counts.max()) * rows // n_rows))

    held = is_held(increment.X)
    if needed(n_rows, held) <= limit:
        return Room(held, n_rows, needed(n_rows, held))
    words = ("standardized rows are made whenever they are needed, not held",) if held else ()
    fewest = rows = min(max(plan.batch_size, len(labels)), n_rows)
    if needed(fewest, False) > limit:
        raise InputError("working_memory", f"must hold about {needed(fewest, False) / 1e6:.1f} MB to train on {fewest} "
                         f"rows of this increment of {n_rows}", plan.working_memory, "raise it")
    if needed(n_rows, False) > limit:
        # The most rows that fit, by halving.
        most = n_rows
        while most - rows > 1:
            middle = (rows + most) // 2
            rows, most = (middle, most) if needed(middle, False) <= limit else (rows, middle)
        words += (f"trained on at most {rows} of {n_rows} rows",)
    else:
        rows = n_rows
    return Room(False, rows, needed(rows, False),
                tuple(f"{one}, to keep the working memory of {plan.working_memory}" for one in words))


def working_bytes(plan, carryover, increment, *, n_old, n_classes, rows, held, largest_class):
    """Return the most bytes that an update holds at once, from the sizes of its arrays.

    Parameters
    ----------
    plan : Plan
    carryover : Carryover or None
    increment : Increment
    n_old, n_classes : int
        Classes before, and with the increment.
    rows : int
        New rows to train on.
    held : bool
        Whether the standardized rows are held.
    largest_class : int
        Rows to train on of the class that has most.
    """
    n_features, arrived = increment.n_features, len(increment)
    features = 4 * n_features
    width = plan.hidden_units or n_features
    ewc, icarl = plan.method == "ewc", plan.method == "icarl"
    old_rows = 0 if carryover is None else len(carryover.exemplars)
    check_rows = 0 if carryover is None else len(carryover.check_rows)
    parameters = 4 * (n_features * plan.hidden_units + width * n_classes + plan.hidden_units + n_classes)
    # A piece of standardized rows is read, converted, shifted and clipped; never more than all of them.
    piece = min(CHUNK_BYTES, rows * features)
    candidates = rows if held else min(rows, max(CANDIDATE_BYTES // features, 160 * n_classes))
    in_class = largest_class if held else min(largest_class, candidates)

    always = (increment.y.nbytes + (increment.X.nbytes if isinstance(increment.X, np.ndarray) and not isinstance(
        increment.X, np.memmap) else 0) + 2 * (old_rows + check_rows + 8 * n_classes) * (features + 16)
        + (4 if ewc else 2) * parameters + 4 * n_classes * features + 16 * rows)
    standardized = rows * features if held else 0
    opening = OPENING_ROW_BYTES * arrived + (max(2 * arrived if carryover is None else 0, 2 * rows) * features if held
                                             else 4 * SUMMED_BYTES)
    advice = (0 if carryover is None else ADVICE_BYTES) + 8 * min(rows, SAMPLED_ROWS) * features
    pool = rows + old_rows
    # What the old head makes of a piece: hidden units, logits, and their softmax on the way.
    scored = (pool if held else piece // features) * 4 * (plan.hidden_units + 3 * n_old)
    training = (TRAINING_ROW_BYTES * pool + (pool * features if held else 4 * piece) + 6 * parameters
                + 4 * plan.batch_size * (n_features + 2 * width + n_classes)
                + (0 if ewc or not n_old else 4 * pool * n_old + scored))
    chosen = 0 if not plan.rehearses else (
        candidates * features * (not held) + candidates * 4 * width * (4 if icarl else 2) + 3 * in_class * 4 * width)
    summed = (largest_class if held else piece // features) * 5 * features + 4 * n_classes * features
    importance = 0 if not ewc else (
        (rows if held else piece // features) * 4 * (n_features + 5 * plan.hidden_units + 4 * n_classes) + 3 * parameters)
    closing = max(chosen, 0 if held else 3 * piece, (0 if held else piece) + max(summed, importance))
    return int(SPARE * (always + max(opening, standardized + max(advice, training, closing))))
