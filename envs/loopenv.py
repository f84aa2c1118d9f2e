"""The gymnasium environments: one episode at a time, on the engine's own parts.

Step k takes the decision at sample k and pays the stage cost of sample k, which reads y[k], the
setpoint at k and the applied u[k]; the observation it returns is that of sample k + 1. An episode
is `truncated` after its last sample. It is `terminated` by the step whose y[k] lies beyond a trip
limit; that step also pays for the samples that are left, so that ending early never pays and the
rewards add up to minus the number of samples times the episode's cost.
"""

from collections.abc import Mapping
from typing import Any

import gymnasium
import numpy as np
from gymnasium import spaces
from gymnasium.error import ResetNeeded

from idlearn.envs.engine import SharedDraws
from idlearn.envs.scenario import Scenario, Streams, make_streams
from idlearn.envs.setting import EnvSetting
from idlearn.envs.strip import strip
from idlearn.envs.tally import AWAY
from idlearn.errors import InputError

Action = np.ndarray
Observation = np.ndarray
OPTIONS = ("scenario", "plant", "streams")


class LoopEnv(gymnasium.Env[Observation, Action]):
    """A plant in its surroundings.

    Args:
        setting: plant and surroundings.
        scaled: whether actions are in [-1, 1], 1 the high limit; else in engineering units.
        render_mode: "ansi" or None.

    The observation (n_obs,) holds every y, one setpoint per controlled output, measured
    disturbances and the previous applied u, in engineering units, clipped to the space.
    """

    metadata = {"render_modes": ["ansi"], "render_fps": 10}  # noqa: RUF012 (gymnasium's form)

    def __init__(
        self, setting: EnvSetting, *, scaled: bool = True, render_mode: str | None = None
    ) -> None:
        """Build the spaces."""
        if render_mode not in (None, *self.metadata["render_modes"]):
            raise InputError(f"render_mode is {render_mode!r}; choose 'ansi' or None")
        self.setting, self.scaled, self.render_mode = setting, scaled, render_mode
        actuator = setting.loop.actuator
        low, high = actuator.low, actuator.high
        self.observation_space = spaces.Box(setting.low, setting.high, dtype=np.float64)
        one = np.ones(len(low))
        self.action_space = (
            spaces.Box(-one, one, dtype=np.float64)
            if scaled
            else spaces.Box(low, high, dtype=np.float64)
        )
        self._middle, self._half = (high + low) / 2, (high - low) / 2
        self._running = False

    @property
    def streams(self) -> Streams:
        """Streams of the running episode; a lock-step run of them gives the same trajectory."""
        return self._streams

    @property
    def plant_index(self) -> int:
        """Number of the plant of the running episode."""
        return self._index

    def reset(
        self, *, seed: int | None = None, options: dict[str, Any] | None = None
    ) -> tuple[Observation, dict[str, Any]]:
        """Start an episode at rest at its first setpoint.

        Args:
            seed: of all that is drawn.
            options: "scenario" (a name), "plant" (an index) and "streams" (a `Streams` of one
                row) replace what would be drawn.

        Raises:
            InputError: an option that is not known, or a value that is not there.
        """
        super().reset(seed=seed)
        asked = self._checked(options or {})
        s = self.setting
        # all three are drawn, whatever is asked for, so that options shift no stream
        drawn = [int(self.np_random.integers(n)) for n in (len(s.scenarios), s.n_plants, 2**31)]
        self._index = int(asked.get("plant", drawn[1]))
        names = [c.name for c in s.scenarios]
        chosen = names.index(asked["scenario"]) if "scenario" in asked else drawn[0]
        self._streams = asked.get("streams") or self._drawn(s.scenarios[chosen], drawn[2])
        layout, actuator = s.loop.layout, s.loop.actuator
        self._plant = s.plant_of(self._index)
        self._draws = SharedDraws(self._streams.noise)
        wanted = np.full((1, layout.n_y), np.nan)
        wanted[:, list(layout.controlled)] = self._streams.setpoint[:, 0]
        self._state, self._u = self._plant.rest(
            1, wanted, self._streams.measured[:, 0], actuator.low, actuator.high, self._draws
        )
        self._requests = [self._u] * s.loop.latency_samples
        self._k, self._running = 0, True
        self._y = self._plant.measure(self._state, self._draws)
        nothing = np.zeros((1, len(s.loop.costs.names)))
        return self._observe(), self._info(nothing, self._u, np.zeros_like(self._u), 0)

    def step(self, action: Action) -> tuple[Observation, float, bool, bool, dict[str, Any]]:
        """Apply one action (n_u,) for one sample.

        Returns:
            the observation, minus the primary cost, whether the episode tripped, whether it
            reached its end, and info: requested, applied, move, y and setpoint that the cost
            read, each cost and each of its terms, and the samples that were charged.

        Raises:
            ResetNeeded: there is no running episode.
            InputError: an action of another shape.
        """
        if not self._running:
            raise ResetNeeded("the episode is over, or none was started; call reset() first")
        loop, k, last = self.setting.loop, self._k, self._streams.n_samples - 1
        request = np.asarray(action, dtype=float)
        if request.shape != (loop.layout.n_u,):
            raise InputError(
                f"the action has shape {request.shape}; ({loop.layout.n_u},) is needed"
            )
        if self.scaled:
            request = self._middle + self._half * request
        self._requests.append(request[None])
        before, self._u = self._u, loop.actuator.apply(self._requests.pop(0), self._u)
        move = self._u - before
        y, tripped = self._judged(self._y)
        left = last - k + 1 if tripped else 1
        terms = left * loop.costs.stage(
            y, self._streams.setpoint[:, k], self._u, move, np.array([tripped])
        )
        info = self._info(terms, request[None], move, left)
        with np.errstate(over="ignore", invalid="ignore"):
            held = self._u + self._streams.load[:, k]
            held = np.concatenate([held, self._streams.measured[:, k]], axis=1)
            self._state = self._plant.advance(self._state, held, self._draws)
        self._y = self._plant.measure(self._state, self._draws)
        self._k = k + 1
        ended = k == last and not tripped
        self._running = not (ended or tripped)
        return self._observe(), -info["cost"], tripped, ended, info

    def render(self) -> str | None:
        """Return one line of text that shows outputs and actuators between their bounds."""
        if self.render_mode is None:
            return None
        k = min(self._k, self._streams.n_samples - 1)
        setpoint = self._streams.setpoint[0, k]
        return strip(self.setting, self._k, self._y[0], setpoint, self._u[0])

    def _checked(self, options: Mapping[str, Any]) -> Mapping[str, Any]:
        s = self.setting
        for key in options:
            if key not in OPTIONS:
                raise InputError(f"reset option {key!r} is not known; there are {list(OPTIONS)}")
        names = [c.name for c in s.scenarios]
        if "scenario" in options and options["scenario"] not in names:
            raise InputError(f"scenario {options['scenario']!r} is not there; there are {names}")
        if "plant" in options and not 0 <= int(options["plant"]) < s.n_plants:
            raise InputError(f"plant {options['plant']} is not there; there are {s.n_plants}")
        if "streams" in options and len(options["streams"]) != 1:
            raise InputError(f"{len(options['streams'])} streams were given; an episode has one")
        return options

    def _drawn(self, scenario: Scenario, seed: int) -> Streams:
        s, layout = self.setting, self.setting.loop.layout
        (streams,) = make_streams(
            [scenario], purpose="environment", seeds=[0], seed=seed, sample_time_s=s.dt,
            outputs=[o.name for o in s.of_role("output")], controlled=layout.controlled,
            rest=s.rest, actuators=[a.name for a in s.of_role("actuator")],
            disturbance=s.disturbance, n_d=layout.n_d, n_draws=s.n_draws,
        )  # fmt: skip
        return streams

    def _judged(self, y: np.ndarray) -> tuple[np.ndarray, bool]:
        loop = self.setting.loop
        fine = (y >= np.maximum(loop.trip_low, -AWAY)) & (y <= np.minimum(loop.trip_high, AWAY))
        return np.clip(np.nan_to_num(y, nan=AWAY), -AWAY, AWAY), not bool(fine.all())

    def _observe(self) -> Observation:
        k = min(self._k, self._streams.n_samples - 1)
        parts = self._streams.setpoint[:, k], self._streams.measured[:, k]
        row = self.setting.loop.layout.join(self._y, *parts, self._u)[0]
        seen = np.where(np.isnan(row), self.setting.high, row)
        return np.asarray(np.clip(seen, self.setting.low, self.setting.high))

    def _info(
        self, terms: np.ndarray, requested: np.ndarray, move: np.ndarray, charged: int
    ) -> dict[str, Any]:
        """Return a new dict; every number in it is a float, as vector environments need."""
        costs, k = self.setting.loop.costs, self._k
        totals = costs.totals(terms)[0]
        by_term: dict[str, dict[str, float]] = {c.name: {} for c in costs.costs}
        for name, i, value in zip(costs.names, costs.of_cost, terms[0], strict=True):
            held, key, count = by_term[costs.costs[i].name], name, 1
            while key in held:  # two terms of one kind and signal
                count += 1
                key = f"{name} {count}"
            held[key] = float(value)
        return {
            "requested": requested[0].copy(),
            "applied": self._u[0].copy(),
            "move": move[0].copy(),
            "y": self._y[0].copy(),
            "setpoint": self._streams.setpoint[0, k].copy(),
            "cost": float(totals[self.setting.primary]),
            "costs": {c.name: float(v) for c, v in zip(costs.costs, totals, strict=True)},
            "terms": by_term,
            "charged_samples": float(charged),
            "plant": float(self._index),
            "scenario": self._streams.names[int(self._streams.scenario[0])],
        }
