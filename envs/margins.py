"""Robustness of a linear loop: sensitivity peak, gain, phase and delay margins, as sampled."""

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from idlearn.control import FilterForm, ObservationLayout
from idlearn.models import Ensemble, InnovationsModel


@dataclass(frozen=True, eq=False)
class PlantResponses:
    """Frequency responses of an ensemble, from actuators to outputs.

    Attributes:
        w: (n_w,) [rad/sample].
        response: (P, n_w, n_y, n_u).
        ensemble: the plants.
    """

    w: np.ndarray
    response: np.ndarray
    ensemble: Ensemble

    @classmethod
    def of(cls, ensemble: Ensemble, n_w: int = 80) -> "PlantResponses":
        """Compute the responses on a grid that is logarithmic below, even near Nyquist."""
        w = np.unique(
            np.concatenate([np.geomspace(1e-4, 0.3, n_w // 2), np.linspace(0.3, np.pi, n_w // 2)])
        )
        n = ensemble.n_actuators
        response = np.stack(
            [ensemble.member(i).frequency_response(w)[:, :, :n] for i in range(len(ensemble))]
        )
        return cls(w, response, ensemble)


def controller_response(form: FilterForm, layout: ObservationLayout, w: np.ndarray) -> np.ndarray:
    """Return the response from y to the request, everything the controller sees of itself closed.

    Args:
        form: with or without a leading axis of m candidates; the bounded read-out is linearised.
        layout: observation columns.
        w: (n_w,) [rad/sample].

    Returns:
        (m, n_w, n_u, n_y), complex.
    """
    f = form.linearised()
    F, G, H, J = (a if a.ndim == 3 else a[None] for a in (f.F, f.G, f.H, f.J))
    back = np.exp(-1j * w)[None, :, None, None]  # one sample of delay
    n_z, n_u = F.shape[-1], H.shape[-2]
    state = np.linalg.solve(
        np.eye(n_z) - F[:, None] * back,
        np.broadcast_to(G[:, None], (len(F), len(w), *G.shape[1:])),
    )
    T = H[:, None] @ state + J[:, None]  # (m, n_w, n_u, n_in)
    own = T[..., layout.u] * back ** (f.latency + 1)
    for i in range(f.latency):
        first = layout.n_obs + i * n_u
        own = own + T[..., first : first + n_u] * back ** (f.latency - i)
    return np.asarray(np.linalg.solve(np.eye(n_u) - own, T[..., layout.y]))


def sensitivity_peaks(
    forms: Sequence[FilterForm] | FilterForm,
    plants: PlantResponses,
    layout: ObservationLayout,
    latency_samples: int = 0,
) -> np.ndarray:
    """Return the largest sensitivity over frequency (m, P).

    Args:
        forms: candidates, or one stacked form.
        plants: responses of the ensemble.
        layout: observation columns.
        latency_samples: between a request and its effect.

    With several outputs the largest singular value of the output sensitivity is taken. A peak
    says nothing about an unstable loop: see `closed_loop_radius`.
    """
    form = forms if isinstance(forms, FilterForm) else FilterForm.stack(list(forms))
    C = (
        controller_response(form, layout, plants.w)
        * np.exp(-1j * latency_samples * plants.w)[None, :, None, None]
    )
    if layout.n_y == 1 and layout.n_u == 1:
        loop = 1.0 - plants.response[None, :, :, 0, 0] * C[:, None, :, 0, 0]
        return np.asarray(1.0 / np.maximum(np.abs(loop), 1e-12).min(axis=2))
    loop = np.eye(layout.n_y) - plants.response[None] @ C[:, None]
    smallest = np.linalg.svd(loop, compute_uv=False)[..., -1]
    return np.asarray(1.0 / np.maximum(smallest, 1e-12).min(axis=2))


def closed_loop_matrix(
    form: FilterForm, model: InnovationsModel, layout: ObservationLayout, latency_samples: int = 0
) -> tuple[np.ndarray, np.ndarray, np.ndarray, np.ndarray]:
    """Return the closed loop driven by the innovations, limits left aside.

    States [x, z, requests under way (oldest first), previous applied u].

    Returns:
        A, E (effect of e), and the rows that give y - y0 - e and u in terms of the states:
        Cy (n_y, n), and Cu (n_u, n + n_y), the latter on states and e.
    """
    f = form.linearised()
    n_x, n_z, n_u, n_y = model.n_x, f.F.shape[0], layout.n_u, layout.n_y
    B = model.B[:, :n_u]
    L = latency_samples
    n = n_x + n_z + (L + 1) * n_u
    ix, iz = slice(0, n_x), slice(n_x, n_x + n_z)
    iq = [slice(n_x + n_z + i * n_u, n_x + n_z + (i + 1) * n_u) for i in range(L + 1)]
    ip = iq[L]
    Cy = np.zeros((n_y, n))
    Cy[:, ix] = model.C
    # observation in terms of states and e
    O = np.zeros((f.G.shape[1], n + n_y))
    O[layout.y, :n] = Cy
    O[layout.y, n:] = np.eye(n_y)
    O[layout.u, ip] = np.eye(n_u)
    for i in range(f.latency):
        # a controller that assumes another latency sees its own last requests
        source = iq[L - f.latency + i] if f.latency <= L else iq[0]
        O[layout.n_obs + i * n_u : layout.n_obs + (i + 1) * n_u, source] = np.eye(n_u)
    Z = f.G @ O
    Z[:, iz] += f.F
    R = f.H @ Z + f.J @ O
    now = R if L == 0 else np.eye(n, n + n_y)[iq[0]]
    A = np.zeros((n, n + n_y))
    A[ix, ix] = model.A
    A[ix, n:] = model.K
    A[ix] += B @ now
    A[iz] = Z
    for i in range(L):
        A[iq[i]] = R if i == L - 1 else np.eye(n, n + n_y)[iq[i + 1]]
    A[ip] = now
    return A[:, :n], A[:, n:], Cy, now


def closed_loop_radius(
    form: FilterForm, ensemble: Ensemble, layout: ObservationLayout, latency_samples: int = 0
) -> np.ndarray:
    """Return the largest closed-loop pole that the controller can do anything about (P,).

    Load states of the plants stand on the unit circle by themselves and are left aside.
    """
    out = []
    for i in range(len(ensemble)):
        model = ensemble.member(i)
        basis = model.reachable()
        seen = InnovationsModel(
            A=basis.T @ model.A @ basis,
            B=basis.T @ model.B,
            C=model.C @ basis,
            D=model.D,
            K=basis.T @ model.K,
            S=model.S,
            u0=model.u0,
            y0=model.y0,
            sample_time_s=model.sample_time_s,
            n_actuators=model.n_actuators,
        )
        A = closed_loop_matrix(form, seen, layout, latency_samples)[0]
        out.append(np.abs(np.linalg.eigvals(A)).max())
    return np.array(out)


@dataclass(frozen=True)
class Margins:
    """Margins of one loop.

    Attributes:
        peak: sensitivity peak [-].
        gain: factor on the loop gain at which it gets unstable; inf if none [-].
        phase_deg: phase left at the first crossover; inf without one [deg].
        delay_samples: extra delay at which it gets unstable; inf if none [samples].
    """

    peak: float
    gain: float
    phase_deg: float
    delay_samples: float


def margins(
    form: FilterForm,
    model: InnovationsModel,
    layout: ObservationLayout,
    latency_samples: int = 0,
    n_w: int = 4000,
) -> Margins:
    """Return the margins of a single loop, one output and one actuator."""
    w = np.geomspace(1e-5, np.pi, n_w)
    plant = model.frequency_response(w)[:, 0, 0] * np.exp(-1j * latency_samples * w)
    loop = -plant * controller_response(form, layout, w)[0, :, 0, 0]
    peak = float((1.0 / np.abs(1.0 + loop)).max())
    size, turn = np.abs(loop), loop.imag
    gain = math.inf
    for k in np.flatnonzero((turn[:-1] * turn[1:] < 0) & (loop.real[:-1] < 0)):
        share = turn[k] / (turn[k] - turn[k + 1])
        at = -(loop.real[k] + share * (loop.real[k + 1] - loop.real[k]))
        if 0 < at < 1:
            gain = min(gain, 1.0 / at)
    # the Nyquist frequency ends the grid: there the response is real, a crossing by itself
    if 0 < -loop.real[-1] < 1:
        gain = min(gain, float(-1.0 / loop.real[-1]))
    left, delay = math.inf, math.inf
    for k in np.flatnonzero((size[:-1] - 1) * (size[1:] - 1) < 0):
        share = math.log(size[k]) / math.log(size[k] / size[k + 1])
        at = loop[k] + share * (loop[k + 1] - loop[k])
        phase = (np.angle(at) + np.pi) % (2 * np.pi)
        where = w[k] ** (1 - share) * w[k + 1] ** share
        left = min(left, math.degrees(phase))
        delay = min(delay, phase / where)
    return Margins(peak, float(gain), float(left), float(delay))
