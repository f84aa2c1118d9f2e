"""The demo: an invented kiln's routine log, flaws included, and a sheet for it.

Everything here is invented. The log is what a historian would hold of a kiln under its PID: local
stamps, a gap, missing values, a few stamps twice, a heater that is only logged to a tenth of a
percent. The truth about the kiln stays out of the study.
"""

from datetime import datetime, timedelta
from pathlib import Path

import numpy as np

from idlearn.baselines import Pairing, PidController, PidSettings
from idlearn.control import ObservationLayout
from idlearn.envs import Actuator
from idlearn.envs.kiln import KILN_SIGNALS, SAMPLE_TIME_S, Kiln
from idlearn.errors import InputError
from idlearn.seeding import stream

SEED = 7
HOURS = 72.0
GAIN, INTEGRAL_S = 0.25, 700.0  # what "runs today"; cautious, as found settings often are

SHEET = """\
# An INVENTED study: an electric kiln zone that exists only in this demo.

[study]
name = "kiln demo (invented)"
seed = 1
effort = "standard"            # "quick" | "standard" | "thorough"

[[log]]
path = "kiln.csv"
time = "stamp"
zone = "Europe/Oslo"           # the stamps are local and carry no offset
duplicates = "last"            # the historian wrote some rows twice

[timing]
sample_time_s = {dt:.1f}
latency_samples = 0

[signals.heater]
role = "actuator"
unit = "%"
low = 0.0
high = 100.0
rate_per_s = 5.0

[signals.temperature]
role = "output"
unit = "degC"
trip_high = 850.0              # an episode that passes it ends and counts as a violation
resolution = 0.1

[signals.setpoint]
role = "setpoint"
unit = "degC"
of = "temperature"

[incumbent]                    # what runs today
kind = "pid"
form = "ideal"
gain = {gain}
integral_time_s = {integral}

[costs.regulation]             # the cost of the verdict: 5 degC of error cost as much as
primary = true                 # one, a move of 10 % in one sample a tenth of that
[[costs.regulation.terms]]
kind = "tracking"
signal = "temperature"
scale = 5.0
[[costs.regulation.terms]]
kind = "move"
signal = "heater"
weight = 0.1
scale = 10.0

[costs.gentle]                 # a second opinion: absolute error, dearer moves
[[costs.gentle.terms]]
kind = "tracking"
signal = "temperature"
scale = 5.0
shape = "absolute"
[[costs.gentle.terms]]
kind = "move"
signal = "heater"
weight = 1.0
scale = 10.0

[acceptance]                   # fixed before results
least_gain = 0.05
confidence = 0.95
most_violation = 0.01
most_travel_ratio = 1.5
least_support = 0.95
worst_tenth_ratio = 1.0
stress = {{ gain = [0.7, 1.3], extra_delay_samples = 1, noise = 2.0 }}
"""


def write_demo(plant: str, beside: str | Path) -> Path:
    """Write the demo's log and sheet into a folder named after the plant.

    Args:
        plant: "kiln".
        beside: folder in which that folder is made.

    Returns:
        path of the sheet. The same bytes every time; files that are there already are left as
        they are if they hold these bytes.

    Raises:
        InputError: no such demo plant, or a file in the way that is not the demo's.
    """
    if plant != "kiln":
        raise InputError(f"there is no demo plant {plant!r}; this version has kiln")
    folder = Path(beside) / plant
    folder.mkdir(parents=True, exist_ok=True)
    sheet = SHEET.format(dt=SAMPLE_TIME_S, gain=GAIN, integral=INTEGRAL_S)
    _write(folder / "kiln.csv", kiln_csv(SEED))
    _write(folder / "kiln.toml", sheet)
    return folder / "kiln.toml"


def _write(path: Path, text: str) -> None:
    raw = text.encode()
    if path.exists():
        if path.read_bytes() != raw:
            raise InputError(
                f"{path} is not the demo's; move it away, or run the demo in another folder"
            )
        return
    path.write_bytes(raw)


def kiln_csv(seed: int, hours: float = HOURS) -> str:
    """Return the routine log of the invented kiln as CSV text.

    Args:
        seed: of weather, doors, noise and flaws.
        hours: length of the log [h].
    """
    n = round(hours * 3600 / SAMPLE_TIME_S)
    rng = stream(seed, "kiln log")
    setpoint = _schedule(n, rng)
    kiln = Kiln()
    actuator = Actuator.of(KILN_SIGNALS[:1], SAMPLE_TIME_S)
    layout = ObservationLayout(1, (0,), 0, 1)
    pid = PidController(
        [(Pairing(0, 0), PidSettings(gain=GAIN, integral_time_s=INTEGRAL_S))],
        np.zeros(1),
        layout,
        SAMPLE_TIME_S,
        actuator.low,
        actuator.high,
    )
    pid.reset(1)
    first = np.array([[setpoint[0]]])
    state, u = kiln.rest(1, first, np.zeros((1, 0)), actuator.low, actuator.high, rng)
    rows = np.empty((n, 2))
    for k in range(n):
        y = kiln.measure(state, rng)
        seen = layout.join(y, np.array([[setpoint[k]]]), np.zeros((1, 0)), u)
        u = actuator.apply(pid.act(seen), u)
        rows[k] = u[0, 0], y[0, 0]
        state = kiln.advance(state, u, rng)
    return _historian(rows, setpoint, rng)


def _schedule(n: int, rng: np.random.Generator) -> np.ndarray:
    """Return a setpoint that is moved every forty minutes to two hours within the working range."""
    out, level, k = np.empty(n), 720.0, 0
    while k < n:
        hold = int(rng.integers(2400, 2 * 3600) / SAMPLE_TIME_S)
        out[k : k + hold] = level
        k += hold
        level = float(np.clip(level + rng.choice([-1, 1]) * rng.integers(2, 11) * 5, 660, 780))
    return out


def _historian(rows: np.ndarray, setpoint: np.ndarray, rng: np.random.Generator) -> str:
    """Write the rows as a historian would: local stamps, missing values, a gap, rows twice."""
    start = datetime(2026, 2, 2, 6, 0, 0)
    n = len(rows)
    missing = set(rng.choice(n, size=n // 800, replace=False).tolist())
    twice = set(rng.choice(n, size=6, replace=False).tolist())
    gap = int(0.37 * n)
    lines = ["stamp,heater,temperature,setpoint"]
    for k in range(n):
        if gap <= k < gap + 45:
            continue
        stamp = start + timedelta(seconds=k * SAMPLE_TIME_S)
        heater, temperature = rows[k]
        seen = "" if k in missing else f"{temperature:.1f}"
        line = f"{stamp:%Y-%m-%d %H:%M:%S},{heater:.1f},{seen},{setpoint[k]:.1f}"
        lines += [line, line] if k in twice else [line]
    return "\n".join(lines) + "\n"
