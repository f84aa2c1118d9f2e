"""The one linear form: a plant with its noise, driven by the innovations of its own output.

    x[k+1] = A x[k] + B (u[k] - u0) + K e[k]
    y[k]   = y0 + C x[k] + D (u[k] - u0) + e[k],   e ~ N(0, S)

L. Ljung, System Identification: Theory for the User, 2nd ed., 1999, section 4.3 (from memory).
"""

from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Self

import numpy as np

from idlearn.errors import InputError

if TYPE_CHECKING:
    from idlearn.logs import PlantLog


@dataclass(frozen=True, kw_only=True, eq=False)
class InnovationsModel:
    """A linear plant in innovations form.

    Attributes:
        A: (n_x, n_x).
        B: (n_x, n_in); the first `n_actuators` inputs are actuators, the others measured
            disturbances.
        C: (n_y, n_x).
        D: (n_y, n_in).
        K: (n_x, n_y).
        S: covariance of the innovations (n_y, n_y) [output units squared].
        u0: operating point of the inputs (n_in,) [input units].
        y0: operating point of the outputs (n_y,) [output units].
        sample_time_s: [s].
        n_actuators: number of actuators; -1 means all inputs.
    """

    A: np.ndarray
    B: np.ndarray
    C: np.ndarray
    D: np.ndarray
    K: np.ndarray
    S: np.ndarray
    u0: np.ndarray
    y0: np.ndarray
    sample_time_s: float
    n_actuators: int = -1

    def __post_init__(self) -> None:
        """Freeze the arrays and check that they fit together."""
        for name in ("A", "B", "C", "D", "K", "S", "u0", "y0"):
            array = np.array(getattr(self, name), dtype=float)
            array.setflags(write=False)
            object.__setattr__(self, name, array)
        n_x, n_in, n_y = self.A.shape[0], self.B.shape[1], self.C.shape[0]
        wanted = {
            "A": (n_x, n_x),
            "B": (n_x, n_in),
            "C": (n_y, n_x),
            "D": (n_y, n_in),
            "K": (n_x, n_y),
            "S": (n_y, n_y),
            "u0": (n_in,),
            "y0": (n_y,),
        }
        for name, shape in wanted.items():
            if getattr(self, name).shape != shape:
                raise InputError(
                    f"{name} has shape {getattr(self, name).shape}; {shape} fits the other arrays"
                )
        if self.n_actuators < 0:
            object.__setattr__(self, "n_actuators", n_in)

    @property
    def n_x(self) -> int:
        """Number of states."""
        return int(self.A.shape[0])

    @property
    def n_in(self) -> int:
        """Number of inputs, measured disturbances among them."""
        return int(self.B.shape[1])

    @property
    def n_y(self) -> int:
        """Number of outputs."""
        return int(self.C.shape[0])

    def linearise(self) -> Self:
        """Return the model itself: it is linear."""
        return self

    def poles(self) -> np.ndarray:
        """Return the discrete-time poles (n_x,), complex."""
        return np.linalg.eigvals(self.A).astype(complex)

    def spectral_radius(self) -> float:
        """Return the largest absolute pole; 0 without states."""
        return float(np.abs(self.poles()).max(initial=0.0))

    def dc_gain(self) -> np.ndarray:
        """Return the steady-state gain (n_y, n_in) [output unit / input unit]; inf if none.

        Load states, which no input reaches, take no part in it.
        """
        if not self.n_x:
            return np.asarray(self.D)
        basis = self.reachable()
        A = basis.T @ self.A @ basis
        left = np.eye(len(A)) - A
        # not the condition number, which is 1 for a single state
        size = np.linalg.svd(left, compute_uv=False)
        if len(A) and size[-1] < 1e-12 * max(1.0, size[0]):
            return np.full((self.n_y, self.n_in), np.inf)
        return np.asarray(self.C @ basis @ np.linalg.solve(left, basis.T @ self.B) + self.D)

    def reachable(self) -> np.ndarray:
        """Return an orthonormal basis (n_x, n) of the states that the inputs reach."""
        columns, power = [], self.B
        for _ in range(self.n_x):
            size = np.linalg.norm(power, axis=0)
            power = power / np.where(size > 0, size, 1.0)
            columns.append(power)
            power = self.A @ power
        u, s, _ = np.linalg.svd(np.concatenate(columns, axis=1))
        return np.asarray(u[:, : int((s > 1e-10 * s[0]).sum())])

    def step_response(self, n: int) -> np.ndarray:
        """Return the response to a unit step of each input, noise-free.

        Args:
            n: samples, the first at the step itself.

        Returns:
            (n, n_y, n_in) [output unit / input unit].
        """
        response = np.empty((n, self.n_y, self.n_in))
        x = np.zeros((self.n_x, self.n_in))
        with np.errstate(over="ignore", invalid="ignore"):
            for k in range(n):
                response[k] = self.C @ x + self.D
                x = self.A @ x + self.B
        return response

    def frequency_response(self, w: np.ndarray) -> np.ndarray:
        """Return the response from inputs to outputs.

        Args:
            w: frequencies (n_w,) [rad/sample].

        Returns:
            (n_w, n_y, n_in), complex.
        """
        z = np.exp(1j * np.asarray(w))[:, None, None]
        resolvent = np.linalg.solve(
            z * np.eye(self.n_x) - self.A, np.broadcast_to(self.B, (len(w), *self.B.shape))
        )
        return np.asarray(self.C @ resolvent + self.D)

    def rest_state(self, u: np.ndarray) -> np.ndarray:
        """Return the state (n_x,) at rest under u (n_in,); least norm where there are many."""
        force = self.B @ (np.asarray(u) - self.u0)
        U, size, Vt = np.linalg.svd(np.eye(self.n_x) - self.A)
        # a single state that integrates is small against 1, but not against itself
        good = size > 1e-10 * max(1.0, size.max(initial=0.0))
        inverse = np.where(good, 1 / np.where(good, size, 1.0), 0.0)
        return np.asarray(Vt.T @ (inverse * (U.T @ force)))

    def free_run(self, u: np.ndarray, warm_up: np.ndarray | None = None) -> np.ndarray:
        """Simulate the outputs from inputs alone.

        Args:
            u: (N, n_in) [engineering units].
            warm_up: outputs of the first m samples (m, n_y), which set the initial state by
                least squares; None starts at rest at u[0].

        Returns:
            (N, n_y) [engineering units].

        Raises:
            InputError: shapes that do not fit.
        """
        u = self._checked(u)
        x0 = self.rest_state(u[0]) if warm_up is None else self.initial_state(u, warm_up)
        return self.y0 + self.outputs(x0, u - self.u0)

    def initial_state(self, u: np.ndarray, y: np.ndarray) -> np.ndarray:
        """Return the state (n_x,) at the first sample that explains y best, noise in the output.

        Args:
            u: (N, n_in), N >= m.
            y: (m, n_y), from the first sample on.

        Least squares of least norm around rest at u[0], so that a short warm-up moves the state
        only as far as it has to.
        """
        y = np.asarray(y, dtype=float)
        m = len(y)
        if y.ndim != 2 or y.shape[1] != self.n_y or m > len(u):
            raise InputError(
                f"warm_up has shape {y.shape}; (m, {self.n_y}) with m up to {len(u)} is needed"
            )
        base = self.rest_state(u[0])
        missed = (y - self.y0 - self.outputs(base, u[:m] - self.u0)).ravel()
        seen = np.empty((m, self.n_y, self.n_x))
        power = self.C
        for k in range(m):
            seen[k] = power
            power = power @ self.A
        return base + np.linalg.lstsq(seen.reshape(-1, self.n_x), missed, rcond=1e-10)[0]

    def one_step(self, log: "PlantLog") -> np.ndarray:
        """Return one-step predictions (N, n_y), NaN outside the segments.

        Every segment starts from the state that its first samples suggest.
        """
        out = np.full(log.y.shape, np.nan)
        for first, last in log.segments:
            u, y = log.inputs[first:last], log.y[first:last]
            out[first:last] = y - self.innovations(u, y)
        return out

    def innovations(self, u: np.ndarray, y: np.ndarray) -> np.ndarray:
        """Return the one-step prediction errors (N, n_y) over one unbroken stretch."""
        x = self.predicted_states(u, y)
        return np.asarray(y - self.y0 - x @ self.C.T - (u - self.u0) @ self.D.T)

    def predicted_states(self, u: np.ndarray, y: np.ndarray) -> np.ndarray:
        """Return the state at every sample as the outputs before it tell it (N, n_x).

        Args:
            u: (N, n_in), one unbroken stretch.
            y: (N, n_y).
        """
        x0 = self.initial_state(u, y[: max(1, min(len(y), 3 * self.n_x))])
        predictor = predictor_of(self)
        driven = np.concatenate([u - self.u0, y - self.y0], axis=1)
        return predictor.states(x0, driven)

    def k_step(self, log: "PlantLog", k: int) -> np.ndarray:
        """Return predictions k samples ahead (N, n_y), future inputs known.

        Row i predicts y[i] from the outputs up to i - k; NaN where that is not possible.
        """
        out = np.full(log.y.shape, np.nan)
        for first, last in log.segments:
            n = last - first
            if n <= k:
                continue
            u, y = log.inputs[first:last], log.y[first:last]
            x, v = self.predicted_states(u, y), u - self.u0
            e = y - self.y0 - x @ self.C.T - v @ self.D.T
            # state after the output at i - k was seen, then run on without innovations
            ahead = x[: n - k] @ self.A.T + v[: n - k] @ self.B.T + e[: n - k] @ self.K.T
            for j in range(1, k):
                ahead = ahead @ self.A.T + v[j : n - k + j] @ self.B.T
            out[first + k : last] = self.y0 + ahead @ self.C.T + v[k:] @ self.D.T
        return out

    def without_feedthrough(self) -> "InnovationsModel":
        """Return the same plant re-indexed by one sample where D is not zero.

        A record that pairs an input with the output it already moved gives D != 0; in closed
        loop the decision at k can only move y[k+1], so the input is delayed by one state.
        """
        if not np.any(self.D):
            return self
        n_in, n_y = self.n_in, self.n_y
        A = np.block([[self.A, self.B], [np.zeros((n_in, self.n_x + n_in))]])
        return replace(
            self,
            A=A,
            B=np.concatenate([np.zeros_like(self.B), np.eye(n_in)]),
            C=np.concatenate([self.C, self.D], axis=1),
            D=np.zeros((n_y, n_in)),
            K=np.concatenate([self.K, np.zeros((n_in, n_y))]),
        )

    def with_load(self, gain: np.ndarray, pole: float = 1.0) -> "InnovationsModel":
        """Return the model with one load state per actuator, entering where the actuator does.

        Args:
            gain: effect of the innovations on the loads (n_actuators, n_y)
                [input unit / output unit].
            pole: of the loads; 1 is a random walk.
        """
        n_u = self.n_actuators
        push = self.B[:, :n_u]
        A = np.block([[self.A, push], [np.zeros((n_u, self.n_x)), pole * np.eye(n_u)]])
        return replace(
            self,
            A=A,
            B=np.concatenate([self.B, np.zeros((n_u, self.n_in))]),
            C=np.concatenate([self.C, self.D[:, :n_u]], axis=1),
            K=np.concatenate([self.K, np.asarray(gain, dtype=float)]),
        )

    def _checked(self, u: np.ndarray) -> np.ndarray:
        u = np.asarray(u, dtype=float)
        if u.ndim != 2 or u.shape[1] != self.n_in or not len(u):
            raise InputError(
                f"u has shape {u.shape}; time-major (N, {self.n_in}) is needed. "
                "For a single input pass u[:, None]."
            )
        return u

    def states(self, x0: np.ndarray, v: np.ndarray) -> np.ndarray:
        """Run x+ = A x + B v from x0 (n_x,) with v (N, n_in) in deviations: (N, n_x)."""
        x = np.empty((len(v), self.n_x))
        if len(v):
            x[0] = x0
        drive = v @ self.B.T
        # an unstable estimate overflows; whoever asked sees infinities
        with np.errstate(over="ignore", invalid="ignore"):
            for k in range(len(v) - 1):
                x[k + 1] = self.A @ x[k] + drive[k]
        return x

    def outputs(self, x0: np.ndarray, v: np.ndarray) -> np.ndarray:
        """Return C x + D v (N, n_y) of `states`, in deviations."""
        with np.errstate(over="ignore", invalid="ignore"):
            return np.asarray(self.states(x0, v) @ self.C.T + v @ self.D.T)


def predictor_of(model: InnovationsModel) -> InnovationsModel:
    """Return the predictor of a model: inputs (v, y - y0), output the predicted y - y0."""
    A = model.A - model.K @ model.C
    B = np.concatenate([model.B - model.K @ model.D, model.K], axis=1)
    D = np.concatenate([model.D, np.zeros((model.n_y, model.n_y))], axis=1)
    return InnovationsModel(
        A=A,
        B=B,
        C=model.C,
        D=D,
        K=model.K,
        S=model.S,
        u0=np.zeros(B.shape[1]),
        y0=model.y0,
        sample_time_s=model.sample_time_s,
    )
