"""Pictures of the closed loop: outputs over actuators, limits drawn, one scale for everybody."""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Literal

import numpy as np
from matplotlib.axes import Axes

from idlearn.reports import drawing, wording
from idlearn.reports.blocks import Panel
from idlearn.reports.drawing import HALF
from idlearn.reports.inks import INK, QUIET, Look
from idlearn.reports.runfiles import Table

MOST_SIGNALS = 3  # outputs, and as many actuators, in one picture
_HEIGHT = {"output": 96, "actuator": 66}


@dataclass(frozen=True)
class Limits:
    """Limits of one signal, in its unit; infinite where there are none.

    Attributes:
        low: lowest value that may be.
        high: highest value that may be.
        trip_low: value at which the plant trips.
        trip_high: value at which the plant trips.
    """

    low: float = -np.inf
    high: float = np.inf
    trip_low: float = -np.inf
    trip_high: float = np.inf


def read_limits(signals: Table) -> dict[str, Limits]:
    """Return signal -> limits, from signals.csv."""
    held = {}
    for i, name in enumerate(signals.text("name")):
        ends = []
        for key, sign in (("low", -1), ("high", 1), ("trip_low", -1), ("trip_high", 1)):
            value = float(signals.number(key)[i])
            ends.append(value if abs(value) < 1e100 else sign * np.inf)
        held[name] = Limits(*ends)
    return held


@dataclass(frozen=True)
class Track:
    """One axes of a closed-loop picture: a signal and the scale it has for every contender."""

    signal: str
    role: str
    unit: str
    limits: Limits
    span: tuple[float, float]


def tracks_of(
    scenario: Table, limits: Mapping[str, Limits], units: Mapping[str, str]
) -> list[Track]:
    """Choose the signals of a scenario and a common scale for each.

    The limits of an actuator are inside the scale unless that would press the curves flat.
    """
    tracks = []
    for role in ("output", "actuator"):
        for name in scenario.where(role=role).unique("signal")[:MOST_SIGNALS]:
            rows = scenario.where(signal=name)
            values = [drawing.bounded(rows.number(k)) for k in ("low", "median", "high")]
            low, high = drawing.span_of(*values)
            of = limits.get(name, Limits())
            for end in (of.low, of.high, of.trip_low, of.trip_high):
                near = low - 4 * (high - low) <= end <= high + 4 * (high - low)
                if np.isfinite(end) and near and (role == "actuator" or low <= end <= high):
                    room = 0.06 * (max(high, end) - min(low, end))
                    low, high = min(low, end - room), max(high, end + room)
            tracks.append(Track(name, role, units.get(name, ""), of, (low, high)))
    return tracks


def loop_panel(rows: Table, tracks: Sequence[Track], title: str, look: Look, key: str) -> Panel:
    """Draw what one contender does in one scenario.

    Args:
        rows: of closed_loop.csv, this contender and scenario only.
        tracks: from `tracks_of`.
        title: above the axes.
        look: of the contender.
        key: unique name of the drawing.
    """
    left, top, gap, bottom = 58, 24, 22, 36
    heights = [_HEIGHT[t.role] for t in tracks]
    total = top + sum(heights) + gap * len(tracks) + bottom
    figure = drawing.canvas(HALF, total)
    drawing.write(figure, 0, 13, wording.label(title, 46), fontweight="bold")
    span = drawing.bounded(rows.number("time_s"))
    longest = float(np.nanmax(span)) if np.isfinite(span).any() else 1.0
    size, unit = wording.time_unit(longest)
    y = float(top)
    for i, track in enumerate(tracks):
        y += gap
        axes = drawing.place(figure, left, y, HALF - left - 10, heights[i])
        drawing.write(
            figure,
            left,
            y - 6,
            wording.axis(track.signal, track.unit, 28) + _told(track),
            fontsize=drawing.LETTER - 0.5,
        )
        y += heights[i]
        _track(axes, rows.where(signal=track.signal), track, look, size)
        axes.set_xlim(0, longest / size or 1.0)
        drawing.linear_ticks(axes, "x", 5)
        drawing.linear_ticks(axes, "y", 4 if track.role == "output" else 3)
        if i < len(tracks) - 1:
            axes.tick_params(axis="x", labelbottom=False)
        else:
            axes.set_xlabel(f"time [{unit}]")
    return Panel(drawing.to_svg(figure, key))


def _told(track: Track) -> str:
    """Name the limits of an actuator, which may lie outside the scale."""
    ends = (track.limits.low, track.limits.high)
    if track.role != "actuator" or not all(np.isfinite(ends)):
        return ""
    return f", limits {wording.plain(ends[0])} to {wording.plain(ends[1])}"


def _track(axes: Axes, rows: Table, track: Track, look: Look, size: float) -> None:
    axes.set_ylim(*track.span)
    drawing.grid(axes)
    forbid(axes, track.limits, track.span)
    own = rows.where(role=track.role)
    time = drawing.bounded(own.number("time_s")) / size
    curves = [drawing.bounded(own.number(k)) for k in ("low", "high", "median")]
    time, (low, high, middle) = drawing.envelope(time, *curves, buckets=90)
    # an actuator holds its value from one sample to the next
    step: Literal["post"] | None = "post" if track.role == "actuator" else None
    if np.isfinite(low).any():
        axes.fill_between(
            time,
            low,
            high,
            facecolor=look.band,
            edgecolor=look.colour,
            linewidth=0.3,
            step=step,
        )
    wanted = rows.where(role="setpoint")
    if len(wanted):
        at = drawing.bounded(wanted.number("time_s")) / size
        at, (value,) = drawing.envelope(at, drawing.bounded(wanted.number("median")), buckets=90)
        axes.plot(
            at, value, color=INK, linewidth=1.0, linestyle=(0, (2, 1.4)), drawstyle="steps-post"
        )
    axes.plot(
        time,
        middle,
        color=look.colour,
        linewidth=1.6,
        linestyle=look.line,
        drawstyle="steps-post" if step else "default",
    )


def forbid(axes: Axes, limits: Limits, span: tuple[float, float]) -> None:
    """Hatch what lies beyond the limits, and draw where the plant trips."""
    low, high = span
    for end, edge in ((limits.low, low), (limits.high, high)):
        if np.isfinite(end) and low <= end <= high:
            axes.axhspan(
                min(end, edge),
                max(end, edge),
                facecolor="none",
                edgecolor="#9a9686",
                hatch="////",
                linewidth=0,
            )
            axes.axhline(end, color=QUIET, linewidth=1.0)
    for end in (limits.trip_low, limits.trip_high):
        if np.isfinite(end) and low <= end <= high:
            axes.axhline(end, color=INK, linewidth=1.3, linestyle=(0, (6, 1.5, 1.2, 1.5)))
