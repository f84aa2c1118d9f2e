"""The verdict: go, no-go or undecided, from the clauses and nothing else.

- no-go if a clause of harm or stress has failed beyond doubt, or if the whole interval of the
  cost ratio says that the gain is below the least worthwhile one;
- go only if every clause is met;
- undecided otherwise, and always when no model passed validation: then nothing was shown.
"""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field

import numpy as np

from idlearn.comparison import phrases
from idlearn.comparison.acceptance import Acceptance
from idlearn.comparison.advice import Circumstances, Next, advise
from idlearn.comparison.clauses import Clause, benefit, harm_clauses, stress_clauses
from idlearn.comparison.evidence import Evidence, log_clauses, study_clauses
from idlearn.comparison.figures import Figures, Roles, figures_of
from idlearn.comparison.headline import REALITY_ALLOWANCE, Headline, headline_of
from idlearn.comparison.ledger import Ledger
from idlearn.comparison.resampling import Estimate, draw_resamples, pooled_plants
from idlearn.comparison.trials import Trials
from idlearn.envs import Contender
from idlearn.errors import InputError


@dataclass(frozen=True)
class Verdict:
    """The verdict and all it rests on.

    Attributes:
        outcome: "go", "no-go" or "undecided".
        sentence: the verdict in one sentence.
        candidate: name, "" where no figure could be had.
        baseline: name, "" if there was none.
        cost: name of the primary cost.
        headline: the cost ratio, None where no figure could be had.
        clauses: all of them.
        next: what to do.
        figures: contender -> what it showed before the jury.
        stress: stress -> contender -> what it showed under it.
        allowance: reality allowance used [-].
    """

    outcome: str
    sentence: str
    candidate: str
    baseline: str
    cost: str
    headline: Headline | None
    clauses: tuple[Clause, ...]
    next: Next
    figures: Mapping[str, Figures] = field(default_factory=dict)
    stress: Mapping[str, Mapping[str, Figures]] = field(default_factory=dict)
    allowance: float = REALITY_ALLOWANCE


def outcome_of(clauses: Sequence[Clause]) -> str:
    """Return "go", "no-go" or "undecided" from the states of the clauses."""
    state = {c.name: c.state for c in clauses}
    if state.get("evidence_validation") != "met" or "benefit" not in state:
        return "undecided"
    harmful = [n for n in state if n.startswith(("harm_", "stress_")) and state[n] == "failed"]
    if harmful or state["benefit"] == "failed":
        return "no-go"
    return "go" if all(s == "met" for s in state.values()) else "undecided"


def decide(
    *,
    acceptance: Acceptance,
    contenders: Sequence[Contender],
    roles: Roles,
    jury: Trials,
    stress: Mapping[str, Trials],
    practice: Trials | None,
    evidence: Evidence,
    ledger: Ledger,
    circumstances: Circumstances,
    rng: np.random.Generator,
    cost: int = 0,
    n_resamples: int = 2000,
    allowance: float = REALITY_ALLOWANCE,
    offset_floor: np.ndarray | None = None,
) -> Verdict:
    """Judge the candidate against the baseline, once.

    Args:
        acceptance: limits, fixed beforehand.
        contenders: all that stood before the jury; floors, which are none, may be among the
            trials all the same.
        roles: chosen on the selection plants.
        jury: trials on the jury plants.
        stress: trials on the stressed jury plants, of the same plants and streams.
        practice: trials on the practice plants, for optimism and disagreement; None if missing.
        evidence: what log and models can support.
        ledger: of fairness.
        circumstances: what the study had, for the advice.
        rng: for the resamples.
        cost: index of the primary cost.
        n_resamples: bootstrap resamples.
        allowance: reality allowance [-].
        offset_floor: see `harm_clauses`.

    Returns:
        the verdict; the same for the same arguments and state of the generator, whatever the
        order of the contenders.

    Raises:
        InputError: a role is empty or took no part, or there are too few plants or seeds.
    """
    if not roles.candidate or not roles.baseline:
        raise InputError("a candidate and a baseline are needed; use without_figures instead")
    sides = {n: "floor" for n in jury.controllers} | {c.name: c.side for c in contenders}
    level = acceptance.confidence
    resamples = draw_resamples(jury.n_plants, jury.scenario, n_resamples, rng)
    figures = figures_of(
        jury,
        sides,
        resamples,
        level,
        baseline=roles.baseline,
        cost=cost,
        least_gain=acceptance.least_gain,
        practice=practice,
    )
    name = jury.costs[cost]
    estimate = figures[roles.candidate].ratios[name]
    pooled = None
    if practice is not None and {roles.candidate, roles.baseline} <= {*practice.controllers}:
        pooled = pooled_plants(
            (jury.scores(roles.candidate, cost), practice.scores(roles.candidate, cost)),
            (jury.scores(roles.baseline, cost), practice.scores(roles.baseline, cost)),
            n_resamples,
            estimate.confidence,
            rng,
        )
    headline = headline_of(estimate, allowance, level, pooled)
    limit = 1 - acceptance.least_gain
    # the advice has to know the part of the plants that decides
    decided = Estimate(
        estimate.value,
        headline.seeds,
        headline.plants,
        estimate.both,
        estimate.confidence,
        estimate.spread,
    )
    clauses = (
        benefit(roles.candidate, roles.baseline, decided, headline.whole, limit, allowance),
        *harm_clauses(
            jury,
            roles,
            resamples,
            acceptance,
            cost=cost,
            allowance=allowance,
            offset_floor=offset_floor,
        ),
        *stress_clauses(stress, roles, resamples, acceptance, cost=cost),
        *log_clauses(evidence),
        *study_clauses(figures, roles, contenders, ledger, acceptance),
    )
    outcome = outcome_of(clauses)
    shown = figures[roles.candidate].violation
    return Verdict(
        outcome=outcome,
        sentence=_sentence(outcome, roles, name, headline, clauses),
        candidate=roles.candidate,
        baseline=roles.baseline,
        cost=name,
        headline=headline,
        clauses=clauses,
        next=advise(
            outcome,
            clauses,
            circumstances,
            candidate=roles.candidate,
            baseline=roles.baseline,
            confidence=level,
            violations=(shown.events, shown.episodes),
        ),
        figures=figures,
        stress={
            key: figures_of(t, sides, resamples, level, baseline=roles.baseline, cost=cost)
            for key, t in stress.items()
        },
        allowance=allowance,
    )


def without_figures(
    *,
    evidence: Evidence,
    circumstances: Circumstances,
    reason: str,
    cost: str,
    baseline: str = "",
    figures: Mapping[str, Figures] | None = None,
) -> Verdict:
    """Return the verdict of a study without a cost ratio: undecided, with the reason.

    Args:
        evidence: what log and models can support.
        circumstances: what the study had.
        reason: why there is no figure, a clause without a full stop, such as "no model passed
            validation".
        cost: name of the primary cost.
        baseline: name, if there was one.
        figures: of the contenders that stood before the jury all the same, where the other side
            is what is missing.
    """
    clauses = log_clauses(evidence)
    return Verdict(
        outcome="undecided",
        sentence=f"Undecided: {reason.rstrip('.')}, so no candidate could be judged.",
        candidate="",
        baseline=baseline,
        cost=cost,
        headline=None,
        clauses=clauses,
        next=advise(
            "undecided", clauses, circumstances, candidate="", baseline=baseline, confidence=0.95
        ),
        figures=figures or {},
    )


def _sentence(
    outcome: str, roles: Roles, cost: str, headline: Headline, clauses: Sequence[Clause]
) -> str:
    gain = phrases.change(headline.value, headline.whole)
    if outcome == "no-go" and headline.whole.high - headline.whole.low < 1e-9:
        return (
            f"No-go for {roles.candidate}: it does the same as {roles.baseline} in every episode, "
            "so there is nothing to gain from it."
        )
    stated = (
        f"simulated on models identified from the log and compared with {roles.baseline}, its "
        f"{cost} cost is {gain}"
    )
    if outcome == "go":
        return (
            f"Go: {roles.candidate} is fit for a supervised trial under the site's own procedures; "
            f"{stated}."
        )
    failed = [c for c in clauses if c.state == "failed"]
    if outcome == "no-go":
        if any(c.name == "benefit" for c in failed):
            return (
                f"No-go for {roles.candidate}: {stated}, which rules out the gain that would be "
                "worthwhile."
            )
        harm = next(c for c in failed if c.name.startswith(("harm_", "stress_")))
        return f"No-go for {roles.candidate}: {_lower(harm.sentence)}"
    evidence = [c for c in failed if c.name.startswith("evidence_")]
    waiting = evidence or [c for c in clauses if c.state == "open"]
    others = sum(c.state != "met" for c in clauses) - 1
    more = f" (and {others} more)" if others else ""
    return f"Undecided on {roles.candidate}: {_lower(waiting[0].sentence.rstrip('.'))}{more}."


def _lower(sentence: str) -> str:
    """Let a sentence go on after a colon; a name at its head stays as it is."""
    first = sentence.split(" ", 1)[0]
    if first in (
        "The",
        "None",
        "Every",
        "Small",
        "How",
        "With",
        "From",
        "Under",
        "Whether",
        "No",
        "Compared",
    ):
        return sentence[0].lower() + sentence[1:]
    return sentence
