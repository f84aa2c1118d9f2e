"""Ensembles: padding does nothing, and side by side is one after the other."""

import numpy as np
import pytest
from numpy.testing import assert_allclose

from idlearn.errors import InputError
from idlearn.models import Ensemble, InnovationsModel

RNG = np.random.default_rng


def any_model(seed: int, n_x: int, n_in: int = 2, sample_time_s: float = 2.0) -> InnovationsModel:
    rng = RNG(seed)
    A = rng.standard_normal((n_x, n_x))
    A *= 0.8 / np.abs(np.linalg.eigvals(A)).max()
    return InnovationsModel(
        A=A, B=rng.standard_normal((n_x, n_in)), C=rng.standard_normal((2, n_x)),
        D=rng.standard_normal((2, n_in)), K=0.1 * rng.standard_normal((n_x, 2)),
        S=np.eye(2), u0=rng.standard_normal(n_in), y0=rng.standard_normal(2),
        sample_time_s=sample_time_s, n_actuators=1,
    )  # fmt: skip


SMALL, LARGE = any_model(1, 2), any_model(2, 4)
U = RNG(9).standard_normal((40, 2))


def pair() -> Ensemble:
    return Ensemble.from_models([SMALL, LARGE], ["a", "b"], 5)


@pytest.mark.parametrize(("i", "model"), [(0, SMALL), (1, LARGE)])
def test_padding_has_no_effect(i: int, model: InnovationsModel) -> None:
    member = pair().member(i)
    assert member.n_x == 4
    assert member.n_actuators == 1
    assert_allclose(member.free_run(U), model.free_run(U), rtol=0, atol=1e-10)
    y = model.free_run(U)[:10]
    assert_allclose(member.free_run(U, y), model.free_run(U), rtol=0, atol=1e-7)
    assert_allclose(member.dc_gain(), model.dc_gain(), rtol=0, atol=1e-10)
    assert_allclose(member.step_response(30), model.step_response(30), rtol=0, atol=1e-12)
    assert member.spectral_radius() == pytest.approx(model.spectral_radius(), rel=1e-12)


def test_side_by_side_is_one_after_the_other() -> None:
    e, rng = pair(), RNG(3)
    x0 = rng.standard_normal((2, 4))
    x0[0, 2:] = 0.0
    apart = rng.standard_normal((2, 40, 2))
    for v in (U, apart):
        side = e.outputs(x0, v)
        assert side.shape == (2, 40, 2)
        for i, m in enumerate((SMALL, LARGE)):
            x, mine = x0[i, : m.n_x], v if v.ndim == 2 else v[i]
            for k in range(40):
                assert_allclose(side[i, k], m.C @ x + m.D @ mine[k], rtol=0, atol=1e-10)
                x = m.A @ x + m.B @ mine[k]


def test_taking_and_putting_together() -> None:
    e = pair()
    turned = Ensemble.concat([e.take([1]), e.take([0])])
    assert turned.labels == ("b", "a")
    assert len(turned) == 2
    for name in ("A", "B", "C", "D", "K", "S", "u0", "y0"):
        assert (getattr(turned, name) == getattr(e, name)[::-1]).all()
    assert e.take([0, 0, 1]).labels == ("a", "a", "b")
    assert e.unstable_dropped == 5
    wider = Ensemble.concat([pair(), Ensemble.from_models([any_model(3, 6)], ["c"], 2)])
    assert wider.A.shape == (3, 6, 6)
    assert wider.unstable_dropped == 7
    assert_allclose(wider.member(0).free_run(U), SMALL.free_run(U), rtol=0, atol=1e-10)


@pytest.mark.parametrize("other", [any_model(1, 2, n_in=1), any_model(1, 2, sample_time_s=1.0)])
def test_models_that_do_not_fit_together(other: InnovationsModel) -> None:
    with pytest.raises(InputError, match="same inputs, outputs and sample time"):
        Ensemble.from_models([SMALL, other], ["a", "b"])


def test_no_models_or_labels_amiss() -> None:
    with pytest.raises(InputError, match="0 models with 0 labels"):
        Ensemble.from_models([], [])
    with pytest.raises(InputError, match="2 models with 1 labels"):
        Ensemble.from_models([SMALL, LARGE], ["a"])
