"""The tables of a run folder: a twin of every figure and table of the report."""

from collections.abc import Mapping, Sequence

import numpy as np

from idlearn.envs import Contender, Streams, TrialGround, run_one
from idlearn.logs import PlantLog, Signal
from idlearn.models import Ensemble
from idlearn.study.setting import Setting

Columns = dict[str, list[object] | np.ndarray]
LOG_ROWS = 3000


def signal_table(signals: Sequence[Signal]) -> Columns:
    """Return signals.csv."""
    keys = ("name", "role", "unit", "low", "high", "trip_low", "trip_high", "of")
    return {k: [getattr(s, k) for s in signals] for k in keys}


def log_table(log: PlantLog) -> Columns:
    """Return log.csv: every signal against time, thinned to at most LOG_ROWS rows.

    Of every stretch the rows with the lowest and the highest value of the first output are kept,
    so that excursions are not lost.
    """
    rows = _thinned(log.y[:, 0], LOG_ROWS)
    table: Columns = {"elapsed_s": log.elapsed_s[rows]}
    for signals, values in (
        (log.actuators, log.u),
        (log.outputs, log.y),
        (log.setpoints, log.setpoint),
        (log.disturbances, log.disturbance),
    ):
        for j, signal in enumerate(signals):
            if values is not None:
                table[signal.name] = values[rows, j]
    table["used"] = log.valid[rows].astype(int)
    return table


def _thinned(values: np.ndarray, most: int) -> np.ndarray:
    """Return at most `most` row numbers, two of each stretch: its lowest and its highest value."""
    n = len(values)
    if n <= most:
        return np.arange(n)
    edges = np.linspace(0, n, most // 2 + 1).astype(int)
    kept = set()
    for first, last in zip(edges[:-1], edges[1:], strict=True):
        part = np.where(np.isfinite(values[first:last]), values[first:last], np.nanmedian(values))
        kept |= {first + int(np.argmin(part)), first + int(np.argmax(part))}
    return np.array(sorted(kept))


def step_table(parts: Mapping[str, Ensemble], log: PlantLog, n_steps: int) -> Columns:
    """Return step_response.csv: median and 95 % band over the plants of each part."""
    table: Columns = {
        k: [] for k in ("part", "input", "output", "time_s", "estimate", "low", "high")
    }
    time = np.arange(n_steps) * log.sample_time_s
    for part, ensemble in parts.items():
        responses = np.stack(
            [ensemble.member(i).step_response(n_steps) for i in range(len(ensemble))]
        )  # (P, n, n_y, n_in)
        low, middle, high = np.quantile(responses, [0.025, 0.5, 0.975], axis=0)
        names = [s.name for s in (*log.actuators, *log.disturbances)]
        for j, source in enumerate(names):
            for i, target in enumerate(log.outputs):
                extend(
                    table,
                    n_steps,
                    part=part,
                    input=source,
                    output=target.name,
                    time_s=time,
                    estimate=middle[:, i, j],
                    low=low[:, i, j],
                    high=high[:, i, j],
                )
    return table


def closed_loop_table(
    ground: TrialGround, contenders: Sequence[Contender], setting: Setting
) -> Columns:
    """Return closed_loop.csv: the first seed of every scenario, over the jury plants."""
    keys = ("controller", "scenario", "time_s", "signal", "role", "median", "low", "high")
    table: Columns = {k: [] for k in keys}
    dt = setting.log.sample_time_s
    groups = [_first_seed(s) for s in ground.streams]
    shown = TrialGround(ground.ensemble, tuple(groups), ground.loop)
    for contender in contenders:
        for s, rollout in zip(
            groups, run_one(shown, contender.controller, record=True), strict=True
        ):
            assert rollout.y is not None
            assert rollout.u is not None
            n, n_p = s.n_samples, len(ground.ensemble)
            y = rollout.y.reshape(n_p, len(s), n, -1)
            u = rollout.u.reshape(n_p, len(s), n, -1)
            for k in range(len(s)):
                common = {
                    "controller": contender.name,
                    "scenario": s.names[s.scenario[k]],
                    "time_s": np.arange(n) * dt,
                }
                for role, names, values in (
                    ("output", setting.outputs, y),
                    ("actuator", setting.actuators, u),
                ):
                    for j, name in enumerate(names):
                        low, middle, high = np.quantile(values[:, k, :, j], [0.1, 0.5, 0.9], axis=0)
                        extend(
                            table,
                            n,
                            **common,
                            signal=name,
                            role=role,
                            median=middle,
                            low=low,
                            high=high,
                        )
                for j, c in enumerate(setting.layout.controlled):
                    wanted = s.setpoint[k, :, j]
                    extend(
                        table,
                        n,
                        **common,
                        signal=setting.outputs[c],
                        role="setpoint",
                        median=wanted,
                        low=wanted,
                        high=wanted,
                    )
    return table


def learning_table(contenders: Sequence[Contender]) -> Columns:
    """Return learning.csv: every run of every contender that was tuned or trained."""
    table: Columns = {k: [] for k in ("controller", "run", "generation", "value")}
    for c in contenders:
        for run in c.runs:
            n = len(run.history)
            extend(
                table,
                n,
                controller=c.name,
                run=run.label,
                generation=np.arange(n),
                value=np.asarray(run.history, dtype=float),
            )
    return table


def _first_seed(streams: Streams) -> Streams:
    seeds = np.array(streams.seed)
    return streams.take(np.flatnonzero(seeds == seeds.min()))


def extend(table: Columns, n: int, **columns: object) -> None:
    """Append n rows; a single value stands for all of them."""
    for key, values in columns.items():
        column = table[key]
        assert isinstance(column, list)
        column.extend(list(values) if isinstance(values, np.ndarray) else [values] * n)
