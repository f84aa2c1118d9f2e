"""The two-level bootstrap: coverage, power, and what must not change it."""

import math
from typing import Any

import numpy as np
import pytest

from idlearn.comparison.resampling import (
    Interval,
    draw_resamples,
    mean_cost,
    pooled_plants,
    ratio_of_means,
    ratio_of_worst,
)
from idlearn.comparison.statistics import cvar
from idlearn.errors import InputError

SCENARIO = np.repeat([0, 1], 8)


def _within(hits: int, repeats: int, rate: float) -> bool:
    """Four standard errors of a binomial share: missed once in 16,000 if the rate is right."""
    return abs(hits / repeats - rate) <= 4 * math.sqrt(rate * (1 - rate) / repeats)


def test_a_against_a_holds_one_in_about_95_of_100_repeats(make: Any) -> None:
    # both plant and stream effects: the case the interval is made for
    rng, repeats = np.random.default_rng(11), 300
    hits = 0
    for _ in range(repeats):
        c = make.paired_costs(rng, 1.0, n_p=12, n_s=16)
        r = draw_resamples(12, SCENARIO, 400, rng)
        both = ratio_of_means(c["learned"], c["pid"], r, 0.95).both
        hits += both.low <= 1 <= both.high
    assert _within(hits, repeats, 0.95)


def test_seeds_drawn_anew_in_each_plant_would_be_far_too_narrow() -> None:
    # what the streams do they do on all plants at once; a nested draw takes it for noise that
    # averages out over the plants
    rng, repeats, n_p, n_s = np.random.default_rng(12), 150, 12, 16
    crossed = nested = 0
    for _ in range(repeats):
        stream = np.exp(0.1 * rng.standard_normal((2, 1, n_s)))
        costs = stream * np.exp(0.01 * rng.standard_normal((2, n_p, n_s)))
        r = draw_resamples(n_p, SCENARIO, 300, rng)
        both = ratio_of_means(costs[0], costs[1], r, 0.95).both
        crossed += both.low <= 1 <= both.high
        p = rng.integers(n_p, size=(300, n_p, 1))
        s = rng.integers(n_s, size=(300, n_p, n_s))
        drawn = costs[:, p, s].mean(axis=(2, 3))
        low, high = np.quantile(drawn[0] / drawn[1], [0.025, 0.975])
        nested += low <= 1 <= high
    assert _within(crossed, repeats, 0.95)
    assert nested < 0.6 * repeats


def test_few_seeds_are_allowed_for() -> None:
    # three seeds of two scenarios: four degrees of freedom; a plain percentile interval, whose
    # variance lacks a third and which knows no Student quantile, would hold 1 in about 80 %
    rng, repeats = np.random.default_rng(13), 300
    hits = plain = 0
    for _ in range(repeats):
        costs = np.exp(0.1 * rng.standard_normal((2, 1, 6)) * np.ones((2, 8, 1)))
        r = draw_resamples(8, np.repeat([0, 1], 3), 300, rng)
        both = ratio_of_means(costs[0], costs[1], r, 0.95).both
        hits += both.low <= 1 <= both.high
        drawn = np.log((r.streams @ costs[0, 0]) / (r.streams @ costs[1, 0]))
        low, high = np.quantile(drawn, [0.025, 0.975])
        plain += low <= 0 <= high
    assert _within(hits, repeats, 0.95)
    assert plain < 0.88 * repeats


def test_a_gain_of_5_percent_is_found_with_pairing_and_lost_without(make: Any) -> None:
    rng, repeats = np.random.default_rng(14), 40
    paired = broken = 0
    for _ in range(repeats):
        c = make.paired_costs(rng, 0.95, n_p=24, n_s=40, spread=0.02)
        r = draw_resamples(24, np.repeat([0, 1], 20), 400, rng)
        paired += ratio_of_means(c["learned"], c["pid"], r, 0.95).both.high < 1
        # the same numbers, but plants and streams no longer belong together
        shuffled = c["pid"][rng.permutation(24)][:, rng.permutation(40)]
        broken += ratio_of_means(c["learned"], shuffled, r, 0.95).both.high < 1
    # the standard error of the paired log ratio is about 0.008, so 0.051 is six of them
    assert paired >= 38
    assert broken < repeats / 2


def test_parts_are_each_no_wider_than_the_whole(make: Any) -> None:
    rng = np.random.default_rng(15)
    c = make.paired_costs(rng, 0.9)
    r = draw_resamples(24, np.repeat([0, 1], 20), 2000, rng)
    e = ratio_of_means(c["learned"], c["pid"], r, 0.95)
    for part in (e.seeds, e.plants):
        assert e.both.low < part.low < e.value < part.high < e.both.high


def test_parts_tell_plants_from_seeds() -> None:
    rng = np.random.default_rng(16)
    r = draw_resamples(10, SCENARIO, 1000, rng)
    by_plant = np.exp(0.1 * rng.standard_normal((10, 1))) * np.ones((10, 16))
    e = ratio_of_means(by_plant, np.ones((10, 16)), r, 0.95)
    assert e.seeds.high - e.seeds.low == pytest.approx(0, abs=1e-9)
    assert e.plants.high - e.plants.low > 0.05
    by_stream = np.exp(0.1 * rng.standard_normal((1, 16))) * np.ones((10, 16))
    e = ratio_of_means(by_stream, np.ones((10, 16)), r, 0.95)
    assert e.plants.high - e.plants.low == pytest.approx(0, abs=1e-9)
    assert e.seeds.high - e.seeds.low > 0.02


def test_the_estimate_is_the_plain_ratio_of_means_and_units_drop_out(make: Any) -> None:
    rng = np.random.default_rng(17)
    c = make.paired_costs(rng, 0.8, n_p=6, n_s=16)
    r = draw_resamples(6, SCENARIO, 500, rng)
    e = ratio_of_means(c["learned"], c["pid"], r, 0.95)
    assert e.value == pytest.approx(c["learned"].mean() / c["pid"].mean(), rel=1e-12)
    scaled = ratio_of_means(1e6 * c["learned"], 1e6 * c["pid"], r, 0.95)
    assert (scaled.both.low, scaled.both.high) == pytest.approx((e.both.low, e.both.high), rel=1e-9)


def test_the_order_of_the_plants_changes_the_interval_no_more_than_new_draws_do(make: Any) -> None:
    rng = np.random.default_rng(18)
    c = make.paired_costs(rng, 0.8, n_p=12, n_s=16)
    turned = rng.permutation(12)
    r = draw_resamples(12, SCENARIO, 4000, rng)
    a = ratio_of_means(c["learned"], c["pid"], r, 0.95)
    b = ratio_of_means(c["learned"][turned], c["pid"][turned], r, 0.95)
    assert b.value == pytest.approx(a.value, rel=1e-12)
    # ends of a percentile interval from 4000 draws: standard error about 3 % of its width
    assert abs(a.both.low - b.both.low) < 0.15 * (a.both.high - a.both.low)
    assert abs(a.both.high - b.both.high) < 0.15 * (a.both.high - a.both.low)


def test_worst_tenth_matches_the_plain_figure_and_covers(make: Any) -> None:
    rng = np.random.default_rng(19)
    c = make.paired_costs(rng, 0.9, n_p=12, n_s=16)
    r = draw_resamples(12, SCENARIO, 500, rng)
    e = ratio_of_worst(c["learned"], c["pid"], r, 0.95)
    assert e.value == pytest.approx(cvar(c["learned"]) / cvar(c["pid"]), rel=1e-12)
    assert e.both.low < 0.9 < e.both.high


def test_worst_tenth_of_a_resample_equals_that_of_the_repeated_scores() -> None:
    # integer weights are repeats, so the plain figure of the repeated table has to come out
    from idlearn.comparison import resampling

    rng = np.random.default_rng(20)
    scores = rng.gamma(2.0, 1.0, (5, 16))
    r = draw_resamples(5, SCENARIO, 50, rng)
    got = resampling._worst(scores, r.plants, r.streams, 0.1)
    for b in range(50):
        p = np.repeat(np.arange(5), np.round(r.plants[b] * 5).astype(int))
        s = np.repeat(np.arange(16), np.round(r.streams[b] * 16).astype(int))
        assert got[b] == pytest.approx(cvar(scores[np.ix_(p, s)]), rel=1e-9)


def test_streams_are_drawn_within_their_scenario() -> None:
    r = draw_resamples(3, np.array([0, 0, 0, 1, 1, 2, 2, 2, 2]), 200, np.random.default_rng(1))
    np.testing.assert_allclose(r.streams[:, :3].sum(axis=1), 3 / 9, rtol=0, atol=1e-12)
    np.testing.assert_allclose(r.streams[:, 3:5].sum(axis=1), 2 / 9, rtol=0, atol=1e-12)
    np.testing.assert_allclose(r.plants.sum(axis=1), 1.0, rtol=0, atol=1e-12)


def test_pooled_plants_hold_what_the_families_disagree_on() -> None:
    rng = np.random.default_rng(21)
    flat = np.ones((20, 8))
    alike = pooled_plants((flat, flat), (flat, flat), 500, 0.95, rng)
    assert (alike.low, alike.high) == (1.0, 1.0)
    apart = pooled_plants((flat, 0.5 * flat), (flat, flat), 500, 0.95, rng)
    assert apart.low < 0.75 < apart.high
    assert apart.high - apart.low > 0.1


def test_nothing_varies_and_nothing_is_known() -> None:
    rng = np.random.default_rng(22)
    with pytest.raises(InputError, match="1 plants"):
        draw_resamples(1, SCENARIO, 10, rng)
    with pytest.raises(InputError, match="1 seeds"):
        draw_resamples(4, np.array([0, 0, 1]), 10, rng)
    r = draw_resamples(4, SCENARIO, 10, rng)
    with pytest.raises(InputError, match="no ratio"):
        ratio_of_means(np.ones((4, 16)), np.zeros((4, 16)), r, 0.95)
    assert mean_cost(np.zeros((4, 16)), r, 0.95).both == Interval(0.0, 0.0)


def test_the_same_seed_gives_the_same_interval(make: Any) -> None:
    c = make.paired_costs(np.random.default_rng(23), 0.9, n_p=6, n_s=16)

    def once() -> Interval:
        r = draw_resamples(6, SCENARIO, 300, np.random.default_rng(5))
        return ratio_of_means(c["learned"], c["pid"], r, 0.95).both

    assert once() == once()
