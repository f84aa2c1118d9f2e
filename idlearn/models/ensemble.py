"""Many plausible plants of one sample time, stacked for lock-step simulation."""

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from idlearn.errors import InputError
from idlearn.models.innovations import InnovationsModel

_ARRAYS = ("A", "B", "C", "D", "K", "S", "u0", "y0")


@dataclass(frozen=True, kw_only=True, eq=False)
class Ensemble:
    """P plants in innovations form, zero-padded to the largest number of states.

    Attributes:
        A: (P, n_x, n_x).
        B: (P, n_x, n_in).
        C: (P, n_y, n_x).
        D: (P, n_y, n_in).
        K: (P, n_x, n_y).
        S: (P, n_y, n_y).
        u0: (P, n_in).
        y0: (P, n_y).
        labels: family and structure of each plant (P).
        sample_time_s: [s].
        n_actuators: first inputs that are actuators.
        unstable_dropped: draws that were unstable although the estimate was not, and were
            drawn again.
    """

    A: np.ndarray
    B: np.ndarray
    C: np.ndarray
    D: np.ndarray
    K: np.ndarray
    S: np.ndarray
    u0: np.ndarray
    y0: np.ndarray
    labels: tuple[str, ...]
    sample_time_s: float
    n_actuators: int
    unstable_dropped: int = 0

    @classmethod
    def from_models(
        cls,
        models: Sequence[InnovationsModel],
        labels: Sequence[str],
        unstable_dropped: int = 0,
    ) -> "Ensemble":
        """Stack models of the same inputs, outputs and sample time.

        Raises:
            InputError: no model, or models that do not fit together.
        """
        if not models or len(models) != len(labels):
            raise InputError(f"{len(models)} models with {len(labels)} labels make no ensemble")
        first = models[0]
        for m in models[1:]:
            if (m.n_in, m.n_y, m.n_actuators, m.sample_time_s) != (
                first.n_in,
                first.n_y,
                first.n_actuators,
                first.sample_time_s,
            ):
                raise InputError(
                    "the models of an ensemble need the same inputs, outputs and sample time"
                )
        n_x = max(m.n_x for m in models)
        stacked = {
            name: np.stack([_padded(getattr(m, name), name, n_x) for m in models])
            for name in _ARRAYS
        }
        return cls(
            **stacked,
            labels=tuple(labels),
            sample_time_s=first.sample_time_s,
            n_actuators=first.n_actuators,
            unstable_dropped=unstable_dropped,
        )

    def __len__(self) -> int:
        """Number of plants."""
        return len(self.A)

    def member(self, i: int) -> InnovationsModel:
        """Return plant i; padding stays, it does nothing."""
        return InnovationsModel(
            **{name: getattr(self, name)[i] for name in _ARRAYS},
            sample_time_s=self.sample_time_s,
            n_actuators=self.n_actuators,
        )

    def take(self, index: Sequence[int] | np.ndarray) -> "Ensemble":
        """Return the plants of `index`, in that order."""
        rows = np.asarray(index, dtype=int)
        return Ensemble(
            **{name: getattr(self, name)[rows] for name in _ARRAYS},
            labels=tuple(self.labels[i] for i in rows),
            sample_time_s=self.sample_time_s,
            n_actuators=self.n_actuators,
            unstable_dropped=self.unstable_dropped,
        )

    def outputs(self, x0: np.ndarray, v: np.ndarray) -> np.ndarray:
        """Run all plants side by side: x+ = A x + B v, output C x + D v.

        Args:
            x0: (P, n_x).
            v: (P, N, n_in) or (N, n_in), deviations from the operating point.

        Returns:
            (P, N, n_y), deviations from the operating point.
        """
        v = np.broadcast_to(v, (len(self), *v.shape[-2:]))
        drive = v @ self.B.transpose(0, 2, 1)
        x = np.empty((v.shape[1], len(self), self.A.shape[1]))
        A = np.ascontiguousarray(self.A.transpose(0, 2, 1))
        state = np.asarray(x0, dtype=float)
        for k in range(v.shape[1]):
            x[k] = state
            state = (state[:, None] @ A)[:, 0] + drive[:, k]
        return np.asarray(
            x.transpose(1, 0, 2) @ self.C.transpose(0, 2, 1) + v @ self.D.transpose(0, 2, 1)
        )

    @classmethod
    def concat(cls, parts: Sequence["Ensemble"]) -> "Ensemble":
        """Put ensembles of the same inputs, outputs and sample time together."""
        models = [p.member(i) for p in parts for i in range(len(p))]
        labels = [label for p in parts for label in p.labels]
        return cls.from_models(models, labels, sum(p.unstable_dropped for p in parts))


def _padded(array: np.ndarray, name: str, n_x: int) -> np.ndarray:
    rows = {"A": (0, 1), "B": (0,), "C": (1,), "K": (0,)}.get(name, ())
    width = [(0, n_x - array.shape[d]) if d in rows else (0, 0) for d in range(array.ndim)]
    return np.pad(array, width) if rows else array
