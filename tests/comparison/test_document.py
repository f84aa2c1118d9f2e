"""verdict.json: its shape, that it is JSON, and that it is the same for the same study."""

import copy
import json
import math
from typing import Any

import numpy as np
import pytest

from idlearn.comparison import (
    Acceptance,
    Circumstances,
    Evidence,
    Extras,
    Ledger,
    LedgerRow,
    ModelFacts,
    Roles,
    StudyFacts,
    check_document,
    contenders_table,
    decide,
    paired_table,
    stress_table,
    verdict_document,
    without_figures,
)
from idlearn.logs import Finding

STUDY = StudyFacts("kiln zone 2", 1, "ab" * 32, ("cd" * 32,), "0.1.0")
EXTRAS = Extras(
    models=[
        ModelFacts(
            "arx",
            "arx",
            {"n_a": 2, "n_b": np.int64(3)},
            0.2,
            float("nan"),
            np.float64(0.96),
            True,
            "models/arx.npz",
        )
    ],
    audit=[Finding("gaps", "care", "Two gaps were found.")],
    files={"pid": "controllers/pid.json", "learned": "controllers/learned.json"},
)
ROLES = Roles("learned", "pid", {"pid": 1.0, "learned": 0.7})
FAIR = Ledger((LedgerRow("sample time", {}, True),))
NEEDS = Circumstances(log_hours=5.0, seeds=8, episodes_per_seed=20)


def _study(make: Any, turned: bool = False) -> tuple[Any, list[Any], Any]:
    rng = np.random.default_rng(1)
    costs = make.paired_costs(rng, 0.6, n_p=10, n_s=16)
    costs["floor"] = 0.9 * costs["learned"]
    if turned:
        costs = dict(reversed(costs.items()))
    team = [
        make.contender("pid", "classical", at_optimum=True, plant_steps=700),
        make.contender("learned", "learned", plant_steps=900),
    ]
    jury = make.trials(costs)
    verdict = decide(
        acceptance=Acceptance(),
        contenders=team,
        roles=ROLES,
        jury=jury,
        stress={"noise": jury},
        practice=None,
        evidence=Evidence(models_tried=1, models_passed=1, coverage=0.96),
        ledger=FAIR,
        circumstances=NEEDS,
        n_resamples=300,
        rng=np.random.default_rng(2),
    )
    return verdict, team[::-1] if turned else team, jury


@pytest.fixture
def document(make: Any) -> dict[str, Any]:
    """Return the document of an invented study."""
    verdict, team, _ = _study(make)
    return verdict_document(verdict, STUDY, team, EXTRAS)


def test_the_document_has_the_shape_that_readers_rely_on(document: dict[str, Any]) -> None:
    assert check_document(document) == ()
    assert list(document) == [
        "format",
        "study",
        "verdict",
        "sentence",
        "candidate",
        "baseline",
        "cost",
        "ratio",
        "clauses",
        "controllers",
        "models",
        "audit",
        "next",
    ]
    back = json.loads(json.dumps(document, allow_nan=False))
    assert back == document
    assert back["models"][0]["free_run"] == {"nrmse": 0.2, "vaf": None}
    floor = back["controllers"][-1]
    assert (floor["kind"], floor["file"], floor["optimism_gap"]) == ("floor", None, None)
    assert [c["name"] for c in back["controllers"]] == ["pid", "learned", "floor"]
    assert back["controllers"][1]["training"]["plant_steps"] == 900
    assert back["controllers"][1]["file"] == "controllers/learned.json"


def test_the_candidates_ratio_is_the_headline(document: dict[str, Any]) -> None:
    learned = document["controllers"][1]["ratio_to_baseline"]["regulation"]
    ratio = document["ratio"]
    assert {k: ratio[k] for k in learned} == learned
    pid = document["controllers"][0]["ratio_to_baseline"]["regulation"]
    assert pid == {"estimate": 1.0, "low": 1.0, "high": 1.0}


def test_the_order_of_the_contenders_changes_no_letter(make: Any, document: dict[str, Any]) -> None:
    verdict, team, _ = _study(make, turned=True)
    again = verdict_document(verdict, STUDY, team, EXTRAS)
    assert json.dumps(again) == json.dumps(document)


def test_a_study_without_figures_has_null_and_empty(make: Any) -> None:
    verdict = without_figures(
        evidence=Evidence(models_tried=2),
        circumstances=NEEDS,
        cost="regulation",
        reason="no model passed validation",
    )
    document = verdict_document(verdict, STUDY, [], EXTRAS)
    assert check_document(document) == ()
    assert (document["ratio"], document["candidate"], document["verdict"]) == (
        None,
        "",
        "undecided",
    )
    assert document["controllers"] == []
    json.dumps(document, allow_nan=False)


@pytest.mark.parametrize(
    ("path", "value", "said"),
    [
        (("verdict",), "maybe", "'maybe'"),
        (("ratio",), None, "ratio is null"),
        (("candidate",), "", "ratio is null"),
        (("ratio", "low"), math.nan, "JSON does not hold"),
        (("ratio", "high"), None, "wrong type"),
        (("clauses", 0, "state"), "perhaps", "'perhaps'"),
        (("clauses", 0, "limit"), "0.95", "wrong type"),
        (("clauses", 0, "figure"), True, "wrong type"),
        (("controllers", 0, "kind"), "other", "'other'"),
        (("controllers", 2, "file"), "controllers/floor.json", "a floor has none"),
        (("controllers", 0, "costs", "regulation", "mean"), "1", "wrong type"),
        (("models", 0, "passed"), 1, "wrong type"),
        (("audit", 0, "severity"), "bad", "'bad'"),
        (("next", "seeds"), 2.5, "wrong type"),
        (("study", "extra"), 1, "no reader knows"),
    ],
)
def test_a_wrong_document_is_found_out(
    document: dict[str, Any], path: tuple[Any, ...], value: Any, said: str
) -> None:
    wrong = copy.deepcopy(document)
    at: Any = wrong
    for step in path[:-1]:
        at = at[step]
    at[path[-1]] = value
    assert any(said in fault for fault in check_document(wrong)), check_document(wrong)


@pytest.mark.parametrize("key", ["ratio", "format", "next", "clauses"])
def test_a_missing_part_is_found_out(document: dict[str, Any], key: str) -> None:
    wrong = {k: v for k, v in document.items() if k != key}
    assert check_document(wrong) == (f"verdict.json lacks '{key}'.",)


def test_tables_hold_the_same_figures(make: Any, document: dict[str, Any]) -> None:
    verdict, team, jury = _study(make)
    table = contenders_table(verdict, team)
    row = table["name"].index("learned")
    assert table["ratio_high"][row] == document["ratio"]["high"]
    assert table["plant_steps"][row] == 900
    assert len({len(c) for c in table.values()}) == 1
    stress = stress_table(verdict)
    assert sorted(stress["controller"]) == ["floor", "learned", "pid"]  # type: ignore[type-var]
    paired = paired_table(jury, "pid")
    assert len({len(c) for c in paired.values()}) == 1
    assert len(paired["ratio"]) == 2 * 10 * 16
    i = 160 * ["learned", "floor"].index("learned") + 16 * 3 + 5
    assert paired["ratio"][i] == pytest.approx(
        jury.scores("learned")[3, 5] / jury.scores("pid")[3, 5], rel=1e-12
    )
