"""Numbers in words. Expected texts are worked out by hand unless a source stands beside them."""

import math
import re

import numpy as np
import pytest

from idlearn.reports import wording

THIN, HARD = "\u202f", "\u00a0"


@pytest.mark.parametrize(
    ("value", "low", "high", "text"),
    [
        (0.8437, 0.79, 0.9012, "0.84 (0.79 to 0.90)"),
        (1234.4, 1100.0, 1400.0, f"1{THIN}230 (1{THIN}100 to 1{THIN}400)"),
        (5.0, 5.0, 5.0, "5"),
        (-0.001, -0.1, 0.1, "0.00 (−0.10 to 0.10)"),
        (2.5e-9, 2.1e-9, 3.0e-9, f"2.5 (2.1 to 3.0){HARD}×{HARD}10⁻⁹"),
        (4.2e8, 3.9e8, 4.6e8, f"4.2 (3.9 to 4.6){HARD}×{HARD}10⁸"),
        (0.8, math.nan, math.nan, "0.800 (interval not known)"),
        (math.nan, 0.1, 0.2, "–"),
        (math.inf, 1.0, math.inf, "beyond any bound"),
        (3.0, 1.0, math.inf, "3.00 (1.00 to beyond any bound)"),
    ],
)
def test_with_interval(value: float, low: float, high: float, text: str) -> None:
    assert wording.with_interval(value, low, high) == text


def test_digits_follow_the_interval() -> None:
    # JCGM 100:2008 (GUM) 7.2.6: it usually suffices to quote an uncertainty to at most two
    # significant digits; here the uncertainty is half of the interval
    rng = np.random.default_rng(8)
    for _ in range(500):
        value = float(10 ** rng.uniform(-3, 4))
        half = value * float(10 ** rng.uniform(-3, -0.1))
        text = wording.with_interval(value, value - half, value + half).replace(THIN, "")
        first = text.split(" ")[0]
        decimals = len(first.partition(".")[2])
        if decimals:
            assert half / 10.0**-decimals < 100
        assert abs(float(first) - value) <= 0.2 * half


@pytest.mark.parametrize(
    ("value", "text"),
    [
        (0.0, "0"),
        (0.005, "0.5 %"),
        (0.5, "50 %"),
        (0.985, "98.5 %"),
        (1.0, "100 %"),
        (math.nan, "–"),
    ],
)
def test_share(value: float, text: str) -> None:
    assert wording.share(value) == (text.replace(" ", THIN) if value else f"0{THIN}%")


@pytest.mark.parametrize(
    ("value", "text"),
    [
        (0.01, "0.01"),
        (1.0, "1"),
        (0.985, "0.985"),
        (12.4, "12.4"),
        (123456.0, f"123{THIN}456"),
        (1.5e-7, f"1.50{HARD}×{HARD}10⁻⁷"),
        (-3.0, "−3"),
        (0.0, "0"),
    ],
)
def test_plain_has_no_trailing_zeros(value: float, text: str) -> None:
    assert wording.plain(value) == text


def test_change_in_percent() -> None:
    assert wording.change(0.82, 0.73, 0.92).replace(THIN, " ") == (
        "18 % lower (between 27 % lower and 8 % lower)"
    )
    assert wording.change(1.0, 0.9, 1.2).replace(THIN, " ") == (
        "unchanged (between 10 % lower and 20 % higher)"
    )


@pytest.mark.parametrize(
    ("seconds", "text"),
    [
        (0.0, "0 s"),
        (0.02, "20 ms"),
        (45.0, "45 s"),
        (1200.0, "20 min"),
        (36000.0, "10 h"),
        (864000.0, "10 d"),
    ],
)
def test_duration(seconds: float, text: str) -> None:
    assert wording.duration(seconds) == text.replace(" ", THIN)


@pytest.mark.parametrize(
    ("value", "step", "text"),
    [
        (0.25, 0.25, "0.25"),
        (2.5, 2.5, "2.5"),
        (100.0, 50.0, "100"),
        (-20.0, 10.0, "−20"),
        (1e-17, 0.1, "0"),
        (9.2e-7, 2e-8, "9.2e−7"),
        (3e8, 1e8, "3e8"),
    ],
)
def test_tick(value: float, step: float, text: str) -> None:
    assert wording.tick(value, step) == text


def test_ticks_of_one_axis_differ() -> None:
    for power in range(-12, 13):
        for base in (1.0, 2.0, 2.5, 5.0):
            step = base * 10.0**power
            texts = [wording.tick(k * step, step) for k in range(-4, 5)]
            assert len(set(texts)) == 9, step


def test_long_names_lose_their_middle() -> None:
    assert wording.label("temperature", 20) == "temperature"
    short = wording.label("a_very_long_signal_name_TIC-4711.PV", 15)
    assert len(short) == 15
    assert short == "a_very_…4711.PV"
    assert wording.label("bell\x07\x00", 20) == "bell\ufffd\ufffd"


def test_axis_labels_carry_a_unit() -> None:
    assert wording.axis("heater", "%") == "heater [%]"
    assert wording.axis("ratio", "") == "ratio [-]"
    assert re.fullmatch(r".{1,40}", wording.axis("x" * 90, "kg/s"))


def test_lists_and_plurals() -> None:
    assert wording.listed([]) == ""
    assert wording.listed(["a"]) == "a"
    assert wording.listed(["a", "b", "c"]) == "a, b and c"
    assert wording.plural(1, "run") == "1 run"
    assert wording.plural(1200, "run") == f"1{THIN}200 runs"
