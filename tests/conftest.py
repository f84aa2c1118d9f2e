"""Fixtures for all tests."""

import os
from collections.abc import Callable
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

from idlearn.control import ObservationLayout
from idlearn.cost import BoundCost, Cost, CostTerm
from idlearn.envs import (
    Actuator,
    Assignment,
    Loop,
    Robustness,
    Scenario,
    TrialGround,
    make_streams,
)
from idlearn.models import Ensemble, InnovationsModel

ROOT = Path(__file__).resolve().parents[1]


@pytest.fixture(scope="session")
def open_data() -> Path:
    """Return the folder of open records; skip where it is absent, fail if IDLEARN_STRICT=1."""
    folder = Path(os.environ.get("IDLEARN_DATA", ROOT.parent / "shared" / "data"))
    if not (folder / "manifest.json").is_file():
        reason = f"no open records in {folder}; set IDLEARN_DATA to their folder"
        if os.environ.get("IDLEARN_STRICT") == "1":
            pytest.fail(reason)
        pytest.skip(reason)
    return folder


def second_order(gain: float = 2.0, load: float = 0.0) -> InnovationsModel:
    """Return an invented plant: lags of 30 and 8 samples, 3 of dead time, coloured noise."""
    den = np.poly(np.exp([-1 / 30, -1 / 8]))
    b = gain * den.sum() * np.array([0.55, 0.45])
    n = 5
    A = np.eye(n, k=1)
    A[:2, 0] -= den[1:]
    B, K = np.zeros((n, 1)), np.zeros((n, 1))
    B[3:5, 0] = b
    K[:2, 0] = np.array([-1.2, 0.4]) - den[1:]
    model = InnovationsModel(
        A=A, B=B, C=np.eye(1, n), D=np.zeros((1, 1)), K=K, S=np.array([[0.04]]),
        u0=np.array([50.0]), y0=np.array([200.0]), sample_time_s=1.0,
    )  # fmt: skip
    return model.with_load(np.array([[load]])) if load else model


Task = Callable[..., Assignment]


@pytest.fixture(scope="session")
def task() -> Task:
    """Return a function that makes the assignment of a contender on invented plants."""

    def make(
        *,
        gains: tuple[float, ...] = (1.8, 2.0, 2.2),
        latency: int = 0,
        quiet: bool = False,
        limits: tuple[float, float] = (0.0, 100.0),
        rate: float = np.inf,
        move: float = 0.1,
        budget: int = 600_000,
        runs: int = 2,
        load: float = 0.1,
        samples: int = 150,
        seeds: int = 1,
    ) -> Assignment:
        layout = ObservationLayout(1, (0,), 0, 1)
        terms = (
            CostTerm(kind="tracking", signal="y"),
            CostTerm(kind="move", signal="u", weight=move),
        )
        costs = BoundCost([Cost(name="c", terms=terms)], ["y"], ["u"], [0])
        actuator = Actuator(
            np.array([limits[0]]), np.array([limits[1]]), np.array([rate]), np.zeros(1)
        )
        inf = np.array([np.inf])
        loop = Loop(layout, actuator, costs, -inf, inf, latency)
        t = float(samples)
        scenarios = [Scenario(name="noise", duration_s=t, setpoint={"y": ((0.0, 200.0),)})]
        if not quiet:
            steps = ((0.0, 200.0), (0.15 * t, 220.0))
            scenarios += [
                Scenario(name="step", duration_s=t, setpoint={"y": steps}, vary=0.4),
                Scenario(name="load", duration_s=t, input_disturbance={"u": ((0.2 * t, 4.0),)}),
            ]
        plants = Ensemble.from_models([second_order(g, load) for g in gains], [""] * len(gains))

        def ground(purpose: str) -> TrialGround:
            streams = make_streams(
                scenarios, purpose=purpose, seeds=range(seeds), seed=1, sample_time_s=1.0,
                outputs=["y"], controlled=[0], rest=[200.0], actuators=["u"],
            )  # fmt: skip
            return TrialGround(plants, streams, loop)

        nominal = Ensemble.from_models([second_order(2.0, load)], ["nominal"])
        return Assignment(
            ground("practice"), ground("selection"), nominal, costs.riccati(0), 0, budget, runs, 1,
            Robustness(), np.array([20.0]), np.array([40.0]), latency,
        )  # fmt: skip

    return make


@pytest.fixture(scope="session")
def judged() -> Callable[..., TrialGround]:
    """Return a function that gives an assignment's plants fresh streams, many of them."""

    def make(a: Assignment, seeds: int = 40) -> TrialGround:
        first = a.practice.streams[0]
        names = first.names
        scenarios = [
            Scenario(
                name=n, duration_s=float(first.n_samples),
                setpoint={"y": ((0.0, 200.0),) if n != "step" else ((0.0, 200.0), (20.0, 220.0))},
                input_disturbance={"u": ((30.0, 4.0),)} if n == "load" else {},
            )
            for n in names
        ]  # fmt: skip
        streams = make_streams(
            scenarios, purpose="fresh", seeds=range(seeds), seed=7, sample_time_s=1.0,
            outputs=["y"], controlled=[0], rest=[200.0], actuators=["u"],
        )  # fmt: skip
        return replace(a.practice, streams=streams)

    return make
