"""Criteria of order, residual tests, horizons and the two-point fit against printed values."""

import math

import numpy as np
import pytest
from numpy.testing import assert_allclose
from scipy.stats import gamma

from idlearn.identification import ArxEstimator, criteria, fit_fopdt, two_point
from idlearn.identification.validation import LIMIT_Z, ljung_box
from idlearn.logs import PlantLog
from idlearn.models import InnovationsModel


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


def test_aicc_against_the_form_that_counts_the_variance() -> None:
    """N ln V + N (1 + p / N) / (1 - (p + 2) / N) is 128.870454 at N = 100, p = 4, V = 1.2.

    C. M. Hurvich, C.-L. Tsai, Biometrika 76, 1989 (from memory). It counts the noise variance as
    a parameter: ours at p + 1, but for a constant 2 and N that compare nothing.
    """
    n, p = 100, 4
    assert criteria(1.2, p + 1, n)["aicc"] - 2 + n + 2 == pytest.approx(128.870454, abs=1e-6)


def test_how_often_a_superfluous_parameter_is_kept() -> None:
    """AIC: P(chi2_1 > 2) = 0.157299 for ever; BIC: P(chi2_1 > ln N), 0.031876 at N = 100.

    R. Shibata, Biometrika 63, 1976 (from memory).
    """
    rng, runs, kept = np.random.default_rng(1), 1500, np.zeros(2)
    for _ in range(runs):
        u, e = rng.standard_normal((2, 102))
        y = np.concatenate([[0.0], 0.5 * u[:-1]]) + e
        log = PlantLog.from_arrays(u=u[:, None], y=y[:, None], sample_time_s=1.0)
        # both on the 100 rows whose two lags are filled
        late = PlantLog.from_arrays(u=u[1:, None], y=y[1:, None], sample_time_s=1.0)
        small = ArxEstimator(n_a=0, n_b=1, n_k=1, offset="none").fit(late).stats
        large = ArxEstimator(n_a=0, n_b=2, n_k=1, offset="none").fit(log).stats
        assert small["rows"] == large["rows"] == 100
        kept += [large[name] < small[name] for name in ("aic", "bic")]
    expected = np.array([0.157299, 0.031876])
    # 4 standard errors, and what a sample of 100 adds to a chi-square limit
    slack = 4 * np.sqrt(expected * (1 - expected) / runs) + 0.004
    assert (np.abs(kept / runs - expected) < slack).all()


def test_ljung_box() -> None:
    """Correlations 0.2, -0.1, 0.05 at N = 100 give Q 5.424915, p 0.143199 on 3 degrees of freedom.

    Q = N (N + 2) sum r^2 / (N - k): G. Ljung, G. Box, Biometrika 65, 1978 (from memory).
    """
    assert ljung_box(np.array([1.0, 0.2, -0.1, 0.05]), 100, 0) == pytest.approx(0.143199, abs=1e-6)


def test_ljung_box_of_a_printed_exercise() -> None:
    """N = 250 and 0.085, -0.027, 0.109: Q printed 5.02 against 7.81, not rejected.

    G. Holton, Value-at-Risk, exercise 4.17, whose correlations are rounded.
    """
    p = ljung_box(np.array([1.0, 0.085, -0.027, 0.109]), 250, 0)
    assert p == pytest.approx(1 - gamma.cdf(5.02 / 2, 1.5), abs=0.004)
    assert p > 0.05


@pytest.mark.parametrize(
    ("freedom", "point", "p"),
    [
        (1, 3.841, 0.05),
        (2, 5.991, 0.05),
        (5, 11.070, 0.05),
        (10, 18.307, 0.05),
        (20, 31.410, 0.05),
        (1, 6.635, 0.01),
        (5, 15.086, 0.01),
        (10, 23.209, 0.01),
        (20, 37.566, 0.01),
    ],
)
@pytest.mark.parametrize("fitted", [0, 3])
def test_ljung_box_at_printed_points(freedom: int, point: float, p: float, fitted: int) -> None:
    """Chi-square points of any table; fitted parameters are taken off the degrees of freedom."""
    n = 500
    auto = np.zeros(freedom + fitted + 1)
    auto[:2] = 1.0, math.sqrt(point * (n - 1) / n / (n + 2))
    assert ljung_box(auto, n, fitted) == pytest.approx(p, rel=5e-4)


def test_limit_of_correlations() -> None:
    """99 % of white residuals within 0.08145 at N = 1000.

    Soderstrom and Stoica, System Identification, 1989, ch. 11 (from memory).
    """
    assert LIMIT_Z / math.sqrt(1000) == pytest.approx(0.08145, abs=1e-5)


@pytest.mark.parametrize(("k", "variance"), [(1, 1.0), (2, 1.81), (5, 3.428008)])
def test_error_of_predictions_of_an_autoregression(k: int, variance: float) -> None:
    """s2 (1 - a^2k) / (1 - a^2) for a = 0.9 (any textbook of time series)."""
    assert (1 - 0.9 ** (2 * k)) / (1 - 0.81) == pytest.approx(variance, abs=1e-6)
    model = InnovationsModel(
        A=np.array([[0.9]]), B=np.zeros((1, 1)), C=np.eye(1), D=np.zeros((1, 1)),
        K=np.array([[0.9]]), S=np.eye(1), u0=np.zeros(1), y0=np.array([7.0]), sample_time_s=1.0,
    )  # fmt: skip
    rng, n = np.random.default_rng(2), 40_000
    y = np.full((n, 1), 7.0)
    for i in range(1, n):
        y[i] = 7 + 0.9 * (y[i - 1] - 7) + rng.standard_normal()
    log = PlantLog.from_arrays(u=np.zeros((n, 1)), y=y, sample_time_s=1.0)
    missed = (y - model.k_step(log, k))[10:]
    # neighbours share k - 1 innovations
    assert np.mean(missed**2) == pytest.approx(variance, rel=4 * math.sqrt(2 * k / n))


@pytest.mark.parametrize(
    ("n", "tau", "dead"), [(2, 1.6420, 0.5037), (3, 2.1104, 1.1473), (4, 2.4968, 1.8545)]
)
def test_two_point_fit_of_equal_lags(n: int, tau: float, dead: float) -> None:
    """1 / (s + 1)^n from its 28.3 and 63.2 % times; its step response is a gamma distribution.

    C. L. Smith, Digital Computer Process Control, 1972 (from memory; figures recomputed).
    """
    assert_allclose(two_point(*gamma.ppf([0.283, 0.632], n)), [tau, dead], rtol=0, atol=1e-3)
    # the same plant sampled with a hold, through the picture of a model
    h = 0.02
    found = fit_fopdt(held(np.eye(n, k=-1) - np.eye(n), np.eye(n, 1), np.eye(n)[-1:], h))
    assert found.kind == "lag"
    # it takes 1 - exp(-1/3) and 1 - exp(-1), which 28.3 and 63.2 % are rounded from
    exact = two_point(*gamma.ppf(1 - np.exp([-1 / 3, -1]), n))
    assert_allclose(
        [found.gain, found.time_constant_s, found.dead_time_s], [1.0, *exact], rtol=0, atol=1e-4
    )


def test_two_point_fit_is_exact_on_a_lag_with_dead_time() -> None:
    """t28.3 = theta + tau / 3 and t63.2 = theta + tau, exactly."""
    assert_allclose(two_point(2.0 + 5.0 / 3, 7.0), [5.0, 2.0], rtol=1e-12)


def held(A: np.ndarray, B: np.ndarray, C: np.ndarray, h: float) -> InnovationsModel:
    """Return the plant x' = A x + B u, y = C x sampled with a zero-order hold."""
    from scipy.linalg import expm

    n, m = B.shape
    whole = expm(h * np.block([[A, B], [np.zeros((m, n + m))]]))
    return InnovationsModel(
        A=whole[:n, :n], B=whole[:n, n:], C=C, D=np.zeros((len(C), m)), K=np.zeros((n, len(C))),
        S=np.eye(len(C)), u0=np.zeros(m), y0=np.zeros(len(C)), sample_time_s=h,
    )  # fmt: skip


def test_a_sampled_lag_with_fractional_dead_time_gives_itself_back() -> None:
    """K = T = 1, L = 0.25, h = 0.5: y+ = 0.606531 y + 0.221199 u + 0.172270 u1.

    K. Astrom, B. Wittenmark, Computer-Controlled Systems (from memory; figures recomputed).
    """
    a = math.exp(-0.5)
    b = [1 - math.exp(-0.25), math.exp(-0.25) - a]
    assert_allclose([a, *b], [0.606531, 0.221199, 0.172270], rtol=0, atol=1e-6)
    model = InnovationsModel(
        A=np.array([[a, b[1]], [0.0, 0.0]]), B=np.array([[b[0]], [1.0]]), C=np.eye(1, 2),
        D=np.zeros((1, 1)), K=np.zeros((2, 1)), S=np.eye(1), u0=np.zeros(1), y0=np.zeros(1),
        sample_time_s=0.5,
    )  # fmt: skip
    found = fit_fopdt(model)
    assert_allclose(
        [found.gain, found.time_constant_s, found.dead_time_s], [1.0, 1.0, 0.25], rtol=0, atol=1e-9
    )


def test_an_integrator_with_a_lag_is_an_integrator_with_dead_time() -> None:
    """1 / (s (s + 1)), h = 1: poles 1 and 0.367879; its ramp t - 1 + exp(-t) meets zero at 1.

    Astrom and Wittenmark, table 2.1 (from memory).
    """
    model = held(np.array([[0.0, 1.0], [0.0, -1.0]]), np.array([[0.0], [1.0]]), np.eye(1, 2), 1.0)
    assert_allclose(sorted(model.poles().real), [0.367879, 1.0], rtol=0, atol=1e-6)
    h = model.step_response(3)[:, 0, 0]
    assert_allclose(np.diff(h), [0.367879, 0.367879 * 1.367879 + 0.264241], rtol=0, atol=1e-6)
    found = fit_fopdt(model)
    assert found.kind == "integrating"
    assert_allclose([found.gain, found.dead_time_s], [1.0, 1.0], rtol=0, atol=1e-6)
    # 1 / s^2 held: position h^2 / 2 and speed h after one sample
    double = held(np.eye(2, k=1), np.array([[0.0], [1.0]]), np.eye(2), 0.1)
    assert_allclose(double.B, [[0.005], [0.1]], rtol=1e-12)
