"""Validation on data the model never saw: free run first, one-step fit never the headline."""

import math
from dataclasses import dataclass, field

import numpy as np

from idlearn.identification.feedback import Feedback, find_feedback
from idlearn.logs import PlantLog
from idlearn.models import Ensemble, InnovationsModel

LAGS = 20
LONGEST_RUN = 200  # samples of a free run after which a plant that integrates is started again
NO_BETTER = 0.95  # relative error from which a model is called no better than the naive guess
SIGN = 0.975  # posterior probability that the step gain has its sign
LIMIT_Z = 2.5758  # two-sided 99 %


@dataclass(frozen=True)
class Validation:
    """What a model can and cannot do on held-out data.

    Attributes:
        nrmse: free-run error over the spread of the data, per output; 0 perfect, 1 no better than
            the mean [-].
        vaf: variance accounted for by the free run, per output [-].
        k: prediction horizon of `k_step` [samples].
        k_step: error of the k-step prediction over the spread, per output [-].
        naive: error of holding the last value over the same k, per output [-].
        short_run: error of free runs restarted every few settling times, per output [-].
        whiteness_p: Ljung-Box probability of the residuals, least over outputs [-].
        auto: residual autocorrelation, lags 0..LAGS (LAGS + 1, n_y) [-].
        cross: correlation of residual with earlier input, lags 0..LAGS (LAGS + 1, n_in, n_y) [-].
        limit: 99 % limit of both [-].
        sign_probability: that the step gain of the first pair has its sign; NaN without ensemble.
        coverage95: share of held-out data inside the 95 % free-run bands; NaN without ensemble.
        feedback: closed loop and excitation of the data that were used.
        reasons: why it did not pass; empty if it did.
        remarks: what a reader should know although it passed.
    """

    nrmse: tuple[float, ...]
    vaf: tuple[float, ...]
    k: int
    k_step: tuple[float, ...]
    naive: tuple[float, ...]
    short_run: tuple[float, ...]
    whiteness_p: float
    auto: np.ndarray
    cross: np.ndarray
    limit: float
    sign_probability: float
    coverage95: float
    feedback: Feedback
    reasons: tuple[str, ...] = field(default=())
    remarks: tuple[str, ...] = field(default=())

    @property
    def passed(self) -> bool:
        """Whether the model may stand for the plant."""
        return not self.reasons


def settling_samples(model: InnovationsModel) -> int:
    """Return how long the response to the inputs takes to settle within 5 %, at least 5."""
    n = 2000
    response = np.abs(model.step_response(n)).reshape(n, -1)
    end = response[-1]
    away = np.abs(response - end) > 0.05 * np.maximum(end, 1e-300)
    last = n - np.argmax(away[::-1], axis=0)
    settle = np.where(away.any(axis=0), last, 0)
    longest = int(settle[settle < n].max(initial=0)) if (settle < n).any() else n // 4
    return max(5, longest)


def residual_correlations(
    model: InnovationsModel, log: PlantLog
) -> tuple[np.ndarray, np.ndarray, int, np.ndarray]:
    """Return auto- and cross-correlations of the one-step residuals.

    Returns:
        auto (LAGS + 1, n_y), cross (LAGS + 1, n_in, n_y) with earlier inputs, samples, and the
        residuals (N, n_y) of all segments in a row.
    """
    auto = np.zeros((LAGS + 1, model.n_y))
    cross = np.zeros((LAGS + 1, model.n_in, model.n_y))
    power_e, power_u, n, kept = np.zeros(model.n_y), np.zeros(model.n_in), 0, []
    for first, last in log.segments:
        if last - first < model.n_x + 2 * LAGS:
            continue
        skip = model.n_x
        e = model.innovations(log.inputs[first:last], log.y[first:last])[skip:]
        e = e - e.mean(axis=0)
        # residuals are compared with the moves of the input: levels are all alike
        u = np.diff(log.inputs[first:last], axis=0, prepend=log.inputs[first : first + 1])[skip:]
        u = u - u.mean(axis=0)
        for lag in range(LAGS + 1):
            auto[lag] += (e[lag:] * e[: len(e) - lag]).sum(axis=0)
            cross[lag] += np.einsum("ki,kj->ij", u[: len(u) - lag], e[lag:])
        power_e, power_u, n = power_e + (e**2).sum(axis=0), power_u + (u**2).sum(axis=0), n + len(e)
        kept.append(e)
    auto = auto / np.maximum(power_e, 1e-300)
    cross = cross / np.maximum(np.sqrt(power_u[:, None] * power_e), 1e-300)
    return auto, cross, n, np.concatenate(kept) if kept else np.zeros((0, model.n_y))


def ljung_box(auto: np.ndarray, n: int, fitted: int) -> float:
    """Return the probability of residuals this coloured if they were white.

    Args:
        auto: autocorrelations at lags 0..m (m + 1,).
        n: samples.
        fitted: parameters of the noise part.

    G. M. Ljung, G. E. P. Box, Biometrika 65, 1978.
    """
    from scipy.special import gammaincc

    m = len(auto) - 1
    lags = np.arange(1, m + 1)
    q = n * (n + 2) * np.sum(auto[1:] ** 2 / np.maximum(n - lags, 1))
    return float(gammaincc(max(m - fitted, 1) / 2, q / 2))


def free_runs(
    model: InnovationsModel, log: PlantLog, restart: int | None = None
) -> tuple[np.ndarray, np.ndarray]:
    """Simulate every segment from its inputs alone.

    Args:
        model: the model.
        log: held-out data.
        restart: samples after which the run starts again, from the state that the outputs so far
            tell; None never.

    Returns:
        simulated outputs (N, n_y) with NaN where there is none, and the mask (N,) of rows that
        count: the warm-up at the start of a segment does not.
    """
    out, counts = np.full(log.y.shape, np.nan), np.zeros(log.n_samples, dtype=bool)
    for first, last in log.segments:
        u, y = log.inputs[first:last], log.y[first:last]
        n = last - first
        warm = min(max(model.n_x, 2), n // 2)
        if n <= warm:
            continue
        end = n if restart is None else min(n, warm + restart)
        out[first : first + end] = model.free_run(u[:end], y[:warm])
        counts[first + warm : last] = True
        if end < n and restart is not None:
            known = model.predicted_states(u, y)
            for a in range(end, n, restart):
                b = min(a + restart, n)
                run = model.outputs(known[a], u[a:b] - model.u0)
                out[first + a : first + b] = model.y0 + run
    return out, counts


def relative_error(y: np.ndarray, guess: np.ndarray, spread: np.ndarray) -> np.ndarray:
    """Return the root mean square error over the spread, per column; inf where a guess diverged."""
    if not len(y):
        return np.full(y.shape[1], np.nan)
    # what an unstable model runs away to overflows, and is no number in the end
    with np.errstate(over="ignore", invalid="ignore"):
        error = np.sqrt(np.mean((y - guess) ** 2, axis=0)) / np.maximum(spread, 1e-300)
    return np.where(np.isnan(error), np.inf, error)


def validate(
    model: InnovationsModel,
    log: PlantLog,
    *,
    fitted: int = 0,
    ensemble: Ensemble | None = None,
    used: PlantLog | None = None,
    coverage95: float = math.nan,
) -> Validation:
    """Hold a model against data it never saw.

    Args:
        model: without direct feed-through or with it.
        log: held-out data.
        fitted: parameters of the noise part, for the whiteness test.
        ensemble: plausible plants around the model, for the sign of the gain.
        used: the data of the estimation, for the question of excitation; None takes `log`.
        coverage95: share of the held-out data inside the free-run bands, if known.

    Returns:
        figures, and the reasons against the model in plain words.
    """
    feedback = find_feedback(log if used is None else used)
    settle = settling_samples(model)
    whole, counts = free_runs(model, log)
    k = max(2, min(settle, 50))
    window = max(4 * model.n_x, min(4 * settle, LONGEST_RUN), 40)
    short, short_counts = free_runs(model, log, window)
    y = log.y[counts]
    spread = y.std(axis=0) if len(y) else np.ones(model.n_y)
    nrmse = relative_error(y, whole[counts], spread)
    short_run = relative_error(log.y[short_counts], short[short_counts], spread)
    ahead = model.k_step(log, k)
    rows = np.isfinite(ahead).all(axis=1)
    rows[:k] = False
    held = np.full(log.y.shape, np.nan)
    held[k:] = log.y[:-k]
    k_step = relative_error(log.y[rows], ahead[rows], spread)
    naive = relative_error(log.y[rows], held[rows], spread)
    auto, cross, n, _ = residual_correlations(model, log)
    white = (
        min((ljung_box(auto[:, i], n, fitted) for i in range(model.n_y)), default=math.nan)
        if n
        else math.nan
    )
    sign = _sign_probability(ensemble, min(settle, 400)) if ensemble is not None else math.nan
    limit = LIMIT_Z / math.sqrt(max(n, 1))
    reasons = _reasons(log, nrmse, short_run, k_step, naive, sign, feedback, k)
    remarks = _remarks(white, cross, limit, nrmse, feedback)
    return Validation(
        nrmse=tuple(nrmse.tolist()),
        vaf=tuple((1 - nrmse**2).tolist()),
        k=k,
        k_step=tuple(k_step.tolist()),
        naive=tuple(naive.tolist()),
        short_run=tuple(short_run.tolist()),
        whiteness_p=white,
        auto=auto,
        cross=cross,
        limit=limit,
        sign_probability=sign,
        coverage95=coverage95,
        feedback=feedback,
        reasons=reasons,
        remarks=remarks,
    )


def _sign_probability(ensemble: Ensemble, settle: int) -> float:
    gains = np.array(
        [ensemble.member(i).step_response(settle + 1)[-1, 0, 0] for i in range(len(ensemble))]
    )
    return float(max((gains > 0).mean(), (gains < 0).mean()))


def _reasons(
    log: PlantLog,
    nrmse: np.ndarray,
    short_run: np.ndarray,
    k_step: np.ndarray,
    naive: np.ndarray,
    sign: float,
    feedback: Feedback,
    k: int,
) -> tuple[str, ...]:
    reasons = []
    if not feedback.excited:
        reasons.append(
            "the log is a closed loop that nothing from outside moves, so the plant cannot be "
            "told from its controller"
        )
    for i, signal in enumerate(log.outputs):
        # a plant without a level of its own is judged on short runs
        if not min(nrmse[i], short_run[i]) < NO_BETTER:
            reasons.append(
                f"run freely on held-out data the model of {signal.name} is no better than the "
                f"mean value (relative error {nrmse[i]:.2f})"
            )
        if not k_step[i] < NO_BETTER * naive[i]:
            reasons.append(
                f"predicting {signal.name} {k} samples ahead the model is no better than holding "
                f"the last value (relative error {k_step[i]:.2f} against {naive[i]:.2f})"
            )
    if sign < SIGN:
        reasons.append(
            f"not even the sign of the gain is certain ({100 * sign:.0f} % of the plausible "
            "plants agree)"
        )
    return tuple(reasons)


def _remarks(
    white: float, cross: np.ndarray, limit: float, nrmse: np.ndarray, feedback: Feedback
) -> tuple[str, ...]:
    remarks = []
    if white < 0.01:
        remarks.append("the residuals are not white: the noise model is incomplete")
    beyond = float((np.abs(cross[1:]) > limit).mean()) if cross.size else 0.0
    if beyond > 0.1:
        remarks.append(
            "the residuals still depend on earlier inputs: the plant has more dynamics than the "
            "model"
        )
    if nrmse.max(initial=0.0) >= NO_BETTER:
        remarks.append("over long times the model drifts away; only short runs can be trusted")
    if feedback.closed:
        remarks.append("the log is a closed loop")
    return tuple(remarks)
