"""What every contender is given to tune or train on, and what comes out: alike for both sides."""

import math
from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any, Literal

import numpy as np

from idlearn.control import Controller
from idlearn.cost import RiccatiWeights
from idlearn.envs.population import TrialGround
from idlearn.models import Ensemble

Side = Literal["incumbent", "classical", "learned"]


@dataclass(frozen=True)
class Robustness:
    """The limit that both sides keep while they are tuned.

    Attributes:
        peak: largest sensitivity peak [-].
        share: share of the practice plants on which it has to hold [-].
    """

    peak: float = 2.0
    share: float = 0.9

    def met(self, peaks: np.ndarray) -> np.ndarray:
        """Return the smallest peak (m,) that `share` of the plants keep, of peaks (m, n_plants)."""
        ordered = np.sort(np.where(np.isnan(peaks), np.inf, peaks), axis=1)
        kept = math.ceil(self.share * peaks.shape[1] - 1e-9)
        return np.asarray(ordered[:, max(kept, 1) - 1])

    def penalty(self, peaks: np.ndarray) -> np.ndarray:
        """Return a factor (m,) >= 1 for peaks (m, n_plants); 1 where the limit is kept.

        An unstable loop has an infinite peak; one that is no number counts as such.
        The factor grows with the excess, so that a search that starts outside finds its way back.
        """
        excess = np.maximum(np.minimum(self.met(peaks), 1e3) / self.peak - 1.0, 0.0)
        return np.asarray(np.where(excess > 0, 2.0 + 10.0 * excess, 1.0))


def pessimistic(costs: np.ndarray) -> np.ndarray:
    """Return the mean of the average cost and of its worst tenth over the plants.

    Args:
        costs: (m, n_plants, n_streams).

    Returns:
        (m,): half the overall mean plus half the mean over the worst tenth of the plants
        (at least one), the pessimism of both sides.
    """
    per_plant = np.sort(costs.mean(axis=2), axis=1)
    worst = max(1, -(-per_plant.shape[1] // 10))
    return np.asarray(0.5 * per_plant.mean(axis=1) + 0.5 * per_plant[:, -worst:].mean(axis=1))


@dataclass(frozen=True)
class Assignment:
    """The same task for every contender.

    Attributes:
        practice: plants and streams for tuning and training.
        selection: plants and streams for choosing among what came out.
        nominal: one-member ensemble of the practice model, for rules, LQG and prediction.
        weights: quadratic part of the primary cost.
        cost: index of the primary cost.
        budget_steps: plant-steps each contender may spend.
        runs: independent training runs per contender.
        seed: the study's seed.
        robustness: limit kept by both sides.
        reach: (n_u,) typical size of an actuator's movement in the log [engineering units].
        spread: (n_y,) typical size of an output's movement in the log [engineering units].
        latency_samples: known to every contender.
    """

    practice: TrialGround
    selection: TrialGround
    nominal: Ensemble
    weights: RiccatiWeights
    cost: int
    budget_steps: int
    runs: int
    seed: int
    robustness: Robustness
    reach: np.ndarray
    spread: np.ndarray
    latency_samples: int = 0


@dataclass(frozen=True)
class TrainingRun:
    """One tuning or training run, kept whether it was good or not.

    Attributes:
        label: which start or seed.
        practice: pessimistic cost on the practice plants at its end [-].
        selection: pessimistic cost on the selection plants [-].
        history: best practice value after each generation [-].
    """

    label: str
    practice: float
    selection: float
    history: tuple[float, ...] = ()


@dataclass(frozen=True)
class Contender:
    """A controller ready to be judged, with the record of how it came about.

    Attributes:
        name: unique in the study; also the file name.
        side: "incumbent", "classical" or "learned".
        controller: the artefact that would be deployed.
        plant_steps: plant-steps spent, as charged by the engine.
        seconds: wall time spent [s].
        runs: every run.
        at_optimum: whether small changes of its parameters make it no better; None if untested.
        peak: sensitivity peak met on the asked share of the practice plants; NaN if not linear.
        facts: settings worth showing (gains, weights).
    """

    name: str
    side: Side
    controller: Controller
    plant_steps: int = 0
    seconds: float = 0.0
    runs: tuple[TrainingRun, ...] = ()
    at_optimum: bool | None = None
    peak: float = float("nan")
    facts: Mapping[str, Any] = field(default_factory=dict)
