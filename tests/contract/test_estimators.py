"""What every estimator promises; a new one joins by one line."""

from typing import Any

import numpy as np
import pytest
from numpy.testing import assert_allclose

from idlearn.identification import ArmaxEstimator, ArxEstimator, Status
from idlearn.logs import PlantLog

ESTIMATORS = [
    ArxEstimator(n_a=2, n_b=2, n_k=2),
    ArmaxEstimator(n_a=2, n_b=2, n_c=1, n_k=2),
    ArmaxEstimator(n_a=2, n_b=1, n_c=2, n_k=2, integrated=True),
]


def record(u_scale: float = 1.0, y_scale: float = 1.0, offset: float = 0.0) -> PlantLog:
    rng = np.random.default_rng(11)
    n = 800
    u, e = np.repeat(rng.standard_normal(n // 4), 4), 0.05 * rng.standard_normal(n)
    y = np.zeros(n)
    for k in range(3, n):
        y[k] = 1.2 * y[k - 1] - 0.35 * y[k - 2] + 0.3 * u[k - 2] + 0.1 * u[k - 3]
        y[k] += e[k] + 0.4 * e[k - 1]
    return PlantLog.from_arrays(
        u=u_scale * u[:, None] + offset, y=y_scale * y[:, None] - offset, sample_time_s=1.0
    )


@pytest.mark.parametrize("estimator", ESTIMATORS, ids=repr)
class TestEveryEstimator:
    def test_same_log_same_model(self, estimator: Any) -> None:
        first, second = estimator.fit(record()), estimator.fit(record())
        assert first.status is Status.OK
        assert (first.model.theta == second.model.theta).all()

    def test_the_log_stays_as_it_is(self, estimator: Any) -> None:
        log = record()
        before = log.u.copy(), log.y.copy()
        estimator.fit(log)
        assert (log.u == before[0]).all()
        assert (log.y == before[1]).all()

    def test_units_only_scale_the_model(self, estimator: Any) -> None:
        plain = estimator.fit(record()).model
        other = estimator.fit(record(u_scale=100.0, y_scale=1e-3)).model
        assert_allclose(other.a, plain.a, rtol=1e-4, atol=1e-6)
        assert_allclose(other.b, plain.b * 1e-5, rtol=1e-4)
        assert_allclose(other.linearise().S, plain.linearise().S * 1e-6, rtol=1e-4)

    def test_operating_points_do_not_matter(self, estimator: Any) -> None:
        plain, other = estimator.fit(record()).model, estimator.fit(record(offset=300.0)).model
        assert_allclose(other.a, plain.a, rtol=1e-5)

    def test_the_model_does_what_models_do(self, estimator: Any) -> None:
        log = record()
        model = estimator.fit(log).model
        free = model.free_run(log.inputs, warm_up=log.y[:10])
        assert free.shape == log.y.shape
        assert np.std(log.y - free) < 0.35 * np.std(log.y)
        assert np.nanstd(log.y - model.one_step(log)) < 0.08
        assert len(model.sample(7, np.random.default_rng(1))) == 7
        assert (np.abs(model.poles()) < 1).all()
        assert model.linearise().dc_gain()[0, 0] == pytest.approx(0.4 / 0.15, rel=0.15)

    def test_settings_are_frozen(self, estimator: Any) -> None:
        with pytest.raises(AttributeError, match="cannot assign"):
            estimator.n_a = 5
