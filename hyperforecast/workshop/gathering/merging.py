"""Histories of devices into a records file.

Every update becomes a trajectory of its own, of one boundary, and every try of it an attempt. Its key names the device,
the update's number and its content: an update that is there already stays as it is, whichever file brings it again, and
a copy of a device's folder that went another way is not taken for the device. The source is "device:" and the identity.
"""

from dataclasses import dataclass

import numpy as np

from hyperforecast.describing import DESCRIPTORS
from hyperforecast.settings import KEPT_PER_CLASS
from hyperforecast.workshop.gathering.records import AttemptRecord, BoundaryRecord, Trajectory

# Strategies of the attempts: settings that were advised, and that somebody gave instead.
ADVISED, OVERRULED = "update", "overruled"


@dataclass(frozen=True)
class Merged:
    """What became of a device's updates: how many came, were added, and cannot count as no check row told of them."""

    device: str
    method: str
    updates: int
    added: int
    without_outcome: int

    def as_dict(self):
        """Return a JSON-able dict."""
        return dict(self.__dict__)


def merge(records, history):
    """Add the updates of an `ExportedHistory` to a `RecordsFile`; return `Merged`.

    A try whose accuracy on old or on new classes is not known is left out; so is an update of which none is left.
    """
    trajectories = [_trajectory(history, one) for one in history.updates]
    usable = [one for one in trajectories if one.boundaries[0].attempts]
    stored = records.stored()
    new = {one.key: one for one in usable if one.key not in stored}
    for one in new.values():
        records.store(one)
    return Merged(history.device, history.plan.method, len(trajectories), len(new),
                  len(trajectories) - len(usable))


def _trajectory(history, update):
    source, plan = f"device:{history.device}", history.plan
    strategy = OVERRULED if update.overruled else ADVISED
    attempts = [AttemptRecord(one.settings, strategy, one.old, one.new, one.diverged, one.operations)
                for one in update.tries if one.old is not None and one.new is not None]
    descriptors = {name: update.descriptors.get(name, np.nan) for name in DESCRIPTORS}
    # The box of a method without exemplars does not depend on it.
    most_kept = descriptors["most_kept"]
    most_kept = KEPT_PER_CLASS[1] if np.isnan(most_kept) else int(np.clip(most_kept, *KEPT_PER_CLASS))
    boundary = BoundaryRecord(update.number, update.classes_old, update.classes_new, most_kept,
                              max(one.rows for one in update.tries), descriptors, attempts)
    return Trajectory(f"{source}|{update.number}|{update.content[:16]}", source, source, 0, plan.method, plan.as_dict(), 0.0,
                      [boundary])
