"""Riccati equations and Kalman filters against published benchmarks and closed forms."""

import json
import math
import os
from pathlib import Path

import numpy as np
import pytest
from numpy.testing import assert_allclose

from idlearn.models.riccati import RiccatiError, dare, kalman

GOLDEN = (1 + math.sqrt(5)) / 2


@pytest.mark.parametrize(
    ("a", "b", "q", "r", "p", "gain"),
    [
        (1.0, 1.0, 1.0, 1.0, 1.6180340, 0.6180340),
        (0.9, 0.5, 1.0, 0.1, 1.2452267, 1.3623703),
        (1.2, 1.0, 1.0, 1.0, 1.9522337, 0.7935281),
        (1.0, 1.0, 0.01, 1.0, 0.1051249, 0.0951249),
    ],
)
def test_scalar(a: float, b: float, q: float, r: float, p: float, gain: float) -> None:
    """Closed form: b^2 p^2 + (r - a^2 r - q b^2) p - q r = 0, gain a b p / (r + b^2 p)."""
    s = dare(*(np.array([[v]]) for v in (a, b, q, r)))
    assert s.P[0, 0] == pytest.approx(p, abs=1e-7)
    assert s.K[0, 0] == pytest.approx(gain, abs=1e-7)
    assert s.radius < 1


def test_laub_example() -> None:
    """X = Q (1 + sqrt(1 + 4 r)) / 2, example 2.1 (Laub 1979).

    P. Benner, A. Laub, V. Mehrmann, A collection of benchmark examples for the numerical solution
    of algebraic Riccati equations II, report SPC 95_23, TU Chemnitz-Zwickau, 1995.
    """
    A, B = np.array([[4.0, 3.0], [-4.5, -3.5]]), np.array([[1.0], [-1.0]])
    Q = np.array([[9.0, 6.0], [6.0, 4.0]])
    s = dare(A, B, Q, np.eye(1))
    assert_allclose(s.P, GOLDEN * Q, rtol=0, atol=1e-9)
    assert_allclose(s.K, [[1.854102, 1.236068]], rtol=0, atol=1e-6)
    assert_allclose(sorted(np.linalg.eigvals(A - B @ s.K).real), [-0.5, 0.381966], atol=1e-6)


def test_shift_register() -> None:
    """SPC 95_23, example 4.1: n stages, input at the last, Q = I, R = 1: diag(1, ..., n)."""
    n = 10
    B = np.zeros((n, 1))
    B[-1] = 1.0
    assert_allclose(dare(np.eye(n, k=1), B, np.eye(n), np.eye(1)).P, np.diag(np.arange(1.0, n + 1)),
                    rtol=0, atol=1e-9)  # fmt: skip


def test_double_integrator() -> None:
    """Q = diag(1, 0), R = 1: rational answer [[2, 1], [1, 1.5]], gain [0.5, 1] (derived)."""
    s = dare(np.array([[1.0, 1.0], [0.0, 1.0]]), np.array([[0.5], [1.0]]),
             np.diag([1.0, 0.0]), np.eye(1))  # fmt: skip
    assert_allclose(s.P, [[2.0, 1.0], [1.0, 1.5]], rtol=0, atol=1e-9)
    assert_allclose(s.K, [[0.5, 1.0]], rtol=0, atol=1e-9)


def test_benchmark_collection(open_data: os.PathLike[str]) -> None:
    """SPC 95_23: every discrete example with an exact solution is met, or refused with a reason."""
    held = json.loads(
        (Path(open_data) / "riccati_benchmarks" / "riccati_benchmarks.json").read_text()
    )
    met = 0
    for example in held:
        if example["kind"] != "dare" or not example.get("X_published_exact"):
            continue
        arrays = {k: np.atleast_2d(np.array(example[k], dtype=float)) for k in "ABQR"}
        X = np.array(example["X_published_exact"], dtype=float)
        N = example.get("S")
        try:
            s = dare(**arrays, N=None if N is None else np.array(N, dtype=float))
        except RiccatiError:
            continue
        assert s.radius < 1
        # with a singular R several solutions share the equation's residual; digits are lost
        loss = 2e-4 if "R singular" in example["title"] else 1e-6
        assert np.abs(s.P - X).max() <= loss * max(1.0, np.abs(X).max()), example["title"]
        met += 1
    assert met >= 6


def test_an_unweighted_integrator_is_refused() -> None:
    """A solver may return a loop with a pole on the circle and no warning; it is not trusted."""
    with pytest.raises(RiccatiError, match="Riccati"):
        dare(np.diag([1.0, 0.5]), np.array([[1.0], [1.0]]), np.diag([0.0, 1.0]), np.eye(1))


@pytest.mark.parametrize(
    ("q", "prior", "gain"),
    [(1.0, 1.618034, 0.618034), (0.1, 0.370156, 0.270156), (0.01, 0.105125, 0.095125)],
)
def test_local_level(q: float, prior: float, gain: float) -> None:
    """Random walk seen in noise: P = (q + sqrt(q^2 + 4 q r)) / 2, gain P / (P + r).

    A. Harvey, Forecasting, Structural Time Series Models and the Kalman Filter, 1989 (from memory).
    """
    s = kalman(np.eye(1), np.eye(1), np.array([[q]]), np.eye(1))
    assert s.P[0, 0] == pytest.approx(prior, abs=1e-6)
    assert s.filter_gain[0, 0] == pytest.approx(gain, abs=1e-6)
    assert s.S[0, 0] == pytest.approx(prior + 1, abs=1e-6)


def test_kalman_of_a_lag() -> None:
    """AR(1), a = 0.9, q = r = 1: prior 1.483900, gain 0.597407 (derived)."""
    s = kalman(np.array([[0.9]]), np.eye(1), np.eye(1), np.eye(1))
    assert s.P[0, 0] == pytest.approx(1.483900, abs=1e-6)
    assert s.filter_gain[0, 0] == pytest.approx(0.597407, abs=1e-6)
