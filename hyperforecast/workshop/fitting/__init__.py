"""Fitting forecasters from records. Read dataset, models, constants, fit, in this order."""

from hyperforecast.workshop.fitting.constants import constant_outcome, fit_constants
from hyperforecast.workshop.fitting.dataset import Dataset, load_dataset
from hyperforecast.workshop.fitting.fit import HeldOut, SourceFigures, fit_forecaster, hold_out

__all__ = ["Dataset", "HeldOut", "SourceFigures", "constant_outcome", "fit_constants", "fit_forecaster", "hold_out",
           "load_dataset"]
