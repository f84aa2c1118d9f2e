"""How a long run tells where it is; the command line decides how that looks."""

from typing import Protocol


class Progress(Protocol):
    """Is told about stages and steps."""

    def stage(self, name: str, steps: int) -> None:
        """Begin a stage of so many steps."""

    def step(self, note: str = "") -> None:
        """Report one step of the present stage as done."""


class Silent:
    """Say nothing."""

    def stage(self, name: str, steps: int) -> None:
        """Begin a stage of so many steps."""

    def step(self, note: str = "") -> None:
        """Report one step of the present stage as done."""
