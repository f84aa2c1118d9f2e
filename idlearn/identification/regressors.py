"""Regressor rows of ARX equations, from one segment or many."""

from collections.abc import Iterator, Sequence
from dataclasses import dataclass

import numpy as np

from idlearn.errors import TooShortError
from idlearn.logs import PlantLog


@dataclass(frozen=True)
class Centre:
    """What is taken off before lags are formed.

    Attributes:
        u: (n_in,) [input units].
        y: (n_y,) [output units].
    """

    u: np.ndarray
    y: np.ndarray


def centre_of(log: PlantLog, remove: bool = True) -> Centre:
    """Return the means over the valid rows, or zeros."""
    if not remove:
        return Centre(np.zeros(log.inputs.shape[1]), np.zeros(log.n_y))
    rows = np.concatenate([np.arange(a, b) for a, b in log.segments])
    return Centre(log.inputs[rows].mean(axis=0), log.y[rows].mean(axis=0))


def blocks(
    log: PlantLog,
    centre: Centre,
    n_a: int,
    first_lag: Sequence[int],
    last_lag: Sequence[int],
) -> Iterator[tuple[np.ndarray, np.ndarray]]:
    """Yield (phi, target) of each segment that is long enough.

    Args:
        log: whose segments give the rows.
        centre: taken off first.
        n_a: lags of every output, 1..n_a.
        first_lag: first lag of each input.
        last_lag: last lag of each input, inclusive.

    Yields:
        phi (n_rows, n_a * n_y + sum(last - first + 1)) in the order -y[k-1] of every output,
        -y[k-2], ..., then the lags of each input in turn; target (n_rows, n_y).
    """
    start = max([n_a, *last_lag, 1])
    for first, last in log.segments:
        n = last - first - start
        if n < 1:
            continue
        y, u = log.y[first:last] - centre.y, log.inputs[first:last] - centre.u
        columns = [-y[start - i : start - i + n] for i in range(1, n_a + 1)]
        for j, (a, b) in enumerate(zip(first_lag, last_lag, strict=True)):
            columns += [u[start - i : start - i + n, j : j + 1] for i in range(a, b + 1)]
        yield np.concatenate(columns, axis=1), y[start:]


def triangle(
    log: PlantLog,
    centre: Centre,
    n_a: int,
    first_lag: Sequence[int],
    last_lag: Sequence[int],
    constant: bool = False,
    chunk: int = 65536,
) -> tuple[np.ndarray, int]:
    """Return the triangular factor of [phi (1) target], gathered in one pass, and the rows.

    The factor holds all that least squares needs: its squared columns are the Gram matrix, but
    its condition number is that of the data and not its square.

    Raises:
        TooShortError: no segment is long enough.
    """
    factor: np.ndarray | None = None
    rows = 0
    for phi, target in blocks(log, centre, n_a, first_lag, last_lag):
        parts = [phi, np.ones((len(phi), 1))] if constant else [phi]
        joined = np.concatenate([*parts, target], axis=1)
        rows += len(joined)
        for i in range(0, len(joined), chunk):
            piece = joined[i : i + chunk]
            rows_so_far = piece if factor is None else np.concatenate([factor, piece])
            factor = np.asarray(np.linalg.qr(rows_so_far, mode="r"))
    if factor is None:
        longest = int((log.segments[:, 1] - log.segments[:, 0]).max(initial=0))
        raise TooShortError(
            f"the longest unbroken stretch has {longest} samples; these orders need more than "
            f"{max([n_a, *last_lag, 1])}. Use a longer log or lower orders."
        )
    return factor, rows
