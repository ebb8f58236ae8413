"""What runs where the classifier works: the device folder, the update cycle, and what a person does between updates.

Read status, care, folder, pin, cycle, weighing, comparison, use, classes.
"""

import importlib

# Each module is imported when one of its names is asked for: advice needs few of them, and must come at once.
_MODULES = {
    "adopt": ("Weights", "adopt_head", "read_weights"),
    "care": ("Care", "Pin", "step_in_words"),
    "classes": ("ClassStatus", "Erasure", "class_table", "erase", "merge", "rename", "retire", "set_floor"),
    "comparison": ("Comparison", "compare_forecasters", "mean_errors"),
    "cycle": ("UpdateReport", "kept_preferences", "update"),
    "folder": ("DeviceFolder", "Generation", "carryover_bundle", "carryover_from"),
    "pin": (
        "advisers", "forecaster_for", "pin_forecaster", "pinned_path", "unpin_forecaster", "upgrade_forecaster",
        "verify_pinned",
    ),
    "status": ("FolderBusy", "FolderDamaged", "FolderNotWritable", "UpdateStatus"),
    "use": (
        "Evaluation", "Prediction", "against_forecast", "evaluate", "keep_acceptance", "predict",
        "record_outcome", "roll_back",
    ),
    "weighing": ("METHODS_CAVEAT", "More", "Standing", "Weighing", "weigh", "when"),
}
_DOORS = {name: f"hyperforecast.device.{module}" for module, names in _MODULES.items() for name in names}
__all__ = sorted(_DOORS)


def __getattr__(name):
    if name not in _DOORS:
        raise AttributeError(f"module {__name__!r} has no attribute {name!r}")
    return getattr(importlib.import_module(_DOORS[name]), name)


def __dir__():
    return sorted([*globals(), *__all__])
