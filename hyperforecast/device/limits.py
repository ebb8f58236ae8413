"""The limits of one update: what fits into the time, and what is given up for it.

Passes are planned before training, from counted operations and a speed measured on this device; if not even one pass
over all rows fits, one pass over some of them. Whatever takes longer all the same is stopped, and rolled back.
"""

from dataclasses import asdict, dataclass, replace

import numpy as np

from hyperforecast.checks import InputError
from hyperforecast.forecasting import opening_settings
from hyperforecast.increments import Increment
from hyperforecast.learning import Job, open_boundary, try_settings

# Share of the time left that training is planned to fill; checks, the choice of exemplars and chance take the rest.
SHARE_TRAINED = 0.7
# Tries, the latest ones, that the speed is measured on.
LATEST_TRIES = 5
# What is trained on, twice, to measure the speed where no update has told it yet.
CALIBRATION_ROWS, CALIBRATION_PASSES = 512, 4


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
