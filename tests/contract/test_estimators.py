"""What every estimator promises; a new one joins by one line."""

from dataclasses import FrozenInstanceError
from typing import Any

import numpy as np
import pytest
from numpy.testing import assert_allclose

from idlearn.errors import InputError, TooShortError
from idlearn.identification import ArmaxEstimator, ArxEstimator, Status
from idlearn.logs import PlantLog

ESTIMATORS = [
    ArxEstimator(n_a=2, n_b=2, n_k=2),
    ArmaxEstimator(n_a=2, n_b=2, n_c=1, n_k=2),
    ArmaxEstimator(n_a=2, n_b=1, n_c=2, n_k=2, integrated=True),
]


def arrays(n: int = 800, inputs: int = 1) -> tuple[np.ndarray, np.ndarray]:
    """Return an invented record of gain 8 / 3 from its first input; others have no effect."""
    rng = np.random.default_rng(11)
    u = np.repeat(rng.standard_normal((n // 4, inputs)), 4, axis=0)
    e, y = 0.05 * rng.standard_normal(n), np.zeros((n, 1))
    for k in range(3, n):
        y[k] = 1.2 * y[k - 1] - 0.35 * y[k - 2] + 0.3 * u[k - 2, 0] + 0.1 * u[k - 3, 0]
        y[k] += e[k] + 0.4 * e[k - 1]
    return u, y


def record(
    u_scale: float = 1.0, y_scale: float = 1.0, u_offset: float = 0.0, y_offset: float = 0.0,
    **more: Any,
) -> PlantLog:  # fmt: skip
    u, y = arrays(**more)
    return PlantLog.from_arrays(
        u=u_scale * u + u_offset, y=y_scale * y + y_offset, sample_time_s=1.0
    )


@pytest.mark.parametrize("estimator", ESTIMATORS, ids=repr)
class TestEveryEstimator:
    def test_same_log_same_model(self, estimator: Any) -> None:
        first, second = estimator.fit(record()), estimator.fit(record())
        assert first.status is Status.OK
        assert first.advice == ""
        for name in ("theta", "factor", "S", "u_mean", "y_mean"):
            assert (getattr(first.model, name) == getattr(second.model, name)).all()
        assert first.stats == second.stats

    def test_an_estimator_has_no_memory(self, estimator: Any) -> None:
        fresh = estimator.fit(record()).model
        estimator.fit(record(u_scale=7.0, y_scale=0.1))
        assert (estimator.fit(record()).model.theta == fresh.theta).all()

    def test_the_log_stays_as_it_is(self, estimator: Any) -> None:
        log = record()
        before = log.u.copy(), log.y.copy(), log.segments.copy()
        estimator.fit(log)
        for a, b in zip(before, (log.u, log.y, log.segments), strict=True):
            assert (a == b).all()

    def test_units_only_scale_the_model(self, estimator: Any) -> None:
        plain = estimator.fit(record()).model
        other = estimator.fit(record(u_scale=1e5, y_scale=1e-6)).model
        assert_allclose(other.a, plain.a, rtol=1e-4, atol=1e-6)
        assert_allclose(other.b, plain.b * 1e-11, rtol=1e-4)
        assert_allclose(other.c, plain.c, rtol=1e-3, atol=1e-6)
        assert_allclose(other.S, plain.S * 1e-12, rtol=1e-4)
        shape = np.sqrt(np.diag(other.covariance) / np.diag(plain.covariance))
        scale = np.ones(len(shape))
        scale[2 : 2 + plain.n_b[0]] = 1e-11
        assert_allclose(shape, scale, rtol=1e-3)

    def test_operating_points_do_not_matter(self, estimator: Any) -> None:
        plain, other = estimator.fit(record()), estimator.fit(record(u_offset=300, y_offset=-5000))
        assert other.status is Status.OK
        assert_allclose(other.model.theta, plain.model.theta, rtol=1e-4)
        assert other.model.u_mean[0] == pytest.approx(plain.model.u_mean[0] + 300)
        assert other.model.y_mean[0] == pytest.approx(plain.model.y_mean[0] - 5000)

    def test_the_model_does_what_models_do(self, estimator: Any) -> None:
        log = record()
        model = estimator.fit(log).model
        free = model.free_run(log.inputs, warm_up=log.y[:10])
        assert free.shape == log.y.shape
        assert np.std(log.y - free) < 0.35 * np.std(log.y)
        assert np.nanstd(log.y - model.one_step(log)) < 0.08
        plants = model.sample(7, np.random.default_rng(1))
        assert len(plants) == 7
        assert (plants.A == model.sample(7, np.random.default_rng(1)).A).all()
        assert (np.abs(model.poles()) < 1).all()
        assert model.linearise().dc_gain()[0, 0] == pytest.approx(0.4 / 0.15, rel=0.15)

    def test_every_segment_counts_and_none_is_glued(self, estimator: Any) -> None:
        """What lies between the segments, however wild, has no part in the estimate."""
        u, y = arrays()
        wild = np.random.default_rng(1).standard_normal((50, 1))
        cut = [np.concatenate([v[:400], 1e3 * wild, v[400:]]) for v in (u, y)]
        halves = [(0, 400), (450, 850)]
        pieces = PlantLog.from_arrays(u=cut[0], y=cut[1], sample_time_s=1.0, segments=halves)
        beside = PlantLog.from_arrays(u=u, y=y, sample_time_s=1.0, segments=[(0, 400), (400, 800)])
        first, second = estimator.fit(pieces), estimator.fit(beside)
        assert (first.model.theta == second.model.theta).all()
        assert first.stats["rows"] < 797
        assert first.stats["noise_var"] < 0.01

    def test_several_inputs(self, estimator: Any) -> None:
        model = estimator.fit(record(inputs=2)).model
        assert model.n_in == 2
        gain = model.linearise().dc_gain()
        assert gain.shape == (1, 2)
        assert gain[0, 0] == pytest.approx(8 / 3, rel=0.15)
        assert abs(gain[0, 1]) < 0.3

    def test_settings_and_results_are_frozen(self, estimator: Any) -> None:
        with pytest.raises(FrozenInstanceError, match="cannot assign"):
            estimator.n_a = 5
        fit = estimator.fit(record())
        with pytest.raises(FrozenInstanceError, match="cannot assign"):
            fit.status = Status.FAILED
        with pytest.raises(FrozenInstanceError, match="cannot assign"):
            fit.model.n_a = 5
        with pytest.raises(ValueError, match="read-only"):
            fit.model.theta[0] = 0.0

    def test_too_few_rows_are_said(self, estimator: Any) -> None:
        with pytest.raises(TooShortError, match=r"Use a longer log or lower|use a longer log or"):
            estimator.fit(record().rows(0, 8))

    def test_orders_for_another_number_of_inputs_are_said(self, estimator: Any) -> None:
        from dataclasses import replace

        with pytest.raises(InputError, match=r"n_b is \(2, 2, 2\).*each of the 1 inputs"):
            replace(estimator, n_b=(2, 2, 2)).fit(record())
        with pytest.raises(InputError, match="n_k is -1; give a whole number of 0 or more"):
            replace(estimator, n_k=-1).fit(record())
        with pytest.raises(InputError, match="n_k is 1.5; give a whole number"):
            replace(estimator, n_k=1.5).fit(record())

    def test_flat_arrays_are_said(self, estimator: Any) -> None:
        u, y = arrays()
        with pytest.raises(InputError, match=r"`u` has shape \(800,\); time-major"):
            estimator.fit(PlantLog.from_arrays(u=u[:, 0], y=y, sample_time_s=1.0))

    def test_a_still_input_is_no_success(self, estimator: Any) -> None:
        _, y = arrays()
        fit = estimator.fit(PlantLog.from_arrays(u=np.full((800, 1), 3.0), y=y, sample_time_s=1.0))
        assert fit.status is Status.RANK_DEFICIENT
        assert "record does not tell the parameters apart" in fit.advice
