"""PID control with two degrees of freedom, filtered derivative and back-calculation.

Ideal form, in samples of h seconds:

    u = K (b r - y) + I + D
    I[k] = I[k-1] + K h / Ti (r[k] - y[k]) + h / Tt (applied u - own unlimited request)
    D[k] = Td / (Td + N h) D[k-1] - K Td N / (Td + N h) (y[k] - y[k-1])

The last term of I is back-calculation: it compares what was applied one sample ago with what was
asked for then. K. J. Astrom, T. Hagglund, PID Controllers, 2nd ed., 1995, chapter 3 (from memory).
"""

import math
from collections.abc import Mapping, Sequence
from dataclasses import asdict, dataclass, replace
from typing import Any, ClassVar, Literal, Self

import numpy as np

from idlearn.control import FilterController, FilterForm, ObservationLayout
from idlearn.envs.actuator import Actuator
from idlearn.errors import InputError

Form = Literal["ideal", "parallel", "series"]


@dataclass(frozen=True, kw_only=True)
class PidSettings:
    """Settings of one PID loop, in the ideal form.

    Attributes:
        gain: K [actuator unit / output unit].
        integral_time_s: Ti; inf for no integral action [s].
        derivative_time_s: Td; 0 for no derivative action [s].
        filter_n: N, derivative filter Td / N, usually 2 to 20 [-].
        setpoint_weight: b, share of the setpoint in the proportional part [-].
        tracking_time_s: Tt; None takes sqrt(Ti Td), or Ti without derivative action [s].
    """

    gain: float
    integral_time_s: float = math.inf
    derivative_time_s: float = 0.0
    filter_n: float = 10.0
    setpoint_weight: float = 1.0
    tracking_time_s: float | None = None

    def __post_init__(self) -> None:
        """Refuse settings that no controller can have."""
        if not math.isfinite(self.gain):
            raise InputError(f"gain is {self.gain}; give a finite number")
        if not self.integral_time_s > 0:
            raise InputError(f"integral_time_s is {self.integral_time_s}; give a time above 0")
        if not 0 <= self.derivative_time_s < math.inf:
            raise InputError(f"derivative_time_s is {self.derivative_time_s}; give 0 or more")
        if not 0 < self.filter_n < math.inf or not math.isfinite(self.setpoint_weight):
            raise InputError("filter_n has to be above 0, setpoint_weight finite")
        if self.tracking_time_s is not None and not self.tracking_time_s > 0:
            raise InputError(f"tracking_time_s is {self.tracking_time_s}; give a time above 0")

    @property
    def tracking(self) -> float:
        """Tracking time in use; inf without integral action [s]."""
        if self.tracking_time_s is not None:
            return self.tracking_time_s
        if self.derivative_time_s > 0:
            return math.sqrt(self.integral_time_s * self.derivative_time_s)
        return self.integral_time_s


def from_form(form: Form, gain: float, integral: float, derivative: float) -> tuple[float, ...]:
    """Convert settings to the ideal form (K, Ti, Td).

    Args:
        form: "ideal" K, Ti, Td; "series" K', Ti', Td'; "parallel" Kp, Ki, Kd.
        gain: first setting.
        integral: second; in the parallel form a gain per second, 0 for none.
        derivative: third; in the parallel form a gain times seconds.
    """
    if form == "ideal":
        return gain, integral, derivative
    if form == "series":
        factor = 1.0 + derivative / integral
        return gain * factor, integral * factor, derivative / factor
    if form == "parallel":
        return gain, gain / integral if integral else math.inf, derivative / gain
    raise InputError(f"form is {form!r}; use ideal, parallel or series")


def to_series(gain: float, integral: float, derivative: float) -> tuple[float, ...]:
    """Convert ideal settings to the series form.

    Raises:
        InputError: Ti is below 4 Td, for which there is no series form.
    """
    if integral < 4 * derivative:
        raise InputError(
            f"integral time {integral:g} is below four times the derivative time "
            f"{derivative:g}; such settings have no series form"
        )
    root = math.sqrt(1.0 - 4.0 * derivative / integral) if math.isfinite(integral) else 1.0
    if not math.isfinite(integral):
        return gain, math.inf, derivative
    return gain * (1 + root) / 2, integral * (1 + root) / 2, integral * (1 - root) / 2


def to_parallel(gain: float, integral: float, derivative: float) -> tuple[float, ...]:
    """Convert ideal settings to gains (Kp, Ki, Kd)."""
    return gain, gain / integral, gain * derivative


@dataclass(frozen=True)
class Pairing:
    """Which setpoint column is controlled by which actuator.

    Attributes:
        column: setpoint column.
        actuator: actuator index.
    """

    column: int
    actuator: int


def pid_form(
    loops: Sequence[tuple[Pairing, PidSettings]],
    rest: np.ndarray,
    layout: ObservationLayout,
    actuator: Actuator,
    sample_time_s: float,
    latency: int = 0,
) -> FilterForm:
    """Return the filter form of one or several PID loops.

    Args:
        loops: pairing and settings of each loop.
        rest: value of actuators without a loop (n_u,) [engineering units].
        layout: observation columns.
        actuator: limits of the requests.
        sample_time_s: h [s].
        latency: samples between a decision and its effect.

    States per loop: y[k], D[k], I[k], then the own unlimited requests of the last latency + 1
    samples, newest first.
    """
    n_u = layout.n_u
    n_in = layout.n_obs + latency * n_u
    per = 4 + latency
    n_z = per * len(loops)
    F, G, g = np.zeros((n_z, n_z)), np.zeros((n_z, n_in)), np.zeros(n_z)
    H, J, h = np.zeros((n_u, n_z)), np.zeros((n_u, n_in)), np.array(rest, dtype=float)
    Z, z0 = np.zeros((n_z, n_in)), np.zeros(n_z)
    for number, (pair, s) in enumerate(loops):
        K, b = s.gain, s.setpoint_weight
        dt = sample_time_s
        keep = s.derivative_time_s / (s.derivative_time_s + s.filter_n * dt)
        kick = K * s.derivative_time_s * s.filter_n / (s.derivative_time_s + s.filter_n * dt)
        into = K * dt / s.integral_time_s
        back = min(dt / s.tracking, 1.0)
        y, r = layout.controlled[pair.column], layout.setpoint.start + pair.column
        u = layout.u.start + pair.actuator
        at = number * per
        i_y, i_d, i_i, i_w = at, at + 1, at + 2, at + 3
        G[i_y, y] = 1.0
        F[i_d, i_d], F[i_d, i_y], G[i_d, y] = keep, kick, -kick
        F[i_i, i_i] = 1.0
        G[i_i, r], G[i_i, y] = into, -into
        G[i_i, u], F[i_i, i_w + latency] = back, -back
        # the request itself, from the states and signals of this sample
        F[i_w] = F[i_d] + F[i_i]
        G[i_w] = G[i_d] + G[i_i]
        G[i_w, r] += K * b
        G[i_w, y] -= K
        for j in range(latency):
            F[i_w + 1 + j, i_w + j] = 1.0
        H[pair.actuator, i_w] = 1.0
        h[pair.actuator] = 0.0
        Z[i_y, y] = 1.0
        Z[i_i, u], Z[i_i, r], Z[i_i, y] = 1.0, -K * b, K
        Z[i_w : i_w + latency + 1, u] = 1.0
    return FilterForm.linear(
        F=F,
        G=G,
        g=g,
        H=H,
        J=J,
        h=h,
        Z=Z,
        z0=z0,
        low=actuator.low,
        high=actuator.high,
        latency=latency,
    )


class PidController(FilterController):
    """One or several PID loops.

    Args:
        loops: pairing and settings of each.
        rest: value of actuators without a loop (n_u,).
        layout: observation columns.
        sample_time_s: [s].
        low: (n_u,) lower limits of the requests.
        high: (n_u,) upper limits.
        latency: samples between a decision and its effect.
    """

    kind: ClassVar[str] = "pid"

    def __init__(
        self,
        loops: Sequence[tuple[Pairing, PidSettings]],
        rest: np.ndarray,
        layout: ObservationLayout,
        sample_time_s: float,
        low: np.ndarray,
        high: np.ndarray,
        latency: int = 0,
    ) -> None:
        """Build the filter form from the settings."""
        limits = replace(
            Actuator.free(layout.n_u), low=np.asarray(low, float), high=np.asarray(high, float)
        )
        self.loops, self.rest = tuple(loops), np.asarray(rest, float)
        form = pid_form(self.loops, self.rest, layout, limits, sample_time_s, latency)
        super().__init__(form, layout, sample_time_s)

    def settings(self) -> dict[str, Any]:
        """Return readable settings, one entry per loop."""
        return {
            "form": "ideal",
            "loops": [{**asdict(p), **asdict(s)} for p, s in self.loops],
            "rest": self.rest,
            "low": self.form.low,
            "high": self.form.high,
            "latency": self.form.latency,
        }

    @classmethod
    def from_settings(
        cls, settings: Mapping[str, Any], layout: ObservationLayout, sample_time_s: float
    ) -> Self:
        """Build the controller from readable settings."""
        loops = []
        for held in settings["loops"]:
            entry = dict(held)
            pair = Pairing(int(entry.pop("column")), int(entry.pop("actuator")))
            loops.append((pair, PidSettings(**entry)))
        return cls(
            loops,
            settings["rest"],
            layout,
            sample_time_s,
            settings["low"],
            settings["high"],
            int(settings["latency"]),
        )
