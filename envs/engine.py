"""The lock-step engine: n closed loops at once, every one with its own plant and streams.

At sample k: y[k] is measured, the controller sees it and decides; with a latency of L samples the
decision acts from k + L; the actuator clips, rate-limits and quantises; the stage cost is taken;
the plant moves on under the applied u plus the input disturbance.
"""

from typing import Any

import numpy as np

from idlearn.budget import Budget
from idlearn.control import Controller, FilterRunner
from idlearn.envs.plant import RestingPlant
from idlearn.envs.scenario import Streams
from idlearn.envs.tally import Inside, Loop, Rollout, Tally


class SharedDraws:
    """Pre-drawn standard normal numbers that stand in for a generator.

    Args:
        noise: (S, n_draws, width); each call hands out the next draw of every episode.
        tile: how often the S rows are repeated, the whole block at a time.
    """

    def __init__(self, noise: np.ndarray, tile: int = 1) -> None:
        """Start at the first draw."""
        # time first, so that one sample lies together in memory
        self._noise = np.ascontiguousarray(noise.transpose(1, 0, 2))
        self._tile, self._next = tile, 0

    def standard_normal(self, size: Any = None) -> np.ndarray:
        """Return the next draw (S * tile, width); `size` has to be that shape."""
        draw = _tiled(self._noise[self._next], self._tile)
        if size is not None and tuple(size) != draw.shape:
            raise ValueError(f"a draw of shape {size} was asked for, {draw.shape} is there")
        self._next += 1
        return draw


def simulate(
    plant: RestingPlant,
    controller: Controller | FilterRunner,
    streams: Streams,
    loop: Loop,
    *,
    tile: int = 1,
    inside: Inside | None = None,
    budget: Budget | None = None,
    record: bool = False,
    extra_delay_samples: int = 0,
) -> Rollout:
    """Run every episode of `streams` to its end.

    Args:
        plant: n plants, n = tile * len(streams).
        controller: acts on (n, n_obs).
        streams: episode i has row i % len(streams).
        loop: what surrounds the plant.
        tile: how often the streams are repeated, the whole block at a time.
        inside: (y, u, move) -> bool per row, the region the log covers; None skips it. It is
            given the rows of several samples at once.
        budget: charged n * N plant-steps.
        record: whether to keep y, u and requested.
        extra_delay_samples: further latency that the controller does not know, for stress.

    Raises:
        BudgetSpent: the budget does not afford the episodes.
    """
    n, n_samples, layout = tile * len(streams), streams.n_samples, loop.layout
    if budget is not None:
        budget.charge(n * n_samples)
    setpoint, load, measured = (
        np.ascontiguousarray(a.transpose(1, 0, 2))
        for a in (streams.setpoint, streams.load, streams.measured)
    )
    loaded = np.asarray(load.any(axis=(1, 2)))
    draws = SharedDraws(streams.noise, tile)
    wanted = np.full((n, layout.n_y), np.nan)
    wanted[:, list(layout.controlled)] = _tiled(setpoint[0], tile)
    state, u = plant.rest(
        n, wanted, _tiled(measured[0], tile), loop.actuator.low, loop.actuator.high, draws
    )
    latency = loop.latency_samples + extra_delay_samples
    requests = [u] * latency
    controller.reset(n)
    tally = Tally(setpoint, tile, u, loop, inside, record)
    observation_of = _Observer(loop, n, tile)
    # a loop that runs away overflows before it is caught as a trip; that is no error
    with np.errstate(over="ignore", invalid="ignore"):
        for k in range(n_samples):
            y = plant.measure(state, draws)
            request = controller.act(observation_of(y, setpoint[k], measured[k], u))
            requests.append(request)
            u = loop.actuator.apply(requests.pop(0), u)
            tally.add(y, u, request)
            if k + 1 < n_samples:
                held = u + _tiled(load[k], tile) if loaded[k] else u
                if layout.n_d:
                    held = np.concatenate([held, _tiled(measured[k], tile)], axis=1)
                state = plant.advance(state, held, draws)
    return tally.close()


def _tiled(rows: np.ndarray, tile: int) -> np.ndarray:
    """Repeat rows (S, c), the whole block at a time: (tile * S, c)."""
    if tile == 1:
        return rows
    out = np.empty((tile, *rows.shape))
    out[...] = rows
    return out.reshape(tile * len(rows), rows.shape[1])


class _Observer:
    """Puts the columns of an observation side by side, as `ObservationLayout.join` does."""

    def __init__(self, loop: Loop, n: int, tile: int) -> None:
        self._shape = (tile, n // tile, loop.layout.n_obs)

    def __call__(
        self, y: np.ndarray, setpoint: np.ndarray, measured: np.ndarray, u: np.ndarray
    ) -> np.ndarray:
        # new every time, as a controller may keep it; column by column is faster here
        out, column = np.empty(self._shape), 0
        for part in (y, setpoint, measured, u):
            for j in range(part.shape[1]):
                # streams have one row per column of the tile, plants one per episode
                out[..., column] = part[:, j].reshape(-1, self._shape[1])
                column += 1
        return out.reshape(-1, self._shape[2])
