"""What a log can and cannot support, as far as it shows without fitting anything."""

from collections.abc import Iterator, Sequence

import numpy as np

from idlearn.errors import TooShortError, UninformativeError
from idlearn.logs.audit_columns import Column, audit_column, columns_of
from idlearn.logs.audit_time import audit_rows
from idlearn.logs.plantlog import PlantLog
from idlearn.logs.signals import Finding

LEAST_SAMPLES = 100  # valid samples below which no study is attempted


def audit_log(log: PlantLog) -> tuple[Finding, ...]:
    """Say what is in a log and what is wrong with it; nothing is fitted.

    Args:
        log: as read; findings made while reading come first in the result.

    Returns:
        findings of severity "note", "care" or "stop"; a "stop" is what `require_information`
        raises for.
    """
    findings = [*log.findings, *audit_rows(log)]
    columns = columns_of(log) if log.n_valid else []
    reason = _uninformative(log, columns)
    if reason:
        findings.append(Finding("not informative", "stop", f"{_sentence(reason)}"))
    if not log.n_valid:
        return tuple(findings)
    for column in columns:
        findings += audit_column(column, log)
    findings += _loop(log, columns)
    return tuple(findings)


def require_information(log: PlantLog) -> None:
    """Refuse a log that cannot support any model.

    Args:
        log: as read.

    Raises:
        TooShortError: fewer than LEAST_SAMPLES valid samples.
        UninformativeError: nothing but missing values, or an actuator or output that never moves.
    """
    reason = _uninformative(log, columns_of(log) if log.n_valid else [])
    if reason:
        short = 0 < log.n_valid < LEAST_SAMPLES
        raise (TooShortError if short else UninformativeError)(reason)


def _uninformative(log: PlantLog, columns: Sequence[Column]) -> str:
    """Return why no model can come of the log, or an empty text."""
    if not log.n_valid:
        return (
            f"the log holds nothing but missing values or single rows: none of its "
            f"{log.n_source_rows} rows is in a valid segment; export it with values"
        )
    if log.n_valid < LEAST_SAMPLES:
        return (
            f"the log has {log.n_valid} valid samples of {log.n_source_rows} rows and at least "
            f"{LEAST_SAMPLES} are needed; give a longer log"
        )
    for column in columns:
        if column.signal.role not in ("actuator", "output") or column.moves:
            continue
        value = f"{column.values[0]:g} {column.signal.unit}".rstrip()
        advice = (
            "its effect cannot be seen; give a log in which it is moved"
            if column.signal.role == "actuator"
            else "nothing can be learned about it; check the transmitter or give another log"
        )
        return (
            f"{column.signal.role} {column.signal.name!r} never moves: it is {value} in all "
            f"{log.n_valid} valid samples, so {advice}"
        )
    return ""


def _loop(log: PlantLog, columns: Sequence[Column]) -> Iterator[Finding]:
    """Yield what the setpoints and measured disturbances say about the loop."""
    setpoints = [c for c in columns if c.signal.role == "setpoint"]
    moving = [c for c in setpoints if c.moves]
    if setpoints and not moving:
        yield Finding(
            "setpoint never moves",
            "care",
            f"No setpoint moves in {log.n_valid} samples: a closed loop without setpoint changes "
            "shows the plant only through its disturbances, and estimates from it can be far off "
            "without any other sign. Give a log with setpoint changes or planned actuator moves.",
        )
    for c in moving:
        moves = sum(int((np.diff(p) != 0).sum()) for p in c.pieces)
        yield Finding(
            "setpoint moves",
            "note",
            f"Setpoint {c.signal.name!r} moves {moves} time{'s' if moves != 1 else ''}, between "
            f"{c.values.min():g} and {c.values.max():g} {c.signal.unit}".rstrip()
            + ".",
        )
    if not setpoints:
        yield Finding(
            "no setpoint",
            "note",
            "No setpoint is logged, so the log does not show whether a loop was closed. "
            "Add the setpoint's column if there was one.",
        )
    if not log.n_d:
        yield Finding(
            "no measured disturbance",
            "note",
            "No disturbance is measured; what disturbs the plant is known only as noise. "
            "Add columns that move the plant and are not moved by it, such as ambient temperature.",
        )


def _sentence(text: str) -> str:
    return f"{text[:1].upper()}{text[1:]}."
