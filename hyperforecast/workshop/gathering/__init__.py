"""Gathering records. Read trajectories, records, gather, merging, in this order."""

from hyperforecast.workshop.gathering.gather import Progress, gather
from hyperforecast.workshop.gathering.merging import Merged, merge
from hyperforecast.workshop.gathering.records import AttemptRecord, BoundaryRecord, RecordsFile, Trajectory
from hyperforecast.workshop.gathering.trajectories import derived_seed, opening_settings, run_trajectory, trajectory_key

__all__ = ["AttemptRecord", "BoundaryRecord", "Merged", "Progress", "RecordsFile", "Trajectory", "derived_seed", "gather",
           "merge", "opening_settings", "run_trajectory"]
