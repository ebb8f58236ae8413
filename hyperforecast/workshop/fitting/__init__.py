"""Fitting forecasters from records. Read dataset, models, constants, fit, rebuild, in this order."""

from hyperforecast.workshop.fitting.constants import constant_outcome, fit_constants
from hyperforecast.workshop.fitting.dataset import Dataset, load_dataset
from hyperforecast.workshop.fitting.fit import HeldOut, SourceFigures, fit_forecaster, hold_out
from hyperforecast.workshop.fitting.rebuild import Fit, Recipe, fit_records, read_recipe, rebuild

__all__ = ["Dataset", "Fit", "HeldOut", "Recipe", "SourceFigures", "constant_outcome", "fit_constants", "fit_forecaster",
           "fit_records", "hold_out", "load_dataset", "read_recipe", "rebuild"]
