"""Is the log a closed loop, and does anything from outside move it?

In a closed loop without outside moves the feedback law fits the data as well as the plant does:
the estimate is then something between the plant and minus the inverse of the controller
(T. Soderstrom, P. Stoica, System Identification, 1989, chapter 10, from memory), with a condition
number that looks harmless. So the question is asked of the signals, not of the estimate.
"""

from dataclasses import dataclass

import numpy as np

from idlearn.logs import PlantLog

LAGS = 4
LEAST_SHARE = 0.05  # of the input's own news that has to come from outside the loop
DECLARED = 0.1  # the same where the log has a setpoint
CLOSED = 0.5  # share of the input's news that the output explains, from which a loop is closed


@dataclass(frozen=True)
class Feedback:
    """How the actuators come about, in shares of what their own past does not tell.

    Attributes:
        closed: whether the outputs drive the actuators.
        by_output: share explained by present and past outputs (0..1), largest over actuators.
        from_outside: share that comes from setpoint moves, or that nothing seen explains
            (an operator, a test signal), least over actuators (0..1).
        setpoint_moves: number of setpoint changes.
    """

    closed: bool
    by_output: float
    from_outside: float
    setpoint_moves: int

    @property
    def excited(self) -> bool:
        """Whether the record can tell the plant from the feedback law."""
        return not self.closed or self.from_outside >= LEAST_SHARE


def find_feedback(log: PlantLog) -> Feedback:
    """Regress each actuator on its own past, on the outputs and on the setpoints.

    Saturated samples are no feedback law and are left out.
    """
    moves = 0
    if log.setpoint is not None:
        for a, b in log.segments:
            moves += int(np.any(np.diff(log.setpoint[a:b], axis=0) != 0, axis=1).sum())
    closed, by_output, outside = False, 0.0, 1.0
    for j in range(log.n_u):
        own, outputs, setpoints, target = _rows(log, j)
        if len(target) < 20 * LAGS:
            continue
        news = _left(own, target)
        if news <= 1e-12 * float(np.mean(target**2) + 1e-300):
            # the actuator's own past tells everything: it hardly moves
            outside = min(outside, 0.0)
            continue
        without = _left(np.concatenate([own, outputs], axis=1), target) / news
        whole = _left(np.concatenate([own, outputs, setpoints], axis=1), target) / news
        by_output = max(by_output, 1.0 - without)
        # a declared setpoint means that there is a loop; it takes less to see it at work
        threshold = DECLARED if log.setpoint is not None else CLOSED
        if 1.0 - min(without, whole) > threshold and 1.0 - without > 0.5 * threshold:
            closed = True
            # without setpoint moves, what the law leaves open is its own non-linearity
            outside = min(outside, max(without - whole, 0.0) if moves else 0.0)
    return Feedback(closed, by_output, outside if closed else 1.0, moves)


def _rows(log: PlantLog, j: int) -> tuple[np.ndarray, np.ndarray, np.ndarray, np.ndarray]:
    own, outputs, setpoints, target = [], [], [], []
    low, high = log.actuators[j].low, log.actuators[j].high
    for a, b in log.segments:
        n = b - a - LAGS
        if n < 1:
            continue
        u, y = log.u[a:b, j], log.y[a:b]
        r = log.setpoint[a:b] if log.setpoint is not None else np.zeros((b - a, 0))
        free = (u[LAGS:] > low) & (u[LAGS:] < high)

        def lags(x: np.ndarray, first: int, n: int = n, free: np.ndarray = free) -> np.ndarray:
            columns = [x[LAGS - i : LAGS - i + n] for i in range(first, LAGS)]
            return np.concatenate(columns, axis=1)[free]

        own.append(lags(u[:, None], 1))
        outputs.append(lags(y, 0))
        setpoints.append(lags(r, 0))
        target.append(u[LAGS:][free])
    if not target:
        return np.zeros((0, 1)), np.zeros((0, 1)), np.zeros((0, 0)), np.zeros(0)
    parts = [np.concatenate(p) for p in (own, outputs, setpoints)]
    return parts[0], parts[1], parts[2], np.concatenate(target)


def _left(columns: np.ndarray, target: np.ndarray) -> float:
    """Return the mean squared remainder of the target after least squares with a constant."""
    design = np.concatenate([columns, np.ones((len(target), 1))], axis=1)
    scale = np.maximum(np.abs(design).max(axis=0), 1e-300)
    solution = np.linalg.lstsq(design / scale, target, rcond=1e-10)[0]
    return float(np.mean((target - design / scale @ solution) ** 2))
