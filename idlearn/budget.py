"""Plant-steps: the one currency in which tuning and training are paid.

A plant-step is one sample of one simulated plant, whoever asks for it. The engine charges the
budget, so that the ledger of a report states what happened and not what was configured.
"""

from dataclasses import dataclass


class BudgetSpent(Exception):
    """Signal that a contender asked for more plant-steps than it was given."""


@dataclass
class Budget:
    """Count plant-steps against a limit.

    Args:
        limit: plant-steps allowed [-].
        spent: plant-steps used so far [-].
    """

    limit: int
    spent: int = 0

    @property
    def left(self) -> int:
        """Plant-steps that may still be used."""
        return max(0, self.limit - self.spent)

    def affords(self, steps: int) -> bool:
        """Tell whether `steps` more plant-steps fit."""
        return self.spent + steps <= self.limit

    def charge(self, steps: int) -> None:
        """Charge `steps`; raise BudgetSpent, charging nothing, when they do not fit."""
        if not self.affords(steps):
            raise BudgetSpent(f"{steps} plant-steps asked for, {self.left} left of {self.limit}")
        self.spent += steps
