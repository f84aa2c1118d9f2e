"""ARMAX by prediction error, with analytic gradients and a safe start.

A(q) y = B(q) u + C(q) e, or the same for differences of y and u (integrated), in which case the
noise part carries the slow load of routine logs. The start is the two-stage estimate of
E. J. Hannan and J. Rissanen, Biometrika 69, 1982; then Gauss-Newton with step halving, after
L. Ljung, System Identification, 2nd ed., 1999, section 10.2 (both from memory).
"""

from dataclasses import dataclass

import numpy as np

from idlearn.errors import InputError, TooShortError
from idlearn.identification.arx import ArxEstimator, per_input
from idlearn.identification.criteria import criteria
from idlearn.identification.regressors import Centre, centre_of
from idlearn.identification.result import FitResult, Status
from idlearn.logs import PlantLog
from idlearn.models import ArxModel
from idlearn.models.arx import invertible

LONG = 15  # order of the first-stage ARX
MOST_STEPS = 40


@dataclass(frozen=True, kw_only=True)
class ArmaxEstimator:
    """ARMAX of given orders, single output, by prediction error.

    Attributes:
        n_a: lags of the output, 1 or more.
        n_b: lags of the inputs, one number or one per input, 1 or more.
        n_c: order of C, 1 or more.
        n_k: dead time, one number or one per input, 0 or more [samples].
        integrated: whether the equation holds for differences.
    """

    n_a: int = 2
    n_b: int | tuple[int, ...] = 2
    n_c: int = 2
    n_k: int | tuple[int, ...] = 1
    integrated: bool = False

    def fit(self, log: PlantLog) -> FitResult:
        """Estimate on all segments of a log.

        Returns:
            the model with its asymptotic posterior; status FAILED where no start could be had or
            the search did not come to rest.

        Raises:
            InputError: several outputs, or orders that make no sense.
            TooShortError: fewer rows than parameters.
        """
        if log.n_y != 1:
            raise InputError(f"the log has {log.n_y} outputs; ARMAX is fitted to one at a time")
        if self.n_a < 1 or self.n_c < 1:
            raise InputError(f"n_a={self.n_a}, n_c={self.n_c}; both have to be 1 or more")
        n_in = log.inputs.shape[1]
        n_b, n_k = per_input("n_b", self.n_b, n_in, 1), per_input("n_k", self.n_k, n_in, 0)
        problem = _Problem.of(log, self.n_a, n_b, self.n_c, n_k, self.integrated)
        p = self.n_a + sum(n_b) + self.n_c
        if problem.rows <= 2 * p + 10:
            raise TooShortError(
                f"the log gives {problem.rows} equations for {p} parameters; use a longer log or "
                "lower orders"
            )
        theta = _start(problem, log)
        theta, loss, done = _search(problem, theta)
        e, gradient = problem.errors(theta, gradient=True)
        freedom = problem.rows - p
        S = np.array([[e @ e / freedom]])
        # conditioning is judged on columns of one length: units must not matter
        length = np.linalg.norm(gradient, axis=0)
        length = np.where(length > 0, length, 1.0)
        _, s, Vt = np.linalg.svd(gradient / length, full_matrices=False)
        good = bool(s[-1] > 1e-10 * s[0])
        factor = (Vt.T / np.maximum(s, 1e-10 * s[0])) / length[:, None]
        model = ArxModel(
            theta=theta[:, None],
            factor=factor,
            S=S,
            n_a=self.n_a,
            n_b=n_b,
            n_k=n_k,
            u_mean=problem.centre.u,
            y_mean=problem.centre.y,
            constant=False,
            freedom=freedom,
            sample_time_s=log.sample_time_s,
            n_actuators=log.n_u,
            n_c=self.n_c,
            integrated=self.integrated,
        )
        stats = {
            "rows": float(problem.rows),
            "parameters": float(p),
            "loss": loss,
            "noise_var": float(S[0, 0]),
            **criteria(loss, p, problem.rows),
        }
        if not good:
            return FitResult(
                model,
                Status.RANK_DEFICIENT,
                stats,
                "The record does not tell the parameters apart; use lower orders or move the "
                "input more.",
            )
        if np.abs(model.poles()).max(initial=0.0) > 1 + 1e-3:
            return FitResult(
                model,
                Status.UNSTABLE,
                stats,
                "The estimate is unstable. If the plant is not, use other orders or a longer log.",
            )
        if not done:
            return FitResult(
                model,
                Status.FAILED,
                stats,
                "The search for the least prediction error did not come to rest; use lower orders.",
            )
        return FitResult(model, Status.OK, stats, "")


@dataclass(frozen=True, eq=False)
class _Problem:
    """Centred, perhaps differenced, data of every segment, and the orders."""

    data: tuple[tuple[np.ndarray, np.ndarray], ...]  # (y (n,), u (n, n_in)) per segment
    n_a: int
    n_b: tuple[int, ...]
    n_c: int
    n_k: tuple[int, ...]
    centre: Centre
    skip: int

    @classmethod
    def of(
        cls,
        log: PlantLog,
        n_a: int,
        n_b: tuple[int, ...],
        n_c: int,
        n_k: tuple[int, ...],
        integrated: bool,
    ) -> "_Problem":
        centre = centre_of(log)
        skip = max([n_a, n_c, *(k + n - 1 for k, n in zip(n_k, n_b, strict=True))])
        data = []
        for first, last in log.segments:
            y, u = log.y[first:last, 0] - centre.y[0], log.inputs[first:last] - centre.u
            if integrated:
                y, u = np.diff(y), np.diff(u, axis=0)
            if len(y) > 2 * skip + 2:
                data.append((y, u))
        return cls(tuple(data), n_a, n_b, n_c, n_k, centre, skip)

    @property
    def rows(self) -> int:
        return sum(len(y) - self.skip for y, _ in self.data)

    def split(self, theta: np.ndarray) -> tuple[np.ndarray, list[np.ndarray], np.ndarray]:
        """Return a, b per input, and C with its leading 1."""
        a, at, b = theta[: self.n_a], self.n_a, []
        for n in self.n_b:
            b.append(theta[at : at + n])
            at += n
        return a, b, np.concatenate([[1.0], theta[at:]])

    def errors(self, theta: np.ndarray, gradient: bool = False) -> tuple[np.ndarray, np.ndarray]:
        """Return prediction errors (rows,) and their gradient (rows, p), empty if not asked."""
        from scipy.signal import lfilter

        a, b, C = self.split(theta)
        errors, slopes = [], []
        for y, u in self.data:
            r = np.convolve(y, np.concatenate([[1.0], a]))[: len(y)]
            for i, n in enumerate(self.n_k):
                r = r - np.convolve(u[:, i], np.concatenate([np.zeros(n), b[i]]))[: len(y)]
            # before the segment nothing is known: the equation starts where its lags are filled
            r[: self.skip] = 0.0
            e = lfilter([1.0], C, r)
            errors.append(e[self.skip :])
            if gradient:
                fy, fe = lfilter([1.0], C, y), lfilter([1.0], C, e)
                fu = lfilter([1.0], C, u, axis=0)
                columns = [_late(fy, i) for i in range(1, self.n_a + 1)]
                for j, (k, n) in enumerate(zip(self.n_k, self.n_b, strict=True)):
                    columns += [-_late(fu[:, j], k + i) for i in range(n)]
                columns += [-_late(fe, i) for i in range(1, self.n_c + 1)]
                slopes.append(np.stack(columns, axis=1)[self.skip :])
        return np.concatenate(errors), np.concatenate(slopes) if gradient else np.zeros((0, 0))


def _late(x: np.ndarray, lag: int) -> np.ndarray:
    return x if lag == 0 else np.concatenate([np.zeros(lag), x[:-lag]])


def _start(problem: _Problem, log: PlantLog) -> np.ndarray:
    """Return the two-stage estimate: residuals of a long ARX stand in for the innovations."""
    longest = min(LONG, max(2, int(np.sqrt(problem.rows) / 2)))
    u = np.concatenate([u for _, u in problem.data])
    y = np.concatenate([y for y, _ in problem.data])
    ends = np.cumsum([len(y) for y, _ in problem.data])
    segments = np.stack([np.concatenate([[0], ends[:-1]]), ends], axis=1)
    whole = PlantLog.from_arrays(
        u=u, y=y[:, None], sample_time_s=log.sample_time_s, segments=segments
    )
    long = ArxEstimator(n_a=longest, n_b=longest, n_k=problem.n_k, offset="none").fit(whole).model
    rows, targets = [], []
    for y, u in problem.data:
        r = np.convolve(y, np.concatenate([[1.0], long.a]))[: len(y)]
        for i, k in enumerate(problem.n_k):
            r = r - np.convolve(u[:, i], np.concatenate([np.zeros(k), long.b[i]]))[: len(y)]
        first = longest + max(problem.n_k) + problem.skip
        columns = [-_late(y, i) for i in range(1, problem.n_a + 1)]
        for j, (k, n) in enumerate(zip(problem.n_k, problem.n_b, strict=True)):
            columns += [_late(u[:, j], k + i) for i in range(n)]
        columns += [_late(r, i) for i in range(1, problem.n_c + 1)]
        rows.append(np.stack(columns, axis=1)[first:])
        targets.append(y[first:])
    phi = np.concatenate(rows)
    length = np.linalg.norm(phi, axis=0)
    length = np.where(length > 0, length, 1.0)
    theta = np.linalg.lstsq(phi / length, np.concatenate(targets), rcond=1e-10)[0] / length
    return _safe(problem, theta)


def _safe(problem: _Problem, theta: np.ndarray) -> np.ndarray:
    out = theta.copy()
    out[len(theta) - problem.n_c :] = invertible(theta[len(theta) - problem.n_c :])
    return out


def _search(problem: _Problem, theta: np.ndarray) -> tuple[np.ndarray, float, bool]:
    """Minimise the mean squared prediction error; return parameters, loss, and whether at rest."""
    e, J = problem.errors(theta, gradient=True)
    loss = float(np.mean(e**2))
    for _ in range(MOST_STEPS):
        size = np.maximum(np.linalg.norm(J, axis=0), 1e-300)
        step = np.linalg.lstsq(J / size, -e, rcond=1e-9)[0] / size
        share, better = 1.0, False
        while share > 1e-4:
            trial = _safe(problem, theta + share * step)
            with np.errstate(over="ignore", invalid="ignore"):
                new = float(np.mean(problem.errors(trial)[0] ** 2))
            if new < loss:
                better = True
                break
            share *= 0.5
        if not better:
            return theta, loss, True
        gained = 1 - new / loss
        theta, loss = trial, new
        e, J = problem.errors(theta, gradient=True)
        if gained < 1e-7:
            return theta, loss, True
    return theta, loss, False
