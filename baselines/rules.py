"""Tuning rules: settings from a first-order-plus-dead-time picture of the plant."""

import math

from idlearn.baselines.pid import PidSettings
from idlearn.identification import Fopdt


def simc(plant: Fopdt, closed_loop_s: float | None = None) -> PidSettings:
    """Return PI settings by the SIMC rule.

    Kc = tau / (k (tc + theta)), Ti = min(tau, 4 (tc + theta)); for an integrating plant
    Kc = 1 / (k' (tc + theta)), Ti = 4 (tc + theta).
    S. Skogestad, J. Process Control 13, 2003, 291-309 (from memory).

    Args:
        plant: gain, time constant and dead time.
        closed_loop_s: wanted closed-loop time constant tc; None takes the dead time, the rule's
            own choice [s].
    """
    theta = max(plant.dead_time_s, 1e-9)
    tc = theta if closed_loop_s is None else closed_loop_s
    if plant.kind == "integrating":
        return PidSettings(
            gain=1.0 / (plant.gain * (tc + theta)), integral_time_s=4.0 * (tc + theta)
        )
    if plant.gain == 0 or not math.isfinite(plant.gain):
        return PidSettings(gain=0.0, integral_time_s=max(plant.time_constant_s, 1e-9))
    return PidSettings(
        gain=plant.time_constant_s / (plant.gain * (tc + theta)),
        integral_time_s=min(plant.time_constant_s, 4.0 * (tc + theta)),
    )
