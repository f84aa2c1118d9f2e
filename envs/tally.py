"""What surrounds the plant in an episode, and what an episode adds up to."""

from collections.abc import Callable
from dataclasses import dataclass
from functools import reduce

import numpy as np

from idlearn.control import ObservationLayout
from idlearn.cost import BoundCost
from idlearn.envs.actuator import Actuator

Inside = Callable[[np.ndarray, np.ndarray, np.ndarray], np.ndarray]

AWAY = 1e12  # an output beyond this is a loop that has run away: a trip, whatever the limits
ROWS = 1 << 14  # samples times episodes that are added up together


@dataclass(frozen=True)
class Loop:
    """What surrounds the plant in every episode.

    Attributes:
        layout: observation columns.
        actuator: limits.
        costs: every cost to score.
        trip_low: (n_y,) an output below it ends the episode; -inf for none [engineering units].
        trip_high: (n_y,) an output above it ends the episode; inf for none [engineering units].
        latency_samples: decisions act so many samples later.
    """

    layout: ObservationLayout
    actuator: Actuator
    costs: BoundCost
    trip_low: np.ndarray
    trip_high: np.ndarray
    latency_samples: int = 0


@dataclass(frozen=True)
class Rollout:
    """What n episodes gave.

    Attributes:
        terms: mean stage cost by term (n, n_terms) [-].
        cost: episode cost by cost (n, n_costs) [-].
        tripped: (n,) bool; an output beyond 1e12 is a trip too.
        travel: actuator travel per sample, up to a trip (n, n_u) [engineering units].
        at_limit: share of samples, up to a trip, with an actuator at a limit (n,) [-].
        offset: mean of y - setpoint over the last fifth, frozen from a trip on
            (n, n_setpoints) [engineering units].
        support: share of samples, up to a trip, inside the region of the log (n,), NaN where
            not asked [-].
        y: (n, N, n_y) or None.
        u: applied (n, N, n_u) or None.
        requested: (n, N, n_u) or None.
    """

    terms: np.ndarray
    cost: np.ndarray
    tripped: np.ndarray
    travel: np.ndarray
    at_limit: np.ndarray
    offset: np.ndarray
    support: np.ndarray
    y: np.ndarray | None = None
    u: np.ndarray | None = None
    requested: np.ndarray | None = None


class Tally:
    """Adds up what episodes cost; after a trip it goes on charging the cost at the trip.

    Samples are collected and added up in blocks, which is far faster than one at a time; sums
    are taken sample by sample, so that the size of a block changes no digit.

    Args:
        setpoint: (N, S, n_setpoints) [engineering units].
        tile: how often the S columns are repeated.
        u: applied before the first sample (n, n_u) [engineering units].
        loop: what surrounds the plant.
        inside: region that the log covers, or None.
        record: whether to keep y, u and requested.
    """

    def __init__(
        self,
        setpoint: np.ndarray,
        tile: int,
        u: np.ndarray,
        loop: Loop,
        inside: Inside | None,
        record: bool,
    ) -> None:
        """Start with nothing."""
        n, n_samples, layout = len(u), len(setpoint), loop.layout
        self._setpoint, self._tile, self._loop, self._inside = setpoint, tile, loop, inside
        self._low = np.maximum(loop.trip_low, -AWAY)
        self._high = np.minimum(loop.trip_high, AWAY)
        self._controlled = list(layout.controlled)
        self._tail = n_samples - max(1, n_samples // 5)
        self._terms = np.zeros((len(loop.costs.names), n)).T  # as BoundCost lays them out
        self._travel = np.zeros((n, layout.n_u))
        self._limited, self._covered, self._ran = np.zeros(n), np.zeros(n), np.zeros(n)
        self._offset = np.zeros((n, len(layout.controlled)))
        self._tripped = np.zeros(n, dtype=bool)
        self._frozen_terms = np.zeros_like(self._terms)
        self._frozen_error = np.zeros_like(self._offset)
        size = int(np.clip(ROWS // max(n, 1), 1, n_samples))
        self._first, self._held = 0, 0
        self._y = np.empty((size, n, layout.n_y))
        self._u = np.empty((size + 1, n, layout.n_u))  # row 0: the sample before
        self._u[0] = u
        keep = (n, n_samples)
        self._records = (
            (np.empty((*keep, layout.n_y)), *(np.empty((*keep, layout.n_u)) for _ in range(2)))
            if record
            else None
        )

    def add(self, y: np.ndarray, u: np.ndarray, request: np.ndarray) -> None:
        """Take one sample: y (n, n_y), applied u (n, n_u), requested u (n, n_u)."""
        self._y[self._held], self._u[self._held + 1] = y, u
        if self._records is not None:
            k = self._first + self._held
            for kept, now in zip(self._records, (y, u, request), strict=True):
                kept[:, k] = now
        self._held += 1
        if self._held == len(self._y):
            self._settle()

    def _settle(self) -> None:
        """Add up the samples that are held."""
        count = self._held
        y, u = self._y[:count], self._u[1 : count + 1]
        move = u - self._u[:count]
        rows = self._setpoint[self._first : self._first + count]
        setpoint = np.tile(rows, (1, self._tile, 1)) if self._tile > 1 else rows
        bad = _any_column((y < self._low) | (y > self._high) | np.isnan(y))
        travel, runs = np.abs(move), None
        limited = _any_column((u <= self._loop.actuator.low) | (u >= self._loop.actuator.high))
        if bad.any() or self._tripped.any():
            y = np.clip(np.nan_to_num(y, nan=AWAY), -AWAY, AWAY)
            terms, error, runs = self._after_trips(y, setpoint, u, move, bad)
            travel, limited = travel * runs[..., None], limited & runs
            self._ran += runs.sum(axis=0)
        else:
            terms = self._loop.costs.stage(y, setpoint, u, move)
            error = y[..., self._controlled] - setpoint
            self._ran += count
        if self._inside is not None:
            flat = (a.reshape(-1, a.shape[2]) for a in (y, u, move))
            covered = np.asarray(self._inside(*flat), dtype=bool).reshape(bad.shape)
            covered = covered if runs is None else covered & runs
            self._covered += covered.sum(axis=0)
        for k in range(count):
            self._terms += terms[k]
            self._travel += travel[k]
            if self._first + k >= self._tail:
                self._offset += error[k]
        self._limited += limited.sum(axis=0)  # whole numbers: any order gives the same
        self._u[0] = u[-1]
        self._first, self._held = self._first + count, 0

    def _after_trips(
        self,
        y: np.ndarray,
        setpoint: np.ndarray,
        u: np.ndarray,
        move: np.ndarray,
        bad: np.ndarray,
    ) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
        """Return terms, errors and whether an episode was running, frozen from trips on."""
        before = self._tripped
        gone = np.logical_or.accumulate(bad, axis=0) | before
        terms = np.array(self._loop.costs.stage(y, setpoint, u, move, gone))
        error = y[..., self._controlled] - setpoint
        fresh = np.flatnonzero(gone[-1] & ~before)
        at = gone[:, fresh].argmax(axis=0)
        self._frozen_terms[fresh] = terms[at, fresh]
        self._frozen_error[fresh] = error[at, fresh]
        over = np.concatenate([before[None], gone[:-1]])[..., None]
        self._tripped = gone[-1]
        return (
            np.where(over, self._frozen_terms, terms),
            np.where(over, self._frozen_error, error),
            ~over[..., 0],
        )

    def close(self) -> Rollout:
        """Return the means."""
        if self._held:
            self._settle()
        n, ran = len(self._setpoint), np.maximum(self._ran, 1.0)
        terms = self._terms / n
        y, u, requested = self._records or (None, None, None)
        if y is not None and self._tripped.any():
            y = np.clip(np.nan_to_num(y, nan=AWAY), -AWAY, AWAY)
        return Rollout(
            terms=terms,
            cost=self._loop.costs.totals(terms),
            tripped=self._tripped,
            travel=self._travel / ran[:, None],
            at_limit=self._limited / ran,
            offset=self._offset / (n - self._tail),
            support=self._covered / ran if self._inside else np.full(len(terms), np.nan),
            y=y,
            u=u,
            requested=requested,
        )


def _any_column(mask: np.ndarray) -> np.ndarray:
    """Return whether any column (..., c) is true; faster than `any` for few columns."""
    return np.asarray(reduce(np.logical_or, (mask[..., j] for j in range(mask.shape[-1]))))
