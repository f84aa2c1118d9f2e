"""The floor: what a controller could reach that knew each jury plant exactly.

For every jury plant the linear-quadratic-Gaussian controller of that very plant is designed and
run on the very same streams as everybody else, all plants in lock step. With a quadratic cost and
noise alone nothing can cost less on average, and the exact stationary cost is given beside it (an
episode starts at rest, so its mean is a little below). Under setpoint and load steps, which no
noise model foresees, it is no bound: only what a linear design with full knowledge can do.
"""

from dataclasses import dataclass, replace
from typing import Any

import numpy as np

from idlearn.baselines import lqg
from idlearn.comparison.figures import ratio_to
from idlearn.comparison.resampling import Estimate, draw_resamples
from idlearn.comparison.trials import Trials, gather
from idlearn.control import FilterForm, FilterRunner
from idlearn.cost import RiccatiWeights
from idlearn.envs import Streams, TrialGround, simulate
from idlearn.errors import IdlearnError
from idlearn.models.regulator import offset_free

FLOOR = "floor"


@dataclass(frozen=True)
class Floor:
    """The floor on the jury plants.

    Attributes:
        trials: of the one contender "floor", to be joined to the jury's; None if no design.
        stationary: exact expected stage cost of each plant under noise alone (P,), or None [-].
        bound: whether nothing can cost less on average in the scenarios of noise alone.
        sentence: what the figure is, or why there is none.
    """

    trials: Trials | None
    stationary: np.ndarray | None
    bound: bool
    sentence: str


def run_floor(ground: TrialGround, weights: RiccatiWeights, *, cost: int = 0) -> Floor:
    """Design each plant's own controllers and run all of them in lock step.

    Args:
        ground: the jury's plants and streams.
        weights: quadratic part of the primary cost.
        cost: index of the primary cost.

    Returns:
        the floor; without trials, and with the reason, where a plant has no such design. Under
        noise alone it is the design for the plant as it is; in a scenario with setpoint or load
        steps it is that one or the one that expects loads, whichever is cheaper on that plant.
    """
    loop, n_p = ground.loop, len(ground.ensemble)
    plain: list[FilterForm] = []
    ready: list[FilterForm] = []
    for p in range(n_p):
        model = ground.ensemble.member(p)
        try:
            for forms, m in ((plain, model), (ready, offset_free(model))):
                forms.append(
                    lqg.design_lqg(
                        m, weights, loop.layout, loop.actuator, loop.latency_samples
                    ).form
                )
        except (IdlearnError, np.linalg.LinAlgError) as error:
            label, reason = ground.ensemble.labels[p], str(error).rstrip(".")
            return Floor(
                None, None, False, f"No floor: jury plant {p + 1} ({label}) has none, {reason}."
            )
    quiet = np.concatenate([quiet_streams(s) for s in ground.streams])
    trials = _matched(ground, plain)
    if not quiet.all():
        trials = _cheaper(trials, _matched(ground, ready), quiet, cost)
    bound = weights.exact and bool(quiet.any())
    return Floor(
        trials,
        _stationary(ground, weights) if weights.exact else None,
        bound,
        "The controller that knows each jury plant exactly; "
        + (
            "in the scenarios of noise alone no controller costs less on average."
            if bound
            else "a bound only for a quadratic cost under noise alone, which is not the case here."
        ),
    )


def _matched(ground: TrialGround, forms: list[FilterForm]) -> Trials:
    """Run one form per plant, each on its own plant."""
    n_p, groups = len(forms), []
    for s in ground.streams:
        runner = FilterRunner(FilterForm.stack(forms), repeats=len(s))
        if n_p == 1:
            runner = FilterRunner(forms[0])
        episodes = s.take(np.tile(np.arange(len(s)), n_p))
        groups.append(
            simulate(
                ground.plant(len(s)),
                runner,
                episodes,
                ground.loop,
                extra_delay_samples=ground.extra_delay_samples,
            )
        )
    return gather(ground, (FLOOR,), [tuple(groups)])


def _cheaper(plain: Trials, ready: Trials, quiet: np.ndarray, cost: int) -> Trials:
    """Take, per plant and scenario that is not quiet, the design with the lower mean cost."""
    take = np.zeros((plain.n_plants, plain.n_streams), dtype=bool)
    for one in np.unique(plain.scenario[~quiet]):
        of = plain.scenario == one
        means = [t.scores(FLOOR, cost)[:, of].mean(axis=1) for t in (plain, ready)]
        take[np.ix_(means[1] < means[0], of)] = True
    take[:, quiet] = False
    arrays: dict[str, Any] = {}
    for name in ("cost", "terms", "tripped", "travel", "offset", "support", "at_limit"):
        a, b = getattr(plain, name), getattr(ready, name)
        mask = take[None].reshape(1, *take.shape, *(1,) * (a.ndim - 3))
        arrays[name] = np.where(mask, b, a)
    return replace(plain, **arrays)


def _stationary(ground: TrialGround, weights: RiccatiWeights) -> np.ndarray | None:
    """Return the exact cost of each plant, or None where one has none."""
    loop, out = ground.loop, np.empty(len(ground.ensemble))
    for p in range(len(out)):
        try:
            out[p] = lqg.exact_cost(
                ground.ensemble.member(p),
                weights,
                loop.layout,
                loop.actuator,
                loop.latency_samples,
            )
        except (IdlearnError, np.linalg.LinAlgError):
            return None
    return out if np.isfinite(out).all() else None


def quiet_streams(streams: Streams) -> np.ndarray:
    """Tell which streams hold noise alone (S,): no setpoint moves, no load, no disturbance."""
    still = (np.ptp(streams.setpoint, axis=1) == 0).all(axis=1)
    unmoved = (np.ptp(streams.measured, axis=1) == 0).all(axis=1)
    return np.asarray(still & unmoved & ~streams.load.any(axis=(1, 2)))


def below_floor(
    jury: Trials,
    ground: TrialGround,
    confidence: float,
    rng: np.random.Generator,
    *,
    cost: int = 0,
    n_resamples: int = 2000,
) -> dict[str, Estimate]:
    """Return who beat the floor beyond its interval under noise alone: a sign of a bug.

    Args:
        jury: trials that hold the contender "floor".
        ground: the ground they were run on.
        confidence: [-].
        rng: for the resamples.
        cost: index of the primary cost, which has to be quadratic.
        n_resamples: bootstrap resamples.

    Returns:
        name -> ratio to the floor, of those whose whole interval is below 1; empty without a
        scenario of noise alone.
    """
    quiet = np.flatnonzero(np.concatenate([quiet_streams(s) for s in ground.streams]))
    if not quiet.size:
        return {}
    alone = jury.only(quiet)
    resamples = draw_resamples(alone.n_plants, alone.scenario, n_resamples, rng)
    ratios = {
        n: ratio_to(alone, n, FLOOR, resamples, confidence, cost)
        for n in alone.controllers
        if n != FLOOR
    }
    return {n: r for n, r in ratios.items() if r.both.high < 1}
