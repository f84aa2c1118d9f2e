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


# P. Benner, A. Laub, V. Mehrmann, A collection of benchmark examples for the numerical solution of
# algebraic Riccati equations II: discrete-time case, report SPC 95_23, TU Chemnitz-Zwickau, 1995.


@pytest.mark.parametrize(("r", "digits"), [(1.0, 1e-12), (100.0, 1e-12), (1e6, 1e-8)])
def test_laub_example(r: float, digits: float) -> None:
    """SPC 95_23, example 2.1 (Laub 1979, example 2): X = Q (1 + sqrt(1 + 4 r)) / 2."""
    A, B = np.array([[4.0, 3.0], [-4.5, -3.5]]), np.array([[1.0], [-1.0]])
    Q = np.array([[9.0, 6.0], [6.0, 4.0]])
    s = dare(A, B, Q, np.array([[r]]))
    assert_allclose(s.P, (1 + math.sqrt(1 + 4 * r)) / 2 * Q, rtol=digits)
    if r == 1.0:
        assert_allclose(s.K, [[1.854102, 1.236068]], rtol=0, atol=1e-6)
        assert_allclose(sorted(np.linalg.eigvals(A - B @ s.K).real), [-0.5, 1 - 1 / GOLDEN])


def test_a_decision_that_costs_nothing() -> None:
    """SPC 95_23, example 1.1 (Van Dooren 1981): R = 0, X = I, every pole at zero."""
    A, B = np.array([[2.0, -1.0], [1.0, 0.0]]), np.array([[1.0], [0.0]])
    s = dare(A, B, np.diag([0.0, 1.0]), np.zeros((1, 1)))
    assert_allclose(s.P, np.eye(2), rtol=0, atol=1e-12)
    assert s.radius < 1e-6


def test_jonckheere_example() -> None:
    """SPC 95_23, example 1.3 (Jonckheere 1981): X = [[1, 2], [2, 2 + sqrt 5]]."""
    s = dare(np.eye(2, k=1), np.array([[0.0], [1.0]]), np.array([[1.0, 2.0], [2.0, 4.0]]),
             np.eye(1))  # fmt: skip
    assert_allclose(s.P, [[1.0, 2.0], [2.0, 2 + math.sqrt(5)]], rtol=1e-12)


@pytest.mark.parametrize("eps", [0.1234, 10.0, 1e4])
def test_bad_scaling(eps: float) -> None:
    """SPC 95_23, example 2.3: A = [[0, eps], [0, 0]], X = diag(1, 1 + eps^2)."""
    s = dare(eps * np.eye(2, k=1), np.array([[0.0], [1.0]]), np.eye(2), np.eye(1))
    assert_allclose(s.P, np.diag([1.0, 1 + eps**2]), rtol=1e-12, atol=1e-12)


def test_lag_with_three_delays() -> None:
    """SPC 95_23, example 2.5 (Pappas, Laub, Sandell 1980): a lag, three delays, r = 0.25.

    X = diag(x, 1, 1, 1), x = (t + sqrt(t^2 + 4 b^2 r)) / (2 b^2), t = r (al^2 - 1) + b^2,
    b = 1 / D, al = 1 - 1 / D; x = 3.465002 at D = 10.
    """
    D, r = 10.0, 0.25
    al, b = 1 - 1 / D, 1 / D
    A, B = np.eye(4, k=-1), np.zeros((4, 1))
    A[0, 0], B[0, 0] = al, b
    t = r * (al**2 - 1) + b**2
    x = (t + math.sqrt(t**2 + 4 * b**2 * r)) / (2 * b**2)
    s = dare(A, B, np.diag([0.0, 0.0, 0.0, 1.0]), np.array([[r]]))
    assert x == pytest.approx(3.465002, abs=1e-6)
    assert_allclose(s.P, np.diag([x, 1.0, 1.0, 1.0]), rtol=1e-9, atol=1e-9)


def test_continuous_example_by_fine_sampling() -> None:
    """Laub's continuous example (CAREX 1.2): X = (1 + sqrt 2) Q, poles -1/2 and -sqrt 2.

    P. Benner, A. Laub, V. Mehrmann, A collection of benchmark examples ... I, report SPC 95_22,
    TU Chemnitz-Zwickau, 1995. Sampled finely enough, the discrete equation has this limit; the
    tolerance is the step.
    """
    h = 1e-5
    A, B = np.array([[4.0, 3.0], [-4.5, -3.5]]), np.array([[1.0], [-1.0]])
    Q = np.array([[9.0, 6.0], [6.0, 4.0]])
    s = dare(np.eye(2) + h * A, h * B, h * Q, h * np.eye(1))
    assert_allclose(s.P, (1 + math.sqrt(2)) * Q, rtol=2e-4)
    poles = np.sort(((np.linalg.eigvals(np.eye(2) + h * (A - B @ s.K)) - 1) / h).real)
    assert_allclose(poles, [-math.sqrt(2), -0.5], rtol=1e-3)


def test_shift_register() -> None:
    """SPC 95_23, example 4.1: n stages, input at the last, Q = I, R = 1: diag(1, ..., n)."""
    n = 10
    B = np.zeros((n, 1))
    B[-1] = 1.0
    assert_allclose(dare(np.eye(n, k=1), B, np.eye(n), np.eye(1)).P, np.diag(np.arange(1.0, n + 1)),
                    rtol=0, atol=1e-10)  # fmt: skip


def test_two_inputs() -> None:
    """SPC 95_23, example 2.2 (Laub 1979, example 3), solution recomputed to ten digits."""
    s = dare(np.diag([0.9512, 0.9048]), np.array([[4.877, 4.877], [-1.1895, 3.569]]),
             np.diag([0.005, 0.02]), np.diag([1 / 3, 3.0]))  # fmt: skip
    assert_allclose(
        s.P, [[0.010459082321, 0.003224644477], [0.003224644477, 0.050397741136]], atol=1e-9
    )
    assert s.radius == pytest.approx(0.688070, abs=1e-6)


def test_double_integrator() -> None:
    """Q = diag(1, 0), R = 1: rational answer [[2, 1], [1, 1.5]], gain [0.5, 1] (derived)."""
    A, B = np.array([[1.0, 1.0], [0.0, 1.0]]), np.array([[0.5], [1.0]])
    s = dare(A, B, np.diag([1.0, 0.0]), np.eye(1))
    assert_allclose(s.P, [[2.0, 1.0], [1.0, 1.5]], rtol=0, atol=1e-9)
    assert_allclose(s.K, [[0.5, 1.0]], rtol=0, atol=1e-9)
    # Q = I: recomputed, and the cost of rolling out from (1, 0) is X11
    s = dare(A, B, np.eye(2), np.eye(1))
    assert_allclose(s.P, [[2.367101, 1.118034], [1.118034, 2.587483]], rtol=0, atol=1e-6)
    assert_allclose(s.K, [[0.434483, 1.028466]], rtol=0, atol=1e-6)
    x, cost = np.array([1.0, 0.0]), 0.0
    for _ in range(200):
        u = -s.K @ x
        cost += float(x @ x + u @ u)
        x = A @ x + B @ u
    assert cost == pytest.approx(s.P[0, 0], rel=1e-12)


def test_a_cross_weight_is_a_weight_on_a_shifted_decision() -> None:
    """With v = u + R^-1 N'x the cross weight vanishes (completing the square)."""
    rng = np.random.default_rng(1)
    A, B = 0.5 * rng.standard_normal((3, 3)), rng.standard_normal((3, 2))
    R, N = np.diag([1.0, 2.0]), 0.1 * rng.standard_normal((3, 2))
    shift = np.linalg.solve(R, N.T)
    whole = dare(A, B, np.eye(3), R, N)
    plain = dare(A - B @ shift, B, np.eye(3) - N @ shift, R)
    assert_allclose(whole.P, plain.P, rtol=0, atol=1e-10)
    assert_allclose(whole.K, plain.K + shift, rtol=0, atol=1e-10)


# digits that the example itself costs: R a million times Q, and an integrator with a pole 2e-8
# inside the circle
LOST = {"2.1": 1e-8, "2.5": 1e-7}


def test_benchmark_collection(open_data: os.PathLike[str]) -> None:
    """SPC 95_23 at its default parameters: every exact solution is met, every example is solved."""
    held = json.loads(
        (Path(open_data) / "riccati_benchmarks" / "riccati_benchmarks.json").read_text()
    )
    met = []
    for example in (e for e in held if e["kind"] == "dare"):
        A, B, Q, R = (np.atleast_2d(np.array(example[k], dtype=float)) for k in "ABQR")
        N = np.array(example["S"], dtype=float) if example.get("S") else np.zeros(B.shape)
        s, name = dare(A, B, Q, R, N), example["example"]
        # whatever the claims of the solution, the loop is closed and the equation formed here
        assert np.abs(np.linalg.eigvals(A - B @ s.K)).max() < 1, name
        cost = Q - N @ s.K - s.K.T @ N.T + s.K.T @ R @ s.K
        loop = A - B @ s.K
        off = np.abs(loop.T @ s.P @ loop + cost - s.P).max()
        assert off <= 1e-9 * max(np.abs(s.P).max(), np.abs(Q).max()), name
        if example.get("X_published_exact") and name != "1.4":
            X = np.array(example["X_published_exact"], dtype=float)
            assert np.abs(s.P - X).max() <= LOST.get(name, 1e-11) * np.abs(X).max(), name
            met.append(name)
    assert met == ["1.1", "1.3", "2.1", "2.3", "2.4", "2.5", "4.1"]


def test_a_published_solution_that_misses_its_own_equation(open_data: os.PathLike[str]) -> None:
    """SPC 95_23, example 1.4: X33 is -10 + 0.01^2 * 1000 = -9.9 and not 0 (derived).

    The feedback cancels the first and the third row of A, so X = Q + A'XA without them.
    """
    held = json.loads(
        (Path(open_data) / "riccati_benchmarks" / "riccati_benchmarks.json").read_text()
    )
    (e,) = [e for e in held if e["kind"] == "dare" and e["example"] == "1.4"]
    s = dare(*(np.array(e[k]) for k in "ABQR"))
    assert_allclose(np.diag(s.P), [1e5, 1e3, -9.9], rtol=1e-12)
    assert e["X_published_exact"][2][2] == 0.0


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
