"""Linear-quadratic-Gaussian control: the regulator on the state of the innovations form.

The observer runs on the applied input that the observation reports, so that a limit at the
actuator never misleads it; that also is what keeps the load estimate from winding up.
"""

import time
from dataclasses import replace
from typing import ClassVar

import numpy as np

from idlearn.budget import Budget, BudgetSpent
from idlearn.control import FilterController, FilterForm, ObservationLayout
from idlearn.cost import RiccatiWeights
from idlearn.envs.actuator import Actuator
from idlearn.envs.contender import Assignment, Contender, TrainingRun, pessimistic
from idlearn.envs.lqgform import lqg_form
from idlearn.envs.margins import (
    PlantResponses,
    closed_loop_matrix,
    closed_loop_radius,
    sensitivity_peaks,
)
from idlearn.envs.population import run_forms
from idlearn.errors import IdlearnError
from idlearn.models import InnovationsModel
from idlearn.models.regulator import offset_free


class LqgController(FilterController):
    """Observer and regulator of one model."""

    kind: ClassVar[str] = "lqg"


def design_lqg(
    model: InnovationsModel,
    weights: RiccatiWeights,
    layout: ObservationLayout,
    actuator: Actuator,
    latency: int = 0,
) -> LqgController:
    """Return the LQG controller of a model as it stands: no load is added.

    Args:
        model: without direct feed-through.
        weights: quadratic part of the cost.
        layout: observation columns.
        actuator: its limits are kept by the controller too.
        latency: samples between a decision and its effect.

    Raises:
        RiccatiError: there is no stabilising solution.
    """
    form = lqg_form(model, weights, layout, actuator, latency)
    return LqgController(form, layout, model.sample_time_s)


def stationary_cost(
    form: FilterForm,
    model: InnovationsModel,
    weights: RiccatiWeights,
    layout: ObservationLayout,
    latency: int = 0,
) -> float:
    """Return the expected stage cost of a linear loop under noise alone, limits left aside.

    From the stationary covariance of the closed loop (a discrete Lyapunov equation); the level
    of outputs and inputs is taken to be where it should be.

    Raises:
        IdlearnError: the loop is unstable.
    """
    from scipy.linalg import solve_discrete_lyapunov

    A, E, Cy, Cu = closed_loop_matrix(form, model, layout, latency)
    radius = float(np.abs(np.linalg.eigvals(A)).max(initial=0.0))
    if radius > 1 + 1e-9:
        raise IdlearnError(f"the loop is unstable (spectral radius {radius:.4f}); it has no cost")
    if radius > 1 - 1e-7:
        # a load that walks: outputs and moves are stationary although the state is not
        A = A * (1 - 1e-7) / radius
    X = solve_discrete_lyapunov(A, E @ model.S @ E.T)
    n_u = layout.n_u
    n = len(A)
    joint = np.zeros((n + model.n_y, n + model.n_y))
    joint[:n, :n], joint[n:, n:] = X, model.S
    on_y = np.concatenate([Cy, np.eye(model.n_y)], axis=1)
    previous = np.zeros((n_u, n + model.n_y))
    previous[:, n - n_u : n] = np.eye(n_u)

    def variance(rows: np.ndarray) -> np.ndarray:
        return np.einsum("ij,jk,ik->i", rows, joint, rows)

    return float(
        weights.output @ variance(on_y)
        + weights.move @ variance(Cu - previous)
        + (weights.energy @ variance(Cu) if weights.energy.any() else 0.0)
    )


def exact_cost(
    model: InnovationsModel,
    weights: RiccatiWeights,
    layout: ObservationLayout,
    actuator: Actuator,
    latency: int = 0,
) -> float:
    """Return the least expected stage cost under noise alone, the plant known and no limits."""
    form = lqg_form(model, weights, layout, actuator, latency)
    return stationary_cost(form, model, weights, layout, latency)


def knob_model(model: InnovationsModel, load: float, noise: float) -> InnovationsModel:
    """Return the model with its load gain and its other innovation gains scaled.

    Args:
        model: offset-free.
        load: factor on the gain of the states that no input reaches.
        noise: factor on the gain of the others.
    """
    reach = model.reachable()
    K = noise * reach @ reach.T @ model.K
    return replace(model, K=K + load * (model.K - reach @ reach.T @ model.K))


def scaled(weights: RiccatiWeights, move: float) -> RiccatiWeights:
    """Return the weights with the move weight scaled; one without any gets a trace of it."""
    return replace(weights, move=weights.move * move)


def with_moves(weights: RiccatiWeights, reach: np.ndarray, spread: np.ndarray) -> RiccatiWeights:
    """Give every actuator a move weight, so that the weight can be scaled.

    A ten-thousandth of what the outputs weigh, per typical movement.
    """
    trace = 1e-4 * float(weights.output @ spread**2) / np.maximum(reach, 1e-300) ** 2
    return replace(weights, move=np.where(weights.move > 0, weights.move, trace))


def kept_design(
    a: Assignment, model: InnovationsModel, weights: RiccatiWeights, responses: PlantResponses
) -> tuple[float, FilterForm, np.ndarray]:
    """Return the LQG design with the least factor on the moves that keeps the robustness limit.

    Args:
        a: the task.
        model: offset-free.
        weights: with a weight on every move.
        responses: of the practice plants.

    Returns:
        the factor, the form, and its sensitivity peaks (1, P); of none that keeps the limit, the
        design that misses it least.
    """
    loop = a.practice.loop
    factors = [1.0] + [10.0 ** (i / 4) for i in range(1, 17)]
    forms = [
        lqg_form(model, scaled(weights, f), loop.layout, loop.actuator, a.latency_samples)
        for f in factors
    ]
    peaks = sensitivity_peaks(forms, responses, loop.layout, a.latency_samples)
    penalty = a.robustness.penalty(peaks)
    kept = next((i for i in range(len(forms)) if penalty[i] == 1), int(np.argmin(penalty)))
    return factors[kept], forms[kept], peaks[[kept]]


def lqg_contender(assignment: Assignment, name: str = "lqg") -> Contender:
    """Return LQG from the nominal model, its moves weighted until the robustness limit is kept.

    Args:
        assignment: the task.
        name: of the contender.
    """
    start = time.perf_counter()
    a, loop = assignment, assignment.practice.loop
    budget = Budget(a.budget_steps)
    model = offset_free(a.nominal.member(0))
    weights = with_moves(a.weights, a.reach, a.spread)
    responses = PlantResponses.of(a.practice.ensemble)
    factor, form, peaks = kept_design(a, model, weights, responses)
    practice = float(pessimistic(run_forms(a.practice, [form], cost=a.cost, budget=budget))[0])
    try:
        chosen = float(pessimistic(run_forms(a.selection, [form], cost=a.cost, budget=budget))[0])
    except BudgetSpent:
        chosen = float("nan")
    radius = closed_loop_radius(form, a.practice.ensemble, loop.layout, a.latency_samples)
    return Contender(
        name=name,
        side="classical",
        controller=LqgController(form, loop.layout, model.sample_time_s),
        plant_steps=budget.spent,
        seconds=time.perf_counter() - start,
        runs=(TrainingRun("nominal", practice, chosen),),
        peak=float(a.robustness.met(peaks)[0]),
        facts={
            "move_weight_factor": factor,
            "largest_closed_loop_pole": float(radius.max()),
        },
    )
