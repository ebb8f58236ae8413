"""A boundary as policies meet it: candidates from each proposer, and attempts that all policies share."""

import time
from dataclasses import dataclass
from functools import cached_property

from hyperforecast.describing import describe
from hyperforecast.forecasting import advise_settings
from hyperforecast.learning import Attempt, close_boundary, standardize
from hyperforecast.settings import SettingsBox
from hyperforecast.workshop.gathering import derived_seed
from hyperforecast.workshop.searching import BoundarySearch, Outcome, class_codes, run_search, uniform_draws

# Attempts trained side by side, and proposals that a search makes at once.
SIDE_BY_SIDE = 8
MOST_ATTEMPTS = 64


@dataclass(frozen=True)
class Trial:
    """An attempt with its outcome on selection rows, and its share of the CPU seconds of its batch."""

    attempt: Attempt
    outcome: Outcome
    seconds: float


@dataclass(frozen=True)
class Proposals:
    """Candidate settings, the most promising first or in order of proposal, and the CPU seconds of proposing them."""

    settings: list
    seconds: float


class Bench:
    """What policies may see of one boundary. Scoring rows never come here.

    The same settings are trained once, always with the same seed, whoever proposes them.

    Parameters
    ----------
    trainer : Trainer
    boundary : Boundary
    selection : Increment
        Selection rows of all classes seen.
    forecaster : Forecaster
    now_weight : float
        Of the advice (see `advise_settings`).
    seed : int
        Of training, of the search and of the draws.
    """

    def __init__(self, trainer, boundary, selection, forecaster, *, now_weight, seed):
        self.trainer, self.boundary, self.forecaster, self.now_weight = trainer, boundary, forecaster, now_weight
        self.seed = seed
        self.box = SettingsBox(boundary.plan.method, boundary.most_kept)
        self._search = search_on(trainer, boundary, selection, seed=seed)
        self._check = boundary.check_set()
        self._trials, self._carryovers, self._trying = {}, {}, 0.0

    def try_out(self, settings):
        """Return one `Trial` for each of a list of `Settings`; those not tried before are trained side by side."""
        fresh = [one for one in dict.fromkeys(settings) if one not in self._trials]
        for at in range(0, len(fresh), SIDE_BY_SIDE):
            batch = fresh[at:at + SIDE_BY_SIDE]
            started = time.process_time()
            self._search.evaluate(batch)
            spent = time.process_time() - started
            self._trying += spent
            made = zip(batch, self._search.attempts[-len(batch):], self._search.outcomes[-len(batch):])
            self._trials.update({one: Trial(*done, spent / len(batch)) for one, *done in made})
        return [self._trials[one] for one in settings]

    def judge(self, trial, rows):
        """Return a trial's accuracy over the classes of the rows, every class alike: "selection" or "check" rows."""
        if rows == "selection":
            return trial.outcome.all
        return self._search.outcome(trial.attempt, self._check.Z, self._check.y).all if len(self._check) else 0.0

    def close(self, attempt):
        """Return the `Carryover` after keeping an attempt, one object for equal settings."""
        if attempt.settings not in self._carryovers:
            self._carryovers[attempt.settings] = close_boundary(self.trainer, self.boundary, attempt, seed=self.seed)
        return self._carryovers[attempt.settings]

    @cached_property
    def described(self):
        """(descriptors, CPU seconds of computing them)."""
        started = time.process_time()
        descriptors = describe(self.trainer, self.boundary, seed=self.seed)
        return descriptors, time.process_time() - started

    @cached_property
    def advice(self):
        """(`Advice`, CPU seconds of descriptors and forecasts)."""
        descriptors, described_in = self.described
        started = time.process_time()
        advice = advise_settings(self.forecaster, descriptors, self.box, now_weight=self.now_weight)
        return advice, described_in + time.process_time() - started

    @cached_property
    def constant(self):
        """`Proposals` of the best constant; the descriptors that a scale-free one reads are not charged."""
        return Proposals([self.forecaster.constant_settings(self.described[0], self.box)], 0.0)

    @cached_property
    def advised(self):
        """`Proposals` of the forecaster, best first."""
        advice, seconds = self.advice
        return Proposals(advice.ranked, seconds)

    @cached_property
    def drawn(self):
        """`Proposals` of 64 uniform draws."""
        points = uniform_draws(MOST_ATTEMPTS, self.box.n_dimensions, seed=derived_seed(self.seed, "drawn"))
        return Proposals(self.box.from_unit(points), 0.0)

    @cached_property
    def searched(self):
        """`Proposals` of a TPE search of 64 attempts on selection rows, in order of proposal."""
        started, tried = time.process_time(), self._trying
        result = run_search(lambda settings: [trial.outcome.all for trial in self.try_out(settings)], self.box,
                            strategy="tpe", attempts=MOST_ATTEMPTS, batch=SIDE_BY_SIDE, seed=self.seed)
        return Proposals(result.settings, time.process_time() - started - (self._trying - tried))


def search_on(trainer, boundary, rows, *, seed):
    """Return a `BoundarySearch` whose outcomes are measured on an increment's rows."""
    return BoundarySearch(trainer, boundary, standardize(rows.X, boundary.center, boundary.scale),
                          class_codes(boundary, rows.y), seed=seed)
