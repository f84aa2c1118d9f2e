"""The record of a run: verdict.json and manifest.json."""

import os
import platform
import sys
from collections.abc import Sequence
from datetime import UTC, datetime
from importlib import metadata
from typing import Any

from idlearn import __version__
from idlearn.comparison import Extras, ModelFacts, StudyFacts, Verdict, verdict_document
from idlearn.cost import Cost
from idlearn.envs import Contender
from idlearn.identification import EnsembleSet
from idlearn.logs import Finding, PlantLog
from idlearn.study.effort import Effort
from idlearn.study.modeltables import orders_of
from idlearn.study.setting import Setting
from idlearn.study.sheet import Sheet


def make_document(
    sheet: Sheet,
    log: PlantLog,
    models: EnsembleSet,
    contenders: Sequence[Contender],
    verdict: Verdict,
    findings: Sequence[Finding],
) -> dict[str, Any]:
    """Return the document of verdict.json."""
    facts = [
        ModelFacts(
            name=r.name,
            family=r.fit.model.family,
            orders=orders_of(r),
            nrmse=max(r.validation.nrmse),
            vaf=min(r.validation.vaf),
            coverage95=r.coverage95,
            passed=r.validation.passed,
            file=f"models/{r.name}.npz",
        )
        for r in models.records
    ]
    study = StudyFacts(
        sheet.study.name, sheet.study.seed, sheet.sha256, tuple(log.digests), __version__
    )
    files = {c.name: f"controllers/{c.name}.json" for c in contenders}
    return verdict_document(
        verdict, study, contenders, Extras(models=facts, audit=list(findings), files=files)
    )


def make_manifest(
    sheet: Sheet, log: PlantLog, effort: Effort, setting: Setting, acceptance: dict[str, Any]
) -> dict[str, Any]:
    """Return what it takes to repeat the study to the last bit."""
    names = ("numpy", "scipy", "pandas", "pyarrow", "cmaes", "daqp", "matplotlib", "scikit-learn")
    packages = {}
    for name in names:
        try:
            packages[name] = metadata.version(name)
        except metadata.PackageNotFoundError:
            packages[name] = "missing"
    cost = setting.costs[setting.primary]
    return {
        "format": "idlearn-manifest/1",
        "version": __version__,
        "python": platform.python_version(),
        "system": platform.platform(terse=True),
        "packages": packages,
        "threads": {k: os.environ.get(k, "") for k in ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS")},
        "seed": sheet.study.seed,
        "effort": effort.name,
        "started": acceptance["fixed_at"],
        "finished": now(),
        "sheet": sheet.path.name,
        "sheet_sha256": sheet.sha256,
        "log_sha256": list(log.digests),
        "acceptance": acceptance,
        "command": f"idlearn run {sheet.path.name} --effort {effort.name}",
        "incumbent": sheet.incumbent.kind if sheet.incumbent else "not given",
        "log": {
            "hours_used": log.n_valid * log.sample_time_s / 3600,
            "rows": log.n_samples,
            "start": log.start,
            "sample_time_s": log.sample_time_s,
        },
        "cost": {"name": cost.name, "sentence": cost_in_words(cost, log)},
        "byte_order": sys.byteorder,
    }


def cost_in_words(cost: Cost, log: PlantLog) -> str:
    """Return what a cost weighs, in one sentence with units."""
    units = {s.name: s.unit for s in log.signals}
    parts = []
    for t in cost.terms:
        what = {
            "tracking": f"error of {t.signal} against its setpoint",
            "level": f"distance of {t.signal} from {t.target:g}",
            "move": f"move of {t.signal} in one sample",
            "energy": f"distance of {t.signal} from {t.reference:g}",
            "outside": f"distance of {t.signal} beyond {t.low:g} to {t.high:g}",
            "trip": "a trip",
        }[t.kind]
        scale = "" if t.kind == "trip" else f" per {t.scale:g} {units.get(t.signal, '')}".rstrip()
        parts.append(f"{t.weight:g} times the {t.shape} {what}{scale}")
    return "; ".join(parts)


def now() -> str:
    """Return the present time, ISO 8601, UTC."""
    return datetime.now(UTC).isoformat(timespec="seconds")
