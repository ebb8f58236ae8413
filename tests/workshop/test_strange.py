"""Streams made strange: the fault is where it is said to be, and nowhere else; and it is told of at the boundary."""

import numpy as np
import pytest

from hyperforecast.checks import InputError
from hyperforecast.describing import DESCRIPTORS, describe
from hyperforecast.forecasting import opening_settings
from hyperforecast.forecasting.familiarity import Familiarity, signs_of_faults
from hyperforecast.increments import Increment
from hyperforecast.learning import HeadTrainer, close_boundary, open_boundary, try_settings
from hyperforecast.settings import Plan
from hyperforecast.workshop.streams import KINDS, make_strange

CENTERS = 3 * np.random.default_rng(0).normal(size=(12, 8))


def increments(seed=0, labels=np.arange(12)):
    """Four increments of three Gaussian classes, 24 rows of each, easy to tell apart."""
    rng = np.random.default_rng([seed, 1])
    parts = []
    for t in range(4):
        y = np.repeat(np.arange(3 * t, 3 * t + 3), 24)
        parts.append(Increment((CENTERS[y] + rng.normal(size=(len(y), 8))).astype(np.float32), labels[y]))
    return parts


def told_at(stream, t):
    """Descriptors at a boundary of a stream's increments, walked through with the opening settings."""
    trainer, carryover = HeadTrainer(), None
    plan = Plan("wa", 8, 3, 32, 8 * len(np.unique(np.concatenate([one.y for one in stream]))))
    for s, increment in enumerate(stream[:t + 1]):
        boundary = open_boundary(plan, carryover, increment, seed=s)
        if s == t:
            return describe(trainer, boundary, seed=s)
        attempt = try_settings(trainer, boundary, [opening_settings(plan)], seed=s)[0]
        carryover = close_boundary(trainer, boundary, attempt, seed=s)


@pytest.mark.parametrize("kind", KINDS)
def test_only_what_is_said_is_made_strange(kind):
    before = increments()
    strange = make_strange(before, kind, np.random.default_rng(3))
    assert all(np.array_equal(one.X, other.X) for one, other in zip(before, increments()))
    assert 0 not in strange.boundaries and len(strange.boundaries) == (
        3 if kind in ("shuffled stream", "thousand classes") else 1)
    if kind == "thousand classes":
        assert len(np.unique(np.concatenate([one.y for one in strange.increments]))) == 1000
        return
    rows = [sorted(map(bytes, one.X)) for one in strange.increments]
    t = strange.boundaries[0]
    if kind in ("shuffled stream", "shuffled increment", "twice at once", "twice later"):
        assert sorted(sum(rows, [])) == sorted(sum((sorted(map(bytes, one.X)) for one in before), []))
    names = {label for one in strange.increments for label in one.y.tolist()}
    assert len(names) == (13 if kind.startswith("twice") else 12)
    if kind.startswith("twice"):
        assert (strange.increments[t].y == 12).sum() == 12
    if kind in ("thousandfold", "shifted", "one feature"):
        changed = strange.increments[t].X != before[t].X
        assert (changed.all(axis=0).sum() == 1 and changed.any(axis=0).sum() == 1) if kind == "one feature" else changed.all()
    if kind == "single rows":
        assert strange.increments[t].y.tolist() == before[t].y[::24].tolist()


def test_labels_that_are_text_get_a_new_one():
    names = np.array([f"part {k:02d}" for k in range(12)])
    strange = make_strange(increments(labels=names), "twice at once", np.random.default_rng(0))
    assert "part 11 again" in strange.increments[strange.boundaries[0]].y


def test_a_stream_without_a_place_for_the_fault_stays_as_it_is():
    single = [increments()[0], Increment(CENTERS[[3, 3]].astype(np.float32), np.array([3, 3]))]
    assert make_strange(single, "shuffled increment", np.random.default_rng(0)).boundaries == ()
    with pytest.raises(InputError, match="^increments: must be at least two; received 1"):
        make_strange(single[:1], "shifted", np.random.default_rng(0))
    with pytest.raises(InputError, match="^kind: must be one of "):
        make_strange(single, "odd", np.random.default_rng(0))


@pytest.fixture(scope="module")
def usual():
    """Familiarity fitted on the plain streams of other seeds, two of them standing for sources."""
    plain = [told_at(increments(seed), t) for seed in range(8) for t in (1, 2, 3)]
    D = [[one[name] for name in DESCRIPTORS] for one in plain]
    return Familiarity.fit(D, list(DESCRIPTORS), np.arange(len(D)) % 2, seed=0)


@pytest.mark.parametrize("kind", KINDS)
def test_faults_are_told_of(kind, usual):
    flagged = []
    for seed in range(3):
        strange = make_strange(increments(20 + seed), kind, np.random.default_rng(seed))
        # The last boundaries of a thousand classes take long.
        flagged += [not usual.assess(told_at(strange.increments, t)).familiar for t in strange.boundaries if t < 2
                    or kind != "thousand classes"]
    assert np.mean(flagged) >= 0.8


def test_plain_streams_show_no_signs_of_faults():
    for seed in range(3):
        for t in (1, 3):
            assert list(signs_of_faults(told_at(increments(40 + seed), t))) == []
