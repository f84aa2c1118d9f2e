"""Derived scenarios stay inside what the log covers, and say where they come from."""

from typing import Any

import numpy as np
import pytest

from idlearn.comparison import (
    derive_scenarios,
    rest_levels,
    scenario_table,
    settling_samples,
)
from idlearn.comparison.scenarios import LONGEST, SHORTEST, describe, load_sizes
from idlearn.envs import Scenario, make_streams
from idlearn.errors import UninformativeError
from idlearn.logs import PlantLog, Signal
from idlearn.models import InnovationsModel

SIGNALS = (
    Signal(name="valve", role="actuator", unit="%", low=0.0, high=100.0),
    Signal(name="level", role="output", unit="cm"),
    Signal(name="wanted", role="setpoint", of="level"),
)


def _log(
    model: InnovationsModel,
    load: float = 0.0,
    n: int = 1200,
    steps: bool = True,
    noise: float = 0.0,
) -> PlantLog:
    """Return an invented record around valve 30 % and level 50 cm, with a square-wave load."""
    rng = np.random.default_rng(1)
    u = 30 + 5 * np.sign(np.sin(np.arange(n) / 37.0))[:, None]
    pushed = u + load * np.sign(np.sin(np.arange(n) / 150.0))[:, None]
    x, y = model.rest_state(pushed[0]), np.empty((n, 1))
    for k in range(n):
        y[k] = model.y0 + model.C @ x + noise * rng.standard_normal(1)
        x = model.A @ x + model.B @ (pushed[k] - model.u0)
    wanted = 50 + (4.0 * np.sign(np.sin(np.arange(n) / 37.0))[:, None] if steps else 0 * u)
    return PlantLog.from_arrays(u=u, y=y, setpoint=wanted, sample_time_s=2.0, signals=SIGNALS)


@pytest.fixture
def model(make: Any) -> InnovationsModel:
    """Return a first-order plant at its operating point."""
    m = make.plant(0.9)
    return InnovationsModel(
        A=m.A,
        B=m.B,
        C=m.C,
        D=m.D,
        K=m.K,
        S=m.S,
        u0=np.array([30.0]),
        y0=np.array([50.0]),
        sample_time_s=2.0,
        n_actuators=1,
    )


def test_settling_of_a_first_order_plant(model: InnovationsModel) -> None:
    # 0.9 ** k reaches 2 % after ln 0.02 / ln 0.9 = 37.1 samples
    assert settling_samples(model) == 38


def test_an_integrating_plant_settles_within_the_longest_scenario(make: Any) -> None:
    model = make.plant(0.9)
    integrating = InnovationsModel(
        A=np.eye(1),
        B=np.ones((1, 1)),
        C=np.eye(1),
        D=np.zeros((1, 1)),
        K=model.K,
        S=model.S,
        u0=np.zeros(1),
        y0=np.zeros(1),
        sample_time_s=1.0,
        n_actuators=1,
    )
    assert 100 <= settling_samples(integrating) <= LONGEST // 5 + 1


def test_all_have_one_length_within_bounds_and_a_sentence(
    model: InnovationsModel, make: Any
) -> None:
    got = derive_scenarios(_log(model, load=2.0), model)
    assert [s.name for s in got] == ["setpoint steps", "load step", "regulation"]
    assert {s.samples(2.0) for s in got} == {6 * 38}
    assert all(s.sentence.endswith(".") for s in got)
    for pole, samples in ((0.2, SHORTEST), (0.999, LONGEST)):
        other = make.plant(pole)
        assert derive_scenarios(_log(model), other)[-1].samples(2.0) == samples


def test_steps_stay_inside_the_range_of_the_log_on_every_seed(model: InnovationsModel) -> None:
    log = _log(model, load=2.0)
    got = derive_scenarios(log, model)
    low, high = np.quantile(log.y[:, 0], [0.05, 0.95])
    (streams,) = make_streams(
        got,
        purpose="jury",
        seeds=range(40),
        seed=1,
        sample_time_s=2.0,
        outputs=["level"],
        controlled=[0],
        rest=rest_levels(log),
        actuators=["valve"],
    )
    assert streams.setpoint.min() >= max(low, 46.0)
    assert streams.setpoint.max() <= min(high, 54.0)
    steps = streams.setpoint[streams.scenario == 0, :, 0]
    assert (np.ptp(steps, axis=1) > 0.5).all()
    # seeds differ in size and time
    assert len({tuple(s) for s in steps.tolist()}) == 40
    assert (streams.setpoint[streams.scenario != 0] == rest_levels(log)[0]).all()


def test_the_load_is_of_the_size_that_the_log_shows(model: InnovationsModel) -> None:
    small, large = (load_sizes(_log(model, load=a), model)[0] for a in (0.4, 0.8))
    assert large == pytest.approx(2 * small, rel=0.02)
    # twice the deviation of a square wave of 0.4, less what blocks that straddle its edges lose
    assert 0.6 < small < 0.8 + 1e-6
    # never more than a quarter of the range that the valve covered, 25 to 35 %
    assert load_sizes(_log(model, load=30.0), model)[0] == pytest.approx(2.5)
    assert load_sizes(_log(model, load=0.0), model)[0] == 0.0


def test_the_load_pushes_away_from_the_nearer_limit(model: InnovationsModel) -> None:
    # the valve stands at 30 of 100 %: the answer has to open it, so the load takes away
    load = derive_scenarios(_log(model, load=1.0), model)[1]
    values = [v for _, v in load.input_disturbance["valve"]]
    assert values[0] == 0
    assert values[1] < 0
    assert values[2] == 0


def test_a_log_that_shows_no_load_and_no_setpoint_leaves_regulation(
    model: InnovationsModel,
) -> None:
    log = _log(model)
    bare = PlantLog.from_arrays(u=log.u, y=log.y, sample_time_s=2.0, signals=SIGNALS[:2])
    got = derive_scenarios(bare, model)
    assert [s.name for s in got] == ["regulation"]
    assert rest_levels(bare).shape == (0,)


def test_a_setpoint_that_never_moved_steps_within_the_output(model: InnovationsModel) -> None:
    log = _log(model, load=2.0, steps=False)
    steps = derive_scenarios(log, model)[0]
    low, high = np.quantile(log.y[:, 0], [0.05, 0.95])
    values = [v for _, v in steps.setpoint["level"]]
    assert low < min(values) < max(values) < high
    assert "its output covered" in steps.sentence
    assert rest_levels(log) == pytest.approx([50.0])


def test_the_table_tells_declared_from_derived(model: InnovationsModel) -> None:
    own = Scenario(name="own", duration_s=100.0)
    table = scenario_table([own, *derive_scenarios(_log(model), model)])
    assert table["declared"][0] is True
    assert not any(table["declared"][1:])
    assert table["sentence"][0] == describe(own) == "Declared in the sheet: own, 100 s."


def test_a_log_without_valid_samples_derives_nothing(model: InnovationsModel) -> None:
    log = _log(model)
    empty = PlantLog.from_arrays(
        u=log.u,
        y=log.y,
        setpoint=log.setpoint,
        sample_time_s=2.0,
        signals=SIGNALS,
        segments=np.zeros((0, 2), dtype=int),
    )
    with pytest.raises(UninformativeError, match="no unbroken stretch"):
        derive_scenarios(empty, model)
