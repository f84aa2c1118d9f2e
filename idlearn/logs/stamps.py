"""Time columns as files hold them: elapsed seconds, local stamps, stamps with an offset."""

import re
from collections.abc import Callable, Sequence
from datetime import UTC, datetime
from typing import TYPE_CHECKING

import numpy as np

from idlearn.errors import LogError
from idlearn.logs.rawtable import Stamps, place

if TYPE_CHECKING:
    import pyarrow as pa

_EPOCH = datetime(1970, 1, 1)
_FRACTION = re.compile(r"[.,](\d+)")


def stamps_from_arrow(column: "pa.ChunkedArray") -> Stamps | None:
    """Return a time column that Arrow has understood; None where it has not.

    Args:
        column: numbers, time stamps (with or without zone) or dates.
    """
    import pyarrow as pa

    kind = column.type
    missing = np.asarray(column.is_null().to_numpy(), dtype=bool)
    if pa.types.is_integer(kind) or pa.types.is_floating(kind) or pa.types.is_null(kind):
        values = np.asarray(column.cast(pa.float64()).to_numpy(), dtype=np.float64)
        if np.isinf(values).any():
            return None
        return Stamps(kind="elapsed", values=values, missing=np.isnan(values))
    if pa.types.is_date(kind):
        kind = pa.timestamp("s")
        column = column.cast(kind)
    if not pa.types.is_timestamp(kind):
        return None
    try:
        whole = column.cast(pa.timestamp("ns", tz=kind.tz))
    except pa.ArrowInvalid:  # beyond what 64 bits of nanoseconds hold
        return None
    counts = whole.cast(pa.int64()).fill_null(0)
    return Stamps(
        kind="local" if kind.tz is None else "utc",
        values=np.array(counts.to_numpy(), dtype=np.int64),
        missing=missing,
    )


def stamps_from_texts(
    file: str, column: str, cells: Sequence[str | None], row_of: Callable[[int], int]
) -> Stamps:
    """Return a time column from its texts.

    Args:
        file: name for messages.
        column: name for messages.
        cells: ISO 8601 date and time, all with or all without offset; None where missing.
        row_of: number to call a row by.

    Raises:
        LogError: a text is no such stamp, or only some stamps have an offset.
    """
    values = np.zeros(len(cells), dtype=np.int64)
    missing = np.array([c is None for c in cells], dtype=bool)
    offset: bool | None = None
    for i, cell in enumerate(cells):
        if cell is None:
            continue
        at = place(file, row_of(i), column)
        try:
            stamp = datetime.fromisoformat(cell)
        except ValueError:
            raise LogError(
                f"{at}: {cell!r} is no ISO 8601 date and time; write 2024-10-27 02:30:00"
            ) from None
        aware = stamp.tzinfo is not None
        if offset is not None and aware != offset:
            raise LogError(
                f"{at}: {cell!r} comes {'with' if aware else 'without'} an offset and the stamps "
                "before it the other way; write all of them alike"
            )
        offset = aware
        if not 1678 <= stamp.year <= 2261:  # what 64 bits of nanoseconds hold
            raise LogError(f"{at}: {cell!r} is outside of the years 1678 to 2261; correct it")
        naive = stamp.astimezone(UTC).replace(tzinfo=None) if aware else stamp
        since = naive.replace(microsecond=0) - _EPOCH
        values[i] = (since.days * 86_400 + since.seconds) * 1_000_000_000 + _nanoseconds(cell)
    return Stamps(kind="utc" if offset else "local", values=values, missing=missing)


def _nanoseconds(cell: str) -> int:
    """Return the fraction of a second; `datetime` would cut it to microseconds."""
    found = _FRACTION.search(cell)
    return int(found[1][:9].ljust(9, "0")) if found else 0
