"""Invented plants, surroundings and controllers for the tests of the environments."""

from collections.abc import Sequence
from types import SimpleNamespace
from typing import Any

import numpy as np
import pytest

from idlearn.control import FilterForm, LinearController, ObservationLayout
from idlearn.cost import BoundCost, Cost, CostTerm
from idlearn.envs import Actuator, Loop, Scenario, Streams, make_streams
from idlearn.models import Ensemble, InnovationsModel


def model(A: Any, B: Any, C: Any, K: Any, S: Any, **other: Any) -> InnovationsModel:
    """Return a model from nested lists; operating point 0 and no feed-through unless given."""
    A, B, C, K, S = (np.array(a, dtype=float) for a in (A, B, C, K, S))
    plain: dict[str, Any] = {
        "D": np.zeros((len(C), B.shape[1])),
        "u0": np.zeros(B.shape[1]),
        "y0": np.zeros(len(C)),
        "sample_time_s": 1.0,
    }
    return InnovationsModel(A=A, B=B, C=C, K=K, S=S, **(plain | other))


def lag(pole: float = 0.9, gain: float = 2.0, noise: float = 0.1, **other: Any) -> InnovationsModel:
    """Return a first-order lag of steady gain `gain`."""
    return model([[pole]], [[gain * (1 - pole)]], [[1]], [[0.5]], [[noise**2]], **other)


def random_model(
    rng: np.random.Generator, n_x: int, n_u: int, n_d: int, n_y: int
) -> InnovationsModel:
    """Return a stable model with nothing special about it."""
    A = rng.standard_normal((n_x, n_x))
    A *= 0.9 / np.abs(np.linalg.eigvals(A)).max()
    root = rng.standard_normal((n_y, n_y))
    return model(
        A,
        rng.standard_normal((n_x, n_u + n_d)),
        rng.standard_normal((n_y, n_x)),
        0.3 * rng.standard_normal((n_x, n_y)),
        root @ root.T,
        u0=rng.standard_normal(n_u + n_d),
        y0=10 * rng.standard_normal(n_y),
        n_actuators=n_u,
    )


def ensemble(*models: InnovationsModel) -> Ensemble:
    """Stack models."""
    return Ensemble.from_models(models, ["invented"] * len(models))


def loop(
    n_y: int = 1,
    n_u: int = 1,
    n_d: int = 0,
    *,
    controlled: Sequence[int] | None = None,
    actuator: Actuator | None = None,
    costs: Sequence[Cost] | None = None,
    trip: float = np.inf,
    latency: int = 0,
) -> Loop:
    """Return surroundings with signals y0.., u0.. and squared errors and moves as cost."""
    kept = tuple(range(n_y) if controlled is None else controlled)
    outputs, actuators = [f"y{i}" for i in range(n_y)], [f"u{j}" for j in range(n_u)]
    if costs is None:
        tracked = [CostTerm(kind="tracking", signal=outputs[i]) for i in kept]
        moves = [CostTerm(kind="move", signal=a, weight=0.1) for a in actuators]
        costs = [Cost(name="regulation", terms=(*tracked, *moves))]
    return Loop(
        ObservationLayout(n_y, kept, n_d, n_u),
        actuator or Actuator.free(n_u),
        BoundCost(costs, outputs, actuators, kept),
        np.full(n_y, -trip),
        np.full(n_y, trip),
        latency,
    )


def streams(
    surroundings: Loop,
    n_samples: int,
    seeds: int = 3,
    *,
    setpoint: dict[str, Any] | None = None,
    load: dict[str, Any] | None = None,
    vary: float = 0.0,
    **other: Any,
) -> Streams:
    """Return the streams of one scenario."""
    layout = surroundings.layout
    scenario = Scenario(
        name="one", duration_s=float(n_samples), setpoint=setpoint or {},
        input_disturbance=load or {}, vary=vary,
    )  # fmt: skip
    plain: dict[str, Any] = {
        "purpose": "test",
        "seeds": range(seeds),
        "seed": 11,
        "sample_time_s": 1.0,
        "outputs": [f"y{i}" for i in range(layout.n_y)],
        "controlled": layout.controlled,
        "rest": [0.0] * len(layout.controlled),
        "actuators": [f"u{j}" for j in range(layout.n_u)],
        "n_d": layout.n_d,
    }
    (drawn,) = make_streams([scenario], **(plain | other))
    return drawn


def gains(layout: ObservationLayout, J: Any, latency: int = 0) -> LinearController:
    """Return u = J o, a memoryless controller."""
    J = np.array(J, dtype=float)
    free = np.full(len(J), np.inf)
    form = FilterForm.linear(
        F=np.zeros((0, 0)), G=np.zeros((0, J.shape[1])), H=np.zeros((len(J), 0)), J=J,
        low=-free, high=free, latency=latency,
    )  # fmt: skip
    return LinearController(form, layout, 1.0)


def pi_form(kp: float, ki: float, limit: float = np.inf) -> FilterForm:
    """Return u[k] = u[k-1] + kp (e[k] - e[k-1]) + ki e[k] for one loop; z holds e[k], e[k-1]."""
    error = np.array([[-1.0, 1.0, 0.0]])
    nothing = np.zeros((1, 3))
    return FilterForm.linear(
        F=np.array([[0.0, 0.0], [1.0, 0.0]]),
        G=np.vstack([error, nothing]),
        H=np.array([[kp + ki, -kp]]),
        J=np.array([[0.0, 0.0, 1.0]]),
        low=np.array([-limit]),
        high=np.array([limit]),
        Z=np.vstack([error, nothing]),
    )


def pi(kp: float, ki: float, limit: float = np.inf) -> LinearController:
    """Return the controller of `pi_form`."""
    return LinearController(pi_form(kp, ki, limit), ObservationLayout(1, (0,), 0, 1), 1.0)


@pytest.fixture(scope="session")
def make() -> SimpleNamespace:
    """Return the makers of this file."""
    return SimpleNamespace(
        model=model, lag=lag, random_model=random_model, ensemble=ensemble, loop=loop,
        streams=streams, gains=gains, pi=pi, pi_form=pi_form,
    )  # fmt: skip
