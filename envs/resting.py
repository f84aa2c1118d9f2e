"""Rest: the state and the input at which a linear plant stays where it is."""

import numpy as np

from idlearn.models import Ensemble

TOLERANCE = 1e-9  # below this part of its size a direction counts as not there
STILL = 1e-6  # a state that moves by less than this part of its drive is at rest


class RestMaps:
    """Solve x = A x + B (u - u0), y = y0 + C x for x and u, for every member of an ensemble.

    States that no input reaches (loads, noise) stay at zero: an integrating load would
    otherwise share the work of holding the output with the actuator.

    Args:
        ensemble: members.
        B: (P, n_x, n_in), possibly scaled for stress.
    """

    def __init__(self, ensemble: Ensemble, B: np.ndarray) -> None:
        """Remember the plants; maps are made when first needed."""
        self._ensemble, self._B = ensemble, B
        self._wanted: dict[tuple[bool, ...], tuple[np.ndarray, np.ndarray]] = {}
        self._driven: np.ndarray | None = None
        self._reached: list[np.ndarray] | None = None

    def solve(
        self, y: np.ndarray, disturbance: np.ndarray, low: np.ndarray, high: np.ndarray
    ) -> tuple[np.ndarray, np.ndarray]:
        """Return x (P, M, n_x) and actuator values u (P, M, n_actuators).

        Args:
            y: wanted outputs (P, M, n_y); NaN in a column means any value will do there.
            disturbance: (P, M, n_d).
            low: (n_actuators,).
            high: (n_actuators,).
        """
        e, n_a = self._ensemble, self._ensemble.n_actuators
        asked = ~np.isnan(y).any(axis=(0, 1))
        d = disturbance - e.u0[:, None, n_a:]
        known = np.concatenate([d, (y - e.y0[:, None])[..., asked]], axis=-1)
        to_x, to_v = self._maps(asked)
        x, v = known @ to_x, known @ to_v
        u0 = e.u0[:, None, :n_a]
        clipped = np.clip(v, low - u0, high - u0)
        drive = np.concatenate([clipped, d], axis=-1)
        A, B = np.swapaxes(e.A, -1, -2), np.swapaxes(self._B, -1, -2)
        if _moves(x, A, drive @ B).any():
            other = drive @ self._drive_map()
            better = _moves(x, A, drive @ B) & ~_moves(other, A, drive @ B)
            x = np.where(better[..., None], other, x)
        return x, np.clip(clipped + u0, low, high)

    def _maps(self, asked: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """Return (d, y) -> x and (d, y) -> v, transposed, for the asked outputs."""
        key = tuple(bool(a) for a in asked)
        if key not in self._wanted:
            e, n_a = self._ensemble, self._ensemble.n_actuators
            n_d, n_asked = self._B.shape[2] - n_a, int(asked.sum())
            n_x = e.A.shape[1]
            to_x = np.zeros((len(e), n_d + n_asked, n_x))
            to_v = np.zeros((len(e), n_d + n_asked, n_a))
            for p, reach in enumerate(self._reach()):
                left = (np.eye(n_x) - e.A[p]) @ reach
                C = e.C[p][asked]
                push, free = self._B[p][:, :n_a], np.zeros((n_asked, n_a))
                full = np.block([[left, -push], [C @ reach, free]])
                right = np.zeros((n_x + n_asked, n_d + n_asked))
                right[:n_x, :n_d] = self._B[p][:, n_a:]
                right[n_x:, n_d:] = np.eye(n_asked)
                solution = _least(full, right)
                r = reach.shape[1]
                to_x[p], to_v[p] = (reach @ solution[:r]).T, solution[r:].T
            self._wanted[key] = to_x, to_v
        return self._wanted[key]

    def _drive_map(self) -> np.ndarray:
        """Return (v, d) -> x, transposed: where a held input leaves the plant."""
        if self._driven is None:
            e = self._ensemble
            self._driven = np.stack(
                [
                    (reach @ _least((np.eye(len(A)) - A) @ reach, B)).T
                    for A, B, reach in zip(e.A, self._B, self._reach(), strict=True)
                ]
            )
        return self._driven

    def _reach(self) -> list[np.ndarray]:
        if self._reached is None:
            pairs = zip(self._ensemble.A, self._B, strict=True)
            self._reached = [reachable(A, B) for A, B in pairs]
        return self._reached


def reachable(A: np.ndarray, B: np.ndarray) -> np.ndarray:
    """Return an orthonormal basis (n_x, r) of the states that the inputs can reach.

    Staircase of B, A B, A^2 B, ..., each made orthogonal to what is there already
    (P. M. Van Dooren, IEEE Transactions on Automatic Control 26, 1981, from memory).
    """
    n_x = len(A)
    basis = np.zeros((n_x, 0))
    fresh = B / np.maximum(np.linalg.norm(B, axis=0), 1e-300)
    while basis.shape[1] < n_x and fresh.shape[1]:
        size = np.linalg.norm(fresh, axis=0).max(initial=0.0)
        for _ in range(2):  # the second round removes what rounding left in the first
            fresh = fresh - basis @ (basis.T @ fresh)
        left, value, _ = np.linalg.svd(fresh, full_matrices=False)
        fresh = left[:, value > TOLERANCE * max(size, 1e-300)]
        basis = np.concatenate([basis, fresh], axis=1)
        fresh = A @ fresh
    return basis


def _least(full: np.ndarray, right: np.ndarray) -> np.ndarray:
    """Solve by least squares of least norm, rows and columns brought to like size first."""
    rows = np.linalg.norm(full, axis=1)
    rows[rows == 0] = 1.0
    scaled = full / rows[:, None]
    columns = np.linalg.norm(scaled, axis=0)
    columns[columns == 0] = 1.0
    solution = np.linalg.lstsq(scaled / columns, right / rows[:, None], rcond=1e-11)[0]
    return np.asarray(solution / columns[:, None])


def _moves(x: np.ndarray, A: np.ndarray, drive: np.ndarray) -> np.ndarray:
    """Tell which states (P, M, n_x) do not stay where they are."""
    step = np.abs(x @ A + drive - x).max(axis=-1, initial=0.0)
    size = np.abs(drive).max(axis=-1, initial=0.0) + 1e-3 * np.abs(x).max(axis=-1, initial=0.0)
    return np.asarray(step > STILL * size)
