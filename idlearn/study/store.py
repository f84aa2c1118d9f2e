"""The run folder: written piece by piece, so that a stopped run goes on where it was.

Every file is written beside its place and moved there, and a stage is marked done only after its
files are in place; a run that is killed at any moment leaves a folder that can be resumed.
"""

import json
import os
import tempfile
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np

from idlearn.errors import RunFolderError

FORMAT = "idlearn-journal/1"


@dataclass(frozen=True)
class RunFolder:
    """One run folder.

    Attributes:
        path: the folder.
    """

    path: Path

    @classmethod
    def open(cls, path: str | Path, identity: Mapping[str, Any]) -> "RunFolder":
        """Open the folder for the study that `identity` describes; make it if need be.

        Args:
            path: the folder.
            identity: digests and settings that make the study what it is.

        Raises:
            RunFolderError: it holds another study, or something else altogether.
        """
        folder = cls(Path(path))
        marker = folder.path / "journal" / "study.json"
        if folder.path.exists() and not folder.path.is_dir():
            raise RunFolderError(f"{folder.path} is a file; name a folder for the run")
        if marker.exists():
            try:
                held = json.loads(marker.read_text())
            except (OSError, ValueError):
                raise RunFolderError(
                    f"{marker} cannot be read; remove {folder.path} or name another folder"
                ) from None
            wanted = {"format": FORMAT, **_plain(identity)}
            other = sorted(k for k in {*held, *wanted} if held.get(k) != wanted.get(k))
            if other:
                raise RunFolderError(
                    f"{folder.path} holds a run of another study ({', '.join(other)} "
                    f"{'differ' if len(other) > 1 else 'differs'}); name another folder with "
                    "--out, or remove it"
                )
            return folder
        if folder.path.exists() and any(folder.path.iterdir()):
            raise RunFolderError(
                f"{folder.path} is not empty and holds no run; name another folder with --out"
            )
        for part in ("journal", "models", "controllers", "tables"):
            (folder.path / part).mkdir(parents=True, exist_ok=True)
        folder.write_json("journal/study.json", {"format": FORMAT, **_plain(identity)})
        return folder

    def file(self, name: str) -> Path:
        """Return the path of a file in the folder."""
        return self.path / name

    def done(self, stage: str) -> bool:
        """Tell whether a stage is finished."""
        return self.file(f"journal/{stage}.json").exists()

    def facts(self, stage: str) -> Any:
        """Return what a finished stage noted."""
        where = self.file(f"journal/{stage}.json")
        try:
            return json.loads(where.read_text())
        except (OSError, ValueError):
            raise RunFolderError(f"{where} cannot be read; remove it to redo that stage") from None

    def finish(self, stage: str, facts: Any) -> None:
        """Note that a stage is finished; the last thing a stage does."""
        self.write_json(f"journal/{stage}.json", facts)

    def write_json(self, name: str, document: Any) -> None:
        """Write a JSON file in one move; what is not a number becomes null."""
        self.write_text(name, json.dumps(_plain(document), indent=1, allow_nan=False) + "\n")

    def write_text(self, name: str, text: str) -> None:
        """Write a text file in one move."""
        where = self.file(name)
        where.parent.mkdir(parents=True, exist_ok=True)
        handle, temporary = tempfile.mkstemp(dir=where.parent, prefix=".part-")
        with os.fdopen(handle, "w", encoding="utf-8", newline="\n") as out:
            out.write(text)
        Path(temporary).chmod(0o644)
        Path(temporary).replace(where)

    def write_table(self, name: str, columns: Any) -> None:
        """Write `tables/NAME.csv` from columns of equal length, or from a DataFrame."""
        import pandas as pd

        frame = columns if isinstance(columns, pd.DataFrame) else pd.DataFrame(dict(columns))
        self.write_text(f"tables/{name}.csv", frame.to_csv(index=False, lineterminator="\n"))

    def write_arrays(self, name: str, arrays: Mapping[str, np.ndarray]) -> None:
        """Write `journal/NAME.npz` in one move."""
        where = self.file(f"journal/{name}.npz")
        part = where.with_name(f".part-{where.name}")
        held: dict[str, Any] = {k: np.asarray(v) for k, v in arrays.items()}
        np.savez_compressed(part, **held)
        part.replace(where)

    def read_arrays(self, name: str) -> dict[str, np.ndarray]:
        """Read `journal/NAME.npz`."""
        with np.load(self.file(f"journal/{name}.npz"), allow_pickle=False) as held:
            return {k: held[k] for k in held.files}


def _plain(value: Any) -> Any:
    """Turn a value into what JSON holds."""
    if isinstance(value, Mapping):
        return {str(k): _plain(v) for k, v in value.items()}
    if isinstance(value, np.ndarray):
        return _plain(value.tolist())
    if isinstance(value, list | tuple):
        return [_plain(v) for v in value]
    if isinstance(value, np.generic):
        return _plain(value.item())
    if isinstance(value, float) and not np.isfinite(value):
        return None
    if isinstance(value, Path):
        return str(value)
    return value
