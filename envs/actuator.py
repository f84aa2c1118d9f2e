"""The last thing between a decision and the plant: latency, limits, rate, resolution."""

from dataclasses import dataclass
from functools import cached_property

import numpy as np

from idlearn.errors import InputError
from idlearn.logs import Signal


@dataclass(frozen=True)
class Actuator:
    """Limits of the actuators; requested u is clipped, rate-limited, quantised, in this order.

    Attributes:
        low: (n_u,) [engineering units].
        high: (n_u,) [engineering units].
        rate: (n_u,) largest move per sample [engineering units]; inf for none.
        resolution: (n_u,) step of the actuator [engineering units]; 0 for none.
    """

    low: np.ndarray
    high: np.ndarray
    rate: np.ndarray
    resolution: np.ndarray

    @classmethod
    def of(cls, signals: tuple[Signal, ...], sample_time_s: float) -> "Actuator":
        """Take limits, rates and resolutions from the signals of a log."""
        return cls(
            np.array([s.low for s in signals], dtype=float),
            np.array([s.high for s in signals], dtype=float),
            np.array([s.rate_per_s * sample_time_s for s in signals], dtype=float),
            np.array([s.resolution for s in signals], dtype=float),
        )

    @classmethod
    def free(cls, n_u: int) -> "Actuator":
        """Return an actuator without any limit."""
        inf = np.full(n_u, np.inf)
        return cls(-inf, inf, inf, np.zeros(n_u))

    def __post_init__(self) -> None:
        """Refuse limits that no value can meet."""
        if not np.all(self.low < self.high) or not np.all(self.rate > 0):
            raise InputError(
                f"actuator limits low {self.low.tolist()}, high {self.high.tolist()}, rate "
                f"{self.rate.tolist()} leave no room; low has to be below high, rate above 0"
            )
        # rounding after the rate limit would bring such an actuator back to where it was
        if np.any((self.resolution > 0) & (self.rate <= self.resolution / 2)):
            raise InputError(
                f"actuator rate {self.rate.tolist()} per sample is at most half the resolution "
                f"{self.resolution.tolist()}, so it could never move; give a finer resolution, a "
                "faster rate or a longer sample time"
            )

    @cached_property
    def _has_rate(self) -> bool:
        return bool(np.isfinite(self.rate).any())

    @cached_property
    def _step(self) -> np.ndarray | None:
        """Resolution with 1 where there is none, or None where no actuator has any."""
        if not self.resolution.any():
            return None
        return np.where(self.resolution > 0, self.resolution, 1.0)

    def apply(self, requested: np.ndarray, previous: np.ndarray) -> np.ndarray:
        """Return the applied u; a request that is no number holds the previous one.

        Args:
            requested: (n, n_u) [engineering units].
            previous: u applied one sample ago (n, n_u) [engineering units].
        """
        u = np.minimum(np.maximum(requested, self.low), self.high)
        if np.isnan(u).any():
            u = np.where(np.isnan(u), previous, u)
        if self._has_rate:
            u = np.minimum(np.maximum(u, previous - self.rate), previous + self.rate)
        step = self._step
        if step is not None:
            # the nearest step that does not leave the limits
            fine = np.minimum(np.maximum(np.round(u / step) * step, self.low), self.high)
            u = np.where(self.resolution > 0, fine, u)
        return np.asarray(u)
