"""Advice: inside the box, the same every time, and what the models say - checked on models made by hand."""

import json
from dataclasses import replace

import numpy as np
import pytest

from hyperforecast.checks import InputError
from hyperforecast.describing import DESCRIPTORS
from hyperforecast.forecasting import TreeEnsemble, advise_settings, choice, load_forecaster, save_forecaster
from hyperforecast.forecasting.forecaster import MODELS
from hyperforecast.settings import COORDINATES, Settings, SettingsBox

INPUTS = [*DESCRIPTORS, *COORDINATES]
LOW, HIGH = -3.0, -1.0  # decimal logarithms of learning rates


def leaf(value):
    return [(None, value)]


def split(name, threshold, left, right):
    """Nodes in preorder of a tree that goes left where the input `name` is at most `threshold`."""
    return [((INPUTS.index(name), threshold), None), *left, *right]


def ensemble(*trees):
    nodes = [node for tree in trees for node in tree]
    splits = sorted({one for one, _ in nodes if one})
    feature, threshold = np.array(splits).reshape(-1, 2).T
    return TreeEnsemble(len(INPUTS), feature, threshold, np.full(len(splits), 2), np.ones(len(splits), bool),
                        np.array([splits.index(one) if one else -1 for one, _ in nodes]),
                        np.array([value for one, value in nodes if not one], float))


def band(name, low, high):
    """Tree that is 0 where the input is in (low, high], else -1."""
    return split(name, low, leaf(-1.0), split(name, high, leaf(0.0), leaf(-1.0)))


@pytest.fixture
def made(forecasters):
    """Function that returns a forecaster with some models made by hand and nothing to choose by in the others."""
    def make(method="wa", **models):
        flat = {name: ensemble(leaf(-5.0 if name == "diverged" else 0.0)) for name in MODELS}
        return replace(forecasters[method], ranking="outcome", models={**flat, **models})

    return make


@pytest.fixture
def here(datasets):
    return dict(zip(DESCRIPTORS, datasets["wa"].descriptors[2]))


@pytest.fixture
def direct(made):
    """A forecaster that names settings directly: 0.3, 0.6 and 0.9 of the way along each axis."""
    return replace(made(learning_rate=ensemble(leaf(0.3)), regularization=ensemble(leaf(0.6)),
                        kept_per_class=ensemble(leaf(0.9))), ranking="direct")


# Whatever the forecaster, the boundary and the memory.


@pytest.mark.parametrize("most_kept", [1, 2, 5, 80])
@pytest.mark.parametrize("method", ["wa", "ewc"])
def test_advice_stays_in_the_box_and_its_alternatives_apart(method, most_kept, forecasters, datasets):
    box, dataset = SettingsBox(method, most_kept), datasets[method]
    for row in dataset.descriptors[::4]:
        found = advise_settings(forecasters[method], dict(zip(DESCRIPTORS, row)), box)
        assert found.ranked == [found.settings, *found.alternatives] and 1 <= len(found.alternatives) <= 8
        for one in (*found.ranked, found.constant):
            assert one.checked(method) == one
            assert one.kept_per_class is None or one.kept_per_class <= most_kept
        points = box.to_unit(found.ranked)
        apart = np.linalg.norm(points[:, None] - points, axis=2) + 9 * np.eye(len(points))
        assert apart.min() >= 0.08
        for expected in (found.expected_old, found.expected_new, found.expected_all):
            assert 0 <= expected.low <= expected.value <= expected.high <= 1
        assert 0 <= found.divergence <= 1 and 0 <= found.familiarity.score <= 1
        document = json.loads(json.dumps(found.as_dict(), allow_nan=False))
        assert document["settings"] == found.settings.as_dict() and document["method"] == method
        assert len(document["alternatives"]) == len(found.alternatives)
        assert document["forecaster"] == forecasters[method].checksum
        assert [one["text"] for one in document["reasons"]] == [str(one) for one in found.reasons]


def test_the_same_boundary_gets_the_same_advice(forecasters, here, tmp_path):
    save_forecaster(tmp_path / "a.forecaster", forecasters["wa"])
    first, again, loaded = (advise_settings(one, dict(here), SettingsBox("wa", 20)).as_dict() for one in (
        forecasters["wa"], forecasters["wa"], load_forecaster(tmp_path / "a.forecaster")))
    assert first == again == loaded


def test_advice_copes_with_missing_descriptors(forecasters, here, direct):
    shuffled = np.random.default_rng(0).permutation(list(DESCRIPTORS)).tolist()
    some_missing = [{**here, **dict.fromkeys(shuffled[:n], np.nan)} for n in (1, 20, 50)]
    for forecaster in (forecasters["wa"], direct):
        for descriptors in ({}, dict.fromkeys(DESCRIPTORS, np.nan), *some_missing):
            found = advise_settings(forecaster, descriptors, SettingsBox("wa", 20))
            assert found.settings.checked("wa") and found.constant.checked("wa")
            json.dumps(found.as_dict(), allow_nan=False)


def test_advice_tells_what_the_forecaster_says_of_its_settings(forecasters, here):
    forecaster, box = forecasters["wa"], SettingsBox("wa", 20)
    found, at = advise_settings(forecaster, here, box), forecasters["wa"].at(here)
    expected = at.expected([found.settings])
    assert (found.expected_old, found.expected_new, found.expected_all) == tuple(
        expected[name].at(0) for name in ("old", "new", "all"))
    assert found.divergence == at.divergence([found.settings])[0]
    assert found.familiarity == forecaster.familiarity.assess(here)
    assert found.constant == forecaster.constant_settings(here, box)


@pytest.mark.parametrize("name", ["now_weight", "old_weight", "tolerance"])
@pytest.mark.parametrize("weight", [-0.1, 1.1, np.nan, "1", True])
def test_preferences_are_shares(name, weight, forecasters, here):
    with pytest.raises(InputError, match=f"^{name}: must be a number from 0 to 1; received "):
        advise_settings(forecasters["wa"], here, SettingsBox("wa"), **{name: weight})


# Models made by hand.


def test_the_advice_lies_where_the_model_says_and_not_at_the_edge(made, here):
    """The good region is a decade of learning rates; all else being equal, its middle is the safer place."""
    forecaster = made(shortfall=ensemble(band("log_learning_rate", LOW, LOW + 1)))
    found = advise_settings(forecaster, here, SettingsBox("wa", 40))
    logs = np.log10([one.learning_rate for one in found.ranked])
    assert LOW + 0.1 < logs[0] < LOW + 0.9
    assert ((LOW < logs) & (logs <= LOW + 1)).sum() >= 4 and (np.abs(logs - LOW - 0.5) < 1.6).all()


def test_settings_that_may_well_diverge_have_their_price(made, here):
    """Higher learning rates promise more, and diverge beyond a hundredth with probability 0.95."""
    greedy = ensemble(*(split("log_learning_rate", t, leaf(-0.01), leaf(0.0)) for t in np.arange(-5, 0, 0.25)))
    diverges = ensemble(split("log_learning_rate", -2.0, leaf(-3.0), leaf(3.0)))
    box = SettingsBox("wa", 40)
    assert advise_settings(made(shortfall=greedy), here, box).settings.learning_rate > 0.1
    found = advise_settings(made(shortfall=greedy, diverged=diverges), here, box)
    assert 1e-3 < found.settings.learning_rate <= 1e-2
    assert found.divergence == pytest.approx(1 / (1 + np.exp(3)), rel=1e-12)
    # Where everything diverges there is advice still, with that said.
    found = advise_settings(made(shortfall=greedy, diverged=ensemble(leaf(3.0))), here, box)
    assert found.settings.learning_rate > 0.1 and found.divergence > 0.9


def test_later_boundaries_weigh_as_much_as_is_told(made, here):
    """Now a low learning rate is better by 0.3, later a high one by 0.3."""
    now = ensemble(split("log_learning_rate", -2.5, leaf(0.0), leaf(-0.3)))
    later = ensemble(split("log_learning_rate", -2.5, leaf(0.0), leaf(0.3)))
    forecaster, box = made(shortfall=now, later=later), SettingsBox("wa", 40)
    assert advise_settings(forecaster, here, box, now_weight=1).settings.learning_rate < 10**-2.5
    again = made(shortfall=ensemble(split("log_learning_rate", -2.5, leaf(0.0), leaf(-0.1))), later=later)
    assert advise_settings(again, here, box, now_weight=0).settings.learning_rate > 10**-2.5
    assert advise_settings(again, here, box).settings.learning_rate > 10**-2.5
    assert advise_settings(again, here, box, now_weight=0.9).settings.learning_rate < 10**-2.5


@pytest.mark.parametrize("sign", [{"closest_classes": 1.0}, {"cut_feature": 0.9}, {"rows_per_class": 1.0}])
def test_at_a_boundary_unlike_the_records_the_user_decides(sign, made, here):
    """The models say a low learning rate; the constant is another one."""
    forecaster = made(shortfall=ensemble(band("log_learning_rate", LOW, LOW + 1)))
    box, strange = SettingsBox("wa", 40), {**here, **sign}
    tried, warned, constant = (advise_settings(forecaster, strange, box, unfamiliar=policy)
                               for policy in ("try 5", "warn", "constant"))
    for one, policy in ((tried, "try 5"), (warned, "warn"), (constant, "constant")):
        assert one.unfamiliar == policy and len(one.familiarity.why) >= 1
    assert tried.ranked == warned.ranked and tried.to_try == tried.ranked[:5] and warned.to_try == [warned.settings]
    assert constant.settings == constant.constant == tried.constant != tried.settings
    assert constant.ranked[1] == tried.settings and constant.to_try == [constant.constant]
    assert constant.expected_all.value == forecaster.at(strange).expected([constant.constant])["all"].value[0]
    # Where nothing is strange there is nothing to decide.
    usual = replace(forecaster, familiarity=replace(forecaster.familiarity, distances=np.full(9, 1e9, np.float32),
                                                    low=forecaster.familiarity.low - 1e99,
                                                    high=forecaster.familiarity.high + 1e99))
    plain = {**here, "closest_classes": 5.0, "cut_feature": 0.0, "rows_per_class": 9.0}
    found = [advise_settings(usual, plain, box, unfamiliar=policy) for policy in ("try 5", "warn", "constant")]
    assert [one.unfamiliar for one in found] == [None] * 3 and [one.to_try for one in found] == [[found[0].settings]] * 3


@pytest.mark.parametrize("method", ["wa", "ewc"])
def test_the_weight_of_old_classes_moves_what_is_expected_of_them(method, forecasters, datasets):
    """With w old + (1 - w) new to be maximized, old - new can only rise with w, but for the steps of the search."""
    forecaster = replace(forecasters[method], ranking="outcome")
    moved = []
    for row, most_kept in list(zip(datasets[method].descriptors, datasets[method].most_kept))[::3]:
        here, box = dict(zip(DESCRIPTORS, row)), SettingsBox(method, int(most_kept))
        found = [advise_settings(forecaster, here, box, old_weight=weight) for weight in (0, 0.25, 0.5, 0.75, 1)]
        moved.append([[one.expected_old.value, one.expected_new.value] for one in found])
    old, new = np.moveaxis(np.array(moved), 2, 0)
    assert (np.diff(old.mean(axis=0)) >= -0.003).all() and (np.diff(new.mean(axis=0)) <= 0.003).all()
    assert np.mean(np.diff(old - new) >= -0.02) > 0.9
    assert (old[:, -1] - old[:, 0]).mean() > 0.05 and (new[:, 0] - new[:, -1]).mean() > 0.03


def test_the_weight_of_old_classes_by_hand(made, here):
    """A low learning rate costs new classes 0.4, a high one old classes 0.2; of three classes two are old."""
    outcomes = {"old": ensemble(split("log_learning_rate", -2.5, leaf(0.8), leaf(0.6))),
                "new": ensemble(split("log_learning_rate", -2.5, leaf(0.3), leaf(0.7)))}
    here, box = {**here, "classes_old": 2.0, "classes_new": 1.0}, SettingsBox("wa", 40)
    # 2/3 x 0.8 + 1/3 x 0.3 = 0.633 against 2/3 x 0.6 + 1/3 x 0.7 = 0.633: even by class count.
    forecaster = made(**outcomes)
    assert advise_settings(forecaster, here, box, old_weight=0.7).settings.learning_rate < 10**-2.5
    assert advise_settings(forecaster, here, box, old_weight=0.6).settings.learning_rate > 10**-2.5
    # The models of all classes say which is better there: it takes so much more weight of old classes to overrule.
    forecaster = made(**outcomes, shortfall=ensemble(split("log_learning_rate", -2.5, leaf(-0.06), leaf(0.0))))
    assert advise_settings(forecaster, here, box, now_weight=1).settings.learning_rate > 10**-2.5
    assert advise_settings(forecaster, here, box, now_weight=1, old_weight=0.75).settings.learning_rate > 10**-2.5
    assert advise_settings(forecaster, here, box, now_weight=1, old_weight=0.8).settings.learning_rate < 10**-2.5


@pytest.mark.parametrize("gain, tolerance, expected", [(0.004, 0.003, 11), (0.03, 0.04, 1), (0.03, 0, 11)])
def test_the_tolerance_is_the_users(gain, tolerance, expected, made, here):
    forecaster = made(shortfall=ensemble(split("log_kept_per_class", 1.0, leaf(-gain), leaf(0.0))))
    found = advise_settings(forecaster, here, SettingsBox("wa", 40), now_weight=1, tolerance=tolerance)
    assert found.settings.kept_per_class == expected
    assert found.as_dict()["preferences"] == {
        "old_weight": None, "now_weight": 1, "tolerance": tolerance, "unfamiliar": "try 4"}


@pytest.mark.parametrize("gain, expected", [(0.004, 1), (0.006, 11)])
def test_exemplars_are_spent_only_where_they_bring_more_than_half_a_point(gain, expected, made, here):
    """More than ten exemplars of a class bring `gain`; 11 is the first of 24 even steps up to 40 beyond ten."""
    box = SettingsBox("wa", 40)
    steps = np.unique(np.round(np.geomspace(1, 40, 24)))
    assert steps[steps > 10][0] == 11
    forecaster = made(shortfall=ensemble(split("log_kept_per_class", 1.0, leaf(-gain), leaf(0.0))))
    found = advise_settings(forecaster, here, box, now_weight=1)
    assert found.settings.kept_per_class == expected


def test_alternatives_are_ranked_by_the_models(made, here, monkeypatch):
    """Without smoothing the score of a candidate is its own, and can be looked up."""
    monkeypatch.setattr(choice, "NEIGHBOURHOOD", 1e-3)
    rng = np.random.default_rng(0)
    rough = ensemble(*(split(name, t, leaf(-rng.random() / 50), leaf(-rng.random() / 50))
                       for name, low, high in (("log_learning_rate", -5, 0), ("log_regularization", -3, 3),
                                               ("log_kept_per_class", 0, 1.6))
                       for t in rng.uniform(low, high, 12)))
    found = advise_settings(made(shortfall=rough), here, SettingsBox("wa", 40), tolerance=0)
    values = found.forecaster.at(here).shortfall(found.ranked)
    assert len(set(values)) > 3
    assert (np.diff(values) <= 1e-9).all()
    box = SettingsBox("wa", 40)
    every = found.forecaster.at(here).shortfall(box.from_unit(choice.lattice(256, 3)))
    assert values[0] >= every.max() - 1e-12


def test_direct_forecasts_are_followed_to_the_next_candidate(direct, here):
    box = SettingsBox("wa", 40)
    found = advise_settings(direct, here, box)
    point, = box.to_unit([found.settings])
    np.testing.assert_allclose(point[:2], [0.3, 0.6], atol=0.07)
    # The rest of the settings being as good, the fewest exemplars are kept.
    assert found.settings.kept_per_class == 1
    distances = np.linalg.norm(box.to_unit(found.alternatives) - [0.3, 0.6, 0.9], axis=1)
    assert distances[0] < 0.15 and np.mean(np.diff(distances) > 0) > 0.6


def test_spreads_say_how_far_a_setting_is_good(made, here):
    """A learning rate of one decade is good; of the exemplars more than 10 of a class cost two points."""
    forecaster = made(shortfall=ensemble(band("log_learning_rate", LOW, LOW + 1),
                                         split("log_kept_per_class", 1.0, leaf(0.0), leaf(-0.02))))
    found = advise_settings(forecaster, here, SettingsBox("wa", 40), now_weight=1)
    # Half a decade up or down, to a step of the scan (5/32 of a decade); regularization has no part in it.
    assert abs(np.log10(found.spreads["learning_rate"]) - 0.5) < 5 / 32
    assert found.spreads["regularization"] >= 1e2
    # From the advised one exemplar to 10, on a whole number's grid.
    assert found.settings.kept_per_class == 1 and 9 <= found.spreads["kept_per_class"] ** 2 <= 10
    steep = advise_settings(made(shortfall=ensemble(*(
        split("log_learning_rate", t, leaf(-0.02 * (t < -2)), leaf(-0.02 * (t >= -2))) for t in np.arange(-5, 0, 0.1)))),
        here, SettingsBox("wa", 40), now_weight=1)
    assert 1 <= steep.spreads["learning_rate"] < found.spreads["learning_rate"]
    assert steep.as_dict()["spreads"] == steep.spreads


@pytest.mark.parametrize("n_dimensions", [2, 3])
def test_candidates_fill_the_cube_evenly(n_dimensions):
    """The recurrence with the powers of 1/g, g the root of g^(D+1) = g + 1: 1.3247 for two axes, 1.2207 for three.

    Roberts 2018, "The Unreasonable Effectiveness of Quasirandom Sequences", from memory.
    """
    points = choice.lattice(256, n_dimensions)
    g = {2: 1.32471795724474602596, 3: 1.22074408460575947536}[n_dimensions]
    steps = g ** -np.arange(1, n_dimensions + 1)
    np.testing.assert_allclose(np.diff(points, axis=0) % 1, np.tile(steps, (255, 1)), atol=1e-9)
    # Every axis alone is met without large gaps, and so is the cube: each of its eighths or quarters has its share.
    assert np.diff(np.sort(points, axis=0), axis=0).max() < 0.02
    cells = np.unique((points * 2).astype(int), axis=0, return_counts=True)[1]
    assert len(cells) == 2**n_dimensions and abs(cells / cells.mean() - 1).max() < 0.2


def test_settings_type_of_advice_is_plain(forecasters, here):
    found = advise_settings(forecasters["ewc"], here, SettingsBox("ewc"))
    assert isinstance(found.settings, Settings) and found.settings.kept_per_class is None
