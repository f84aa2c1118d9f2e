"""Statistics against printed tables and closed forms."""

import math

import numpy as np
import pytest

from idlearn.comparison.statistics import (
    best_of_bias,
    clean_runs_needed,
    clopper_pearson,
    cvar,
    holm_adjusted,
    holm_levels,
    interquartile_mean,
    pairing_gain,
    probability_of_improvement,
)


# C. J. Clopper and E. S. Pearson, Biometrika 26, 1934: beta quantiles (alpha/2; k, n-k+1) and
# (1-alpha/2; k+1, n-k), the form in which reference manuals of statistics print the limits.
@pytest.mark.parametrize(
    ("events", "trials", "low", "high"),
    [
        (0, 10, 0.0, 0.308497),
        (0, 20, 0.0, 0.168433),
        (0, 30, 0.0, 0.115703),
        (0, 100, 0.0, 0.036217),
        (1, 10, 0.002529, 0.445016),
        (5, 20, 0.086571, 0.491046),
        (8, 10, 0.443905, 0.974789),
        (10, 10, 0.691503, 1.0),
    ],
)
def test_clopper_pearson_limits(events: int, trials: int, low: float, high: float) -> None:
    np.testing.assert_allclose(clopper_pearson(events, trials), (low, high), rtol=0, atol=1e-6)


def test_a_bound_is_where_the_binomial_tail_is_what_was_asked_for() -> None:
    # definition of the bound: at the upper one, seeing 3 or fewer of 40 has probability 5 %
    high = clopper_pearson(3, 40, 0.95, "upper")[1]
    tail = sum(math.comb(40, k) * high**k * (1 - high) ** (40 - k) for k in range(4))
    assert tail == pytest.approx(0.05, abs=1e-9)


# The rule of three: J. A. Hanley and A. Lippman-Hand, JAMA 249, 1983 (from memory); the bound is
# 1 - 0.05 ** (1 / n) exactly.
@pytest.mark.parametrize(
    ("n", "bound"), [(10, 0.258866), (30, 0.095034), (100, 0.029513), (300, 0.009936)]
)
def test_rule_of_three(n: int, bound: float) -> None:
    low, high = clopper_pearson(0, n, 0.95, "upper")
    assert low == 0
    assert high == pytest.approx(bound, abs=1e-6)


# Clean runs that show a failure rate below 10, 5 and 1 %: B. D. Jovanovic and P. S. Levy, The
# American Statistician 51, 1997, and E. Eypasch et al., BMJ 311, 1995 (abstracts).
@pytest.mark.parametrize(("rate", "runs"), [(0.10, 29), (0.05, 59), (0.01, 299)])
def test_clean_runs_needed(rate: float, runs: int) -> None:
    assert clean_runs_needed(rate, 0.95) == runs
    assert clopper_pearson(0, runs, 0.95, "upper")[1] <= rate
    assert clopper_pearson(0, runs - 1, 0.95, "upper")[1] > rate


def test_holm() -> None:
    # S. Holm, Scandinavian Journal of Statistics 6, 1979 (worked example from memory)
    p = [0.01, 0.04, 0.03, 0.005]
    np.testing.assert_allclose(holm_adjusted(p), [0.03, 0.06, 0.06, 0.02], rtol=0, atol=1e-12)


def test_holm_levels_reject_what_the_adjusted_p_values_reject() -> None:
    # the smallest p-value is read at alpha / m, the next at alpha / (m - 1), and so on
    p = [0.01, 0.04, 0.03, 0.005]
    np.testing.assert_allclose(
        1 - holm_levels(p, 0.95), [0.05 / 3, 0.05, 0.05 / 2, 0.05 / 4], rtol=0, atol=1e-12
    )


# R. Agarwal et al., Deep Reinforcement Learning at the Edge of the Statistical Precipice, NeurIPS
# 2021: mean of the middle half of all runs.
@pytest.mark.parametrize(
    ("scores", "value"), [([1, 2, 3, 4, 5, 6, 7, 100], 4.5), ([1, 2, 3, 4, 5, 6, 7, 8], 4.5)]
)
def test_interquartile_mean(scores: list[float], value: float) -> None:
    assert interquartile_mean(np.array(scores, dtype=float)) == value


def test_probability_of_improvement() -> None:
    # the same paper: the Mann-Whitney U over n m; there more is better, here a cost is less
    x, y = np.array([1.0, 2.0, 3.0]), np.array([1.5, 2.0, 0.5])
    assert probability_of_improvement(-x, -y, paired=False) == pytest.approx(0.722222, abs=1e-6)


# R. T. Rockafellar and S. Uryasev, Journal of Risk 2, 2000, and Journal of Banking and Finance
# 26, 2002: with atoms the value at risk is split.
@pytest.mark.parametrize(
    ("beta", "value"), [(0.8, 9.5), (0.85, 9.666667), (0.9, 10.0), (0.95, 10.0)]
)
def test_cvar_splits_the_atom(beta: float, value: float) -> None:
    losses = np.arange(1.0, 11.0)
    assert cvar(losses, 1 - beta) == pytest.approx(value, abs=1e-6)
    # their minimisation formula, over the atoms, where a minimum is always found
    formula = min(c + np.mean(np.maximum(losses - c, 0)) / (1 - beta) for c in losses)
    assert cvar(losses, 1 - beta) == pytest.approx(formula, abs=1e-12)


@pytest.mark.parametrize(("beta", "value"), [(0.95, 2.062713), (0.99, 2.665214)])
def test_cvar_of_a_normal_loss(beta: float, value: float) -> None:
    # closed form phi(z) / (1 - beta), printed in the same papers; here over a fine grid of
    # quantiles, whose last cell is the only coarse one: 1e-4
    from scipy.special import ndtri

    n = 400_000
    losses = ndtri((np.arange(n) + 0.5) / n)
    assert cvar(losses, 1 - beta) == pytest.approx(value, abs=1e-4)


# Common random numbers: Var(X - Y) = 2 s2 (1 - rho), so runs fall by 1 / (1 - rho); A. M. Law and
# W. D. Kelton, Simulation Modeling and Analysis (from memory).
@pytest.mark.parametrize(("rho", "fewer"), [(0.5, 2.0), (0.9, 10.0), (0.99, 100.0)])
def test_pairing_gain(rho: float, fewer: float) -> None:
    # two orthogonal unit-variance vectors give exactly this correlation
    a = np.array([1.0, 1.0, -1.0, -1.0])
    b = np.array([1.0, -1.0, 1.0, -1.0])
    y = rho * a + math.sqrt(1 - rho**2) * b
    assert pairing_gain(a, y) == pytest.approx(fewer, rel=1e-9)


# Mean of the largest of n standard normal numbers. For n = 2 it is half of the control-chart
# constant d2 (1.128 for subgroups of 2, 1.693 of 3, 2.059 of 4, 2.326 of 5, 3.078 of 10; tables
# in ASTM's manual and Montgomery's textbook, from memory), and so it is for every n by symmetry.
@pytest.mark.parametrize(
    ("n", "bias"),
    [
        (1, 0.0),
        (2, 0.564190),
        (3, 0.846284),
        (4, 1.029375),
        (5, 1.162964),
        (10, 1.538753),
        (20, 1.867475),
        (100, 2.507594),
    ],
)
def test_winners_curse(n: int, bias: float) -> None:
    assert best_of_bias(n) == pytest.approx(bias, abs=1e-6)


@pytest.mark.parametrize(("n", "d2"), [(2, 1.128), (3, 1.693), (4, 2.059), (5, 2.326), (10, 3.078)])
def test_winners_curse_against_the_control_chart_table(n: int, d2: float) -> None:
    assert 2 * best_of_bias(n) == pytest.approx(d2, abs=5e-4)
