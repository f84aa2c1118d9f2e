"""The clauses of evidence: whether log, models and study can carry a conclusion at all."""

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass

from idlearn.comparison import phrases
from idlearn.comparison.acceptance import Acceptance
from idlearn.comparison.clauses import Clause
from idlearn.comparison.figures import Figures, Roles
from idlearn.comparison.ledger import Ledger
from idlearn.envs import Contender

LEAST_COVERAGE = 0.95  # share of held-out data that 95 % bands have to hold
# The two sides' costs may rise from practice to jury plants for reasons common to both, such as a
# noisier last part of the log. A candidate whose cost rises so much more than the baseline's has
# learned its practice plants.
MOST_OPTIMISM = 1.15


@dataclass(frozen=True)
class Evidence:
    """What the log and its models can support.

    Attributes:
        stops: sentences of the audit findings of severity "stop".
        models_tried: models put to validation.
        models_passed: models that passed it on the jury's part of the log.
        reasons: why the others did not.
        coverage: share of held-out data inside the 95 % bands, NaN if unknown [-].
    """

    stops: tuple[str, ...] = ()
    models_tried: int = 0
    models_passed: int = 0
    reasons: tuple[str, ...] = ()
    coverage: float = math.nan


def log_clauses(evidence: Evidence) -> tuple[Clause, ...]:
    """Return the clauses of the log and its models: audit, validation, coverage."""
    stops = len(evidence.stops)
    passed, tried = evidence.models_passed, evidence.models_tried
    why = f" ({evidence.reasons[0].rstrip('.')})" if evidence.reasons else ""
    found = not math.isnan(evidence.coverage)
    covered = found and evidence.coverage >= LEAST_COVERAGE
    return (
        Clause(
            "evidence_audit",
            "failed" if stops else "met",
            float(stops),
            0.0,
            f"The audit of the log says stop: {evidence.stops[0].rstrip('.')}."
            if stops
            else "The audit of the log found nothing that forbids the study.",
        ),
        Clause(
            "evidence_validation",
            "met" if passed else "failed",
            float(passed),
            1.0,
            f"{passed} of {tried} models passed validation on held-out data."
            if passed
            else f"None of {tried} models passed validation on held-out data{why}.",
        ),
        Clause(
            "evidence_coverage",
            "met" if covered else ("failed" if found else "open"),
            evidence.coverage,
            LEAST_COVERAGE,
            f"The 95 % bands of the models hold {phrases.share(evidence.coverage)} of the "
            f"held-out data; {phrases.share(LEAST_COVERAGE)} is asked for."
            if found
            else "How much of the held-out data the models' bands hold could not be told.",
        ),
    )


def study_clauses(
    figures: Mapping[str, Figures],
    roles: Roles,
    contenders: Sequence[Contender],
    ledger: Ledger,
    acceptance: Acceptance,
) -> tuple[Clause, ...]:
    """Return the clauses of the study: support, optimism, baseline at its optimum, ledger."""
    sides = (figures[roles.candidate], figures[roles.baseline])
    return (
        _support(sides, acceptance.least_support),
        _optimism(*sides),
        _baseline(roles, next(c for c in contenders if c.name == roles.baseline)),
        Clause(
            "evidence_ledger",
            "met" if ledger.equal else "failed",
            float(len(ledger.unequal)),
            0.0,
            "Every contender had the same task, means and budget."
            if ledger.equal
            else f"The contenders were not treated alike in {phrases.listed(ledger.unequal)}.",
        ),
    )


def _support(sides: tuple[Figures, Figures], limit: float) -> Clause:
    if any(math.isnan(f.support) for f in sides):
        return Clause(
            "evidence_support",
            "open",
            math.nan,
            limit,
            "How much of the contenders' way lies inside the region of the log was not measured.",
        )
    least = min(sides, key=lambda f: f.support)
    fine = least.support >= limit
    return Clause(
        "evidence_support",
        "met" if fine else "failed",
        least.support,
        limit,
        f"{least.name} is inside the region that the log covers on {phrases.share(least.support)} "
        f"of its steps; {phrases.share(limit)} is asked of candidate and baseline.",
    )


def _optimism(candidate: Figures, baseline: Figures) -> Clause:
    gap = candidate.optimism_gap / baseline.optimism_gap
    if not math.isfinite(gap):
        return Clause(
            "evidence_optimism",
            "open",
            math.nan,
            MOST_OPTIMISM,
            "The costs on the practice plants are not known, so optimism could not be told.",
        )
    return Clause(
        "evidence_optimism",
        "met" if gap <= MOST_OPTIMISM else "failed",
        gap,
        MOST_OPTIMISM,
        f"From practice to jury plants the cost of {candidate.name} changes by a factor of "
        f"{candidate.optimism_gap:.2f}, that of {baseline.name} by {baseline.optimism_gap:.2f}; "
        f"the first may be at most {MOST_OPTIMISM:g} times the second.",
    )


def _baseline(roles: Roles, baseline: Contender) -> Clause:
    name, limit = "evidence_baseline", 1.0
    if roles.better_incumbent:
        return Clause(
            name,
            "failed",
            0.0,
            limit,
            f"The incumbent {roles.better_incumbent} did better on the selection plants than the "
            f"best tuned classical controller {baseline.name}, so the baseline is too weak.",
        )
    if baseline.at_optimum is None:
        return Clause(
            name,
            "open",
            math.nan,
            limit,
            f"Whether {baseline.name} is tuned to its optimum was not tested.",
        )
    if not baseline.at_optimum:
        return Clause(
            name,
            "failed",
            0.0,
            limit,
            f"Small changes of its parameters make {baseline.name} better, so the baseline is "
            "not at its optimum.",
        )
    return Clause(
        name,
        "met",
        1.0,
        limit,
        f"No small change of its parameters makes {baseline.name} better.",
    )
