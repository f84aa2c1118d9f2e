"""Many candidates on many plants in one lock-step run: what tuning and training ask for."""

from collections.abc import Sequence
from dataclasses import dataclass
from functools import cached_property

import numpy as np

from idlearn.budget import Budget
from idlearn.control import Controller, FilterForm, FilterRunner
from idlearn.envs.engine import simulate
from idlearn.envs.linear import LinearPlant
from idlearn.envs.scenario import Streams
from idlearn.envs.tally import Inside, Loop, Rollout
from idlearn.models import Ensemble


@dataclass(frozen=True)
class TrialGround:
    """Plants, streams and surroundings on which contenders are run.

    Attributes:
        ensemble: the plants.
        streams: grouped by episode length; every plant meets every stream.
        loop: what surrounds the plant.
        gain: factor on the actuators' effect, for stress [-].
        noise: factor on the innovations, for stress [-].
        extra_delay_samples: latency that controllers do not know, for stress.
    """

    ensemble: Ensemble
    streams: tuple[Streams, ...]
    loop: Loop
    gain: float = 1.0
    noise: float = 1.0
    extra_delay_samples: int = 0

    @property
    def steps(self) -> int:
        """Plant-steps that one contender costs."""
        return len(self.ensemble) * sum(len(s) * s.n_samples for s in self.streams)

    def plant(self, repeats: int) -> LinearPlant:
        """Return the plants, each for `repeats` episodes."""
        return self._plants.repeated(repeats)

    @cached_property
    def _plants(self) -> LinearPlant:
        # laid out once: tuning asks for the same plants thousands of times
        return LinearPlant(self.ensemble, gain=self.gain, noise=self.noise)


def run_one(
    ground: TrialGround,
    controller: Controller,
    *,
    inside: Inside | None = None,
    budget: Budget | None = None,
    record: bool = False,
) -> tuple[Rollout, ...]:
    """Run one controller on every plant and stream.

    Returns:
        one rollout per stream group; its episodes are ordered plant by plant, in each plant
        stream by stream.
    """
    return tuple(
        simulate(
            ground.plant(len(s)),
            controller,
            s,
            ground.loop,
            tile=len(ground.ensemble),
            inside=inside,
            budget=budget,
            record=record,
            extra_delay_samples=ground.extra_delay_samples,
        )
        for s in ground.streams
    )


def run_forms(
    ground: TrialGround, forms: Sequence[FilterForm], *, cost: int = 0, budget: Budget | None = None
) -> np.ndarray:
    """Return the episode cost of several filter forms at once.

    Args:
        ground: plants, streams, surroundings.
        forms: m candidates of one latency.
        cost: index of the cost.
        budget: charged for every candidate.

    Returns:
        (m, n_plants, n_streams), streams in the order of the groups.
    """
    stacked, m = FilterForm.stack(list(forms)), len(forms)
    parts = []
    for s in ground.streams:
        runner = FilterRunner(stacked, repeats=len(s)) if m > 1 else FilterRunner(forms[0])
        rollout = simulate(
            ground.plant(m * len(s)),
            runner,
            s,
            ground.loop,
            tile=len(ground.ensemble) * m,
            budget=budget,
            extra_delay_samples=ground.extra_delay_samples,
        )
        grouped = rollout.cost[:, cost].reshape(len(ground.ensemble), m, len(s))
        parts.append(grouped.transpose(1, 0, 2))
    return np.concatenate(parts, axis=2)


def run_costs(
    ground: TrialGround, controller: Controller, *, cost: int = 0, budget: Budget | None = None
) -> np.ndarray:
    """Return the episode cost (n_plants, n_streams) of one controller of any kind."""
    rollouts = run_one(ground, controller, budget=budget)
    n = len(ground.ensemble)
    return np.concatenate([r.cost[:, cost].reshape(n, -1) for r in rollouts], axis=1)
