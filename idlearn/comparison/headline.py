"""The cost ratio that stands at the head of a report, with the parts of its interval."""

import math
from dataclasses import dataclass

from idlearn.comparison.resampling import Estimate, Interval

# What has to be added to each side of the logarithm of a cost ratio so that the interval of a
# study on identified models covers the ratio on the plant itself in 92 to 95 % of the cases:
# measured in prototype studies on 84 invented plants with a known truth, among those where both
# controllers stayed inside the region of the log. To be replaced by a measured table.
REALITY_ALLOWANCE = 0.15


@dataclass(frozen=True)
class Headline:
    """The cost ratio of candidate to baseline, its interval and the parts of it.

    Attributes:
        value: ratio of the mean costs on the jury plants [-].
        seeds: interval if only the streams were drawn anew.
        plants: interval if only the plants were, those of jury and practice together.
        allowance: interval if only studies on models could be wrong.
        whole: the interval that decides.
        confidence: asked for; with several learned contenders the interval is wider, so that the
            chance of a false gain among all of them is what it would be for one [-].
    """

    value: float
    seeds: Interval
    plants: Interval
    allowance: Interval
    whole: Interval
    confidence: float

    def to_table(self) -> dict[str, list[object]]:
        """Return the columns of interval.csv."""
        parts = ("seeds", "plants", "allowance", "whole")
        held = [getattr(self, p) for p in parts]
        return {"part": list(parts), "low": [i.low for i in held], "high": [i.high for i in held]}


def headline_of(
    estimate: Estimate, allowance: float, confidence: float, pooled: Interval | None = None
) -> Headline:
    """Put the parts of the interval together.

    Args:
        estimate: ratio on the jury plants with its parts.
        allowance: reality allowance, for each side of the logarithm [-].
        confidence: asked for; the estimate's own is higher where Holm made it so [-].
        pooled: interval of the ratio over jury and practice plants together; what the two
            families disagree on is uncertainty, so the part of the plants holds it too.
    """
    centre = math.log(estimate.value)
    plants = estimate.plants if pooled is None else estimate.plants.around(pooled)
    down = math.hypot(centre - math.log(estimate.seeds.low), centre - math.log(plants.low))
    up = math.hypot(math.log(estimate.seeds.high) - centre, math.log(plants.high) - centre)
    sampled = estimate.both.around(Interval(math.exp(centre - down), math.exp(centre + up)))
    return Headline(
        value=estimate.value,
        seeds=estimate.seeds,
        plants=plants,
        allowance=Interval(estimate.value, estimate.value).widened(allowance),
        whole=sampled.widened(allowance),
        confidence=confidence,
    )
