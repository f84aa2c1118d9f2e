"""Figures in words are no finer than their interval."""

import pytest

from idlearn.comparison import Interval
from idlearn.comparison.phrases import change, decimals, figure, listed, ratio, share


@pytest.mark.parametrize(
    ("width", "fine"), [(50.0, 0), (5.0, 0), (3.0, 1), (0.3, 2), (0.03, 3), (0.0, 2)]
)
def test_decimals(width: float, fine: int) -> None:
    assert decimals(width) == fine


@pytest.mark.parametrize(
    ("value", "interval", "said"),
    [
        (0.7634, Interval(0.64, 0.91), "24 % lower (between 36 % lower and 9 % lower)"),
        (1.001, Interval(0.86, 1.16), "unchanged (between 14 % lower and 16 % higher)"),
        (0.9512, Interval(0.9491, 0.9532), "4.88 % lower (between 5.09 % lower and 4.68 % lower)"),
    ],
)
def test_change(value: float, interval: Interval, said: str) -> None:
    assert change(value, interval) == said


def test_ratio_and_share() -> None:
    assert ratio(0.8123, Interval(0.7, 0.9)) == "0.81 (0.70 to 0.90)"
    assert ratio(float("inf"), Interval(float("inf"), float("inf"))) == "beyond any bound"
    assert [share(x) for x in (0.005, 0.05, 0.5, 0.954, 1.0, float("nan"))] == [
        "0.5 %",
        "5 %",
        "50 %",
        "95.4 %",
        "100 %",
        "no figure",
    ]
    assert listed(["a", "b", "c"]) == "a, b and c"
    assert listed(["a"]) == "a"


@pytest.mark.parametrize(
    ("value", "said"),
    [(300.0, "300"), (0.0012345, "0.00123"), (123456.0, "123000"), (-2.5, "-2.5")],
)
def test_figure_has_no_exponent(value: float, said: str) -> None:
    assert figure(value) == said
