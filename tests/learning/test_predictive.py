"""The quadratic program of predictive control against general solvers, and its guards."""

from collections.abc import Callable
from typing import Any

import numpy as np
import pytest
from numpy.testing import assert_allclose
from scipy.optimize import minimize

from idlearn.baselines import design_lqg
from idlearn.envs import Assignment, TrialGround, run_costs, run_one
from idlearn.learning import PredictiveController, train_predictive
from idlearn.models import InnovationsModel
from idlearn.models.regulator import offset_free

Task = Callable[..., Assignment]
Judged = Callable[..., TrialGround]


def predictive(a: Assignment, model: InnovationsModel | None = None, **change: Any):  # type: ignore[no-untyped-def]
    loop, w = a.practice.loop, a.weights
    kept: dict[str, Any] = {
        "model": offset_free(a.nominal.member(0)) if model is None else model,
        "output": w.output, "energy": w.energy, "move": w.move, "reference": w.reference,
        "target": w.target, "low": loop.actuator.low, "high": loop.actuator.high,
        "rate": loop.actuator.rate, "horizon": 12, "layout": loop.layout,
        "latency": a.latency_samples,
    }  # fmt: skip
    return PredictiveController(**{**kept, **change})


@pytest.mark.parametrize("latency", [0, 2])
@pytest.mark.parametrize("rate", [np.inf, 2.5])
def test_the_first_move_is_the_best_of_all_sequences(task: Task, latency: int, rate: float) -> None:
    """The plan is condensed algebra; here its cost is rolled out sample by sample instead.

    The optimum is found by a general solver of scipy that knows nothing but that cost.
    """
    a = task(latency=latency, limits=(44.0, 56.0), rate=rate, load=0.0)
    model, n = a.nominal.member(0), 8
    c = predictive(a, model, horizon=n, move=np.array([3.0]))
    P, rng, tried, inside = c._r.solution.P, np.random.default_rng(latency), 0, 0
    for _ in range(8):
        c.reset(1)
        # a plant seen without a model error: after these samples the filter state is exact
        x = np.zeros(model.n_x)
        sent, u = [50.0] * latency, 50.0
        for k in range(6):
            e = float(0.6 * rng.standard_normal()) if k else 0.0  # it starts at rest
            y = 200.0 + x[0] + e
            aim = 8.0 * float(rng.standard_normal()) if k == 5 else 0.0
            request = c.act(np.array([[y, 200.0 + aim, u]]))[0, 0]
            if k == 5:
                break
            sent.append(request)
            applied = sent.pop(0)
            x = model.A @ x + model.B[:, 0] * (applied - 50.0) + model.K[:, 0] * e
            u = applied

        def cost(v: np.ndarray, x=x, e=e, sent=tuple(sent), u=u, aim=aim) -> float:  # type: ignore[no-untyped-def]
            """Return the stage costs until the plan has all acted, and the cost to go."""
            way = [*sent, *(50.0 + v)]
            state, last, kick, total = x, u, model.K[:, 0] * e, 0.0
            for now in way[:n]:
                total += 3.0 * (now - last) ** 2
                state = model.A @ state + model.B[:, 0] * (now - 50.0) + kick
                kick, last = np.zeros(model.n_x), now
                total += (state[0] - aim) ** 2
            total -= (state[0] - aim) ** 2  # it belongs to the cost to go
            v_end = aim / 2.0  # the gain is 2: with this input the output rests at its aim
            rest = np.linalg.solve(np.eye(model.n_x) - model.A, model.B[:, 0] * v_end)
            end = np.concatenate(
                [c._r.reach.T @ (state - rest), np.array([*way[n:], last]) - 50.0 - v_end]
            )
            return float(total + end @ P @ end)

        before = (sent[-1] if latency else u) - 50.0
        step = np.eye(n) - np.eye(n, k=-1)
        first = np.eye(n)[0] * before
        limits = []
        if np.isfinite(rate):
            limits = [
                {"type": "ineq", "fun": lambda v, f=first, step=step: rate - (step @ v - f)},
                {"type": "ineq", "fun": lambda v, f=first, step=step: rate + (step @ v - f)},
            ]
        start = np.clip(before, -6, 6) * np.ones(n)
        best = minimize(
            cost, start, bounds=[(-6.0, 6.0)] * n, constraints=limits, method="SLSQP",
            options={"ftol": 1e-9, "maxiter": 500},
        )  # fmt: skip
        assert best.success, best.message
        assert request == pytest.approx(50.0 + best.x[0], abs=5e-3)
        tried += c.solved
        inside += bool(c.solved and abs(best.x[0]) < 5.9)
    assert tried > 0
    assert inside > 0  # a later limit bends the first move, which is not merely clipped
    assert c.failed == 0


@pytest.mark.parametrize("latency", [0, 2])
def test_an_episode_does_not_depend_on_its_neighbours(task: Task, latency: int) -> None:
    """A lost or a huge measurement beside it changes nothing."""
    a = task(limits=(45.0, 55.0), latency=latency)
    alone, beside = predictive(a), predictive(a)
    alone.reset(1)
    beside.reset(3)
    rng, solved = np.random.default_rng(0), 0
    for k in range(12):
        y = 200 + 4 * rng.standard_normal()
        o = np.array([[y, 200.0 if k < 4 else 206.0, 50.0]])
        crowd = np.concatenate([o, [[np.nan, 200.0, 50.0]], [[1e15, 200.0, 50.0]]])
        # the matrix products of one row and of three may differ in the last bit
        assert_allclose(beside.act(crowd)[:1], alone.act(o), rtol=1e-12)
        solved += alone.solved
    assert solved > 0


def test_input_limits_alone_cost_what_clipping_costs(task: Task, judged: Judged) -> None:
    """Within a thousandth, on noise and loads: measured on a prototype of other code."""
    a = task(gains=(2.0,), limits=(46.0, 54.0), load=0.0)
    model = a.nominal.member(0)
    ground, c = judged(a, 3), predictive(a, model)
    loop = a.practice.loop
    lqg = run_costs(ground, design_lqg(model, a.weights, loop.layout, loop.actuator))
    own = run_costs(ground, c)
    assert c.solved > 0
    quiet = [i for i, n in enumerate(ground.streams[0].names) if n != "step"]
    assert_allclose(own[:, quiet].mean(), lqg[:, quiet].mean(), rtol=1e-3)


def test_a_program_that_cannot_be_solved_is_counted_and_lqg_goes_on(task: Task) -> None:
    a = task(limits=(44.0, 56.0))
    c, loop = predictive(a), a.practice.loop
    lqg = design_lqg(offset_free(a.nominal.member(0)), a.weights, loop.layout, loop.actuator)
    c._plan = type(c._plan)(c._plan.H, np.full_like(c._plan.linear, np.nan), c._plan.free)
    c.reset(2)
    lqg.reset(2)
    for y in (200.0, 196.0, 190.0, 189.0):
        o = np.array([[y, 200.0, 50.0], [200.0, 200.0, 50.0]])
        assert_allclose(c.act(o), lqg.act(o), rtol=1e-12)
    assert c.failed >= 3
    assert c.solved == 0
    c.reset(2)
    assert c.failed == 0


@pytest.mark.parametrize("latency", [0, 2])
def test_moves_keep_the_rate_and_come_to_rest(task: Task, judged: Judged, latency: int) -> None:
    a = task(gains=(2.0,), rate=0.8, latency=latency, samples=400)
    c = predictive(a)
    rollout = run_one(judged(a, 1), c, record=True)[0]
    assert rollout.requested is not None
    moves = np.abs(np.diff(rollout.requested, axis=1))
    assert moves.max() <= 0.8 + 1e-6  # the requests themselves keep it, not the actuator alone
    assert np.abs(rollout.offset).max() < 1.0
    assert c.failed == 0


def test_a_budget_too_small_for_anything_is_not_overspent(task: Task) -> None:
    a = task(budget=1)
    made = train_predictive(a)
    assert made.plant_steps <= 1
    assert np.isfinite(run_costs(a.practice, made.controller)).all()
