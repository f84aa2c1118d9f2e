"""The paired two-level bootstrap: plants are drawn first, then the streams that they meet.

Every plant meets the same streams, so a drawn stream is drawn for all plants at once: what a
stream does to the difference of two contenders it does on every plant, and drawing anew inside
each plant would take P repeats of one accident for P accidents. (Two crossed factors: A. B. Owen,
The pigeonhole bootstrap, Annals of Applied Statistics 1, 2007.) Scenarios are fixed, so streams
are drawn within their scenario.

The bootstrap alone is too narrow for few plants or seeds: its variance lacks the factor n / (n - 1)
and it knows no Student quantile. Deviations are therefore stretched by both factors (compare
T. C. Hesterberg, What Teachers Should Know About the Bootstrap, The American Statistician 69,
2015, section 3.2, which moves the percentiles instead).
"""

import math
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from idlearn.comparison.statistics import worst_weights
from idlearn.errors import InputError

_CHUNK = 2_000_000  # weights held at once
_TINY = 1e-300


@dataclass(frozen=True)
class Interval:
    """An interval.

    Attributes:
        low: lower end.
        high: upper end.
    """

    low: float
    high: float

    def widened(self, allowance: float) -> "Interval":
        """Return the interval with `allowance` added to each side of its logarithm."""
        return Interval(self.low * math.exp(-allowance), self.high * math.exp(allowance))

    def around(self, other: "Interval") -> "Interval":
        """Return the least interval that holds both."""
        return Interval(min(self.low, other.low), max(self.high, other.high))


@dataclass(frozen=True)
class Estimate:
    """A figure with its interval, and the parts of that interval.

    Attributes:
        value: the figure.
        seeds: interval if the plants were all there is.
        plants: interval if the streams were all there is.
        both: interval for both.
        confidence: [-].
        spread: standard error of the figure's logarithm [-].
    """

    value: float
    seeds: Interval
    plants: Interval
    both: Interval
    confidence: float
    spread: float

    def root(self) -> "Estimate":
        """Return the estimate of the square root of the figure."""

        def half(i: Interval) -> Interval:
            return Interval(math.sqrt(i.low), math.sqrt(i.high))

        return Estimate(
            math.sqrt(self.value),
            half(self.seeds),
            half(self.plants),
            half(self.both),
            self.confidence,
            self.spread / 2,
        )


@dataclass(frozen=True)
class Resamples:
    """Weights of B resamples; the same ones serve every figure and every contender.

    Attributes:
        plants: (B, P) weight of each plant, rows adding up to 1.
        streams: (B, S) weight of each stream, rows adding up to 1.
        scenarios: number of scenarios.
    """

    plants: np.ndarray
    streams: np.ndarray
    scenarios: int

    @property
    def n_plants(self) -> int:
        """Plants."""
        return self.plants.shape[1]

    @property
    def n_streams(self) -> int:
        """Streams."""
        return self.streams.shape[1]


def draw_resamples(
    n_plants: int, scenario: np.ndarray, n_resamples: int, rng: np.random.Generator
) -> Resamples:
    """Draw plants and, within each scenario, streams with replacement.

    Args:
        n_plants: plants, at least 2.
        scenario: scenario of each stream (S,), at least two streams of each.
        n_resamples: B; 2000 gives the ends of a 95 % interval to about 4 % of its width.
        rng: generator.

    Raises:
        InputError: one plant, or a scenario with one seed: nothing varies, so nothing is known.
    """
    label, counts = np.unique(scenario, return_counts=True)
    if n_plants < 2 or counts.min() < 2:
        raise InputError(
            f"{n_plants} plants and {int(counts.min())} seeds in a scenario give no interval; "
            "at least 2 of each are needed"
        )
    plants = rng.multinomial(n_plants, np.full(n_plants, 1 / n_plants), size=n_resamples)
    streams = np.zeros((n_resamples, len(scenario)))
    for one, n in zip(label, counts, strict=True):
        drawn = rng.multinomial(n, np.full(n, 1 / n), size=n_resamples)
        streams[:, np.asarray(scenario) == one] = drawn
    return Resamples(plants / n_plants, streams / len(scenario), len(label))


Statistic = Callable[[np.ndarray, np.ndarray], np.ndarray]  # (B, P), (B, S) -> log figure (B,)


def mean_cost(scores: np.ndarray, resamples: Resamples, confidence: float) -> Estimate:
    """Return the mean of scores (P, S) with its interval; scores are 0 or more [-]."""
    if not np.any(scores):
        nothing = Interval(0.0, 0.0)
        return Estimate(0.0, nothing, nothing, nothing, confidence, 0.0)
    return _estimate(lambda p, s: np.log(_means(scores, p, s)), resamples, confidence)


def ratio_of_means(
    scores: np.ndarray, reference: np.ndarray, resamples: Resamples, confidence: float
) -> Estimate:
    """Return mean score over mean reference score, paired by plant and stream.

    Args:
        scores: (P, S), 0 or more [-].
        reference: (P, S), 0 or more [-].
        resamples: of the same plants and streams.
        confidence: of the intervals [-].

    Raises:
        InputError: one of the means is 0, so that the ratio has no logarithm.
    """
    if not (np.mean(scores) > 0 and np.mean(reference) > 0):
        raise InputError("a mean of 0 has no ratio; check that the cost weighs what happens")
    return _estimate(
        lambda p, s: np.log(_means(scores, p, s)) - np.log(_means(reference, p, s)),
        resamples,
        confidence,
    )


def ratio_of_worst(
    scores: np.ndarray,
    reference: np.ndarray,
    resamples: Resamples,
    confidence: float,
    share: float = 0.1,
) -> Estimate:
    """Return the ratio of the means of the worst `share` of the episodes, paired.

    Arguments and errors as `ratio_of_means`; each side has its own worst episodes.
    """
    if not (np.max(scores) > 0 and np.max(reference) > 0):
        raise InputError("a mean of 0 has no ratio; check that the cost weighs what happens")
    return _estimate(
        lambda p, s: np.log(_worst(scores, p, s, share)) - np.log(_worst(reference, p, s, share)),
        resamples,
        confidence,
    )


def pooled_plants(
    scores: tuple[np.ndarray, ...],
    reference: tuple[np.ndarray, ...],
    n_resamples: int,
    confidence: float,
    rng: np.random.Generator,
) -> Interval:
    """Return the interval of a ratio of means over the plants of several families together.

    Args:
        scores: one (P_i, S_i) per family; families may have met different streams.
        reference: likewise.
        n_resamples: draws of as many plants as there are in all.
        confidence: [-].
        rng: generator.
    """
    top = np.concatenate([s.mean(axis=1) for s in scores])
    bottom = np.concatenate([s.mean(axis=1) for s in reference])
    n = len(top)
    w = rng.multinomial(n, np.full(n, 1 / n), size=n_resamples) / n
    centre = math.log(top.mean()) - math.log(bottom.mean())
    away = np.log(w @ top) - np.log(w @ bottom) - centre
    return _interval(centre, away, n - 1, n / (n - 1), confidence)


def _means(scores: np.ndarray, plants: np.ndarray, streams: np.ndarray) -> np.ndarray:
    # a resample may hold nothing but zeros; its logarithm has to stay a number
    return np.maximum(((plants @ scores) * streams).sum(axis=1), _TINY)


def _worst(scores: np.ndarray, plants: np.ndarray, streams: np.ndarray, share: float) -> np.ndarray:
    order = np.argsort(-scores, axis=None, kind="stable")
    # a resample's worst tenth hardly ever reaches beyond the worst four tenths of the scores
    kept = min(len(order), math.ceil(4 * share * len(order)))
    rows = max(1, _CHUNK // kept)
    out = np.empty(len(plants))
    for first in range(0, len(plants), rows):
        part = slice(first, first + rows)
        w = _weights(plants[part], streams[part], order[:kept], scores.shape)
        held = order[:kept]
        if w.sum(axis=1).min() < share:
            held = order
            w = _weights(plants[part], streams[part], held, scores.shape)
        out[part] = worst_weights(w, share) @ scores.ravel()[held]
    return np.maximum(out, _TINY)


def _weights(
    plants: np.ndarray, streams: np.ndarray, order: np.ndarray, shape: tuple[int, ...]
) -> np.ndarray:
    """Return the weight of each episode of `order`: its plant's times its stream's."""
    p, s = np.unravel_index(order, shape)
    return np.asarray(plants[:, p] * streams[:, s])


def _estimate(statistic: Statistic, resamples: Resamples, confidence: float) -> Estimate:
    n_p, n_s = resamples.n_plants, resamples.n_streams
    even_p, even_s = np.full((1, n_p), 1 / n_p), np.full((1, n_s), 1 / n_s)
    centre = float(statistic(even_p, even_s)[0])
    b = len(resamples.plants)
    fixed_p, fixed_s = np.broadcast_to(even_p, (b, n_p)), np.broadcast_to(even_s, (b, n_s))
    by_seed = statistic(fixed_p, resamples.streams) - centre
    by_plant = statistic(resamples.plants, fixed_s) - centre
    by_both = statistic(resamples.plants, resamples.streams) - centre
    df_s, df_p = n_s - resamples.scenarios, n_p - 1
    lack_s, lack_p = n_s / df_s, n_p / df_p
    var_s, var_p = float(np.var(by_seed)) * lack_s, float(np.var(by_plant)) * lack_p
    plain = float(np.var(by_seed) + np.var(by_plant))
    lack = (var_s + var_p) / plain if plain > 0 else 1.0
    # Satterthwaite's degrees of freedom of a sum of two variances
    shape = var_s**2 / df_s + var_p**2 / df_p
    df = (var_s + var_p) ** 2 / shape if shape > 0 else float(df_s + df_p)
    return Estimate(
        value=math.exp(centre),
        seeds=_interval(centre, by_seed, df_s, lack_s, confidence),
        plants=_interval(centre, by_plant, df_p, lack_p, confidence),
        both=_interval(centre, by_both, df, lack, confidence),
        confidence=confidence,
        spread=float(np.std(by_both)) * math.sqrt(lack),
    )


def _interval(
    centre: float, away: np.ndarray, df: float, lack: float, confidence: float
) -> Interval:
    from scipy.special import ndtri, stdtrit

    edge = (1 + confidence) / 2
    stretch = math.sqrt(lack) * float(stdtrit(df, edge) / ndtri(edge))
    low, high = np.quantile(away, [1 - edge, edge])
    # the ends never leave the estimate outside
    return Interval(
        math.exp(centre + stretch * min(float(low), 0.0)),
        math.exp(centre + stretch * max(float(high), 0.0)),
    )
