"""The three-way logic, branch by branch, and the verdict on invented trials."""

import math
from dataclasses import replace
from typing import Any

import numpy as np
import pytest

from idlearn.comparison import (
    REALITY_ALLOWANCE,
    Acceptance,
    Circumstances,
    Clause,
    Estimate,
    Evidence,
    Interval,
    Ledger,
    LedgerRow,
    Roles,
    Verdict,
    decide,
    outcome_of,
    without_figures,
)
from idlearn.comparison.headline import headline_of
from idlearn.errors import InputError

ALL = (
    "benefit",
    "harm_violation",
    "harm_worst_tenth",
    "harm_travel",
    "harm_offset",
    "stress_gain_low",
    "stress_gain_high",
    "stress_delay",
    "stress_noise",
    "evidence_audit",
    "evidence_validation",
    "evidence_coverage",
    "evidence_support",
    "evidence_optimism",
    "evidence_baseline",
    "evidence_ledger",
)


def _clauses(**states: str) -> list[Clause]:
    return [Clause(n, states.get(n, "met"), 0.0, 1.0, "") for n in ALL]  # type: ignore[arg-type]


# --- decision table: all met is go; each clause alone, failed and open ------------------------

_ONE = [("benefit", "failed", "no-go"), ("benefit", "open", "undecided")]
for _name in ALL[1:9]:
    _ONE += [(_name, "failed", "no-go"), (_name, "open", "undecided")]
for _name in ALL[9:]:
    _ONE += [(_name, "failed", "undecided"), (_name, "open", "undecided")]


def test_all_met_is_go() -> None:
    assert outcome_of(_clauses()) == "go"


@pytest.mark.parametrize(("name", "state", "outcome"), _ONE)
def test_one_clause_that_is_not_met(name: str, state: str, outcome: str) -> None:
    assert outcome_of(_clauses(**{name: state})) == outcome


@pytest.mark.parametrize(
    ("states", "outcome"),
    [
        # harm beyond doubt outweighs doubts about the rest
        ({"harm_travel": "failed", "benefit": "open", "evidence_support": "failed"}, "no-go"),
        ({"stress_delay": "failed", "evidence_ledger": "failed"}, "no-go"),
        # a gain ruled out needs no more evidence
        ({"benefit": "failed", "evidence_optimism": "open"}, "no-go"),
        # but without a valid model nothing was shown at all
        ({"benefit": "failed", "evidence_validation": "failed"}, "undecided"),
        ({"harm_violation": "failed", "evidence_validation": "failed"}, "undecided"),
        ({"harm_violation": "open", "stress_noise": "open"}, "undecided"),
    ],
)
def test_several_clauses(states: dict[str, str], outcome: str) -> None:
    assert outcome_of(_clauses(**states)) == outcome


def test_no_benefit_clause_is_undecided() -> None:
    assert outcome_of([c for c in _clauses() if c.name != "benefit"]) == "undecided"
    assert outcome_of([]) == "undecided"


# --- the interval ------------------------------------------------------------------------------


def test_the_allowance_is_added_to_each_side_of_the_logarithm() -> None:
    part = Interval(0.5, 0.5)
    h = headline_of(Estimate(0.5, part, part, part, 0.95, 0.0), 0.15, 0.95)
    # exp(-0.15) = 0.860708, exp(0.15) = 1.161834
    assert (h.whole.low, h.whole.high) == pytest.approx((0.430354, 0.580917), abs=1e-6)
    assert h.allowance == h.whole
    assert REALITY_ALLOWANCE == 0.15


def test_the_whole_holds_seeds_plants_and_what_practice_and_jury_disagree_on() -> None:
    e = Estimate(0.8, Interval(0.78, 0.82), Interval(0.77, 0.83), Interval(0.76, 0.84), 0.95, 0.02)
    plain = headline_of(e, 0.0, 0.95)
    assert (plain.whole.low, plain.whole.high) == (
        pytest.approx(0.76, abs=2e-3),
        pytest.approx(0.84, abs=2e-3),
    )
    pooled = headline_of(e, 0.0, 0.95, Interval(0.6, 0.82))
    assert pooled.plants == Interval(0.6, 0.83)
    assert pooled.whole.low < 0.6
    # parts that stand at right angles add up as such
    away = math.hypot(math.log(0.8 / 0.78), math.log(0.8 / 0.6))
    assert pooled.whole.low == pytest.approx(0.8 * math.exp(-away), rel=1e-12)
    assert list(pooled.to_table()["part"]) == ["seeds", "plants", "allowance", "whole"]


# --- decide on invented trials -----------------------------------------------------------------

FAIR = Ledger((LedgerRow("sample time", {"pid": "1 s", "learned": "1 s"}, True),))
GOOD = Evidence(models_tried=3, models_passed=2, coverage=0.96)
ROLES = Roles("learned", "pid", {"pid": 1.0, "learned": 0.7})
HOURS = Circumstances(
    log_hours=10.0,
    seeds=20,
    episodes_per_seed=48,
    settling_s=120.0,
    ranges={"valve": (20.0, 60.0)},
    units={"valve": "%"},
)


def _decide(make: Any, ratio: float, seed: int = 1, spread: float = 0.05, **other: Any) -> Verdict:
    """Judge a candidate whose expected cost ratio is `ratio` under every condition."""
    rng = np.random.default_rng(seed)
    how = {k: other.pop(k) for k in ("tripped", "travel", "offset", "support") if k in other}
    jury = make.trials(make.paired_costs(rng, ratio, spread=spread), **how)
    stress_ratio, practice_ratio = (
        other.pop("stress_ratio", ratio),
        other.pop("practice_ratio", ratio),
    )
    plain: dict[str, Any] = {
        "acceptance": Acceptance(),
        "contenders": [
            make.contender("pid", "classical", at_optimum=True),
            make.contender("learned", "learned"),
        ],
        "roles": ROLES,
        "jury": jury,
        "stress": {"delay": make.trials(make.paired_costs(rng, stress_ratio, spread=spread))},
        "practice": make.trials(make.paired_costs(rng, practice_ratio, spread=spread)),
        "evidence": GOOD,
        "ledger": FAIR,
        "circumstances": HOURS,
        "n_resamples": 600,
        "rng": np.random.default_rng(seed + 1),
    }
    return decide(**(plain | other))


def _states(verdict: Verdict) -> dict[str, str]:
    return {c.name: c.state for c in verdict.clauses if c.state != "met"}


def test_a_large_gain_with_all_the_evidence_is_go(make: Any) -> None:
    v = _decide(make, 0.6)
    assert v.outcome == "go", _states(v)
    assert "fit for a supervised trial under the site's own procedures" in v.sentence
    assert "simulated on models identified from the log" in v.sentence
    assert v.headline is not None
    assert v.headline.whole.high <= 0.95
    assert v.headline.whole.low < 0.6 < v.headline.whole.high
    assert (v.next.seeds, v.next.log_hours, v.next.excitation) == (None, None, None)


def test_a_clear_loss_is_no_go(make: Any) -> None:
    v = _decide(make, 1.5)
    assert v.outcome == "no-go"
    assert _states(v)["benefit"] == "failed"


def test_the_same_controller_twice_is_neither(make: Any) -> None:
    # within the reality allowance of 1, nothing is ruled out and nothing shown
    v = _decide(make, 1.0)
    assert v.outcome == "undecided"
    assert _states(v)["benefit"] == "open"


def test_a_against_a_never_says_go(make: Any) -> None:
    # a few thousand episodes each, spread wide; the chance of a false go is far below 1 in 1000
    outcomes = {_decide(make, 1.0, seed=s, spread=0.1).outcome for s in range(30)}
    assert "go" not in outcomes


def test_a_gain_within_the_allowance_is_settled_by_no_simulation(make: Any) -> None:
    v = _decide(make, 0.9, spread=0.005)
    assert v.outcome == "undecided"
    assert "neither seeds nor hours of log settle it" in v.next.sentence.lower()
    assert v.next.seeds is None


@pytest.mark.parametrize(
    ("change", "clause", "state", "outcome"),
    [
        ({"tripped": {"learned": 0.1}}, "harm_violation", "failed", "no-go"),
        ({"tripped": {"learned": 0.01}}, "harm_violation", "open", "undecided"),
        ({"travel": {"learned": 2.0}}, "harm_travel", "failed", "no-go"),
        ({"travel": {"learned": 1.4}}, "harm_travel", "met", "go"),
        ({"offset": {"learned": 0.2}}, "harm_offset", "failed", "no-go"),
        ({"stress_ratio": 1.5}, "stress_delay", "failed", "no-go"),
        ({"stress_ratio": 1.05}, "stress_delay", "open", "undecided"),
        ({"stress_ratio": 1.0}, "stress_delay", "met", "go"),
        ({"support": 0.9}, "evidence_support", "failed", "undecided"),
        ({"support": math.nan}, "evidence_support", "open", "undecided"),
        ({"practice_ratio": 0.4}, "evidence_optimism", "failed", "undecided"),
        ({"practice": None}, "evidence_optimism", "open", "undecided"),
        (
            {"evidence": replace(GOOD, stops=("the clock runs back",))},
            "evidence_audit",
            "failed",
            "undecided",
        ),
        (
            {"evidence": replace(GOOD, models_passed=0)},
            "evidence_validation",
            "failed",
            "undecided",
        ),
        ({"evidence": replace(GOOD, coverage=0.8)}, "evidence_coverage", "failed", "undecided"),
        ({"evidence": replace(GOOD, coverage=math.nan)}, "evidence_coverage", "open", "undecided"),
        (
            {"roles": replace(ROLES, better_incumbent="today")},
            "evidence_baseline",
            "failed",
            "undecided",
        ),
        (
            {"ledger": Ledger((LedgerRow("budget limit", {}, False),))},
            "evidence_ledger",
            "failed",
            "undecided",
        ),
    ],
)
def test_one_flaw_changes_one_clause(
    make: Any, change: dict[str, Any], clause: str, state: str, outcome: str
) -> None:
    v = _decide(make, 0.6, **change)
    got = {c.name: c for c in v.clauses}
    assert got[clause].state == state
    assert v.outcome == outcome
    assert got[clause].sentence.endswith(".")
    # nothing else was touched
    others = {n for n, s in _states(v).items() if n != clause}
    assert others <= ({"benefit"} if clause == "evidence_optimism" else set())


@pytest.mark.parametrize(("at_optimum", "state"), [(None, "open"), (False, "failed")])
def test_a_baseline_not_at_its_optimum(make: Any, at_optimum: bool | None, state: str) -> None:
    team = [
        make.contender("pid", "classical", at_optimum=at_optimum),
        make.contender("learned", "learned"),
    ]
    v = _decide(make, 0.6, contenders=team)
    assert _states(v) == {"evidence_baseline": state}
    assert v.outcome == "undecided"
    assert "optimum" in v.sentence


def test_too_few_episodes_leave_the_violation_bound_open_and_ask_for_seeds(make: Any) -> None:
    rng = np.random.default_rng(2)
    costs = make.paired_costs(rng, 0.6, n_p=10, n_s=8)
    few = make.trials(costs)
    v = _decide(
        make,
        0.6,
        jury=few,
        stress={},
        circumstances=replace(HOURS, seeds=4, episodes_per_seed=20),
    )
    got = {c.name: c for c in v.clauses}
    # 80 clean episodes: the bound is 1 - 0.05 ** (1 / 80) = 3.7 %
    assert got["harm_violation"].state == "open"
    assert got["harm_violation"].figure == pytest.approx(1 - 0.05 ** (1 / 80), rel=1e-9)
    # 299 clean episodes are needed for 1 %, that is 15 seeds of 20 episodes
    assert v.next.seeds == 15


def test_more_violations_than_the_baseline_under_stress_do_harm(make: Any) -> None:
    rng = np.random.default_rng(3)
    costs = make.paired_costs(rng, 0.6)
    v = _decide(make, 0.6, stress={"noise": make.trials(costs, tripped={"learned": 0.2})})
    assert _states(v) == {"stress_noise": "failed"}
    both = make.trials(costs, tripped={"learned": 0.2, "pid": 0.2})
    assert _decide(make, 0.6, stress={"noise": both}).outcome == "go"


def test_an_offset_of_no_account_is_no_harm(make: Any) -> None:
    v = _decide(make, 0.6, offset={"learned": 0.02, "pid": 0.01}, offset_floor=np.array([0.5]))
    assert v.outcome == "go"


def test_travel_where_the_baseline_stands_still(make: Any) -> None:
    v = _decide(make, 0.6, travel={"learned": 0.1, "pid": 0.0})
    got = {c.name: c for c in v.clauses}
    assert got["harm_travel"].state == "failed"
    assert "beyond any bound" not in v.outcome


def test_the_order_of_the_contenders_changes_nothing(make: Any) -> None:
    rng = np.random.default_rng(5)
    costs = make.paired_costs(rng, 0.7) | {"third": make.paired_costs(rng, 0.8)["learned"]}
    team = [
        make.contender("pid", "classical", at_optimum=True),
        make.contender("learned", "learned"),
        make.contender("third", "learned"),
    ]
    turned = {n: costs[n] for n in ("third", "learned", "pid")}
    a = _decide(make, 0.7, jury=make.trials(costs), contenders=team)
    b = _decide(make, 0.7, jury=make.trials(turned), contenders=team[::-1])
    assert a.sentence == b.sentence
    assert a.headline == b.headline
    assert a.clauses == b.clauses
    assert a.headline is not None
    assert a.headline.confidence == 0.95
    # two learned contenders: one of them is read at 97.5 %, so that both hold at 95 %
    levels = [a.figures[n].ratios["regulation"].confidence for n in ("learned", "third")]
    assert sorted(levels) == pytest.approx([0.95, 0.975])


def test_the_unit_of_the_cost_changes_nothing(make: Any) -> None:
    rng = np.random.default_rng(7)
    costs = make.paired_costs(rng, 0.75)
    a = _decide(make, 0.75, jury=make.trials(costs))
    b = _decide(make, 0.75, jury=make.trials({n: 1e4 * c for n, c in costs.items()}), practice=None)
    states = [{c.name: c.state for c in v.clauses if "optimism" not in c.name} for v in (a, b)]
    assert states[0] == states[1]
    got = [next(c.figure for c in v.clauses if c.name == "harm_worst_tenth") for v in (a, b)]
    assert got[0] == pytest.approx(got[1], rel=1e-9)


def test_the_least_gain_decides(make: Any) -> None:
    # 0.6 with the allowance reaches up to about 0.71: a least gain of 40 % is not shown
    v = _decide(make, 0.6, acceptance=Acceptance(least_gain=0.4))
    assert _states(v) == {"benefit": "open"}
    v = _decide(make, 0.6, acceptance=Acceptance(least_gain=0.6))
    assert v.outcome == "no-go"


def test_the_planted_flaw_that_only_the_jury_sees(make: Any) -> None:
    # practice plants promise a gain of 40 %, the jury shows a loss: never go
    v = _decide(make, 1.1, practice_ratio=0.6)
    assert v.outcome != "go"
    assert _states(v)["evidence_optimism"] == "failed"


def test_without_figures_says_why_and_what_would_help() -> None:
    bad = Evidence(models_tried=4, models_passed=0, reasons=("the free run misses the output",))
    v = without_figures(
        evidence=bad, circumstances=HOURS, reason="no model passed validation", cost="regulation"
    )
    assert (v.outcome, v.candidate, v.headline) == ("undecided", "", None)
    assert v.sentence.startswith("Undecided: no model passed validation")
    assert outcome_of(v.clauses) == "undecided"
    assert v.next.excitation is not None
    assert "valve between 20 and 60 %" in v.next.excitation
    failed = {c.name for c in v.clauses if c.state == "failed"}
    assert "evidence_validation" in failed


def test_a_study_without_a_learned_contender_keeps_the_figures_of_the_others(make: Any) -> None:
    figures = _decide(make, 0.8).figures
    v = without_figures(
        evidence=GOOD,
        circumstances=HOURS,
        reason="no learned controller fits this plant",
        cost="regulation",
        baseline="pid",
        figures={"pid": figures["pid"]},
    )
    assert (v.outcome, v.baseline, list(v.figures)) == ("undecided", "pid", ["pid"])
    assert "a learned candidate" in v.next.sentence


def test_roles_have_to_be_filled(make: Any) -> None:
    with pytest.raises(InputError, match="a candidate and a baseline are needed"):
        _decide(make, 0.6, roles=replace(ROLES, candidate=""))
