"""Bands of free runs, and how far a posterior has to be widened until they cover."""

from collections.abc import Sequence
from dataclasses import replace

import numpy as np

from idlearn.identification.choice import Identified, structure_of
from idlearn.logs import PlantLog
from idlearn.models import ArxModel, Ensemble, InnovationsModel

# what is tried until the bands cover: factor on the parameter spread, then on the noise as well
WIDENINGS = (
    (1.0, 1.0), (1.5, 1.0), (2.0, 1.0), (3.0, 1.0), (3.0, 1.25), (3.0, 1.5), (3.0, 2.0),
    (3.0, 3.0), (5.0, 5.0),
)  # fmt: skip
COVERED = 0.95
BAND_DRAWS = 60


def widening(
    model: ArxModel, found: Identified, rng: np.random.Generator
) -> tuple[tuple[float, float], float]:
    """Return the factors on spread and noise at which 95 % bands cover, and the coverage.

    The structure is fitted on the estimation part alone, and its bands are held against the
    held-out part. Parameters are widened first; where that does not do, the disturbances of the
    held-out part are larger than the estimated ones, and the noise is raised as well.
    """
    fit: ArxModel = structure_of(model).fit(found.estimated).model
    coverage = 0.0
    for spread, louder in WIDENINGS:
        members = [stable_draw(fit, spread, louder, rng)[0] for _ in range(BAND_DRAWS)]
        coverage = band_coverage(members, found.held_out, rng)
        if coverage >= COVERED:
            return (spread, louder), coverage
    return WIDENINGS[-1], coverage


def refitted(
    model: ArxModel,
    factors: tuple[float, float],
    found: Identified,
    rng: np.random.Generator,
    n: int,
) -> tuple[InnovationsModel, list[InnovationsModel]]:
    """Return a model's structure fitted on the estimation part alone, and n draws around it.

    These are what the held-out part may be compared with: the model itself has seen it.

    Args:
        model: whose structure is meant.
        factors: on parameter spread and noise, as `widening` gave them.
        found: the identification of that part of the log.
        rng: for the draws.
        n: draws.
    """
    fit: ArxModel = structure_of(model).fit(found.estimated).model
    return fit.linearise(), [stable_draw(fit, *factors, rng)[0] for _ in range(n)]


def band_coverage(
    members: Sequence[InnovationsModel], log: PlantLog, rng: np.random.Generator
) -> float:
    """Return the share of held-out samples inside the 95 % free-run bands of the members."""
    low, high, counts = free_run_bands(members, log, rng)
    inside = (log.y[counts] >= low[counts]) & (log.y[counts] <= high[counts])
    return float(inside.mean()) if counts.any() else float("nan")


def free_run_bands(
    members: Sequence[InnovationsModel], log: PlantLog, rng: np.random.Generator
) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Return low and high 95 % bands (N, n_y) of free runs with noise, and the rows that count.

    Each segment starts from the state that its first samples suggest; from there on every member
    runs under innovations of its own.
    """
    low, high = np.full(log.y.shape, np.nan), np.full(log.y.shape, np.nan)
    counts = np.zeros(log.n_samples, dtype=bool)
    plants = Ensemble.from_models(list(members), [""] * len(members))
    noisy = replace(
        plants,
        B=np.concatenate([plants.B, plants.K], axis=2),
        D=np.concatenate(
            [plants.D, np.broadcast_to(np.eye(log.n_y), (len(plants), log.n_y, log.n_y))], axis=2
        ),
    )
    roots = np.linalg.cholesky(plants.S + 1e-300 * np.eye(log.n_y))
    for first, last in log.segments:
        n = last - first
        warm = min(max(max(m.n_x for m in members), 2), n // 2)
        if warm < 1 or n <= warm:
            continue
        u, y = log.inputs[first:last], log.y[first : first + warm]
        x0 = np.zeros((len(plants), plants.A.shape[1]))
        for i, member in enumerate(members):
            x0[i, : member.n_x] = member.initial_state(u, y)
        e = rng.standard_normal((len(plants), n, log.n_y)) @ roots.transpose(0, 2, 1)
        v = np.concatenate([u[None] - plants.u0[:, None], e], axis=2)
        runs = noisy.outputs(x0, v) + plants.y0[:, None]
        low[first:last], high[first:last] = np.quantile(runs, [0.025, 0.975], axis=0)
        counts[first + warm : last] = True
    return low, high, counts


def stable_draw(
    model: ArxModel, spread: float, louder: float, rng: np.random.Generator, tries: int = 20
) -> tuple[InnovationsModel, int]:
    """Draw a plant that is as stable as the estimate; count what was drawn again."""
    limit = max(1.0, model.linearise().spectral_radius()) + 1e-6
    for k in range(tries):
        drawn = model.draw(rng, spread)
        if drawn.spectral_radius() <= limit:
            return replace(drawn, S=drawn.S * louder**2), k
    estimate = model.linearise()
    return replace(estimate, S=estimate.S * louder**2), tries
