"""The fairness ledger: what each contender was given and what it used, as it happened."""

import hashlib
import math
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass

import numpy as np

from idlearn.control import FilterForm
from idlearn.cost import BoundCost
from idlearn.envs import Assignment, Contender, Loop, Streams, TrialGround


@dataclass(frozen=True)
class LedgerRow:
    """One item of the ledger.

    Attributes:
        item: what is compared.
        values: contender -> what it had, in words.
        equal: whether nobody was favoured.
    """

    item: str
    values: Mapping[str, str]
    equal: bool


@dataclass(frozen=True)
class Ledger:
    """All items.

    Attributes:
        rows: in a fixed order.
    """

    rows: tuple[LedgerRow, ...]

    @property
    def equal(self) -> bool:
        """Whether nobody was favoured in anything."""
        return all(r.equal for r in self.rows)

    @property
    def unequal(self) -> tuple[str, ...]:
        """Items in which somebody was favoured."""
        return tuple(r.item for r in self.rows if not r.equal)

    def to_table(self) -> dict[str, list[object]]:
        """Return the columns of ledger.csv: item, one per contender, equal."""
        names = list(self.rows[0].values) if self.rows else []
        table: dict[str, list[object]] = {"item": [r.item for r in self.rows]}
        table |= {n: [r.values[n] for r in self.rows] for n in names}
        return table | {"equal": [r.equal for r in self.rows]}


def keep_ledger(
    contenders: Sequence[Contender],
    given: Mapping[str, Assignment],
    judged: Mapping[str, TrialGround],
    *,
    candidate: str = "",
    baseline: str = "",
) -> Ledger:
    """Write the ledger from the assignments, the grounds and the controllers themselves.

    Args:
        contenders: all of them.
        given: the assignment each contender tuned or trained on, by name; an incumbent, which
            tunes nothing, needs none.
        judged: the ground each contender was judged on, by name.
        candidate: whose budget the baseline has to match; "" compares all tuned contenders.
        baseline: see `candidate`.
    """
    tuned = [c.name for c in contenders if c.name in given]

    def same(item: str, value: Callable[[Contender], str | None]) -> LedgerRow:
        found = {c.name: value(c) for c in contenders}
        known = {v for v in found.values() if v is not None}
        return LedgerRow(
            item,
            {n: "not tuned here" if v is None else v for n, v in found.items()},
            len(known) <= 1,
        )

    def task(item: str, value: Callable[[Assignment], str]) -> LedgerRow:
        return same(item, lambda c: value(given[c.name]) if c.name in given else None)

    def court(item: str, value: Callable[[TrialGround], str]) -> LedgerRow:
        return same(item, lambda c: value(judged[c.name]))

    rows = (
        same("observations", lambda c: _observations(c)),
        same("sample time", lambda c: f"{c.controller.sample_time_s:g} s"),
        court("latency", lambda g: f"{g.loop.latency_samples} samples"),
        _known_latency(contenders, judged),
        court("limits", lambda g: _limits(g.loop)),
        _own_limits(contenders, judged),
        court("scenarios", lambda g: ", ".join(g.streams[0].names)),
        court("jury streams", lambda g: _digest_streams(g.streams)),
        court("jury plants", lambda g: _digest_plants(g)),
        court("costs judged", lambda g: _costs(g.loop.costs)),
        task("practice plants", lambda a: _digest_plants(a.practice)),
        task("practice streams", lambda a: _digest_streams(a.practice.streams)),
        task("selection plants", lambda a: _digest_plants(a.selection)),
        task("cost tuned under", lambda a: _tuned_cost(a)),
        task(
            "robustness limit",
            lambda a: f"peak {a.robustness.peak:g} on {a.robustness.share:.0%} of the plants",
        ),
        task("pessimism", lambda a: "mean of the average and the worst tenth of the plants"),
        _limit_row(contenders, given, candidate, baseline),
        LedgerRow(
            "plant-steps spent",
            {
                c.name: f"{c.plant_steps}" if c.name in given else "not tuned here"
                for c in contenders
            },
            all(c.plant_steps <= given[c.name].budget_steps for c in contenders if c.name in tuned),
        ),
    )
    return Ledger(rows)


def _limit_row(
    contenders: Sequence[Contender], given: Mapping[str, Assignment], candidate: str, baseline: str
) -> LedgerRow:
    """Compare budget limits: the baseline had at least what the candidate had."""
    values = {
        c.name: f"{given[c.name].budget_steps} plant-steps" if c.name in given else "not tuned here"
        for c in contenders
    }
    if candidate in given and baseline in given:
        fair = given[baseline].budget_steps >= given[candidate].budget_steps
    else:
        fair = len({a.budget_steps for a in given.values()}) <= 1
    return LedgerRow("budget limit", values, fair)


def _observations(contender: Contender) -> str:
    layout = contender.controller.layout
    return (
        f"{layout.n_y} outputs, {len(layout.controlled)} setpoints, {layout.n_d} disturbances, "
        f"{layout.n_u} applied inputs"
    )


def _known_latency(contenders: Sequence[Contender], judged: Mapping[str, TrialGround]) -> LedgerRow:
    """Compare what controllers assume; one that has no filter form is told by its assignment."""
    values, right = {}, True
    for c in contenders:
        form = getattr(c.controller, "form", None)
        assumed = form.latency if isinstance(form, FilterForm) else None
        values[c.name] = "told" if assumed is None else f"{assumed} samples"
        # a classical structure without a predictor uses none of it, which favours nobody else
        right &= assumed in (None, 0, judged[c.name].loop.latency_samples)
    return LedgerRow("latency told", values, right)


def _own_limits(contenders: Sequence[Contender], judged: Mapping[str, TrialGround]) -> LedgerRow:
    """A controller may keep narrower limits of its own, never wider use of the actuator."""
    values = {}
    for c in contenders:
        form = getattr(c.controller, "form", None)
        known = isinstance(form, FilterForm)
        values[c.name] = _ranges(form.low, form.high) if known and form is not None else "told"
    # the engine clips every request by the same actuator, whatever a controller believes
    fair = len({_limits(judged[c.name].loop) for c in contenders}) <= 1
    return LedgerRow("limits told", values, fair)


def _limits(loop: Loop) -> str:
    a = loop.actuator
    rate = ", ".join("none" if math.isinf(r) else f"{r:g}" for r in a.rate)
    step = ", ".join(f"{r:g}" for r in a.resolution)
    return f"{_ranges(a.low, a.high)}; rate per sample {rate}; resolution {step}"


def _ranges(low: np.ndarray, high: np.ndarray) -> str:
    return ", ".join(f"{a:g} to {b:g}" for a, b in zip(low, high, strict=True))


def _costs(bound: BoundCost) -> str:
    return f"{', '.join(c.name for c in bound.costs)} ({_short(repr(bound.costs).encode())})"


def _tuned_cost(assignment: Assignment) -> str:
    cost = assignment.practice.loop.costs.costs[assignment.cost]
    return f"{cost.name} ({_short(repr(cost).encode())})"


def _digest_streams(streams: tuple[Streams, ...]) -> str:
    parts = [
        np.ascontiguousarray(a).tobytes()
        for s in streams
        for a in (s.setpoint, s.load, s.measured, s.noise)
    ]
    return f"{sum(len(s) for s in streams)} ({_short(*parts)})"


def _digest_plants(ground: TrialGround) -> str:
    e = ground.ensemble
    arrays = (e.A, e.B, e.C, e.D, e.K, e.S, e.u0, e.y0, np.array([ground.gain, ground.noise]))
    return f"{len(e)} ({_short(*(np.ascontiguousarray(a).tobytes() for a in arrays))})"


def _short(*parts: bytes) -> str:
    digest = hashlib.sha256()
    for part in parts:
        digest.update(part)
    return digest.hexdigest()[:12]
