"""The innovations form against plain recursions."""

from pathlib import Path

import numpy as np
import pytest
from numpy.testing import assert_allclose

from idlearn.errors import InputError
from idlearn.identification import ArmaxEstimator, ArxEstimator
from idlearn.logs import PlantLog
from idlearn.models import (
    ArxModel,
    Ensemble,
    InnovationsModel,
    load_model,
    read_extra,
    save_model,
)

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


def test_without_feedthrough_is_the_same_plant_one_sample_late() -> None:
    m, u = any_model(), RNG(3).standard_normal((50, 2))
    late = m.without_feedthrough()
    assert not late.D.any()
    shifted = np.concatenate([u[1:], u[-1:]])
    # after the different starts have died away they are equal
    assert_allclose(late.free_run(shifted)[45:], m.free_run(u)[45:], rtol=0, atol=2e-3)
    plain = late.without_feedthrough()
    assert plain is late


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


def difference_equation(m: ArxModel, u: np.ndarray, e: np.ndarray) -> np.ndarray:
    """Run A y = B u + C e, differenced if integrated, in deviations from rest at zero."""
    a = m.a if m.n_y > 1 else m.a[None, None]
    b = m.b if m.n_y > 1 else m.b[None]
    n_y, y = m.n_y, np.zeros((len(u), m.n_y))
    for k in range(len(u)):
        now = e[k].copy()
        for i in range(m.n_a):
            if k > i:
                now -= a[:, :, i] @ y[k - i - 1]
        for j in range(u.shape[1]):
            for i in range(m.n_b[j]):
                if k >= m.n_k[j] + i:
                    now += b[:, j, i] * u[k - m.n_k[j] - i, j]
        for i, c in enumerate(m.c):
            if k > i:
                now += c * e[k - i - 1]
        y[k] = now
    del n_y
    return y


def arx(n_y: int, n_b: tuple[int, ...], n_k: tuple[int, ...], n_c: int = 0,
        integrated: bool = False, seed: int = 4) -> ArxModel:  # fmt: skip
    rng = RNG(seed)
    p = 2 * n_y + sum(n_b) + n_c
    theta = 0.2 * rng.standard_normal((p, n_y))
    return ArxModel(
        theta=theta, factor=1e-3 * np.eye(p), S=np.eye(n_y), n_a=2, n_b=n_b, n_k=n_k,
        u_mean=np.zeros(len(n_b)), y_mean=np.zeros(n_y), constant=False, freedom=500,
        sample_time_s=1.0, n_actuators=len(n_b), n_c=n_c, integrated=integrated,
    )  # fmt: skip


@pytest.mark.parametrize(
    "model",
    [
        arx(1, (2,), (1,)),
        arx(1, (3,), (0,)),
        arx(1, (2, 1), (3, 0)),
        arx(2, (2, 2), (1, 4)),
        arx(1, (2,), (2,), n_c=3),
    ],
)
def test_linearise_is_the_difference_equation(model: ArxModel) -> None:
    rng = RNG(5)
    u, e = rng.standard_normal((80, model.n_in)), rng.standard_normal((80, model.n_y))
    m = model.linearise()
    y = recursion(m, np.zeros(m.n_x), u, e)
    assert_allclose(y, difference_equation(model, u, e), rtol=0, atol=1e-10)


def test_an_integrated_model_is_the_equation_of_differences() -> None:
    model, rng = arx(1, (2,), (2,), n_c=2, integrated=True), RNG(6)
    u, e = rng.standard_normal((80, 1)), rng.standard_normal((80, 1))
    m = model.linearise()
    y = recursion(m, np.zeros(m.n_x), u, e)
    moves = np.diff(u, axis=0, prepend=np.zeros((1, 1)))
    assert_allclose(np.cumsum(difference_equation(model, moves, e), axis=0), y, atol=1e-9)
    assert np.isfinite(m.dc_gain()).all()  # the integrator belongs to the noise


def test_draws_have_the_spread_of_the_posterior() -> None:
    rng = RNG(7)
    u = rng.standard_normal((600, 1))
    y = np.zeros((600, 1))
    for k in range(2, 600):
        y[k] = 0.7 * y[k - 1] + u[k - 2] + rng.standard_normal()
    model = ArxEstimator(n_a=1, n_b=1, n_k=2).fit(
        PlantLog.from_arrays(u=u, y=y, sample_time_s=1.0)
    ).model  # fmt: skip
    plants = model.sample(4000, RNG(8))
    assert len(plants) == 4000
    a = plants.A[:, 0, 0]  # -a_1 in companion form
    assert a.mean() == pytest.approx(-model.a[0], abs=4 * np.sqrt(model.covariance[0, 0] / 4000))
    assert a.std() == pytest.approx(np.sqrt(model.covariance[0, 0]), rel=0.06)


def test_unstable_draws_are_counted_and_drawn_again() -> None:
    model = arx(1, (1,), (1,))
    near = ArxModel(**{**vars(model), "theta": np.array([[-0.99], [0.0], [0.1]]),
                       "factor": np.diag([0.02, 1e-6, 1e-3])})  # fmt: skip
    plants = near.sample(200, RNG(1))
    assert plants.unstable_dropped > 10
    radius = [np.abs(np.linalg.eigvals(A)).max() for A in plants.A]
    assert max(radius) <= 1 + 2e-6


def test_ensembles_pad_without_effect_and_run_side_by_side() -> None:
    small, large = any_model(1, n_x=2), any_model(2, n_x=4)
    e = Ensemble.from_models([small, large], ["a", "b"])
    u = RNG(9).standard_normal((40, 2))
    for i, m in enumerate((small, large)):
        assert_allclose(e.member(i).free_run(u, m.free_run(u)[:10]), m.free_run(u), atol=1e-7)
        v = u - m.u0
        side = e.outputs(np.zeros((2, 4)), v)[i] + m.y0
        assert_allclose(side, recursion(m, np.zeros(m.n_x), u, np.zeros((40, 2))), atol=1e-10)
    again = Ensemble.concat([e.take([1]), e.take([0])])
    assert again.labels == ("b", "a")
    with pytest.raises(InputError, match="same inputs"):
        Ensemble.from_models([small, any_model(1, n_in=1)], ["a", "b"])


def test_files_keep_every_bit_and_hold_no_pickle(tmp_path: Path) -> None:
    m = any_model()
    save_model(m, tmp_path / "m.npz", {"signals": [{"name": "u", "low": -np.inf}]})
    back = load_model(tmp_path / "m.npz")
    assert isinstance(back, InnovationsModel)
    for name in ("A", "B", "C", "D", "K", "S", "u0", "y0"):
        assert (getattr(back, name) == getattr(m, name)).all()
    assert back.n_actuators == 1
    assert read_extra(tmp_path / "m.npz")["signals"][0]["name"] == "u"
    e = Ensemble.from_models([m, m], ["a", "b"], 3)
    save_model(e, tmp_path / "e.npz")
    held = load_model(tmp_path / "e.npz")
    assert isinstance(held, Ensemble)
    assert (held.labels, held.unstable_dropped, len(held)) == (("a", "b"), 3, 2)
    with np.load(tmp_path / "e.npz", allow_pickle=False) as arrays:
        assert set(arrays.files) >= {"header", "A"}


def test_damaged_files_are_named(tmp_path: Path) -> None:
    with pytest.raises(InputError, match="does not exist"):
        load_model(tmp_path / "none.npz")
    (tmp_path / "bad.npz").write_bytes(b"PK\x03\x04 no zip")
    with pytest.raises(InputError, match="no model file"):
        load_model(tmp_path / "bad.npz")
    np.savez(tmp_path / "other.npz", x=np.zeros(2))
    with pytest.raises(InputError, match="no model file"):
        load_model(tmp_path / "other.npz")


def test_models_cannot_be_changed() -> None:
    m = any_model()
    with pytest.raises(ValueError, match="read-only"):
        m.A[0, 0] = 1.0
    fit = ArmaxEstimator(n_a=1, n_b=1, n_c=1, n_k=1)
    with pytest.raises(AttributeError, match="cannot assign"):
        fit.n_a = 2  # type: ignore[misc]
