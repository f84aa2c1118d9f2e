"""What a plant is to the engine and to the environments: n episodes in lock step."""

from typing import Any, Protocol, runtime_checkable

import numpy as np


class Draws(Protocol):
    """The part of a random generator that plants use, so that shared streams can stand in."""

    def standard_normal(self, size: Any = None) -> Any:
        """Return independent standard normal numbers."""


@runtime_checkable
class Plant(Protocol):
    """n plants at once; `advance` is told the inputs held over [k, k+1).

    Attributes:
        dt: sample time [s].
        n_u: inputs: actuators, then measured disturbances.
        n_y: outputs.
    """

    dt: float
    n_u: int
    n_y: int

    def start(self, n: int, rng: Draws) -> Any:
        """Return the state of n plants at their operating point."""

    def advance(self, state: Any, u: np.ndarray, rng: Draws) -> Any:
        """Return the state one sample later, with u (n, n_u) held [engineering units]."""

    def measure(self, state: Any, rng: Draws) -> np.ndarray:
        """Return the measured outputs (n, n_y) [engineering units]."""


@runtime_checkable
class RestingPlant(Plant, Protocol):
    """A plant that can start at rest at a wanted output, as episodes do."""

    def rest(
        self,
        n: int,
        y: np.ndarray,
        disturbance: np.ndarray,
        low: np.ndarray,
        high: np.ndarray,
        rng: Draws,
    ) -> tuple[Any, np.ndarray]:
        """Return the state at rest at y and the actuator values that hold it.

        Args:
            n: episodes.
            y: wanted outputs (n, n_y); NaN where any value will do [engineering units].
            disturbance: measured disturbances (n, n_d) [engineering units].
            low: (n_actuators,) limits the holding input has to respect.
            high: (n_actuators,).
            rng: draws.

        Returns:
            the state, and u (n, n_actuators) [engineering units].
        """
