"""The floor: each plant's own design, in lock step, and what must not fall below it."""

from dataclasses import replace
from typing import Any

import numpy as np
import pytest

from idlearn.baselines import lqg
from idlearn.comparison import below_floor, floors, run_floor, run_trials
from idlearn.comparison.floors import FLOOR, quiet_streams
from idlearn.envs import run_costs
from idlearn.errors import InputError

POLES = (0.7, 0.85, 0.95)


def test_quiet_streams_are_those_of_noise_alone(make: Any) -> None:
    ground = make.ground()
    quiet = np.concatenate([quiet_streams(s) for s in ground.streams])
    scenario = np.concatenate([s.scenario for s in ground.streams])
    assert (quiet == (scenario == 2)).all()


def test_lock_step_equals_each_plant_with_its_own_design(make: Any) -> None:
    ground = make.ground(poles=POLES)
    weights = ground.loop.costs.riccati(0)
    floor = run_floor(ground, weights)
    assert floor.trials is not None
    quiet = floor.trials.scenario == 2
    for p in range(len(POLES)):
        alone = replace(ground, ensemble=ground.ensemble.take([p]))
        own = lqg.design_lqg(
            ground.ensemble.member(p), weights, ground.loop.layout, ground.loop.actuator, 0
        )
        alone_costs = run_costs(alone, own)[0]
        got = floor.trials.scores(FLOOR)[p]
        np.testing.assert_allclose(got[quiet], alone_costs[quiet], rtol=1e-9)
        # with steps the design that expects loads may be the cheaper one, never a dearer one
        for one in (0, 1):
            of = floor.trials.scenario == one
            assert got[of].mean() <= alone_costs[of].mean() * (1 + 1e-9)


def test_a_load_that_no_noise_model_foresees_is_met_by_the_design_that_expects_one(
    make: Any,
) -> None:
    # a white output error foretells no load at all: the plain design lets it stand for ever
    ground = make.ground(poles=POLES, seeds=4)
    blind = replace(ground.ensemble, K=0 * ground.ensemble.K)
    ground = replace(ground, ensemble=blind)
    weights = ground.loop.costs.riccati(0)
    floor = run_floor(ground, weights)
    assert floor.trials is not None
    of = floor.trials.scenario == 1
    for p in range(len(POLES)):
        own = lqg.design_lqg(blind.member(p), weights, ground.loop.layout, ground.loop.actuator, 0)
        alone = run_costs(replace(ground, ensemble=blind.take([p])), own)[0]
        assert floor.trials.scores(FLOOR)[p, of].mean() < 0.8 * alone[of].mean()


def test_no_controller_costs_less_than_the_floor_under_noise_alone(make: Any) -> None:
    ground = make.ground(poles=POLES, seeds=60)
    floor = run_floor(ground, ground.loop.costs.riccati(0))
    assert floor.trials is not None
    assert floor.bound
    gains = [(0.05, 0.01), (0.3, 0.05), (1.0, 0.1), (2.0, 0.3)]
    team = [make.contender(f"pi {i}", "classical", make.pi(*g)) for i, g in enumerate(gains)]
    jury = run_trials(ground, team).join(floor.trials)
    assert below_floor(jury, ground, 0.95, np.random.default_rng(1)) == {}
    quiet = np.flatnonzero(jury.scenario == 2)
    means = {n: jury.only(quiet).scores(n).mean() for n in jury.controllers}
    assert min(means, key=lambda n: means[n]) == FLOOR


def test_a_score_below_the_floor_is_found_out(make: Any) -> None:
    ground = make.ground(poles=POLES, seeds=20)
    floor = run_floor(ground, ground.loop.costs.riccati(0))
    assert floor.trials is not None
    cheat = replace(floor.trials, controllers=("cheat",), cost=0.9 * floor.trials.cost)
    found = below_floor(floor.trials.join(cheat), ground, 0.95, np.random.default_rng(1))
    assert list(found) == ["cheat"]
    assert found["cheat"].value == pytest.approx(0.9, rel=1e-9)


def test_the_simulated_floor_comes_to_the_exact_stationary_cost(make: Any) -> None:
    # one long scenario of noise alone: the start at rest no longer counts
    from idlearn.envs import Scenario, make_streams

    ground = make.ground(poles=POLES)
    streams = make_streams(
        [Scenario(name="quiet", duration_s=4000.0)],
        purpose="floor",
        seeds=range(20),
        seed=1,
        sample_time_s=1.0,
        outputs=["level"],
        controlled=[0],
        rest=[0.0],
        actuators=["valve"],
    )
    floor = run_floor(replace(ground, streams=streams), ground.loop.costs.riccati(0))
    assert floor.trials is not None
    assert floor.stationary is not None
    scores = floor.trials.scores(FLOOR)
    error = scores.std(axis=1, ddof=1) / np.sqrt(20)
    assert (np.abs(scores.mean(axis=1) - floor.stationary) < 4 * error + 2e-3 * scores.mean()).all()


def test_a_plant_without_a_design_leaves_no_floor_and_says_so(
    make: Any, monkeypatch: pytest.MonkeyPatch
) -> None:
    def refuse(*_: Any) -> None:
        raise InputError("the loop cannot be stabilised.")

    monkeypatch.setattr(floors.lqg, "design_lqg", refuse)
    floor = run_floor(make.ground(poles=POLES), make.ground().loop.costs.riccati(0))
    assert (floor.trials, floor.stationary, floor.bound) == (None, None, False)
    assert floor.sentence == (
        "No floor: jury plant 1 (pole 0.7) has none, the loop cannot be stabilised."
    )
