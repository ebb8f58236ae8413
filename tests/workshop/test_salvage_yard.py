"""The salvage yard's drawings, checked against what a camera above a belt would see."""

import numpy as np
import pytest

from hyperforecast.checks import InputError
from hyperforecast.workshop.streams.salvage_yard import DELIVERIES, FAMILIES, draw_parts, part_features


@pytest.fixture(scope="module")
def drawings():
    """Forty new and worn parts of every family under a new lamp."""
    return {family: draw_parts(family, 40, lamp_age=0.0, seed=11) for family in FAMILIES}


def test_families_come_in_deliveries_and_once_each():
    assert [family for delivery in DELIVERIES for family in delivery] == list(FAMILIES)
    assert len(set(FAMILIES)) == len(FAMILIES) == 18


@pytest.mark.parametrize("lamp_age", [0.0, 1.0])
@pytest.mark.parametrize("family", FAMILIES)
def test_pictures_are_grey_levels(family, lamp_age):
    pictures = draw_parts(family, 3, lamp_age=lamp_age, seed=0)
    assert pictures.shape == (3, 32, 32) and pictures.dtype == np.float32
    assert pictures.min() >= 0.0 and pictures.max() <= 1.0
    # A part stands out from the belt: the brightest tenth against the median.
    assert np.quantile(pictures, 0.9) > 1.2 * np.median(pictures)


def test_same_seed_same_pictures_other_seed_others():
    first = draw_parts("washer", 130, lamp_age=0.4, seed=5)
    assert np.array_equal(first, draw_parts("washer", 130, lamp_age=0.4, seed=5))
    other = draw_parts("washer", 130, lamp_age=0.4, seed=6)
    # Not one picture comes twice, within a draw or between seeds.
    assert len(np.unique(np.concatenate([first, other]).reshape(260, -1), axis=0)) == 260


def test_seed_may_be_a_sequence():
    one, other = (draw_parts("hook", 1, lamp_age=0.0, seed=(5, t)) for t in (0, 1))
    assert not np.array_equal(one, other)


def test_ageing_lamp_dims_flattens_and_fades_to_one_side():
    aged = [draw_parts("hex nut", 60, lamp_age=age, seed=2) for age in (0.0, 0.5, 1.0)]
    contrast = [pictures.std((1, 2)).mean() for pictures in aged]
    assert contrast[0] > contrast[1] > contrast[2]
    brightest = [np.quantile(pictures, 0.99) for pictures in aged]
    assert brightest[0] > brightest[1] > brightest[2]
    # Left against right half of the belt, where parts are equally likely.
    tilt = [pictures[:, :, :16].mean() / pictures[:, :, 16:].mean() for pictures in aged]
    assert tilt[0] < tilt[1] < tilt[2]
    # The corners show belt alone; neighbours differ there by the camera's noise.
    grain = [np.diff(pictures[:, :4, :4], axis=2).std() for pictures in aged]
    assert grain[0] < grain[2]


def test_wear_changes_the_part_and_nothing_else():
    new = draw_parts("T-fitting", 60, lamp_age=0.0, seed=3, wear=0.0)
    worn = draw_parts("T-fitting", 60, lamp_age=0.0, seed=3, wear=1.0)
    changed = abs(worn - new) > 0.05
    assert 0.02 < changed.mean() < 0.4
    # The top left corner of the belt lies beyond the part's reach and its shadow.
    assert np.array_equal(worn[:, :2, :2], new[:, :2, :2])


def _recall_of_nearest_mean(train, test):
    """Recall of each class by the nearest class mean on standardized features (common practice)."""
    rows = np.concatenate(train)
    centre, spread = rows.mean(0), rows.std(0)
    means = np.stack([((one - centre) / spread).mean(0) for one in train])
    return np.array([
        np.mean(np.linalg.norm(((one - centre) / spread)[:, None] - means, axis=2).argmin(1) == label)
        for label, one in enumerate(test)
    ])


def test_features_tell_families_apart_but_not_all_and_feel_the_lamp(drawings):
    train = [part_features(drawings[family]) for family in FAMILIES]
    new, old = ([part_features(draw_parts(family, 40, lamp_age=age, seed=12)) for family in FAMILIES] for age in (0, 1))
    recall = _recall_of_nearest_mean(train, new)
    # Chance is 1 in 18.
    assert 0.6 < recall.mean() < 0.9 and recall.min() > 0.25
    assert _recall_of_nearest_mean(train, old).mean() < recall.mean() - 0.15


def test_features_see_orientation():
    # Worked by hand: a vertical edge of height 1 changes grey across (orientation 0), a horizontal one down (2).
    vertical = np.zeros((1, 32, 32))
    vertical[:, :, 16:] = 1.0
    features = part_features(np.concatenate([vertical, vertical.transpose(0, 2, 1)]))
    assert features.shape == (2, 90) and features.dtype == np.float32
    by_orientation = features[:, :72].reshape(2, 8, 9).sum(2)
    assert by_orientation[0].argmax() == 0 and by_orientation[1].argmax() == 2
    assert np.count_nonzero(by_orientation[0]) == np.count_nonzero(by_orientation[1]) == 1


@pytest.mark.parametrize("family, lamp_age, wear", [("girder", 0, 1), ("hook", 1.5, 1), ("hook", 0, -0.1)])
def test_unknown_part_lamp_or_wear_is_refused(family, lamp_age, wear):
    with pytest.raises(InputError, match="must be"):
        draw_parts(family, 1, lamp_age=lamp_age, seed=0, wear=wear)
