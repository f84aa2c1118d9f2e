"""Direct tuning: PID settings searched under the shared cost, as hard as anything is trained.

Log-uniform starts around a tuning rule, then evolution from the best of them; a weakly tuned PID
would fake a win for whoever stands against it. Both sides keep the same robustness limit and the
same pessimism.
"""

import time
from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np

from idlearn.baselines.pid import Pairing, PidController, PidSettings, pid_form
from idlearn.baselines.rules import simc
from idlearn.budget import Budget, BudgetSpent
from idlearn.control import FilterForm
from idlearn.envs.contender import Assignment, Contender, TrainingRun
from idlearn.envs.scoring import CHUNK, Scorer
from idlearn.identification import Fopdt, fit_fopdt
from idlearn.search import SearchResult, evolve
from idlearn.seeding import stream

RUNS = 4  # evolution runs of a classical contender
OPTIMUM = 0.005  # relative gain of a small change from which on a contender is not at its optimum


@dataclass(frozen=True)
class Tuned:
    """The outcome of direct tuning.

    Attributes:
        x: chosen parameters.
        runs: every run.
        at_optimum: no small change gains more than half a percent.
        peak: sensitivity peak on the asked share of the practice plants.
    """

    x: np.ndarray
    runs: tuple[TrainingRun, ...]
    at_optimum: bool
    peak: float


def tune(
    scorer: Scorer,
    starts: np.ndarray,
    *,
    bounds: np.ndarray,
    sigma: float,
    rng: np.random.Generator,
    runs: int = RUNS,
    generations: int = 60,
    keep: np.ndarray | None = None,
) -> Tuned:
    """Search, choose among the runs on the selection plants, and prove the optimum.

    Args:
        scorer: of the contender.
        starts: (m, n) first guesses, the first one a rule's or a design's.
        bounds: (n, 2).
        sigma: first step of the evolution.
        rng: source of randomness.
        runs: evolution runs, from the first start and the best others.
        generations: most generations per run.
        keep: parameters that take part in the choice as they are, such as a design's.
    """
    n = starts.shape[1]
    steps = scorer.assignment.practice.steps
    kept = (runs + 1) * scorer.assignment.selection.steps + 6 * (2 * n + 8) * steps
    search = scorer.reserve(kept)
    values = np.full(len(starts), np.inf)
    # at most half of the budget goes into looking around
    affordable = max(1, int(0.4 * scorer.budget.left / steps))
    for i in range(0, min(len(starts), affordable), CHUNK):
        try:
            values[i : i + CHUNK] = search(starts[i : i + CHUNK])
        except BudgetSpent:
            break
    order = [0, *[int(i) for i in np.argsort(values, kind="stable") if i != 0]][:runs]
    found: list[SearchResult] = []
    for i in order:
        share = search.budget.left // max(1, len(order) - len(found))
        part = scorer.reserve(max(scorer.budget.left - share, kept))
        try:
            found.append(
                evolve(
                    part,
                    starts[i],
                    sigma=sigma,
                    rng=rng,
                    generations=generations,
                    bounds=bounds,
                    start_value=float(values[i]) if np.isfinite(values[i]) else None,
                )
            )
        except BudgetSpent:
            break
    if not found:
        found = [SearchResult(starts[0], float(values[0]))]
    runs_made: list[TrainingRun] = []
    best, least = found[0].x, float("inf")
    for i, result in zip(order, found, strict=False):
        chosen = scorer.selection(result.x)
        history = result.history[0] if result.history else ()
        label = "rule" if i == 0 else f"start {i}"
        runs_made.append(TrainingRun(label, result.value, chosen, history))
        if chosen < least:
            best, least = result.x, chosen
    if keep is not None:
        chosen = scorer.selection(keep)
        runs_made.append(TrainingRun("design", float("nan"), chosen))
        if chosen < least:
            best = keep
    best, proven = _prove(scorer, best, bounds, rng)
    return Tuned(best, tuple(runs_made), proven, scorer.peak(best))


def _prove(
    scorer: Scorer, x: np.ndarray, bounds: np.ndarray, rng: np.random.Generator
) -> tuple[np.ndarray, bool]:
    """Try small changes of every parameter and some random ones; go on from what is better."""
    size = 0.05 * np.minimum(1.0, bounds[:, 1] - bounds[:, 0])
    for _ in range(5):
        random = rng.standard_normal((8, len(x)))
        random /= np.linalg.norm(random, axis=1, keepdims=True)
        steps = np.concatenate([np.diag(size), -np.diag(size), random * size])
        around = np.clip(x + steps, bounds[:, 0], bounds[:, 1])
        try:
            values = scorer(np.concatenate([x[None], around]))
        except BudgetSpent:
            return x, False
        i = int(np.argmin(values[1:]))
        if values[1 + i] >= (1 - OPTIMUM) * values[0]:
            return x, True
        x = around[i]
    return x, False


def pair_loops(gain: np.ndarray, controlled: Sequence[int]) -> list[Pairing]:
    """Pair setpoint columns with actuators by the relative gain array, largest first.

    Args:
        gain: steady-state or settled step gain (n_y, n_u).
        controlled: output index of each setpoint column.

    E. H. Bristol, IEEE Trans. Automatic Control 11, 1966 (from memory).
    """
    part = gain[list(controlled)]
    relative = part * np.linalg.pinv(part).T
    pairs: list[Pairing] = []
    merit = relative.copy()
    for _ in range(min(part.shape)):
        c, j = np.unravel_index(int(np.argmax(merit)), merit.shape)
        pairs.append(Pairing(int(c), int(j)))
        merit[c, :] = -np.inf
        merit[:, j] = -np.inf
    return sorted(pairs, key=lambda p: p.column)


def tune_pid(assignment: Assignment, name: str = "pid") -> Contender:
    """Tune PID loops under the shared cost.

    Args:
        assignment: the task.
        name: of the contender.
    """
    begin = time.perf_counter()
    a, loop = assignment, assignment.practice.loop
    model = a.nominal.member(0)
    dt = model.sample_time_s
    settled = model.step_response(_settled(model))[-1][:, : loop.layout.n_u]
    pairs = pair_loops(settled, loop.layout.controlled)
    plants = [fit_fopdt(model, loop.layout.controlled[p.column], p.actuator) for p in pairs]
    rest = 0.5 * (loop.actuator.low + loop.actuator.high)
    rest = np.where(np.isfinite(rest), rest, model.u0[: loop.layout.n_u])
    signs = [np.sign(p.gain) or 1.0 for p in plants]

    def settings(x: np.ndarray) -> list[tuple[Pairing, PidSettings]]:
        return [
            (p, _settings(part, sign))
            for p, part, sign in zip(pairs, x.reshape(len(pairs), -1), signs, strict=True)
        ]

    def build(x: np.ndarray) -> FilterForm:
        return pid_form(settings(x), rest, loop.layout, loop.actuator, dt, a.latency_samples)

    rng = stream(a.seed, "tune", name)
    rules = [_rule(p, dt, a.latency_samples, factor) for p in plants for factor in (1.0,)]
    centre = np.concatenate(rules)
    starts, bounds = _starts(centre, plants, dt, a.latency_samples, rng)
    budget = Budget(a.budget_steps)
    tuned = tune(Scorer(a, build, budget), starts, bounds=bounds, sigma=0.3, rng=rng)
    chosen = settings(tuned.x)
    return Contender(
        name=name,
        side="classical",
        controller=PidController(
            chosen,
            rest,
            loop.layout,
            dt,
            loop.actuator.low,
            loop.actuator.high,
            a.latency_samples,
        ),
        plant_steps=budget.spent,
        seconds=time.perf_counter() - begin,
        runs=tuned.runs,
        at_optimum=tuned.at_optimum,
        peak=tuned.peak,
        facts={"loops": [vars(s) for _, s in chosen]},
    )


def _settled(model: "object") -> int:
    from idlearn.models import InnovationsModel

    assert isinstance(model, InnovationsModel)
    radius = min(model.spectral_radius(), 0.999)
    return int(min(5000, 2 * model.n_x + (6 / -np.log(radius) if radius > 0 else 1)))


def _settings(x: np.ndarray, sign: float) -> PidSettings:
    """Parameters: log gain, log Ti, log Td, setpoint weight, log N."""
    return PidSettings(
        gain=float(sign * np.exp(x[0])),
        integral_time_s=float(np.exp(x[1])),
        derivative_time_s=float(np.exp(x[2])),
        setpoint_weight=float(x[3]),
        filter_n=float(np.exp(x[4])),
    )


def _rule(plant: Fopdt, dt: float, latency: int, factor: float) -> np.ndarray:
    late = replace(plant, dead_time_s=plant.dead_time_s + (latency + 0.5) * dt)
    s = simc(late, closed_loop_s=factor * late.dead_time_s)
    gain = abs(s.gain) if s.gain else 1e-6
    return np.array(
        [np.log(gain), np.log(s.integral_time_s), np.log(0.05 * late.dead_time_s), 1.0, np.log(8.0)]
    )


def _starts(
    centre: np.ndarray,
    plants: Sequence[Fopdt],
    dt: float,
    latency: int,
    rng: np.random.Generator,
    n: int = 800,
) -> tuple[np.ndarray, np.ndarray]:
    """Return starts (m, n) and bounds: rules of several speeds, then log-uniform ones."""
    reach = np.array([[4.0, 3.0], [3.5, 3.0], [3.0, 5.0], [1.0, 0.2], [1.4, 1.0]])
    low, high = [], []
    for i, _ in enumerate(plants):
        c = centre[5 * i : 5 * i + 5]
        low.append(c - reach[:, 0])
        high.append(c + reach[:, 1])
    bounds = np.stack([np.concatenate(low), np.concatenate(high)], axis=1)
    others = [
        np.concatenate([_rule(p, dt, latency, f) for p in plants]) for f in (0.5, 2.0, 4.0, 8.0)
    ]
    drawn = rng.uniform(bounds[:, 0], bounds[:, 1], size=(n, len(centre)))
    starts = np.concatenate([centre[None], np.array(others), drawn])
    return np.clip(starts, bounds[:, 0], bounds[:, 1]), bounds
