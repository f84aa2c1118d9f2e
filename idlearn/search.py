"""Derivative-free search by evolution.

Covariance matrix adaptation after N. Hansen, "The CMA evolution strategy: a tutorial", 2016, by
the package `cmaes`. The objective is asked in batches, because the lock-step engine scores a
whole generation for little more than the price of one member.
"""

from collections.abc import Callable
from dataclasses import dataclass, field

import numpy as np

from idlearn.budget import BudgetSpent

Batch = Callable[[np.ndarray], np.ndarray]  # (m, n_parameters) -> (m,), lower is better


@dataclass(frozen=True)
class SearchResult:
    """What a search found.

    Attributes:
        x: best parameters (n_parameters,).
        value: objective there.
        history: best value so far after each batch, one tuple per run.
        evaluations: members scored in all.
    """

    x: np.ndarray
    value: float
    history: tuple[tuple[float, ...], ...] = field(default=())
    evaluations: int = 0


def evolve(
    objective: Batch,
    start: np.ndarray,
    *,
    sigma: float,
    rng: np.random.Generator,
    generations: int,
    bounds: np.ndarray | None = None,
    population: int | None = None,
    patience: int = 20,
    start_value: float | None = None,
) -> SearchResult:
    """Minimise `objective` by CMA-ES from `start`.

    Args:
        objective: scores a batch (m, n_parameters) -> (m,); non-finite scores count as worst.
        start: first mean (n_parameters,); moved to the bounds where it lies outside.
        sigma: first step size, in the units of the parameters.
        rng: source of all randomness.
        generations: most generations.
        bounds: (n_parameters, 2) or None.
        population: members per generation; None takes the strategy's default.
        patience: generations without a relative gain of 1e-4 before it stops.
        start_value: objective at the start where it is known already; None scores it.

    A spent budget ends the search with what it has. The start itself is scored first, so the
    result is never worse than the start.

    Raises:
        BudgetSpent: the budget does not even afford the start.
    """
    from cmaes import CMA

    start = np.asarray(start, dtype=float)
    if bounds is not None:
        start = np.clip(start, bounds[:, 0], bounds[:, 1])
    seed = int(rng.integers(2**31 - 1))
    evaluations = 0
    if start_value is None:
        start_value = float(_finite(objective(start[None]))[0])
        evaluations = 1
    best_x, best, history = start, start_value, [start_value]
    optimizer = CMA(mean=start, sigma=sigma, bounds=bounds, seed=seed, population_size=population)
    mark, stale = best, 0
    for _ in range(generations):
        asked = np.array([optimizer.ask() for _ in range(optimizer.population_size)])
        try:
            values = _finite(objective(asked))
        except BudgetSpent:
            break
        evaluations += len(asked)
        optimizer.tell([(x, float(v)) for x, v in zip(asked, values, strict=True)])
        i = int(np.argmin(values))
        if values[i] < best:
            best, best_x = float(values[i]), asked[i]
        history.append(best)
        stale = 0 if best < mark - 1e-4 * abs(mark) else stale + 1
        if stale == 0:
            mark = best
        if stale >= patience or optimizer.should_stop():
            break
    return SearchResult(best_x, best, (tuple(history),), evaluations)


def _finite(values: np.ndarray) -> np.ndarray:
    """Replace what is not a number by a value worse than any real one."""
    return np.where(np.isfinite(values), values, 1e30)
