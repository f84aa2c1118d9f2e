"""Reading a run folder: verdict.json, manifest.json and the CSV twins, missing ones tolerated."""

import csv
import json
import math
from collections.abc import Iterator, Mapping
from dataclasses import dataclass, field
from functools import cached_property
from pathlib import Path
from typing import Any

import numpy as np

from idlearn.errors import RunFolderError

_NOTHING = {"", "nan", "none", "null", "na"}


@dataclass(frozen=True)
class Table:
    """One CSV file of the run folder.

    Attributes:
        name: without folder and suffix.
        columns: header -> cells as text, in the order of the file.
        present: whether the file was there.
    """

    name: str
    columns: Mapping[str, np.ndarray] = field(default_factory=dict)
    present: bool = False

    def __len__(self) -> int:
        """Return the number of rows."""
        return len(next(iter(self.columns.values()), ()))

    def has(self, *columns: str) -> bool:
        """Tell whether all these columns are there."""
        return all(c in self.columns for c in columns)

    def text(self, column: str) -> list[str]:
        """Return a column as text; empty texts if there is none."""
        if column not in self.columns:
            return [""] * len(self)
        return [str(c) for c in self.columns[column]]

    def number(self, column: str) -> np.ndarray:
        """Return a column as numbers (n,); NaN for what is none."""
        if column not in self.columns:
            return np.full(len(self), math.nan)
        return np.array([_number(str(c)) for c in self.columns[column]], dtype=float)

    def flag(self, column: str) -> np.ndarray:
        """Return a column of true and false (n,)."""
        return np.array([c.strip().lower() in ("true", "1", "1.0") for c in self.text(column)])

    def where(self, **equal: str) -> "Table":
        """Return the rows whose cells equal these texts."""
        keep = np.ones(len(self), dtype=bool)
        for column, value in equal.items():
            keep &= np.array([c == value for c in self.text(column)], dtype=bool)
        return self.take(keep)

    def take(self, keep: np.ndarray) -> "Table":
        """Return some rows, by mask or by index."""
        return Table(self.name, {k: v[keep] for k, v in self.columns.items()}, self.present)

    def unique(self, column: str) -> list[str]:
        """Return the values of a column in the order in which they first stand."""
        return list(dict.fromkeys(self.text(column)))

    def groups(self, *columns: str) -> Iterator[tuple[tuple[str, ...], "Table"]]:
        """Yield each combination of values with its rows, in the order of the file."""
        held: dict[tuple[str, ...], list[int]] = {}
        for i, key in enumerate(zip(*(self.text(c) for c in columns), strict=True)):
            held.setdefault(key, []).append(i)
        for key, rows in held.items():
            yield key, self.take(np.array(rows))

    def rows(self) -> list[dict[str, str]]:
        """Return the rows as dicts of texts."""
        texts = {k: self.text(k) for k in self.columns}
        return [{k: v[i] for k, v in texts.items()} for i in range(len(self))]


def _number(text: str) -> float:
    if text.strip().lower() in _NOTHING:
        return math.nan
    try:
        return float(text)
    except ValueError:
        return math.nan


def read_table(path: Path) -> Table:
    """Read a CSV file; one that is not there is an empty table that says so.

    Short rows are filled up with nothing, cells beyond the header are dropped.
    """
    if not path.is_file():
        return Table(path.stem)
    # a cell is never longer than the file
    csv.field_size_limit(max(131072, path.stat().st_size + 1))
    with path.open(encoding="utf-8-sig", errors="replace", newline="") as lines:
        reader = csv.reader(line.replace("\0", "") for line in lines)
        header = next(reader, [])
        n = len(header)
        rows = [(r + [""] * n)[:n] for r in reader if r]
    columns: dict[str, np.ndarray] = {}
    for j, name in enumerate(header):
        if name not in columns:
            columns[name] = np.array([r[j] for r in rows], dtype=object)
    return Table(path.stem, columns, True)


@dataclass(frozen=True)
class RunFiles:
    """All that a report is built from.

    Attributes:
        folder: of the run.
        verdict: verdict.json.
        manifest: manifest.json, empty if there is none.
    """

    folder: Path
    verdict: Mapping[str, Any]
    manifest: Mapping[str, Any]

    @classmethod
    def read(cls, folder: Path) -> "RunFiles":
        """Read a run folder.

        Raises:
            RunFolderError: it holds no verdict, or one that cannot be read.
        """
        if not (folder / "verdict.json").is_file():
            raise RunFolderError(
                f"{folder} holds no verdict.json; name the folder of a finished run, or finish it "
                "with `idlearn run`"
            )
        verdict = _document(folder / "verdict.json", "idlearn-verdict/1")
        manifest = folder / "manifest.json"
        return cls(
            folder,
            verdict,
            _document(manifest, "idlearn-manifest/1") if manifest.is_file() else {},
        )

    @cached_property
    def _held(self) -> dict[str, Table]:
        return {}

    def table(self, name: str) -> Table:
        """Return tables/NAME.csv, read once."""
        if name not in self._held:
            self._held[name] = read_table(self.folder / "tables" / f"{name}.csv")
        return self._held[name]

    def units(self) -> dict[str, str]:
        """Return signal -> unit."""
        signals = self.table("signals")
        return dict(zip(signals.text("name"), signals.text("unit"), strict=True))

    def signals(self, role: str) -> list[str]:
        """Return the names of the signals of a role."""
        return self.table("signals").where(role=role).text("name")


def _document(path: Path, expected: str) -> dict[str, Any]:
    try:
        found = json.loads(path.read_text(encoding="utf-8"))
    except (OSError, ValueError):
        raise RunFolderError(
            f"{path} cannot be read as JSON; run the study again into another folder"
        ) from None
    if not isinstance(found, dict) or found.get("format") != expected:
        told = found.get("format") if isinstance(found, dict) else type(found).__name__
        raise RunFolderError(
            f"{path} has the format {told!r} where {expected!r} is needed; build the report with "
            "the version that ran the study"
        )
    return found


def at(document: Any, *path: str | int) -> Any:
    """Return what stands at a path of a JSON document, None where the path ends early."""
    for step in path:
        if isinstance(document, Mapping) and isinstance(step, str):
            document = document.get(step)
        elif isinstance(document, list) and isinstance(step, int) and step < len(document):
            document = document[step]
        else:
            return None
    return document


def text_at(document: Any, *path: str | int) -> str:
    """Return a text of a JSON document, "" where there is none."""
    found = at(document, *path)
    return "" if found is None or isinstance(found, dict | list) else str(found)


def number_at(document: Any, *path: str | int) -> float:
    """Return a number of a JSON document, NaN where there is none."""
    found = at(document, *path)
    return float(found) if isinstance(found, int | float) else math.nan
