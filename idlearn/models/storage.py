"""Models on disk: arrays and a JSON header in one .npz file, never pickle."""

import json
from collections.abc import Mapping
from pathlib import Path
from typing import Any

import numpy as np

from idlearn.errors import InputError
from idlearn.models.ensemble import Ensemble
from idlearn.models.innovations import InnovationsModel

FORMAT = "idlearn-model/1"
_ARRAYS = ("A", "B", "C", "D", "K", "S", "u0", "y0")


def save_model(
    model: InnovationsModel | Ensemble, path: str | Path, extra: Mapping[str, Any] | None = None
) -> None:
    """Write a model or an ensemble.

    Args:
        model: what to write; other linear models through their `linearise()`.
        path: file, ending in .npz.
        extra: further facts as JSON holds them, such as signals with units and limits.
    """
    header: dict[str, Any] = {
        "format": FORMAT,
        "sample_time_s": model.sample_time_s,
        "n_actuators": model.n_actuators,
        "extra": dict(extra or {}),
    }
    if isinstance(model, Ensemble):
        header |= {"labels": list(model.labels), "unstable_dropped": model.unstable_dropped}
    arrays = {name: getattr(model, name) for name in _ARRAYS}
    with Path(path).open("wb") as out:
        np.savez_compressed(out, header=np.array(json.dumps(header)), **arrays)


def load_model(path: str | Path) -> InnovationsModel | Ensemble:
    """Read what `save_model` wrote.

    Raises:
        InputError: the file is missing, damaged or of another format.
    """
    header, arrays = _read(path)
    shared = {"sample_time_s": header["sample_time_s"], "n_actuators": header["n_actuators"]}
    if "labels" in header:
        return Ensemble(
            **arrays,
            **shared,
            labels=tuple(header["labels"]),
            unstable_dropped=header["unstable_dropped"],
        )
    return InnovationsModel(**arrays, **shared)


def read_extra(path: str | Path) -> dict[str, Any]:
    """Return the further facts that were saved with a model."""
    return dict(_read(path)[0]["extra"])


def _read(path: str | Path) -> tuple[dict[str, Any], dict[str, Any]]:
    where = Path(path)
    try:
        with where.open("rb") as file, np.load(file, allow_pickle=False) as held:
            header = json.loads(str(held["header"]))
            arrays = {name: held[name] for name in _ARRAYS}
    except FileNotFoundError:
        raise InputError(f"{where} does not exist; give the path of a saved model") from None
    except Exception as error:  # zip, JSON, key and value errors: all mean a damaged file
        raise InputError(f"{where} is no model file ({error}); save the model again") from None
    if not isinstance(header, dict) or header.get("format") != FORMAT:
        raise InputError(f"{where} is no model file of format {FORMAT}; save the model again")
    if missing := {"sample_time_s", "n_actuators", "extra"} - set(header):
        raise InputError(
            f"{where} is no model file ({', '.join(sorted(missing))} missing in its header); "
            "save the model again"
        )
    return header, arrays
