"""Read a plant's log: files and the sheet's signals to one `PlantLog`.

Nothing is interpolated: a row with a missing value ends a segment, and so does a step in time
that is not the sample time within 1 %.
"""

from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Any

from idlearn.errors import InputError
from idlearn.logs.assembly import assemble
from idlearn.logs.declared import declare, load_toml
from idlearn.logs.plantlog import PlantLog
from idlearn.logs.signals import Signal

SignalsGiven = Mapping[str, Any] | Sequence[Signal]


def read_log(
    sheet_or_path: str | Path | Mapping[str, Any],
    *,
    signals: SignalsGiven | None = None,
    sample_time_s: float | None = None,
    time: str | None = None,
    zone: str | None = None,
    duplicates: str | None = None,
    base: str | Path | None = None,
) -> PlantLog:
    """Read the log that a sheet declares, or one data file.

    Args:
        sheet_or_path: a sheet (a file that ends in .toml), the sheet's tables as a mapping with
            the keys "log", "timing" and "signals", or a data file: CSV, TSV, Parquet, Feather.
        signals: in place of the sheet's: column name -> table of the sheet's keys, or just the
            role; or a sequence of `Signal`. Needed with a data file.
        sample_time_s: in place of the sheet's [s].
        time: in place of every [[log]]'s: column of stamps or elapsed seconds.
        zone: in place of every [[log]]'s: IANA zone of stamps without offset.
        duplicates: in place of every [[log]]'s: "refuse", "last" or "mean".
        base: folder that relative paths start from; default: the sheet's folder, or the current
            one where there is no sheet file.

    Returns:
        the log, one segment or more of unbroken valid samples; files follow each other in the
        order of the sheet and never share a segment. Setpoints without `of` get the only output.

    Raises:
        SheetError: a sheet that is wrong.
        LogError: a file that cannot be read as it stands; names file, row and column.
        UninformativeError: fewer than 10 valid samples in a row anywhere.
    """
    tables, where, folder = _tables(sheet_or_path)
    if signals is not None:
        tables["signals"] = _signal_tables(signals)
    entries = tables.get("log")
    if isinstance(entries, list):
        given = {"time": time, "zone": zone, "duplicates": duplicates}
        given = {key: value for key, value in given.items() if value is not None}
        tables["log"] = [{**e, **given} if isinstance(e, Mapping) else e for e in entries]
    if sample_time_s is not None:
        timing = tables.get("timing", {})
        tables["timing"] = {**timing, "sample_time_s": sample_time_s}
    declared = declare(tables, where, Path(base) if base is not None else folder)
    return assemble(declared)


def _tables(source: str | Path | Mapping[str, Any]) -> tuple[dict[str, Any], str, Path]:
    """Return the sheet's tables, its name and the folder that paths are relative to."""
    if isinstance(source, Mapping):
        return dict(source), "", Path()
    path = Path(source)
    if path.suffix.lower() != ".toml":
        return {"log": [{"path": str(source)}]}, "", Path()
    return load_toml(path)[0], str(source), path.parent


def _signal_tables(signals: SignalsGiven) -> dict[str, Any]:
    if isinstance(signals, Mapping):
        return {
            name: {"role": given} if isinstance(given, str) else given
            for name, given in signals.items()
        }
    tables: dict[str, Any] = {}
    for s in signals:
        if s.name in tables:
            raise InputError(f"two signals are called {s.name!r}; give each its own name")
        tables[s.name] = {k: getattr(s, k) for k in s.__dataclass_fields__ if k != "name"}
    return tables
