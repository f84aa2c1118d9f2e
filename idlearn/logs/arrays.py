"""Arrays and signals that a caller hands over, checked once at the edge."""

from collections.abc import Sequence
from dataclasses import replace

import numpy as np
import numpy.typing as npt

from idlearn.errors import InputError
from idlearn.logs.signals import DATA_ROLES, Signal, check_roles

FloatArray = npt.NDArray[np.float64]
IntArray = npt.NDArray[np.int64]

_PREFIX = {"actuator": "u", "output": "y", "setpoint": "setpoint", "disturbance": "d"}


def checked_matrix(name: str, values: npt.ArrayLike, n: int | None) -> FloatArray:
    """Return a private float64 copy of a time-major matrix, checked."""
    try:
        a = np.array(values, dtype=np.float64, order="C")
    except (TypeError, ValueError):
        raise InputError(f"`{name}` is no array of numbers; pass floats (N, columns)") from None
    if a.ndim == 1:
        raise InputError(
            f"`{name}` has shape {a.shape}; time-major (N, columns) is needed, "
            f"so pass {name}[:, None] for a single signal"
        )
    if a.ndim != 2 or not a.shape[1]:
        raise InputError(f"`{name}` has shape {a.shape}; time-major (N, columns) is needed")
    if n is not None and len(a) != n:
        raise InputError(
            f"`{name}` has {len(a)} rows and `u` has {n}; pass arrays of the same length"
        )
    if np.isinf(a).any():
        row, column = np.argwhere(np.isinf(a))[0]
        raise InputError(
            f"`{name}` is infinite in row {row}, column {column}; use NaN for a missing value"
        )
    return a


def checked_bounds(segments: npt.ArrayLike, n: int) -> IntArray:
    """Return half-open row ranges as integers, checked to follow each other within n rows."""
    bounds = np.asarray(segments)
    if bounds.size == 0:
        return np.zeros((0, 2), dtype=np.int64)
    if bounds.ndim != 2 or bounds.shape[1] != 2 or not np.issubdtype(bounds.dtype, np.integer):
        raise InputError(
            f"`segments` has shape {bounds.shape} and type {bounds.dtype}; "
            "half-open row ranges (n, 2) of integers are needed"
        )
    flat = bounds.reshape(-1)
    if flat[0] < 0 or flat[-1] > n or np.any(np.diff(flat) < 0) or np.any(bounds[:, 0] == n):
        raise InputError(
            f"`segments` are {bounds.tolist()}; ranges have to follow each other within 0 to {n}"
        )
    return bounds.astype(np.int64)


def signals_for(
    arrays: dict[str, FloatArray], signals: Sequence[Signal] | None
) -> tuple[Signal, ...]:
    """Return one signal per column, generated or checked, with each setpoint's output filled in."""
    widths = {role: arrays[role].shape[1] for role in DATA_ROLES if role in arrays}
    if signals is None:
        if widths.get("setpoint", 0) > widths["output"]:
            raise InputError(
                f"`setpoint` has {widths['setpoint']} columns and `y` has {widths['output']}; "
                "pass `signals` that say which output each setpoint belongs to"
            )
        signals = [
            Signal(
                name=f"{_PREFIX[role]}{i + 1}",
                role=role,
                of=f"y{i + 1}" if role == "setpoint" else "",
            )
            for role, width in widths.items()
            for i in range(width)
        ]
    given = [s.role for s in signals]
    wanted = [role for role, width in widths.items() for _ in range(width)]
    if given != wanted:
        raise InputError(
            f"`signals` have the roles {given}; the arrays need {wanted}, in this order"
        )
    check_roles(tuple(signals))
    only = next(s.name for s in signals if s.role == "output")
    return tuple(replace(s, of=only) if s.role == "setpoint" and not s.of else s for s in signals)
