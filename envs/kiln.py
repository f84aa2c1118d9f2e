"""The demo plant "kiln": one zone of an electric kiln. Invented, figures and all.

    tau dx/dt = G u(t - theta) + ambient + door - x (1 - r + r |x| / X),   T = T_a + x

x is the rise above the surroundings, u the heater drive from 0 to 100 % and nothing below: the
kiln cools only by its losses. r is the share of the losses that grows with the square of the rise,
a mild stand-in for radiation. Near the working rise X the loop looks like a first-order lag with
gain G / (1 + r) and time constant tau / (1 + r).
"""

import math
from collections.abc import Sequence
from dataclasses import dataclass, fields

import numpy as np

from idlearn.envs.plant import Draws
from idlearn.errors import InputError
from idlearn.logs import Signal

# Tuned as fast as its dead time allows, the closed loop rises in about 130 s: 4 to 10 samples
# per rise time are common practice.
SAMPLE_TIME_S = 20.0

KILN_SIGNALS = (
    Signal(
        name="heater", role="actuator", unit="%", low=0.0, high=100.0, rate_per_s=2.0,
        resolution=0.1,
    ),
    Signal(
        name="temperature", role="output", unit="degC", low=0.0, high=1200.0, trip_high=850.0,
        resolution=0.1,
    ),
    Signal(name="setpoint", role="setpoint", unit="degC", low=0.0, high=1200.0, of="temperature"),
)  # fmt: skip


@dataclass(frozen=True, kw_only=True)
class KilnTruth:
    """Parameters of one kiln, all invented.

    Attributes:
        gain: rise per heater drive at the working rise, without radiation [degC/%].
        time_constant_s: heat capacity over losses [s].
        dead_time_s: from the heater to the sensor [s].
        radiation: share of the losses that grows with the square of the rise [-].
        working_rise: rise at which the losses are those of the linear part [degC].
        surroundings: temperature of the surroundings [degC].
        drift_sd: standard deviation of the slow drift, as a change of the rise it would hold in
            the long run [degC].
        drift_time_s: time in which the drift returns to its mean [s].
        door_interval_s: mean time between door openings [s].
        door_time_s: mean time that the door stays open [s].
        door_load: mean cooling by an open door, as a change of the rise it would hold in the
            long run; each opening has its own, from half to one and a half of it [degC].
        noise_sd: standard deviation of the sensor's noise [degC].
        resolution: step of the sensor [degC].
    """

    gain: float = 10.4
    time_constant_s: float = 1100.0
    dead_time_s: float = 60.0
    radiation: float = 0.1
    working_rise: float = 700.0
    surroundings: float = 25.0
    drift_sd: float = 8.0
    drift_time_s: float = 7200.0
    door_interval_s: float = 10800.0
    door_time_s: float = 90.0
    door_load: float = 60.0
    noise_sd: float = 0.3
    resolution: float = 0.1

    def __post_init__(self) -> None:
        """Refuse parameters that no kiln has."""
        above = ("gain", "time_constant_s", "working_rise", "drift_time_s", "door_interval_s",
                 "door_time_s")  # fmt: skip
        for f in fields(self):
            value = getattr(self, f.name)
            if not math.isfinite(value) or value < 0 or (f.name in above and value == 0):
                raise InputError(f"{f.name} of the kiln is {value}; give a finite value above 0")
        if self.radiation >= 1:
            raise InputError(f"radiation is {self.radiation}; it is a share below 1")


def kiln_truth() -> dict[str, float]:
    """Return what a study of the kiln would have to find near its working rise.

    Returns:
        gain [degC/%], time_constant_s [s], dead_time_s [s] of the first-order lag with dead time
        that the kiln resembles there, and working_heater [%], working_temperature [degC].
    """
    t = KilnTruth()
    return {
        "gain": t.gain / (1 + t.radiation),
        "time_constant_s": t.time_constant_s / (1 + t.radiation),
        "dead_time_s": t.dead_time_s,
        "working_heater": t.working_rise / t.gain,
        "working_temperature": t.surroundings + t.working_rise,
    }


@dataclass(frozen=True)
class KilnState:
    """State of n kilns.

    Attributes:
        rise: above the surroundings (n,) [degC].
        pipe: heater drives under way, the latest first (n, depth) [%].
        drift: (n,) [degC].
        door: load of an open door, 0 when shut (n,) [degC].
        y: measured temperature (n, 1) [degC].
    """

    rise: np.ndarray
    pipe: np.ndarray
    drift: np.ndarray
    door: np.ndarray
    y: np.ndarray


class Kiln:
    """Kilns in lock step; a `RestingPlant` with one actuator and one output.

    Args:
        truths: parameters; with several, episode i has number i * len(truths) // n.
        dt: sample time [s].
        calm: no drift, no door, no noise, no rounding.

    Attributes:
        n_draws: standard normal numbers that each episode uses per sample.
    """

    n_u = 1
    n_y = 1
    n_draws = 4

    def __init__(
        self,
        truths: Sequence[KilnTruth] = (KilnTruth(),),
        dt: float = SAMPLE_TIME_S,
        *,
        calm: bool = False,
    ) -> None:
        """Lay the parameters out by episode."""
        if not truths or not (math.isfinite(dt) and dt > 0):
            raise InputError(f"{len(truths)} kilns at a sample time of {dt} s; give both above 0")
        self.dt, self.calm, self._count = dt, calm, len(truths)
        names = [f.name for f in fields(KilnTruth)]
        self._p = {name: np.array([getattr(t, name) for t in truths]) for name in names}
        lag = self._p["dead_time_s"] / dt
        self._whole = np.floor(lag + 1e-9).astype(int)
        self._part = np.maximum(lag - self._whole, 0.0)
        self._depth = int(self._whole.max()) + 2

    def _of(self, name: str, n: int) -> np.ndarray:
        return np.repeat(self._p[name], n // self._count)

    def _check(self, n: int) -> None:
        if n < 1 or n % self._count:
            raise InputError(f"{n} episodes cannot be shared among {self._count} kilns evenly")

    def _loss(self, x: np.ndarray, n: int) -> np.ndarray:
        r, working = self._of("radiation", n), self._of("working_rise", n)
        return np.asarray(x * (1 - r + r * np.abs(x) / working))

    def start(self, n: int, rng: Draws) -> KilnState:
        """Return n kilns at their working rise, heater drives to match."""
        self._check(n)
        wanted = self._of("surroundings", n) + self._of("working_rise", n)
        low, high = np.array([-np.inf]), np.array([np.inf])
        return self.rest(n, wanted[:, None], np.zeros((n, 0)), low, high, rng)[0]

    def rest(
        self,
        n: int,
        y: np.ndarray,
        disturbance: np.ndarray,
        low: np.ndarray,
        high: np.ndarray,
        rng: Draws,
    ) -> tuple[KilnState, np.ndarray]:
        """Return kilns at rest at y, door shut, and the heater drive (n, 1) that holds them.

        The drift starts from a draw of its long-run spread, so that an episode does not begin
        with a kiln that nothing has disturbed yet. Where the heater's limits do not allow y, the
        kiln rests at the nearest temperature they allow.
        """
        self._check(n)
        gain, r = self._of("gain", n), self._of("radiation", n)
        working, surroundings = self._of("working_rise", n), self._of("surroundings", n)
        # the drift is there before the episode: the heater that holds y makes up for it
        draw = np.asarray(rng.standard_normal((n, self.n_draws)))
        drift = np.zeros(n) if self.calm else draw[:, 0] * self._of("drift_sd", n)
        rise = np.where(np.isnan(y[:, 0]), working, y[:, 0] - surroundings)
        u = np.clip((self._loss(rise, n) - drift) / gain, low[0], high[0])
        power = gain * u + drift  # |power| = x (1 - r) + x^2 r / X, solved for x
        half = (1 - r) * working / 2
        root = np.sqrt(half**2 + r * working * np.abs(power)) + half
        rise = np.sign(power) * working * np.abs(power) / root
        pipe = np.tile(u[:, None], (1, self._depth))
        seen = self._seen(rise, draw[:, 3], n)
        return KilnState(rise, pipe, drift, np.zeros(n), seen), u[:, None]

    def advance(self, state: KilnState, u: np.ndarray, rng: Draws) -> KilnState:
        """Return the kilns one sample later, with the heater drive u (n, 1) held [%]."""
        n = len(u)
        self._check(n)
        draw = np.asarray(rng.standard_normal((n, self.n_draws)))
        pipe = np.concatenate([u, state.pipe[:, :-1]], axis=1)
        whole, part = (np.repeat(a, n // self._count) for a in (self._whole, self._part))
        rows = np.arange(n)
        # a dead time between samples: the mean of the two drives that act within the sample
        drive = (1 - part) * pipe[rows, whole] + part * pipe[rows, whole + 1]
        power = self._of("gain", n) * drive + state.drift - state.door
        rise = self._heated(state.rise, power, n)
        drift, door = (np.zeros(n),) * 2 if self.calm else self._disturbed(state, draw, n)
        return KilnState(rise, pipe, drift, door, self._seen(rise, draw[:, 3], n))

    def measure(self, state: KilnState, rng: Draws) -> np.ndarray:
        """Return the measured temperature (n, 1) [degC]."""
        return state.y

    def _heated(self, x: np.ndarray, power: np.ndarray, n: int) -> np.ndarray:
        """Integrate over one sample by the classical fourth-order Runge-Kutta step."""
        h = self.dt / self._of("time_constant_s", n)
        k1 = power - self._loss(x, n)
        k2 = power - self._loss(x + h / 2 * k1, n)
        k3 = power - self._loss(x + h / 2 * k2, n)
        k4 = power - self._loss(x + h * k3, n)
        return np.asarray(x + h / 6 * (k1 + 2 * k2 + 2 * k3 + k4))

    def _disturbed(
        self, state: KilnState, draw: np.ndarray, n: int
    ) -> tuple[np.ndarray, np.ndarray]:
        from scipy.special import ndtr

        keep = np.exp(-self.dt / self._of("drift_time_s", n))
        drift = keep * state.drift + np.sqrt(1 - keep**2) * self._of("drift_sd", n) * draw[:, 0]
        chance, size = ndtr(draw[:, 1]), ndtr(draw[:, 2])  # uniform on (0, 1)
        shut = state.door == 0
        opens = chance < -np.expm1(-self.dt / self._of("door_interval_s", n))
        stays = chance < np.exp(-self.dt / self._of("door_time_s", n))
        fresh = np.where(opens, self._of("door_load", n) * (0.5 + size), 0.0)
        return drift, np.where(shut, fresh, np.where(stays, state.door, 0.0))

    def _seen(self, rise: np.ndarray, draw: np.ndarray, n: int) -> np.ndarray:
        y = self._of("surroundings", n) + rise
        if not self.calm:
            y = y + self._of("noise_sd", n) * draw
            step = self._of("resolution", n)
            y = np.where(step > 0, np.round(y / np.where(step > 0, step, 1)) * step, y)
        return np.asarray(y[:, None])
