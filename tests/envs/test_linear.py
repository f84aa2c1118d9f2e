"""Linear plants: rest, layout, stress, and what they refuse."""

from types import SimpleNamespace

import numpy as np
import pytest

from idlearn.envs import LinearPlant, Plant, RestingPlant, SharedDraws
from idlearn.envs.resting import reachable
from idlearn.errors import InputError

QUIET = np.random.default_rng(0)


def rest(plant: LinearPlant, y: list[float], d: list[float], low: float, high: float) -> tuple:
    """Return state and input of the first episode at rest."""
    n, n_a = plant.n, plant.n_actuators
    state, u = plant.rest(
        n, np.tile(y, (n, 1)), np.tile(np.array(d, dtype=float), (n, 1)),
        np.full(n_a, low), np.full(n_a, high), QUIET,
    )  # fmt: skip
    return state, u


def stays(plant: LinearPlant, state: object, u: np.ndarray, d: list[float]) -> float:
    """Return how far 500 samples at u move the noise-free output."""
    held = np.concatenate([u, np.tile(np.array(d, dtype=float), (len(u), 1))], axis=1)
    first = plant.measure(state, QUIET)  # type: ignore[arg-type]
    far = 0.0
    for _ in range(500):
        state = plant.advance(state, held, QUIET)  # type: ignore[arg-type]
        far = max(far, float(np.abs(plant.measure(state, QUIET) - first).max()))
    return far


def test_linear_plant_is_a_plant(make: SimpleNamespace) -> None:
    plant = LinearPlant(make.ensemble(make.lag()))
    assert isinstance(plant, Plant)
    assert isinstance(plant, RestingPlant)


def test_rest_of_self_regulating_plants(make: SimpleNamespace) -> None:
    rng = np.random.default_rng(3)
    models = [make.random_model(rng, n_x, 2, 1, 2) for n_x in (2, 5, 4)]
    plant = LinearPlant(make.ensemble(*models), repeats=2, noise=0.0)
    state, u = rest(plant, [3.0, -2.0], [0.7], -1e9, 1e9)
    np.testing.assert_allclose(plant.measure(state, QUIET), np.tile([3.0, -2.0], (6, 1)), atol=1e-8)
    for i, m in enumerate(models):  # the inverse of the steady gain says the same
        gain = m.C @ np.linalg.solve(np.eye(m.n_x) - m.A, m.B)
        left = np.array([3.0, -2.0]) - m.y0 - gain[:, 2:] @ (np.array([0.7]) - m.u0[2:])
        np.testing.assert_allclose(
            u[2 * i], m.u0[:2] + np.linalg.solve(gain[:, :2], left), rtol=1e-8, atol=1e-8
        )
    assert stays(plant, state, u, [0.7]) < 1e-8


def test_rest_of_an_integrating_plant(make: SimpleNamespace) -> None:
    # level y with pump lag: x1+ = x1 + 0.1 x2, x2+ = 0.5 x2 + 0.5 (u - 4)
    tank = make.model(
        [[1, 0.1], [0, 0.5]], [[0], [0.5]], [[1, 0]], [[0.3], [0]], [[0.01]],
        u0=np.array([4.0]), y0=np.array([50.0]),
    )  # fmt: skip
    plant = LinearPlant(make.ensemble(tank), noise=0.0)
    state, u = rest(plant, [80.0], [], 0.0, 10.0)
    assert u[0, 0] == pytest.approx(4.0, abs=1e-9)
    assert plant.measure(state, QUIET)[0, 0] == pytest.approx(80.0, abs=1e-9)
    assert stays(plant, state, u, []) < 1e-8


def test_rest_leaves_integrating_loads_at_zero(make: SimpleNamespace) -> None:
    # a load state could hold half of the output; then the actuator would start at half
    loaded = make.lag(gain=2.0).with_load(np.array([[0.1]]))
    plant = LinearPlant(make.ensemble(loaded), noise=0.0)
    state, u = rest(plant, [3.0], [], -10.0, 10.0)
    assert u[0, 0] == pytest.approx(1.5, abs=1e-9)
    assert state.x[0, 1] == 0.0
    # nor where the limit stops the actuator: rest at the limit, load still zero
    state, u = rest(plant, [30.0], [], -10.0, 10.0)
    assert u[0, 0] == 10.0
    assert state.x[0, 1] == 0.0
    assert plant.measure(state, QUIET)[0, 0] == pytest.approx(20.0, abs=1e-8)


def test_rest_at_a_limit(make: SimpleNamespace) -> None:
    plant = LinearPlant(make.ensemble(make.lag(gain=2.0), make.lag(gain=5.0)), noise=0.0)
    state, u = rest(plant, [3.0], [], 0.0, 1.0)
    np.testing.assert_allclose(u[:, 0], [1.0, 0.6], atol=1e-12)
    np.testing.assert_allclose(plant.measure(state, QUIET)[:, 0], [2.0, 3.0], atol=1e-9)
    assert stays(plant, state, u, []) < 1e-9


def test_integrating_plant_that_its_limits_cannot_hold_starts_at_the_setpoint(
    make: SimpleNamespace,
) -> None:
    tank = make.model([[1.0]], [[0.1]], [[1]], [[0.3]], [[0.01]], u0=np.array([4.0]))
    plant = LinearPlant(make.ensemble(tank), noise=0.0)
    state, u = rest(plant, [7.0], [], 5.0, 10.0)  # held by u = 4, which is out of reach
    assert u[0, 0] == 5.0
    assert plant.measure(state, QUIET)[0, 0] == pytest.approx(7.0, abs=1e-9)


def test_rest_with_outputs_nobody_asks_for_and_tiny_units(make: SimpleNamespace) -> None:
    # second output free; the actuator in units that make its effect 1e-9
    m = make.model(
        [[0.9, 0], [0.2, 0.7]], [[1e-9], [0]], [[1, 0], [0, 1]], np.zeros((2, 2)), np.zeros((2, 2))
    )
    plant = LinearPlant(make.ensemble(m))
    state, u = rest(plant, [2.0, np.nan], [], -1e12, 1e12)
    assert u[0, 0] == pytest.approx(2.0 * 0.1 / 1e-9, rel=1e-9)
    np.testing.assert_allclose(plant.measure(state, QUIET)[0], [2.0, 2.0 * 0.2 / 0.3], rtol=1e-9)


def test_more_setpoints_than_actuators_still_rests(make: SimpleNamespace) -> None:
    m = make.model([[0.9, 0], [0, 0.8]], [[0.1], [0.2]], np.eye(2), np.zeros((2, 2)), np.eye(2))
    plant = LinearPlant(make.ensemble(m), noise=0.0)
    state, u = rest(plant, [1.0, 2.0], [], -9.0, 9.0)
    assert 1.0 < u[0, 0] < 2.0  # both gains are 1: something between the two
    assert stays(plant, state, u, []) < 1e-6


def test_reachable_states() -> None:
    A = np.diag([0.9, 0.8, 1.0])
    assert reachable(A, np.array([[1.0], [1.0], [0.0]])).shape == (3, 2)
    basis = reachable(A, np.array([[1e-12], [0.0], [0.0]]))
    np.testing.assert_allclose(np.abs(basis[:, 0]), [1, 0, 0])
    assert reachable(A, np.zeros((3, 1))).shape == (3, 0)
    delay = np.diag(np.ones(9), 1)  # ten samples of dead time: all of them are reached
    assert reachable(delay, np.eye(10)[:, 9:]).shape == (10, 10)


def test_stress_scales_gain_and_noise(make: SimpleNamespace) -> None:
    kept = make.ensemble(make.lag(0.9), make.lag(0.7))
    noise = np.random.default_rng(1).standard_normal((2, 3, 1))
    u = np.array([[1.0], [1.0]])

    def second(**stress: float) -> tuple[np.ndarray, np.ndarray]:
        plant, draws = LinearPlant(kept, **stress), SharedDraws(noise)
        first = plant.start(2, draws)
        return plant.measure(first, draws), plant.measure(plant.advance(first, u, draws), draws)

    (a0, a1), (b0, b1) = second(), second(noise=2.0)
    np.testing.assert_allclose(b0, 2 * a0, rtol=1e-15)
    np.testing.assert_allclose(b1 - a1, a1 - second(noise=0.0)[1], rtol=1e-12)
    c1 = second(gain=1.3)[1]
    np.testing.assert_allclose(c1 - a1, 0.3 * np.array([[0.2], [0.6]]), rtol=1e-12)
    # a measured disturbance keeps its effect
    m = make.model([[0.5]], [[1.0, 1.0]], [[1.0]], [[0.0]], [[0.0]], n_actuators=1)
    plant, draws = LinearPlant(make.ensemble(m), gain=1.3), SharedDraws(noise[:1])
    after = plant.advance(plant.start(1, draws), np.array([[1.0, 1.0]]), draws)
    assert plant.measure(after, draws)[0, 0] == pytest.approx(2.3, rel=1e-12)


def test_noise_of_several_outputs_has_the_covariance(make: SimpleNamespace) -> None:
    # rank 1: both outputs carry the same noise, which a triangular factor would refuse
    S = [[4.0, 2.0], [2.0, 1.0]]
    m = make.model([[0.0]], [[1.0]], [[0.0], [0.0]], [[0.0, 0.0]], S)
    plant = LinearPlant(make.ensemble(m), repeats=20000)
    e = plant.start(20000, np.random.default_rng(2)).e
    np.testing.assert_allclose(e[:, 0], 2 * e[:, 1], atol=1e-7)
    np.testing.assert_allclose(np.cov(e.T), S, rtol=4 * np.sqrt(2 / 20000))  # 4 standard errors


def test_refused_plants(make: SimpleNamespace) -> None:
    direct = make.lag(D=np.array([[0.1]]))
    with pytest.raises(InputError, match="moves the output in the same sample"):
        LinearPlant(make.ensemble(direct))
    with pytest.raises(InputError, match="no covariance"):
        LinearPlant(make.ensemble(make.model([[0.5]], [[1]], [[1]], [[0]], [[-1.0]])))
    with pytest.raises(InputError, match="3 episodes asked for; members times repeats make 4"):
        LinearPlant(make.ensemble(make.lag(), make.lag()), repeats=2).start(3, QUIET)


def test_repeated_shares_the_plants(make: SimpleNamespace) -> None:
    plant = LinearPlant(make.ensemble(make.lag(), make.lag(0.8)))
    more = plant.repeated(3)
    assert (plant.n, more.n) == (2, 6)
    fresh = LinearPlant(plant.ensemble, repeats=3)
    draws = np.random.default_rng(4), np.random.default_rng(4)
    a, b = (p.advance(p.start(6, r), np.ones((6, 1)), r) for p, r in zip((more, fresh), draws))  # noqa: B905
    np.testing.assert_array_equal(a.y, b.y)
