"""The sheet: what it holds, what it refuses, what it leaves out and says so."""

from collections.abc import Callable
from pathlib import Path

import pytest

from idlearn.comparison import Acceptance
from idlearn.errors import SheetError
from idlearn.study import read_sheet

Study = Callable[..., Path]

FULL = """
[[scenarios]]
name = "a step"
duration_s = 120.0
setpoint = { y = [[0.0, 50.0], [20.0, 55.0]] }
input_disturbance = { u = [[60.0, 5.0]] }

[acceptance]
least_gain = 0.1
stress = { gain = [0.5, 1.5], extra_delay_samples = 2, noise = 3.0 }

[candidates]
learned = ["evolution", "gradient", "predictive"]
classical = ["pid", "lqg"]

[incumbent]
kind = "pid"
form = "parallel"
gain = 2.0
integral_gain = 0.1
"""


def add(text: str) -> tuple[str, str]:
    return ("[timing]", f"{text}\n[timing]")


def test_every_section_reaches_its_owner(study: Study) -> None:
    sheet = read_sheet(study(replace=add(FULL)))
    assert sheet.study.name == "invented lag"
    assert sheet.costs[0].terms[1].kind == "move"
    assert sheet.scenarios[0].setpoint["y"] == ((0.0, 50.0), (20.0, 55.0))
    assert sheet.acceptance.least_gain == 0.1
    assert sheet.acceptance.stress.gain == (0.5, 1.5)
    assert sheet.candidates.left_out == ("gradient",)
    assert sheet.incumbent is not None
    assert sheet.incumbent.ideal().integral_time_s == 20.0
    assert len(sheet.sha256) == 64


def test_defaults_are_the_documented_ones(study: Study) -> None:
    sheet = read_sheet(study())
    assert sheet.acceptance == Acceptance()
    assert sheet.acceptance.most_violation == 0.01
    assert sheet.study.seed == 1
    assert sheet.incumbent is None
    assert sheet.latency_samples == 0


@pytest.mark.parametrize(
    ("text", "words"),
    [
        ("[acceptance]\nleast_gain = 1.5", "acceptance.*least_gain"),
        ("[acceptance]\nleast_gian = 0.1", "acceptance.*least_gian"),
        ("[acceptance]\nstress = { noise = 0.5 }", "stress.*noise"),
        ('[candidates]\nlearned = ["magic"]', "magic"),
        ('[candidates]\nlearned = ["gradient"]', "names none of"),
        ('[[scenarios]]\nname = "x"\nduration_s = 0.0', r"scenarios\[1\].*duration_s"),
        (
            '[[scenarios]]\nname = "x"\nduration_s = 9.0\n'
            "setpoint = { y = [[5.0, 1.0], [2.0, 1.0]] }",
            "times",
        ),
        ('[[scenarios]]\nname="x"\nduration_s=9.0\n[[scenarios]]\nname="x"\nduration_s=9.0', "two"),
        ('[incumbent]\nkind = "fuzzy"', "incumbent.*fuzzy"),
        ('[incumbent]\nkind = "pid"\ngain = 1.0\nintegral_time_s = -3.0', "integral_time_s"),
    ],
)
def test_what_is_wrong_is_said_with_its_place(study: Study, text: str, words: str) -> None:
    with pytest.raises(SheetError, match=words) as caught:
        read_sheet(study(replace=add(text)))
    assert "\n" not in str(caught.value)
    assert "study.toml" in str(caught.value)
