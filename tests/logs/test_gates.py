"""Mode and quality columns."""

from pathlib import Path

import numpy as np
import pytest

from idlearn.logs import PlantLog, read_log

BASE = {"u": {"role": "actuator"}, "y": {"role": "output"}}


def read(path: Path, codes: list[str], entry: dict[str, object], **call: str) -> PlantLog:
    rows = "".join(f"{k},{k % 3},{k},{code}\n" for k, code in enumerate(codes))
    path.write_text("t,u,y,code\n" + rows)
    return read_log(path, signals={**BASE, "code": entry}, time="t", **call)  # type: ignore[arg-type]


def test_bad_quality_is_left_out_and_counted(tmp_path: Path) -> None:
    codes = ["Good"] * 15 + ["Bad"] * 3 + [""] + ["Good"] * 11
    log = read(tmp_path / "a.csv", codes, {"role": "quality", "good": ["Good"]})
    assert log.segments.tolist() == [[0, 15], [19, 30]]
    assert [(r.reason, r.rows) for r in log.rejected] == [("quality not good", 4)]
    assert [s.name for s in log.signals] == ["u", "y"]


@pytest.mark.parametrize("code", ["192", "192.0"])
def test_numeric_quality_codes(tmp_path: Path, code: str) -> None:
    log = read(tmp_path / "a.csv", [code] * 12 + ["0"], {"role": "quality", "good": [192]})
    assert log.segments.tolist() == [[0, 12]]


def test_a_change_of_mode_ends_a_segment(tmp_path: Path) -> None:
    codes = ["AUTO"] * 12 + ["MAN"] * 5 + ["AUTO"] * 11
    log = read(tmp_path / "a.csv", codes, {"role": "mode"})
    assert log.segments.tolist() == [[0, 12], [12, 17], [17, 28]]
    assert log.rejected == ()
    only = read(tmp_path / "a.csv", codes, {"role": "mode", "good": ["AUTO"]})
    assert only.segments.tolist() == [[0, 12], [17, 28]]
    assert [(r.reason, r.rows) for r in only.rejected] == [("mode not good", 5)]


def test_the_mean_of_duplicates_takes_good_rows_only(tmp_path: Path) -> None:
    rows = [f"{k},{k % 3},{k},Good" for k in range(20)]
    rows[4:5] = ["4,0,100,Good", "4,0,102,Good", "4,0,900,Bad"]
    rows[9:9] = ["7,1,700,Bad"]  # the good row of t = 7 is the line before
    path = tmp_path / "a.csv"
    path.write_text("t,u,y,code\n" + "\n".join(sorted(rows, key=lambda r: int(r.split(",")[0]))))
    signals = {**BASE, "code": {"role": "quality", "good": ["Good"]}}
    log = read_log(path, signals=signals, time="t", duplicates="mean")
    assert log.y[4, 0] == 101.0
    assert log.y[7, 0] == 7.0
    assert log.segments.tolist() == [[0, 20]]
    np.testing.assert_array_equal(log.elapsed_s, np.arange(20))
