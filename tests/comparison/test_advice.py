"""What would settle it: the advice has to be true when it is followed."""

import math
from dataclasses import replace

import pytest

from idlearn.comparison import Circumstances, Clause, Estimate, Interval
from idlearn.comparison.advice import (
    MOST_SEEDS,
    advise,
    episodes_needed,
    excitation,
    need_of,
)
from idlearn.comparison.statistics import clopper_pearson

PLANT = Circumstances(
    log_hours=8.0,
    seeds=16,
    episodes_per_seed=100,
    settling_s=300.0,
    ranges={"valve": (20.0, 60.0), "pump": (1.0, 2.0)},
    units={"valve": "%"},
)


def _estimate(value: float, seeds: float, plants: float) -> Estimate:
    """Return an estimate whose parts reach so far on the logarithm."""

    def part(h: float) -> Interval:
        return Interval(value * math.exp(-h), value * math.exp(h))

    return Estimate(value, part(seeds), part(plants), part(math.hypot(seeds, plants)), 0.95, 0.0)


def _high(value: float, seeds: float, plants: float, allowance: float) -> float:
    return value * math.exp(math.hypot(seeds, plants) + allowance)


@pytest.mark.parametrize(
    ("value", "seeds", "plants", "allowance"),
    [(0.75, 0.10, 0.02, 0.15), (0.6, 0.5, 0.1, 0.15), (0.9, 0.06, 0.03, 0.0)],
)
def test_the_seeds_asked_for_settle_it(
    value: float, seeds: float, plants: float, allowance: float
) -> None:
    assert _high(value, seeds, plants, allowance) > 0.95
    need = need_of(_estimate(value, seeds, plants), 0.95, allowance)
    assert need.within
    assert need.hours == 1
    more = seeds / math.sqrt(need.seeds)
    assert _high(value, more, plants, allowance) == pytest.approx(0.95, rel=1e-9)


def test_the_hours_asked_for_settle_it_with_the_seeds() -> None:
    need = need_of(_estimate(0.7, 0.1, 0.4), 0.95, 0.15)
    assert need.within
    assert need.hours > 1
    high = _high(0.7, 0.1 / math.sqrt(need.seeds), 0.4 / math.sqrt(need.hours), 0.15)
    assert high <= 0.95 * (1 + 1e-9)


def test_a_loss_is_settled_downwards() -> None:
    need = need_of(_estimate(1.3, 0.3, 0.05), 0.95, 0.15)
    low = 1.3 * math.exp(-math.hypot(0.3 / math.sqrt(need.seeds), 0.05) - 0.15)
    assert low == pytest.approx(0.95, rel=1e-9)


def test_within_the_allowance_neither_settles_it() -> None:
    assert not need_of(_estimate(0.9, 0.01, 0.01), 0.95, 0.15).within
    assert not need_of(_estimate(math.inf, 0.01, 0.01), 0.95, 0.15).within


def test_episodes_asked_for_settle_a_rate() -> None:
    assert episodes_needed(0, 80, 0.01, 0.95) == 299
    n = episodes_needed(2, 400, 0.01, 0.95)
    assert n is not None
    assert clopper_pearson(round(0.005 * n), n, 0.95, "upper")[1] <= 0.01
    n = episodes_needed(3, 100, 0.01, 0.95)
    assert n is not None
    assert clopper_pearson(round(0.03 * n), n, 0.95, "lower")[0] > 0.01
    # a rate that stands on its limit is told apart by no number of episodes
    assert episodes_needed(1, 100, 0.01, 0.95) is None


def _advice(*clauses: Clause, outcome: str = "undecided", plant: Circumstances = PLANT):  # noqa: ANN202
    return advise(
        outcome,
        clauses,
        plant,
        candidate="learned",
        baseline="pid",
        confidence=0.95,
        violations=(0, 80),
    )


def test_each_open_clause_says_what_it_needs() -> None:
    wide = Clause("benefit", "open", 0.75, 0.95, "", _estimate(0.75, 0.10, 0.02), 0.15)
    got = _advice(wide)
    assert got.seeds is not None
    assert got.seeds > 16
    assert f"{got.seeds} seeds per scenario instead of 16" in got.sentence
    assert got.log_hours is None
    far = Clause("benefit", "open", 0.7, 0.95, "", _estimate(0.7, 0.01, 0.4), 0.15)
    got = _advice(far)
    assert got.log_hours is not None
    assert got.log_hours > 8
    assert f"{got.log_hours:.0f} h instead of 8 h" in got.sentence
    rate = Clause("harm_violation", "open", 0.03, 0.001, "")
    # 2995 clean episodes for 0.1 %, 100 at a time
    assert _advice(rate).seeds == 30
    assert _advice(rate, plant=replace(PLANT, seeds=30)).seeds is None


def test_more_seeds_than_anybody_runs_are_not_advised() -> None:
    close = Clause("benefit", "open", 0.816, 0.95, "", _estimate(0.816, 0.2, 0.0), 0.15)
    got = _advice(close)
    assert got.seeds is None
    assert "studies on models can be wrong" in got.sentence
    assert need_of(close.estimate, 0.95, 0.15).seeds * 16 > MOST_SEEDS  # type: ignore[arg-type]


def test_weak_evidence_asks_for_an_excitation_within_the_range_of_the_log() -> None:
    got = _advice(Clause("evidence_support", "failed", 0.5, 0.95, ""))
    assert got.excitation == excitation(PLANT)
    assert got.excitation is not None
    assert "valve between 20 and 60 %" in got.excitation
    assert "pump between 1 and 2 " in got.excitation
    assert "held for 60 to 300 s" in got.excitation
    assert "moved on purpose" in got.sentence
    bare = replace(PLANT, ranges={})
    assert (
        _advice(Clause("evidence_support", "failed", 0.5, 0.95, ""), plant=bare).excitation is None
    )


def test_a_weak_baseline_or_an_unequal_task_asks_for_that() -> None:
    assert "tuning budget" in _advice(Clause("evidence_baseline", "failed", 0, 1, "")).sentence
    assert "same task" in _advice(Clause("evidence_ledger", "failed", 1, 0, "")).sentence


def test_settled_verdicts_say_what_to_do() -> None:
    assert "supervised trial of learned against pid" in _advice(outcome="go").sentence
    assert "Keep a classical controller: pid" in _advice(outcome="no-go").sentence
