"""Predictive control on the identified model: the plan respects limits, the present does not wait.

The observer and the quadratic cost are those of LQG, with the Riccati cost to go at the end of the
horizon, so that a plan that meets no limit is LQG's own. Only where the unconstrained plan would
break a limit is a quadratic program solved, exactly, by an active-set method (D. Arnstrom,
A. Bemporad, D. Axehill, IEEE Trans. Automatic Control 67, 2022, the solver `daqp`; from memory).
What is learned from the log is the model; its few knobs are then trained on the practice plants.
"""

import time
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any, ClassVar, Self

import numpy as np

from idlearn.budget import Budget, BudgetSpent
from idlearn.control import FilterForm, FilterRunner, ObservationLayout
from idlearn.cost import RiccatiWeights
from idlearn.envs import Assignment, Contender, TrainingRun, pessimistic, run_costs
from idlearn.envs.actuator import Actuator
from idlearn.envs.lqgform import LqgKnobs, lqg_form
from idlearn.envs.scoring import Scorer
from idlearn.models import InnovationsModel
from idlearn.models.regulator import Regulator, regulator
from idlearn.search import evolve
from idlearn.seeding import stream

MOST_MOVES = 20  # decisions in a plan; the cost to go stands for the rest


@dataclass(frozen=True, eq=False)
class Plan:
    """The plan as a quadratic program in deviations of the inputs from rest.

    Attributes:
        H: (n, n), n = horizon * n_u.
        linear: (n, n_s): linear term = linear @ distance from rest.
        free: (n, n_s): the unconstrained plan = free @ distance from rest.

    The distance is that of [the reached states to come but for any input, requests under way,
    previous applied input].
    """

    H: np.ndarray
    linear: np.ndarray
    free: np.ndarray


def make_plan(r: Regulator, horizon: int) -> Plan:
    """Condense the regulated system over a horizon.

    s[1] = c + G v[0] with c known, s[i+1] = F s[i] + G v[i]; cost of the stages 1.. and of the
    inputs, and s[horizon]' P s[horizon] at the end. What the first input costs depends on the
    previous one too, which c no longer holds.
    """
    n_s, n_u = r.G.shape
    n = horizon * n_u
    # s[i] = S_i c + T_i v, for i = 1..horizon
    S, T = np.eye(n_s), np.zeros((n_s, n))
    T[:, :n_u] = r.G
    H, f = np.zeros((n, n)), np.zeros((n, n_s))
    H[:n_u, :n_u] += r.R
    for i in range(1, horizon):
        pick = np.zeros((n_u, n))
        pick[:, i * n_u : (i + 1) * n_u] = np.eye(n_u)
        H += T.T @ r.Q @ T + pick.T @ r.R @ pick + T.T @ r.N @ pick + pick.T @ r.N.T @ T
        f += T.T @ r.Q @ S + pick.T @ r.N.T @ S
        S, T = r.F @ S, r.F @ T + r.G @ pick
    P = r.solution.P
    H += T.T @ P @ T
    f += T.T @ P @ S
    carry = r.F.copy()
    n_r = r.reach.shape[1]
    carry[:n_r, :n_r] = np.eye(n_r)  # the reached states given are those to come already
    f = f @ carry
    f[:n_u] += r.N.T
    H = 0.5 * (H + H.T) + 1e-12 * np.trace(H) / n * np.eye(n)
    return Plan(H, f, -np.linalg.solve(H, f))


class PredictiveController:
    """Predictive control with limits on inputs and on their rate.

    Args:
        model: offset-free, without direct feed-through.
        output: weight per output (n_y,).
        energy: weight per actuator (n_u,).
        move: weight per actuator (n_u,).
        reference: (n_u,) [engineering units].
        target: (n_y,) fixed targets, NaN to follow the setpoint.
        low: (n_u,) [engineering units].
        high: (n_u,) [engineering units].
        rate: (n_u,) largest move per sample [engineering units].
        horizon: decisions in a plan.
        layout: observation columns.
        latency: samples between a decision and its effect.
    """

    kind: ClassVar[str] = "predictive"

    def __init__(
        self,
        *,
        model: InnovationsModel,
        output: np.ndarray,
        energy: np.ndarray,
        move: np.ndarray,
        reference: np.ndarray,
        target: np.ndarray,
        low: np.ndarray,
        high: np.ndarray,
        rate: np.ndarray,
        horizon: int,
        layout: ObservationLayout,
        latency: int,
    ) -> None:
        """Design observer, regulator and plan."""
        self.layout, self.sample_time_s = layout, model.sample_time_s
        self._held = {
            "output": output,
            "energy": energy,
            "move": move,
            "reference": reference,
            "target": target,
            "low": low,
            "high": high,
            "rate": rate,
        }
        self.model, self.horizon, self.latency = model, int(horizon), int(latency)
        self._r = regulator(
            model, output=output, energy=energy, move=move, reference=reference, latency=latency
        )
        self._plan = make_plan(self._r, self.horizon)
        self.form = self._observer()
        self._runner = FilterRunner(self.form)
        self.solved = self.failed = 0

    def _observer(self) -> FilterForm:
        """Return LQG's filter: its request is the plan's first move where no limit is met."""
        h = self._held
        actuator = Actuator(h["low"], h["high"], h["rate"], np.zeros(self.layout.n_u))
        weights = RiccatiWeights(
            h["output"], h["energy"], h["reference"], h["move"], h["target"], True
        )
        return lqg_form(self.model, weights, self.layout, actuator, self.latency)

    def reset(self, n: int) -> None:
        """Forget the past and get ready for n episodes."""
        self._runner.reset(n)
        self.solved = self.failed = 0

    def act(self, observation: np.ndarray) -> np.ndarray:
        """Return the requested u (n, n_u) for an observation (n, n_obs)."""
        sent = list(self._runner.sent) or [observation[:, self.layout.u]] * self.latency
        u = self._runner.act(observation)
        distance, rest = self._distance(observation, sent)
        planned = rest[:, None] + (distance @ self._plan.free.T).reshape(len(u), self.horizon, -1)
        last = sent[-1] if self.latency else observation[:, self.layout.u]
        moves = np.diff(planned, axis=1, prepend=last[:, None])
        h = self._held
        # each episode has a tolerance of its own: none may depend on its neighbours
        tiny = 1e-9 * np.maximum(1.0, np.abs(planned).max(axis=(1, 2), keepdims=True))
        broken = (
            (planned < h["low"] - tiny)
            | (planned > h["high"] + tiny)
            | (np.abs(moves) > h["rate"] + tiny)
        ).any(axis=(1, 2)) & np.isfinite(distance).all(axis=1)
        if broken.any():
            u = u.copy()
            for i in np.flatnonzero(broken):
                u[i] = self._solve(distance[i], rest[i], last[i], u[i])
            self._runner.replace_last(u)
        return u

    def _distance(
        self, observation: np.ndarray, sent: list[np.ndarray]
    ) -> tuple[np.ndarray, np.ndarray]:
        """Return the distance from rest that a plan starts from, and the rest."""
        r, m, layout = self._r, self.model, self.layout
        n_u = layout.n_u
        z = self._runner.z
        wanted = np.where(np.isnan(self._held["target"]), m.y0, self._held["target"]) - m.y0
        aim = np.broadcast_to(wanted, (len(z), m.n_y)).copy()
        for column, output in enumerate(layout.controlled):
            if np.isnan(self._held["target"][output]):
                aim[:, output] = observation[:, layout.setpoint.start + column] - m.y0[output]
        d = observation[:, layout.disturbance] - m.u0[n_u:]
        asked = np.concatenate([z @ r.target.unreached, aim, d, np.ones((len(z), 1))], axis=1)
        v_rest = asked @ r.target.V.T
        xi_rest = asked @ r.target.X.T
        B_r = r.reach.T @ m.B[:, :n_u]
        way = [s - m.u0[:n_u] - v_rest for s in sent]
        previous = observation[:, layout.u] - m.u0[:n_u] - v_rest
        ahead = z @ r.reach - xi_rest + v_rest @ B_r.T
        return np.concatenate([ahead, *way, previous], axis=1), v_rest + m.u0[:n_u]

    def _solve(
        self, distance: np.ndarray, rest: np.ndarray, last: np.ndarray, fallback: np.ndarray
    ) -> np.ndarray:
        import daqp

        h, n_u, n = self._held, self.layout.n_u, self.horizon
        low, high = np.tile(h["low"] - rest, n), np.tile(h["high"] - rest, n)
        rows, up, down = np.zeros((0, n * n_u)), np.zeros(0), np.zeros(0)
        if np.isfinite(h["rate"]).any():
            rows = np.eye(n * n_u) - np.eye(n * n_u, k=-n_u)
            first = np.zeros(n * n_u)
            first[:n_u] = last - rest
            limit = np.tile(np.where(np.isfinite(h["rate"]), h["rate"], 1e30), n)
            up, down = first + limit, first - limit
        x, _, flag, _ = daqp.solve(
            self._plan.H,
            self._plan.linear @ distance,
            np.ascontiguousarray(rows),
            np.concatenate([np.minimum(high, 1e30), up]),
            np.concatenate([np.maximum(low, -1e30), down]),
            np.zeros(len(high) + len(up), dtype=np.int32),
        )
        if flag != 1 or not np.isfinite(x).all():
            self.failed += 1
            return fallback
        self.solved += 1
        return np.clip(rest + np.asarray(x)[:n_u], h["low"], h["high"])

    def settings(self) -> dict[str, Any]:
        """Return model, weights and limits."""
        m = self.model
        arrays = {k: getattr(m, k) for k in ("A", "B", "C", "D", "K", "S", "u0", "y0")}
        return {
            "model": {**arrays, "n_actuators": m.n_actuators},
            **self._held,
            "horizon": self.horizon,
            "latency": self.latency,
        }

    @classmethod
    def from_settings(
        cls, settings: Mapping[str, Any], layout: ObservationLayout, sample_time_s: float
    ) -> Self:
        """Build the controller that `settings` describes."""
        held = dict(settings)
        model = InnovationsModel(**held.pop("model"), sample_time_s=sample_time_s)
        return cls(model=model, layout=layout, **held)


def train_predictive(assignment: Assignment, name: str = "predictive") -> Contender:
    """Train the knobs of predictive control on the practice plants.

    Knobs: move weight, load gain and noise gain of the observer. They are
    searched on the unconstrained form, which is the same controller where no limit is met; each
    run's outcome is then run as it is on the selection plants.

    Args:
        assignment: the task.
        name: of the contender.
    """
    begin = time.perf_counter()
    a, loop, knobs = assignment, assignment.practice.loop, LqgKnobs.of(assignment)
    budget = Budget(a.budget_steps)

    def controller(x: np.ndarray) -> PredictiveController:
        model, w = knobs.turned(x)
        return PredictiveController(
            model=model,
            output=w.output,
            energy=w.energy,
            move=w.move,
            reference=w.reference,
            target=w.target,
            low=loop.actuator.low,
            high=loop.actuator.high,
            rate=loop.actuator.rate,
            horizon=MOST_MOVES,
            layout=loop.layout,
            latency=a.latency_samples,
        )

    bounds, runs = knobs.bounds, []
    best, least = np.zeros(len(bounds)), np.inf
    kept = 2 * a.runs * (a.practice.steps + a.selection.steps)
    for run in range(max(a.runs, 1)):
        allowed = Budget((budget.limit - kept) // max(a.runs, 1))
        rng = stream(a.seed, "train", name, run)
        start = 0.5 * rng.uniform(bounds[:, 0], bounds[:, 1]) if run else np.zeros(len(bounds))
        scorer = Scorer(a, knobs.form, allowed)
        try:
            result = evolve(scorer, start, sigma=0.4, rng=rng, generations=60, bounds=bounds)
            budget.charge(min(allowed.spent, budget.left))
            costs = run_costs(a.selection, controller(result.x), cost=a.cost, budget=budget)
        except BudgetSpent:
            break
        chosen = float(pessimistic(costs[None])[0])
        runs.append(TrainingRun(f"seed {run}", result.value, chosen, result.history[0]))
        if chosen < least:
            best, least = result.x, chosen
    return Contender(
        name=name,
        side="learned",
        controller=controller(best),
        plant_steps=budget.spent,
        seconds=time.perf_counter() - begin,
        runs=tuple(runs),
        peak=Scorer(a, knobs.form, budget).peak(best),
        facts={"horizon_samples": MOST_MOVES, **knobs.facts(best)},
    )
