"""What to expect of other settings: the same models as the advice, asked along each setting and over the plane."""

import json
from dataclasses import replace

import numpy as np
import pytest

from hyperforecast.describing import DESCRIPTORS
from hyperforecast.forecasting import DIVERGENCE_PRICE, RIDGE, advise_settings, along, outlook, ridge
from hyperforecast.settings import LEARNING_RATES, REGULARIZATIONS, Settings, SettingsBox


@pytest.fixture(scope="module")
def advice(forecasters, datasets):
    here = dict(zip(DESCRIPTORS, datasets["wa"].descriptors[2]))
    return advise_settings(forecasters["wa"], here, SettingsBox("wa", 30))


def test_the_advised_settings_look_as_the_advice_says(advice):
    told = outlook(advice, [advice.settings])
    for name in ("old", "new", "all"):
        assert getattr(told, name).at(0) == getattr(advice, f"expected_{name}")
    assert told.behind.tolist() == [0.0] and told.divergence[0] == advice.divergence
    assert json.loads(json.dumps(told.as_dicts()))[0]["settings"] == advice.settings.as_dict()


def test_what_lies_behind_is_the_difference_of_shortfalls(advice):
    others = [Settings(0.001, 1.0, 5), Settings(0.5, 10.0, 20)]
    shortfall = advice.forecaster.at(advice.descriptors).shortfall([*others, advice.settings])
    np.testing.assert_allclose(outlook(advice, others).behind, shortfall[2] - shortfall[:2])


def test_a_curve_covers_the_range_of_one_setting_and_leaves_the_others(advice):
    curve = along(advice, "learning_rate")
    rates = [one.learning_rate for one in curve.settings]
    assert (rates[0], rates[-1]) == LEARNING_RATES and rates == sorted(rates)
    assert {replace(one, learning_rate=advice.settings.learning_rate) for one in curve.settings} == {advice.settings}
    kept = [one.kept_per_class for one in along(advice, "kept_per_class").settings]
    assert (kept[0], kept[-1]) == (1, 30) and kept == sorted(set(kept))


def test_the_ridge_is_what_lies_near_the_best(advice):
    plane = ridge(advice)
    assert (plane.regularizations[0], plane.regularizations[-1]) == REGULARIZATIONS["wa"]
    forecast = advice.forecaster.at(advice.descriptors)
    one = replace(advice.settings, learning_rate=plane.learning_rates[20], regularization=plane.regularizations[3])
    other = replace(advice.settings, learning_rate=plane.learning_rates[2], regularization=plane.regularizations[9])
    value = forecast.shortfall([one, other]) - DIVERGENCE_PRICE * forecast.divergence([one, other])
    assert plane.behind[9, 2] - plane.behind[3, 20] == pytest.approx(value[0] - value[1])
    assert plane.behind.min() == 0 and plane.divergence[9, 2] == forecast.divergence([other])[0]
    np.testing.assert_array_equal(plane.good, plane.behind <= RIDGE)
    low, high = plane.spans()["learning_rate"]
    assert low in plane.learning_rates and low <= high
