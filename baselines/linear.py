"""The optimised linear policy: LQG whose design knobs are searched under the shared cost.

It counts as classical: most of what a learned policy gains over LQG on a plant with limits,
steps and model spread is had by this already, and a candidate has to beat it.
"""

import time

import numpy as np

from idlearn.baselines.lqg import LqgController
from idlearn.baselines.tuning import tune
from idlearn.budget import Budget
from idlearn.envs.contender import Assignment, Contender
from idlearn.envs.lqgform import LqgKnobs
from idlearn.envs.scoring import Scorer
from idlearn.seeding import stream


def tune_linear(assignment: Assignment, name: str = "linear") -> Contender:
    """Tune the knobs of LQG: logarithms of factors on moves, load and noise gains.

    Args:
        assignment: the task.
        name: of the contender.
    """
    begin = time.perf_counter()
    a, knobs = assignment, LqgKnobs.of(assignment)
    rng, bounds = stream(a.seed, "tune", name), knobs.bounds
    drawn = rng.uniform(bounds[:, 0], bounds[:, 1], size=(200, len(bounds)))
    budget = Budget(a.budget_steps)
    scorer = Scorer(a, knobs.form, budget)
    # plain LQG is a start, and stays in the choice at the end
    design = np.array([np.log(knobs.kept(scorer.responses)[0]), 0.0, 0.0])
    starts = np.concatenate([design[None], np.zeros((1, len(bounds))), drawn])
    tuned = tune(scorer, starts, bounds=bounds, sigma=0.4, rng=rng, keep=design)
    layout = a.practice.loop.layout
    return Contender(
        name=name,
        side="classical",
        controller=LqgController(knobs.form(tuned.x), layout, knobs.model.sample_time_s),
        plant_steps=budget.spent,
        seconds=time.perf_counter() - begin,
        runs=tuned.runs,
        at_optimum=tuned.at_optimum,
        peak=tuned.peak,
        facts=knobs.facts(tuned.x),
    )
