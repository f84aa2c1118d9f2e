"""Tables about the models: what they can and cannot do, on data they never saw."""

from collections.abc import Sequence

import numpy as np

from idlearn.identification import EnsembleSet, ModelRecord
from idlearn.identification.bands import free_run_bands, refitted
from idlearn.identification.validation import LAGS, free_runs
from idlearn.logs import PlantLog
from idlearn.seeding import stream
from idlearn.study.tables import Columns, extend

ROWS = 1500
BAND_DRAWS = 60


def free_run_table(models: EnsembleSet, seed: int) -> Columns:
    """Return free_run.csv: the chosen structure of each part on its held-out data."""
    keys = ("part", "output", "elapsed_s", "measured", "model", "low", "high")
    table: Columns = {k: [] for k in keys}
    for record in models.records:
        if not record.chosen:
            continue
        found = models.identified[record.part]
        log = found.held_out
        model, members = refitted(
            record.fit.model,
            (record.widening, record.louder),
            found,
            stream(seed, "shown", record.part),
            BAND_DRAWS,
        )
        middle, counts = free_runs(model, log)
        low, high, _ = free_run_bands(members, log, stream(seed, "shown noise", record.part))
        rows = np.flatnonzero(counts)[:: max(1, -(-int(counts.sum()) // ROWS))]
        for i, signal in enumerate(log.outputs):
            extend(
                table,
                len(rows),
                part=record.part,
                output=signal.name,
                elapsed_s=log.elapsed_s[rows],
                measured=log.y[rows, i],
                model=middle[rows, i],
                low=low[rows, i],
                high=high[rows, i],
            )
    return table


def residual_table(models: EnsembleSet, log: PlantLog) -> Columns:
    """Return residuals.csv: correlations of the residuals with themselves and earlier inputs."""
    table: Columns = {k: [] for k in ("part", "output", "against", "lag", "correlation", "limit")}
    inputs = [s.name for s in (*log.actuators, *log.disturbances)]
    for record in models.records:
        if not record.chosen:
            continue
        v = record.validation
        for i, signal in enumerate(log.outputs):
            common = {"part": record.part, "output": signal.name, "limit": v.limit}
            extend(
                table,
                LAGS,
                **common,
                against="itself",
                lag=np.arange(1, LAGS + 1),
                correlation=v.auto[1:, i],
            )
            for j, name in enumerate(inputs):
                extend(
                    table,
                    LAGS + 1,
                    **common,
                    against=name,
                    lag=np.arange(LAGS + 1),
                    correlation=v.cross[:, j, i],
                )
    return table


def model_table(records: Sequence[ModelRecord]) -> Columns:
    """Return models.csv: every structure that took part."""
    rows = []
    for r in records:
        v = r.validation
        rows.append(
            {
                "part": r.part,
                "name": r.name,
                "family": r.fit.model.family,
                "orders": _orders(r),
                "free_run_nrmse": max(v.nrmse),
                "free_run_vaf": min(v.vaf),
                "k_step_nrmse": max(v.k_step),
                "coverage95": r.coverage95,
                "whiteness_p": v.whiteness_p,
                "widening": r.widening,
                "louder": r.louder,
                "passed": str(v.passed).lower(),
                "chosen": str(r.chosen).lower(),
                "reasons": "; ".join(v.reasons),
            }
        )
    return {k: [r[k] for r in rows] for k in rows[0]}


def _orders(record: ModelRecord) -> str:
    """Return the orders alone, such as "2/2/3": n_a/n_b/(n_c/)n_k."""
    return record.fit.model.label.removeprefix(record.fit.model.family).strip()


def orders_of(record: ModelRecord) -> dict[str, int | list[int]]:
    """Return the orders of a model, by name."""
    m = record.fit.model
    orders: dict[str, int | list[int]] = {"n_a": m.n_a, "n_b": list(m.n_b), "n_k": list(m.n_k)}
    return orders | ({"n_c": m.n_c} if m.n_c else {})
