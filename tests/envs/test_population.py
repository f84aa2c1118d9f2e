"""Many candidates at once against one at a time."""

from dataclasses import replace
from types import SimpleNamespace

import numpy as np
import pytest

from idlearn.budget import Budget, BudgetSpent
from idlearn.control import LinearController
from idlearn.envs import (
    LinearPlant,
    Robustness,
    Scenario,
    TrialGround,
    make_streams,
    pessimistic,
    run_costs,
    run_forms,
    run_one,
    simulate,
)


@pytest.fixture
def ground(make: SimpleNamespace) -> TrialGround:
    """Three plants, two lengths of episode, three seeds."""
    streams = make_streams(
        [
            Scenario(name="a", duration_s=40, setpoint={"y0": ((0, 0), (9, 1))}),
            Scenario(name="b", duration_s=25, input_disturbance={"u0": ((5, 1),)}),
        ],
        purpose="test", seeds=range(3), seed=2, sample_time_s=1.0, outputs=["y0"],
        controlled=(0,), rest=[0.0], actuators=["u0"],
    )  # fmt: skip
    plants = make.ensemble(make.lag(0.9), make.lag(0.8), make.lag(0.7, gain=1.0))
    return TrialGround(plants, streams, make.loop())


def test_candidates_at_once_equal_candidates_alone(
    make: SimpleNamespace, ground: TrialGround
) -> None:
    forms = [make.pi_form(0.1 * i, 0.05 * i, limit=1.0 + 0.3 * i) for i in range(1, 5)]
    together = run_forms(ground, forms)
    assert together.shape == (4, 3, 6)
    for i, form in enumerate(forms):
        controller = LinearController(form, ground.loop.layout, 1.0)
        np.testing.assert_allclose(together[i], run_costs(ground, controller), rtol=1e-12)
        np.testing.assert_allclose(together[i], run_forms(ground, [form])[0], rtol=1e-12)
    # and one plant, one stream, one candidate: the last of everything
    last = ground.streams[1]
    one = simulate(
        LinearPlant(ground.ensemble.take([2])), LinearController(forms[3], ground.loop.layout, 1.0),
        last.take(np.array([2])), ground.loop,
    )  # fmt: skip
    assert together[3, 2, 5] == pytest.approx(one.cost[0, 0], rel=1e-12)


def test_streams_come_in_the_order_of_their_groups(
    make: SimpleNamespace, ground: TrialGround
) -> None:
    rollouts = run_one(ground, make.pi(0.3, 0.1))
    costs = run_costs(ground, make.pi(0.3, 0.1))
    assert [len(r.cost) for r in rollouts] == [9, 9]
    assert ground.streams[0].n_samples == 25
    np.testing.assert_array_equal(costs[:, :3], rollouts[0].cost.reshape(3, 3))
    np.testing.assert_array_equal(costs[:, 3:], rollouts[1].cost.reshape(3, 3))


def test_every_candidate_is_charged(make: SimpleNamespace, ground: TrialGround) -> None:
    assert ground.steps == 3 * 3 * (40 + 25)
    budget = Budget(3 * ground.steps)
    forms = [make.pi_form(0.1, 0.1), make.pi_form(0.2, 0.1)]
    run_forms(ground, forms, budget=budget)
    assert budget.spent == 2 * ground.steps
    run_costs(ground, make.pi(0.3, 0.1), budget=budget)
    assert budget.left == 0
    with pytest.raises(BudgetSpent, match="0 left"):
        run_costs(ground, make.pi(0.3, 0.1), budget=budget)


def test_stress_reaches_the_plants(make: SimpleNamespace, ground: TrialGround) -> None:
    plain = run_costs(ground, make.pi(0.3, 0.1))
    louder = run_costs(replace(ground, noise=2.0), make.pi(0.3, 0.1))
    later = run_costs(replace(ground, extra_delay_samples=2), make.pi(0.3, 0.1))
    assert louder.mean() > plain.mean()
    assert later.mean() > plain.mean()
    twice = replace(ground, ensemble=make.ensemble(
        make.lag(0.9, gain=4.0), make.lag(0.8, gain=4.0), make.lag(0.7, gain=2.0)))  # fmt: skip
    np.testing.assert_allclose(
        run_costs(replace(ground, gain=2.0), make.pi(0.3, 0.1)),
        run_costs(twice, make.pi(0.3, 0.1)), rtol=1e-12,
    )  # fmt: skip


def test_pessimism_is_half_mean_half_worst_tenth() -> None:
    per_plant = np.arange(1.0, 21.0)
    costs = np.stack([per_plant, per_plant[::-1]])[:, :, None] * np.array([0.5, 1.5])
    # by hand: mean 10.5; the worst tenth of 20 plants are 19 and 20, mean 19.5
    np.testing.assert_allclose(pessimistic(costs), [15.0, 15.0])
    assert pessimistic(np.full((1, 3, 2), 4.0))[0] == 4.0


def test_robustness_penalty() -> None:
    limit = Robustness(peak=2.0, share=0.9)
    nine = np.full((1, 10), 1.5)
    nine[0, 0] = np.inf  # one plant of ten may break the limit
    assert limit.penalty(nine).tolist() == [1.0]
    nine[0, 1] = 3.0
    assert limit.penalty(nine)[0] == pytest.approx(2.0 + 10 * 0.5)
    broken = np.full((2, 4), 1.0)
    broken[0] = np.nan
    assert limit.penalty(broken)[0] > 1000
    assert limit.penalty(broken)[1] == 1.0
