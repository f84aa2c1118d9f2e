"""What a fit returns: the model, how it went, and figures."""

from collections.abc import Mapping
from dataclasses import dataclass, field
from enum import Enum
from typing import Any


class Status(Enum):
    """How an estimation went."""

    OK = "ok"
    RANK_DEFICIENT = "rank deficient"
    UNSTABLE = "unstable"
    FAILED = "failed"


@dataclass(frozen=True, eq=False)
class FitResult:
    """A fitted model.

    Attributes:
        model: the model.
        status: OK, or what is wrong with it.
        stats: figures of the fit.
        advice: what to do about a status other than OK; "" if nothing.
    """

    model: Any
    status: Status
    stats: Mapping[str, float] = field(default_factory=dict)
    advice: str = ""
