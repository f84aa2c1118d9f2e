"""Controllers on disk: one JSON file each, never pickle."""

import importlib
import json
import math
from collections.abc import Mapping
from pathlib import Path
from typing import Any

import numpy as np

from idlearn.control.protocol import Controller, ObservationLayout
from idlearn.errors import InputError

FORMAT = "idlearn-controller/1"

# The only classes that a file may name; nothing else is ever loaded.
KINDS: Mapping[str, str] = {
    "linear": "idlearn.control:LinearController",
    "pid": "idlearn.baselines.pid:PidController",
    "lqg": "idlearn.baselines.lqg:LqgController",
    "residual": "idlearn.learning.residual:ResidualController",
    "predictive": "idlearn.learning.predictive:PredictiveController",
}


def save_controller(
    controller: Controller, path: str | Path, notes: Mapping[str, Any] | None = None
) -> None:
    """Write a controller as one JSON file; floats keep every bit.

    Args:
        controller: of a kind listed in `KINDS`.
        path: file to write.
        notes: further facts for the reader, such as names, units and how it was tuned.
    """
    if controller.kind not in KINDS:
        raise InputError(f"controller kind {controller.kind!r} has no entry in KINDS; add one")
    layout = controller.layout
    document = {
        "format": FORMAT,
        "kind": controller.kind,
        "sample_time_s": controller.sample_time_s,
        "layout": {
            "n_y": layout.n_y,
            "controlled": list(layout.controlled),
            "n_d": layout.n_d,
            "n_u": layout.n_u,
        },
        "notes": _encoded(dict(notes or {})),
        "settings": _encoded(controller.settings()),
    }
    Path(path).write_text(json.dumps(document, indent=1, allow_nan=False) + "\n")


def load_controller(path: str | Path) -> Controller:
    """Load a controller that `save_controller` wrote.

    Raises:
        InputError: the file is missing, damaged, of another format or of an unknown kind.
    """
    where = Path(path)
    try:
        document = json.loads(where.read_text())
    except FileNotFoundError:
        raise InputError(f"{where} does not exist; give the path of a saved controller") from None
    except (OSError, UnicodeDecodeError, json.JSONDecodeError) as error:
        raise InputError(f"{where} is no controller file: {error}; save it again") from None
    if not isinstance(document, dict) or document.get("format") != FORMAT:
        raise InputError(f"{where} is no controller file of format {FORMAT}; save it again")
    kind = str(document.get("kind"))
    if kind not in KINDS:
        raise InputError(f"{where} names the kind {kind!r}; only {sorted(KINDS)} can be loaded")
    module, name = KINDS[kind].split(":")
    cls = getattr(importlib.import_module(module), name)
    try:
        raw = document["layout"]
        layout = ObservationLayout(raw["n_y"], tuple(raw["controlled"]), raw["n_d"], raw["n_u"])
        settings = _decoded(document["settings"])
        sample_time_s = float(document["sample_time_s"])
        if not (math.isfinite(sample_time_s) and sample_time_s > 0):
            raise ValueError(f"sample_time_s is {sample_time_s}")
        controller: Controller = cls.from_settings(settings, layout, sample_time_s)
        return controller
    except (KeyError, TypeError, ValueError, AttributeError, IndexError) as error:
        raise InputError(f"{where} is damaged ({error}); save the controller again") from None


def _encoded(value: Any) -> Any:
    if isinstance(value, np.ndarray):
        return {"shape": list(value.shape), "values": [_encoded(v) for v in value.ravel().tolist()]}
    if isinstance(value, np.generic):
        return _encoded(value.item())
    if isinstance(value, float) and not math.isfinite(value):
        return {"float": repr(value)}
    if isinstance(value, Mapping):
        return {str(k): _encoded(v) for k, v in value.items()}
    if isinstance(value, list | tuple):
        return [_encoded(v) for v in value]
    return value


def _decoded(value: Any) -> Any:
    if isinstance(value, dict):
        if set(value) == {"shape", "values"}:
            flat = [_decoded(v) for v in value["values"]]
            return np.array(flat, dtype=float).reshape(value["shape"])
        if set(value) == {"float"}:
            return float(value["float"])
        return {k: _decoded(v) for k, v in value.items()}
    if isinstance(value, list):
        return [_decoded(v) for v in value]
    return value
