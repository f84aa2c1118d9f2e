"""What an environment is made of, and sensible defaults where a model alone is given."""

from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace

import numpy as np

from idlearn.control import ObservationLayout
from idlearn.cost import BoundCost, Cost, CostTerm, default_cost, primary_of
from idlearn.envs.actuator import Actuator
from idlearn.envs.plant import RestingPlant
from idlearn.envs.scenario import Scenario
from idlearn.envs.tally import Loop
from idlearn.errors import InputError
from idlearn.logs import Signal
from idlearn.models import Ensemble

HORIZON = 200  # samples of an episode where nothing says how long it is
FAR = 1e6  # no default bound lies further away than so many steps of the setpoint


@dataclass(frozen=True, kw_only=True)
class EnvSetting:
    """Everything around the plant of an environment.

    Attributes:
        plant_of: index -> plant for one episode.
        n_plants: how many there are to draw from.
        signals: actuators with finite limits, outputs, setpoints, measured disturbances.
        loop: surroundings of the plant.
        primary: index of the cost that the reward is made of.
        scenarios: what can happen in an episode.
        rest: setpoint per column where a scenario says nothing [engineering units].
        low: (n_obs,) lower bound of the observation [engineering units].
        high: (n_obs,) upper bound [engineering units].
        dt: sample time [s].
        disturbance: record of measured disturbances (M, n_d) to replay, or None.
        n_draws: standard normal numbers that the plant uses per sample.
    """

    plant_of: Callable[[int], RestingPlant]
    n_plants: int
    signals: tuple[Signal, ...]
    loop: Loop
    primary: int
    scenarios: tuple[Scenario, ...]
    rest: tuple[float, ...]
    low: np.ndarray
    high: np.ndarray
    dt: float
    disturbance: np.ndarray | None
    n_draws: int

    def of_role(self, role: str) -> tuple[Signal, ...]:
        """Return the signals of one role, in order."""
        return tuple(s for s in self.signals if s.role == role)


def surround(
    signals: Sequence[Signal],
    costs: Sequence[Cost],
    latency_samples: int,
    dt: float,
) -> tuple[Loop, int]:
    """Return the surroundings that signals and costs describe, and the primary cost's index."""
    if latency_samples < 0:
        raise InputError(f"latency_samples is {latency_samples}; it has to be 0 or more")
    outputs = [s for s in signals if s.role == "output"]
    actuators = tuple(s for s in signals if s.role == "actuator")
    names = [s.name for s in outputs]
    controlled = tuple(names.index(s.of) if s.of else 0 for s in signals if s.role == "setpoint")
    n_d = sum(s.role == "disturbance" for s in signals)
    layout = ObservationLayout(len(outputs), controlled, n_d, len(actuators))
    loop = Loop(
        layout,
        Actuator.of(actuators, dt),
        BoundCost(costs, names, [s.name for s in actuators], controlled),
        np.array([s.trip_low for s in outputs]),
        np.array([s.trip_high for s in outputs]),
        latency_samples,
    )
    return loop, primary_of(costs)


def named_signals(ensemble: Ensemble) -> tuple[Signal, ...]:
    """Return signals u1.., y1.., d1.. of a model that comes without any; all are controlled."""
    n_u, n_y = ensemble.n_actuators, ensemble.C.shape[1]
    n_d = ensemble.B.shape[2] - n_u
    return (
        *(Signal(name=f"u{j + 1}", role="actuator") for j in range(n_u)),
        *(Signal(name=f"y{i + 1}", role="output") for i in range(n_y)),
        *(Signal(name=f"sp{i + 1}", role="setpoint", of=f"y{i + 1}") for i in range(n_y)),
        *(Signal(name=f"d{j + 1}", role="disturbance") for j in range(n_d)),
    )


@dataclass(frozen=True)
class Reach:
    """How far the members of an ensemble can move within a horizon.

    Attributes:
        response: largest sum of absolute impulse responses over the members (n_y, n_in)
            [output unit / input unit].
        noise: largest standard deviation of the output by the innovations (n_y,) [output unit].
    """

    response: np.ndarray
    noise: np.ndarray


def reach_of(ensemble: Ensemble, n_samples: int) -> Reach:
    """Return the reach of an ensemble over a horizon."""
    n_in, n_y = ensemble.B.shape[2], ensemble.C.shape[1]
    push = np.concatenate([ensemble.B, ensemble.K], axis=2)
    total = np.zeros((len(ensemble), n_y, n_in))
    variance = ensemble.S.copy()
    with np.errstate(over="ignore", invalid="ignore"):
        for _ in range(n_samples):
            h = ensemble.C @ push
            total += np.abs(h[..., :n_in])
            stirred = h[..., n_in:]
            variance += stirred @ ensemble.S @ np.swapaxes(stirred, -1, -2)
            push = ensemble.A @ push
    spread = np.sqrt(np.diagonal(variance, axis1=1, axis2=2))
    return Reach(np.nan_to_num(total.max(axis=0), posinf=FAR), np.nan_to_num(spread.max(axis=0)))


def limited(signals: Sequence[Signal], ensemble: Ensemble, reach: Reach) -> tuple[Signal, ...]:
    """Give every actuator finite limits: its own, else the room that moves an output clearly.

    Where a limit is unknown it is put where the actuator moves some output by 20 standard
    deviations of the noise, around the operating point.
    """
    out, j = [], 0
    for s in signals:
        if s.role == "actuator":
            middle = float(ensemble.u0[:, j].mean())
            size = np.maximum(reach.noise, 1e-9 * (1 + np.abs(ensemble.y0).max()))
            gain = np.max(reach.response[:, j] / (20 * size), initial=0.0)
            room = 1.0 / gain if gain > 0 else 1.0
            low = s.low if np.isfinite(s.low) else min(middle, s.high) - room
            high = s.high if np.isfinite(s.high) else max(middle, s.low) + room
            s, j = replace(s, low=float(low), high=float(high)), j + 1
        out.append(s)
    return tuple(out)


def default_scenarios(
    layout: ObservationLayout, outputs: Sequence[Signal], rest: Sequence[float],
    steps: Sequence[float], dt: float, n_samples: int,
) -> tuple[Scenario, ...]:  # fmt: skip
    """Return one scenario: at rest for a fifth of the episode, then a step of every setpoint."""
    duration = n_samples * dt
    moved = {}
    for column, i in enumerate(layout.controlled):
        target = rest[column] + steps[i]
        room = outputs[i].trip_high - rest[column]
        if steps[i] > room / 2 > 0:
            target = rest[column] + room / 2
        moved[outputs[i].name] = ((0.0, rest[column]), (duration / 5, target))
    return (Scenario(name="setpoint steps", duration_s=duration, setpoint=moved, vary=0.5),)


def model_setting(
    ensemble: Ensemble,
    plant_of: Callable[[int], RestingPlant],
    *,
    signals: Sequence[Signal] | None,
    scenarios: Sequence[Scenario] | None,
    costs: Sequence[Cost] | None,
    latency_samples: int,
    disturbance: np.ndarray | None,
) -> EnvSetting:
    """Return the setting of a model, with defaults for what is not given.

    Raises:
        InputError: signals that do not fit the model.
    """
    dt, n_a = ensemble.sample_time_s, ensemble.n_actuators
    n_y, n_d = ensemble.C.shape[1], ensemble.B.shape[2] - n_a
    given = tuple(signals) if signals is not None else named_signals(ensemble)
    counts = [sum(s.role == r for s in given) for r in ("actuator", "output", "disturbance")]
    if counts != [n_a, n_y, n_d]:
        raise InputError(
            f"the signals hold {counts[0]} actuators, {counts[1]} outputs and {counts[2]} "
            f"disturbances, the model {n_a}, {n_y} and {n_d}; give the signals of this model"
        )
    n_samples = max([s.samples(dt) for s in scenarios or ()] or [HORIZON])
    reach = reach_of(ensemble, n_samples)
    given = limited(given, ensemble, reach)
    outputs = tuple(s for s in given if s.role == "output")
    actuators = tuple(s for s in given if s.role == "actuator")
    u0, y0 = ensemble.u0.mean(axis=0), ensemble.y0.mean(axis=0)
    low, high = np.array([s.low for s in actuators]), np.array([s.high for s in actuators])
    half = np.maximum(np.abs(high - u0[:n_a]), np.abs(low - u0[:n_a]))
    steps = 0.1 * np.max(reach.response[:, :n_a] * half, axis=1)
    names = [s.name for s in outputs]
    controlled = [names.index(s.of) if s.of else 0 for s in given if s.role == "setpoint"]
    if costs is None:
        scale = np.maximum(np.maximum(steps / 5, reach.noise), 1e-9)
        costs = [_default_cost(names, controlled, actuators, list(scale), list(y0))]
    loop, primary = surround(given, costs, latency_samples, dt)
    rest = tuple(float(y0[i]) for i in controlled)
    if scenarios is None:
        scenarios = default_scenarios(loop.layout, outputs, rest, list(steps), dt, n_samples)
    record = ensemble.u0[:1, n_a:] if disturbance is None else np.asarray(disturbance, dtype=float)
    if record.ndim != 2 or record.shape[1] != n_d or not len(record):
        raise InputError(f"disturbance has shape {record.shape}; (M, {n_d}) is needed")
    stray = np.abs(record - u0[n_a:]).max(axis=0, initial=0.0)
    loads = [
        max([abs(v) for s in scenarios for _, v in s.input_disturbance.get(a.name, ())] or [0.0])
        for a in actuators
    ]
    room = reach.response @ np.concatenate([half + loads, stray]) + 8 * reach.noise
    bounds = observation_bounds(given, loop.layout, tuple(scenarios), y0, room, steps, record)
    return EnvSetting(
        plant_of=plant_of, n_plants=len(ensemble), signals=given, loop=loop, primary=primary,
        scenarios=tuple(scenarios), rest=rest, low=bounds[0], high=bounds[1], dt=dt,
        disturbance=record if n_d else None, n_draws=n_y,
    )  # fmt: skip


def _default_cost(
    outputs: list[str],
    controlled: list[int],
    actuators: Sequence[Signal],
    scale: list[float],
    rest: list[float],
) -> Cost:
    """Return squared errors and moves; without any setpoint outputs are held where they rest."""
    moves = [(a.high - a.low) / 10 for a in actuators]
    plain = default_cost(outputs, controlled, [a.name for a in actuators], scale, moves)
    if controlled:
        return plain
    held = [
        CostTerm(kind="level", signal=o, scale=float(s), target=float(y))
        for o, s, y in zip(outputs, scale, rest, strict=True)
    ]
    return replace(plain, terms=(*held, *plain.terms))


def observation_bounds(
    signals: Sequence[Signal],
    layout: ObservationLayout,
    scenarios: Sequence[Scenario],
    centre: np.ndarray,
    room: np.ndarray,
    steps: np.ndarray,
    record: np.ndarray,
) -> tuple[np.ndarray, np.ndarray]:
    """Return finite bounds (n_obs,) that the observations hardly ever reach.

    Args:
        signals: with finite actuator limits.
        layout: columns.
        scenarios: their setpoints lie inside.
        centre: (n_y,) [engineering units].
        room: how far the outputs may go from there (n_y,) [engineering units].
        steps: typical setpoint steps (n_y,), which limit the room [engineering units].
        record: measured disturbances (M, n_d) [engineering units].
    """
    outputs = [s for s in signals if s.role == "output"]
    actuators = [s for s in signals if s.role == "actuator"]
    low, high = [], []
    for i, s in enumerate(outputs):
        asked = [v for c in scenarios for v in _targets(c, s.name)] or [float(centre[i])]
        wide = min(room[i], FAR * max(steps[i], 1e-9))
        ends = [s.low, s.high, s.trip_low, s.trip_high, *asked]
        low.append(min(v for v in (min(asked) - wide, *ends) if np.isfinite(v)))
        high.append(max(v for v in (max(asked) + wide, *ends) if np.isfinite(v)))
        margin = 0.1 * (high[-1] - low[-1]) + 1e-9 * (1 + abs(high[-1]))
        low[-1], high[-1] = low[-1] - margin, high[-1] + margin
    low += [low[i] for i in layout.controlled]
    high += [high[i] for i in layout.controlled]
    for column in record.T:
        size = np.ptp(column) + 1.0
        low.append(float(column.min() - size))
        high.append(float(column.max() + size))
    low += [s.low for s in actuators]
    high += [s.high for s in actuators]
    return np.array(low), np.array(high)


def _targets(scenario: Scenario, name: str) -> list[float]:
    """Return the setpoints a scenario can ask for, its variation included."""
    steps = scenario.setpoint.get(name, ())
    base = steps[0][1] if steps else 0.0
    return [base + f * (v - base) for _, v in steps for f in (1 - scenario.vary, 1 + scenario.vary)]
