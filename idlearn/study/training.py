"""Tune and train every contender, each an independent piece of work that can be resumed."""

from collections.abc import Mapping
from dataclasses import asdict, dataclass
from typing import Any

from idlearn.baselines import lqg_contender, tune_linear, tune_pid
from idlearn.control import load_controller, save_controller
from idlearn.envs import Assignment, Contender, TrainingRun, pessimistic, run_costs
from idlearn.learning import train_predictive, train_residual
from idlearn.study.progress import Progress
from idlearn.study.store import RunFolder


@dataclass(frozen=True)
class Job:
    """One contender to make.

    Attributes:
        name: of the contender.
        side: "classical" or "learned".
        base: contender that a residual is learned around, or None.
    """

    name: str
    side: str
    base: Contender | None = None


def make(job: Job, assignment: Assignment) -> Contender:
    """Tune or train one contender; deterministic, whichever process it runs in."""
    if job.name == "pid":
        return tune_pid(assignment)
    if job.name == "lqg":
        return lqg_contender(assignment)
    if job.name == "linear":
        return tune_linear(assignment)
    if job.name == "predictive":
        return train_predictive(assignment)
    if job.name == "evolution" and job.base is not None:
        return train_residual(assignment, job.base)
    raise ValueError(f"nobody makes {job.name!r}")


def make_all(
    folder: RunFolder,
    assignment: Assignment,
    classical: tuple[str, ...],
    learned: tuple[str, ...],
    *,
    notes: Mapping[str, Any],
    workers: int,
    progress: Progress,
) -> list[Contender]:
    """Make every contender that the folder does not hold yet, and return them all.

    Args:
        folder: finished contenders are loaded from it, new ones saved to it one by one.
        assignment: the one task.
        classical: names.
        learned: names.
        notes: facts saved with every controller.
        workers: processes at once; the numbers do not depend on it.
        progress: told about each contender.
    """
    progress.stage("Tuning and training", len(classical) + len(learned))
    first = [Job(n, "classical") for n in classical]
    first += [Job(n, "learned") for n in learned if n != "evolution"]
    made = _wave(folder, assignment, first, notes, workers, progress)
    if "evolution" in learned:
        base = best_on_selection([c for c in made if c.side == "classical"], assignment)
        job = Job("evolution", "learned", base)
        made += _wave(folder, assignment, [job], notes, 1, progress)
    order = [*classical, *learned]
    return sorted(made, key=lambda c: order.index(c.name))


def best_on_selection(contenders: list[Contender], assignment: Assignment) -> Contender:
    """Return the contender with the least pessimistic cost on the selection plants."""
    return min(contenders, key=lambda c: selection_score(c, assignment))


def selection_score(contender: Contender, assignment: Assignment) -> float:
    """Return the pessimistic cost of a contender on the selection plants."""
    costs = run_costs(assignment.selection, contender.controller, cost=assignment.cost)
    return float(pessimistic(costs[None])[0])


def _wave(
    folder: RunFolder,
    assignment: Assignment,
    jobs: list[Job],
    notes: Mapping[str, Any],
    workers: int,
    progress: Progress,
) -> list[Contender]:
    made = []
    todo = []
    for job in jobs:
        if folder.done(f"contender-{job.name}"):
            made.append(load_contender(folder, job.name))
            progress.step(job.name)
        else:
            todo.append(job)
    for contender in _results(todo, assignment, workers):
        keep_contender(folder, contender, notes)
        made.append(contender)
        progress.step(contender.name)
    return made


def _results(jobs: list[Job], assignment: Assignment, workers: int) -> Any:
    """Yield contenders as they get ready."""
    if workers <= 1 or len(jobs) <= 1:
        return (make(job, assignment) for job in jobs)
    from joblib import Parallel, delayed

    parallel = Parallel(
        n_jobs=min(workers, len(jobs)), return_as="generator_unordered", max_nbytes=None
    )
    return parallel(delayed(make)(job, assignment) for job in jobs)


def keep_contender(folder: RunFolder, contender: Contender, notes: Mapping[str, Any]) -> None:
    """Save a contender: its controller for the plant, its record for the report."""
    save_controller(
        contender.controller,
        folder.file(f"controllers/{contender.name}.json"),
        {**notes, **contender.facts},
    )
    record = {
        "name": contender.name,
        "side": contender.side,
        "plant_steps": contender.plant_steps,
        "seconds": contender.seconds,
        "runs": [asdict(r) for r in contender.runs],
        "at_optimum": contender.at_optimum,
        "peak": contender.peak,
        "facts": dict(contender.facts),
    }
    folder.finish(f"contender-{contender.name}", record)


def load_contender(folder: RunFolder, name: str) -> Contender:
    """Load what `keep_contender` saved."""
    record = folder.facts(f"contender-{name}")
    peak = record["peak"]
    return Contender(
        name=record["name"],
        side=record["side"],
        controller=load_controller(folder.file(f"controllers/{name}.json")),
        plant_steps=record["plant_steps"],
        seconds=record["seconds"],
        runs=tuple(
            TrainingRun(
                label=r["label"],
                practice=_number(r["practice"]),
                selection=_number(r["selection"]),
                history=tuple(_number(v) for v in r["history"]),
            )
            for r in record["runs"]
        ),
        at_optimum=record["at_optimum"],
        peak=_number(peak),
        facts=record["facts"],
    )


def _number(value: float | None) -> float:
    return float("nan") if value is None else float(value)
