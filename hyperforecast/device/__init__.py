"""What runs where the classifier works: the device folder, the update cycle, and what a person does between updates.

Read status, care, folder, pin, cycle, weighing, comparison, use, classes.
"""

from hyperforecast.device.care import Care, Pin
from hyperforecast.device.classes import (
    ClassStatus, Erasure, class_table, erase, merge, rename, retire, set_floor,
)
from hyperforecast.device.comparison import Comparison, compare_forecasters, mean_errors
from hyperforecast.device.cycle import UpdateReport, kept_preferences, update
from hyperforecast.device.folder import DeviceFolder, Generation, carryover_bundle, carryover_from
from hyperforecast.device.pin import (
    forecaster_for, pin_forecaster, pinned_path, unpin_forecaster, upgrade_forecaster, verify_pinned,
)
from hyperforecast.device.status import FolderBusy, FolderDamaged, FolderNotWritable, UpdateStatus
from hyperforecast.device.use import (
    Evaluation, Prediction, against_forecast, evaluate, keep_acceptance, predict, record_outcome, roll_back,
)
from hyperforecast.device.weighing import METHODS_CAVEAT, More, Standing, Weighing, weigh, when

__all__ = [
    "Care", "ClassStatus", "Comparison", "DeviceFolder", "Erasure", "Evaluation", "FolderBusy", "FolderDamaged",
    "FolderNotWritable", "Generation", "METHODS_CAVEAT", "More", "Pin", "Prediction", "Standing", "UpdateReport",
    "UpdateStatus", "Weighing", "against_forecast", "carryover_bundle", "carryover_from", "class_table", "compare_forecasters", "erase", "evaluate", "forecaster_for",
    "keep_acceptance", "kept_preferences", "mean_errors", "merge", "pin_forecaster", "pinned_path", "predict",
    "record_outcome", "rename", "retire", "roll_back", "set_floor", "unpin_forecaster", "update", "upgrade_forecaster",
    "verify_pinned", "weigh", "when",
]
