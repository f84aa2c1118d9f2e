"""What is wrong in a sheet is said in one sentence with the place."""

from dataclasses import dataclass
from typing import Any, ClassVar

import pytest
from pydantic import TypeAdapter, ValidationError

from idlearn.errors import InputError, SheetError
from idlearn.logs.sheetparts import (
    LogEntry,
    SignalEntry,
    Timing,
    build_section,
    explain_validation,
)


@pytest.mark.parametrize(
    ("model", "table", "sentence"),
    [
        (
            SignalEntry,
            {"role": "actor"},
            "s.toml: x.role is 'actor'; choose one of 'actuator', 'output', 'setpoint', "
            "'disturbance', 'mode', 'quality' or 'ignore'",
        ),
        (SignalEntry, {}, "s.toml: x: key 'role' is missing; add it"),
        (
            SignalEntry,
            {"role": "actuator", "low": 5.0, "high": 1.0},
            "s.toml: x: low is 5 and high is 1; low has to be below high",
        ),
        (
            SignalEntry,
            {"role": "actuator", "low": "zero"},
            "s.toml: x.low is 'zero'; it has to be a number",
        ),
        (
            SignalEntry,
            {"role": "actuator", "rate_per_s": -1.0},
            "s.toml: x: rate_per_s is -1; it has to be greater than 0",
        ),
        (Timing, {"sample_time_s": 0}, "s.toml: x.sample_time_s is 0; it has to be greater than 0"),
        (
            Timing,
            {"sample_time_s": -2.5},
            "s.toml: x.sample_time_s is -2.5; it has to be greater than 0",
        ),
        (
            Timing,
            {"sample_time_s": float("nan")},
            "s.toml: x.sample_time_s is nan; it has to be a finite number",
        ),
        (Timing, {"sample_time_s": True}, "s.toml: x.sample_time_s is True; it has to be a number"),
        (
            Timing,
            {"latency_samples": -1},
            "s.toml: x.latency_samples is -1; it has to be at least 0",
        ),
        (
            Timing,
            {"latency_samples": 1.5},
            "s.toml: x.latency_samples is 1.5; it has to be a whole number",
        ),
        (
            Timing,
            {"sample_time": 1.0},
            "s.toml: x: unknown key 'sample_time'; it has sample_time_s, latency_samples",
        ),
        (LogEntry, {"path": ""}, "s.toml: x.path is empty; fill it in"),
        (
            LogEntry,
            {"path": "a.csv", "zone": "Mars"},
            "s.toml: x.zone is 'Mars', which is no time zone known here; "
            'give an IANA name such as "Europe/Oslo"',
        ),
        (
            LogEntry,
            {"path": "a.csv", "duplicates": "first"},
            "s.toml: x.duplicates is 'first'; choose one of 'refuse', 'last' or 'mean'",
        ),
        (LogEntry, 7, "s.toml: x is 7; it has to be a table of keys"),
    ],
)
def test_one_sentence_with_the_place(model: Any, table: object, sentence: str) -> None:
    with pytest.raises(SheetError, match="^s.toml: x") as caught:
        build_section(model, table, "s.toml: x")
    assert str(caught.value) == sentence


@dataclass(frozen=True, kw_only=True)
class Shelf:
    """A section as other layers write theirs: a plain dataclass."""

    __pydantic_config__: ClassVar[dict[str, str]] = {"extra": "forbid"}

    books: list[float]
    height: float = 1.0

    def __post_init__(self) -> None:
        """Refuse a flat shelf."""
        if self.height <= 0:
            raise InputError(f"height is {self.height:g}; it has to be greater than 0")


@pytest.mark.parametrize(
    ("table", "sentence"),
    [
        ({"books": [1.0, "x"]}, "shelf.books[2] is 'x'; it has to be a number"),
        ({"books": [], "depth": 1}, "shelf: unknown key 'depth'; correct or remove it"),
        ({}, "shelf: key 'books' is missing; add it"),
        ({"books": [], "height": 0}, "shelf: height is 0; it has to be greater than 0"),
        ({"books": 3}, "shelf.books is 3; it has to be a list"),
    ],
)
def test_dataclass_sections_are_explained_too(table: object, sentence: str) -> None:
    with pytest.raises(ValidationError, match="Shelf") as caught:
        TypeAdapter(Shelf).validate_python(table)
    assert explain_validation(caught.value, "shelf") == sentence


def test_a_signal_entry_becomes_its_signal() -> None:
    entry = SignalEntry(role="output", unit="degC", resolution=0.1, trip_high=1150)
    signal = entry.signal("temperature")
    assert (signal.name, signal.role, signal.unit) == ("temperature", "output", "degC")
    assert (signal.resolution, signal.trip_high) == (0.1, 1150.0)


def test_quality_needs_its_good_values() -> None:
    with pytest.raises(SheetError, match="good is missing"):
        build_section(SignalEntry, {"role": "quality"}, "signals.q")
    with pytest.raises(SheetError, match="good belongs to the roles"):
        build_section(SignalEntry, {"role": "output", "good": [1]}, "signals.y")
