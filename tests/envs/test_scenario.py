"""Scenarios and the streams drawn for them."""

from types import SimpleNamespace
from typing import Any

import numpy as np
import pytest

from idlearn.envs import Scenario, Streams, make_streams
from idlearn.errors import InputError


def draw(scenarios: list[Scenario], **other: Any) -> tuple[Streams, ...]:
    plain: dict[str, Any] = {
        "purpose": "jury", "seeds": range(4), "seed": 7, "sample_time_s": 2.0,
        "outputs": ["t", "p"], "controlled": (0,), "rest": [20.0], "actuators": ["v"],
    }  # fmt: skip
    return make_streams(scenarios, **(plain | other))


STEP = Scenario(
    name="step", duration_s=40.0, setpoint={"t": ((0.0, 30.0), (10.0, 35.0), (30.0, 25.0))},
    input_disturbance={"v": ((20.0, -1.0),)},
)  # fmt: skip


def test_steps_are_held_from_their_sample_on() -> None:
    (s,) = draw([STEP])
    assert s.n_samples == 20
    expected = [30.0] * 5 + [35.0] * 10 + [25.0] * 5
    assert s.setpoint[2, :, 0].tolist() == expected
    assert s.load[0, :, 0].tolist() == [0.0] * 10 + [-1.0] * 10
    assert s.measured.shape == (4, 20, 0)
    assert s.noise.shape == (4, 21, 2)


def test_silent_scenario_rests() -> None:
    (s,) = draw([Scenario(name="hold", duration_s=10.0)])
    assert (s.setpoint == 20.0).all()
    assert not s.load.any()


def test_groups_by_length_keep_scenario_and_seed() -> None:
    short, long = draw(
        [STEP, Scenario(name="b", duration_s=8.0), Scenario(name="c", duration_s=40)]
    )
    assert (short.n_samples, long.n_samples) == (4, 20)
    assert short.scenario.tolist() == [1] * 4
    assert long.scenario.tolist() == [0] * 4 + [2] * 4
    assert long.seed.tolist() == [0, 1, 2, 3] * 2
    assert long.names == ("step", "b", "c")


def test_a_stream_does_not_depend_on_its_company() -> None:
    (alone,) = draw([STEP], seeds=[3])
    _, crowd = draw([Scenario(name="b", duration_s=8.0), STEP])
    np.testing.assert_array_equal(alone.noise[0], crowd.noise[3])
    (numpy_seed,) = draw([STEP], seeds=np.arange(4))
    np.testing.assert_array_equal(numpy_seed.noise, crowd.noise)


def test_purposes_seeds_and_scenarios_have_their_own_noise() -> None:
    (a,) = draw([STEP])
    (b,) = draw([STEP], purpose="practice")
    (c,) = draw([STEP], seed=8)
    rows = [a.noise[0], a.noise[1], b.noise[0], c.noise[0]]
    for i, first in enumerate(rows):
        for second in rows[:i]:
            assert not np.isclose(first, second).any()
    assert abs(a.noise.mean()) < 4 / np.sqrt(a.noise.size)


def test_varied_steps_stay_in_their_range_and_differ_by_seed() -> None:
    steps = ((0, 30.0), (200, 40.0))
    varied = Scenario(name="v", duration_s=400.0, setpoint={"t": steps}, vary=0.5)
    (s,) = draw([varied], seeds=range(200))
    final = s.setpoint[:, -1, 0]
    assert (s.setpoint[:, 0, 0] == 30.0).all()
    assert 35.0 <= final.min() < 35.5
    assert 44.5 < final.max() <= 45.0
    when = (s.setpoint[:, :, 0] != 30.0).argmax(axis=1) * 2.0
    assert 180.0 <= when.min() < 182.0 + 2
    assert 218.0 - 2 < when.max() <= 220.0


def test_disturbance_record_is_replayed_in_blocks() -> None:
    record = np.arange(50.0)[:, None]
    (s,) = draw([STEP], disturbance=record, n_d=1)
    for row in s.measured[:, :, 0]:
        assert (np.diff(row) == 1).all()
    assert len({row[0] for row in s.measured[:, :, 0]}) > 1
    (held,) = draw([STEP], disturbance=np.array([[21.5]]), n_d=1)
    assert (held.measured == 21.5).all()
    (short,) = draw([STEP], disturbance=record[:7], n_d=1)
    assert (np.abs(np.diff(short.measured[:, :, 0])) <= 1).all()  # to and fro, without jumps


def test_no_noise_and_other_widths() -> None:
    (s,) = draw([STEP], noise=False)
    assert not s.noise.any()
    (s,) = draw([STEP], n_draws=5)
    assert s.noise.shape == (4, 21, 5)


@pytest.mark.parametrize(
    ("change", "message"),
    [
        ({"duration_s": 0.0}, "duration_s is 0.0"),
        ({"duration_s": float("nan")}, "duration_s is nan"),
        ({"vary": 1.0}, "vary is 1.0"),
        ({"setpoint": {"t": ()}}, "setpoint of 't' needs finite"),
        ({"setpoint": {"t": ((0.0, float("inf")),)}}, "setpoint of 't' needs finite"),
        ({"setpoint": {"t": ((5.0, 1.0), (5.0, 2.0))}}, r"times \[5.0, 5.0\]; they have to grow"),
        ({"input_disturbance": {"v": ((-1.0, 1.0),)}}, "input_disturbance of 'v' has times"),
    ],
)
def test_refused_scenarios(change: dict[str, Any], message: str) -> None:
    with pytest.raises(InputError, match=message):
        Scenario(**({"name": "x", "duration_s": 10.0} | change))


def test_refused_streams(make: SimpleNamespace) -> None:
    with pytest.raises(InputError, match="setpoint of 'p', but the outputs with a setpoint are"):
        draw([Scenario(name="x", duration_s=9, setpoint={"p": ((0, 1),)})])
    with pytest.raises(InputError, match="input_disturbance of 't', but the actuators are"):
        draw([Scenario(name="x", duration_s=9, input_disturbance={"t": ((0, 1),)})])
    with pytest.raises(InputError, match="share a name"):
        draw([STEP, STEP])
