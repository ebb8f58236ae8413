"""What runs where the classifier works: the device folder and the update cycle. Read status, folder, cycle."""

from hyperforecast.device.cycle import UpdateReport, update
from hyperforecast.device.folder import DeviceFolder, Generation, carryover_bundle, carryover_from
from hyperforecast.device.status import FolderBusy, FolderDamaged, FolderNotWritable, UpdateStatus

__all__ = ["DeviceFolder", "FolderBusy", "FolderDamaged", "FolderNotWritable", "Generation", "UpdateReport",
           "UpdateStatus", "carryover_bundle", "carryover_from", "update"]
