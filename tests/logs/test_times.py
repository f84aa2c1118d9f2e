"""Zones and the hours that repeat or do not exist, checked against the standard library's zones."""

from datetime import UTC, datetime, timedelta
from pathlib import Path
from zoneinfo import ZoneInfo

import numpy as np
import pytest

from idlearn.errors import LogError
from idlearn.logs import PlantLog, read_log

OSLO = ZoneInfo("Europe/Oslo")
AUTUMN = datetime(2024, 10, 26, 22, tzinfo=UTC)  # clocks go back at 01:00 UTC on the 27th
SPRING = datetime(2024, 3, 30, 22, tzinfo=UTC)  # clocks go forward at 01:00 UTC on the 31st


def instants(start: datetime, n: int, step_s: float) -> list[datetime]:
    return [start + timedelta(seconds=k * step_s) for k in range(n)]


def read_local(path: Path, moments: list[datetime], zone: str = "Europe/Oslo") -> PlantLog:
    """Write local stamps without offset and read them back."""
    rows = [
        f"{m.astimezone(ZoneInfo(zone)).replace(tzinfo=None).isoformat(sep=' ')},{k % 3},{k}"
        for k, m in enumerate(moments)
    ]
    path.write_text("t,u,y\n" + "\n".join(rows) + "\n")
    return read_log(path, signals={"u": "actuator", "y": "output"}, time="t", zone=zone)


def elapsed(moments: list[datetime]) -> list[float]:
    return [(m - moments[0]).total_seconds() for m in moments]


@pytest.mark.parametrize("start", [AUTUMN, SPRING])
@pytest.mark.parametrize("step_s", [10.0, 60.0, 600.0, 1800.0, 3600.0])
def test_nights_of_the_clock_change(tmp_path: Path, start: datetime, step_s: float) -> None:
    moments = instants(start, int(8 * 3600 / step_s) + 20, step_s)
    log = read_local(tmp_path / "a.csv", moments)
    np.testing.assert_array_equal(log.elapsed_s, elapsed(moments))
    assert log.segments.tolist() == [[0, len(moments)]]
    assert log.start == moments[0].astimezone(OSLO).isoformat()
    assert not [f for f in log.findings if f.finding == "repeated hour unclear"]


@pytest.mark.parametrize("zone", ["America/New_York", "Australia/Lord_Howe", "Europe/Dublin"])
def test_other_zones_over_a_year(tmp_path: Path, zone: str) -> None:
    # Lord Howe puts its clocks back by half an hour only
    moments = instants(datetime(2024, 1, 1, tzinfo=UTC), 366 * 48, 1800.0)
    log = read_local(tmp_path / "a.csv", moments, zone)
    np.testing.assert_array_equal(log.elapsed_s, elapsed(moments))


@pytest.mark.parametrize(
    ("lost_from", "lost_to"),
    [
        ("2024-10-27T00:20", "2024-10-27T00:40"),  # within the first pass
        ("2024-10-27T01:20", "2024-10-27T01:40"),  # within the second pass
        ("2024-10-27T00:30", "2024-10-27T01:20"),  # from one pass into the other
        ("2024-10-27T00:20", "2024-10-27T01:40"),  # the same, and no stamp goes back
        ("2024-10-26T23:30", "2024-10-27T01:10"),  # the whole first pass
        ("2024-10-27T00:50", "2024-10-27T02:30"),  # the whole second pass
        ("2024-10-26T23:30", "2024-10-27T02:30"),  # both
    ],
)
def test_autumn_hour_with_a_gap(tmp_path: Path, lost_from: str, lost_to: str) -> None:
    first, last = (datetime.fromisoformat(t).replace(tzinfo=UTC) for t in (lost_from, lost_to))
    moments = [m for m in instants(AUTUMN, 480, 60.0) if not first <= m < last]
    log = read_local(tmp_path / "a.csv", moments)
    np.testing.assert_array_equal(log.elapsed_s, elapsed(moments))
    assert len(log.segments) == 2


@pytest.mark.parametrize(
    ("begin", "n"),
    [
        ("2024-10-27T00:30", 300),  # begins in the first pass
        ("2024-10-27T01:30", 300),  # begins in the second pass
        ("2024-10-26T20:00", 270),  # ends in the first pass
        ("2024-10-26T20:00", 330),  # ends in the second pass
    ],
)
def test_logs_that_begin_or_end_in_the_repeated_hour(tmp_path: Path, begin: str, n: int) -> None:
    moments = instants(datetime.fromisoformat(begin).replace(tzinfo=UTC), n, 60.0)
    log = read_local(tmp_path / "a.csv", moments)
    np.testing.assert_array_equal(log.elapsed_s, elapsed(moments))
    assert log.start == moments[0].astimezone(OSLO).isoformat()


def test_an_hour_that_nothing_tells_apart_is_reported(tmp_path: Path) -> None:
    moments = instants(datetime(2024, 10, 27, 0, 10, tzinfo=UTC), 40, 60.0)
    log = read_local(tmp_path / "a.csv", moments)  # 02:10 to 02:49, once
    assert [f.severity for f in log.findings if f.finding == "repeated hour unclear"] == ["care"]
    np.testing.assert_array_equal(log.elapsed_s, elapsed(moments))


def test_a_lost_hour_that_leaves_no_trace_is_reported(tmp_path: Path) -> None:
    # the local stamps look unbroken: they could as well come from a logger that lost either pass
    lost = datetime(2024, 10, 27, 0, 30, tzinfo=UTC), datetime(2024, 10, 27, 1, 30, tzinfo=UTC)
    moments = [m for m in instants(AUTUMN, 480, 60.0) if not lost[0] <= m < lost[1]]
    log = read_local(tmp_path / "a.csv", moments)
    assert [f.severity for f in log.findings if f.finding == "repeated hour unclear"] == ["care"]
    assert log.elapsed_s[-1] == elapsed(moments)[-1]


def test_a_stamp_in_the_skipped_hour_is_refused(tmp_path: Path) -> None:
    rows = "".join(f"2024-03-31 {1 + k // 60:02d}:{k % 60:02d}:00,{k % 3},1\n" for k in range(90))
    path = tmp_path / "a.csv"
    path.write_text("t,u,y\n" + rows)
    with pytest.raises(LogError, match="row 62, column 't': 2024-03-31 02:00:00 does not exist"):
        read_log(path, signals={"u": "actuator", "y": "output"}, time="t", zone="Europe/Oslo")


def read_stamps(path: Path, stamps: list[str], zone: str | None = None) -> PlantLog:
    path.write_text("t,u,y\n" + "".join(f"{s},{k % 3},{k}\n" for k, s in enumerate(stamps)))
    return read_log(path, signals={"u": "actuator", "y": "output"}, time="t", zone=zone)


def test_offsets_need_no_zone(tmp_path: Path) -> None:
    moments = instants(AUTUMN, 300, 60.0)
    with_offset = [m.astimezone(OSLO).isoformat() for m in moments]
    log = read_stamps(tmp_path / "a.csv", with_offset)
    np.testing.assert_array_equal(log.elapsed_s, elapsed(moments))
    assert log.start == "2024-10-26T22:00:00+00:00"
    in_utc = [m.strftime("%Y-%m-%dT%H:%M:%SZ") for m in moments]
    np.testing.assert_array_equal(read_stamps(tmp_path / "b.csv", in_utc).elapsed_s, log.elapsed_s)


def test_fractions_of_a_second(tmp_path: Path) -> None:
    stamps = [f"2024-01-01T00:00:{k * 0.0625:09.6f}" for k in range(40)]
    log = read_stamps(tmp_path / "a.csv", stamps, "UTC")
    np.testing.assert_array_equal(log.elapsed_s, 0.0625 * np.arange(40))
    mixed = [s.removesuffix(".000000") for s in stamps]
    again = read_stamps(tmp_path / "b.csv", mixed, "UTC")
    np.testing.assert_array_equal(again.elapsed_s, log.elapsed_s)


def test_dates_alone_are_midnights(tmp_path: Path) -> None:
    days = [f"2024-01-{k:02d}" for k in range(1, 32)]
    log = read_stamps(tmp_path / "a.csv", days, "Europe/Oslo")
    np.testing.assert_array_equal(log.elapsed_s, 86400.0 * np.arange(31))


@pytest.mark.parametrize(
    ("stamps", "told"),
    [
        (["2024-01-01 00:00:00"] * 2, "row 2, column 't': the stamps have no offset from UTC"),
        (["01.02.2024 00:00"] * 2, "row 2, column 't': '01.02.2024 00:00' is no ISO 8601"),
        (["00:00:01"] * 2, "row 2, column 't': '00:00:01' is no ISO 8601"),
        (
            ["2024-01-01T00:00:00Z", "2024-01-01T00:01:00"],
            "row 3, column 't': '2024-01-01T00:01:00' comes without an offset",
        ),
        (["0001-01-01 00:00:00"] * 2, "outside of the years 1678 to 2261"),
        (
            ["2024-01-01T00:01:00Z", "2024-01-01T00:00:00Z"],
            "goes back from 2024-01-01 00:01:00 UTC to 2024-01-01 00:00:00 UTC",
        ),
    ],
)
def test_faulty_stamps(tmp_path: Path, stamps: list[str], told: str) -> None:
    with pytest.raises(LogError, match=r"a\.csv") as caught:
        read_stamps(tmp_path / "a.csv", stamps)
    assert told in str(caught.value)
