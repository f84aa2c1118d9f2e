"""Linear plants in lock step, every episode its own plant."""

import copy
from dataclasses import dataclass

import numpy as np

from idlearn.envs.plant import Draws
from idlearn.envs.resting import RestMaps
from idlearn.errors import InputError
from idlearn.models import Ensemble


@dataclass(frozen=True)
class LinearState:
    """State of a linear plant.

    Attributes:
        x: (n, n_x).
        e: innovation of the present sample (n, n_y) [engineering units].
        y: measured outputs (n, n_y) [engineering units].
    """

    x: np.ndarray
    e: np.ndarray
    y: np.ndarray


class LinearPlant:
    """Plants in innovations form: x+ = A x + B (u - u0) + K e, y = y0 + C x + e.

    Args:
        ensemble: members without direct feed-through.
        repeats: episodes per member that stand side by side: episode i has member i // repeats.
        gain: factor on the effect of the actuators, for stress [-].
        noise: factor on the innovations, for stress; 0 for a noise-free run [-].

    Raises:
        InputError: a member has direct feed-through, or an S that is no covariance.
    """

    def __init__(
        self, ensemble: Ensemble, repeats: int = 1, *, gain: float = 1.0, noise: float = 1.0
    ) -> None:
        """Lay the members out for one matrix product per sample."""
        if np.any(ensemble.D):
            raise InputError(
                "the model has an input that moves the output in the same sample; "
                "re-index it with without_feedthrough() before it is simulated"
            )
        self.ensemble, self.repeats = ensemble, repeats
        self.dt = ensemble.sample_time_s
        self.n_y, self.n_x = ensemble.C.shape[1], ensemble.A.shape[1]
        self.n_u, self.n_actuators = ensemble.B.shape[2], ensemble.n_actuators
        B = ensemble.B.copy()
        B[:, :, : self.n_actuators] *= gain
        # acts on rows (x, u, e, 1) and gives the next (x, y - e): one product per sample
        offset = -B @ ensemble.u0[..., None]
        step = np.concatenate([ensemble.A, B, ensemble.K, offset], axis=2)
        seen = ensemble.C @ step
        seen[..., -1] += ensemble.y0
        self._step = _transposed(np.concatenate([step, seen], axis=1))
        self._C = _transposed(ensemble.C)
        self._y0 = ensemble.y0[:, None]
        self._spread = _transposed(_roots(ensemble.S)) * noise
        self._at_rest = RestMaps(ensemble, B)

    def repeated(self, repeats: int) -> "LinearPlant":
        """Return the same plants with another number of episodes per member."""
        other = copy.copy(self)
        other.repeats = repeats
        return other

    @property
    def n(self) -> int:
        """Episodes that the members and repeats make."""
        return len(self.ensemble) * self.repeats

    def _grouped(self, a: np.ndarray) -> np.ndarray:
        return a.reshape(len(self.ensemble), self.repeats, a.shape[-1])

    def _innovation(self, rng: Draws) -> np.ndarray:
        raw = self._grouped(np.asarray(rng.standard_normal((self.n, self.n_y))))
        # one output: a plain factor, which is faster than a product of 1 x 1 matrices
        return raw * self._spread if self.n_y == 1 else raw @ self._spread

    def _check(self, n: int) -> None:
        if n != self.n:
            raise InputError(f"{n} episodes asked for; members times repeats make {self.n}")

    def _state(self, x: np.ndarray, rng: Draws) -> LinearState:
        e = self._innovation(rng)
        y = x @ self._C + self._y0 + e
        flat = (self.n, -1)
        return LinearState(x.reshape(self.n, self.n_x), e.reshape(flat), y.reshape(flat))

    def start(self, n: int, rng: Draws) -> LinearState:
        """Return the state of n plants at their operating point."""
        self._check(n)
        return self._state(np.zeros((len(self.ensemble), self.repeats, self.n_x)), rng)

    def advance(self, state: LinearState, u: np.ndarray, rng: Draws) -> LinearState:
        """Return the state one sample later, with u (n, n_u) held [engineering units]."""
        n_x, n_u, n = self.n_x, self.n_u, self.n
        row = np.empty((n, n_x + n_u + self.n_y + 1))
        row[:, :n_x] = state.x
        for j in range(n_u):  # column by column is faster than short rows
            row[:, n_x + j] = u[:, j]
        for j in range(self.n_y):
            row[:, n_x + n_u + j] = state.e[:, j]
        row[:, -1] = 1.0
        moved = self._grouped(row) @ self._step
        e = self._innovation(rng)
        y = moved[..., n_x:] + e
        return LinearState(
            moved.reshape(n, -1)[:, :n_x], e.reshape(n, self.n_y), y.reshape(n, self.n_y)
        )

    def measure(self, state: LinearState, rng: Draws) -> np.ndarray:
        """Return the measured outputs (n, n_y) [engineering units]."""
        return state.y

    def rest(
        self,
        n: int,
        y: np.ndarray,
        disturbance: np.ndarray,
        low: np.ndarray,
        high: np.ndarray,
        rng: Draws,
    ) -> tuple[LinearState, np.ndarray]:
        """Return the state at rest at y and the actuator values that hold it.

        Loads and noise states are at zero. Where the limits do not allow the wanted rest, a
        self-regulating plant rests at the nearest input they allow; an integrating one starts at
        the wanted output and drifts. Arguments as in `RestingPlant.rest`.
        """
        self._check(n)
        x, u = self._at_rest.solve(self._grouped(y), self._grouped(disturbance), low, high)
        return self._state(x, rng), u.reshape(n, self.n_actuators)


def _transposed(stack: np.ndarray) -> np.ndarray:
    return np.ascontiguousarray(np.swapaxes(stack, -1, -2))


def _roots(S: np.ndarray) -> np.ndarray:
    """Return symmetric square roots of covariances (P, n_y, n_y); rank may be lacking."""
    value, vector = np.linalg.eigh(S)
    if np.any(value < -1e-9 * np.abs(value).max(initial=0.0)) or not np.isfinite(value).all():
        raise InputError("the innovations' S is no covariance: it has a negative eigenvalue")
    root = np.sqrt(np.maximum(value, 0.0))[:, None]
    return np.asarray((vector * root) @ np.swapaxes(vector, -1, -2))
