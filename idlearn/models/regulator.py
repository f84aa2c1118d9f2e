"""Linear-quadratic regulation of a plant in innovations form, for designs and for prediction.

States that no actuator reaches (loads) are not regulated but answered: for every load, setpoint
and measured disturbance there is a best rest, and the regulator works on the distance from it.
The innovation of the present sample is known when u is decided, so that z = A x + B_d d + K e, the
state to come but for u, is what the feedback acts on: the current-estimate form, which costs less
than the predictor form.
"""

from dataclasses import dataclass, replace

import numpy as np

from idlearn.models.innovations import InnovationsModel
from idlearn.models.riccati import RiccatiError, RiccatiSolution, dare

LOAD_SLOWNESS = 3.0  # how much slower than the plant a load is taken to move
SLOWEST = 200.0  # time constant from which on a plant counts as integrating [samples]


@dataclass(frozen=True, eq=False)
class Regulator:
    """Feedback in deviations from the model's operating point.

    The decision is v = Lz z + Lr r + Ld d + Lq q + Lp p with z the state to come but for the
    input, r the wanted outputs, d the measured disturbances, q the requests under way (oldest
    first) and p the applied input one sample ago, plus the constant `offset`.

    Attributes:
        Lz: (n_u, n_x).
        Lr: (n_u, n_y).
        Ld: (n_u, n_d).
        Lq: (n_u, latency * n_u).
        Lp: (n_u, n_u).
        offset: (n_u,).
        solution: of the Riccati equation.
        target: the rest.
        reach: basis of the reached states (n_x, n_r).
        F: regulated system (n_s, n_s), states [reached, under way, previous].
        G: (n_s, n_u).
        Q: (n_s, n_s).
        R: (n_u, n_u).
        N: (n_s, n_u).
    """

    Lz: np.ndarray
    Lr: np.ndarray
    Ld: np.ndarray
    Lq: np.ndarray
    Lp: np.ndarray
    offset: np.ndarray
    solution: RiccatiSolution
    target: "Target"
    reach: np.ndarray
    F: np.ndarray
    G: np.ndarray
    Q: np.ndarray
    R: np.ndarray
    N: np.ndarray


@dataclass(frozen=True, eq=False)
class Target:
    """Where to rest: reached states and inputs as linear functions of what is asked.

    xi = X [w; r; d; 1], v = V [w; r; d; 1], with w the states that are not reached.

    Attributes:
        X: (n_r, n_w + n_y + n_d + 1).
        V: (n_u, n_w + n_y + n_d + 1).
        unreached: basis of the states not reached (n_x, n_w).
    """

    X: np.ndarray
    V: np.ndarray
    unreached: np.ndarray


def offset_free(model: InnovationsModel, slowness: float = LOAD_SLOWNESS) -> InnovationsModel:
    """Return the model with a load state per actuator, so that its regulator leaves no offset.

    A constant load leaves a lasting innovation of E per unit; the gain of the load states is set
    so that they find the load with a time constant of `slowness` times the plant's own.

    Args:
        model: one that has loads of its own is returned unchanged.
        slowness: time constant of the load estimate over that of the plant [-].
    """
    if _has_load(model):
        return model
    n_u = model.n_actuators
    seen = np.eye(model.n_x) - model.A + model.K @ model.C
    if not model.n_x or np.linalg.cond(seen) > 1e12:
        return model
    lasting = model.C @ np.linalg.solve(seen, model.B[:, :n_u])
    if not lasting.any():
        return model
    basis = model.reachable()
    radius = float(np.abs(np.linalg.eigvals(basis.T @ model.A @ basis)).max(initial=0.0))
    own = -1 / np.log(radius) if 0 < radius < 1 else np.inf
    samples = slowness * float(np.clip(own, 2.0, SLOWEST))
    return model.with_load(np.linalg.pinv(lasting) / samples)


def _has_load(model: InnovationsModel) -> bool:
    basis = model.reachable()
    if basis.shape[1] == model.n_x:
        return False
    rest = _complement(basis)
    poles = np.linalg.eigvals(rest.T @ model.A @ rest)
    seen = np.abs(rest.T @ model.K).max(initial=0.0) > 0
    return bool(seen and (np.abs(np.abs(poles) - 1) < 1e-3).any())


def _complement(basis: np.ndarray) -> np.ndarray:
    u, _, _ = np.linalg.svd(basis)
    return np.asarray(u[:, basis.shape[1] :])


def regulator(
    model: InnovationsModel,
    *,
    output: np.ndarray,
    energy: np.ndarray,
    move: np.ndarray,
    reference: np.ndarray,
    latency: int = 0,
) -> Regulator:
    """Design the regulator of a model under a quadratic cost.

    Args:
        model: without direct feed-through.
        output: weight of each output's squared distance from its wanted value (n_y,).
        energy: weight of (u - reference) squared (n_u,).
        move: weight of squared moves (n_u,).
        reference: (n_u,) [engineering units].
        latency: samples between a decision and its effect.

    Raises:
        RiccatiError: there is no stabilising solution.
    """
    n_u, n_y = model.n_actuators, model.n_y
    B, Bd = model.B[:, :n_u], model.B[:, n_u:]
    acting = replace(model, B=B, D=model.D[:, :n_u], u0=model.u0[:n_u])
    reach = acting.reachable()
    if not reach.shape[1]:
        raise RiccatiError("no actuator moves this plant; there is nothing to regulate")
    unreached = _complement(reach)
    A_r, B_r, C_r = reach.T @ model.A @ reach, reach.T @ B, model.C @ reach
    target = _target(
        A_r,
        B_r,
        C_r,
        reach.T @ model.A @ unreached,
        reach.T @ Bd,
        model.C @ unreached,
        output,
        energy,
        reference - model.u0[:n_u],
        unreached,
    )
    F, G, Q, R, N = _augmented(A_r, B_r, C_r, output, energy, move, latency)
    solution = dare(F, G, Q, R, N)
    P = solution.P
    gain = np.linalg.pinv(R + G.T @ P @ G)
    n_r = len(A_r)
    # distance from rest one sample on, but for the decision: [z_r + B_r q_1; q_2 ..; q_1]
    carry = F.copy()
    carry[:n_r, :n_r] = np.eye(n_r)  # z already holds A x + K e
    feedback = gain @ (G.T @ P @ carry + N.T)
    return _assemble(
        model, target, feedback, reach, unreached, solution, latency, n_y, (F, G, Q, R, N)
    )


def _target(
    A: np.ndarray,
    B: np.ndarray,
    C: np.ndarray,
    Aw: np.ndarray,
    Bd: np.ndarray,
    Cw: np.ndarray,
    output: np.ndarray,
    energy: np.ndarray,
    reference: np.ndarray,
    unreached: np.ndarray,
) -> Target:
    """Find the cheapest rest: (I - A) xi - B v = Aw w + Bd d, least weighted distance."""
    n_r, n_u = B.shape
    n_y, n_w, n_d = len(C), Aw.shape[1], Bd.shape[1]
    M = np.concatenate([np.eye(n_r) - A, -B], axis=1)
    # columns of the right-hand sides: w, r, d, 1
    force = np.concatenate([Aw, np.zeros((n_r, n_y)), Bd, np.zeros((n_r, 1))], axis=1)
    _, s, Vt = np.linalg.svd(M)
    rank = int((s > 1e-9 * s[0]).sum())
    null = Vt[rank:].T
    particular = np.linalg.pinv(M, rcond=1e-9) @ force
    wy, wu = np.sqrt(output), np.sqrt(energy)
    seen = np.zeros((n_y + n_u, n_r + n_u))
    seen[:n_y, :n_r] = wy[:, None] * C
    seen[n_y:, n_r:] = np.diag(wu)
    wanted = np.zeros((n_y + n_u, n_w + n_y + n_d + 1))
    wanted[:n_y, :n_w] = -wy[:, None] * Cw
    wanted[:n_y, n_w : n_w + n_y] = np.diag(wy)
    wanted[n_y:, -1] = wu * reference
    theta = np.linalg.pinv(seen @ null, rcond=1e-9) @ (wanted - seen @ particular)
    best = particular + null @ theta
    return Target(best[:n_r], best[n_r:], unreached)


def _augmented(
    A: np.ndarray,
    B: np.ndarray,
    C: np.ndarray,
    output: np.ndarray,
    energy: np.ndarray,
    move: np.ndarray,
    latency: int,
) -> tuple[np.ndarray, np.ndarray, np.ndarray, np.ndarray, np.ndarray]:
    """Return F, G, Q, R, N of the states [reached, under way, previous]."""
    n_r, n_u = B.shape
    n_s = n_r + (latency + 1) * n_u
    last = slice(n_s - n_u, n_s)
    F, G = np.zeros((n_s, n_s)), np.zeros((n_s, n_u))
    Q, R, N = np.zeros((n_s, n_s)), np.zeros((n_u, n_u)), np.zeros((n_s, n_u))
    F[:n_r, :n_r] = A
    Q[:n_r, :n_r] = C.T @ np.diag(output) @ C
    Q[last, last] = np.diag(move)
    if latency == 0:
        G[:n_r] = B
        G[last] = np.eye(n_u)
        R += np.diag(move + energy)
        N[last] = -np.diag(move)
    else:
        now = slice(n_r, n_r + n_u)
        F[:n_r, now] = B
        F[last, now] = np.eye(n_u)
        for i in range(latency - 1):
            a = n_r + i * n_u
            F[a : a + n_u, a + n_u : a + 2 * n_u] = np.eye(n_u)
        G[n_r + (latency - 1) * n_u : n_r + latency * n_u] = np.eye(n_u)
        Q[now, now] = np.diag(move + energy)
        Q[now, last] = Q[last, now] = -np.diag(move)
    # a decision that costs nothing by itself needs a trace of weight to be defined
    scale = max(float(np.abs(Q).max()), float(np.abs(R).max()), 1e-300)
    gain = float((np.abs(B) ** 2).max(initial=0.0))
    return F, G, Q, R + 1e-10 * scale * max(gain, 1e-12) * np.eye(n_u), N


def _assemble(
    model: InnovationsModel,
    target: Target,
    feedback: np.ndarray,
    reach: np.ndarray,
    unreached: np.ndarray,
    solution: RiccatiSolution,
    latency: int,
    n_y: int,
    system: tuple[np.ndarray, ...],
) -> Regulator:
    """Write v = v_rest - feedback (distance from rest) in terms of z, r, d, q, p."""
    n_u, n_r, n_w = model.n_actuators, reach.shape[1], unreached.shape[1]
    n_d = model.n_in - n_u
    on_z, on_v = feedback[:, :n_r], feedback[:, n_r:]  # on_v: under way, then previous
    # every input in the distance is measured from the input at rest
    B_r = reach.T @ model.B[:, :n_u]
    at_rest = target.V + on_z @ (target.X - B_r @ target.V)
    for i in range(latency + 1):
        at_rest = at_rest + on_v[:, i * n_u : (i + 1) * n_u] @ target.V
    by_w = at_rest[:, :n_w]
    return Regulator(
        Lz=-on_z @ reach.T + by_w @ unreached.T,
        Lr=at_rest[:, n_w : n_w + n_y],
        Ld=at_rest[:, n_w + n_y : n_w + n_y + n_d],
        Lq=-on_v[:, : latency * n_u],
        Lp=-on_v[:, latency * n_u :],
        offset=at_rest[:, -1],
        solution=solution,
        target=target,
        reach=reach,
        F=system[0],
        G=system[1],
        Q=system[2],
        R=system[3],
        N=system[4],
    )
