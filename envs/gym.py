"""The gymnasium environments by id: any saved model, and the demo kiln."""

from collections.abc import Sequence
from pathlib import Path
from typing import Any

import numpy as np

from idlearn.cost import Cost, CostTerm
from idlearn.envs.kiln import KILN_SIGNALS, SAMPLE_TIME_S, Kiln, KilnTruth, kiln_truth
from idlearn.envs.linear import LinearPlant
from idlearn.envs.loopenv import LoopEnv
from idlearn.envs.plant import RestingPlant
from idlearn.envs.scenario import Scenario
from idlearn.envs.setting import EnvSetting, model_setting, observation_bounds, surround
from idlearn.errors import InputError
from idlearn.logs import Signal
from idlearn.models import Ensemble, InnovationsModel, load_model, read_extra


class PlantEnv(LoopEnv):
    """Any saved model as an environment, id "idlearn/Plant-v0".

    Args:
        model: path of a model or ensemble file, a model, or an ensemble; of an ensemble every
            episode draws a plant.
        signals: actuators, outputs, setpoints, measured disturbances; None takes those saved
            with the model, else names u1, y1 and so on. Unknown limits are put where the
            actuator moves an output by 20 standard deviations of its noise.
        scenarios: None takes steps of every setpoint.
        costs: None takes squared errors and squared moves.
        latency_samples: decisions act so many samples later.
        disturbance: record (M, n_d) to replay; None holds them at the operating point.
        scaled: whether actions are in [-1, 1].
        render_mode: "ansi" or None.

    Raises:
        InputError: a file that is no model, or parts that do not fit together.
    """

    def __init__(
        self,
        model: str | Path | InnovationsModel | Ensemble | Any,
        *,
        signals: Sequence[Signal] | None = None,
        scenarios: Sequence[Scenario] | None = None,
        costs: Cost | Sequence[Cost] | None = None,
        latency_samples: int = 0,
        disturbance: np.ndarray | None = None,
        scaled: bool = True,
        render_mode: str | None = None,
    ) -> None:
        """Load the model and put its surroundings around it."""
        if isinstance(model, str | Path):
            if signals is None and (saved := read_extra(model).get("signals")):
                signals = [Signal(**entry) for entry in saved]
            model = load_model(model)
        ensemble = plants_of(model)
        plants: dict[int, LinearPlant] = {}

        def plant_of(index: int) -> RestingPlant:
            if index not in plants:
                plants[index] = LinearPlant(ensemble.take([index]))
            return plants[index]

        setting = model_setting(
            ensemble, plant_of, signals=signals, scenarios=scenarios,
            costs=[costs] if isinstance(costs, Cost) else costs,
            latency_samples=latency_samples, disturbance=disturbance,
        )  # fmt: skip
        super().__init__(setting, scaled=scaled, render_mode=render_mode)


def plants_of(model: InnovationsModel | Ensemble | Any) -> Ensemble:
    """Return the plants of a model, an ensemble, or anything with `linearise()`.

    An input that moves the output in the same sample is delayed by one sample.

    Raises:
        InputError: something else.
    """
    if isinstance(model, Ensemble):
        models, labels = [model.member(i) for i in range(len(model))], model.labels
    elif hasattr(model, "linearise"):
        models, labels = [model.linearise()], ("model",)
    else:
        raise InputError(f"model is a {type(model).__name__}; give a path, a model or an ensemble")
    return Ensemble.from_models([m.without_feedthrough() for m in models], labels)


KILN_COST = Cost(
    name="regulation",
    terms=(
        CostTerm(kind="tracking", signal="temperature", scale=5.0),
        CostTerm(kind="move", signal="heater", weight=0.1, scale=2.0),
    ),
)
KILN_SCENARIOS = (
    Scenario(name="hold", duration_s=7200.0, setpoint={"temperature": ((0.0, 725.0),)}),
    Scenario(
        name="setpoint steps",
        duration_s=7200.0,
        setpoint={"temperature": ((0.0, 725.0), (1200.0, 760.0), (4200.0, 715.0))},
        vary=0.3,
    ),
)


class KilnEnv(LoopEnv):
    """The invented demo kiln as an environment, id "idlearn/Kiln-v0".

    Args:
        truth: parameters of the kiln.
        scenarios: what can happen; None takes a hold and setpoint steps.
        costs: None takes squared errors and squared moves.
        latency_samples: decisions act so many samples later.
        scaled: whether actions are in [-1, 1].
        render_mode: "ansi" or None.
    """

    def __init__(
        self,
        *,
        truth: KilnTruth | None = None,
        scenarios: Sequence[Scenario] | None = None,
        costs: Cost | Sequence[Cost] | None = None,
        latency_samples: int = 0,
        scaled: bool = True,
        render_mode: str | None = None,
    ) -> None:
        """Build the kiln and its surroundings."""
        kiln, dt = Kiln((truth or KilnTruth(),)), SAMPLE_TIME_S
        chosen = tuple(KILN_SCENARIOS if scenarios is None else scenarios)
        asked = [costs] if isinstance(costs, Cost) else costs or [KILN_COST]
        loop, primary = surround(KILN_SIGNALS, asked, latency_samples, dt)
        centre = np.array([kiln_truth()["working_temperature"]])
        # nothing that heater, drift and door can do leaves this range
        low, high = observation_bounds(
            KILN_SIGNALS, loop.layout, chosen, centre, np.array([600.0]), np.array([50.0]),
            np.zeros((1, 0)),
        )  # fmt: skip
        super().__init__(
            EnvSetting(
                plant_of=lambda _: kiln, n_plants=1, signals=KILN_SIGNALS, loop=loop,
                primary=primary, scenarios=chosen, rest=(float(centre[0]),), low=low, high=high,
                dt=dt, disturbance=None, n_draws=Kiln.n_draws,
            ),
            scaled=scaled,
            render_mode=render_mode,
        )  # fmt: skip
