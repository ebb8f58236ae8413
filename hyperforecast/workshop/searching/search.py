"""The slower search: many attempts at one boundary, eight side by side, the best kept."""

from dataclasses import dataclass, replace

import numpy as np

from hyperforecast.checks import InputError, check_choice, check_keys, check_whole
from hyperforecast.settings import Settings
from hyperforecast.workshop.searching.designs import space_filling, uniform_draws
from hyperforecast.workshop.searching.tpe import propose

STRATEGIES = ("tpe", "random", "space_filling")
STARTUP = 16
MOST_ATTEMPTS = 1_000_000


@dataclass(frozen=True)
class SearchResult:
    """What a search has tried so far, n >= 1 attempts in order.

    Attributes
    ----------
    strategy : {"tpe", "random", "space_filling"}
    seed, batch : int
    settings : list of Settings
        Of each attempt.
    scores : ndarray of shape (n,)
        Higher is better; NaN is a failed attempt.
    """

    strategy: str
    seed: int
    batch: int
    settings: list
    scores: np.ndarray

    def __len__(self):
        return len(self.settings)

    @property
    def best_index(self):
        """Index of the best attempt: the first among equals; 0 if all failed."""
        return 0 if np.isnan(self.scores).all() else int(np.nanargmax(self.scores))

    @property
    def best(self):
        """`Settings` of the best attempt."""
        return self.settings[self.best_index]

    @property
    def best_so_far(self):
        """Best score after each attempt, shape (n,); NaN until one succeeds."""
        return np.fmax.accumulate(self.scores)

    def as_dict(self):
        """Return a JSON-able dict; a failed attempt's score is None."""
        def plain(scores):
            return [None if np.isnan(score) else float(score) for score in scores]

        return {
            "strategy": self.strategy,
            "seed": self.seed,
            "batch": self.batch,
            "settings": [one.as_dict() for one in self.settings],
            "scores": plain(self.scores),
            "best_so_far": plain(self.best_so_far),
            "best_index": self.best_index,
        }

    @classmethod
    def from_dict(cls, document, method):
        """Return the `SearchResult` that `as_dict` made a document of, or raise `InputError`."""
        name = "search result"
        parts = ("strategy", "seed", "batch", "settings", "scores", "best_so_far", "best_index")
        if not isinstance(document, dict) or set(document) != set(parts):
            raise InputError(name, f"must hold {', '.join(parts)}", document)
        settings, scores = document["settings"], document["scores"]
        if not isinstance(settings, list) or not isinstance(scores, list) or not 0 < len(settings) == len(scores):
            raise InputError(name, "must hold one score for each settings, and at least one", "other content")
        for one in settings:
            if not isinstance(one, dict) or not {"learning_rate", "regularization"} <= set(one):
                raise InputError(name, "must hold settings with a learning_rate and a regularization", one)
            check_keys(name, one, ("learning_rate", "regularization", "kept_per_class"))
        result = cls(
            check_choice("strategy", document["strategy"], STRATEGIES),
            check_whole("seed", document["seed"]),
            check_whole("batch", document["batch"], low=1),
            [Settings(**one).checked(method) for one in settings],
            _check_scores(name, scores, len(settings)),
        )
        if result.as_dict() != document:
            raise InputError(name, "must have a best_so_far and best_index that follow from its scores",
                             document["best_index"])
        return result


def run_search(evaluate, box, *, strategy, attempts, batch=8, warm_starts=(), seed, earlier=None, on_progress=None):
    """Search a box of settings.

    The attempts are a fixed sequence: fewer attempts are the beginning of more, and a search that
    continues from an earlier result goes on as if it had never stopped.

    Parameters
    ----------
    evaluate : callable
        Takes a list of up to `batch` `Settings`, tries them side by side and returns their scores:
        higher is better, NaN is a failure.
    box : SettingsBox
    strategy : {"tpe", "random", "space_filling"}
        TPE starts with the space-filling design until there are 16 attempts, warm starts included.
    attempts : int
        How many in all, earlier ones and warm starts included.
    batch : int
        Attempts side by side.
    warm_starts : sequence of Settings
        Tried first, in this order; `kept_per_class` is cut to what the box allows.
    seed : int
    earlier : SearchResult, optional
        An interrupted search of the same strategy, seed, batch and warm starts, to be continued.
    on_progress : callable, optional
        Called with the `SearchResult` so far after each batch.

    Returns
    -------
    SearchResult

    Raises
    ------
    InputError
        For an argument out of range, or an earlier result of another search.
    """
    check_choice("strategy", strategy, STRATEGIES)
    check_whole("attempts", attempts, low=1, high=MOST_ATTEMPTS)
    check_whole("batch", batch, low=1)
    check_whole("seed", seed)
    warm_starts = _fit_to_box(warm_starts, box)
    settings, scores = [], np.empty(0)
    if earlier is not None:
        _check_earlier(earlier, strategy, seed, batch, warm_starts, attempts)
        settings, scores = list(earlier.settings), earlier.scores

    draw = uniform_draws if strategy == "random" else space_filling
    n_drawn = STARTUP if strategy == "tpe" else attempts
    design = draw(n_drawn, box.n_dimensions, seed=seed)
    opening = warm_starts + box.from_unit(design[len(warm_starts):])

    while len(settings) < attempts:
        # A batch always starts at a multiple of its size, even if part of it is known, so that
        # proposals rest on the same attempts wherever the search was interrupted.
        start = len(settings) // batch * batch
        proposed = opening[start:start + batch]
        if strategy == "tpe":
            _fill_with_proposals(proposed, batch, box, settings[:start], scores[:start], seed)
        new = proposed[len(settings) - start:attempts - start]
        outcome = _check_scores("scores of evaluate", evaluate(list(new)), len(new))
        settings, scores = settings + new, np.concatenate([scores, outcome])
        if on_progress is not None:
            on_progress(SearchResult(strategy, seed, batch, list(settings), scores.copy()))
    return SearchResult(strategy, seed, batch, settings, scores)


def _fill_with_proposals(proposed, batch, box, settings, scores, seed):
    points = box.to_unit(settings)
    while len(proposed) < batch:
        rng = np.random.default_rng((seed, len(settings) + len(proposed)))
        proposed += box.from_unit(propose(points, scores, box.to_unit(proposed), rng)[None])


def _fit_to_box(warm_starts, box):
    for one in warm_starts:
        if not isinstance(one, Settings):
            raise InputError("warm_starts", "must be a sequence of Settings", repr(one))
        one.checked(box.method)
    return [one if one.kept_per_class is None else replace(one, kept_per_class=min(one.kept_per_class, box.most_kept))
            for one in warm_starts]


def _check_earlier(earlier, strategy, seed, batch, warm_starts, attempts):
    for name, value in (("strategy", strategy), ("seed", seed), ("batch", batch)):
        if getattr(earlier, name) != value:
            raise InputError("earlier", f"must have the same {name} as this search, {value}", getattr(earlier, name),
                             "continue with the same arguments")
    known = min(len(earlier), len(warm_starts))
    if earlier.settings[:known] != warm_starts[:known]:
        raise InputError("earlier", "must begin with the warm starts of this search", "others")
    if len(earlier) > attempts:
        raise InputError("earlier", f"must hold at most the {attempts} attempts asked for", len(earlier))


def _check_scores(name, scores, n):
    try:
        scores = np.array(scores, dtype=np.float64)
    except (TypeError, ValueError) as error:
        raise InputError(name, "must be numbers, NaN for a failure", error) from None
    if scores.shape != (n,) or np.isinf(scores).any():
        raise InputError(name, f"must be {n} numbers, finite or NaN for a failure", np.array2string(scores))
    return scores
