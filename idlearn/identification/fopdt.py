"""A first-order-plus-dead-time picture of a model, for tuning rules."""

import math
from dataclasses import dataclass

import numpy as np

from idlearn.models import InnovationsModel

LONGEST = 20_000  # samples of a step response after which a plant counts as integrating
LOW, HIGH = 1 - math.exp(-1 / 3), 1 - math.exp(-1)  # 28.3 % and 63.2 %


@dataclass(frozen=True)
class Fopdt:
    """Gain, time constant and dead time.

    Attributes:
        gain: steady-state gain [output unit / input unit]; slope per second for "integrating"
            [output unit / input unit / s].
        time_constant_s: [s]; inf for "integrating".
        dead_time_s: [s], the sample-and-hold left out.
        kind: "lag" or "integrating".
    """

    gain: float
    time_constant_s: float
    dead_time_s: float
    kind: str = "lag"


def two_point(t28: float, t63: float) -> tuple[float, float]:
    """Return time constant and dead time from the times of 28.3 % and 63.2 % of a step response.

    Exact on a first-order lag with dead time. After C. L. Smith, Digital Computer Process
    Control, 1972 (from memory).
    """
    tau = 1.5 * (t63 - t28)
    return tau, max(t63 - tau, 0.0)


def fit_fopdt(model: InnovationsModel, output: int = 0, source: int = 0) -> Fopdt:
    """Return the picture of one input-output pair.

    Args:
        model: any model with `linearise()`.
        output: index of the output.
        source: index of the input.
    """
    linear = model.linearise()
    dt = linear.sample_time_s
    n = _long_enough(linear)
    response = linear.step_response(n)[:, output, source]
    end = linear.dc_gain()[output, source]
    # several equal lags settle later than their pole tells
    while not _settled(response, end) and 0 < abs(end) < math.inf and n < LONGEST:
        n = min(2 * n, LONGEST)
        response = linear.step_response(n)[:, output, source]
    if not _settled(response, end):
        slope = (response[-1] - response[n // 2]) / (n - 1 - n // 2)
        if slope == 0:
            return Fopdt(0.0, dt, 0.0)
        # the asymptote of a ramp meets zero at the dead time
        meets = (n - 1) - response[-1] / slope
        return Fopdt(slope / dt, math.inf, max(meets, 1.0) * dt, "integrating")
    part = response / end
    t28, t63 = (_crossing(part, level) * dt for level in (LOW, HIGH))
    tau, dead = two_point(t28, t63)
    return Fopdt(float(end), max(tau, 0.1 * dt), dead)


def _settled(response: np.ndarray, end: float) -> bool:
    return bool(math.isfinite(end) and abs(response[-1] - end) < 0.05 * abs(end))


def _long_enough(model: InnovationsModel) -> int:
    radius = min(model.spectral_radius(), 0.9999)
    settle = 5 / -math.log(radius) if radius > 0 else 1
    return int(min(max(4 * model.n_x, settle + 2 * model.n_x, 50), LONGEST))


def _crossing(part: np.ndarray, level: float) -> float:
    """Return when the response first reaches a level, in samples.

    Between samples a lag approaches its end exponentially, so that the logarithm of what is
    missing is interpolated.
    """
    k = int(np.argmax(part >= level))
    if k == 0:
        return 0.0
    before, after = 1 - part[k - 1], 1 - part[k]
    if after <= 0:
        return k - 1 + (level - part[k - 1]) / (part[k] - part[k - 1])
    share = math.log(before / (1 - level)) / math.log(before / after)
    return k - 1 + share
