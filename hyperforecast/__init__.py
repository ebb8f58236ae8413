"""hyperforecast advises the settings of class-incremental learning, without a trial run."""

import importlib

__version__ = "0.1.0"

_DOORS = {
    "GrowingClassifier": "hyperforecast.classifier",
    "advise": "hyperforecast.classifier",
    "Settings": "hyperforecast.settings",
    "load_forecaster": "hyperforecast.forecasting",
}
__all__ = sorted(_DOORS)


def __getattr__(name):
    if name not in _DOORS:
        raise AttributeError(f"module {__name__!r} has no attribute {name!r}")
    return getattr(importlib.import_module(_DOORS[name]), name)


def __dir__():
    return sorted([*globals(), *__all__])
