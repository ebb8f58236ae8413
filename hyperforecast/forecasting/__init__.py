"""Forecasts and advice with numpy alone.

Read trees, intervals, familiarity, forecaster, preferences, advice, in this order.
"""

from hyperforecast.forecasting.advice import DIVERGENCE_PRICE, Advice, Reason, advise_settings, explain
from hyperforecast.forecasting.familiarity import Familiarity, FamiliarityVerdict
from hyperforecast.forecasting.forecaster import (
    RANGES, Constant, Expected, Forecaster, combined, forecaster_bytes, load_forecaster, save_forecaster, with_checksum,
)
from hyperforecast.forecasting.intervals import grouped_conformal_threshold
from hyperforecast.forecasting.opening import opening_settings
from hyperforecast.forecasting.preferences import Preferences
from hyperforecast.forecasting.trees import TreeEnsemble

__all__ = ["Advice", "Constant", "Expected", "Familiarity", "FamiliarityVerdict", "Forecaster", "DIVERGENCE_PRICE",
           "Preferences", "RANGES", "Reason", "TreeEnsemble", "advise_settings", "combined", "explain", "forecaster_bytes",
           "grouped_conformal_threshold", "load_forecaster", "opening_settings", "save_forecaster", "with_checksum"]
