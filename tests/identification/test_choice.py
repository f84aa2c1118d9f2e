"""Order search, automatic choice, excitation and validation."""

import numpy as np
import pandas as pd
import pytest
from numpy.testing import assert_allclose

from idlearn.errors import InputError, TooShortError
from idlearn.identification import (
    ArmaxEstimator,
    ArxEstimator,
    Status,
    build_ensembles,
    find_feedback,
    fit_fopdt,
    identify,
    order_search,
    support_region,
    validate,
)
from idlearn.identification.regressors import blocks, centre_of
from idlearn.logs import PlantLog


def lag_log(n: int = 1500, seed: int = 0, noise: float = 0.1) -> PlantLog:
    """Return an open-loop record of y = 0.9 y1 + 0.2 u(k-3) with white equation noise."""
    rng = np.random.default_rng(seed)
    u = np.repeat(rng.standard_normal(n // 5 + 1), 5)[:n]
    y = np.zeros(n)
    for k in range(3, n):
        y[k] = 0.9 * y[k - 1] + 0.2 * u[k - 3] + noise * rng.standard_normal()
    return PlantLog.from_arrays(u=u[:, None] + 4, y=y[:, None] + 20, sample_time_s=1.0)


def pi_loop(seed: int, moves: bool, n: int = 5400) -> PlantLog:
    """Return an invented PI loop: gain 2, 60 s, 10 s dead time, 1 s sampling, drift and noise."""
    rng = np.random.default_rng(seed)
    a, dead = np.exp(-1 / 60), 10
    setpoint = np.full(n, 50.0)
    if moves:
        setpoint = 50 + np.repeat(rng.choice([-4.0, 0.0, 4.0], n // 300 + 1), 300)[:n]
    u, y, x, load, integral = np.zeros(n), np.zeros(n), 50.0, 0.0, 25.0
    for k in range(n):
        y[k] = x + 0.05 * rng.standard_normal()
        error = setpoint[k] - y[k]
        integral += 1.5 / 60 * error
        u[k] = np.clip(1.5 * error + integral, 0, 100)
        load = 0.998 * load + 0.02 * rng.standard_normal()
        x = a * x + (1 - a) * 2 * ((u[k - dead] if k >= dead else 25.0) + load)
    return PlantLog.from_arrays(
        u=u[:, None], y=y[:, None], setpoint=setpoint[:, None], sample_time_s=1.0
    )


@pytest.mark.parametrize("two", [False, True])
def test_search_equals_refitting(two: bool) -> None:
    rng = np.random.default_rng(1)
    n = 400
    u = rng.standard_normal((n, 2 if two else 1))
    y = rng.standard_normal((n, 1)).cumsum(axis=0) * 0.1 + np.roll(u[:, :1], 2, axis=0)
    log = PlantLog.from_arrays(u=u, y=y, sample_time_s=1.0, segments=[(0, 150), (170, 400)])
    table = order_search(log, 3, 3, 4)
    depth = 4 + 3
    parts = list(blocks(log, centre_of(log), 3, [0] * u.shape[1], [depth - 1] * u.shape[1]))
    assert table.rows == sum(len(t) for _, t in parts)
    phi, target = (np.concatenate(p) for p in zip(*parts, strict=True))
    for o in table.tried:
        columns = list(range(o.n_a))
        for j, k in enumerate(o.n_k):
            columns += [3 + j * depth + k + i for i in range(o.n_b)]
        left = np.linalg.lstsq(phi[:, columns], target, rcond=None)[1]
        assert o.loss * table.rows == pytest.approx(float(left[0]), rel=1e-8)


def test_choice_finds_dead_time_and_is_deterministic() -> None:
    log = lag_log()
    found = identify(log, effort="quick", seed=3)
    assert found.validation.passed
    assert found.chosen.model.n_k == (3,)
    gain = found.chosen.model.linearise().dc_gain()[0, 0]
    assert gain == pytest.approx(2.0, rel=0.1)
    pd.testing.assert_frame_equal(identify(log, effort="quick", seed=3).tried, found.tried)
    assert {"family", "n_a", "n_b", "n_k", "free_run_nrmse"} <= set(found.tried.columns)


def test_segments_are_never_glued() -> None:
    """Two stretches at different levels of a drift-free plant give the parameters of one."""
    log = lag_log(noise=0.0)
    cut = PlantLog.from_arrays(
        u=np.concatenate([log.u[:500], log.u[900:]]), y=np.concatenate([log.y[:500], log.y[900:]]),
        sample_time_s=1.0, segments=[(0, 500), (500, 1100)],
    )  # fmt: skip
    fit = ArxEstimator(n_a=1, n_b=1, n_k=3, offset="constant").fit(cut)
    assert_allclose(fit.model.a, [-0.9], rtol=0, atol=1e-9)
    assert_allclose(fit.model.b, [[0.2]], rtol=0, atol=1e-9)


def test_noise_free_records_are_refitted_exactly() -> None:
    rng = np.random.default_rng(2)
    u = rng.standard_normal((300, 2)) + 3
    y = np.full((300, 1), 7.0)
    for k in range(4, 300):
        y[k] = 7 + 1.5 * (y[k - 1] - 7) - 0.7 * (y[k - 2] - 7) + u[k - 1, 0] - 0.3 * u[k - 4, 1]
    log = PlantLog.from_arrays(u=u, y=y, sample_time_s=1.0)
    fit = ArxEstimator(n_a=2, n_b=1, n_k=(1, 4)).fit(log)
    assert_allclose(fit.model.a, [-1.5, 0.7], rtol=0, atol=1e-9)
    assert_allclose(fit.model.free_run(u, y[:8]), y, rtol=0, atol=1e-7)


@pytest.mark.parametrize("seed", [0, 1, 2])
def test_a_loop_that_nothing_moves_is_refused(seed: int) -> None:
    """The condition number looks harmless, the gain is wrong.

    Soderstrom and Stoica 1989, ch. 10 (from memory): the estimate lies between the plant and
    minus the inverse of the controller.
    """
    log = pi_loop(seed, moves=False)
    found = identify(log, effort="quick", seed=1)
    assert not found.validation.passed
    assert any("nothing from outside moves" in r for r in found.validation.reasons)


def test_setpoint_moves_make_the_same_loop_identifiable() -> None:
    found = identify(pi_loop(0, moves=True), effort="quick", seed=1)
    assert found.validation.passed, found.validation.reasons
    plant = fit_fopdt(found.chosen.model)
    assert plant.gain == pytest.approx(2.0, rel=0.1)
    assert found.chosen.model.n_k[0] == pytest.approx(11, abs=2)  # 10 samples and the hold


def test_feedback_is_seen() -> None:
    closed, still = find_feedback(pi_loop(0, moves=True)), find_feedback(pi_loop(0, moves=False))
    assert closed.closed
    assert closed.excited
    assert closed.setpoint_moves > 5
    assert still.closed
    assert not still.excited
    assert not find_feedback(lag_log()).closed


def test_a_model_worse_than_naive_is_refused() -> None:
    log = lag_log()
    first, last = log.split((0.7, 0.3))
    model = ArxEstimator(n_a=1, n_b=1, n_k=3).fit(first).model
    assert validate(model.linearise(), last, used=first).passed
    from dataclasses import replace

    wrong = replace(model.linearise(), B=-model.linearise().B)
    v = validate(wrong, last, used=first)
    assert not v.passed
    assert any("no better than the mean" in r for r in v.reasons)


def test_plants_come_from_both_parts_and_repeat() -> None:
    log = lag_log()
    first = build_ensembles(log, n_practice=6, n_selection=4, n_jury=8, seed=5, effort="quick")
    again = build_ensembles(log, n_practice=6, n_selection=4, n_jury=8, seed=5, effort="quick")
    assert first.passed
    assert [len(e) for e in (first.practice, first.selection, first.jury)] == [6, 4, 8]
    assert (first.jury.A == again.jury.A).all()
    assert not np.any(first.jury.D)
    assert any("block" in label for label in first.jury.labels)
    assert {r.part for r in first.records} == {"practice", "jury"}
    assert all(r.coverage95 >= 0.9 for r in first.records)


def test_a_short_log_is_said_to_be_short() -> None:
    found = build_ensembles(
        lag_log(300), n_practice=3, n_selection=3, n_jury=4, seed=1, effort="quick"
    )
    assert any(f.finding == "short log" for f in found.findings)


def test_the_region_of_the_log() -> None:
    log = lag_log()
    region = support_region(log)
    move = np.diff(log.u, axis=0, prepend=log.u[:1])
    assert region.inside(log.y, log.u, move).mean() > 0.99
    far = log.y + 10 * np.ptp(log.y)
    assert not region.inside(far, log.u, move).any()
    # each value was seen, but never this pair
    y = np.full((1, 1), np.quantile(log.y, 0.99))
    u = np.full((1, 1), np.quantile(log.u, 0.01))
    pair = support_region(PlantLog.from_arrays(u=log.y - log.y.mean(), y=log.y, sample_time_s=1.0))
    assert not pair.inside(y, np.full((1, 1), log.y.mean() - y[0, 0]), np.zeros((1, 1))).any()
    assert u.shape == y.shape


@pytest.mark.parametrize(
    ("estimator", "words"),
    [
        (ArxEstimator(n_a=-1), "n_a is -1"),
        (ArxEstimator(n_b=0), "n_b is 0"),
        (ArxEstimator(n_k=(1, 2)), "one for each of the 1 inputs"),
        (ArxEstimator(offset="maybe"), "offset is 'maybe'"),
        (ArmaxEstimator(n_c=0), "n_c=0"),
    ],
)
def test_orders_that_make_no_sense(estimator: ArxEstimator, words: str) -> None:
    with pytest.raises(InputError, match=words):
        estimator.fit(lag_log(200))


def test_too_short() -> None:
    log = lag_log(200).rows(0, 12)
    with pytest.raises(TooShortError, match="12 samples|equations"):
        ArxEstimator(n_a=4, n_b=4, n_k=3).fit(log)
    with pytest.raises(TooShortError, match="longest unbroken stretch"):
        identify(log)


def test_the_kind_of_plant_is_told() -> None:
    """A sampled lag with dead time gives itself back; an integrator is called one."""
    found = fit_fopdt(ArxEstimator(n_a=1, n_b=1, n_k=3).fit(lag_log(noise=0.0)).model)
    assert found.kind == "lag"
    assert found.time_constant_s == pytest.approx(-1 / np.log(0.9), rel=1e-3)
    assert found.dead_time_s == pytest.approx(2.0, abs=0.01)  # the hold left out
    rng = np.random.default_rng(3)
    u = rng.standard_normal((400, 1))
    y = np.concatenate([np.zeros((1, 1)), 0.5 * u[:-1]]).cumsum(axis=0)
    fit = ArxEstimator(n_a=1, n_b=1, n_k=1, offset="none").fit(
        PlantLog.from_arrays(u=u, y=y, sample_time_s=2.0)
    )
    assert fit.status is Status.OK
    plant = fit_fopdt(fit.model)
    assert plant.kind == "integrating"
    assert plant.gain == pytest.approx(0.25, rel=1e-6)
