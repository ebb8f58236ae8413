"""Fitting: what held-out figures may and may not know, the best constant, and a forecaster that repeats bit by bit."""

from dataclasses import replace

import joblib
import numpy as np
import pytest

from hyperforecast.checks import InputError
from hyperforecast.describing import DESCRIPTORS
from hyperforecast.forecasting import NETWORK, Constant
from hyperforecast.settings import COORDINATES, LEARNING_RATES, REGULARIZATIONS, Settings, SettingsBox, scale_free
from hyperforecast.workshop.fitting import (
    Dataset, constant_outcome, fit_constants, fit_forecaster, hold_out, load_dataset, models, networks,
)


@pytest.fixture(autouse=True)
def few_trees(monkeypatch):
    monkeypatch.setattr(models, "ROUNDS", 8)
    monkeypatch.setattr(models, "SMALL_ROUNDS", 5)
    monkeypatch.setattr(networks, "MOST_EPOCHS", 8)


@pytest.fixture(params=["wa", "ewc"])
def dataset(request, datasets):
    return datasets[request.param]


# Records as arrays.


def test_a_dataset_holds_every_attempt_of_the_records(records, dataset):
    boundaries = [(trajectory, boundary) for trajectory in records.trajectories(method=dataset.method)
                  for boundary in trajectory.boundaries]
    attempts = [attempt for _, boundary in boundaries for attempt in boundary.attempts]
    assert dataset.n_boundaries == len(boundaries) and len(dataset.all) == len(attempts)
    assert dataset.sources.tolist() == [trajectory.source for trajectory, _ in boundaries]
    assert dataset.trajectories.tolist() == [trajectory.key for trajectory, _ in boundaries]
    for n, attempt in enumerate(attempts):
        _, boundary = boundaries[dataset.boundary[n]]
        settings = attempt.settings
        n_old, n_new = boundary.classes_old, boundary.classes_new
        total = (n_old * attempt.accuracy_old + n_new * attempt.accuracy_new) / (n_old + n_new)
        assert (dataset.old[n], dataset.new[n], dataset.all[n]) == (attempt.accuracy_old, attempt.accuracy_new, total)
        later = [value for value in (attempt.after_one, attempt.after_two) if value is not None]
        assert np.isnan(dataset.after[n]) if not later else dataset.after[n] == pytest.approx(np.mean(later), rel=1e-12)
        assert SettingsBox(dataset.method, boundary.most_kept).from_unit(dataset.points[n:n + 1]) == [settings]
        np.testing.assert_allclose(np.exp(dataset.logs[n, :2]), [settings.learning_rate, settings.regularization])
        np.testing.assert_equal(dataset.coordinates[n], scale_free([settings], boundary.descriptors)[0])
    np.testing.assert_equal(dataset.descriptors, [[boundary.descriptors[name] for name in DESCRIPTORS]
                                                  for _, boundary in boundaries])


def test_models_read_descriptors_and_settings_and_nothing_else(dataset):
    """All that a model is shown is known before training: no outcome, source, stream or seed is among it."""
    inputs = dataset.inputs()
    assert inputs.shape == (len(dataset.all), len(DESCRIPTORS) + len(COORDINATES))
    outcomes = {name: np.zeros_like(getattr(dataset, name)) for name in ("old", "new", "all", "after", "diverged")}
    blind = replace(dataset, **outcomes, sources=np.full(dataset.n_boundaries, "x"),
                    trajectories=np.full(dataset.n_boundaries, "x"))
    np.testing.assert_equal(blind.inputs(), inputs)


def test_sources_can_be_left_out_but_two_must_remain(records):
    sources = ["synthetic_drifting", "synthetic_gaussian", "synthetic_rectified"]
    assert sorted(set(load_dataset(records, "wa", without=sources[:1]).sources)) == sources[1:]
    for without, left in ((sources[:2], "synthetic_rectified"), (sources, "none")):
        with pytest.raises(InputError, match=f"searched wa boundaries of at least two sources; received {left}; gather more"):
            load_dataset(records, "wa", without=without)
    with pytest.raises(InputError, match="must hold searched icarl boundaries of at least two sources; received none"):
        load_dataset(records, "icarl")


# Held-out sources.


@pytest.mark.parametrize("folds, poisoned_source, together", [
    (None, "synthetic_gaussian", ["synthetic_gaussian"]),
    (2, "synthetic_drifting", ["synthetic_drifting", "synthetic_rectified"])])
def test_the_outcomes_of_a_source_do_not_reach_its_own_forecasts(folds, poisoned_source, together, dataset):
    """A spy: poisoned outcomes of one source change nothing that was forecast for it, and much for the others.

    Nor for those that are held out together with it.
    """
    own = dataset.sources == poisoned_source
    rows = own[dataset.boundary]
    rng = np.random.default_rng(0)

    def poisoned(name):
        return np.where(rows, rng.permuted(1 - getattr(dataset, name)), getattr(dataset, name))

    poison = replace(dataset, old=poisoned("old"), new=poisoned("new"), all=poisoned("all"), after=poisoned("after"),
                     diverged=np.where(rows, ~dataset.diverged, dataset.diverged))
    held, spied = (hold_out(one, folds=folds, seed=0) for one in (dataset, poison))
    own = np.isin(dataset.sources, together)
    rows = own[dataset.boundary]
    assert held.forecast.keys() >= {"old", "new", "all"}
    for name in held.forecast:
        np.testing.assert_array_equal(held.forecast[name][rows], spied.forecast[name][rows])
        assert not np.array_equal(held.forecast[name][~rows], spied.forecast[name][~rows])
    np.testing.assert_array_equal(held.divergence[rows], spied.divergence[rows])
    np.testing.assert_array_equal(held.direct[own], spied.direct[own])
    assert not np.array_equal(held.direct[~own], spied.direct[~own])
    assert fit_constants(dataset, ~own, seed=0) == fit_constants(poison, ~own, seed=0)
    assert fit_constants(dataset, own, seed=0) != fit_constants(poison, own, seed=0)


def test_folds_are_two_at_least_and_no_more_than_the_sources(datasets):
    for folds in (1, 0, 2.0, "2"):
        with pytest.raises(InputError, match="^folds: must be a whole number of at least 2; received "):
            hold_out(datasets["ewc"], folds=folds, seed=0)
    alone, many = (hold_out(datasets["ewc"], folds=folds, seed=0) for folds in (None, 99))
    assert alone.figures == many.figures


def test_every_attempt_is_forecast_and_figures_are_of_recorded_attempts(dataset):
    seen = []
    held = hold_out(dataset, seed=0, progress=seen.append)
    for values in (*held.forecast.values(), held.divergence, held.direct):
        assert np.isfinite(values).all()
    assert seen == held.figures and [one.source for one in seen] == sorted(set(dataset.sources))
    for one in seen:
        own = np.flatnonzero(dataset.sources == one.source)
        best = [dataset.all[dataset.boundary == b].max() for b in own]
        worst = [dataset.all[dataset.boundary == b].min() for b in own]
        assert one.boundaries == len(own) and one.best == pytest.approx(np.mean(best), rel=1e-12)
        for way in (one.outcome, one.direct, one.constant):
            assert np.mean(worst) <= way <= one.best + 1e-12
        # The attempt that is expected to stay least behind the best, a price put on perhaps diverging.
        safe = held.forecast["shortfall"] - 0.3 * held.divergence
        chosen = [dataset.all[np.where(dataset.boundary == b, safe, -np.inf).argmax()] for b in own]
        assert one.outcome == pytest.approx(np.mean(chosen), rel=1e-12)
    gained = sum(one.outcome - one.constant for one in seen)
    assert held.gap_closed("outcome") == pytest.approx(gained / sum(one.best - one.constant for one in seen), rel=1e-12)


# Updates of devices: one attempt or two at a boundary.


def with_updates(dataset, outcome):
    """The dataset with three updates of each of two devices, of which the second took two attempts."""
    named, attempts = np.array(["device:a"] * 3 + ["device:b"] * 3), np.array([0, 8, 16, 24, 32, 40, 41, 48, 49])
    boundary = np.array([0, 1, 2, 3, 3, 4, 4, 5, 5]) + dataset.n_boundaries
    parts = {name: np.concatenate([values, values[attempts]]) for name, values in vars(dataset).items()
             if isinstance(values, np.ndarray) and len(values) == len(dataset.all)}
    for name in ("old", "new", "all"):
        parts[name][len(dataset.all):] = outcome
    described = dataset.boundary[attempts[[0, 1, 2, 3, 5, 7]]]
    return replace(dataset, **{
        **parts, "boundary": np.concatenate([dataset.boundary, boundary]),
        "after": np.concatenate([dataset.after, np.full(len(attempts), np.nan)]),
        "sources": np.concatenate([dataset.sources, named]), "trajectories": np.concatenate([dataset.trajectories, named]),
        "descriptors": np.concatenate([dataset.descriptors, dataset.descriptors[described]]),
        "most_kept": np.concatenate([dataset.most_kept, dataset.most_kept[described]])})


def test_updates_of_devices_count_for_what_to_expect_and_not_for_what_is_best(dataset):
    good, bad = with_updates(dataset, 1.0), with_updates(dataset, 0.0)
    assert good.compared.tolist() == [True] * dataset.n_boundaries + [False] * 6
    everything = np.ones(good.n_boundaries, bool)
    assert fit_constants(good, everything, seed=0) == fit_constants(dataset, everything[:-6], seed=0)
    inputs = dataset.inputs()
    plain = models.train_outcomes(dataset, everything[:-6], seed=0)
    fitted = [models.train_outcomes(one, everything, seed=0) for one in (good, bad)]
    np.testing.assert_array_equal(fitted[0]["shortfall"].predict(inputs), plain["shortfall"].predict(inputs))
    for train in (models.train_later, models.train_direct):
        one, other = (train(data, everything[:data.n_boundaries], seed=0) for data in (good, dataset))
        pairs = [(one, other)] if train is models.train_later else [(one[name], other[name]) for name in one]
        for with_devices, without in pairs:
            np.testing.assert_array_equal(with_devices.predict(inputs), without.predict(inputs))
    for name in ("old", "new"):
        expected = [one[name].predict(good.inputs(slice(-9, None))).mean() for one in fitted]
        assert expected[0] > expected[1] + 0.02


def test_a_device_is_never_judged_and_always_learned_from(dataset):
    good, bad = with_updates(dataset, 1.0), with_updates(dataset, 0.0)
    held, spied = (hold_out(one, seed=0) for one in (good, bad))
    assert [one.source for one in held.figures] == sorted(set(dataset.sources))
    assert [one.boundaries for one in held.figures] == np.unique(dataset.sources, return_counts=True)[1].tolist()
    devices = np.char.startswith(good.sources[good.boundary], "device:")
    assert np.isnan(held.forecast["old"][devices]).all() and np.isfinite(held.forecast["old"][~devices]).all()
    assert not np.array_equal(held.forecast["old"][~devices], spied.forecast["old"][~devices])


def test_records_of_devices_make_another_forecaster_that_knows_them(datasets):
    dataset = datasets["wa"]
    plain, forecaster = (fit_forecaster(one, recipe={}) for one in (dataset, with_updates(dataset, 1.0)))
    assert forecaster.recipe["boundaries"] == {**plain.recipe["boundaries"], "device:a": 3, "device:b": 3}
    assert forecaster.raw_constant == plain.raw_constant
    assert [one["source"] for one in forecaster.recipe["held_out"]] == sorted(set(dataset.sources))
    assert forecaster.checksum != plain.checksum


def test_records_of_devices_alone_are_refused(records, monkeypatch):
    monkeypatch.setattr("hyperforecast.workshop.fitting.dataset.FEWEST_COMPARED", 1000)
    with pytest.raises(InputError, match="searched wa boundaries of at least two sources; received none; gather more"):
        load_dataset(records, "wa")


# The best constant.


def made_up(outcome, *, n_boundaries=24, n_attempts=64, method="wa"):
    """A `Dataset` whose attempts have the outcome `outcome(learning_rate, regularization, kept, curvature, anchor)`."""
    rng = np.random.default_rng(0)
    box = SettingsBox(method, 40)
    descriptors = np.zeros((n_boundaries, len(DESCRIPTORS)))
    curvature, anchor = np.exp(rng.uniform(-2, 2, (2, n_boundaries)))
    for name, values in (("curvature_new", curvature), ("anchor_curvature", anchor), ("classes_old", 5),
                         ("classes_new", 5)):
        descriptors[:, list(DESCRIPTORS).index(name)] = values
    points = rng.random((n_boundaries * n_attempts, box.n_dimensions))
    settings = box.from_unit(points)
    boundary = np.repeat(np.arange(n_boundaries), n_attempts)
    values = np.array([[one.learning_rate, one.regularization, one.kept_per_class or 1] for one in settings])
    reached = outcome(*values.T, curvature[boundary], anchor[boundary])
    return Dataset(
        method=method, descriptors=descriptors, sources=np.array([f"s{b % 4}" for b in range(n_boundaries)]),
        trajectories=np.array([f"t{b}" for b in range(n_boundaries)]), most_kept=np.full(n_boundaries, 40),
        boundary=boundary,
        coordinates=np.zeros((len(points), len(COORDINATES))), points=box.to_unit(settings),
        logs=np.log(values[:, :box.n_dimensions]), old=reached, new=reached, all=reached,
        after=np.full(len(points), np.nan), diverged=np.zeros(len(points), bool))


def hill(value, top, width):
    return np.exp(-(np.log(value / top) / width) ** 2)


def test_the_best_constant_is_found_where_the_best_settings_are_the_same_everywhere():
    dataset = made_up(lambda a, r, kept, c, k: hill(a, 0.01, 2) * hill(r, 3, 3) * hill(kept, 12, 1))
    raw, _, kind = fit_constants(dataset, np.ones(24, bool), seed=0)
    assert kind == raw.kind == "raw"
    assert 0.006 < raw.learning_rate < 0.017 and 1.2 < raw.regularization < 7.5 and 8 <= raw.kept_per_class <= 18
    everywhere, rng = np.ones(24, bool), np.random.default_rng(1)
    others = SettingsBox("wa", 40).from_unit(rng.random((60, 3)))
    assert constant_outcome(dataset, everywhere, raw).mean() > max(
        constant_outcome(dataset, everywhere, Constant("raw", *vars(one).values())).mean() for one in others)


def test_the_best_constant_is_relative_where_the_best_settings_follow_the_scales():
    """Best at learning rate x curvature = 0.05 and regularization x anchor / curvature = 2."""
    dataset = made_up(lambda a, r, kept, c, k: hill(a * c, 0.05, 1.2) * hill(r * k / c, 2, 2) + 0 * kept)
    raw, scale_free_, kind = fit_constants(dataset, np.ones(24, bool), seed=0)
    assert kind == scale_free_.kind == "scale_free"
    assert 0.03 < scale_free_.learning_rate < 0.085 and 0.9 < scale_free_.regularization < 4.5
    everywhere = np.ones(24, bool)
    reached = constant_outcome(dataset, everywhere, scale_free_).mean()
    assert reached > constant_outcome(dataset, everywhere, raw).mean() + 0.1
    # As settings it is just that at each boundary.
    for row in dataset.descriptors:
        here = dict(zip(DESCRIPTORS, row))
        settings = scale_free_.settings(here, SettingsBox("wa", 40))
        assert settings.learning_rate == pytest.approx(scale_free_.learning_rate / here["curvature_new"], rel=1e-5)
        strength = scale_free_.regularization * here["curvature_new"] / here["anchor_curvature"]
        assert settings.regularization == pytest.approx(strength, rel=1e-5)


def test_constants_stay_in_the_ranges(dataset):
    for constant in fit_constants(dataset, np.ones(dataset.n_boundaries, bool), seed=0)[:2]:
        assert (constant.kept_per_class is None) == (dataset.method == "ewc")
        settings = constant.settings(dict(zip(DESCRIPTORS, dataset.descriptors[0])), SettingsBox(dataset.method, 3))
        assert settings.checked(dataset.method) and (settings.kept_per_class or 1) <= 3
        outcome = constant_outcome(dataset, dataset.sources == "synthetic_rectified", constant)
        assert outcome.shape == (np.sum(dataset.sources == "synthetic_rectified"),)
        # A weighted mean over attempts lies among their outcomes.
        assert dataset.all.min() <= outcome.min() and outcome.max() <= dataset.all.max()


def test_the_estimate_at_an_attempt_that_stands_alone_is_its_outcome():
    dataset = made_up(lambda a, r, kept, c, k: a + 0 * r, n_boundaries=4, n_attempts=1, method="ewc")
    attempt = SettingsBox("ewc").from_unit(dataset.points[2:3])[0]
    constant = Constant("raw", attempt.learning_rate, attempt.regularization, None)
    np.testing.assert_allclose(constant_outcome(dataset, np.ones(4, bool), constant), dataset.all, rtol=1e-12)
    assert LEARNING_RATES[0] <= constant.learning_rate <= LEARNING_RATES[1]
    assert REGULARIZATIONS["ewc"][0] <= constant.regularization <= REGULARIZATIONS["ewc"][1]


# Forecasters.


def test_the_forecaster_forecasts_what_lightgbm_does(dataset):
    """At a boundary the trees are cut to its descriptors; LightGBM itself reads whole rows."""
    everything = np.ones(dataset.n_boundaries, bool)
    boosters = {**models.train_outcomes(dataset, everything, seed=3),
                "later": models.train_later(dataset, everything, seed=3)}
    forecaster = fit_forecaster(dataset, recipe={}, seed=3)
    inputs = dataset.inputs()
    for b in range(0, dataset.n_boundaries, 3):
        rows = np.flatnonzero(dataset.boundary == b)
        here = forecaster.at(dict(zip(DESCRIPTORS, dataset.descriptors[b])))
        settings = SettingsBox(dataset.method, dataset.most_kept[b]).from_unit(dataset.points[rows])
        outcome = here.outcome(settings)
        for name in ("old", "new"):
            np.testing.assert_array_equal(outcome[name], np.clip(boosters[name].predict(inputs[rows]), 0, 1))
        np.testing.assert_allclose(here.divergence(settings), boosters["diverged"].predict(inputs[rows]), rtol=1e-12)
        np.testing.assert_array_equal(here.later(settings), boosters["later"].predict(inputs[rows]))


def test_two_fits_with_one_seed_are_the_same_and_another_seed_is_another(datasets):
    first, again, other = (fit_forecaster(datasets["wa"], recipe={"note": "x"}, seed=seed)
                           for seed in (1, 1, 2))
    assert first.checksum == again.checksum != other.checksum
    assert first.recipe["note"] == "x" and first.recipe["seed"] == 1


# Python's warning filters are shared by threads.
@pytest.mark.filterwarnings("ignore::sklearn.exceptions.ConvergenceWarning")
def test_a_fit_does_not_depend_on_the_number_of_workers(datasets):
    with joblib.parallel_config(backend="threading"):
        one, two = (fit_forecaster(datasets["ewc"], recipe={}, workers=workers) for workers in (1, 2))
    assert one.checksum == two.checksum


def test_the_recipe_tells_what_the_forecaster_was_made_of(dataset, forecasters):
    recipe = forecasters[dataset.method].recipe
    assert recipe["boundaries"] == dict(zip(*np.unique(dataset.sources, return_counts=True)))
    assert recipe["attempts"] == len(dataset.all)
    assert [one["source"] for one in recipe["held_out"]] == sorted(set(dataset.sources))
    assert set(recipe["versions"]) == {"hyperforecast", "numpy", "lightgbm", "scikit-learn"}


def test_thresholds_are_finite_with_few_sources(forecasters):
    """They hold 90% of the weight of m sources, which guarantees a new one 90% m / (m + 1): no source is too few."""
    for forecaster in forecasters.values():
        assert set(forecaster.thresholds) == {"old", "new", "all"}
        assert all(0 < value < np.inf for value in forecaster.thresholds.values())


@pytest.mark.parametrize("without_later", ["all", "all but one source"])
def test_streams_too_short_for_later_outcomes_still_make_a_forecaster(without_later, datasets):
    dataset = datasets["ewc"]
    known = np.zeros(len(dataset.all), bool) if without_later == "all" else (
        dataset.sources == "synthetic_rectified")[dataset.boundary]
    short = replace(dataset, after=np.where(known, dataset.after, np.nan))
    forecaster = fit_forecaster(short, recipe={})
    here = forecaster.at(dict(zip(DESCRIPTORS, dataset.descriptors[0])))
    later = here.later([Settings(0.01, 1.0), Settings(0.1, 10.0)])
    assert np.isfinite(later).all()
    if without_later == "all":
        # Nothing comes later: the present, as the trees see it, stands for it.
        trees = {name: one for name, one in forecaster.models.items() if name != NETWORK}
        here = replace(forecaster, models=trees).at(here.descriptors)
        np.testing.assert_array_equal(np.minimum(later, 0), here.shortfall([Settings(0.01, 1.0), Settings(0.1, 10.0)]))


def test_later_advantages_are_followed_or_the_share_of_the_present_that_lasts(dataset):
    """By hand at each boundary: the deviation from the followed attempts' mean, or the pooled slope times the present's."""
    known = ~np.isnan(dataset.after)
    now, later = np.full((2, len(dataset.all)), np.nan)
    for b in range(dataset.n_boundaries):
        rows = dataset.boundary == b
        if (rows & known).any():
            now[rows] = dataset.all[rows] - dataset.all[rows & known].mean()
            later[rows] = dataset.after[rows] - dataset.after[rows & known].mean()
    slope = (now[known] @ later[known]) / (now[known] @ now[known])
    np.testing.assert_allclose(models.later_advantage(dataset), np.where(known, later, slope * now), rtol=1e-9)
    assert np.isnan(models.later_advantage(dataset)).any()
