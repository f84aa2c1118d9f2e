"""verdict.json: the verdict as outside code reads it."""

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any

from idlearn.comparison.contract import FORMAT
from idlearn.comparison.figures import Figures
from idlearn.comparison.verdict import Verdict
from idlearn.envs import Contender
from idlearn.logs import Finding


@dataclass(frozen=True)
class StudyFacts:
    """What identifies the study.

    Attributes:
        name: of the study.
        seed: the study's seed.
        sheet_sha256: digest of the sheet.
        log_sha256: digest of each log file.
        version: of the program.
    """

    name: str
    seed: int
    sheet_sha256: str
    log_sha256: tuple[str, ...]
    version: str


@dataclass(frozen=True)
class ModelFacts:
    """What is said about one model.

    Attributes:
        name: of the model.
        family: such as "arx".
        orders: name of each order -> value.
        nrmse: of the free run on held-out data [-].
        vaf: variance accounted for by the same, as validation gives it.
        coverage95: share of held-out data inside the 95 % bands [-].
        passed: whether it passed validation.
        file: relative to the run folder.
    """

    name: str
    family: str
    orders: Mapping[str, Any]
    nrmse: float
    vaf: float
    coverage95: float
    passed: bool
    file: str


@dataclass(frozen=True)
class Extras:
    """Facts beside the verdict.

    Attributes:
        models: all that were tried.
        audit: all findings.
        files: contender -> file of the controller, relative to the run folder.
    """

    models: Sequence[ModelFacts] = ()
    audit: Sequence[Finding] = ()
    files: Mapping[str, str] = field(default_factory=dict)


def verdict_document(
    verdict: Verdict, study: StudyFacts, contenders: Sequence[Contender], extras: Extras
) -> dict[str, Any]:
    """Return verdict.json: only texts, numbers, booleans, lists, dicts and null.

    Controllers stand in the order incumbent, classical, learned, floor, each side by name, so
    that the document does not depend on the order in which they were run. What is no finite
    number is null.
    """
    head = verdict.headline
    of = {c.name: c for c in contenders}
    sides = ("incumbent", "classical", "learned", "floor")
    ordered = sorted(verdict.figures.values(), key=lambda f: (sides.index(f.side), f.name))
    document = {
        "format": FORMAT,
        "study": {
            "name": study.name,
            "seed": study.seed,
            "sheet_sha256": study.sheet_sha256,
            "log_sha256": list(study.log_sha256),
            "version": study.version,
        },
        "verdict": verdict.outcome,
        "sentence": verdict.sentence,
        "candidate": verdict.candidate,
        "baseline": verdict.baseline,
        "cost": verdict.cost,
        "ratio": None
        if head is None
        else {
            "estimate": head.value,
            "low": head.whole.low,
            "high": head.whole.high,
            "confidence": head.confidence,
        },
        "clauses": [
            {
                "name": c.name,
                "state": c.state,
                "figure": c.figure,
                "limit": c.limit,
                "sentence": c.sentence,
            }
            for c in verdict.clauses
        ],
        "controllers": [
            _controller(f, verdict, of.get(f.name), extras.files.get(f.name)) for f in ordered
        ],
        "models": [
            {
                "name": m.name,
                "family": m.family,
                "orders": dict(m.orders),
                "free_run": {"nrmse": m.nrmse, "vaf": m.vaf},
                "coverage95": m.coverage95,
                "passed": m.passed,
                "file": m.file,
            }
            for m in extras.models
        ],
        "audit": [
            {"finding": a.finding, "severity": a.severity, "sentence": a.sentence}
            for a in extras.audit
        ],
        "next": {
            "sentence": verdict.next.sentence,
            "log_hours": verdict.next.log_hours,
            "excitation": verdict.next.excitation,
            "seeds": verdict.next.seeds,
        },
    }
    plain = _plain(document)
    assert isinstance(plain, dict)
    return plain


def _controller(
    f: Figures, verdict: Verdict, contender: Contender | None, file: str | None
) -> dict[str, Any]:
    rate = f.violation
    return {
        "name": f.name,
        "kind": f.side,
        "file": file if f.side != "floor" else None,
        "costs": {
            c: {"mean": e.value, "low": e.both.low, "high": e.both.high} for c, e in f.means.items()
        },
        "ratio_to_baseline": {c: ratio_entry(f, verdict, c) for c in f.ratios},
        "violation_rate": {
            "estimate": rate.value,
            "low": rate.low,
            "high": rate.high,
            "violations": rate.events,
            "episodes": rate.episodes,
        },
        "worst_tenth": f.worst_tenth,
        "travel": f.travel,
        "support": f.support,
        "optimism_gap": f.optimism_gap,
        "training": {
            "runs": len(contender.runs) if contender else 0,
            "plant_steps": contender.plant_steps if contender else 0,
            "seconds": contender.seconds if contender else 0.0,
        },
    }


def ratio_entry(f: Figures, verdict: Verdict, cost: str) -> dict[str, float]:
    """Return a contender's ratio to the baseline with the interval that decides.

    The candidate's primary ratio is the headline's; the others carry the allowance as well, and
    the baseline to itself is 1.
    """
    estimate = f.ratios[cost]
    whole = estimate.both.widened(0.0 if f.name == verdict.baseline else verdict.allowance)
    if verdict.headline is not None and (f.name, cost) == (verdict.candidate, verdict.cost):
        whole = verdict.headline.whole
    return {"estimate": estimate.value, "low": whole.low, "high": whole.high}


def _plain(value: Any) -> Any:
    if isinstance(value, Mapping):
        return {str(k): _plain(v) for k, v in value.items()}
    if isinstance(value, list | tuple):
        return [_plain(v) for v in value]
    if hasattr(value, "tolist"):  # numpy scalars and arrays
        return _plain(value.tolist())
    if isinstance(value, float) and not math.isfinite(value):
        return None
    return value
