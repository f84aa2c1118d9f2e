"""The limits of the verdict: the sheet's [acceptance] section, fixed before any result is seen."""

import hashlib
import json
import math
from dataclasses import asdict, dataclass, field
from typing import ClassVar

from idlearn.errors import InputError


@dataclass(frozen=True, kw_only=True)
class Stress:
    """Errors of the model that the candidate has to bear as well as the baseline does.

    Attributes:
        gain: low and high factor on the actuators' effect, around 1 [-].
        extra_delay_samples: latency that no controller was told of [samples].
        noise: factor on the innovations, 1 or more [-].
    """

    __pydantic_config__: ClassVar[dict[str, str]] = {"extra": "forbid"}

    gain: tuple[float, float] = (0.7, 1.3)
    extra_delay_samples: int = 1
    noise: float = 2.0

    def __post_init__(self) -> None:
        """Refuse stresses that are none."""
        if len(self.gain) != 2 or not 0 < self.gain[0] <= 1 <= self.gain[1] < math.inf:
            raise InputError(
                f"stress gain is {list(self.gain)}; give a low factor above 0 and up to 1 and a "
                "high one of 1 or more"
            )
        object.__setattr__(self, "gain", (float(self.gain[0]), float(self.gain[1])))
        if (
            self.extra_delay_samples < 0
            or int(self.extra_delay_samples) != self.extra_delay_samples
        ):
            raise InputError(
                f"stress extra_delay_samples is {self.extra_delay_samples}; give a whole number "
                "of 0 or more"
            )
        if not 1 <= self.noise < math.inf:
            raise InputError(f"stress noise is {self.noise}; give a factor of 1 or more")


@dataclass(frozen=True, kw_only=True)
class Acceptance:
    """What a candidate has to show.

    Attributes:
        least_gain: least worthwhile fall of the mean cost [-].
        confidence: of every interval and bound [-].
        most_violation: highest acceptable share of episodes with a violation, met when the
            upper bound at `confidence` is no higher [-].
        most_travel_ratio: actuator travel against the baseline's [-].
        least_support: share of steps inside the region the log covers [-].
        worst_tenth_ratio: mean cost of the worst tenth of the episodes against the baseline's [-].
        stress: errors of the model to be borne.
    """

    __pydantic_config__: ClassVar[dict[str, str]] = {"extra": "forbid"}

    least_gain: float = 0.05
    confidence: float = 0.95
    most_violation: float = 0.01
    most_travel_ratio: float = 1.5
    least_support: float = 0.95
    worst_tenth_ratio: float = 1.0
    stress: Stress = field(default_factory=Stress)

    def __post_init__(self) -> None:
        """Refuse limits that no result could be held against."""
        if not 0 <= self.least_gain < 1:
            raise InputError(
                f"least_gain is {self.least_gain}; give a share from 0 up to, not including, 1"
            )
        if not 0.5 < self.confidence < 1:
            raise InputError(
                f"confidence is {self.confidence}; give a share between 0.5 and 1, such as 0.95"
            )
        if not 0 < self.most_violation < 1:
            raise InputError(
                f"most_violation is {self.most_violation}; give a share between 0 and 1, since no "
                "number of episodes can show that a rate is exactly 0"
            )
        if not 0 <= self.least_support <= 1:
            raise InputError(f"least_support is {self.least_support}; give a share from 0 to 1")
        for name in ("most_travel_ratio", "worst_tenth_ratio"):
            value = getattr(self, name)
            if not 0 < value < math.inf:
                raise InputError(f"{name} is {value}; give a ratio above 0")

    def digest(self) -> str:
        """Return the SHA-256 of the limits, written as JSON with sorted keys."""
        # 1 and 1.0 are the same limit
        plain = json.loads(json.dumps(asdict(self)), parse_int=float)
        text = json.dumps(plain, sort_keys=True, separators=(",", ":"))
        return hashlib.sha256(text.encode()).hexdigest()
