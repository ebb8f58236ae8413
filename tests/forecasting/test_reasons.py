"""Reasons: true of the models - putting descriptors back moves the advice by the factor told - and plain to read."""

from dataclasses import replace

import numpy as np
import pytest

from hyperforecast.describing import DESCRIPTORS
from hyperforecast.describing.words import GROUP_WORDS, WORDS
from hyperforecast.forecasting import TreeEnsemble, advise_settings
from hyperforecast.forecasting.forecaster import MODELS
from hyperforecast.forecasting.reasons import LAST, TYPICAL, Change, Reason, explain
from hyperforecast.settings import COORDINATES, SettingsBox

INPUTS = [*DESCRIPTORS, *COORDINATES]
BOX = SettingsBox("wa", 40)


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


def slope(name, up):
    """A tree that rises with the input, or falls, in four steps."""
    sign = 0.1 if up else -0.1
    low, high = (-5, 0) if name == "log_learning_rate" else (0, 1.6)
    a, b, c = np.linspace(low, high, 5)[1:-1]
    return split(name, b, split(name, a, leaf(-2 * sign), leaf(-sign)), split(name, c, leaf(sign), leaf(2 * sign)))


@pytest.fixture
def made(forecasters):
    """Function that returns a forecaster with one model made by hand, whose typical descriptors are all 100."""
    def make(tree, influential):
        flat = {name: ensemble(leaf(-5.0 if name == "diverged" else 0.0)) for name in MODELS}
        shifted = [(one, value if value is None else value - 1) for one, value in tree]
        return replace(forecasters["wa"], ranking="outcome", models={**flat, "shortfall": ensemble(shifted)},
                       typical=np.full(len(DESCRIPTORS), 100.0), influential=influential)

    return make


def here(**known):
    return {**dict.fromkeys(DESCRIPTORS, np.nan), "classes_old": 4.0, "classes_new": 2.0, **known}


TORN = split("rows", 50.0, slope("log_learning_rate", False), slope("log_learning_rate", True))


def test_a_reason_names_the_descriptor_that_moved_a_setting(made):
    """Few rows call for low learning rates, many for high ones; typical are 100."""
    advice = advise_settings(made(TORN, ("features", "rows", "classes_new")), here(rows=10.0, features=7.0), BOX)
    reason, = advice.reasons
    assert (reason.setting, reason.changes, reason.since) == ("learning_rate", (Change("rows", 10.0, 100.0),), TYPICAL)
    instead = advise_settings(advice.forecaster, here(rows=100.0, features=7.0), BOX)
    assert reason.factor == advice.settings.learning_rate / instead.settings.learning_rate < 0.01
    assert str(reason) == (f"learning rate {1 / reason.factor:.2g} times lower, because of the number of rows to train "
                           "on, 10 times less (10, 100 in the records)")
    assert instead.reasons == []


def test_the_last_boundary_is_held_against_where_there_is_one(made):
    forecaster = made(TORN, ("rows", "features"))
    advice = advise_settings(forecaster, here(rows=80.0), BOX, before=here(rows=20.0))
    reason, = advice.reasons
    assert (reason.changes, reason.since) == ((Change("rows", 80.0, 20.0),), LAST)
    assert reason.factor > 100 and "4 times as much (80, 20 at the last boundary)" in str(reason)
    assert advise_settings(forecaster, here(rows=80.0), BOX, before=here(rows=90.0)).reasons == []
    assert advise_settings(forecaster, here(rows=80.0), BOX, before=here(rows=80.0)).reasons == []
    assert advise_settings(forecaster, here(rows=80.0), BOX, before=here()).reasons == []


def test_each_setting_has_its_own_reason(made):
    tree = split("rows", 50.0, slope("log_learning_rate", False), slope("log_learning_rate", True))
    other = split("passes", 50.0, slope("log_kept_per_class", True), slope("log_kept_per_class", False))
    forecaster = made(leaf(0.0), ("rows", "passes"))
    both = ensemble([(one, value if value is None else value - 1) for one, value in tree], other)
    forecaster = replace(forecaster, models={**forecaster.models, "shortfall": both})
    advice = advise_settings(forecaster, here(rows=10.0, passes=10.0), BOX)
    assert {one.setting: [change.descriptor for change in one.changes] for one in advice.reasons} == {
        "learning_rate": ["rows"], "kept_per_class": ["passes"]}
    assert [one.factor > 1 for one in sorted(advice.reasons, key=str)] == [True, False]


def test_descriptors_that_move_a_setting_only_together_are_told_as_a_group(made):
    """Low rates are called for while either of two descriptors of the increment is low."""
    tree = split("rows", 50.0, slope("log_learning_rate", False), split(
        "features", 50.0, slope("log_learning_rate", False), slope("log_learning_rate", True)))
    advice = advise_settings(made(tree, ("rows", "features", "passes")), here(rows=10.0, features=20.0, passes=3.0), BOX)
    reason, = advice.reasons
    assert {one.descriptor for one in reason.changes} == {"rows", "features"}
    instead = advise_settings(advice.forecaster, here(rows=100.0, features=100.0, passes=3.0), BOX)
    assert reason.factor == advice.settings.learning_rate / instead.settings.learning_rate < 0.01
    assert "because of the increment itself: " in str(reason)


@pytest.mark.parametrize("method", ["wa", "ewc"])
def test_reasons_agree_with_advice_taken_anew(method, forecasters, datasets):
    """At real boundaries, against the one before and against typical ones: the factor is that of two advices."""
    forecaster, dataset = replace(forecasters[method], ranking="outcome"), datasets[method]
    typical, told = dict(zip(DESCRIPTORS, forecaster.typical)), 0
    for n in range(1, dataset.n_boundaries, 4):
        now, last = (dict(zip(DESCRIPTORS, dataset.descriptors[k])) for k in (n, n - 1))
        box = SettingsBox(method, int(dataset.most_kept[n]))
        for before, reference in (({}, typical), (last, last)):
            advice = advise_settings(forecaster, now, box, before=before)
            reasons = advice.reasons
            assert len({one.setting for one in reasons}) == len(reasons)
            for reason in reasons:
                put_back = {one.descriptor: reference[one.descriptor] for one in reason.changes}
                assert all(one.value == now[one.descriptor] != one.reference == reference[one.descriptor]
                           for one in reason.changes)
                instead = advise_settings(forecaster, {**now, **put_back}, box)
                factor = getattr(advice.settings, reason.setting) / getattr(instead.settings, reason.setting)
                assert reason.factor == pytest.approx(factor, rel=1e-12) and max(factor, 1 / factor) >= 1.1
                assert f"{max(factor, 1 / factor):.2g} times {'higher' if factor > 1 else 'lower'}" in str(reason)
                told += 1
    assert told > 5


def test_the_constant_has_no_reasons(made):
    advice = advise_settings(made(TORN, ("rows",)), here(rows=1.0, rows_per_class=1.0), BOX, unfamiliar="constant")
    assert advice.settings == advice.constant and explain(advice) == []


def test_reasons_read_as_sentences():
    assert str(Reason("learning_rate", 0.25, (Change("curvature_exemplars", 42.0, 5.2),), LAST)) == (
        "learning rate 4 times lower, because of the curvature of the old rows' loss, 8.1 times as much "
        "(42, 5.2 at the last boundary)")
    assert str(Reason("kept_per_class", 3.0, (Change("gradient_cosine", -0.5, 0.1), Change("loss_exemplars", 1.0, 2.0)),
                      TYPICAL)) == (
        "kept per class 3 times higher, because of the old model: the agreement of the two losses' gradients "
        "(-0.5, 0.1 in the records); the loss on old rows, 2 times less (1, 2 in the records)")
    assert "a new one, 3 times" in str(Reason("learning_rate", 2.0, (Change("a_new_one", 3.0, 1.0),), LAST))


def test_every_descriptor_has_words():
    assert set(WORDS) >= set(DESCRIPTORS) and len(set(WORDS.values())) == len(WORDS)
    assert set(GROUP_WORDS) == {one.group for one in DESCRIPTORS.values()}
