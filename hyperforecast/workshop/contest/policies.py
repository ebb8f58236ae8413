"""Policies: ways to choose settings at a boundary. Each is a few candidates and the rows that the best is chosen on."""

from dataclasses import dataclass

import numpy as np

from hyperforecast.learning import Attempt


@dataclass(frozen=True)
class Policy:
    """A way to choose settings.

    Attributes
    ----------
    name : str
    proposals : str
        The property of a `Bench` that proposes its candidates: "constant", "advised", "drawn" or "searched".
    candidates : int
        How many of them it looks at; a single one is taken without an attempt.
    judged_on : {"selection", "check"}
        Rows that the best attempt is chosen on.
    once : bool
        Whether it chooses at the first boundary with old classes alone, and keeps to that.
    """

    name: str
    proposals: str
    candidates: int
    judged_on: str = "selection"
    once: bool = False


POLICIES = {policy.name: policy for policy in (
    Policy("constant", "constant", 1),
    Policy("tuned-once", "searched", 64, once=True),
    Policy("advice", "advised", 1),
    Policy("advice+4", "advised", 4),
    Policy("advice+8", "advised", 8),
    Policy("advice+4 on carryover", "advised", 4, judged_on="check"),
    Policy("random-8", "drawn", 8),
    Policy("random-64", "drawn", 64),
    Policy("search-64", "searched", 64),
)}
# The two ends of the scale on which a policy's part of the gap is measured.
FLOOR, CEILING = "constant", "search-64"


@dataclass(frozen=True)
class Choice:
    """What a policy chose at a boundary.

    Attributes
    ----------
    attempt : Attempt
        Settings and trained head.
    selection : float
        Its accuracy on all classes seen, on selection rows.
    attempts : int
        Attempts made to choose; 0 where a single candidate was taken as it is.
    operations : float
        Floating-point operations of training: of all attempts, or of the one that is kept.
    seconds : float
        CPU seconds of proposing candidates, descriptors included, and of training and judging them.
    """

    attempt: Attempt
    selection: float
    attempts: int
    operations: float
    seconds: float

    def as_dict(self):
        """Return a JSON-able dict, without the head."""
        return {"settings": self.attempt.settings.as_dict(), "selection": self.selection, "attempts": self.attempts,
                "operations": self.operations, "seconds": self.seconds, "diverged": self.attempt.diverged}


def choose(policy, bench, earlier=None):
    """Return the `Choice` of a policy on a `Bench`.

    Parameters
    ----------
    policy : Policy
    bench : Bench
    earlier : Settings, optional
        What it chose at the boundary before.
    """
    if policy.once and earlier is not None:
        candidates, seconds = [earlier], 0.0
    else:
        proposals = getattr(bench, policy.proposals)
        candidates, seconds = proposals.settings[:policy.candidates], proposals.seconds
    trials = bench.try_out(candidates)
    # The first of equals, for candidates come in order of promise; rounded, as sums of equal shares may differ.
    scores = np.round([bench.judge(trial, policy.judged_on) for trial in trials], 9)
    best = trials[int(np.argmax(scores))]
    return Choice(best.attempt, best.outcome.all, len(trials) if len(trials) > 1 else 0,
                  sum(trial.attempt.operations for trial in trials), seconds + sum(trial.seconds for trial in trials))
