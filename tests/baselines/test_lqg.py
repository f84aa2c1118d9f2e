"""LQG: optimal where it claims to be, offset-free, and never beaten on its own ground."""

from collections.abc import Callable
from dataclasses import replace

import numpy as np
import pytest

from idlearn.baselines import (
    design_lqg,
    exact_cost,
    lqg_contender,
    stationary_cost,
    tune_linear,
    tune_pid,
)
from idlearn.control import FilterForm
from idlearn.cost import RiccatiWeights
from idlearn.envs import Actuator, Assignment, TrialGround, run_costs, run_one
from idlearn.envs.margins import PlantResponses, closed_loop_radius, sensitivity_peaks
from idlearn.errors import IdlearnError
from idlearn.learning import train_predictive, train_residual
from idlearn.models.regulator import offset_free
from idlearn.models.riccati import RiccatiError

Task = Callable[..., Assignment]
Judged = Callable[..., TrialGround]


def parts(a: Assignment) -> tuple:  # type: ignore[type-arg]
    loop = a.practice.loop
    return a.nominal.member(0), a.weights, loop.layout, Actuator.free(1), a.latency_samples


@pytest.mark.parametrize("latency", [0, 1, 3])
def test_small_changes_never_help(task: Task, latency: int) -> None:
    model, weights, layout, free, _ = parts(task(latency=latency, load=0.0))
    design = design_lqg(model, weights, layout, free, latency).form
    best = exact_cost(model, weights, layout, free, latency)
    rng = np.random.default_rng(latency)
    for _ in range(15):
        other = replace(
            design, H=design.H + 1e-3 * rng.standard_normal(design.H.shape),
            J=design.J + 1e-3 * rng.standard_normal(design.J.shape),
        )  # fmt: skip
        assert stationary_cost(other, model, weights, layout, latency) > best


@pytest.mark.parametrize("latency", [0, 2])
def test_the_exact_cost_is_what_simulation_gives(task: Task, judged: Judged, latency: int) -> None:
    a = task(gains=(2.0,), quiet=True, latency=latency, load=0.0, samples=1500,
             limits=(-1e6, 1e6))  # fmt: skip
    model, weights, layout, free, _ = parts(a)
    costs = run_costs(judged(a, 24), design_lqg(model, weights, layout, free, latency))
    error = costs.std(ddof=1) / np.sqrt(costs.size)
    exact = exact_cost(model, weights, layout, free, latency)
    # an episode starts at rest, with no noise behind it: a little cheaper than stationary
    assert abs(costs.mean() - exact) < 4 * error + 0.01 * exact


def test_nobody_beats_the_exact_cost_and_tuned_lqg_is_within_one_percent(
    task: Task, judged: Judged
) -> None:
    """Linear plant, quadratic cost, plant known, noise alone: a win here is a bug."""
    a = task(gains=(2.0,), quiet=True, samples=400, limits=(-1e6, 1e6), budget=1_500_000)
    a = replace(a, robustness=replace(a.robustness, peak=100.0))
    model, weights, layout, free, _ = parts(a)
    ground = judged(a, 120)
    floor = run_costs(ground, design_lqg(model, weights, layout, free))
    linear = tune_linear(a)
    contenders = [
        tune_pid(a), lqg_contender(a), linear, train_residual(a, linear), train_predictive(a)
    ]  # fmt: skip
    for c in contenders:
        paired = run_costs(ground, c.controller) / floor.mean()
        gap = paired - floor / floor.mean()
        error = gap.std(ddof=1) / np.sqrt(gap.size)
        assert gap.mean() >= -4 * error, c.name
        if c.name == "linear":
            assert gap.mean() < 0.01 + 4 * error


def test_offset_free_also_with_a_wrong_gain(task: Task) -> None:
    ground = replace(task(samples=800, load=0.0).practice, noise=0.0, gain=0.8)
    model = offset_free(task(load=0.0).nominal.member(0))
    weights, loop = ground.loop.costs.riccati(0), ground.loop
    c = design_lqg(model, weights, loop.layout, loop.actuator)
    assert np.abs(run_one(ground, c)[0].offset).max() < 0.02


def test_offset_free_adds_a_load_once(task: Task) -> None:
    plain = task(load=0.0).nominal.member(0)
    once = offset_free(plain)
    assert once.n_x == plain.n_x + 1
    assert offset_free(once) is once


def test_energy_and_level_set_the_rest(task: Task) -> None:
    """With a weight on the input the best rest is a compromise, found by hand."""
    model, _, layout, free, _ = parts(task(load=0.0))
    weights = RiccatiWeights(
        np.array([1.0]), np.array([4.0]), np.array([50.0]), np.zeros(1), np.array([210.0]), True
    )
    c = design_lqg(model, weights, layout, free)
    c.reset(1)
    # minimise (200 + 2 (u - 50) - 210)^2 + 4 (u - 50)^2
    u = 50.0 + 2 * 10 / (4 + 4)
    y = 200.0 + 2 * (u - 50.0)
    for _ in range(300):
        got = c.act(np.array([[y, 0.0, u]]))[0, 0]
    assert got == pytest.approx(u, abs=1e-6)


def test_margins_against_brute_force(task: Task) -> None:
    a = task(latency=1)
    form = lqg_contender(a).controller.form  # type: ignore[attr-defined]
    layout = a.practice.loop.layout
    responses = PlantResponses.of(a.practice.ensemble)
    peaks = sensitivity_peaks([form], responses, layout, 1)[0]
    for p in range(len(a.practice.ensemble)):
        worst = 0.0
        plant = a.practice.ensemble.member(p)
        for w in responses.w:
            z = np.exp(1j * w)
            # controller solved sample by sample: state z, requests, one under way
            back = np.linalg.inv(np.eye(len(form.F)) - form.F / z)
            T = form.H @ back @ form.G + form.J
            loop = 1 - T[0, 2] / z**2 - T[0, 3] / z
            C = T[0, 0] / loop
            P = plant.frequency_response(np.array([w]))[0, 0, 0] / z
            worst = max(worst, 1 / abs(1 - P * C))
        assert peaks[p] == pytest.approx(worst, rel=1e-9)
    assert closed_loop_radius(form, a.practice.ensemble, layout, 1).max() < 1
    hot = replace(form, J=40 * form.J, H=40 * form.H)
    assert closed_loop_radius(hot, a.practice.ensemble, layout, 1).max() > 1
    with pytest.raises(IdlearnError, match="unstable"):
        stationary_cost(hot, plant, a.weights, layout, 1)


def test_an_unstabilisable_design_is_refused(task: Task) -> None:
    model, weights, layout, free, _ = parts(task(load=0.0))
    blind = replace(model, B=np.zeros_like(model.B))
    with pytest.raises((RiccatiError, IdlearnError, np.linalg.LinAlgError)):
        exact_cost(replace(blind, A=model.A * 1.2), weights, layout, free)


def test_the_limit_is_kept_and_nothing_is_spent_unseen(task: Task) -> None:
    a = task()
    for made in (lqg_contender(a), tune_linear(a)):
        assert made.peak <= a.robustness.peak
        assert 0 < made.plant_steps <= a.budget_steps
        form = made.controller.form  # type: ignore[attr-defined]
        assert isinstance(form, FilterForm)
    assert tune_linear(a).facts == tune_linear(a).facts
