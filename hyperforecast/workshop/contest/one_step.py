"""The one-step contest: at every boundary all policies choose from the same carryover."""

from dataclasses import dataclass

from hyperforecast.forecasting import Advice, advise_settings
from hyperforecast.learning import Boundary, Job, close_boundary
from hyperforecast.workshop.contest.policies import CEILING, POLICIES, choose
from hyperforecast.workshop.gathering import derived_seed

KIND = "one_step"
ENTRANTS = tuple(POLICIES)
# Other seeds that the ceiling's settings are trained with.
NOISE_SEEDS = 3
# Only the present boundary is judged, so that advice looks no further; the walk goes on from advice that does, as a
# device would.
NOW_WEIGHT = 1.0


@dataclass(frozen=True)
class _Step:
    """A boundary at which all policies have chosen; nothing of it has met a scoring row."""

    boundary: Boundary
    choices: dict
    noise: list
    advice: Advice
    advice_seconds: float


def run_one_step(course):
    """Return the scored boundaries of a `Course`, from the second increment on, as a list of JSON-able dicts.

    Scoring rows are opened when every policy has chosen at every boundary.
    """
    return [_scored(step, course.scoring(step.boundary)) for step in _walk(course)]


def _walk(course):
    boundary, attempt = course.opening()
    carryover = close_boundary(course.trainer, boundary, attempt, seed=course.step_seed(0))
    steps, settings = [], {}
    for t in range(1, course.stream.n_boundaries):
        bench = course.bench(t, carryover, now_weight=NOW_WEIGHT)
        choices = {name: choose(POLICIES[name], bench, settings.get(name)) for name in ENTRANTS}
        settings = {name: choice.attempt.settings for name, choice in choices.items()}
        job = Job(bench.boundary, settings[CEILING])
        noise = [course.trainer.learn([job], seed=derived_seed(bench.seed, "noise", k))[0] for k in range(NOISE_SEEDS)]
        steps.append(_Step(bench.boundary, choices, noise, *bench.advice))
        device = advise_settings(course.forecaster, bench.described[0], bench.box).settings
        carryover = bench.close(bench.try_out([device])[0].attempt)
    return steps


def _scored(step, scoring):
    """Return a step as a JSON-able dict, with outcomes on the rows of `scoring`."""
    distinct = {id(choice.attempt): choice.attempt for choice in step.choices.values()}
    outcomes = {key: scoring.outcome(attempt, scoring.Z, scoring.y) for key, attempt in distinct.items()}

    def shown(choice):
        outcome = outcomes[id(choice.attempt)]
        return {**choice.as_dict(), "scoring": {"old": outcome.old, "new": outcome.new, "all": outcome.all}}

    advice = step.advice
    expected = {"old": advice.expected_old, "new": advice.expected_new, "all": advice.expected_all}
    return {
        "boundary": step.boundary.number, "classes_old": step.boundary.n_old,
        "classes_new": step.boundary.n_classes - step.boundary.n_old,
        "policies": {name: shown(choice) for name, choice in step.choices.items()},
        "noise": [scoring.outcome(attempt, scoring.Z, scoring.y).all for attempt in step.noise],
        "expected": {name: value.as_dict() for name, value in expected.items()},
        "advice_seconds": step.advice_seconds,
    }
