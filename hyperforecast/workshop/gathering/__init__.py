"""Gathering records. Read trajectories, records, gather, in this order."""

from hyperforecast.workshop.gathering.gather import Progress, gather
from hyperforecast.workshop.gathering.records import AttemptRecord, BoundaryRecord, RecordsFile, Trajectory
from hyperforecast.workshop.gathering.trajectories import derived_seed, opening_settings, run_trajectory

__all__ = ["AttemptRecord", "BoundaryRecord", "Progress", "RecordsFile", "Trajectory", "derived_seed", "gather",
           "opening_settings", "run_trajectory"]
