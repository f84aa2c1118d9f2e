"""PlantLog: shapes, segments, cuts."""

import numpy as np
import pytest

from idlearn.errors import InputError, TooShortError
from idlearn.logs import PlantLog, Signal


def ramp(n: int, columns: int = 1) -> np.ndarray:
    """Return (n, columns) of values that differ everywhere."""
    return np.arange(n * columns, dtype=float).reshape(n, columns)


def test_from_arrays_names_columns_and_keeps_private_copies() -> None:
    u, y = ramp(20, 2), ramp(20, 2)
    log = PlantLog.from_arrays(u=u, y=y, sample_time_s=0.5, setpoint=ramp(20), disturbance=ramp(20))
    assert [s.name for s in log.signals] == ["u1", "u2", "y1", "y2", "setpoint1", "d1"]
    assert (log.n_u, log.n_y, log.n_d, log.n_samples, log.n_valid) == (2, 2, 1, 20, 20)
    assert log.controlled == (0,)
    assert log.inputs.shape == (20, 3)
    np.testing.assert_array_equal(log.inputs[:, 2:], ramp(20))
    assert log.segments.tolist() == [[0, 20]]
    np.testing.assert_array_equal(log.elapsed_s, 0.5 * np.arange(20))
    u[:] = -1.0
    np.testing.assert_array_equal(log.u, ramp(20, 2))


def test_missing_rows_break_segments_and_are_counted() -> None:
    u, y = ramp(20), ramp(20)
    u[5], y[7] = np.nan, np.nan
    log = PlantLog.from_arrays(u=u, y=y, sample_time_s=1.0)
    assert log.segments.tolist() == [[0, 5], [8, 20]]  # row 6 stands alone
    assert log.n_valid == 17
    assert log.n_source_rows == 20
    assert np.isnan(log.u[5, 0])


def test_given_segments_are_kept_apart_and_cut_at_missing_rows() -> None:
    u = ramp(20)
    u[15] = np.nan
    log = PlantLog.from_arrays(
        u=u, y=ramp(20), sample_time_s=1.0, segments=[[0, 6], [6, 10], [12, 20]]
    )
    assert log.segments.tolist() == [[0, 6], [6, 10], [12, 15], [16, 20]]


@pytest.mark.parametrize(
    ("change", "told"),
    [
        ({"u": np.zeros(10)}, r"`u` has shape \(10,\).*u\[:, None\]"),
        ({"y": np.zeros((9, 1))}, "`y` has 9 rows and `u` has 10"),
        ({"y": np.full((10, 1), np.inf)}, "`y` is infinite in row 0, column 0"),
        ({"y": [["a"]] * 10}, "`y` is no array of numbers"),
        ({"u": np.zeros((10, 0))}, r"`u` has shape \(10, 0\)"),
        ({"sample_time_s": 0.0}, "sample_time_s is 0.0"),
        ({"sample_time_s": float("nan")}, "sample_time_s is nan"),
        ({"segments": [[0, 11]]}, "within 0 to 10"),
        ({"segments": [[5, 8], [0, 3]]}, "have to follow each other"),
        ({"segments": [0, 5]}, "half-open row ranges"),
        ({"setpoint": np.zeros((10, 2))}, "`setpoint` has 2 columns and `y` has 1"),
        ({"signals": [Signal(name="y", role="output")]}, "`signals` have the roles"),
    ],
)
def test_wrong_arrays_are_refused(change: dict[str, object], told: str) -> None:
    good = {"u": np.zeros((10, 1)), "y": np.zeros((10, 1)), "sample_time_s": 1.0}
    with pytest.raises(InputError, match=told):
        PlantLog.from_arrays(**{**good, **change})  # type: ignore[arg-type]


def test_rows_cuts_segments() -> None:
    log = PlantLog.from_arrays(
        u=ramp(30), y=ramp(30), sample_time_s=2.0, segments=[[0, 10], [12, 30]]
    )
    part = log.rows(9, 20)
    assert part.segments.tolist() == [[3, 11]]
    assert part.u[0, 0] == 9.0
    assert part.elapsed_s[0] == 18.0
    assert part.n_source_rows == 11  # 8 used, and 3 that are not: a single row and a gap of two
    with pytest.raises(InputError, match="rows 20 to 40"):
        log.rows(20, 40)


def test_split_is_in_time_order_by_valid_samples() -> None:
    log = PlantLog.from_arrays(
        u=ramp(130), y=ramp(130), sample_time_s=1.0, segments=[[0, 40], [70, 130]]
    )
    first, second, third = log.split((0.5, 0.2, 0.3))
    assert [p.n_valid for p in (first, second, third)] == [50, 20, 30]
    assert first.segments.tolist() == [[0, 40], [70, 80]]
    whole = np.concatenate([p.u[p.valid] for p in (first, second, third)])
    np.testing.assert_array_equal(whole, log.u[log.valid])
    (only,) = log.split((0.4,))
    assert only.segments.tolist() == [[0, 40]]


@pytest.mark.parametrize("fractions", [(), (0.5, 0.6), (0.5, -0.1), (0.0,)])
def test_wrong_fractions_are_refused(fractions: tuple[float, ...]) -> None:
    log = PlantLog.from_arrays(u=ramp(10), y=ramp(10), sample_time_s=1.0)
    with pytest.raises(InputError, match="fractions are"):
        log.split(fractions)


def test_a_log_too_short_to_split_is_refused() -> None:
    log = PlantLog.from_arrays(u=ramp(10), y=ramp(10), sample_time_s=1.0)
    with pytest.raises(TooShortError, match="10 valid samples, too few"):
        log.split((0.9, 0.1))


def test_segment_logs_hold_one_segment_each() -> None:
    log = PlantLog.from_arrays(
        u=ramp(30), y=ramp(30), sample_time_s=1.0, segments=[[3, 10], [12, 30]]
    )
    parts = list(log.segment_logs())
    assert [p.segments.tolist() for p in parts] == [[[0, 7]], [[0, 18]]]
    assert [p.u[0, 0] for p in parts] == [3.0, 12.0]
