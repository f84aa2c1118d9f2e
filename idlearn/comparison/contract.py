"""The shape of verdict.json that outside code relies on, and a check of it."""

import math
from collections.abc import Mapping
from typing import Any

FORMAT = "idlearn-verdict/1"

_NUMBER = (int, float)
_MAYBE = (int, float, type(None))
# what each place has to hold: a type or types, a dict of places, or a list of one kind of place
_SHAPE: dict[str, Any] = {
    "format": str,
    "study": {"name": str, "seed": int, "sheet_sha256": str, "log_sha256": [str], "version": str},
    "verdict": str,
    "sentence": str,
    "candidate": str,
    "baseline": str,
    "cost": str,
    "clauses": [{"name": str, "state": str, "figure": _MAYBE, "limit": _NUMBER, "sentence": str}],
    "controllers": [
        {
            "name": str,
            "kind": str,
            "file": (str, type(None)),
            "costs": dict,
            "ratio_to_baseline": dict,
            "violation_rate": dict,
            "worst_tenth": _MAYBE,
            "travel": _MAYBE,
            "support": _MAYBE,
            "optimism_gap": _MAYBE,
            "training": {"runs": int, "plant_steps": int, "seconds": _NUMBER},
        }
    ],
    "models": [
        {
            "name": str,
            "family": str,
            "orders": dict,
            "free_run": {"nrmse": _MAYBE, "vaf": _MAYBE},
            "coverage95": _MAYBE,
            "passed": bool,
            "file": str,
        }
    ],
    "audit": [{"finding": str, "severity": str, "sentence": str}],
    "next": {
        "sentence": str,
        "log_hours": _MAYBE,
        "excitation": (str, type(None)),
        "seeds": (int, type(None)),
    },
}
_RATIO = {"estimate": _NUMBER, "low": _NUMBER, "high": _NUMBER, "confidence": _NUMBER}
_COST = {"mean": _MAYBE, "low": _MAYBE, "high": _MAYBE}


def check_document(document: Mapping[str, Any]) -> tuple[str, ...]:
    """Return what is wrong with a verdict document, one sentence each; empty if nothing is."""
    body = {k: v for k, v in document.items() if k != "ratio"}
    found = list(_faults(body, _SHAPE, "verdict.json"))
    if "ratio" not in document:
        found.append("verdict.json lacks 'ratio'.")
    elif document["ratio"] is not None:
        found += _faults(document["ratio"], _RATIO, "ratio")
    if found:
        return tuple(found)
    if document["format"] != FORMAT:
        found.append(f"format is {document['format']!r}, not {FORMAT!r}.")
    if document["verdict"] not in ("go", "no-go", "undecided"):
        found.append(f"verdict is {document['verdict']!r}.")
    if (document["ratio"] is None) != (document["candidate"] == ""):
        found.append("ratio is null exactly where there is no candidate; one of them is not.")
    if document["ratio"] is None and document["verdict"] != "undecided":
        found.append("a verdict without a figure can only be undecided.")
    for c in document["clauses"]:
        if c["state"] not in ("met", "failed", "open"):
            found.append(f"clause {c['name']} has the state {c['state']!r}.")
    for c in document["controllers"]:
        if c["kind"] not in ("incumbent", "classical", "learned", "floor"):
            found.append(f"controller {c['name']} has the kind {c['kind']!r}.")
        if c["kind"] == "floor" and c["file"] is not None:
            found.append(f"floor {c['name']} has a file; a floor has none.")
        for name, cost in c["costs"].items():
            found += _faults(cost, _COST, f"cost {name} of {c['name']}")
    for a in document["audit"]:
        if a["severity"] not in ("note", "care", "stop"):
            found.append(f"finding {a['finding']} has the severity {a['severity']!r}.")
    return tuple(found)


def _faults(value: Any, shape: Any, where: str) -> list[str]:
    if isinstance(shape, list):
        if not isinstance(value, list):
            return [f"{where} is no list."]
        return [f for i, v in enumerate(value) for f in _faults(v, shape[0], f"{where}[{i}]")]
    if isinstance(shape, dict):
        if not isinstance(value, Mapping):
            return [f"{where} is no object."]
        wrong = [f"{where} lacks {k!r}." for k in shape if k not in value]
        wrong += [f"{where} has {k!r}, which no reader knows." for k in value if k not in shape]
        return wrong + [
            f for k in shape if k in value for f in _faults(value[k], shape[k], f"{where}.{k}")
        ]
    # True is an int to Python, but no number to a reader
    odd = isinstance(value, bool) and shape is not bool
    if odd or not isinstance(value, shape):
        return [f"{where} is {value!r}, of the wrong type."]
    if isinstance(value, float) and not math.isfinite(value):
        return [f"{where} is {value}, which JSON does not hold."]
    return []
