"""How tuning and training score a candidate: the same for classical and learned contenders."""

from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace

import numpy as np

from idlearn.budget import Budget, BudgetSpent
from idlearn.control import FilterForm
from idlearn.envs.contender import Assignment, pessimistic
from idlearn.envs.margins import PlantResponses, closed_loop_radius, sensitivity_peaks
from idlearn.envs.population import TrialGround, run_forms

CHUNK = 32  # candidates scored together


@dataclass
class Scorer:
    """Scores parameter vectors alike for every contender: pessimism, robustness limit, budget.

    Attributes:
        assignment: the task.
        build: parameters (n,) -> filter form.
        budget: of the contender.
        ground: plants and streams to practise on; None takes the assignment's.
    """

    assignment: Assignment
    build: Callable[[np.ndarray], FilterForm]
    budget: Budget
    ground: TrialGround | None = None

    def __post_init__(self) -> None:
        """Compute what every score needs."""
        self.responses = PlantResponses.of(self.assignment.practice.ensemble)

    def peaks(self, forms: Sequence[FilterForm]) -> np.ndarray:
        """Return sensitivity peaks (m, P) on the practice plants."""
        a = self.assignment
        return sensitivity_peaks(forms, self.responses, a.practice.loop.layout, a.latency_samples)

    def __call__(self, batch: np.ndarray) -> np.ndarray:
        """Return the pessimistic, penalised cost (m,) of a batch (m, n_parameters)."""
        a, out = self.assignment, []
        ground = a.practice if self.ground is None else self.ground
        for i in range(0, len(batch), CHUNK):
            forms = [self.build(x) for x in batch[i : i + CHUNK]]
            costs = run_forms(ground, forms, cost=a.cost, budget=self.budget)
            out.append(pessimistic(costs) * a.robustness.penalty(self.peaks(forms)))
        return np.concatenate(out)

    def peak(self, x: np.ndarray) -> float:
        """Return the sensitivity peak that the asked share of the practice plants keep."""
        return float(self.assignment.robustness.met(self.peaks([self.build(x)]))[0])

    def selection(self, x: np.ndarray) -> float:
        """Return the pessimistic cost on the selection plants, inf if the budget is spent."""
        a = self.assignment
        try:
            form = self.build(x)
            costs = run_forms(a.selection, [form], cost=a.cost, budget=self.budget)
        except BudgetSpent:
            return float("inf")
        radius = closed_loop_radius(
            form, a.practice.ensemble, a.practice.loop.layout, a.latency_samples
        )
        # a loop that is unstable too slowly to show in an episode must not be chosen
        factor = 1.0 if np.mean(radius < 1 + 1e-6) >= a.robustness.share else 1e3
        return float(pessimistic(costs)[0]) * factor

    def reserve(self, steps: int) -> "Scorer":
        """Return a scorer that leaves so many plant-steps of the budget untouched."""
        return replace(self, budget=_Reserved(self.budget, steps))


class _Reserved(Budget):
    """A budget that keeps the last steps of another one back."""

    def __init__(self, whole: Budget, kept: int) -> None:
        super().__init__(max(whole.limit - kept, 0), whole.spent)
        self._whole = whole

    def charge(self, steps: int) -> None:
        self.spent = self._whole.spent
        super().charge(steps)
        self._whole.charge(steps)
