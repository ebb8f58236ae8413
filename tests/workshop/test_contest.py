import copy
import json

import numpy as np
import pytest

from hyperforecast.checks import InputError
from hyperforecast.describing import describe
from hyperforecast.forecasting import advise_settings, opening_settings, with_checksum
from hyperforecast.learning import HeadTrainer, Job, close_boundary, open_boundary, predict_codes, try_settings
from hyperforecast.metrics import balanced_accuracy
from hyperforecast.settings import Plan, SettingsBox
from hyperforecast.storage import dump_json
from hyperforecast.workshop.contest import (
    CONTESTS, POLICIES, Contest, Policy, as_text, load_contest, run_contest, summarize,
)
from hyperforecast.workshop.contest.course import Course
from hyperforecast.workshop.contest.one_step import ENTRANTS, NOISE_SEEDS, run_one_step
from hyperforecast.workshop.contest.policies import choose
from hyperforecast.workshop.contest.whole_stream import run_whole_stream
from hyperforecast.workshop.gathering import derived_seed
from hyperforecast.workshop.reporting.contest_report import contest_page
from hyperforecast.workshop.searching import run_search, uniform_draws
from hyperforecast.workshop.streams import Collection, Stream, load_streams

# Of a source that the shared forecasters were not fitted on.
ENTERED = """
[[stream]]
name = "lenses"
source = "synthetic_own_covariance"
seeds = [0, 1]
increments = 3
classes = 6
raw_dimension = 6
rows_per_class = 20
recurring = 0.0
"""
PLAN = Plan(hidden_units=8, passes=3, batch_size=16, memory_limit=80)


@pytest.fixture(scope="module")
def folder(tmp_path_factory):
    return tmp_path_factory.mktemp("contest")


@pytest.fixture(scope="module")
def definitions(folder):
    (folder / "entered.toml").write_text(ENTERED)
    return load_streams(folder / "entered.toml")


def _course(definition, forecasters, method="wa", trainer=None):
    plan = Plan(**{**PLAN.as_dict(), "method": method})
    return Course(definition, forecasters[method], plan, 0, trainer or HeadTrainer())


@pytest.fixture(scope="module")
def results(folder, definitions, forecasters):
    """Both contests over two streams and two methods."""
    return {kind: run_contest(definitions, forecasters, folder / f"{kind}.json", kind=kind, plan=PLAN)
            for kind in CONTESTS}


class CountingTrainer(HeadTrainer):
    def __init__(self):
        self.trained = []

    def learn(self, jobs, *, seed):
        self.trained += [(job.settings, seed) for job in jobs]
        return super().learn(jobs, seed=seed)


def _second_boundary(course):
    """Return a bench at the first boundary with old classes, for advice that looks at the present alone."""
    boundary, attempt = course.opening()
    return course.bench(1, close_boundary(course.trainer, boundary, attempt, seed=course.step_seed(0)), now_weight=1.0)


def _accuracy(boundary, head, rows):
    """Balanced accuracy on an increment's rows, by labels instead of codes."""
    Z = np.clip((rows.X - boundary.center) / boundary.scale, -10, 10).astype(np.float32)
    return balanced_accuracy(rows.y, boundary.classes[predict_codes(HeadTrainer(), head, Z)])


# Policies

def test_policies_are_those_of_the_protocol(definitions, forecasters):
    bench = _second_boundary(_course(definitions[0], forecasters))
    attempts = {name: choose(policy, bench).attempts for name, policy in POLICIES.items()}
    assert attempts == {"constant": 0, "tuned-once": 64, "advice": 0, "advice+4": 4, "advice+8": 8,
                        "advice+4 on carryover": 4, "random-8": 8, "random-64": 64, "search-64": 64}


@pytest.mark.parametrize("method", ["wa", "ewc"])
def test_choices_agree_with_choosing_by_hand(definitions, forecasters, method):
    course = _course(definitions[0], forecasters, method)
    bench = _second_boundary(course)
    boundary, selection, box = bench.boundary, course.stream.selection(1), SettingsBox(method, bench.boundary.most_kept)

    def scores(settings):
        attempts = try_settings(HeadTrainer(), boundary, settings, seed=bench.seed)
        return np.round([_accuracy(boundary, attempt.head, selection) for attempt in attempts], 9)

    def best(settings):
        return settings[int(np.argmax(scores(settings)))]

    descriptors = describe(HeadTrainer(), boundary, seed=bench.seed)
    ranked = advise_settings(forecasters[method], descriptors, box, now_weight=1.0).ranked
    drawn = box.from_unit(uniform_draws(64, box.n_dimensions, seed=derived_seed(bench.seed, "drawn")))
    searched = run_search(scores, box, strategy="tpe", attempts=64, batch=8, seed=bench.seed).best
    expected = {
        "constant": forecasters[method].constant_settings(descriptors, box), "tuned-once": searched,
        "advice": ranked[0],
        "advice+4": best(ranked[:4]), "advice+8": best(ranked[:8]), "random-8": best(drawn[:8]),
        "random-64": best(drawn), "search-64": searched,
    }
    chosen = {name: choose(POLICIES[name], bench).attempt.settings for name in expected}
    assert chosen == expected


def test_on_carryover_the_choice_rests_on_rows_the_device_holds(definitions, forecasters):
    bench = _second_boundary(_course(definitions[0], forecasters))
    check = bench.boundary.check_set()
    trained_on = {row.tobytes() for row in (*bench.boundary.Z, *bench.boundary.old_exemplars.Z)}
    assert len(check) and not trained_on & {row.tobytes() for row in check.Z}
    tried = bench.try_out(bench.drawn.settings)
    by_hand = [balanced_accuracy(check.y, predict_codes(HeadTrainer(), one.attempt.head, check.Z)) for one in tried]
    assert [bench.judge(one, "check") for one in tried] == pytest.approx(by_hand)
    # Candidates in order of their accuracy on selection rows, which would take the first.
    policy = Policy("drawn on carryover", "drawn", 8, judged_on="check")
    bench.drawn.settings[:] = [one.attempt.settings for one in sorted(tried, key=lambda one: -one.outcome.all)][8:]
    by_hand = {one.attempt.settings: score for one, score in zip(tried, by_hand)}
    chosen, on_selection = (choose(one, bench).attempt.settings for one in (policy, POLICIES["random-8"]))
    assert by_hand[chosen] == max(by_hand[one] for one in bench.drawn.settings[:8])
    assert chosen != on_selection


def test_the_same_settings_are_trained_once_and_give_the_same_head(definitions, forecasters):
    trainer = CountingTrainer()
    bench = _second_boundary(_course(definitions[0], forecasters, trainer=trainer))
    trainer.trained.clear()
    choices = {name: choose(policy, bench) for name, policy in POLICIES.items()}
    assert len(trainer.trained) == len(set(trainer.trained)) <= 1 + 8 + 64 + 64
    assert choices["tuned-once"].attempt is choices["search-64"].attempt
    for choice in choices.values():
        alone = HeadTrainer().learn([Job(bench.boundary, choice.attempt.settings)], seed=bench.seed)[0]
        assert all(np.array_equal(alone.head[name], part) for name, part in choice.attempt.head.items())


def test_operations_count_every_attempt_of_a_policy(definitions, forecasters):
    bench = _second_boundary(_course(definitions[0], forecasters))
    choices = {name: choose(policy, bench) for name, policy in POLICIES.items()}
    for name, settings in {"advice+4": bench.advised.settings[:4], "advice": bench.advised.settings[:1],
                           "random-8": bench.drawn.settings[:8], "search-64": bench.searched.settings}.items():
        attempts = try_settings(HeadTrainer(), bench.boundary, settings, seed=bench.seed)
        assert choices[name].operations == sum(one.operations for one in attempts)
    assert choices["advice"].seconds > bench.described[1] > 0


def test_tuned_once_keeps_to_its_first_choice(definitions, forecasters):
    bench = _second_boundary(_course(definitions[0], forecasters))
    earlier = bench.drawn.settings[5]
    choice = choose(POLICIES["tuned-once"], bench, earlier)
    assert (choice.attempt.settings, choice.attempts) == (earlier, 0)
    assert choose(POLICIES["advice"], bench, earlier).attempt.settings != earlier


# One step

def test_one_step_agrees_with_walking_by_hand(results, definitions, forecasters):
    # Along the stated trajectory, with nothing but learning and forecasting: policies are advised with all weight on the
    # present, the walk goes on from advice as a device gets it.
    definition, forecaster, trainer = definitions[0], forecasters["wa"], HeadTrainer()
    outcome = next(one["outcome"] for one in results["one_step"].pieces if one["method"] == "wa")
    plan, stream = Plan(**{**PLAN.as_dict(), "method": "wa"}), definition.build()
    seeds = [derived_seed("contest", definition.key, "wa", 0, t) for t in range(stream.n_boundaries)]
    boundary = open_boundary(plan, None, stream.training(0), seed=seeds[0])
    kept = try_settings(trainer, boundary, [opening_settings(plan)], seed=seeds[0])[0]
    carryover = close_boundary(trainer, boundary, kept, seed=seeds[0])
    for t in range(1, stream.n_boundaries):
        boundary = open_boundary(plan, carryover, stream.training(t), seed=seeds[t])
        box = SettingsBox("wa", boundary.most_kept)
        descriptors = describe(trainer, boundary, seed=seeds[t])
        advice = advise_settings(forecaster, descriptors, box, now_weight=1.0)
        device = advise_settings(forecaster, descriptors, box)
        constant, advised, followed = try_settings(
            trainer, boundary, [advice.constant, advice.settings, device.settings], seed=seeds[t])
        stored = outcome[t - 1]["policies"]
        for name, attempt in {"constant": constant, "advice": advised}.items():
            assert stored[name]["settings"] == attempt.settings.as_dict()
            assert stored[name]["scoring"]["all"] == pytest.approx(_accuracy(boundary, attempt.head, stream.scoring(t)))
            assert stored[name]["selection"] == pytest.approx(_accuracy(boundary, attempt.head, stream.selection(t)))
        assert outcome[t - 1]["expected"]["all"] == advice.expected_all.as_dict()
        carryover = close_boundary(trainer, boundary, followed, seed=seeds[t])
    assert [one["boundary"] for one in outcome] == list(range(1, stream.n_boundaries))


def test_more_attempts_of_a_kind_never_do_worse_on_selection_rows(results):
    for piece in results["one_step"].pieces:
        for boundary in piece["outcome"]:
            score = {name: choice["selection"] for name, choice in boundary["policies"].items()}
            assert score["advice"] <= score["advice+4"] <= score["advice+8"]
            assert score["random-8"] <= score["random-64"]


class StubDefinition:
    """A definition whose stream notes what is asked of it, or is made by hand."""

    name, source, key = "stub", "stub", "stub/0/0"

    def __init__(self, stream):
        self.stream = stream

    def build(self):
        return self.stream


class WatchedStream:
    """A stream that notes which rows are asked for; scoring rows may carry wrong labels."""

    def __init__(self, stream, scrambled=False):
        self.stream, self.scrambled, self.log = stream, scrambled, []

    def __getattr__(self, name):
        if name in ("training", "selection", "scoring"):
            self.log.append(name)
        return getattr(self.stream, name)

    def scoring(self, t):
        self.log.append("scoring")
        rows = self.stream.scoring(t)
        return type(rows)(rows.X[::-1], rows.y) if self.scrambled else rows


@pytest.mark.parametrize("run", [run_one_step, run_whole_stream])
def test_scoring_rows_are_opened_last_and_change_no_choice(run, definitions, forecasters):
    settings, scores = [], []
    for scrambled in (False, True):
        trainer = CountingTrainer()
        stream = WatchedStream(definitions[0].build(), scrambled)
        course = _course(StubDefinition(stream), forecasters, trainer=trainer)
        outcome = run(course)
        first = stream.log.index("scoring")
        assert {"training", "selection"} == set(stream.log[:first]) and set(stream.log[first:]) == {"scoring"}
        settings.append(trainer.trained)
        scores.append(json.dumps(outcome, default=float))
    assert settings[0] == settings[1]
    assert scores[0] != scores[1]


@pytest.mark.parametrize("run, now_weight", [(run_one_step, 1.0), (run_whole_stream, 1 / 3)])
def test_advice_looks_as_far_as_it_is_judged(monkeypatch, definitions, forecasters, run, now_weight):
    weights = []

    def advise(*arguments, now_weight):
        weights.append(now_weight)
        return advise_settings(*arguments, now_weight=now_weight)

    monkeypatch.setattr("hyperforecast.workshop.contest.bench.advise_settings", advise)
    run(_course(definitions[0], forecasters, "ewc"))
    assert set(weights) == {now_weight}


# Whole stream

@pytest.mark.parametrize("method, name", [("ewc", "constant"), ("wa", "advice")])
def test_ways_agree_with_walking_by_hand(results, definitions, forecasters, method, name):
    definition, forecaster, trainer = definitions[0], forecasters[method], HeadTrainer()
    way = next(one["outcome"][name] for one in results["whole_stream"].pieces if one["method"] == method)
    plan, stream, carryover = Plan(**{**PLAN.as_dict(), "method": method}), definition.build(), None
    for t in range(stream.n_boundaries):
        seed = derived_seed("contest", definition.key, method, 0, t)
        boundary = open_boundary(plan, carryover, stream.training(t), seed=seed)
        box, settings = SettingsBox(method, boundary.most_kept), opening_settings(plan)
        if t:
            # As on a device: the present boundary and the two that follow weigh alike.
            advice = advise_settings(forecaster, describe(trainer, boundary, seed=seed), box, now_weight=1 / 3)
            settings = advice.constant if name == "constant" else advice.settings
        attempt = try_settings(trainer, boundary, [settings], seed=seed)[0]
        carryover = close_boundary(trainer, boundary, attempt, seed=seed)
        for task, labels in enumerate(map(stream.classes, range(t + 1))):
            rows = stream.scoring(t)
            of_task = np.isin(rows.y, labels)
            rows = type(rows)(rows.X[of_task], rows.y[of_task])
            assert way["matrix"][t][task] == pytest.approx(_accuracy(boundary, attempt.head, rows))
        assert t == 0 or way["boundaries"][t - 1]["exemplars"] == len(carryover.exemplars)


def test_rows_of_the_matrix_weigh_up_to_balanced_accuracy(results):
    for piece in results["whole_stream"].pieces:
        for way in piece["outcome"].values():
            for row, boundary in zip(way["matrix"][1:], way["boundaries"], strict=True):
                weights = way["task_classes"][:len(row)]
                assert np.average(row, weights=weights) == pytest.approx(boundary["scoring"])


def test_attempts_and_exemplars_of_ways(results):
    for piece in results["whole_stream"].pieces:
        attempts = {name: [one["attempts"] for one in way["boundaries"]] for name, way in piece["outcome"].items()}
        assert attempts == {"constant": [0, 0], "tuned-once": [64, 0], "advice": [0, 0], "advice+4": [4, 4],
                            "random-8": [8, 8], "search-64": [64, 64]}
        tuned, searched = (piece["outcome"][name]["boundaries"] for name in ("tuned-once", "search-64"))
        assert tuned[0]["scoring"] == searched[0]["scoring"]
        assert tuned[0]["settings"] == tuned[1]["settings"]
        most = max(one["exemplars"] for way in piece["outcome"].values() for one in way["boundaries"])
        assert most <= PLAN.memory_limit if piece["method"] == "wa" else most == 0


def _blobs(increments):
    rng = np.random.default_rng(0)
    y = np.repeat(np.arange(5), 60)
    X = 3 * rng.standard_normal((5, 4))[y] + rng.standard_normal((300, 4))
    return Stream(Collection(X, y), increments, name="stub", source="stub", seed=0, rows_per_class=20)


def test_an_increment_without_new_classes_belongs_to_the_task_before(forecasters):
    stream = _blobs([(0, 1), (2, 0), (1, 2), (3, 4), (0,)])
    ways = run_whole_stream(_course(StubDefinition(stream), forecasters))
    for way in ways.values():
        assert way["task_classes"] == [2, 1, 2]
        assert [len(row) for row in way["matrix"]] == [1, 2, 3]
        scoring = [one["scoring"] for one in way["boundaries"]]
        assert len(scoring) == 4
        assert np.average(way["matrix"][1], weights=[2, 1]) == pytest.approx(scoring[1])
        assert np.average(way["matrix"][2], weights=[2, 1, 2]) == pytest.approx(scoring[3])


def test_a_stream_of_one_task_is_refused(forecasters):
    with pytest.raises(InputError, match="new classes in at least two increments"):
        run_whole_stream(_course(StubDefinition(_blobs([(0, 1), (0, 1)])), forecasters))


# Running and resuming

def _without_seconds(contest):
    def strip(value):
        if isinstance(value, dict):
            return {name: strip(one) for name, one in value.items() if name not in ("seconds", "advice_seconds")}
        return [strip(one) for one in value] if isinstance(value, list) else value
    return strip(json.loads(json.dumps(contest.pieces)))


def test_an_interrupted_contest_goes_on_where_it_stopped(tmp_path, results, definitions, forecasters):
    path, seen = tmp_path / "result.json", []

    def interrupt(progress):
        raise KeyboardInterrupt

    with pytest.raises(KeyboardInterrupt):
        run_contest(definitions[:1], forecasters, path, kind="one_step", plan=PLAN, progress=interrupt)
    held = load_contest(path)
    assert len(held.pieces) == 1
    resumed = run_contest(definitions[:1], forecasters, path, kind="one_step", plan=PLAN, progress=seen.append)
    assert [(one.stored, one.total) for one in seen] == [(2, 2)] and "2 of 2 pieces" in str(seen[0])
    assert held.pieces[0] in resumed.pieces
    assert _without_seconds(resumed) == _without_seconds(results["one_step"])[:2]
    before = path.read_bytes()
    run_contest(definitions[:1], forecasters, path, kind="one_step", plan=PLAN, progress=seen.append)
    assert len(seen) == 1 and path.read_bytes() == before


def test_results_do_not_depend_on_the_number_of_workers(tmp_path, results, definitions, forecasters):
    parallel = run_contest(definitions[:1], forecasters, tmp_path / "result.json", kind="whole_stream", plan=PLAN,
                           workers=2)
    assert _without_seconds(parallel) == _without_seconds(results["whole_stream"])[:2]


def test_a_forecaster_that_saw_the_source_is_refused(tmp_path, definitions, forecasters):
    def run(**recipe):
        wa = forecasters["wa"]
        forecaster = with_checksum(type(wa)(**{**wa.__dict__, "recipe": recipe}))
        run_contest(definitions, {"wa": forecaster}, tmp_path / "result.json", kind="one_step", plan=PLAN)

    with pytest.raises(InputError, match="without the source of the stream, synthetic_own_covariance"):
        run(boundaries={"synthetic_own_covariance": 1, "synthetic_drifting": 100})
    with pytest.raises(InputError, match="what sources it was fitted on"):
        run()
    assert not (tmp_path / "result.json").exists()


def test_another_contest_in_the_file_is_refused(tmp_path, results, folder, definitions, forecasters):
    path = folder / "one_step.json"
    run = {"kind": "one_step", "plan": PLAN}
    for change, match in (({"kind": "whole_stream"}, "of the kind whole_stream"), ({"seed": 1}, "of the seed 1"),
                          ({"plan": Plan()}, "of the plan")):
        with pytest.raises(InputError, match=match):
            run_contest(definitions, forecasters, path, **{**run, **change})
    wa = forecasters["wa"]
    other = with_checksum(type(wa)(**{**wa.__dict__, "recipe": {**wa.recipe, "note": "another"}}))
    with pytest.raises(InputError, match="of the same forecaster"):
        run_contest(definitions, {"wa": other}, path, **run)
    with pytest.raises(InputError, match="a forecaster of ewc under that name"):
        run_contest(definitions, {"ewc": wa}, path, **run)
    with pytest.raises(InputError, match="kind: must be one of"):
        run_contest(definitions, forecasters, path, kind="two_step")
    with pytest.raises(InputError, match="folder that exists"):
        run_contest(definitions, forecasters, tmp_path / "none" / "result.json", **run)


# Result files

def test_files_hold_what_was_run(folder, results, definitions, forecasters):
    for kind, contest in results.items():
        loaded = load_contest(folder / f"{kind}.json")
        assert loaded == contest
        assert {(one["stream"], one["method"]) for one in loaded.pieces} == {
            (definition.key, method) for definition in definitions for method in forecasters}
        for piece in loaded.pieces:
            assert piece["forecaster"] == forecasters[piece["method"]].checksum
            assert piece["definition"]["seed"] in (0, 1) and "numpy" in piece["versions"]


def _damage(document, path, value):
    *parents, last = path
    for part in parents:
        document = document[part]
    if value is None:
        del document[last]
    else:
        document[last] = value


ADVICE = ("pieces", 0, "outcome", 0, "policies", "advice")


@pytest.mark.parametrize("kind, path, value", [
    ("one_step", ("kind",), "records"), ("one_step", ("version",), 2), ("one_step", ("seed",), None),
    ("one_step", ("contest",), "whole_stream"), ("one_step", ("plan", "passes"), 0),
    ("one_step", ("pieces",), {}), ("one_step", ("pieces", 0, "source"), 3), ("one_step", ("pieces", 0, "outcome"), []),
    ("one_step", ("pieces", 0, "method"), "wa"), ("one_step", ADVICE, None),
    ("one_step", (*ADVICE, "scoring", "all"), 1.5), ("one_step", (*ADVICE, "settings", "learning_rate"), 0),
    ("one_step", (*ADVICE, "attempts"), -1), ("one_step", (*ADVICE, "seconds"), "1"),
    ("one_step", ("pieces", 0, "outcome", 0, "noise"), [0.5]),
    ("one_step", ("pieces", 0, "outcome", 0, "expected", "all", "low"), None),
    ("whole_stream", ("pieces", 0, "outcome", "advice", "matrix", 1), [0.5]),
    ("whole_stream", ("pieces", 0, "outcome", "advice", "task_classes", 0), 0),
    ("whole_stream", ("pieces", 0, "outcome", "advice", "boundaries"), []),
    ("whole_stream", ("pieces", 0, "outcome", "constant"), None),
])
def test_a_damaged_file_is_refused(tmp_path, folder, results, kind, path, value):
    document = json.loads((folder / f"{kind}.json").read_bytes())
    _damage(document, path, value)
    (tmp_path / "damaged.json").write_text(json.dumps(document))
    with pytest.raises(InputError, match="damaged.json"):
        load_contest(tmp_path / "damaged.json")


# Tables

def _contest(scores, kind="one_step", method="wa"):
    """A contest from {source: {stream: [{policy: accuracy} at each boundary]}}; policies not named score 0.5."""
    pieces = []
    for source, streams in scores.items():
        for stream, boundaries in streams.items():
            outcome = [{
                "boundary": t, "classes_old": 2, "classes_new": 2, "advice_seconds": 0.02,
                "policies": {name: {"scoring": {"all": given.get(name, 0.5)}, "attempts": 4, "operations": 1e6,
                                    "seconds": 0.1} for name in ENTRANTS},
                "noise": [0.5 - 0.1, 0.5, 0.5 + 0.1], "expected": {"all": {"value": 0.5, "low": 0.4, "high": 0.6}},
            } for t, given in enumerate(boundaries, 1)]
            pieces.append({"stream": f"{source} {stream}", "source": source, "method": method, "outcome": outcome})
    return Contest(kind, PLAN.as_dict(), 0, pieces)


def test_gap_closed_by_hand():
    # Source a: (advice - constant, search - constant) averages (.1, .4) over its streams; b: (.1, .1).
    table = summarize(_contest({
        "a": {"p": [{"constant": 0.2, "advice": 0.4, "search-64": 0.8},
                    {"constant": 0.2, "advice": 0.2, "search-64": 0.6}],
              "q": [{"constant": 0.4, "advice": 0.5, "search-64": 0.7}]},
        "b": {"p": [{"constant": 0.5, "advice": 0.6, "search-64": 0.6}]},
    }))["methods"]["wa"]
    assert (table["n_sources"], table["n_streams"], table["n"]) == (2, 3, 4)
    advice = table["policies"]["advice"]
    assert advice["gap_closed"]["estimate"] == pytest.approx((0.1 + 0.1) / (0.4 + 0.1))
    assert advice["over_constant"]["estimate"] == pytest.approx(0.1)
    assert advice["accuracy"]["estimate"] == pytest.approx(((0.3 + 0.5) / 2 + 0.6) / 2)
    assert table["sources"]["a"]["policies"]["advice"]["gap_closed"]["estimate"] == pytest.approx(0.25)
    assert table["sources"]["a"]["policies"]["advice"]["worst"] == pytest.approx(0)
    assert table["sources"]["a"]["policies"]["random-8"]["worst"] == pytest.approx(0.1)
    # Advice's accuracies .4, .2 and .5 in a, .6 in b, against the interval [.4, .6].
    assert table["interval"]["coverage"]["estimate"] == pytest.approx(((0.5 + 1) / 2 + 1) / 2)
    assert table["interval"]["median_width"] == pytest.approx(0.2)
    # Variance of .4, .5, .6 with n - 1: .01.
    assert table["noise"]["deviation"] == pytest.approx(0.1)
    assert table["noise"]["ceiling_again"] == pytest.approx(0.5)


def test_one_source_is_judged_over_its_streams():
    table = summarize(_contest({"a": {seed: [{"constant": 0.2, "advice": 0.2 + seed / 10, "search-64": 0.6}]
                                      for seed in range(1, 5)}}))["methods"]["wa"]
    gap = table["policies"]["advice"]["gap_closed"]
    assert gap["estimate"] == pytest.approx(0.625)
    # Means of four draws from .25, .5, .75 and 1.
    assert 0.25 < gap["low"] < 0.625 < gap["high"] < 1


def test_a_search_that_gains_nothing_has_no_gap():
    summary = summarize(_contest({"a": {"p": [{"constant": 0.7}], "q": [{"constant": 0.7}]}}))
    assert summary["methods"]["wa"]["policies"]["advice"]["gap_closed"] == {"estimate": None, "low": None, "high": None}
    assert "–" in as_text(summary)


def test_sources_are_tested_from_ten_on():
    # All of n = 10 differences positive: two-sided p of Wilcoxon's exact test is 2 / 2^10.
    scores = {f"source {k}": {"p": [{"constant": 0.3, "advice": 0.4 + k / 50, "advice+4": 0.8, "search-64": 0.7}]}
              for k in range(10)}
    ten = summarize(_contest(scores))["methods"]["wa"]["tests"]
    assert ten["signed_rank"]["advice against constant"]["p_value"] == pytest.approx(2 / 2**10)
    assert ten["ranks"]["average_ranks"]["advice+4"] == 1 and ten["ranks"]["average_ranks"]["constant"] == 9
    del scores["source 3"]
    nine = summarize(_contest(scores))
    assert "there are 9" in nine["methods"]["wa"]["tests"]["ranks"]["reason"]
    assert "No test" in as_text(nine)


def test_methods_are_pooled_with_the_source_as_the_unit():
    wa = _contest({"a": {"p": [{"constant": 0.2, "advice": 0.4, "search-64": 0.6}]}})
    ewc = _contest({"a": {"p": [{"constant": 0.2, "advice": 0.2, "search-64": 0.6}]}}, method="ewc")
    both = summarize(Contest("one_step", {}, 0, wa.pieces + ewc.pieces))["methods"]
    assert both["all methods"]["policies"]["advice"]["gap_closed"]["estimate"] == pytest.approx(0.25)
    assert both["all methods"]["n_streams"] == 1


def test_whole_stream_measures_by_hand():
    # Lopez-Paz & Ranzato 2017 and Chaudhry et al. 2018 (definitions from memory): by hand on a matrix of three tasks.
    outcome = {name: {"matrix": [[0.9], [0.95, 0.8], [0.6, 0.5, 0.7]], "task_classes": [1, 1, 2], "boundaries": [
        {"exemplars": 10, "attempts": 4, "operations": 1e6, "seconds": 0.5},
        {"exemplars": 20, "attempts": 4, "operations": 1e6, "seconds": 0.5}]}
        for name in ("constant", "tuned-once", "advice", "advice+4", "random-8", "search-64")}
    piece = {"stream": "p", "source": "a", "method": "wa", "outcome": outcome}
    advice = summarize(Contest("whole_stream", {}, 0, [piece]))["methods"]["wa"]["policies"]["advice"]
    # Steps: .9; (.95 + .8) / 2; (.6 + .5 + 2 * .7) / 4.
    assert advice["average_incremental"]["estimate"] == pytest.approx((0.9 + 0.875 + 0.625) / 3)
    assert advice["final"]["estimate"] == pytest.approx(0.625)
    assert advice["backward_transfer"]["estimate"] == pytest.approx(-0.3)
    assert advice["forgetting"]["estimate"] == pytest.approx((0.35 + 0.3) / 2)
    assert (advice["exemplars"], advice["attempts"], advice["seconds"]) == (15, 8, 1.0)


def test_tables_follow_from_the_file_alone(folder, results):
    for kind, contest in results.items():
        table = summarize(contest)
        assert summarize(load_contest(folder / f"{kind}.json")) == table
        dump_json(table)
        text = as_text(table)
        assert "all methods" in text and "synthetic_own_covariance" in text and "advice+4" in text
        assert all(line == line.rstrip() for line in text.splitlines())
    with pytest.raises(InputError, match="at least one piece"):
        summarize(Contest("one_step", {}, 0))


def test_reports_show_every_policy_and_escape_names(results):
    for contest in results.values():
        contest = copy.deepcopy(contest)
        for piece in contest.pieces:
            piece["source"] = "<script>alert(1)</script>"
        html = contest_page(contest).html()
        assert "<script" not in html and "&lt;script&gt;" in html
        assert all(name in html for name in ("tuned-once", "random-8", "search-64", "all methods"))


def test_noise_comes_from_other_seeds(results):
    assert NOISE_SEEDS == 3
    spread = [np.ptp(boundary["noise"]) for piece in results["one_step"].pieces for boundary in piece["outcome"]]
    assert max(spread) > 0
