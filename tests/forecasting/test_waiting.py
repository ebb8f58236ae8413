"""Whether to update now, checked against power laws worked out by hand."""

import json
from dataclasses import replace

import numpy as np
import pytest

from hyperforecast.describing import DESCRIPTORS
from hyperforecast.forecasting import (
    GAINED, Expected, advise_settings, await_rows, nothing_new, retraining_signs,
)
from hyperforecast.settings import SettingsBox

# Of the gain of simple classifiers, what WA makes its own.
PART = GAINED["wa"]


@pytest.fixture(scope="module")
def advice(forecasters, datasets):
    """Six old classes; half of the new rows are taken for another class."""
    here = {**dict(zip(DESCRIPTORS, datasets["wa"].descriptors[2])), "classes_old": 6.0, "classes_new": 2.0,
            "nearest_mean_accuracy_all": 0.4, "ridge_accuracy_new": 0.6}
    advised = advise_settings(forecasters["wa"], here, SettingsBox("wa", 30))
    return replace(advised, expected_all=Expected(0.6, 0.5, 0.7))


def test_twice_the_rows_leave_a_power_of_the_error(advice):
    # Two of eight classes err by 0.5 each; twice the rows leave 2^-0.25 of it.
    waiting = await_rows(advice, {"nut": 20, "rod": 20})
    assert waiting.gain == pytest.approx(PART * 2 / 8 * 0.5 * (1 - 2**-0.25))
    assert waiting.needed == {"nut": 20, "rod": 20} and waiting.rows == [0, 10, 20, 30, 40]
    assert waiting.expected[2] - waiting.expected[0] == pytest.approx(PART * 2 / 8 * 0.5 * (1 - 1.5**-0.25))
    assert waiting.pays == (waiting.gain >= 0.02)
    short = await_rows(advice, {"nut": 20, "rod": 20}, least_gain=waiting.gain + 1e-9)
    assert not short.pays and str(short).startswith("Update now")
    json.dumps(waiting.as_dict())


def test_a_scarce_class_alone_is_collected_where_that_is_enough(advice):
    waiting = await_rows(advice, {"nut": 60, "rod": 2, "hook": 60, "pin": 60})
    # Errors go by n^-0.25 around their mean of a half; rod goes from 2 rows to 60, over ten classes.
    shares = np.array([60, 2, 60, 60]) ** -0.25
    error = 0.5 * shares[1] / shares.mean()
    assert waiting.needed == {"rod": 58}
    assert waiting.gain == pytest.approx(PART * error * (1 - 30**-0.25) / 10)
    assert str(waiting).startswith("Not yet: collect about 58 more rows of rod first")


def test_many_classes_are_not_all_named(advice):
    text = str(await_rows(advice, {name: 20 + n for n, name in enumerate("abcdef")}, least_gain=0.03))
    assert "20 to 25 more rows of each of the 6 new classes" in text


def test_no_new_class_no_rows_to_wait_for(advice):
    assert await_rows(advice, {"nut": 20}, least_gain=0).needed == {"nut": 20}
    assert await_rows(advice, {}).needed == {} and not await_rows(advice, {}).pays
    unknown = {**advice.descriptors, "nearest_mean_accuracy_all": np.nan, "ridge_accuracy_new": np.nan}
    assert not await_rows(replace(advice, descriptors=unknown), {"nut": 20}).pays


def test_new_rows_of_old_classes_bring_a_power_of_the_error_too(advice):
    # As many rows again as were seen: 1 - 2^-0.25 of an error of a half, of two of the six classes.
    told = nothing_new(advice, [20, 20], [20, 20])
    assert told.gain == pytest.approx(PART * 2 / 6 * 0.5 * (1 - 2**-0.25)) and told.pays
    # A tenth as many: the error with 200 rows is 10^-0.25 times that with 20.
    few = nothing_new(advice, [20, 20], [200, 200])
    assert few.gain == pytest.approx(PART * 2 / 6 * 0.5 * 10**-0.25 * (1 - 1.1**-0.25)) and not few.pays
    assert "can wait" in str(few) and "update pays" in str(told)
    unknown = {**advice.descriptors, "nearest_mean_accuracy_all": np.nan, "ridge_accuracy_new": np.nan,
               "check_accuracy_old": np.nan}
    cannot = nothing_new(replace(advice, descriptors=unknown), [20], [20])
    assert cannot.pays is None and cannot.now is None and "cannot be told" in str(cannot)
    json.dumps([told.as_dict(), cannot.as_dict()])


def test_drift_beyond_the_records_is_a_sign_to_retrain(advice):
    highest = dict(zip(advice.forecaster.familiarity.names.tolist(), advice.forecaster.familiarity.high.tolist()))
    within = {name: np.nan for name in ("shift_of_returning", "cut_share", "frechet_distance")}
    calm = {**advice.descriptors, **within, "energy": highest["energy"], "hidden_units": 0.0}
    assert retraining_signs(replace(advice, descriptors=calm)) == []
    sign, = retraining_signs(replace(advice, descriptors={**calm, "energy": highest["energy"] * 1.01}))
    assert "energy" in sign


# Eight classes.
@pytest.mark.parametrize("units, signs", [(0.0, 0), (3.0, 1), (4.0, 1), (5.0, 0), (np.nan, 0)])
def test_a_head_has_run_out_of_room_where_classes_crowd_its_units(advice, units, signs):
    calm = dict.fromkeys(("shift_of_returning", "cut_share", "frechet_distance", "energy"), np.nan)
    told = retraining_signs(replace(advice, descriptors={**advice.descriptors, **calm, "hidden_units": units}))
    assert len(told) == signs and all("room: 8 classes" in one for one in told)
