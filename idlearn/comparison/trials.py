"""Trials: every contender on every plant and stream, all figures kept."""

import json
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Any

import numpy as np

from idlearn.budget import Budget
from idlearn.comparison.acceptance import Stress
from idlearn.envs import Contender, Inside, Rollout, TrialGround, run_one
from idlearn.errors import InputError

if TYPE_CHECKING:
    import pandas as pd

_ARRAYS = ("cost", "terms", "tripped", "travel", "offset", "support", "at_limit")


@dataclass(frozen=True)
class Trials:
    """What m contenders did on P plants and S streams.

    Attributes:
        controllers: names of the contenders (m).
        labels: label of each plant (P), such as its family.
        scenarios: names of the scenarios.
        scenario: index of each stream's scenario (S,).
        seed: index of each stream's seed (S,).
        costs: names of the costs.
        term_names: name of each cost term, "cost/kind signal".
        actuators: names of the actuators.
        controlled: names of the outputs with a setpoint.
        cost: (m, P, S, n_costs) [-].
        terms: (m, P, S, n_terms) [-].
        tripped: (m, P, S) bool: an output passed a trip limit, or the loop ran away.
        travel: per sample (m, P, S, n_u) [engineering units].
        offset: mean of y - setpoint over the last fifth (m, P, S, n_setpoints)
            [engineering units].
        support: share of steps inside the region of the log (m, P, S), NaN if not asked [-].
        at_limit: share of steps with an actuator at a limit (m, P, S) [-].
    """

    controllers: tuple[str, ...]
    labels: tuple[str, ...]
    scenarios: tuple[str, ...]
    scenario: np.ndarray
    seed: np.ndarray
    costs: tuple[str, ...]
    term_names: tuple[str, ...]
    actuators: tuple[str, ...]
    controlled: tuple[str, ...]
    cost: np.ndarray
    terms: np.ndarray
    tripped: np.ndarray
    travel: np.ndarray
    offset: np.ndarray
    support: np.ndarray
    at_limit: np.ndarray

    @property
    def n_plants(self) -> int:
        """Plants."""
        return self.cost.shape[1]

    @property
    def n_streams(self) -> int:
        """Streams: scenarios times seeds."""
        return self.cost.shape[2]

    def index(self, controller: str) -> int:
        """Return the place of a contender.

        Raises:
            InputError: it took no part.
        """
        if controller not in self.controllers:
            raise InputError(
                f"{controller!r} took no part in these trials; there are {list(self.controllers)}"
            )
        return self.controllers.index(controller)

    def scores(self, controller: str, cost: int = 0) -> np.ndarray:
        """Return the episode costs (P, S) of one contender."""
        return np.asarray(self.cost[self.index(controller), :, :, cost])

    def only(self, streams: np.ndarray) -> "Trials":
        """Return the trials on some of the streams, given by index."""
        arrays: dict[str, Any] = {a: getattr(self, a)[:, :, streams] for a in _ARRAYS}
        return replace(self, scenario=self.scenario[streams], seed=self.seed[streams], **arrays)

    def join(self, other: "Trials") -> "Trials":
        """Add contenders that met the same plants and streams.

        Raises:
            InputError: the plants or streams are others.
        """
        same = self.labels == other.labels and self.scenarios == other.scenarios
        if not (
            same
            and np.array_equal(self.scenario, other.scenario)
            and np.array_equal(self.seed, other.seed)
        ):
            raise InputError(
                "trials on different plants or streams cannot be joined; run them on one ground"
            )
        arrays: dict[str, Any] = {
            a: np.concatenate([getattr(self, a), getattr(other, a)]) for a in _ARRAYS
        }
        return replace(self, controllers=self.controllers + other.controllers, **arrays)

    def to_frame(self) -> "pd.DataFrame":
        """Return one row per episode, for trials.parquet.

        Columns: controller, plant, label, scenario, seed, cost_NAME, term_NAME, tripped,
        travel_ACTUATOR, offset_OUTPUT, support, at_limit.
        """
        import pandas as pd

        m, n_p, n_s = self.cost.shape[:3]
        columns: dict[str, Any] = {
            "controller": np.repeat(np.array(self.controllers, dtype=object), n_p * n_s),
            "plant": np.tile(np.repeat(np.arange(n_p), n_s), m),
            "label": np.tile(np.repeat(np.array(self.labels, dtype=object), n_s), m),
            "scenario": np.tile(np.array(self.scenarios, dtype=object)[self.scenario], m * n_p),
            "seed": np.tile(self.seed, m * n_p),
        }
        for prefix, names, values in (
            ("cost_", self.costs, self.cost),
            ("term_", self.term_names, self.terms),
        ):
            columns |= {f"{prefix}{n}": values[..., j].ravel() for j, n in enumerate(names)}
        columns["tripped"] = self.tripped.ravel()
        for prefix, names, values in (
            ("travel_", self.actuators, self.travel),
            ("offset_", self.controlled, self.offset),
        ):
            columns |= {f"{prefix}{n}": values[..., j].ravel() for j, n in enumerate(names)}
        columns["support"] = self.support.ravel()
        columns["at_limit"] = self.at_limit.ravel()
        return pd.DataFrame(columns)

    def to_arrays(self) -> dict[str, np.ndarray]:
        """Return everything as arrays, for storage without pickle."""
        texts = (
            "controllers",
            "labels",
            "scenarios",
            "costs",
            "term_names",
            "actuators",
            "controlled",
        )
        names = json.dumps({t: getattr(self, t) for t in texts})
        numbers = {a: getattr(self, a) for a in ("scenario", "seed", *_ARRAYS)}
        return {"names": np.array(names), **numbers}

    @classmethod
    def from_arrays(cls, arrays: Mapping[str, np.ndarray]) -> "Trials":
        """Rebuild what `to_arrays` gave."""
        held: dict[str, Any] = dict(arrays)
        names: dict[str, Any] = {k: tuple(v) for k, v in json.loads(str(held.pop("names"))).items()}
        return cls(**names, **held)


def run_trials(
    ground: TrialGround,
    contenders: Sequence[Contender],
    inside: Inside | None = None,
    *,
    budget: Budget | None = None,
) -> Trials:
    """Run every contender on every plant and stream of the ground, under all costs.

    Args:
        ground: plants, streams, surroundings.
        contenders: at least one, with names of their own.
        inside: (y, u, move) -> (n,) bool, the region the log covers; None leaves support NaN.
        budget: charged for every step, if given.

    Raises:
        InputError: no contender, or two of one name.
    """
    names = tuple(c.name for c in contenders)
    if not names or len(set(names)) < len(names):
        raise InputError(f"contenders are {list(names)}; at least one, each with its own name")
    rollouts = [run_one(ground, c.controller, inside=inside, budget=budget) for c in contenders]
    return gather(ground, names, rollouts)


def gather(
    ground: TrialGround, names: tuple[str, ...], rollouts: Sequence[tuple[Rollout, ...]]
) -> Trials:
    """Put rollouts, one tuple of stream groups per contender, into one table of arrays."""
    n_p, costs = len(ground.ensemble), ground.loop.costs

    def put(name: str) -> np.ndarray:
        rows = []
        for groups in rollouts:
            parts = [getattr(r, name) for r in groups]
            rows.append(np.concatenate([p.reshape(n_p, -1, *p.shape[1:]) for p in parts], axis=1))
        return np.stack(rows)

    return Trials(
        controllers=names,
        labels=tuple(ground.ensemble.labels),
        scenarios=ground.streams[0].names,
        scenario=np.concatenate([s.scenario for s in ground.streams]),
        seed=np.concatenate([s.seed for s in ground.streams]),
        costs=tuple(c.name for c in costs.costs),
        term_names=tuple(
            f"{costs.costs[i].name}/{n}" for i, n in zip(costs.of_cost, costs.names, strict=True)
        ),
        actuators=costs.actuators,
        controlled=tuple(costs.outputs[i] for i in costs.controlled),
        **{a: put(a) for a in _ARRAYS},
    )


def stress_grounds(ground: TrialGround, stress: Stress) -> dict[str, TrialGround]:
    """Return the stressed grounds: the same plants and streams, one error of the model each.

    Keys are "gain_low", "gain_high", "delay" and "noise"; a stress that changes nothing is
    left out.
    """
    low, high = stress.gain
    grounds = {}
    if low != 1:
        grounds["gain_low"] = replace(ground, gain=ground.gain * low)
    if high != 1:
        grounds["gain_high"] = replace(ground, gain=ground.gain * high)
    if stress.extra_delay_samples:
        extra = ground.extra_delay_samples + int(stress.extra_delay_samples)
        grounds["delay"] = replace(ground, extra_delay_samples=extra)
    if stress.noise != 1:
        grounds["noise"] = replace(ground, noise=ground.noise * stress.noise)
    return grounds


def stress_trials(
    ground: TrialGround,
    contenders: Sequence[Contender],
    stress: Stress,
    inside: Inside | None = None,
) -> dict[str, Trials]:
    """Run every contender on every stressed ground; see `stress_grounds` for the keys."""
    return {
        name: run_trials(stressed, contenders, inside)
        for name, stressed in stress_grounds(ground, stress).items()
    }
