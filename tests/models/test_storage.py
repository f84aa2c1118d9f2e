"""Model files: every bit comes back, nothing is unpickled, damage is named."""

import json
import pickle
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from idlearn.errors import InputError
from idlearn.models import Ensemble, InnovationsModel, load_model, read_extra, save_model

ARRAYS = ("A", "B", "C", "D", "K", "S", "u0", "y0")


def awkward(seed: int = 0, n_x: int = 3) -> InnovationsModel:
    """Return a model of numbers that no decimal text holds: thirds, the tiniest, minus zero."""
    rng = np.random.default_rng(seed)
    A = rng.standard_normal((n_x, n_x)) / 3
    A[0, :2] = 5e-324, -0.0
    return InnovationsModel(
        A=A, B=rng.standard_normal((n_x, 2)), C=rng.standard_normal((1, n_x)), D=np.zeros((1, 2)),
        K=rng.standard_normal((n_x, 1)), S=np.array([[1e308]]), u0=np.array([0.1, 1e-300]),
        y0=np.array([1 / 3]), sample_time_s=0.1, n_actuators=1,
    )  # fmt: skip


def same_bits(a: Any, b: Any) -> bool:
    return all(getattr(a, n).tobytes() == getattr(b, n).tobytes() for n in ARRAYS)


def test_a_model_comes_back_bit_by_bit(tmp_path: Path) -> None:
    m, path = awkward(), tmp_path / "m.npz"
    save_model(m, path, {"signals": [{"name": "Öl", "low": -np.inf}]})
    back = load_model(path)
    assert isinstance(back, InnovationsModel)
    assert same_bits(back, m)
    assert (back.n_actuators, back.sample_time_s) == (1, 0.1)
    assert read_extra(path)["signals"][0] == {"name": "Öl", "low": -np.inf}


def test_an_ensemble_comes_back_bit_by_bit(tmp_path: Path) -> None:
    e = Ensemble.from_models([awkward(1), awkward(2, 4)], ["a", "b"], 3)
    save_model(e, str(tmp_path / "e.npz"))
    back = load_model(str(tmp_path / "e.npz"))
    assert isinstance(back, Ensemble)
    assert same_bits(back, e)
    assert (back.labels, back.unstable_dropped, len(back)) == (("a", "b"), 3, 2)
    assert read_extra(tmp_path / "e.npz") == {}


def test_a_file_is_what_its_name_says(tmp_path: Path) -> None:
    """No pickle inside, and no ending added to the name that was asked for."""
    save_model(awkward(), tmp_path / "model.dat")
    assert [p.name for p in tmp_path.iterdir()] == ["model.dat"]
    with np.load(tmp_path / "model.dat", allow_pickle=False) as held:
        assert set(held.files) == {"header", *ARRAYS}
        header = json.loads(str(held["header"]))
    assert header["format"] == "idlearn-model/1"
    assert header["sample_time_s"] == 0.1


def test_a_pickle_is_refused_and_not_run(tmp_path: Path) -> None:
    path, ran = tmp_path / "trap.npz", tmp_path / "ran"
    save_model(awkward(), path)
    with np.load(path) as held:
        arrays = {n: held[n] for n in held.files}

    class Marked:
        def __reduce__(self) -> tuple[Any, ...]:
            return (Path.touch, (ran,))

    trap = np.empty(1, dtype=object)
    trap[0] = Marked()
    np.savez(path, **(arrays | {"A": trap}))
    with pytest.raises(InputError, match="no model file"):
        load_model(path)
    assert not ran.exists()
    # the trap is one: unpickled, it would have left its mark
    pickle.loads(pickle.dumps(Marked()))
    assert ran.exists()


def damaged(path: Path, kind: str) -> None:
    save_model(awkward(), path)
    if kind == "cut off":
        path.write_bytes(path.read_bytes()[:400])
    elif kind == "flipped":
        held = bytearray(path.read_bytes())
        held[len(held) // 3] ^= 0xFF
        path.write_bytes(bytes(held))
    elif kind == "text":
        path.write_text("time,u,y\n1,2,3\n")
    elif kind == "empty":
        path.write_bytes(b"")
    elif kind == "other arrays":
        np.savez(path, x=np.zeros(2))
    else:
        with np.load(path) as held_file:
            arrays = {n: held_file[n] for n in held_file.files}
        if kind == "header":
            arrays["header"] = np.array("{no json")
        elif kind == "other format":
            arrays["header"] = np.array(json.dumps({"format": "idlearn-model/99"}))
        elif kind == "no format":
            arrays["header"] = np.array(json.dumps([1, 2]))
        elif kind == "facts missing":
            arrays["header"] = np.array(json.dumps({"format": "idlearn-model/1"}))
        np.savez(path, **arrays)


@pytest.mark.parametrize(
    "kind",
    [
        "cut off", "flipped", "text", "empty", "other arrays", "header", "other format",
        "no format", "facts missing",
    ],
)  # fmt: skip
def test_damage_is_named(tmp_path: Path, kind: str) -> None:
    path = tmp_path / "m.npz"
    damaged(path, kind)
    with pytest.raises(InputError, match=r"m\.npz is no model file.*save the model again"):
        load_model(path)


def test_a_file_that_is_not_there(tmp_path: Path) -> None:
    with pytest.raises(InputError, match="none.npz does not exist; give the path"):
        load_model(tmp_path / "none.npz")
