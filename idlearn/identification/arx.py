"""ARX by least squares, on the triangular factor of the regressor."""

from dataclasses import dataclass

import numpy as np

from idlearn.errors import InputError, TooShortError
from idlearn.identification.criteria import criteria
from idlearn.identification.regressors import centre_of, triangle
from idlearn.identification.result import FitResult, Status
from idlearn.logs import PlantLog
from idlearn.models import ArxModel

SIGNIFICANT = 5.0  # t-ratio from which on a constant is kept beside the removed means
WORST_CONDITION = 1e12


@dataclass(frozen=True, kw_only=True)
class ArxEstimator:
    """ARX of given orders by least squares.

    y[k] = -sum a_i y[k-i] + sum b_j u[k-n_k-j+1] + e[k]; with several outputs one equation per
    output, with the lags of all outputs. Inputs are the actuators, then measured disturbances.
    After L. Ljung, System Identification, 2nd ed., 1999, section 7.3 (from memory).

    Attributes:
        n_a: lags of the outputs, 0 or more.
        n_b: lags of the inputs, one number or one per input, 1 or more.
        n_k: dead time, one number or one per input, 0 or more [samples].
        offset: "mean" removes the means of the valid rows; "constant" estimates a constant term
            as well; "none" does neither; "auto" removes the means and keeps a constant only
            where the record demands one beyond doubt, such as one that starts far from rest.
    """

    n_a: int = 2
    n_b: int | tuple[int, ...] = 2
    n_k: int | tuple[int, ...] = 1
    offset: str = "auto"

    def fit(self, log: PlantLog) -> FitResult:
        """Estimate on all segments of a log.

        Args:
            log: its segments each give rows of their own and are never glued.

        Returns:
            the model with its posterior; status RANK_DEFICIENT where the record does not
            determine the parameters.

        Raises:
            InputError: orders that make no sense for this log.
            TooShortError: fewer rows than parameters.
        """
        n_in = log.inputs.shape[1]
        n_b, n_k = per_input("n_b", self.n_b, n_in, 1), per_input("n_k", self.n_k, n_in, 0)
        if int(self.n_a) != self.n_a or self.n_a < 0:
            raise InputError(f"n_a is {self.n_a}; give a whole number of 0 or more")
        if self.offset not in ("auto", "mean", "constant", "none"):
            raise InputError(f"offset is {self.offset!r}; use auto, mean, constant or none")
        if self.offset == "auto":
            kept = self._solve(log, n_b, n_k, constant=True)
            t = np.abs(kept.model.theta[-1]) / np.maximum(
                np.sqrt(np.diag(kept.model.S)) * np.linalg.norm(kept.model.factor[-1]), 1e-300
            )
            if kept.status is Status.OK and t.max() > SIGNIFICANT:
                return kept
            return self._solve(log, n_b, n_k, constant=False)
        return self._solve(log, n_b, n_k, constant=self.offset == "constant")

    def _solve(
        self, log: PlantLog, n_b: tuple[int, ...], n_k: tuple[int, ...], constant: bool
    ) -> FitResult:
        centre = centre_of(log, self.offset != "none")
        last = [k + n - 1 for k, n in zip(n_k, n_b, strict=True)]
        factor, rows = triangle(log, centre, self.n_a, n_k, last, constant)
        n_y = log.n_y
        p = factor.shape[1] - n_y
        if rows <= p + 1:
            raise TooShortError(
                f"the log gives {rows} equations for {p} parameters; n_a={self.n_a}, n_b={n_b}, "
                f"n_k={n_k} need more than {p + 1}. Use a longer log or lower orders."
            )
        square = np.zeros((p + n_y, p + n_y))
        square[: len(factor)] = factor
        R, right, rest = square[:p, :p], square[:p, p:], square[p:, p:]
        # conditioning is judged on columns of one length: units must not matter
        length = np.linalg.norm(R, axis=0)
        length = np.where(length > 0, length, 1.0)
        U, s, Vt = np.linalg.svd(R / length)
        good = s > s[0] / WORST_CONDITION if s[0] > 0 else np.zeros(p, dtype=bool)
        inverse = np.where(good, 1.0 / np.where(good, s, 1.0), 0.0)
        factor_of = (Vt.T * inverse) / length[:, None]
        theta = factor_of @ (U.T @ right)
        missed = rest.T @ rest + (right - R @ theta).T @ (right - R @ theta)
        freedom = rows - p
        S = missed / freedom
        model = ArxModel(
            theta=theta,
            factor=factor_of,
            S=S,
            n_a=int(self.n_a),
            n_b=n_b,
            n_k=n_k,
            u_mean=centre.u,
            y_mean=centre.y,
            constant=constant,
            freedom=freedom,
            sample_time_s=log.sample_time_s,
            n_actuators=log.n_u,
        )
        loss = float(np.linalg.det(missed / rows)) if n_y > 1 else float(missed[0, 0] / rows)
        condition = float(s[0] / s[-1]) if s[-1] > 0 else np.inf
        stats = {
            "rows": float(rows),
            "parameters": float(p * n_y),
            "loss": loss,
            "noise_var": float(S[0, 0]),
            "condition": condition,
            **criteria(loss, p * n_y, rows),
        }
        if not good.all():
            return FitResult(
                model,
                Status.RANK_DEFICIENT,
                stats,
                "The record does not tell the parameters apart: the input hardly moves, or in "
                "closed loop it follows the output alone. Move the setpoint or the input, or use "
                "lower orders.",
            )
        if model.linearise().spectral_radius() > 1 + 1e-3:
            return FitResult(
                model,
                Status.UNSTABLE,
                stats,
                "The estimate is unstable. If the plant is not, use other orders or a longer log.",
            )
        return FitResult(model, Status.OK, stats, "")


def per_input(name: str, value: int | tuple[int, ...], n_in: int, least: int) -> tuple[int, ...]:
    """Return one whole number per input, or say what is wrong with `value`."""
    values = tuple(value) if np.ndim(value) else (value,) * n_in  # type: ignore[arg-type]
    if len(values) != n_in or any(int(v) != v or v < least for v in values):  # type: ignore
        raise InputError(
            f"{name} is {value}; give a whole number of {least} or more, or one for each of the "
            f"{n_in} inputs"
        )
    return tuple(int(v) for v in values)  # type: ignore[arg-type]
