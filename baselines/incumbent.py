"""What runs today, from the sheet's [incumbent] section."""

import math
from dataclasses import dataclass
from pathlib import Path
from typing import ClassVar, Literal

import numpy as np

from idlearn.baselines.pid import Form, Pairing, PidController, PidSettings, from_form
from idlearn.control import ObservationLayout, load_controller
from idlearn.envs.actuator import Actuator
from idlearn.envs.contender import Contender
from idlearn.errors import InputError


@dataclass(frozen=True, kw_only=True)
class Incumbent:
    """Section [incumbent].

    Attributes:
        kind: "pid", or "linear" with the file of a saved controller.
        form: of the PID settings.
        gain: K; proportional gain in the parallel form [actuator unit / output unit].
        integral_time_s: ideal and series form; inf for none [s].
        derivative_time_s: ideal and series form [s].
        integral_gain: parallel form [actuator unit / output unit / s].
        derivative_gain: parallel form [actuator unit s / output unit].
        filter_n: derivative filter Td / N [-].
        setpoint_weight: share of the setpoint in the proportional part [-].
        tracking_time_s: of back-calculation; None takes the usual choice [s].
        file: of a saved controller, relative to the sheet.
    """

    __pydantic_config__: ClassVar[dict[str, str]] = {"extra": "forbid"}

    kind: Literal["pid", "linear", "from-log"]
    form: Form = "ideal"
    gain: float = 0.0
    integral_time_s: float = math.inf
    derivative_time_s: float = 0.0
    integral_gain: float = 0.0
    derivative_gain: float = 0.0
    filter_n: float = 10.0
    setpoint_weight: float = 1.0
    tracking_time_s: float | None = None
    file: str = ""

    def __post_init__(self) -> None:
        """Refuse what no incumbent can be built from."""
        if self.kind == "from-log":
            raise InputError(
                "kind 'from-log' is not available in this version; give the settings of the "
                "controller, or leave the section out"
            )
        if self.kind == "linear" and not self.file:
            raise InputError("kind 'linear' needs `file`, a saved controller")
        if self.kind == "pid":
            self.ideal()

    def ideal(self) -> PidSettings:
        """Return the PID settings in the ideal form."""
        if self.gain == 0 or not math.isfinite(self.gain):
            raise InputError(f"gain is {self.gain}; give the gain of the PID that runs today")
        if self.form == "parallel":
            K, Ti, Td = from_form("parallel", self.gain, self.integral_gain, self.derivative_gain)
        else:
            if not self.integral_time_s > 0:
                raise InputError(f"integral_time_s is {self.integral_time_s}; give a time above 0")
            K, Ti, Td = from_form(
                self.form, self.gain, self.integral_time_s, self.derivative_time_s
            )
        return PidSettings(
            gain=K,
            integral_time_s=Ti,
            derivative_time_s=Td,
            filter_n=self.filter_n,
            setpoint_weight=self.setpoint_weight,
            tracking_time_s=self.tracking_time_s,
        )


def build_incumbent(
    section: Incumbent,
    layout: ObservationLayout,
    actuator: Actuator,
    sample_time_s: float,
    latency: int,
    beside: Path,
) -> Contender:
    """Return the incumbent as a contender.

    Args:
        section: of the sheet.
        layout: observation columns.
        actuator: limits.
        sample_time_s: [s].
        latency: samples between a decision and its effect.
        beside: folder of the sheet, for relative paths.

    Raises:
        InputError: several loops for one set of PID settings, or a file that does not fit.
    """
    if section.kind == "linear":
        controller = load_controller(beside / section.file)
        if controller.layout != layout or controller.sample_time_s != sample_time_s:
            raise InputError(
                f"{section.file} was made for other signals or another sample time; give the "
                "controller of this plant"
            )
        return Contender(name="incumbent", side="incumbent", controller=controller)
    if layout.n_u != 1 or len(layout.controlled) != 1:
        raise InputError(
            "the incumbent is given as one PID, but the study has "
            f"{len(layout.controlled)} setpoints and {layout.n_u} actuators; save the loops as a "
            "controller file and use kind 'linear'"
        )
    pid = PidController(
        [(Pairing(0, 0), section.ideal())],
        np.zeros(1),
        layout,
        sample_time_s,
        actuator.low,
        actuator.high,
        latency,
    )
    return Contender(name="incumbent", side="incumbent", controller=pid)
