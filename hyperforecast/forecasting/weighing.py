"""What to expect from settings of one's own: beside the advice, along each setting, and over the good region."""

from dataclasses import dataclass, replace

import numpy as np

from hyperforecast.forecasting.choice import DIVERGENCE_PRICE
from hyperforecast.forecasting.forecaster import RANGES, Expected
from hyperforecast.settings import KEPT_PER_CLASS

# Settings within this of the best make the good region: the ridge.
RIDGE = 0.02
# Settings more likely to diverge than this are marked.
RISKY = 0.1
# Values along a setting, and in each direction of the picture of two.
ALONG, ACROSS = 33, 25


@dataclass(frozen=True)
class Outlook:
    """What to expect of n settings at one boundary.

    Attributes
    ----------
    settings : list of Settings
        n of them.
    old, new, all : Expected
        Accuracies (n,) with 90% intervals, as those of the advice.
    divergence : ndarray of shape (n,)
        Probability that training diverges.
    behind : ndarray of shape (n,)
        How much accuracy on all classes each is expected to lose against the advised settings; below 0 it wins. From
        the model that orders settings, which tells differences better than differences of `all` do.
    """

    settings: list
    old: Expected
    new: Expected
    all: Expected
    divergence: np.ndarray
    behind: np.ndarray

    def as_dicts(self):
        """Return a JSON-able dict for each of the settings."""
        return [{"settings": one.as_dict(), "expected": {name: getattr(self, name).at(n).as_dict() for name in RANGES},
                 "divergence": float(self.divergence[n]), "behind": float(self.behind[n])}
                for n, one in enumerate(self.settings)]


@dataclass(frozen=True)
class Ridge:
    """The plane of learning rate and regularization, the other settings as advised.

    Attributes
    ----------
    learning_rates, regularizations : ndarrays of shape (n,) and (m,)
    behind : ndarray of shape (m, n)
        How much each is expected to lose against the best of the plane: accuracy on all classes, and the price of
        perhaps diverging that advice reckons with.
    divergence : ndarray of shape (m, n)
        Probability that training diverges.
    """

    learning_rates: np.ndarray
    regularizations: np.ndarray
    behind: np.ndarray
    divergence: np.ndarray

    @property
    def good(self):
        """Where the ridge is, (m, n) booleans: within `RIDGE` of the best."""
        return self.behind <= RIDGE

    def spans(self):
        """Return {"learning_rate": (low, high), "regularization": (low, high)} of the good region."""
        rates, strengths = self.learning_rates[self.good.any(axis=0)], self.regularizations[self.good.any(axis=1)]
        return {"learning_rate": (float(rates.min()), float(rates.max())),
                "regularization": (float(strengths.min()), float(strengths.max()))}


def outlook(advice, settings):
    """Return the `Outlook` of a list of `Settings` at the boundary of an `Advice`."""
    forecast = advice.forecaster.at(advice.descriptors)
    shortfall = forecast.shortfall([advice.settings, *settings])
    return Outlook(settings, **forecast.expected(settings), divergence=forecast.divergence(settings),
                   behind=shortfall[0] - shortfall[1:])


def along(advice, name, *, around=None):
    """Return the `Outlook` of values of the setting `name` over its range, the others as in `around` (the advised)."""
    around = advice.settings if around is None else around
    if name == "kept_per_class":
        values = np.unique(np.round(np.geomspace(KEPT_PER_CLASS[0], advice.box.most_kept, ALONG)).astype(int)).tolist()
    else:
        values = _values(advice, name, ALONG)
    return outlook(advice, [replace(around, **{name: value}) for value in values])


def ridge(advice):
    """Return the `Ridge` at the boundary of an `Advice`."""
    rates, strengths = (_values(advice, name, ACROSS) for name in ("learning_rate", "regularization"))
    shape = len(strengths), len(rates)
    forecast = advice.forecaster.at(advice.descriptors)
    plane = [replace(advice.settings, learning_rate=rate, regularization=strength)
             for strength in strengths for rate in rates]
    shortfall, divergence = forecast.shortfall(plane).reshape(shape), forecast.divergence(plane).reshape(shape)
    value = shortfall - DIVERGENCE_PRICE * divergence
    return Ridge(np.array(rates), np.array(strengths), value.max() - value, divergence)


def _values(advice, name, count):
    """Values of a setting over its whole range, evenly on a logarithmic scale."""
    place = advice.box.names.index(name)
    points = np.zeros((count, advice.box.n_dimensions))
    points[:, place] = np.linspace(0, 1, count)
    return [getattr(one, name) for one in advice.box.from_unit(points)]
