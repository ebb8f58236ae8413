import json

import numpy as np
import pytest

from hyperforecast.checks import InputError
from hyperforecast.describing import DESCRIPTORS
from hyperforecast.forecasting import advise_settings
from hyperforecast.settings import Settings, SettingsBox
from hyperforecast.workshop.searching import (
    STRATEGIES,
    SearchResult,
    WarmStart,
    read_warm_starts,
    run_search,
    space_filling,
    uniform_draws,
    warm_starts_of,
    write_warm_starts,
)
from hyperforecast.workshop.searching.tpe import ParzenDensity, propose

EWC, WA = SettingsBox("ewc"), SettingsBox("wa", 40)
SOME = [Settings(0.01, 1.0, 20), Settings(0.02, 3.0, 60)]
STARTS = [WarmStart(one, {"learning_rate": 2.0, "regularization": 3.0, "kept_per_class": 3.0}) for one in SOME]


def ridge(box, width, crest):
    """Return a score of settings: a thin curved valley turned upside down, higher towards `crest`, 0.9 at most."""
    def evaluate(settings):
        points = box.to_unit(settings)
        along, across = points[:, 0], points[:, 1]
        curve = 0.15 + (along - crest) ** 2 + 0.3 * along
        score = 0.9 * np.exp(-np.abs(across - curve) / width) * np.exp(-((along - crest) / 0.3) ** 2)
        if box.n_dimensions == 3:
            score = score * (1.0 - 0.4 * np.exp(-4.0 * points[:, 2]))
        return score

    return evaluate


def failing_ridge(settings):
    scores = ridge(WA, 0.1, 0.5)(settings)
    return np.where(WA.to_unit(settings)[:, 0] > 0.7, np.nan, scores)


@pytest.mark.parametrize("design", [space_filling, uniform_draws])
def test_designs_lie_in_the_cube_repeat_with_the_seed_and_begin_alike(design):
    points = design(50, 3, seed=4)
    assert points.shape == (50, 3) and points.min() >= 0.0 and points.max() < 1.0
    np.testing.assert_array_equal(points[:11], design(11, 3, seed=4))
    assert not np.array_equal(points, design(50, 3, seed=5))


def test_space_filling_puts_one_point_in_each_slice_of_every_axis():
    points = space_filling(32, 3, seed=1)
    for axis in points.T:
        assert sorted((axis * 32).astype(int)) == list(range(32))


@pytest.mark.parametrize("box, width, crest", [(EWC, 0.06, 0.3), (WA, 0.06, 0.6)])
def test_tpe_beats_random_on_a_narrow_curved_ridge(box, width, crest):
    evaluate = ridge(box, width, crest)

    def mean_best(strategy):
        return np.mean([run_search(evaluate, box, strategy=strategy, attempts=64, seed=seed).best_so_far[-1]
                        for seed in range(24)])

    # Measured over 60 seeds: TPE .82 and .73, random .60 and .56.
    assert mean_best("tpe") > mean_best("random") + 0.1


@pytest.mark.parametrize("strategy", STRATEGIES)
@pytest.mark.parametrize("warm_starts", [[], SOME])
@pytest.mark.parametrize("interrupted_after", [3, 8, 24, 27, 40])
def test_a_resumed_search_equals_an_uninterrupted_one(strategy, warm_starts, interrupted_after):
    options = {"strategy": strategy, "warm_starts": warm_starts, "seed": 11}
    whole = run_search(failing_ridge, WA, attempts=40, **options)
    part = run_search(failing_ridge, WA, attempts=interrupted_after, **options)
    kept = json.loads(json.dumps(part.as_dict(), allow_nan=False))
    resumed = run_search(failing_ridge, WA, attempts=40, earlier=SearchResult.from_dict(kept, "wa"), **options)
    assert part.settings == whole.settings[:interrupted_after]
    assert resumed.as_dict() == whole.as_dict()
    assert np.isnan(whole.scores).any()


def test_random_8_is_the_first_8_of_random_64():
    eight, more = (run_search(ridge(WA, 0.1, 0.5), WA, strategy="random", attempts=attempts, seed=3)
                   for attempts in (8, 64))
    assert eight.settings == more.settings[:8]
    np.testing.assert_array_equal(eight.scores, more.scores[:8])


@pytest.mark.parametrize("strategy", STRATEGIES)
def test_searches_repeat_with_the_seed_only(strategy):
    results = [run_search(failing_ridge, WA, strategy=strategy, attempts=24, seed=seed) for seed in (1, 1, 2)]
    assert results[0].as_dict() == results[1].as_dict()
    assert results[0].settings != results[2].settings


def test_batches_are_tried_side_by_side_and_hold_no_repeats():
    sizes = []

    def evaluate(settings):
        sizes.append(len(settings))
        assert len(set(settings)) == len(settings)
        return ridge(WA, 0.1, 0.5)(settings)

    result = run_search(evaluate, WA, strategy="tpe", attempts=60, seed=0)
    assert sizes == [8] * 7 + [4]
    assert len(set(result.settings)) == 60
    assert max(one.kept_per_class for one in result.settings) <= 40


def test_pending_proposals_keep_the_next_one_away():
    # With nothing known, the prior proposes anything; a crowd of pending points leaves the other half.
    pending = np.column_stack([np.linspace(0.0, 0.5, 40), np.tile([0.25, 0.75], 20)])
    proposals = [propose(np.empty((0, 2)), np.empty(0), pending, np.random.default_rng(seed)) for seed in range(20)]
    assert all(point[0] > 0.5 for point in proposals)


def test_warm_starts_come_first_count_as_attempts_and_shorten_the_startup():
    warm = [Settings(0.01 * (1 + index / 50), 1.0, 20) for index in range(16)]
    result = run_search(ridge(WA, 0.1, 0.5), WA, strategy="tpe", attempts=24, warm_starts=warm, seed=5)
    assert result.settings[:16] == warm
    design = WA.from_unit(space_filling(16, 3, seed=5))
    assert not set(design) & set(result.settings)
    two = run_search(ridge(WA, 0.1, 0.5), WA, strategy="tpe", attempts=24, warm_starts=warm[:2], seed=5)
    assert two.settings[:16] == warm[:2] + design[2:]


def test_a_warm_start_holds_no_more_exemplars_than_the_box_allows():
    result = run_search(failing_ridge, WA, strategy="tpe", attempts=1, warm_starts=[Settings(0.1, 1.0, 80)], seed=0)
    assert result.settings == [Settings(0.1, 1.0, 40)]


def test_failures_are_chosen_only_if_all_fail():
    def evaluate(settings):
        scores = np.full(len(settings), np.nan)
        scores[-1] = 0.3
        return scores

    result = run_search(evaluate, EWC, strategy="random", attempts=8, seed=0)
    assert result.best_index == 7 and result.best == result.settings[7]
    assert result.as_dict()["best_so_far"] == [None] * 7 + [0.3]
    none = run_search(lambda settings: np.full(len(settings), np.nan), EWC, strategy="tpe", attempts=24, seed=0)
    assert none.best_index == 0 and len(none) == 24
    assert none.as_dict()["scores"] == [None] * 24


def test_progress_is_told_after_each_batch():
    seen = []
    result = run_search(failing_ridge, WA, strategy="tpe", attempts=20, seed=0, on_progress=seen.append)
    assert [len(one) for one in seen] == [8, 16, 20]
    assert seen[0].settings == result.settings[:8] and seen[-1].as_dict() == result.as_dict()


def test_a_finished_search_is_not_tried_again():
    result = run_search(failing_ridge, WA, strategy="tpe", attempts=8, seed=0)

    def evaluate(settings):
        raise AssertionError("nothing is left to try")

    again = run_search(evaluate, WA, strategy="tpe", attempts=8, seed=0, earlier=result)
    assert again.as_dict() == result.as_dict()


@pytest.mark.parametrize("changed, match", [
    ({"strategy": "anneal"}, "^strategy: "),
    ({"attempts": 0}, "^attempts: "),
    ({"batch": 0}, "^batch: "),
    ({"seed": -1}, "^seed: "),
    ({"warm_starts": [(0.1, 1.0)]}, "^warm_starts: "),
    ({"warm_starts": [Settings(0.1, 1.0)]}, "^kept_per_class: "),
])
def test_wrong_arguments_are_refused(changed, match):
    with pytest.raises(InputError, match=match):
        run_search(failing_ridge, WA, **{"strategy": "tpe", "attempts": 8, "seed": 0, **changed})


@pytest.mark.parametrize("changed, match", [
    ({"seed": 1}, "same seed"),
    ({"strategy": "random"}, "same strategy"),
    ({"batch": 4}, "same batch"),
    ({"warm_starts": SOME}, "warm starts"),
    ({"attempts": 7}, "at most the 7"),
])
def test_a_result_of_another_search_is_not_continued(changed, match):
    earlier = run_search(failing_ridge, WA, strategy="tpe", attempts=8, seed=0)
    with pytest.raises(InputError, match=match):
        run_search(failing_ridge, WA, **{"strategy": "tpe", "attempts": 16, "seed": 0, "earlier": earlier, **changed})


@pytest.mark.parametrize("scores", [[0.5] * 7, [np.inf] * 8, ["good"] * 8, [[0.5]] * 8])
def test_wrong_scores_are_refused(scores):
    with pytest.raises(InputError, match="^scores of evaluate: "):
        run_search(lambda settings: scores, WA, strategy="random", attempts=8, seed=0)


@pytest.mark.parametrize("damage", [
    lambda document: document.pop("seed"),
    lambda document: document.update(strategy="anneal"),
    lambda document: document["scores"].pop(),
    lambda document: document["scores"].__setitem__(0, "x"),
    lambda document: document["settings"].__setitem__(0, {"learning_rate": 0.1}),
    lambda document: document["settings"][0].update(learning_rate=7.0),
    lambda document: document["settings"][0].update(momentum=0.9),
    lambda document: document.update(best_index=document["best_index"] + 1),
])
def test_a_damaged_result_is_refused(damage):
    document = run_search(failing_ridge, WA, strategy="tpe", attempts=8, seed=0).as_dict()
    damage(document)
    with pytest.raises(InputError):
        SearchResult.from_dict(document, "wa")


def test_the_density_samples_what_it_says():
    density = ParzenDensity(np.array([[0.02, 0.5], [0.6, 0.98]]))
    sample = density.sample(40_000, np.random.default_rng(0))
    assert sample.min() >= 0.0 and sample.max() <= 1.0
    counted, _, _ = np.histogram2d(*sample.T, bins=10, range=[[0, 1], [0, 1]])
    fine = (np.arange(100) + 0.5) / 100
    grid = np.array([[a, b] for a in fine for b in fine])
    expected = np.exp(density.log_density(grid)).reshape(10, 10, 10, 10).mean(axis=(1, 3)) / 100
    # Four standard errors and the grid's own error.
    np.testing.assert_allclose(counted / len(sample), expected, atol=0.004)


def test_warm_starts_survive_a_file(tmp_path):
    path = tmp_path / "starts.json"
    write_warm_starts(path, STARTS, "wa")
    assert read_warm_starts(path, "wa") == STARTS
    document = json.loads(path.read_text())
    assert document["ranges"]["kept_per_class"] == [1, 80] and document["scale"] == "logarithmic"
    assert document["points"][0]["settings"] == {"learning_rate": 0.01, "regularization": 1.0, "kept_per_class": 20}
    assert document["points"][0]["spread"] == {"learning_rate": 2.0, "regularization": 3.0, "kept_per_class": 3.0}


def test_warm_starts_are_the_ranked_settings_with_the_spreads_of_the_advice(forecasters, datasets):
    here = dict(zip(DESCRIPTORS, datasets["wa"].descriptors[2]))
    advice = advise_settings(forecasters["wa"], here, SettingsBox("wa", 20))
    starts = warm_starts_of(advice)
    assert [one.settings for one in starts] == advice.ranked and starts[0].spread == advice.spreads
    assert all(set(one.spread) == {"learning_rate", "regularization", "kept_per_class"} for one in starts)
    assert all(factor >= 1 for one in starts for factor in one.spread.values())


@pytest.mark.parametrize("damage, match", [
    (lambda document: document.update(kind="recipe"), "of the kind"),
    (lambda document: document.update(version=2), "of version 1"),
    (lambda document: document.update(method="ewc"), "for the method wa"),
    (lambda document: document.update(method=["wa"]), "method"),
    (lambda document: document.update(points={}), "list of points"),
    (lambda document: document["points"].append(3), "point 2.*settings and their spread"),
    (lambda document: document["points"][1]["settings"].pop("kept_per_class"), "point 1.*must set"),
    (lambda document: document["points"][1]["settings"].update(learning_rate="fast"), "point 1.*learning_rate"),
    (lambda document: document["points"][1]["settings"].update(regularization=1e9), "point 1.*regularization"),
    (lambda document: document["points"][1]["settings"].update(momentum=0.9), "point 1.*knows the keys"),
    (lambda document: document["points"][0]["spread"].pop("regularization"), "point 0.*spread"),
    (lambda document: document["points"][0]["spread"].update(regularization=0.5), "point 0.*spread of reg"),
])
def test_damaged_warm_starts_are_refused(tmp_path, damage, match):
    path = tmp_path / "starts.json"
    write_warm_starts(path, STARTS, "wa")
    document = json.loads(path.read_text())
    damage(document)
    path.write_text(json.dumps(document))
    with pytest.raises(InputError, match=match):
        read_warm_starts(path, "wa")


def test_warm_starts_that_do_not_fit_are_not_written(tmp_path):
    with pytest.raises(InputError, match="kept_per_class"):
        write_warm_starts(tmp_path / "starts.json", STARTS, "ewc")
    assert list(tmp_path.iterdir()) == []
