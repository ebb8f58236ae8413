"""The list of descriptors. Each is a function of a `BoundaryView` with a docstring: formula, unit, source."""

from dataclasses import dataclass

import numpy as np

from hyperforecast.describing.view import BoundaryView

GROUPS = ("data", "drift", "model", "memory", "plan")
DESCRIPTORS = {}


@dataclass(frozen=True)
class Descriptor:
    """A descriptor: its name, group, and the function that computes it from a view."""

    name: str
    group: str
    compute: object

    @property
    def explanation(self):
        """First line of its docstring."""
        return self.compute.__doc__.strip().splitlines()[0]


def descriptor(group):
    """Register the decorated function as a descriptor of `group`."""
    def register(function):
        DESCRIPTORS[function.__name__] = Descriptor(function.__name__, group, function)
        return function
    return register


def describe(trainer, boundary, *, seed=0):
    """Return the descriptors of a boundary as a dict of name to float, NaN where one cannot be had.

    Parameters
    ----------
    trainer : Trainer
    boundary : Boundary
    seed : int
        Draws the rows that costly descriptors look at.
    """
    view = BoundaryView(trainer, boundary, seed=seed)
    described = {}
    with np.errstate(all="ignore"):
        for name, one in DESCRIPTORS.items():
            value = float(one.compute(view))
            described[name] = value if np.isfinite(value) else np.nan
    return described
