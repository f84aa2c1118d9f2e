"""The ladder adds up; the cross table names who moves."""

import math
from typing import Any

import numpy as np
import pytest

from idlearn.comparison import Roles, climb, cross_table, draw_resamples, ladder_table, run_trials

ROLES = Roles("learned", "pid", {})


@pytest.fixture
def costs(make: Any) -> dict[str, np.ndarray]:
    """Return paired costs of an incumbent, two classical, a learned contender and a floor."""
    rng = np.random.default_rng(1)
    common = np.exp(0.3 * rng.standard_normal((10, 8)))
    levels = {"floor": 0.5, "learned": 0.6, "pid": 0.8, "lqg": 0.7, "today": 1.0}
    return {n: v * common * np.exp(0.02 * rng.standard_normal((10, 8))) for n, v in levels.items()}


def test_rungs_stand_in_order_and_their_steps_add_up(make: Any, costs: Any) -> None:
    team = [
        make.contender("learned", "learned"),
        make.contender("lqg", "classical"),
        make.contender("pid", "classical"),
        make.contender("today", "incumbent"),
    ]
    jury = make.trials(costs)
    r = draw_resamples(10, jury.scenario, 300, np.random.default_rng(2))
    rungs = climb(jury, team, ROLES, r, 0.95, floor="floor")
    assert [x.name for x in rungs] == ["today", "pid", "lqg", "learned", "floor"]
    assert rungs[0].step is None
    added = sum(math.log(x.step.value) for x in rungs if x.step is not None)
    assert added == pytest.approx(math.log(rungs[-1].whole.value), rel=1e-12)
    assert rungs[-1].whole.value == pytest.approx(costs["floor"].mean() / costs["today"].mean())
    # paired: a step is known much better than the means it is made of
    step, mean = rungs[1].step, rungs[1].mean
    assert step is not None
    assert step.both.high / step.both.low < (mean.both.high / mean.both.low) ** 0.5
    table = ladder_table(rungs)
    assert list(table)[:4] == ["step", "mean", "low", "high"]
    assert math.isnan(table["step_ratio"][0])  # type: ignore[arg-type]


def test_the_incumbents_own_structure_comes_first(make: Any, costs: Any) -> None:
    class Other:
        kind = "other"

    team = [
        make.contender("lqg", "classical", Other()),
        make.contender("pid", "classical"),
        make.contender("today", "incumbent"),
    ]
    costs["lqg"] = 3 * costs["pid"]  # the dearest classical one, but of another structure
    jury = make.trials({n: costs[n] for n in ("lqg", "pid", "today")})
    r = draw_resamples(10, jury.scenario, 100, np.random.default_rng(2))
    rungs = climb(jury, team, Roles("", "pid", {}), r, 0.95)
    assert [x.name for x in rungs] == ["today", "pid", "lqg"]


def test_the_cross_table_names_who_wins_under_which_cost(make: Any) -> None:
    # a lively controller tracks better and moves more: under tracking alone it gains ranks
    team = [
        make.contender("calm", "classical", make.pi(0.5, 0.05)),
        make.contender("lively", "learned", make.pi(4.0, 0.6)),
    ]
    jury = run_trials(make.ground(), team)
    r = draw_resamples(3, jury.scenario, 100, np.random.default_rng(3))
    cells = {(c.name, c.cost): c for c in cross_table(jury, r, 0.95)}
    assert len(cells) == 4
    assert cells["calm", "regulation"].rank == 1
    assert cells["lively", "tracking only"].rank == 1
    assert cells["lively", "tracking only"].moved == -1
    assert cells["calm", "regulation"].moved == 0
    assert cells["calm", "tracking only"].mean.value == pytest.approx(jury.scores("calm", 1).mean())
