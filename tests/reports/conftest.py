"""An INVENTED run folder: every number in it is made up, so that there is something to show."""

import csv
import functools
import json
import math
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import pytest

HOSTILE = "<img src=x onerror=alert(1)>"
STATES = {"go": 0.82, "undecided": 0.93, "no-go": 1.08}


@dataclass(frozen=True)
class Invented:
    """What kind of run to invent."""

    outcome: str = "go"
    outputs: tuple[str, ...] = ("temperature",)
    actuators: tuple[str, ...] = ("heater",)
    units: tuple[str, str] = ("degC", "%")
    scale: float = 1.0
    incumbent: str = "pid as found"
    candidate: str = "predictive"
    judged: bool = True
    unequal: bool = False
    others: tuple[str, ...] = ("lqg", "linear", "evolution")
    rows: int = 0  # most rows of a table; 0 for all

    @property
    def names(self) -> list[str]:
        """Return all contenders, floor last."""
        first = [self.incumbent] if self.incumbent else []
        return [*first, "pid", *self.others, self.candidate, "lqg floor"]

    def kind(self, name: str) -> str:
        """Return the kind of a contender."""
        known = {
            self.incumbent: "incumbent",
            "lqg floor": "floor",
            self.candidate: "learned",
            "evolution": "learned",
        }
        return known.get(name, "classical")


Table = dict[str, list[Any]]


def _rows(keys: str, rows: list[tuple[Any, ...]]) -> Table:
    return {k: [r[i] for r in rows] for i, k in enumerate(keys.split())}


def _means(of: Invented) -> dict[str, float]:
    means = {n: 0.5 + 0.07 * i for i, n in enumerate(reversed(of.others))}
    means |= {"pid": 0.78, "lqg floor": 0.36, of.candidate: 0.5 * STATES[of.outcome]}
    if of.incumbent:
        means[of.incumbent] = 1.24
    return {n: m * of.scale for n, m in means.items()}


def _contenders(of: Invented) -> Table:
    means = _means(of)
    baseline = means["linear"] if "linear" in means else means["pid"]
    rows = []
    for cost, factor in (("regulation", 1.0), ("energy", 3.1)):
        for i, n in enumerate(of.names):
            m = means[n] * factor * (1 + 0.1 * i * (cost == "energy"))
            r = m / (baseline * factor)
            floor = n == "lqg floor"
            rows.append(
                (
                    n,
                    of.kind(n),
                    cost,
                    m,
                    0.93 * m,
                    1.08 * m,
                    r,
                    r * 0.91,
                    r * 1.12,
                    0.0 if not floor else math.nan,
                    0.0058 if not floor else math.nan,
                    2.1 * m,
                    12.4 + i,
                    0.03,
                    math.nan if floor else 0.985,
                    1.04,
                    math.nan if floor else 1.62,
                    0 if floor else 120000 * (i + 1),
                    3.2 * i,
                    0 if floor else 5,
                )
            )
    return _rows(
        "name kind cost mean low high ratio ratio_low ratio_high violation_rate violation_high "
        "worst_tenth travel offset support optimism_gap peak plant_steps seconds runs",
        rows,
    )


def _closed_loop(of: Invented) -> Table:
    rows = []
    t = 5.0 * np.arange(240)
    for s, scenario in enumerate(("setpoint steps", "load step", "regulation")):
        wanted = 900.0 + 50.0 * (t >= 300) * (s == 0)
        for i, n in enumerate(of.names[:-1]):
            lag = 40.0 + 18.0 * i
            y = 900 + 50 * (s == 0) * (t >= 300) * (1 - np.exp(-np.maximum(t - 310, 0) / lag))
            y = y - 12 * (s == 1) * (t >= 400) * np.exp(-np.maximum(t - 400, 0) / (3 * lag))
            y = y + 1.5 * np.sin(t / (30 + i)) * (s == 2)
            u = (
                46
                + 30 * (s == 0) * (t >= 300) * np.exp(-np.maximum(t - 300, 0) / lag)
                + 0.06 * (y - 900)
            )
            for role, names, v, w in (
                ("output", of.outputs, y, 2.0 + 0.01 * (t % 300)),
                ("actuator", of.actuators, u, 3.0 + 0 * t),
                ("setpoint", of.outputs, wanted, 0 * t),
            ):
                for name in names:
                    rows += [
                        (
                            n,
                            scenario,
                            a,
                            name,
                            role,
                            b * of.scale,
                            (b - c) * of.scale,
                            (b + c) * of.scale,
                        )
                        for a, b, c in zip(t, v, w, strict=True)
                    ]
    return _rows("controller scenario time_s signal role median low high", rows)


def _log(of: Invented, rng: np.random.Generator) -> Table:
    t = 20.0 * np.arange(1800)
    table: Table = {"elapsed_s": list(t)}
    w = 880 + 40 * (np.floor(t / 7000) % 2)
    for i, name in enumerate(of.outputs):
        y = w + 3 * np.cumsum(rng.normal(size=len(t))) / 20 + i
        y[600:640] = np.nan
        table[name] = list(y * of.scale)
        table["setpoint" if i == 0 else f"setpoint {i + 1}"] = list(w * of.scale)
    for name in of.actuators:
        table[name] = list(
            np.clip(45 + 8 * rng.normal(size=len(t)).cumsum() / 30, 0, 100) * of.scale
        )
    used = np.ones(len(t), dtype=int)
    used[600:640] = used[1200:1400] = 0
    table["used"] = list(used)
    return table


def _models(of: Invented) -> dict[str, Table]:
    t = np.arange(400) * 5.0
    free, residuals, steps = [], [], []
    rng = np.random.default_rng(4)
    for p, part in enumerate(("practice", "jury")):
        for output in of.outputs:
            model = 900 + 30 * np.sin(t / 240 + p)
            measured = model + rng.normal(size=len(t)) * 3
            free += [
                (
                    part,
                    output,
                    40000 + a,
                    m * of.scale,
                    b * of.scale,
                    (b - 8) * of.scale,
                    (b + 8) * of.scale,
                )
                for a, m, b in zip(t, measured, model, strict=True)
            ]
            for against in ("itself", *of.actuators):
                lags = range(0, 26) if against == "itself" else range(-20, 21)
                residuals += [
                    (
                        part,
                        output,
                        against,
                        k,
                        1.0 if (against == "itself" and k == 0) else rng.normal() * 0.03,
                        0.062,
                    )
                    for k in lags
                ]
            for source in of.actuators:
                s = 2.0 * (1 - np.exp(-np.maximum(t - 20, 0) / (60 + 20 * p))) * of.scale
                steps += [
                    (part, source, output, a, b, 0.86 * b, 1.16 * b)
                    for a, b in zip(t[:100], s, strict=False)
                ]
    tried = [
        (
            "jury",
            "arx 2 2 3",
            "arx",
            "n_a 2, n_b 2, n_k 3",
            0.12,
            0.98,
            0.06,
            0.957,
            0.41,
            1.3,
            of.judged,
            of.judged,
            "",
        ),
        (
            "jury",
            "first order",
            "fopdt",
            "",
            0.35,
            0.87,
            0.2,
            0.81,
            0.0003,
            math.nan,
            False,
            False,
            "residuals are not white",
        ),
        (
            "practice",
            "arx 3 2 3",
            "arx",
            "n_a 3, n_b 2, n_k 3",
            0.14,
            0.97,
            0.08,
            0.951,
            0.22,
            1.2,
            of.judged,
            of.judged,
            "",
        ),
    ]
    return {
        "free_run": _rows("part output elapsed_s measured model low high", free),
        "residuals": _rows("part output against lag correlation limit", residuals),
        "step_response": _rows("part input output time_s estimate low high", steps),
        "models": _rows(
            "part name family orders free_run_nrmse free_run_vaf k_step_nrmse coverage95 "
            "whiteness_p widening passed chosen reasons",
            tried,
        ),
    }


def _trials(of: Invented) -> dict[str, Table]:
    rng = np.random.default_rng(5)
    means = _means(of)
    paired, stress, learning = [], [], []
    base = means["linear"] if "linear" in means else means["pid"]
    for n in of.names[:-1]:
        for plant in range(24 if means[n] != base else 0):
            tilt = math.exp(0.06 * rng.normal())
            for scenario in ("setpoint steps", "load step"):
                for seed in range(4):
                    b = base * math.exp(0.2 * rng.normal())
                    r = means[n] / base * tilt * math.exp(0.05 * rng.normal())
                    paired.append((n, scenario, plant, seed, r * b, b, r))
        for j, kind in enumerate(("gain_low", "gain_high", "delay", "noise")):
            r = means[n] / base * (1 + 0.06 * j)
            stress.append((n, kind, r * base, r, 0.94 * r, 1.07 * r, 0.0))
        for run in range(5):
            value = means[n] * (1 + 1.5 * np.exp(-np.arange(40) / (5 + run)))
            learning += [(n, f"run {run}", g, v) for g, v in enumerate(value)]
    return {
        "paired": _rows("controller scenario plant seed cost baseline_cost ratio", paired),
        "stress": _rows("controller stress mean ratio low high violation_rate", stress),
        "learning": _rows("controller run generation value", learning),
    }


def _clauses(of: Invented, ratio: dict[str, float]) -> list[dict[str, Any]]:
    state = {"go": "met", "undecided": "open", "no-go": "failed"}[of.outcome]
    ledger = "failed" if of.unequal else "met"
    return [
        {
            "name": "benefit",
            "state": state,
            "figure": ratio["estimate"],
            "limit": 0.95,
            "sentence": f"The cost of {of.candidate} is compared with that of linear.",
        },
        {
            "name": "harm_violation",
            "state": "met",
            "figure": 0.0058,
            "limit": 0.01,
            "sentence": "0 of 512 episodes had a violation, so a rate above 1.0 % is ruled out.",
        },
        {
            "name": "stress_delay",
            "state": "open" if of.outcome == "undecided" else "met",
            "figure": 0.97,
            "limit": 1.0,
            "sentence": "With the extra delay the cost is 0.97 (0.90 to 1.04) times as high.",
        },
        {
            "name": "evidence_support",
            "state": "met",
            "figure": 0.985,
            "limit": 0.95,
            "sentence": f"{of.candidate} is inside the region of the log on 98.5 % of its steps.",
        },
        {
            "name": "evidence_ledger",
            "state": ledger,
            "figure": float(of.unequal),
            "limit": 0.0,
            "sentence": "Whether every contender had the same task, means and budget.",
        },
    ]


def _verdict(of: Invented) -> dict[str, Any]:
    value = STATES[of.outcome]
    ratio = {"estimate": value, "low": value * 0.89, "high": value * 1.12, "confidence": 0.95}
    said = {"go": "Go", "undecided": "Undecided", "no-go": "No-go"}[of.outcome]
    means = _means(of)
    return {
        "format": "idlearn-verdict/1",
        "study": {
            "name": "invented kiln",
            "seed": 1,
            "sheet_sha256": "ab" * 32,
            "log_sha256": ["cd" * 32],
            "version": "0.1.0",
        },
        "verdict": of.outcome if of.judged else "undecided",
        "sentence": f"{said} on {of.candidate}: an invented sentence about invented numbers."
        if of.judged
        else "Undecided: no model passed, so no controller could be judged.",
        "candidate": of.candidate if of.judged else "",
        "baseline": ("linear" if "linear" in means else "pid") if of.judged else "",
        "cost": "regulation",
        "ratio": ratio if of.judged else None,
        "clauses": _clauses(of, ratio)
        if of.judged
        else [
            {
                "name": "evidence_validation",
                "state": "failed",
                "figure": 0.0,
                "limit": 1.0,
                "sentence": "None of 2 models passed validation on held-out data.",
            },
            {
                "name": "evidence_coverage",
                "state": "open",
                "figure": None,
                "limit": 0.95,
                "sentence": "How much of the data the bands hold could not be told.",
            },
        ],
        "controllers": [
            {
                "name": n,
                "kind": of.kind(n),
                "file": None,
                "costs": {},
                "ratio_to_baseline": {},
                "violation_rate": {},
                "worst_tenth": None,
                "travel": None,
                "support": None,
                "optimism_gap": None,
                "training": {"runs": 0, "plant_steps": 0, "seconds": 0.0},
            }
            for n in (of.names if of.judged else [])
        ],
        "models": [],
        "audit": [
            {"finding": "gap", "severity": "note", "sentence": "A gap of 13 min was found."},
            {
                "finding": "saturation",
                "severity": "care",
                "sentence": "The heater stands at a limit for 4 % of the time.",
            },
        ],
        "next": {
            "sentence": "To settle it: a log of about 40 h instead of 10 h.",
            "log_hours": 40.0,
            "excitation": "Move the heater between 30 and 60 %.",
            "seeds": 128,
        },
    }


MANIFEST = {
    "format": "idlearn-manifest/1",
    "version": "0.1.0",
    "python": "3.11.9",
    "packages": {"numpy": "2.4.6", "scipy": "1.17.1"},
    "threads": 1,
    "seed": 1,
    "effort": "quick",
    "started": "2031-02-03T10:00:00+00:00",
    "finished": "2031-02-03T10:01:00+00:00",
    "sheet_sha256": "ab" * 32,
    "log_sha256": ["cd" * 32],
    "acceptance": {
        "sha256": "ef" * 32,
        "fixed_at": "2031-02-03T10:00:01+00:00",
        "limits": {
            "least_gain": 0.05,
            "confidence": 0.95,
            "stress": {"gain": [0.7, 1.3], "noise": 2.0},
        },
    },
    "command": "idlearn run kiln.toml",
    "incumbent": "pid as found",
    "log": {"hours_used": 8.7, "rows": 6270, "start": "2031-01-20T00:00:00+01:00"},
    "cost": {
        "name": "regulation",
        "sentence": "squared deviation from the setpoint over 1 degC, plus moves",
    },
}


def invented_tables(of: Invented) -> dict[str, Table]:
    """Return all tables of an invented run."""
    means = _means(of)
    order = sorted(means, key=lambda n: -means[n])
    tables = {
        "log": _log(of, np.random.default_rng(3)),
        "signals": _rows(
            "name role unit low high of",
            [
                *((n, "output", of.units[0], -math.inf, math.inf, "") for n in of.outputs),
                *((n, "actuator", of.units[1], 0.0, 100.0 * of.scale, "") for n in of.actuators),
                *(
                    (
                        "setpoint" if i == 0 else f"setpoint {i + 1}",
                        "setpoint",
                        of.units[0],
                        -math.inf,
                        math.inf,
                        n,
                    )
                    for i, n in enumerate(of.outputs)
                ),
            ],
        ),
        **_models(of),
        "scenarios": _rows(
            "name duration_s declared sentence",
            [
                ("setpoint steps", 1200.0, False, "Steps of the setpoint as often as in the log."),
                ("load step", 1200.0, False, "A step of the load at the actuator."),
                ("regulation", 1200.0, True, "No change but noise and drift."),
            ],
        ),
    }
    if not of.judged:
        return tables
    value = STATES[of.outcome]
    ledger: Table = {"item": ["observations", "jury plants", "budget limit"]}
    for n in of.names[:-1]:
        ledger[n] = [
            "1 outputs, 1 setpoints",
            "24 (0f3b2c9d8e7a)",
            "9000 plant-steps" if of.unequal and n == "pid" else "120000 plant-steps",
        ]
    ledger["equal"] = [True, True, not of.unequal]
    return tables | {
        "contenders": _contenders(of),
        "interval": _rows(
            "part low high",
            [
                ("seeds", 0.985 * value, 1.015 * value),
                ("plants", 0.95 * value, 1.05 * value),
                ("allowance", 0.93 * value, 1.07 * value),
                ("whole", 0.89 * value, 1.12 * value),
            ],
        ),
        "ladder": _rows(
            "step mean low high", [(n, means[n], 0.93 * means[n], 1.08 * means[n]) for n in order]
        ),
        "closed_loop": _closed_loop(of),
        **_trials(of),
        "ledger": ledger,
    }


def write_tables(folder: Path, tables: dict[str, Table], most: int = 0) -> None:
    """Write tables/*.csv as a study does: an empty cell where there is no number."""
    (folder / "tables").mkdir(parents=True, exist_ok=True)
    for name, table in tables.items():
        with (folder / "tables" / f"{name}.csv").open("w", encoding="utf-8", newline="") as out:
            writer = csv.writer(out, lineterminator="\n")
            writer.writerow(table)
            rows = list(zip(*table.values(), strict=True))
            for row in rows[: most or None]:
                writer.writerow(["" if v != v else v for v in row])


@pytest.fixture(scope="session")
def invent_in() -> Callable[..., Path]:
    """Return a function that writes an invented run folder into a folder and returns its path."""

    def write(parent: Path, name: str = "run", **kind: Any) -> Path:
        of = Invented(**kind)
        folder = parent / name
        write_tables(folder, invented_tables(of), of.rows)
        (folder / "verdict.json").write_text(json.dumps(_verdict(of)), encoding="utf-8")
        (folder / "manifest.json").write_text(json.dumps(MANIFEST), encoding="utf-8")
        return folder

    return write


@pytest.fixture
def invent(invent_in: Callable[..., Path], tmp_path: Path) -> Callable[..., Path]:
    """Return a function that writes an invented run folder and returns its path."""
    return functools.partial(invent_in, tmp_path)
