"""The run folder: whole files or none, and never another study's."""

from pathlib import Path

import numpy as np
import pytest

from idlearn.errors import RunFolderError
from idlearn.study.store import RunFolder


def test_stages_are_remembered(tmp_path: Path) -> None:
    folder = RunFolder.open(tmp_path / "run", {"sheet_sha256": "a"})
    assert not folder.done("x")
    folder.finish("x", {"n": np.int64(3), "f": float("nan"), "a": np.arange(2)})
    again = RunFolder.open(tmp_path / "run", {"sheet_sha256": "a"})
    assert again.facts("x") == {"n": 3, "f": None, "a": [0, 1]}
    arrays = {"names": np.array("text"), "v": np.arange(3.0)}
    again.write_arrays("t", arrays)
    assert (again.read_arrays("t")["v"] == arrays["v"]).all()
    assert str(again.read_arrays("t")["names"]) == "text"


def test_nothing_half_written_stays(tmp_path: Path) -> None:
    folder = RunFolder.open(tmp_path / "run", {})
    folder.write_table("t", {"a": [1, 2], "b": ["x", 'y "z"']})
    assert folder.file("tables/t.csv").read_text() == 'a,b\n1,x\n2,"y ""z"""\n'
    with pytest.raises(TypeError, match="not JSON"):
        folder.write_json("bad.json", {"x": object()})
    assert [p.name for p in folder.path.rglob(".part-*")] == []


def test_another_study_is_refused(tmp_path: Path) -> None:
    RunFolder.open(tmp_path / "run", {"sheet_sha256": "a", "effort": "quick"})
    with pytest.raises(RunFolderError, match=r"another study \(effort differs\)"):
        RunFolder.open(tmp_path / "run", {"sheet_sha256": "a", "effort": "standard"})
    (tmp_path / "file").write_text("x")
    with pytest.raises(RunFolderError, match="is a file"):
        RunFolder.open(tmp_path / "file", {})
    (tmp_path / "run" / "journal" / "study.json").write_text("{")
    with pytest.raises(RunFolderError, match="cannot be read"):
        RunFolder.open(tmp_path / "run", {})
