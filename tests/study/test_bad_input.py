"""Every bad input ends in one clear sentence and the right exit code, never in a traceback."""

from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
import pytest

Run = Callable[..., tuple[int, str, str]]
Study = Callable[..., Path]


def invented_log(n: int = 300) -> list[str]:
    """Return the lines of an invented log: time, actuator, output."""
    rng = np.random.default_rng(1)
    u = np.repeat(rng.integers(20, 80, n // 15 + 1), 15)[:n]
    y = 50 + np.cumsum(rng.standard_normal(n)) * 0.1
    return ["t,u,y", *(f"{k},{u[k]},{y[k]:.3f}" for k in range(n))]


def changed(line: int, text: str) -> list[str]:
    """Return the invented log with one line (the header is line 1) replaced."""
    lines = invented_log()
    lines[line - 1] = text
    return lines


@pytest.mark.parametrize(
    ("change", "words"),
    [
        ({"lines": []}, ["log.csv", "does not exist"]),
        ({"raw": b""}, ["log.csv", "empty"]),
        ({"raw": b"\x00\x01\x02PK\xff\xfe\x00" * 50}, ["log.csv"]),
        ({"lines": ["t,u,y"]}, ["log.csv", "header"]),
        ({"lines": changed(40, "38,abc,50.1")}, ["log.csv", "40", "'u'", "abc"]),
        ({"lines": changed(41, "39,inf,50.1")}, ["log.csv", "41", "'u'"]),
        ({"lines": changed(42, "40,50")}, ["log.csv", "42"]),
        ({"lines": changed(43, "40,50,50.1")}, ["log.csv", "43", "duplicate"]),
        ({"lines": changed(44, "7,50,50.1")}, ["log.csv", "44"]),
        ({"replace": ("[signals.y]", "[signals.z]")}, ["log.csv", "'z'"]),
        ({"replace": ('unit = "%"', 'colour = "red"')}, ["study.toml", "signals.u", "colour"]),
        ({"replace": ("[timing]", "[timming]")}, ["study.toml", "timming"]),
        ({"replace": ('role = "output"', 'role = "sensor"')}, ["study.toml", "sensor", "role"]),
        ({"replace": ('role = "output"', 'role = "ignore"')}, ["study.toml", "output"]),
        ({"replace": ("low = 0.0", "low = 100.0")}, ["study.toml", "signals.u", "low"]),
        (
            {"replace": ("sample_time_s = 1.0", "sample_time_s = 0")},
            ["study.toml", "sample_time_s"],
        ),
        (
            {"replace": ("sample_time_s = 1.0", "sample_time_s = -2")},
            ["study.toml", "sample_time_s"],
        ),
        ({"replace": ("weight = 1.0", "weight = -1.0")}, ["study.toml", "terms[1]", "weight"]),
        ({"replace": ("weight = 1.0", "weight = nan")}, ["study.toml", "terms[1]", "weight"]),
        ({"replace": ("scale = 1.0", "scale = 0.0")}, ["study.toml", "terms[1]", "scale"]),
        ({"replace": ("[timing]", "[timing")}, ["study.toml", "line 9"]),
        ({"replace": ('effort = "quick"', 'effort = "huge"')}, ["study.toml", "huge"]),
        ({"replace": ('signal = "u"', 'signal = "v"')}, ["regulation", "'v'"]),
    ],
)
def test_wrong_input_is_refused_with_its_place(
    study: Study, run: Run, change: dict[str, Any], words: list[str]
) -> None:
    sheet = study(**change)
    code, out, err = run("run", sheet, "--effort", "quick", "--workers", 1)
    assert code == 2
    assert out == ""
    assert err.startswith("idlearn: ")
    assert err.count("\n") == 1
    assert "Traceback" not in err
    for word in words:
        assert word in err


@pytest.mark.parametrize(
    ("lines", "words"),
    [
        (invented_log(60), ["60", "100"]),
        (["t,u,y", *(f"{k},50," for k in range(300))], ["missing"]),
        (
            ["t,u,y", *(f"{k},50,{50 + 0.01 * (k % 7):.2f}" for k in range(300))],
            ["'u'", "never moves"],
        ),
    ],
)
@pytest.mark.parametrize("command", ["audit", "identify", "run"])
def test_uninformative_logs_end_with_exit_code_3(
    study: Study, run: Run, command: str, lines: list[str], words: list[str]
) -> None:
    code, _, err = run(command, study(lines=lines))
    assert code == 3
    assert err.count("\n") == 1
    for word in words:
        assert word in err


def test_a_sheet_that_is_missing_or_no_text(run: Run, tmp_path: Path) -> None:
    code, _, err = run("run", tmp_path / "none.toml")
    assert (code, "none.toml does not exist" in err) == (2, True)
    (tmp_path / "bad.toml").write_bytes(b"\xff\xfe\x00")
    code, _, err = run("audit", tmp_path / "bad.toml")
    assert (code, "UTF-8" in err) == (2, True)


def test_two_primary_costs_are_refused(study: Study, run: Run) -> None:
    extra = (
        "[costs.regulation]",
        "[costs.other]\nprimary = true\n[[costs.other.terms]]\nkind = 'move'\nsignal = 'u'\n"
        "[costs.regulation]\nprimary = true",
    )
    code, _, err = run("run", study(replace=extra))
    assert code == 2
    assert "primary" in err


def test_a_folder_with_another_study_is_refused(study: Study, run: Run, tmp_path: Path) -> None:
    sheet = study()
    assert run("identify", sheet)[0] == 0
    study(replace=("scale = 5.0", "scale = 6.0"))
    code, _, err = run("identify", sheet)
    assert code == 2
    assert "another study" in err
    (tmp_path / "full").mkdir()
    (tmp_path / "full" / "letter.txt").write_text("mine")
    code, _, err = run("identify", sheet, "--out", tmp_path / "full")
    assert code == 2
    assert "not empty" in err
