"""Fitting a forecaster: models from records, judged and calibrated on sources they were not fitted on."""

from dataclasses import dataclass
from importlib import metadata

import joblib
import numpy as np

from hyperforecast.checks import check_whole
from hyperforecast.describing import DESCRIPTORS
from hyperforecast.forecasting import (
    DIVERGENCE_PRICE, NETWORK, RANGES, Familiarity, Forecaster, TreeEnsemble, grouped_conformal_threshold, with_checksum,
)
from hyperforecast.workshop.fitting.constants import constant_outcome, fit_constants
from hyperforecast.workshop.fitting.models import (
    SMALL, source_weights, train, train_direct, train_later, train_outcomes,
    train_shortfall_networks,
)

MISS_RATE = 0.1
# Attempts of each boundary whose errors calibrate the intervals: as many of the best forecast, where advice falls, as
# of the others, where settings of the user's own may fall.
CALIBRATED = 4
# Errors smaller than this do not make an interval narrower.
SMALLEST_ERROR = 0.005


@dataclass(frozen=True)
class SourceFigures:
    """What each way of choosing reached on the recorded attempts of one source that it was not fitted on.

    Mean accuracy on all classes over `boundaries` searched boundaries: of the constant (estimated), of the attempts
    that the outcome models and the direct regressors would choose, of the best attempt.
    """

    source: str
    boundaries: int
    constant: float
    outcome: float
    direct: float
    best: float

    def as_dict(self):
        """Return a JSON-able dict."""
        return dict(self.__dict__)


@dataclass(frozen=True)
class HeldOut:
    """Forecasts of the attempts of searched sources by models fitted without them; NaN for those of devices.

    Attributes
    ----------
    forecast : dict of str to ndarray of shape (N,)
        "old", "new", "all" and "shortfall".
    divergence : ndarray of shape (N,)
    direct : ndarray of shape (B, D)
    constant : ndarray of shape (B,)
        Estimated accuracy of the best constant.
    figures : list of SourceFigures
    """

    forecast: dict
    divergence: np.ndarray
    direct: np.ndarray
    constant: np.ndarray
    figures: list

    @property
    def objective(self):
        """What orders attempts, (N,): the forecast outcome from the best, less the price of perhaps diverging."""
        return self.forecast["shortfall"] - DIVERGENCE_PRICE * self.divergence

    def gap_closed(self, way):
        """Return sum(way - constant) / sum(best - constant) over sources, each counting alike."""
        gained = sum(getattr(one, way) - one.constant for one in self.figures)
        return gained / sum(one.best - one.constant for one in self.figures)


def hold_out(dataset, *, folds=None, seed, workers=1, progress=None):
    """Return `HeldOut`: leave searched sources out in turn, fit on all others, forecast their attempts.

    Parameters
    ----------
    dataset : Dataset
    folds : int, optional
        Groups of sources that are left out together; by default every one is left out alone.
    seed : int
    workers : int
        Processes of the joblib backend that is active, for folds in parallel.
    progress : callable, optional
        Called with the `SourceFigures` of each source that was left out.
    """
    sources = np.unique(dataset.sources[dataset.compared])
    folds = min(len(sources) if folds is None else check_whole("folds", folds, low=2), len(sources))
    n = len(dataset.all)
    forecast = {name: np.full(n, np.nan) for name in (*RANGES, "shortfall")}
    divergence, direct = np.full(n, np.nan), np.full((dataset.n_boundaries, dataset.points.shape[1]), np.nan)
    constant, figures = np.full(dataset.n_boundaries, np.nan), []
    held = HeldOut(forecast, divergence, direct, constant, figures)
    results = joblib.Parallel(n_jobs=workers, return_as="generator")(
        joblib.delayed(_forecast_without)(dataset, sources[k::folds], seed) for k in range(folds))
    for k, (told, diverges, settings, outcome) in enumerate(results):
        own = np.isin(dataset.sources, sources[k::folds])
        attempts = own[dataset.boundary]
        for name, values in told.items():
            forecast[name][attempts] = values
        divergence[attempts], direct[own], constant[own] = diverges, settings, outcome
        for source in sources[k::folds]:
            figures.append(_figures(dataset, source, held))
            if progress:
                progress(figures[-1])
    figures.sort(key=lambda one: one.source)
    return held


def _forecast_without(dataset, sources, seed):
    """Return forecasts by name and divergence of the attempts of some sources, direct settings and constant of their
    boundaries, by models fitted without them.
    """
    own = np.isin(dataset.sources, sources)
    attempts = np.flatnonzero(own[dataset.boundary])
    models = train_outcomes(dataset, ~own, seed=seed)
    inputs = dataset.inputs(attempts)
    forecast = {name: np.clip(models[name].predict(inputs, num_threads=1), 0, 1) for name in ("old", "new")}
    b = dataset.boundary[attempts]
    n_old, n_new = dataset.column("classes_old")[b], dataset.column("classes_new")[b]
    forecast["all"] = (n_old * forecast["old"] + n_new * forecast["new"]) / (n_old + n_new)
    networks = train_shortfall_networks(dataset, ~own, seed=seed)
    forecast["shortfall"] = (models["shortfall"].predict(inputs, num_threads=1) + networks.predict(inputs)) / 2
    described = dataset.descriptors[own]
    inputs_direct = np.hstack([described, np.full((len(described), dataset.coordinates.shape[1]), np.nan)])
    direct = np.stack([model.predict(inputs_direct, num_threads=1)
                       for model in train_direct(dataset, ~own, seed=seed).values()], axis=1)
    raw, scale_free, kind = fit_constants(dataset, ~own, seed=seed)
    constant = constant_outcome(dataset, own, raw if kind == "raw" else scale_free)
    return forecast, models["diverged"].predict(inputs, num_threads=1), direct, constant


def fit_forecaster(dataset, *, recipe, folds=None, seed=0, workers=1, progress=None):
    """Return a `Forecaster` fitted on all boundaries of a dataset.

    The way of choosing that does better on held-out sources ranks candidates; their errors calibrate the intervals.

    Parameters
    ----------
    dataset : Dataset
    recipe : dict
        What else should be told of its making.
    folds : int, optional
        Groups of sources that are left out together to judge and calibrate; by default every source alone.
    seed, workers : int
    progress : callable, optional
        Called with the `SourceFigures` of each held-out source.
    """
    held = hold_out(dataset, folds=folds, seed=seed, workers=workers, progress=progress)
    everything = np.ones(dataset.n_boundaries, bool)
    boosters = train_outcomes(dataset, everything, seed=seed)
    later = train_later(dataset, everything, seed=seed)
    # Where nothing comes later the present stands for it.
    boosters["later"] = boosters["shortfall"] if later is None else later
    ranking = "outcome" if held.gap_closed("outcome") >= held.gap_closed("direct") else "direct"
    if ranking == "direct":
        boosters.update(train_direct(dataset, everything, seed=seed))
    thresholds = {}
    for name in RANGES:
        boosters[f"spread_{name}"], thresholds[name] = _calibrate(dataset, held, name, seed=seed)
    raw, scale_free, kind = fit_constants(dataset, everything, seed=seed)
    names = tuple(DESCRIPTORS)
    gain = sum(booster.feature_importance("gain") for booster in (boosters["old"], boosters["new"]))
    order = np.argsort(-gain[:len(names)], kind="stable")
    sources, counts = np.unique(dataset.sources, return_counts=True)
    with np.errstate(all="ignore"):
        typical = np.array([np.nanmedian(column) if np.isfinite(column).any() else np.nan
                            for column in dataset.descriptors.T])
    forecaster = Forecaster(
        method=dataset.method, descriptor_names=names,
        models={**{name: TreeEnsemble.from_dump(booster.dump_model()) for name, booster in boosters.items()},
                NETWORK: train_shortfall_networks(dataset, everything, seed=seed)},
        ranking=ranking, thresholds=thresholds,
        familiarity=Familiarity.fit(dataset.descriptors, names, dataset.sources, seed=seed),
        raw_constant=raw, scale_free_constant=scale_free, constant_kind=kind, typical=typical,
        influential=tuple(names[place] for place in order[:20]),
        recipe={
            **recipe, "seed": seed, "folds": folds, "boundaries": {str(s): int(n) for s, n in zip(sources, counts)},
            "attempts": len(dataset.all), "held_out": [one.as_dict() for one in held.figures],
            "gap_closed": {way: round(held.gap_closed(way), 4) for way in ("outcome", "direct")},
            "versions": {package: metadata.version(package) for package in ("hyperforecast", "numpy", "lightgbm", "scikit-learn")},
        },
    )
    return with_checksum(forecaster)


def _figures(dataset, source, held):
    own = (dataset.sources == source) & dataset.compared
    rows = np.flatnonzero(own[dataset.boundary])
    b = dataset.boundary[rows]
    safe = held.objective[rows]
    distance = -np.linalg.norm(dataset.points[rows] - held.direct[b], axis=1)

    def reached(scores):
        order = np.lexsort((-scores, b))
        return float(dataset.all[rows[order[np.searchsorted(b[order], np.unique(b))]]].mean())

    return SourceFigures(str(source), int(own.sum()), float(held.constant[own].mean()), reached(safe),
                         reached(distance), reached(dataset.all[rows]))


def _calibrate(dataset, held, name, *, seed):
    """Return (Booster of the logarithm of the error, conformal threshold of error over that) for one outcome.

    Scores come from spread models that were fitted without their source. The threshold holds 1 - MISS_RATE of the
    weight of all m sources, which guarantees a new source m / (m + 1) of that; it does so for the attempts where advice
    falls and for others alike.
    """
    best, others = _calibrated(dataset, held, np.random.default_rng(seed))
    rows = np.concatenate([best, others])
    error = np.abs(getattr(dataset, name)[rows] - held.forecast[name][rows])
    target = np.log(np.maximum(error, SMALLEST_ERROR))
    inputs, sources = dataset.inputs(rows), dataset.sources[dataset.boundary[rows]]
    weights = source_weights(sources)

    def spread_of(mask):
        return train(inputs[mask], target[mask], weights[mask], size=SMALL, seed=seed)

    unique = np.unique(sources)
    scores = np.empty(len(rows))
    for source in unique:
        own = sources == source
        scores[own] = error[own] / np.exp(spread_of(~own).predict(inputs[own]))
    alpha = 1 - (1 - MISS_RATE) * len(unique) / (len(unique) + 1)
    threshold = max(grouped_conformal_threshold(scores[part], sources[part], alpha)
                    for part in (slice(len(best)), slice(len(best), None)))
    return spread_of(np.ones(len(rows), bool)), threshold


def _calibrated(dataset, held, rng):
    """Return places of attempts of held-out sources: the best forecast of each boundary, and as many of the others."""
    known = np.flatnonzero(~np.isnan(held.divergence))
    b = dataset.boundary[known]

    def first(order):
        rank = np.arange(len(order)) - np.searchsorted(b[order], b[order])
        return order[rank < CALIBRATED]

    best = first(np.lexsort((-held.objective[known], b)))
    others = np.lexsort((rng.random(len(known)), b))
    return known[best], known[first(others[~np.isin(others, best)])]
