"""The slower search for one increment: what a device's advice could be improved to, given time."""

from dataclasses import dataclass

import numpy as np

from hyperforecast.checks import InputError
from hyperforecast.describing import describe
from hyperforecast.forecasting import advise_settings
from hyperforecast.learning import HeadTrainer, open_boundary
from hyperforecast.settings import SettingsBox
from hyperforecast.workshop.searching.boundary_search import BoundarySearch, class_codes
from hyperforecast.workshop.searching.search import run_search
from hyperforecast.workshop.searching.warm_starts import warm_starts_of


@dataclass(frozen=True)
class IncrementSearch:
    """A search that can begin: a boundary, the rows its attempts are scored on, and what a forecaster advises there.

    Attributes
    ----------
    search : BoundarySearch
    box : SettingsBox
    advice : Advice
    """

    search: BoundarySearch
    box: SettingsBox
    advice: object

    def warm_starts(self):
        """Return the forecaster's ranked settings with spreads, a list of `WarmStart`."""
        return warm_starts_of(self.advice)

    def run(self, *, strategy, attempts, warm, seed, on_progress=None):
        """Return the `SearchResult` of `run_search`; with `warm` it begins with the forecaster's ranked settings."""
        return run_search(self.search.evaluate, self.box, strategy=strategy, attempts=attempts, seed=seed,
                          warm_starts=self.advice.ranked if warm else (), on_progress=on_progress)


def prepare_search(carryover, increment, forecaster, *, selection=None, trainer=None, seed=0):
    """Return the `IncrementSearch` for an increment that meets a carryover; the device is left as it is.

    Parameters
    ----------
    carryover : Carryover
    increment : Increment
    forecaster : Forecaster
    selection : Increment, optional
        Rows to score attempts on, of classes that are old or in the increment. By default those that are held back
        from the increment and those that the device holds back from training.
    trainer : Trainer, optional
        The built-in one by default.
    seed : int

    Raises
    ------
    InputError
        If there is no row to score on, or one of an unknown class.
    """
    trainer = trainer or HeadTrainer()
    boundary = open_boundary(carryover.plan, carryover, increment, seed=seed)
    if selection is None:
        rows = boundary.check_set()
        Z, y = rows.Z, rows.y
    else:
        unknown = np.setdiff1d(selection.y, boundary.classes)
        if len(unknown):
            raise InputError("selection", "must hold classes that are old or in the increment", unknown[0])
        Z, y = carryover.standardized(selection.X), class_codes(boundary, selection.y)
    if not len(y):
        raise InputError("selection", "must be given where no rows are held back", "none", "name a file of labelled rows")
    box = SettingsBox(carryover.plan.method, boundary.most_kept)
    advice = advise_settings(forecaster, describe(trainer, boundary, seed=seed), box)
    return IncrementSearch(BoundarySearch(trainer, boundary, Z, y, seed=seed), box, advice)
