"""Figures in words, no finer than their interval supports."""

import math
from collections.abc import Sequence

import numpy as np

from idlearn.comparison.resampling import Interval


def decimals(width: float) -> int:
    """Return how many decimals are worth printing when the interval is so wide.

    The last digit printed is between a fifth and a fiftieth of the width.
    """
    if not (math.isfinite(width) and width > 0):
        return 2
    return max(0, math.ceil(0.69 - math.log10(width)))


def figure(value: float, digits: int = 3) -> str:
    """Write a number to so many significant digits, never with an exponent."""
    return np.format_float_positional(float(f"{value:.{digits}g}"), trim="-")


def ratio(value: float, interval: Interval) -> str:
    """Write a ratio with its interval."""
    if not math.isfinite(value):
        return "beyond any bound"
    width = interval.high - interval.low
    if not (math.isfinite(width) and width > 0):
        return f"{value:.3g}"
    fine = min(decimals(width), 4)
    return f"{value:.{fine}f} ({interval.low:.{fine}f} to {interval.high:.{fine}f})"


def change(value: float, interval: Interval) -> str:
    """Write a cost ratio as a rise or fall in percent, with its interval."""
    width = 100 * (interval.high - interval.low)
    fine = min(decimals(width), 2)

    def said(x: float) -> str:
        percent = 100 * (x - 1)
        if not math.isfinite(percent):
            return "beyond any bound"
        text = f"{abs(percent):.{fine}f}"
        if float(text) == 0:
            return "unchanged"
        return f"{text} % {'lower' if percent < 0 else 'higher'}"

    if said(interval.low) == said(interval.high) == said(value):
        return said(value)
    return f"{said(value)} (between {said(interval.low)} and {said(interval.high)})"


def share(value: float) -> str:
    """Write a share in percent, with one decimal below 10 % and above 90 %."""
    if not math.isfinite(value):
        return "no figure"
    percent = 100 * value
    fine = 1 if percent < 10 or percent > 90 else 0
    return f"{float(f'{percent:.{fine}f}'):g} %"


def listed(names: Sequence[str]) -> str:
    """Write names as a list in a sentence."""
    if len(names) < 2:
        return "".join(names)
    return f"{', '.join(names[:-1])} and {names[-1]}"
