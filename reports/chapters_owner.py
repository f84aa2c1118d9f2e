"""Chapters for those who act on the report: what would settle it, blanks, manifest, words."""

import math
from typing import Any

from idlearn.reports import wording
from idlearn.reports.blocks import Blank, Blanks, Block, Cell, Grid, Points, Section, Text
from idlearn.reports.runfiles import at, number_at, text_at
from idlearn.reports.view import View

BLANKS = (
    Blank("Plant, loop and scope of the change", "tags, present settings, who asked for it"),
    Blank("Hazards considered", "what could go wrong during a trial, and what prevents it", 4),
    Blank("Interlocks and trips", "confirmed unchanged and tested, by whom, when"),
    Blank("Operating procedures and training", "which ones change, who has been told"),
    Blank("Supervised trial", "stages, durations, who watches, when to fall back", 4),
    Blank("Return to the present controller", "how, by whom, within what time"),
    Blank("Review", "date, and the drift at which the study has to be done again"),
    Blank("Signatures", "operations, control engineering, process safety: name and date", 4),
)

WORDS = (
    (
        "cost",
        "What is to be kept low: the declared sum of deviations, moves and the like, averaged "
        "over an episode. Lower is better.",
    ),
    (
        "relative cost, cost ratio",
        "Mean cost of one controller over mean cost of the baseline, in "
        "the same episodes on the same plants. 0.9 is a tenth cheaper.",
    ),
    (
        "baseline",
        "The best of the tuned classical controllers. The candidate has to beat it, not "
        "merely what runs today.",
    ),
    (
        "jury plants",
        "Plausible plants, identified from a part of the log that neither tuning nor "
        "training has seen. Only they speak in the verdict.",
    ),
    ("practice plants", "Plausible plants from the first part of the log, to tune and train on."),
    (
        "allowance",
        "What has to be added to the interval because studies on models err on real "
        "plants by more than seeds and plants can show.",
    ),
    ("worst tenth", "Mean cost of the dearest tenth of the episodes."),
    ("violation", "An episode in which a limit at which the plant trips was passed."),
    ("travel", "How far the actuators move in all, per unit of time."),
    ("offset", "What is left between output and setpoint under a steady load."),
    ("support", "Share of the steps that stay inside the region the log covers."),
    (
        "optimism gap",
        "Cost on jury plants over cost on practice plants. Far above 1: it has "
        "learned its practice plants by heart.",
    ),
    (
        "sensitivity peak",
        "Largest amplification of disturbances at any frequency; 1.3 to 2 is "
        "customary. Only linear controllers have one.",
    ),
    ("plant-steps", "Simulated samples spent on tuning or training."),
    ("NRMSE, VAF", "Root mean square error over the spread of the data; variance accounted for."),
    ("coverage", "Share of held-out data inside the 95 % bands."),
)


def settle(view: View) -> Section:
    """Return the chapter on what would settle an open verdict."""
    step = at(view.run.verdict, "next") or {}
    blocks: list[Block] = [
        Text(wording.clean(text_at(step, "sentence")) or "The verdict names no next step.")
    ]
    hours, seeds = number_at(step, "log_hours"), number_at(step, "seeds")
    points = []
    if math.isfinite(hours):
        points.append(("Log:", f"about {wording.number(hours, hours)}{wording.THIN}h in all."))
    if math.isfinite(seeds):
        points.append(("Seeds:", f"about {wording.count(seeds)} per scenario."))
    if text_at(step, "excitation"):
        points.append(("Excitation:", wording.clean(text_at(step, "excitation"))))
    if points:
        blocks.append(Points(points))
    still = [
        wording.clean(text_at(c, "sentence"))
        for c in at(view.run.verdict, "clauses") or []
        if text_at(c, "state") == "open"
    ]
    if still:
        blocks.append(Text("Open clauses:"))
        blocks.append(Points([("", s) for s in still]))
    return Section("settle", "What would settle it", "The cheapest next step.", blocks)


def owner(_view: View) -> Section:
    """Return the blanks that only the owner can fill."""
    return Section(
        "owner",
        "To be filled by the owner",
        "What no program may fill in.",
        [
            Text(
                "Blank fields are blank on purpose. Nothing here has been filled in by the "
                "program, and the report is not complete without them."
            ),
            Blanks(BLANKS),
        ],
    )


def manifest(view: View) -> Section:
    """Return the manifest with its digests."""
    m, study = view.run.manifest, at(view.run.verdict, "study") or {}
    lines: list[tuple[str, Any]] = [
        ("study", text_at(study, "name")),
        ("command", text_at(m, "command")),
        ("effort", text_at(m, "effort")),
        ("seed", text_at(study, "seed")),
        ("idlearn", text_at(m, "version") or text_at(study, "version")),
        ("Python", text_at(m, "python")),
        ("packages", _pairs(at(m, "packages"))),
        ("system", text_at(m, "system")),
        ("threads", text_at(m, "threads") or _pairs(at(m, "threads"))),
        ("started", text_at(m, "started")),
        ("finished", text_at(m, "finished")),
        ("sheet, SHA-256", text_at(m, "sheet_sha256") or text_at(study, "sheet_sha256")),
        (
            "log, SHA-256",
            ", ".join(str(d) for d in at(m, "log_sha256") or at(study, "log_sha256") or []),
        ),
        ("acceptance, SHA-256", text_at(m, "acceptance", "sha256")),
        ("acceptance fixed at", text_at(m, "acceptance", "fixed_at")),
        ("acceptance limits", _pairs(at(m, "acceptance", "limits"))),
    ]
    rows = [[Cell(k), Cell(wording.clean(v))] for k, v in lines if v]
    blocks: list[Block] = [Grid("Manifest", ("item", "value"), rows)]
    if not m:
        blocks.insert(0, Text("This run has no manifest.json; what the verdict holds is shown."))
    scenarios = view.table("scenarios")
    if len(scenarios):
        blocks.append(
            Grid(
                "Scenarios",
                ("scenario", "length", "origin", "in words"),
                [
                    [
                        Cell(wording.clean(s["name"])),
                        Cell(
                            wording.duration(float(scenarios.number("duration_s")[i])), digits=True
                        ),
                        Cell(
                            "declared in the sheet"
                            if scenarios.flag("declared")[i]
                            else "derived from the log"
                        ),
                        Cell(wording.clean(s.get("sentence", ""))),
                    ]
                    for i, s in enumerate(scenarios.rows())
                ],
                "scenarios",
            )
        )
    return Section("manifest", "Manifest", "What it takes to repeat the study to the bit.", blocks)


def _pairs(found: Any) -> str:
    if not isinstance(found, dict):
        return ""
    told = [
        f"{k} ({_pairs(v)})"
        if isinstance(v, dict)
        else f"{k} {' to '.join(map(str, v)) if isinstance(v, list) else v}"
        for k, v in found.items()
        if v not in (None, "")
    ]
    return ", ".join(told)


def words(_view: View) -> Section:
    """Return what the terms mean."""
    return Section(
        "words",
        "Words",
        "What the terms of this report mean.",
        [Points([(f"{k}:", v) for k, v in WORDS])],
    )
