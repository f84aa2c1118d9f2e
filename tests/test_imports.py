"""Importing the package and asking for help stay light."""

import subprocess
import sys
import time

import pytest

HEAVY = ("torch", "matplotlib", "gymnasium", "pandas", "sklearn", "numba")


@pytest.mark.parametrize("module", ["idlearn", "idlearn.cli"])
def test_nothing_heavy_is_loaded(module: str) -> None:
    code = f"import sys, {module}; print([m for m in {HEAVY} if m in sys.modules])"
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert done.stdout.strip() == "[]"


def seconds(*arguments: str) -> float:
    begin = time.perf_counter()
    subprocess.run([sys.executable, *arguments], capture_output=True, check=True)
    return time.perf_counter() - begin


def test_help_answers_at_once() -> None:
    """Within half a second of a bare start of Python, best of several runs of each."""
    bare = min(seconds("-c", "pass") for _ in range(5))
    helped = min(seconds("-m", "idlearn.cli", "--help") for _ in range(5))
    assert helped - bare < 0.5


def test_public_names_resolve() -> None:
    import idlearn

    for name in dir(idlearn):
        assert getattr(idlearn, name) is not None
    with pytest.raises(AttributeError, match="nothing"):
        _ = idlearn.nothing  # type: ignore[attr-defined]
