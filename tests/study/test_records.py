"""Whole studies on open records: what they can support is judged, what they cannot is refused.

Records: hot-air dryer (L. Ljung, System Identification, 1987; DaISy 96-006); gas furnace (G. Box,
G. Jenkins, Time Series Analysis, 1970, series J); heated box (engineering log under PID, hardly
any excitation); coupled drives (T. Wigren, M. Schoukens, Uppsala report 2017-024: the output is
the absolute value of the speed, so that no linear model can be right).
"""

from pathlib import Path
from typing import Any

import pytest

from idlearn.comparison import check_document
from idlearn.study import run_study

SHEETS = Path(__file__).resolve().parents[1] / "sheets"


def study(name: str, data: Path, folder: Path) -> dict[str, Any]:
    """Run the study of a sheet, `{data}` filled in."""
    sheet = folder / f"{name}.toml"
    text = (SHEETS / f"{name}.toml").read_text()
    sheet.write_text(text.replace("{data}", str(data)))
    finished = run_study(sheet, workers=2)
    assert check_document(finished.verdict) == ()
    assert (finished.folder / "report.html").stat().st_size > 50_000
    return finished.verdict


@pytest.mark.parametrize("name", ["hot_air_dryer", "gas_furnace"])
def test_records_with_excitation_end_in_a_verdict(
    name: str, open_data: Path, tmp_path: Path
) -> None:
    verdict = study(name, open_data, tmp_path)
    assert verdict["ratio"] is not None
    assert verdict["candidate"] in ("evolution", "predictive")
    assert all(m["passed"] for m in verdict["models"])
    # open records have never shown what a learned controller does on their plant
    assert verdict["verdict"] != "go"


def test_a_log_of_regulation_supports_no_model(open_data: Path, tmp_path: Path) -> None:
    verdict = study("heated_box", open_data, tmp_path)
    assert verdict["verdict"] == "undecided"
    assert verdict["ratio"] is None
    assert verdict["candidate"] == ""
    assert not any(m["passed"] for m in verdict["models"])
    assert "no model passed validation" in verdict["sentence"]
    stops = [a["sentence"] for a in verdict["audit"] if a["severity"] == "stop"]
    assert any("closed loop that nothing from outside moves" in s for s in stops)


def test_the_absolute_value_of_speed_fails_validation(open_data: Path, tmp_path: Path) -> None:
    verdict = study("coupled_drives", open_data, tmp_path)
    assert verdict["verdict"] == "undecided"
    assert verdict["ratio"] is None
    stops = " ".join(a["sentence"] for a in verdict["audit"] if a["severity"] == "stop")
    assert "no better than the mean" in stops
    assert verdict["next"]["sentence"]
