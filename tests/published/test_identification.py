"""Identification against published records, worked examples and closed forms."""

import math
import os

import numpy as np
import pandas as pd
import pytest
from numpy.testing import assert_allclose
from scipy.linalg import solve_discrete_lyapunov
from scipy.stats import gamma

from idlearn.identification import (
    ArmaxEstimator,
    ArxEstimator,
    Status,
    criteria,
    order_search,
    two_point,
)
from idlearn.identification.validation import ljung_box
from idlearn.logs import PlantLog


def simulate(
    a: list[float], b: list[float], c: list[float], u: np.ndarray, e: np.ndarray
) -> np.ndarray:
    """Return y of A y = B u + C e by the plain recursion; b[0] acts one sample later."""
    y = np.zeros(len(u))
    for k in range(len(u)):
        y[k] = e[k]
        y[k] -= sum(v * y[k - i - 1] for i, v in enumerate(a) if k > i)
        y[k] += sum(v * u[k - i - 1] for i, v in enumerate(b) if k > i)
        y[k] += sum(v * e[k - i - 1] for i, v in enumerate(c) if k > i)
    return y


def log_of(u: np.ndarray, y: np.ndarray) -> PlantLog:
    return PlantLog.from_arrays(u=u[:, None], y=y[:, None], sample_time_s=1.0)


# The second-order system of T. Soderstrom, L. Ljung, I. Gustavsson, Automatica 14, 1978 (from
# memory), with white equation noise.
A, B = [-1.5, 0.7], [1.0, 0.5]


def test_dryer_coefficients(open_data: os.PathLike[str]) -> None:
    """L. Ljung, System Identification: Theory for the User, hot-air dryer, ARX [2 2 3].

    Samples 1-300, means removed: A about 1 - 1.27 q^-1 + 0.39 q^-2, B about 0.066 q^-3 +
    0.044 q^-4; to four digits from a recomputation by plain least squares.
    """
    d = pd.read_csv(f"{open_data}/hot_air_dryer/hot_air_dryer.csv")[:300]
    fit = ArxEstimator(n_a=2, n_b=2, n_k=3).fit(log_of(d.u1.to_numpy(), d.y1.to_numpy()))
    assert_allclose(fit.model.a, [-1.2737, 0.3935], rtol=0, atol=5e-5)
    assert_allclose(fit.model.b, [[0.0666, 0.0445]], rtol=0, atol=5e-5)
    errors = np.sqrt(np.diag(fit.model.covariance))
    assert_allclose(errors, [0.0209, 0.0191, 0.0021, 0.0033], rtol=0, atol=1e-4)


def test_gas_furnace_regression(open_data: os.PathLike[str]) -> None:
    """NIST/SEMATECH e-Handbook of Statistical Methods, section 6.4.5.1.

    First 60 pairs, each series minus its mean: x(t) on 1, x1, x2, y1, y2.
    """
    d = pd.read_csv(f"{open_data}/gas_furnace/gas_furnace.csv")[:60]
    x, y = (d[c].to_numpy() - d[c].mean() for c in ("u1", "y1"))
    fit = ArxEstimator(n_a=2, n_b=2, n_k=1, offset="constant").fit(log_of(y, x))
    theta = fit.model.theta[:, 0] * [-1, -1, 1, 1, 1]  # the regressor holds minus the output
    # the handbook's constant belongs to series centred before the two first rows are lost
    assert_allclose(theta[:4], [1.683225, -0.860205, -0.076224, 0.044774], rtol=0, atol=1e-6)
    errors = np.sqrt(np.diag(fit.model.covariance))
    printed = [0.123128, 0.165886, 0.096947, 0.082285, 0.035769]
    assert_allclose(errors, printed, rtol=0, atol=1e-6)
    assert theta[4] == pytest.approx(0.003063, abs=1e-6)
    assert math.sqrt(fit.stats["noise_var"]) == pytest.approx(0.2654, abs=5e-5)
    assert fit.model.freedom == 53


def test_gas_furnace_delay_is_three(open_data: os.PathLike[str]) -> None:
    """G. Box, G. Jenkins, Time Series Analysis, 1970, series J: the transfer function has b = 3."""
    d = pd.read_csv(f"{open_data}/gas_furnace/gas_furnace.csv")
    table = order_search(log_of(d.u1.to_numpy(), d.y1.to_numpy()))
    assert table.best("bic").n_k == (3,)
    assert table.best("aicc").n_k == (3,)


def test_gas_furnace_fingerprint(open_data: os.PathLike[str]) -> None:
    """Means, spreads and ends printed for series J by H. H. Stokes (program listing)."""
    d = pd.read_csv(f"{open_data}/gas_furnace/gas_furnace.csv")
    assert len(d) == 296
    assert d.u1.mean() == pytest.approx(-0.0568345, abs=5e-8)
    assert d.y1.std() == pytest.approx(3.20212, abs=5e-6)
    assert (d.y1.min(), d.y1.max()) == (45.6, 60.5)


def moments(s2: float) -> np.ndarray:
    """Return E phi phi' of the regressor of the system under unit white input."""
    # states: y1, y2, u1, u2
    F = np.zeros((4, 4))
    F[0] = [1.5, -0.7, 1.0, 0.5]
    F[1, 0] = F[3, 2] = 1.0
    Q = np.diag([s2, 0.0, 1.0, 0.0])
    signs = np.diag([-1.0, -1.0, 1.0, 1.0])
    return np.asarray(signs @ solve_discrete_lyapunov(F, Q) @ signs)


@pytest.mark.parametrize(
    ("s2", "diagonal"),
    [
        (1.0, [0.216463, 0.208659, 1.0, 1.216463]),
        (0.25, [0.079412, 0.075647, 0.25, 0.329412]),
        (0.01, [0.003735, 0.003538, 0.01, 0.013735]),
    ],
)
def test_covariance_of_arx(s2: float, diagonal: list[float]) -> None:
    """N cov(theta) -> s2 R^-1.

    Soderstrom and Stoica, System Identification, 1989, ch. 4 and 7; Ljung 1999, ch. 9 (from
    memory); figures recomputed from a Lyapunov equation.
    """
    assert_allclose(np.diag(s2 * np.linalg.inv(moments(s2))), diagonal, rtol=0, atol=1e-6)
    n, runs = 2000, 200
    rng = np.random.default_rng(3)
    found, claimed = [], []
    for _ in range(runs):
        u, e = rng.standard_normal(n), math.sqrt(s2) * rng.standard_normal(n)
        from scipy.signal import lfilter

        y = lfilter([0, *B], [1, *A], u) + lfilter([1.0], [1, *A], e)
        model = ArxEstimator(n_a=2, n_b=2, n_k=1).fit(log_of(u, y)).model
        found.append(model.theta[:, 0])
        claimed.append(np.diag(model.covariance))
    assert_allclose(n * np.var(found, axis=0, ddof=1), diagonal, rtol=0.4)
    # what each fit says of itself agrees with theory far better than one spread of runs does
    assert_allclose(n * np.mean(claimed, axis=0), diagonal, rtol=0.03)
    assert_allclose(np.mean(found, axis=0), [*A, *B], atol=5 * math.sqrt(2 / n / runs) * 1.2)


def test_bias_of_arx_on_output_error() -> None:
    """Y = x + v, v white: theta -> (-1.025923, 0.260513, 1.0, 0.974077) at unit variance.

    Principle: Soderstrom and Stoica 1989, ch. 7; Ljung 1999, ch. 8 (from memory). Monte-Carlo
    tolerance for 400 000 samples.
    """
    from scipy.signal import lfilter

    n = 400_000
    rng = np.random.default_rng(5)
    u = rng.standard_normal(n)
    y = lfilter([0, *B], [1, *A], u) + rng.standard_normal(n)
    model = ArxEstimator(n_a=2, n_b=2, n_k=1).fit(log_of(u, y)).model
    assert_allclose(model.theta[:, 0], [-1.025923, 0.260513, 1.0, 0.974077], rtol=0, atol=0.01)
    assert model.linearise().dc_gain()[0, 0] == pytest.approx(8.415, abs=0.06)


def test_limit_of_least_squares_under_coloured_noise_and_its_cure() -> None:
    """a* = -10/17, residual variance 25/17 for c = -0.8; the right noise model has no bias.

    Soderstrom and Stoica 1989, sec. 2.3, examples S1 and S2 (from memory).
    """
    from scipy.signal import lfilter

    n = 100_000
    rng = np.random.default_rng(8)
    u, e = rng.standard_normal((2, n))
    y = lfilter([0, 1.0], [1, -0.8], u) + lfilter([1, -0.8], [1, -0.8], e)
    wrong = ArxEstimator(n_a=1, n_b=1, n_k=1).fit(log_of(u, y))
    assert wrong.model.a[0] == pytest.approx(-10 / 17, abs=0.01)
    assert wrong.model.b[0, 0] == pytest.approx(1.0, abs=0.015)
    assert wrong.stats["noise_var"] == pytest.approx(25 / 17, rel=0.02)
    right = ArmaxEstimator(n_a=1, n_b=1, n_c=1, n_k=1).fit(log_of(u, y))
    spread = np.sqrt(np.diag(right.model.covariance))
    assert right.status is Status.OK
    assert np.abs(right.model.theta[:, 0] - [-0.8, 1.0, -0.8]).max() < 4 * spread.max()
    assert right.stats["noise_var"] == pytest.approx(1.0, rel=0.02)


def test_closed_loop_without_excitation_is_flagged_and_cured() -> None:
    """U = -f y makes the regressor singular; two gains in turn cure it.

    Soderstrom and Stoica 1989, ch. 10; Gustavsson, Ljung, Soderstrom, Automatica 13, 1977 (from
    memory).
    """

    def loop(gains: np.ndarray) -> PlantLog:
        rng = np.random.default_rng(2)
        y, u = np.zeros(len(gains)), np.zeros(len(gains))
        for k in range(1, len(gains)):
            y[k] = 0.8 * y[k - 1] + u[k - 1] + rng.standard_normal()
            u[k] = -gains[k] * y[k]
        return log_of(u, y)

    estimator = ArxEstimator(n_a=1, n_b=1, n_k=1, offset="none")
    flagged = estimator.fit(loop(np.full(20_000, 0.2)))
    assert flagged.status is Status.RANK_DEFICIENT
    assert flagged.stats["condition"] > 1e12
    assert "Move the setpoint" in flagged.advice
    gains = np.where(np.arange(20_000) // 100 % 2 == 0, 0.2, 0.6)
    cured = estimator.fit(loop(gains))
    assert cured.status is Status.OK
    spread = np.sqrt(np.diag(cured.model.covariance))
    assert (np.abs(cured.model.theta[:, 0] - [-0.8, 1.0]) < 4 * spread).all()


def test_criteria_conventions() -> None:
    """N = 100, p = 4, V = 1.2, recomputed.

    Akaike 1969 and 1974, Schwarz 1978, Rissanen 1978, Hurvich and Tsai 1989 (from memory).
    """
    c = criteria(1.2, 4, 100)
    assert c["fpe"] == pytest.approx(1.3, abs=1e-9)
    assert c["aic"] == pytest.approx(26.232156, abs=1e-6)
    assert c["aicc"] == pytest.approx(26.653208, abs=1e-6)
    assert c["bic"] == pytest.approx(36.652836, abs=1e-6)
    assert c["mdl"] == pytest.approx(1.421048, abs=1e-6)


def test_ljung_box() -> None:
    """Correlations 0.2, -0.1, 0.05 at N = 100 give Q 5.424915, p 0.143199 on 3 degrees of freedom.

    Q = N (N + 2) sum r^2 / (N - k): G. Ljung, G. Box, Biometrika 65, 1978 (from memory).
    """
    assert ljung_box(np.array([1.0, 0.2, -0.1, 0.05]), 100, 0) == pytest.approx(0.143199, abs=1e-6)


@pytest.mark.parametrize(
    ("n", "tau", "dead"), [(2, 1.6420, 0.5037), (3, 2.1104, 1.1473), (4, 2.4968, 1.8545)]
)
def test_two_point_fit_of_equal_lags(n: int, tau: float, dead: float) -> None:
    """1 / (s + 1)^n from its 28.3 and 63.2 % times; its step response is a gamma distribution.

    C. L. Smith, Digital Computer Process Control, 1972 (from memory; figures recomputed).
    """
    found = two_point(*gamma.ppf([0.283, 0.632], n))
    assert_allclose(found, [tau, dead], rtol=0, atol=1e-3)


def test_two_point_fit_is_exact_on_a_lag_with_dead_time() -> None:
    """t28.3 = theta + tau / 3 and t63.2 = theta + tau, exactly."""
    assert_allclose(two_point(2.0 + 5.0 / 3, 7.0), [5.0, 2.0], rtol=1e-12)


def test_arx_agrees_with_an_independent_library(open_data: os.PathLike[str]) -> None:
    """The same record through `sippy-unipi`, an independent identification library."""
    try:
        from sippy_unipi import system_identification
    except ImportError:
        if os.environ.get("IDLEARN_STRICT") == "1":
            pytest.fail("sippy-unipi is not installed; install the extra `test`")
        pytest.skip("sippy-unipi is not installed")
    d = pd.read_csv(f"{open_data}/hot_air_dryer/hot_air_dryer.csv")
    u, y = (d[c].to_numpy() - d[c].mean() for c in ("u1", "y1"))
    own = ArxEstimator(n_a=2, n_b=2, n_k=3, offset="none").fit(log_of(u, y)).model
    a, b = sippy_arx(system_identification, u, y)
    assert_allclose(a, own.a, rtol=0, atol=1e-9)
    assert_allclose(b, own.b[0], rtol=0, atol=1e-9)


def sippy_arx(identify: object, u: np.ndarray, y: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Return a and b of ARX [2 2 3] by the other library; theta = 2 there means dead time 3."""
    import contextlib
    import io
    import warnings

    try:
        with contextlib.redirect_stdout(io.StringIO()), warnings.catch_warnings():
            warnings.simplefilter("ignore")
            model = identify(y[None], u[None], "ARX", ARX_orders=[2, 2, 2])  # type: ignore[operator]
    except SystemExit as stop:
        pytest.fail(f"the other library refused its arguments ({stop})")
    den = np.ravel(model.G.den[0][0])
    num = np.ravel(model.G.num[0][0])
    num = num[np.flatnonzero(num)[0] :]
    return den[1:3], num[:2]
