"""The whole comparison on simulated plants: from contenders to a document."""

import json
from typing import Any

import numpy as np
import pytest

from idlearn.comparison import (
    Acceptance,
    Circumstances,
    Evidence,
    Extras,
    StudyFacts,
    check_document,
    choose_roles,
    decide,
    keep_ledger,
    run_floor,
    run_trials,
    stress_trials,
    verdict_document,
)

POLES = {
    "practice": (0.80, 0.83, 0.86, 0.88, 0.90, 0.92),
    "selection": (0.81, 0.84, 0.87, 0.89),
    "jury": (0.80, 0.82, 0.84, 0.86, 0.88, 0.90, 0.91, 0.92),
}


def _document(make: Any, learned: tuple[float, float], *, turned: bool = False) -> dict[str, Any]:
    """Judge a PI called learned against a slow PI called pid."""
    team = [
        make.contender("pid", "classical", make.pi(0.5, 0.05), at_optimum=True, plant_steps=800),
        make.contender("learned", "learned", make.pi(*learned), plant_steps=900),
    ]
    team = team[::-1] if turned else team
    acceptance = Acceptance(most_travel_ratio=20.0, most_violation=0.05)
    grounds = {k: make.ground(poles=p, seeds=6) for k, p in POLES.items()}

    def near(y: np.ndarray, u: np.ndarray, move: np.ndarray) -> np.ndarray:
        return np.asarray((np.abs(y) < 5).all(axis=1))

    roles = choose_roles(run_trials(grounds["selection"], team), team)
    jury = run_trials(grounds["jury"], team, near)
    floor = run_floor(grounds["jury"], grounds["jury"].loop.costs.riccati(0))
    assert floor.trials is not None
    given = {c.name: make.assignment(practice=grounds["practice"]) for c in team}
    verdict = decide(
        acceptance=acceptance,
        contenders=team,
        roles=roles,
        jury=jury.join(floor.trials),
        stress=stress_trials(grounds["jury"], team, acceptance.stress),
        practice=run_trials(grounds["practice"], team),
        evidence=Evidence(models_tried=1, models_passed=1, coverage=0.97),
        ledger=keep_ledger(
            team,
            given,
            {c.name: grounds["jury"] for c in team},
            candidate=roles.candidate,
            baseline=roles.baseline,
        ),
        circumstances=Circumstances(log_hours=3.0, seeds=6, episodes_per_seed=24),
        rng=np.random.default_rng(5),
        n_resamples=400,
    )
    return verdict_document(verdict, StudyFacts("chain", 1, "", (), "0"), team, Extras())


@pytest.mark.parametrize(
    ("learned", "outcome"),
    [
        ((2.0, 0.25), "go"),  # much livelier than the slow one
        ((0.5, 0.05), "undecided"),  # the same one twice
        ((0.1, 0.01), "no-go"),  # slower still
        ((9.0, 6.0), "no-go"),  # unstable: the loop runs away on every plant
    ],
)
def test_the_verdict_follows_the_truth(make: Any, learned: Any, outcome: str) -> None:
    document = _document(make, learned)
    assert check_document(document) == ()
    assert document["verdict"] == outcome, document["sentence"]
    json.dumps(document, allow_nan=False)
    floor = document["controllers"][-1]
    assert floor["kind"] == "floor"
    assert floor["costs"]["regulation"]["mean"] <= min(
        c["costs"]["regulation"]["mean"] for c in document["controllers"]
    )


def test_the_same_study_gives_the_same_document_in_any_order(make: Any) -> None:
    first = _document(make, (2.0, 0.25))
    assert _document(make, (2.0, 0.25)) == first
    assert _document(make, (2.0, 0.25), turned=True) == first
