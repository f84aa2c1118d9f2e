"""Where the gain comes from: the ladder from incumbent to floor, and the table of all costs."""

import math
from collections.abc import Sequence
from dataclasses import dataclass

from idlearn.comparison.figures import Roles, ratio_to
from idlearn.comparison.resampling import Estimate, Interval, Resamples, mean_cost
from idlearn.comparison.trials import Trials
from idlearn.envs import Contender


@dataclass(frozen=True)
class Rung:
    """One rung of the ladder.

    Attributes:
        name: of the contender.
        side: "incumbent", "classical", "learned" or "floor".
        mean: mean primary cost [-].
        step: ratio to the rung before, paired; None on the first. The logarithms of all steps
            add up to that of `whole` on the last rung [-].
        whole: ratio to the first rung, paired [-].
    """

    name: str
    side: str
    mean: Estimate
    step: Estimate | None
    whole: Estimate


def climb(
    jury: Trials,
    contenders: Sequence[Contender],
    roles: Roles,
    resamples: Resamples,
    confidence: float,
    *,
    cost: int = 0,
    floor: str = "",
) -> tuple[Rung, ...]:
    """Return the ladder: incumbent, tuned classical structures, candidate, floor.

    Args:
        jury: trials on the jury plants.
        contenders: all of them; other learned ones than the candidate are left out.
        roles: who is candidate.
        resamples: of those plants and streams.
        confidence: [-].
        cost: index of the primary cost.
        floor: name of the floor among the trials; "" if there is none.

    Returns:
        rungs. The classical structure that is the incumbent's own comes first, so that the first
        step is what retuning alone gives; the others follow from the dearest to the cheapest.
    """
    incumbent = [c for c in contenders if c.side == "incumbent"]
    kinds = {c.controller.kind for c in incumbent}
    classical = sorted(
        (c for c in contenders if c.side == "classical"),
        key=lambda c: (
            c.controller.kind not in kinds,
            -float(jury.scores(c.name, cost).mean()),
            c.name,
        ),
    )
    order: list[tuple[str, str]] = [(c.name, c.side) for c in (*incumbent, *classical)]
    if roles.candidate:
        order.append((roles.candidate, "learned"))
    if floor:
        order.append((floor, "floor"))
    rungs = []
    for i, (name, side) in enumerate(order):
        rungs.append(
            Rung(
                name=name,
                side=side,
                mean=mean_cost(jury.scores(name, cost), resamples, confidence),
                step=ratio_to(jury, name, order[i - 1][0], resamples, confidence, cost)
                if i
                else None,
                whole=ratio_to(jury, name, order[0][0], resamples, confidence, cost),
            )
        )
    return tuple(rungs)


def ladder_table(rungs: Sequence[Rung]) -> dict[str, list[object]]:
    """Return the columns of ladder.csv; the first four are the ones a reader needs."""
    nothing = Interval(math.nan, math.nan)
    steps = [(math.nan, nothing) if r.step is None else (r.step.value, r.step.both) for r in rungs]
    return {
        "step": [r.name for r in rungs],
        "mean": [r.mean.value for r in rungs],
        "low": [r.mean.both.low for r in rungs],
        "high": [r.mean.both.high for r in rungs],
        "side": [r.side for r in rungs],
        "step_ratio": [v for v, _ in steps],
        "step_low": [i.low for _, i in steps],
        "step_high": [i.high for _, i in steps],
    }


@dataclass(frozen=True)
class CrossCell:
    """One contender under one cost.

    Attributes:
        name: of the contender.
        cost: it is judged under; all were tuned under the primary one.
        mean: [-].
        rank: 1 for the cheapest under this cost.
        moved: rank under this cost minus rank under the primary cost.
    """

    name: str
    cost: str
    mean: Estimate
    rank: int
    moved: int


def cross_table(
    jury: Trials, resamples: Resamples, confidence: float, *, cost: int = 0, without: str = ""
) -> tuple[CrossCell, ...]:
    """Judge every contender under every declared cost.

    Args:
        jury: trials on the jury plants.
        resamples: of those plants and streams.
        confidence: [-].
        cost: index of the primary cost, under which all were tuned.
        without: name to leave out, such as the floor.
    """
    names = [n for n in jury.controllers if n != without]

    def ranks(j: int) -> dict[str, int]:
        ordered = sorted(names, key=lambda n: (float(jury.scores(n, j).mean()), n))
        return {n: 1 + i for i, n in enumerate(ordered)}

    first = ranks(cost)
    cells = []
    for j, of in enumerate(jury.costs):
        now = ranks(j)
        cells += [
            CrossCell(
                n,
                of,
                mean_cost(jury.scores(n, j), resamples, confidence),
                now[n],
                now[n] - first[n],
            )
            for n in names
        ]
    return tuple(cells)
