"""One log file: its values, which rows mode and quality let through, and when they were taken."""

import hashlib
from collections.abc import Sequence
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import numpy.typing as npt

from idlearn.errors import LogError
from idlearn.logs.columnfiles import is_columnar, read_columnar
from idlearn.logs.declared import Declared
from idlearn.logs.gates import Gates, pass_gates
from idlearn.logs.rawtable import RawTable, Wanted
from idlearn.logs.sheetparts import LogEntry
from idlearn.logs.signals import Signal
from idlearn.logs.textfiles import read_text
from idlearn.logs.times import Times, stamp_words, understand_times

FloatArray = npt.NDArray[np.float64]
IntArray = npt.NDArray[np.int64]

NO_STAMP, DUPLICATE = "no time stamp", "duplicate time stamp"


@dataclass(frozen=True, kw_only=True)
class Record:
    """One file, in time order.

    Attributes:
        file: name as given.
        digest: SHA-256 of the file.
        numbers: (N, n) in the order of the used signals.
        gates: which rows mode and quality let through.
        times: when the rows were taken; None without a time column.
        dropped: rows of the file left out here, by reason.
    """

    file: str
    digest: str
    numbers: FloatArray
    gates: Gates
    times: Times | None
    dropped: dict[str, int]


def read_record(entry: LogEntry, declared: Declared, used: Sequence[Signal]) -> Record:
    """Read one file: its values, which rows may be used, and when they were taken.

    Raises:
        LogError: with file, row and column.
    """
    gated = {n: s for n, s in declared.signals.items() if s.role in ("mode", "quality")}
    wanted = Wanted(
        numbers=tuple(s.name for s in used),
        texts=tuple(gated),
        time=entry.time,
        decimal=entry.decimal,
        ignored=tuple(n for n, s in declared.signals.items() if s.role == "ignore"),
    )
    raw = _bytes(declared.base / entry.path, entry.path)
    # hashing takes about as long as parsing and needs no lock: both at once
    with ThreadPoolExecutor(max_workers=1) as pool:
        digest = pool.submit(lambda: hashlib.sha256(raw).hexdigest())
        table = (read_columnar if is_columnar(raw) else read_text)(entry.path, raw, wanted)
    gates = pass_gates(table.texts, gated, len(table.numbers))
    record = Record(
        file=entry.path,
        digest=digest.result(),
        numbers=table.numbers,
        gates=gates,
        times=understand_times(table, entry.time, entry.zone) if entry.time else None,
        dropped={},
    )
    if record.times is None:
        return record
    return _one_row_per_stamp(record, record.times, table, entry)


def _bytes(path: Path, name: str) -> bytes:
    try:
        return path.read_bytes()
    except FileNotFoundError:
        raise LogError(
            f"log file {name} does not exist (looked for {path}); check the path"
        ) from None
    except IsADirectoryError:
        raise LogError(f"log file {name} is a folder; give the path of a file") from None
    except OSError as error:
        raise LogError(
            f"log file {name} cannot be read: {error.strerror}; check the path"
        ) from None


def _one_row_per_stamp(record: Record, times: Times, table: RawTable, entry: LogEntry) -> Record:
    """Leave out rows without stamp, and refuse or merge rows of the same stamp."""
    has = ~np.isnan(times.seconds)
    rows = np.flatnonzero(has)
    again = np.zeros(len(rows), dtype=bool)
    again[1:] = np.diff(times.seconds[rows]) == 0
    if not again.any() and has.all():
        return record
    if again.any() and entry.duplicates == "refuse":
        row = int(rows[np.flatnonzero(again)[0]])
        raise LogError(
            f"{table.place(row, entry.time)}: the stamp {stamp_words(table, row)} stands there "
            'twice; remove one row, or set duplicates = "last" or "mean" in [[log]]'
        )
    last = np.append(~again[1:], True)
    kept = rows[last]
    numbers = record.numbers[kept]
    gates = record.gates.take(kept)
    if entry.duplicates == "mean":
        runs = np.cumsum(~again) - 1
        good = record.gates.quality[rows] & record.gates.mode[rows]
        numbers = _means(np.where(good[:, None], record.numbers[rows], np.nan), runs)
        gates = gates.with_any(good, runs)
    return Record(
        file=record.file,
        digest=record.digest,
        numbers=numbers,
        gates=gates,
        times=Times(
            seconds=times.seconds[kept],
            origin_ns=times.origin_ns,
            offset=times.offset,
            unclear_hours=times.unclear_hours,
        ),
        dropped={NO_STAMP: int((~has).sum()), DUPLICATE: int(again.sum())},
    )


def _means(values: FloatArray, runs: IntArray) -> FloatArray:
    """Return the mean of each run's values that are there; NaN where none is."""
    there = ~np.isnan(values)
    starts = np.flatnonzero(np.diff(runs, prepend=-1))
    total = np.add.reduceat(np.where(there, values, 0.0), starts, axis=0)
    count = np.add.reduceat(there.astype(np.int64), starts, axis=0)
    return np.where(count > 0, total / np.maximum(count, 1), np.nan)
