"""What a sheet or a call says about a log, checked before any file is opened."""

import tomllib
from collections.abc import Mapping
from dataclasses import dataclass, replace
from pathlib import Path
from typing import TYPE_CHECKING, Any

from idlearn.errors import InputError, SheetError
from idlearn.logs.signals import Signal, check_roles

if TYPE_CHECKING:
    from idlearn.logs.sheetparts import LogEntry, SignalEntry, Timing


@dataclass(frozen=True, kw_only=True)
class Declared:
    """What a sheet or a call says about a log.

    Attributes:
        entries: the files.
        timing: sample time.
        signals: by column name.
        base: folder that paths are relative to.
    """

    entries: "tuple[LogEntry, ...]"
    timing: "Timing"
    signals: "Mapping[str, SignalEntry]"
    base: Path


def declare(tables: Mapping[str, Any], where: str, base: Path) -> Declared:
    """Check the sheet's tables of a log.

    Args:
        tables: with the keys "log", "timing" (optional) and "signals"; others are not looked at.
        where: the sheet's name for messages, or empty.
        base: folder that relative paths start from.

    Raises:
        SheetError: with one sentence that names the place.
    """
    from idlearn.logs.sheetparts import LogEntry, SignalEntry, Timing, build_section

    prefix = f"{where}: " if where else ""
    entries = tables.get("log")
    if isinstance(entries, Mapping):
        raise SheetError(f"{prefix}log is one table; write [[log]] with double brackets")
    if not isinstance(entries, list | tuple) or not entries:
        raise SheetError(f"{prefix}there is no [[log]]; add one with the path of a data file")
    named = tables.get("signals")
    if not isinstance(named, Mapping) or not named:
        raise SheetError(
            f"{prefix}there are no signals; add a table [signals.NAME] with a role per column"
        )
    logs = tuple(
        build_section(LogEntry, entry, f"{prefix}log[{i + 1}]") for i, entry in enumerate(entries)
    )
    timing = build_section(Timing, tables.get("timing", {}), f"{prefix}timing")
    signals = {
        str(name): build_section(SignalEntry, table, f"{prefix}signals.{name}")
        for name, table in named.items()
    }
    try:
        check_roles(tuple(entry.signal(name) for name, entry in signals.items()))
    except InputError as error:
        raise SheetError(f"{prefix}signals: {error}") from None
    for i, log in enumerate(logs):
        if not log.time and timing.sample_time_s is None:
            raise SheetError(
                f"{prefix}log[{i + 1}] has no time column and timing has no sample_time_s; "
                "give at least one of them"
            )
        if log.time in signals and signals[log.time].role != "ignore":
            raise SheetError(
                f"{prefix}signals.{log.time}: the column is the time column of log[{i + 1}]; "
                "take one of the two out"
            )
    return Declared(entries=logs, timing=timing, signals=signals, base=base)


def used_signals(declared: Declared) -> tuple[Signal, ...]:
    """Return the signals whose columns become arrays, with each setpoint's output filled in."""
    found = [entry.signal(name) for name, entry in declared.signals.items()]
    only = next(s.name for s in found if s.role == "output")
    return tuple(
        replace(s, of=only) if role == "setpoint" and not s.of else s
        for role in ("actuator", "output", "setpoint", "disturbance")
        for s in found
        if s.role == role
    )


def load_toml(path: Path) -> tuple[dict[str, Any], bytes]:
    """Return the tables of a TOML file and its bytes.

    Raises:
        SheetError: it is missing, no text, or no TOML; with the line where that is known.
    """
    try:
        raw = path.read_bytes()
        return tomllib.loads(raw.decode("utf-8-sig")), raw
    except FileNotFoundError:
        raise SheetError(f"{path} does not exist; give the path of a study sheet") from None
    except OSError as error:
        raise SheetError(f"{path} cannot be read: {error.strerror}; check the path") from None
    except UnicodeDecodeError:
        raise SheetError(f"{path} is not UTF-8 text; save the sheet as UTF-8") from None
    except tomllib.TOMLDecodeError as error:
        told = " ".join(str(error).split())
        raise SheetError(f"{path} is not valid TOML: {told}; mend it there") from None
