"""The log of a plant: arrays of one sample time, cut into segments of unbroken valid samples."""

from collections.abc import Iterator, Sequence
from dataclasses import dataclass, replace
from datetime import datetime, timedelta

import numpy as np
import numpy.typing as npt

from idlearn.errors import InputError, TooShortError
from idlearn.logs.arrays import checked_bounds, checked_matrix, signals_for
from idlearn.logs.segments import rows_inside, unbroken
from idlearn.logs.signals import Finding, Rejected, Signal

FloatArray = npt.NDArray[np.float64]
IntArray = npt.NDArray[np.int64]

OUTSIDE = "not in a valid segment"


@dataclass(frozen=True, kw_only=True, eq=False)
class PlantLog:
    """One plant's record in engineering units, time first.

    Build it with `from_arrays` or `read_log`, which check what they are given. Rows outside the
    segments may hold NaN; rows inside never do.

    Attributes:
        u: actuator values as applied (N, n_u); u[k] is held over [k, k + 1).
        y: measured outputs (N, n_y).
        setpoint: (N, n_sp), or None.
        disturbance: measured disturbances (N, n_d), or None.
        sample_time_s: sample time [s].
        segments: half-open row ranges (n, 2) of unbroken, fully valid samples, each of 2 samples
            or more, in time order.
        signals: actuators, outputs, setpoints, disturbances, in this order.
        elapsed_s: time of each row (N,) [s].
        start: ISO 8601 with offset of row 0; empty if not known.
        source: file names as given.
        digests: SHA-256 of each file.
        findings: what reading came across.
        rejected: rows that are not used, by reason; with `n_valid` they add up to all rows.
    """

    u: FloatArray
    y: FloatArray
    setpoint: FloatArray | None
    disturbance: FloatArray | None
    sample_time_s: float
    segments: IntArray
    signals: tuple[Signal, ...]
    elapsed_s: FloatArray
    start: str = ""
    source: tuple[str, ...] = ()
    digests: tuple[str, ...] = ()
    findings: tuple[Finding, ...] = ()
    rejected: tuple[Rejected, ...] = ()

    @classmethod
    def from_arrays(
        cls,
        *,
        u: npt.ArrayLike,
        y: npt.ArrayLike,
        sample_time_s: float,
        setpoint: npt.ArrayLike | None = None,
        disturbance: npt.ArrayLike | None = None,
        segments: npt.ArrayLike | None = None,
        signals: Sequence[Signal] | None = None,
    ) -> "PlantLog":
        """Build a log from arrays; rows with NaN end a segment and are never filled.

        Args:
            u: actuator values (N, n_u).
            y: outputs (N, n_y).
            sample_time_s: sample time [s], > 0.
            setpoint: (N, n_sp); without `signals`, column i belongs to output i.
            disturbance: (N, n_d).
            segments: half-open row ranges (n, 2); default: all rows.
            signals: one per column, in the order actuators, outputs, setpoints, disturbances;
                default: u1, u2, .., y1, .., setpoint1, .., d1, .. without limits.

        Raises:
            InputError: a shape, value or signal is wrong.
        """
        if not (np.isfinite(sample_time_s) and sample_time_s > 0):
            raise InputError(f"sample_time_s is {sample_time_s}; it has to be greater than 0")
        present = {"actuator": checked_matrix("u", u, None)}
        n = len(present["actuator"])
        present["output"] = checked_matrix("y", y, n)
        if setpoint is not None:
            present["setpoint"] = checked_matrix("setpoint", setpoint, n)
        if disturbance is not None:
            present["disturbance"] = checked_matrix("disturbance", disturbance, n)
        known = signals_for(present, signals)
        valid = np.ones(n, dtype=bool)
        for a in present.values():
            valid &= np.isfinite(a).all(axis=1)
        cut = np.zeros(n, dtype=bool)  # True where a row does not follow on the one before
        if segments is not None:
            bounds = checked_bounds(segments, n)
            valid &= rows_inside(bounds, n)
            cut[bounds[:, 0]] = True
        found = unbroken(valid, cut)
        lost = n - int((found[:, 1] - found[:, 0]).sum())
        return cls(
            u=present["actuator"],
            y=present["output"],
            setpoint=present.get("setpoint"),
            disturbance=present.get("disturbance"),
            sample_time_s=float(sample_time_s),
            segments=found,
            signals=known,
            elapsed_s=np.arange(n, dtype=np.float64) * float(sample_time_s),
            rejected=(Rejected(OUTSIDE, lost),) if lost else (),
        )

    @property
    def actuators(self) -> tuple[Signal, ...]:
        """Signals of the columns of `u`."""
        return tuple(s for s in self.signals if s.role == "actuator")

    @property
    def outputs(self) -> tuple[Signal, ...]:
        """Signals of the columns of `y`."""
        return tuple(s for s in self.signals if s.role == "output")

    @property
    def setpoints(self) -> tuple[Signal, ...]:
        """Signals of the columns of `setpoint`."""
        return tuple(s for s in self.signals if s.role == "setpoint")

    @property
    def disturbances(self) -> tuple[Signal, ...]:
        """Signals of the columns of `disturbance`."""
        return tuple(s for s in self.signals if s.role == "disturbance")

    @property
    def n_u(self) -> int:
        """Number of actuators."""
        return int(self.u.shape[1])

    @property
    def n_y(self) -> int:
        """Number of outputs."""
        return int(self.y.shape[1])

    @property
    def n_d(self) -> int:
        """Number of measured disturbances."""
        return 0 if self.disturbance is None else int(self.disturbance.shape[1])

    @property
    def n_samples(self) -> int:
        """Number of rows, used or not."""
        return len(self.u)

    @property
    def n_valid(self) -> int:
        """Number of rows inside segments."""
        return int((self.segments[:, 1] - self.segments[:, 0]).sum())

    @property
    def n_source_rows(self) -> int:
        """Number of rows the log was made of: used and rejected ones."""
        return self.n_valid + sum(r.rows for r in self.rejected)

    @property
    def inputs(self) -> FloatArray:
        """Everything known that moves the plant (N, n_u + n_d): actuators, then disturbances."""
        if self.disturbance is None:
            return self.u
        return np.hstack([self.u, self.disturbance])

    @property
    def valid(self) -> npt.NDArray[np.bool_]:
        """Mask (N,) of the rows inside segments."""
        return rows_inside(self.segments, self.n_samples)

    @property
    def controlled(self) -> tuple[int, ...]:
        """Index of the output that each setpoint column belongs to."""
        outputs = [s.name for s in self.outputs]
        return tuple(outputs.index(s.of) for s in self.setpoints)

    def rows(self, first: int, last: int) -> "PlantLog":
        """Return rows [first, last) as a log of its own; segments that straddle are cut.

        Args:
            first: first row, 0 <= first < last.
            last: row after the last one, at most `n_samples`.

        Raises:
            InputError: the range is empty or beyond the log.
        """
        if not 0 <= first < last <= self.n_samples:
            raise InputError(
                f"rows {first} to {last} of a log with {self.n_samples} rows were asked for; "
                "give 0 <= first < last <= number of rows"
            )
        kept = np.clip(self.segments, first, last) - first
        kept = kept[kept[:, 1] - kept[:, 0] >= 2]
        lost = last - first - int((kept[:, 1] - kept[:, 0]).sum())
        part = slice(first, last)
        return replace(
            self,
            u=self.u[part],
            y=self.y[part],
            setpoint=None if self.setpoint is None else self.setpoint[part],
            disturbance=None if self.disturbance is None else self.disturbance[part],
            segments=kept,
            elapsed_s=self.elapsed_s[part],
            start=_later(self.start, float(self.elapsed_s[first] - self.elapsed_s[0])),
            rejected=(Rejected(OUTSIDE, lost),) if lost else (),
        )

    def split(self, fractions: Sequence[float]) -> tuple["PlantLog", ...]:
        """Split the log in time order by its valid samples; a segment that straddles is cut.

        Args:
            fractions: share of the valid samples for each part; each > 0, together at most 1.

        Raises:
            InputError: the fractions are wrong.
            TooShortError: a part would have no segment.
        """
        shares = np.asarray(fractions, dtype=float)
        if shares.ndim != 1 or not len(shares) or not (shares > 0).all() or shares.sum() > 1 + 1e-9:
            raise InputError(
                f"fractions are {shares.tolist()}; give positive shares that add up to at most 1"
            )
        used = np.flatnonzero(self.valid)
        ends = np.rint(np.minimum(np.cumsum(shares), 1.0) * len(used)).astype(int)
        if np.any(np.diff(ends, prepend=0) < 2):
            raise TooShortError(
                f"the log has {len(used)} valid samples, too few for parts of "
                f"{', '.join(f'{s:g}' for s in shares)}; use a longer log"
            )
        parts, first = [], 0
        for end in ends:
            last = self.n_samples if end == len(used) else int(used[end])
            part = self.rows(first, last)
            if not len(part.segments):
                raise TooShortError(
                    f"the part of the log from row {first} to row {last} has no two valid samples "
                    "in a row; use a log with longer unbroken stretches"
                )
            parts.append(part)
            first = last
        return tuple(parts)

    def segment_logs(self) -> Iterator["PlantLog"]:
        """Yield each segment as a log of its own, in time order."""
        for first, last in self.segments.tolist():
            yield self.rows(first, last)


def _later(start: str, seconds: float) -> str:
    if not start or not seconds:
        return start
    return (datetime.fromisoformat(start) + timedelta(seconds=seconds)).isoformat()
