"""What would settle an open verdict: seeds, log hours, or an excitation of the plant."""

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field

from idlearn.comparison import phrases
from idlearn.comparison.clauses import Clause
from idlearn.comparison.resampling import Estimate
from idlearn.comparison.statistics import clean_runs_needed, clopper_pearson

MOST_SEEDS = 4096  # per scenario; beyond it a longer log is the better bargain
MOST_GROWTH = 100.0  # a log longer by more than this is no advice


_WEAK_LOG = {
    f"evidence_{part}" for part in ("audit", "validation", "coverage", "support", "optimism")
}


@dataclass(frozen=True)
class Circumstances:
    """What the study had to work with.

    Attributes:
        log_hours: length of the log that was used [h].
        seeds: seeds per scenario before the jury.
        episodes_per_seed: jury plants times scenarios.
        settling_s: slowest significant settling of the plant, NaN if unknown [s].
        ranges: actuator -> lowest and highest value that the log covers [engineering units].
        units: actuator -> unit.
    """

    log_hours: float
    seeds: int = 0
    episodes_per_seed: int = 0
    settling_s: float = math.nan
    ranges: Mapping[str, tuple[float, float]] = field(default_factory=dict)
    units: Mapping[str, str] = field(default_factory=dict)


@dataclass(frozen=True)
class Next:
    """The next step.

    Attributes:
        sentence: what to do.
        log_hours: length the log would need in all, None if that is not what is missing [h].
        excitation: how to move the plant, None if that is not what is missing.
        seeds: seeds per scenario needed, None if that is not what is missing.
    """

    sentence: str
    log_hours: float | None = None
    excitation: str | None = None
    seeds: int | None = None


@dataclass(frozen=True)
class Need:
    """What one open clause would need.

    Attributes:
        seeds: factor on the seeds; 1 for no more.
        hours: factor on the log's length; 1 for no more.
        within: whether seeds and hours can settle it at all.
    """

    seeds: float = 1.0
    hours: float = 1.0
    within: bool = True


def need_of(estimate: Estimate, limit: float, allowance: float) -> Need:
    """Return what would move the end of the interval past the limit, the estimate staying put.

    The part of the seeds shrinks with one over the root of their number, the part of the plants
    with one over the root of the length of the log; the reality allowance with neither.
    """
    if not (0 < estimate.value < math.inf):
        return Need(within=False)
    centre = math.log(estimate.value)
    distance = abs(math.log(limit) - centre)
    upwards = estimate.value <= limit

    def half(low: float, high: float) -> float:
        return math.log(high) - centre if upwards else centre - math.log(low)

    by_seed = half(estimate.seeds.low, estimate.seeds.high)
    by_plant = half(estimate.plants.low, estimate.plants.high)
    room = distance - allowance
    if room <= 0:
        return Need(within=False)
    if by_plant < room:
        seeds = by_seed**2 / (room**2 - by_plant**2)
        return Need(seeds=max(1.0, seeds))
    # of the room four fifths go to the plants, three fifths to the seeds: 0.8^2 + 0.6^2 = 1
    return Need(
        seeds=max(1.0, (by_seed / (0.6 * room)) ** 2),
        hours=max(1.0, (by_plant / (0.8 * room)) ** 2),
    )


def episodes_needed(events: int, episodes: int, limit: float, confidence: float) -> int | None:
    """Return how many episodes would bring the bound of a rate to one side of its limit.

    The rate seen is taken to stay; None where it stands too close to the limit for any number
    up to a million.
    """
    if events == 0:
        return clean_runs_needed(limit, confidence)
    n, rate = episodes, events / episodes
    while n <= 1_000_000:
        k = round(rate * n)
        if rate <= limit and clopper_pearson(k, n, confidence, "upper")[1] <= limit:
            return n
        if rate > limit and clopper_pearson(k, n, confidence, "lower")[0] > limit:
            return n
        n = math.ceil(1.1 * n)
    return None


def excitation(circumstances: Circumstances) -> str | None:
    """Return how to move the actuators so that a log says more; None without ranges.

    Random two-level moves over the range the log knows, held between a fifth of the settling and
    the whole of it: common practice for identification.
    """
    if not circumstances.ranges:
        return None
    moves = [
        f"{name} between {phrases.figure(low)} and {phrases.figure(high)} "
        f"{circumstances.units.get(name, '')}".rstrip()
        for name, (low, high) in circumstances.ranges.items()
    ]
    settling = circumstances.settling_s
    held = (
        f", each level held for {phrases.figure(settling / 5, 2)} to "
        f"{phrases.figure(settling, 2)} s at random, for at least "
        f"{phrases.figure(max(1.0, 100 * settling / 3600), 2)} h"
        if math.isfinite(settling)
        else ""
    )
    return (
        f"Move {phrases.listed(moves)} in two-level steps independent of the outputs{held}, as far "
        "as the site allows."
    )


def advise(
    outcome: str,
    clauses: Sequence[Clause],
    circumstances: Circumstances,
    *,
    candidate: str,
    baseline: str,
    confidence: float,
    violations: tuple[int, int] = (0, 0),
) -> Next:
    """Return the next step for a verdict.

    Args:
        outcome: "go", "no-go" or "undecided".
        clauses: of the verdict.
        circumstances: what the study had.
        candidate: name.
        baseline: name.
        confidence: of the bounds [-].
        violations: events and episodes of the candidate.
    """
    if outcome == "go":
        return Next(
            f"Plan a supervised trial of {candidate} against {baseline} under the site's own "
            "procedures; interlocks stay outside and above both."
        )
    if outcome == "no-go":
        return Next(f"Keep a classical controller: {baseline} as tuned here is the one to try.")
    open_now = [c for c in clauses if c.state != "met"]
    seeds, hours, sayings, stuck = _figures_needed(open_now, circumstances, confidence, violations)
    failed = {c.name for c in open_now if c.state == "failed"}
    move = None
    if failed & _WEAK_LOG:
        move = excitation(circumstances)
        sayings.append(
            "a log in which the actuators are moved on purpose, since the present one does not "
            "carry the conclusion"
        )
    if "evidence_baseline" in failed:
        sayings.append("a larger tuning budget, so that the baseline reaches its optimum")
    if "evidence_ledger" in failed:
        sayings.append("the same task and budget for every contender")
    sayings += [
        f"a measurement of what is unknown: {c.sentence.rstrip('.')}"
        for c in open_now
        if c.state == "open" and c.name.startswith("evidence_")
    ]
    if not candidate and not sayings:
        sayings.append("a learned candidate and a tuned classical baseline to hold it against")
    told = f"To settle it: {'; '.join(sayings)}." if sayings else ""
    if stuck:
        told += (
            f" {'Beyond that neither' if told else 'Neither'} seeds nor hours of log settle it, "
            "since what separates a figure from its limit is less than what studies on models can "
            f"be wrong by; until then keep {baseline}."
        )
    return Next(told.strip(), hours, move, seeds)


def _figures_needed(
    open_now: Sequence[Clause],
    circumstances: Circumstances,
    confidence: float,
    violations: tuple[int, int],
) -> tuple[int | None, float | None, list[str], bool]:
    needs = [
        need_of(c.estimate, c.limit, c.allowance)
        for c in open_now
        if c.estimate is not None and c.state == "open"
    ]
    reach = [n for n in needs if n.within]
    stuck = len(reach) < len(needs)
    factor = max((n.seeds for n in reach), default=1.0)
    longer = max((n.hours for n in reach), default=1.0)
    wanted = math.ceil(circumstances.seeds * factor) if factor > 1 else 0
    per_seed = circumstances.episodes_per_seed
    for c in open_now:
        if c.name == "harm_violation" and c.state == "open" and per_seed:
            episodes = episodes_needed(*violations, c.limit, confidence)
            if episodes is None:
                stuck = True
            else:
                wanted = max(wanted, math.ceil(episodes / per_seed))
    sayings: list[str] = []
    seeds = hours = None
    if wanted > circumstances.seeds:
        if wanted <= MOST_SEEDS:
            # two digits, rounded up: the prediction is no better than that
            step = 10 ** max(0, len(str(wanted)) - 2)
            seeds = -(-wanted // step) * step
            sayings.append(f"about {seeds} seeds per scenario instead of {circumstances.seeds}")
        else:
            stuck = True
    if longer > 1:
        if longer <= MOST_GROWTH and circumstances.log_hours > 0:
            hours = float(f"{circumstances.log_hours * longer:.2g}")
            sayings.append(
                f"a log of about {phrases.figure(hours)} h instead of "
                f"{phrases.figure(circumstances.log_hours)} h"
            )
        else:
            stuck = True
    return seeds, hours, sayings, stuck
