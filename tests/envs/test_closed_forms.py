"""Stationary variances with a closed form; source beside each, four standard errors throughout.

Where no source is named the form follows from x+ = x + u + w by elementary algebra.
"""

from types import SimpleNamespace

import numpy as np
import pytest

from idlearn.control import FilterForm, LinearController
from idlearn.envs import LinearPlant, simulate

EPISODES, SAMPLES, SETTLED = 200, 3000, 600


def variance(make: SimpleNamespace, model: object, J: list[float], latency: int = 0) -> tuple:
    """Return the mean square of y and its standard error, for u = J (y, setpoint, u, pending)."""
    around = make.loop(latency=latency)
    s = make.streams(around, SAMPLES, seeds=EPISODES)
    plant = LinearPlant(make.ensemble(model), repeats=EPISODES)
    got = simulate(plant, make.gains(around.layout, [J], latency), s, around, record=True)
    assert got.y is not None
    each = (got.y[:, SETTLED:, 0] ** 2).mean(axis=1)
    return float(each.mean()), float(each.std(ddof=1) / np.sqrt(EPISODES))


def check(measured: tuple[float, float], wanted: float) -> None:
    value, error = measured
    assert error < 0.02 * wanted  # or the check says little
    assert abs(value - wanted) < 4 * error, f"{value} +- {error}, {wanted} expected"


@pytest.fixture(scope="module")
def integrator(make: SimpleNamespace) -> object:
    """x+ = x + u + w, w of variance 1, x seen as it is."""
    return make.model([[1.0]], [[1.0]], [[1.0]], [[1.0]], [[1.0]])


@pytest.mark.parametrize(("a", "wanted"), [(0.1, 5.263158), (0.5, 1.333333), (1.0, 1.0)])
def test_integrator_without_delay(
    make: SimpleNamespace, integrator: object, a: float, wanted: float
) -> None:
    # var = 1 / (a (2 - a))
    assert wanted == pytest.approx(1 / (a * (2 - a)), rel=1e-6)
    check(variance(make, integrator, [-a, 0, 0]), wanted)


@pytest.mark.parametrize(("a", "wanted"), [(0.1, 5.820106), (0.5, 2.4), (0.8, 4.017857)])
def test_integrator_with_one_sample_of_latency(
    make: SimpleNamespace, integrator: object, a: float, wanted: float
) -> None:
    # x+ = x - a x[k-1] + w: var = (1 + a) / (a (1 - a) (2 + a)), the AR(2) formula below
    assert wanted == pytest.approx((1 + a) / (a * (1 - a) * (2 + a)), rel=1e-6)
    check(variance(make, integrator, [-a, 0, 0, 0], latency=1), wanted)


@pytest.mark.parametrize("latency", [0, 1, 2, 3])
def test_minimum_variance_of_a_delayed_integrator(
    make: SimpleNamespace, integrator: object, latency: int
) -> None:
    # u = -(x + what is still under way) leaves latency + 1 sums of the noise: var = latency + 1
    # (minimum-variance control, K. J. Astrom, Introduction to Stochastic Control Theory, 1970,
    # from memory). No controller may do better.
    J = [-1.0, 0.0, 0.0, *[-1.0] * latency]
    check(variance(make, integrator, J, latency=latency), latency + 1.0)


def test_steady_kalman_gain_is_the_best_proportional_gain(make: SimpleNamespace) -> None:
    # Random walk of variance 1 seen through noise of variance 1: gain (sqrt(5) - 1) / 2, the
    # innovation has variance 2.618034 (A. C. Harvey, Forecasting, Structural Time Series Models
    # and the Kalman Filter, 1989, local level model, from memory); under u = -gain y the true
    # state has variance 1.618034 and what is seen of it 1 more.
    gain, innovation = 0.6180339887, 2.6180339887
    model = make.model([[1.0]], [[1.0]], [[1.0]], [[gain]], [[innovation]])
    check(variance(make, model, [-gain, 0, 0]), 2.618034)


def test_ar2_process(make: SimpleNamespace) -> None:
    # y + a1 y1 + a2 y2 = e: (1 + a2) / ((1 - a2) ((1 + a2)^2 - a1^2)); G. E. P. Box and
    # G. M. Jenkins, Time Series Analysis, 1970, from memory. a1 = -1.5, a2 = 0.7: 8.854167
    model = make.model(
        [[1.5, 1.0], [-0.7, 0.0]], [[0.0], [0.0]], [[1.0, 0.0]], [[1.5], [-0.7]], [[1.0]]
    )
    check(variance(make, model, [0, 0, 0]), 8.854167)


@pytest.mark.parametrize(
    ("J", "latency", "wanted"),
    [([0, 0, 0], 0, 2.894737), ([-0.2, 0, 0], 0, 1.0), ([-0.18, 0, 0, -0.6], 1, 1.36)],
)
def test_minimum_variance_of_a_first_order_plant(
    make: SimpleNamespace, J: list[float], latency: int, wanted: float
) -> None:
    # y - 0.9 y1 = 3 u1 + e - 0.3 e1: open loop, u = -0.2 y, and u = -0.6 u1 - 0.18 y with one
    # more delay; K. J. Astrom and B. Wittenmark, Adaptive Control, 2nd ed., 1995, from memory
    model = make.model([[0.9]], [[3.0]], [[1.0]], [[0.6]], [[1.0]])
    check(variance(make, model, J, latency), wanted)


def test_sampled_double_integrator_under_a_constant_push(make: SimpleNamespace) -> None:
    # [[1, h], [0, 1]], [h^2 / 2, h]: position after k samples of u = 1 is (k h)^2 / 2
    # (K. J. Astrom and B. Wittenmark, Computer-Controlled Systems, 3rd ed., 1997, from memory)
    h = 0.1
    model = make.model([[1, h], [0, 1]], [[h**2 / 2], [h]], [[1, 0]], [[0], [0]], [[0]])
    around = make.loop()
    s = make.streams(around, 101, seeds=1, noise=False)
    form = FilterForm.linear(
        F=np.zeros((0, 0)), G=np.zeros((0, 3)), H=np.zeros((1, 0)), J=np.zeros((1, 3)),
        h=np.ones(1), low=np.array([-9.0]), high=np.array([9.0]),
    )  # fmt: skip
    controller = LinearController(form, around.layout, 1.0)
    got = simulate(LinearPlant(make.ensemble(model)), controller, s, around, record=True)
    assert got.y is not None
    k = np.arange(101)
    np.testing.assert_allclose(got.y[0, :, 0], (k * h) ** 2 / 2, rtol=1e-12, atol=1e-12)
