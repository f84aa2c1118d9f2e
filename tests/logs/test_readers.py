"""Golden small logs, written here and worked out by hand."""

import hashlib
from pathlib import Path

import numpy as np
import pandas as pd
import pyarrow.feather as feather
import pytest

from idlearn.errors import LogError, SheetError, TooShortError, UninformativeError
from idlearn.logs import PlantLog, Signal, read_log

SIGNALS = {"u": "actuator", "y": "output"}


def csv_text(n: int = 12, delimiter: str = ",", changes: dict[int, str] | None = None) -> str:
    """Return a log t, u, y with u = t mod 3 and y = t / 4, some rows replaced."""
    rows = [delimiter.join(("t", "u", "y"))]
    for k in range(n):
        rows.append((changes or {}).get(k, delimiter.join((f"{k}", f"{k % 3}", f"{k / 4}"))))
    return "\n".join(rows) + "\n"


def write(path: Path, text: str) -> Path:
    path.write_text(text, encoding="utf-8")
    return path


SHEET = """
[study]
name = "sheet"

[[log]]
path = "data/one.csv"
time = "t"

[timing]
sample_time_s = 1.0

[signals.y]
role = "output"
unit = "degC"
resolution = 0.25
trip_high = 99.0

[signals.u]
role = "actuator"
unit = "%"
low = 0
high = 2.5
rate_per_s = 20.0

[signals.sp]
role = "setpoint"

[signals.extra]
role = "ignore"
"""


def test_a_sheet_is_read_relative_to_itself(tmp_path: Path) -> None:
    (tmp_path / "data").mkdir()
    rows = "".join(f"{k},{k % 3},{k / 4},7,x\n" for k in range(12))
    write(tmp_path / "data" / "one.csv", "t,u,y,sp,extra\n" + rows)
    sheet = write(tmp_path / "one.toml", SHEET)

    log = read_log(sheet)

    assert log.signals == (
        Signal(name="u", role="actuator", unit="%", low=0.0, high=2.5, rate_per_s=20.0),
        Signal(name="y", role="output", unit="degC", resolution=0.25, trip_high=99.0),
        Signal(name="sp", role="setpoint", of="y"),
    )
    np.testing.assert_array_equal(log.u[:, 0], np.arange(12) % 3)
    np.testing.assert_array_equal(log.y[:, 0], np.arange(12) / 4)
    assert log.setpoint is not None
    np.testing.assert_array_equal(log.setpoint, np.full((12, 1), 7.0))
    assert log.disturbance is None
    assert log.controlled == (0,)
    assert log.segments.tolist() == [[0, 12]]
    assert (log.sample_time_s, log.source, log.start) == (1.0, ("data/one.csv",), "")
    data = (tmp_path / "data" / "one.csv").read_bytes()
    assert log.digests == (hashlib.sha256(data).hexdigest(),)
    assert log.findings == ()
    assert log.rejected == ()


def test_the_same_tables_as_a_mapping_with_a_base_folder(tmp_path: Path) -> None:
    write(tmp_path / "a.csv", csv_text())
    tables = {
        "log": [{"path": "a.csv", "time": "t"}],
        "signals": {"u": {"role": "actuator"}, "y": {"role": "output"}},
    }
    log = read_log(tables, base=tmp_path)
    assert log.n_valid == 12
    assert "log" in tables
    assert tables["log"] == [{"path": "a.csv", "time": "t"}]  # the caller's tables stay as they are


def test_signals_may_be_roles_tables_or_signals(tmp_path: Path) -> None:
    path = write(tmp_path / "a.csv", csv_text())
    ways = (
        SIGNALS,
        {"u": {"role": "actuator"}, "y": {"role": "output"}},
        [Signal(name="u", role="actuator"), Signal(name="y", role="output")],
    )
    logs = [read_log(path, signals=way, time="t") for way in ways]
    assert logs[0].signals == logs[1].signals == logs[2].signals


@pytest.mark.parametrize("delimiter", [",", ";", "\t"])
def test_delimiters(tmp_path: Path, delimiter: str) -> None:
    path = write(tmp_path / "a.txt", csv_text(delimiter=delimiter))
    log = read_log(path, signals=SIGNALS, time="t")
    np.testing.assert_array_equal(log.y[:, 0], np.arange(12) / 4)


def test_commas_in_names_do_not_make_columns(tmp_path: Path) -> None:
    text = csv_text(delimiter=";").replace("t;u;y", "t;u, flow, main;y")
    path = write(tmp_path / "a.csv", text)
    log = read_log(path, signals={"u, flow, main": "actuator", "y": "output"}, time="t")
    assert log.n_valid == 12


def test_decimal_commas(tmp_path: Path) -> None:
    path = write(tmp_path / "a.csv", csv_text(delimiter=";").replace(".", ","))
    entry = {"path": str(path), "time": "t", "decimal": ","}
    log = read_log({"log": [entry]}, signals=SIGNALS)
    np.testing.assert_array_equal(log.y[:, 0], np.arange(12) / 4)
    with pytest.raises(LogError, match=r"column 'y': '0,0' is not a number; set decimal = \",\""):
        read_log(path, signals=SIGNALS, time="t")


def test_spreadsheet_habits(tmp_path: Path) -> None:
    text = "\ufeff" + csv_text(changes={3: '3, +0 ,"0.75"', 5: "\n5,2,1.25"}).replace("\n", "\r\n")
    path = tmp_path / "a.csv"
    path.write_bytes(text.encode())
    log = read_log(path, signals=SIGNALS, time="t")
    np.testing.assert_array_equal(log.u[:, 0], np.arange(12) % 3)
    np.testing.assert_array_equal(log.y[:, 0], np.arange(12) / 4)


@pytest.mark.parametrize("kind", ["parquet", "feather"])
def test_column_files(tmp_path: Path, kind: str) -> None:
    frame = pd.DataFrame(
        {
            "stamp": pd.date_range("2024-06-01", periods=30, freq="5s", tz="UTC"),
            "u": np.arange(30, dtype=np.int32) % 3,
            "y": np.arange(30) / 4,
            "note": ["a"] * 30,
        }
    )
    frame.loc[4, "y"] = np.nan
    path = tmp_path / f"a.{kind}"
    if kind == "parquet":
        frame.to_parquet(path)
    else:
        feather.write_feather(frame, path)
    log = read_log(path, signals=SIGNALS, time="stamp", zone="Europe/Oslo")
    assert log.sample_time_s == 5.0
    assert log.segments.tolist() == [[0, 4], [5, 30]]
    assert log.start == "2024-06-01T02:00:00+02:00"
    np.testing.assert_array_equal(log.u[:, 0], np.arange(30) % 3)


def test_missing_values_end_segments_and_add_up(tmp_path: Path) -> None:
    changes = {
        2: "2,,0.5",
        3: "3,0,nan",
        5: "5,2,NaN",
        8: "8,NA,2",
        30: ",0,7.5",
        33: "33, ,8.25",
    }
    path = write(tmp_path / "a.csv", csv_text(40, changes=changes))
    log = read_log(path, signals=SIGNALS, time="t")
    # row 4 stands alone between missing rows; row 30 has no stamp and is not in the arrays
    assert log.segments.tolist() == [[0, 2], [6, 8], [9, 30], [30, 32], [33, 39]]
    assert {r.reason: r.rows for r in log.rejected} == {
        "no time stamp": 1,
        "value missing": 5,
        "single row between breaks": 1,
    }
    assert log.n_source_rows == 40
    assert np.isnan(log.y[3, 0])


def test_gaps_end_segments_and_nothing_is_interpolated(tmp_path: Path) -> None:
    rows = csv_text(40).splitlines()
    path = write(tmp_path / "a.csv", "\n".join(rows[:16] + rows[20:]) + "\n")
    log = read_log(path, signals=SIGNALS, time="t")
    assert log.segments.tolist() == [[0, 15], [15, 36]]
    assert log.n_samples == 36
    assert log.elapsed_s[15] - log.elapsed_s[14] == 5.0


def test_a_step_off_the_grid_by_more_than_one_percent_ends_a_segment(tmp_path: Path) -> None:
    changes = {20: "20.009,0,1", 30: "30.02,0,1"}
    path = write(tmp_path / "a.csv", csv_text(40, changes=changes))
    log = read_log(path, signals=SIGNALS, time="t", sample_time_s=1.0)
    assert log.segments.tolist() == [[0, 30], [31, 40]]


@pytest.mark.parametrize(
    ("policy", "value"),
    [("last", 9.0), ("mean", (1.0 + 9.0) / 2)],
)
def test_duplicate_stamps(tmp_path: Path, policy: str, value: float) -> None:
    path = write(tmp_path / "a.csv", csv_text(20, changes={4: "4,1,1\n4,1,\n4,1,9"}))
    log = read_log(path, signals=SIGNALS, time="t", duplicates=policy)
    assert log.y[4, 0] == value
    assert log.segments.tolist() == [[0, 20]]
    assert [(r.reason, r.rows) for r in log.rejected] == [("duplicate time stamp", 2)]
    assert log.n_source_rows == 22


def test_sample_time_is_inferred_and_said(tmp_path: Path) -> None:
    rows = "".join(f"{0.08 * k},{k % 3},{k}\n" for k in range(1000))
    path = write(tmp_path / "a.csv", "t,u,y\n" + rows)
    log = read_log(path, signals=SIGNALS, time="t")
    assert log.sample_time_s == 0.08
    assert [f.finding for f in log.findings] == ["sample time inferred"]
    assert "0.08 s" in log.findings[0].sentence


def test_files_follow_each_other_and_never_share_a_segment(tmp_path: Path) -> None:
    write(tmp_path / "a.csv", csv_text(20))
    write(tmp_path / "b.csv", csv_text(15))
    tables = {
        "log": [{"path": "a.csv", "time": "t"}, {"path": "b.csv", "time": "t"}],
        "signals": {"u": {"role": "actuator"}, "y": {"role": "output"}},
    }
    log = read_log(tables, base=tmp_path)
    assert log.segments.tolist() == [[0, 20], [20, 35]]
    assert np.all(np.diff(log.elapsed_s) > 0)
    assert log.elapsed_s[20] - log.elapsed_s[19] > 1.5
    assert log.source == ("a.csv", "b.csv")
    assert len(log.digests) == 2


def stamped(start: str, n: int) -> str:
    """Return a log of n rows a minute from a stamp."""
    stamps = pd.date_range(start, periods=n, freq="1min")
    return "t,u,y\n" + "".join(f"{s},{k % 3},{k}\n" for k, s in enumerate(stamps))


def test_stamped_files_keep_their_own_time(tmp_path: Path) -> None:
    write(tmp_path / "a.csv", stamped("2024-01-01 00:00", 20))
    write(tmp_path / "b.csv", stamped("2024-01-01 00:20", 20))
    write(tmp_path / "c.csv", stamped("2024-01-01 00:10", 20))
    entries = [{"path": f"{n}.csv", "time": "t", "zone": "UTC"} for n in "abc"]
    log = read_log({"log": entries[:2]}, signals=SIGNALS, base=tmp_path)
    np.testing.assert_array_equal(log.elapsed_s, 60.0 * np.arange(40))
    assert log.segments.tolist() == [[0, 20], [20, 40]]
    with pytest.raises(LogError, match="c.csv begins 540 s before the end of a.csv"):
        read_log({"log": [entries[0], entries[2]]}, signals=SIGNALS, base=tmp_path)


def test_cuts_move_the_start(tmp_path: Path) -> None:
    path = write(tmp_path / "a.csv", stamped("2024-01-01 00:00", 20))
    log = read_log(path, signals=SIGNALS, time="t", zone="Europe/Oslo")
    assert log.start == "2024-01-01T00:00:00+01:00"
    assert log.rows(5, 20).start == "2024-01-01T00:05:00+01:00"


def test_nothing_but_missing_values(tmp_path: Path) -> None:
    path = write(tmp_path / "a.csv", "t,u,y\n" + "".join(f"{k},,1\n" for k in range(50)))
    with pytest.raises(UninformativeError, match="'u' holds nothing but missing values in its 50"):
        read_log(path, signals=SIGNALS, time="t")
    every_other = "".join(f"{k},{'1' if k % 2 else ''},1\n" for k in range(50))
    path = write(tmp_path / "b.csv", "t,u,y\n" + every_other)
    with pytest.raises(UninformativeError, match="of 50 rows 25 have all values.*0 samples where"):
        read_log(path, signals=SIGNALS, time="t")


def test_too_short(tmp_path: Path) -> None:
    path = write(tmp_path / "a.csv", csv_text(9))
    with pytest.raises(TooShortError, match="of 9 rows 9 have all values"):
        read_log(path, signals=SIGNALS, time="t")
    path = write(tmp_path / "b.csv", csv_text(1))
    with pytest.raises(TooShortError, match="has a single row"):
        read_log(path, signals=SIGNALS, time="t")


def test_a_time_column_or_a_sample_time_is_needed(tmp_path: Path) -> None:
    path = write(tmp_path / "a.csv", csv_text())
    with pytest.raises(SheetError, match="no time column and timing has no sample_time_s"):
        read_log(path, signals=SIGNALS)
    log = read_log(path, signals=SIGNALS, sample_time_s=0.25)
    np.testing.assert_array_equal(log.elapsed_s, 0.25 * np.arange(12))


def test_contract_names() -> None:
    import idlearn.logs

    assert idlearn.logs.PlantLog is PlantLog
    assert set(idlearn.logs.__all__) <= set(dir(idlearn.logs))
