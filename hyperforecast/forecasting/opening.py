"""Settings of the first increment, where nothing is there to forget and no advice is due."""

from hyperforecast.settings import Settings

LEARNING_RATE, REGULARIZATION, KEPT_PER_CLASS = 0.02, 1.0, 20


def opening_settings(plan):
    """Return the `Settings` of the first increment under a plan, the same for every policy."""
    return Settings(LEARNING_RATE, REGULARIZATION, KEPT_PER_CLASS if plan.rehearses else None)
