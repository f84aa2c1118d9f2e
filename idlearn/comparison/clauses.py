"""The clauses of gain, harm and stress: each one figure, one limit, one state, one sentence."""

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Literal

import numpy as np

from idlearn.comparison import phrases
from idlearn.comparison.acceptance import Acceptance
from idlearn.comparison.figures import Roles, rate_of, ratio_to, safe_ratio
from idlearn.comparison.resampling import Estimate, Interval, Resamples, ratio_of_worst
from idlearn.comparison.trials import Trials

State = Literal["met", "failed", "open"]

MOST_OFFSET_RATIO = 1.5  # as the sheet's default for travel: no worse than half as much again


@dataclass(frozen=True)
class Clause:
    """One clause.

    Attributes:
        name: "benefit", "harm_...", "stress_..." or "evidence_...".
        state: "met", "failed" or "open".
        figure: what was found; NaN if nothing could be.
        limit: what it is held against.
        sentence: one plain sentence.
        estimate: the figure with its parts, where more episodes or hours would narrow it.
        allowance: added to each side of the logarithm before it was held against the limit.
    """

    name: str
    state: State
    figure: float
    limit: float
    sentence: str
    estimate: Estimate | None = None
    allowance: float = 0.0


def state_of(interval: Interval, limit: float) -> State:
    """Hold an interval against an upper limit: wholly below, wholly above, or neither."""
    # the same controller twice costs the same but for rounding
    slack = 1e-9 * abs(limit)
    if interval.high <= limit + slack:
        return "met"
    return "failed" if interval.low > limit + slack else "open"


def benefit(
    candidate: str,
    baseline: str,
    estimate: Estimate,
    whole: Interval,
    limit: float,
    allowance: float,
) -> Clause:
    """Return the clause of the gain: the whole interval of the cost ratio at or below `limit`."""
    state = state_of(whole, limit)
    said = phrases.change(estimate.value, whole)
    end = {
        "met": "so the gain is worthwhile",
        "failed": f"so a gain of {phrases.share(1 - limit)} is ruled out",
        "open": f"which neither shows nor rules out a gain of {phrases.share(1 - limit)}",
    }[state]
    return Clause(
        "benefit",
        state,
        estimate.value,
        limit,
        f"Compared with {baseline}, the cost of {candidate} is {said}, {end}.",
        estimate,
        allowance,
    )


def _ratio_clause(
    name: str, what: str, estimate: Estimate, limit: float, allowance: float = 0.0
) -> Clause:
    whole = estimate.both.widened(allowance)
    state = state_of(whole, limit)
    end = {
        "met": "within",
        "failed": "beyond doubt above",
        "open": "not clearly within or above",
    }[state]
    return Clause(
        name,
        state,
        estimate.value,
        limit,
        f"{what} is {phrases.ratio(estimate.value, whole)} times the baseline's, {end} the limit "
        f"of {limit:g}.",
        estimate,
        allowance,
    )


def harm_clauses(
    jury: Trials,
    roles: Roles,
    resamples: Resamples,
    acceptance: Acceptance,
    *,
    cost: int,
    allowance: float,
    offset_floor: np.ndarray | None = None,
) -> tuple[Clause, ...]:
    """Return the clauses of harm: violations, worst tenth, travel, offset.

    Args:
        jury: trials on the jury plants.
        roles: candidate and baseline.
        resamples: of those plants and streams.
        acceptance: limits.
        cost: index of the primary cost.
        allowance: reality allowance, on the ratio of costs.
        offset_floor: offset that is of no account, per setpoint (n_setpoints,), such as the
            resolution of the instrument; None for 0 [engineering units].
    """
    i, b, level = jury.index(roles.candidate), jury.index(roles.baseline), acceptance.confidence
    worst = ratio_of_worst(jury.cost[i, :, :, cost], jury.cost[b, :, :, cost], resamples, level)
    clauses = [
        violation_clause(jury.tripped[i], acceptance, "harm_violation"),
        _ratio_clause(
            "harm_worst_tenth",
            "The mean cost of the worst tenth of the episodes",
            worst,
            acceptance.worst_tenth_ratio,
            allowance,
        ),
    ]
    travels = [
        safe_ratio(jury.travel[i, :, :, j], jury.travel[b, :, :, j], resamples, level)
        for j in range(jury.travel.shape[3])
    ]
    j = int(np.argmax([t.both.high for t in travels]))
    clauses.append(
        _ratio_clause(
            "harm_travel",
            f"The travel of {jury.actuators[j]}",
            travels[j],
            acceptance.most_travel_ratio,
        )
    )
    n_sp = jury.offset.shape[3]
    floor = np.zeros(n_sp) if offset_floor is None else np.asarray(offset_floor, dtype=float)
    offsets = [
        safe_ratio(
            jury.offset[i, :, :, j] ** 2 + floor[j] ** 2,
            jury.offset[b, :, :, j] ** 2 + floor[j] ** 2,
            resamples,
            level,
        ).root()
        for j in range(n_sp)
    ]
    if offsets:
        j = int(np.argmax([o.both.high for o in offsets]))
        clauses.append(
            _ratio_clause(
                "harm_offset",
                f"The offset left at {jury.controlled[j]}",
                offsets[j],
                MOST_OFFSET_RATIO,
            )
        )
    return tuple(clauses)


def violation_clause(tripped: np.ndarray, acceptance: Acceptance, name: str) -> Clause:
    """Return the clause of violations: exact one-sided bounds at the confidence asked for.

    Failed only when the lower bound is above the limit; with too few episodes it stays open.
    """
    rate, limit = rate_of(tripped, acceptance.confidence), acceptance.most_violation
    state = state_of(Interval(rate.low, rate.high), limit)
    end = {
        "met": f"so a rate above {phrases.share(limit)} is ruled out",
        "failed": f"so the rate is above {phrases.share(limit)} beyond doubt",
        "open": (
            f"so the rate may be as high as {phrases.share(rate.high)}, and "
            f"{phrases.share(limit)} is the limit"
        ),
    }[state]
    return Clause(
        name,
        state,
        rate.high if state != "failed" else rate.value,
        limit,
        f"{rate.events} of {rate.episodes} episodes had a violation, {end}.",
    )


_STRESS = {
    "gain_low": "With the weaker actuator",
    "gain_high": "With the stronger actuator",
    "delay": "With the extra delay",
    "noise": "With the stronger noise",
}


def stress_clauses(
    stress: Mapping[str, Trials],
    roles: Roles,
    resamples: Resamples,
    acceptance: Acceptance,
    *,
    cost: int,
) -> tuple[Clause, ...]:
    """Return one clause per stress: not notably dearer than the baseline, nor more violations.

    Notable is what would be worthwhile as a gain: a difference that is not worth having is no
    harm either. A stress is itself an error of the model, so the reality allowance is not added
    to it.
    """
    clauses = []
    most_ratio = 1 + acceptance.least_gain
    for name, trials in stress.items():
        level = acceptance.confidence
        estimate = ratio_to(trials, roles.candidate, roles.baseline, resamples, level, cost)
        own = rate_of(trials.tripped[trials.index(roles.candidate)], level)
        other = rate_of(trials.tripped[trials.index(roles.baseline)], level)
        most = max(acceptance.most_violation, other.high)
        state = state_of(estimate.both, most_ratio)
        # no more violations than the baseline, or so few that they are within the limit
        calm = own.events <= other.events or own.high <= acceptance.most_violation
        if own.low > most:
            state = "failed"
        elif state == "met" and not calm:
            state = "open"
        end = {
            "met": "so it bears this not notably worse",
            "failed": "so it bears this notably worse, beyond doubt",
            "open": "which leaves open whether it bears this notably worse",
        }[state]
        head = _STRESS.get(name, f"Under the stress {name}")
        clauses.append(
            Clause(
                f"stress_{name}",
                state,
                estimate.value,
                most_ratio,
                f"{head} the cost of {roles.candidate} is "
                f"{phrases.ratio(estimate.value, estimate.both)} times that of {roles.baseline}, "
                f"with violations in {own.events} against {other.events} of {own.episodes} "
                f"episodes, {end}.",
                estimate,
            )
        )
    return tuple(clauses)
