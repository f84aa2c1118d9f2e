"""Controllers against published tables, worked examples and closed forms."""

import math

import numpy as np
import pytest
from numpy.testing import assert_allclose

from idlearn.baselines import (
    Pairing,
    PidSettings,
    design_lqg,
    exact_cost,
    pid_form,
    simc,
    stationary_cost,
)
from idlearn.baselines.pid import from_form, to_parallel, to_series
from idlearn.control import FilterForm, LinearController, ObservationLayout
from idlearn.cost import BoundCost, Cost, CostTerm, RiccatiWeights
from idlearn.envs import (
    Actuator,
    Loop,
    Scenario,
    TrialGround,
    make_streams,
    run_costs,
)
from idlearn.envs.margins import margins
from idlearn.identification import Fopdt
from idlearn.models import Ensemble, InnovationsModel
from idlearn.models.riccati import kalman

LAYOUT = ObservationLayout(n_y=1, controlled=(0,), n_d=0, n_u=1)
FREE = Actuator.free(1)


def weights(output: float, energy: float = 0.0, move: float = 0.0) -> RiccatiWeights:
    return RiccatiWeights(
        np.array([output]), np.array([energy]), np.zeros(1), np.array([move]),
        np.array([math.nan]), True,
    )  # fmt: skip


def model(A: np.ndarray, B: np.ndarray, K: np.ndarray, s2: float = 1.0) -> InnovationsModel:
    n = len(A)
    return InnovationsModel(
        A=A, B=B, C=np.eye(1, n), D=np.zeros((1, 1)), K=K, S=np.array([[s2]]), u0=np.zeros(1),
        y0=np.zeros(1), sample_time_s=1.0,
    )  # fmt: skip


def sampled_lag(gain: float, tau: float, dead: int, h: float) -> InnovationsModel:
    """Return the zero-order-hold form of a lag (tau inf: an integrator) with `dead` samples."""
    a = math.exp(-h / tau) if math.isfinite(tau) else 1.0
    b = gain * (1 - a) if math.isfinite(tau) else gain * h
    n = 1 + dead
    A, B = np.zeros((n, n)), np.zeros((n, 1))
    A[0, 0] = a
    if dead:
        A[0, 1] = b
        A[1:-1, 2:] = np.eye(dead - 1)
        B[-1] = 1.0
    else:
        B[0] = b
    return InnovationsModel(
        A=A, B=B, C=np.eye(1, n), D=np.zeros((1, 1)), K=np.zeros((n, 1)), S=np.eye(1),
        u0=np.zeros(1), y0=np.zeros(1), sample_time_s=h,
    )  # fmt: skip


@pytest.mark.parametrize(
    ("plant", "peak", "gain", "phase", "delay"),
    [
        # tau = theta = k = 1, tc = theta
        (Fopdt(1.0, 1.0, 1.0), 1.590, 3.1416, 61.35, 2.142),
        # integrating, k' = theta = 1
        (Fopdt(1.0, math.inf, 1.0, "integrating"), 1.704, 2.963, 46.86, 1.59),
    ],
)
def test_simc_margins(plant: Fopdt, peak: float, gain: float, phase: float, delay: float) -> None:
    """S. Skogestad, J. Process Control 13, 2003, 291-309, table 1 (from memory, recomputed).

    The loop is sampled a hundred times per dead time; a sampled loop lies half a sample and one
    computing step below the continuous one, hence the tolerances.
    """
    h = 0.01
    settings = simc(plant)
    form = pid_form([(Pairing(0, 0), settings)], np.zeros(1), LAYOUT, FREE, h)
    m = margins(form, sampled_lag(plant.gain, plant.time_constant_s, 100, h), LAYOUT)
    assert m.peak == pytest.approx(peak, abs=0.015)
    assert m.gain == pytest.approx(gain, rel=0.015)
    assert m.phase_deg == pytest.approx(phase, abs=0.5)
    assert m.delay_samples * h == pytest.approx(delay, abs=0.03)


def test_simc_settings() -> None:
    """SIMC PI on K = T = L = 1: 0.5, 1; on K = 1, T = 10, L = 1: 5, 8 (Skogestad 2003)."""
    one, ten = simc(Fopdt(1.0, 1.0, 1.0)), simc(Fopdt(1.0, 10.0, 1.0))
    assert (one.gain, one.integral_time_s) == pytest.approx((0.5, 1.0))
    assert (ten.gain, ten.integral_time_s) == pytest.approx((5.0, 8.0))


def test_conversions_of_form() -> None:
    """K. Astrom, T. Hagglund, PID Controllers, 1995, ch. 3 (from memory), worked both ways."""
    assert_allclose(from_form("series", 1.3, 2.0, 1.2), [2.08, 3.2, 0.75], rtol=1e-12)
    assert_allclose(to_series(2.08, 3.2, 0.75), [1.3, 2.0, 1.2], rtol=1e-9)
    assert_allclose(to_series(2.4, 2.0, 0.5), [1.2, 1.0, 1.0], rtol=1e-9)
    assert_allclose(to_parallel(2.08, 3.2, 0.75), [2.08, 0.65, 1.56], rtol=1e-12)
    assert_allclose(from_form("parallel", 2.08, 0.65, 1.56), [2.08, 3.2, 0.75], rtol=1e-12)


def test_scalar_lqg_uses_the_current_estimate() -> None:
    """All ones, average x^2 + u^2: sqrt(5) with the current estimate, 1 + sqrt(5) one sample late.

    The output holds the measurement noise too, which costs 1 more (derived).
    """
    filter_ = kalman(np.eye(1), np.eye(1), np.eye(1), np.eye(1))
    plant = model(np.eye(1), np.eye(1), filter_.K, float(filter_.S[0, 0]))
    assert exact_cost(plant, weights(1, 1), LAYOUT, FREE) - 1 == pytest.approx(math.sqrt(5))


@pytest.mark.parametrize(("delay", "variance"), [(0, 1.0), (1, 1.36), (2, 1.6516)])
def test_minimum_variance(delay: int, variance: float) -> None:
    """Y + a y1 = b u1 + e + c e1 with a = -0.9, b = 3, c = -0.3: u = -((c - a) / b) y.

    K. Astrom, B. Wittenmark, Adaptive Control (from memory); one more delay costs (c - a)^2, the
    next 0.9^2 times that.
    """
    plant = model(np.array([[0.9]]), np.array([[3.0]]), np.array([[0.6]]))
    assert exact_cost(plant, weights(1), LAYOUT, FREE, delay) == pytest.approx(variance, abs=1e-6)
    if delay == 0:
        form = design_lqg(plant, weights(1), LAYOUT, FREE).form
        # y reaches u directly and through the state, which then cancels: u = -0.2 y
        assert (form.J + form.H @ form.G)[0, 0] == pytest.approx(-0.2, abs=1e-6)


def proportional(gain: float) -> FilterForm:
    """Return u = -gain y as a form without states that matter."""
    return FilterForm.linear(
        F=np.zeros((1, 1)), G=np.zeros((1, 3)), H=np.zeros((1, 1)),
        J=np.array([[-gain, 0.0, 0.0]]), low=np.array([-np.inf]), high=np.array([np.inf]),
    )  # fmt: skip


# x+ = x + u + w seen without noise: in innovations form the step is the innovation
WALK = model(np.eye(1), np.eye(1), np.eye(1))


@pytest.mark.parametrize(
    ("gain", "variance"),
    [(0.05, 10.783055), (0.1, 5.820106), (0.25, 2.962963), (0.5, 2.4), (0.8, 4.017857)],
)
def test_delayed_integrator(gain: float, variance: float) -> None:
    """One cycle of latency: variance (1 + a) / (a (1 - a)(2 + a)) of the steps' (derived)."""
    assert stationary_cost(proportional(gain), WALK, weights(1), LAYOUT, 1) == pytest.approx(
        variance, abs=1e-5
    )


def test_delayed_integrator_in_the_engine() -> None:
    """The same by simulation, within four standard errors."""
    cost = Cost(name="variance", terms=(CostTerm(kind="level", signal="y"),))
    loop = Loop(
        LAYOUT, FREE, BoundCost([cost], ["y"], ["u"], [0]), np.array([-np.inf]),
        np.array([np.inf]), latency_samples=1,
    )  # fmt: skip
    streams = make_streams(
        [Scenario(name="quiet", duration_s=4000.0)], purpose="test", seeds=range(48), seed=1,
        sample_time_s=1.0, outputs=["y"], controlled=[0], rest=[0.0], actuators=["u"],
    )  # fmt: skip
    ground = TrialGround(Ensemble.from_models([WALK], ["walk"]), streams, loop)
    costs = run_costs(ground, LinearController(proportional(0.5), LAYOUT, 1.0))
    assert abs(costs.mean() - 2.4) < 4 * costs.std(ddof=1) / math.sqrt(costs.size) + 2e-3


@pytest.mark.parametrize("delay", [1, 2, 3])
def test_no_controller_beats_the_delay(delay: int) -> None:
    """Integrator with d cycles of delay: variance at least (d + 1) of the steps', and reached.

    Minimum-variance theory, K. Astrom, Introduction to Stochastic Control Theory, 1970 (from
    memory).
    """
    best = exact_cost(WALK, weights(1), LAYOUT, FREE, delay)
    assert best == pytest.approx(delay + 1, abs=1e-6)


def test_best_proportional_gain_under_delay() -> None:
    """A (1 + a)^2 = 1 gives a = 0.465571 and variance 2.388985 (derived)."""
    gains = np.linspace(0.4, 0.53, 131)
    costs = [stationary_cost(proportional(g), WALK, weights(1), LAYOUT, 1) for g in gains]
    assert gains[int(np.argmin(costs))] == pytest.approx(0.465571, abs=1e-3)
    assert min(costs) == pytest.approx(2.388985, abs=1e-5)


def test_lqg_has_no_guaranteed_margins() -> None:
    """J. Doyle, IEEE Trans. Automatic Control 23, 1978: heavy weights and noise leave nothing.

    A sampled analogue of his example (derived): the loop passes the critical point within 1/8.
    """
    h = 0.05
    A = np.array([[1 + h, h], [0.0, 1 + h]])
    B, C = np.array([[0.0], [h]]), np.array([[1.0, 0.0]])
    f = kalman(A, C, 1e4 * h * np.ones((2, 2)), np.eye(1) / h)
    plant = InnovationsModel(
        A=A, B=B, C=C, D=np.zeros((1, 1)), K=f.K, S=f.S, u0=np.zeros(1), y0=np.zeros(1),
        sample_time_s=h,
    )  # fmt: skip
    design = design_lqg(plant, weights(1e4, 1.0), LAYOUT, FREE)
    assert margins(design.form, plant, LAYOUT).peak > 8


def test_common_filter_of_the_derivative() -> None:
    """The controller's gain at the Nyquist frequency stays below K (1 + N).

    Astrom and Hagglund 1995 (from memory); common practice.
    """
    from idlearn.envs.margins import controller_response

    s = PidSettings(gain=2.0, integral_time_s=10.0, derivative_time_s=2.0, filter_n=8.0)
    form = pid_form([(Pairing(0, 0), s)], np.zeros(1), LAYOUT, FREE, 0.1)
    size = np.abs(controller_response(form, LAYOUT, np.array([math.pi]))[0, 0, 0, 0])
    assert size < 2.0 * (1 + 8.0) * 1.01
