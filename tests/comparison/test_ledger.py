"""The ledger sees who was favoured, in each item."""

from dataclasses import replace
from typing import Any

import numpy as np
import pytest

from idlearn.comparison import Ledger, keep_ledger
from idlearn.cost import BoundCost, Cost, CostTerm
from idlearn.envs import Robustness

NAMES = ("pid", "learned")


def _ledger(make: Any, change: dict[str, Any], court: Any = None, **roles: str) -> Ledger:
    """Write a ledger in which the assignment of "learned" is changed."""
    team = [
        make.contender("pid", "classical", plant_steps=900),
        make.contender("learned", "learned", plant_steps=1000),
    ]
    given = {"pid": make.assignment(), "learned": make.assignment(**change)}
    judged = {"pid": make.ground(), "learned": court or make.ground()}
    return keep_ledger(team, given, judged, **roles)


def test_the_same_task_is_equal(make: Any) -> None:
    ledger = _ledger(make, {}, candidate="learned", baseline="pid")
    assert ledger.unequal == ()
    assert ledger.equal
    table = ledger.to_table()
    assert list(table) == ["item", *NAMES, "equal"]
    assert all(len(c) == len(ledger.rows) for c in table.values())


@pytest.mark.parametrize(
    ("change", "item"),
    [
        ({"robustness": Robustness(peak=3.0)}, "robustness limit"),
        ({"budget_steps": 2000}, "budget limit"),
        ({"budget_steps": 999}, "plant-steps spent"),
        ({"cost": 1}, "cost tuned under"),
    ],
)
def test_an_inequality_of_the_task_is_named(make: Any, change: dict[str, Any], item: str) -> None:
    assert item in _ledger(make, change, candidate="learned", baseline="pid").unequal


def test_other_practice_plants_and_streams_are_seen(make: Any) -> None:
    other = make.ground(poles=(0.8, 0.85, 0.91))
    assert _ledger(make, {"practice": other}).unequal == ("practice plants",)
    more = make.ground(seeds=4)
    assert _ledger(make, {"practice": more}).unequal == ("practice streams",)


def test_other_jury_surroundings_are_seen(make: Any) -> None:
    g = make.ground()
    slow = replace(g.loop, actuator=replace(g.loop.actuator, rate=np.array([0.5])))
    assert "limits" in _ledger(make, {}, replace(g, loop=slow)).unequal
    late = replace(g.loop, latency_samples=1)
    assert "latency" in _ledger(make, {}, replace(g, loop=late)).unequal
    cheap = BoundCost(
        [Cost(name="regulation", terms=(CostTerm(kind="tracking", signal="level", weight=2.0),))],
        ["level"],
        ["valve"],
        [0],
    )
    assert (
        "costs judged" in _ledger(make, {}, replace(g, loop=replace(g.loop, costs=cheap))).unequal
    )
    assert "jury streams" in _ledger(make, {}, make.ground(seeds=4)).unequal


def test_a_controller_that_assumes_another_latency_is_seen(make: Any) -> None:
    odd = make.pi(0.5, 0.1)
    form = odd.form
    odd.form = replace(
        form,
        latency=2,
        G=np.pad(form.G, ((0, 0), (0, 2))),
        J=np.pad(form.J, ((0, 0), (0, 2))),
        Z=np.pad(form.Z, ((0, 0), (0, 2))),
        N=np.pad(form.N, ((0, 0), (0, 2))),
    )
    team = [make.contender("pid", "classical"), make.contender("learned", "learned", odd)]
    same = {n: make.assignment() for n in NAMES}
    ledger = keep_ledger(team, same, {n: make.ground() for n in NAMES})
    assert ledger.unequal == ("latency told",)


def test_a_baseline_with_more_budget_than_the_candidate_is_fair(make: Any) -> None:
    ledger = _ledger(make, {"budget_steps": 1000}, candidate="pid", baseline="learned")
    assert ledger.equal
    generous = keep_ledger(
        [make.contender("pid", "classical"), make.contender("learned", "learned")],
        {"pid": make.assignment(budget_steps=5000), "learned": make.assignment()},
        {n: make.ground() for n in NAMES},
        candidate="learned",
        baseline="pid",
    )
    assert generous.equal


def test_an_incumbent_tunes_nothing_and_needs_no_task(make: Any) -> None:
    team = [make.contender("today", "incumbent"), make.contender("pid", "classical")]
    ledger = keep_ledger(
        team, {"pid": make.assignment()}, {n: make.ground() for n in ("today", "pid")}
    )
    assert ledger.equal
    row = next(r for r in ledger.rows if r.item == "budget limit")
    assert row.values["today"] == "not tuned here"
