"""Filter forms against the recursion by hand, stacks, holds, and files."""

import json
from dataclasses import fields, replace
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from idlearn.control import (
    KINDS,
    Controller,
    FilterForm,
    FilterRunner,
    LinearController,
    ObservationLayout,
    load_controller,
    save_controller,
)
from idlearn.errors import InputError

LAYOUT = ObservationLayout(n_y=2, controlled=(1,), n_d=1, n_u=2)


def form(seed: int = 0, n_z: int = 3, latency: int = 0, authority: float = 0.5) -> FilterForm:
    """Return a form of LAYOUT with every array at work."""
    rng = np.random.default_rng(seed)
    n_u, n_in = 2, 6 + 2 * latency

    def some(*shape: int) -> np.ndarray:
        return 0.3 * rng.standard_normal(shape)

    return FilterForm(
        F=some(n_z, n_z), G=some(n_z, n_in), g=some(n_z), H=some(n_u, n_z), J=some(n_u, n_in),
        h=some(n_u), Z=some(n_z, n_in), z0=some(n_z), M=some(n_u, n_z), N=some(n_u, n_in),
        m=some(n_u), authority=authority * np.abs(some(n_u)), low=np.array([-1.0, -2.0]),
        high=np.array([1.5, 0.8]), latency=latency,
    )  # fmt: skip


def by_hand(f: FilterForm, observations: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Return u (N, n_u) and the last z for observations (N, n_obs) of one episode."""
    sent = [observations[0, -2:]] * f.latency
    z, out = None, []
    for row in observations:
        o = np.concatenate([row, *sent])
        before = f.Z @ o + f.z0 if z is None else z
        z = f.F @ before + f.G @ o + f.g
        u = f.H @ z + f.J @ o + f.h + f.authority * np.tanh(f.M @ z + f.N @ o + f.m)
        u = np.clip(u, f.low, f.high)
        sent = [*sent, u][1:] if f.latency else []
        out.append(u)
    assert z is not None
    return np.array(out), z


def played(runner: Any, observations: np.ndarray) -> np.ndarray:
    """Return u (N, n, n_u) for observations (N, n, n_obs)."""
    runner.reset(observations.shape[1])
    return np.array([runner.act(o) for o in observations])


def seen(n: int, n_samples: int = 12, seed: int = 5) -> np.ndarray:
    return np.random.default_rng(seed).standard_normal((n_samples, n, 6))


@pytest.mark.parametrize("latency", [0, 1, 3])
def test_runner_equals_the_recursion_by_hand(latency: int) -> None:
    f = form(latency=latency)
    observations, runner = seen(4), FilterRunner(f)
    u = played(runner, observations)
    for i in range(4):
        wanted, z = by_hand(f, observations[:, i])
        np.testing.assert_allclose(u[:, i], wanted, rtol=1e-13, atol=1e-14)
        np.testing.assert_allclose(runner.z[i], z, rtol=1e-13, atol=1e-14)
    assert (u == f.low).any()  # the limits were at work
    assert (u == f.high).any()


@pytest.mark.parametrize("latency", [0, 2])
def test_stack_of_unequal_sizes_equals_one_by_one(latency: int) -> None:
    forms = [form(seed, n_z, latency) for seed, n_z in ((1, 0), (2, 4), (3, 1))]
    forms[1] = replace(forms[1], low=np.array([-0.1, -0.1]))  # limits of its own
    observations = seen(2 * 3 * 5)
    u = played(FilterRunner(FilterForm.stack(forms), repeats=5), observations)
    for group in range(2):
        for c, f in enumerate(forms):
            for r in range(5):
                i = (group * 3 + c) * 5 + r
                wanted, _ = by_hand(f, observations[:, i])
                np.testing.assert_allclose(u[:, i], wanted, rtol=1e-13, atol=1e-14)


def test_reset_forgets_everything() -> None:
    runner, observations = FilterRunner(form(latency=1)), seen(3)
    first = played(runner, observations)
    np.testing.assert_array_equal(played(runner, observations), first)
    np.testing.assert_allclose(
        played(runner, observations[:, :1])[:, 0], first[:, 0], rtol=1e-13, atol=1e-14
    )


def test_observation_that_is_no_number_holds_and_starts_anew() -> None:
    f, observations = form(latency=1), seen(3)
    clean = played(FilterRunner(f), observations)
    broken = observations.copy()
    broken[4:6, 1, 0] = np.nan
    u = played(FilterRunner(f), broken)
    assert np.isfinite(u).all()
    np.testing.assert_array_equal(u[4, 1], broken[4, 1, -2:])  # what is applied is held
    np.testing.assert_array_equal(u[5, 1], broken[5, 1, -2:])
    np.testing.assert_array_equal(u[:, [0, 2]], clean[:, [0, 2]])  # the others do not notice
    # from sample 6 on: as after a reset, but for the requests that are still under way
    z = f.Z @ np.concatenate([broken[6, 1], u[5, 1]]) + f.z0
    o = np.concatenate([broken[6, 1], u[5, 1]])
    z = f.F @ z + f.G @ o + f.g
    wanted = f.H @ z + f.J @ o + f.h + f.authority * np.tanh(f.M @ z + f.N @ o + f.m)
    np.testing.assert_allclose(u[6, 1], np.clip(wanted, f.low, f.high), rtol=1e-13)


def test_first_observation_that_is_no_number() -> None:
    f, observations = form(), seen(1)
    observations[0, 0, 2] = np.nan
    u = played(FilterRunner(f), observations)
    np.testing.assert_array_equal(u[0, 0], observations[0, 0, -2:])
    wanted, _ = by_hand(f, observations[1:, 0])
    np.testing.assert_allclose(u[1:, 0], wanted, rtol=1e-13)


def test_small_signals_see_the_linearised_form() -> None:
    f = replace(
        form(authority=3.0), m=np.zeros(2), low=np.full(2, -np.inf), high=np.full(2, np.inf),
        g=np.zeros(3), z0=np.zeros(3),
    )  # fmt: skip
    assert f.bounded
    assert not f.linearised().bounded
    small = 1e-5 * seen(2)
    a, b = played(FilterRunner(f), small), played(FilterRunner(f.linearised()), small)
    np.testing.assert_allclose(a, b, atol=1e-13)
    large = played(FilterRunner(f), 1e3 * small)
    assert np.abs(large - played(FilterRunner(f.linearised()), 1e3 * small)).max() > 1e-9


def test_layout_columns() -> None:
    assert LAYOUT.n_obs == 6
    row = LAYOUT.join(*(np.full((1, c), float(c + 10 * i)) for i, c in enumerate((2, 1, 1, 2))))
    assert row.tolist() == [[2.0, 2.0, 11.0, 21.0, 32.0, 32.0]]
    assert row[0, LAYOUT.y].tolist() == [2.0, 2.0]
    assert row[0, LAYOUT.setpoint].tolist() == [11.0]
    assert row[0, LAYOUT.disturbance].tolist() == [21.0]
    assert row[0, LAYOUT.u].tolist() == [32.0, 32.0]


@pytest.mark.parametrize(
    ("change", "message"),
    [
        ({"n_y": 0, "controlled": ()}, "n_y is 0"),
        ({"n_u": 0}, "n_u is 0"),
        ({"n_d": -1}, "n_d is -1"),
        ({"controlled": (2,)}, r"controlled is \(2,\), but outputs are numbered 0 to 1"),
    ],
)
def test_refused_layouts(change: dict[str, Any], message: str) -> None:
    with pytest.raises(InputError, match=message):
        replace(LAYOUT, **change)


def test_refused_forms() -> None:
    with pytest.raises(InputError, match=r"G has shape \(2, 6\); \(3, 6\) fits"):
        replace(form(), G=np.zeros((2, 6)))
    with pytest.raises(InputError, match="latency is -1 samples"):
        replace(form(), latency=-1)
    with pytest.raises(InputError, match="2 forms with 2 different"):
        FilterForm.stack([form(), form(latency=1)])
    with pytest.raises(InputError, match="0 forms"):
        FilterForm.stack([])
    with pytest.raises(InputError, match=r"read-out \(2, 8\).* ask for \(2, 7\)"):
        LinearController(form(latency=1), replace(LAYOUT, n_d=0), 1.0)
    with pytest.raises(InputError, match=r"read-out \(2, 8\).* ask for \(2, 6\)"):
        LinearController(replace(form(latency=1), latency=0), LAYOUT, 1.0)
    with pytest.raises(InputError, match="7 episodes cannot be shared among 2 candidates"):
        FilterRunner(FilterForm.stack([form(), form(1)]), repeats=2).reset(7)
    runner = FilterRunner(form())
    runner.reset(2)
    with pytest.raises(InputError, match=r"has shape \(3, 6\); reset\(2\) asks for \(2, 6\)"):
        runner.act(np.zeros((3, 6)))


def test_saved_and_loaded_to_the_bit(tmp_path: Path) -> None:
    f = replace(
        form(latency=2), low=np.array([-np.inf, -1e-300]), high=np.array([np.pi, np.inf]),
        z0=np.array([0.1 + 0.2, -0.0, 5e-324]),
    )  # fmt: skip
    controller = LinearController(f, LAYOUT, 0.1)
    path = tmp_path / "c.json"
    notes = {"unit": "%", "tuned": np.array([1.0, np.nan])}
    save_controller(controller, path, notes)
    loaded = load_controller(path)
    assert isinstance(loaded, LinearController)
    assert isinstance(loaded, Controller)
    assert loaded.layout == LAYOUT
    assert loaded.sample_time_s == 0.1
    for entry in fields(f):
        a, b = getattr(f, entry.name), getattr(loaded.form, entry.name)
        assert np.asarray(a).tobytes() == np.asarray(b).tobytes(), entry.name
    observations = seen(3)
    np.testing.assert_array_equal(played(controller, observations), played(loaded, observations))
    text = path.read_text()
    json.loads(text, parse_constant=lambda c: pytest.fail(f"{c} is no JSON"))
    save_controller(loaded, tmp_path / "again.json", notes)
    assert (tmp_path / "again.json").read_text() == text


def test_form_without_states_survives_the_file(tmp_path: Path) -> None:
    controller = LinearController(form(n_z=0), LAYOUT, 1.0)
    save_controller(controller, tmp_path / "c.json")
    observations = seen(2)
    np.testing.assert_array_equal(
        played(load_controller(tmp_path / "c.json"), observations), played(controller, observations)
    )


def broken(tmp_path: Path, change: Any) -> Path:
    """Save a controller, change its document, return the file."""
    path = tmp_path / "c.json"
    save_controller(LinearController(form(), LAYOUT, 1.0), path)
    document = json.loads(path.read_text())
    change(document)
    path.write_text(json.dumps(document))
    return path


@pytest.mark.parametrize(
    ("change", "message"),
    [
        (lambda d: d.update(format="idlearn-controller/9"), "no controller file of format"),
        (lambda d: d.update(kind="os:system"), "names the kind 'os:system'; only"),
        (lambda d: d.pop("kind"), "names the kind 'None'"),
        (lambda d: d.pop("layout"), "is damaged"),
        (lambda d: d["layout"].update(n_u="x"), "is damaged"),
        (lambda d: d["layout"].update(controlled=[7]), "is damaged"),
        (lambda d: d.pop("settings"), "is damaged"),
        (lambda d: d["settings"].pop("F"), "is damaged"),
        (lambda d: d["settings"].update(extra=1), "is damaged"),
        (lambda d: d["settings"].update(latency="long"), "is damaged"),
        (lambda d: d["settings"].update(F=7), "is damaged"),
        (lambda d: d["settings"]["F"].update(shape=[9, 9]), "is damaged"),
        (lambda d: d["settings"]["G"].update(shape=[6, 3]), "is damaged"),
        (lambda d: d["settings"]["G"].update(values=["a"] * 18), "is damaged"),
        (lambda d: d.update(sample_time_s=None), "is damaged"),
        (lambda d: d.update(sample_time_s=-1.0), "is damaged"),
    ],
)
def test_damaged_files(tmp_path: Path, change: Any, message: str) -> None:
    with pytest.raises(InputError, match=message):
        load_controller(broken(tmp_path, change))


def test_files_that_are_none(tmp_path: Path) -> None:
    with pytest.raises(InputError, match="does not exist; give the path of a saved controller"):
        load_controller(tmp_path / "no.json")
    for name, content in (
        ("empty", b""), ("text", b"hello"), ("binary", b"\x80\x04\x95\xff\xfe"), ("cut", b'{"a": '),
    ):  # fmt: skip
        (tmp_path / name).write_bytes(content)
        with pytest.raises(InputError, match="is no controller file: .*; save it again"):
            load_controller(tmp_path / name)
    (tmp_path / "list").write_text("[1, 2]")
    with pytest.raises(InputError, match="no controller file of format"):
        load_controller(tmp_path / "list")
    with pytest.raises(InputError, match="is no controller file"):
        load_controller(tmp_path)


def test_only_listed_kinds_are_saved(tmp_path: Path) -> None:
    class Other(LinearController):
        kind = "other"

    with pytest.raises(InputError, match="kind 'other' has no entry in KINDS"):
        save_controller(Other(form(), LAYOUT, 1.0), tmp_path / "c.json")
    assert not (tmp_path / "c.json").exists()
    assert set(KINDS) >= {"linear", "pid", "lqg", "residual", "predictive"}
