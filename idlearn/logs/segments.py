"""Unbroken stretches of valid samples."""

import numpy as np
import numpy.typing as npt

BoolArray = npt.NDArray[np.bool_]
IntArray = npt.NDArray[np.int64]

# Two rows follow on each other when their distance is the sample time within this share.
GRID_TOLERANCE = 0.01


def unbroken(valid: BoolArray, cut: BoolArray, shortest: int = 2) -> IntArray:
    """Return the unbroken stretches of valid rows.

    Args:
        valid: rows that may be used (N,).
        cut: True where a row does not follow on the one before it (N,); entry 0 has no meaning.
        shortest: fewest rows of a stretch.

    Returns:
        half-open row ranges (n, 2), in order.
    """
    n = len(valid)
    if not n:
        return np.zeros((0, 2), dtype=np.int64)
    before = np.concatenate([[False], valid[:-1]])
    after = np.concatenate([valid[1:], [False]])
    next_cut = np.concatenate([cut[1:], [True]])
    first = np.flatnonzero(valid & (~before | cut))
    last = np.flatnonzero(valid & (~after | next_cut)) + 1
    found = np.column_stack([first, last]).astype(np.int64)
    return found[found[:, 1] - found[:, 0] >= shortest]


def off_grid(elapsed_s: npt.NDArray[np.float64], sample_time_s: float) -> BoolArray:
    """Return where a row is not one sample time after the row before it (N,); entry 0 is False."""
    away = np.zeros(len(elapsed_s), dtype=bool)
    away[1:] = np.abs(np.diff(elapsed_s) - sample_time_s) > GRID_TOLERANCE * sample_time_s
    return away


def rows_inside(segments: IntArray, n: int) -> BoolArray:
    """Return a mask (n,) of the rows inside half-open row ranges."""
    edges = np.zeros(n + 1, dtype=np.int64)
    np.add.at(edges, segments[:, 0], 1)
    np.add.at(edges, segments[:, 1], -1)
    return np.asarray(np.cumsum(edges[:-1]) > 0)
