"""Roles chosen on selection plants, and figures before the jury."""

from typing import Any

import numpy as np
import pytest

from idlearn.comparison import choose_roles, draw_resamples, figures_of
from idlearn.comparison.resampling import ratio_of_means
from idlearn.comparison.statistics import best_of_bias, cvar
from idlearn.envs import pessimistic

SIDES = {
    "today": "incumbent",
    "pid": "classical",
    "lqg": "classical",
    "a": "learned",
    "b": "learned",
}


def _team(make: Any, names: tuple[str, ...]) -> list[Any]:
    return [make.contender(n, SIDES[n]) for n in names]


def _costs(levels: dict[str, float], seed: int = 0) -> dict[str, np.ndarray]:
    rng = np.random.default_rng(seed)
    common = np.exp(0.2 * rng.standard_normal((10, 8)))
    return {n: v * common * np.exp(0.01 * rng.standard_normal((10, 8))) for n, v in levels.items()}


def test_roles_are_the_best_of_each_side(make: Any) -> None:
    levels = {"today": 2.0, "pid": 1.0, "lqg": 0.9, "a": 0.8, "b": 0.7}
    costs = _costs(levels)
    roles = choose_roles(make.trials(costs), _team(make, tuple(levels)))
    assert (roles.candidate, roles.baseline, roles.better_incumbent) == ("b", "lqg", "")
    # two learned contenders: the better one is flattered by half of d2 = 1.128
    assert roles.flattery == pytest.approx(0.564, abs=5e-4)
    for n, score in roles.scores.items():
        assert score == pytest.approx(float(pessimistic(costs[n][None])[0]), rel=1e-12)


def test_the_order_of_the_contenders_chooses_nobody(make: Any) -> None:
    same = np.ones((10, 8))
    team = _team(make, ("pid", "lqg", "a", "b"))
    for order in (team, team[::-1]):
        costs = {c.name: same for c in order}
        roles = choose_roles(make.trials(costs), order)
        assert (roles.candidate, roles.baseline) == ("a", "lqg")


def test_a_better_incumbent_is_named_and_missing_sides_are_empty(make: Any) -> None:
    levels = {"today": 0.5, "pid": 1.0}
    roles = choose_roles(make.trials(_costs(levels)), _team(make, tuple(levels)))
    assert (roles.candidate, roles.baseline, roles.better_incumbent) == ("", "pid", "today")


def test_the_winner_of_equals_is_flattered_where_it_was_chosen_and_not_before_the_jury() -> None:
    # four equal contenders, unit noise: the best looks better by best_of_bias(4) standard errors
    rng = np.random.default_rng(4)
    chosen, jury = rng.standard_normal((2, 4000, 4))
    winner = chosen.argmin(axis=1)
    rows = np.arange(4000)
    standard_error = 1 / np.sqrt(4000)
    assert -chosen[rows, winner].mean() == pytest.approx(best_of_bias(4), abs=4 * standard_error)
    assert jury[rows, winner].mean() == pytest.approx(0, abs=4 * standard_error)


def test_figures_are_the_plain_ones(make: Any) -> None:
    costs = _costs({"pid": 1.0, "a": 0.8, "b": 0.9})
    trials = make.trials(costs, tripped={"a": 0.05}, travel={"a": 2.0})
    r = draw_resamples(10, trials.scenario, 500, np.random.default_rng(1))
    practice = make.trials({n: 0.5 * c for n, c in costs.items()})
    got = figures_of(trials, SIDES, r, 0.95, baseline="pid", practice=practice)
    a = got["a"]
    assert a.means["regulation"].value == pytest.approx(costs["a"].mean(), rel=1e-12)
    assert a.ratios["regulation"].value == pytest.approx(costs["a"].mean() / costs["pid"].mean())
    assert (a.violation.events, a.violation.episodes) == (4, 80)
    assert a.worst_tenth == pytest.approx(cvar(costs["a"]))
    assert a.travel == 2.0
    assert a.offset == pytest.approx(0.1)
    assert a.optimism_gap == pytest.approx(2.0)
    assert a.improvement == 1.0
    assert a.pairing > 10
    assert (
        got["pid"].ratios["regulation"].both.low == 1.0 == got["pid"].ratios["regulation"].both.high
    )


def test_several_learned_contenders_are_read_at_holms_levels(make: Any) -> None:
    costs = _costs({"pid": 1.0, "a": 0.8, "b": 0.99})
    trials = make.trials(costs)
    r = draw_resamples(10, trials.scenario, 500, np.random.default_rng(1))
    got = figures_of(trials, SIDES, r, 0.95, baseline="pid", least_gain=0.05)
    # the more telling one carries the correction: 1 - 0.05 / 2
    assert got["a"].ratios["regulation"].confidence == pytest.approx(0.975)
    assert got["b"].ratios["regulation"].confidence == pytest.approx(0.95)
    alone = figures_of(
        make.trials({n: costs[n] for n in ("pid", "a")}), SIDES, r, 0.95, baseline="pid"
    )
    assert alone["a"].ratios["regulation"].confidence == 0.95
    wide, narrow = got["a"].ratios["regulation"].both, alone["a"].ratios["regulation"].both
    assert wide.high - wide.low > narrow.high - narrow.low


def test_without_a_baseline_there_are_no_ratios(make: Any) -> None:
    trials = make.trials(_costs({"a": 1.0}))
    r = draw_resamples(10, trials.scenario, 100, np.random.default_rng(1))
    a = figures_of(trials, SIDES, r, 0.95)["a"]
    assert a.ratios == {}
    assert np.isnan(a.improvement)


def test_among_three_that_gain_nothing_a_gain_is_shown_no_more_often_than_for_one(
    make: Any,
) -> None:
    # 80 % intervals, so one contender's upper end falls below 1 in a tenth of the repeats; three
    # read without Holm would in about 1 - 0.9 ** 3 = 27 %
    rng, repeats = np.random.default_rng(6), 400
    names, any_holm, any_plain = ("a", "b", "c"), 0, 0
    sides = {"pid": "classical"} | dict.fromkeys(names, "learned")
    for _ in range(repeats):
        costs = {
            n: np.exp(0.05 * (rng.standard_normal((8, 1)) + rng.standard_normal((1, 8))))
            * np.ones((8, 8))
            for n in names
        } | {"pid": np.ones((8, 8))}
        # what the drawn factors are worth on average, so that the true ratio is 1
        costs = {n: c / (np.exp(0.0025) if n != "pid" else 1.0) for n, c in costs.items()}
        trials = make.trials(costs)
        r = draw_resamples(8, trials.scenario, 200, rng)
        got = figures_of(trials, sides, r, 0.8, baseline="pid")
        plain = [ratio_of_means(costs[n], costs["pid"], r, 0.8).both.high < 1 for n in names]
        any_holm += any(got[n].ratios["regulation"].both.high < 1 for n in names)
        any_plain += any(plain)
    assert any_holm / repeats <= 0.1 + 4 * np.sqrt(0.1 * 0.9 / repeats)
    assert any_plain / repeats > 0.18
