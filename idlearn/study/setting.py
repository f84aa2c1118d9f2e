"""From a sheet, a log and its models to the one setting that every contender shares."""

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np

from idlearn.comparison import derive_scenarios, rest_levels
from idlearn.control import ObservationLayout
from idlearn.cost import BoundCost, Cost, default_cost, primary_of
from idlearn.envs import (
    Actuator,
    Assignment,
    Loop,
    Robustness,
    Scenario,
    Streams,
    TrialGround,
    make_streams,
)
from idlearn.envs.scenario import check_scenario
from idlearn.identification import EnsembleSet
from idlearn.logs import Finding, PlantLog, Signal
from idlearn.models import Ensemble, InnovationsModel
from idlearn.study.effort import Effort
from idlearn.study.sheet import Sheet


@dataclass(frozen=True)
class Setting:
    """What surrounds every contender of a study.

    Attributes:
        log: with limits on every actuator and a setpoint for every controlled output.
        layout: observation columns.
        loop: actuator, costs, trips, latency.
        costs: every cost, the primary one at index `primary`.
        primary: index of the primary cost.
        scenarios: declared or derived.
        declared: whether the scenarios are the sheet's own.
        findings: what was assumed on the way.
    """

    log: PlantLog
    layout: ObservationLayout
    loop: Loop
    costs: tuple[Cost, ...]
    primary: int
    scenarios: tuple[Scenario, ...]
    declared: bool
    findings: tuple[Finding, ...]

    @property
    def outputs(self) -> tuple[str, ...]:
        """Names of the outputs."""
        return tuple(s.name for s in self.log.outputs)

    @property
    def actuators(self) -> tuple[str, ...]:
        """Names of the actuators."""
        return tuple(s.name for s in self.log.actuators)

    def streams(
        self, purpose: str, n_seeds: int, seed: int, scenarios: Sequence[Scenario] | None = None
    ) -> tuple[Streams, ...]:
        """Draw the streams of one purpose, alike for every contender."""
        return make_streams(
            self.scenarios if scenarios is None else scenarios,
            purpose=purpose,
            seeds=range(n_seeds),
            seed=seed,
            sample_time_s=self.log.sample_time_s,
            outputs=self.outputs,
            controlled=self.layout.controlled,
            rest=rest_levels(self.log).tolist(),
            actuators=self.actuators,
            disturbance=_disturbance_record(self.log),
            n_d=self.layout.n_d,
        )


def with_limits(log: PlantLog) -> tuple[PlantLog, tuple[Finding, ...]]:
    """Give every actuator finite limits: the sheet's, else the range seen in the log."""
    signals, findings = [], []
    valid = log.valid
    for signal in log.signals:
        if signal.role != "actuator" or np.isfinite([signal.low, signal.high]).all():
            signals.append(signal)
            continue
        column = log.u[valid, log.actuators.index(signal)]
        low = signal.low if np.isfinite(signal.low) else float(column.min())
        high = signal.high if np.isfinite(signal.high) else float(column.max())
        signals.append(replace(signal, low=low, high=high))
        findings.append(
            Finding(
                "limits assumed",
                "care",
                f"Actuator {signal.name!r} has no low and high in the sheet; the range seen in "
                f"the log, {low:g} to {high:g} {signal.unit}".rstrip()
                + ", is used as its limits. Give the real ones.",
            )
        )
    return replace(log, signals=tuple(signals)), tuple(findings)


def with_setpoints(log: PlantLog) -> PlantLog:
    """Give a log without setpoints one at the median of every output: all are controlled."""
    if log.setpoints:
        return log
    level = np.median(log.y[log.valid], axis=0)
    signals = [
        Signal(name=f"setpoint of {s.name}", role="setpoint", unit=s.unit, of=s.name)
        for s in log.outputs
    ]
    others = (*log.actuators, *log.outputs, *signals, *log.disturbances)
    return replace(log, setpoint=np.tile(level, (log.n_samples, 1)), signals=others)


def layout_of(log: PlantLog) -> ObservationLayout:
    """Return the observation layout of a log with setpoints."""
    return ObservationLayout(log.n_y, log.controlled, log.n_d, log.n_u)


def movement(values: np.ndarray) -> np.ndarray:
    """Return half the range that holds 95 % of the values, per column (N, m) -> (m,)."""
    low, high = np.quantile(values, [0.025, 0.975], axis=0)
    half = 0.5 * (high - low)
    return np.where(half > 0, half, np.maximum(values.std(axis=0), 1e-12))


def check_names(sheet: Sheet, log: PlantLog) -> None:
    """Refuse costs and scenarios that name other signals than the log's, before anything is run.

    Raises:
        InputError: with the place and the names there are.
    """
    log = with_setpoints(log)
    layout = layout_of(log)
    outputs = [s.name for s in log.outputs]
    actuators = [s.name for s in log.actuators]
    BoundCost(sheet.costs, outputs, actuators, layout.controlled)
    for scenario in sheet.scenarios:
        check_scenario(scenario, [outputs[c] for c in layout.controlled], actuators)


def make_setting(sheet: Sheet, log: PlantLog, nominal: InnovationsModel) -> Setting:
    """Assemble costs, scenarios and surroundings.

    Raises:
        InputError: a cost or a scenario names a signal that is not there.
    """
    log, findings = with_limits(log)
    log = with_setpoints(log)
    layout = layout_of(log)
    outputs = tuple(s.name for s in log.outputs)
    actuators = tuple(s.name for s in log.actuators)
    valid = log.valid
    costs = sheet.costs
    if not costs:
        costs = (
            default_cost(
                outputs,
                layout.controlled,
                actuators,
                movement(log.y[valid])[list(layout.controlled)].tolist(),
                movement(log.u[valid]).tolist(),
            ),
        )
        findings = (
            *findings,
            Finding(
                "cost assumed",
                "care",
                "The sheet declares no cost; squared tracking error and squared moves, scaled by "
                "their movement in the log, are used. Declare the cost you mean.",
            ),
        )
    bound = BoundCost(costs, outputs, actuators, layout.controlled)
    loop = Loop(
        layout=layout,
        actuator=Actuator.of(log.actuators, log.sample_time_s),
        costs=bound,
        trip_low=np.array([s.trip_low for s in log.outputs]),
        trip_high=np.array([s.trip_high for s in log.outputs]),
        latency_samples=sheet.latency_samples,
    )
    scenarios = sheet.scenarios or derive_scenarios(log, nominal)
    return Setting(
        log=log,
        layout=layout,
        loop=loop,
        costs=costs,
        primary=primary_of(costs),
        scenarios=tuple(scenarios),
        declared=bool(sheet.scenarios),
        findings=findings,
    )


def make_assignment(setting: Setting, models: EnsembleSet, effort: Effort, seed: int) -> Assignment:
    """Put together the one task that every contender is given."""
    valid = setting.log.valid

    def ground(ensemble: Ensemble, purpose: str) -> TrialGround:
        streams = setting.streams(purpose, effort.practice_seeds, seed)
        return TrialGround(ensemble, streams, setting.loop)

    return Assignment(
        practice=ground(models.practice, "practice"),
        selection=ground(models.selection, "selection"),
        nominal=Ensemble.from_models([models.nominal], ("nominal",)),
        weights=setting.loop.costs.riccati(setting.primary),
        cost=setting.primary,
        budget_steps=effort.budget_steps,
        runs=effort.runs,
        seed=seed,
        robustness=Robustness(),
        reach=movement(setting.log.u[valid]),
        spread=movement(setting.log.y[valid]),
        latency_samples=setting.loop.latency_samples,
    )


def _disturbance_record(log: PlantLog) -> np.ndarray | None:
    """Return the longest unbroken record of measured disturbances, for replay."""
    if log.disturbance is None or not log.n_d:
        return None
    first, last = max(log.segments.tolist(), key=lambda s: s[1] - s[0])
    return log.disturbance[first:last]
