"""Identification of open records against published figures and an independent library."""

import contextlib
import io
import math
import os
import warnings
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pytest
from numpy.testing import assert_allclose

from idlearn.identification import ArxEstimator, order_search
from idlearn.logs import PlantLog


def log_of(u: np.ndarray, y: np.ndarray) -> PlantLog:
    return PlantLog.from_arrays(u=u[:, None], y=y[:, None], sample_time_s=1.0)


def columns(folder: Path, name: str) -> tuple[np.ndarray, np.ndarray]:
    d = pd.read_csv(folder / name / f"{name}.csv")
    return d["u1"].to_numpy(), d["y1"].to_numpy()


def test_dryer_coefficients(open_data: Path) -> None:
    """L. Ljung, System Identification: Theory for the User, hot-air dryer, ARX [2 2 3].

    Samples 1-300, means removed: A about 1 - 1.27 q^-1 + 0.39 q^-2, B about 0.066 q^-3 +
    0.044 q^-4; to four digits from a recomputation by plain least squares.
    """
    u, y = columns(open_data, "hot_air_dryer")
    model = ArxEstimator(n_a=2, n_b=2, n_k=3).fit(log_of(u[:300], y[:300])).model
    assert_allclose(model.a, [-1.2737, 0.3935], rtol=0, atol=5e-5)
    assert_allclose(model.b, [[0.0666, 0.0445]], rtol=0, atol=5e-5)
    errors = np.sqrt(np.diag(model.covariance))
    assert_allclose(errors, [0.0209, 0.0191, 0.0021, 0.0033], rtol=0, atol=1e-4)


def test_gas_furnace_regression(open_data: Path) -> None:
    """NIST/SEMATECH e-Handbook of Statistical Methods, section 6.4.5.1.

    First 60 pairs, each series minus its mean: x(t) on 1, x1, x2, y1, y2.
    """
    x, y = (v[:60] - v[:60].mean() for v in columns(open_data, "gas_furnace"))
    fit = ArxEstimator(n_a=2, n_b=2, n_k=1, offset="constant").fit(log_of(y, x))
    theta = fit.model.theta[:, 0] * [-1, -1, 1, 1, 1]  # the regressor holds minus the output
    printed = [1.683225, -0.860205, -0.076224, 0.044774, 0.003063]
    # the handbook's series are centred over 60 pairs, as are those of the estimator
    assert_allclose(theta, printed, rtol=0, atol=5.1e-7)
    errors = np.sqrt(np.diag(fit.model.covariance))
    printed = [0.123128, 0.165886, 0.096947, 0.082285, 0.035769]
    assert_allclose(errors, printed, rtol=0, atol=5.1e-7)
    assert math.sqrt(fit.stats["noise_var"]) == pytest.approx(0.2654, abs=5.1e-5)
    assert fit.model.freedom == 53
    total = float(np.sum((x[2:] - x[2:].mean()) ** 2))
    left = fit.stats["noise_var"] * 53
    assert 1 - left / total == pytest.approx(0.9387, abs=5.1e-5)
    assert (total - left) / 4 / fit.stats["noise_var"] == pytest.approx(203.1, abs=0.051)


def test_gas_furnace_companion_regression(open_data: Path) -> None:
    """The same section's other equation, y(t) on 1, x1, x2, y1, y2; recomputed, not read."""
    x, y = (v[:60] - v[:60].mean() for v in columns(open_data, "gas_furnace"))
    fit = ArxEstimator(n_a=2, n_b=2, n_k=1, offset="constant").fit(log_of(x, y))
    theta = fit.model.theta[:, 0] * [-1, -1, 1, 1, 1]
    assert_allclose(theta, [1.22630, -0.40927, 0.22898, -0.80532, -0.03372], rtol=0, atol=1e-5)
    assert math.sqrt(fit.stats["noise_var"]) == pytest.approx(0.11984, abs=1e-5)


def test_gas_furnace_delay_is_three(open_data: Path) -> None:
    """G. Box, G. Jenkins, Time Series Analysis, 1970, series J: the transfer function has b = 3."""
    table = order_search(log_of(*columns(open_data, "gas_furnace")))
    assert table.best("bic").n_k == (3,)
    assert table.best("aicc").n_k == (3,)


def test_gas_furnace_fingerprint(open_data: Path) -> None:
    """Moments and correlations printed for series J by H. H. Stokes, program listing, Illinois."""
    x, y = columns(open_data, "gas_furnace")
    assert len(x) == len(y) == 296
    assert x.mean() == pytest.approx(-0.0568345, abs=5.1e-8)
    assert x.std(ddof=1) == pytest.approx(1.07277, abs=5.1e-6)
    assert (x.min(), x.max()) == (-2.716, 2.834)
    assert y.mean() == pytest.approx(53.5091, abs=5.1e-5)
    assert y.std(ddof=1) == pytest.approx(3.20212, abs=5.1e-6)
    assert (y.min(), y.max()) == (45.6, 60.5)

    def correlation(v: np.ndarray, lag: int) -> float:
        v = v - v.mean()
        return float(v[lag:] @ v[:-lag] / (v @ v))

    printed = [0.9708, 0.8960, 0.7925, 0.6800, 0.5745]
    assert_allclose([correlation(y, k) for k in range(1, 6)], printed, rtol=0, atol=5.1e-5)
    printed = [0.9525, 0.8341, 0.6819]
    assert_allclose([correlation(x, k) for k in range(1, 4)], printed, rtol=0, atol=5.1e-5)


@pytest.mark.parametrize(
    ("record", "orders"), [("hot_air_dryer", (2, 2, 3)), ("gas_furnace", (3, 2, 2))]
)
def test_arx_agrees_with_an_independent_library(
    open_data: Path, record: str, orders: tuple[int, int, int]
) -> None:
    """The same record through `sippy-unipi`, an independent identification library."""
    try:
        from sippy_unipi import system_identification
    except ImportError:
        if os.environ.get("IDLEARN_STRICT") == "1":
            pytest.fail("sippy-unipi is not installed; install the extra `test`")
        pytest.skip("sippy-unipi is not installed; install the extra `test`")
    u, y = (v - v.mean() for v in columns(open_data, record))
    n_a, n_b, n_k = orders
    own = ArxEstimator(n_a=n_a, n_b=n_b, n_k=n_k, offset="none").fit(log_of(u, y)).model
    a, b = other_arx(system_identification, u, y, orders)
    assert_allclose(own.a, a, rtol=0, atol=1e-8)
    assert_allclose(own.b[0], b, rtol=0, atol=1e-8)


def other_arx(
    identify: Any, u: np.ndarray, y: np.ndarray, orders: tuple[int, int, int]
) -> tuple[np.ndarray, np.ndarray]:
    """Return a and b by the other library, whose dead time counts from the first lag on."""
    n_a, n_b, n_k = orders
    try:
        with contextlib.redirect_stdout(io.StringIO()), warnings.catch_warnings():
            warnings.simplefilter("ignore")
            model = identify(y[None], u[None], "ARX", ARX_orders=[n_a, n_b, n_k - 1])
    except SystemExit as stop:
        pytest.fail(f"the other library refused its arguments ({stop})")
    den, num = np.ravel(model.G.den[0][0]), np.ravel(model.G.num[0][0])
    # powers of z from the highest on: the first that is not zero belongs to the dead time
    num = num[np.flatnonzero(num)[0] :]
    return den[1 : n_a + 1], num[:n_b]
