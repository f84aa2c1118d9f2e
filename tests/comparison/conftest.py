"""Invented plants, controllers and trials for the tests of the comparison."""

from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
import pytest

from idlearn.comparison import Trials
from idlearn.control import FilterForm, LinearController, ObservationLayout
from idlearn.cost import BoundCost, Cost, CostTerm
from idlearn.envs import (
    Actuator,
    Assignment,
    Contender,
    Loop,
    Robustness,
    Scenario,
    TrialGround,
    make_streams,
)
from idlearn.models import Ensemble, InnovationsModel

LAYOUT = ObservationLayout(n_y=1, controlled=(0,), n_d=0, n_u=1)
COSTS = (
    Cost(
        name="regulation",
        terms=(
            CostTerm(kind="tracking", signal="level"),
            CostTerm(kind="move", signal="valve", weight=0.1),
        ),
    ),
    Cost(name="tracking only", terms=(CostTerm(kind="tracking", signal="level"),)),
)
SCENARIOS = (
    Scenario(
        name="steps", duration_s=60.0, setpoint={"level": ((0.0, 0.0), (10.0, 1.0))}, vary=0.3
    ),
    Scenario(name="load", duration_s=80.0, input_disturbance={"valve": ((20.0, 0.5),)}),
    Scenario(name="quiet", duration_s=60.0),
)


def plant(pole: float, gain: float = 1.0, noise: float = 0.1) -> InnovationsModel:
    """Return a first-order plant of steady gain `gain`."""
    return InnovationsModel(
        A=np.array([[pole]]),
        B=np.array([[gain * (1 - pole)]]),
        C=np.eye(1),
        D=np.zeros((1, 1)),
        K=np.array([[0.5]]),
        S=np.array([[noise**2]]),
        u0=np.zeros(1),
        y0=np.zeros(1),
        sample_time_s=1.0,
        n_actuators=1,
    )


def pi(kp: float, ki: float) -> LinearController:
    """Return u[k] = u[k-1] + kp (e[k] - e[k-1]) + ki e[k]; z holds e[k] and e[k-1]."""
    error = np.array([[-1.0, 1.0, 0.0]])
    nothing = np.zeros((1, 3))
    form = FilterForm.linear(
        F=np.array([[0.0, 0.0], [1.0, 0.0]]),
        G=np.vstack([error, nothing]),
        H=np.array([[kp + ki, -kp]]),
        J=np.array([[0.0, 0.0, 1.0]]),
        low=np.array([-10.0]),
        high=np.array([10.0]),
        Z=np.vstack([error, nothing]),
    )
    return LinearController(form, LAYOUT, 1.0)


def contender(name: str, side: str, controller: Any = None, **facts: Any) -> Contender:
    """Return a contender; a plain one unless a controller is given."""
    return Contender(name, side, controller or pi(0.5, 0.1), **facts)  # type: ignore[arg-type]


def ground(poles: tuple[float, ...] = (0.8, 0.85, 0.9), seeds: int = 3) -> TrialGround:
    """Return first-order plants and three scenarios, two of one length and one of another."""
    models = [plant(p) for p in poles]
    loop = Loop(
        LAYOUT,
        Actuator(np.array([-10.0]), np.array([10.0]), np.array([np.inf]), np.zeros(1)),
        BoundCost(COSTS, ["level"], ["valve"], [0]),
        np.array([-np.inf]),
        np.array([np.inf]),
    )
    streams = make_streams(
        SCENARIOS,
        purpose="jury",
        seeds=range(seeds),
        seed=3,
        sample_time_s=1.0,
        outputs=["level"],
        controlled=[0],
        rest=[0.0],
        actuators=["valve"],
    )
    return TrialGround(Ensemble.from_models(models, [f"pole {p}" for p in poles]), streams, loop)


def assignment(**other: Any) -> Assignment:
    """Return the task of a contender, changed as asked."""
    g = ground()
    plain: dict[str, Any] = {
        "practice": g,
        "selection": g,
        "nominal": g.ensemble,
        "weights": g.loop.costs.riccati(0),
        "cost": 0,
        "budget_steps": 1000,
        "runs": 1,
        "seed": 1,
        "robustness": Robustness(),
        "reach": np.ones(1),
        "spread": np.ones(1),
    }
    return Assignment(**(plain | other))


def trials(
    costs: Mapping[str, np.ndarray],
    scenarios: int = 2,
    *,
    tripped: Mapping[str, float] | None = None,
    travel: Mapping[str, float] | None = None,
    offset: Mapping[str, float] | None = None,
    support: float = 0.99,
) -> Trials:
    """Return invented trials: costs (P, S) per contender, other figures constant.

    `tripped` is the share of episodes with a violation, the first ones.
    """
    names = tuple(costs)
    n_p, n_s = next(iter(costs.values())).shape
    shape = (len(names), n_p, n_s)

    def flat(of: Mapping[str, float] | None, other: float) -> np.ndarray:
        value = [(of or {}).get(n, other) for n in names]
        return np.broadcast_to(np.array(value)[:, None, None, None], (*shape, 1)).copy()

    gone = np.zeros(shape, dtype=bool)
    for i, n in enumerate(names):
        gone[i].reshape(-1)[: round((tripped or {}).get(n, 0.0) * n_p * n_s)] = True
    cost = np.stack([costs[n] for n in names])[..., None]
    return Trials(
        controllers=names,
        labels=tuple(f"plant {p}" for p in range(n_p)),
        scenarios=tuple(f"scenario {i}" for i in range(scenarios)),
        scenario=np.repeat(np.arange(scenarios), n_s // scenarios),
        seed=np.tile(np.arange(n_s // scenarios), scenarios),
        costs=("regulation",),
        term_names=("regulation/tracking level",),
        actuators=("valve",),
        controlled=("level",),
        cost=cost,
        terms=cost,
        tripped=gone,
        travel=flat(travel, 1.0),
        offset=flat(offset, 0.1),
        support=np.full(shape, support),
        at_limit=np.zeros(shape),
    )


def paired_costs(
    rng: np.random.Generator, ratio: float, n_p: int = 24, n_s: int = 40, spread: float = 0.05
) -> dict[str, np.ndarray]:
    """Return costs of "pid" and "learned" whose expected ratio is `ratio`.

    Plant and stream move both alike by 30 % each; apart they are by `spread` each for plant and
    stream, and by `spread` for the single episode.
    """
    common = np.exp(0.3 * rng.standard_normal((n_p, 1)) + 0.3 * rng.standard_normal((1, n_s)))

    def own() -> np.ndarray:
        draws = rng.standard_normal((n_p, 1)), rng.standard_normal((1, n_s))
        return np.asarray(np.exp(spread * (draws[0] + draws[1] + rng.standard_normal((n_p, n_s)))))

    return {"pid": common * own(), "learned": ratio * common * own()}


@dataclass(frozen=True)
class Makers:
    """What tests build with; a fixture, since tests do not import each other."""

    plant: Callable[..., InnovationsModel] = staticmethod(plant)
    pi: Callable[..., LinearController] = staticmethod(pi)
    contender: Callable[..., Contender] = staticmethod(contender)
    ground: Callable[..., TrialGround] = staticmethod(ground)
    assignment: Callable[..., Assignment] = staticmethod(assignment)
    trials: Callable[..., Trials] = staticmethod(trials)
    paired_costs: Callable[..., dict[str, np.ndarray]] = staticmethod(paired_costs)


@pytest.fixture
def make() -> Makers:
    """Return the makers."""
    return Makers()
