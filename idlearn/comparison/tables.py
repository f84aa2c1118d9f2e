"""Tables of the comparison, column by column, as they are written to tables/*.csv."""

from collections.abc import Mapping, Sequence

import numpy as np

from idlearn.comparison.document import ratio_entry
from idlearn.comparison.trials import Trials
from idlearn.comparison.verdict import Verdict
from idlearn.envs import Contender

Table = dict[str, list[object]]


def contenders_table(verdict: Verdict, contenders: Sequence[Contender]) -> Table:
    """Return the columns of contenders.csv: one row per contender and cost."""
    of = {c.name: c for c in contenders}
    rows = []
    for f in verdict.figures.values():
        made = of.get(f.name)
        for cost, mean in f.means.items():
            ratio = ratio_entry(f, verdict, cost) if cost in f.ratios else {}
            rows.append(
                {
                    "name": f.name,
                    "kind": f.side,
                    "cost": cost,
                    "mean": mean.value,
                    "low": mean.both.low,
                    "high": mean.both.high,
                    "ratio": ratio.get("estimate", np.nan),
                    "ratio_low": ratio.get("low", np.nan),
                    "ratio_high": ratio.get("high", np.nan),
                    "violation_rate": f.violation.value,
                    "violation_high": f.violation.high,
                    "worst_tenth": f.worst_tenth,
                    "travel": f.travel,
                    "offset": f.offset,
                    "support": f.support,
                    "optimism_gap": f.optimism_gap,
                    "peak": made.peak if made else np.nan,
                    "plant_steps": made.plant_steps if made else 0,
                    "seconds": made.seconds if made else 0.0,
                    "runs": len(made.runs) if made else 0,
                    "at_limit": f.at_limit,
                    "interquartile_mean": f.middle,
                    "improvement": f.improvement,
                    "pairing_gain": f.pairing,
                }
            )
    return _columns(
        rows,
        "name kind cost mean low high ratio ratio_low ratio_high violation_rate violation_high "
        "worst_tenth travel offset support optimism_gap peak plant_steps seconds runs at_limit "
        "interquartile_mean improvement pairing_gain",
    )


def stress_table(verdict: Verdict) -> Table:
    """Return the columns of stress.csv: one row per contender and stress."""
    rows = [
        {
            "controller": f.name,
            "stress": stress,
            "mean": f.means[verdict.cost].value,
            "ratio": f.ratios[verdict.cost].value,
            "low": f.ratios[verdict.cost].both.low,
            "high": f.ratios[verdict.cost].both.high,
            "violation_rate": f.violation.value,
        }
        for stress, figures in verdict.stress.items()
        for f in figures.values()
    ]
    return _columns(rows, "controller stress mean ratio low high violation_rate")


def paired_table(jury: Trials, baseline: str, cost: int = 0) -> Table:
    """Return the columns of paired.csv: every episode of the others beside the baseline's."""
    against = jury.scores(baseline, cost)
    n_p, n_s = against.shape
    others = [n for n in jury.controllers if n != baseline]
    held: dict[str, list[np.ndarray]] = {"cost": [], "ratio": []}
    for name in others:
        own = jury.scores(name, cost)
        held["cost"].append(own.ravel())
        ratio = np.divide(own, against, out=np.full_like(own, np.nan), where=against > 0)
        held["ratio"].append(ratio.ravel())
    m = len(others)
    scenario = np.array(jury.scenarios, dtype=object)[jury.scenario]
    return {
        "controller": [n for n in others for _ in range(n_p * n_s)],
        "scenario": np.tile(scenario, m * n_p).tolist(),
        "plant": np.tile(np.repeat(np.arange(n_p), n_s), m).tolist(),
        "seed": np.tile(jury.seed, m * n_p).tolist(),
        "cost": np.concatenate(held["cost"]).tolist() if m else [],
        "baseline_cost": np.tile(against.ravel(), m).tolist(),
        "ratio": np.concatenate(held["ratio"]).tolist() if m else [],
    }


def _columns(rows: Sequence[Mapping[str, object]], names: str) -> Table:
    """Turn rows into columns; a table without rows still has its columns."""
    return {k: [r[k] for r in rows] for k in names.split()}
