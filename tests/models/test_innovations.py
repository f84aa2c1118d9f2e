"""The innovations form against plain recursions."""

import numpy as np
import pytest
from numpy.testing import assert_allclose

from idlearn.errors import InputError
from idlearn.logs import PlantLog
from idlearn.models import InnovationsModel

RNG = np.random.default_rng


def any_model(seed: int = 0, n_x: int = 3, n_in: int = 2, n_y: int = 2) -> InnovationsModel:
    rng = RNG(seed)
    A = rng.standard_normal((n_x, n_x))
    A *= 0.8 / np.abs(np.linalg.eigvals(A)).max()
    return InnovationsModel(
        A=A, B=rng.standard_normal((n_x, n_in)), C=rng.standard_normal((n_y, n_x)),
        D=rng.standard_normal((n_y, n_in)), K=0.1 * rng.standard_normal((n_x, n_y)),
        S=np.eye(n_y), u0=rng.standard_normal(n_in), y0=rng.standard_normal(n_y),
        sample_time_s=2.0, n_actuators=1,
    )  # fmt: skip


def recursion(m: InnovationsModel, x: np.ndarray, u: np.ndarray, e: np.ndarray) -> np.ndarray:
    out = []
    for k in range(len(u)):
        v = u[k] - m.u0
        out.append(m.y0 + m.C @ x + m.D @ v + e[k])
        x = m.A @ x + m.B @ v + m.K @ e[k]
    return np.array(out)


def test_free_run_starts_at_rest_or_from_the_warm_up() -> None:
    m, rng = any_model(), RNG(1)
    u = rng.standard_normal((60, 2))
    u[:3] = u[0]
    still = np.zeros((60, 2))
    rest = np.linalg.solve(np.eye(3) - m.A, m.B @ (u[0] - m.u0))
    assert_allclose(m.free_run(u), recursion(m, rest, u, still), rtol=0, atol=1e-10)
    start = rng.standard_normal(3)
    truth = recursion(m, start, u, still)
    assert_allclose(m.free_run(u, truth[:4]), truth, rtol=0, atol=1e-8)


def test_predictions_against_the_recursion() -> None:
    """With noise-free start known, one-step errors are the innovations that were put in."""
    m, rng = any_model(), RNG(2)
    u, e = rng.standard_normal((400, 2)), 0.1 * rng.standard_normal((400, 2))
    log = PlantLog.from_arrays(u=u, y=recursion(m, np.zeros(3), u, e), sample_time_s=2.0)
    late = slice(150, None)  # the unknown start has died away
    assert_allclose((log.y - m.one_step(log))[late], e[late], rtol=0, atol=1e-6)
    assert_allclose(m.k_step(log, 1)[late], m.one_step(log)[late], rtol=0, atol=1e-6)
    # k steps ahead: the innovations of the last k samples are missing
    k = 4
    missing = np.zeros((400, 2))
    for i in range(200, 400):
        x = np.zeros(3)
        for j in range(i - k + 1, i):
            x = m.A @ x + m.K @ e[j]
        missing[i] = m.C @ x + e[i]
    assert_allclose((log.y - m.k_step(log, k))[200:], missing[200:], rtol=0, atol=1e-6)


def test_responses_agree_with_each_other() -> None:
    m = any_model()
    steps = m.step_response(400)
    assert_allclose(steps[-1], m.dc_gain(), rtol=0, atol=1e-8)
    pulses = np.diff(steps, axis=0, prepend=np.zeros((1, 2, 2)))
    w = np.array([0.1, 1.0, 3.0])
    direct = np.einsum("kij,wk->wij", pulses, np.exp(-1j * np.outer(w, np.arange(400))))
    assert_allclose(m.frequency_response(w), direct, rtol=0, atol=1e-8)


def test_segments_are_predicted_on_their_own() -> None:
    m, rng = any_model(), RNG(4)
    u, e = rng.standard_normal((300, 2)), 0.1 * rng.standard_normal((300, 2))
    y = recursion(m, np.zeros(3), u, e)
    y[150:] = recursion(m, np.array([5.0, -5.0, 5.0]), u[150:], e[150:])
    pieces = [(0, 140), (150, 298), (298, 300)]
    log = PlantLog.from_arrays(u=u, y=y, sample_time_s=2.0, segments=pieces)
    one, ahead = m.one_step(log), m.k_step(log, 3)
    alone = PlantLog.from_arrays(u=u[150:298], y=y[150:298], sample_time_s=2.0)
    assert_allclose(one[150:298], m.one_step(alone), rtol=0, atol=1e-12)
    assert_allclose(ahead[153:298], m.k_step(alone, 3)[3:], rtol=0, atol=1e-12)
    assert np.isnan(one[140:150]).all()
    assert np.isfinite(one[298:]).all()
    assert np.isnan(ahead[[0, 1, 2, 150, 151, 152, 298, 299]]).all()
    assert np.isfinite(ahead[3:140]).all()


def test_horizon_of_predictions_beyond_a_segment() -> None:
    m = any_model()
    log = PlantLog.from_arrays(u=np.zeros((8, 2)), y=np.zeros((8, 2)), sample_time_s=2.0)
    assert np.isnan(m.k_step(log, 8)).all()
    assert np.isfinite(m.k_step(log, 7)[7]).all()


def test_poles_and_rest() -> None:
    m = any_model()
    den = np.array([1.0, -1.5, 0.7])
    two = InnovationsModel(
        A=np.array([[-den[1], 1.0], [-den[2], 0.0]]), B=np.array([[1.0], [0.5]]), C=np.eye(1, 2),
        D=np.zeros((1, 1)), K=np.zeros((2, 1)), S=np.eye(1), u0=np.array([3.0]),
        y0=np.array([10.0]), sample_time_s=1.0,
    )  # fmt: skip
    assert_allclose(np.sort_complex(two.poles()), [0.75 - 0.370810j, 0.75 + 0.370810j], atol=1e-6)
    assert two.spectral_radius() == pytest.approx(np.sqrt(0.7))
    assert two.n_actuators == 1
    # 1.5 / 0.2 is the gain; 2 units of input above the operating point
    assert_allclose(two.free_run(np.full((4, 1), 5.0)), np.full((4, 1), 25.0), rtol=1e-12)
    assert m.linearise() is m


@pytest.mark.parametrize("pole", [1.0, 1 - 1e-15, 1 + 1e-15])
def test_a_gain_without_end(pole: float) -> None:
    m = InnovationsModel(
        A=np.array([[pole]]), B=np.eye(1), C=np.eye(1), D=np.zeros((1, 1)), K=np.eye(1),
        S=np.eye(1), u0=np.zeros(1), y0=np.zeros(1), sample_time_s=1.0,
    )  # fmt: skip
    assert np.isinf(m.dc_gain()).all()


@pytest.mark.parametrize("lift", [0, 1])
def test_without_feedthrough_is_the_same_plant_one_sample_late(lift: int) -> None:
    """From equal starts the outputs are equal, sample for sample, noise included."""
    m, rng = any_model(), RNG(3)
    late = m.without_feedthrough()
    assert not late.D.any()
    assert late.without_feedthrough() is late
    u, e = rng.standard_normal((50, 2)), lift * rng.standard_normal((50, 2))
    start = rng.standard_normal(3)
    # the decision that is late[k] = u[k + 1]; the first one waits in the added states
    now = np.concatenate([start, u[0] - m.u0])
    shifted = np.concatenate([u[1:], u[-1:]])
    assert_allclose(recursion(late, now, shifted, e), recursion(m, start, u, e), rtol=0, atol=1e-12)
    assert_allclose(late.dc_gain(), m.dc_gain(), rtol=0, atol=1e-12)
    w = np.array([0.2, 1.5])
    turned = m.frequency_response(w) * np.exp(-1j * w)[:, None, None]
    assert_allclose(late.frequency_response(w), turned, rtol=0, atol=1e-12)


def test_a_load_enters_where_the_actuator_does() -> None:
    m = any_model().without_feedthrough()
    loaded = m.with_load(np.array([[0.5, -0.2]]))
    assert loaded.n_x == m.n_x + 1
    assert_allclose(loaded.dc_gain(), m.dc_gain(), rtol=0, atol=1e-9)  # no input reaches it
    u = np.tile(m.u0, (200, 1))
    pushed = u.copy()
    pushed[:, 0] += 2.0
    x = np.zeros(loaded.n_x)
    x[-1] = 2.0
    still = np.zeros((200, 2))
    assert_allclose(
        recursion(loaded, x, u, still), recursion(m, np.zeros(m.n_x), pushed, still), atol=1e-9
    )


@pytest.mark.parametrize("pole", [1.0, 0.9])
def test_a_load_is_moved_by_the_innovations(pole: float) -> None:
    """The load is the sum of gain * e, forgotten by `pole`, and adds to the first actuator."""
    m, rng = any_model(), RNG(5)
    gain = np.array([[0.5, -0.2]])
    u, e = rng.standard_normal((80, 2)), rng.standard_normal((80, 2))
    load, loads = 0.0, []
    for k in range(80):
        loads.append(load)
        load = pole * load + float(gain[0] @ e[k])
    pushed = u.copy()
    pushed[:, 0] += loads
    loaded = m.with_load(gain, pole)
    assert_allclose(
        recursion(loaded, np.zeros(4), u, e), recursion(m, np.zeros(3), pushed, e), atol=1e-10
    )


def test_wrong_shapes_are_named() -> None:
    m = any_model()
    with pytest.raises(InputError, match=r"time-major \(N, 2\)"):
        m.free_run(np.zeros(5))
    with pytest.raises(InputError, match="warm_up has shape"):
        m.free_run(np.zeros((5, 2)), np.zeros((2, 1)))
    with pytest.raises(InputError, match="B has shape"):
        InnovationsModel(
            A=np.eye(2), B=np.zeros((3, 1)), C=np.zeros((1, 2)), D=np.zeros((1, 1)),
            K=np.zeros((2, 1)), S=np.eye(1), u0=np.zeros(1), y0=np.zeros(1), sample_time_s=1.0,
        )  # fmt: skip


def test_models_cannot_be_changed() -> None:
    m = any_model()
    with pytest.raises(ValueError, match="read-only"):
        m.A[0, 0] = 1.0
    with pytest.raises(AttributeError, match="cannot assign"):
        m.sample_time_s = 2.0  # type: ignore[misc]
