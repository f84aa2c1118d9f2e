"""Pictures of the models: free run, residual correlation, step response."""

from collections.abc import Sequence

import numpy as np
from markupsafe import Markup

from idlearn.reports import drawing, wording
from idlearn.reports.blocks import Panel
from idlearn.reports.drawing import FULL, HALF, PHONE
from idlearn.reports.inks import INK, QUIET
from idlearn.reports.pictures_result import part_inks
from idlearn.reports.runfiles import Table


def free_run_panel(rows: Table, part: str, output: str, unit: str) -> Panel:
    """Draw measured data over the free run with its band, one part and output."""
    title = f"{wording.axis(output, unit)}, {part} models" if part else wording.axis(output, unit)
    return Panel(
        _free_run(FULL, rows, part, title, output),
        _free_run(PHONE, rows, part, title, output),
        wide=True,
    )


def _free_run(width: int, rows: Table, part: str, title: str, output: str) -> Markup:
    left, top, height, bottom = 58, 28, 170, 38
    figure = drawing.canvas(width, top + height + bottom)
    drawing.write(
        figure, 0, 14, wording.label(title, 46 if width < 500 else 100), fontweight="bold"
    )
    axes = drawing.place(figure, left, top, width - left - 10, height)
    time = drawing.bounded(rows.number("elapsed_s"))
    curves = [rows.number(k) for k in ("low", "high", "model", "measured")]
    known = time[np.isfinite(time)]
    first = float(known.min()) if len(known) else 0.0
    size, unit = wording.time_unit(float(np.ptp(known)) if len(known) else 1.0)
    buckets = 90 if width < 500 else 200
    time, (low, high, model, measured) = drawing.envelope(
        (time - first) / size, *curves, buckets=buckets
    )
    ink, band = part_inks([part])[part]
    # a band that runs away must neither flatten the data nor leave the numbers a drawing can hold
    low, high = _near(low, measured), _near(high, measured)
    # a gap in the record is a gap in the picture
    if np.isfinite(low).any():
        axes.fill_between(time, low, high, facecolor=band, edgecolor="none")
    axes.plot(time, model, color=ink, linewidth=1.5, linestyle=(0, (5, 1.4)))
    axes.plot(time, measured, color=INK, linewidth=1.0)
    axes.set_ylim(*drawing.span_of(measured, _near(model, measured), low, high))
    drawing.grid(axes)
    drawing.linear_ticks(axes, "x", 5 if width < 500 else 9)
    drawing.linear_ticks(axes, "y")
    axes.margins(x=0)
    since = f" since {wording.plain(first / size)} {unit} after the start" if first else ""
    axes.set_xlabel(f"time{since} [{unit}]")
    return drawing.to_svg(figure, f"free run {part} {output} {width}")


def _near(band: np.ndarray, data: np.ndarray) -> np.ndarray:
    """Return a band as far as it belongs into a picture of the data."""
    if not np.isfinite(data).any():
        return band
    low, high = float(np.nanmin(data)), float(np.nanmax(data))
    room = 0.6 * (high - low) or 1.0
    near: np.ndarray = np.clip(band, low - room, high + room)
    return near


def residual_panel(rows: Table, output: str, against: str, parts: Sequence[str]) -> Panel:
    """Draw a correlation of the residual with its limits, parts of the log side by side."""
    left, top, height, bottom = 44, 28, 110, 38
    figure = drawing.canvas(HALF, top + height + bottom)
    title = (
        f"residual of {wording.label(output, 18)} with itself"
        if against == "itself"
        else f"{wording.label(output, 18)} with {wording.label(against, 18)}"
    )
    drawing.write(figure, 0, 14, title, fontweight="bold")
    axes = drawing.place(figure, left, top, HALF - left - 10, height)
    axes.axhline(0, color=QUIET, linewidth=0.8)
    inks = part_inks(parts)
    largest = 0.0
    for i, part in enumerate(parts):
        own = rows.where(part=part)
        lag, value = own.number("lag"), drawing.bounded(own.number("correlation"))
        if against == "itself":
            lag, value = lag[lag != 0], value[lag != 0]  # always 1 at lag 0: says nothing
        limit = own.number("limit")
        shift = (i - (len(parts) - 1) / 2) * 0.28
        axes.vlines(lag + shift, 0, value, color=inks[part][0], linewidth=1.6)
        axes.plot(lag + shift, value, "os^"[i % 3], color=inks[part][0], markersize=3)
        known = limit[np.isfinite(limit)]
        for sign in (-1, 1):
            if len(known):
                axes.axhline(
                    sign * known[0], color=inks[part][0], linewidth=1.0, linestyle=(0, (4, 2))
                )
        seen = np.abs(np.concatenate([value[np.isfinite(value)], known, [0.0]]))
        largest = max(largest, float(seen.max()))
    reach = min(1.05, 1.15 * largest) or 1.0
    axes.set_ylim(-reach, reach)
    drawing.linear_ticks(axes, "x", 6)
    drawing.linear_ticks(axes, "y", 4)
    axes.set_xlabel("lag [samples]")
    return Panel(drawing.to_svg(figure, f"residual {output} {against}"))


def step_panel(rows: Table, source: str, target: str, units: tuple[str, str]) -> Panel:
    """Draw a step response with its bands, parts of the log over one another."""
    left, top, height, bottom = 58, 42, 120, 38
    figure = drawing.canvas(HALF, top + height + bottom)
    title = f"{wording.label(target, 20)} after a step of {wording.label(source, 20)}"
    drawing.write(figure, 0, 14, title, fontweight="bold")
    per = f"{units[1] or '-'} per {units[0] or '1'}"
    drawing.write(figure, left, 35, f"[{wording.label(per, 30)}]", fontsize=drawing.LETTER - 0.5)
    axes = drawing.place(figure, left, top, HALF - left - 10, height)
    parts = rows.unique("part")
    inks = part_inks(parts)
    whole = drawing.bounded(rows.number("time_s"))
    size, unit = wording.time_unit(float(np.nanmax(whole)) if np.isfinite(whole).any() else 1.0)
    axes.axhline(0, color=QUIET, linewidth=0.8)
    for i, part in enumerate(parts):
        own = rows.where(part=part)
        curves = [drawing.bounded(own.number(k)) for k in ("low", "high", "estimate")]
        time, (low, high, middle) = drawing.envelope(
            own.number("time_s") / size, *curves, buckets=90
        )
        ink, band = inks[part]
        if np.isfinite(low).any():
            axes.fill_between(
                time, low, high, facecolor=band, edgecolor=ink, linewidth=0.6, alpha=0.6
            )
        axes.plot(
            time,
            middle,
            color=ink,
            linewidth=1.6,
            linestyle=((0, (5, 1.4)), "-")[i % 2],
            marker="s^"[i % 2],
            markevery=max(1, len(time) // 6),
            markersize=4,
        )
    axes.margins(x=0)
    drawing.grid(axes)
    drawing.linear_ticks(axes, "x")
    drawing.linear_ticks(axes, "y")
    axes.set_xlabel(f"time [{unit}]")
    return Panel(drawing.to_svg(figure, f"step {source} {target}"))
