"""Open records are read in place; counts and ranges come from the manifest beside them."""

import json
from pathlib import Path

import numpy as np
import pytest

from idlearn.logs import audit_log, read_log

ROLES = {"u": "actuator", "y": "output", "r": "setpoint", "d": "disturbance"}
NAMES = (
    "coupled_drives",
    "daisy_ball_and_beam",
    "daisy_cd_player_arm",
    "daisy_cstr",
    "daisy_evaporator",
    "daisy_glass_furnace",
    "daisy_heating_system",
    "daisy_industrial_dryer",
    "daisy_ph_neutralisation",
    "daisy_power_plant",
    "daisy_steam_generator",
    "daisy_thermic_wall",
    "daisy_wing_flutter",
    "gas_furnace",
    "heated_box",
    "hot_air_dryer",
    "hydraulic_actuator",
    "quad_tank",
    "silverbox",
)
# The manifest's figures of these records were taken before the files were rounded to seven
# significant digits, which changes a value by up to 5e-7 of itself.
ROUNDED = {"quad_tank": 5e-7}


@pytest.mark.parametrize("name", NAMES)
def test_rows_ranges_and_digests_match_the_manifest(open_data: Path, name: str) -> None:
    manifest = json.loads((open_data / "manifest.json").read_text())
    read = 0
    for file, facts in manifest[name]["files"].items():
        if not file.endswith(".csv"):
            continue
        signals = {
            column: {"role": ROLES[column[0]]}
            | ({"of": f"y{column[1:]}"} if column[0] == "r" else {})
            for column in facts["columns"]
            if column[0] in ROLES
        }
        timed = "time_s" in facts["columns"]
        log = read_log(
            open_data / name / file,
            signals=signals,
            time="time_s" if timed else None,
            sample_time_s=None if timed else 1.0,
        )
        assert log.n_samples == log.n_valid == facts["rows"]
        assert log.segments.tolist() == [[0, facts["rows"]]]
        assert log.digests == (facts["sha256"],)
        arrays = {"actuator": log.u, "output": log.y}
        if log.setpoint is not None:
            arrays["setpoint"] = log.setpoint
        if log.disturbance is not None:
            arrays["disturbance"] = log.disturbance
        taken = dict.fromkeys(arrays, 0)
        for signal in log.signals:
            values = arrays[signal.role][:, taken[signal.role]]
            taken[signal.role] += 1
            stats = facts["stats"][signal.name]
            rounded = ROUNDED.get(name, 0.0)
            assert abs(values.min() - stats["min"]) <= rounded * abs(stats["min"])
            assert abs(values.max() - stats["max"]) <= rounded * abs(stats["max"])
            # the manifest's mean may have been summed in another order
            assert values.mean() == pytest.approx(stats["mean"], rel=max(rounded, 1e-10), abs=1e-10)
        assert all(f.severity != "stop" for f in audit_log(log))
        read += 1
    assert read


def test_sample_times_as_their_descriptions_state(open_data: Path) -> None:
    # from the README beside each record
    for name, file, stated in (
        ("hot_air_dryer", "hot_air_dryer.csv", 0.08),
        ("daisy_power_plant", "power_plant.csv", 1228.8),
        ("quad_tank", "pid_volt_50ms.csv", 0.05),
        ("daisy_ball_and_beam", "ball_and_beam.csv", 0.1),
    ):
        path = open_data / name / file
        log = read_log(path, signals={"u1": "actuator", "y1": "output"}, time="time_s")
        assert log.sample_time_s == stated


def test_a_closed_loop_without_setpoint_moves_is_noticed(open_data: Path) -> None:
    log = read_log(
        open_data / "heated_box" / "box_kp16_kd1.csv",
        signals={"u1": "actuator", "y1": "output", "r1": "setpoint", "d1": "disturbance"},
        time="time_s",
    )
    assert np.ptp(log.setpoint) == 0.0  # type: ignore[arg-type]
    assert "setpoint never moves" in [f.finding for f in audit_log(log)]
