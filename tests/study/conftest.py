"""A small valid study, and the command line run in-process."""

from collections.abc import Callable
from pathlib import Path

import numpy as np
import pytest

from idlearn import cli

SHEET = """\
[study]
name = "invented lag"
effort = "quick"

[[log]]
path = "log.csv"
time = "t"

[timing]
sample_time_s = 1.0

[signals.u]
role = "actuator"
unit = "%"
low = 0.0
high = 100.0

[signals.y]
role = "output"
unit = "degC"

[costs.regulation]
[[costs.regulation.terms]]
kind = "tracking"
signal = "y"
weight = 1.0
scale = 1.0
[[costs.regulation.terms]]
kind = "move"
signal = "u"
weight = 0.1
scale = 5.0
"""


def invented_log(n: int = 300, seed: int = 0) -> list[str]:
    """Return the lines of the log of an invented first-order lag with dead time."""
    rng = np.random.default_rng(seed)
    u = np.repeat(rng.integers(20, 80, n // 15 + 1), 15)[:n].astype(float)
    y = np.full(n, 50.0)
    for k in range(3, n):
        y[k] = 50 + 0.9 * (y[k - 1] - 50) + 0.05 * (u[k - 3] - 50) + 0.05 * rng.standard_normal()
    return ["t,u,y", *(f"{k},{u[k]:g},{y[k]:.4f}" for k in range(n))]


@pytest.fixture
def study(tmp_path: Path) -> Callable[..., Path]:
    """Return a function that writes a study, lines or sheet changed as asked."""

    def write(
        *,
        sheet: str = SHEET,
        replace: tuple[str, str] | None = None,
        lines: list[str] | None = None,
        raw: bytes | None = None,
    ) -> Path:
        if replace is not None:
            assert replace[0] in sheet
            sheet = sheet.replace(*replace)
        path = tmp_path / "study.toml"
        path.write_text(sheet)
        log = tmp_path / "log.csv"
        if raw is not None:
            log.write_bytes(raw)
        elif lines is None or lines:
            log.write_text("\n".join(invented_log() if lines is None else lines) + "\n")
        return path

    return write


@pytest.fixture
def run(
    monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> Callable[..., tuple[int, str, str]]:
    """Return a function that runs the command line and gives exit code, output, errors."""

    def call(*arguments: object) -> tuple[int, str, str]:
        monkeypatch.setattr("sys.argv", ["idlearn", *map(str, arguments)])
        capsys.readouterr()
        code = 0
        try:
            cli.main()
        except SystemExit as stop:
            code = int(stop.code or 0)
        seen = capsys.readouterr()
        return code, seen.out, seen.err

    return call
