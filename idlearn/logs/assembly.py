"""From declared files to a log: one time axis, the time grid, segments, rejected rows."""

from collections.abc import Sequence

import numpy as np
import numpy.typing as npt

from idlearn.errors import LogError, TooShortError, UninformativeError
from idlearn.logs.declared import Declared, used_signals
from idlearn.logs.gates import Gates
from idlearn.logs.plantlog import PlantLog
from idlearn.logs.record import DUPLICATE, NO_STAMP, Record, read_record
from idlearn.logs.segments import off_grid, unbroken
from idlearn.logs.signals import Finding, Rejected, Signal
from idlearn.logs.times import iso_start, median_step

FloatArray = npt.NDArray[np.float64]
IntArray = npt.NDArray[np.int64]

SHORTEST = 10  # valid samples in a row without which nothing can be said about a plant
FILE_GAP = 10  # samples between files that carry no time of their own

# Why a row is not used; a row that has several reasons counts for the first.
BAD_QUALITY, OTHER_MODE = "quality not good", "mode not good"
NO_VALUE, ALONE = "value missing", "single row between breaks"
REASONS = (NO_STAMP, DUPLICATE, BAD_QUALITY, OTHER_MODE, NO_VALUE, ALONE)


def assemble(declared: Declared) -> PlantLog:
    """Read the declared files and build the log; see `read_log`."""
    used = used_signals(declared)
    records = [read_record(entry, declared, used) for entry in declared.entries]
    sample_time, findings = _sample_time(records, declared)
    elapsed, origin, first_rows = _chain(records, declared, sample_time)
    numbers, gates = records[0].numbers, records[0].gates
    if len(records) > 1:
        numbers = np.concatenate([r.numbers for r in records])
        gates = Gates.join([r.gates for r in records])
    complete = np.ones(len(numbers), dtype=bool)
    for column in numbers.T:  # faster than all at once where columns lie apart in memory
        complete &= ~np.isnan(column)
    cut = off_grid(elapsed, sample_time) | gates.change
    cut[first_rows] = True
    valid = complete & gates.quality & gates.mode
    segments = unbroken(valid, cut)
    _refuse_empty(records, numbers, segments, elapsed, first_rows, declared, used, sample_time)
    alone = int(valid.sum()) - int((segments[:, 1] - segments[:, 0]).sum())
    counts = dict.fromkeys(REASONS, 0)
    for record in records:
        for reason, rows in record.dropped.items():
            counts[reason] += rows
    counts[BAD_QUALITY] += int((~gates.quality).sum())
    counts[OTHER_MODE] += int((gates.quality & ~gates.mode).sum())
    counts[NO_VALUE] += int((gates.quality & gates.mode & ~complete).sum())
    counts[ALONE] += alone
    columns = {
        role: np.ascontiguousarray(numbers[:, [s.role == role for s in used]])
        for role in ("actuator", "output", "setpoint", "disturbance")
    }
    return PlantLog(
        u=columns["actuator"],
        y=columns["output"],
        setpoint=columns["setpoint"] if columns["setpoint"].shape[1] else None,
        disturbance=columns["disturbance"] if columns["disturbance"].shape[1] else None,
        sample_time_s=sample_time,
        segments=segments,
        signals=used,
        elapsed_s=elapsed,
        start="" if origin is None else iso_start(origin, declared.entries[0].zone),
        source=tuple(r.file for r in records),
        digests=tuple(r.digest for r in records),
        findings=tuple(findings),
        rejected=tuple(Rejected(reason, rows) for reason, rows in counts.items() if rows),
    )


def _sample_time(records: Sequence[Record], declared: Declared) -> tuple[float, list[Finding]]:
    """Return the sample time and what was assumed about time."""
    findings = []
    sample_time = declared.timing.sample_time_s
    if sample_time is None:
        timed = [r.times.seconds for r in records if r.times is not None]
        sample_time = median_step(np.concatenate([np.diff(t) for t in timed]))
        if not sample_time > 0:
            raise TooShortError(
                f"{records[0].file} has a single row, so no sample time can be taken from its "
                "time column; give sample_time_s in [timing] or a longer log"
            )
        findings.append(
            Finding(
                "sample time inferred",
                "note",
                f"The sheet gives no sample time; the median step of the time column, "
                f"{sample_time:g} s, is used. State it if it is another.",
            )
        )
    unclear = sum(r.times.unclear_hours for r in records if r.times is not None)
    if unclear:
        findings.append(
            Finding(
                "repeated hour unclear",
                "care",
                f"In {unclear} autumn hour{'s' if unclear > 1 else ''} the local stamps do not "
                "tell the first pass from the second; rows there may be an hour off. "
                "Export stamps in UTC or with an offset.",
            )
        )
    return sample_time, findings


def _chain(
    records: Sequence[Record], declared: Declared, sample_time: float
) -> tuple[FloatArray, int | None, list[int]]:
    """Put the files one after the other.

    Returns:
        elapsed seconds of every row, the time of row 0 in nanoseconds since 1970 if it is known,
        and the first row of each file.

    Raises:
        LogError: a file's stamps begin before the file before it ends.
    """
    parts: list[FloatArray] = []
    first_rows, rows, end = [], 0, 0.0
    origin = records[0].times.origin_ns if records[0].times else None
    for i, record in enumerate(records):
        times = record.times
        even = np.arange(len(record.numbers), dtype=np.float64) * sample_time
        own = even if times is None else times.seconds
        start = 0.0 if i == 0 else end + FILE_GAP * sample_time
        if i and times is not None and times.origin_ns is not None and origin is not None:
            start = (times.origin_ns - origin) / 1e9
            if start <= end:
                raise LogError(
                    f"{record.file} begins {end - start:g} s before the end of "
                    f"{records[i - 1].file}; list the files in time order, without overlap"
                )
        parts.append(start + own)
        end = float(parts[-1][-1])
        first_rows.append(rows)
        rows += len(own)
    return np.concatenate(parts), origin, first_rows


def _refuse_empty(
    records: Sequence[Record],
    numbers: FloatArray,
    segments: IntArray,
    elapsed: FloatArray,
    first_rows: Sequence[int],
    declared: Declared,
    used: Sequence[Signal],
    sample_time: float,
) -> None:
    """Raise where no segment is long enough, with the reason that is to blame."""
    longest = int((segments[:, 1] - segments[:, 0]).max()) if len(segments) else 0
    if longest >= SHORTEST:
        return
    n, files = len(elapsed), ", ".join(r.file for r in records)
    missing = np.isnan(numbers)
    for i, signal in enumerate(used):
        if missing[:, i].all():
            raise UninformativeError(
                f"{files}: column {signal.name!r} holds nothing but missing values in its {n} "
                "rows; export it with values or give it the role ignore"
            )
    inside = np.ones(n, dtype=bool)
    inside[list(first_rows)] = False
    steps = np.diff(elapsed, prepend=0.0)[inside]
    usual = median_step(steps)
    if len(steps) >= SHORTEST and abs(usual - sample_time) > 0.01 * sample_time:
        raise LogError(
            f"{files}: rows are {usual:g} s apart (median) and sample_time_s is {sample_time:g}, "
            "so hardly any row follows on another; give the sample time that the log has"
        )
    whole = int((~missing.any(axis=1)).sum())
    raise (TooShortError if whole < SHORTEST else UninformativeError)(
        f"{files}: of {n} rows {whole} have all values, and the longest unbroken stretch has "
        f"{longest} samples where {SHORTEST} are the least; give a longer log with fewer gaps"
    )
