"""Pictures of the record and the runs: the log, pairs plant by plant, learning curves."""

from collections.abc import Mapping, Sequence

import numpy as np
from markupsafe import Markup
from matplotlib.axes import Axes

from idlearn.reports import drawing, wording
from idlearn.reports.blocks import Panel
from idlearn.reports.drawing import FULL, HALF, PHONE
from idlearn.reports.inks import INK, MODEL, QUIET, SECOND, WASH, Look
from idlearn.reports.pictures_loop import Limits, forbid
from idlearn.reports.runfiles import Table

MOST_TRACKS = 8


def log_panel(
    log: Table,
    tracks: Sequence[tuple[str, str, str]],
    units: Mapping[str, str],
    limits: Mapping[str, Limits],
) -> Panel:
    """Draw the log, the spans that were not used shaded.

    Args:
        log: log.csv.
        tracks: signal, role, and the setpoint that belongs to it or "".
        units: signal -> unit.
        limits: signal -> limits.
    """
    return Panel(
        _log(FULL, log, tracks, units, limits), _log(PHONE, log, tracks, units, limits), wide=True
    )


def _log(
    width: int,
    log: Table,
    tracks: Sequence[tuple[str, str, str]],
    units: Mapping[str, str],
    limits: Mapping[str, Limits],
) -> Markup:
    left, row, gap, bottom = 58, 74, 24, 36
    figure = drawing.canvas(width, (row + gap) * len(tracks) + bottom)
    raw = drawing.bounded(log.number("elapsed_s"))
    known = raw[np.isfinite(raw)]
    size, unit = wording.time_unit(float(np.ptp(known)) if len(known) else 1.0)
    unused = idle_spans(raw, log.flag("used")) if log.has("used") else []
    for i, (name, role, setpoint) in enumerate(tracks):
        top = i * (row + gap) + gap - 4
        axes = drawing.place(figure, left, top, width - left - 10, row)
        most = 48 if width < 500 else 90
        drawing.write(
            figure,
            left,
            top - 5,
            wording.axis(name, units.get(name, ""), most),
            fontsize=drawing.LETTER - 0.5,
        )
        for a, b in unused:
            axes.axvspan(
                a / size,
                b / size,
                facecolor=WASH,
                edgecolor="#a9a593",
                hatch="\\\\\\\\",
                linewidth=0,
            )
        values = drawing.bounded(log.number(name))
        curves = [values] + ([drawing.bounded(log.number(setpoint))] if setpoint else [])
        time, thin = drawing.envelope(raw / size, *curves, buckets=110 if width < 500 else 240)
        span = drawing.span_of(*curves, room=0.1)
        axes.set_ylim(*span)
        forbid(axes, limits.get(name, Limits()), span)
        held = role in ("actuator", "setpoint")
        if setpoint:
            axes.plot(
                time,
                thin[1],
                color=INK,
                linewidth=1.0,
                linestyle=(0, (2, 1.4)),
                drawstyle="steps-post",
            )
        axes.plot(
            time,
            thin[0],
            color=SECOND if role == "actuator" else MODEL,
            linewidth=1.0,
            drawstyle="steps-post" if held else "default",
        )
        axes.margins(x=0)
        drawing.linear_ticks(axes, "y", 3)
        drawing.linear_ticks(axes, "x", 5 if width < 500 else 9)
        if i < len(tracks) - 1:
            axes.tick_params(axis="x", labelbottom=False)
        else:
            axes.set_xlabel(f"time since the start of the record [{unit}]")
    return drawing.to_svg(figure, f"log {width}")


def idle_spans(time: np.ndarray, used: np.ndarray) -> list[tuple[float, float]]:
    """Return the spans of unused rows, each up to the next used one."""
    spans = []
    edges = np.flatnonzero(np.diff(np.concatenate([[1], used.astype(int), [1]])))
    for a, b in zip(edges[::2], edges[1::2], strict=True):
        start, end = time[a], time[min(b, len(time) - 1)]
        if np.isfinite(start) and np.isfinite(end):
            spans.append((float(start), float(end)))
    return spans


def plant_ratios(rows: Table) -> dict[str, tuple[float, float, float]]:
    """Return plant -> ratio of its mean costs, and the lowest and highest tenth of its pairs."""
    plants = np.array(rows.text("plant"), dtype=object)
    own, other = rows.number("cost"), rows.number("baseline_cost")
    pairs = rows.number("ratio")
    held = {}
    for plant in dict.fromkeys(plants):
        mine = plants == plant
        costs, base, of = own[mine], other[mine], pairs[mine]
        fine = np.isfinite(costs) & np.isfinite(base)
        of = of[np.isfinite(of)]
        if base[fine].sum() > 0 and len(of):
            low, high = np.quantile(of, [0.1, 0.9])
            held[str(plant)] = (
                float(costs[fine].sum() / base[fine].sum()),
                float(low),
                float(high),
            )
    return held


def paired_panel(
    ratios: Mapping[str, tuple[float, float, float]],
    title: str,
    look: Look,
    limits: tuple[float, float],
    worthwhile: float,
) -> Panel:
    """Draw one contender's ratio on every plant, from the best plant to the worst."""
    left, top, height, bottom = 46, 28, 150, 38
    figure = drawing.canvas(HALF, top + height + bottom)
    drawing.write(figure, 0, 14, wording.label(title, 46), fontweight="bold")
    axes = drawing.place(figure, left, top, HALF - left - 10, height)
    drawing.ratio_axis(axes, "y", *limits, most=6)
    axes.axhline(1.0, color=INK, linewidth=1.0)
    if 0 < worthwhile < 1:
        axes.axhline(worthwhile, color=INK, linewidth=1.0, linestyle=(0, (4, 2)))
    ordered = sorted(ratios.values())
    low, high = limits
    x = np.arange(1, len(ordered) + 1)
    values = np.array(ordered).reshape(-1, 3)
    shown = np.clip(values, low, high)
    axes.vlines(x, shown[:, 1], shown[:, 2], color=look.colour, linewidth=1.0)
    for marker, rows in (
        (look.marker, (values[:, 0] >= low) & (values[:, 0] <= high)),
        ("^", values[:, 0] > high),
        ("v", values[:, 0] < low),
    ):
        axes.plot(
            x[rows],
            shown[rows, 0],
            marker,
            color=look.colour,
            markersize=4.5,
            markeredgewidth=1.3,
            clip_on=False,
        )
    axes.set_xlim(0.3, len(ordered) + 0.7)
    drawing.linear_ticks(axes, "x", 6, whole=True)
    axes.set_xlabel("jury plants, best to worst")
    return Panel(drawing.to_svg(figure, f"paired {title}"))


def learning_panel(rows: Table, title: str, look: Look, span: tuple[float, float] | None) -> Panel:
    """Draw every run of one contender over its generations.

    Args:
        rows: of learning.csv, this contender only.
        title: above the axes.
        look: of the contender.
        span: ends of the vertical axis; None for its own.
    """
    left, top, height, bottom = 58, 28, 140, 38
    figure = drawing.canvas(HALF, top + height + bottom)
    drawing.write(figure, 0, 14, wording.label(title, 46), fontweight="bold")
    axes = drawing.place(figure, left, top, HALF - left - 10, height)
    ends = []
    for (run,), own in rows.groups("run"):
        x, value = own.number("generation"), drawing.bounded(own.number("value"))
        x, (value,) = drawing.envelope(x, value, buckets=60)
        axes.plot(x, value, color=look.colour, linewidth=1.0, alpha=0.75)
        last = np.flatnonzero(np.isfinite(value))
        if len(last):
            ends.append((x[last[-1]], value[last[-1]], run))
    for x_end, y_end, _ in ends:
        axes.plot([x_end], [y_end], look.marker, color=look.colour, markersize=5)
    values = drawing.bounded(rows.number("value"))
    _learning_scale(axes, values, span)
    axes.set_xlabel("generation")
    drawing.linear_ticks(axes, "x", 5, whole=True)
    if not ends:
        axes.annotate(
            "no finite value", (0.5, 0.5), xycoords="axes fraction", ha="center", color=QUIET
        )
    return Panel(drawing.to_svg(figure, f"learning {title}"))


def _learning_scale(axes: Axes, values: np.ndarray, span: tuple[float, float] | None) -> None:
    known = values[np.isfinite(values)]
    drawing.grid(axes)
    if span is None and len(known) and known.min() > 0 and known.max() > 20 * known.min():
        low, high = float(known.min()), float(known.max())
        drawing.ratio_axis(axes, "y", low / 1.2, high * 1.2, most=5)
        axes.yaxis.set_major_formatter(lambda v, _: wording.tick(v, v))
        return
    axes.set_ylim(*(span or drawing.span_of(known)))
    drawing.linear_ticks(axes, "y", 4)
