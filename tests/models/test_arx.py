"""ARX and ARMAX models: their equations, their innovations form, their draws."""

import math

import numpy as np
import pytest
from numpy.testing import assert_allclose

from idlearn.errors import InputError
from idlearn.identification import ArmaxEstimator, ArxEstimator
from idlearn.logs import PlantLog
from idlearn.models import ArxModel, InnovationsModel
from idlearn.models.arx import invertible

RNG = np.random.default_rng


def run(m: InnovationsModel, u: np.ndarray, e: np.ndarray) -> np.ndarray:
    """Return the outputs of the innovations form from a state of zero, by its two equations."""
    x, out = np.zeros(m.n_x), []
    for k in range(len(u)):
        v = u[k] - m.u0
        out.append(m.y0 + m.C @ x + m.D @ v + e[k])
        x = m.A @ x + m.B @ v + m.K @ e[k]
    return np.array(out)


def difference_equation(m: ArxModel, u: np.ndarray, e: np.ndarray) -> np.ndarray:
    """Return y of A y = B u + C e by the plain recursion, from zero, in deviations."""
    a = m.a if m.n_y > 1 else m.a[None, None]
    b = m.b if m.n_y > 1 else m.b[None]
    y = np.zeros((len(u), m.n_y))
    for k in range(len(u)):
        y[k] = e[k]
        for i in range(min(m.n_a, k)):
            y[k] -= a[:, :, i] @ y[k - i - 1]
        for j in range(u.shape[1]):
            for i in range(m.n_b[j]):
                if k >= m.n_k[j] + i:
                    y[k] += b[:, j, i] * u[k - m.n_k[j] - i, j]
        for i in range(min(m.n_c, k)):
            y[k] += m.c[i] * e[k - i - 1]
    return y


def arx(
    n_y: int, n_b: tuple[int, ...], n_k: tuple[int, ...], n_c: int = 0, integrated: bool = False,
    n_a: int = 2, seed: int = 4,
) -> ArxModel:  # fmt: skip
    p = n_a * n_y + sum(n_b) + n_c
    theta = 0.2 * RNG(seed).standard_normal((p, n_y))
    return ArxModel(
        theta=theta, factor=1e-3 * np.eye(p), S=np.eye(n_y), n_a=n_a, n_b=n_b, n_k=n_k,
        u_mean=np.zeros(len(n_b)), y_mean=np.zeros(n_y), constant=False, freedom=500,
        sample_time_s=1.0, n_actuators=len(n_b), n_c=n_c, integrated=integrated,
    )  # fmt: skip


@pytest.mark.parametrize(
    "model",
    [
        arx(1, (2,), (1,)),
        arx(1, (3,), (0,)),
        arx(1, (1,), (7,)),
        arx(1, (2, 1), (3, 0)),
        arx(2, (2, 2), (1, 4)),
        arx(2, (1, 3), (0, 2)),
        arx(1, (2,), (2,), n_c=3),
        arx(1, (2,), (0,), n_c=1),
        arx(1, (3,), (1,), n_a=0),
    ],
    ids=lambda m: f"{m.label} of {m.n_y}",
)
def test_linearise_is_the_difference_equation(model: ArxModel) -> None:
    rng = RNG(5)
    u, e = rng.standard_normal((80, model.n_in)), rng.standard_normal((80, model.n_y))
    assert_allclose(
        run(model.linearise(), u, e), difference_equation(model, u, e), rtol=0, atol=1e-10
    )


@pytest.mark.parametrize("n_k", [0, 2])
def test_an_integrated_model_is_the_equation_of_differences(n_k: int) -> None:
    model, rng = arx(1, (2,), (n_k,), n_c=2, integrated=True), RNG(6)
    u, e = rng.standard_normal((80, 1)), rng.standard_normal((80, 1))
    m = model.linearise()
    moves = np.diff(u, axis=0, prepend=np.zeros((1, 1)))
    summed = np.cumsum(difference_equation(model, moves, e), axis=0)
    assert_allclose(run(m, u, e), summed, rtol=0, atol=1e-9)
    # the integrator belongs to the noise: the plant has a gain, B(1) / A(1)
    assert m.dc_gain()[0, 0] == pytest.approx(model.b.sum() / (1 + model.a.sum()), rel=1e-6)
    assert model.family == "arimax"


def test_coefficients_as_they_are_laid_out() -> None:
    """The order of the regressor is that of the documentation; a second lag comes after all."""
    model = arx(2, (2, 1), (1, 1))
    assert model.a.shape == (2, 2, 2)
    assert model.a[1, 0, 1] == model.theta[2, 1]  # equation 2, output 1, lag 2
    assert model.b[0, 1, 0] == model.theta[6, 0]  # equation 1, second input
    assert model.b[0, 1, 1] == 0.0  # padding
    single = arx(1, (2,), (3,), n_c=1)
    assert_allclose(single.c, single.theta[4:, 0])
    assert single.label == "armax 2/2/1/3"
    assert arx(1, (2, 1), (3, 0)).label == "arx 2/2,1/3,0"


def test_poles_are_those_of_the_equation() -> None:
    model = arx(1, (2,), (9,))
    assert_allclose(np.sort_complex(model.poles()), np.sort_complex(np.roots([1, *model.a])))
    several = arx(2, (1, 1), (5, 5))
    assert len(several.poles()) == 4
    z = several.poles()[0]
    A = np.eye(2) + several.a[:, :, 0] / z + several.a[:, :, 1] / z**2
    assert abs(np.linalg.det(A)) < 1e-9


def noisy(n: int = 600) -> PlantLog:
    rng = RNG(7)
    u, y = rng.standard_normal((n, 1)), np.zeros((n, 1))
    for k in range(2, n):
        y[k] = 0.7 * y[k - 1] + u[k - 2] + rng.standard_normal()
    return PlantLog.from_arrays(u=u + 3, y=y + 40, sample_time_s=1.0)


def test_a_constant_is_an_operating_point() -> None:
    """Estimated constants give the equation its own rest; the free run stays there."""
    log = noisy()
    model = ArxEstimator(n_a=1, n_b=1, n_k=2, offset="constant").fit(log).model
    m = model.linearise()
    a, b, c = model.theta[:, 0]
    rest = model.y_mean[0] + (c + b * 2.0) / (1 + a)
    u = np.full((30, 1), model.u_mean[0] + 2.0)
    assert_allclose(m.free_run(u), np.full((30, 1), rest), rtol=1e-12)


def test_a_constant_of_an_integrating_plant_is_an_offset_of_its_input() -> None:
    u = RNG(8).standard_normal((300, 1))
    y = np.concatenate([np.zeros((1, 1)), np.cumsum(0.5 * (u[:-1] - 1.7), axis=0)])
    log = PlantLog.from_arrays(u=u, y=y, sample_time_s=1.0)
    m = ArxEstimator(n_a=1, n_b=1, n_k=1, offset="constant").fit(log).model.linearise()
    assert m.spectral_radius() == pytest.approx(1.0, abs=1e-9)
    assert m.u0[0] == pytest.approx(1.7, abs=1e-6)
    assert_allclose(m.free_run(u, y[:5]), y, rtol=0, atol=1e-6)


def test_draws_have_the_spread_of_the_posterior() -> None:
    model = ArxEstimator(n_a=1, n_b=1, n_k=2).fit(noisy()).model
    n = 4000
    plants = model.sample(n, RNG(8))
    assert len(plants) == n
    # companion form: -a_1 is the first entry, b_1 enters at the second state
    drawn = np.stack([-plants.A[:, 0, 0], plants.B[:, 1, 0]], axis=1)
    error = np.sqrt(np.diag(model.covariance) / n)
    assert (np.abs(drawn.mean(axis=0) - model.theta[:, 0]) < 4 * error).all()
    assert_allclose(np.var(drawn, axis=0), np.diag(model.covariance), rtol=0.12)
    size = math.sqrt(np.prod(np.diag(model.covariance)))
    assert np.cov(drawn.T)[0, 1] == pytest.approx(model.covariance[0, 1], abs=4 * size / n**0.5)
    # the noise variance is scaled inverse chi-square: its relative spread is sqrt(2 / freedom)
    assert plants.S.mean() == pytest.approx(model.S[0, 0], rel=0.01)
    assert plants.S.std() == pytest.approx(model.S[0, 0] * math.sqrt(2 / model.freedom), rel=0.1)
    assert plants.u0[5, 0] == model.u_mean[0]


def test_draws_of_two_outputs_share_their_noise() -> None:
    """Cov of equations i and j is S_ij times that of the regressor."""
    base = arx(2, (1,), (1,), n_a=1)
    S = np.array([[1.0, 0.8], [0.8, 1.0]])
    model = ArxModel(**{**vars(base), "S": S, "factor": 0.02 * np.eye(3), "freedom": 100_000})
    rng = RNG(2)
    b = np.array([model.draw(rng).B[:2, 0] for _ in range(3000)])
    assert np.corrcoef(b.T)[0, 1] == pytest.approx(0.8, abs=0.03)
    assert_allclose(b.std(axis=0), [0.02, 0.02], rtol=0.06)
    wide = np.array([model.draw(rng, 3.0).B[:2, 0] for _ in range(1000)])
    assert_allclose(wide.std(axis=0), [0.06, 0.06], rtol=0.1)


def test_unstable_draws_are_counted_and_drawn_again() -> None:
    model = arx(1, (1,), (1,))
    near = ArxModel(**{**vars(model), "theta": np.array([[-0.99], [0.0], [0.1]]),
                       "factor": np.diag([0.02, 1e-6, 1e-3])})  # fmt: skip
    plants = near.sample(200, RNG(1))
    # P(z > 0.5) = 0.31 of first draws leave the circle, and of those that follow
    expected = 200 * 0.3085 / (1 - 0.3085)
    assert plants.unstable_dropped == pytest.approx(expected, rel=0.35)
    radius = [np.abs(np.linalg.eigvals(A)).max() for A in plants.A]
    assert max(radius) <= 1 + 2e-6
    same = near.sample(200, RNG(1))
    assert (same.A == plants.A).all()


def test_a_posterior_without_stable_plants_falls_back_on_the_estimate() -> None:
    model = arx(1, (1,), (1,), n_a=1)
    wild = ArxModel(**{**vars(model), "theta": np.array([[0.5], [1.0]]),
                       "factor": np.diag([1e6, 1e-6])})  # fmt: skip
    plants = wild.sample(3, RNG(1))
    assert plants.unstable_dropped == 60
    assert_allclose(plants.A[:, 0, 0], [-0.5] * 3)


def test_no_plants_at_all_is_no_request() -> None:
    with pytest.raises(InputError, match="0 plants were asked for"):
        arx(1, (1,), (1,)).sample(0, RNG(1))


def test_the_noise_part_stays_invertible() -> None:
    """Zeros mirrored into the circle leave the spectrum's shape (spectral factorisation)."""
    c = np.poly([2.0, -0.5, 0.3])[1:]
    inside = invertible(c)
    assert np.abs(np.roots([1, *inside])).max() < 1
    w = np.exp(1j * np.linspace(0.1, 3, 7))
    before = np.abs(np.polyval([1, *c], w))
    assert_allclose(before / np.abs(np.polyval([1, *inside], w)), np.full(7, 2.0), rtol=1e-9)
    assert invertible(np.array([-0.5])) == pytest.approx(-0.5, abs=0)
    fit = ArmaxEstimator(n_a=1, n_b=1, n_c=1, n_k=2).fit(noisy())
    near = ArxModel(**{**vars(fit.model), "theta": np.array([[-0.7], [1.0], [0.98]]),
                       "factor": np.diag([1e-3, 1e-3, 0.3])})  # fmt: skip
    rng = RNG(3)
    for _ in range(50):
        m = near.draw(rng)
        assert np.abs(np.linalg.eigvals(m.A - m.K @ m.C)).max() <= 1
