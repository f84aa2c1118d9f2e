"""The jury: every contender once, on plants that nobody was tuned on, then the verdict."""

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from idlearn.comparison import (
    REALITY_ALLOWANCE,
    Circumstances,
    Evidence,
    Floor,
    Roles,
    Trials,
    Verdict,
    choose_roles,
    climb,
    contenders_table,
    decide,
    draw_resamples,
    keep_ledger,
    ladder_table,
    paired_table,
    run_floor,
    run_trials,
    scenario_table,
    settling_samples,
    stress_table,
)
from idlearn.comparison.floors import FLOOR, below_floor
from idlearn.comparison.trials import stress_grounds
from idlearn.envs import Assignment, Contender, Inside, TrialGround
from idlearn.identification import EnsembleSet
from idlearn.logs import Finding, PlantLog
from idlearn.models import InnovationsModel
from idlearn.seeding import stream
from idlearn.study.effort import Effort
from idlearn.study.progress import Progress
from idlearn.study.setting import Setting, movement
from idlearn.study.sheet import Sheet
from idlearn.study.store import RunFolder
from idlearn.study.tables import closed_loop_table, learning_table

IDLE_SHARE = 0.05  # of an output's usual movement: an offset below it is of no account


@dataclass(frozen=True)
class Hearing:
    """All trials of a study.

    Attributes:
        ground: the jury's plants and streams.
        selection: trials on the selection plants.
        practice: trials on the practice plants.
        jury: trials on the jury plants, with the floor's where there is one.
        stress: trials on the stressed jury plants.
        floor: the floor.
    """

    ground: TrialGround
    selection: Trials
    practice: Trials
    jury: Trials
    stress: dict[str, Trials]
    floor: Floor


def hear(
    folder: RunFolder,
    setting: Setting,
    assignment: Assignment,
    models: EnsembleSet,
    contenders: Sequence[Contender],
    inside: Inside,
    sheet: Sheet,
    effort: Effort,
    progress: Progress,
) -> Hearing:
    """Run all trials, or read those that the folder holds.

    The practice trials use seeds that nobody was tuned on, so that the optimism gap tells the
    plants apart and not the noise.
    """
    seed = sheet.study.seed
    ground = TrialGround(
        models.jury, setting.streams("jury", effort.jury_seeds, seed), setting.loop
    )
    fresh = TrialGround(
        models.practice, setting.streams("jury", effort.jury_seeds, seed), setting.loop
    )
    grounds = {
        "selection": assignment.selection,
        "practice": fresh,
        "jury": ground,
        **{f"stress-{k}": g for k, g in stress_grounds(ground, sheet.acceptance.stress).items()},
    }
    progress.stage("Trials", len(grounds) + 1)
    trials = {}
    for name, g in grounds.items():
        stage = f"trials-{name}"
        if not folder.done(stage):
            found = run_trials(g, contenders, inside if name in ("jury", "practice") else None)
            folder.write_arrays(stage, found.to_arrays())
            folder.finish(stage, {})
        trials[name] = Trials.from_arrays(folder.read_arrays(stage))
        progress.step(name)
    floor = run_floor(ground, assignment.weights)
    progress.step("floor")
    jury = trials["jury"] if floor.trials is None else trials["jury"].join(floor.trials)
    return Hearing(
        ground=ground,
        selection=trials["selection"],
        practice=trials["practice"],
        jury=jury,
        stress={k.removeprefix("stress-"): t for k, t in trials.items() if k.startswith("stress-")},
        floor=floor,
    )


def judge(
    folder: RunFolder,
    setting: Setting,
    assignment: Assignment,
    hearing: Hearing,
    contenders: Sequence[Contender],
    evidence: Evidence,
    nominal: InnovationsModel,
    sheet: Sheet,
    effort: Effort,
) -> Verdict:
    """Give the verdict and write the tables behind it."""
    cost = setting.primary
    roles = choose_roles(hearing.selection, contenders, cost)
    tuned = {c.name: assignment for c in contenders if c.side != "incumbent"}
    ledger = keep_ledger(
        contenders,
        tuned,
        {c.name: hearing.ground for c in contenders},
        candidate=roles.candidate,
        baseline=roles.baseline,
    )
    same = _same_controller(hearing.jury, roles)
    verdict = decide(
        acceptance=sheet.acceptance,
        contenders=contenders,
        roles=roles,
        jury=hearing.jury,
        stress=hearing.stress,
        practice=hearing.practice,
        evidence=evidence,
        ledger=ledger,
        circumstances=circumstances(setting.log, nominal, effort, setting, hearing.ground),
        rng=stream(sheet.study.seed, "verdict"),
        cost=cost,
        n_resamples=effort.resamples,
        # what acts alike on every plant costs alike on the real one too, whatever the models miss
        allowance=0.0 if same else REALITY_ALLOWANCE,
        offset_floor=_offset_floor(setting),
    )
    folder.write_table("ledger", ledger.to_table())
    _write_figures(folder, setting, hearing, contenders, roles, verdict, sheet, effort)
    return verdict


def _write_figures(
    folder: RunFolder,
    setting: Setting,
    hearing: Hearing,
    contenders: Sequence[Contender],
    roles: Roles,
    verdict: Verdict,
    sheet: Sheet,
    effort: Effort,
) -> None:
    cost, jury = setting.primary, hearing.jury
    resamples = draw_resamples(
        jury.n_plants, jury.scenario, effort.resamples, stream(sheet.study.seed, "ladder")
    )
    floor = FLOOR if FLOOR in jury.controllers else ""
    rungs = climb(
        jury, contenders, roles, resamples, sheet.acceptance.confidence, cost=cost, floor=floor
    )
    folder.write_table("ladder", ladder_table(rungs))
    folder.write_table("contenders", contenders_table(verdict, contenders))
    folder.write_table("paired", paired_table(jury, roles.baseline, cost))
    folder.write_table("stress", stress_table(verdict))
    folder.write_table("closed_loop", closed_loop_table(hearing.ground, contenders, setting))
    folder.write_table("learning", learning_table(contenders))
    if verdict.headline is not None:
        folder.write_table("interval", verdict.headline.to_table())
    frame = jury.to_frame()
    part = folder.file(".part-trials.parquet")
    frame.to_parquet(part, index=False)
    part.replace(folder.file("trials.parquet"))


def write_scenarios(folder: RunFolder, setting: Setting) -> None:
    """Write scenarios.csv."""
    folder.write_table("scenarios", scenario_table(setting.scenarios))


def circumstances(
    log: PlantLog,
    nominal: InnovationsModel,
    effort: Effort,
    setting: Setting | None = None,
    ground: TrialGround | None = None,
) -> Circumstances:
    """Return what the study had to work with, for the advice."""
    valid = log.valid
    ranges = {
        s.name: (float(log.u[valid, j].min()), float(log.u[valid, j].max()))
        for j, s in enumerate(log.actuators)
    }
    return Circumstances(
        log_hours=log.n_valid * log.sample_time_s / 3600,
        seeds=effort.jury_seeds if setting else 0,
        episodes_per_seed=(
            len(ground.ensemble) * len(setting.scenarios) if setting and ground else 0
        ),
        settling_s=settling_samples(nominal) * log.sample_time_s,
        ranges=ranges,
        units={s.name: s.unit for s in log.actuators},
    )


def _offset_floor(setting: Setting) -> np.ndarray:
    """Return the offset of no account per setpoint (n_setpoints,) [engineering units].

    The instrument's resolution, what the output jumps by from sample to sample, or a twentieth
    of what it usually moves, whichever is largest.
    """
    y = setting.log.y[setting.log.valid]
    jumps = np.median(np.abs(np.diff(y, axis=0)), axis=0)
    resolution = np.array([s.resolution for s in setting.log.outputs])
    floor = np.maximum(np.maximum(resolution, jumps), IDLE_SHARE * movement(y))
    return np.asarray(np.maximum(floor, 1e-12)[list(setting.layout.controlled)])


def _same_controller(jury: Trials, roles: Roles) -> bool:
    """Tell whether candidate and baseline did the same in every episode, term by term."""
    if not roles.candidate or not roles.baseline:
        return False
    i, b = jury.index(roles.candidate), jury.index(roles.baseline)
    return bool(np.allclose(jury.terms[i], jury.terms[b], rtol=1e-9, atol=1e-12))


def floor_findings(hearing: Hearing, setting: Setting, sheet: Sheet) -> tuple[Finding, ...]:
    """Report who costs less than what no controller can: that is a fault of the program."""
    if not hearing.floor.bound:
        return ()
    found = below_floor(
        hearing.jury, hearing.ground, sheet.acceptance.confidence,
        stream(sheet.study.seed, "floor"), cost=setting.primary,
    )  # fmt: skip
    return tuple(
        Finding(
            "below the floor",
            "stop",
            f"{name} costs {ratio.value:.3f} of the least that any controller can cost under noise "
            "alone; the program is at fault, and the verdict must not be used.",
        )
        for name, ratio in found.items()
    )
