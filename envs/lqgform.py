"""Observer and regulator of a linear model as one filter form.

It stands below baselines and learning because both need it: LQG is this form, and predictive
control is this form wherever no limit is met.
"""

from dataclasses import dataclass, replace

import numpy as np

from idlearn.control import FilterForm, ObservationLayout
from idlearn.cost import RiccatiWeights
from idlearn.envs.actuator import Actuator
from idlearn.envs.contender import Assignment
from idlearn.envs.margins import PlantResponses, sensitivity_peaks
from idlearn.models import InnovationsModel
from idlearn.models.regulator import offset_free, regulator


def lqg_form(
    model: InnovationsModel,
    weights: RiccatiWeights,
    layout: ObservationLayout,
    actuator: Actuator,
    latency: int = 0,
) -> FilterForm:
    """Return the filter form of the LQG controller of a model.

    With z[k] = A x[k] + B_d d[k] + K e[k], known once y[k] is, and x[k] = z[k-1] + B u[k-1]:
    z[k] = (A - K C)(z[k-1] + B u[k-1]) + K y[k] + B_d d[k], all in deviations.

    Raises:
        RiccatiError: there is no stabilising solution.
    """
    n_u, n_x = model.n_actuators, model.n_x
    r = regulator(
        model,
        output=weights.output,
        energy=weights.energy,
        move=weights.move,
        reference=weights.reference,
        latency=latency,
    )
    B, Bd = model.B[:, :n_u], model.B[:, n_u:]
    predictor = model.A - model.K @ model.C
    n_in = layout.n_obs + latency * n_u
    under_way = slice(layout.n_obs, n_in)
    u0, d0 = model.u0[:n_u], model.u0[n_u:]
    G = np.zeros((n_x, n_in))
    G[:, layout.y] = model.K
    G[:, layout.u] = predictor @ B
    G[:, layout.disturbance] = Bd
    g = -model.K @ model.y0 - predictor @ B @ u0 - Bd @ d0
    J = np.zeros((n_u, n_in))
    wanted = np.where(np.isnan(weights.target), model.y0, weights.target) - model.y0
    h = u0 + r.offset - r.Ld @ d0 - r.Lp @ u0 - r.Lq @ np.tile(u0, latency)
    for column, output in enumerate(layout.controlled):
        if np.isnan(weights.target[output]):
            J[:, layout.setpoint.start + column] = r.Lr[:, output]
            wanted[output] = -model.y0[output]
    h = h + r.Lr @ wanted
    J[:, layout.disturbance] = r.Ld
    J[:, under_way] = r.Lq
    J[:, layout.u] = r.Lp
    Z, z0 = _bumpless(model, layout, n_in)
    return FilterForm.linear(
        F=predictor,
        G=G,
        g=g,
        H=r.Lz,
        J=J,
        h=h,
        Z=Z,
        z0=z0,
        low=actuator.low,
        high=actuator.high,
        latency=latency,
    )


def _bumpless(
    model: InnovationsModel, layout: ObservationLayout, n_in: int
) -> tuple[np.ndarray, np.ndarray]:
    """Return Z and z0: the plant is taken to rest at (y, u, d); loads take up the mismatch."""
    n_u = model.n_actuators
    B, Bd = model.B[:, :n_u], model.B[:, n_u:]
    left = np.concatenate([np.eye(model.n_x) - model.A, model.C])
    n_x, n_y, n_d = model.n_x, model.n_y, model.n_in - n_u
    right = np.zeros((n_x + n_y, n_y + n_d + n_u))  # columns y, d, u in deviations
    right[n_x:, :n_y] = np.eye(n_y)
    right[:n_x, n_y : n_y + n_d] = Bd
    right[:n_x, n_y + n_d :] = B
    x = np.linalg.pinv(left, rcond=1e-9) @ right
    Z = np.zeros((n_x, n_in))
    Z[:, layout.y] = x[:, :n_y]
    Z[:, layout.disturbance] = x[:, n_y : n_y + n_d]
    Z[:, layout.u] = x[:, n_y + n_d :] - B
    z0 = -(
        Z[:, layout.y] @ model.y0
        + Z[:, layout.disturbance] @ model.u0[n_u:]
        + Z[:, layout.u] @ model.u0[:n_u]
    )
    return Z, z0


KNOBS = ("move weight factor", "load gain factor", "noise gain factor")


@dataclass(frozen=True, eq=False)
class LqgKnobs:
    """What can be turned about an LQG design: logarithms of factors, all zero for the design.

    Attributes:
        assignment: the task.
        model: the nominal model, offset-free.
        weights: with a weight on every move.
    """

    assignment: Assignment
    model: InnovationsModel
    weights: RiccatiWeights

    # ranges of the knobs (3, 2)
    bounds = np.array([[-4.0, 9.0], [-3.5, 3.0], [-3.0, 0.7]])

    @classmethod
    def of(cls, a: Assignment) -> "LqgKnobs":
        """Take the nominal model and the cost of a task.

        A cost without moves gets a trace of them, so that their weight can be scaled: a
        ten-thousandth of what the outputs weigh, per typical movement.
        """
        trace = 1e-4 * float(a.weights.output @ a.spread**2) / np.maximum(a.reach, 1e-300) ** 2
        weights = replace(a.weights, move=np.where(a.weights.move > 0, a.weights.move, trace))
        return cls(a, offset_free(a.nominal.member(0)), weights)

    def turned(self, x: np.ndarray) -> tuple[InnovationsModel, RiccatiWeights]:
        """Return model and weights with the knobs at x (3,).

        The gain of the loads, which no input reaches, is scaled apart from that of the other
        states.
        """
        move, load, noise = np.exp(x)
        reach = self.model.reachable()
        inner = reach @ reach.T @ self.model.K
        model = replace(self.model, K=noise * inner + load * (self.model.K - inner))
        return model, replace(self.weights, move=self.weights.move * move)

    def form(self, x: np.ndarray) -> FilterForm:
        """Return the filter form with the knobs at x (3,)."""
        loop = self.assignment.practice.loop
        return lqg_form(
            *self.turned(x), loop.layout, loop.actuator, self.assignment.latency_samples
        )

    def kept(self, responses: PlantResponses) -> tuple[float, FilterForm, np.ndarray]:
        """Return the design with the least factor on the moves that keeps the robustness limit.

        Args:
            responses: of the practice plants.

        Returns:
            the factor, the form, and its sensitivity peaks (1, P); of none that keeps the limit,
            the design that misses it least.
        """
        a = self.assignment
        factors = [1.0] + [10.0 ** (i / 4) for i in range(1, 17)]
        forms = [self.form(np.array([np.log(f), 0.0, 0.0])) for f in factors]
        layout = a.practice.loop.layout
        peaks = sensitivity_peaks(forms, responses, layout, a.latency_samples)
        penalty = a.robustness.penalty(peaks)
        kept = next((i for i in range(len(forms)) if penalty[i] == 1), int(np.argmin(penalty)))
        return factors[kept], forms[kept], peaks[[kept]]

    def facts(self, x: np.ndarray) -> dict[str, float]:
        """Return the factors at x by name."""
        return {k: float(np.exp(v)) for k, v in zip(KNOBS, x, strict=True)}
