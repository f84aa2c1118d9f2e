"""The lock-step engine against the textbook recursion, written out one number at a time."""

from dataclasses import replace
from types import SimpleNamespace
from typing import Any

import numpy as np
import pytest

from idlearn.budget import Budget, BudgetSpent
from idlearn.control import FilterForm, LinearController
from idlearn.cost import Cost, CostTerm
from idlearn.envs import Actuator, LinearPlant, Loop, SharedDraws, Streams, simulate
from idlearn.envs import tally as tally_module
from idlearn.models import InnovationsModel


def dot(row: Any, column: Any) -> float:
    """Return the scalar product, term by term."""
    total = 0.0
    for a, b in zip(row, column, strict=True):
        total += float(a) * float(b)
    return total


def by_hand(
    m: InnovationsModel,
    f: FilterForm,
    s: Streams,
    row: int,
    around: Loop,
    x: Any,
    u: Any,
    late: int,
) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Run one loop in plain Python from state x and input u; return y, applied u, requests."""
    root = np.linalg.cholesky(m.S)
    n_y, n_u, a = m.n_y, m.n_actuators, around.actuator
    x, u = [float(v) for v in x], [float(v) for v in u]
    pending = [list(u) for _ in range(late)]  # what the actuator still has to do
    sent = [list(u) for _ in range(f.latency)]  # what the controller knows of it
    z: list[float] | None = None
    ys, us, requests = [], [], []
    for k in range(s.n_samples):
        e = [dot(root[i], s.noise[row, k]) for i in range(n_y)]
        y = [m.y0[i] + dot(m.C[i], x) + e[i] for i in range(n_y)]
        o = [*y, *s.setpoint[row, k], *s.measured[row, k], *u, *[v for r in sent for v in r]]
        if z is None:
            z = [dot(f.Z[i], o) + f.z0[i] for i in range(len(f.z0))]
        z = [dot(f.F[i], z) + dot(f.G[i], o) + f.g[i] for i in range(len(z))]
        request = []
        for j in range(n_u):
            value = dot(f.H[j], z) + dot(f.J[j], o) + f.h[j]
            value += f.authority[j] * np.tanh(dot(f.M[j], z) + dot(f.N[j], o) + f.m[j])
            request.append(min(max(value, f.low[j]), f.high[j]))
        sent = [*sent, request][1:] if f.latency else []
        pending.append(request)
        asked, applied = pending.pop(0), []
        for j in range(n_u):
            v = min(max(asked[j], a.low[j]), a.high[j])
            v = min(max(v, u[j] - a.rate[j]), u[j] + a.rate[j])
            if a.resolution[j] > 0:
                v = min(max(round(v / a.resolution[j]) * a.resolution[j], a.low[j]), a.high[j])
            applied.append(v)
        u = applied
        ys.append(y)
        us.append(u)
        requests.append(request)
        held = [u[j] + s.load[row, k, j] for j in range(n_u)] + list(s.measured[row, k])
        v = [held[j] - m.u0[j] for j in range(m.n_in)]
        x = [dot(m.A[i], x) + dot(m.B[i], v) + dot(m.K[i], e) for i in range(m.n_x)]
    return np.array(ys), np.array(us), np.array(requests)


def random_form(
    rng: np.random.Generator, n_z: int, n_obs: int, n_u: int, latency: int
) -> FilterForm:
    """Return a form with every array at work."""
    n_in = n_obs + latency * n_u
    F = rng.standard_normal((n_z, n_z))
    F *= 0.7 / np.abs(np.linalg.eigvals(F)).max()

    def small(*shape: int) -> np.ndarray:
        return 0.05 * rng.standard_normal(shape)

    return FilterForm(
        F=F, G=small(n_z, n_in), g=small(n_z), H=small(n_u, n_z), J=small(n_u, n_in),
        h=small(n_u), Z=small(n_z, n_in), z0=small(n_z), M=small(n_u, n_z), N=small(n_u, n_in),
        m=small(n_u), authority=np.abs(small(n_u)), low=np.full(n_u, -3.0),
        high=np.full(n_u, 2.0), latency=latency,
    )  # fmt: skip


@pytest.mark.parametrize("latency", [0, 1, 3])
@pytest.mark.parametrize(("n_u", "n_d", "n_y"), [(1, 0, 1), (2, 1, 2), (1, 2, 3)])
def test_engine_equals_the_textbook_recursion(
    make: SimpleNamespace, latency: int, n_u: int, n_d: int, n_y: int
) -> None:
    rng = np.random.default_rng([latency, n_u, n_d, n_y])
    models = [make.random_model(rng, n_x, n_u, n_d, n_y) for n_x in (2, 4, 3)]
    # the engine takes the symmetric root of S; for the loop by hand make it its own root
    models = [replace(m, S=np.diag(np.diag(m.S))) for m in models]
    actuator = Actuator(
        np.full(n_u, -2.5), np.full(n_u, 2.0), np.full(n_u, 0.4), np.array([0.05, 0.0][:n_u])
    )
    controlled = tuple(range(min(n_u, n_y)))
    around = make.loop(n_y, n_u, n_d, controlled=controlled, actuator=actuator, latency=latency)
    record = rng.standard_normal((80, n_d)) if n_d else None
    s = make.streams(
        around, 60, seeds=2, setpoint={"y0": ((0, 1.0), (20, 2.0))},
        load={"u0": ((30, 0.5),)}, vary=0.2, disturbance=record,
    )  # fmt: skip
    form = random_form(rng, 3, around.layout.n_obs, n_u, latency)
    controller = LinearController(form, around.layout, 1.0)
    plant = LinearPlant(make.ensemble(*models), repeats=2)
    got = simulate(
        plant, controller, s, around, tile=3, record=True, extra_delay_samples=latency // 3
    )
    assert got.y is not None
    assert got.u is not None
    assert got.requested is not None
    wanted = np.full((6, n_y), np.nan)
    wanted[:, list(controlled)] = np.tile(s.setpoint[:, 0], (3, 1))
    start, u = plant.rest(
        6, wanted, np.tile(s.measured[:, 0], (3, 1)), actuator.low, actuator.high,
        SharedDraws(s.noise, 3),
    )  # fmt: skip
    for i in range(6):
        m = models[i // 2]
        y, applied, requests = by_hand(
            m, form, s, i % 2, around, start.x[i, : m.n_x], u[i], latency + latency // 3
        )
        np.testing.assert_allclose(got.y[i], y, rtol=1e-12, atol=1e-12)
        np.testing.assert_allclose(got.u[i], applied, rtol=1e-12, atol=1e-12)
        np.testing.assert_allclose(got.requested[i], requests, rtol=1e-12, atol=1e-12)


def test_cost_travel_limits_and_offset_are_what_the_record_says(make: SimpleNamespace) -> None:
    actuator = Actuator(np.array([-1.0]), np.array([1.0]), np.array([np.inf]), np.zeros(1))
    around = make.loop(actuator=actuator)
    s = make.streams(around, 50, setpoint={"y0": ((0, 0.0), (10, 1.5))})
    plant = LinearPlant(make.ensemble(make.lag()), repeats=3)
    got = simulate(plant, make.pi(0.8, 0.2), s, around, record=True)
    assert got.y is not None
    assert got.u is not None
    error = got.y[..., 0] - s.setpoint[..., 0]
    u = got.u[..., 0]
    move = np.diff(np.concatenate([np.zeros((3, 1)), u], axis=1), axis=1)
    np.testing.assert_allclose(got.terms[:, 0], (error**2).mean(axis=1), rtol=1e-12)
    np.testing.assert_allclose(got.terms[:, 1], 0.1 * (move**2).mean(axis=1), rtol=1e-12)
    np.testing.assert_allclose(got.cost[:, 0], got.terms.sum(axis=1), rtol=1e-15)
    np.testing.assert_allclose(got.travel[:, 0], np.abs(move).mean(axis=1), rtol=1e-12)
    np.testing.assert_allclose(got.at_limit, (np.abs(u) >= 1).mean(axis=1), rtol=1e-15)
    assert (got.at_limit > 0).all()  # or the check says nothing
    np.testing.assert_allclose(got.offset[:, 0], error[:, 40:].mean(axis=1), rtol=1e-12)
    assert not got.tripped.any()
    assert np.isnan(got.support).all()


def test_decision_acts_after_the_latency_and_not_before(make: SimpleNamespace) -> None:
    for known, hidden in ((0, 0), (2, 0), (1, 2)):
        around = make.loop(latency=known)
        s = make.streams(around, 12, seeds=1, setpoint={"y0": ((0, 0.0), (4, 1.0))}, noise=False)
        plant = LinearPlant(make.ensemble(make.lag(noise=0.0)))
        follow = make.gains(around.layout, [[0.0, 1.0, 0.0]])  # requests the setpoint itself
        got = simulate(plant, follow, s, around, record=True, extra_delay_samples=hidden)
        assert got.u is not None
        assert got.y is not None
        acts = 4 + known + hidden
        np.testing.assert_array_equal(got.u[0, :acts, 0], 0.0)
        np.testing.assert_array_equal(got.u[0, acts:, 0], 1.0)
        # one sample at least between u and y
        np.testing.assert_array_equal(got.y[0, : acts + 1, 0], 0.0)
        assert got.y[0, acts + 1, 0] == pytest.approx(0.2, abs=1e-15)


def test_after_a_trip_the_cost_at_the_trip_goes_on(make: SimpleNamespace) -> None:
    costs = [
        Cost(
            name="c",
            terms=(
                CostTerm(kind="tracking", signal="y0"),
                CostTerm(kind="move", signal="u0"),
                CostTerm(kind="trip", weight=7.0),
            ),
        )
    ]
    around = make.loop(costs=costs, trip=1.0)
    free = make.loop(costs=costs)
    s = make.streams(around, 40, seeds=2, setpoint={"y0": ((0, 0.0), (10, 2.0))})
    # the second episode has no step and never trips
    s = replace(s, setpoint=np.where(np.arange(2)[:, None, None] == 1, 0.0, s.setpoint))
    plant = LinearPlant(make.ensemble(make.lag(noise=0.01)), repeats=2)
    got = simulate(plant, make.pi(0.5, 0.1), s, around, record=True)
    assert got.tripped.tolist() == [True, False]
    assert got.y is not None
    assert got.u is not None
    y, u = got.y[0, :, 0], got.u[0, :, 0]
    move = np.diff(np.concatenate([[0.0], u]))
    at = int(np.argmax(np.abs(y) > 1.0))
    assert 10 < at < 39
    stage = np.stack([(y - s.setpoint[0, :, 0]) ** 2, move**2, np.zeros(40)], axis=1)
    stage[at, 2] = 7.0
    charged = stage.copy()
    charged[at:] = stage[at]
    np.testing.assert_allclose(got.terms[0], charged.mean(axis=0), rtol=1e-12)
    assert got.offset[0, 0] == pytest.approx(y[at] - 2.0, rel=1e-12)
    assert got.travel[0, 0] == pytest.approx(np.abs(move[: at + 1]).mean(), rel=1e-12)
    # the calm episode does not know that its neighbour tripped
    same = simulate(plant, make.pi(0.5, 0.1), s, free)
    assert same.terms[1].tolist() == got.terms[1].tolist()


def test_ending_early_never_pays(make: SimpleNamespace) -> None:
    # Pushed away by a load, a loop that trips is charged its worst error to the end; the loop
    # that fights the load to the end is cheaper, although it has more samples with an error.
    costs = [Cost(name="c", terms=(CostTerm(kind="tracking", signal="y0"),))]
    around = make.loop(costs=costs, trip=3.0)
    s = make.streams(around, 200, seeds=1, load={"u0": ((20, 2.0),)}, noise=False)
    plant = LinearPlant(make.ensemble(make.lag(noise=0.0)))
    idle = simulate(plant, make.gains(around.layout, [[0.0, 0.0, 1.0]]), s, around)
    fights = simulate(plant, make.pi(0.3, 0.05), s, around)
    assert idle.tripped[0]
    assert not fights.tripped[0]
    assert idle.cost[0, 0] > 9.0 * 150 / 200
    assert fights.cost[0, 0] < idle.cost[0, 0]


def test_a_loop_that_runs_away_is_a_trip_with_a_finite_cost(make: SimpleNamespace) -> None:
    around = make.loop()
    s = make.streams(around, 3000, seeds=2)
    wild = make.model([[1.5]], [[1.0]], [[1.0]], [[0.5]], [[0.01]])
    plant = LinearPlant(make.ensemble(wild, make.lag()), repeats=2)
    still = make.gains(around.layout, [[0.0, 0.0, 1.0]])
    got = simulate(plant, still, s, around, tile=2, record=True)
    assert got.tripped.tolist() == [True, True, False, False]
    assert np.isfinite(got.terms).all()
    assert np.isfinite(got.offset).all()
    assert np.isfinite(got.travel).all()
    assert got.y is not None
    assert np.isfinite(got.y).all()
    alone = simulate(LinearPlant(make.ensemble(make.lag()), repeats=2), still, s, around)
    np.testing.assert_allclose(got.terms[2:], alone.terms, rtol=1e-12)


class Sometimes:
    """A controller whose requests are no numbers now and then."""

    kind = "linear"
    sample_time_s = 1.0

    def __init__(self, layout: Any) -> None:
        self.layout, self.k = layout, 0

    def reset(self, n: int) -> None:
        self.k = 0

    def act(self, observation: np.ndarray) -> np.ndarray:
        self.k += 1
        value = np.nan if self.k % 3 == 0 else float(self.k)
        return np.full((len(observation), 1), value)

    def settings(self) -> dict[str, Any]:
        return {}

    @classmethod
    def from_settings(cls, settings: Any, layout: Any, sample_time_s: float) -> "Sometimes":
        return cls(layout)


def test_request_that_is_no_number_holds_the_applied_input(make: SimpleNamespace) -> None:
    around = make.loop()
    s = make.streams(around, 9, seeds=1)
    plant = LinearPlant(make.ensemble(make.lag()))
    got = simulate(plant, Sometimes(around.layout), s, around, record=True)
    assert got.u is not None
    assert got.u[0, :, 0].tolist() == [1.0, 2.0, 2.0, 4.0, 5.0, 5.0, 7.0, 8.0, 8.0]
    assert np.isfinite(got.cost).all()


def test_an_episode_alone_is_the_episode_in_a_batch(make: SimpleNamespace) -> None:
    # to 1e-12 and not to the bit: matrix products of other shapes add in another order
    rng = np.random.default_rng(5)
    around = make.loop(2, 2, 1)
    models = [make.random_model(rng, 3, 2, 1, 2) for _ in range(5)]
    record = rng.standard_normal((100, 1))
    s = make.streams(
        around, 70, seeds=4, setpoint={"y0": ((0, 0), (9, 1))}, disturbance=record, vary=0.5
    )
    controller = make.gains(around.layout, 0.02 * rng.standard_normal((2, 7)))
    many = simulate(
        LinearPlant(make.ensemble(*models), repeats=4), controller, s, around, tile=5, record=True
    )
    assert many.y is not None
    for i in (0, 7, 19):
        plant = LinearPlant(make.ensemble(models[i // 4]))
        one = simulate(plant, controller, s.take(np.array([i % 4])), around, record=True)
        np.testing.assert_allclose(one.y[0], many.y[i], rtol=1e-12, atol=1e-12)  # type: ignore[index]
        np.testing.assert_allclose(one.terms[0], many.terms[i], rtol=1e-12)


def test_block_size_changes_no_bit(make: SimpleNamespace, monkeypatch: pytest.MonkeyPatch) -> None:
    around = make.loop(trip=0.35)
    s = make.streams(around, 101, seeds=40)

    def run() -> list[np.ndarray]:
        plant = LinearPlant(make.ensemble(make.lag()), repeats=40)
        inside = lambda y, u, move: np.abs(y[:, 0]) < 0.2  # noqa: E731
        got = simulate(plant, make.pi(0.3, 0.1), s, around, inside=inside)
        assert 0 < got.tripped.sum() < 40
        return [got.terms, got.travel, got.offset, got.support, got.at_limit, got.tripped]

    whole = run()
    for rows in (1, 40 * 7, 40 * 64):
        monkeypatch.setattr(tally_module, "ROWS", rows)
        for a, b in zip(whole, run(), strict=True):
            np.testing.assert_array_equal(a, b)


def test_tiled_streams_are_the_repeated_ones(make: SimpleNamespace) -> None:
    around = make.loop()
    s = make.streams(around, 30, setpoint={"y0": ((0, 0), (5, 1))}, load={"u0": ((9, 1),)})
    plant = LinearPlant(make.ensemble(make.lag(0.9), make.lag(0.8)), repeats=3)
    a = simulate(plant, make.pi(0.3, 0.1), s, around, tile=2)
    b = simulate(plant, make.pi(0.3, 0.1), s.take(np.tile(np.arange(3), 2)), around)
    np.testing.assert_array_equal(a.terms, b.terms)


def test_all_controllers_meet_the_same_noise(make: SimpleNamespace) -> None:
    # y minus what the input did to it is the same for a quiet and for a lively controller
    around = make.loop()
    s = make.streams(around, 80, setpoint={"y0": ((0, 0), (20, 1))})
    m = make.lag()
    plant = LinearPlant(make.ensemble(m), repeats=3)
    parts = []
    for controller in (make.pi(0.1, 0.01), make.pi(0.9, 0.3)):
        got = simulate(plant, controller, s, around, record=True)
        assert got.y is not None
        assert got.u is not None
        driven = np.stack([m.free_run(u) for u in got.u])
        # both start at rest at u = 0, so what is left is noise alone
        x = np.zeros((3, 1))
        free = np.empty_like(driven)
        for k in range(80):
            free[:, k] = x
            x = x * 0.9 + 0.2 * got.u[:, k]
        parts.append(got.y - free)
    np.testing.assert_allclose(parts[0], parts[1], atol=1e-12)
    assert np.ptp(parts[0]) > 0.3


def test_budget_is_charged_and_refuses_before_anything_runs(make: SimpleNamespace) -> None:
    around = make.loop()
    s = make.streams(around, 25, seeds=2)
    plant = LinearPlant(make.ensemble(make.lag(), make.lag(0.8)), repeats=2)
    budget = Budget(150)
    simulate(plant, make.pi(0.3, 0.1), s, around, tile=2, budget=budget)
    assert (budget.spent, budget.left) == (100, 50)
    with pytest.raises(BudgetSpent, match="100 plant-steps asked for, 50 left of 150"):
        simulate(plant, make.pi(0.3, 0.1), s, around, tile=2, budget=budget)
    assert budget.spent == 100


def test_support_counts_the_samples_inside(make: SimpleNamespace) -> None:
    around = make.loop()
    s = make.streams(around, 50)
    plant = LinearPlant(make.ensemble(make.lag()), repeats=3)
    seen = []

    def inside(y: np.ndarray, u: np.ndarray, move: np.ndarray) -> np.ndarray:
        seen.append(len(y))
        assert y.shape[1] == u.shape[1] == move.shape[1] == 1
        return (np.abs(y) < 0.1)[:, 0]

    got = simulate(plant, make.pi(0.3, 0.1), s, around, inside=inside, record=True)
    assert got.y is not None
    np.testing.assert_allclose(got.support, (np.abs(got.y[..., 0]) < 0.1).mean(axis=1), rtol=1e-15)
    assert sum(seen) == 150


def test_shared_draws_refuse_another_shape(make: SimpleNamespace) -> None:
    s = make.streams(make.loop(), 5, seeds=2)
    with pytest.raises(ValueError, match=r"shape \(2, 4\) was asked for, \(2, 1\) is there"):
        SharedDraws(s.noise).standard_normal((2, 4))
