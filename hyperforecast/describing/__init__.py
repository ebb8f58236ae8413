"""Descriptors of a boundary: numbers known before any training, each with its formula, unit and source.

`describe` computes them all; `DESCRIPTORS` lists them by name, in the fixed order of the groups.
"""

# Registration fills the table in the order of these imports.
from hyperforecast.describing import data, drift, model, memory, plan  # isort: skip
from hyperforecast.describing.registry import DESCRIPTORS, GROUPS, Descriptor, describe

__all__ = ["DESCRIPTORS", "GROUPS", "Descriptor", "describe", "data", "drift", "model", "memory", "plan"]
