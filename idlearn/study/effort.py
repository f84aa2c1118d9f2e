"""How much work a study does: budgets and counts, the same for every contender."""

from dataclasses import dataclass

from idlearn.errors import SheetError


@dataclass(frozen=True)
class Effort:
    """Counts of one effort level.

    Attributes:
        name: "quick", "standard" or "thorough".
        practice: practice plants.
        selection: selection plants.
        jury: jury plants.
        practice_seeds: seeds per scenario while tuning and training.
        jury_seeds: seeds per scenario before the jury.
        budget_steps: plant-steps that each contender may spend on tuning or training.
        runs: training runs per learned contender; 5 or fewer are called exploratory.
        resamples: bootstrap resamples.
    """

    name: str
    practice: int
    selection: int
    jury: int
    practice_seeds: int
    jury_seeds: int
    budget_steps: int
    runs: int
    resamples: int


EFFORTS = {
    "quick": Effort("quick", 12, 8, 24, 1, 6, 12_000_000, 3, 1000),
    "standard": Effort("standard", 24, 16, 48, 2, 16, 100_000_000, 10, 4000),
    "thorough": Effort("thorough", 48, 32, 96, 3, 48, 400_000_000, 20, 10_000),
}


def effort_of(name: str) -> Effort:
    """Return the effort level called `name`.

    Raises:
        SheetError: there is no such level.
    """
    if name not in EFFORTS:
        raise SheetError(f"effort is {name!r}; choose one of {sorted(EFFORTS)}")
    return EFFORTS[name]
