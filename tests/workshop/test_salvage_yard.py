"""The salvage yard's drawings, checked against what a camera above a belt would see."""

import numpy as np
import pytest

from hyperforecast.checks import InputError
from hyperforecast.increments import read_increment
from hyperforecast.workshop.streams.salvage_yard import (
    DELIVERIES, FAMILIES, delivery_pictures, draw_parts, lamp_age_at, part_features, salvage_yard_stream,
    write_deliveries,
)


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


@pytest.mark.parametrize("t, n, seed", [(6, 1, 0), (0, 0, 0), (0, 251, 0), (0, 1, -1)])
def test_unknown_delivery_is_refused(t, n, seed):
    with pytest.raises(InputError, match="whole number"):
        delivery_pictures(t, n, seed=seed)


def test_delivery_pictures_show_the_new_families_under_the_lamp_of_the_day():
    ages = [lamp_age_at(t) for t in range(6)]
    assert ages[0] == 0.0 and ages == sorted(set(ages)) and ages[-1] <= 1.0
    pictures = delivery_pictures(4, 3, seed=9)
    assert tuple(pictures) == DELIVERIES[4]
    for family, shown in pictures.items():
        assert np.array_equal(shown, draw_parts(family, 250, lamp_age=ages[4], seed=9)[:3])


@pytest.fixture(scope="module")
def stream():
    return salvage_yard_stream(4)


def test_stream_brings_each_delivery_once_and_judges_on_all_seen(stream):
    assert stream.n_boundaries == 6
    for t in range(6):
        training, scoring, selection = stream.training(t), stream.scoring(t), stream.selection(t)
        assert set(training.y) == set(DELIVERIES[t]) and len(training) == 3 * 100
        for held_out in (scoring, selection):
            families, counts = np.unique(held_out.y, return_counts=True)
            assert set(families) == set(FAMILIES[:3 * t + 3]) and set(counts) == {50}
        assert training.X.shape[1] == scoring.X.shape[1] == 90


def test_stream_is_seeded(stream):
    again, other = salvage_yard_stream(4), salvage_yard_stream(5)
    assert np.array_equal(stream.training(2).X, again.training(2).X)
    assert np.array_equal(stream.scoring(3).X, again.scoring(3).X)
    assert not np.array_equal(stream.training(2).X, other.training(2).X)


def test_held_out_parts_are_seen_under_the_lamp_of_the_time(stream):
    def spread_of_first_families(t):
        scoring = stream.scoring(t)
        return scoring.X[np.isin(scoring.y, DELIVERIES[0]), 81:].mean()

    # The standard deviation of grey levels within regions, the last nine features, falls as the lamp dims.
    spreads = [spread_of_first_families(t) for t in range(6)]
    assert spreads == sorted(spreads, reverse=True) and spreads[5] < 0.9 * spreads[0]


def test_the_deliveries_as_files(tmp_path):
    paths = write_deliveries(tmp_path / "new" / "yard", seed=3)
    stream = salvage_yard_stream(3)
    assert sorted(path.name for path in paths) == sorted(path.name for path in (tmp_path / "new" / "yard").iterdir())
    for t in range(6):
        for name, expected in (("delivery", stream.training(t)), ("inspected", stream.selection(t))):
            increment = read_increment(tmp_path / "new" / "yard" / f"{name}{t + 1}.npz")
            np.testing.assert_array_equal(increment.X, expected.X)
            np.testing.assert_array_equal(increment.y, expected.y)
    with pytest.raises(InputError, match="must be a folder"):
        write_deliveries(paths[0], seed=3)
