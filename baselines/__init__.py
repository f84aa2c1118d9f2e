"""Classical controllers, tuned to their best: the ones a learned controller has to beat."""

from idlearn.baselines.incumbent import Incumbent, build_incumbent
from idlearn.baselines.linear import tune_linear
from idlearn.baselines.lqg import (
    LqgController,
    design_lqg,
    exact_cost,
    lqg_contender,
    stationary_cost,
)
from idlearn.baselines.pid import Pairing, PidController, PidSettings, pid_form
from idlearn.baselines.rules import simc
from idlearn.baselines.tuning import tune_pid

__all__ = [
    "Incumbent",
    "LqgController",
    "Pairing",
    "PidController",
    "PidSettings",
    "build_incumbent",
    "design_lqg",
    "exact_cost",
    "lqg_contender",
    "pid_form",
    "simc",
    "stationary_cost",
    "tune_linear",
    "tune_pid",
]
