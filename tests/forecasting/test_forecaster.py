"""Forecasters: a file comes back as it was or is refused; forecasts cope with what is missing."""

import json
from dataclasses import replace
from importlib import resources

import numpy as np
import pytest

from hyperforecast.checks import InputError
from hyperforecast.describing import DESCRIPTORS
from hyperforecast.forecasting import (
    NETWORK, Constant, TreeEnsemble, combined, load_forecaster, save_forecaster, with_checksum,
)
from hyperforecast.settings import COORDINATES, METHODS, Settings, SettingsBox, scale_free
from hyperforecast.storage import Bundle, VersionError, read_bundle_file, write_bundle_file

N_FEATURES = len(DESCRIPTORS) + len(COORDINATES)


@pytest.fixture(params=["wa", "ewc"])
def forecaster(request, forecasters):
    return forecasters[request.param]


@pytest.fixture
def here(forecaster, datasets):
    """Descriptors of a gathered boundary."""
    return dict(zip(DESCRIPTORS, datasets[forecaster.method].descriptors[2]))


def some_settings(method, n=50):
    box = SettingsBox(method, 30)
    return box.from_unit(np.random.default_rng(0).random((n, box.n_dimensions)))


def forecasts(forecaster, descriptors):
    at, settings = forecaster.at(descriptors), some_settings(forecaster.method)
    return {**at.outcome(settings), "divergence": at.divergence(settings), "later": at.later(settings),
            "shortfall": at.shortfall(settings),
            **{f"{name} {part}": getattr(one, part) for name, one in at.expected(settings).items()
               for part in ("value", "low", "high")}}


# Files.


def test_a_forecaster_comes_back_from_its_file(forecaster, here, tmp_path):
    sha = save_forecaster(tmp_path / "a.forecaster", forecaster)
    back = load_forecaster(tmp_path / "a.forecaster")
    assert sha == back.checksum == forecaster.checksum == with_checksum(back).checksum and len(sha) == 64
    np.testing.assert_equal(forecasts(back, here), forecasts(forecaster, here))
    for name in ("method", "descriptor_names", "ranking", "thresholds", "raw_constant", "scale_free_constant",
                 "constant_kind", "influential", "recipe"):
        assert getattr(back, name) == getattr(forecaster, name), name
    np.testing.assert_array_equal(back.typical, forecaster.typical)
    assert back.familiarity.assess(here) == forecaster.familiarity.assess(here)
    save_forecaster(tmp_path / "b.forecaster", back)
    assert (tmp_path / "b.forecaster").read_bytes() == (tmp_path / "a.forecaster").read_bytes()
    assert load_forecaster(str(tmp_path / "b.forecaster")).checksum == sha


def test_the_checksum_names_the_content(forecaster):
    for change in ({"typical": forecaster.typical + 1}, {"recipe": {}}, {"ranking": "other"},
                   {"thresholds": {**forecaster.thresholds, "old": 0.5}}):
        assert with_checksum(replace(forecaster, **change)).checksum != forecaster.checksum


def test_a_damaged_file_is_refused(forecaster, tmp_path):
    path = tmp_path / "a.forecaster"
    save_forecaster(path, forecaster)
    whole, rng, found = path.read_bytes(), np.random.default_rng(0), 0
    for length in np.linspace(0, len(whole) - 1, 20).astype(int):
        path.write_bytes(whole[:length])
        with pytest.raises(InputError, match="a.forecaster: must be a complete forecaster file"):
            load_forecaster(path)
    for _ in range(40):
        place, change = int(rng.integers(len(whole))), int(rng.integers(1, 256))
        path.write_bytes(whole[:place] + bytes([whole[place] ^ change]) + whole[place + 1:])
        try:
            assert load_forecaster(path).checksum == forecaster.checksum
        except InputError as error:
            assert str(error).startswith(str(path)) and str(error).isprintable()
            found += 1
    assert found > 20


@pytest.mark.parametrize("source, rule", [
    (3, "^forecaster: must be a method or the path of a forecaster file; received 3"), (None, "^forecaster: must be"),
    ("nowhere.forecaster", "^nowhere.forecaster: must be a readable file; received No such file"),
    ("WA", "^WA: must be a readable file")])
def test_what_is_no_forecaster_is_refused(source, rule):
    with pytest.raises(InputError, match=rule):
        load_forecaster(source)


def test_the_ones_that_ship_load_by_their_method():
    shipped = {method for method in METHODS
               if (resources.files("hyperforecast.models") / f"{method}.forecaster").is_file()}
    for method in METHODS:
        if method in shipped:
            assert load_forecaster(method).method == method
        else:
            with pytest.raises(InputError, match=f"{method}.forecaster: must be a readable file"):
                load_forecaster(method)


def test_newer_versions_and_other_kinds_are_refused(forecaster, tmp_path):
    path = tmp_path / "a.forecaster"
    save_forecaster(path, forecaster)
    bundle, _ = read_bundle_file(path, "forecaster", newest=2)
    write_bundle_file(path, replace(bundle, version=3))
    with pytest.raises(VersionError, match="must be of version 1 to 2; received version 3"):
        load_forecaster(path)
    write_bundle_file(path, Bundle("carryover", 1, bundle.facts, bundle.arrays))
    with pytest.raises(InputError, match="must be a forecaster; received 'carryover'"):
        load_forecaster(path)


FACTS = ("method", "descriptor_names", "coordinates", "models", "ranking", "thresholds", "raw_constant",
         "scale_free_constant", "constant_kind", "influential", "recipe")
RAW = {"kind": "raw", "learning_rate": 0.1, "regularization": 1.0, "kept_per_class": 3}
HOSTILE_FACTS = [
    *((name, value) for name in FACTS for value in (None, 7, "x", [7], {"x": 7}, [["x"]])
      if (name, value) not in (("recipe", {"x": 7}),)),
    ("method", "ewc"), ("coordinates", list(COORDINATES[::-1])), ("ranking", "best"), ("constant_kind", "scale free"),
    ("thresholds", {"old": 1.0, "new": 1.0}), ("thresholds", {"old": "1", "new": 1.0, "all": 1.0}),
    ("thresholds", {"old": -1.0, "new": 1.0, "all": 1.0}), ("influential", ["no such descriptor"]),
    ("models", ["old", "new"]), ("raw_constant", {**RAW, "kind": "scale_free"}), ("raw_constant", {**RAW, "more": 1}),
    ("raw_constant", {**RAW, "learning_rate": 0}), ("raw_constant", {**RAW, "regularization": "1"}),
    ("raw_constant", {**RAW, "kept_per_class": 2.5}), ("raw_constant", {**RAW, "kept_per_class": None}),
    ("descriptor_names", list(DESCRIPTORS)[::-1]), ("descriptor_names", list(DESCRIPTORS)[1:]),
]


@pytest.mark.parametrize("name, value", HOSTILE_FACTS, ids=map(str, range(len(HOSTILE_FACTS))))
def test_an_undamaged_file_that_makes_no_sense_is_refused(name, value, forecasters, tmp_path):
    path = tmp_path / "a.forecaster"
    save_forecaster(path, forecasters["wa"])
    bundle, _ = read_bundle_file(path, "forecaster", newest=2)
    write_bundle_file(path, replace(bundle, facts={**bundle.facts, name: value}))
    with pytest.raises(InputError) as caught:
        load_forecaster(path)
    assert str(caught.value).startswith(str(path)) and str(caught.value).isprintable()


@pytest.mark.parametrize("name, array", [
    ("typical", None), ("typical", np.zeros(3)), ("typical", np.zeros(len(DESCRIPTORS), int)), ("old_split", None),
    ("old_threshold", np.array([np.nan])), ("familiarity_scale", np.zeros(len(DESCRIPTORS))),
    ("old_n_features", np.array([3], np.int32)), ("familiarity_names", np.array(["x"] * len(DESCRIPTORS)))],
    ids=lambda value: value if isinstance(value, str) else "")
def test_arrays_that_make_no_sense_are_refused(name, array, forecasters, tmp_path):
    path = tmp_path / "a.forecaster"
    save_forecaster(path, forecasters["wa"])
    bundle, _ = read_bundle_file(path, "forecaster", newest=2)
    arrays = {key: value for key, value in {**bundle.arrays, name: array}.items() if value is not None}
    write_bundle_file(path, replace(bundle, arrays=arrays))
    with pytest.raises(InputError, match=r"a.forecaster \(") as caught:
        load_forecaster(path)
    assert str(caught.value).startswith(str(path))


def test_direct_forecasts_need_their_models(forecasters, tmp_path):
    outcome = replace(forecasters["ewc"], ranking="outcome")
    models = {name: model for name, model in outcome.models.items() if name not in ("learning_rate", "regularization")}
    save_forecaster(tmp_path / "a.forecaster", replace(outcome, models=models, ranking="direct"))
    with pytest.raises(InputError, match=r"a.forecaster \(models\): must be diverged, later, learning_rate, new, old"):
        load_forecaster(tmp_path / "a.forecaster")
    save_forecaster(tmp_path / "a.forecaster", replace(outcome, models=models))
    assert load_forecaster(tmp_path / "a.forecaster").models.keys() == models.keys()


# Forecasts.


def test_forecasts_are_shares_with_intervals_around_them(forecaster, here):
    for thresholds in ({"old": 1.0, "new": 0.0, "all": 1e9}, dict.fromkeys(("old", "new", "all"), np.inf)):
        expected = replace(forecaster, thresholds=thresholds).at(here).expected(some_settings(forecaster.method))
        for name, one in expected.items():
            assert (0 <= one.low).all() and (one.low <= one.value).all()
            assert (one.value <= one.high).all() and (one.high <= 1).all()
            if thresholds[name] in (1e9, np.inf):
                assert (one.low == 0).all() and (one.high == 1).all()
            if thresholds[name] == 0:
                np.testing.assert_array_equal(one.low, one.high)
            assert json.loads(json.dumps(one.at(3).as_dict())) == {
                "value": one.value[3], "low": one.low[3], "high": one.high[3]}


def test_an_interval_is_the_threshold_times_the_forecast_spread(forecasters, here):
    """Conformal intervals of errors over a forecast spread, as in Lei et al. 2018, section 5.2, from memory."""
    spread = TreeEnsemble(N_FEATURES, *(np.empty(0, kind) for kind in (int, float, int, bool)), np.array([-1]),
                          np.log([0.05]))
    forecaster = forecasters["ewc"]
    models = {**forecaster.models, "spread_old": spread}
    at = replace(forecaster, models=models, thresholds={"old": 2.0, "new": 1.0, "all": 1.0}).at(here)
    one = at.expected(some_settings("ewc"))["old"]
    np.testing.assert_allclose(one.low, np.clip(one.value - 0.1, 0, 1), atol=1e-12)
    np.testing.assert_allclose(one.high, np.clip(one.value + 0.1, 0, 1), atol=1e-12)


def test_a_boundary_forecast_reads_what_the_trees_read(forecaster, here):
    settings, at = some_settings(forecaster.method), forecaster.at(here)
    rows = np.hstack([np.tile(forecaster.vector(here), (len(settings), 1)), scale_free(settings, here)])
    for name in ("old", "new"):
        np.testing.assert_array_equal(at.outcome(settings)[name], np.clip(forecaster.models[name].predict(rows), 0, 1))
    np.testing.assert_array_equal(at.later(settings), forecaster.models["later"].predict(rows))
    both = (forecaster.models["shortfall"].predict(rows) + forecaster.models[NETWORK].predict(rows)) / 2
    np.testing.assert_allclose(at.shortfall(settings), np.minimum(both, 0), rtol=1e-9, atol=1e-12)
    trees_alone = replace(forecaster, models={name: one for name, one in forecaster.models.items() if name != NETWORK})
    np.testing.assert_array_equal(trees_alone.at(here).shortfall(settings),
                                  np.minimum(forecaster.models["shortfall"].predict(rows), 0))
    odds = np.exp(forecaster.models["diverged"].predict(rows))
    np.testing.assert_allclose(at.divergence(settings), odds / (1 + odds), rtol=1e-12)


def test_a_narrowed_forecaster_gives_the_same_where_only_what_is_open_differs(forecaster, here):
    names = forecaster.influential[:6]
    narrowed = forecaster.narrowed(here, names)
    for name in names:
        for value in (np.nan, 0.0, float(forecaster.typical[forecaster.descriptor_names.index(name)])):
            described = {**here, name: value}
            at, settings = narrowed.at(described), some_settings(forecaster.method)
            wanted = forecasts(forecaster, described)
            for part in ("later", "divergence"):
                np.testing.assert_array_equal(getattr(at, part)(settings), wanted[part])
            # Networks sum up in another order.
            np.testing.assert_allclose(at.shortfall(settings), wanted["shortfall"], rtol=1e-12, atol=1e-15)
            np.testing.assert_array_equal(at.outcome(settings)["all"], wanted["all"])


def test_accuracy_on_all_classes_weighs_every_class_alike():
    old, new = np.array([0.5, 1.0]), np.array([1.0, 0.0])
    np.testing.assert_allclose(combined(old, new, {"classes_old": 6.0, "classes_new": 2.0}), [0.625, 0.75])
    for unknown in ({}, {"classes_old": 6.0}, {"classes_old": np.nan, "classes_new": 2.0}):
        np.testing.assert_allclose(combined(old, new, unknown), [0.75, 0.5])


def test_a_missing_descriptor_is_not_a_number_of_its_own(forecaster, here):
    """No entry, None of the kind and NaN are one thing: what the trees hold for missing."""
    for name in ("curvature_new", "classes_new", forecaster.influential[0]):
        without = {key: value for key, value in here.items() if key != name}
        np.testing.assert_equal(forecasts(forecaster, without), forecasts(forecaster, {**here, name: np.nan}))
    for nothing in ({}, dict.fromkeys(DESCRIPTORS, np.nan)):
        assert all(np.isfinite(values).all() for values in forecasts(forecaster, nothing).values())
    rows_only = [5.0 if name == "rows" else np.nan for name in DESCRIPTORS]
    np.testing.assert_equal(forecaster.vector({"rows": 5.0}), rows_only)
    np.testing.assert_equal(forecasts(forecaster, {**here, "no such": 1.0}), forecasts(forecaster, here))


# Constants.


def test_a_raw_constant_is_its_own_settings_cut_to_the_box():
    constant = Constant("raw", 0.02, 3.0, 20)
    assert constant.settings({}, SettingsBox("wa")) == Settings(0.02, 3.0, 20)
    assert constant.settings({}, SettingsBox("wa", 7)) == Settings(0.02, 3.0, 7)
    assert Constant("raw", 5.0, 1e9, None).settings({}, SettingsBox("ewc")) == Settings(1.0, 1e6)
    assert json.loads(json.dumps(constant.as_dict())) == {
        "kind": "raw", "learning_rate": 0.02, "regularization": 3.0, "kept_per_class": 20}


def test_a_relative_constant_follows_the_scales_of_the_boundary():
    """Learning rate times curvature, and strength times anchor curvature over curvature, are what is constant."""
    constant, box = Constant("scale_free", 0.05, 2.0, 20), SettingsBox("wa", 30)
    for curvature, anchor in ((2.0, 4.0), (0.25, 8.0)):
        settings = constant.settings({"curvature_new": curvature, "anchor_curvature": anchor}, box)
        assert settings.learning_rate * curvature == pytest.approx(0.05, rel=1e-5)
        assert settings.regularization * anchor / curvature == pytest.approx(2.0, rel=1e-5)
        assert settings.kept_per_class == 20
    assert constant.settings({"curvature_new": 1e-9, "anchor_curvature": 1e9}, box) == Settings(1.0, 1e-3, 20)


@pytest.mark.parametrize("scales", [{}, {"curvature_new": 1.0}, {"curvature_new": np.nan, "anchor_curvature": 1.0},
                                    {"curvature_new": 0.0, "anchor_curvature": 1.0},
                                    {"curvature_new": 1.0, "anchor_curvature": 0.0},
                                    {"curvature_new": 0.0, "anchor_curvature": 0.0},
                                    {"curvature_new": -1.0, "anchor_curvature": 1.0}], ids=str)
def test_without_scales_the_raw_constant_stands_in(scales, forecasters):
    assert Constant("scale_free", 0.05, 2.0, 20).settings(scales, SettingsBox("wa")) is None
    forecaster = replace(forecasters["wa"], constant_kind="scale_free")
    raw = forecaster.raw_constant.settings({}, SettingsBox("wa", 30))
    assert forecaster.constant_settings(scales, SettingsBox("wa", 30)) == raw


def test_the_kind_of_constant_that_did_better_is_used(forecasters, datasets):
    here, box = dict(zip(DESCRIPTORS, datasets["wa"].descriptors[2])), SettingsBox("wa", 30)
    for constant in (forecasters["wa"].raw_constant, forecasters["wa"].scale_free_constant):
        forecaster = replace(forecasters["wa"], constant_kind=constant.kind)
        assert forecaster.constant_settings(here, box) == constant.settings(here, box)
