"""Run filter forms in lock step, alone or many candidates at once."""

from collections.abc import Mapping
from dataclasses import fields
from typing import Any, ClassVar, Self

import numpy as np

from idlearn.control.form import FilterForm
from idlearn.control.protocol import ObservationLayout
from idlearn.errors import InputError


class FilterRunner:
    """Run one form, or a stack of them, in lock step.

    Args:
        form: with a leading axis of m candidates, or without (then m = 1).
        repeats: episodes of one candidate that stand side by side; n = groups * m * repeats,
            and episode (group, candidate, repeat) has index (group * m + candidate) * repeats
            + repeat. None with one candidate.
    """

    def __init__(self, form: FilterForm, repeats: int | None = None) -> None:
        """Lay the arrays out for one matrix product per sample."""
        self.form = form
        single = form.F.ndim == 2

        def lift(a: np.ndarray) -> np.ndarray:
            return a[None] if single else a

        def product(z: np.ndarray, o: np.ndarray, one: np.ndarray) -> np.ndarray:
            # acts on rows (z, o, 1): the constants ride along in the same matrix product
            joined = np.concatenate([z, o, one[..., None]], axis=-1)
            return np.ascontiguousarray(np.swapaxes(lift(joined), -1, -2))

        self._m = 1 if single else form.F.shape[0]
        self._repeats = repeats
        self.n_u, self.n_z, self.n_in = form.H.shape[-2], form.F.shape[-1], form.G.shape[-1]
        self._step = product(form.F, form.G, form.g)
        self._out = product(form.H, form.J, form.h)
        self._start = product(np.zeros_like(form.F), form.Z, form.z0)
        self._low, self._high = _shared(lift(form.low)), _shared(lift(form.high))
        self._bounded = form.bounded
        if self._bounded:
            self._inner = product(form.M, form.N, form.m)
            self._authority = _shared(lift(form.authority))
        self.reset(0)

    def reset(self, n: int) -> None:
        """Forget the past and get ready for n episodes."""
        if self._m > 1 and (self._repeats is None or n % (self._m * self._repeats)):
            raise InputError(f"{n} episodes cannot be shared among {self._m} candidates evenly")
        repeats = (self._repeats if self._m > 1 else n) or 1
        # rows (z, observation, requests under way, 1), kept from sample to sample
        self._row = np.ones((n // (self._m * repeats), self._m, repeats, self.n_z + self.n_in + 1))
        self._fresh: np.ndarray | None = None  # episodes that start with the next sample
        self._started = False

    def act(self, observation: np.ndarray) -> np.ndarray:
        """Return the requested u (n, n_u) for an observation (n, n_obs).

        An episode whose request is no number holds the applied u, and starts anew, bumplessly,
        at the next sample.

        Raises:
            InputError: the observation is not of the shape that `reset` got ready for.
        """
        row, n_z, last = self._row, self.n_z, self.n_z + self.n_in
        n_obs = self.n_in - self.form.latency * self.n_u
        if observation.shape != (row[..., 0].size, n_obs):
            raise InputError(
                f"the observation has shape {observation.shape}; reset({row[..., 0].size}) asks "
                f"for {(row[..., 0].size, n_obs)}"
            )
        applied = observation[:, -self.n_u :]
        flat = row.reshape(-1, row.shape[-1])
        for j in range(n_obs):  # column by column is faster than short rows
            flat[:, n_z + j] = observation[:, j]
        if not self._started:
            # nothing is under way yet but what holds the plant where it is
            under_way = np.tile(applied, (1, self.form.latency))
            row[..., n_z + n_obs : last] = under_way.reshape(*row.shape[:3], -1)
            row[..., :n_z] = row @ self._start  # what stood in the place of z has no weight
            self._started = True
        elif self._fresh is not None:
            row[..., :n_z] = np.where(self._fresh[..., None], 0.0, row[..., :n_z])
            row[..., :n_z] = np.where(self._fresh[..., None], row @ self._start, row[..., :n_z])
            self._fresh = None
        row[..., :n_z] = row @ self._step
        u = row @ self._out
        if self._bounded:
            u += self._authority * np.tanh(row @ self._inner)
        np.maximum(u, self._low, out=u)
        np.minimum(u, self._high, out=u)
        good = np.isfinite(u)
        if not good.all():
            # a request that is no number must not reach an actuator: hold what is applied
            self._fresh = ~good.all(axis=-1)
            u = np.where(good, u, applied.reshape(u.shape))
        if self.form.latency:
            row[..., n_z + n_obs : last - self.n_u] = row[..., n_z + n_obs + self.n_u : last].copy()
            row[..., last - self.n_u : last] = u
        return np.asarray(u.reshape(-1, self.n_u))

    @property
    def sent(self) -> tuple[np.ndarray, ...]:
        """Requests under way (n, n_u) each, oldest first; empty before the first sample."""
        if not self._started:
            return ()
        last = self.n_z + self.n_in
        flat = self._row.reshape(-1, self._row.shape[-1])
        first = last - self.form.latency * self.n_u
        return tuple(flat[:, i : i + self.n_u].copy() for i in range(first, last, self.n_u))

    def replace_last(self, u: np.ndarray) -> None:
        """Put another request (n, n_u) in the place of the one that `act` returned."""
        if self.form.latency:
            last = self.n_z + self.n_in
            self._row[..., last - self.n_u : last] = u.reshape(*self._row.shape[:3], self.n_u)

    @property
    def z(self) -> np.ndarray:
        """Filter state (n, n_z) after the last sample."""
        return self._row[..., : self.n_z].reshape(-1, self.n_z).copy()


def _shared(per_candidate: np.ndarray) -> np.ndarray:
    """Return (n_u,) where all candidates agree, which is faster, else (m, 1, n_u)."""
    same = np.all(per_candidate == per_candidate[0])
    return per_candidate[0] if same else per_candidate[:, None]


class FilterController:
    """Base of the controllers that are a `FilterForm`.

    Args:
        form: without a leading axis.
        layout: observation columns.
        sample_time_s: [s].

    Raises:
        InputError: the form does not fit the layout.
    """

    kind: ClassVar[str] = "linear"

    def __init__(self, form: FilterForm, layout: ObservationLayout, sample_time_s: float) -> None:
        """Keep the form and a runner of it."""
        wanted = layout.n_obs + form.latency * layout.n_u
        if form.F.ndim != 2 or form.J.shape != (layout.n_u, wanted):
            raise InputError(
                f"the form has read-out {form.J.shape}; the columns of the observation and the "
                f"latency ask for {(layout.n_u, wanted)}"
            )
        self.form, self.layout, self.sample_time_s = form, layout, sample_time_s
        self._runner = FilterRunner(form)

    def reset(self, n: int) -> None:
        """Forget the past and get ready for n episodes."""
        self._runner.reset(n)

    def act(self, observation: np.ndarray) -> np.ndarray:
        """Return the requested u (n, n_u) for an observation (n, n_obs)."""
        return self._runner.act(observation)

    def settings(self) -> dict[str, Any]:
        """Return the arrays of the form."""
        return {f.name: getattr(self.form, f.name) for f in fields(self.form)}

    @classmethod
    def from_settings(
        cls, settings: Mapping[str, Any], layout: ObservationLayout, sample_time_s: float
    ) -> Self:
        """Build the controller that `settings` describes."""
        return cls(FilterForm(**dict(settings)), layout, sample_time_s)


class LinearController(FilterController):
    """A linear policy given by the arrays of its form."""
