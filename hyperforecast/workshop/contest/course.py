"""A course: the stream that policies are sent through, with the plan, forecaster and seed they share."""

from dataclasses import dataclass
from functools import cached_property

from hyperforecast.forecasting import Forecaster, opening_settings
from hyperforecast.learning import Job, Trainer, open_boundary
from hyperforecast.settings import Plan
from hyperforecast.workshop.contest.bench import Bench, search_on
from hyperforecast.workshop.gathering import derived_seed
from hyperforecast.workshop.streams import StreamDefinition


@dataclass(frozen=True)
class Course:
    """One stream, learned by one method.

    Attributes
    ----------
    definition : StreamDefinition
    forecaster : Forecaster
        Of the plan's method.
    plan : Plan
    seed : int
        With the definition's key and the method it determines everything.
    trainer : Trainer
    """

    definition: StreamDefinition
    forecaster: Forecaster
    plan: Plan
    seed: int
    trainer: Trainer

    @cached_property
    def stream(self):
        """The `Stream`, built when first asked for."""
        return self.definition.build()

    def step_seed(self, t):
        """Return the seed of all that happens at boundary t."""
        return derived_seed("contest", self.definition.key, self.plan.method, self.seed, t)

    def opening(self):
        """Return (boundary, attempt) of the first increment, the same for every policy."""
        boundary = open_boundary(self.plan, None, self.stream.training(0), seed=self.step_seed(0))
        return boundary, self.trainer.learn([Job(boundary, opening_settings(self.plan))], seed=self.step_seed(0))[0]

    def bench(self, t, carryover, *, now_weight):
        """Return the `Bench` of boundary t for policies that come with this carryover."""
        boundary = open_boundary(self.plan, carryover, self.stream.training(t), seed=self.step_seed(t))
        return Bench(self.trainer, boundary, self.stream.selection(t), self.forecaster, now_weight=now_weight,
                     seed=self.step_seed(t))

    def scoring(self, boundary):
        """Return a `BoundarySearch` whose outcomes are those on scoring rows."""
        return search_on(self.trainer, boundary, self.stream.scoring(boundary.number), seed=0)
