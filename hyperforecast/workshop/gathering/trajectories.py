"""One trajectory: a stream walked through with one plan, a search at every boundary that has old classes.

In a first round the search fills the space of settings. In a round steered by a forecaster it looks around what that
advises, and the walk mostly follows the advice, so that records are dense where advice will fall.
"""

import hashlib
import time

import numpy as np

from hyperforecast.describing import describe
from hyperforecast.forecasting import advise_settings, opening_settings
from hyperforecast.increments import Increment
from hyperforecast.learning import HeadTrainer, Job, close_boundary, open_boundary, standardize
from hyperforecast.settings import Plan, Settings, SettingsBox
from hyperforecast.workshop.gathering.records import AttemptRecord, BoundaryRecord, Trajectory
from hyperforecast.workshop.searching import BoundarySearch, class_codes, run_search, space_filling

# Settings of the boundaries that follow, where later outcomes are recorded and no forecaster advises them.
# About the best constants of a first gathering over 28 synthetic streams.
REFERENCE = {"ewc": (3e-4, 100.0, None), "lwf": (0.01, 0.4, None), "icarl": (0.02, 0.1, 20), "wa": (0.04, 0.01, 20)}
BEST_FOLLOWED, OTHERS_FOLLOWED = 4, 4
# Attempts of a boundary from a space-filling design, around the forecaster's advice, and from TPE: in a first round, and
# in a steered one.
FIRST_ROUND, STEERED_ROUND = (32, 0, 16), (8, 16, 8)
# Width, in the unit cube, of the neighbourhood of the advice, and how often a steered walk follows it.
AROUND = 0.06
FOLLOWS = 0.6
# Attempts trained side by side, and TPE's proposals made at once.
SIDE_BY_SIDE = 16
# Mean cost of an attempt is capped: plans that would spend more operations get fewer passes.
MOST_OPERATIONS = 1.2e9
# Outcomes are measured on at most this many selection rows.
MOST_OUTCOME_ROWS = 1500


def reference_settings(plan):
    """Return the `Settings` of the reference policy under a plan."""
    return Settings(*REFERENCE[plan.method])


def derived_seed(*parts):
    """Return a seed below 2^31 that depends on all parts, the same on every machine."""
    return int.from_bytes(hashlib.sha256(repr(parts).encode()).digest()[:4], "big") >> 1


def draw_plan(method, stream, rng):
    """Return a `Plan` drawn for a stream, its passes cut where attempts would cost too much."""
    n_classes = len(np.unique(np.concatenate([stream.classes(t) for t in range(stream.n_boundaries)])))
    largest = max(len(stream.training(t)) for t in range(stream.n_boundaries))
    n_features = stream.training(0).n_features
    hidden = int(rng.choice([0, 16, 32, 64, 64, 128]))
    passes = int(np.round(np.exp(rng.uniform(np.log(3), np.log(25)))))
    batch_size = int(rng.choice([16, 32, 32, 64]))
    per_class = int(np.round(np.exp(rng.uniform(np.log(4), np.log(100)))))
    width = hidden or n_features
    per_pass = 2 * largest * (2 * n_features * hidden + 3 * width * n_classes)
    passes = max(2, min(passes, int(MOST_OPERATIONS / per_pass)))
    return Plan(method, hidden, passes, batch_size, max(per_class, 1) * n_classes)


def run_trajectory(definition, method, *, seed, attempts=None, forecaster=None, trainer=None):
    """Walk through a stream; return the `Trajectory` of its searches.

    Parameters
    ----------
    definition : StreamDefinition
    method : str
    seed : int
        With the definition's key, the method and the forecaster it determines everything.
    attempts : (int, int, int), optional
        Attempts of each boundary from a space-filling design, around the forecaster's advice, and from TPE; by default
        `FIRST_ROUND`, or `STEERED_ROUND` with a forecaster.
    forecaster : Forecaster, optional
        Steers the round: the search looks around its advice, the walk mostly follows it, and it is the reference policy
        of later outcomes.
    trainer : Trainer, optional
        The built-in one by default.

    Notes
    -----
    A walk that does not follow advice goes on from the best attempt, or by chance from another good one, so that later
    boundaries are met by models of many kinds.
    """
    started = time.perf_counter()
    attempts = attempts or (STEERED_ROUND if forecaster else FIRST_ROUND)
    trainer = trainer or HeadTrainer()
    stream = definition.build()
    key = trajectory_key(definition, method, seed, forecaster)
    rng = np.random.default_rng(derived_seed(key))
    plan = draw_plan(method, stream, rng)
    carryover, boundaries = None, []
    for t in range(stream.n_boundaries):
        step_seed = derived_seed(key, t)
        boundary = open_boundary(plan, carryover, stream.training(t), seed=step_seed)
        if carryover is None:
            attempt = trainer.learn([Job(boundary, opening_settings(plan))], seed=step_seed)[0]
        else:
            described = describe(trainer, boundary, seed=step_seed)
            search = _search_at(trainer, boundary, stream, t, step_seed)
            around = _around(forecaster, described, boundary, attempts[1], rng)
            strategies = _search(search, around, attempts, step_seed)
            later = _follow(trainer, stream, search, _followed(search.outcomes, rng), t, key, forecaster)
            boundaries.append(_record(search, strategies, later, described))
            attempt = search.attempts[_continued(search.outcomes, strategies, rng)]
        carryover = close_boundary(trainer, boundary, attempt, seed=step_seed)
    return Trajectory(key, definition.name, definition.source, definition.seed, method, plan.as_dict(),
                      time.perf_counter() - started, boundaries)


def trajectory_key(definition, method, seed, forecaster=None):
    """Return the text that identifies a trajectory in a records file."""
    key = f"{definition.key}|{method}|{seed}"
    return f"{key}|{forecaster.checksum[:12]}" if forecaster else key


def _around(forecaster, described, boundary, count, rng):
    """Return `count` settings: those that a forecaster advises, ranked, then others near them; none without one."""
    if forecaster is None:
        return []
    box = SettingsBox(boundary.plan.method, boundary.most_kept)
    ranked = advise_settings(forecaster, described, box).ranked[:count]
    points = box.to_unit(ranked)[rng.integers(0, len(ranked), count - len(ranked))]
    near = np.clip(points + AROUND * rng.standard_normal(points.shape), 0, 1)
    return [*ranked, *(box.from_unit(near) if len(near) else ())]


def _search_at(trainer, boundary, stream, t, seed):
    rows = _stratified(stream.selection(t), MOST_OUTCOME_ROWS, seed)
    return BoundarySearch(trainer, boundary, standardize(rows.X, boundary.center, boundary.scale),
                          class_codes(boundary, rows.y), seed=seed)


def _followed(outcomes, rng):
    """Places of the attempts whose later outcomes are recorded: the best ones, and others of the better half."""
    order = np.argsort([-one.all for one in outcomes], kind="stable")
    others = rng.permutation(order[BEST_FOLLOWED:len(order) // 2])[:OTHERS_FOLLOWED]
    return [*order[:BEST_FOLLOWED], *others]


def _follow(trainer, stream, search, places, t, key, forecaster):
    """Return {place: [accuracy on all classes one boundary later, two later]}, as far as the stream goes.

    Later settings come from the reference policy, the same for all, so that what differs is what the attempt left
    behind: the forecaster's advice after the best attempt, or fixed settings without one.
    """
    later = {int(place): [] for place in places}
    attempts = [search.attempts[place] for place in places]
    boundaries, seed = [search.boundary] * len(attempts), search.seed
    for s in range(t + 1, min(t + 3, stream.n_boundaries)):
        increment = stream.training(s)
        carried = [close_boundary(trainer, boundary, attempt, seed=seed)
                   for boundary, attempt in zip(boundaries, attempts)]
        seed = derived_seed(key, s)
        boundaries = [open_boundary(one.plan, one, increment, seed=seed) for one in carried]
        settings = _reference(trainer, boundaries[0], forecaster, seed)
        attempts = trainer.learn([Job(one, settings) for one in boundaries], seed=seed)
        judged = _search_at(trainer, boundaries[0], stream, s, seed)
        for outcomes, attempt in zip(later.values(), attempts):
            outcomes.append(judged.outcome(attempt, judged.Z, judged.y).all)
    return later


def _reference(trainer, boundary, forecaster, seed):
    if forecaster is None:
        return reference_settings(boundary.plan)
    box = SettingsBox(boundary.plan.method, boundary.most_kept)
    return advise_settings(forecaster, describe(trainer, boundary, seed=seed), box).settings


def _search(search, around, attempts, seed):
    """Make the attempts of a boundary; return the strategy behind each."""
    boundary, (space_filled, _, proposed) = search.boundary, attempts
    box = SettingsBox(boundary.plan.method, boundary.most_kept)
    design = [*around, *box.from_unit(space_filling(space_filled, box.n_dimensions, seed=seed))]
    run_search(search.evaluate, box, strategy="tpe", attempts=len(design) + proposed, batch=SIDE_BY_SIDE,
               warm_starts=design, seed=seed)
    return ["advice"] * len(around) + ["space_filling"] * space_filled + ["tpe"] * proposed


def _record(search, strategies, later, descriptors):
    boundary = search.boundary
    attempts = []
    for place, (attempt, strategy, outcome) in enumerate(zip(search.attempts, strategies, search.outcomes)):
        after_one, after_two = (*later.get(place, ()), None, None)[:2]
        attempts.append(AttemptRecord(attempt.settings, strategy, outcome.old, outcome.new, outcome.diverged,
                                      outcome.operations, after_one, after_two))
    return BoundaryRecord(boundary.number, boundary.n_old, boundary.n_classes - boundary.n_old, boundary.most_kept,
                          len(search.y), descriptors, attempts)


def _continued(outcomes, strategies, rng):
    """Place of the attempt to go on from: what was advised, if that was searched around, most of the time; else the
    best half of the time, else one of the best quarter.
    """
    if strategies[0] == "advice" and rng.random() < FOLLOWS:
        return 0
    order = np.argsort([-one.all for one in outcomes], kind="stable")
    return int(order[0] if rng.random() < 0.5 else order[rng.integers(max(len(order) // 4, 1))])


def _stratified(increment, most, seed):
    """At most `most` rows, the same number of each class as far as it goes."""
    if len(increment) <= most:
        return increment
    rng = np.random.default_rng(seed)
    order = rng.permutation(len(increment))
    labels = np.unique(increment.y)
    per_class = max(most // len(labels), 1)
    rows = np.concatenate([order[increment.y[order] == label][:per_class] for label in labels])
    return Increment(increment.X[rows], increment.y[rows])
