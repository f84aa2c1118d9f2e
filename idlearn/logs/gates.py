"""Mode and quality columns: which rows may be used, and where the mode changes."""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
import numpy.typing as npt

if TYPE_CHECKING:
    from idlearn.logs.sheetparts import SignalEntry

BoolArray = npt.NDArray[np.bool_]


@dataclass(frozen=True, kw_only=True)
class Gates:
    """What mode and quality say about each row.

    Attributes:
        quality: True where every quality is good (N,).
        mode: True where every mode is one that may be used (N,).
        change: True where a mode differs from the row before (N,).
    """

    quality: BoolArray
    mode: BoolArray
    change: BoolArray

    @classmethod
    def join(cls, gates: Sequence["Gates"]) -> "Gates":
        """Return the gates of files that follow each other."""
        return cls(
            quality=np.concatenate([g.quality for g in gates]),
            mode=np.concatenate([g.mode for g in gates]),
            change=np.concatenate([g.change for g in gates]),
        )

    def take(self, rows: npt.NDArray[np.int64]) -> "Gates":
        """Return the gates of some rows; a change in a row left out counts for the next one."""
        moved = np.cumsum(self.change)[rows]
        change = np.diff(moved, prepend=moved[:1]) > 0
        return Gates(quality=self.quality[rows], mode=self.mode[rows], change=change)

    def with_any(self, good: BoolArray, runs: npt.NDArray[np.int64]) -> "Gates":
        """Open the gates of each run that has a good row.

        Args:
            good: of the rows before they were merged (M,).
            runs: row after merging of each (M,).
        """
        opened = np.zeros(len(self.quality), dtype=bool)
        opened[runs[good]] = True
        return Gates(quality=self.quality | opened, mode=self.mode | opened, change=self.change)


def pass_gates(
    texts: Mapping[str, npt.NDArray[np.object_]], entries: Mapping[str, "SignalEntry"], n: int
) -> Gates:
    """Judge every row by its mode and quality.

    Args:
        texts: the columns, None where missing (N,).
        entries: role and good values of each column.
        n: number of rows.

    Returns:
        the gates; a missing quality is not good, a missing mode is a mode of its own.
    """
    quality, mode, change = np.ones(n, bool), np.ones(n, bool), np.zeros(n, bool)
    for name, entry in entries.items():
        codes, which = np.unique([_code(v) for v in texts[name]], return_inverse=True)
        if entry.role == "mode":
            change[1:] |= which[1:] != which[:-1]
        if entry.good:
            accepted = {_code(v) for v in entry.good}
            allowed = np.array([c in accepted for c in codes])[which]
            if entry.role == "mode":
                mode &= allowed
            else:
                quality &= allowed
    return Gates(quality=quality, mode=mode, change=change)


def _code(value: Any) -> str:
    """Return a value as text by which 192, 192.0 and "192" are the same."""
    if value is None:
        return ""
    text = str(value).strip()
    try:
        return f"{float(text):.15g}"
    except ValueError:
        return text
