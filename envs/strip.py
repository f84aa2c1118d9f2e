"""One line of text per sample: where outputs, setpoints and actuators stand in their ranges."""

import numpy as np

from idlearn.envs.setting import EnvSetting

WIDTH = 24


def strip(setting: EnvSetting, k: int, y: np.ndarray, setpoint: np.ndarray, u: np.ndarray) -> str:
    """Return the line of sample k.

    Args:
        setting: names, units, ranges.
        k: sample.
        y: (n_y,) [engineering units].
        setpoint: (n_setpoints,) [engineering units].
        u: applied (n_u,) [engineering units].

    An output is drawn as "o", its setpoint as "|", both in the range of the scenarios'
    setpoints; an actuator as a bar between its limits.
    """
    layout, parts = setting.loop.layout, [f"{k * setting.dt:8.1f} s"]
    for i, signal in enumerate(setting.of_role("output")):
        target = setpoint[layout.controlled.index(i)] if i in layout.controlled else None
        low, high = float(setting.low[i]), float(setting.high[i])
        asked = [v for s in setting.scenarios for _, v in s.setpoint.get(signal.name, ())]
        if asked and max(asked) > min(asked):
            span = max(asked) - min(asked)
            low, high = max(low, min(asked) - span), min(high, max(asked) + span)
        cells = ["."] * WIDTH
        if target is not None:
            cells[_place(target, low, high)] = "|"
        cells[_place(float(y[i]), low, high)] = "o"
        parts.append(f"{signal.name} {y[i]:9.4g} {signal.unit}".rstrip() + f" [{''.join(cells)}]")
    actuators = setting.of_role("actuator")
    for value, signal in zip(u, actuators, strict=True):
        filled = _place(float(value), signal.low, signal.high)
        bar = "#" * (filled + 1) + "." * (WIDTH - filled - 1)
        parts.append(f"{signal.name} {value:9.4g} {signal.unit}".rstrip() + f" [{bar}]")
    return "  ".join(parts)


def _place(value: float, low: float, high: float) -> int:
    """Return the cell of a value; what lies outside stands at the end."""
    share = (value - low) / (high - low) if np.isfinite(value) else 1.0
    return int(np.clip(share * WIDTH, 0, WIDTH - 1))
