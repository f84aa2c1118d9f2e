"""The limits: what is refused, and a digest that tells any change."""

from typing import Any

import pytest
from pydantic import TypeAdapter, ValidationError

from idlearn.comparison import Acceptance, Stress
from idlearn.errors import InputError


@pytest.mark.parametrize(
    ("wrong", "said"),
    [
        ({"least_gain": -0.1}, "least_gain is -0.1"),
        ({"least_gain": 1.0}, "least_gain is 1.0"),
        ({"least_gain": float("nan")}, "least_gain is nan"),
        ({"confidence": 0.5}, "confidence is 0.5"),
        ({"confidence": 1.0}, "confidence is 1.0"),
        ({"most_violation": 0.0}, "most_violation is 0.0"),
        ({"least_support": 1.1}, "least_support is 1.1"),
        ({"most_travel_ratio": 0.0}, "most_travel_ratio is 0.0"),
        ({"worst_tenth_ratio": float("inf")}, "worst_tenth_ratio is inf"),
    ],
)
def test_limits_that_hold_nothing_are_refused(wrong: dict[str, Any], said: str) -> None:
    with pytest.raises(InputError, match=said):
        Acceptance(**wrong)


@pytest.mark.parametrize(
    ("wrong", "said"),
    [
        ({"gain": (1.1, 1.3)}, "stress gain"),
        ({"gain": (0.7, 0.9)}, "stress gain"),
        ({"gain": (0.7,)}, "stress gain"),
        ({"extra_delay_samples": -1}, "extra_delay_samples is -1"),
        ({"noise": 0.5}, "stress noise is 0.5"),
        ({"noise": float("nan")}, "stress noise is nan"),
    ],
)
def test_stresses_that_are_none_are_refused(wrong: dict[str, Any], said: str) -> None:
    with pytest.raises(InputError, match=said):
        Stress(**wrong)


def test_the_sheet_section_becomes_the_dataclass_and_unknown_keys_are_refused() -> None:
    adapter = TypeAdapter(Acceptance)
    got = adapter.validate_python({"least_gain": 0.1, "stress": {"gain": [0.5, 2.0]}})
    assert got == Acceptance(least_gain=0.1, stress=Stress(gain=(0.5, 2.0)))
    with pytest.raises(ValidationError, match="least_gian"):
        adapter.validate_python({"least_gian": 0.1})
    with pytest.raises(ValidationError, match="delay"):
        adapter.validate_python({"stress": {"delay": 1}})


def test_the_digest_knows_values_and_not_how_they_are_written() -> None:
    assert Acceptance(most_travel_ratio=2).digest() == Acceptance(most_travel_ratio=2.0).digest()
    plain = Acceptance().digest()
    assert len(plain) == 64
    changed = [
        Acceptance(least_gain=0.06),
        Acceptance(confidence=0.9),
        Acceptance(most_violation=0.02),
        Acceptance(most_travel_ratio=1.6),
        Acceptance(least_support=0.9),
        Acceptance(worst_tenth_ratio=1.1),
        Acceptance(stress=Stress(noise=3.0)),
        Acceptance(stress=Stress(gain=(0.6, 1.3))),
        Acceptance(stress=Stress(extra_delay_samples=2)),
    ]
    assert len({plain, *(a.digest() for a in changed)}) == len(changed) + 1
