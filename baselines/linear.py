"""The optimised linear policy: LQG whose design knobs are searched under the shared cost.

It counts as classical: most of what a learned policy gains over LQG on a plant with limits,
steps and model spread is had by this already, and a candidate has to beat it.
"""

import time

import numpy as np

from idlearn.baselines.lqg import (
    LqgController,
    kept_design,
    knob_model,
    scaled,
    with_moves,
)
from idlearn.baselines.tuning import Scorer, tune
from idlearn.budget import Budget
from idlearn.control import FilterForm
from idlearn.envs.contender import Assignment, Contender
from idlearn.envs.lqgform import lqg_form
from idlearn.models.regulator import offset_free
from idlearn.seeding import stream

KNOBS = ("move weight factor", "load gain factor", "noise gain factor")
BOUNDS = np.array([[-4.0, 9.0], [-3.5, 3.0], [-3.0, 0.7]])


def tune_linear(assignment: Assignment, name: str = "linear") -> Contender:
    """Tune the knobs of LQG: logarithms of factors on moves, load and noise gains.

    Args:
        assignment: the task.
        name: of the contender.
    """
    begin = time.perf_counter()
    a, loop = assignment, assignment.practice.loop
    model = offset_free(a.nominal.member(0))
    weights = with_moves(a.weights, a.reach, a.spread)

    def build(x: np.ndarray) -> FilterForm:
        knobs = knob_model(model, load=float(np.exp(x[1])), noise=float(np.exp(x[2])))
        return lqg_form(
            knobs,
            scaled(weights, float(np.exp(x[0]))),
            loop.layout,
            loop.actuator,
            a.latency_samples,
        )

    rng = stream(a.seed, "tune", name)
    bounds = BOUNDS
    drawn = rng.uniform(bounds[:, 0], bounds[:, 1], size=(200, len(bounds)))
    budget = Budget(a.budget_steps)
    scorer = Scorer(a, build, budget)
    # plain LQG is a start, and stays in the choice at the end
    design = np.array([np.log(kept_design(a, model, weights, scorer.responses)[0]), 0.0, 0.0])
    starts = np.concatenate([design[None], np.zeros((1, len(bounds))), drawn])
    tuned = tune(scorer, starts, bounds=bounds, sigma=0.4, rng=rng, keep=design)
    return Contender(
        name=name,
        side="classical",
        controller=LqgController(build(tuned.x), loop.layout, model.sample_time_s),
        plant_steps=budget.spent,
        seconds=time.perf_counter() - begin,
        runs=tuned.runs,
        at_optimum=tuned.at_optimum,
        peak=tuned.peak,
        facts={k: float(np.exp(v)) for k, v in zip(KNOBS, tuned.x, strict=False)},
    )
