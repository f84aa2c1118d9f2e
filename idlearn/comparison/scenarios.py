"""Scenarios derived from a log, for studies that declare none.

Sizes come from what the log covers, times from how fast the identified plant settles; nothing is
asked of a contender that the log says nothing about.
"""

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from idlearn.comparison import phrases
from idlearn.envs import Scenario
from idlearn.errors import UninformativeError
from idlearn.logs import PlantLog
from idlearn.models import InnovationsModel

SHORTEST, LONGEST = 60, 600  # samples of a derived scenario
_VARY = 0.3  # seeds then differ in size and time by what an operator would vary
_REMNANT = 0.02  # share of a step response that may still be missing when it has settled


@dataclass(frozen=True, kw_only=True)
class DerivedScenario(Scenario):
    """A scenario and how it was derived.

    Attributes:
        sentence: one plain sentence.
    """

    sentence: str = ""


def derive_scenarios(log: PlantLog, model: InnovationsModel) -> tuple[DerivedScenario, ...]:
    """Derive setpoint steps, a load step and plain regulation from a log and its model.

    Args:
        log: gives the ranges, 5 to 95 % of its valid samples.
        model: nominal model, without load states; gives settling and the size of loads.

    Returns:
        scenarios of one length, SHORTEST to LONGEST samples. Setpoint steps are left out where
        the log has no setpoint or its outputs stood still, the load step where no load shows.

    Raises:
        UninformativeError: the log has no valid sample.
    """
    n = episode_samples(model)
    duration = n * log.sample_time_s
    return (
        *_setpoint_steps(log, duration),
        *_load_step(log, model, duration),
        DerivedScenario(
            name="regulation",
            duration_s=duration,
            setpoint={
                log.outputs[c].name: ((0.0, float(r)),)
                for c, r in zip(log.controlled, rest_levels(log), strict=True)
            },
            sentence=(
                f"Plain regulation for {phrases.figure(duration)} s at the median levels of the "
                "log, under the noise and disturbance identified from it."
            ),
        ),
    )


def describe(scenario: Scenario) -> str:
    """Return how the scenario came about, in one sentence."""
    if isinstance(scenario, DerivedScenario):
        return scenario.sentence
    return f"Declared in the sheet: {scenario.name}, {phrases.figure(scenario.duration_s)} s."


def scenario_table(scenarios: Sequence[Scenario]) -> dict[str, list[object]]:
    """Return the columns of scenarios.csv."""
    return {
        "name": [s.name for s in scenarios],
        "duration_s": [s.duration_s for s in scenarios],
        "declared": [not isinstance(s, DerivedScenario) for s in scenarios],
        "sentence": [describe(s) for s in scenarios],
    }


def rest_levels(log: PlantLog) -> np.ndarray:
    """Return the level each setpoint holds where a scenario says nothing (n_setpoints,).

    The median setpoint, kept inside what its output covered [engineering units].
    """
    rows = _valid(log)
    if log.setpoint is None or not log.controlled:
        return np.zeros(0)
    low, high = np.quantile(log.y[rows][:, list(log.controlled)], [0.05, 0.95], axis=0)
    return np.asarray(np.clip(np.median(log.setpoint[rows], axis=0), low, high))


def episode_samples(model: InnovationsModel) -> int:
    """Return the length of a derived scenario: six settlings of the plant, within bounds."""
    return int(np.clip(6 * settling_samples(model), SHORTEST, LONGEST))


def settling_samples(model: InnovationsModel) -> int:
    """Return after how many samples every significant step response has settled.

    Settled means within 2 % of the final value (textbook use); a response that has not settled
    within a fifth of the longest scenario counts as that long, as does an integrating one.
    """
    horizon = LONGEST // 5
    response = np.abs(model.step_response(horizon + 1)[:, :, : model.n_actuators])
    signed = model.step_response(horizon + 1)[:, :, : model.n_actuators]
    final = signed[-1]
    largest = response.max(axis=0)
    significant = largest >= 0.05 * largest.max(axis=1, keepdims=True)
    settled = np.abs(signed - final) <= _REMNANT * np.maximum(largest, 1e-300)
    # the last sample that was still outside, per output and actuator
    outside = np.where(settled, 0, np.arange(horizon + 1)[:, None, None]).max(axis=0)
    return int(max(1, (outside * significant).max() + 1))


def load_sizes(log: PlantLog, model: InnovationsModel) -> np.ndarray:
    """Return the size of the loads that the log shows, at each actuator (n_u,).

    What the free run of the model misses, averaged over one settling, is read as a load at the
    actuator: twice its standard deviation over the steady gain, and at most a quarter of the
    range the actuator covered. 0 where the record is too short to tell or nothing was missed
    [engineering units].
    """
    block = settling_samples(model)
    means = []
    for part in log.segment_logs():
        inputs = part.inputs
        missed = part.y - model.free_run(inputs, part.y[: min(block, len(part.y))])
        whole = len(missed) // block * block
        if whole:
            means.append(missed[:whole].reshape(-1, block, missed.shape[1]).mean(axis=1))
    rows = _valid(log)
    low, high = np.quantile(log.u[rows], [0.05, 0.95], axis=0)
    most = 0.25 * (high - low)
    slow = np.concatenate(means) if means else np.zeros((0, log.n_y))
    if len(slow) < 3:
        return np.zeros(log.n_u)
    # steady gain as the response reaches it within an episode, so that integrators have one
    gain = np.abs(model.step_response(LONGEST // 5 + 1)[-1, :, : model.n_actuators])
    with np.errstate(divide="ignore"):
        each = 2 * slow.std(axis=0, ddof=1)[:, None] / gain  # (n_y, n_u)
    size = np.minimum(np.where(np.isfinite(each), each, np.inf).min(axis=0), most)
    # what is lost in the used range is no load
    return np.asarray(np.where(size > 1e-3 * most, size, 0.0))


def _setpoint_steps(log: PlantLog, duration: float) -> tuple[DerivedScenario, ...]:
    if log.setpoint is None or not log.controlled:
        return ()
    rows, steps, said = _valid(log), {}, []
    for column, c in enumerate(log.controlled):
        low, high = np.quantile(log.y[rows, c], [0.05, 0.95])
        asked = log.setpoint[rows, column]
        moved = np.ptp(asked) > 0
        if moved:
            low = max(low, float(np.quantile(asked, 0.05)))
            high = min(high, float(np.quantile(asked, 0.95)))
        if not high > low:
            low, high = np.quantile(log.y[rows, c], [0.05, 0.95])
        if not high > low:
            continue
        # half the range, at its centre: a step drawn 30 % larger still stays inside
        first, second = low + 0.25 * (high - low), high - 0.25 * (high - low)
        delay = 0.2 * column / len(log.controlled)  # outputs move one after the other
        times = [0.0, *(duration * (t + delay) for t in (0.1, 0.4, 0.7))]
        levels = (first, second, first, second)
        name = log.outputs[c].name
        steps[name] = tuple((float(t), float(v)) for t, v in zip(times, levels, strict=True))
        why = "its setpoint and output covered" if moved else "its output covered"
        ends = f"{phrases.figure(first)} and {phrases.figure(second)} {log.outputs[c].unit}"
        said.append(f"{name} steps between {ends.strip()}, the middle half of what {why}")
    if not steps:
        return ()
    return (
        DerivedScenario(
            name="setpoint steps",
            duration_s=duration,
            setpoint=steps,
            vary=_VARY,
            sentence="; ".join(said) + "; times and sizes vary from seed to seed.",
        ),
    )


def _load_step(
    log: PlantLog, model: InnovationsModel, duration: float
) -> tuple[DerivedScenario, ...]:
    rows, loads, said = _valid(log), {}, []
    for j, size in enumerate(load_sizes(log, model)):
        signal = log.actuators[j]
        if not size > 0:
            continue
        # the load pushes so that the answer to it is towards the middle of the limits
        middle = 0.5 * (signal.low + signal.high)
        sign = -1.0 if math.isfinite(middle) and np.median(log.u[rows, j]) < middle else 1.0
        start = duration * (0.15 + 0.3 * j / log.n_u)
        loads[signal.name] = (
            (0.0, 0.0),
            (float(start), sign * float(size)),
            (float(start + 0.4 * duration), 0.0),
        )
        said.append(f"{phrases.figure(float(size))} {signal.unit}".strip() + f" at {signal.name}")
    if not loads:
        return ()
    rest = rest_levels(log)
    return (
        DerivedScenario(
            name="load step",
            duration_s=duration,
            input_disturbance=loads,
            vary=_VARY,
            setpoint={
                log.outputs[c].name: ((0.0, float(r)),)
                for c, r in zip(log.controlled, rest, strict=True)
            },
            sentence=(
                f"A load of {', '.join(said)} comes and goes: as large as the slow part of what "
                "the model misses in the log, referred to the actuator, and at most a quarter of "
                "the range that was used."
            ),
        ),
    )


def _valid(log: PlantLog) -> np.ndarray:
    rows = [np.arange(first, last) for first, last in log.segments]
    if not rows:
        raise UninformativeError(
            "the log has no unbroken stretch of valid samples, so no scenario can be derived"
        )
    return np.concatenate(rows)
