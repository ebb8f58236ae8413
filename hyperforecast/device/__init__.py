"""What runs where the classifier works: the device folder, the update cycle, and what a person does between updates.

Read status, care, folder, cycle, use, classes.
"""

from hyperforecast.device.care import Care
from hyperforecast.device.classes import (
    ClassStatus, Erasure, class_table, erase, merge, rename, retire, set_floor,
)
from hyperforecast.device.cycle import UpdateReport, update
from hyperforecast.device.folder import DeviceFolder, Generation, carryover_bundle, carryover_from
from hyperforecast.device.status import FolderBusy, FolderDamaged, FolderNotWritable, UpdateStatus
from hyperforecast.device.use import (
    Evaluation, Prediction, against_forecast, evaluate, keep_acceptance, predict, record_outcome, roll_back,
)

__all__ = [
    "Care", "ClassStatus", "DeviceFolder", "Erasure", "Evaluation", "FolderBusy", "FolderDamaged", "FolderNotWritable",
    "Generation", "Prediction", "UpdateReport", "UpdateStatus", "against_forecast", "carryover_bundle",
    "carryover_from", "class_table", "erase", "evaluate", "keep_acceptance", "merge", "predict", "record_outcome",
    "rename", "retire", "roll_back", "set_floor", "update",
]
