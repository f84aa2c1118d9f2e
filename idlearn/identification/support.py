"""The region of the log: where a model has seen data, and where it only extrapolates."""

from dataclasses import dataclass

import numpy as np

from idlearn.logs import PlantLog

SLACK = 0.05  # of the range seen, added on either side


@dataclass(frozen=True, eq=False)
class Support:
    """A box around every signal and an ellipsoid around outputs and inputs together.

    Attributes:
        low: of (y, u, move) (n_y + 2 n_u,) [engineering units].
        high: same.
        centre: of (y, u) (n_y + n_u,) [engineering units].
        root: whitening matrix (n_y + n_u, n_y + n_u).
        radius: largest whitened distance that counts as inside [-].
    """

    low: np.ndarray
    high: np.ndarray
    centre: np.ndarray
    root: np.ndarray
    radius: float

    def inside(self, y: np.ndarray, u: np.ndarray, move: np.ndarray) -> np.ndarray:
        """Tell which samples lie inside.

        Args:
            y: (n, n_y) [engineering units].
            u: (n, n_u) [engineering units].
            move: u[k] - u[k-1] (n, n_u) [engineering units].

        Returns:
            (n,) bool.
        """
        point = np.concatenate([y, u, move], axis=1)
        boxed = ((point >= self.low) & (point <= self.high)).all(axis=1)
        joint = (point[:, : len(self.centre)] - self.centre) @ self.root
        return np.asarray(boxed & ((joint**2).sum(axis=1) <= self.radius**2))


def support_region(log: PlantLog) -> Support:
    """Return the region that the valid rows of a log cover.

    The box holds the 0.1 to 99.9 % quantiles, a little widened; the ellipsoid the 99.9 %
    quantile of the distance, so that pairs of values never seen together count as outside.
    """
    parts = []
    for a, b in log.segments:
        u = log.u[a:b]
        move = np.diff(u, axis=0, prepend=u[:1])
        parts.append(np.concatenate([log.y[a:b], u, move], axis=1))
    points = np.concatenate(parts)
    low, high = np.quantile(points, [0.001, 0.999], axis=0)
    slack = SLACK * np.maximum(high - low, 1e-12)
    # moves down are as well known as moves up
    n_u = log.n_u
    largest = np.maximum(np.abs(low[-n_u:]), np.abs(high[-n_u:]))
    low[-n_u:], high[-n_u:] = -largest, largest
    joint = points[:, : log.n_y + n_u]
    centre = joint.mean(axis=0)
    scale = np.maximum(joint.std(axis=0), 1e-12)
    correlation = np.cov((joint - centre).T / scale[:, None]).reshape(len(scale), len(scale))
    values, vectors = np.linalg.eigh(correlation + 1e-6 * np.eye(len(scale)))
    root = (vectors / np.sqrt(values)) / scale[:, None]
    distance = np.sqrt((((joint - centre) @ root) ** 2).sum(axis=1))
    return Support(
        low - slack, high + slack, centre, root, float(np.quantile(distance, 0.999)) * (1 + SLACK)
    )
