"""What learning and advice cost, mostly as ratios of CPU seconds measured in one run.

    OPENBLAS_NUM_THREADS=1 python bench_streams/bench_learning.py [--json]

One boundary, where nothing else is said: 16 old classes and 10 new ones, 450 new rows of 64 features, a hidden layer of
64, 10 passes in minibatches of 32, WA with exemplars. Each ratio compares things that ran in turns; the best of the
turns counts. Two workers are timed by the wall clock and need two processors to themselves.
Prints a table (--json: JSON) with a limit beside each figure; exits with 1 if one is missed.
"""

import argparse
import json
import os
import resource
import subprocess
import sys
import time
import warnings
from concurrent.futures import ProcessPoolExecutor
from dataclasses import asdict, dataclass
from multiprocessing import get_context

import joblib
import numpy as np
from sklearn.exceptions import ConvergenceWarning
from sklearn.neural_network import MLPClassifier

from hyperforecast.checks import InputError
from hyperforecast.describing import describe
from hyperforecast.forecasting import advise_settings, load_forecaster
from hyperforecast.increments import Increment
from hyperforecast.learning import HeadTrainer, close_boundary, open_boundary, try_settings
from hyperforecast.settings import REHEARSAL_METHODS, Plan, Settings, SettingsBox

OLD, NEW, FEATURES, HIDDEN, PASSES, BATCH, ATTEMPTS = 16, 10, 64, 64, 10, 32, 64
ROWS_PER_CLASS = 45
TURNS = 7


@dataclass(frozen=True)
class Point:
    """A size on a curve of growth: CPU seconds in all, for each attempt's row and pass, and over linear growth."""

    size: int
    seconds: float
    each: float
    over_linear: float


@dataclass(frozen=True)
class Figure:
    """What was measured, and the limit it must keep: from above, or from below where `at_least`."""

    name: str
    value: float
    limit: float
    detail: str
    at_least: bool = False
    curve: tuple[Point, ...] = ()

    @property
    def passed(self):
        return self.value >= self.limit if self.at_least else self.value <= self.limit


def in_turns(jobs, turns=TURNS, clock=time.process_time):
    """Return {name: seconds} of callables that run in turns, the best turn of each; CPU seconds by default."""
    best = dict.fromkeys(jobs, np.inf)
    for _ in range(turns):
        for name, job in jobs.items():
            started = clock()
            job()
            best[name] = min(best[name], clock() - started)
    return best


def second_boundary(rows_per_class=ROWS_PER_CLASS, *, features=FEATURES, passes=PASSES, method="wa"):
    """The boundary that learning is measured at, with `rows_per_class` rows of each new class to train on."""
    rng = np.random.default_rng(0)
    centers = rng.standard_normal((OLD + NEW, features), dtype=np.float32)
    plan, trainer = Plan(method, HIDDEN, passes, BATCH, 2000), HeadTrainer()

    def increment(classes, rows):
        # A fifth of each class is held back, at most 8 rows.
        y = np.repeat(classes, rows + min(rows // 4, 8))
        X = rng.standard_normal((len(y), features), dtype=np.float32)
        X += centers[y]
        return Increment(X, y)

    opening = open_boundary(plan, None, increment(np.arange(OLD), ROWS_PER_CLASS))
    attempt = learned(opening, [Settings(0.02, 1.0, 60 if method in REHEARSAL_METHODS else None)])[0]
    carryover = close_boundary(trainer, opening, attempt, seed=0)
    return open_boundary(plan, carryover, increment(np.arange(OLD, OLD + NEW), rows_per_class))


def learned(boundary, settings):
    """Return the attempts; all of them must have gone to the end."""
    attempts = try_settings(HeadTrainer(), boundary, settings, seed=0)
    assert not any(one.diverged for one in attempts)
    return attempts


def drawn_settings(boundary, count):
    """Settings as a search draws them, but for learning rates at which attempts end early."""
    box = SettingsBox("wa", boundary.most_kept)
    return box.from_unit(np.random.default_rng(1).random((count, box.n_dimensions)) * [0.7, 0.7, 1])


def training_rows(boundary, settings):
    return len(boundary.y) + OLD * min(settings.kept_per_class, boundary.most_kept)


def share_of_sgemm(boundary):
    """Operations per second of 64 attempts, over those of the product of two large matrices."""
    settings = drawn_settings(boundary, ATTEMPTS)
    n = 1024
    A, B = np.random.default_rng(2).random((2, n, n), dtype=np.float32)
    seconds = in_turns({"sgemm": lambda: A @ B, "learning": lambda: learned(boundary, settings)})
    # Forward and backward products of each row; the first layer needs no gradient at its input.
    per_row = 2 * (2 * FEATURES * HIDDEN + 3 * HIDDEN * (OLD + NEW))
    operations = PASSES * per_row * sum(training_rows(boundary, one) for one in settings)
    rate, sgemm = operations / seconds["learning"], 2 * n**3 / seconds["sgemm"]
    return Figure("share of sgemm", rate / sgemm, 0.3, f"{rate / 1e9:.0f} of {sgemm / 1e9:.0f} billion operations a "
                  f"second, {ATTEMPTS / seconds['learning']:.0f} attempts a second", at_least=True)


def side_by_side(boundary):
    settings = drawn_settings(boundary, ATTEMPTS)
    seconds = in_turns({
        "together": lambda: try_settings(HeadTrainer(), boundary, settings, seed=0),
        "alone": lambda: [try_settings(HeadTrainer(), boundary, [one], seed=0) for one in settings],
    }, turns=3)
    return Figure("side by side over one after another", seconds["together"] / seconds["alone"], 0.4,
                  f"{seconds['together']:.3f} s and {seconds['alone']:.3f} s for {ATTEMPTS} attempts")


def advice(boundary):
    """Descriptors and advice over one attempt, which the advice does without."""
    box, settings, detail = SettingsBox("wa", boundary.most_kept), [Settings(0.02, 0.1, 20)], "descriptors and advice"
    try:
        forecaster = load_forecaster("wa")
    except InputError as error:
        forecaster, detail = None, f"descriptors alone ({error.received})"

    def advise():
        described = describe(HeadTrainer(), boundary)
        if forecaster:
            advise_settings(forecaster, described, box)

    seconds = in_turns({"advice": advise, "attempt": lambda: try_settings(HeadTrainer(), boundary, settings, seed=0)})
    return Figure("advice over one attempt", seconds["advice"] / seconds["attempt"], 2.0,
                  f"{detail}: {1e3 * seconds['advice']:.0f} ms, attempt {1e3 * seconds['attempt']:.0f} ms")


def imports():
    def child(module):
        subprocess.run([sys.executable, "-c", f"import {module}"], check=True)

    best = {"hyperforecast": np.inf, "numpy": np.inf}
    for _ in range(10):
        for module in best:
            before = resource.getrusage(resource.RUSAGE_CHILDREN)
            child(module)
            after = resource.getrusage(resource.RUSAGE_CHILDREN)
            spent = after.ru_utime + after.ru_stime - before.ru_utime - before.ru_stime
            best[module] = min(best[module], spent)
    return Figure("import hyperforecast over import numpy", best["hyperforecast"] / best["numpy"], 1.2,
                  f"{1e3 * best['hyperforecast']:.0f} ms and {1e3 * best['numpy']:.0f} ms, processes included")


def plain_rows(boundary, settings):
    kept = boundary.old_exemplars.cut(settings.kept_per_class)
    return np.concatenate([boundary.Z, kept.Z]), np.concatenate([boundary.y, kept.y])


def against_scikit_learn(boundary):
    """One of 64 attempts over MLPClassifier on the same rows: cross-entropy alone, no distillation, no alignment."""
    settings = Settings(0.02, 0.1, 20)
    Z, y = plain_rows(boundary, settings)

    def plain():
        model = MLPClassifier((HIDDEN,), solver="sgd", alpha=0.0, batch_size=BATCH, learning_rate_init=0.02,
                              momentum=0.9, nesterovs_momentum=False, random_state=0)
        for _ in range(PASSES):
            model.partial_fit(Z, y, classes=np.arange(OLD + NEW))

    seconds = in_turns({
        "plain": plain, "alone": lambda: try_settings(HeadTrainer(), boundary, [settings], seed=0),
        "together": lambda: try_settings(HeadTrainer(), boundary, [settings] * ATTEMPTS, seed=0)}, turns=4)
    each = seconds["together"] / ATTEMPTS
    return Figure("attempt over MLPClassifier", each / seconds["plain"], 0.1,
                  f"{1e3 * each:.1f} ms and {1e3 * seconds['plain']:.0f} ms; an attempt alone "
                  f"{1e3 * seconds['alone']:.0f} ms")


def against_torch(boundary):
    """One of 64 attempts over a plain PyTorch loop with the same loss on the same rows."""
    try:
        import torch
    except ImportError:
        return None
    torch.set_num_threads(1)
    settings = Settings(0.02, 0.1, 20)
    rows, codes = (torch.from_numpy(part) for part in plain_rows(boundary, settings))
    old = boundary.carryover.head

    def network(n_classes):
        made = torch.nn.Sequential(torch.nn.Linear(FEATURES, HIDDEN), torch.nn.ReLU(),
                                   torch.nn.Linear(HIDDEN, n_classes))
        with torch.no_grad():
            made[0].weight.copy_(torch.from_numpy(old["hidden_weights"].T))
            made[0].bias.copy_(torch.from_numpy(old["hidden_bias"][0]))
            made[2].weight.zero_()
            made[2].bias.zero_()
            made[2].weight[:OLD] = torch.from_numpy(old["output_weights"].T)
            made[2].bias[:OLD] = torch.from_numpy(old["output_bias"][0])
        return made

    def plain():
        student, functional = network(OLD + NEW), torch.nn.functional
        with torch.no_grad():
            teacher = functional.softmax(network(OLD)(rows) / 2, dim=1)
        optimizer = torch.optim.SGD(student.parameters(), lr=settings.learning_rate, momentum=0.9)
        for _ in range(PASSES):
            for batch in torch.randperm(len(rows)).split(BATCH):
                logits = student(rows[batch])
                distilled = functional.kl_div(functional.log_softmax(logits[:, :OLD] / 2, dim=1), teacher[batch],
                                              reduction="batchmean")
                loss = functional.cross_entropy(logits, codes[batch]) + 4 * settings.regularization * distilled
                optimizer.zero_grad()
                loss.backward()
                optimizer.step()

    seconds = in_turns({
        "plain": plain, "alone": lambda: try_settings(HeadTrainer(), boundary, [settings], seed=0),
        "together": lambda: try_settings(HeadTrainer(), boundary, [settings] * ATTEMPTS, seed=0)}, turns=4)
    each = seconds["together"] / ATTEMPTS
    return Figure("attempt over PyTorch", each / seconds["plain"], 1 / 15,
                  f"{1e3 * each:.1f} ms and {1e3 * seconds['plain']:.0f} ms; an attempt alone "
                  f"{1e3 * seconds['alone']:.0f} ms")


def growth(name, cases, linear_from):
    """How seconds grow over `cases`, {size: (boundary, attempts)}, against linear growth from one of the sizes on."""
    settings = Settings(0.02, 0.1, 1)
    seconds = in_turns({size: lambda boundary=boundary, attempts=attempts: learned(boundary, [settings] * attempts)
                        for size, (boundary, attempts) in cases.items()}, turns=3)
    each = {size: seconds[size] / (attempts * training_rows(boundary, settings) * boundary.plan.passes)
            for size, (boundary, attempts) in cases.items()}
    curve = tuple(Point(size, seconds[size], each[size], each[size] / each[linear_from]) for size in cases)
    return Figure(f"growth with {name}", curve[-1].over_linear, 1.2,
                  f"{1e6 * curve[-1].each:.3f} us for each attempt's row and pass at {curve[-1].size:,} {name}, "
                  f"{1e6 * each[linear_from]:.3f} us at {linear_from:,}", curve=curve)


def growth_with_rows(rows=(100, 300, 1_000, 3_000, 10_000, 30_000, 100_000)):
    """16 attempts on more and more new rows, in fewer passes from 10,000 rows on."""
    return growth("rows", {n: (second_boundary(n // NEW, passes=max(1, min(PASSES, 100_000 // n))), 16) for n in rows},
                  linear_from=1_000)


def growth_with_attempts(boundary, attempts=(16, 64, 256, 1_024)):
    return growth("attempts", {n: (boundary, n) for n in attempts}, linear_from=16)


def peak_of_training(rows, features):
    """Bytes that this process held at most, after one pass of 64 attempts on 45 different sets of rows."""
    boundary = second_boundary(rows // NEW, features=features, passes=1)
    learned(boundary, [Settings(0.001, 0.1, 1 + k % ROWS_PER_CLASS) for k in range(ATTEMPTS)])
    # In KiB on Linux.
    return 1024 * resource.getrusage(resource.RUSAGE_SELF).ru_maxrss


def memory(rows=20_000, features=784):
    """Peak of a fresh process, rows and libraries included; measured first, as a child counts its parent's peak too."""
    with ProcessPoolExecutor(1, mp_context=get_context("spawn")) as child:
        peak = child.submit(peak_of_training, rows, features).result()
    return Figure("peak memory of training, GB", peak / 1e9, 1.5,
                  f"{ATTEMPTS} attempts on {rows:,} rows of {features} features, which take "
                  f"{4e-9 * rows * features:.2f} GB")


def count_diverged(boundary, settings):
    """Try settings; a worker sends back what a records file needs, not the heads."""
    return sum(attempt.diverged for attempt in try_settings(HeadTrainer(), boundary, settings, seed=0))


def two_workers(boundary, n_pieces=8, attempts=64):
    """Pieces of work handed out one by one; the first turn also starts the workers, and the best turn counts."""
    settings = drawn_settings(boundary, n_pieces * attempts)
    pieces = [settings[k::n_pieces] for k in range(n_pieces)]

    def shared(workers):
        joblib.Parallel(n_jobs=workers, batch_size=1)(
            joblib.delayed(count_diverged)(boundary, piece) for piece in pieces)

    seconds = in_turns({"one": lambda: shared(1), "two": lambda: shared(2)}, turns=5, clock=time.perf_counter)
    return Figure("two workers over one, in speed", seconds["one"] / seconds["two"], 1.8,
                  f"{n_pieces} pieces of {attempts} attempts: {seconds['two']:.2f} s and {seconds['one']:.2f} s",
                  at_least=True)


def main():
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--json", action="store_true", help="print JSON")
    as_json = parser.parse_args().json
    if os.environ.get("OPENBLAS_NUM_THREADS") != "1":
        parser.error("set OPENBLAS_NUM_THREADS=1: everything that is compared runs on one thread")
    warnings.simplefilter("ignore", ConvergenceWarning)
    peak = memory()
    boundary = second_boundary()
    torch = against_torch(boundary)
    figures = [share_of_sgemm(boundary), side_by_side(boundary), advice(boundary), imports(),
               against_scikit_learn(boundary), *([torch] if torch else []), growth_with_rows(),
               growth_with_attempts(boundary), two_workers(boundary), peak]
    if as_json:
        print(json.dumps([{"name": one.name, "value": round(one.value, 4), "limit": one.limit,
                           "at_least": one.at_least, "passed": bool(one.passed), "detail": one.detail,
                           **({"curve": [asdict(point) for point in one.curve]} if one.curve else {})}
                          for one in figures], indent=2))
    else:
        for one in figures:
            print(f"{'pass' if one.passed else 'MISSED':<7}{one.name:<40}{one.value:>7.3f}  "
                  f"{'>=' if one.at_least else '<='} {one.limit:<6g}{one.detail}")
            for point in one.curve:
                print(f"{point.size:>20,}{point.seconds:>12.4f} s{1e6 * point.each:>10.3f} us each"
                      f"{point.over_linear:>12.3f} of linear")
        if not torch:
            print("PyTorch is not installed here: not compared.")
    return 0 if all(one.passed for one in figures) else 1


if __name__ == "__main__":
    sys.exit(main())
