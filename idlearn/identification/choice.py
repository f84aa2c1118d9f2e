"""The automatic choice of structure: by free runs on held-out data, simplest first."""

import math
from dataclasses import dataclass, field
from typing import TYPE_CHECKING

import numpy as np

from idlearn.errors import TooShortError
from idlearn.identification.armax import ArmaxEstimator
from idlearn.identification.arx import ArxEstimator
from idlearn.identification.feedback import find_feedback
from idlearn.identification.orders import Orders, order_search
from idlearn.identification.result import FitResult, Status
from idlearn.identification.validation import (
    Validation,
    free_runs,
    settling_samples,
    validate,
)
from idlearn.logs import PlantLog
from idlearn.models import ArxModel
from idlearn.seeding import stream

if TYPE_CHECKING:
    import pandas as pd

HELD_OUT = 0.3
CLOSED_RUN = 100  # samples after which free runs are started again in closed loop
SIGN_DRAWS = 40


@dataclass(frozen=True, eq=False)
class Trial:
    """One structure that was tried.

    Attributes:
        structure: family and orders.
        fit: fitted on the first part of the log.
        nrmse: relative free-run error on the held-out part (root mean square over outputs) [-].
        error: its standard error, from a block bootstrap [-].
        white: Ljung-Box probability of its residuals on the first part [-].
    """

    structure: "Structure"
    fit: FitResult
    nrmse: float
    error: float
    white: float

    @property
    def size(self) -> int:
        """Number of parameters per output."""
        return self.structure.size

    @property
    def bic(self) -> float:
        """Schwarz criterion on the first part."""
        return float(self.fit.stats.get("bic", math.inf))


@dataclass(frozen=True, eq=False)
class Identified:
    """The outcome of an automatic identification.

    Attributes:
        chosen: fitted on the whole log given.
        validation: of the same structure, fitted on the first part, on the held-out part.
        alternatives: other structures that passed validation, fitted on the whole log.
        trials: everything tried, with held-out figures.
        estimated: the first part.
        held_out: the last part.
        at_bound: whether dead time or orders lie at the end of the search range.
    """

    chosen: FitResult
    validation: Validation
    alternatives: tuple[FitResult, ...]
    trials: tuple[Trial, ...]
    estimated: PlantLog
    held_out: PlantLog
    at_bound: bool = False
    extra: dict[str, float] = field(default_factory=dict)

    @property
    def tried(self) -> "pd.DataFrame":
        """One row per structure tried, best free run first."""
        import pandas as pd

        rows = [
            {
                "family": t.structure.family,
                "n_a": t.structure.n_a,
                "n_b": t.structure.n_b,
                "n_c": t.structure.n_c,
                "n_k": ",".join(str(k) for k in t.structure.n_k),
                "parameters": t.size,
                "free_run_nrmse": t.nrmse,
                "standard_error": t.error,
                "whiteness_p": t.white,
                "bic": t.bic,
                "status": t.fit.status.value,
            }
            for t in self.trials
        ]
        return pd.DataFrame(rows).sort_values("free_run_nrmse", kind="stable", ignore_index=True)


def identify(log: PlantLog, effort: str = "standard", seed: int = 1) -> Identified:
    """Choose order and dead time, and fit.

    The log is split in time: ARX short-listed by BIC and AICc, the simplest ones, and small
    ARMAX with and without an integrator in the noise, are fitted on the first 70 % and run freely
    on the rest. Of all whose error is within one standard error of the least, those with white
    residuals are preferred, and of these the simplest is taken. In closed loop the free run only
    sorts out what is far off, and the Schwarz criterion decides. The choice is then fitted on the
    whole log.

    Args:
        log: at least some 100 valid samples.
        effort: "quick", "standard" or "thorough": length of the short list.
        seed: for the bootstrap and the posterior draws.

    Raises:
        TooShortError: no segment is long enough.
    """
    estimated, held_out = log.split((1 - HELD_OUT, HELD_OUT))
    longest = int((estimated.segments[:, 1] - estimated.segments[:, 0]).max(initial=0))
    if longest < 40 or not len(held_out.segments):
        raise TooShortError(
            f"the longest unbroken stretch for estimation has {longest} samples; at least 40 and "
            "as many again for validation are needed. Use a longer log."
        )
    n_k_max = min(20, longest // 6)
    most = min(8, max(1, longest // 20))
    feedback = find_feedback(estimated)
    # in closed loop u[k] already knows y[k]: a dead time of 0 would identify the controller
    closed = feedback.closed or log.setpoint is not None
    n_k_min = 1 if closed else 0
    table = order_search(estimated, most, most, n_k_max, n_k_min)
    count = {"quick": 8, "standard": 14, "thorough": 24}.get(effort, 14)
    short_list = _short_list(table.tried, count, log.n_y, most)
    rng = stream(seed, "identify")
    trials = tuple(
        t for o in short_list if (t := _try(o, estimated, held_out, closed, rng)) is not None
    )
    best = _choose(trials, closed)
    passed = []
    validation = None
    for t in [best, *[t for t in _by_merit(trials, closed) if t is not best]]:
        model = t.fit.model
        draws = model.sample(SIGN_DRAWS, stream(seed, "identify", "sign", model.label))
        v = validate(
            model.linearise(),
            held_out,
            fitted=t.structure.n_a + t.structure.n_c,
            ensemble=draws,
            used=estimated,
        )
        if t is best:
            validation = v
        elif v.passed and t.white >= min(0.01, 0.01 * best.white):
            passed.append(t)
        if len(passed) >= 3:
            break
    assert validation is not None
    o = best.structure
    at_bound = n_k_max in o.n_k or (most > 2 and o.n_a == most and o.n_b == most)
    return Identified(
        chosen=best.structure.fit(log),
        validation=validation,
        alternatives=tuple(t.structure.fit(log) for t in passed),
        trials=trials,
        estimated=estimated,
        held_out=held_out,
        at_bound=at_bound,
    )


@dataclass(frozen=True)
class Structure:
    """A family with its orders.

    Attributes:
        family: "arx", "armax" or "arimax".
        n_a: lags of the outputs.
        n_b: lags of every input.
        n_k: dead time per input [samples].
        n_c: order of C; 0 for ARX.
    """

    family: str
    n_a: int
    n_b: int
    n_k: tuple[int, ...]
    n_c: int = 0

    @property
    def size(self) -> int:
        """Number of parameters per output; an integrator counts as one."""
        return self.n_a + self.n_b * len(self.n_k) + self.n_c + (self.family == "arimax")

    def fit(self, log: PlantLog) -> FitResult:
        """Fit the structure to a log."""
        if self.family == "arx":
            return ArxEstimator(n_a=self.n_a, n_b=self.n_b, n_k=self.n_k).fit(log)
        return ArmaxEstimator(
            n_a=self.n_a,
            n_b=self.n_b,
            n_c=self.n_c,
            n_k=self.n_k,
            integrated=self.family == "arimax",
        ).fit(log)


def structure_of(model: ArxModel) -> Structure:
    """Return the structure of a fitted model."""
    return Structure(model.family, model.n_a, max(model.n_b), model.n_k, model.n_c)


def _short_list(tried: tuple[Orders, ...], count: int, n_y: int, most: int) -> list[Structure]:
    """Take the best ARX by both criteria and the best of every small size, and small ARMAX.

    Long ARX find the dead time although the noise is coloured; the ARMAX structures take it from
    them.
    """
    chosen: dict[Structure, None] = {}

    def add(o: Orders) -> None:
        chosen[Structure("arx", o.n_a, o.n_b, o.n_k)] = None

    for criterion in ("bic", "aicc"):
        ranked = sorted(tried, key=lambda o, c=criterion: getattr(o, c))  # type: ignore[misc]
        for o in ranked[: count // 2]:
            add(o)
    for size in range(1, 5):
        small = [o for o in tried if o.n_a == size and o.n_b <= max(2, size)]
        if small:
            add(min(small, key=lambda o: o.bic))
    if n_y == 1:
        dead = {min(tried, key=lambda o: o.bic).n_k: None}
        dead[min(tried, key=lambda o: o.aicc).n_k] = None
        for n_k in dead:
            for n_a in range(1, min(3, most) + 1):
                for n_b in {1, min(n_a + 1, most)}:
                    for family in ("armax", "arimax"):
                        n_c = n_a + (family == "arimax")
                        chosen[Structure(family, n_a, n_b, n_k, n_c)] = None
    return list(chosen)


def _try(
    o: Structure, estimated: PlantLog, held_out: PlantLog, closed: bool, rng: np.random.Generator
) -> Trial | None:
    try:
        fit = o.fit(estimated)
    except TooShortError:
        return None
    model = fit.model.linearise()
    # in closed loop drift piles up in a long run, and says more about the load than the plant
    simulated, counts = free_runs(model, held_out, CLOSED_RUN if closed else None)
    if fit.status in (Status.RANK_DEFICIENT, Status.FAILED) or not counts.any():
        return Trial(o, fit, math.inf, math.inf, math.nan)
    with np.errstate(over="ignore", invalid="ignore"):
        y = held_out.y[counts]
        spread = np.maximum(y.std(axis=0), 1e-300)
        squares = (((y - simulated[counts]) / spread) ** 2).mean(axis=1)
    if not np.isfinite(squares).all():
        return Trial(o, fit, math.inf, math.inf, math.nan)
    nrmse = math.sqrt(squares.mean())
    block = max(10, min(len(squares) // 8, 2 * settling_samples(model)))
    means = _block_means(squares, block, rng)
    error = float(np.std(np.sqrt(means)))
    from idlearn.identification.validation import ljung_box, residual_correlations

    auto, _, n, _ = residual_correlations(model, estimated)
    white = (
        min(ljung_box(auto[:, i], n, o.n_a + o.n_c) for i in range(model.n_y)) if n else math.nan
    )
    return Trial(o, fit, nrmse, error, white)


def _block_means(
    values: np.ndarray, block: int, rng: np.random.Generator, n: int = 200
) -> np.ndarray:
    """Return the means of n block-bootstrap resamples: errors of a free run hang together."""
    starts = rng.integers(0, max(1, len(values) - block + 1), size=(n, -(-len(values) // block)))
    cumulative = np.concatenate([[0.0], np.cumsum(values)])
    return np.asarray(
        ((cumulative[np.minimum(starts + block, len(values))] - cumulative[starts]) / block).mean(1)
    )


def _choose(trials: tuple[Trial, ...], closed: bool) -> Trial:
    """Choose by free runs in open loop, by likelihood among sane free runs in closed loop."""
    close = _close(trials, closed)
    white = [t for t in close if t.white >= 0.01]
    if closed or not white:
        # none is white: the noise model decides, for the loop is simulated with it
        return min(white or close, key=lambda t: (t.bic, t.size))
    return min(white, key=lambda t: (t.size, t.nrmse))


def _close(trials: tuple[Trial, ...], closed: bool) -> list[Trial]:
    """Return the trials whose free run cannot be told from the best.

    In closed loop the input carries the disturbance, so that a free run is no fair judge between
    noise models: it only sorts out what is far off.
    """
    least = min(trials, key=lambda t: t.nrmse)
    slack = least.error if not closed else max(2 * least.error, 0.5 * least.nrmse)
    return [t for t in trials if t.nrmse <= least.nrmse + slack]


def _by_merit(trials: tuple[Trial, ...], closed: bool) -> list[Trial]:
    """Return the close trials, the most likely first in closed loop, else the best free run."""
    close = _close(trials, closed)
    return sorted(close, key=lambda t: (t.bic if closed else t.nrmse, t.size))
