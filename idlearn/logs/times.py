"""From time columns to elapsed seconds: zones, the hour that repeats in autumn, the sample time."""

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from idlearn.errors import LogError
from idlearn.logs.rawtable import RawTable
from idlearn.logs.segments import GRID_TOLERANCE

FloatArray = npt.NDArray[np.float64]
IntArray = npt.NDArray[np.int64]
BoolArray = npt.NDArray[np.bool_]
_NS = 1_000_000_000


@dataclass(frozen=True, kw_only=True)
class Times:
    """When the rows of one file were taken.

    Attributes:
        seconds: since the first row that has a stamp (N,), NaN where the stamp is missing.
        origin_ns: that row's time in nanoseconds since 1970 UTC; None for elapsed seconds.
        offset: what the time column itself said there, for elapsed seconds [s].
        unclear_hours: autumn hours for which nothing told the first pass from the second.
    """

    seconds: FloatArray
    origin_ns: int | None = None
    offset: float = 0.0
    unclear_hours: int = 0


def understand_times(table: RawTable, column: str, zone: str) -> Times:
    """Turn a table's time column into elapsed seconds.

    Args:
        table: has stamps.
        column: name of the time column, for messages.
        zone: IANA zone of stamps without offset; empty if none was given.

    Returns:
        elapsed seconds that never decrease; equal ones are left to the caller.

    Raises:
        LogError: a zone is needed, a stamp does not exist in its zone, stamps go back, or there
            is no stamp at all.
    """
    stamps = table.stamps
    if stamps is None or stamps.missing.all():
        raise LogError(
            f"{table.file}, column {column!r} holds no time at all; name another time column"
        )
    rows = np.flatnonzero(~stamps.missing)
    seconds = np.full(len(stamps.values), np.nan)
    unclear = 0
    if stamps.kind == "elapsed":
        values = stamps.values[rows]
        _refuse_backwards(table, column, rows, np.diff(values))
        seconds[rows] = values - values[0]
        return Times(seconds=seconds, offset=float(values[0]))
    utc = stamps.values[rows]
    if stamps.kind == "local":
        if not zone:
            raise LogError(
                f"{table.place(int(rows[0]), column)}: the stamps have no offset from UTC; "
                'add their zone to [[log]], such as zone = "Europe/Oslo"'
            )
        utc, unclear = _to_utc(table, column, rows, utc, zone)
    _refuse_backwards(table, column, rows, np.diff(utc))
    seconds[rows] = (utc - utc[0]) / _NS
    return Times(seconds=seconds, origin_ns=int(utc[0]), unclear_hours=unclear)


def median_step(steps: FloatArray) -> float:
    """Return the usual step [s] rounded to nine digits; 0 without steps.

    Elapsed seconds carry rounding errors of their own: 0.08 s would come out as 0.0799999999999983.
    """
    return float(f"{np.median(steps):.9g}") if len(steps) else 0.0


def iso_start(origin_ns: int, zone: str) -> str:
    """Return an instant as ISO 8601 with offset, in a zone or else in UTC."""
    from datetime import UTC, datetime, timedelta
    from zoneinfo import ZoneInfo

    instant = datetime(1970, 1, 1, tzinfo=UTC) + timedelta(microseconds=origin_ns // 1000)
    return (instant.astimezone(ZoneInfo(zone)) if zone else instant).isoformat()


def stamp_words(table: RawTable, row: int) -> str:
    """Return a row's stamp as the file says it."""
    if table.stamps is None or table.stamps.missing[row]:
        return "nothing"
    value = table.stamps.values[row]
    if table.stamps.kind == "elapsed":
        return f"{float(value):.15g}"
    words = str(np.datetime64(int(value), "ns")).replace("T", " ")
    words = words.rstrip("0").rstrip(".") if "." in words else words
    return f"{words} UTC" if table.stamps.kind == "utc" else words


def _refuse_backwards(
    table: RawTable, column: str, rows: IntArray, steps: FloatArray | IntArray
) -> None:
    """Raise where a step is negative; `rows` are the rows that have a stamp."""
    back = np.flatnonzero(steps < 0)
    if len(back):
        before, row = int(rows[back[0]]), int(rows[back[0] + 1])
        raise LogError(
            f"{table.place(row, column)}: the stamp goes back from {stamp_words(table, before)} "
            f"to {stamp_words(table, row)}; sort the rows by time or mend the stamps"
        )


def _to_utc(
    table: RawTable, column: str, rows: IntArray, local: IntArray, zone: str
) -> tuple[IntArray, int]:
    """Return nanoseconds UTC of local stamps, and how many repeated hours stayed unclear."""
    import pandas as pd

    index = pd.DatetimeIndex(local.view("M8[ns]"))
    passes = [
        index.tz_localize(zone, ambiguous=np.full(len(local), first), nonexistent="NaT")
        for first in (True, False)
    ]
    skipped = np.flatnonzero(passes[0].isna())
    if len(skipped):
        row = int(rows[skipped[0]])
        raise LogError(
            f"{table.place(row, column)}: {stamp_words(table, row)} does not exist in {zone}, "
            "where clocks were put forward; give the zone the logger really keeps, a fixed one "
            'such as "Etc/GMT-1" if it never changes to summer time'
        )
    early, late = (np.array(p.asi8, dtype=np.int64) for p in passes)
    utc, unclear = early, 0
    twice = np.flatnonzero(early != late)
    if not len(twice):
        return utc, 0
    steps = np.diff(local)
    usual = float(np.median(steps[steps > 0])) if (steps > 0).any() else 0.0
    # a new group where rows are skipped or half a day has passed
    apart = (np.diff(twice) > 1) | (np.diff(local[twice]) > 12 * 3600 * _NS)
    for group in np.split(twice, np.flatnonzero(apart) + 1):
        first, last = int(group[0]), int(group[-1]) + 1
        switch, clear = _second_pass(steps, first, last, int(late[first] - early[first]), usual)
        utc[switch:last] = late[switch:last]
        unclear += not clear
    return utc, unclear


def _second_pass(
    steps: IntArray, first: int, last: int, shift: int, usual: float
) -> tuple[int, bool]:
    """Find the row at which a repeated hour starts again.

    Exactly one border of the rows [first, last), outer borders included, lies `shift` further
    apart than the local stamps say. It is the border where the stamps go back; without one (the
    log has a gap, or a row an hour) the border whose step becomes the usual one; the start or end
    of the log next; then a gap; and last a border that looks unbroken as it is.

    Args:
        steps: steps of the local stamps (N - 1,) [ns].
        first: first row whose stamp occurs twice.
        last: row after the last of them.
        shift: by how much the clocks are put back [ns].
        usual: usual step [ns].

    Returns:
        the first row of the second pass, and whether nothing else fits as well.
    """

    def usual_step(step: float) -> bool:
        return abs(step - usual) <= GRID_TOLERANCE * usual

    ranks: list[tuple[int, float, int]] = []  # (how well it fits, gap there, row)
    for row in range(last, first - 1, -1):
        if row in (0, len(steps) + 1):
            ranks.append((1, 0.0, row))
            continue
        step = float(steps[row - 1])
        if step < 0:
            ranks.append((3, 0.0, row))  # several: the first, reached last in this loop
        elif usual_step(step + shift) and not usual_step(step):
            ranks.append((2, step, row))
        elif step == 0:
            ranks.append((-2, 0.0, row))
        elif usual_step(step):
            ranks.append((-1, 0.0, row))
        else:
            ranks.append((0, step, row))
    best = max(rank for rank, _, _ in ranks)
    fitting = [r for r in ranks if r[0] == best]
    if best == 3:
        return fitting[-1][2], True
    return max(fitting, key=lambda r: r[1])[2], len(fitting) == 1
