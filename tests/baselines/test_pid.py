"""PID against the textbook recursion, its anti-windup, its conversions and its tuning."""

from collections.abc import Callable
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from numpy.testing import assert_allclose

from idlearn.baselines import (
    Incumbent,
    Pairing,
    PidController,
    PidSettings,
    build_incumbent,
    tune_pid,
)
from idlearn.baselines.pid import from_form, to_series
from idlearn.baselines.tuning import pair_loops
from idlearn.control import ObservationLayout
from idlearn.envs import Actuator, Assignment, TrialGround, pessimistic, run_costs, run_one
from idlearn.envs.margins import PlantResponses, sensitivity_peaks
from idlearn.errors import InputError

LAYOUT = ObservationLayout(1, (0,), 0, 1)
LOW, HIGH = np.array([0.0]), np.array([100.0])


def pid(latency: int = 0, **settings: float) -> PidController:
    return PidController(
        [(Pairing(0, 0), PidSettings(**settings))], np.zeros(1), LAYOUT, 1.0, LOW, HIGH, latency
    )


def test_the_textbook_recursion() -> None:
    s = {"gain": 2.0, "integral_time_s": 30.0, "derivative_time_s": 4.0, "filter_n": 5.0,
         "setpoint_weight": 0.6}  # fmt: skip
    c, rng = pid(**s), np.random.default_rng(0)
    c.reset(1)
    track = np.sqrt(30.0 * 4.0)
    y0, r0, u = 48.0, 50.0, 40.0
    integral, d, last_y, asked = u - 2.0 * (0.6 * r0 - y0), 0.0, y0, u
    for k in range(60):
        y = y0 + rng.standard_normal()
        if k == 0:
            y = y0
        r = r0 if k < 20 else 58.0
        keep = 4.0 / (4.0 + 5.0)
        d = keep * d - 2.0 * 4.0 * 5.0 / 9.0 * (y - last_y)
        integral += 2.0 / 30.0 * (r - y) + (u - asked) / track
        asked = 2.0 * (0.6 * r - y) + integral + d
        got = c.act(np.array([[y, r, u]]))[0, 0]
        assert got == pytest.approx(np.clip(asked, 0, 100), abs=1e-9)
        u, last_y = float(np.clip(got, 30.0, 70.0)), y  # the actuator is narrower still


@pytest.mark.parametrize("latency", [0, 2])
def test_back_calculation_takes_the_wind_out(task: Callable[..., Assignment], latency: int) -> None:
    """With saturation and no tracking the overshoot has to be larger than with it.

    K. Astrom, T. Hagglund, PID Controllers, 1995, section 3.5 (from memory).
    """
    ground = task(gains=(2.0,), limits=(0.0, 62.0), latency=latency, load=0.0).practice
    shown = replace(ground, streams=ground.streams, noise=0.0)

    def overshoot(tracking: float | None) -> float:
        c = PidController(
            [(Pairing(0, 0), PidSettings(gain=1.5, integral_time_s=15.0,
                                         tracking_time_s=tracking))],
            np.zeros(1), LAYOUT, 1.0, LOW, np.array([62.0]), latency,
        )  # fmt: skip
        y = run_one(shown, c, record=True)[0].y
        assert y is not None
        return float(y[1].max() - shown.streams[0].setpoint[1].max())

    assert overshoot(15.0) < 0.6 * overshoot(1e9)


def test_no_offset_under_a_constant_load(task: Callable[..., Assignment]) -> None:
    ground = replace(task(samples=600, load=0.0).practice, noise=0.0)
    offset = run_one(ground, pid(gain=0.8, integral_time_s=25.0))[0].offset
    assert np.abs(offset).max() < 1e-3


def test_two_loops_stand_beside_each_other() -> None:
    layout = ObservationLayout(2, (0, 1), 0, 2)
    low, high = np.zeros(2), np.full(2, 100.0)
    settings = (
        PidSettings(gain=1.0, integral_time_s=20.0),
        PidSettings(gain=3.0, integral_time_s=9.0, derivative_time_s=1.0),
    )
    both = PidController(
        [(Pairing(0, 1), settings[0]), (Pairing(1, 0), settings[1])], np.zeros(2), layout, 1.0,
        low, high,
    )  # fmt: skip
    alone = [
        PidController([(Pairing(0, 0), s)], np.zeros(1), LAYOUT, 1.0, LOW, HIGH) for s in settings
    ]
    for c in (both, *alone):
        c.reset(1)
    rng = np.random.default_rng(1)
    for _ in range(30):
        y, r, u = rng.uniform(40, 60, (3, 2))
        got = both.act(np.array([[*y, *r, *u]]))[0]
        assert got[1] == pytest.approx(alone[0].act(np.array([[y[0], r[0], u[1]]]))[0, 0])
        assert got[0] == pytest.approx(alone[1].act(np.array([[y[1], r[1], u[0]]]))[0, 0])


def test_pairing_by_the_relative_gain_array() -> None:
    gain = np.array([[1.0, 5.0], [4.0, 1.0]])
    assert pair_loops(gain, (0, 1)) == [Pairing(0, 1), Pairing(1, 0)]


@pytest.mark.parametrize(
    ("settings", "words"),
    [
        ({"gain": np.nan}, "gain is nan"),
        ({"gain": 1.0, "integral_time_s": 0.0}, "integral_time_s is 0"),
        ({"gain": 1.0, "derivative_time_s": -1.0}, "derivative_time_s is -1"),
        ({"gain": 1.0, "filter_n": 0.0}, "filter_n"),
        ({"gain": 1.0, "tracking_time_s": 0.0}, "tracking_time_s is 0"),
    ],
)
def test_settings_that_no_controller_has(settings: dict[str, float], words: str) -> None:
    with pytest.raises(InputError, match=words):
        PidSettings(**settings)


def test_forms_that_do_not_convert() -> None:
    with pytest.raises(InputError, match="no series form"):
        to_series(1.0, 3.0, 1.0)
    with pytest.raises(InputError, match="ideal, parallel or series"):
        from_form("other", 1.0, 1.0, 0.0)  # type: ignore[arg-type]


def test_tuning_reaches_its_optimum_within_limit_and_budget(
    task: Callable[..., Assignment],
) -> None:
    a = task()
    made = tune_pid(a)
    assert made.at_optimum
    assert made.peak <= 2.0
    assert made.plant_steps <= a.budget_steps
    assert len(made.runs) >= 2
    again = tune_pid(a)
    assert made.facts == again.facts
    peaks = sensitivity_peaks(
        [made.controller.form],  # type: ignore[attr-defined]
        PlantResponses.of(a.practice.ensemble),
        a.practice.loop.layout,
    )
    assert a.robustness.met(peaks)[0] == pytest.approx(made.peak)


def test_a_weakly_tuned_pid_would_fake_a_win(
    task: Callable[..., Assignment], judged: Callable[..., TrialGround]
) -> None:
    """Against a detuned PID anything looks good; the tuned one takes most of that back."""
    from idlearn.baselines import tune_linear

    a = task()
    ground = judged(a, seeds=4)
    weak = pid(gain=0.15, integral_time_s=90.0)
    costs = {
        n: float(pessimistic(run_costs(ground, c)[None])[0])
        for n, c in (
            ("weak", weak), ("pid", tune_pid(a).controller), ("linear", tune_linear(a).controller)
        )
    }  # fmt: skip
    assert costs["linear"] < 0.7 * costs["weak"]
    assert costs["linear"] > 0.85 * costs["pid"]


def test_incumbents(tmp_path: Path) -> None:
    actuator = Actuator(LOW, HIGH, np.array([np.inf]), np.zeros(1))

    def build(section: Incumbent, layout: ObservationLayout = LAYOUT) -> PidController:
        built = build_incumbent(section, layout, actuator, 1.0, 0, tmp_path)
        assert built.side == "incumbent"
        assert isinstance(built.controller, PidController)
        return built.controller

    series = build(Incumbent(kind="pid", form="series", gain=1.3, integral_time_s=2.0,
                             derivative_time_s=1.2))  # fmt: skip
    assert series.loops[0][1].gain == pytest.approx(2.08)
    parallel = build(Incumbent(kind="pid", form="parallel", gain=2.0, integral_gain=0.5))
    assert_allclose(parallel.loops[0][1].integral_time_s, 4.0)
    with pytest.raises(InputError, match="not available in this version"):
        Incumbent(kind="from-log")
    with pytest.raises(InputError, match="gain is 0"):
        Incumbent(kind="pid")
    with pytest.raises(InputError, match="needs `file`"):
        Incumbent(kind="linear")
    with pytest.raises(InputError, match="2 setpoints"):
        build(Incumbent(kind="pid", gain=1.0), ObservationLayout(2, (0, 1), 0, 2))
    with pytest.raises(InputError, match="does not exist"):
        build(Incumbent(kind="linear", file="none.json"))
