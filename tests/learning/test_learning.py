"""Learned controllers: bounded, offset-free, reproducible, and equal to LQG where they must be."""

from collections.abc import Callable
from dataclasses import replace

import numpy as np
import pytest
from numpy.testing import assert_allclose

from idlearn.baselines import Pairing, PidController, PidSettings, design_lqg, tune_linear
from idlearn.control import FilterRunner, LinearController
from idlearn.envs import Assignment, TrialGround, run_costs, run_one
from idlearn.envs.contender import Contender
from idlearn.errors import InputError
from idlearn.learning import PredictiveController, train_predictive, train_residual
from idlearn.learning.predictive import make_plan
from idlearn.learning.residual import Features, residual_form
from idlearn.models.regulator import offset_free, regulator

Task = Callable[..., Assignment]
Judged = Callable[..., TrialGround]


def base_form(a: Assignment):  # type: ignore[no-untyped-def]
    loop = a.practice.loop
    model = offset_free(a.nominal.member(0))
    return design_lqg(model, a.weights, loop.layout, loop.actuator, a.latency_samples).form


def features(a: Assignment) -> Features:
    return Features(a.practice.loop.layout, np.array([4.0]), np.array([4.0]))


@pytest.mark.parametrize("latency", [0, 2])
def test_without_weights_it_is_its_base(task: Task, judged: Judged, latency: int) -> None:
    a = task(latency=latency)
    base, f = base_form(a), features(a)
    joint = residual_form(base, f, np.zeros((1, f.n)), np.array([4.0]))
    ground, layout = judged(a, 2), a.practice.loop.layout
    costs = [run_costs(ground, LinearController(x, layout, 1.0)) for x in (base, joint)]
    assert_allclose(costs[1], costs[0], rtol=1e-12)


def test_authority_is_never_exceeded(task: Task) -> None:
    a = task()
    base, f, rng = base_form(a), features(a), np.random.default_rng(0)
    joint = residual_form(base, f, 50 * rng.standard_normal((1, f.n)), np.array([1.5]))
    plain, bold = FilterRunner(base), FilterRunner(joint)
    plain.reset(5)
    bold.reset(5)
    for _ in range(50):
        o = np.column_stack([rng.uniform(150, 250, (5, 2)), rng.uniform(0, 100, 5)])
        # the base inside sees the same observations, so that only the residual differs
        gap = bold.act(o) - plain.act(o)
        assert np.abs(gap).max() <= 1.5 + 1e-9


def test_the_residual_vanishes_at_rest(task: Task) -> None:
    """Whatever the weights: no offset comes from what was learnt."""
    a = task(samples=600, load=0.0)
    base, f, rng = base_form(a), features(a), np.random.default_rng(1)
    joint = residual_form(base, f, 0.3 * rng.standard_normal((1, f.n)), np.array([1.0]))
    ground = replace(a.practice, noise=0.0)
    rollout = run_one(ground, LinearController(joint, a.practice.loop.layout, 1.0))[0]
    assert np.abs(rollout.offset).max() < 0.02


def test_training_keeps_every_run_and_repeats(task: Task) -> None:
    a = task(runs=3)
    base = tune_linear(a)
    first, second = train_residual(a, base), train_residual(a, base)
    assert [r.label for r in first.runs] == ["seed 0", "seed 1", "seed 2"]
    assert [r.practice for r in first.runs] == [r.practice for r in second.runs]
    assert first.plant_steps <= a.budget_steps
    assert first.peak <= 2.0 + 1e-9
    own = run_costs(a.selection, first.controller).mean()
    assert own <= run_costs(a.selection, base.controller).mean() * 1.02
    with pytest.raises(InputError, match="no linear filter form"):
        train_residual(a, first)


def predictive(a: Assignment, horizon: int = 20) -> PredictiveController:
    loop, w = a.practice.loop, a.weights
    return PredictiveController(
        model=offset_free(a.nominal.member(0)), output=w.output, energy=w.energy, move=w.move,
        reference=w.reference, target=w.target, low=loop.actuator.low, high=loop.actuator.high,
        rate=loop.actuator.rate, horizon=horizon, layout=loop.layout, latency=a.latency_samples,
    )  # fmt: skip


@pytest.mark.parametrize("latency", [0, 2])
def test_without_limits_it_is_lqg(task: Task, judged: Judged, latency: int) -> None:
    a = task(latency=latency, limits=(-1e6, 1e6))
    ground, c = judged(a, 2), predictive(a)
    lqg = LinearController(base_form(a), a.practice.loop.layout, 1.0)
    assert_allclose(run_costs(ground, c), run_costs(ground, lqg), rtol=1e-9)
    assert c.solved == 0


@pytest.mark.parametrize("latency", [0, 1, 3])
@pytest.mark.parametrize("horizon", [2, 12])
def test_the_free_plan_starts_with_the_move_of_lqg(task: Task, latency: int, horizon: int) -> None:
    """Dynamic programming: with the Riccati cost to go at the end, the horizon does not matter.

    R. Bellman, Dynamic Programming, 1957 (from memory): the principle of optimality.
    """
    model = offset_free(task().nominal.member(0))
    r = regulator(
        model, output=np.ones(1), energy=np.array([0.1]), move=np.array([0.5]),
        reference=np.array([50.0]), latency=latency,
    )  # fmt: skip
    law = np.concatenate([r.Lz @ r.reach, r.Lq, r.Lp], axis=1)
    assert_allclose(make_plan(r, horizon).free[:1], law, rtol=0, atol=1e-8 * np.abs(law).max())
    assert latency or abs(law[0, -1]) > 0.1  # the previous input counts where moves cost


def test_input_limits_cost_what_clipping_costs(task: Task, judged: Judged) -> None:
    """On input limits alone, constrained predictive control is clipped LQG to within 1e-3."""
    a = task(gains=(2.0,), limits=(40.0, 62.0))
    ground, c = judged(a, 3), predictive(a)
    lqg = LinearController(base_form(a), a.practice.loop.layout, 1.0)
    own, clipped = run_costs(ground, c).mean(), run_costs(ground, lqg).mean()
    assert c.solved > 0
    assert c.failed == 0
    assert own == pytest.approx(clipped, rel=1e-2)
    assert own < clipped * 1.001


def test_rate_limits_are_planned_for(task: Task, judged: Judged) -> None:
    a = task(gains=(2.0,), rate=1.0)
    ground, c = judged(a, 2), predictive(a)
    rollout = run_one(ground, c, record=True)[0]
    assert rollout.u is not None
    assert rollout.requested is not None
    assert np.abs(np.diff(rollout.u, axis=1)).max() <= 1.0 + 1e-9
    assert c.solved > 0
    lqg = LinearController(base_form(a), a.practice.loop.layout, 1.0)
    assert run_costs(ground, c).mean() <= run_costs(ground, lqg).mean() * 1.001


def test_the_program_is_solved_to_its_optimum(task: Task) -> None:
    """Against a general bounded solver of scipy on the same problem."""
    from scipy.optimize import minimize

    a = task(limits=(40.0, 60.0))
    c = predictive(a, horizon=8)
    plan, rng = c._plan, np.random.default_rng(2)
    for _ in range(5):
        d = 4 * rng.standard_normal(plan.linear.shape[1])
        rest = np.array([50.0])
        got = c._solve(d, rest, np.array([50.0]), np.array([50.0]))
        f = plan.linear @ d
        best = minimize(
            lambda x, f=f: 0.5 * x @ plan.H @ x + f @ x, np.zeros(8),
            jac=lambda x, f=f: plan.H @ x + f, bounds=[(-10.0, 10.0)] * 8, method="L-BFGS-B",
            options={"ftol": 1e-15, "gtol": 1e-10, "maxiter": 5000},
        )  # fmt: skip
        assert got[0] == pytest.approx(50 + best.x[0], abs=1e-3)
    c._plan = replace(plan, linear=np.full_like(plan.linear, np.nan))
    assert c._solve(d, rest, rest, np.array([47.0]))[0] == 47.0  # held, and counted
    assert c.failed == 1


def test_predictive_training(task: Task) -> None:
    a = task(runs=2, latency=1)
    made = train_predictive(a)
    assert [r.label for r in made.runs] == ["seed 0", "seed 1"]
    assert 0 < made.plant_steps <= a.budget_steps
    assert made.facts == train_predictive(a).facts


def test_a_base_of_any_kind_will_do(task: Task) -> None:
    a = task(runs=1, budget=200_000)
    pid = PidController(
        [(Pairing(0, 0), PidSettings(gain=0.8, integral_time_s=25.0))], np.zeros(1),
        a.practice.loop.layout, 1.0, np.zeros(1), np.full(1, 100.0),
    )  # fmt: skip
    made = train_residual(a, Contender("pid", "classical", pid, peak=1.5))
    assert made.facts["base"] == "pid"
