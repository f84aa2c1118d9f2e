"""Marks of recorders and transmitters, planted and found; the signals are invented."""

import numpy as np
import pytest

from idlearn.logs import patterns


def noisy(n: int, seed: int = 0) -> np.ndarray:
    """Return a slow signal with measurement noise (n,)."""
    rng = np.random.default_rng(seed)
    return 50 + 5 * np.sin(np.arange(n) / 40) + 0.3 * rng.standard_normal(n)


def step_of(values: np.ndarray) -> float:
    return patterns.quantisation_step(np.unique(values), len(values))


@pytest.mark.parametrize("step", [0.5, 0.1, 0.03, 4.0])
def test_a_quantisation_step_is_recovered(step: float) -> None:
    values = np.round(noisy(3000) / step) * step
    assert step_of(values) == pytest.approx(step, rel=1e-4)


def test_no_step_where_values_hardly_repeat_or_never_change() -> None:
    assert step_of(noisy(1000)) == 0.0
    assert step_of(np.full(100, 3.0)) == 0.0


@pytest.mark.parametrize("every", [3, 10])
def test_interpolated_values_lie_on_lines(every: int) -> None:
    raw = noisy(3000)
    stored = np.arange(0, 3000, every)
    interpolated = np.interp(np.arange(3000), stored, raw[stored])
    share = patterns.straight_share([interpolated], 0.0)
    # all but the stored points; at most half of the stretches are too flat to count
    assert share == pytest.approx(1 - 1 / every, abs=0.05)
    assert patterns.straight_share([np.round(interpolated, 4)], 1e-4) == pytest.approx(
        1 - 1 / every, abs=0.05
    )


def test_raw_smooth_and_quantised_signals_are_not_taken_for_interpolated() -> None:
    k = np.arange(3000.0)
    smooth = 10 * (1 - np.exp(-(k % 500) / 60))
    for values in (noisy(3000), smooth, np.round(smooth, 3), np.round(noisy(3000), 1), 0.1 * k):
        assert patterns.straight_share([values], step_of(values)) < 0.05


def test_values_stored_on_change_are_held() -> None:
    held: list[float] = []
    for value in noisy(3000):
        held.append(value if not held or abs(value - held[-1]) > 0.8 else held[-1])
    values = np.array(held)
    repeats = float(np.mean(np.diff(values) == 0))
    assert repeats > 0.5
    assert patterns.held_share([values], step_of(values)) == repeats
    slow = np.round(50 + np.arange(3000) / 100, 1)  # quantisation alone repeats values as well
    assert patterns.held_share([slow], step_of(slow)) == 0.0


def test_run_lengths_by_hand() -> None:
    pieces = [np.array([1.0, 1.0, 2.0]), np.array([2.0, 2.0, 2.0, 3.0])]
    assert patterns.run_lengths(pieces).tolist() == [2, 1, 3, 1]


def test_a_frozen_output_is_counted_only_while_an_actuator_moves() -> None:
    y, u = noisy(1000), noisy(1000, seed=1)[:, None]
    y[200:350] = y[200]
    assert patterns.flat_rows([y], [u]) == (150, 150)
    u[200:350] = u[200]
    assert patterns.flat_rows([y], [u]) == (0, 0)
    coarse = np.round(50 + np.arange(1000) / 100)  # stands for 100 samples, as its steps are
    assert patterns.flat_rows([coarse], [noisy(1000, seed=1)[:, None]]) == (0, 0)


def test_share_at_a_limit_by_hand() -> None:
    values = np.array([0.0, 1e-9, 0.5, 1.0, 1.1])
    assert patterns.share_at(values, 0.0, 1.0, 1e-6) == pytest.approx(0.6)
    assert patterns.share_at(values, -np.inf, 1.0, 1e-6) == pytest.approx(0.2)
