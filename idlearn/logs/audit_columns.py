"""What the columns of a log show, one by one: movement, limits, recorder and transmitter marks."""

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from idlearn.logs import patterns
from idlearn.logs.plantlog import PlantLog
from idlearn.logs.signals import Finding, Signal

FloatArray = npt.NDArray[np.float64]
IntArray = npt.NDArray[np.int64]

AT_LIMIT_CARE, AT_LIMIT_GRAVE = 0.05, 0.30
RARELY = 0.95  # a signal that keeps one value for this share hardly moves
TWO_LEVELS = 3  # up to so many values a signal is switched by design, not held at a limit
STRAIGHT_CARE, HELD_CARE = 0.3, 0.5


@dataclass(frozen=True, kw_only=True)
class Column:
    """One signal's valid samples: its segments, all of them joined, and its different values."""

    signal: Signal
    pieces: list[FloatArray]
    values: FloatArray
    levels: FloatArray
    counts: IntArray
    step: float

    @property
    def called(self) -> str:
        """Role and name, to begin a sentence with."""
        return f"{self.signal.role.capitalize()} {self.signal.name!r}"

    @property
    def moves(self) -> bool:
        """Whether the signal takes more than one value."""
        return len(self.levels) > 1


def columns_of(log: PlantLog) -> list[Column]:
    """Return the columns of a log in the order of its signals."""
    arrays = {"actuator": log.u, "output": log.y}
    if log.setpoint is not None:
        arrays["setpoint"] = log.setpoint
    if log.disturbance is not None:
        arrays["disturbance"] = log.disturbance
    seen = dict.fromkeys(arrays, 0)
    columns = []
    for signal in log.signals:
        column = arrays[signal.role][:, seen[signal.role]]
        seen[signal.role] += 1
        pieces = [column[first:last] for first, last in log.segments.tolist()]
        values = np.concatenate(pieces)
        levels, counts = np.unique(values, return_counts=True)
        columns.append(
            Column(
                signal=signal,
                pieces=pieces,
                values=values,
                levels=levels,
                counts=counts.astype(np.int64),
                step=patterns.quantisation_step(levels, len(values)),
            )
        )
    return columns


def audit_column(column: Column, log: PlantLog) -> Iterator[Finding]:
    """Yield what one column shows.

    Args:
        column: from `columns_of`.
        log: the log it comes from.
    """
    yield from _movement(column)
    yield from _limits(column)
    if column.signal.role == "actuator":
        yield from _rate(column, log.sample_time_s)
    if column.signal.role in ("output", "disturbance"):
        yield from _recording(column)
    if column.signal.role == "output":
        yield from _output(column, log)


def _movement(column: Column) -> Iterator[Finding]:
    """Yield signals that do not move, or hardly."""
    if column.signal.role == "setpoint":
        return  # judged together, in _loop
    if not column.moves:
        if column.signal.role == "disturbance":
            yield Finding(
                "constant signal",
                "care",
                f"{column.called} never moves, so its effect cannot be seen. "
                "Give it the role ignore, or a log in which it moves.",
            )
        return
    share = float(column.counts.max() / len(column.values))
    if share > RARELY:
        usual = column.levels[column.counts.argmax()]
        yield Finding(
            "nearly constant signal",
            "care",
            f"{column.called} keeps the value {usual:g} for {share:.1%} of "
            "the samples and says little. Look for a log in which it moves more.",
        )


def _limits(column: Column) -> Iterator[Finding]:
    """Yield values beyond declared limits, and time spent at them."""
    s = column.signal
    if not np.isfinite([s.low, s.high]).any():
        return
    span = s.high - s.low if np.isfinite(s.high - s.low) else float(np.ptp(column.values))
    tolerance = max(1e-6 * span, 0.5 * s.resolution)
    low, high = s.low - tolerance, s.high + tolerance
    beyond = float(np.mean((column.values < low) | (column.values > high)))
    if beyond:
        yield Finding(
            "beyond limits",
            "care",
            f"{column.called} is outside its declared limits {s.low:g} to {s.high:g} for "
            f"{beyond:.1%} of the samples, from {column.values.min():g} to "
            f"{column.values.max():g} {s.unit}".rstrip()
            + ". Correct the limits or the scaling.",
        )
    at = patterns.share_at(column.values, s.low, s.high, tolerance)
    if not at or s.role == "setpoint":
        return
    if s.role == "actuator" and len(column.levels) <= TWO_LEVELS:
        yield Finding(
            "switched actuator",
            "note",
            f"{column.called} takes only {len(column.levels)} values and is at a declared limit "
            f"for {at:.0%} of the samples, as a switched actuator is.",
        )
        return
    where = "at a declared limit" if s.role == "actuator" else "at the end of its declared range"
    if at > AT_LIMIT_GRAVE:
        tail = (
            "Most of what could be learned is cut off there: use a log with the actuator within "
            "its limits before you trust a model."
            if s.role == "actuator"
            else "Its true value is not known then: check the transmitter's range."
        )
    else:
        tail = "Prefer stretches of the log in which it is free to move."
    yield Finding(
        "actuator at limit" if s.role == "actuator" else "signal at end of range",
        "care" if at > AT_LIMIT_CARE else "note",
        f"{column.called} is {where} for {at:.1%} of the samples"
        + (". " if at <= AT_LIMIT_CARE else ", which is much. " if at > AT_LIMIT_GRAVE else ". ")
        + (tail if at > AT_LIMIT_CARE else "That is little."),
    )


def _rate(column: Column, sample_time_s: float) -> Iterator[Finding]:
    """Yield an actuator that is faster than declared."""
    s = column.signal
    if not np.isfinite(s.rate_per_s):
        return
    moves = np.concatenate([np.abs(np.diff(p)) for p in column.pieces])
    share = float(np.mean(moves > 1.001 * s.rate_per_s * sample_time_s + s.resolution))
    if share:
        yield Finding(
            "faster than its rate",
            "care",
            f"{column.called} moves faster than its declared {s.rate_per_s:g} {s.unit}/s in "
            f"{share:.1%} of the samples, up to {moves.max() / sample_time_s:.4g} {s.unit}/s. "
            "Correct the rate, or log the actuator's true position.",
        )


def _recording(column: Column) -> Iterator[Finding]:
    """Yield coarse steps, interpolation and held values."""
    s, step = column.signal, column.step
    deviation = float(column.values.std())
    if step > deviation / 3 > 0:
        yield Finding(
            "coarse steps",
            "care",
            f"{column.called} moves in steps of {step:g} {s.unit}".rstrip()
            + f", more than a third of its standard deviation {deviation:.3g}. "
            "Log it with more digits or a smaller range.",
        )
    if s.resolution and step > 1.2 * s.resolution:
        yield Finding(
            "steps above resolution",
            "care",
            f"{column.called} moves in steps of {step:g} {s.unit}".rstrip()
            + f" while its declared resolution is {s.resolution:g}. "
            "Correct the resolution or log it unrounded.",
        )
    straight = patterns.straight_share(column.pieces, step)
    if straight > STRAIGHT_CARE:
        yield Finding(
            "interpolated",
            "care",
            f"{straight:.0%} of the moving points of {s.role} {s.name!r} lie exactly on the line "
            f"between their neighbours, as if about one value in {1 / (1 - straight):.0f} had been "
            "stored and the rest interpolated. Dead times and time constants come out too long; "
            "export raw values with compression off.",
        )
    held = patterns.held_share(column.pieces, step)
    if held > HELD_CARE:
        yield Finding(
            "held values",
            "care",
            f"{held:.0%} of the samples of {s.role} {s.name!r} repeat the one before, between "
            "jumps of many steps, as if values were stored only on change. "
            "Export raw values with compression off.",
        )


def _output(column: Column, log: PlantLog) -> Iterator[Finding]:
    """Yield an output that stands still or is cut off at its trip."""
    s = column.signal
    drives = [log.u[first:last] for first, last in log.segments.tolist()]
    rows, longest = patterns.flat_rows(column.pieces, drives)
    if rows and column.moves:
        yield Finding(
            "flat-lined output",
            "care",
            f"{column.called} stands perfectly still for {rows} samples ({rows / log.n_valid:.1%}) "
            f"while an actuator moves, {longest} samples at the longest. "
            "Check the transmitter, and mark such rows as missing if it was frozen.",
        )
    if np.isfinite([s.trip_low, s.trip_high]).any():
        half = 0.5 * s.resolution
        past = (column.values <= s.trip_low + half) | (column.values >= s.trip_high - half)
        at = float(past.mean())
        if at:
            yield Finding(
                "at trip",
                "care",
                f"{column.called} is at or beyond its trip for {at:.2%} of the samples. "
                "Correct the trip, or leave out what is not normal operation.",
            )
