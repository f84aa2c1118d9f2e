"""Trials: every figure lands at its contender, plant and stream."""

from typing import Any

import numpy as np
import pytest

from idlearn.comparison import Stress, Trials, run_trials, stress_trials
from idlearn.comparison.trials import stress_grounds
from idlearn.envs import run_costs
from idlearn.errors import InputError


def inside(y: np.ndarray, u: np.ndarray, move: np.ndarray) -> np.ndarray:
    """Return whether the output is below 0.5."""
    return np.asarray((y < 0.5).all(axis=1))


@pytest.fixture
def done(make: Any) -> Trials:
    """Return two contenders on three plants, three scenarios of two lengths, three seeds."""
    team = [
        make.contender("slow", "classical", make.pi(0.3, 0.03)),
        make.contender("fast", "learned", make.pi(1.0, 0.2)),
    ]
    return run_trials(make.ground(), team, inside)


def test_scores_are_those_of_a_run_of_the_contender_alone(make: Any, done: Trials) -> None:
    assert done.cost.shape == (2, 3, 9, 2)
    for name, controller in (("slow", make.pi(0.3, 0.03)), ("fast", make.pi(1.0, 0.2))):
        for j in range(2):
            alone = run_costs(make.ground(), controller, cost=j)
            np.testing.assert_array_equal(done.scores(name, j), alone)


def test_groups_of_different_lengths_keep_their_scenarios(done: Trials) -> None:
    # two scenarios of 60 samples stand before the one of 80
    names = [done.scenarios[i] for i in done.scenario]
    assert names == ["steps"] * 3 + ["quiet"] * 3 + ["load"] * 3
    assert done.seed.tolist() == [0, 1, 2] * 3
    # only the steps leave the region below 0.5 for long
    share = done.support.mean(axis=(0, 1))
    assert share[:3].max() < 0.5 < share[3:6].min()


def test_the_order_of_the_contenders_changes_nothing(make: Any, done: Trials) -> None:
    team = [
        make.contender("fast", "learned", make.pi(1.0, 0.2)),
        make.contender("slow", "classical", make.pi(0.3, 0.03)),
    ]
    other = run_trials(make.ground(), team, inside)
    for name in done.controllers:
        np.testing.assert_array_equal(done.scores(name), other.scores(name))


def test_the_frame_has_one_row_per_episode_and_terms_that_add_up(done: Trials) -> None:
    frame = done.to_frame()
    assert len(frame) == 2 * 3 * 9
    assert [c for c in frame if c.startswith(("cost_", "travel_"))] == [
        "cost_regulation",
        "cost_tracking only",
        "travel_valve",
    ]
    terms = frame["term_regulation/tracking level"] + frame["term_regulation/move valve"]
    np.testing.assert_allclose(frame["cost_regulation"], terms, rtol=1e-12)
    row = frame[
        (frame.controller == "fast")
        & (frame.plant == 2)
        & (frame.scenario == "load")
        & (frame.seed == 1)
    ]
    assert len(row) == 1
    assert row["cost_regulation"].item() == done.scores("fast")[2, 7]
    assert row["label"].item() == "pole 0.9"


def test_arrays_bring_everything_back(done: Trials, tmp_path: Any) -> None:
    np.savez(tmp_path / "jury.npz", **done.to_arrays())
    with np.load(tmp_path / "jury.npz", allow_pickle=False) as held:
        back = Trials.from_arrays({k: held[k] for k in held.files})
    assert back.controllers == done.controllers
    assert back.labels == done.labels
    assert back.term_names == done.term_names
    for name in ("cost", "terms", "tripped", "travel", "offset", "support", "at_limit", "seed"):
        np.testing.assert_array_equal(getattr(back, name), getattr(done, name))


def test_joined_trials_hold_both(make: Any, done: Trials) -> None:
    third = run_trials(make.ground(), [make.contender("third", "classical", make.pi(0.1, 0.01))])
    joined = done.join(third)
    assert joined.controllers == ("slow", "fast", "third")
    np.testing.assert_array_equal(joined.scores("third"), third.scores("third"))
    np.testing.assert_array_equal(
        joined.only(np.array([3, 4])).scores("fast"), done.scores("fast")[:, 3:5]
    )
    with pytest.raises(InputError, match="different plants or streams"):
        done.join(run_trials(make.ground(seeds=2), [make.contender("other", "classical")]))


def test_names_have_to_be_there_and_unique(make: Any, done: Trials) -> None:
    twice = [make.contender("a", "classical"), make.contender("a", "learned")]
    with pytest.raises(InputError, match="each with its own name"):
        run_trials(make.ground(), twice)
    with pytest.raises(InputError, match="'nobody' took no part"):
        done.scores("nobody")


def test_stresses_change_one_thing_each(make: Any) -> None:
    ground = make.ground()
    grounds = stress_grounds(ground, Stress(gain=(0.7, 1.3), extra_delay_samples=2, noise=2.0))
    told = {k: (g.gain, g.extra_delay_samples, g.noise) for k, g in grounds.items()}
    assert told == {
        "gain_low": (0.7, 0, 1.0),
        "gain_high": (1.3, 0, 1.0),
        "delay": (1.0, 2, 1.0),
        "noise": (1.0, 0, 2.0),
    }
    assert all(
        g.streams is ground.streams and g.ensemble is ground.ensemble for g in grounds.values()
    )
    none = Stress(gain=(1.0, 1.0), extra_delay_samples=0, noise=1.0)
    assert stress_grounds(ground, none) == {}


def test_stresses_cost_what_they_should(make: Any) -> None:
    team = [make.contender("pi", "classical", make.pi(1.5, 0.5))]
    plain = run_trials(make.ground(), team)
    under = stress_trials(make.ground(), team, Stress(noise=2.0, extra_delay_samples=2))
    quiet = np.flatnonzero(plain.scenario == 2)
    # without setpoint moves everything is linear in the noise: twice the noise, four times the cost
    np.testing.assert_allclose(
        under["noise"].scores("pi")[:, quiet], 4 * plain.scores("pi")[:, quiet], rtol=1e-9
    )
    assert under["delay"].scores("pi").mean() > 1.1 * plain.scores("pi").mean()
