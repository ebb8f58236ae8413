"""Forecasts and advice with numpy alone.

Read trees, networks, intervals, familiarity, forecaster, preferences, choice, advice, weighing, waiting, in this order.
"""

from hyperforecast.forecasting.advice import Advice, advise_settings
from hyperforecast.forecasting.choice import DIVERGENCE_PRICE
from hyperforecast.forecasting.familiarity import Familiarity, FamiliarityVerdict
from hyperforecast.forecasting.forecaster import (
    NETWORK, RANGES, Constant, Expected, Forecaster, combined, forecaster_bytes, load_forecaster, save_forecaster,
    with_checksum,
)
from hyperforecast.forecasting.intervals import grouped_conformal_threshold
from hyperforecast.forecasting.networks import NETWORK_LAYERS, NetworkEnsemble, bend
from hyperforecast.forecasting.opening import opening_settings
from hyperforecast.forecasting.preferences import UNFAMILIAR, Preferences
from hyperforecast.forecasting.trees import TreeEnsemble
from hyperforecast.forecasting.waiting import (
    GAINED, LEAST_GAIN, NothingNew, Waiting, await_rows, nothing_new, retraining_signs,
)
from hyperforecast.forecasting.weighing import RIDGE, RISKY, Outlook, Ridge, along, outlook, ridge

__all__ = ["Advice", "Constant", "DIVERGENCE_PRICE", "Expected", "Familiarity", "FamiliarityVerdict", "Forecaster",
           "GAINED", "LEAST_GAIN", "NETWORK", "NETWORK_LAYERS", "NetworkEnsemble", "NothingNew", "Outlook", "Preferences",
           "RANGES", "RIDGE", "RISKY", "Ridge", "TreeEnsemble", "UNFAMILIAR", "Waiting", "advise_settings", "along", "await_rows",
           "bend", "combined", "forecaster_bytes", "grouped_conformal_threshold", "load_forecaster", "nothing_new",
           "opening_settings", "outlook", "retraining_signs", "ridge", "save_forecaster", "with_checksum"]
