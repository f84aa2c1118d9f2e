"""The invented kiln: its truth, its physics and its draws."""

from types import SimpleNamespace

import numpy as np
import pytest

from idlearn.cost import Cost, CostTerm
from idlearn.envs import (
    KILN_SIGNALS,
    Kiln,
    KilnTruth,
    Loop,
    RestingPlant,
    Scenario,
    kiln_truth,
    make_streams,
    simulate,
)
from idlearn.envs.setting import surround
from idlearn.errors import InputError

QUIET = np.random.default_rng(0)
LOW, HIGH = np.zeros(1), np.full(1, 100.0)
NOTHING = np.zeros((1, 0))


def at_rest(kiln: Kiln, temperature: float, n: int = 1) -> tuple:
    return kiln.rest(
        n, np.full((n, 1), temperature), np.zeros((n, 0)), LOW, HIGH, np.random.default_rng(1)
    )


def test_kiln_is_a_resting_plant() -> None:
    assert isinstance(Kiln(), RestingPlant)


def test_step_near_the_working_point_is_that_of_the_truth() -> None:
    # first order plus dead time: 63.2 % of gain * step, one time constant after the dead time
    truth, kiln = kiln_truth(), Kiln(calm=True)
    state, u = at_rest(kiln, truth["working_temperature"])
    assert u[0, 0] == pytest.approx(truth["working_heater"], abs=1e-9)
    step, y = 0.5, []
    for _ in range(600):
        y.append(kiln.measure(state, QUIET)[0, 0])
        state = kiln.advance(state, u + step, QUIET)
    rise = np.array(y) - truth["working_temperature"]
    assert 9.0 < truth["gain"] < 10.0
    assert 15 * 60 < truth["time_constant_s"] < 20 * 60
    assert rise[-1] == pytest.approx(truth["gain"] * step, rel=0.01)
    k = int((truth["dead_time_s"] + truth["time_constant_s"]) / kiln.dt)
    assert rise[k] / rise[-1] == pytest.approx(1 - np.exp(-1), abs=0.01)
    assert np.abs(rise[: int(truth["dead_time_s"] / kiln.dt) + 1]).max() < 1e-9
    assert rise[int(truth["dead_time_s"] / kiln.dt) + 1] > 1e-3


def test_integration_agrees_with_a_fine_euler_integration() -> None:
    t, kiln = KilnTruth(), Kiln(calm=True)
    state, u = at_rest(kiln, 600.0)
    x, h = 575.0, 20.0 / 2000
    for _ in range(40):
        state = kiln.advance(state, np.array([[100.0]]), QUIET)
    drive = [u[0, 0]] * 3 + [100.0] * 37
    for k in range(40):
        for _ in range(2000):
            loss = x * (1 - t.radiation + t.radiation * x / t.working_rise)
            x += h / t.time_constant_s * (t.gain * drive[k] - loss)
    assert kiln.measure(state, QUIET)[0, 0] == pytest.approx(x + t.surroundings, abs=0.01)


@pytest.mark.parametrize("temperature", [25.0, 300.0, 725.0, 900.0])
def test_rest_stays(temperature: float) -> None:
    kiln = Kiln(calm=True)
    state, u = at_rest(kiln, temperature)
    assert kiln.measure(state, QUIET)[0, 0] == pytest.approx(temperature, abs=1e-9)
    for _ in range(200):
        state = kiln.advance(state, u, QUIET)
    assert kiln.measure(state, QUIET)[0, 0] == pytest.approx(temperature, abs=1e-6)


def test_rest_out_of_reach_is_the_nearest() -> None:
    kiln = Kiln(calm=True)
    hot, u = at_rest(kiln, 3000.0)
    assert u[0, 0] == 100.0
    top = kiln.measure(hot, QUIET)[0, 0]
    assert 900 < top < 1100
    assert kiln.measure(kiln.advance(hot, u, QUIET), QUIET)[0, 0] == pytest.approx(top, abs=1e-9)
    cold, u = at_rest(kiln, -50.0)
    assert u[0, 0] == 0.0
    assert kiln.measure(cold, QUIET)[0, 0] == 25.0


def test_heater_cannot_cool() -> None:
    # one-sided: full heat moves the kiln up faster than no heat lets it cool near 900 degC
    kiln = Kiln(calm=True)
    state, u = at_rest(kiln, 400.0)
    up, down = state, state
    for _ in range(30):
        up = kiln.advance(up, np.array([[100.0]]), QUIET)
        down = kiln.advance(down, np.array([[0.0]]), QUIET)
    rise = kiln.measure(up, QUIET)[0, 0] - 400.0
    fall = 400.0 - kiln.measure(down, QUIET)[0, 0]
    assert rise > 1.5 * fall > 0
    assert 30 < u[0, 0] < 40


def test_fractional_dead_time_lies_between_whole_ones() -> None:
    kilns = Kiln([KilnTruth(dead_time_s=d) for d in (40.0, 50.0, 60.0)], calm=True)
    state, u = at_rest(kilns, 725.0, n=3)
    for _ in range(20):
        state = kilns.advance(state, u + 1.0, QUIET)
    y = kilns.measure(state, QUIET)[:, 0]
    assert y[0] > y[1] > y[2]
    assert y[1] == pytest.approx((y[0] + y[2]) / 2, abs=1e-3)


def test_drift_door_and_noise_have_their_declared_sizes() -> None:
    truth, n = KilnTruth(), 4000
    kiln, rng = Kiln(), np.random.default_rng(6)
    state, u = kiln.rest(n, np.full((n, 1), 725.0), np.zeros((n, 0)), LOW, HIGH, rng)
    openings, shut, open_, drifts = 0, 0, [], []
    for _ in range(200):
        after = kiln.advance(state, u, rng)
        openings += int(((state.door == 0) & (after.door > 0)).sum())
        shut += int((state.door == 0).sum())
        open_.append((after.door > 0).mean())
        drifts.append(after.drift.std())
        state = after
    assert np.mean(drifts) == pytest.approx(truth.drift_sd, rel=0.05)
    assert openings / shut == pytest.approx(20.0 / truth.door_interval_s, rel=0.1)
    # open for 1 / (1 - exp(-dt / door_time)) samples on average
    mean_open = 20.0 / (1 - np.exp(-20.0 / truth.door_time_s))
    assert np.mean(open_[100:]) == pytest.approx(mean_open / truth.door_interval_s, rel=0.1)
    loads = state.door[state.door > 0]
    assert 0.5 * truth.door_load <= loads.min() <= loads.max() <= 1.5 * truth.door_load
    y = kiln.measure(state, rng)[:, 0]
    np.testing.assert_allclose(y, np.round(y, 1), atol=1e-9)  # resolution 0.1 degC
    residual = y - truth.surroundings - state.rise
    # rounding adds step^2 / 12 (uniform error)
    assert residual.std() == pytest.approx(np.sqrt(0.3**2 + 0.1**2 / 12), rel=0.05)


def surroundings() -> Loop:
    costs = [Cost(name="c", terms=(CostTerm(kind="tracking", signal="temperature"),))]
    return surround(KILN_SIGNALS, costs, 0, 20.0)[0]


def test_kilns_run_in_the_engine_each_with_its_own_truth(make: SimpleNamespace) -> None:
    around = surroundings()
    (s,) = make_streams(
        [Scenario(name="s", duration_s=4000, setpoint={"temperature": ((0, 700), (400, 740))})],
        purpose="t", seeds=range(2), seed=1, sample_time_s=20.0, outputs=["temperature"],
        controlled=(0,), rest=[725.0], actuators=["heater"], n_draws=Kiln.n_draws,
    )  # fmt: skip
    truths = [KilnTruth(), KilnTruth(gain=12.0), KilnTruth(dead_time_s=75.0)]
    controller = make.pi(0.5, 0.02, limit=100.0)
    many = simulate(Kiln(truths), controller, s, around, tile=3, record=True)
    assert many.y is not None
    for i in range(6):
        one = simulate(
            Kiln([truths[i // 2]]), controller, s.take(np.array([i % 2])), around, record=True
        )
        assert one.y is not None
        np.testing.assert_array_equal(one.y[0], many.y[i])
    assert len({tuple(y[:, 0]) for y in many.y}) == 6
    assert abs(many.offset).max() < 10.0  # the loop follows


def test_start_is_the_working_point() -> None:
    kiln = Kiln(calm=True)
    y = kiln.measure(kiln.start(3, QUIET), QUIET)
    np.testing.assert_allclose(y, np.full((3, 1), 725.0), atol=1e-9)


def test_refused_kilns() -> None:
    with pytest.raises(InputError, match="gain of the kiln is 0.0"):
        KilnTruth(gain=0.0)
    with pytest.raises(InputError, match="noise_sd of the kiln is nan"):
        KilnTruth(noise_sd=float("nan"))
    with pytest.raises(InputError, match="radiation is 1.5"):
        KilnTruth(radiation=1.5)
    with pytest.raises(InputError, match="5 episodes cannot be shared among 2 kilns"):
        Kiln([KilnTruth(), KilnTruth()]).start(5, QUIET)
    with pytest.raises(InputError, match="0 kilns"):
        Kiln([])
