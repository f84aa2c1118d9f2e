"""ARX and ARMAX models: A(q) y = B(q) u + C(q) e, with the posterior of their parameters.

    y[k] = -sum_i a_i y[k-i] + sum_j b_j u[k-n_k-j+1] + e[k] + sum_l c_l e[k-l]

with i = 1..n_a, j = 1..n_b, l = 1..n_c. An integrated model holds the same for the differences of
y and u: its noise part has an integrator, the load that routine logs drift by.

Sign convention and Gaussian posterior of the least-squares estimate after L. Ljung, System
Identification: Theory for the User, 2nd ed., 1999, sections 4.2 and 9.2 (from memory).
"""

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from idlearn.errors import InputError
from idlearn.models.ensemble import Ensemble
from idlearn.models.innovations import InnovationsModel

if TYPE_CHECKING:
    from idlearn.logs import PlantLog

TRIES = 20  # draws per plant before an unstable one is replaced by the estimate


@dataclass(frozen=True, kw_only=True, eq=False)
class ArxModel:
    """One or several ARX equations, one per output.

    Attributes:
        theta: parameters (n_theta, n_y), one column per equation, in the order of the
            regressor: -y[k-1] of every output, -y[k-2], ..., then b_1..b_n_b of the first
            input, of the second, and so on; then the constant where there is one; last c_1 to
            c_n_c.
        factor: square root of the parameter covariance for unit noise (n_theta, n_theta):
            cov(theta[:, i]) = S[i, i] factor factor'.
        S: covariance of the innovations (n_y, n_y) [output units squared].
        n_a: order of A.
        n_b: orders of B, one per input.
        n_k: dead times, one per input [samples].
        u_mean: means that were removed (n_in,) [input units].
        y_mean: means that were removed (n_y,) [output units].
        constant: whether a constant term was kept.
        freedom: rows minus parameters.
        sample_time_s: [s].
        n_actuators: first inputs that are actuators.
        n_c: order of C, 0 for ARX; with several outputs only 0.
        integrated: whether the noise part has an integrator.
    """

    theta: np.ndarray
    factor: np.ndarray
    S: np.ndarray
    n_a: int
    n_b: tuple[int, ...]
    n_k: tuple[int, ...]
    u_mean: np.ndarray
    y_mean: np.ndarray
    constant: bool
    freedom: int
    sample_time_s: float
    n_actuators: int
    n_c: int = 0
    integrated: bool = False

    def __post_init__(self) -> None:
        """Freeze the arrays."""
        for name in ("theta", "factor", "S", "u_mean", "y_mean"):
            array = np.array(getattr(self, name), dtype=float)
            array.setflags(write=False)
            object.__setattr__(self, name, array)

    @property
    def n_y(self) -> int:
        """Number of outputs."""
        return int(self.theta.shape[1])

    @property
    def n_in(self) -> int:
        """Number of inputs."""
        return len(self.n_b)

    @property
    def a(self) -> np.ndarray:
        """Coefficients of A: (n_a,) for one output, else (n_y, n_y, n_a)."""
        full = self._a_of(self.theta)
        return full[0, 0] if self.n_y == 1 else full

    @property
    def b(self) -> np.ndarray:
        """Coefficients of B: (n_u, n_b) for one output, else (n_y, n_u, n_b), zero-padded."""
        full = self._b_of(self.theta)
        return full[0] if self.n_y == 1 else full

    @property
    def c(self) -> np.ndarray:
        """Coefficients of C (n_c,)."""
        return self.theta[len(self.theta) - self.n_c :, 0]

    @property
    def covariance(self) -> np.ndarray:
        """Covariance of the first equation's parameters (n_theta, n_theta)."""
        return np.asarray(self.S[0, 0] * self.factor @ self.factor.T)

    def _a_of(self, theta: np.ndarray) -> np.ndarray:
        rows = theta[: self.n_a * self.n_y].reshape(self.n_a, self.n_y, self.n_y)
        return rows.transpose(2, 1, 0)  # (equation, output, lag)

    def _b_of(self, theta: np.ndarray) -> np.ndarray:
        b = np.zeros((self.n_y, self.n_in, max(self.n_b)))
        first = self.n_a * self.n_y
        for j, n in enumerate(self.n_b):
            b[:, j, :n] = theta[first : first + n].T
            first += n
        return b

    def linearise(self) -> InnovationsModel:
        """Return the innovations form, with past values as states (observer companion form)."""
        return self._form(self.theta, self.S)

    def _form(self, theta: np.ndarray, S: np.ndarray) -> InnovationsModel:
        n_y, n_in = self.n_y, self.n_in
        a, b = self._a_of(theta), self._b_of(theta)
        depth = max(
            [self.n_a + self.integrated, self.n_c, 1]
            + [k + n - 1 + self.integrated for k, n in zip(self.n_k, self.n_b, strict=True)]
        )
        by_lag = np.zeros((depth + 1, n_y, n_in))
        for j, (n, k) in enumerate(zip(self.n_b, self.n_k, strict=True)):
            for i in range(n):
                by_lag[k + i, :, j] = b[:, j, i]
        past = np.zeros((depth, n_y, n_y))
        past[: self.n_a] = a.transpose(2, 0, 1)
        if self.integrated:
            by_lag[1:] = by_lag[1:] - by_lag[:-1]
            past[1:] = past[1:] - past[:-1]
            past[0] -= np.eye(n_y)
        noise = np.zeros(depth)
        noise[: self.n_c] = theta[len(theta) - self.n_c :, 0]
        D = by_lag[0]
        A = np.zeros((depth * n_y, depth * n_y))
        A[: (depth - 1) * n_y, n_y:] = np.eye((depth - 1) * n_y)
        B, K = np.zeros((depth * n_y, n_in)), np.zeros((depth * n_y, n_y))
        for i in range(depth):
            rows = slice(i * n_y, (i + 1) * n_y)
            A[rows, :n_y] -= past[i]
            B[rows] = by_lag[i + 1] - past[i] @ D
            K[rows] = noise[i] * np.eye(n_y) - past[i]
        C = np.eye(n_y, depth * n_y)
        u0, y0 = self.u_mean.copy(), self.y_mean.copy()
        if self.constant:
            last = theta[len(theta) - self.n_c - 1]
            one = np.eye(n_y) + a.sum(axis=2)
            # the condition number of a single output's 1 x 1 matrix is 1, whatever it holds
            least = np.linalg.svd(one, compute_uv=False)[-1]
            if least > 1e-8 * (1 + np.abs(a).sum()):
                y0 = y0 + np.linalg.solve(one, last)
            else:  # an integrating plant: a constant drift is an offset of its input
                u0 = u0 - np.linalg.lstsq(b.sum(axis=2), last, rcond=None)[0]
        return InnovationsModel(
            A=A,
            B=B,
            C=C,
            D=D,
            K=K,
            S=S,
            u0=u0,
            y0=y0,
            sample_time_s=self.sample_time_s,
            n_actuators=self.n_actuators,
        )

    def sample(self, n: int, rng: np.random.Generator) -> Ensemble:
        """Draw n plausible plants from the posterior.

        Parameters are Gaussian given the noise covariance, which is drawn from its scaled
        inverse chi-square. A draw that is unstable although the estimate is stable is drawn
        again, and counted.

        Raises:
            InputError: n below 1.
        """
        if n < 1:
            raise InputError(f"{n} plants were asked for; ask for 1 or more")
        limit = max(1.0, self.linearise().spectral_radius()) + 1e-6
        models, dropped = [], 0
        for _ in range(n):
            for _ in range(TRIES):
                model = self._draw(rng, 1.0)
                if model.spectral_radius() <= limit:
                    break
                dropped += 1
            else:
                model = self.linearise()
            models.append(model)
        return Ensemble.from_models(models, (self.label,) * n, dropped)

    def draw(self, rng: np.random.Generator, spread: float = 1.0) -> InnovationsModel:
        """Draw one plant, its parameter spread scaled by `spread`."""
        return self._draw(rng, spread)

    def _draw(self, rng: np.random.Generator, spread: float) -> InnovationsModel:
        scale = self.freedom / rng.chisquare(self.freedom)
        S = self.S * scale
        z = rng.standard_normal(self.theta.shape)
        root = np.linalg.cholesky(S + 1e-300 * np.eye(self.n_y))
        theta = self.theta + spread * self.factor @ z @ root.T
        if self.n_c:
            first = len(theta) - self.n_c
            theta[first:, 0] = invertible(theta[first:, 0])
        return self._form(theta, S)

    @property
    def label(self) -> str:
        """Family and orders in a few characters."""

        def text(values: tuple[int, ...]) -> str:
            return ",".join(str(v) for v in values)

        orders = f"{self.n_a}/{text(self.n_b)}"
        if self.n_c:
            orders += f"/{self.n_c}"
        return f"{self.family} {orders}/{text(self.n_k)}"

    @property
    def family(self) -> str:
        """Name of the family."""
        if self.integrated:
            return "arimax" if self.n_c else "arix"
        return "armax" if self.n_c else "arx"

    def poles(self) -> np.ndarray:
        """Return the discrete-time poles, those of pure delays left out."""
        if self.n_y == 1:
            return np.roots(np.concatenate([[1.0], self.a])).astype(complex)
        poles = self.linearise().poles()
        return poles[np.argsort(-np.abs(poles))][: self.n_a * self.n_y]

    def free_run(self, u: np.ndarray, warm_up: np.ndarray | None = None) -> np.ndarray:
        """Simulate the outputs from inputs alone; see `InnovationsModel.free_run`."""
        return self.linearise().free_run(u, warm_up)

    def one_step(self, log: "PlantLog") -> np.ndarray:
        """Return one-step predictions (N, n_y); see `InnovationsModel.one_step`."""
        return self.linearise().one_step(log)


def invertible(c: np.ndarray, limit: float = 0.9995) -> np.ndarray:
    """Return coefficients (n,) of C whose zeros outside the circle are mirrored into it.

    The spectrum of the noise stays the same but for its size.
    """
    roots = np.roots(np.concatenate([[1.0], c]))
    size = np.abs(roots)
    if (size <= limit).all():
        return c
    inside = np.where(size > 1, 1 / np.conj(roots), roots)
    inside = inside * np.minimum(1.0, limit / np.maximum(np.abs(inside), 1e-300))
    return np.real(np.poly(inside))[1:]
