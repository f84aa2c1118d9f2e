"""What every controller promises; a new kind joins by one line."""

import json
from collections.abc import Callable
from pathlib import Path

import numpy as np
import pytest

from idlearn.baselines import LqgController, Pairing, PidController, PidSettings, design_lqg
from idlearn.control import KINDS, Controller, LinearController, load_controller, save_controller
from idlearn.envs import Assignment
from idlearn.errors import InputError
from idlearn.learning import PredictiveController, ResidualController
from idlearn.learning.residual import Features
from idlearn.models.regulator import offset_free

Task = Callable[..., Assignment]


def make(kind: str, a: Assignment) -> Controller:
    """Return one controller of each kind for the invented plant."""
    loop, w = a.practice.loop, a.weights
    model = offset_free(a.nominal.member(0))
    lqg = design_lqg(model, w, loop.layout, loop.actuator, a.latency_samples)
    low, high = loop.actuator.low, loop.actuator.high
    if kind == "lqg":
        return lqg
    if kind == "linear":
        return LinearController(lqg.form, loop.layout, 1.0)
    if kind == "pid":
        settings = PidSettings(gain=0.7, integral_time_s=25.0, derivative_time_s=2.0)
        return PidController(
            [(Pairing(0, 0), settings)], np.zeros(1), loop.layout, 1.0, low, high,
            a.latency_samples,
        )  # fmt: skip
    if kind == "residual":
        f = Features(loop.layout, np.array([3.0]), np.array([5.0]))
        W = 0.2 * np.random.default_rng(0).standard_normal((1, f.n))
        return ResidualController(lqg.form, f, W, np.array([2.0]), 1.0)
    return PredictiveController(
        model=model, output=w.output, energy=w.energy, move=w.move, reference=w.reference,
        target=w.target, low=low, high=high, rate=loop.actuator.rate, horizon=10,
        layout=loop.layout, latency=a.latency_samples,
    )  # fmt: skip


def observations(n: int, steps: int, seed: int = 0) -> np.ndarray:
    rng = np.random.default_rng(seed)
    y, r = 200 + 5 * rng.standard_normal((2, steps, n))
    return np.stack([y, r, rng.uniform(20, 80, (steps, n))], axis=2)


def test_every_kind_is_covered() -> None:
    assert set(KINDS) == {"linear", "pid", "lqg", "residual", "predictive"}


@pytest.mark.parametrize("latency", [0, 2])
@pytest.mark.parametrize("kind", sorted(KINDS))
class TestEveryController:
    def test_saved_and_loaded_it_acts_to_the_bit(
        self, task: Task, tmp_path: Path, kind: str, latency: int
    ) -> None:
        c = make(kind, task(latency=latency))
        save_controller(c, tmp_path / "c.json", {"unit": "%"})
        back = load_controller(tmp_path / "c.json")
        assert back.kind == kind
        assert back.layout == c.layout
        c.reset(3)
        back.reset(3)
        for o in observations(3, 25):
            assert (back.act(o) == c.act(o)).all()
        held = json.loads((tmp_path / "c.json").read_text())
        assert held["format"] == "idlearn-controller/1"

    def test_it_starts_bumplessly_at_rest(self, task: Task, kind: str, latency: int) -> None:
        c = make(kind, task(latency=latency))
        c.reset(2)
        rest = np.array([[200.0, 200.0, 50.0], [206.0, 206.0, 53.0]])
        for _ in range(4):
            np.testing.assert_allclose(c.act(rest), rest[:, 2:], rtol=0, atol=1e-6)

    def test_reset_forgets(self, task: Task, kind: str, latency: int) -> None:
        c = make(kind, task(latency=latency))
        seen = []
        for _ in range(2):
            c.reset(2)
            seen.append(np.stack([c.act(o) for o in observations(2, 12)]))
        assert (seen[0] == seen[1]).all()

    def test_requests_respect_the_limits(self, task: Task, kind: str, latency: int) -> None:
        c = make(kind, task(latency=latency, limits=(30.0, 60.0)))
        c.reset(4)
        for o in observations(4, 30):
            u = c.act(np.clip(o, -1e3, 1e3))
            assert u.shape == (4, 1)
            assert (u >= 30.0).all()
            assert (u <= 60.0).all()

    def test_a_lost_measurement_holds_the_actuator(
        self, task: Task, kind: str, latency: int
    ) -> None:
        c = make(kind, task(latency=latency))
        c.reset(2)
        rows = observations(2, 6)
        for o in rows[:3]:
            c.act(o)
        lost = rows[3].copy()
        lost[0, 0] = np.nan
        u = c.act(lost)
        assert u[0, 0] == pytest.approx(lost[0, 2])
        assert np.isfinite(u).all()
        for o in rows[4:]:
            assert np.isfinite(c.act(o)).all()


def test_files_that_are_no_controllers(tmp_path: Path, task: Task) -> None:
    where = tmp_path / "c.json"
    with pytest.raises(InputError, match="does not exist"):
        load_controller(where)
    where.write_text("{")
    with pytest.raises(InputError, match="no controller file"):
        load_controller(where)
    save_controller(make("lqg", task()), where)
    held = json.loads(where.read_text())
    where.write_text(json.dumps({**held, "kind": "os.system"}))
    with pytest.raises(InputError, match="only .* can be loaded"):
        load_controller(where)
    del held["settings"]["F"]
    where.write_text(json.dumps(held))
    with pytest.raises(InputError, match="damaged"):
        load_controller(where)


def test_a_kind_without_an_entry_is_not_saved(tmp_path: Path, task: Task) -> None:
    class Strange(LqgController):
        kind = "strange"

    form = make("lqg", task()).form  # type: ignore[attr-defined]
    with pytest.raises(InputError, match="no entry in KINDS"):
        save_controller(Strange(form, task().practice.loop.layout, 1.0), tmp_path / "s.json")
