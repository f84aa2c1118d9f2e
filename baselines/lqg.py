"""Linear-quadratic-Gaussian control: the regulator on the state of the innovations form.

The observer runs on the applied input that the observation reports, so that a limit at the
actuator never misleads it; that also is what keeps the load estimate from winding up.
"""

import time
from typing import ClassVar

import numpy as np

from idlearn.budget import Budget, BudgetSpent
from idlearn.control import FilterController, FilterForm, ObservationLayout
from idlearn.cost import RiccatiWeights
from idlearn.envs.actuator import Actuator
from idlearn.envs.contender import Assignment, Contender, TrainingRun, pessimistic
from idlearn.envs.lqgform import LqgKnobs, lqg_form
from idlearn.envs.margins import (
    PlantResponses,
    closed_loop_matrix,
    closed_loop_radius,
)
from idlearn.envs.population import run_forms
from idlearn.errors import IdlearnError
from idlearn.models import InnovationsModel


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


def lqg_contender(assignment: Assignment, name: str = "lqg") -> Contender:
    """Return LQG from the nominal model, its moves weighted until the robustness limit is kept.

    Args:
        assignment: the task.
        name: of the contender.
    """
    start = time.perf_counter()
    a, loop = assignment, assignment.practice.loop
    budget = Budget(a.budget_steps)
    knobs = LqgKnobs.of(a)
    factor, form, peaks = knobs.kept(PlantResponses.of(a.practice.ensemble))
    practice = float(pessimistic(run_forms(a.practice, [form], cost=a.cost, budget=budget))[0])
    try:
        chosen = float(pessimistic(run_forms(a.selection, [form], cost=a.cost, budget=budget))[0])
    except BudgetSpent:
        chosen = float("nan")
    radius = closed_loop_radius(form, a.practice.ensemble, loop.layout, a.latency_samples)
    return Contender(
        name=name,
        side="classical",
        controller=LqgController(form, loop.layout, knobs.model.sample_time_s),
        plant_steps=budget.spent,
        seconds=time.perf_counter() - start,
        runs=(TrainingRun("nominal", practice, chosen),),
        peak=float(a.robustness.met(peaks)[0]),
        facts={
            "move_weight_factor": factor,
            "largest_closed_loop_pole": float(radius.max()),
        },
    )
