"""The whole study, stage by stage; every stage can be resumed.

log -> models -> contenders -> trials -> verdict -> report. What a stage needs from an earlier one
is read from the run folder or recomputed from the log, which is fast and deterministic.
"""

import os
from collections.abc import Sequence
from dataclasses import asdict, dataclass
from pathlib import Path
from typing import Any

from idlearn import __version__
from idlearn.baselines import build_incumbent
from idlearn.comparison import (
    Evidence,
    Verdict,
    without_figures,
)
from idlearn.envs import Contender
from idlearn.identification import EnsembleSet, build_ensembles, support_region
from idlearn.logs import Finding, PlantLog, Signal, audit_log, read_log, require_information
from idlearn.models import save_model
from idlearn.reports import build_report
from idlearn.study.effort import Effort, effort_of
from idlearn.study.judging import (
    circumstances,
    floor_findings,
    hear,
    judge,
    write_scenarios,
)
from idlearn.study.modeltables import free_run_table, model_table, residual_table
from idlearn.study.progress import Progress, Silent
from idlearn.study.record import make_document, make_manifest, now
from idlearn.study.setting import (
    Setting,
    check_names,
    make_assignment,
    make_setting,
    with_limits,
)
from idlearn.study.sheet import Sheet, read_sheet
from idlearn.study.store import RunFolder
from idlearn.study.tables import log_table, signal_table, step_table
from idlearn.study.training import keep_contender, load_contender, make_all

STEPS_SHOWN = 120


@dataclass(frozen=True)
class FinishedRun:
    """A study that came to its end.

    Attributes:
        folder: the run folder.
        verdict: the document of verdict.json.
    """

    folder: Path
    verdict: dict[str, Any]


def run_study(
    sheet: str | Path,
    *,
    out: str | Path | None = None,
    effort: str | None = None,
    workers: int | None = None,
    progress: Progress | None = None,
) -> FinishedRun:
    """Run a study from its sheet, or go on with one that was stopped.

    Args:
        sheet: path of the study sheet.
        out: run folder; None takes `run` beside the sheet.
        effort: in place of the sheet's.
        workers: processes at once; None takes the number of cores. No number depends on it.
        progress: told about stages and steps.

    Raises:
        InputError: sheet, log or run folder are wrong.
        UninformativeError: the log cannot support any model.
    """
    progress = progress or Silent()
    declared = read_sheet(sheet)
    level = effort_of(effort or declared.study.effort)
    progress.stage("Reading and auditing the log", 1)
    log = read_log(declared.path)
    check_names(declared, log)
    require_information(log)
    findings = audit_log(log)
    folder = open_folder(declared, log, level, out)
    progress.step()
    started = _fix_acceptance(folder, declared)
    models = _models(folder, declared, log, level, progress)
    setting = make_setting(declared, log, models.nominal)
    findings = (*findings, *setting.findings, *models.findings, *_left_out(declared))
    write_scenarios(folder, setting)
    if models.passed:
        contenders, verdict, findings = _judged(
            folder,
            declared,
            setting,
            models,
            level,
            findings,
            workers or os.cpu_count() or 1,
            progress,
        )
    else:
        contenders = []
        verdict = without_figures(
            evidence=_evidence(models, findings),
            circumstances=circumstances(log, models.nominal, level),
            reason=_why_not(models),
            cost=setting.costs[setting.primary].name,
        )
    progress.stage("Writing the report", 1)
    document = make_document(declared, log, models, contenders, verdict, findings)
    folder.write_json("manifest.json", make_manifest(declared, log, level, setting, started))
    folder.write_json("verdict.json", document)
    build_report(folder.path)
    progress.step()
    return FinishedRun(folder.path, document)


def open_folder(sheet: Sheet, log: PlantLog, effort: Effort, out: str | Path | None) -> RunFolder:
    """Open the run folder of a study; refuse one that holds another study."""
    identity = {
        "sheet_sha256": sheet.sha256,
        "log_sha256": list(log.digests),
        "effort": effort.name,
        "version": __version__,
    }
    return RunFolder.open(sheet.path.parent / "run" if out is None else out, identity)


def _why_not(models: EnsembleSet) -> str:
    """Say why the chosen models did not pass, the first reason of the first that failed."""
    for record in models.records:
        if record.chosen and record.validation.reasons:
            return (
                f"no model passed validation ({record.part} part: {record.validation.reasons[0]})"
            )
    return "no model passed validation"


def _left_out(sheet: Sheet) -> list[Finding]:
    return [
        Finding(
            "candidate left out",
            "care",
            f"The sheet names the candidate {name!r}, which this version does not have; it was "
            "left out.",
        )
        for name in sheet.candidates.left_out
    ]


def _fix_acceptance(folder: RunFolder, sheet: Sheet) -> dict[str, Any]:
    """Write down limits, their digest and the time before any result exists."""
    if not folder.done("acceptance"):
        folder.finish(
            "acceptance",
            {
                "sha256": sheet.acceptance.digest(),
                "fixed_at": now(),
                "limits": asdict(sheet.acceptance),
            },
        )
    return dict(folder.facts("acceptance"))


def _models(
    folder: RunFolder, sheet: Sheet, log: PlantLog, effort: Effort, progress: Progress
) -> EnsembleSet:
    progress.stage("Identifying models", 2)
    seed = sheet.study.seed
    models = build_ensembles(
        log,
        n_practice=effort.practice,
        n_selection=effort.selection,
        n_jury=effort.jury,
        seed=seed,
        effort=effort.name,
    )
    progress.step("plants")
    if not folder.done("models"):
        write_models(folder, models, log, seed)
        folder.finish("models", {"passed": models.passed})
    progress.step("tables")
    return models


def write_models(folder: RunFolder, models: EnsembleSet, log: PlantLog, seed: int) -> None:
    """Save every model and ensemble, and the tables about them."""
    limited, _ = with_limits(log)
    extra = {"signals": [_signal(s) for s in limited.signals]}
    for record in models.records:
        save_model(record.linear, folder.file(f"models/{record.name}.npz"), extra)
    for name in ("practice", "selection", "jury"):
        save_model(getattr(models, name), folder.file(f"models/{name}.npz"), extra)
    folder.write_table("signals", signal_table(log.signals))
    folder.write_table("log", log_table(log))
    folder.write_table("models", model_table(models.records))
    folder.write_table("free_run", free_run_table(models, seed))
    folder.write_table("residuals", residual_table(models, log))
    parts = {"practice": models.practice, "jury": models.jury}
    folder.write_table("step_response", step_table(parts, log, STEPS_SHOWN))
    for part, found in models.identified.items():
        folder.write_table(f"structures_{part}", found.tried)


def _signal(signal: Signal) -> dict[str, Any]:
    return asdict(signal)


def _judged(
    folder: RunFolder,
    sheet: Sheet,
    setting: Setting,
    models: EnsembleSet,
    effort: Effort,
    findings: tuple[Finding, ...],
    workers: int,
    progress: Progress,
) -> tuple[list[Contender], Verdict, tuple[Finding, ...]]:
    assignment = make_assignment(setting, models, effort, sheet.study.seed)
    notes = {
        "study": sheet.study.name,
        "signals": [_signal(s) for s in setting.log.signals],
        "columns": "every output, one setpoint per controlled output, measured disturbances, "
        "previous applied inputs",
    }
    contenders = make_all(
        folder,
        assignment,
        sheet.candidates.classical,
        tuple(n for n in sheet.candidates.learned if n not in sheet.candidates.left_out),
        notes=notes,
        workers=workers,
        progress=progress,
    )
    if sheet.incumbent is not None:
        if not folder.done("contender-incumbent"):
            built = build_incumbent(
                sheet.incumbent,
                setting.layout,
                setting.loop.actuator,
                setting.log.sample_time_s,
                setting.loop.latency_samples,
                sheet.path.parent,
            )
            keep_contender(folder, built, notes)
        contenders = [load_contender(folder, "incumbent"), *contenders]
    inside = support_region(setting.log).inside
    hearing = hear(folder, setting, assignment, models, contenders, inside, sheet, effort, progress)
    findings = (*findings, *floor_findings(hearing, setting, sheet))
    verdict = judge(
        folder,
        setting,
        assignment,
        hearing,
        contenders,
        _evidence(models, findings),
        models.nominal,
        sheet,
        effort,
    )
    return contenders, verdict, findings


def _evidence(models: EnsembleSet, findings: Sequence[Finding]) -> Evidence:
    """Sum up what log and models can support; validation has to hold in both parts."""
    chosen = [r for r in models.records if r.chosen]
    reasons = tuple(reason for r in chosen for reason in r.validation.reasons)
    jury = [r for r in models.records if r.part == "jury"]
    return Evidence(
        stops=tuple(
            f.sentence
            for f in findings
            if f.severity == "stop" and not f.finding.startswith("validation ")
        ),
        models_tried=len(jury),
        models_passed=len(jury) if models.passed else 0,
        reasons=reasons,
        coverage=min((r.coverage95 for r in jury), default=float("nan")),
    )


def audit_sheet(sheet: str | Path) -> list[dict[str, str]]:
    """Read and audit the log of a sheet.

    Returns:
        findings with the keys finding, severity, sentence.

    Raises:
        InputError: sheet or log are wrong.
        UninformativeError: the log cannot support any model.
    """
    declared = read_sheet(sheet)
    log = read_log(declared.path)
    require_information(log)
    _, assumed = with_limits(log)
    return [vars(f) for f in (*audit_log(log), *assumed)]


def identify_sheet(
    sheet: str | Path, out: str | Path | None = None, progress: Progress | None = None
) -> dict[str, Any]:
    """Identify, validate and save the models of a sheet's log.

    Returns:
        models (name, sentence, passed, reasons, file) and audit findings.
    """
    progress = progress or Silent()
    declared = read_sheet(sheet)
    level = effort_of(declared.study.effort)
    log = read_log(declared.path)
    require_information(log)
    findings = audit_log(log)
    folder = open_folder(declared, log, level, out)
    models = _models(folder, declared, log, level, progress)
    shown = []
    for r in models.records:
        v = r.validation
        shown.append(
            {
                "name": r.name,
                "passed": v.passed,
                "reasons": "; ".join(v.reasons),
                "file": str(folder.file(f"models/{r.name}.npz")),
                "sentence": (
                    f"{r.fit.model.label}, free-run error {max(v.nrmse):.2f} of the spread, "
                    f"{v.k}-step error {max(v.k_step):.2f} against {max(v.naive):.2f} for the "
                    f"last value, bands cover {100 * r.coverage95:.0f} %."
                ),
            }
        )
    return {
        "folder": str(folder.path),
        "models": shown,
        "audit": [vars(f) for f in (*findings, *models.findings)],
    }


def write_report(folder: str | Path) -> Path:
    """Write the report again from a run folder.

    Raises:
        RunFolderError: the folder holds no finished run.
    """
    return build_report(Path(folder))
