"""Discrete Riccati equations, checked and never trusted blindly."""

from dataclasses import dataclass

import numpy as np

from idlearn.errors import IdlearnError

WORST_RESIDUAL = 1e-6


class RiccatiError(IdlearnError):
    """Report a Riccati equation without a usable stabilising solution."""


@dataclass(frozen=True, eq=False)
class RiccatiSolution:
    """A stabilising solution of A'PA - P - (A'PB + N)(R + B'PB)^-1 (B'PA + N') + Q = 0.

    Attributes:
        P: cost to go (n, n).
        K: feedback gain (m, n), u = -K x.
        radius: spectral radius of A - B K, below 1.
        residual: of the equation, relative to the larger of P and Q.
    """

    P: np.ndarray
    K: np.ndarray
    radius: float
    residual: float


def dare(
    A: np.ndarray, B: np.ndarray, Q: np.ndarray, R: np.ndarray, N: np.ndarray | None = None
) -> RiccatiSolution:
    """Solve the discrete algebraic Riccati equation and check what comes out.

    Args:
        A: (n, n).
        B: (n, m).
        Q: (n, n), symmetric.
        R: (m, m), symmetric; may be singular where B'PB makes up for it.
        N: (n, m) cross weight of x'Nu; None for zero.

    Raises:
        RiccatiError: no stabilising solution, or one whose residual or spectral radius shows
            that it is none.
    """
    from scipy.linalg import LinAlgError, solve_discrete_are

    N = np.zeros_like(B) if N is None else N
    try:
        P = solve_discrete_are(A, B, Q, R, s=N)
    except (LinAlgError, ValueError) as error:
        raise RiccatiError(
            f"the Riccati equation has no stabilising solution ({error}); some mode can be "
            "neither moved nor seen"
        ) from None
    P = 0.5 * (P + P.T)
    G = R + B.T @ P @ B
    K = np.linalg.lstsq(G, B.T @ P @ A + N.T, rcond=None)[0]
    radius = float(np.abs(np.linalg.eigvals(A - B @ K)).max(initial=0.0))
    off = A.T @ P @ A - P - (A.T @ P @ B + N) @ K + Q
    scale = max(float(np.abs(P).max()), float(np.abs(Q).max()), 1e-300)
    residual = float(np.abs(off).max()) / scale
    if not radius < 1 or not residual < WORST_RESIDUAL:
        raise RiccatiError(
            f"the Riccati solution fails its check: spectral radius {radius:.6f}, relative "
            f"residual {residual:.1e}; some mode is neither weighted nor stable"
        )
    return RiccatiSolution(P, K, radius, residual)


@dataclass(frozen=True, eq=False)
class KalmanSolution:
    """A stationary Kalman filter.

    Attributes:
        P: variance of the state predicted one step ahead (n, n).
        K: gain of the predictor (n, n_y): x+ = A x + K (y - C x).
        filter_gain: gain of the measurement update (n, n_y).
        S: variance of the innovations (n_y, n_y).
    """

    P: np.ndarray
    K: np.ndarray
    filter_gain: np.ndarray
    S: np.ndarray


def kalman(
    A: np.ndarray, C: np.ndarray, Q: np.ndarray, R: np.ndarray, N: np.ndarray | None = None
) -> KalmanSolution:
    """Return the stationary Kalman filter of x+ = A x + w, y = C x + v.

    Args:
        A: (n, n).
        C: (n_y, n).
        Q: variance of w (n, n).
        R: variance of v (n_y, n_y).
        N: covariance of w and v (n, n_y); None for zero.

    Raises:
        RiccatiError: as in `dare`.
    """
    P = dare(A.T, C.T, Q, R, N).P
    S = C @ P @ C.T + R
    N = np.zeros((len(A), len(C))) if N is None else N
    gain = np.linalg.solve(S, C @ P).T
    return KalmanSolution(P, A @ gain + np.linalg.solve(S, N.T).T, gain, S)
