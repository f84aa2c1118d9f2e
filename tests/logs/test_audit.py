"""The audit finds what was planted in invented logs, and says nothing of it in clean ones."""

from dataclasses import replace

import numpy as np
import pytest

from idlearn.errors import TooShortError, UninformativeError
from idlearn.logs import Finding, PlantLog, Signal, audit_log, require_information


def clean(n: int = 2000, **arrays: np.ndarray) -> PlantLog:
    """Return an invented closed loop with setpoint steps, actuator limits 0 to 100."""
    rng = np.random.default_rng(7)
    setpoint = np.where(np.arange(n) // 400 % 2 == 0, 50.0, 60.0)[:, None]
    y = setpoint + 0.5 * rng.standard_normal((n, 1))
    u = 40 + 0.4 * (setpoint - 50) + 3 * rng.standard_normal((n, 1))
    columns = {"u": u, "y": y, "setpoint": setpoint, **arrays}
    signals = [
        Signal(name="heater", role="actuator", unit="%", low=0.0, high=100.0, rate_per_s=50.0),
        Signal(name="temperature", role="output", unit="degC", trip_high=90.0),
        Signal(name="wish", role="setpoint", of="temperature"),
    ]
    return PlantLog.from_arrays(**columns, sample_time_s=5.0, signals=signals)


def named(log: PlantLog) -> dict[str, Finding]:
    findings = audit_log(log)
    for f in findings:
        assert f.severity in ("note", "care", "stop")
        assert "\n" not in f.sentence
        assert f.sentence.endswith(".")
        assert f.sentence[0].isupper() or f.sentence[0].isdigit()
    return {f.finding: f for f in findings}


def test_a_clean_log_has_notes_only() -> None:
    found = named(clean())
    assert {f.severity for f in found.values()} == {"note"}
    assert set(found) == {"samples used", "segments", "setpoint moves", "no measured disturbance"}
    assert "2.778 h in 2000 samples at 5 s" in found["samples used"].sentence
    assert "moves 4 times, between 50 and 60." in found["setpoint moves"].sentence
    require_information(clean())


def test_rejected_rows_add_up() -> None:
    log = clean()
    y = log.y.copy()
    y[100:150] = np.nan
    log = clean(y=y)
    found = named(log)
    assert log.n_valid + sum(r.rows for r in log.rejected) == 2000
    assert "50 rows (2.5%, 4.17 min) are not used" in found["samples rejected"].sentence
    assert found["samples rejected"].severity == "note"
    assert "2 unbroken segments, the longest of 1850 samples" in found["segments"].sentence
    y[:900] = np.nan
    assert named(clean(y=y))["samples rejected"].severity == "care"


@pytest.mark.parametrize(
    ("share", "severity", "told"),
    [
        (0.02, "note", "2.0% of the samples. That is little."),
        (0.10, "care", "10.0% of the samples. Prefer"),
        (0.40, "care", "40.0% of the samples, which is much."),
    ],
)
def test_time_at_an_actuator_limit(share: float, severity: str, told: str) -> None:
    u = clean().u.copy()
    u[: int(share * 2000)] = 100.0
    found = named(clean(u=u))["actuator at limit"]
    assert found.severity == severity
    assert told in found.sentence
    assert "'heater'" in found.sentence


def test_a_switched_actuator_is_no_saturated_one() -> None:
    u = np.where(np.random.default_rng(1).random((2000, 1)) > 0.5, 100.0, 0.0)
    log = clean(u=u)
    log = replace(log, signals=(replace(log.signals[0], rate_per_s=np.inf), *log.signals[1:]))
    found = named(log)
    assert "actuator at limit" not in found
    assert found["switched actuator"].severity == "note"


def test_values_beyond_declared_limits() -> None:
    u = clean().u.copy()
    u[:100] = 120.0
    u[100:200] = -3.0
    found = named(clean(u=u))["beyond limits"]
    assert "0 to 100 for 10.0% of the samples, from -3 to 120 %" in found.sentence


def test_an_actuator_faster_than_declared() -> None:
    u = clean().u.copy()
    u[500] = u[499] + 300.0
    assert "up to" in named(clean(u=u))["faster than its rate"].sentence


def test_constant_actuator_and_output_are_refused() -> None:
    log = clean(u=np.full((2000, 1), 40.0))
    with pytest.raises(UninformativeError, match="actuator 'heater' never moves: it is 40 %"):
        require_information(log)
    assert named(log)["not informative"].severity == "stop"
    log = clean(y=np.full((2000, 1), 50.0))
    with pytest.raises(UninformativeError, match="output 'temperature' never moves"):
        require_information(log)


def test_short_and_empty_logs_are_refused() -> None:
    with pytest.raises(TooShortError, match="99 valid samples of 99 rows and at least 100"):
        require_information(clean(99))
    require_information(clean(100))
    log = clean(y=np.full((2000, 1), np.nan))
    with pytest.raises(UninformativeError, match="nothing but missing values"):
        require_information(log)
    assert named(log)["not informative"].severity == "stop"


def test_setpoint_that_never_moves() -> None:
    found = named(clean(setpoint=np.full((2000, 1), 50.0)))
    assert found["setpoint never moves"].severity == "care"
    assert "setpoint moves" not in found


def test_recorder_and_transmitter_marks() -> None:
    y = clean().y.copy()
    every_tenth = np.interp(np.arange(2000), np.arange(0, 2000, 10), y[::10, 0])[:, None]
    assert "about one value in 10 " in named(clean(y=every_tenth))["interpolated"].sentence
    coarse = np.round(y / 8) * 8
    assert "steps of 8 degC" in named(clean(y=coarse))["coarse steps"].sentence
    frozen = y.copy()
    frozen[700:1000] = frozen[700]
    assert "300 samples at the longest" in named(clean(y=frozen))["flat-lined output"].sentence
    rounded = clean(y=np.round(y * 2) / 2)
    signal = replace(rounded.signals[1], resolution=0.1)
    found = named(replace(rounded, signals=(rounded.signals[0], signal, rounded.signals[2])))
    assert "steps of 0.5 degC while its declared resolution is 0.1" in (
        found["steps above resolution"].sentence
    )
    held = np.repeat(y[::4], 4, axis=0)
    assert found.keys().isdisjoint({"held values"})
    assert named(clean(y=held))["held values"].severity == "care"


def test_trips_are_counted() -> None:
    y = clean().y.copy()
    y[10:30] = 90.0
    assert "beyond its trip for 1.00% of the samples" in named(clean(y=y))["at trip"].sentence


def test_nearly_constant_actuator() -> None:
    u = np.full((2000, 1), 40.0)
    u[1000:1050, 0] = np.linspace(41, 45, 50)
    found = named(clean(u=u))["nearly constant signal"]
    assert "keeps the value 40 for 97.5% of the samples" in found.sentence


def test_irregular_time() -> None:
    log = clean()
    elapsed = log.elapsed_s.copy()
    elapsed[1000:] += 50.0
    elapsed[1500:] += 1.0
    segments = np.array([[0, 1000], [1000, 1500], [1500, 2000]])
    log = replace(log, elapsed_s=elapsed, segments=segments)
    sentence = named(log)["irregular sample time"].sentence
    assert "1 gap with about 10 samples missing, the longest of 55 s" in sentence
    assert "1 step off the sample time by over 1 %" in sentence


def test_constant_disturbance() -> None:
    log = clean()
    d = np.full((2000, 1), 20.0)
    signals = [*log.signals, Signal(name="ambient", role="disturbance")]
    log = PlantLog.from_arrays(
        u=log.u, y=log.y, setpoint=log.setpoint, disturbance=d, sample_time_s=5.0, signals=signals
    )
    found = named(log)
    assert "'ambient' never moves" in found["constant signal"].sentence
    assert "no measured disturbance" not in found
