"""The gymnasium environments: the contract, the traps, and equality with the engine."""

import copy
import json
import subprocess
import sys
import warnings
from pathlib import Path
from types import SimpleNamespace
from typing import Any

import gymnasium
import numpy as np
import pytest
from gymnasium.error import ResetNeeded
from gymnasium.utils.env_checker import check_env

import idlearn.envs  # noqa: F401 (registers the ids)
from idlearn.cost import Cost, CostTerm
from idlearn.envs import LinearPlant, Scenario, Streams, simulate
from idlearn.envs.loopenv import LoopEnv
from idlearn.errors import InputError
from idlearn.logs import Signal
from idlearn.models import Ensemble, InnovationsModel, save_model


@pytest.fixture
def tank(make: SimpleNamespace) -> InnovationsModel:
    """One lag around an operating point."""
    model: InnovationsModel = make.lag(
        u0=np.array([3.0]), y0=np.array([20.0]), sample_time_s=2.0, noise=0.2
    )
    return model


@pytest.fixture
def family(make: SimpleNamespace) -> dict[str, Any]:
    """One model of every kind that the environment has to take, by name."""
    rng = np.random.default_rng(8)
    lag: InnovationsModel = make.lag()
    return {
        "lag": lag,
        "two by two with a disturbance": make.random_model(rng, 4, 2, 1, 2),
        "integrating": make.model([[1.0]], [[0.1]], [[1]], [[0.4]], [[0.01]]),
        "unstable": make.model([[1.02]], [[0.1]], [[1]], [[0.4]], [[0.01]]),
        "load": lag.with_load(np.array([[0.1]])),
        "same sample": make.lag(D=np.array([[0.3]])),
        "no noise": make.lag(noise=0.0),
        "ensemble": make.ensemble(lag, make.lag(0.8, 3.0)),
    }


def made(name: str = "idlearn/Plant-v0", **kwargs: Any) -> gymnasium.Env[Any, Any]:
    return gymnasium.make(name, **kwargs)


def base(env: gymnasium.Env[Any, Any]) -> LoopEnv:
    bare = env.unwrapped
    assert isinstance(bare, LoopEnv)
    return bare


@pytest.mark.parametrize("checked", [True, False])
@pytest.mark.parametrize("scaled", [True, False])
def test_check_env_without_a_warning(tank: InnovationsModel, checked: bool, scaled: bool) -> None:
    for name, kwargs in (
        ("idlearn/Kiln-v0", {}),
        ("idlearn/Plant-v0", {"model": tank}),
        ("idlearn.envs:idlearn/Plant-v0", {"model": tank}),
    ):
        env = made(name, scaled=scaled, disable_env_checker=not checked, **kwargs)
        with warnings.catch_warnings(record=True) as caught:
            warnings.simplefilter("always")
            check_env(env.unwrapped)
        told = [str(w.message) for w in caught]
        if not scaled:  # the checker asks for symmetric actions, which units are not
            told = [t for t in told if "symmetric and normalized space" not in t]
        assert not told


def test_check_env_on_every_kind_of_model(family: dict[str, Any]) -> None:
    for model in family.values():
        check_env(made(model=model, disable_env_checker=True).unwrapped)  # warnings are errors


def test_random_steps_at_the_limits_stay_inside_the_spaces(family: dict[str, Any]) -> None:
    rng = np.random.default_rng(1)
    for name, model in family.items():
        env = base(made(model=model))
        seen, _ = env.reset(seed=4)
        held = np.ones(env.action_space.shape)
        for _ in range(1000):
            assert env.observation_space.contains(seen), name
            if rng.random() < 0.05:
                held = rng.choice([-1.0, 1.0], env.action_space.shape)
            seen, reward, terminated, truncated, _ = env.step(held)
            assert np.isfinite(reward), name
            if terminated or truncated:
                seen, _ = env.reset()


@pytest.mark.parametrize("latency", [0, 2])
def test_environment_and_engine_give_the_same_trajectory(
    make: SimpleNamespace, family: dict[str, Any], latency: int
) -> None:
    for name in ("two by two with a disturbance", "ensemble", "lag"):
        model = family[name]
        env = base(made(model=model, latency_samples=latency, scaled=False))
        loop, rng = env.setting.loop, np.random.default_rng(2)
        J = 0.05 * rng.standard_normal((loop.layout.n_u, loop.layout.n_obs))
        J[:, loop.layout.u] = 0.9 * np.eye(loop.layout.n_u)
        controller = make.gains(loop.layout, J)
        seen, _ = env.reset(seed=5)
        controller.reset(1)
        infos, rewards, ended = [], [], False
        while not ended:
            seen, reward, terminated, ended, info = env.step(controller.act(seen[None])[0])
            infos.append(info)
            rewards.append(reward)
            assert not terminated
        plants = model if isinstance(model, Ensemble) else make.ensemble(model)
        plant = LinearPlant(plants.take([env.plant_index]))
        got = simulate(plant, controller, env.streams, loop, record=True)
        assert got.y is not None
        assert got.u is not None
        np.testing.assert_allclose(got.y[0], [i["y"] for i in infos], rtol=1e-11, atol=1e-11)
        np.testing.assert_allclose(got.u[0], [i["applied"] for i in infos], rtol=1e-11, atol=1e-11)
        assert -np.mean(rewards) == pytest.approx(got.cost[0, 0], rel=1e-11)


def test_reward_is_minus_the_declared_cost(tank: InnovationsModel) -> None:
    costs = [
        Cost(name="other", terms=(CostTerm(kind="energy", signal="u1"),)),
        Cost(
            name="main",
            terms=(
                CostTerm(kind="tracking", signal="y1", scale=2.0),
                CostTerm(kind="move", signal="u1", weight=0.5, shape="absolute"),
                CostTerm(kind="tracking", signal="y1", weight=3.0),
            ),
            primary=True,
        ),
    ]
    env = made(model=tank, costs=costs)
    _, info = env.reset(seed=1)
    before = info["applied"]
    for _ in range(30):
        _, reward, _, _, info = env.step(env.action_space.sample())
        error, move = (info["y"] - info["setpoint"])[0], (info["applied"] - before)[0]
        by_hand = (error / 2) ** 2 + 0.5 * abs(move) + 3 * error**2
        assert reward == pytest.approx(-by_hand, rel=1e-12)
        assert reward == -info["cost"] == -info["costs"]["main"]
        assert info["costs"]["other"] == pytest.approx(info["applied"][0] ** 2, rel=1e-12)
        assert list(info["terms"]["main"]) == ["tracking y1", "move u1", "tracking y1 2"]
        assert sum(info["terms"]["main"].values()) == pytest.approx(info["cost"], rel=1e-12)
        before = info["applied"]


def test_trip_terminates_and_pays_for_the_rest(
    make: SimpleNamespace, tank: InnovationsModel
) -> None:
    signals = [
        Signal(name="valve", role="actuator", low=0.0, high=6.0),
        Signal(name="level", role="output", trip_high=23.0),
        Signal(name="level sp", role="setpoint"),
    ]
    env = base(made(model=tank, signals=signals))
    env.reset(seed=1)
    rewards, infos = [], []
    while True:
        _, reward, terminated, truncated, info = env.step(np.ones(1))  # fully open
        rewards.append(reward)
        infos.append(info)
        assert type(terminated) is bool
        assert type(truncated) is bool
        if terminated or truncated:
            break
    assert terminated
    assert not truncated
    assert infos[-1]["y"][0] > 23.0
    assert all(i["y"][0] <= 23.0 for i in infos[:-1])
    left = 200 - len(infos) + 1
    assert infos[-1]["charged_samples"] == left > 1
    got = simulate(
        LinearPlant(make.ensemble(tank)), make.gains(env.setting.loop.layout, [[0, 0, 99.0]]),
        env.streams, env.setting.loop,
    )  # fmt: skip
    # the engine freezes the cost at the trip: the rewards add up to the same
    assert got.tripped[0]
    assert -np.sum(rewards) / 200 == pytest.approx(got.cost[0, 0], rel=1e-11)
    with pytest.raises(ResetNeeded, match="call reset"):
        env.step(np.ones(1))


def test_actions_reach_the_limits_and_units(tank: InnovationsModel) -> None:
    signals = [
        Signal(name="valve", role="actuator", low=1.0, high=6.0),
        Signal(name="level", role="output"),  # without a setpoint
    ]
    scaled, plain = (
        made(model=tank, signals=signals),
        made(model=tank, signals=signals, scaled=False),
    )
    for action, unit in ((1.0, 6.0), (-1.0, 1.0), (0.0, 3.5), (0.5, 4.75)):
        seen = []
        for env, value in ((scaled, action), (plain, unit)):
            env.reset(seed=3)
            observation, _, _, _, info = env.step(np.array([value]))
            assert info["requested"][0] == info["applied"][0] == unit
            seen.append(observation)
        np.testing.assert_array_equal(*seen)
    assert plain.action_space.low.tolist() == [1.0]  # type: ignore[attr-defined]
    # beyond the space: the actuator clips, as on the plant
    scaled.reset(seed=3)
    _, _, _, _, info = scaled.step(np.array([3.0]))
    assert (info["requested"][0], info["applied"][0]) == (11.0, 6.0)


def test_observation_columns(family: dict[str, Any]) -> None:
    env = base(made(model=family["two by two with a disturbance"]))
    seen, info = env.reset(seed=2)
    layout = env.setting.loop.layout
    assert seen.shape == (7,)
    np.testing.assert_array_equal(seen[layout.y], info["y"])
    np.testing.assert_array_equal(seen[layout.setpoint], info["setpoint"])
    np.testing.assert_array_equal(seen[layout.u], info["applied"])
    u0 = family["two by two with a disturbance"].u0
    np.testing.assert_allclose(seen[layout.disturbance], u0[2:])  # held at the operating point


def test_same_seed_same_episode_other_seed_other_episode(family: dict[str, Any]) -> None:
    def run(seed: int | None, env: gymnasium.Env[Any, Any]) -> np.ndarray:
        rows = [env.reset(seed=seed)[0]]
        rows += [env.step(np.full(1, 0.1))[0] for _ in range(20)]
        return np.array(rows)

    env = made(model=family["ensemble"])
    first = run(5, env)
    np.testing.assert_array_equal(first, run(5, made(model=family["ensemble"])))
    others = [run(s, env) for s in (6, None, 7)]
    for a in others:
        assert not np.array_equal(a, first)
    np.random.seed(3)  # noqa: NPY002 (the global generator must not matter)
    np.testing.assert_array_equal(first, run(5, env))


def test_ensemble_draws_every_plant(family: dict[str, Any]) -> None:
    env = base(made(model=family["ensemble"]))
    env.reset(seed=1)
    drawn = set()
    for _ in range(40):
        env.reset()
        drawn.add(env.plant_index)
    assert drawn == {0, 1}


def test_options_choose_and_leave_the_callers_dict_alone(family: dict[str, Any]) -> None:
    scenarios = [
        Scenario(name="a", duration_s=30.0, setpoint={"y1": ((0, 1.0),)}),
        Scenario(name="b", duration_s=50.0, setpoint={"y1": ((0, 2.0),)}),
    ]
    env = base(made(model=family["ensemble"], scenarios=scenarios))
    options = {"scenario": "b", "plant": 1}
    kept = copy.deepcopy(options)
    for _ in range(5):
        _, info = env.reset(options=options)
        assert (info["scenario"], info["plant"], info["setpoint"][0]) == ("b", 1.0, 2.0)
    assert options == kept
    own: Streams = env.streams
    env.reset(seed=9, options={"streams": own})
    np.testing.assert_array_equal(env.streams.noise, own.noise)
    for bad, message in (
        ({"scenario": "c"}, "scenario 'c' is not there"),
        ({"plant": 2}, "plant 2 is not there"),
        ({"speed": 1}, "reset option 'speed' is not known"),
        ({"streams": own.take(np.array([0, 0]))}, "2 streams were given"),
    ):
        with pytest.raises(InputError, match=message):
            env.reset(options=bad)


def test_every_call_returns_new_objects(tank: InnovationsModel) -> None:
    env = base(made(model=tank, scaled=False))
    o0, i0 = env.reset(seed=1)
    kept = copy.deepcopy((o0, i0))
    steps = [env.step(np.array([3.0])) for _ in range(3)]
    np.testing.assert_array_equal(o0, kept[0])
    np.testing.assert_array_equal(i0["y"], kept[1]["y"])
    assert len({id(s[0]) for s in steps}) == 3
    assert len({id(s[4]["terms"]) for s in steps}) == 3
    o0[:] = -1e9  # writing into what was returned must not reach the plant
    i0["applied"][:] = -1e9
    clean = base(made(model=tank, scaled=False))
    clean.reset(seed=1)
    for s in steps:
        np.testing.assert_array_equal(clean.step(np.array([3.0]))[0], s[0])


def test_numbers_in_info_are_floats_so_that_vectors_keep_them(tank: InnovationsModel) -> None:
    def numbers(value: Any) -> Any:
        if isinstance(value, dict):
            for v in value.values():
                yield from numbers(v)
        elif not isinstance(value, str):
            yield value

    env = made(model=tank)
    _, info = env.reset(seed=1)
    for found in numbers(info):
        assert type(found) is float or (isinstance(found, np.ndarray) and found.dtype == float)
    vector = gymnasium.make_vec("idlearn/Plant-v0", num_envs=3, model=tank)
    vector.reset(seed=[1, 2, 3])
    _, rewards, _, _, infos = vector.step(np.full((3, 1), 0.5))
    np.testing.assert_allclose(infos["cost"], -rewards)
    assert infos["applied"].shape == (3, 1)


def test_model_files_signals_and_disturbances(
    make: SimpleNamespace, tmp_path: Path, tank: InnovationsModel
) -> None:
    path = tmp_path / "x.npz"
    save_model(tank, path, {"signals": [
        {"name": "valve", "role": "actuator", "low": 0.0, "high": 8.0, "unit": "%"},
        {"name": "level", "role": "output", "unit": "m", "trip_high": 90.0},
        {"name": "sp", "role": "setpoint", "of": "level"},
    ]})  # fmt: skip
    env = base(made(model=str(path)))
    assert [s.name for s in env.setting.signals] == ["valve", "level", "sp"]
    assert env.observation_space.high[0] > 90.0  # type: ignore[attr-defined]
    assert json.loads(env.spec.to_json())["kwargs"]["model"] == str(path)  # type: ignore[union-attr]
    save_model(tank, path)
    assert base(made(model=path)).setting.signals[0].name == "u1"
    with pytest.raises(InputError, match="does not exist"):
        made(model=tmp_path / "no.npz")
    with pytest.raises(InputError, match="model is a int"):
        made(model=3)
    with pytest.raises(InputError, match="hold 2 actuators, 1 outputs"):
        made(model=tank, signals=[Signal(name=n, role="actuator") for n in "ab"]
             + [Signal(name="y", role="output")])  # fmt: skip
    both = make.random_model(np.random.default_rng(1), 2, 1, 1, 1)
    with pytest.raises(InputError, match=r"disturbance has shape \(5,\)"):
        made(model=both, disturbance=np.zeros(5))
    env = base(made(model=both, disturbance=np.linspace(4.0, 5.0, 500)[:, None]))
    seen, _ = env.reset(seed=1)
    assert 4.0 <= seen[2] <= 5.0


def test_wrong_calls(tank: InnovationsModel) -> None:
    env = base(made(model=tank))
    with pytest.raises(ResetNeeded, match="none was started"):
        env.step(np.ones(1))
    env.reset(seed=1)
    with pytest.raises(InputError, match=r"the action has shape \(2,\); \(1,\) is needed"):
        env.step(np.ones(2))
    with pytest.raises(InputError, match="render_mode is 'human'"):
        LoopEnv(env.setting, render_mode="human")
    with pytest.raises(InputError, match="latency_samples is -1"):
        made(model=tank, latency_samples=-1)


def test_strip_shows_where_everything_stands() -> None:
    env = made("idlearn/Kiln-v0", render_mode="ansi")
    env.reset(seed=1, options={"scenario": "setpoint steps"})
    for _ in range(30):
        env.step(np.ones(1))  # far above the setpoint after 600 s
    line = env.render()
    assert isinstance(line, str)
    assert line.startswith("   600.0 s  temperature")
    assert "degC" in line
    assert "heater       100 %" in line
    assert "#" * 24 in line
    assert line.count("o") == line.count("|") == 1
    assert "\n" not in line


def test_kiln_follows_a_simple_controller() -> None:
    env = base(made("idlearn/Kiln-v0", scaled=False))
    seen, info = env.reset(seed=2, options={"scenario": "setpoint steps"})
    u, costs = info["applied"][0], []
    last = 0.0
    while True:
        error = seen[1] - seen[0]
        u = float(np.clip(u + 0.8 * (error - last) + 0.8 * 20 / 1000 * error, 0, 100))
        last = error
        seen, _, terminated, truncated, info = env.step(np.array([u]))
        costs.append(info["cost"])
        if truncated or terminated:
            break
    assert truncated
    assert len(costs) == 360
    assert abs(error) < 8.0
    idle = 0.0
    env.reset(seed=2, options={"scenario": "setpoint steps"})
    while True:
        _, _, terminated, truncated, held = env.step(info["applied"] * 0 + 65.0)
        idle += held["cost"]
        if terminated or truncated:
            break
    assert np.sum(costs) < 0.5 * idle


def test_importing_the_package_alone_loads_no_gymnasium() -> None:
    code = (
        "import sys, idlearn; assert 'gymnasium' not in sys.modules;"
        "import idlearn.envs; import gymnasium;"
        "assert 'idlearn.envs.gym' not in sys.modules;"
        "bad = {'torch', 'matplotlib', 'pandas', 'numba', 'scipy.stats'} & set(sys.modules);"
        "assert not bad, bad;"
        "env = gymnasium.make('idlearn/Kiln-v0'); env.reset(seed=1)"
    )
    root = Path(__file__).resolve().parents[2]
    done = subprocess.run(
        [sys.executable, "-c", code], cwd=root, capture_output=True, text=True, check=False
    )
    assert done.returncode == 0, done.stderr
