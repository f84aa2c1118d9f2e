"""Derivative-free search on functions whose minimum is known."""

from collections.abc import Callable

import numpy as np
import pytest

from idlearn.budget import Budget, BudgetSpent
from idlearn.search import evolve


def bowl(x: np.ndarray) -> np.ndarray:
    """Return a quadratic with minimum 2 at (1, -2, 3), one axis 100 times steeper."""
    return 2.0 + ((x - [1.0, -2.0, 3.0]) ** 2 * [1.0, 100.0, 10.0]).sum(axis=1)


def rosenbrock(x: np.ndarray) -> np.ndarray:
    """Return the function of H. H. Rosenbrock, Computer Journal 3, 1960: minimum 0 at ones."""
    return (100 * (x[:, 1:] - x[:, :-1] ** 2) ** 2 + (1 - x[:, :-1]) ** 2).sum(axis=1)


def rng(seed: int = 1) -> np.random.Generator:
    return np.random.default_rng(seed)


def test_finds_the_minimum_of_a_quadratic() -> None:
    found = evolve(bowl, np.zeros(3), sigma=1.0, rng=rng(), generations=300, patience=100)
    np.testing.assert_allclose(found.x, [1.0, -2.0, 3.0], atol=1e-3)
    assert found.value == pytest.approx(2.0, abs=1e-5)
    assert found.value == bowl(found.x[None])[0]


def test_finds_the_bent_valley_of_rosenbrock() -> None:
    found = evolve(
        rosenbrock, np.array([-1.0, 1.0]), sigma=0.5, rng=rng(), generations=500, patience=500
    )
    np.testing.assert_allclose(found.x, [1.0, 1.0], atol=1e-3)


def test_finds_the_minimum_of_one_parameter() -> None:
    found = evolve(
        lambda x: (x[:, 0] - 0.3) ** 2, np.zeros(1), sigma=1.0, rng=rng(), generations=200
    )
    assert found.x[0] == pytest.approx(0.3, abs=1e-3)


def test_history_falls_and_counts() -> None:
    asked = []

    def counted(x: np.ndarray) -> np.ndarray:
        asked.append(len(x))
        return bowl(x)

    found = evolve(counted, np.zeros(3), sigma=1.0, rng=rng(), generations=25, population=9)
    (history,) = found.history
    assert history[0] == bowl(np.zeros((1, 3)))[0]
    assert history[-1] == found.value
    assert all(b <= a for a, b in zip(history, history[1:], strict=False))
    assert asked == [1] + [9] * 25
    assert found.evaluations == sum(asked)


def test_never_worse_than_the_start() -> None:
    best = np.array([1.0, -2.0, 3.0])
    found = evolve(bowl, best, sigma=5.0, rng=rng(), generations=3)
    np.testing.assert_array_equal(found.x, best)
    assert found.value == 2.0


def test_same_seed_same_search() -> None:
    a, b, c = (evolve(bowl, np.zeros(3), sigma=1.0, rng=rng(s), generations=10) for s in (4, 4, 5))
    np.testing.assert_array_equal(a.x, b.x)
    assert a.history == b.history
    assert a.history != c.history


def test_numbers_that_are_none_lose() -> None:
    def broken(x: np.ndarray) -> np.ndarray:
        value = bowl(x)
        value[x[:, 0] > 0.5] = np.nan
        value[x[:, 0] < -5] = -np.inf
        return value

    found = evolve(broken, np.zeros(3), sigma=1.0, rng=rng(), generations=200, patience=80)
    assert found.x[0] == pytest.approx(0.5, abs=0.02)
    assert found.value < 2.3


def test_bounds_are_kept_and_a_start_outside_is_moved_in() -> None:
    bounds = np.array([[0.0, 0.5], [-1.0, 1.0], [0.0, 9.0]])
    seen = []

    def watched(x: np.ndarray) -> np.ndarray:
        seen.append(x)
        return bowl(x)

    found = evolve(
        watched, np.array([0.2, -7.0, 1.0]), sigma=1.0, rng=rng(), generations=150,
        bounds=bounds, patience=60,
    )  # fmt: skip
    everything = np.concatenate(seen)
    assert (everything >= bounds[:, 0]).all()
    assert (everything <= bounds[:, 1]).all()
    np.testing.assert_allclose(found.x, [0.5, -1.0, 3.0], atol=0.02)


def test_stops_when_nothing_is_gained() -> None:
    found = evolve(
        lambda x: np.ones(len(x)), np.zeros(2), sigma=1.0, rng=rng(), generations=500, patience=7
    )
    assert len(found.history[0]) == 8


def test_a_known_start_is_not_scored_again() -> None:
    asked = []

    def counted(x: np.ndarray) -> np.ndarray:
        asked.append(len(x))
        return bowl(x)

    evolve(counted, np.zeros(3), sigma=1.0, rng=rng(), generations=1, start_value=497.0)
    assert 1 not in asked


def spending(budget: Budget) -> Callable[[np.ndarray], np.ndarray]:
    def objective(x: np.ndarray) -> np.ndarray:
        budget.charge(10 * len(x))
        return bowl(x)

    return objective


def test_a_spent_budget_ends_the_search_with_what_it_has() -> None:
    budget = Budget(10 * (1 + 7 * 6) + 5)
    found = evolve(
        spending(budget), np.zeros(3), sigma=1.0, rng=rng(), generations=100, population=7
    )
    assert len(found.history[0]) == 7
    assert found.value < bowl(np.zeros((1, 3)))[0]
    assert budget.left == 5
    with pytest.raises(BudgetSpent, match="5 left"):
        evolve(spending(budget), np.zeros(3), sigma=1.0, rng=rng(), generations=100)
