"""What every controller sees, and what every controller is."""

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any, ClassVar, Protocol, Self, runtime_checkable

import numpy as np

from idlearn.errors import InputError


@dataclass(frozen=True)
class ObservationLayout:
    """Columns of an observation.

    Attributes:
        n_y: outputs.
        controlled: output index of each setpoint column.
        n_d: measured disturbances.
        n_u: actuators.
    """

    n_y: int
    controlled: tuple[int, ...]
    n_d: int
    n_u: int

    def __post_init__(self) -> None:
        """Refuse columns that cannot be."""
        if self.n_y < 1 or self.n_u < 1 or self.n_d < 0:
            raise InputError(
                f"n_y is {self.n_y}, n_u is {self.n_u}, n_d is {self.n_d}; there has to be an "
                "output and an actuator"
            )
        if not all(0 <= i < self.n_y for i in self.controlled):
            raise InputError(
                f"controlled is {self.controlled}, but outputs are numbered 0 to {self.n_y - 1}"
            )

    @property
    def n_obs(self) -> int:
        """Number of columns."""
        return self.n_y + len(self.controlled) + self.n_d + self.n_u

    @property
    def y(self) -> slice:
        """Columns of the outputs."""
        return slice(0, self.n_y)

    @property
    def setpoint(self) -> slice:
        """Columns of the setpoints."""
        return slice(self.n_y, self.n_y + len(self.controlled))

    @property
    def disturbance(self) -> slice:
        """Columns of the measured disturbances."""
        first = self.n_y + len(self.controlled)
        return slice(first, first + self.n_d)

    @property
    def u(self) -> slice:
        """Columns of the previous applied inputs."""
        return slice(self.n_obs - self.n_u, self.n_obs)

    def join(
        self, y: np.ndarray, setpoint: np.ndarray, disturbance: np.ndarray, u: np.ndarray
    ) -> np.ndarray:
        """Put the parts, each (n, ...), side by side: (n, n_obs)."""
        return np.concatenate([y, setpoint, disturbance, u], axis=1)


@runtime_checkable
class Controller(Protocol):
    """Decide u from an observation, for n episodes at once."""

    kind: ClassVar[str]
    layout: ObservationLayout
    sample_time_s: float

    def reset(self, n: int) -> None:
        """Forget the past and get ready for n episodes."""

    def act(self, observation: np.ndarray) -> np.ndarray:
        """Return the requested u (n, n_u) for an observation (n, n_obs).

        The first call after `reset` starts bumplessly from the previous applied u.
        """

    def settings(self) -> dict[str, Any]:
        """Return what `from_settings` needs: numbers, texts, arrays and dicts of them."""

    @classmethod
    def from_settings(
        cls, settings: Mapping[str, Any], layout: ObservationLayout, sample_time_s: float
    ) -> Self:
        """Build the controller that `settings` describes."""
