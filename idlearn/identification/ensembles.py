"""Practice, selection and jury plants from the first and the last part of a log."""

from collections.abc import Sequence
from dataclasses import dataclass, replace

from idlearn.errors import TooShortError
from idlearn.identification.bands import COVERED, stable_draw, widening
from idlearn.identification.choice import Identified, identify, structure_of
from idlearn.identification.result import FitResult, Status
from idlearn.identification.validation import Validation
from idlearn.logs import Finding, PlantLog
from idlearn.models import ArxModel, Ensemble, InnovationsModel
from idlearn.seeding import stream

FIRST = 0.6  # share of the log for practice and selection
SHORT = 400  # valid samples from which on a part stands on its own


@dataclass(frozen=True, eq=False)
class ModelRecord:
    """One identified structure of one part of the log.

    Attributes:
        name: unique, such as "practice-1".
        part: "practice" or "jury".
        fit: the fit on the whole part.
        linear: innovations form, without direct feed-through.
        validation: on the held-out end of the part; None for alternatives that passed unseen.
        widening: factor on the parameter spread.
        louder: factor on the innovations' standard deviation.
        coverage95: share of held-out data inside the bands at that factor.
        chosen: whether it is the part's choice.
    """

    name: str
    part: str
    fit: FitResult
    linear: InnovationsModel
    validation: Validation
    widening: float
    louder: float
    coverage95: float
    chosen: bool


@dataclass(frozen=True, eq=False)
class EnsembleSet:
    """All plausible plants of a study.

    Attributes:
        practice: for tuning and training.
        selection: for choosing.
        jury: for judging, once.
        nominal: the practice model that rules and designs start from.
        records: every structure that took part.
        identified: part -> outcome of its identification.
        findings: what a reader should know.
        passed: whether the chosen models of both parts passed validation.
    """

    practice: Ensemble
    selection: Ensemble
    jury: Ensemble
    nominal: InnovationsModel
    records: tuple[ModelRecord, ...]
    identified: dict[str, Identified]
    findings: tuple[Finding, ...]
    passed: bool


def build_ensembles(
    log: PlantLog,
    *,
    n_practice: int,
    n_selection: int,
    n_jury: int,
    seed: int,
    effort: str = "standard",
) -> EnsembleSet:
    """Identify both parts of a log and draw the plants of a study.

    Args:
        log: the whole log.
        n_practice: practice plants.
        n_selection: selection plants.
        n_jury: jury plants.
        seed: the study's seed.
        effort: see `identify`.

    Raises:
        TooShortError: a part is too short to identify anything.
    """
    findings: list[Finding] = []
    first, last = log.split((FIRST, 1 - FIRST))
    short = min(first.n_valid, last.n_valid) < SHORT
    if short:
        findings.append(
            Finding(
                "short log",
                "care",
                f"The log has {log.n_valid} valid samples, too few to give practice and jury "
                f"plants {SHORT} of their own each: the jury's models come from blocks of the "
                "whole log, and the evidence is weaker.",
            )
        )
        parts = {"practice": log if first.n_valid < SHORT // 2 else first, "jury": log}
    else:
        parts = {"practice": first, "jury": last}
    records: list[ModelRecord] = []
    identified = {}
    for part, data in parts.items():
        found = identify(data, effort, seed)
        identified[part] = found
        records += _records(part, data, found, seed)
        findings += _part_findings(part, found, [r for r in records if r.part == part])
    practice_of = [r for r in records if r.part == "practice"]
    jury_of = [r for r in records if r.part == "jury"]
    practice = _draw(practice_of, n_practice, seed, "practice")
    selection = _draw(practice_of, n_selection, seed, "selection")
    jury = _draw(jury_of, n_jury, seed, "jury", blocks=_blocks(parts["jury"], jury_of, seed, short))
    dropped = practice.unstable_dropped + selection.unstable_dropped + jury.unstable_dropped
    if dropped:
        findings.append(
            Finding(
                "unstable draws",
                "note",
                f"{dropped} draws of plausible plants were unstable although the estimate is "
                "stable; they were drawn again.",
            )
        )
    return EnsembleSet(
        practice=practice,
        selection=selection,
        jury=jury,
        nominal=practice_of[0].linear,
        records=tuple(records),
        identified=identified,
        findings=tuple(findings),
        passed=all(found.validation.passed for found in identified.values()),
    )


def _records(part: str, data: PlantLog, found: Identified, seed: int) -> list[ModelRecord]:
    records = []
    for i, fit in enumerate((found.chosen, *found.alternatives)):
        model: ArxModel = fit.model
        (spread, louder), coverage = widening(model, found, stream(seed, "bands", part, i))
        validation = found.validation
        records.append(
            ModelRecord(
                name=f"{part}-{i + 1}",
                part=part,
                fit=fit,
                linear=model.linearise().without_feedthrough(),
                validation=replace(validation, coverage95=coverage) if i == 0 else validation,
                widening=spread,
                louder=louder,
                coverage95=coverage,
                chosen=i == 0,
            )
        )
    return records


def _draw(
    records: Sequence[ModelRecord],
    n: int,
    seed: int,
    purpose: str,
    blocks: Sequence[tuple[InnovationsModel, str]] = (),
) -> Ensemble:
    """Draw n plants, in turn from every structure and every block."""
    sources = len(records) + (1 if blocks else 0)
    models, labels, dropped = [], [], 0
    for i in range(n):
        which = i % sources
        if which == len(records):
            model, label = blocks[(i // sources) % len(blocks)]
        else:
            record = records[which]
            rng = stream(seed, purpose, "plant", i)
            drawn, extra = stable_draw(record.fit.model, record.widening, record.louder, rng)
            model = drawn.without_feedthrough()
            label = f"{record.fit.model.label} {purpose}"
            dropped += extra
        models.append(model)
        labels.append(label)
    return Ensemble.from_models(models, labels, dropped)


def _blocks(
    data: PlantLog, records: Sequence[ModelRecord], seed: int, short: bool
) -> list[tuple[InnovationsModel, str]]:
    """Fit the chosen structure to blocks of the jury's part: plants change over time."""
    model: ArxModel = records[0].fit.model
    structure = structure_of(model)
    limit = max(1.0, model.linearise().spectral_radius()) + 1e-6
    rng = stream(seed, "blocks")
    n = data.n_samples
    share = 0.6 if short else 0.5
    found = []
    for i in range(12 if short else 6):
        first = int(rng.integers(0, max(1, n - int(share * n))))
        try:
            fit = structure.fit(data.rows(first, first + int(share * n)))
        except TooShortError:
            continue
        if fit.status is Status.OK and fit.model.linearise().spectral_radius() <= limit:
            found.append((fit.model.linearise().without_feedthrough(), f"block {i + 1}"))
    return found


def _part_findings(part: str, found: Identified, records: Sequence[ModelRecord]) -> list[Finding]:
    findings = []
    v = found.validation
    for reason in v.reasons:
        findings.append(
            Finding(f"validation {part}", "stop", f"The {part} model is refused: {reason}.")
        )
    for remark in v.remarks:
        findings.append(Finding(f"validation {part}", "note", f"{part.capitalize()}: {remark}."))
    if found.chosen.status is not Status.OK:
        findings.append(Finding(f"fit {part}", "stop", found.chosen.advice))
    if found.at_bound:
        findings.append(
            Finding(
                f"search bound {part}",
                "care",
                f"The {part} model lies at the end of the range of orders or dead times that was "
                "searched; the plant may be slower or later than it says.",
            )
        )
    if 0 in found.chosen.model.n_k:
        findings.append(
            Finding(
                f"no dead time {part}",
                "care",
                "The record pairs an input with the output that it has already moved (dead time "
                "0): stamps are the ends of intervals, or y was read after u was written. As a "
                "plant the model is re-indexed by one sample.",
            )
        )
    wide, loud = max(r.widening for r in records), max(r.louder for r in records)
    if wide > 1:
        low = min(r.coverage95 for r in records)
        noise = f" and their noise raised {loud:g} times" if loud > 1 else ""
        findings.append(
            Finding(
                f"widening {part}",
                "care" if low < COVERED or wide >= 3 else "note",
                f"The spread of the {part} plants was widened up to {wide:g} times{noise}; their "
                f"95 % bands then cover at least {100 * low:.0f} % of the held-out data.",
            )
        )
    return findings
