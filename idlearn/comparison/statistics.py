"""Statistics of paired costs: pure functions of arrays of numbers.

Scores are (n_plants, n_streams): every plant meets every stream, and all contenders meet the same
plants and streams, so that whatever plant and stream do to all of them alike drops out. What was
chosen on some plants must be judged on others: see `best_of_bias`.
"""

import math
from collections.abc import Sequence
from typing import Literal

import numpy as np

from idlearn.errors import InputError


def clopper_pearson(
    events: int,
    trials: int,
    confidence: float = 0.95,
    side: Literal["both", "upper", "lower"] = "both",
) -> tuple[float, float]:
    """Return exact bounds of a rate.

    Args:
        events: how often it happened.
        trials: out of how many independent trials.
        confidence: of the interval, or of the one bound asked for [-].
        side: "both" for an interval; "upper" or "lower" for one bound, the other being 0 or 1.

    Returns:
        low, high [-].

    Raises:
        InputError: not 0 <= events <= trials, or no trial at all.

    After C. J. Clopper and E. S. Pearson, Biometrika 26, 1934.
    """
    from scipy.special import betaincinv

    if trials < 1 or not 0 <= events <= trials:
        raise InputError(f"{events} events in {trials} trials; events have to be 0 up to trials")
    tail = (1 - confidence) / 2 if side == "both" else 1 - confidence
    low = 0.0 if events == 0 or side == "upper" else betaincinv(events, trials - events + 1, tail)
    high = (
        1.0
        if events == trials or side == "lower"
        else betaincinv(events + 1, trials - events, 1 - tail)
    )
    return float(low), float(high)


def clean_runs_needed(rate: float, confidence: float = 0.95) -> int:
    """Return how many trials without an event put the one-sided upper bound at `rate` or below.

    The "rule of three" (3 / rate at 95 %), exactly; J. A. Hanley and A. Lippman-Hand, 1983.
    """
    # the tolerance keeps a rate that is met exactly from asking for one more
    return math.ceil(math.log(1 - confidence) / math.log(1 - rate) - 1e-9)


def holm_adjusted(p: Sequence[float]) -> np.ndarray:
    """Return p-values adjusted for several hypotheses (m,), in the order given.

    After S. Holm, Scandinavian Journal of Statistics 6, 1979.
    """
    values = np.asarray(p, dtype=float)
    order, m = np.argsort(values, kind="stable"), len(values)
    stepped = np.maximum.accumulate(values[order] * (m - np.arange(m)))
    out = np.empty(m)
    out[order] = np.minimum(stepped, 1.0)
    return out


def holm_levels(p: Sequence[float], confidence: float = 0.95) -> np.ndarray:
    """Return the confidence at which the interval of each of m hypotheses has to be read (m,).

    The one with the i-th smallest p-value (i = 1..m) is read at 1 - (1 - confidence) / (m - i + 1),
    so that the most telling interval carries the whole correction.
    """
    values = np.asarray(p, dtype=float)
    order, m = np.argsort(values, kind="stable"), len(values)
    levels = np.empty(m)
    levels[order] = 1 - (1 - confidence) / (m - np.arange(m))
    return levels


def interquartile_mean(scores: np.ndarray) -> float:
    """Return the mean of the middle half of all scores, of any shape.

    A quarter of the number of scores, rounded down, is left out at each end; after R. Agarwal
    et al., Deep Reinforcement Learning at the Edge of the Statistical Precipice, NeurIPS 2021.
    """
    flat = np.sort(np.asarray(scores, dtype=float), axis=None)
    cut = len(flat) // 4
    return float(flat[cut : len(flat) - cut].mean())


def probability_of_improvement(
    cost: np.ndarray, baseline: np.ndarray, *, paired: bool = True
) -> float:
    """Return the chance that the cost is lower than the baseline's; a tie counts half.

    Args:
        cost: of any shape; the same shape as `baseline` when paired [-].
        baseline: [-].
        paired: compare equal (plant, stream) only; else every cost with every baseline cost,
            which is the Mann-Whitney U over the number of pairs.
    """
    x, y = np.ravel(cost), np.ravel(baseline)
    if paired:
        return float(np.mean((x < y) + 0.5 * (x == y)))
    ranked = np.sort(y)
    above = len(y) - np.searchsorted(ranked, x, side="right")
    ties = len(y) - np.searchsorted(ranked, x, side="left") - above
    return float(np.sum(above + 0.5 * ties) / (len(x) * len(y)))


def cvar(losses: np.ndarray, share: float = 0.1) -> float:
    """Return the mean of the worst `share` of the losses, splitting the loss at the edge.

    Args:
        losses: equally likely, of any shape.
        share: of the losses, above 0 up to 1 [-].

    After R. T. Rockafellar and S. Uryasev, Journal of Banking and Finance 26, 2002.
    """
    worst = np.sort(np.ravel(losses))[::-1]
    return float(worst @ worst_weights(np.full((1, len(worst)), 1 / len(worst)), share)[0])


def worst_weights(weights: np.ndarray, share: float) -> np.ndarray:
    """Return what each loss, sorted from the worst on, adds to the mean of the worst `share`.

    Args:
        weights: probability of each loss (n, n_losses), rows adding up to 1 [-].
        share: [-].
    """
    before = np.cumsum(weights, axis=1) - weights
    return np.asarray(np.clip(share - before, 0.0, weights) / share)


def pairing_gain(cost: np.ndarray, baseline: np.ndarray) -> float:
    """Return how many times fewer episodes pairing needs than independent episodes would.

    Args:
        cost: of any shape [-].
        baseline: of the same shape [-].

    Returns:
        Var(x) + Var(y) over Var(x - y): 1 / (1 - correlation) for equal variances, inf where
        the differences do not vary.
    """
    x, y = np.ravel(cost), np.ravel(baseline)
    apart = float(np.var(x - y))
    return float((np.var(x) + np.var(y)) / apart) if apart > 0 else math.inf


def best_of_bias(n: int) -> float:
    """Return by how many standard errors the best of n equal contenders looks better than it is.

    The mean of the largest of n standard normal numbers (for n = 2 half the control-chart
    constant d2). A contender's score on the plants it was chosen on is flattered by about this
    much: only plants that had no part in the choice may judge it.

    Raises:
        InputError: n is below 1.
    """
    from scipy.special import ndtr

    if n < 1:
        raise InputError(f"n is {n}; at least one contender is needed")
    x = np.linspace(-9.0, 9.0, 4001)
    density = n * np.exp(-0.5 * x * x) / math.sqrt(2 * math.pi) * ndtr(x) ** (n - 1)
    # the trapezoidal rule is exact to rounding for a smooth density that ends at zero
    return float(np.sum(x * density) * (x[1] - x[0]))
