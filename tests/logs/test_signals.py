"""Signals refuse figures that contradict each other."""

import pytest

from idlearn.errors import InputError
from idlearn.logs.signals import Signal, check_roles


@pytest.mark.parametrize(
    ("figures", "told"),
    [
        ({"role": "actor"}, "role is 'actor'"),
        ({"low": 3.0, "high": 3.0}, "low is 3 and high is 3"),
        ({"low": 4.0, "high": 3.0}, "low has to be below high"),
        ({"trip_low": 1.0, "trip_high": 0.0}, "trip_low has to be below trip_high"),
        ({"rate_per_s": 0.0}, "rate_per_s is 0"),
        ({"resolution": -1.0}, "resolution is -1"),
        ({"high": float("nan")}, "high is not a number"),
        ({"of": "y"}, "only a setpoint belongs to an output"),
    ],
)
def test_contradictions_are_refused(figures: dict[str, object], told: str) -> None:
    with pytest.raises(InputError, match=told):
        Signal(**{"name": "heater", "role": "actuator", **figures})  # type: ignore[arg-type]


U = Signal(name="u", role="actuator")
Y, Y2 = Signal(name="y", role="output"), Signal(name="z", role="output")


@pytest.mark.parametrize(
    ("signals", "told"),
    [
        ((Y,), "no signal has the role 'actuator'"),
        ((U,), "no signal has the role 'output'"),
        ((U, Y, Y), "two signals are called 'y'"),
        ((U, Y, Signal(name="s", role="setpoint", of="u")), "is of 'u', which is no output"),
        ((U, Y, Y2, Signal(name="s", role="setpoint")), "does not say which output"),
        (
            (U, Y, Signal(name="s", role="setpoint"), Signal(name="r", role="setpoint", of="y")),
            "both belong to 'y'",
        ),
    ],
)
def test_signals_that_do_not_fit_together(signals: tuple[Signal, ...], told: str) -> None:
    with pytest.raises(InputError, match=told):
        check_roles(signals)
