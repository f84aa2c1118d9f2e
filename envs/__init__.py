"""Plants in lock step, and the gymnasium environments made of them."""

from idlearn.envs.actuator import Actuator
from idlearn.envs.contender import (
    Assignment,
    Contender,
    Robustness,
    TrainingRun,
    pessimistic,
)
from idlearn.envs.engine import SharedDraws, simulate
from idlearn.envs.kiln import KILN_SIGNALS, Kiln, KilnTruth, kiln_truth
from idlearn.envs.linear import LinearPlant, LinearState
from idlearn.envs.plant import Draws, Plant, RestingPlant
from idlearn.envs.population import TrialGround, run_costs, run_forms, run_one
from idlearn.envs.registration import register_environments
from idlearn.envs.scenario import Scenario, Streams, make_streams
from idlearn.envs.tally import Inside, Loop, Rollout

register_environments()

__all__ = [
    "KILN_SIGNALS",
    "Actuator",
    "Assignment",
    "Contender",
    "Draws",
    "Inside",
    "Kiln",
    "KilnTruth",
    "LinearPlant",
    "LinearState",
    "Loop",
    "Plant",
    "RestingPlant",
    "Robustness",
    "Rollout",
    "Scenario",
    "SharedDraws",
    "Streams",
    "TrainingRun",
    "TrialGround",
    "kiln_truth",
    "make_streams",
    "pessimistic",
    "run_costs",
    "run_forms",
    "run_one",
    "simulate",
]
