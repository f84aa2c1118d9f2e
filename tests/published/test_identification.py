"""What least squares and prediction errors converge to: bias, covariance, closed loop.

The second-order plant is that of T. Soderstrom, L. Ljung, I. Gustavsson, Automatica 14, 1978 (from
memory), here with white equation noise: A = 1 - 1.5 q^-1 + 0.7 q^-2, B = q^-1 + 0.5 q^-2.
"""

import math

import numpy as np
import pytest
from numpy.testing import assert_allclose
from scipy.linalg import solve_discrete_lyapunov
from scipy.signal import lfilter

from idlearn.identification import ArmaxEstimator, ArxEstimator, Status
from idlearn.logs import PlantLog
from idlearn.models import ArxModel, InnovationsModel

A, B = [-1.5, 0.7], [1.0, 0.5]
ARX = ArxEstimator(n_a=2, n_b=2, n_k=1)
FIRST = ArxEstimator(n_a=1, n_b=1, n_k=1, offset="none")


def log_of(u: np.ndarray, y: np.ndarray) -> PlantLog:
    return PlantLog.from_arrays(u=u[:, None], y=y[:, None], sample_time_s=1.0)


def plant(s2: float) -> InnovationsModel:
    return ArxModel(
        theta=np.array([*A, *B])[:, None], factor=np.eye(4), S=np.array([[s2]]), n_a=2, n_b=(2,),
        n_k=(1,), u_mean=np.zeros(1), y_mean=np.zeros(1), constant=False, freedom=1,
        sample_time_s=1.0, n_actuators=1,
    ).linearise()  # fmt: skip


def closed_moments(s2: float, f: float) -> np.ndarray:
    """Return E phi phi' of [-y1, -y2, u1, u2] under u = r - f y with r white of variance 1."""
    F = np.zeros((4, 4))
    F[0] = [-A[0], -A[1], *B]
    F[1, 0] = F[3, 2] = 1.0
    F[2] = -f * F[0]
    G = np.array([[1.0, 0.0], [0.0, 0.0], [-f, 1.0], [0.0, 0.0]])
    P = solve_discrete_lyapunov(F, G @ np.diag([s2, 1.0]) @ G.T)
    signs = np.diag([-1.0, -1.0, 1.0, 1.0])
    return np.asarray(signs @ P @ signs)


THEORY = [
    (1.0, [0.216463, 0.208659, 1.0, 1.216463]),
    (0.25, [0.079412, 0.075647, 0.25, 0.329412]),
    (0.01, [0.003735, 0.003538, 0.01, 0.013735]),
]


@pytest.mark.parametrize(("s2", "diagonal"), THEORY)
def test_moments_of_the_innovations_form(s2: float, diagonal: list[float]) -> None:
    """N cov(theta) -> s2 R^-1 with R from the Lyapunov equation of the innovations form.

    Soderstrom and Stoica, System Identification, 1989, ch. 4 and 7; Ljung 1999, ch. 9 (from
    memory); figures recomputed.
    """
    m = plant(s2)
    P = solve_discrete_lyapunov(m.A, m.B @ m.B.T + m.K @ m.S @ m.K.T)
    r0 = (m.C @ P @ m.C.T + m.S)[0, 0]
    r1 = (m.C @ (m.A @ P @ m.C.T + m.K @ m.S))[0, 0]
    h1 = (m.C @ m.B)[0, 0]
    if s2 == 1.0:
        assert_allclose([r0, r1, h1], [27.734375, 24.765625, 1.0], rtol=0, atol=1e-9)
    R = np.array([[r0, r1, 0, -h1], [r1, r0, 0, 0], [0, 0, 1, 0], [-h1, 0, 0, 1]])
    covariance = s2 * np.linalg.inv(R)
    assert_allclose(np.diag(covariance), diagonal, rtol=0, atol=1e-6)
    if s2 == 1.0:
        found = covariance[[0, 0, 1], [1, 3, 3]]
        assert_allclose(found, [-0.193293, 0.216463, -0.193293], rtol=0, atol=1e-6)


@pytest.mark.parametrize(("s2", "diagonal"), THEORY)
def test_covariance_that_an_estimate_claims(s2: float, diagonal: list[float]) -> None:
    """Sources as above: what fits say of themselves, and what they scatter by."""
    n, runs = 2000, 300
    rng = np.random.default_rng(3)
    found, claimed = [], []
    for _ in range(runs):
        u, e = rng.standard_normal(n), math.sqrt(s2) * rng.standard_normal(n)
        y = lfilter([0, *B], [1, *A], u) + lfilter([1.0], [1, *A], e)
        model = ARX.fit(log_of(u, y)).model
        found.append(model.theta[:, 0])
        claimed.append(np.diag(model.covariance))
    # a variance of 300 runs has a relative standard error of sqrt(2 / 299) = 8 %
    assert_allclose(n * np.var(found, axis=0, ddof=1), diagonal, rtol=0.33)
    assert_allclose(n * np.mean(claimed, axis=0), diagonal, rtol=0.03)
    error = np.sqrt(np.array(diagonal) / n / runs)
    # the bias of least squares falls with 1 / n, below the scatter of the mean
    assert (np.abs(np.mean(found, axis=0) - [*A, *B]) < 4 * error + 2.0 / n).all()


@pytest.mark.parametrize(
    ("f", "power_y", "power_u", "diagonal"),
    [
        (0.1, 19.36508, 1.193651, [0.191486, 0.213502, 1.0, 1.181486]),
        (0.2, 17.25806, 1.690323, [0.185975, 0.226467, 1.0, 1.145975]),
    ],
)
def test_closed_loop_with_a_moving_setpoint(
    f: float, power_y: float, power_u: float, diagonal: list[float]
) -> None:
    """Direct method, u = r - f y: no bias, and R is that of the closed loop.

    Ljung 1999, ch. 13 (from memory); figures recomputed.
    """
    R = closed_moments(1.0, f)
    assert_allclose([R[0, 0], R[2, 2]], [power_y, power_u], rtol=0, atol=1e-5)
    assert_allclose(np.diag(np.linalg.inv(R)), diagonal, rtol=0, atol=1e-6)
    n = 100_000
    r, e = np.random.default_rng(4).standard_normal((2, n))
    whole = np.array([1, *A]) + f * np.array([0, *B])
    y = lfilter([0, *B], whole, r) + lfilter([1.0], whole, e)
    model = ARX.fit(log_of(r - f * y, y)).model
    assert_allclose(n * np.diag(model.covariance), diagonal, rtol=0.04)
    spread = np.sqrt(np.array(diagonal) / n)
    assert (np.abs(model.theta[:, 0] - [*A, *B]) < 4 * spread).all()


@pytest.mark.parametrize(
    ("sv", "limit", "gain"),
    [
        (1.0, [-1.025923, 0.260513, 1.0, 0.974077], 8.415),
        (0.1, [-1.425106, 0.629417, 1.0, 0.574894], 7.708),
    ],
)
def test_bias_of_arx_on_output_error(sv: float, limit: list[float], gain: float) -> None:
    """Y = x + v, v white: theta -> theta0 + R^-1 [-a1 sv, -a2 sv, 0, 0]', gain 7.5 no more.

    Principle: Soderstrom and Stoica 1989, ch. 7; Ljung 1999, ch. 8 (from memory); figures
    recomputed.
    """
    R = closed_moments(0.0, 0.0) + np.diag([sv, sv, 0.0, 0.0])
    shift = np.linalg.solve(R, [-A[0] * sv, -A[1] * sv, 0, 0])
    assert_allclose(np.array([*A, *B]) + shift, limit, rtol=0, atol=1e-5)
    n = 400_000
    rng = np.random.default_rng(5)
    u = rng.standard_normal(n)
    y = lfilter([0, *B], [1, *A], u) + math.sqrt(sv) * rng.standard_normal(n)
    model = ARX.fit(log_of(u, y)).model
    assert_allclose(model.theta[:, 0], limit, rtol=0, atol=0.01)
    assert model.linearise().dc_gain()[0, 0] == pytest.approx(gain, rel=0.01)


def first_order(c: float, n: int = 200_000) -> tuple[np.ndarray, np.ndarray]:
    u, e = np.random.default_rng(8).standard_normal((2, n))
    return u, lfilter([0, 1.0], [1, -0.8], u) + lfilter([1, c], [1, -0.8], e)


def test_limit_of_least_squares_under_white_and_coloured_noise() -> None:
    """a* = a - c / E y^2: no bias at c = 0; -10/17 and residual variance 25/17 at c = -0.8.

    Soderstrom and Stoica 1989, sec. 2.3, examples S1 and S2 (from memory).
    """
    n = 200_000
    u, y = first_order(0.0)
    fit = FIRST.fit(log_of(u, y))
    assert np.mean(y**2) == pytest.approx(5.555556, rel=0.03)
    assert_allclose(n * np.diag(fit.model.covariance), [0.18, 1.0], rtol=0.03)
    assert (np.abs(fit.model.theta[:, 0] - [-0.8, 1.0]) < 4 * np.sqrt([0.18 / n, 1 / n])).all()
    u, y = first_order(-0.8)
    fit = FIRST.fit(log_of(u, y))
    assert fit.model.a[0] == pytest.approx(-10 / 17, abs=0.008)
    assert fit.model.b[0, 0] == pytest.approx(1.0, abs=0.012)
    assert fit.stats["noise_var"] == pytest.approx(25 / 17, rel=0.015)


def test_the_right_noise_model_has_no_bias() -> None:
    """ARMAX on the plant that biases ARX to -10/17 (source as above)."""
    fit = ArmaxEstimator(n_a=1, n_b=1, n_c=1, n_k=1).fit(log_of(*first_order(-0.8)))
    assert fit.status is Status.OK
    spread = np.sqrt(np.diag(fit.model.covariance))
    missed = np.abs(fit.model.theta[:, 0] - [-0.8, 1.0, -0.8])
    assert (missed < 4 * spread).all()
    assert missed[0] < 0.05 * abs(-10 / 17 + 0.8)
    assert fit.stats["noise_var"] == pytest.approx(1.0, rel=0.015)


def test_covariance_that_armax_claims() -> None:
    """A true ARMAX plant is met within 4 standard errors, which are those of its scatter.

    Ljung 1999, ch. 9 (from memory): for Gaussian noise prediction errors reach s2 (E psi psi')^-1.
    """
    rng, found, claimed = np.random.default_rng(9), [], []
    truth = np.array([*A, *B, -1.0, 0.2])
    estimator = ArmaxEstimator(n_a=2, n_b=2, n_c=2, n_k=1)
    for _ in range(60):
        u, e = rng.standard_normal((2, 1500))
        y = lfilter([0, *B], [1, *A], u) + lfilter([1, -1.0, 0.2], [1, *A], e)
        fit = estimator.fit(log_of(u, y))
        assert fit.status is Status.OK
        found.append(fit.model.theta[:, 0])
        claimed.append(np.diag(fit.model.covariance))
    score = (np.array(found) - truth) / np.sqrt(claimed)
    # one estimate of 360 lies beyond 4 by chance in 2 % of all seeds
    assert np.abs(score).max() < 4.5
    # relative standard error of a standard deviation of 60 runs: 9 %
    assert_allclose(score.std(axis=0), np.ones(6), atol=0.36)
    assert_allclose(score.mean(axis=0), np.zeros(6), atol=4 / math.sqrt(60))


def loop(gains: np.ndarray, late: bool = False) -> PlantLog:
    rng = np.random.default_rng(2)
    y, u = np.zeros(len(gains)), np.zeros(len(gains))
    for k in range(1, len(gains)):
        y[k] = 0.8 * y[k - 1] + u[k - 1] + rng.standard_normal()
        u[k] = -gains[k] * y[k - 1 if late else k]
    return log_of(u, y)


def test_closed_loop_without_excitation_is_flagged() -> None:
    """Under u = -0.2 y only a + 0.2 b = -0.6 can be told.

    Soderstrom and Stoica 1989, ch. 10; Gustavsson, Ljung, Soderstrom, Automatica 13, 1977 (from
    memory).
    """
    fit = FIRST.fit(loop(np.full(20_000, 0.2)))
    assert fit.status is Status.RANK_DEFICIENT
    assert fit.stats["condition"] > 1e12
    assert "Move the setpoint" in fit.advice
    assert fit.model.a[0] + 0.2 * fit.model.b[0, 0] == pytest.approx(-0.6, abs=0.025)


@pytest.mark.parametrize("cure", ["two gains in turn", "a delay in the regulator"])
def test_cures_of_a_closed_loop(cure: str) -> None:
    """Sources as above."""
    gains = np.full(20_000, 0.2)
    if cure == "two gains in turn":
        gains[np.arange(20_000) // 100 % 2 == 1] = 0.6
    fit = FIRST.fit(loop(gains, late=cure == "a delay in the regulator"))
    assert fit.status is Status.OK
    spread = np.sqrt(np.diag(fit.model.covariance))
    assert (np.abs(fit.model.theta[:, 0] - [-0.8, 1.0]) < 4 * spread).all()
    assert spread.max() < 0.1


def test_closed_loop_bias_of_a_wrong_noise_model() -> None:
    """Y = u1 + e + 0.8 e1 under u = r - 0.5 y, fitted as white: b* = 0.752066, E u^2 = 1.613333.

    b* = b - f c s2 / E u^2, after the general expression in Ljung 1999, (13.53) (from memory).
    """
    n = 400_000
    r, e = np.random.default_rng(6).standard_normal((2, n))
    y = lfilter([0, 1.0], [1, 0.5], r) + lfilter([1, 0.8], [1, 0.5], e)
    u = r - 0.5 * y
    assert np.mean(u**2) == pytest.approx(1.613333, rel=0.02)
    fit = ArxEstimator(n_a=0, n_b=1, n_k=1).fit(log_of(u, y))
    assert fit.model.b[0, 0] == pytest.approx(0.752066, abs=0.01)
