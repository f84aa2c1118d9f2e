"""Comparison: one cost, the same plants and streams for all, and a verdict with its reasons."""

from idlearn.comparison.acceptance import Acceptance, Stress
from idlearn.comparison.advice import Circumstances, Next
from idlearn.comparison.clauses import Clause
from idlearn.comparison.contract import check_document
from idlearn.comparison.document import (
    Extras,
    ModelFacts,
    StudyFacts,
    verdict_document,
)
from idlearn.comparison.evidence import Evidence
from idlearn.comparison.figures import Figures, Rate, Roles, choose_roles, figures_of
from idlearn.comparison.floors import Floor, below_floor, run_floor
from idlearn.comparison.headline import REALITY_ALLOWANCE, Headline
from idlearn.comparison.ladder import climb, cross_table, ladder_table
from idlearn.comparison.ledger import Ledger, LedgerRow, keep_ledger
from idlearn.comparison.resampling import Estimate, Interval, Resamples, draw_resamples
from idlearn.comparison.scenarios import (
    DerivedScenario,
    derive_scenarios,
    rest_levels,
    scenario_table,
    settling_samples,
)
from idlearn.comparison.tables import contenders_table, paired_table, stress_table
from idlearn.comparison.trials import Trials, run_trials, stress_trials
from idlearn.comparison.verdict import Verdict, decide, outcome_of, without_figures

__all__ = [
    "REALITY_ALLOWANCE",
    "Acceptance",
    "Circumstances",
    "Clause",
    "DerivedScenario",
    "Estimate",
    "Evidence",
    "Extras",
    "Figures",
    "Floor",
    "Headline",
    "Interval",
    "Ledger",
    "LedgerRow",
    "ModelFacts",
    "Next",
    "Rate",
    "Resamples",
    "Roles",
    "Stress",
    "StudyFacts",
    "Trials",
    "Verdict",
    "below_floor",
    "check_document",
    "choose_roles",
    "climb",
    "contenders_table",
    "cross_table",
    "decide",
    "derive_scenarios",
    "draw_resamples",
    "figures_of",
    "keep_ledger",
    "ladder_table",
    "outcome_of",
    "paired_table",
    "rest_levels",
    "run_floor",
    "run_trials",
    "scenario_table",
    "settling_samples",
    "stress_table",
    "stress_trials",
    "verdict_document",
    "without_figures",
]
