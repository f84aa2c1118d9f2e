"""Numbers and names in words: units on everything, no digit that the interval does not support."""

import math
import unicodedata
from collections.abc import Sequence

MISSING = "–"  # a table cell without a figure; each table that has one says what it means
THIN = "\u202f"  # narrow space that does not break: between thousands, before a unit
_SUPERSCRIPT = str.maketrans("-0123456789", "⁻⁰¹²³⁴⁵⁶⁷⁸⁹")


def decimals(width: float) -> int:
    """Return the decimals worth printing for an interval so wide; negative for tens and up.

    The last digit printed is between a fifth and a fiftieth of the width.
    """
    return math.ceil(0.7 - math.log10(width))


def is_known(*values: float) -> bool:
    """Tell whether all values are finite numbers."""
    return all(math.isfinite(v) for v in values)


def number(value: float, width: float = math.nan) -> str:
    """Write a number to the digits that an interval of this width supports.

    Args:
        value: the number.
        width: of its interval, in the same unit; three significant digits where it is unknown.
    """
    if math.isnan(value):
        return MISSING
    if math.isinf(value):
        return "beyond any bound"
    return _scaled([value], _fine(value, width), _exponent(abs(value)))


def with_interval(value: float, low: float, high: float, unit: str = "") -> str:
    """Write a number with its interval, such as "0.84 (0.79 to 0.90)"."""
    tail = f"{THIN}{unit}" if unit and is_known(value) else ""
    if not is_known(value):
        return number(value)
    if not is_known(low, high):
        ends = f"{number(low)} to {number(high)}" if low < high else "interval not known"
        return f"{number(value)} ({ends}){tail}"
    if abs(high - low) <= 1e-9 * abs(value):  # exact by its nature, such as 1 for the baseline
        return plain(value) + tail
    largest = max(abs(value), abs(low), abs(high))
    return _scaled([value, low, high], _fine(value, high - low), _exponent(largest)) + tail


def _fine(value: float, width: float) -> int:
    # two controllers that do the same have an interval of rounding errors: it supports nothing
    if is_known(width) and width > 1e-6 * abs(value):
        # an interval far narrower than the number is worth six digits, no more
        most = 5 - math.floor(math.log10(abs(value))) if value else 6
        return min(decimals(width), most)
    return 2 - math.floor(math.log10(abs(value))) if value else 0


def _exponent(largest: float) -> int:
    if largest == 0 or 1e-4 <= largest < 1e6:
        return 0
    return math.floor(math.log10(largest))


def _scaled(values: Sequence[float], fine: int, exponent: int) -> str:
    scale = 10.0**exponent
    texts = [_fixed(v / scale, fine + exponent) for v in values]
    told = texts[0] if len(texts) == 1 else f"{texts[0]} ({texts[1]} to {texts[2]})"
    return f"{told}\u00a0×\u00a010{str(exponent).translate(_SUPERSCRIPT)}" if exponent else told


def _fixed(value: float, fine: int) -> str:
    text = f"{round(value, fine):,.{max(fine, 0)}f}".replace(",", THIN)
    return (
        text.replace("-", "−")
        if float(f"{round(value, fine):.{max(fine, 0)}f}")
        else (text.lstrip("-"))
    )


def tick(value: float, step: float) -> str:
    """Write the number beside a tick of an axis whose ticks are `step` apart."""
    if value == 0 or abs(value) < 1e-9 * abs(step):
        return "0"
    fine = math.ceil(-math.log10(abs(step)) - 1e-9) if step else 2
    # 2.5 needs a digit more than the order of its step says
    if step and abs(step * 10.0**fine - round(step * 10.0**fine)) > 1e-6:
        fine += 1
    if 1e-3 <= abs(value) < 1e5 and fine <= 4:
        return f"{value:.{max(fine, 0)}f}".replace("-", "−")
    order = math.floor(math.log10(abs(value)))
    digits = min(max(0, fine + order), 3)
    mantissa, power = f"{value:.{digits}e}".split("e")
    return f"{mantissa}e{int(power)}".replace("-", "−")


def plain(value: float, digits: int = 3) -> str:
    """Write a figure that has no interval, or a limit, without trailing zeros."""
    if not is_known(value):
        return number(value)
    if value and not 1e-4 <= abs(value) < 1e6:
        return number(value)
    text = f"{value:.{digits}g}" if abs(value) < 10**digits else f"{value:,.0f}"
    return text.replace(",", THIN).replace("-", "−")


def share(value: float) -> str:
    """Write a share in percent, finer towards both ends."""
    if not is_known(value):
        return number(value)
    percent = 100 * value
    fine = 1 if 0 < percent < 10 or 90 < percent < 100 else 0
    return f"{percent:.{fine}f}{THIN}%"


def change(ratio: float, low: float, high: float) -> str:
    """Write a cost ratio as a fall or rise in percent with its interval."""
    width = 100 * (high - low)
    fine = min(max(decimals(width), 0), 2) if is_known(width) and width > 0 else 1
    told, ends = _moved(ratio, fine), [_moved(low, fine), _moved(high, fine)]
    return told if ends == [told, told] else f"{told} (between {ends[0]} and {ends[1]})"


def _moved(ratio: float, fine: int) -> str:
    percent = 100 * (ratio - 1)
    if not is_known(percent):
        return "beyond any bound"
    text = f"{abs(percent):.{fine}f}{THIN}%"
    return f"{text} {'lower' if percent < 0 else 'higher'}" if float(text[:-2]) else "unchanged"


def count(value: float) -> str:
    """Write a count in groups of three digits."""
    return f"{value:,.0f}".replace(",", THIN) if is_known(value) else MISSING


def duration(seconds: float) -> str:
    """Write a time span in the unit that suits it."""
    if not is_known(seconds):
        return MISSING
    size, unit = time_unit(seconds, least=1.0)
    return f"{seconds / size:.3g}{THIN}{unit}"


def time_unit(span_s: float, least: float = 3.0) -> tuple[float, str]:
    """Return length in seconds and symbol of the unit of which a span holds at least `least`."""
    for size, unit in ((86400.0, "d"), (3600.0, "h"), (60.0, "min"), (1.0, "s"), (1e-3, "ms")):
        if abs(span_s) >= least * size:
            return size, unit
    return (1.0, "s") if span_s == 0 or abs(span_s) >= 1e-3 else (1e-6, "µs")


def listed(names: Sequence[str]) -> str:
    """Write names as a list in a sentence."""
    if len(names) < 2:
        return "".join(names)
    return f"{', '.join(names[:-1])} and {names[-1]}"


def plural(n: int, noun: str) -> str:
    """Write a number of things."""
    return f"{count(n)} {noun}{'' if n == 1 else 's'}"


def clean(text: str) -> str:
    """Return the text without control characters, which neither page nor picture can show."""
    return "".join(c if unicodedata.category(c)[0] != "C" else "\ufffd" for c in text)


def label(name: str, most: int) -> str:
    """Return a name no longer than `most` characters, its middle cut out if need be."""
    name = clean(name)
    if len(name) <= most:
        return name
    head = (most - 1 + 1) // 2
    return f"{name[:head]}…{name[len(name) - (most - 1 - head) :]}"


def axis(name: str, unit: str, most: int = 40) -> str:
    """Return an axis label, the unit in brackets; [-] where there is none."""
    mark = f" [{label(unit, 12) or '-'}]"
    return label(name, max(8, most - len(mark))) + mark


def short_digest(digest: str) -> str:
    """Return the head of a digest, long enough to tell files apart."""
    return digest[:12] or MISSING
