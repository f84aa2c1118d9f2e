"""Policy search: a bounded linear residual around the best classical controller.

u = base + authority * tanh(W phi), with features phi that vanish at rest, so that the base's
freedom from offset is kept; W is found by evolution from W = 0, so that the policy starts as the
base itself. From scratch such policies do badly, and a learned controller that can leave the
classical one only so far can do only so much harm.
"""

import time
from collections.abc import Mapping
from dataclasses import dataclass, replace
from typing import Any, ClassVar, Self

import numpy as np

from idlearn.budget import Budget, BudgetSpent
from idlearn.control import FilterController, FilterForm, ObservationLayout
from idlearn.envs import Assignment, Contender, TrainingRun, TrialGround
from idlearn.envs.scoring import Scorer
from idlearn.errors import InputError
from idlearn.search import evolve
from idlearn.seeding import stream

AUTHORITY = 0.2  # of the actuator's typical movement in the log
LEAKS = (0.8, 0.95)  # memory of the leaky sums of the error, per sample


@dataclass(frozen=True)
class Features:
    """What a residual sees: all of it zero at rest.

    Per setpoint column the error, its last change, and leaky sums of it; per output its change
    over one sample and over three; per actuator the distance from its own slow average.

    Attributes:
        layout: observation columns.
        error: size of an error that counts as 1 per setpoint column [engineering units].
        move: size of an input that counts as 1 per actuator [engineering units].
    """

    layout: ObservationLayout
    error: np.ndarray
    move: np.ndarray

    @property
    def n(self) -> int:
        """Number of features."""
        n_c, n_u = len(self.layout.controlled), self.layout.n_u
        return n_c * (2 + len(LEAKS)) + self.layout.n_y + n_u

    def filter(self, n_in: int) -> tuple[np.ndarray, np.ndarray, np.ndarray, np.ndarray]:
        """Return F, G (states) and P, R (features = P z + R o), and with them Z by `start`.

        States per setpoint column: the error of the last two samples and the leaky sums; per
        output y of the last two samples; per actuator the slow average.
        """
        layout, n_c = self.layout, len(self.layout.controlled)
        n_z = n_c * (2 + len(LEAKS)) + 2 * layout.n_y + layout.n_u
        F, G = np.zeros((n_z, n_z)), np.zeros((n_z, n_in))
        P, R = np.zeros((self.n, n_z)), np.zeros((self.n, n_in))
        z = f = 0
        for column, output in enumerate(layout.controlled):
            error = np.zeros(n_in)
            error[layout.setpoint.start + column] = 1.0 / self.error[column]
            error[output] = -1.0 / self.error[column]
            G[z] = error
            F[z + 1, z] = 1.0
            P[f, z] = 1.0
            P[f + 1, z], P[f + 1, z + 1] = 1.0, -1.0
            for i, leak in enumerate(LEAKS):
                F[z + 2 + i, z + 2 + i], G[z + 2 + i] = leak, (1 - leak) * error
                P[f + 2 + i, z + 2 + i] = 1.0
            z, f = z + 2 + len(LEAKS), f + 2 + len(LEAKS)
        # without a setpoint there is no size of an error: outputs count in their own unit
        size = float(np.mean(self.error)) if n_c else 1.0
        for output in range(layout.n_y):
            G[z, output] = 1.0 / size
            F[z + 1, z] = 1.0
            P[f, z], P[f, z + 1] = 1.0, -1.0
            z, f = z + 2, f + 1
        for j in range(layout.n_u):
            u = np.zeros(n_in)
            u[layout.u.start + j] = 1.0 / self.move[j]
            F[z, z], G[z] = 0.9, 0.1 * u
            P[f, z] = -1.0
            R[f] = u
            z, f = z + 1, f + 1
        return F, G, P, R

    def start(self, n_in: int) -> np.ndarray:
        """Return Z: the filter state just before the first sample, at rest there."""
        F, G, _, _ = self.filter(n_in)
        Z = np.zeros_like(G)
        n_c = len(self.layout.controlled)
        z = n_c * (2 + len(LEAKS))
        for _ in range(self.layout.n_y):
            Z[z] = G[z]
            Z[z + 1] = G[z]
            z += 2
        for _ in range(self.layout.n_u):
            Z[z] = G[z] / 0.1
            z += 1
        return Z


def residual_form(
    base: FilterForm, features: Features, W: np.ndarray, authority: np.ndarray
) -> FilterForm:
    """Join a base controller and a bounded residual into one filter form.

    Args:
        base: of the controller it is built around.
        features: what the residual sees.
        W: (n_u, n_features) [-].
        authority: (n_u,) [engineering units].
    """
    n_in, n_u = base.G.shape[1], base.H.shape[0]
    F, G, P, R = features.filter(n_in)
    n_b, n_f = len(base.F), len(F)
    nothing = np.zeros((n_u, n_f))
    return FilterForm(
        F=np.block([[base.F, np.zeros((n_b, n_f))], [np.zeros((n_f, n_b)), F]]),
        G=np.concatenate([base.G, G]),
        g=np.concatenate([base.g, np.zeros(n_f)]),
        H=np.concatenate([base.H, nothing], axis=1),
        J=base.J,
        h=base.h,
        Z=np.concatenate([base.Z, features.start(n_in)]),
        z0=np.concatenate([base.z0, np.zeros(n_f)]),
        M=np.concatenate([np.zeros((n_u, n_b)), W @ P], axis=1),
        N=W @ R,
        m=np.zeros(n_u),
        authority=np.asarray(authority, dtype=float),
        low=base.low,
        high=base.high,
        latency=base.latency,
    )


class ResidualController(FilterController):
    """A classical controller with a bounded learned residual.

    Args:
        base: form of the classical controller.
        features: what the residual sees.
        W: (n_u, n_features).
        authority: (n_u,) [engineering units].
        sample_time_s: [s].
    """

    kind: ClassVar[str] = "residual"

    def __init__(
        self,
        base: FilterForm,
        features: Features,
        W: np.ndarray,
        authority: np.ndarray,
        sample_time_s: float,
    ) -> None:
        """Build the joint filter form."""
        self.base, self.features, self.W = base, features, np.asarray(W, dtype=float)
        self.authority = np.asarray(authority, dtype=float)
        form = residual_form(base, features, self.W, self.authority)
        super().__init__(form, features.layout, sample_time_s)

    def settings(self) -> dict[str, Any]:
        """Return base, features and weights."""
        return {
            "base": {k: getattr(self.base, k) for k in FilterForm.__dataclass_fields__},
            "error": self.features.error,
            "move": self.features.move,
            "W": self.W,
            "authority": self.authority,
        }

    @classmethod
    def from_settings(
        cls, settings: Mapping[str, Any], layout: ObservationLayout, sample_time_s: float
    ) -> Self:
        """Build the controller that `settings` describes."""
        features = Features(layout, settings["error"], settings["move"])
        return cls(
            FilterForm(**settings["base"]),
            features,
            settings["W"],
            settings["authority"],
            sample_time_s,
        )


def train_residual(assignment: Assignment, base: Contender, name: str = "evolution") -> Contender:
    """Train a bounded linear residual by evolution, several times, and keep the best artefact.

    Every run has noise streams of its own, so that no residual of the model can be learnt by
    heart; which run's artefact is kept is decided on the selection plants.

    Args:
        assignment: the task.
        base: the classical controller to build around.
        name: of the contender.

    Raises:
        InputError: the base has no filter form.
    """
    begin = time.perf_counter()
    a, loop = assignment, assignment.practice.loop
    form = getattr(base.controller, "form", None)
    if not isinstance(form, FilterForm) or form.bounded:
        raise InputError(f"{base.name} has no linear filter form to build a residual around")
    features = Features(loop.layout, a.spread[list(loop.layout.controlled)] * 0.2, a.reach * 0.2)
    authority = AUTHORITY * a.reach
    shape = (loop.layout.n_u, features.n)
    budget = Budget(a.budget_steps)

    def build(x: np.ndarray) -> FilterForm:
        return residual_form(form, features, x.reshape(shape), authority)

    judge = Scorer(a, build, budget)
    nothing = np.zeros(shape).ravel()
    runs, best, least = [], nothing, np.inf
    per_run = (budget.limit - (a.runs + 1) * 2 * a.selection.steps) // max(a.runs, 1)
    for run in range(a.runs):
        rng = stream(a.seed, "train", name, run)
        allowed = Budget(min(per_run, budget.left))
        scorer = Scorer(a, build, allowed, _fresh_noise(a.practice, rng))
        try:
            result = evolve(
                scorer,
                nothing,
                sigma=0.1,
                rng=rng,
                generations=100,
                population=4 + 4 * int(np.ceil(np.log2(nothing.size))),
                patience=15,
            )
        except BudgetSpent:
            break
        budget.charge(min(allowed.spent, budget.left))
        chosen = judge.selection(result.x)
        runs.append(TrainingRun(f"seed {run}", result.value, chosen, result.history[0]))
        if chosen < least:
            best, least = result.x, chosen
    # the untouched base is an artefact too: a residual that does not help is not deployed
    if judge.selection(nothing) <= least:
        best = nothing
    return Contender(
        name=name,
        side="learned",
        controller=ResidualController(
            form, features, best.reshape(shape), authority, base.controller.sample_time_s
        ),
        plant_steps=budget.spent,
        seconds=time.perf_counter() - begin,
        runs=tuple(runs),
        peak=judge.peak(best),
        facts={
            "base": base.name,
            "authority": authority,
            "largest_weight": float(np.abs(best).max()),
        },
    )


def _fresh_noise(ground: TrialGround, rng: np.random.Generator) -> TrialGround:
    streams = tuple(
        replace(s, noise=rng.standard_normal(s.noise.shape) * float(np.any(s.noise)))
        for s in ground.streams
    )
    return replace(ground, streams=streams)
