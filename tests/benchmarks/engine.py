"""Closed-loop steps per second: the lock-step engine against a plain gymnasium loop.

    python tests/benchmarks/engine.py [--quick]

Both run the same closed loop on the same streams, in one process, and have to give the same
costs. Each figure is the best of three passes; "one" is one candidate on every plant and stream,
"many" is a generation of candidates at once, as tuning runs them. The invented plants are lags
with dead time.
"""

import argparse
import time
from collections.abc import Callable
from dataclasses import replace
from functools import partial
from typing import Any

import gymnasium
import numpy as np

from idlearn.baselines.lqg import design_lqg
from idlearn.baselines.pid import Pairing, PidController, PidSettings
from idlearn.control import FilterController, FilterForm, LinearController, ObservationLayout
from idlearn.cost import Cost, CostTerm
from idlearn.envs import Scenario, TrialGround, make_streams, run_costs, run_forms
from idlearn.envs.loopenv import LoopEnv
from idlearn.logs import Signal
from idlearn.models import Ensemble, InnovationsModel

SAMPLES = 400
SIGNALS = (
    Signal(name="u", role="actuator", low=-10.0, high=10.0, rate_per_s=5.0),
    Signal(name="y", role="output"),
    Signal(name="sp", role="setpoint"),
)
COST = Cost(
    name="c",
    terms=(
        CostTerm(kind="tracking", signal="y"),
        CostTerm(kind="move", signal="u", weight=0.1),
    ),
)
SCENARIO = Scenario(
    name="steps", duration_s=float(SAMPLES), setpoint={"y": ((0.0, 0.0), (50.0, 1.0))},
    input_disturbance={"u": ((200.0, 0.5),)},
)  # fmt: skip


def lag(pole: float, gain: float, dead: int = 3) -> InnovationsModel:
    """Return a lag with `dead` samples from u to y and coloured noise."""
    A = np.zeros((dead, dead))
    A[0, 0] = pole
    A[:-1, 1:] += np.eye(dead - 1)
    B = np.zeros((dead, 1))
    B[-1] = gain * (1 - pole)
    K = np.zeros((dead, 1))
    K[0] = 0.5
    return InnovationsModel(
        A=A, B=B, C=np.eye(1, dead), D=np.zeros((1, 1)), K=K, S=np.array([[0.01]]),
        u0=np.zeros(1), y0=np.zeros(1), sample_time_s=1.0,
    )  # fmt: skip


def best(work: Callable[[], Any], passes: int = 3) -> tuple[float, Any]:
    """Return the shortest time of several passes [s], and what the last one gave."""
    times, result = [], None
    for _ in range(passes):
        start = time.perf_counter()
        result = work()
        times.append(time.perf_counter() - start)
    return min(times), result


def gymnasium_loop(
    env: LoopEnv, controller: FilterController, ground: TrialGround, episodes: int
) -> np.ndarray:
    """Step the environment through the first episodes, one sample at a time; return costs."""
    (streams,), costs = ground.streams, []
    for i in range(episodes):
        plant, row = divmod(i, len(streams))
        one = streams.take(np.array([row]))
        seen, _ = env.reset(options={"plant": plant, "streams": one})
        controller.reset(1)
        total, ended = 0.0, False
        while not ended:
            seen, reward, terminated, truncated, _ = env.step(controller.act(seen[None])[0])
            total -= reward
            ended = terminated or truncated
        costs.append(total / SAMPLES)
    return np.array(costs)


def main() -> None:
    """Print one line per controller."""
    parser = argparse.ArgumentParser()
    parser.add_argument("--quick", action="store_true", help="fewer plants and candidates")
    quick = parser.parse_args().quick
    n_plants, n_streams, n_many, n_gym = (10, 4, 4, 2) if quick else (60, 8, 16, 6)
    rng = np.random.default_rng(1)
    plants = [
        lag(p, g)
        for p, g in zip(rng.uniform(0.88, 0.95, n_plants), rng.uniform(0.8, 1.2, n_plants))  # noqa: B905
    ]
    ensemble = Ensemble.from_models(plants, ["invented"] * n_plants)
    env = gymnasium.make(
        "idlearn/Plant-v0", model=ensemble, signals=SIGNALS, scenarios=[SCENARIO], costs=COST,
        scaled=False, disable_env_checker=True,
    ).unwrapped  # fmt: skip
    assert isinstance(env, LoopEnv)
    streams = make_streams(
        [SCENARIO], purpose="benchmark", seeds=range(n_streams), seed=1, sample_time_s=1.0,
        outputs=["y"], controlled=(0,), rest=[0.0], actuators=["u"],
    )  # fmt: skip
    loop = env.setting.loop
    ground = TrialGround(ensemble, streams, loop)
    layout = loop.layout
    pid = PidController(
        [(Pairing(0, 0), PidSettings(gain=1.5, integral_time_s=12.0, derivative_time_s=1.0))],
        np.zeros(1), layout, 1.0, loop.actuator.low, loop.actuator.high,
    )  # fmt: skip
    lqg = design_lqg(plants[0], loop.costs.riccati(0), layout, loop.actuator, 0)
    print(f"plants={n_plants} streams={n_streams} samples={SAMPLES} candidates={n_many}")
    for name, controller in (("pid", pid), ("lqg", lqg), ("bounded", with_bounded(pid, layout))):
        seconds, plain = best(partial(gymnasium_loop, env, controller, ground, n_gym), 2)
        base = n_gym * SAMPLES / seconds
        print(f"RATE {name:8s} gymnasium      steps_per_s={base:.3g} ratio=1")
        seconds, costs = best(partial(run_costs, ground, controller))
        np.testing.assert_allclose(costs.ravel()[:n_gym], plain, rtol=1e-9)
        report(name, "engine one ", ground.steps / seconds, base)
        f = controller.form
        forms = [replace(f, J=f.J * (1 - 1e-3 * i)) for i in range(n_many)]
        seconds, many = best(partial(run_forms, ground, forms))
        np.testing.assert_allclose(many[0], costs, rtol=1e-9)
        report(name, "engine many", n_many * ground.steps / seconds, base)


def with_bounded(pid: FilterController, layout: ObservationLayout) -> LinearController:
    """Return the controller with a bounded read-out beside its linear one."""
    f: FilterForm = pid.form
    rng = np.random.default_rng(2)
    bounded = replace(
        f, M=0.1 * rng.standard_normal(f.M.shape), N=0.1 * rng.standard_normal(f.N.shape),
        authority=np.full_like(f.authority, 0.2),
    )  # fmt: skip
    return LinearController(bounded, layout, 1.0)


def report(name: str, path: str, rate: float, base: float) -> None:
    """Print one line."""
    print(f"RATE {name:8s} {path:14s} steps_per_s={rate:.3g} ratio={rate / base:.0f}")


if __name__ == "__main__":
    main()
