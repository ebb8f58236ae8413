"""Descriptors of a boundary: numbers known before any training, each with its formula, unit and source.

`describe` computes them all; `DESCRIPTORS` lists them by name, in the fixed order of the groups. `labels` doubts what
an increment says of itself.
"""

# Registration fills the table in the order of these imports.
from hyperforecast.describing import data, drift, model, memory, plan  # isort: skip
from hyperforecast.describing.labels import SuspiciousLabels, similar_names, suspicious_labels
from hyperforecast.describing.registry import DESCRIPTORS, GROUPS, Descriptor, describe

__all__ = ["DESCRIPTORS", "GROUPS", "Descriptor", "SuspiciousLabels", "data", "describe", "drift", "memory", "model",
           "plan", "similar_names", "suspicious_labels"]
