"""The door for trainers: what gathering, searching, contests and the update cycle ask of a learner.

`HeadTrainer` is the built-in one. Any other object with the methods of `Trainer` serves in its place.
"""

from abc import abstractmethod
from collections.abc import Callable
from dataclasses import dataclass, replace
from typing import Protocol

import numpy as np

from hyperforecast.checks import InputError
from hyperforecast.learning.boundary import Boundary
from hyperforecast.learning.exemplars import Exemplars, herd, unit_rows
from hyperforecast.learning.head import (
    HeadLayout, backpropagate, fisher_diagonal, head_logits, hidden_features, new_head, softmax, top_curvature,
)
from hyperforecast.learning.objectives import Objective
from hyperforecast.learning.side_by_side import Regimen, train_side_by_side
from hyperforecast.rows import chunks, joined
from hyperforecast.settings import Settings

# Rows that facts about gradients and curvature are computed on.
MOST_FACT_ROWS = 128
# Of merged outputs: rows drawn from each class's summary, and the ridge, a share of the features' mean square.
DRAWN_PER_CLASS = 32
RIDGE = 1e-3


@dataclass(frozen=True)
class Job:
    """One attempt to make.

    Attributes
    ----------
    boundary : Boundary
    settings : Settings
    stop : callable, optional
        To be asked now and then while training: once it returns True, the time is over, and what has been learned so
        far is the attempt. Jobs that are learned together share it.
    """

    boundary: Boundary
    settings: Settings
    stop: Callable[[], bool] | None = None

    @property
    def kept(self):
        """Exemplars per class, as far as the memory allows; 0 for a method without rehearsal."""
        if not self.boundary.plan.rehearses:
            return 0
        return min(self.settings.kept_per_class, self.boundary.most_kept)

    @property
    def exemplars(self):
        """Exemplars of old classes to train on, those that stay when every class is cut to `kept`."""
        return self.boundary.old_exemplars.cut(self.kept)


@dataclass(frozen=True)
class Attempt:
    """A job done.

    Attributes
    ----------
    settings : Settings
    head : dict of str to ndarray
        The trainer's arrays after training.
    diverged : bool
    operations : float
        Floating-point operations spent.
    stopped : bool
        Whether it ended early because the time was over.
    """

    settings: Settings
    head: dict
    diverged: bool
    operations: float
    stopped: bool = False

    def __post_init__(self):
        # Numpy's own numbers would not go into JSON.
        object.__setattr__(self, "stopped", bool(self.stopped))
        object.__setattr__(self, "diverged", bool(self.diverged))
        object.__setattr__(self, "operations", float(self.operations))


class Trainer(Protocol):
    """What a learner offers. A class derived from this one needs `learn` and `class_scores`; the rest has a default.

    Rows Z are standardized float32 features (n, d). Codes y count from 0 in order of arrival, so that old classes keep
    theirs: `boundary.n_old` of `boundary.n_classes` were seen before. A *head* is the model as a dict of plain arrays,
    numeric, boolean or text, their names of letters, digits and underscores; a device folder stores nothing else of
    it. The trainer itself holds no state: each call is told all that it needs, in any order.

    The plan and the settings mean what the trainer makes of them, within the ranges in `hyperforecast.settings`. Of
    `plan.method` one thing is fixed: with "wa" and "icarl" exemplars are kept and trained on (`plan.rehearses`), with
    "ewc" and "lwf" there are none, and `settings.kept_per_class` is None.

    Examples
    --------
    A trainer that keeps a mean of each class, moved by the learning rate at every pass:

    >>> import numpy as np
    >>> class Means(Trainer):
    ...     def learn(self, jobs, *, seed):
    ...         return [self._attempt(job) for job in jobs]
    ...
    ...     def _attempt(self, job):
    ...         boundary, plan = job.boundary, job.boundary.plan
    ...         means = np.zeros((boundary.n_classes, boundary.n_features), np.float32)
    ...         if boundary.carryover is not None:
    ...             means[:boundary.n_old] = boundary.carryover.head["means"]
    ...         Z = np.concatenate([boundary.Z, job.exemplars.Z])
    ...         y = np.concatenate([boundary.y, job.exemplars.y])
    ...         for _ in range(plan.passes):
    ...             for code in np.unique(y):
    ...                 means[code] += job.settings.learning_rate * (Z[y == code].mean(axis=0) - means[code])
    ...         return Attempt(job.settings, {"means": means}, diverged=False, operations=3.0 * plan.passes * Z.size)
    ...
    ...     def class_scores(self, head, Z):
    ...         return 2 * Z @ head["means"].T - (head["means"] ** 2).sum(axis=1)

    Learned by hand, one increment (everything else in the package asks in this way):

    >>> from hyperforecast.increments import check_increment
    >>> from hyperforecast.learning import close_boundary, open_boundary, predict_codes, try_settings
    >>> from hyperforecast.settings import Plan, Settings
    >>> X = np.repeat([[0.0, 1.0], [4.0, 5.0]], 10, axis=0)
    >>> boundary = open_boundary(Plan("wa"), None, check_increment(X, np.repeat(["nut", "rod"], 10)))
    >>> attempt, = try_settings(Means(), boundary, [Settings(0.1, 1.0, 3)], seed=0)
    >>> carryover = close_boundary(Means(), boundary, attempt, seed=0)
    >>> carryover.classes[predict_codes(Means(), carryover.head, carryover.standardized(X[[0, 19]]))].tolist()
    ['nut', 'rod']
    >>> len(carryover.exemplars)
    6
    """

    @abstractmethod
    def learn(self, jobs, *, seed):
        """Return one `Attempt` per `Job`; all jobs share plan and new rows, and differ in settings or carryover.

        Start from `boundary.carryover.head`, or afresh at the first increment, where `boundary.carryover` is None.
        Train on the rows `boundary.Z` of classes `boundary.y` and on `job.exemplars`; `np.asarray` makes one array of
        rows that are not held in memory, where there is room for it. An attempt must come out the
        same whatever jobs are beside it. Report numbers that run away as `diverged`, rather than raise. Ask `job.stop`
        between minibatches or passes, where there is one; a trainer that does not is found to be late afterwards.
        """

    def operations_of(self, job):
        """Return the floating-point operations that a job takes if it goes to the end, for planning ahead.

        By default those of a linear model. Only the proportions matter: the speed that they are turned into seconds
        with is measured in the same count.
        """
        boundary = job.boundary
        n_rows = len(boundary.y) + len(job.exemplars)
        return 4.0 * boundary.plan.passes * n_rows * boundary.n_features * boundary.n_classes

    @abstractmethod
    def class_scores(self, head, Z):
        """Return scores (n, C) in code order; the highest wins, their softmax is the class probabilities."""

    def features(self, head, Z):
        """Return what exemplars are chosen by, (n, h); by default the rows themselves."""
        return Z

    def consolidated(self, boundary, attempt, *, seed):
        """Return the head to carry after the attempt that is kept, with all that the next boundary needs of this one.

        By default the attempt's own. Asked once a boundary, so that what is costly belongs here, not in `learn`.
        """
        return attempt.head

    def facts(self, boundary, *, seed):
        """Return numbers about the model at a boundary before training, a dict by descriptor name; by default none.

        The names are those in `hyperforecast.describing.model`. What is left out is a missing descriptor.
        """
        return {}

    def without_class(self, head, code):
        """Return the head without the class `code`; the codes above it move down by one. By default it is refused."""
        raise InputError("trainer", "must offer without_class, so that a class can be taken out", type(self).__name__)

    def merged_classes(self, carryover, code, into, *, seed):
        """Return the carryover's head with `into` answering for `code`, too, and without `code`; refused by default."""
        raise InputError("trainer", "must offer merged_classes, so that classes can be merged", type(self).__name__)


class HeadTrainer(Trainer):
    """The built-in trainer: EWC, LwF, iCaRL and WA on a linear head or one hidden layer.

    References (from memory): Kirkpatrick et al. 2017 (EWC), Schwarz et al. 2018 (one recentred penalty), Li & Hoiem
    2016 (LwF), Rebuffi et al. 2017 (iCaRL), Zhao et al. 2020 (WA).
    """

    def learn(self, jobs, *, seed):
        """Return one `Attempt` per `Job`, trained side by side. See `Trainer.learn`."""
        boundary = jobs[0].boundary
        plan = boundary.plan
        layout = HeadLayout(boundary.n_features, plan.hidden_units, boundary.n_classes)
        objective = _objective(boundary)
        pool = _Pool(layout, objective, seed)
        regimens = [pool.regimen(job) for job in jobs]
        Z, y, targets = pool.gathered()
        heads = train_side_by_side(layout, objective, regimens, Z=Z, y=y, targets=targets,
                                   passes=plan.passes, batch_size=plan.batch_size, seed=seed, stop=jobs[0].stop)
        attempts = []
        for job, trained in zip(jobs, heads):
            head = {name: part[0] for name, part in layout.parts(trained.flat[None]).items()}
            if plan.method == "wa" and boundary.n_old and not trained.diverged:
                head = align_weights(head, boundary.n_old)
            operations = trained.steps * plan.batch_size * layout.operations_per_row
            attempts.append(Attempt(job.settings, head, trained.diverged, operations, trained.stopped))
        if plan.method == "icarl" and not any(one.stopped for one in attempts):
            _add_class_means(jobs, attempts)
        return attempts

    def operations_of(self, job):
        """Return what `learn` counts: all minibatches of all passes."""
        boundary, plan = job.boundary, job.boundary.plan
        layout = HeadLayout(boundary.n_features, plan.hidden_units, boundary.n_classes)
        steps = plan.passes * -(-(len(boundary.y) + len(job.exemplars)) // plan.batch_size)
        return float(steps * plan.batch_size * layout.operations_per_row)

    def class_scores(self, head, Z):
        """Return scores (n, C): logits, or with class means minus the squared distance to each on the unit sphere."""
        with np.errstate(all="ignore"):
            if "class_means" in head:
                return 2 * unit_rows(hidden_features(head, Z)) @ head["class_means"].T - 2
            return head_logits(head, Z)

    def features(self, head, Z):
        """Return the hidden activations (n, H), or Z for a linear head."""
        with np.errstate(all="ignore"):
            return hidden_features(head, Z)

    def consolidated(self, boundary, attempt, *, seed):
        """Return the head's arrays; for EWC with the importance of its weights, a mean over all rows seen.

        With the mean Fisher F of n_old rows and n_new new rows, lambda = n_old / n_new weighs every row alike.
        """
        head = dict(attempt.head)
        if boundary.plan.method != "ewc":
            return head
        before = {} if boundary.carryover is None else boundary.carryover.head
        n_before = 0 if boundary.carryover is None else int(boundary.carryover.summaries.count.sum())
        share = len(boundary.y) / (n_before + len(boundary.y))
        fisher = {}
        with np.errstate(all="ignore"):
            for _, Z in chunks(boundary.Z):
                weight = np.float32(len(Z) / len(boundary.y))
                for name, part in fisher_diagonal(attempt.head, Z).items():
                    fisher[name] = weight * part + fisher.get(name, 0)
        for name, part in fisher.items():
            old = before.get(f"importance_{name}")
            part = np.float32(share) * part
            if old is not None:
                part[:, :old.shape[1]] += np.float32(1 - share) * old
            head[f"importance_{name}"] = np.nan_to_num(part, posinf=0, neginf=0).astype(np.float32)
        return head

    def with_method(self, carryover, method):
        """Return the carryover as it would be if the device went on with another method.

        Exemplars are the rows that are held: check rows where there are no exemplars. Importance (EWC) is that of the
        rows held, where training would have used all rows; iCaRL's class means go, its logits stay.
        """
        plan = replace(carryover.plan, method=method)
        held = carryover.exemplars if len(carryover.exemplars) else carryover.check_rows
        head = {name: part for name, part in carryover.head.items()
                if name != "class_means" and not name.startswith("importance_")}
        if method == "ewc":
            with np.errstate(all="ignore"):
                fisher = fisher_diagonal(head, held.Z) if len(held) else {name: 0 * part for name, part in head.items()}
            for name, part in fisher.items():
                head[f"importance_{name}"] = np.nan_to_num(part, posinf=0, neginf=0)
        exemplars = held if plan.rehearses else Exemplars.none(carryover.n_features)
        return replace(carryover, plan=plan, head=head, exemplars=exemplars)

    def facts(self, boundary, *, seed):
        """Return facts about the old head with its outputs for the new classes added, before training.

        All need an old model; those on exemplars need exemplars (or check rows, for the methods without rehearsal).
        """
        if boundary.carryover is None:
            return {}
        rng = np.random.default_rng([seed, 0x6661])
        layout = HeadLayout(boundary.n_features, boundary.plan.hidden_units, boundary.n_classes)
        flat = layout.flatten(boundary.carryover.head)
        head = {name: part[0] for name, part in layout.parts(flat).items()}
        objective = _objective(boundary)
        with np.errstate(all="ignore"):
            facts = _facts(head, objective, boundary, rng)
        return {name: float(value) for name, value in facts.items() if np.isfinite(value)}

    def without_class(self, head, code):
        """Return the head without output `code`, its importance and its class mean.

        The softmax of the others is what it was, given that it is none of that class.
        """
        left = {}
        for name, array in head.items():
            of_outputs = name.removeprefix("importance_").startswith("output_")
            left[name] = np.delete(array, code, axis=1) if of_outputs else array
        if "class_means" in head:
            left["class_means"] = np.delete(head["class_means"], code, axis=0)
        return left

    def merged_classes(self, carryover, code, into, *, seed):
        """Return the head with one output for both classes, `into`'s, and without output `code`.

        Under a softmax the logit of either is log(e^a + e^b) for their logits a and b; with iCaRL's logistic outputs
        1 - (1 - p)(1 - q) has the logit log(e^a + e^b + e^(a + b)). Neither is linear in the features, so that the new
        output is a ridge regression of it, drawn to the mean of the two outputs (weighted by rows seen), over rows held
        and rows drawn from the class summaries. Importances add: exact where no row is torn between the two, and too
        strong otherwise. iCaRL's class mean is that of both classes' exemplars. Own derivations.
        """
        head = carryover.head
        share = carryover.summaries.count[code] / carryover.summaries.count[[code, into]].sum()
        Z, weight = _merging_rows(carryover, code, into, np.random.default_rng([seed, 0x6D65]))
        features = np.hstack([hidden_features(head, Z), np.ones((len(Z), 1), np.float32)]).astype(np.float64)
        output = np.vstack([head["output_weights"], head["output_bias"]]).astype(np.float64)
        logits = features @ output[:, [code, into]]
        wanted = np.logaddexp(*logits.T)
        if carryover.plan.method == "icarl":
            wanted = np.logaddexp(wanted, logits.sum(axis=1))
        middle = output[:, [code, into]] @ [share, 1 - share]
        gram = (features * weight[:, None]).T @ features
        gram[np.diag_indices_from(gram)] += RIDGE * np.trace(gram) / len(gram)
        output[:, into] = middle + np.linalg.solve(gram, features.T @ (weight * (wanted - features @ middle)))
        output = output.astype(np.float32)
        merged = {**head, "output_weights": output[:-1], "output_bias": output[-1:]}
        for name in ("importance_output_weights", "importance_output_bias"):
            if name in head:
                merged[name] = head[name].copy()
                merged[name][:, into] += head[name][:, code]
        if "class_means" in head:
            rows = np.isin(carryover.exemplars.y, [code, into])
            means = head["class_means"].copy()
            means[into] = unit_rows(unit_rows(hidden_features(head, carryover.exemplars.Z[rows])).sum(axis=0))
            merged["class_means"] = means
        return self.without_class(merged, code)


def align_weights(head, n_old):
    """Return the head with the outputs of classes from `n_old` on scaled so that the mean weight norms agree.

    Zhao et al. 2020, "Maintaining Discrimination and Fairness in Class Incremental Learning", from memory:
    gamma = mean ||w_old|| / mean ||w_new||. Their corrected logits are gamma times the new ones, so biases scale too.
    """
    weights, bias = head["output_weights"].copy(), head["output_bias"].copy()
    norms = np.sqrt((weights**2).sum(axis=0))
    if n_old == len(norms) or not norms[n_old:].mean() > 0:
        return head
    gamma = norms[:n_old].mean() / norms[n_old:].mean()
    weights[:, n_old:] *= gamma
    bias[:, n_old:] *= gamma
    return {**head, "output_weights": weights, "output_bias": bias}


def _merging_rows(carryover, code, into, rng):
    """Rows to fit a merged output on, and their weights: the two classes together weigh as much as all others."""
    summaries, held = carryover.summaries, (carryover.exemplars, carryover.check_rows)
    drawn = np.repeat(np.arange(len(summaries.count)), DRAWN_PER_CLASS)
    noise = rng.standard_normal((len(drawn), carryover.n_features), dtype=np.float32)
    noise = summaries.mean[drawn] + np.sqrt(summaries.variance[drawn]) * noise
    Z = np.concatenate([*(rows.Z for rows in held), noise])
    merged = np.isin(np.concatenate([*(rows.y for rows in held), drawn]), [code, into])
    return Z, np.where(merged, 0.5 / merged.sum(), 0.5 / max((~merged).sum(), 1))


def _objective(boundary):
    return Objective(boundary.plan.method, n_classes=boundary.n_classes, n_old=boundary.n_old, arrived=boundary.arrived)


class _Pool:
    """Training rows of all jobs: for each distinct carryover the increment's rows, then its exemplars."""

    def __init__(self, layout, objective, seed):
        self.layout, self.objective, self.seed = layout, objective, seed
        self.starts, self.rows = {}, {}
        self.Z, self.y, self.targets, self.size = [], [], [], 0

    def regimen(self, job):
        boundary = job.boundary
        if id(boundary) not in self.starts:
            self.starts[id(boundary)] = self._add(boundary)
        first, flat, importance = self.starts[id(boundary)]
        length = len(boundary.y) + len(job.exemplars)
        rows = self.rows.setdefault((first, length), np.arange(first, first + length))
        return Regimen(job.settings.learning_rate, job.settings.regularization, rows, flat, importance)

    def _add(self, boundary):
        rng = np.random.default_rng([self.seed, 0x6865])
        exemplars = boundary.old_exemplars
        if boundary.carryover is None:
            arrays = new_head(boundary.n_features, boundary.plan.hidden_units, rng)
        else:
            arrays = boundary.carryover.head
        first = self.size
        Z = joined([boundary.Z, exemplars.Z])
        self.Z.append(Z)
        self.y.append(np.concatenate([boundary.y, exemplars.y]))
        if self.objective.distils:
            # Once for all passes and all attempts: the old head does not change.
            with np.errstate(all="ignore"):
                self.targets.append(np.concatenate([self.objective.targets(head_logits(arrays, part))
                                                    for _, part in chunks(Z)]))
        self.size += len(Z)
        importance = self.layout.flatten(arrays, "importance_")[0] if boundary.plan.method == "ewc" else None
        return first, self.layout.flatten(arrays)[0], importance

    def gathered(self):
        targets = np.concatenate(self.targets) if self.targets else None
        return joined(self.Z), np.concatenate(self.y), targets


def _add_class_means(jobs, attempts):
    """Give every attempt its class means: of the exemplars that it would keep, on the unit sphere.

    Nearest-mean classification after Rebuffi et al. 2017, eq. 2, from memory. All jobs share their new rows, so
    that a class is herded for all attempts at once.
    """
    boundary = jobs[0].boundary
    Z, y = boundary.candidates()
    kept = np.array([job.kept for job in jobs])
    with np.errstate(all="ignore"):
        new = np.stack([np.nan_to_num(unit_rows(hidden_features(one.head, Z))) for one in attempts])
        means = np.zeros((len(jobs), boundary.n_classes, new.shape[2]), np.float32)
        for k, (job, attempt) in enumerate(zip(jobs, attempts)):
            if len(job.exemplars):
                features = np.nan_to_num(unit_rows(hidden_features(attempt.head, job.exemplars.Z)))
                np.add.at(means[k], job.exemplars.y, features)
        held = np.zeros((len(jobs), boundary.n_classes), np.int64)
        for k, job in enumerate(jobs):
            held[k] = np.bincount(job.exemplars.y, minlength=boundary.n_classes)
        for code in boundary.arrived:
            rows = np.flatnonzero(y == code)
            room = np.minimum(np.maximum(kept - held[:, code], 0), len(rows))
            if not room.max():
                continue
            order = herd(new[:, rows], int(room.max()))
            for k in range(len(jobs)):
                means[k, code] += new[k, rows[order[k, :room[k]]]].sum(axis=0)
        for attempt, mean in zip(attempts, means):
            attempt.head["class_means"] = unit_rows(mean)


def _facts(head, objective, boundary, rng):
    plan, n_old = boundary.plan, boundary.n_old
    rows = rng.permutation(len(boundary.y))[:MOST_FACT_ROWS]
    Z, y = boundary.Z[rows], boundary.y[rows]
    logits = head_logits(head, Z)
    old = softmax(logits[:, :n_old])
    facts = {
        "confidence_new": old.max(axis=1).mean(),
        "entropy_new": -(old * np.log(old + 1e-12)).sum(axis=1).mean() / np.log(n_old) if n_old > 1 else 0.0,
        "largest_logit_new": logits[:, :n_old].max(axis=1).mean(),
        "curvature_new": top_curvature(head, Z, objective.loss_curvature(logits), rng=rng),
        "output_weight_norm": np.sqrt((head["output_weights"][:, :n_old] ** 2).sum(axis=0)).mean(),
        "output_bias_spread": head["output_bias"][0, :n_old].std(),
        "feature_norm_new": np.sqrt((hidden_features(head, Z) ** 2).sum(axis=1)).mean(),
    }
    if "hidden_weights" in head:
        facts["active_share_new"] = (hidden_features(head, Z) > 0).mean()
        facts["hidden_weight_norm"] = np.sqrt((head["hidden_weights"] ** 2).mean())
    gradient_new = _gradient(head, objective, Z, y, logits)
    facts["gradient_norm_new"] = _length(gradient_new)
    kept = boundary.old_exemplars if plan.rehearses else boundary.old_check_rows
    if len(kept):
        rows = rng.permutation(len(kept))[:MOST_FACT_ROWS]
        Z_old, y_old = kept.Z[rows], kept.y[rows]
        logits_old = head_logits(head, Z_old)
        gradient_old = _gradient(head, objective, Z_old, y_old, logits_old)
        facts["gradient_norm_exemplars"] = _length(gradient_old)
        product = sum(float(np.vdot(gradient_new[name], gradient_old[name])) for name in gradient_new)
        facts["gradient_cosine"] = product / (facts["gradient_norm_new"] * facts["gradient_norm_exemplars"])
        facts["curvature_exemplars"] = top_curvature(head, Z_old, objective.loss_curvature(logits_old), rng=rng)
        facts["loss_exemplars"] = -np.log(softmax(logits_old)[np.arange(len(rows)), y_old] + 1e-12).mean()
    if plan.method == "ewc":
        importance = np.concatenate([boundary.carryover.head[f"importance_{name}"].ravel() for name in head])
        facts["importance_mean"] = importance.mean()
        facts["anchor_curvature"] = importance.max()
    else:
        facts["anchor_curvature"] = top_curvature(head, Z, objective.anchor_curvature(logits), rng=rng)
    return facts


def _gradient(head, objective, Z, y, logits):
    """Gradient of the mean unanchored loss over rows Z, part by part."""
    targets = objective.targets(logits[:, :objective.n_old]) if objective.distils else None
    weightless = np.zeros((1, 1, 1), np.float32)
    error = objective.output_gradient(logits[None].copy(), y, targets, weightless)[0]
    return backpropagate(head, Z, error / np.float32(len(Z)))


def _length(parts):
    return np.sqrt(sum(float(np.vdot(part, part)) for part in parts.values()))
