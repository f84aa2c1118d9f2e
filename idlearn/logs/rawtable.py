"""What a log file holds before its time is understood."""

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt

from idlearn.errors import LogError


@dataclass(frozen=True, kw_only=True)
class Wanted:
    """The columns to be read.

    Attributes:
        numbers: columns of numbers.
        texts: columns kept as they are: mode and quality.
        time: time column, or empty.
        decimal: decimal sign of a text file.
        ignored: columns that are not read but have to be there, since the sheet names them.
    """

    numbers: tuple[str, ...]
    texts: tuple[str, ...] = ()
    time: str = ""
    decimal: str = "."
    ignored: tuple[str, ...] = ()

    @property
    def columns(self) -> tuple[str, ...]:
        """Every column, each once."""
        time = (self.time,) if self.time else ()
        return tuple(dict.fromkeys((*time, *self.numbers, *self.texts)))


@dataclass(frozen=True, kw_only=True)
class Stamps:
    """A time column as found.

    Attributes:
        kind: "elapsed" seconds, "local" time without offset, or "utc".
        values: seconds (float64) or nanoseconds since 1970 (int64), (N,).
        missing: rows without a value (N,).
    """

    kind: str
    values: npt.NDArray[Any]
    missing: npt.NDArray[np.bool_]


@dataclass(frozen=True, kw_only=True)
class RawTable:
    """A log file's columns.

    Attributes:
        file: name as given.
        numbers: (N, n), NaN where missing, never infinite.
        texts: (N,) each, None where missing.
        stamps: the time column, or None.
        row_of: number to call a row by; in text files the line, the header being line 1.
    """

    file: str
    numbers: npt.NDArray[np.float64]
    texts: dict[str, npt.NDArray[np.object_]]
    stamps: Stamps | None
    row_of: Callable[[int], int]

    def place(self, row: int, column: str) -> str:
        """Return the words for a place in the file."""
        return place(self.file, self.row_of(row), column)


def place(file: str, row: int, column: str) -> str:
    """Return the words for a cell."""
    return f"{file}, row {row}, column {column!r}"


def check_columns(file: str, names: list[str], wanted: Wanted) -> None:
    """Check the header of a log file.

    Raises:
        LogError: a name stands twice, or a wanted column is not there.
    """
    for name in names:
        if names.count(name) > 1:
            raise LogError(
                f"{file}, row 1: two columns are called {name!r}; give each its own name"
            )
    for name in (*wanted.columns, *wanted.ignored):
        if name not in names:
            raise LogError(
                f"{file} has no column {name!r}, which the sheet names; it has "
                + ", ".join(repr(n) for n in names)
            )


def not_a_number(file: str, row: int, column: str, text: str, decimal: str = ".") -> LogError:
    """Return the error for text where a number belongs."""
    shown = text if len(text) <= 40 else f"{text[:37]}..."
    hint = "correct the cell, or leave it empty for a missing value"
    if decimal == "." and text.count(",") == 1 and text.replace(",", "").lstrip("+-").isdigit():
        hint = 'set decimal = "," in [[log]] if the file has decimal commas'
    return LogError(f"{place(file, row, column)}: {shown!r} is not a number; {hint}")


def infinite(file: str, row: int, column: str, text: str) -> LogError:
    """Return the error for an infinite value."""
    return LogError(
        f"{place(file, row, column)}: {text!r} is infinite; "
        "correct the cell, or leave it empty for a missing value"
    )
