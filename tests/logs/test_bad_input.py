"""Every bad log gets one sentence that says what, where, and what to do."""

from pathlib import Path
from typing import Any

import pytest

from idlearn.errors import IdlearnError, InputError, LogError, SheetError
from idlearn.logs import read_log

SIGNALS: dict[str, Any] = {"u": {"role": "actuator"}, "y": {"role": "output"}}


def log_text(changes: dict[int, str] | None = None, n: int = 30) -> str:
    """Return a log t, u, y; `changes` replaces lines of the file, the header being line 1."""
    lines = ["t,u,y", *(f"{k},{k % 3},{k / 4}" for k in range(n))]
    for line, text in (changes or {}).items():
        lines[line - 1] = text
    return "\n".join(lines) + "\n"


def fault(path: Path, content: str | bytes, **call: Any) -> str:
    """Return the sentence that reading such a file ends with."""
    path.write_bytes(content if isinstance(content, bytes) else content.encode())
    with pytest.raises(InputError, match="[.;:]") as caught:
        read_log(path, **{"signals": SIGNALS, "time": "t", **call})
    sentence = str(caught.value)
    assert "\n" not in sentence
    assert len(sentence) < 400
    if isinstance(caught.value, LogError):
        assert path.name in sentence
    return sentence


@pytest.mark.parametrize(
    ("changes", "told"),
    [
        ({7: "5,abc,1"}, "row 7, column 'u': 'abc' is not a number"),
        ({31: "29,1,Bad Input"}, "row 31, column 'y': 'Bad Input' is not a number"),
        ({7: "5,1_0,1"}, "row 7, column 'u': '1_0' is not a number"),
        ({7: "5,0x1,1"}, "row 7, column 'u': '0x1' is not a number"),
        ({7: "5,true,1"}, "row 7, column 'u': 'true' is not a number"),
        ({2: "0,inf,1"}, "row 2, column 'u': 'inf' is infinite"),
        ({9: "7,1,-Infinity"}, "row 9, column 'y': '-Infinity' is infinite"),
        ({9: "7,1,1e999"}, "row 9, column 'y': '1e999' is infinite"),
        ({9: "inf,1,1"}, "row 9, column 't': 'inf' is infinite"),
        ({7: "5,1"}, "row 7: the row has 2 fields and the header has 3"),
        ({7: "5,1,2,3"}, "row 7: the row has 4 fields and the header has 3"),
        ({7: "4,1,2"}, "row 7, column 't': the stamp 4 stands there twice"),
        ({7: "3.5,1,2"}, "row 7, column 't': the stamp goes back from 4 to 3.5"),
        ({7: "noon,1,2"}, "column 't'"),
        ({1: "t,u,u"}, "row 1: two columns are called 'u'"),
        ({7: "\n\n5,x,1"}, "row 9, column 'u': 'x' is not a number"),
        ({7: "\n\n4,1,1"}, "row 9, column 't': the stamp 4 stands there twice"),
        ({1: "0,1,2"}, "row 1: the first line holds numbers only"),
    ],
)
def test_faulty_cells_and_rows(tmp_path: Path, changes: dict[int, str], told: str) -> None:
    assert told in fault(tmp_path / "plant.csv", log_text(changes))


@pytest.mark.parametrize(
    ("content", "told"),
    [
        ("", "is empty"),
        ("\n \n", "is empty"),
        ("t,u,y\n", "has a header but no rows"),
        ("t,u,y", "has a header but no rows"),
        (b"\x89PNG\r\n\x1a\n\0\0\0", "is a binary file"),
        (b"PAR1 and then nothing", "is a damaged Parquet file"),
        (b"ARROW1\0\0 and then nothing", "is a damaged Feather file"),
        ("t,u,y\n0,1,2\n1,\u00b0,2\n".encode("latin-1"), "row 3: the byte 0xb0 is not UTF-8"),
        ("u;y\n" * 3, "has no column 't', which the sheet names; it has 'u', 'y'"),
        ("t,u,y\n" + ",1,2\n" * 30, "column 't' holds no time at all"),
    ],
)
def test_faulty_files(tmp_path: Path, content: str | bytes, told: str) -> None:
    assert told in fault(tmp_path / "plant.csv", content)


def test_missing_file_and_folder(tmp_path: Path) -> None:
    with pytest.raises(LogError, match=r"log file .*none\.csv does not exist"):
        read_log(tmp_path / "none.csv", signals=SIGNALS, time="t")
    with pytest.raises(LogError, match="is a folder"):
        read_log(tmp_path, signals=SIGNALS, time="t")
    with pytest.raises(SheetError, match=r"none\.toml does not exist"):
        read_log(tmp_path / "none.toml")


@pytest.mark.parametrize(
    ("call", "told"),
    [
        ({"signals": {**SIGNALS, "z": {"role": "output"}}}, "no column 'z'"),
        ({"signals": {**SIGNALS, "z": {"role": "ignore"}}}, "no column 'z'"),
        ({"time": "when"}, "no column 'when'"),
        ({"signals": {"u": {"role": "actuator"}}}, "no signal has the role 'output'"),
        ({"signals": {"y": {"role": "output"}}}, "no signal has the role 'actuator'"),
        ({"signals": {**SIGNALS, "u": {"role": "knob"}}}, "signals.u.role is 'knob'; choose one"),
        ({"signals": {**SIGNALS, "u": {"role": "actuator", "hi": 1}}}, "unknown key 'hi'"),
        ({"signals": {**SIGNALS, "u": {}}}, "signals.u: key 'role' is missing"),
        (
            {"signals": {**SIGNALS, "u": {"role": "actuator", "low": 2, "high": 1}}},
            "signals.u: low is 2 and high is 1",
        ),
        (
            {"signals": {**SIGNALS, "s": {"role": "setpoint", "of": "temp"}}},
            "setpoint 's' is of 'temp', which is no output; name one of 'y'",
        ),
        ({"signals": {**SIGNALS, "t": {"role": "disturbance"}}}, "the column is the time column"),
        ({"sample_time_s": 0}, "timing.sample_time_s is 0"),
        ({"sample_time_s": -1.0}, "timing.sample_time_s is -1.0"),
        ({"sample_time_s": 5.0}, "rows are 1 s apart (median) and sample_time_s is 5"),
        ({"zone": "Europe/Nowhere"}, "log[1].zone is 'Europe/Nowhere'"),
        ({"duplicates": "first"}, "log[1].duplicates is 'first'"),
    ],
)
def test_faulty_declarations(tmp_path: Path, call: dict[str, Any], told: str) -> None:
    assert told in fault(tmp_path / "plant.csv", log_text(), **call)


def test_toml_syntax_error_names_the_line(tmp_path: Path) -> None:
    sheet = tmp_path / "plant.toml"
    sheet.write_text('[study]\nname = "x"\nseed = = 1\n')
    with pytest.raises(SheetError, match=r"plant\.toml is not valid TOML: .*line 3") as caught:
        read_log(sheet)
    assert "\n" not in str(caught.value)


@pytest.mark.parametrize(
    ("tables", "told"),
    [
        ({}, r"there is no \[\[log\]\]"),
        ({"log": []}, r"there is no \[\[log\]\]"),
        ({"log": {"path": "a"}}, "log is one table"),
        ({"log": [{"path": "a"}]}, "there are no signals"),
        ({"log": ["a.csv"], "signals": SIGNALS}, r"log\[1\] is 'a.csv'; it has to be a table"),
        ({"log": [{"file": "a"}], "signals": SIGNALS}, r"log\[1\]: "),
        ({"log": [{"path": "a"}], "signals": {"u": 3}}, "signals.u is 3; it has to be a table"),
        (
            {"log": [{"path": "a"}], "signals": SIGNALS, "timing": {"sample": 3}},
            "timing: unknown key 'sample'; it has sample_time_s, latency_samples",
        ),
    ],
)
def test_faulty_tables(tables: dict[str, Any], told: str) -> None:
    with pytest.raises(SheetError, match=told):
        read_log(tables)


def test_faults_in_column_files(tmp_path: Path) -> None:
    import pandas as pd

    good = pd.DataFrame({"t": range(20), "u": range(20), "y": [0.5] * 20})
    path = tmp_path / "plant.parquet"
    for change, told in (
        ({"u": ["on"] * 20}, "row 1, column 'u': 'on' is not a number"),
        ({"y": [0.5] * 6 + [float("inf")] * 14}, "row 7, column 'y': 'inf' is infinite"),
        ({"t": [*range(10), 9, *range(11, 20)]}, "row 11, column 't': the stamp 9 stands there"),
        ({"y": [[1.0]] * 20}, "column 'y': the column holds list"),
        ({"t": ["yesterday"] * 20}, "row 1, column 't': 'yesterday' is no ISO 8601"),
    ):
        good.assign(**change).to_parquet(path)
        with pytest.raises(LogError, match="plant.parquet") as caught:
            read_log(path, signals=SIGNALS, time="t")
        assert told in str(caught.value)
    good.iloc[:0].to_parquet(path)
    with pytest.raises(IdlearnError, match="has columns but no rows"):
        read_log(path, signals=SIGNALS, time="t")
