"""Pictures of the result: the ratio with its parts, ratios side by side, the ladder."""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from markupsafe import Markup
from matplotlib.axes import Axes

from idlearn.reports import drawing, wording
from idlearn.reports.blocks import Panel
from idlearn.reports.drawing import FULL, HALF, PHONE
from idlearn.reports.inks import BAND, INK, MODEL, PAPER, QUIET, SECOND, SECOND_BAND, Look

LINE = 34  # height of a row of a forest picture [px]


@dataclass(frozen=True)
class Span:
    """One row: a figure with its interval.

    Attributes:
        name: of the row.
        value: the figure; NaN for an interval without one.
        low: lower end.
        high: upper end.
        look: of line and marker.
        note: to be written at the right.
    """

    name: str
    value: float
    low: float
    high: float
    look: Look
    note: str = ""


_PARTS = {
    "whole": "whole interval: it decides",
    "seeds": "from seeds alone",
    "plants": "from plants alone",
    "allowance": "allowance for what models miss",
}


def interval_panel(
    parts: Mapping[str, tuple[float, float]], estimate: float, worthwhile: float, baseline: str
) -> Panel:
    """Draw the ratio with its whole interval and the parts of it.

    Args:
        parts: "whole", "seeds", "plants", "allowance" -> ends.
        estimate: the ratio.
        worthwhile: the ratio at which the gain is just worthwhile, NaN if unknown.
        baseline: name.
    """
    return Panel(
        _interval(FULL, parts, estimate, worthwhile, baseline),
        _interval(PHONE, parts, estimate, worthwhile, baseline),
        wide=True,
    )


def _interval(
    width: int,
    parts: Mapping[str, tuple[float, float]],
    estimate: float,
    worthwhile: float,
    baseline: str,
) -> Markup:
    order = [p for p in _PARTS if p in parts]
    row, top, bottom = 36, 44, 42
    narrow = width < 500
    if not narrow:
        row = 30
    left = 8 if narrow else 262  # the wide drawing has the names beside the bars, not over them
    figure = drawing.canvas(width, top + row * len(order) + bottom)
    axes = drawing.place(figure, left, top, width - left - 8, row * len(order))
    ends = [v for p in order for v in parts[p]] + [estimate]
    if worthwhile == worthwhile:
        ends.append(worthwhile)
    low, high = drawing.ratio_limits(ends, most=100.0)
    drawing.ratio_axis(axes, "x", low, high, most=5 if narrow else 7)
    axes.set_ylim(len(order) - 0.5, -0.5)
    drawing.quiet_y(axes)
    axes.axvline(1.0, color=INK, linewidth=1.2)

    # neither text may cross the other line: away from each other where there is room, else the
    # one that has to reach over the other line stands above it
    def place(at: float) -> float:
        return float(np.log(at / low) / np.log(high / low))

    room = 0.38 if narrow else 0.25
    left_of_one = place(1.0) > 1 - room
    _post(axes, 1.0, "1: as the baseline", left_of_one, 18 if left_of_one else 3)
    if worthwhile == worthwhile and 0 < worthwhile < 1:
        axes.axvline(worthwhile, color=INK, linewidth=1.2, linestyle=(0, (4, 2)))
        leftwards = place(worthwhile) > room
        _post(axes, worthwhile, f"{worthwhile:.3g}: worthwhile", leftwards, 3 if leftwards else 18)
    for i, part in enumerate(order):
        a, b = parts[part]
        whole = part == "whole"
        height = 0.34 if whole else 0.2
        y = i + 0.22 if narrow else i
        axes.barh(
            y,
            b - a,
            left=a,
            height=height,
            color=MODEL if whole else BAND,
            edgecolor=MODEL,
            linewidth=0.9,
            hatch=None if whole else "////",
        )
        mark = "o" if whole else "|"
        axes.plot(
            [estimate],
            [y],
            mark,
            color=INK,
            markersize=9 if whole else 8,
            markerfacecolor=PAPER,
            markeredgewidth=1.6,
        )
        style: dict[str, Any] = {"va": "center", "fontweight": "bold" if whole else "normal"}
        if narrow:
            axes.annotate(
                f"{_PARTS[part]}: {_ends(a, b)}",
                (0.0, i - 0.26),
                (2, 0),
                xycoords=("axes fraction", "data"),
                textcoords="offset points",
                bbox={"facecolor": PAPER, "edgecolor": "none", "pad": 1.2},
                **style,
            )
        else:
            drawing.write(figure, 0, top + row * (i + 0.5), _PARTS[part], **style)
            drawing.write(figure, left - 8, top + row * (i + 0.5), _ends(a, b), ha="right", **style)
    against = wording.label(baseline or "the baseline", 16 if narrow else 36)
    axes.set_xlabel(f"cost relative to {against} [-], lower is better")
    return drawing.to_svg(figure, f"interval {width}")


def _post(axes: Axes, at: float, text: str, late: bool, above: float) -> None:
    """Write what an upright line means, `above` it, to its left if it stands late."""
    axes.plot(
        [at, at],
        [1, 1 + above / 100],
        color=INK,
        linewidth=0.8,
        clip_on=False,
        transform=axes.get_xaxis_transform(),
    )
    axes.annotate(
        text,
        (at, 1.0),
        (-4 if late else 4, above),
        xycoords=("data", "axes fraction"),
        textcoords="offset points",
        ha="right" if late else "left",
        va="bottom",
        fontsize=drawing.LETTER - 0.5,
    )


def _ends(low: float, high: float) -> str:
    width = high - low
    if not (wording.is_known(width) and width > 0):
        return f"{wording.number(low)} to {wording.number(high)}"
    return f"{wording.number(low, width)} to {wording.number(high, width)}"


def forest_panel(
    title: str,
    rows: Sequence[Span],
    limits: tuple[float, float],
    key: str,
    lines: Sequence[float] = (1.0,),
) -> Panel:
    """Draw ratios with intervals, one row each, on a logarithmic axis.

    Args:
        title: above the rows.
        rows: what to show; ends beyond the axis become arrows.
        limits: ends of the axis.
        key: unique name of the drawing.
        lines: where to draw upright lines; the first is solid.
    """
    left, top, bottom = 118, 26, 38
    figure = drawing.canvas(HALF, top + LINE * max(1, len(rows)) + bottom)
    drawing.write(figure, 0, 14, wording.label(title, 50), fontweight="bold")
    axes = drawing.place(figure, left, top, HALF - left - 12, LINE * max(1, len(rows)))
    drawing.ratio_axis(axes, "x", *limits, most=5)
    for i, at in enumerate(lines):
        axes.axvline(at, color=INK, linewidth=1.0, linestyle="-" if i == 0 else (0, (4, 2)))
    _rows(axes, rows, limits)
    axes.set_xlabel("relative cost [-]")
    return Panel(drawing.to_svg(figure, key))


def _rows(axes: Axes, rows: Sequence[Span], limits: tuple[float, float]) -> None:
    axes.set_ylim(len(rows) - 0.5, -0.5)
    axes.spines["left"].set_visible(False)
    axes.set_yticks(range(len(rows)), [wording.label(r.name, 17) for r in rows])
    axes.tick_params(axis="y", length=0)
    low, high = limits
    for i, r in enumerate(rows):
        if r.value != r.value:
            axes.annotate(
                "no figure", (0.02, i), xycoords=("axes fraction", "data"), va="center", color=QUIET
            )
            continue
        if r.low == r.low and r.high == r.high:
            axes.plot(
                [min(max(r.low, low), high), min(max(r.high, low), high)],
                [i, i],
                color=r.look.colour,
                linewidth=2.2,
                solid_capstyle="butt",
            )
        if low <= r.value <= high:
            axes.plot(
                [r.value],
                [i],
                r.look.marker,
                color=r.look.colour,
                markersize=7,
                markeredgewidth=1.8,
            )
        else:
            beyond = r.value > high
            axes.plot(
                [high if beyond else low],
                [i],
                ">" if beyond else "<",
                color=r.look.colour,
                markersize=8,
                clip_on=False,
            )
            axes.annotate(
                f"{wording.number(r.value)}",
                (0.95 if beyond else 0.05, i - 0.28),
                xycoords=("axes fraction", "data"),
                va="center",
                ha="right" if beyond else "left",
                bbox={"facecolor": PAPER, "edgecolor": "none", "pad": 0.8},
            )


def ladder_panel(rows: Sequence[Span], unit: str) -> Panel:
    """Draw mean costs from rung to rung, each with what the step from the rung before gave."""
    return Panel(_ladder(FULL, rows, unit), _ladder(PHONE, rows, unit), wide=True)


def _ladder(width: int, rows: Sequence[Span], unit: str) -> Markup:
    row, top, bottom = 44, 8, 38
    figure = drawing.canvas(width, top + row * len(rows) + bottom)
    axes = drawing.place(figure, 8, top, width - 22, row * len(rows))
    values = drawing.bounded(np.array([[r.low, r.value, r.high] for r in rows]))
    ends = drawing.span_of(np.append(values, 0.0), room=0.03)
    if np.nanmin(np.append(values, 0.0)) >= 0:
        ends = 0.0, ends[1]
    # a rung that is dearer than the rest by far must not squeeze the others into one line
    middle = np.nanmedian(values[:, 1]) if np.isfinite(values[:, 1]).any() else 1.0
    axes.set_xlim(ends[0], min(ends[1], 6 * middle) if middle > 0 else ends[1])
    far = axes.get_xlim()[1]
    drawing.linear_ticks(axes, "x", 5 if width < 500 else 8)
    axes.set_ylim(len(rows) - 0.5, -0.5)
    drawing.quiet_y(axes)
    for i, r in enumerate(rows):
        value, low, high = values[i, 1], values[i, 0], values[i, 2]
        y = i + 0.18
        if np.isfinite(value):
            axes.plot(
                [0, min(value, far)],
                [y, y],
                color=r.look.colour,
                linewidth=1.5,
                linestyle=r.look.line,
            )
            if value <= far:
                axes.plot(
                    [value],
                    [y],
                    r.look.marker,
                    color=r.look.colour,
                    markersize=8,
                    markeredgewidth=2,
                )
            else:
                axes.plot([far], [y], ">", color=r.look.colour, markersize=9, clip_on=False)
        if np.isfinite(low) and np.isfinite(high) and low <= far:
            axes.plot(
                [low, min(high, far)],
                [y, y],
                color=r.look.colour,
                linewidth=5,
                alpha=0.45,
                solid_capstyle="butt",
            )
        most = 19 if width < 500 else 60
        axes.annotate(
            wording.label(r.name, most),
            (0, i - 0.26),
            (2, 0),
            textcoords="offset points",
            va="center",
            fontweight="bold",
        )
        if r.note:
            axes.annotate(
                r.note,
                (1, i - 0.26),
                (0, 0),
                xycoords=("axes fraction", "data"),
                textcoords="offset points",
                va="center",
                ha="right",
            )
    axes.set_xlabel(wording.label(f"mean cost [{unit or '-'}], lower is better", 60))
    return drawing.to_svg(figure, f"ladder {width}")


def part_inks(parts: Sequence[str]) -> dict[str, tuple[str, str]]:
    """Return part of the log -> ink and band; practice and jury keep theirs everywhere."""
    known = {"practice": (SECOND, SECOND_BAND), "jury": (MODEL, BAND)}
    return {p: known.get(p, (QUIET, "#dcdedf")) for p in parts}
