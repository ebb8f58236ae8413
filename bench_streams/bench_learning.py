"""What learning and advice cost, as ratios of CPU seconds measured in one run.

    OPENBLAS_NUM_THREADS=1 python bench_streams/bench_learning.py [--json]

One boundary throughout: 16 old classes and 10 new ones, 450 new rows of 64 features, a hidden layer of 64, 10 passes in
minibatches of 32, WA with exemplars. Each figure compares things that ran in turns; the best of the turns counts.
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
from dataclasses import dataclass

import numpy as np
from sklearn.exceptions import ConvergenceWarning
from sklearn.neural_network import MLPClassifier

from hyperforecast.checks import InputError
from hyperforecast.describing import describe
from hyperforecast.forecasting import advise_settings, load_forecaster
from hyperforecast.increments import Increment
from hyperforecast.learning import HeadTrainer, close_boundary, open_boundary, try_settings
from hyperforecast.settings import Plan, Settings, SettingsBox

OLD, NEW, FEATURES, HIDDEN, PASSES, BATCH, ATTEMPTS = 16, 10, 64, 64, 10, 32, 64
# 45 training rows of each class, 8 held back.
ROWS_PER_CLASS = 53
TURNS = 7


@dataclass(frozen=True)
class Figure:
    """A measured ratio, and the limit it must keep: from above, or from below where `at_least`."""

    name: str
    value: float
    limit: float
    detail: str
    at_least: bool = False

    @property
    def passed(self):
        return self.value >= self.limit if self.at_least else self.value <= self.limit


def in_turns(jobs, turns=TURNS):
    """Return {name: CPU seconds} of callables that run in turns, the best turn of each."""
    best = dict.fromkeys(jobs, np.inf)
    for _ in range(turns):
        for name, job in jobs.items():
            started = time.process_time()
            job()
            best[name] = min(best[name], time.process_time() - started)
    return best


def second_boundary(rows_per_class=ROWS_PER_CLASS):
    """The boundary that everything is measured at."""
    rng = np.random.default_rng(0)
    centers = rng.standard_normal((OLD + NEW, FEATURES))
    plan, trainer = Plan("wa", HIDDEN, PASSES, BATCH, 2000), HeadTrainer()

    def increment(classes):
        y = np.repeat(classes, rows_per_class)
        return Increment((centers[y] + rng.standard_normal((len(y), FEATURES))).astype(np.float32), y)

    opening = open_boundary(plan, None, increment(np.arange(OLD)))
    attempt = try_settings(trainer, opening, [Settings(0.02, 1.0, 60)], seed=0)[0]
    return open_boundary(plan, close_boundary(trainer, opening, attempt, seed=0), increment(np.arange(OLD, OLD + NEW)))


def drawn_settings(boundary, count):
    """Settings as a search draws them, but for learning rates at which attempts end early."""
    box = SettingsBox("wa", boundary.most_kept)
    return box.from_unit(np.random.default_rng(1).random((count, box.n_dimensions)) * [0.7, 0.7, 1])


def training_rows(boundary, settings):
    return len(boundary.y) + OLD * min(settings.kept_per_class, boundary.most_kept)


def share_of_sgemm(boundary):
    """Operations per second of 64 attempts, over those of the product of two large matrices."""
    settings = drawn_settings(boundary, ATTEMPTS)
    n, attempts = 1024, None
    A, B = np.random.default_rng(2).random((2, n, n), dtype=np.float32)

    def learn():
        nonlocal attempts
        attempts = try_settings(HeadTrainer(), boundary, settings, seed=0)

    seconds = in_turns({"sgemm": lambda: A @ B, "learning": learn})
    # Forward and backward products of each row; the first layer needs no gradient at its input.
    per_row = 2 * (2 * FEATURES * HIDDEN + 3 * HIDDEN * (OLD + NEW))
    operations = PASSES * per_row * sum(training_rows(boundary, one) for one in settings)
    assert not any(one.diverged for one in attempts)
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
    return Figure("advice over one attempt", seconds["advice"] / seconds["attempt"], 1.0,
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
    return Figure("attempt over MLPClassifier", each / seconds["plain"], 0.15,
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
    return Figure("attempt over PyTorch", each / seconds["plain"], 0.1,
                  f"{1e3 * each:.1f} ms and {1e3 * seconds['plain']:.0f} ms; an attempt alone "
                  f"{1e3 * seconds['alone']:.0f} ms")


def growth(boundary):
    """Seconds per attempt and row, with twice the rows and with four times the attempts."""
    larger = second_boundary(2 * ROWS_PER_CLASS)
    settings = [Settings(0.02, 0.1, 20)]
    seconds = in_turns({
        "here": lambda: try_settings(HeadTrainer(), boundary, settings * 16, seed=0),
        "rows": lambda: try_settings(HeadTrainer(), larger, settings * 16, seed=0),
        "attempts": lambda: try_settings(HeadTrainer(), boundary, settings * 64, seed=0)}, turns=5)
    more = training_rows(larger, settings[0]) / training_rows(boundary, settings[0])
    yield Figure("growth with rows", seconds["rows"] / seconds["here"] / more, 1.2,
                 f"{more:.2f} times the rows, {seconds['rows'] / seconds['here']:.2f} times the seconds")
    yield Figure("growth with attempts", seconds["attempts"] / seconds["here"] / 4, 1.2,
                 f"4 times the attempts, {seconds['attempts'] / seconds['here']:.2f} times the seconds")


def main():
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--json", action="store_true", help="print JSON")
    as_json = parser.parse_args().json
    if os.environ.get("OPENBLAS_NUM_THREADS") != "1":
        parser.error("set OPENBLAS_NUM_THREADS=1: everything that is compared runs on one thread")
    warnings.simplefilter("ignore", ConvergenceWarning)
    boundary = second_boundary()
    torch = against_torch(boundary)
    figures = [share_of_sgemm(boundary), side_by_side(boundary), advice(boundary), imports(),
               against_scikit_learn(boundary), *([torch] if torch else []), *growth(boundary)]
    if as_json:
        print(json.dumps([{"name": one.name, "value": round(one.value, 4), "limit": one.limit,
                           "at_least": one.at_least, "passed": bool(one.passed), "detail": one.detail}
                          for one in figures], indent=2))
    else:
        for one in figures:
            print(f"{'pass' if one.passed else 'MISSED':<7}{one.name:<40}{one.value:>7.3f}  "
                  f"{'>=' if one.at_least else '<='} {one.limit:<6g}{one.detail}")
        if not torch:
            print("PyTorch is not installed here: not compared.")
    return 0 if all(one.passed for one in figures) else 1


if __name__ == "__main__":
    sys.exit(main())
