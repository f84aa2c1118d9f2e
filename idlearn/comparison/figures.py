"""The figures of every contender before the jury, and who is candidate and who is baseline."""

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np

from idlearn.comparison.resampling import (
    Estimate,
    Interval,
    Resamples,
    mean_cost,
    ratio_of_means,
)
from idlearn.comparison.statistics import (
    best_of_bias,
    clopper_pearson,
    cvar,
    holm_levels,
    interquartile_mean,
    pairing_gain,
    probability_of_improvement,
)
from idlearn.comparison.trials import Trials
from idlearn.envs import Contender, pessimistic


@dataclass(frozen=True)
class Roles:
    """Who is judged against whom, chosen on the selection plants.

    Attributes:
        candidate: best learned contender; "" if there is none.
        baseline: best tuned classical contender; "" if there is none.
        scores: pessimistic selection cost of every contender [-].
        better_incumbent: the incumbent's name where it scores better than the baseline, else "".
        flattery: by how many standard errors the candidate's selection score flatters it,
            had all learned contenders been equal: why the jury's plants took no part here.
    """

    candidate: str
    baseline: str
    scores: Mapping[str, float]
    better_incumbent: str = ""
    flattery: float = 0.0


def choose_roles(selection: Trials, contenders: Sequence[Contender], cost: int = 0) -> Roles:
    """Choose candidate and baseline on the selection plants, by the pessimism of the tuning.

    Args:
        selection: trials of the contenders on the selection plants.
        contenders: all of them; ties go to the name that comes first in the alphabet, so that
            their order does not matter.
        cost: index of the primary cost.
    """
    stacked = np.stack([selection.scores(c.name, cost) for c in contenders])
    value = dict(zip((c.name for c in contenders), pessimistic(stacked).tolist(), strict=True))

    def best(side: str) -> str:
        names = [c.name for c in contenders if c.side == side]
        return min(names, key=lambda n: (value[n], n)) if names else ""

    baseline, incumbent = best("classical"), best("incumbent")
    learned = sum(c.side == "learned" for c in contenders)
    return Roles(
        candidate=best("learned"),
        baseline=baseline,
        scores=value,
        better_incumbent=(
            incumbent if incumbent and baseline and value[incumbent] < value[baseline] else ""
        ),
        flattery=best_of_bias(learned) if learned else 0.0,
    )


@dataclass(frozen=True)
class Rate:
    """How often something happened, with one-sided bounds.

    Attributes:
        events: how often.
        episodes: out of how many.
        low: lower bound at the confidence asked for [-].
        high: upper bound at the same confidence [-].
    """

    events: int
    episodes: int
    low: float
    high: float

    @property
    def value(self) -> float:
        """The rate seen."""
        return self.events / self.episodes


def rate_of(events: np.ndarray, confidence: float) -> Rate:
    """Return the rate of events (bool, any shape), episodes taken as independent.

    Episodes on one plant resemble each other, so the bounds are those of the mixture of plants
    that was drawn, not of each plant.
    """
    k, n = int(np.sum(events)), int(np.size(events))
    low = clopper_pearson(k, n, confidence, "lower")[0]
    return Rate(k, n, low, clopper_pearson(k, n, confidence, "upper")[1])


@dataclass(frozen=True)
class Figures:
    """What one contender showed before the jury.

    Attributes:
        name: of the contender.
        side: "incumbent", "classical", "learned" or "floor".
        means: cost -> mean with interval [-].
        ratios: cost -> ratio to the baseline's mean; empty without a baseline [-].
        violation: rate of episodes with a violation.
        worst_tenth: mean primary cost of the worst tenth of the episodes [-].
        travel: actuator travel per sample, added over the actuators [engineering units].
        offset: root mean square of the offset, largest over the setpoints [engineering units].
        support: share of steps inside the region of the log, NaN if unknown [-].
        at_limit: share of steps with an actuator at a limit [-].
        optimism_gap: mean primary cost before the jury over that on the practice plants, NaN if
            unknown [-].
        middle: interquartile mean of the primary cost [-].
        improvement: chance that an episode is cheaper than the baseline's on the same plant and
            stream, NaN without a baseline [-].
        pairing: how many times fewer episodes pairing with the baseline needs, NaN without [-].
    """

    name: str
    side: str
    means: Mapping[str, Estimate]
    ratios: Mapping[str, Estimate]
    violation: Rate
    worst_tenth: float
    travel: float
    offset: float
    support: float
    at_limit: float
    optimism_gap: float
    middle: float
    improvement: float
    pairing: float


def figures_of(
    jury: Trials,
    sides: Mapping[str, str],
    resamples: Resamples,
    confidence: float,
    *,
    baseline: str = "",
    cost: int = 0,
    least_gain: float = 0.0,
    practice: Trials | None = None,
) -> dict[str, Figures]:
    """Return the figures of every contender of the trials.

    Args:
        jury: trials on the jury plants.
        sides: name -> side.
        resamples: drawn for these plants and streams.
        confidence: of intervals and bounds; the ratios of several learned contenders are read at
            Holm's levels, so that the chance that any of them shows a gain that is not there
            stays what it is for one [-].
        baseline: whom ratios refer to.
        cost: index of the primary cost.
        least_gain: orders the learned contenders for Holm [-].
        practice: trials on the practice plants, for the optimism gap.
    """
    levels = _levels(jury, sides, resamples, confidence, baseline, cost, least_gain)
    return {
        name: _figures(
            jury,
            name,
            sides[name],
            resamples,
            confidence,
            levels.get(name, confidence),
            baseline,
            cost,
            practice,
        )
        for name in jury.controllers
    }


def _levels(
    jury: Trials,
    sides: Mapping[str, str],
    resamples: Resamples,
    confidence: float,
    baseline: str,
    cost: int,
    least_gain: float,
) -> dict[str, float]:
    from scipy.special import ndtr

    names = [n for n in jury.controllers if sides[n] == "learned"]
    if not (baseline and names):
        return {}
    p = []
    for n in names:
        r = ratio_of_means(jury.scores(n, cost), jury.scores(baseline, cost), resamples, confidence)
        away = math.log(r.value) - math.log(1 - least_gain)
        p.append(float(ndtr(away / r.spread)) if r.spread > 0 else float(away >= 0))
    return dict(zip(names, holm_levels(p, confidence).tolist(), strict=True))


def _figures(
    jury: Trials,
    name: str,
    side: str,
    resamples: Resamples,
    confidence: float,
    level: float,
    baseline: str,
    cost: int,
    practice: Trials | None,
) -> Figures:
    i, primary = jury.index(name), jury.scores(name, cost)
    against = jury.scores(baseline, cost) if baseline else None
    gap = math.nan
    if practice is not None and name in practice.controllers:
        before = float(practice.scores(name, cost).mean())
        gap = float(primary.mean()) / before if before > 0 else math.nan
    return Figures(
        name=name,
        side=side,
        means={
            c: mean_cost(jury.cost[i, :, :, j], resamples, confidence)
            for j, c in enumerate(jury.costs)
        },
        ratios={
            c: ratio_to(jury, name, baseline, resamples, level, j) for j, c in enumerate(jury.costs)
        }
        if baseline
        else {},
        violation=rate_of(jury.tripped[i], confidence),
        worst_tenth=cvar(primary, 0.1),
        travel=float(jury.travel[i].mean(axis=(0, 1)).sum()),
        offset=float(np.sqrt((jury.offset[i] ** 2).mean(axis=(0, 1))).max(initial=0.0)),
        support=float(jury.support[i].mean()),
        at_limit=float(jury.at_limit[i].mean()),
        optimism_gap=gap,
        middle=interquartile_mean(primary),
        improvement=math.nan if against is None else probability_of_improvement(primary, against),
        pairing=math.nan if against is None else pairing_gain(primary, against),
    )


def ratio_to(
    jury: Trials, name: str, baseline: str, resamples: Resamples, confidence: float, cost: int = 0
) -> Estimate:
    """Return the ratio of the mean costs of two contenders; 1 of a contender to itself."""
    if name == baseline:
        one = Interval(1.0, 1.0)
        return Estimate(1.0, one, one, one, confidence, 0.0)
    return safe_ratio(jury.scores(name, cost), jury.scores(baseline, cost), resamples, confidence)


def safe_ratio(
    scores: np.ndarray, reference: np.ndarray, resamples: Resamples, confidence: float
) -> Estimate:
    """Return the ratio of two means, also where one is 0: 0 to 0 is 1, more than 0 to 0 is inf."""
    top, bottom = float(np.mean(scores)), float(np.mean(reference))
    if top > 0 and bottom > 0:
        return ratio_of_means(scores, reference, resamples, confidence)
    value = 1.0 if top == bottom else (math.inf if top > 0 else 0.0)
    sure = Interval(value, value)
    return Estimate(value, sure, sure, sure, confidence, 0.0)
