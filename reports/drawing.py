"""Drawing board: axes placed to the pixel, and clean SVG that can stand inside a page.

Only matplotlib's objects are used, never its global state of current figures. One unit of the
SVG is one pixel of the page, so that letters have the size asked for.
"""

import hashlib
import io
import re
import warnings
from collections.abc import Iterator, Sequence
from contextlib import contextmanager
from typing import Any

import matplotlib
import numpy as np
from markupsafe import Markup
from matplotlib.axes import Axes
from matplotlib.backends.backend_svg import FigureCanvasSVG
from matplotlib.figure import Figure
from matplotlib.ticker import FixedLocator, FuncFormatter, MaxNLocator, NullLocator

from idlearn.reports import wording
from idlearn.reports.inks import INK, QUIET, RULE

FULL, HALF, PHONE = 760, 370, 345  # widths of drawings [px]
LETTER = 10.5  # [px]
_STYLE: dict[Any, Any] = {
    # the font that matplotlib brings along: the same metrics on every machine
    "font.family": ["DejaVu Sans"],
    "font.size": LETTER,
    "text.color": INK,
    "text.parse_math": False,  # a dollar sign in a signal's name is a dollar sign
    "axes.edgecolor": QUIET,
    "axes.labelcolor": INK,
    "axes.facecolor": "none",
    "axes.linewidth": 0.8,
    "axes.spines.top": False,
    "axes.spines.right": False,
    "axes.unicode_minus": True,
    "xtick.color": QUIET,
    "ytick.color": QUIET,
    "xtick.labelcolor": INK,
    "ytick.labelcolor": INK,
    "xtick.labelsize": LETTER - 0.5,
    "ytick.labelsize": LETTER - 0.5,
    "xtick.major.size": 3,
    "ytick.major.size": 3,
    "hatch.linewidth": 0.6,
    "lines.linewidth": 1.5,
    "lines.markersize": 5,
    "svg.fonttype": "none",
    "svg.hashsalt": "idlearn",
    "path.simplify": True,
    "path.simplify_threshold": 0.2,
}


@contextmanager
def drawing() -> Iterator[None]:
    """Set letters, lines and SVG output for all that is drawn inside."""
    with matplotlib.rc_context(_STYLE), warnings.catch_warnings():
        # a name in letters that the metrics font lacks is still written as text
        warnings.filterwarnings("ignore", message=".*[Gg]lyph.*missing.*")
        yield


def canvas(width: float, height: float) -> Figure:
    """Return an empty drawing of this size [px]."""
    figure = Figure(figsize=(width / 72, height / 72), facecolor="none")
    FigureCanvasSVG(figure)
    return figure


def place(figure: Figure, left: float, top: float, width: float, height: float) -> Axes:
    """Add axes by their distance from the left and upper edge and their size [px]."""
    w, h = figure.get_size_inches() * 72
    return figure.add_axes((left / w, 1 - (top + height) / h, width / w, height / h))


def write(figure: Figure, x: float, y: float, text: str, **style: object) -> None:
    """Write text at a distance from the left and upper edge [px], y being its base line."""
    w, h = figure.get_size_inches() * 72
    figure.text(x / w, 1 - y / h, text, **style)  # type: ignore[arg-type]


def linear_ticks(axes: Axes, which: str, most: int = 5, whole: bool = False) -> None:
    """Give a linear axis few ticks, written without superfluous digits."""
    axis = axes.xaxis if which == "x" else axes.yaxis
    axis.set_major_locator(MaxNLocator(most, steps=[1, 2, 2.5, 5, 10], integer=whole))

    def text(value: float, _position: int | None) -> str:
        ticks = axis.get_majorticklocs()
        step = float(ticks[1] - ticks[0]) if len(ticks) > 1 else 0.0
        return wording.tick(value, step)

    axis.set_major_formatter(FuncFormatter(text))


_RATIOS = (
    (0.1, 1, 10),
    (0.1, 0.2, 0.5, 1, 2, 5, 10),
    (0.25, 0.5, 1, 2, 4),
    (0.3, 0.5, 0.7, 1, 1.5, 2, 3),
    (0.4, 0.6, 0.8, 1, 1.25, 1.5, 2, 2.5),
    (0.6, 0.7, 0.8, 0.9, 1, 1.1, 1.2, 1.3, 1.4),
    (0.8, 0.85, 0.9, 0.95, 1, 1.05, 1.1, 1.15),
    (0.9, 0.92, 0.94, 0.96, 0.98, 1, 1.02, 1.04, 1.06, 1.08),
)


def ratio_axis(axes: Axes, which: str, low: float, high: float, most: int = 6) -> None:
    """Give an axis a logarithmic scale from `low` to `high` around 1, with round ticks."""
    axis = axes.xaxis if which == "x" else axes.yaxis
    (axes.set_xscale if which == "x" else axes.set_yscale)("log")
    (axes.set_xlim if which == "x" else axes.set_ylim)(low, high)
    ticks: Sequence[float] = [1.0]
    best = 0.0
    for choice in _RATIOS:
        inside = [t for t in choice if low <= t <= high]
        if 2 <= len(inside) <= most:
            # ticks should reach from end to end, and more of them read better than few
            merit = np.log(inside[-1] / inside[0]) / np.log(high / low) + 0.06 * len(inside)
            if merit > best:
                ticks, best = inside, merit
    if high / low > 100:  # decades
        first, last = int(np.floor(np.log10(low))), int(np.ceil(np.log10(high)))
        every = max(1, (last - first) // most + 1)
        ticks = [10.0**k for k in range(first, last + 1) if k % every == 0]
    axis.set_major_locator(FixedLocator([t for t in ticks if low <= t <= high]))
    axis.set_minor_locator(NullLocator())
    axis.set_major_formatter(FuncFormatter(lambda v, _: f"{v:.4g}"))


def ratio_limits(values: Sequence[float], most: float = 10.0) -> tuple[float, float]:
    """Return the ends of a ratio axis that holds 1 and the values, as far as `most` allows."""
    known = np.array([v for v in values if 0 < v < np.inf])
    low = float(np.clip(known.min(initial=1.0), 1 / most, 1 / 1.05))
    high = float(np.clip(known.max(initial=1.0), 1.05, most))
    room = (high / low) ** 0.06
    return low / room, high * room


def quiet_y(axes: Axes) -> None:
    """Take away the vertical axis."""
    axes.spines["left"].set_visible(False)
    axes.set_yticks([])


def grid(axes: Axes, which: str = "y") -> None:
    """Draw hairlines at the ticks, behind everything."""
    axes.grid(True, axis=which, color=RULE, linewidth=0.6)  # type: ignore[arg-type]
    axes.set_axisbelow(True)


def bounded(values: np.ndarray) -> np.ndarray:
    """Return the values with NaN for what no picture can show."""
    return np.where(np.abs(values) < 1e100, values, np.nan)


def envelope(
    x: np.ndarray, *series: np.ndarray, buckets: int
) -> tuple[np.ndarray, tuple[np.ndarray, ...]]:
    """Thin series for the eye: of each bucket the first and last of its extremes are kept.

    Args:
        x: common abscissa (n,).
        series: each (n,).
        buckets: most of them; up to two samples of each are kept per series.

    Returns:
        abscissa of the kept samples, and every series at them.
    """
    n = len(x)
    if n <= 2 * buckets:
        return x, series
    edges = np.linspace(0, n, buckets + 1).astype(int)
    keep = {0, n - 1}
    for a, b in zip(edges[:-1], edges[1:], strict=True):
        for s in series:
            part = s[a:b]
            if not np.isnan(part).all():
                keep |= {a + int(np.nanargmin(part)), a + int(np.nanargmax(part))}
            else:
                keep.add(int(a))
    rows = np.array(sorted(keep))
    return x[rows], tuple(s[rows] for s in series)


def span_of(*arrays: np.ndarray, room: float = 0.06) -> tuple[float, float]:
    """Return axis limits that hold all finite values with some room around them."""
    known = [a[np.isfinite(a)] for a in arrays]
    flat = np.concatenate(known) if known else np.empty(0)
    if not len(flat):
        return 0.0, 1.0
    low, high = float(flat.min()), float(flat.max())
    width = high - low
    if width <= 1e-9 * max(abs(low), abs(high)):
        width = 0.1 * abs(high) or 1.0
    return low - room * width, high + room * width


_UNUSED = re.compile(r' id="([^"]*)"')
_USED = re.compile(r"(?:url\(#|href=\"#)([^)\"]+)")
_LONG = re.compile(r"(\d\.\d\d)\d+")
# the page chooses the font, and turning by nothing is no turn
_IDLE = re.compile(r" font-family: 'DejaVu Sans';| transform=\"rotate\(-0 [^\"]*\"")
_TAG = re.compile(r"<[^>]*>")


def to_svg(figure: Figure, name: str) -> Markup:
    """Return the drawing as SVG to stand in a page.

    Namespaces, metadata, comments and names that nothing refers to are taken out, and the names
    left are made the drawing's own, for many drawings share one page.

    Args:
        figure: drawn inside `drawing()`.
        name: of the drawing, unique within the report.
    """
    held = io.StringIO()
    figure.savefig(held, format="svg", metadata={"Date": None}, facecolor="none")
    raw = held.getvalue()
    raw = raw[raw.index("<svg") :]
    raw = re.sub(r"<metadata>.*?</metadata>|<!--.*?-->|<style.*?</style>", "", raw, flags=re.S)
    own = "d" + hashlib.sha256(name.encode()).hexdigest()[:6]
    used = set(_USED.findall(raw))

    def kept(match: re.Match[str]) -> str:
        return f' id="{own}{match[1]}"' if match[1] in used else ""

    def tag(match: re.Match[str]) -> str:
        text = _UNUSED.sub(kept, match[0])
        text = _USED.sub(lambda m: m[0].replace(m[1], own + m[1]), text)
        text = text.replace("xlink:href=", "href=")
        text = _IDLE.sub("", _LONG.sub(r"\1", text))
        return re.sub(r"\s+", " ", text).replace(' "', '"')

    body = _TAG.sub(tag, raw)
    width, height = figure.get_size_inches() * 72
    head = (
        f'<svg viewBox="0 0 {width:g} {height:g}" width="{width:g}" height="{height:g}" '
        'aria-hidden="true" focusable="false">'
    )
    return Markup(head + re.sub(r">\s+<", "><", body[body.index(">") + 1 :]).strip())
