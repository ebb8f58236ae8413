"""Settings, plans and their ranges; the unit cube; scale-free coordinates by hand."""

import json
import re
from itertools import pairwise

import numpy as np
import pytest

from hyperforecast.checks import InputError
from hyperforecast.settings import (
    COORDINATES, KEPT_PER_CLASS, LEARNING_RATES, METHODS, REGULARIZATIONS, REHEARSAL_METHODS, SCALES, Plan, Settings,
    SettingsBox, parse_bytes, scale_free,
)


@pytest.mark.parametrize("method", METHODS)
def test_the_ends_of_the_ranges_are_settings_and_beyond_them_none(method):
    kept = dict.fromkeys(["kept_per_class"], 5) if method in REHEARSAL_METHODS else {}
    for rate in LEARNING_RATES:
        for strength in REGULARIZATIONS[method]:
            settings = Settings(rate, strength, **kept)
            assert settings.checked(method) == settings
    for name, (low, high) in (("learning_rate", LEARNING_RATES), ("regularization", REGULARIZATIONS[method])):
        for value in (np.nextafter(low, 0), np.nextafter(high, np.inf), 0, -1, np.nan, np.inf, None, "0.1", True):
            rule = f"{name}: must be a number from {low:g} to {high:g}; received "
            with pytest.raises(InputError, match=re.escape(rule)):
                Settings(**{"learning_rate": 0.1, "regularization": 1.0, **kept, name: value}).checked(method)


@pytest.mark.parametrize("value", [0, 81, -1, 20.0, "20", None, True, np.nan])
def test_exemplars_per_class_are_a_whole_number_in_range(value):
    with pytest.raises(InputError, match="^kept_per_class: must be a whole number from 1 to 80; received "):
        Settings(0.1, 1.0, value).checked("wa")


def test_methods_without_exemplars_take_no_number_of_them():
    with pytest.raises(InputError, match="^kept_per_class: must be None: ewc trains without exemplars; received 20"):
        Settings(0.1, 1.0, 20).checked("ewc")


def test_settings_are_plain_json_whatever_numbers_they_were_made_of():
    settings = Settings(np.float32(0.5), np.float64(2), np.int64(20)).checked("wa")
    assert json.loads(json.dumps(settings.as_dict())) == {
        "learning_rate": 0.5, "regularization": 2.0, "kept_per_class": 20}
    assert Settings(0.1, 1.0).as_dict() == {"learning_rate": 0.1, "regularization": 1.0}
    plan = Plan("ewc", np.int64(8), np.int32(3), np.uint8(16), np.int64(99)).checked()
    assert json.loads(json.dumps(plan.as_dict())) == {
        "method": "ewc", "hidden_units": 8, "passes": 3, "batch_size": 16, "memory_limit": 99}


@pytest.mark.parametrize("name, value, rule", [
    ("method", "xyz", "must be one of ewc, lwf, icarl, wa"), ("method", "WA", "must be one of"),
    ("method", None, "must be one of"), ("method", ["wa"], "must be one of"),
    ("hidden_units", -1, "must be a whole number from 0 to 4096"), ("hidden_units", 4097, "must be a whole number"),
    ("hidden_units", 64.0, "must be a whole number"), ("hidden_units", True, "must be a whole number"),
    ("passes", 0, "must be a whole number from 1 to 10000"), ("passes", "10", "must be a whole number"),
    ("batch_size", 0, "must be a whole number from 1 to 65536"), ("batch_size", np.nan, "must be a whole number"),
    ("memory_limit", 0, "must be a whole number of at least 1"), ("memory_limit", 2.5, "must be a whole number"),
    ("memory_limit", None, "must be a whole number"),
    ("memory_limit", "much", "must be a number of exemplars, or of bytes"),
])
def test_a_plan_that_breaks_a_rule_is_refused(name, value, rule):
    assert Plan().checked() == Plan()
    with pytest.raises(InputError, match=f"^{name}: {rule}") as caught:
        Plan(**{name: value}).checked()
    assert caught.value.parameter == name and len(str(caught.value).splitlines()) == 1


# Units: kB, MB, GB are powers of ten (SI), KiB, MiB, GiB powers of two (IEC 80000-13).
@pytest.mark.parametrize("text, n_bytes", [
    ("2 MB", 2_000_000), ("2MB", 2_000_000), ("1.5 kB", 1500), ("512 KiB", 524_288), ("0.5 MiB", 524_288),
    ("1 GiB", 2**30), ("3 gb", 3 * 10**9), ("  7  b ", 7), ("1 B", 1), ("999999999999999 B", 999_999_999_999_999),
])
def test_bytes_are_read_with_their_unit(text, n_bytes):
    assert parse_bytes("memory_limit", text) == n_bytes


@pytest.mark.parametrize("text", [
    "", " ", "2", "MB", "2 M", "2 TB", "-2 MB", "+2 MB", "0 MB", "0.4 B", "1e3 kB", "2,5 MB", "2 MB 3", "2..5 MB",
    ".5 MB", "nan MB", "inf MB", "9" * 400 + " MB", "٢ MB", "2\x00MB"])
def test_bytes_without_sense_are_refused(text):
    with pytest.raises(InputError, match="^memory_limit: must be a number of exemplars, or of bytes such as"):
        parse_bytes("memory_limit", text)


def test_memory_holds_whole_rows_of_features_and_a_label():
    # A row of 30 float32 numbers and a label of 8 bytes is 128 bytes.
    assert Plan(memory_limit="1 KiB").memory_rows(30) == 8
    assert Plan(memory_limit="1023 B").memory_rows(30) == 7
    assert Plan(memory_limit=50).memory_rows(30) == 50
    assert Plan(memory_limit=50).rows_per_class(30, 7) == 7
    assert Plan(memory_limit="1 KiB").rows_per_class(30, 8) == 1
    for limit in (6, "895 B"):
        with pytest.raises(InputError, match="^memory_limit: must hold at least one exemplar for each of 7 classes; "
                                             f"received {limit!r}; raise it$"):
            Plan(memory_limit=limit).rows_per_class(30, 7)


BOXES = [SettingsBox(method, most) for method in METHODS for most in (1, 2, 7, 80)]


@pytest.mark.parametrize("box", BOXES, ids=lambda box: f"{box.method}-{box.most_kept}")
def test_every_point_of_the_cube_is_valid_settings_that_lead_back(box):
    rng = np.random.default_rng(0)
    corners = np.array(np.meshgrid(*[[0.0, 1.0]] * box.n_dimensions)).reshape(box.n_dimensions, -1).T
    points = np.concatenate([corners, rng.random((300, box.n_dimensions)), rng.normal(0.5, 5, (50, box.n_dimensions))])
    settings = box.from_unit(points)
    for one in settings:
        assert one.checked(box.method) == one
        assert one.kept_per_class is None or one.kept_per_class <= box.most_kept
    # Six digits of a setting are kept, and a whole number takes the middle of its share.
    back = box.to_unit(settings)
    np.testing.assert_allclose(back[:, :2], np.clip(points, 0, 1)[:, :2], atol=1e-6)
    assert back.min() >= 0 and back.max() <= 1
    assert box.from_unit(back) == settings
    np.testing.assert_array_equal(box.to_unit(box.from_unit(back)), back)


def test_the_middle_of_the_cube_is_the_geometric_mean_of_the_ranges():
    box = SettingsBox("wa", 40)
    assert box.names == ("learning_rate", "regularization", "kept_per_class")
    # sqrt(0.5 * 40.5) = 4.5 exemplars lie half-way: numpy rounds halves to even, and the logarithm decides here.
    middle, = box.from_unit(np.full((1, 3), 0.5))
    assert (middle.learning_rate, middle.regularization) == (0.00316228, 1.0) and middle.kept_per_class in (4, 5)
    assert SettingsBox("ewc").from_unit(np.array([[0.5, 0.5], [0, 1]])) == [
        Settings(0.00316228, 100.0), Settings(1e-5, 1e6)]
    assert SettingsBox("wa", 200).most_kept == KEPT_PER_CLASS[1]


def test_settings_outside_the_box_are_cut_to_it():
    box = SettingsBox("wa", 10)
    assert box.from_unit(box.to_unit([Settings(50.0, 1e-9, 80), Settings(1e-9, 1e9, 1)])) == [
        Settings(1.0, 1e-3, 10), Settings(1e-5, 1e3, 1)]
    assert box.to_unit([]).shape == (0, 3)


@pytest.mark.parametrize("most", [1, 2, 5, 80])
def test_every_number_of_exemplars_has_its_share_of_the_cube(most):
    """On a logarithmic scale k has the share log((k + 1/2) / (k - 1/2)), at both ends as anywhere else."""
    n = 100_000
    points = np.zeros((n, 3))
    points[:, 2] = (np.arange(n) + 0.5) / n
    kept = np.array([one.kept_per_class for one in SettingsBox("wa", most).from_unit(points)])
    k = np.arange(1, most + 1)
    np.testing.assert_allclose(np.bincount(kept, minlength=most + 1)[1:] / n,
                               np.log((k + 0.5) / (k - 0.5)) / np.log((most + 0.5) / 0.5), atol=2 / n)


def test_settings_are_stable_under_rounding_of_the_point():
    """A point that another machine computes a few bits apart gives the same settings, but at the edge of a digit."""
    rng = np.random.default_rng(1)
    box = SettingsBox("icarl")
    points = rng.random((2000, 3))
    near = points * (1 + rng.integers(-4, 5, points.shape) * np.finfo(float).eps)
    assert np.mean([one == other for one, other in zip(box.from_unit(points), box.from_unit(near))]) > 0.999


def test_the_cube_is_even_in_logarithms():
    box = SettingsBox("lwf")
    points = np.linspace(0, 1, 11)[:, None] * [1, 1]
    for name, (low, high) in (("learning_rate", LEARNING_RATES), ("regularization", REGULARIZATIONS["lwf"])):
        values = [getattr(one, name) for one in box.from_unit(points)]
        ratios = [b / a for a, b in pairwise(values)]
        np.testing.assert_allclose(ratios, (high / low) ** 0.1, rtol=2e-5)


def test_scale_free_coordinates_by_hand():
    # 60 new rows; 4 exemplars of each of 10 old classes make 100 rows: 4 steps a pass of batches of 32, 5 passes.
    scales = {"curvature_new": 2.0, "curvature_exemplars": 0.5, "anchor_curvature": 4.0, "rows": 60, "classes_old": 10,
              "passes": 5, "batch_size": 32}
    a, r, k, s, c, e = 0.1, 3.0, 4.0, 20, 2.0, 0.5
    expected = {
        "log_learning_rate": a, "log_regularization": r, "log_kept_per_class": 4, "log_steps": s, "step_on_new": a * c,
        "step_on_exemplars": a * e, "travel": a * s, "travel_on_new": a * s * c, "anchor_step": a * r * k,
        "anchor_balance": r * k / c, "anchor_travel": a * s * r * k, "stability": a * (c + r * k)}
    row, = scale_free([Settings(a, r, 4)], scales)
    assert set(SCALES) == set(scales) and len(row) == len(COORDINATES)
    for name, value in zip(COORDINATES, row):
        assert value == pytest.approx(0.4 if name == "exemplar_share" else np.log10(expected[name]), rel=1e-12), name


def test_scale_free_coordinates_that_need_what_is_missing_are_missing():
    scales = {"curvature_new": np.nan, "curvature_exemplars": 0.0, "anchor_curvature": 4.0, "rows": 60,
              "classes_old": 10, "passes": 5, "batch_size": 32}
    row = dict(zip(COORDINATES, scale_free([Settings(0.1, 3.0)], scales)[0]))
    assert {name for name, value in row.items() if np.isnan(value)} == {
        "log_kept_per_class", "step_on_new", "step_on_exemplars", "travel_on_new", "anchor_balance", "stability"}
    assert row["exemplar_share"] == 0
    assert not np.isinf(list(row.values())).any()
