"""The actuator: clip, then rate, then resolution."""

import numpy as np
import pytest

from idlearn.envs import Actuator
from idlearn.errors import InputError
from idlearn.logs import Signal


def one(
    low: float = -np.inf, high: float = np.inf, rate: float = np.inf, step: float = 0.0
) -> Actuator:
    return Actuator(np.array([low]), np.array([high]), np.array([rate]), np.array([step]))


def test_order_is_clip_rate_quantise() -> None:
    a = one(0.0, 10.0, 3.0, 0.5)
    previous = np.array([[4.1], [9.0], [1.0], [4.1]])
    asked = np.array([[50.0], [50.0], [-50.0], [4.3]])
    # by hand: 50 -> 10 -> 7.1 -> 7.0;  50 -> 10 -> 10 -> 10;  -50 -> 0 -> 0;  4.3 -> 4.5
    assert a.apply(asked, previous)[:, 0].tolist() == [7.0, 10.0, 0.0, 4.5]


def test_resolution_never_leaves_the_limits() -> None:
    a = one(0.1, 0.95, step=0.3)  # steps at 0.3, 0.6, 0.9; the limits themselves can be held
    asked = np.array([[0.0], [0.2], [0.94], [2.0]])
    np.testing.assert_allclose(a.apply(asked, asked)[:, 0], [0.1, 0.3, 0.9, 0.9], atol=1e-15)


def test_no_number_holds_the_previous_and_infinity_is_a_limit() -> None:
    a = one(-2.0, 3.0)
    asked = np.array([[np.nan], [np.inf], [-np.inf]])
    assert a.apply(asked, np.ones((3, 1)))[:, 0].tolist() == [1.0, 3.0, -2.0]


def test_limits_come_from_the_signals() -> None:
    valve = Signal(name="v", role="actuator", low=5.0, high=95.0, rate_per_s=2.0, resolution=0.1)
    a = Actuator.of((valve, Signal(name="w", role="actuator")), 5.0)
    assert a.low.tolist() == [5.0, -np.inf]
    assert a.high.tolist() == [95.0, np.inf]
    assert a.rate.tolist() == [10.0, np.inf]
    assert a.resolution.tolist() == [0.1, 0.0]


def test_free_actuator_changes_nothing() -> None:
    asked = np.array([[1e9, -3.3]])
    np.testing.assert_array_equal(Actuator.free(2).apply(asked, np.zeros((1, 2))), asked)


def test_refused_limits() -> None:
    with pytest.raises(InputError, match=r"low \[2.0\], high \[1.0\].* leave no room"):
        one(2.0, 1.0)
    with pytest.raises(InputError, match="leave no room"):
        one(rate=0.0)
    with pytest.raises(InputError, match="could never move"):
        one(rate=0.5, step=1.0)


def test_slowest_actuator_that_is_let_through_does_move() -> None:
    a = one(rate=0.51, step=1.0)
    assert a.apply(np.array([[9.0]]), np.zeros((1, 1)))[0, 0] == 1.0
