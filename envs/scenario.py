"""Scenarios: what happens to the loop in an episode, and the streams that all contenders share."""

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from typing import ClassVar

import numpy as np

from idlearn.errors import InputError
from idlearn.seeding import stream

Steps = tuple[tuple[float, float], ...]  # (time [s], value)


@dataclass(frozen=True, kw_only=True)
class Scenario:
    """One kind of episode.

    Attributes:
        name: as declared, or as derived from the log.
        duration_s: [s].
        setpoint: output name -> ((time [s], value), ...), held until the next; the first holds
            from the start [engineering units].
        input_disturbance: actuator name -> ((time [s], load), ...), added to the applied input
            at the plant [engineering units].
        vary: each step after the first is scaled by a factor drawn from [1 - vary, 1 + vary],
            and each time shifted within a tenth of the duration, anew for every seed [-].
    """

    __pydantic_config__: ClassVar[dict[str, str]] = {"extra": "forbid"}

    name: str
    duration_s: float
    setpoint: Mapping[str, Steps] = field(default_factory=dict)
    input_disturbance: Mapping[str, Steps] = field(default_factory=dict)
    vary: float = 0.0

    def __post_init__(self) -> None:
        """Refuse times and values that no episode can have."""
        if not (math.isfinite(self.duration_s) and self.duration_s > 0):
            raise InputError(f"duration_s is {self.duration_s}; give a time above 0 in seconds")
        if not 0 <= self.vary < 1:
            raise InputError(f"vary is {self.vary}; give a share from 0 up to, not including, 1")
        for kind, table in (
            ("setpoint", self.setpoint),
            ("input_disturbance", self.input_disturbance),
        ):
            for name, steps in table.items():
                flat = [v for step in steps for v in step]
                if not steps or not all(math.isfinite(v) for v in flat):
                    raise InputError(f"{kind} of {name!r} needs finite [time, value] pairs")
                times = [t for t, _ in steps]
                if times != sorted(set(times)) or times[0] < 0:
                    raise InputError(
                        f"{kind} of {name!r} has times {times}; they have to grow from 0 on"
                    )

    def samples(self, sample_time_s: float) -> int:
        """Return the number of samples of an episode, at least 2."""
        return max(2, round(self.duration_s / sample_time_s))


@dataclass(frozen=True)
class Streams:
    """All that comes from outside, for S (scenario, seed) pairs of one length N.

    Attributes:
        setpoint: (S, N, n_setpoints) [engineering units].
        load: (S, N, n_u), added to the applied input [engineering units].
        measured: measured disturbances (S, N, n_d) [engineering units].
        noise: standard normal draws (S, N + 1, n_y, or what the plant uses per sample) [-].
        scenario: (S,) index of the scenario.
        seed: (S,) index of the seed.
        names: name of each scenario.
    """

    setpoint: np.ndarray
    load: np.ndarray
    measured: np.ndarray
    noise: np.ndarray
    scenario: np.ndarray
    seed: np.ndarray
    names: tuple[str, ...]

    def __len__(self) -> int:
        """Number of (scenario, seed) pairs."""
        return len(self.setpoint)

    @property
    def n_samples(self) -> int:
        """Samples per episode."""
        return int(self.setpoint.shape[1])

    def take(self, index: np.ndarray) -> "Streams":
        """Return the pairs of `index`, in that order."""
        return Streams(
            self.setpoint[index],
            self.load[index],
            self.measured[index],
            self.noise[index],
            self.scenario[index],
            self.seed[index],
            self.names,
        )


def make_streams(
    scenarios: Sequence[Scenario],
    *,
    purpose: str,
    seeds: Sequence[int],
    seed: int,
    sample_time_s: float,
    outputs: Sequence[str],
    controlled: Sequence[int],
    rest: Sequence[float],
    actuators: Sequence[str],
    disturbance: np.ndarray | None = None,
    n_d: int = 0,
    noise: bool = True,
    n_draws: int | None = None,
) -> tuple[Streams, ...]:
    """Draw the streams of every (scenario, seed), grouped by episode length.

    Args:
        scenarios: what happens.
        purpose: name of the family of streams, such as "practice" or "jury".
        seeds: indices of the seeds.
        seed: the study's seed.
        sample_time_s: [s].
        outputs: names of the outputs.
        controlled: output index of each setpoint column.
        rest: setpoint per column where a scenario says nothing [engineering units].
        actuators: names of the actuators.
        disturbance: record of measured disturbances (M, n_d) to replay in blocks, or None.
        n_d: measured disturbances.
        noise: whether noise is on.
        n_draws: standard normal numbers that the plant uses per sample; None takes one for each
            output, as linear plants do.

    Raises:
        InputError: a scenario names a signal that is not there, or two have the same name.
    """
    names = tuple(s.name for s in scenarios)
    if len(set(names)) < len(names):
        raise InputError(f"scenarios {list(names)} share a name; give each its own")
    groups: dict[int, list[tuple[int, Scenario]]] = {}
    for i, scenario in enumerate(scenarios):
        check_scenario(scenario, [outputs[c] for c in controlled], actuators)
        groups.setdefault(scenario.samples(sample_time_s), []).append((i, scenario))
    return tuple(
        _group(
            n,
            members,
            purpose,
            seeds,
            seed,
            sample_time_s,
            outputs,
            controlled,
            rest,
            actuators,
            disturbance,
            n_d,
            n_draws or len(outputs),
            noise,
            names,
        )
        for n, members in sorted(groups.items())
    )


def _group(
    n: int,
    members: list[tuple[int, Scenario]],
    purpose: str,
    seeds: Sequence[int],
    seed: int,
    dt: float,
    outputs: Sequence[str],
    controlled: Sequence[int],
    rest: Sequence[float],
    actuators: Sequence[str],
    disturbance: np.ndarray | None,
    n_d: int,
    n_draws: int,
    noise: bool,
    names: tuple[str, ...],
) -> Streams:
    pairs = [(i, s, k) for i, s in members for k in seeds]
    setpoint = np.empty((len(pairs), n, len(controlled)))
    load = np.zeros((len(pairs), n, len(actuators)))
    measured = np.zeros((len(pairs), n, n_d))
    draws = np.zeros((len(pairs), n + 1, n_draws))
    for row, (_, scenario, k) in enumerate(pairs):
        reference = stream(seed, purpose, "reference", scenario.name, k)
        for j, c in enumerate(controlled):
            steps = scenario.setpoint.get(outputs[c], ((0.0, rest[j]),))
            setpoint[row, :, j] = _held(steps, n, dt, scenario, reference)
        for j, a in enumerate(actuators):
            if a in scenario.input_disturbance:
                steps = scenario.input_disturbance[a]
                first = () if steps[0][0] == 0 else ((0.0, 0.0),)
                load[row, :, j] = _held((*first, *steps), n, dt, scenario, reference)
        if noise:
            rng = stream(seed, purpose, "noise", scenario.name, k)
            draws[row] = rng.standard_normal((n + 1, n_draws))
        if n_d and disturbance is not None:
            rng = stream(seed, purpose, "disturbance", scenario.name, k)
            measured[row] = _block(disturbance, n, rng)
    return Streams(
        setpoint,
        load,
        measured,
        draws,
        np.array([i for i, _, _ in pairs]),
        np.array([k for _, _, k in pairs]),
        names,
    )


def _held(
    steps: Steps, n: int, dt: float, scenario: Scenario, rng: np.random.Generator
) -> np.ndarray:
    """Return the steps as a held series of n samples, varied if the scenario says so."""
    base = steps[0][1]
    out = np.full(n, base)
    for t, value in steps[1:]:
        if scenario.vary:
            value = base + (value - base) * rng.uniform(1 - scenario.vary, 1 + scenario.vary)
            t = t + scenario.duration_s * rng.uniform(-0.05, 0.05)
        out[max(0, round(t / dt)) :] = value
    return out


def _block(record: np.ndarray, n: int, rng: np.random.Generator) -> np.ndarray:
    """Return n rows of a record from a random place on; a short record is run to and fro."""
    if len(record) < n:
        turns = -(-n // len(record)) + 1
        record = np.concatenate([record[:: 1 if i % 2 == 0 else -1] for i in range(turns)])
    first = int(rng.integers(0, len(record) - n + 1))
    return record[first : first + n]


def check_scenario(scenario: Scenario, outputs: Sequence[str], actuators: Sequence[str]) -> None:
    """Refuse a scenario that names other signals than these.

    Args:
        scenario: as declared.
        outputs: names of the outputs with a setpoint.
        actuators: names of the actuators.

    Raises:
        InputError: with the name and the names there are.
    """
    for name in scenario.setpoint:
        if name not in outputs:
            raise InputError(
                f"scenario {scenario.name!r}: setpoint of {name!r}, but the outputs with a "
                f"setpoint are {list(outputs)}"
            )
    for name in scenario.input_disturbance:
        if name not in actuators:
            raise InputError(
                f"scenario {scenario.name!r}: input_disturbance of {name!r}, but the actuators "
                f"are {list(actuators)}"
            )
