"""The signals of a log, and what was found out about them."""

import math
from dataclasses import dataclass

from idlearn.errors import InputError

ROLES = ("actuator", "output", "setpoint", "disturbance", "mode", "quality", "ignore")
# Roles whose columns become arrays of a log, in the order of `PlantLog.signals`.
DATA_ROLES = ("actuator", "output", "setpoint", "disturbance")


@dataclass(frozen=True, kw_only=True)
class Signal:
    """One column of a log.

    Attributes:
        name: column name.
        role: one of ROLES.
        unit: engineering unit, as text.
        low: lowest value the signal can take [unit]; -inf if not known.
        high: highest value the signal can take [unit]; inf if not known.
        rate_per_s: fastest change of an actuator [unit/s]; inf if not limited.
        resolution: step between neighbouring values [unit]; 0 if not known.
        trip_low: an output below it ends operation [unit]; -inf if there is none.
        trip_high: an output above it ends operation [unit]; inf if there is none.
        of: name of the output that a setpoint belongs to; empty otherwise.

    Raises:
        InputError: unknown role, low >= high, rate <= 0 and the like.
    """

    name: str
    role: str
    unit: str = ""
    low: float = -math.inf
    high: float = math.inf
    rate_per_s: float = math.inf
    resolution: float = 0.0
    trip_low: float = -math.inf
    trip_high: float = math.inf
    of: str = ""

    def __post_init__(self) -> None:
        """Refuse figures that contradict each other."""
        fault = signal_fault(self)
        if fault:
            raise InputError(f"signal {self.name!r}: {fault}")


@dataclass(frozen=True)
class Finding:
    """One thing that was found in a log.

    Attributes:
        finding: its short name.
        severity: "note", "care" or "stop".
        sentence: what was found, where, and what to do.
    """

    finding: str
    severity: str
    sentence: str


@dataclass(frozen=True)
class Rejected:
    """Rows of the source that are not used.

    Attributes:
        reason: why, in a few words.
        rows: how many.
    """

    reason: str
    rows: int


def signal_fault(signal: Signal) -> str:
    """Return what is wrong with a signal's figures, or an empty text."""
    if signal.role not in ROLES:
        return f"role is {signal.role!r}; choose one of {', '.join(ROLES)}"
    for key in ("low", "high", "rate_per_s", "resolution", "trip_low", "trip_high"):
        if math.isnan(getattr(signal, key)):
            return f"{key} is not a number; give a figure or leave the key out"
    if signal.low >= signal.high:
        return f"low is {signal.low:g} and high is {signal.high:g}; low has to be below high"
    if signal.trip_low >= signal.trip_high:
        return (
            f"trip_low is {signal.trip_low:g} and trip_high is {signal.trip_high:g}; "
            "trip_low has to be below trip_high"
        )
    if signal.rate_per_s <= 0:
        return f"rate_per_s is {signal.rate_per_s:g}; it has to be greater than 0"
    if not 0 <= signal.resolution < math.inf:
        return f"resolution is {signal.resolution:g}; it has to be 0 or more and finite"
    if signal.of and signal.role != "setpoint":
        return f"of is {signal.of!r}; only a setpoint belongs to an output, so take the key out"
    return ""


def check_roles(signals: tuple[Signal, ...]) -> None:
    """Check that the signals of one log fit together.

    Args:
        signals: of any role.

    Raises:
        InputError: no actuator, no output, a name twice, a setpoint of an unknown output or of
            none where there are several, two setpoints of one output.
    """
    names = [s.name for s in signals]
    for name in names:
        if names.count(name) > 1:
            raise InputError(f"two signals are called {name!r}; give each its own name")
    for role in ("actuator", "output"):
        if not any(s.role == role for s in signals):
            raise InputError(
                f"no signal has the role {role!r}; give it to at least one of "
                + (", ".join(repr(n) for n in names) or "the columns")
            )
    outputs = [s.name for s in signals if s.role == "output"]
    taken: dict[str, str] = {}
    for s in signals:
        if s.role != "setpoint":
            continue
        if not s.of and len(outputs) > 1:
            raise InputError(
                f"setpoint {s.name!r} does not say which output it belongs to; "
                f"add of = one of {', '.join(repr(n) for n in outputs)}"
            )
        target = s.of or outputs[0]
        if target not in outputs:
            raise InputError(
                f"setpoint {s.name!r} is of {target!r}, which is no output; "
                f"name one of {', '.join(repr(n) for n in outputs)}"
            )
        if target in taken:
            raise InputError(
                f"setpoints {taken[target]!r} and {s.name!r} both belong to {target!r}; keep one"
            )
        taken[target] = s.name
