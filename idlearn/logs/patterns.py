"""Marks that recorders, transmitters and limits leave in a signal.

Every function takes the valid samples of one signal, segment by segment, and fits nothing.
"""

from collections.abc import Sequence

import numpy as np
import numpy.typing as npt

FloatArray = npt.NDArray[np.float64]
BoolArray = npt.NDArray[np.bool_]

_SAME = 1e-9  # values closer than this share of the range are one value


def quantisation_step(levels: FloatArray, n: int) -> float:
    """Return the step that all values are multiples of, 0 if there is none to see.

    Args:
        levels: the different values in rising order (n_levels,).
        n: number of values.

    Returns:
        smallest distance between different values, if at least 99 % of the distances are whole
        multiples of it and values repeat, as they do where the step is coarse enough to matter.
    """
    spread = float(levels[-1] - levels[0]) if len(levels) else 0.0
    if not spread > 0:
        return 0.0
    gaps = np.diff(levels)
    gaps = gaps[gaps > _SAME * spread]
    if not len(gaps) or len(gaps) + 1 > 0.5 * n:
        return 0.0
    step = float(gaps.min())
    multiples = gaps / step
    if np.mean(np.abs(multiples - np.rint(multiples)) < 0.02 * multiples) < 0.99:
        return 0.0
    # the mean over many steps is cleaner than one difference of two rounded numbers
    return float(f"{spread / np.rint(spread / step):.6g}")


def share_at(values: FloatArray, low: float, high: float, tolerance: float) -> float:
    """Return the share of values at a limit, within a tolerance.

    Args:
        values: (N,).
        low: lower limit, -inf if there is none.
        high: upper limit, inf if there is none.
        tolerance: distance that still counts as at the limit.
    """
    away = np.minimum(np.abs(values - low), np.abs(values - high))
    return float(np.mean(away <= tolerance))


def run_lengths(pieces: Sequence[FloatArray]) -> npt.NDArray[np.int64]:
    """Return the lengths of all runs of one value, over the segments (n_runs,)."""
    lengths = []
    for piece in pieces:
        starts = np.flatnonzero(np.append(True, np.diff(piece) != 0))
        lengths.append(np.diff(np.append(starts, len(piece))))
    return np.concatenate(lengths).astype(np.int64)


def flat_rows(
    pieces: Sequence[FloatArray], drives: Sequence[FloatArray], least: int = 30
) -> tuple[int, int]:
    """Count samples in runs where a signal stands still while what drives it moves.

    A coarse or slow signal stands still now and then; a run counts when it is at least `least`
    samples and ten times the run that 95 % of its samples stay below, and some drive moves by a
    twentieth of its range meanwhile.

    Args:
        pieces: the signal's segments, (N_i,) each.
        drives: the actuators over the same segments, (N_i, n_u) each.
        least: shortest run that counts [samples].

    Returns:
        samples in such runs, and the longest of them.
    """
    lengths = run_lengths(pieces)
    ordered = np.sort(lengths)
    typical = ordered[np.searchsorted(np.cumsum(ordered), 0.5 * ordered.sum())]
    limit = max(least, 10 * int(typical))
    moving = np.ptp(np.concatenate(drives), axis=0)
    rows, longest = 0, 0
    for piece, drive in zip(pieces, drives, strict=True):
        edges = np.append(np.flatnonzero(np.append(True, np.diff(piece) != 0)), len(piece))
        for k in np.flatnonzero(np.diff(edges) >= limit):
            first, last = int(edges[k]), int(edges[k + 1])
            if (np.ptp(drive[first:last], axis=0) > 0.05 * moving).any():
                rows += last - first
                longest = max(longest, last - first)
    return rows, longest


def straight_share(pieces: Sequence[FloatArray], step: float) -> float:
    """Return the share of moving points that lie on the line between their neighbours.

    A recorder that interpolates between stored values leaves points whose second difference is
    nothing but rounding, between few where it is large. A smooth signal has small second
    differences everywhere and a noisy one nowhere, so only the mixture counts.

    Args:
        pieces: the signal's segments, (N_i,) each.
        step: quantisation step, 0 if none is known.

    Returns:
        the share among points where the signal moves; 0 where there is no such mixture.
    """
    spread = float(np.ptp(np.concatenate(pieces)))
    tolerance = max(_SAME * spread, 1.01 * step)
    slope = np.concatenate([np.abs(np.diff(p)[1:]) for p in pieces])
    bend = np.concatenate([np.abs(np.diff(p, 2)) for p in pieces])
    moving = slope > 4 * tolerance
    if moving.sum() < 20:
        return 0.0
    bend = bend[moving]
    on_line = bend <= tolerance
    if on_line.all() or np.median(bend[~on_line]) < 20 * tolerance:
        return 0.0
    return float(on_line.mean())


def held_share(pieces: Sequence[FloatArray], step: float) -> float:
    """Return the share of samples that repeat the one before, between jumps of many steps.

    A recorder that stores a value only when it has left a band hands out the old one until then.

    Args:
        pieces: the signal's segments, (N_i,) each.
        step: quantisation step, 0 if none is known.

    Returns:
        the share; 0 where the jumps are no larger than quantisation explains.
    """
    moves = np.abs(np.concatenate([np.diff(p) for p in pieces]))
    jumps = moves[moves > 0]
    if len(jumps) < 10 or np.median(jumps) < 5 * step:
        return 0.0
    return float(np.mean(moves == 0))
