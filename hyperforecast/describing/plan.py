"""Descriptors of the plan: what the user fixed."""

import numpy as np

from hyperforecast.describing.registry import descriptor


@descriptor("plan")
def hidden_units(view):
    """Width of the head's hidden layer, 0 for a linear head. Unit: units."""
    return view.boundary.plan.hidden_units


@descriptor("plan")
def passes(view):
    """Passes over the training rows. Unit: passes."""
    return view.boundary.plan.passes


@descriptor("plan")
def batch_size(view):
    """Rows of a minibatch. Unit: rows."""
    return view.boundary.plan.batch_size


@descriptor("plan")
def steps_without_exemplars(view):
    """Minibatches over the new rows alone, all passes. Unit: steps."""
    plan = view.boundary.plan
    return plan.passes * np.ceil(len(view.boundary.y) / plan.batch_size)
