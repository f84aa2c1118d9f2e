"""The linear form of controllers: one filter, a linear read-out and a bounded one."""

from dataclasses import dataclass, fields, replace
from typing import Self

import numpy as np

from idlearn.errors import InputError


@dataclass(frozen=True)
class FilterForm:
    """A controller as one linear filter with a linear and a bounded read-out.

    With o the observation followed by the `latency` requests that are still under way (oldest
    first, n_u columns each):

        z[k] = F z[k-1] + G o[k] + g
        u[k] = H z[k] + J o[k] + h + authority * tanh(M z[k] + N o[k] + m)

    clipped to [low, high]. Before the first sample z[-1] = Z o[0] + z0, chosen so that the
    start is bumpless. PID, LQG, linear policies and bounded linear residuals all have this form;
    the previous applied u among the observations is what keeps integrators from winding up.
    A leading axis on every array holds several candidates.

    Attributes:
        F: (n_z, n_z).
        G: (n_z, n_in) with n_in = n_obs + latency * n_u.
        g: (n_z,).
        H: (n_u, n_z).
        J: (n_u, n_in).
        h: (n_u,) [engineering units].
        Z: (n_z, n_in).
        z0: (n_z,).
        M: (n_u, n_z).
        N: (n_u, n_in).
        m: (n_u,).
        authority: (n_u,) most that the bounded read-out adds [engineering units].
        low: (n_u,) lower limit of requests [engineering units].
        high: (n_u,) upper limit of requests [engineering units].
        latency: samples between a decision and its effect.
    """

    F: np.ndarray
    G: np.ndarray
    g: np.ndarray
    H: np.ndarray
    J: np.ndarray
    h: np.ndarray
    Z: np.ndarray
    z0: np.ndarray
    M: np.ndarray
    N: np.ndarray
    m: np.ndarray
    authority: np.ndarray
    low: np.ndarray
    high: np.ndarray
    latency: int = 0

    def __post_init__(self) -> None:
        """Refuse arrays that do not fit together."""
        lead, n_z = self.F.shape[:-2], self.F.shape[-1]
        n_u, n_in = self.J.shape[-2:]
        wanted = {
            "F": (n_z, n_z), "G": (n_z, n_in), "g": (n_z,), "H": (n_u, n_z), "J": (n_u, n_in),
            "h": (n_u,), "Z": (n_z, n_in), "z0": (n_z,), "M": (n_u, n_z), "N": (n_u, n_in),
            "m": (n_u,), "authority": (n_u,), "low": (n_u,), "high": (n_u,),
        }  # fmt: skip
        for name, shape in wanted.items():
            found = getattr(self, name).shape
            if found != (*lead, *shape):
                raise InputError(
                    f"{name} has shape {found}; {(*lead, *shape)} fits the other arrays"
                )
        if self.latency < 0:
            raise InputError(f"latency is {self.latency} samples; it has to be 0 or more")

    @classmethod
    def linear(
        cls,
        *,
        F: np.ndarray,
        G: np.ndarray,
        H: np.ndarray,
        J: np.ndarray,
        low: np.ndarray,
        high: np.ndarray,
        latency: int = 0,
        g: np.ndarray | None = None,
        h: np.ndarray | None = None,
        Z: np.ndarray | None = None,
        z0: np.ndarray | None = None,
    ) -> Self:
        """Build a form without a bounded read-out; what is not given is zero."""
        n_z, n_u = F.shape[-1], H.shape[-2]
        lead = F.shape[:-2]
        return cls(
            F=F,
            G=G,
            g=np.zeros((*lead, n_z)) if g is None else g,
            H=H,
            J=J,
            h=np.zeros((*lead, n_u)) if h is None else h,
            Z=np.zeros_like(G) if Z is None else Z,
            z0=np.zeros((*lead, n_z)) if z0 is None else z0,
            M=np.zeros_like(H),
            N=np.zeros_like(J),
            m=np.zeros((*lead, n_u)),
            authority=np.zeros((*lead, n_u)),
            low=np.broadcast_to(low, (*lead, n_u)).astype(float),
            high=np.broadcast_to(high, (*lead, n_u)).astype(float),
            latency=latency,
        )

    @property
    def bounded(self) -> bool:
        """Whether the bounded read-out does anything."""
        return bool(np.any(self.authority > 0))

    def linearised(self) -> Self:
        """Return the form for small signals: tanh replaced by its argument."""
        a = self.authority
        return replace(
            self,
            H=self.H + a[..., None] * self.M,
            J=self.J + a[..., None] * self.N,
            h=self.h + a * self.m,
            authority=np.zeros_like(a),
        )

    @classmethod
    def stack(cls, forms: list[Self]) -> Self:
        """Stack forms along a leading axis; smaller ones are padded with idle states.

        Raises:
            InputError: no form, or forms of different latency, inputs or actuators.
        """
        kinds = {(f.latency, *f.J.shape) for f in forms}
        if len(kinds) != 1:
            raise InputError(
                f"{len(forms)} forms with {len(kinds)} different (latency, actuators, inputs) "
                "cannot be stacked; they have to be alike"
            )
        n_z = max(f.F.shape[-1] for f in forms)
        padded = [_padded(f, n_z) for f in forms]
        arrays = {
            f.name: np.stack([getattr(p, f.name) for p in padded])
            for f in fields(cls)
            if f.name != "latency"
        }
        return cls(**arrays, latency=forms[0].latency)


def _padded(form: FilterForm, n_z: int) -> FilterForm:
    extra = n_z - form.F.shape[-1]
    if extra == 0:
        return form
    return replace(
        form,
        F=np.pad(form.F, ((0, extra), (0, extra))),
        G=np.pad(form.G, ((0, extra), (0, 0))),
        g=np.pad(form.g, (0, extra)),
        H=np.pad(form.H, ((0, 0), (0, extra))),
        Z=np.pad(form.Z, ((0, extra), (0, 0))),
        z0=np.pad(form.z0, (0, extra)),
        M=np.pad(form.M, ((0, 0), (0, extra))),
    )
