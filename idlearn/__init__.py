"""Decide from routine logs whether a learned controller should replace a working one."""

from importlib import import_module
from typing import Any

__version__ = "0.1.0"

# Loaded when first asked for, so that `import idlearn` stays light.
_WHERE = {
    "read_log": "idlearn.logs",
    "PlantLog": "idlearn.logs",
    "identify": "idlearn.identification",
    "load_controller": "idlearn.control",
    "run_study": "idlearn.study",
}


def __getattr__(name: str) -> Any:
    """Return a public name, loading the layer it lives in."""
    if name in _WHERE:
        return getattr(import_module(_WHERE[name]), name)
    raise AttributeError(f"module 'idlearn' has no attribute {name!r}")


def __dir__() -> list[str]:
    """List the public names."""
    return ["__version__", *_WHERE]
